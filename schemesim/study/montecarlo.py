"""Plain Monte Carlo on one case: seeded, addable counts, with intervals.

Trial number t of a seed is the same trial whoever runs it: its answers and its random
delays are looked up by (seed, name, trial). Chunks run anywhere therefore merge into
just what one run over all the trials gives.

A chunk is one batch. Where no delay is random, trials with the same answers are one run and only
counted; where some are, the endings are kept in columns (some 60 bytes a trial), and an
:class:`End` is made of them only when it is asked for.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Executor
from dataclasses import dataclass
from functools import cached_property
from itertools import chain
from statistics import NormalDist
from typing import TYPE_CHECKING, Literal

import numpy as np

from schemesim.engine.batch import run_batch
from schemesim.engine.case import Case
from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.many import NEVER_US, ManyDrawn, ManyDrawnTimes
from schemesim.errors import ErrorList, reject
from schemesim.show.tables import to_html
from schemesim.study.intervals import clopper_pearson, wilson
from schemesim.study.precision import FIRST_TRIALS, Precision
from schemesim.study.tree import End, Happens
from schemesim.study.trial_columns import Alike, Distinct, columns

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes
    from numpy.typing import NDArray

CHUNK = 10_000
"""Trials in one piece of work where delays are random."""

CHUNK_AT_FIXED_TIMES = 50_000
"""Trials in one piece of work where they are not."""

Method = Literal["wilson", "clopper_pearson"]


@dataclass(frozen=True, slots=True)
class Share:
    """How often an event happened, with an interval for its probability."""

    successes: int
    trials: int
    low: float
    high: float
    confidence: float

    @property
    def estimate(self) -> float:
        """The share observed."""
        return self.successes / self.trials if self.trials else math.nan

    def __repr__(self) -> str:
        return f"{self.estimate:.6g} ({self.low:.6g} to {self.high:.6g} at {100 * self.confidence:g} %)"


@dataclass(frozen=True, slots=True)
class Mean:
    """A sample mean with its normal interval."""

    estimate: float
    low: float
    high: float
    confidence: float


@dataclass(frozen=True, eq=False, repr=False)
class Counts:
    """How many trials ended how; counts of other trials of the same seed can be added.

    Attributes
    ----------
    event : str
    seed : int
    ranges : tuple of (int, int)
        First trial and the one after the last, of each unbroken range run.
    ends : tuple of (End, int)
        Distinct endings and how often each came, in an order of their own. Of many trials with
        random delays nearly every one is distinct, and these are large: what is below does without.
    """

    event: str
    seed: int
    ranges: tuple[tuple[int, int], ...]
    _known: tuple[tuple[End, int], ...]
    _columns: tuple[Alike, ...] = ()

    @cached_property
    def ends(self) -> tuple[tuple[End, int], ...]:
        return _merged(self._each())

    def _each(self) -> Iterator[tuple[End, int]]:
        return chain(self._known, ((end, 1) for alike in self._columns for end in alike.ends()))

    @property
    def trials(self) -> int:
        """Trials counted."""
        return sum(end - first for first, end in self.ranges)

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Counts):
            return NotImplemented
        mine, theirs = (self.event, self.seed, self.ranges), (other.event, other.seed, other.ranges)
        return mine == theirs and self.ends == other.ends

    def __hash__(self) -> int:
        return hash((self.event, self.seed, self.ranges))

    def __add__(self, other: Counts) -> Counts:
        """Counts of both.

        Raises
        ------
        InputError
            If they are of another event or seed, or share trials.
        """
        return _sum(self.event, self.seed, (self, other))

    def count(self, event: Happens) -> int:
        """In how many trials an event happened."""
        return sum(n for end, n in self._each() if event(end.outcome))

    def t_clear_us(self) -> NDArray[np.int64]:
        """Clearing time of every trial that was cleared, in microseconds, ascending."""
        known = [(end.outcome.t_clear_us, n) for end, n in self._known if end.outcome.t_clear_us is not None]
        times = [np.repeat([t for t, _ in known], [n for _, n in known]).astype(np.int64)]
        for alike in self._columns:
            clear = alike.times_us[:, 0]
            times.append(clear[clear != NEVER_US])
        return np.sort(np.concatenate(times))

    def cleared(
        self, within_us: int | None = None, confidence: float = 0.95, method: Method = "wilson"
    ) -> Share:
        """The probability that the fault is cleared (within a time) with an interval.

        The same as :meth:`share` of that event, without making an outcome of every trial.

        Parameters
        ----------
        within_us : int or None
            Longest time in microseconds, counted as in time; None: whenever.
        confidence : float
        method : {"wilson", "clopper_pearson"}

        Raises
        ------
        InputError
            For a confidence outside 0..1 or another method.
        """
        times = self.t_clear_us()
        happened = times.size if within_us is None else int(np.searchsorted(times, within_us, side="right"))
        return self._share(happened, confidence, method)

    def share(self, event: Happens, confidence: float = 0.95, method: Method = "wilson") -> Share:
        """The probability of an event with an interval.

        Parameters
        ----------
        event : callable
            From an outcome to bool.
        confidence : float
        method : {"wilson", "clopper_pearson"}

        Raises
        ------
        InputError
            For a confidence outside 0..1 or another method.
        """
        return self._share(self.count(event) if _is_known(method) else 0, confidence, method)

    def _share(self, happened: int, confidence: float, method: Method) -> Share:
        if not _is_known(method):
            raise reject("interval", method, "'wilson' or 'clopper_pearson'")
        interval = wilson if method == "wilson" else clopper_pearson
        low, high = interval(happened, self.trials, confidence)
        return Share(happened, self.trials, low, high, confidence)

    def mean(self, value: Callable[[End], float], confidence: float = 0.95) -> Mean:
        """The mean of a quantity of an ending, with a normal interval (two trials or more).

        Raises
        ------
        InputError
            For a confidence outside 0..1 or fewer than two trials.
        """
        if not 0 < confidence < 1:
            raise reject("confidence", confidence, "a number between 0 and 1, e.g. 0.95")
        n = self.trials
        if n < 2:
            raise reject("trials", n, "two or more for a mean with an interval")
        pairs = [(value(end), times) for end, times in self._each()]
        mean = math.fsum(v * times for v, times in pairs) / n
        spread = math.fsum(times * (v - mean) ** 2 for v, times in pairs) / (n - 1)
        half = NormalDist().inv_cdf(0.5 + confidence / 2) * math.sqrt(spread / n)
        return Mean(mean, mean - half, mean + half, confidence)

    def breakers(self, confidence: float = 0.95) -> dict[int, Share]:
        """How often each number of breakers was tripped, with Wilson's interval, in ascending order."""
        found: dict[int, int] = {}
        known = ((len(end.outcome.tripped), n) for end, n in self._known)
        for few, n in chain(known, ((len(alike.breakers), alike.rows.size) for alike in self._columns)):
            found[few] = found.get(few, 0) + n
        return {few: self._share(found[few], confidence, "wilson") for few in sorted(found)}

    def table(self, confidence: float = 0.95) -> pd.DataFrame:
        """How often the fault was cleared and each number of breakers tripped, with Wilson's interval."""
        import pandas as pd  # heavy: only when a table is asked for

        shares = {"cleared": self.cleared(confidence=confidence)}
        shares |= {f"{n} breakers tripped": share for n, share in self.breakers(confidence).items()}
        rows = [
            {"outcome": name, "trials": s.successes, "p_estimate": s.estimate, "p_low": s.low, "p_high": s.high}
            for name, s in shares.items()
        ]
        return pd.DataFrame(rows)

    def plot(self, confidence: float = 0.95, ax: Axes | None = None) -> Axes:
        """The number of breakers tripped: the interval of each share as a hatched bar."""
        from schemesim.show.bars import plot_counts  # heavy: only when a picture is asked for

        counts = {n: (s.low, s.high) for n, s in self.breakers(confidence).items()}
        words = f"below the {100 * confidence:g} % interval", f"{100 * confidence:g} % interval"
        title = f"{self.event}: breakers tripped in {self.trials} trials"
        return plot_counts(counts, title=title, x="breakers tripped", words=words, ax=ax)

    def _repr_html_(self) -> str:
        return to_html(self.table(), caption=f"{self.event}, seed {self.seed}: {self.trials} trials")

    def __repr__(self) -> str:
        kinds = len(self._known) + len({alike.ending for alike in self._columns})
        what = "kinds of outcome" if self._columns else "distinct outcomes"
        return f"Counts({self.event}, seed {self.seed}: {self.trials} trials, {kinds} {what})"


