"""One piece of a campaign's work: a range of trials at one place, run on the batch engine and counted.

A trial's random numbers are looked up by (seed, name, trial), so the spawn key of a piece is the
range of its trials: what it counts depends on nothing else, neither on who runs it nor on when.

A piece is small. The schemes travel apart from it, pickled and packed, and each worker unpacks and compiles a
scheme once; a worker asked for a scheme it does not have says so (:class:`Missing`) and is asked
again with the scheme attached. So any executor will do: nothing has to be set up on its workers.
"""

from __future__ import annotations

import json
import pickle
import threading
import time
import zlib
from collections import OrderedDict
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from functools import lru_cache
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from schemesim.engine.batch import run_batch
from schemesim.engine.case import Case, bind
from schemesim.engine.many import NEVER_US, Batch, ManyAnswers, ManyDrawn, ManyDrawnTimes, ManyNominalTimes, ManyTimes
from schemesim.engine.outcome import Outcome
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import Event, Sensing
from schemesim.errors import RunError
from schemesim.plant.model import Location
from schemesim.scheme.model import Role
from schemesim.study.campaign_key import versions
from schemesim.study.campaign_tallies import BIN_US, CampaignEnding, PlaceFacts, Tally, rounded_up
from schemesim.study.losses import lost
from schemesim.study.measures import cleared_by

if TYPE_CHECKING:
    from numpy.typing import NDArray

_K = TypeVar("_K")
_V = TypeVar("_V")

PROGRAMS_KEPT = 4
"""Compiled schemes a worker keeps."""

CASES_KEPT = 4
"""Cases a worker keeps: the pieces of one place mostly follow one another."""


@dataclass(frozen=True)
class Work:
    """A range of trials at one place, ready to travel.

    Attributes
    ----------
    place : int
        Number of the place in the campaign.
    key : str
        Digest of the variant's scheme.
    event : Event
    first, end : int
        First trial and the one after the last.
    seed : int
    failures : tuple of tuple of str, or None
        Failure sets of these trials, in order; None: failures and delays are drawn.
    observe : frozenset of str
    dispatch : str or None
    horizon_us : int
    versions : tuple
        Those of the campaign; a worker with others refuses.
    packed : bytes or None
        The scheme itself, where the worker is not known to have it.
    """

    place: int
    key: str
    event: Event
    first: int
    end: int
    seed: int
    failures: tuple[tuple[str, ...], ...] | None
    observe: frozenset[str]
    dispatch: str | None
    horizon_us: int
    versions: tuple[tuple[str, str], ...]
    packed: bytes | None = None

    def __repr__(self) -> str:
        return f"trials {self.first} to {self.end - 1} of {self.event}"


@dataclass(frozen=True)
class Missing:
    """A worker's answer that it does not have the scheme of a piece of work."""

    work: Work


@dataclass(frozen=True)
class Chunk:
    """What a piece of work counted, packed for the way and for the store.

    Attributes
    ----------
    place, first, end : int
    facts : PlaceFacts
    tallies : tuple of Tally
    each : tuple of (int, int or None), or None
        With given failure sets: for each trial its tally and clearing time in microseconds.
    seconds : float
        How long it took.
    """

    place: int
    first: int
    end: int
    facts: PlaceFacts
    tallies: tuple[Tally, ...]
    each: tuple[tuple[int, int | None], ...] | None
    seconds: float

    def __reduce__(self) -> tuple[Any, ...]:
        """Pickle as packed text: many endings differ in little."""
        data = [[t.ending.to_text(), t.times, str(t.sum_us), str(t.sum_us2)] for t in self.tallies]
        text = json.dumps([self.facts.to_data(), data, self.each], separators=(",", ":"))
        return _chunk_from, (self.place, self.first, self.end, zlib.compress(text.encode()), self.seconds)


def _chunk_from(place: int, first: int, end: int, packed: bytes, seconds: float) -> Chunk:
    facts, data, each = json.loads(zlib.decompress(packed))
    tallies = tuple(
        Tally(CampaignEnding.from_text(text), tuple((us, n) for us, n in times), int(one), int(two))
        for text, times, one, two in data
    )
    told = None if each is None else tuple((i, us) for i, us in each)
    return Chunk(place, first, end, PlaceFacts.from_data(facts), tallies, told, seconds)


