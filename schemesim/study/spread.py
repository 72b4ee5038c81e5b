"""Distributions over several locations, weighted by fault frequency: breakers tripped, time to clear."""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Callable, Iterable, Mapping
from functools import partial

from schemesim.study.brackets import Bracket
from schemesim.study.location import LocationResult

Weighted = Callable[[Callable[[LocationResult], Bracket]], Bracket]
"""The mean of a bracket over the locations."""


def breakers_over(results: Iterable[LocationResult], weighted: Weighted) -> Mapping[int, Bracket]:
    """The share of faults that trip each number of breakers met, in ascending order.

    A number met at one location and not at another counts there with what was left unexplored.
    """
    counts = sorted({n for r in results for n in r.breakers})
    return {n: _share(weighted(partial(_of, n=n))) for n in counts}


def cleared_over(results: Iterable[LocationResult], weighted: Weighted) -> tuple[tuple[int, Bracket], ...]:
    """For each time met (microseconds) the share of faults cleared by then."""
    times = sorted({t for r in results for t, _ in r.clearing.cdf})
    return tuple((t, _share(weighted(partial(_by, t_us=t)))) for t in times)


def _of(r: LocationResult, n: int) -> Bracket:
    """Probability of a number of breakers."""
    return r.breakers[n] if n in r.breakers else _rest(r)


def _by(r: LocationResult, t_us: int) -> Bracket:
    """Probability that a fault is cleared by a time."""
    at = bisect_right([t for t, _ in r.clearing.cdf], t_us)
    return r.clearing.cdf[at - 1][1] if at else _rest(r)


def _rest(r: LocationResult) -> Bracket:
    """Of what was not met: nothing of what was explored."""
    return Bracket(0.0, float(r.clearing.unexplored))


def _share(b: Bracket) -> Bracket:
    return Bracket(max(b.low, 0), min(b.high, 1))
