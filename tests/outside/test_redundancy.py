"""Unavailability of tested items, single and redundant, against published cells, closed forms and integration.

Sources: IEC 61508-6 Annex B (formulae and cells from memory, recomputed); leading terms of proof-tested items as in
that annex and in NUREG-0492 (from memory); availability of a repaired item μ/(λ+μ) (textbook); the optimal
test interval √(2τ/(λ(1−C))) (derived).
"""

from __future__ import annotations

import math
from collections.abc import Callable

import pytest
from scipy.integrate import quad
from scipy.optimize import minimize_scalar

from schemesim.scheme.redundancy import redundant
from schemesim.scheme.unavailability import HOURS_PER_YR, RateData, optimal_interval_yr, unavailability
from tests.outside.values_redundancy import CELLS


@pytest.mark.parametrize(("coverage", "architecture", "beta", "cell"), CELLS)
def test_the_time_average_agrees_with_the_cells(
    coverage: float, architecture: str, beta: float, cell: str
) -> None:
    """The standard multiplies tCE by tGE; the mean of the product itself differs by a few per cent.

    Its βD is β/2; here one β holds for all failures, which counts for little as those found are repaired in 8 h.
    """
    item = RateData(rate_per_yr=2.5e-6 * HOURS_PER_YR, coverage=coverage, test_interval_yr=1, repair_h=8)
    needed, count = int(architecture[0]), int(architecture[3])
    found = redundant(item, needed, count, beta=beta)
    assert found.mean == pytest.approx(float(cell), rel=0.07)


LEADING: list[tuple[int, int, bool, Callable[[float], float]]] = [
    (1, 1, False, lambda x: x / 2),
    (1, 2, False, lambda x: x**2 / 3),
    (2, 2, False, lambda x: x),
    (2, 3, False, lambda x: x**2),
    (1, 2, True, lambda x: 5 * x**2 / 24),
]


@pytest.mark.parametrize(("needed", "count", "staggered", "leading"), LEADING)
def test_leading_terms(needed: int, count: int, staggered: bool, leading: Callable[[float], float]) -> None:
    """With λT = x the rest is of the order x, relative: it shrinks tenfold as x does."""
    errors = []
    for x in (1e-2, 1e-3, 1e-4):
        item = RateData(rate_per_yr=x / 2, test_interval_yr=2)
        errors.append(redundant(item, needed, count, staggered=staggered).mean / leading(x) - 1)
    assert abs(errors[0]) < 0.02
    assert errors[1] == pytest.approx(errors[0] / 10, rel=0.05)
    assert errors[2] == pytest.approx(errors[1] / 10, rel=0.05)


def group_at(t: float, rate: float, interval: float, needed: int, count: int, *, staggered: bool) -> float:
    """Probability that too few items work at a time, by enumeration of their states."""
    total = 0.0
    for state in range(2**count):
        p = 1.0
        for i in range(count):
            offset = i * interval / count if staggered else 0.0
            q = 1 - math.exp(-rate * ((t + offset) % interval))
            p *= q if state >> i & 1 else 1 - q
        total += p if count - state.bit_count() < needed else 0.0
    return total


@pytest.mark.parametrize("staggered", [False, True])
@pytest.mark.parametrize(("needed", "count"), [(1, 1), (1, 2), (2, 2), (2, 3), (1, 3), (3, 4)])
def test_the_mean_is_the_integral_over_the_interval(needed: int, count: int, staggered: bool) -> None:
    rate, interval = 0.3, 2.5
    item = RateData(rate_per_yr=rate, test_interval_yr=interval)
    breaks = [k * interval / count for k in range(1, count)]
    area, _ = quad(
        lambda t: group_at(t, rate, interval, needed, count, staggered=staggered), 0, interval, points=breaks or None
    )
    assert redundant(item, needed, count, staggered=staggered).mean == pytest.approx(area / interval, rel=1e-9)


@pytest.mark.parametrize(("needed", "count"), [(1, 2), (2, 3), (1, 3)])
def test_the_worst_is_the_greatest_over_the_interval(needed: int, count: int) -> None:
    rate, interval = 0.3, 2.5
    item = RateData(rate_per_yr=rate, test_interval_yr=interval)
    for staggered in (False, True):
        times = [interval * (k + 0.999999) / (60 * count) for k in range(60 * count)]
        worst = max(group_at(t, rate, interval, needed, count, staggered=staggered) for t in times)
        assert redundant(item, needed, count, staggered=staggered).worst == pytest.approx(worst, rel=1e-5)


def test_tests_by_turns_gain_three_eighths_for_a_duplicate_and_nothing_for_one() -> None:
    item = RateData(rate_per_yr=1e-5, test_interval_yr=1)
    together, turns = redundant(item, 1, 2).mean, redundant(item, 1, 2, staggered=True).mean
    assert turns / together == pytest.approx(5 / 8, rel=1e-4)
    assert redundant(item, 1, 1, staggered=True).mean == redundant(item, 1, 1).mean


@pytest.mark.parametrize("coverage", [0.0, 0.8, 0.95])
def test_the_optimal_interval_is_where_the_mean_is_least(coverage: float) -> None:
    """λ = 0.01 a year, τ = 4 h; the closed form leaves out terms of the order λT."""
    best = optimal_interval_yr(0.01, 4, coverage)

    def mean(t: float) -> float:
        data = RateData(rate_per_yr=0.01, coverage=coverage, test_interval_yr=t, test_duration_h=4)
        return unavailability(data).mean

    found = minimize_scalar(mean, bounds=(0.01, 20), method="bounded", options={"xatol": 1e-9})
    assert found.x == pytest.approx(best, rel=0.01)