@dataclass
class _Shelf(threading.local):
    """What one thread of a worker has unpacked; cases hold caches that threads do not share."""

    programs: OrderedDict[str, tuple[Program, Sensing]] = field(default_factory=OrderedDict)
    cases: OrderedDict[tuple[object, ...], Case] = field(default_factory=OrderedDict)


@lru_cache(maxsize=1)
def _shelf() -> _Shelf:
    return _Shelf()


def packed(program: Program, sensing: Sensing) -> bytes:
    """A scheme, its plant and the sensing, ready to travel; it is compiled again where it arrives."""
    return zlib.compress(pickle.dumps((program.plant, program.scheme, sensing)))


def run_work(work: Work) -> Chunk | Missing:
    """Run a piece of work on a worker.

    Raises
    ------
    RunError
        If the worker has other versions than the campaign, or a trial cannot go on.
    """
    if work.versions != versions():
        mine = dict(versions())
        other = [f"{name} {mine.get(name)} (campaign: {v})" for name, v in work.versions if mine.get(name) != v]
        raise RunError(f"a worker has other versions than the campaign: {', '.join(other)}")
    shelf = _shelf()
    known = shelf.programs.get(work.key)
    if known is None:
        if work.packed is None:
            return Missing(work)
        plant, scheme, sensing = pickle.loads(zlib.decompress(work.packed))
        known = compile_scheme(plant, scheme), sensing
        _keep(shelf.programs, work.key, known, PROGRAMS_KEPT)
    about = (work.key, work.event, work.dispatch, work.observe)
    case = shelf.cases.get(about)
    if case is None:
        case = case_of(known[0], work.event, known[1], work.dispatch, work.observe)
        _keep(shelf.cases, about, case, CASES_KEPT)
    return count(case, replace(work, packed=None))


def _keep(shelf: OrderedDict[_K, _V], key: _K, value: _V, most: int) -> None:
    shelf[key] = value
    while len(shelf) > most:
        shelf.popitem(last=False)


def case_of(program: Program, event: Event, sensing: Sensing, dispatch: str | None, observe: frozenset[str]) -> Case:
    """The case of a place: only those of the outputs wanted are observed that say something here."""
    facts = _watched(program, event, observe)
    return bind(program, event, sensing, dispatch=dispatch, observe=facts[0] | facts[1])


def _watched(program: Program, event: Event, observe: frozenset[str]) -> tuple[frozenset[str], frozenset[str]]:
    """Outputs that protect the faulted section, and main outputs that do not (with no fault all are such)."""
    contacts = {name: c for name, c in program.scheme.contacts.items() if name in observe}
    if not isinstance(event, Location):
        return frozenset(), frozenset(contacts)
    right = frozenset(n for n, c in contacts.items() if event.section in c.protects)
    return right, frozenset(n for n, c in contacts.items() if c.role is Role.MAIN and event.section not in c.protects)


def count(case: Case, work: Work) -> Chunk:
    """Run the trials of a piece of work and count how they end."""
    started = time.perf_counter()
    rows = work.end - work.first
    batch = batch_of(case, work)
    rounded = case.random and work.failures is None
    tallies: list[Tally] = []
    each: list[tuple[int, int | None]] = [(0, None)] * rows
    for ending, mine in endings(batch):
        t_us = batch.t_clear_us[mine]
        if work.failures is not None:
            for row, us in zip(mine.tolist(), t_us.tolist(), strict=True):
                each[row] = len(tallies), None if us == NEVER_US else us
        tallies.append(_tally(ending, t_us, BIN_US if rounded else 1))
    right, wrong = _watched(case.program, work.event, work.observe)
    fed = not isinstance(work.event, Location) or case.topology(0).fed
    facts = PlaceFacts(fed, rounded, case.duty.needed, case.duty.intended, right, wrong)
    told = None if work.failures is None else tuple(each)
    return Chunk(work.place, work.first, work.end, facts, tuple(tallies), told, time.perf_counter() - started)


