"""Fixed and random times (rule R19)."""

from __future__ import annotations

import math
import pickle
from collections import Counter
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from schemesim.errors import InputError
from schemesim.scheme.delay_checks import MAX_US
from schemesim.scheme.delays import Delay, Fixed, as_delay, fixed_ms
from schemesim.scheme.distributions import Empirical, LogNormal, Normal, Triangular, Uniform

times = st.integers(0, 200_000) | st.integers(0, MAX_US)
unit = st.floats(0.0, 1.0, exclude_max=True)
spread = st.floats(1e-300, MAX_US)
ordered = st.tuples(times, times, times).map(sorted)


def kinds() -> st.SearchStrategy[tuple[Delay, int, int]]:
    """Any delay, with the shortest and longest time it may give."""
    return st.one_of(
        times.map(lambda t: (Fixed(t), t, t)),
        ordered.map(lambda t: (Uniform(t[0], t[2]), t[0], t[2])),
        ordered.map(lambda t: (Triangular(*t), t[0], t[2])),
        st.builds(lambda t, s: (Normal(t[1], s, t[0], t[2]), t[0], t[2]), ordered, spread),
        st.builds(
            lambda t, s: (LogNormal(t[1], s, t[0], t[2]), t[0], t[2]),
            ordered.filter(lambda t: t[1] > 0),
            st.floats(1e-300, 10.0),
        ),
        st.lists(times, min_size=1, max_size=9).map(lambda t: (Empirical(tuple(t)), min(t), max(t))),
    )


EXAMPLES: list[Delay] = [
    Fixed(20_000),
    Uniform(40_000, 50_000),
    Triangular(40_000, 44_000, 60_000),
    Normal(50_000, 5_000, 35_000, 70_000),
    LogNormal(20_000, 0.5, 1_000, 90_000),
    Empirical((52_000, 48_000, 50_000, 50_000)),
]
MIDPOINTS = (np.arange(20_000) + 0.5) / 20_000


@given(kinds(), unit, unit)
def test_r19_bounds_hold_and_more_never_gives_less(case: tuple[Delay, int, int], u: float, v: float) -> None:
    delay, low, high = case
    first, second = delay.at(min(u, v)), delay.at(max(u, v))
    assert low <= first <= second <= high
    assert low <= delay.nominal_us <= high
    assert type(first) is int
    assert delay.is_fixed == (low == high)


@given(kinds(), st.lists(unit, max_size=8))
def test_r19_arrays_equal_single_values(case: tuple[Delay, int, int], u: list[float]) -> None:
    many = case[0].at_array(np.array(u, dtype=np.float64))
    assert many.dtype == np.int64
    assert many.tolist() == [case[0].at(x) for x in u]


@given(kinds(), st.integers(0, 2**32))
def test_r19_long_arrays_equal_single_values(case: tuple[Delay, int, int], seed: int) -> None:
    u = np.random.Generator(np.random.Philox(seed)).random(300)
    assert case[0].at_array(u).tolist() == [case[0].at(x) for x in u.tolist()]


@given(kinds(), unit, unit)
def test_r19_arrays_step_where_single_values_step(case: tuple[Delay, int, int], u: float, v: float) -> None:
    """The very number at which the time steps, found by halving, and its neighbours."""
    delay = case[0]
    below, above = sorted((u, v))
    while (middle := (below + above) / 2) not in (below, above):
        if delay.at(middle) > delay.at(below):
            above = middle
        else:
            below = middle
    near = [above]
    for _ in range(20):
        near = [math.nextafter(near[0], 0.0), *near, min(math.nextafter(near[-1], 1.0), math.nextafter(1.0, 0.0))]
    assert delay.at_array(np.array(near)).tolist() == [delay.at(x) for x in near]


@pytest.mark.parametrize("delay", EXAMPLES, ids=lambda d: type(d).__name__)
def test_many_times_are_hardly_ever_computed_one_by_one(delay: Delay, monkeypatch: pytest.MonkeyPatch) -> None:
    single: list[float] = []
    one_by_one = Delay.at

    def counted(self: Delay, u: float) -> int:
        single.append(u)
        return one_by_one(self, u)

    monkeypatch.setattr(Delay, "at", counted)
    times = delay.at_array(MIDPOINTS)
    assert len(times) == len(MIDPOINTS)
    assert len(single) < 0.01 * len(MIDPOINTS)


def test_arrays_keep_their_shape() -> None:
    u = np.array([[0.0, 0.25, 0.5], [0.625, 0.75, 0.875]])
    assert Uniform(0, 1000).at_array(u).tolist() == [[0, 250, 500], [625, 750, 875]]


