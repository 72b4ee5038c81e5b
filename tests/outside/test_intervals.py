"""Intervals for a probability against exact binomial sums; published values stand in the table."""

from __future__ import annotations

import math
from collections.abc import Callable
from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from schemesim.errors import InputError
from schemesim.study.intervals import clopper_pearson, wilson

Interval = Callable[[int, int, float], tuple[float, float]]
BOTH = pytest.mark.parametrize("interval", [wilson, clopper_pearson])
CONFIDENCES = pytest.mark.parametrize("confidence", [0.8, 0.95, 0.999])
counts = st.integers(1, 60).flatmap(lambda n: st.tuples(st.integers(0, n), st.just(n)))


def test_far_tails_keep_their_digits() -> None:
    # One error in 1e9 trials allowed on each side, none seen in 1e12: p = -ln(1e-9)/1e12 to first order.
    assert clopper_pearson(0, 10**12, 1 - 2e-9)[1] == pytest.approx(-math.log(1e-9) / 1e12, rel=1e-6)
    # Wilson with no success is z^2/(n + z^2).
    assert wilson(0, 10**12)[1] == pytest.approx(1.959964**2 / 1e12, rel=1e-6)


def chance(k: int, n: int, p: float) -> float:
    return math.comb(n, k) * p**k * (1 - p) ** (n - k)


def coverage(interval: Interval, n: int, p: float, confidence: float) -> float:
    """Exact probability that the interval holds p."""
    total = 0.0
    for k in range(n + 1):
        low, high = interval(k, n, confidence)
        if low <= p <= high:
            total += chance(k, n, p)
    return total


def grid(n: int, confidence: float) -> list[float]:
    """An even grid, and points just beside every bound, where coverage jumps to its lowest."""
    even = [i / 200 for i in range(201)]
    bounds = [bound for k in range(n + 1) for bound in clopper_pearson(k, n, confidence)]
    beside = [bound + step for bound in bounds for step in (-1e-9, 1e-9)]
    return even + [p for p in beside if 0.0 <= p <= 1.0]


@CONFIDENCES
@pytest.mark.parametrize("n", [1, 2, 5, 12])
def test_clopper_pearson_never_covers_less_than_it_says(n: int, confidence: float) -> None:
    cases = {k: clopper_pearson(k, n, confidence) for k in range(n + 1)}
    lowest = min(coverage(lambda k, _n, _c: cases[k], n, p, confidence) for p in grid(n, confidence))
    assert lowest >= confidence - 1e-7


def test_wilson_covers_about_as_much_as_it_says_on_average() -> None:
    over_p = [coverage(wilson, 10, (i + 0.5) / 1000, 0.95) for i in range(1000)]
    assert sum(over_p) / len(over_p) == pytest.approx(0.95, abs=0.01)


@given(counts, st.floats(0.5, 0.9999))
def test_bounds_of_clopper_pearson_solve_their_equations(case: tuple[int, int], confidence: float) -> None:
    k, n = case
    low, high = clopper_pearson(k, n, confidence)
    tail = (1 - confidence) / 2
    if k > 0:
        assert sum(chance(j, n, low) for j in range(k, n + 1)) == pytest.approx(tail, rel=1e-8)
    if k < n:
        assert sum(chance(j, n, high) for j in range(k + 1)) == pytest.approx(tail, rel=1e-8)


@given(counts)
def test_bounds_of_wilson_lie_z_standard_errors_from_the_share(case: tuple[int, int]) -> None:
    k, n = case
    for bound in wilson(k, n, 0.95):
        if 0.0 < bound < 1.0:
            standard_error = math.sqrt(bound * (1 - bound) / n)
            assert abs(k / n - bound) / standard_error == pytest.approx(1.959964, rel=1e-6)


@BOTH
@given(case=counts, confidence=st.floats(0.01, 0.9999))
def test_the_share_lies_inside_and_failures_mirror_successes(
    interval: Interval, case: tuple[int, int], confidence: float
) -> None:
    k, n = case
    low, high = interval(k, n, confidence)
    assert 0.0 <= low <= k / n * (1 + 1e-12)
    assert k / n * (1 - 1e-12) <= high <= 1.0
    assert (1 - high, 1 - low) == pytest.approx(interval(n - k, n, confidence), abs=1e-12)
    assert (low == 0.0) == (k == 0)
    assert (high == 1.0) == (k == n)


@BOTH
def test_more_confidence_is_wider_and_more_successes_lie_higher(interval: Interval) -> None:
    widths = [interval(7, 30, c)[1] - interval(7, 30, c)[0] for c in (0.5, 0.9, 0.99, 0.9999)]
    assert all(narrow < wide for narrow, wide in pairwise(widths))
    bounds = [interval(k, 30, 0.95) for k in range(31)]
    assert all(a[0] < b[0] and a[1] < b[1] for a, b in pairwise(bounds))


@BOTH
def test_no_trial_tells_nothing(interval: Interval) -> None:
    assert interval(0, 0, 0.95) == (0.0, 1.0)


@BOTH
@pytest.mark.parametrize(
    ("successes", "trials", "confidence", "subjects"),
    [
        (5, 4, 0.95, ["successes"]),
        (-1, 4, 0.95, ["successes"]),
        (1.0, 4, 0.95, ["successes"]),
        (1, math.nan, 0.95, ["trials"]),
        (True, 4, 0.95, ["successes"]),
        (1, 4, 0.0, ["confidence"]),
        (1, 4, 1.0, ["confidence"]),
        (1, 4, 95, ["confidence"]),
        (1, 4, math.nan, ["confidence"]),
        (1, 4, "0.95", ["confidence"]),
        (-1, None, 2.0, ["successes", "trials", "confidence"]),
    ],
)
def test_bad_counts_are_refused_all_at_once(
    interval: Interval, successes: int, trials: int, confidence: float, subjects: list[str]
) -> None:
    with pytest.raises(InputError) as caught:
        interval(successes, trials, confidence)
    assert [problem.subject for problem in caught.value.problems] == subjects
