"""The register of single points of failure: each single failure that spoils the clearing of some fault, and where.

Every failure that bears on a location is injected alone, and judged against the run
without any: the fault is not cleared, is cleared after the limit, or takes more breakers beyond
the intended. Pairs are injected on demand; one counts where it does worse than each of its
two failures alone.
"""

from __future__ import annotations

import pickle
from collections import deque
from collections.abc import Callable, Iterable, Iterator, Mapping
from concurrent.futures import Executor, Future
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.program import Program
from schemesim.engine.sensing import Sensing
from schemesim.errors import ErrorList, nearest, reject
from schemesim.plant.model import Location
from schemesim.scheme.model import Probability
from schemesim.show.tables import to_html
from schemesim.study.footnote import Group, Grouped, Monitored, check_monitored, group_of
from schemesim.study.spoiled import AtLocation, Effect, RegisterOptions, Spoiled, place_row, register_at
from schemesim.ticks import limit_mistake

if TYPE_CHECKING:
    import pandas as pd

Progress = Callable[[int, int], None]

_AHEAD = 64  # pieces of work handed to an executor before the first is taken back


@dataclass(frozen=True, slots=True)
class Entry:
    """A failure (or a pair) of the register.

    Attributes
    ----------
    failures : tuple of str
        One, or two.
    probability : Probability
        That they happen (on demand; the product for a pair).
    grouped : tuple of Grouped
        For each failure its group and whether it is exempt.
    spoiled : tuple of Spoiled
        The locations, in the order studied.
    """

    failures: tuple[str, ...]
    probability: Probability
    grouped: tuple[Grouped, ...]
    spoiled: tuple[Spoiled, ...]

    @property
    def name(self) -> str:
        """The failures as one text."""
        return ", ".join(self.failures)

    @property
    def worst(self) -> Effect:
        """The worst it does anywhere."""
        return max(s.effect for s in self.spoiled)

    @property
    def group(self) -> Group:
        """Its group; pairs stand apart."""
        return self.grouped[0].group if len(self.grouped) == 1 else Group.APART

    @property
    def exempt(self) -> bool:
        """Whether it is left out of its group because it is monitored."""
        return len(self.grouped) == 1 and self.grouped[0].exempt

    @property
    def row(self) -> dict[str, object]:
        """One row of the table: the worst over its locations."""
        times = [s.t_clear_us for s in self.spoiled if s.t_clear_us is not None]
        return {
            "failures": self.name,
            "group": self.group.value,
            "exempt": self.exempt,
            "why": "; ".join(g.why for g in self.grouped if g.why),
            "p": float(self.probability),
            "worst": self.worst.label,
            "locations": len(self.spoiled),
            "not_cleared": sum(s.effect is Effect.NOT_CLEARED for s in self.spoiled),
            "late": sum(s.effect is Effect.LATE for s in self.spoiled),
            "more_breakers": sum(s.effect is Effect.MORE_BREAKERS for s in self.spoiled),
            "t_clear_ms_worst": max(times) / 1000 if times else None,
            "breakers_worst": max(s.breakers for s in self.spoiled),
            "excess_worst": max(s.excess for s in self.spoiled),
            "load_lost_mw_worst": max(s.load_lost_mw for s in self.spoiled),
            "where": ", ".join(str(s.location) for s in self.spoiled),
        }


