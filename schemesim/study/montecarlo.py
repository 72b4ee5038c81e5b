"""Plain Monte Carlo on one case: seeded, addable counts, with intervals.

Trial number t of a seed is the same trial whoever runs it: its answers and its random
delays are looked up by (seed, name, trial). Chunks run anywhere therefore merge into
just what one run over all the trials gives.

Where no delay is random, trials with the same answers to the questions they meet are one
run: a chunk is split question by question, and each distinct history is run once (the
outcome is a function of asked answers only, rule R4).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Executor
from dataclasses import dataclass
from statistics import NormalDist
from typing import TYPE_CHECKING, Literal

import numpy as np

from schemesim.engine.answers import DrawnAnswers, ForcedAnswers, drawn_answers
from schemesim.engine.case import Case
from schemesim.engine.event import DEFAULT_HORIZON_US, run_event
from schemesim.engine.times import DelayTimes
from schemesim.errors import ErrorList, reject
from schemesim.study.intervals import clopper_pearson, wilson
from schemesim.study.tree import End, Happens

if TYPE_CHECKING:
    from numpy.typing import NDArray

CHUNK = 500
"""Trials in one piece of work where delays are random."""

CHUNK_OF_HISTORIES = 50_000
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


@dataclass(frozen=True)
class Counts:
    """How many trials ended how; counts of other trials of the same seed can be added.

    Attributes
    ----------
    event : str
    seed : int
    ranges : tuple of (int, int)
        First trial and the one after the last, of each unbroken range run.
    ends : tuple of (End, int)
        Distinct endings and how often each came, in an order of their own.
    """

    event: str
    seed: int
    ranges: tuple[tuple[int, int], ...]
    ends: tuple[tuple[End, int], ...]

    @property
    def trials(self) -> int:
        """Trials counted."""
        return sum(n for _, n in self.ends)

    def __add__(self, other: Counts) -> Counts:
        """Counts of both.

        Raises
        ------
        InputError
            If they are of another event or seed, or share trials.
        """
        if (self.event, self.seed) != (other.event, other.seed):
            raise reject("counts", (other.event, other.seed), f"counts of {self.event!r} with seed {self.seed}")
        ranges: list[tuple[int, int]] = []
        for first, end in sorted((*self.ranges, *other.ranges)):
            if ranges and first < ranges[-1][1]:
                raise reject("counts", f"trials {first} to {ranges[-1][1] - 1} twice", "trials not counted before")
            if ranges and first == ranges[-1][1]:
                ranges[-1] = (ranges[-1][0], end)
            else:
                ranges.append((first, end))
        return Counts(self.event, self.seed, tuple(ranges), _merged((*self.ends, *other.ends)))

    def count(self, event: Happens) -> int:
        """In how many trials an event happened."""
        return sum(n for end, n in self.ends if event(end.outcome))

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
        if method not in ("wilson", "clopper_pearson"):
            raise reject("interval", method, "'wilson' or 'clopper_pearson'")
        happened = self.count(event)
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
        pairs = [(value(end), times) for end, times in self.ends]
        mean = math.fsum(v * times for v, times in pairs) / n
        spread = math.fsum(times * (v - mean) ** 2 for v, times in pairs) / (n - 1)
        half = NormalDist().inv_cdf(0.5 + confidence / 2) * math.sqrt(spread / n)
        return Mean(mean, mean - half, mean + half, confidence)

    def __repr__(self) -> str:
        return f"Counts({self.event}, seed {self.seed}: {self.trials} trials, {len(self.ends)} distinct outcomes)"


def simulate(
    case: Case,
    trials: int,
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
    trials : int
        How many.
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
        chunk = CHUNK if case.random else CHUNK_OF_HISTORIES
    errors = ErrorList()
    wanted = (("trials", trials, 0), ("seed", seed, 0), ("first_trial", first_trial, 0), ("chunk", chunk, 1))
    for name, number, least in wanted:
        value: object = number
        if isinstance(value, bool) or not isinstance(value, int) or value < least:
            errors.add(name, value, f"a whole number of {least} or more")
    errors.raise_if_any()
    starts = range(first_trial, first_trial + trials, chunk)
    work = [_Chunk(case, seed, start, min(start + chunk, first_trial + trials), horizon_us) for start in starts]
    parts: Iterable[Counts] = map(_run_chunk, work) if executor is None else executor.map(_run_chunk, work)
    out = Counts(str(case.event), seed, (), ())
    for part in parts:
        out = out + part
    return out


@dataclass(frozen=True)
class _Chunk:
    case: Case
    seed: int
    first: int
    end: int
    horizon_us: int


def _run_chunk(work: _Chunk) -> Counts:
    found = _by_history(work) if not work.case.random else _one_by_one(work)
    return Counts(str(work.case.event), work.seed, ((work.first, work.end),), _merged(found))


def _one_by_one(work: _Chunk) -> Iterator[tuple[End, int]]:
    for trial in range(work.first, work.end):
        ran = run_event(
            work.case,
            DrawnAnswers(work.case.program, work.seed, trial),
            times=DelayTimes(work.seed, trial),
            horizon_us=work.horizon_us,
        )
        yield End(ran.outcome, ran.final_mask), 1


def _by_history(work: _Chunk) -> Iterator[tuple[End, int]]:
    """Run each distinct history of the chunk once; the trials that share it are counted."""
    count = work.end - work.first
    drawn: dict[int, NDArray[np.bool_]] = {}
    waiting: list[tuple[dict[int, bool], NDArray[np.intp]]] = [({}, np.arange(count))]
    while waiting:
        answers, trials = waiting.pop()
        if not trials.size:
            continue
        ran = run_event(work.case, ForcedAnswers(answers), horizon_us=work.horizon_us)
        met = dict(answers)
        for q, _ in ran.asked:
            if q in answers:
                continue
            if q not in drawn:
                drawn[q] = drawn_answers(work.case.program, work.seed, q, work.first, count)
            yes = drawn[q][trials]
            if yes.any():
                waiting.append(({**met, q: True}, trials[yes]))
                trials = trials[~yes]
            met[q] = False
        if trials.size:
            yield End(ran.outcome, ran.final_mask), int(trials.size)


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