def simulate(
    case: Case,
    trials: int | Precision,
    seed: int,
    first_trial: int = 0,
    *,
    horizon_us: int = DEFAULT_HORIZON_US,
    executor: Executor | None = None,
    chunk: int | None = None,
) -> Counts:
    """Run trials with drawn answers and delays, and count how they end.

    Parameters
    ----------
    case : Case
    trials : int or Precision
        How many; or how narrow the Wilson interval of an event should get.
    seed : int
        Zero or more.
    first_trial : int
        Number of the first; the next chunk begins where this one ends.
    horizon_us : int
    executor : concurrent.futures.Executor or None
        Runs the chunks; the counts are the same with any, or with none.
    chunk : int or None
        Trials in one piece of work.

    Raises
    ------
    InputError
        For numbers that are not whole, or negative.
    """
    if chunk is None:
        chunk = CHUNK if case.random else CHUNK_AT_FIXED_TIMES
    errors = ErrorList()
    count = trials.max_trials if isinstance(trials, Precision) else trials
    wanted = (("trials", count, 0), ("seed", seed, 0), ("first_trial", first_trial, 0), ("chunk", chunk, 1))
    for name, number, least in wanted:
        value: object = number
        if isinstance(value, bool) or not isinstance(value, int) or value < least:
            errors.add(name, value, f"a whole number of {least} or more")
    errors.raise_if_any()
    out = Counts(str(case.event), seed, (), ())
    more = min(FIRST_TRIALS, count) if isinstance(trials, Precision) else count
    while more:
        first = first_trial + out.trials
        starts = range(first, first + more, chunk)
        work = [_Chunk(case, seed, start, min(start + chunk, first + more), horizon_us) for start in starts]
        parts: Iterable[Counts] = map(_run_chunk, work) if executor is None else executor.map(_run_chunk, work)
        out = _sum(out.event, seed, chain((out,), parts))
        found = out.share(trials.event, trials.confidence) if isinstance(trials, Precision) else None
        more = trials.more(out.trials, found) if isinstance(trials, Precision) and found is not None else 0
    return out