@dataclass(frozen=True)
class Register:
    """Single points of failure over all locations, and pairs where they were asked for.

    Attributes
    ----------
    singles, pairs : tuple of Entry
        The worst first, then those that spoil more locations, the more probable, by name.
    anyway : tuple of Spoiled
        Locations where the fault is not cleared, or late, with no failure at all: faults of the
        design, not of any component.
    locations, runs : int
    complete : bool
        False if it was interrupted.
    """

    singles: tuple[Entry, ...]
    pairs: tuple[Entry, ...]
    anyway: tuple[Spoiled, ...]
    locations: int
    runs: int
    complete: bool = True

    def entry(self, *failures: str) -> Entry:
        """The entry of a failure, or of a pair.

        Raises
        ------
        InputError
            If they are not in the register.
        """
        known = {frozenset(e.failures): e for e in (*self.singles, *self.pairs)}
        found = known.get(frozenset(failures))
        if found is None:
            tip = nearest(", ".join(failures), [e.name for e in known.values()])
            raise reject("entry of the register", ", ".join(failures), "failures that are in it", tip=tip)
        return found

    def group(self, group: Group, *, exempt: bool = False) -> tuple[Entry, ...]:
        """The single failures of a group, those exempt or those that are not."""
        return tuple(e for e in self.singles if e.group is group and e.exempt == exempt)

    def table(self) -> pd.DataFrame:
        """One row for each entry, the worst over its locations."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame([e.row for e in (*self.singles, *self.pairs)])

    def places(self) -> pd.DataFrame:
        """One row for each entry and location."""
        import pandas as pd

        return pd.DataFrame(list(self.records()))

    def records(self) -> Iterator[dict[str, object]]:
        """Every entry and location as a flat row."""
        for e in (*self.singles, *self.pairs):
            for s in e.spoiled:
                yield {"failures": e.name, "group": e.group.value, "exempt": e.exempt, **place_row(s)}

    def __repr__(self) -> str:
        lines = [
            f"Register({len(self.singles)} single points of failure, {len(self.pairs)} pairs, "
            f"{self.locations} locations, {self.runs} runs)"
        ]
        for group in Group:
            counted, exempt = self.group(group), self.group(group, exempt=True)
            bad = sum(e.worst is Effect.NOT_CLEARED for e in counted)
            lines.append(f"  {group.value:20} {len(counted)} ({bad} leave a fault uncleared), {len(exempt)} exempt")
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.table())


def register(
    program: Program,
    sensing: Sensing,
    locations: Iterable[Location] | None = None,
    *,
    limit_us: int | Mapping[Location, int],
    monitored: Iterable[Monitored] = (),
    pairs: bool = False,
    dispatch: str | None = None,
    horizon_us: int = DEFAULT_HORIZON_US,
    executor: Executor | None = None,
    progress: Progress | None = None,
) -> Register:
    """The register of single points of failure over all locations.

    Parameters
    ----------
    program : Program
    sensing : Sensing
    locations : iterable of Location or None
        By default every location of the plant.
    limit_us : int or mapping of Location to int
        Longest clearing time that is in time, in microseconds.
    monitored : iterable of Monitored
        What is monitored, for the exemptions (see :mod:`schemesim.study.footnote`).
    pairs : bool
        Inject every pair too.
    dispatch : str or None
    horizon_us : int
    executor : concurrent.futures.Executor or None
        Runs the work; the register is the same with any, or with none.
    progress : callable or None
        Called with the number of locations done and of all.

    Returns
    -------
    Register
        A keyboard interrupt ends it early: what was finished is kept, ``complete`` is False.

    Raises
    ------
    InputError
        For locations, limits or monitored items that are not as stated.
    """
    chosen = list(dict.fromkeys(program.plant.locations() if locations is None else locations))
    watched = tuple(monitored)
    check_monitored(program.scheme, watched)
    limits = limits_of(program, chosen, limit_us)
    options = RegisterOptions(2 if pairs else 1, dispatch, horizon_us)
    done: list[AtLocation] = []
    complete = True
    try:
        for at in _each(program, sensing, chosen, limits, options, executor):
            done.append(at)
            if progress is not None:
                progress(len(done), len(chosen))
    except KeyboardInterrupt:
        complete = False
    entries = _entries(program, done, watched)
    return Register(
        singles=tuple(e for e in entries if len(e.failures) == 1),
        pairs=tuple(e for e in entries if len(e.failures) == 2),
        anyway=tuple(at.anyway for at in done if at.anyway is not None),
        locations=len(done),
        runs=sum(at.runs for at in done),
        complete=complete,
    )


def limits_of(program: Program, chosen: list[Location], limit_us: int | Mapping[Location, int]) -> dict[Location, int]:
    errors, known = ErrorList(), program.plant.section
    limits: dict[Location, int] = {}
    for at in chosen:
        if at.section not in known:
            errors.add("section", at.section, "a section", tip=nearest(at.section, known))
        limit: object = limit_us.get(at) if isinstance(limit_us, Mapping) else limit_us
        mistake = limit_mistake(limit)
        if mistake is not None:
            errors.add(f"limit_us at {at}", limit, mistake[0], tip=mistake[1])
        elif isinstance(limit, int):
            limits[at] = limit
    errors.raise_if_any()
    return limits


def _entries(program: Program, done: list[AtLocation], monitored: tuple[Monitored, ...]) -> list[Entry]:
    question = {q.name: q for q in program.questions}
    spoiled: dict[tuple[str, ...], list[Spoiled]] = {}
    p: dict[tuple[str, ...], Probability] = {}
    for at in done:
        for failures, probability, what in at.found:
            spoiled.setdefault(failures, []).append(what)
            p[failures] = probability
    grouped = {
        name: group_of(program.scheme, question[name].component, question[name].mode, monitored)
        for name in {f for failures in spoiled for f in failures}
    }
    entries = [Entry(f, p[f], tuple(grouped[x] for x in f), tuple(where)) for f, where in spoiled.items()]
    return sorted(entries, key=lambda e: (-e.worst, -len(e.spoiled), -e.probability, e.failures))


def _each(
    program: Program,
    sensing: Sensing,
    chosen: list[Location],
    limits: Mapping[Location, int],
    options: RegisterOptions,
    executor: Executor | None,
) -> Iterator[AtLocation]:
    if executor is None:
        for at in chosen:
            yield register_at(program, at, sensing, limits[at], options)
        return
    shared = pickle.dumps((program, sensing, options))
    waiting: deque[Future[AtLocation]] = deque()
    todo = deque(chosen)
    try:
        while waiting or todo:
            while todo and len(waiting) < _AHEAD:
                at = todo.popleft()
                waiting.append(executor.submit(_shared_piece, shared, at, limits[at]))
            yield waiting.popleft().result()
    finally:
        for future in waiting:
            future.cancel()


@lru_cache(maxsize=2)
def _unpacked(shared: bytes) -> tuple[Program, Sensing, RegisterOptions]:
    program, sensing, options = pickle.loads(shared)
    return program, sensing, options


def _shared_piece(shared: bytes, location: Location, limit_us: int) -> AtLocation:
    program, sensing, options = _unpacked(shared)
    return register_at(program, location, sensing, limit_us, options)
