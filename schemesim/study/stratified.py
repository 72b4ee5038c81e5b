"""Monte Carlo stratified on the leaves of an event tree.

The tree is explored at nominal delays. Each of its leaves is a set of failures of which it fixes some answers
and whose probability it knows exactly; what it has not opened is disjoint from all of them, and is one
stratum more. Within a stratum delays are sampled, and so is every answer that it leaves
open. The estimate Σ Wᵢ·p̂ᵢ is unbiased whatever the tree: how far it was explored decides how narrow the interval
gets, not whether it is right.

Strata
    The heaviest leaves stand alone; lighter ones are put together with those that end alike
    at nominal delays, and drawn by their masses, as are the parts of the unexplored remainder.
Allocation
    Without an event, in proportion to the weights. With one, a tenth of the trials are a pilot, half of it in
    proportion to the weights and half spread evenly, and the rest goes by Neyman's rule, nᵢ ∝ Wᵢ·√(p̃ᵢ(1 − p̃ᵢ)) with
    p̃ = (x + ½)/(m + 1) from the pilot: a stratum that showed no doubt is not taken as beyond doubt. The pilot is
    not counted: what it saw has decided how many rows a stratum gets, and would bias the estimate.
Interval
    :func:`schemesim.study.intervals.stratified`.

Row n of a seed is the same trial whoever runs it, as in plain Monte Carlo; strata have rows of their own.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING, Protocol

import numpy as np

from schemesim.engine.batch import run_batch
from schemesim.engine.case import Case
from schemesim.engine.draws import uniforms
from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.many import NEVER_US, Batch, ManyAnswers, ManyDrawnTimes, ManyTimes
from schemesim.errors import ErrorList, reject
from schemesim.show.tables import to_html
from schemesim.study.cylinders import Cylinder, Drawn, Table, leaves_of, unopened
from schemesim.study.intervals import stratified
from schemesim.study.precision import FIRST_TRIALS, Precision
from schemesim.study.tree import Happens, Tree, explore
from schemesim.study.trial_columns import Alike, columns

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

EPSILON = 1e-5
"""Mass left unexplored by the tree that is explored where none is given."""

MOST_STRATA = 200
LEAST_ROWS = 4
"""Rows of a stratum at least."""

CHUNK = 10_000
"""Rows in one piece of work."""

_WITHIN = "cylinder within its stratum"


class BatchEngine(Protocol):
    """Whatever runs many rows of a case; :func:`schemesim.engine.batch.run_batch` is one."""

    def __call__(
        self, case: Case, rows: int, answers: ManyAnswers, *, times: ManyTimes | None, horizon_us: int
    ) -> Batch:
        """Run the rows to their ends."""


@dataclass(frozen=True, slots=True)
class Stratum:
    """A part of all combinations of failures.

    Attributes
    ----------
    label : str
        The failures of a leaf, or what was put together.
    weight : float
        Its probability, exact but for rounding.
    cylinders : tuple of int
        Which of the cylinders (leaves, then unopened prefixes) it holds.
    """

    label: str
    weight: float
    cylinders: tuple[int, ...]


@dataclass(frozen=True, slots=True)
class Estimate:
    """A stratified estimate of a probability, with its interval."""

    estimate: float
    low: float
    high: float
    confidence: float
    rows: int

    def __repr__(self) -> str:
        return f"{self.estimate:.6g} ({self.low:.6g} to {self.high:.6g} at {100 * self.confidence:g} %)"


@dataclass(frozen=True, slots=True, eq=False, repr=False)
class Piece:
    """Rows run together: the stratum of each, and how they ended."""

    stratum: NDArray[np.int32]
    alike: tuple[Alike, ...]


@dataclass(frozen=True, eq=False, repr=False)
class StratifiedCounts:
    """How the rows of each stratum ended.

    Attributes
    ----------
    event : str
    seed : int
    strata : tuple of Stratum
    rows : tuple of int
        Rows counted in each stratum.
    pilot : int
        Rows of the pilot, which are not counted.
    pieces : tuple of Piece
    """

    event: str
    seed: int
    strata: tuple[Stratum, ...]
    rows: tuple[int, ...]
    pilot: int
    pieces: tuple[Piece, ...]

    def hits(self, event: Happens) -> tuple[int, ...]:
        """In how many rows of each stratum an event happened."""
        return _hits(self.pieces, len(self.strata), event)

    def share(self, event: Happens, confidence: float = 0.95) -> Estimate:
        """The probability of an event with an interval.

        Raises
        ------
        InputError
            For a confidence outside 0..1.
        """
        return self._estimate(self.hits(event), confidence)

    def cleared(self, within_us: int | None = None, confidence: float = 0.95) -> Estimate:
        """The probability that the fault is cleared (within a time, in microseconds) with an interval.

        The same as :meth:`share` of that event, without making an outcome of every row.

        Raises
        ------
        InputError
            For a confidence outside 0..1.
        """
        found = np.zeros(len(self.strata), dtype=np.int64)
        for piece in self.pieces:
            for alike in piece.alike:
                t = alike.times_us[:, 0]
                yes = (t != NEVER_US) & (within_us is None or t <= within_us)
                found += np.bincount(piece.stratum[alike.rows[yes]], minlength=found.size)
        return self._estimate(found.tolist(), confidence)

    def _estimate(self, hits: Sequence[int], confidence: float) -> Estimate:
        weights = [s.weight for s in self.strata]
        low, high = stratified(weights, hits, self.rows, confidence)
        middle = math.fsum(w * x / n for w, x, n in zip(weights, hits, self.rows, strict=True))
        return Estimate(middle, low, high, confidence, sum(self.rows))

    def table(self, event: Happens | None = None) -> pd.DataFrame:
        """The strata, heaviest first: weight, rows, and how often an event happened."""
        import pandas as pd

        data: dict[str, object] = {
            "stratum": [s.label for s in self.strata],
            "weight": [s.weight for s in self.strata],
            "rows": self.rows,
        }
        if event is not None:
            data["happened"] = self.hits(event)
        return pd.DataFrame(data).sort_values("weight", ascending=False, kind="stable", ignore_index=True)

    def _repr_html_(self) -> str:
        return to_html(self.table(), caption=repr(self))

    def __repr__(self) -> str:
        rows = f"{sum(self.rows)} rows in {len(self.strata)} strata"
        return f"StratifiedCounts({self.event}, seed {self.seed}: {rows}, {self.pilot} of a pilot besides)"


def simulate_stratified(
    case: Case,
    trials: int | Precision,
    seed: int,
    *,
    tree: Tree | None = None,
    event: Happens | None = None,
    horizon_us: int = DEFAULT_HORIZON_US,
    executor: Executor | None = None,
    chunk: int = CHUNK,
    run: BatchEngine = run_batch,
) -> StratifiedCounts:
    """Sample delays, and answers where they are open, within the leaves of an event tree.

    Parameters
    ----------
    case : Case
    trials : int or Precision
        Rows in all, pilot included (a few more where strata would get fewer than ``LEAST_ROWS``); or how
        narrow the interval of an event should get.
    seed : int
        Zero or more.
    tree : Tree or None
        Of this case; by default one is explored until ``EPSILON`` is left. What it is conditioned on, the
        estimates are conditioned on.
    event : callable or None
        From an outcome to bool: rows are allocated so as to estimate it best.
    horizon_us : int
    executor : concurrent.futures.Executor or None
        Runs the pieces of work; the counts are the same with any, or with none.
    chunk : int
        Rows in one piece of work.
    run : BatchEngine
        What runs a batch.

    Returns
    -------
    StratifiedCounts

    Raises
    ------
    InputError
        For numbers that are not whole, or negative, and for a tree of another program.
    """
    errors = ErrorList()
    count = trials.max_trials if isinstance(trials, Precision) else trials
    for name, number, least in (("trials", count, 1), ("seed", seed, 0), ("chunk", chunk, 1)):
        value: object = number
        if isinstance(value, bool) or not isinstance(value, int) or value < least:
            errors.add(name, value, f"a whole number of {least} or more")
    errors.raise_if_any()
    if tree is None:
        tree = explore(case, epsilon=EPSILON, horizon_us=horizon_us)
    elif tree.questions != case.questions:
        raise reject("tree", repr(tree), "an event tree of this case")
    begun = min(FIRST_TRIALS, count) if isinstance(trials, Precision) else count
    cylinders = [*leaves_of(tree), *unopened(case.program, tree)]
    strata = _strata(tree, cylinders, max(2, min(MOST_STRATA, begun // (2 * LEAST_ROWS))))
    sampler = _Sampler(case, seed, horizon_us, cylinders, strata, executor, chunk, run)
    weights = np.array([s.weight for s in strata])
    aim = trials.event if isinstance(trials, Precision) else event
    spread = weights
    if aim is not None:
        pilot = _split(begun // 20, weights) + _split(begun // 20, np.ones(weights.size))
        x = np.array(_hits(sampler.sample(pilot), len(strata), aim))
        p = (x + 0.5) / (pilot + 1)
        spread = weights * np.sqrt(p * (1 - p))
    used = sampler.used
    rows = _split(max(begun - used, 0), spread)
    pieces = sampler.sample(rows)

    def counts() -> StratifiedCounts:
        return StratifiedCounts(str(case.event), seed, strata, tuple(rows.tolist()), used, tuple(pieces))

    while isinstance(trials, Precision):
        more = trials.more(sampler.used, counts().share(trials.event, trials.confidence))
        if not more:
            break
        target = np.maximum(_split(int(rows.sum()) + more, spread), rows)
        pieces += sampler.sample(target - rows)
        rows = target
    return counts()


def _split(rows: int, spread: NDArray[np.float64]) -> NDArray[np.int64]:
    """Rows in proportion to a spread, ``LEAST_ROWS`` at least."""
    return np.asarray(np.maximum(np.rint(rows * spread / spread.sum()), LEAST_ROWS), dtype=np.int64)


def _strata(tree: Tree, cylinders: Sequence[Cylinder], most: int) -> tuple[Stratum, ...]:
    """Heavy leaves alone, light ones with those that end alike, and the unexplored remainder."""
    leaves = sorted(range(len(tree.leaves)), key=lambda n: -cylinders[n].mass)
    left = tuple(range(len(tree.leaves), len(cylinders)))
    most -= 1 if left else 0
    alone = len(leaves) if len(leaves) <= most else most // 2
    out = [Stratum(", ".join(tree.names(tree.leaves[n].yes)) or "nothing fails", cylinders[n].mass, (n,))
           for n in leaves[:alone]]  # fmt: skip
    by_end: dict[int, list[int]] = {}
    for n in leaves[alone:]:
        by_end.setdefault(tree.leaves[n].end, []).append(n)
    groups = sorted(by_end.values(), key=lambda group: -_mass(cylinders, group))
    room = max(most - alone - 1, 0)
    if len(groups) > room:
        groups[room:] = [[n for group in groups[room:] for n in group]]
    out += [Stratum(f"{len(g)} light leaves", _mass(cylinders, g), tuple(g)) for g in groups]
    if left:
        out.append(Stratum("unexplored", _mass(cylinders, left), left))
    return tuple(s for s in out if s.weight > 0)


def _mass(cylinders: Sequence[Cylinder], group: Iterable[int]) -> float:
    return math.fsum(cylinders[n].mass for n in group)


def _hits(pieces: Iterable[Piece], strata: int, event: Happens) -> tuple[int, ...]:
    found = np.zeros(strata, dtype=np.int64)
    for piece in pieces:
        for alike in piece.alike:
            yes = np.fromiter((event(end.outcome) for end in alike.ends()), dtype=np.bool_, count=alike.rows.size)
            found += np.bincount(piece.stratum[alike.rows[yes]], minlength=strata)
    return tuple(found.tolist())


class _Sampler:
    """Runs rows of strata, each with random numbers of its own."""

    def __init__(
        self,
        case: Case,
        seed: int,
        horizon_us: int,
        cylinders: Sequence[Cylinder],
        strata: Sequence[Stratum],
        executor: Executor | None,
        chunk: int,
        run: BatchEngine,
    ) -> None:
        self.table = Table(cylinders)
        self.strata, self.seed, self.executor, self.chunk = strata, seed, executor, chunk
        self.used = 0
        self.work = partial(_run_piece, case, self.table, seed, horizon_us, run)

    def sample(self, rows: NDArray[np.int64]) -> list[Piece]:
        """So many rows more of each stratum."""
        stratum = np.repeat(np.arange(rows.size, dtype=np.int32), rows)
        u = uniforms(self.seed, _WITHIN, self.used, stratum.size)
        cylinder = np.zeros(stratum.size, dtype=np.intp)
        ends = np.cumsum(rows)
        for s, first, end in zip(self.strata, ends - rows, ends, strict=True):
            inside = np.array(s.cylinders, dtype=np.intp)
            if inside.size > 1:
                up_to = np.cumsum(self.table.masses[inside])
                place = np.searchsorted(up_to, u[first:end] * up_to[-1], side="right")
                cylinder[first:end] = inside[np.minimum(place, inside.size - 1)]
            else:
                cylinder[first:end] = inside[0]
        starts = range(0, stratum.size, self.chunk)
        parts = [cylinder[a : a + self.chunk] for a in starts]
        firsts = [self.used + a for a in starts]
        self.used += stratum.size
        if self.executor is None:
            found: Iterable[tuple[Alike, ...]] = map(self.work, parts, firsts)
        else:
            found = self.executor.map(self.work, parts, firsts)
        return [Piece(stratum[a : a + self.chunk], alike) for a, alike in zip(starts, found, strict=True)]


def _run_piece(
    case: Case,
    table: Table,
    seed: int,
    horizon_us: int,
    run: BatchEngine,
    cylinder: NDArray[np.intp],
    first: int,
) -> tuple[Alike, ...]:
    answers = Drawn(case.program, table, cylinder, seed, first)
    times = ManyDrawnTimes(seed, first, cylinder.size)
    return columns(run(case, cylinder.size, answers, times=times, horizon_us=horizon_us))