def batch_of(case: Case, work: Work) -> Batch:
    """Run the trials of a piece of work."""
    rows = work.end - work.first
    answers: ManyAnswers
    times: ManyTimes
    if work.failures is None:
        answers = ManyDrawn(case.program, work.seed, work.first, rows)
        times = ManyDrawnTimes(work.seed, work.first, rows)
    else:
        answers, times = ManyGiven(case.program, work.failures), ManyNominalTimes()
    return run_batch(case, rows, answers, times=times, horizon_us=work.horizon_us)


class ManyGiven:
    """Row i: yes to the failures of set i, no to all others; names the scheme does not have are left aside."""

    def __init__(self, program: Program, sets: Sequence[Iterable[str]]) -> None:
        self._columns: dict[int, NDArray[np.bool_]] = {}
        index = {q.name: i for i, q in enumerate(program.questions)}
        for row, names in enumerate(sets):
            for q in (index[name] for name in names if name in index):
                self._columns.setdefault(q, np.zeros(len(sets), dtype=bool))[row] = True

    def answers(self, question: int, rows: NDArray[np.intp]) -> NDArray[np.bool_]:
        """See :class:`schemesim.engine.many.ManyAnswers`."""
        column = self._columns.get(question)
        return np.zeros(rows.size, dtype=bool) if column is None else column[rows]


def endings(batch: Batch) -> Iterator[tuple[CampaignEnding, NDArray[np.intp]]]:
    """Each ending of a batch with its rows; those that differ only in what cleared the fault apart."""
    for number in range(len(batch.endings)):
        rows = np.flatnonzero(batch.ending == number)
        if not rows.size:
            continue
        places = [place for place, *_ in batch.endings[number].tripped]
        open_us, clear_us = batch.t_open_us[rows][:, places], batch.t_clear_us[rows, None]
        # What cleared the fault follows from which breakers had opened by then, and in which order.
        order = np.where(open_us <= clear_us, _ranks(open_us), -1)
        _, first, which = np.unique(order, axis=0, return_index=True, return_inverse=True)
        which = which.reshape(-1)
        found: dict[CampaignEnding, list[NDArray[np.intp]]] = {}
        for kind, row in enumerate(rows[first].tolist()):
            mask = batch.endings[number].final_mask
            ending, _ = ending_of(batch.case, batch.outcome(row), mask)
            found.setdefault(ending, []).append(rows[which == kind])
        for ending, parts in found.items():
            yield ending, np.concatenate(parts)


def _ranks(times: NDArray[np.int64]) -> NDArray[np.int64]:
    """The rank of each time in its row; equal times have equal ranks."""
    order = np.argsort(times, axis=1)
    ordered = np.take_along_axis(times, order, axis=1)
    steps = np.cumsum(np.diff(ordered, axis=1, prepend=ordered[:, :1]) > 0, axis=1)
    ranks = np.empty_like(times)
    np.put_along_axis(ranks, order, steps, axis=1)
    return ranks


def ending_of(case: Case, outcome: Outcome, final_mask: int) -> tuple[CampaignEnding, int | None]:
    """How a run ended, as campaigns count it, and its clearing time in microseconds."""
    mw, sections = lost(case, final_mask)
    ending = CampaignEnding(
        status=outcome.status,
        cleared_by=cleared_by(case, outcome),
        tripped=tuple(sorted((o.breaker, o.role, o.via, o.interrupted) for o in outcome.openings)),
        operated=tuple(sorted(name for name, _ in outcome.operated)),
        open=tuple(sorted(case.opened(final_mask))),
        load_lost_mw=float(mw),
        sections_lost=len(sections),
        at_horizon=outcome.at_horizon,
    )
    return ending, outcome.t_clear_us


def _tally(ending: CampaignEnding, t_us: NDArray[np.int64], bin_us: int) -> Tally:
    exact, counts = np.unique(t_us, return_counts=True)
    pairs = list(zip(exact.tolist(), counts.tolist(), strict=True))
    times: dict[int | None, int] = {}
    for us, n in pairs:
        key = None if us == NEVER_US else rounded_up(us, bin_us)
        times[key] = times.get(key, 0) + n
    cleared = [(us, n) for us, n in pairs if us != NEVER_US]
    in_order = tuple(sorted(times.items(), key=lambda item: (item[0] is None, item[0] or 0)))
    return Tally(ending, in_order, sum(us * n for us, n in cleared), sum(us * us * n for us, n in cleared))