@pytest.mark.parametrize("delay", EXAMPLES, ids=lambda d: type(d).__name__)
def test_delays_are_values(delay: Delay) -> None:
    twin = pickle.loads(pickle.dumps(delay))
    assert twin == delay
    assert hash(twin) == hash(delay)
    assert not hasattr(delay, "__dict__")
    with pytest.raises((AttributeError, TypeError)):
        delay.high_us = 1  # type: ignore[attr-defined]  # frozen is what is tested


def test_the_same_numbers_in_another_kind_are_another_delay() -> None:
    assert len(set(EXAMPLES)) == len(EXAMPLES)
    assert len({Uniform(1, 2), Uniform(1, 3), Triangular(1, 1, 2), Normal(1, 1.0, 1, 2)}) == 4


@pytest.mark.parametrize(
    ("delay", "nominal"),
    [
        (Fixed(7), 7),
        (Uniform(100, 200), 150),
        (Triangular(100, 110, 200), 110),
        (Normal(120, 30.0, 100, 500), 120),
        (LogNormal(130, 0.7, 100, 500), 130),
        (Empirical((9, 1, 5)), 5),
        (Empirical((9, 1, 5, 7)), 7),
    ],
)
def test_nominal_is_the_value_the_table_names(delay: Delay, nominal: int) -> None:
    assert delay.nominal_us == nominal


def test_means_follow_the_textbook() -> None:
    # The mean is the integral of the inverse over u; half a microsecond is the rounding.
    assert Uniform(40_000, 50_000).at_array(MIDPOINTS).mean() == pytest.approx(45_000, abs=0.5)
    assert Triangular(40_000, 44_000, 60_000).at_array(MIDPOINTS).mean() == pytest.approx(48_000, abs=0.5)
    # A half normal has its mean at sd times the root of 2/pi.
    half = Normal(50_000, 1_000, 50_000, 90_000).at_array(MIDPOINTS).mean()
    assert half == pytest.approx(50_000 + 1_000 * math.sqrt(2 / math.pi), abs=0.5)
    # Hardly cut, a log-normal has its mean at median times exp(sigma squared / 2).
    wide = LogNormal(20_000, 0.25, 0, MAX_US).at_array(MIDPOINTS).mean()
    assert wide == pytest.approx(20_000 * math.exp(0.25**2 / 2), rel=1e-4)


def test_quantiles_by_hand() -> None:
    # Triangle 0..2000 with its mode at 1000: F(500) = 1/8, F(1500) = 7/8.
    assert [Triangular(0, 1000, 2000).at(u) for u in (0.0, 1 / 8, 0.5, 7 / 8)] == [0, 500, 1000, 1500]
    # Right triangles: mode at an end; F = (x/1000)^2 rising, 1 - (1 - x/1000)^2 falling.
    assert Triangular(0, 1000, 1000).at(0.25) == 500
    assert Triangular(0, 0, 1000).at(0.75) == 500
    # Printed normal tables: 97.5 % lies 1.959964 standard deviations up, 90 % 1.281552.
    wide = Normal(10_000_000, 1_000_000, 0, 20_000_000)
    assert wide.at(0.975) == 11_959_964
    assert wide.at(0.025) == 8_040_036
    assert LogNormal(1_000_000, 1.0, 0, MAX_US).at(0.9) == pytest.approx(1e6 * math.exp(1.281552), rel=1e-6)


@pytest.mark.parametrize("u", [0.0, 1e-12, 0.001, 0.3, 0.5, 0.7, 0.999, 1 - 1e-12])
def test_truncated_quantiles_agree_with_scipy(u: float) -> None:
    low, mean, high, sd = 41_000_000, 50_000_000, 53_000_000, 4_000_000
    theirs = stats.truncnorm.ppf(u, (low - mean) / sd, (high - mean) / sd, loc=mean, scale=sd)
    assert abs(Normal(mean, sd, low, high).at(u) - theirs) <= 1
    rise = (44 - 40) / (60 - 40)
    triangle = stats.triang.ppf(u, rise, loc=40_000_000, scale=20_000_000)
    assert abs(Triangular(40_000_000, 44_000_000, 60_000_000).at(u) - triangle) <= 1
    z = stats.truncnorm.ppf(u, math.log(0.5) / 0.8, math.log(4.0) / 0.8)
    skewed = LogNormal(2_000_000, 0.8, 1_000_000, 8_000_000)
    assert abs(skewed.at(u) - 2_000_000 * math.exp(0.8 * z)) <= 1