@dataclass(frozen=True)
class _Chunk:
    case: Case
    seed: int
    first: int
    end: int
    horizon_us: int


def _run_chunk(work: _Chunk) -> Counts:
    case, count = work.case, work.end - work.first
    run, ranges = (str(case.event), work.seed), ((work.first, work.end),)
    if case.random:
        answers = ManyDrawn(case.program, work.seed, work.first, count)
        times = ManyDrawnTimes(work.seed, work.first, count)
        batch = run_batch(case, count, answers, times=times, horizon_us=work.horizon_us)
        return Counts(*run, ranges, (), columns(batch))
    distinct = Distinct(case, work.seed, work.first, count)
    batch = run_batch(case, distinct.times.size, distinct, horizon_us=work.horizon_us)
    each = (
        (end, int(distinct.times[row]))
        for alike in columns(batch)
        for row, end in zip(alike.rows.tolist(), alike.ends(), strict=True)
    )
    return Counts(*run, ranges, _merged(each))


def _sum(event: str, seed: int, parts: Iterable[Counts]) -> Counts:
    """Counts of one event and seed taken together."""
    ranges: list[tuple[int, int]] = []
    known: list[tuple[tuple[End, int], ...]] = []
    found: list[Alike] = []
    for part in parts:
        if (event, seed) != (part.event, part.seed):
            raise reject("counts", (part.event, part.seed), f"counts of {event!r} with seed {seed}")
        ranges += part.ranges
        known.append(part._known)
        found += part._columns
    joined: list[tuple[int, int]] = []
    for first, end in sorted(ranges):
        if joined and first < joined[-1][1]:
            raise reject("counts", f"trials {first} to {joined[-1][1] - 1} twice", "trials not counted before")
        if joined and first == joined[-1][1]:
            joined[-1] = (joined[-1][0], end)
        else:
            joined.append((first, end))
    return Counts(event, seed, tuple(joined), _merged(chain.from_iterable(known)), tuple(found))


def _is_known(method: str) -> bool:
    return method in ("wilson", "clopper_pearson")


def _merged(items: Iterable[tuple[End, int]]) -> tuple[tuple[End, int], ...]:
    """Each ending once, in an order that does not depend on who ran what."""
    counts: dict[End, int] = {}
    for end, n in items:
        counts[end] = counts.get(end, 0) + n
    return tuple(sorted(counts.items(), key=lambda item: _order(item[0])))


def _order(end: End) -> tuple[object, ...]:
    o = end.outcome
    t = -1 if o.t_clear_us is None else o.t_clear_us
    return (str(o.status), t, o.openings, o.operated, o.at_horizon, end.final_mask)