def test_a_spread_far_wider_than_the_bounds_is_nearly_flat() -> None:
    assert Normal(150_000, 1e11, 100_000, 200_000).at(0.25) == pytest.approx(125_000, abs=100)


@given(st.lists(times, min_size=1, max_size=7))
def test_every_observed_time_comes_as_often_as_it_was_seen(sample: list[int]) -> None:
    size = len(sample)
    delay = Empirical(tuple(sample))
    assert Counter(delay.at((i + 0.5) / size) for i in range(size)) == Counter(sample)
    assert Empirical(tuple(reversed(sample))) == delay


def test_the_last_uniform_before_one_is_in_the_sample() -> None:
    assert Empirical(tuple(range(49))).at(math.nextafter(1.0, 0.0)) == 48


@pytest.mark.parametrize("u", [-1e-9, 1.0, math.nan, math.inf])
@pytest.mark.parametrize("delay", EXAMPLES, ids=lambda d: type(d).__name__)
def test_uniforms_outside_their_range_are_refused(delay: Delay, u: float) -> None:
    with pytest.raises(InputError, match="uniform number"):
        delay.at(u)
    with pytest.raises(InputError, match="uniform number"):
        delay.at_array(np.array([0.5, u]))


@pytest.mark.parametrize("bad", [-1, MAX_US + 1, math.nan, math.inf, 1.5, 2.0, True, "5", None])
def test_every_time_of_every_kind_is_checked_all_at_once(bad: int) -> None:
    makers: dict[str, Callable[[], Delay]] = {
        "us": lambda: Fixed(bad),
        "low_us high_us": lambda: Uniform(bad, bad),
        "low_us mode_us high_us": lambda: Triangular(bad, bad, bad),
        "low_us mean_us high_us": lambda: Normal(bad, 1.0, bad, bad),
        "low_us median_us high_us": lambda: LogNormal(bad, 1.0, bad, bad),
        "sample_us[0] sample_us[2]": lambda: Empirical((bad, 4, bad)),
    }
    for names, make in makers.items():
        with pytest.raises(InputError) as caught:
            make()
        assert [p.subject.split()[1] for p in caught.value.problems] == names.split()
        assert all(p.value is bad for p in caught.value.problems)


@pytest.mark.parametrize("bad", [0, -1.0, math.nan, math.inf, True, "1", None])
def test_spreads_are_checked(bad: float) -> None:
    with pytest.raises(InputError, match=r"^Normal sd_us: got"):
        Normal(5, bad, 0, 9)
    with pytest.raises(InputError, match=r"^LogNormal sigma: got"):
        LogNormal(5, bad, 0, 9)


def test_disorder_is_refused_with_every_mistake() -> None:
    with pytest.raises(InputError, match=r"^Uniform high_us: got 1, expected at least low_us = 2$"):
        Uniform(2, 1)
    with pytest.raises(InputError) as caught:
        Triangular(10, 0, 5)
    assert [str(p) for p in caught.value.problems] == [
        "Triangular mode_us: got 0, expected at least low_us = 10",
        "Triangular high_us: got 5, expected at least low_us = 10",
    ]
    with pytest.raises(InputError, match="mean_us: got 3, expected at least low_us = 4\nNormal sd_us"):
        Normal(3, -1.0, 4, 9)
    with pytest.raises(InputError, match="LogNormal median_us: got 0, expected a time over 0"):
        LogNormal(0, 1.0, 0, 9)
    with pytest.raises(InputError, match="at least one time"):
        Empirical(())


@pytest.mark.parametrize("bad", ["123", 5, None])
def test_a_sample_that_is_no_sequence_is_refused(bad: tuple[int, ...]) -> None:
    with pytest.raises(InputError, match="a sequence of times in microseconds"):
        Empirical(bad)


def test_whole_numbers_of_numpy_become_plain() -> None:
    sample: tuple[int, ...] = np.array([3, 1])  # type: ignore[assignment]  # what a user's data hands over
    delay = Empirical(sample)
    assert delay == Empirical((1, 3))
    assert [type(time) for time in delay.sample_us] == [int, int]


def test_as_delay_and_fixed_ms() -> None:
    drawn = Uniform(1, 2)
    assert as_delay(drawn) is drawn
    assert as_delay(1500) == Fixed(1500) == fixed_ms(1.5)
    for bad in (1.5, True, -1, "a", None):
        with pytest.raises(InputError, match=r"^delay: got"):
            as_delay(bad)  # type: ignore[arg-type]  # the mistake under test
    for bad_ms in (-1.0, math.nan, math.inf):
        with pytest.raises(InputError, match=r"^delay: got"):
            fixed_ms(bad_ms)
