"""From failure data to probabilities: how often an item is found unable to do its part.

An item fails at a rate λ. A share C of its failures (the self-monitoring coverage) is found at once; the rest
stays hidden until the next test, an interval T after the last. Over one interval its unavailability is the sum of

- hidden: 1 − exp(−λ(1−C)t) at the age t since the test; its mean 1 − (1 − exp(−x))/x with x = λ(1−C)T,
  leading term x/2 (textbook; the λT/2 of IEC 61508-6 Annex B and NUREG-0492);
- found by monitoring, in repair: λCR/(1 + λCR) for a repair time R (alternating renewal);
- found by a test, in repair: (1 − exp(−x))·R/T, leading term λ(1−C)R;
- out for its test, τ/T, where the test keeps it from working;
- failures on demand, which no test and no monitoring tells: a probability of its own.

These exclude each other but for products of small numbers, which the sum counts twice: it is never too small.
The worst over the interval is just before the next test: the hidden part at t = T, the others at their means.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from enum import StrEnum

from schemesim.errors import ErrorList, reject
from schemesim.scheme.model import MODES, ComponentKind, FailureMode

HOURS_PER_YR = 8760.0

MAX_RATE_PER_YR = 1e6
MAX_YR = 1000.0
MAX_H = 1e6


class Over(StrEnum):
    """Which unavailability of the test interval counts."""

    MEAN = "mean"
    WORST = "worst"


@dataclass(frozen=True, slots=True, kw_only=True)
class RateData:
    """What is known of the failures of an item.

    Parameters
    ----------
    rate_per_yr : float
        Failures a year, hidden and monitored together.
    on_demand : float
        Probability of failing on demand for reasons no test tells (settings, logic, a wrong drawing).
    coverage : float
        Share of the failures that self-monitoring finds at once, 0 to 1.
    test_interval_yr : float or None
        Years between tests; None: never tested, so that nothing may be hidden.
    test_duration_h : float
        Hours out of service for each test.
    repair_h : float
        Hours from finding a failure to working again.
    revealed : bool
        Every failure shows at once (as with coverage 1); latent otherwise.

    Raises
    ------
    InputError
        With every mistake: a negative rate, a coverage over 1, a test longer than its interval, hidden failures
        and no test.

    Examples
    --------
    >>> round(unavailability(RateData(rate_per_yr=0.01, test_interval_yr=2)).mean, 6)
    0.009934
    >>> RateData(rate_per_yr=-0.01, coverage=1.2)
    Traceback (most recent call last):
    ...
    schemesim.errors.InputError: rate_per_yr: got -0.01, expected a number from 0 to 1e+06
    coverage: got 1.2, expected a share from 0 to 1
    """

    rate_per_yr: float = 0.0
    on_demand: float = 0.0
    coverage: float = 0.0
    test_interval_yr: float | None = None
    test_duration_h: float = 0.0
    repair_h: float = 0.0
    revealed: bool = False

    def __post_init__(self) -> None:
        errors = ErrorList()
        need(errors, "rate_per_yr", self.rate_per_yr, 0, MAX_RATE_PER_YR)
        need(errors, "on_demand", self.on_demand, 0, 1, "a probability from 0 to 1")
        need(errors, "coverage", self.coverage, 0, 1, "a share from 0 to 1")
        need(errors, "test_duration_h", self.test_duration_h, 0, MAX_H)
        need(errors, "repair_h", self.repair_h, 0, MAX_H)
        if self.test_interval_yr is not None:
            what = f"a number over 0, at most {MAX_YR:g}"
            need(errors, "test_interval_yr", self.test_interval_yr, math.ulp(0.0), MAX_YR, what)
        errors.raise_if_any()
        if self.revealed and self.coverage:
            errors.add("coverage", self.coverage, "none beside revealed, which finds every failure at once")
        if self.test_interval_yr is None:
            if self.hidden_per_yr > 0:
                tip = "write revealed, or coverage 1, where every failure shows at once"
                expected = "a test interval: failures stay hidden without a test"
                errors.add("test_interval_yr", "nothing", expected, tip=tip)
            if self.test_duration_h:
                errors.add("test_duration_h", self.test_duration_h, "test_interval_yr beside it")
        elif self.test_duration_h > self.test_interval_yr * HOURS_PER_YR:
            most = f"at most the interval of {self.test_interval_yr * HOURS_PER_YR:g} h"
            errors.add("test_duration_h", self.test_duration_h, most)
        errors.raise_if_any()

    @property
    def hidden_per_yr(self) -> float:
        """Failures a year that stay hidden until the next test."""
        return 0.0 if self.revealed else self.rate_per_yr * (1 - self.coverage)

    @property
    def found_per_yr(self) -> float:
        """Failures a year that monitoring finds at once."""
        return self.rate_per_yr if self.revealed else self.rate_per_yr * self.coverage

    def hidden_at(self, age_yr: float) -> float:
        """Probability that a hidden failure is there, so many years after a test that found none."""
        return -math.expm1(-self.hidden_per_yr * age_yr)

    def with_interval(self, test_interval_yr: float) -> RateData:
        """The same item tested at another interval."""
        return replace(self, test_interval_yr=test_interval_yr)

    def shared(self, share: float) -> RateData:
        """The part of its failures that is a share of all; without the time out for tests."""
        return replace(
            self, rate_per_yr=self.rate_per_yr * share, on_demand=self.on_demand * share, test_duration_h=0.0
        )


@dataclass(frozen=True, slots=True)
class Unavailability:
    """The unavailability of one item and what it is made of, each from 0 to 1.

    Attributes
    ----------
    hidden_mean, hidden_worst : float
        Failures not found yet: mean over the test interval, and just before the next test.
    found_in_repair : float
        Found by monitoring, in repair.
    tested_in_repair : float
        Found by a test, in repair.
    under_test : float
        Share of the time out for tests.
    on_demand : float
    """

    hidden_mean: float
    hidden_worst: float
    found_in_repair: float
    tested_in_repair: float
    under_test: float
    on_demand: float

    @property
    def steady(self) -> float:
        """All but the hidden part, which alone changes over the interval."""
        return self.found_in_repair + self.tested_in_repair + self.under_test + self.on_demand

    @property
    def mean(self) -> float:
        """Mean over the test interval, tests and repairs included; no more than 1."""
        return min(1.0, self.hidden_mean + self.steady)

    @property
    def worst(self) -> float:
        """Just before the next test, what does not age taken at its mean; no more than 1."""
        return min(1.0, self.hidden_worst + self.steady)

    def over(self, which: Over) -> float:
        """The mean or the worst."""
        return self.mean if which is Over.MEAN else self.worst

    def __repr__(self) -> str:
        return f"Unavailability(mean {self.mean:.3g}, worst {self.worst:.3g})"


def unavailability(data: RateData) -> Unavailability:
    """The unavailability of one item.

    Parameters
    ----------
    data : RateData

    Returns
    -------
    Unavailability
        Its parts, the mean over the test interval and the worst.

    Examples
    --------
    >>> monitored = RateData(rate_per_yr=0.01, coverage=0.95, test_interval_yr=4, test_duration_h=4, repair_h=8)
    >>> unavailability(monitored)
    Unavailability(mean 0.00112, worst 0.00212)
    >>> unavailability(RateData(on_demand=0.001)).mean
    0.001
    """
    repair_yr = data.repair_h / HOURS_PER_YR
    found = data.found_per_yr * repair_yr
    t = data.test_interval_yr
    worst = 0.0 if t is None else data.hidden_at(t)
    return Unavailability(
        hidden_mean=0.0 if t is None else mean_hidden(data.hidden_per_yr * t),
        hidden_worst=worst,
        found_in_repair=found / (1 + found),
        tested_in_repair=0.0 if t is None else min(1.0, worst * repair_yr / t),
        under_test=0.0 if t is None else data.test_duration_h / (t * HOURS_PER_YR),
        on_demand=data.on_demand,
    )


def mean_hidden(x: float) -> float:
    """Mean of 1 − exp(−λt) over an interval T, with x = λT: 1 − (1 − exp(−x))/x, about x/2.

    Examples
    --------
    >>> round(mean_hidden(1e-9), 18), round(mean_hidden(2.0), 6)
    (5e-10, 0.567668)
    """
    if x < 1e-3:  # the difference would lose its digits; the next term of the series is x⁵/720
        return x * (1 / 2 - x * (1 / 6 - x * (1 / 24 - x / 120)))
    return 1 + math.expm1(-x) / x


def optimal_interval_yr(rate_per_yr: float, test_duration_h: float, coverage: float = 0.0) -> float:
    """The test interval at which one item is least unavailable: T* = √(2τ/(λ(1−C))).

    It is where λ(1−C)T/2 + τ/T is least: hidden failures against time out for tests.

    Parameters
    ----------
    rate_per_yr : float
        Failures a year, over 0.
    test_duration_h : float
        Hours out of service for each test, over 0.
    coverage : float
        Share of failures found at once by self-monitoring, 0 to under 1.

    Raises
    ------
    InputError
        If any of them is not as stated; then no interval is best.

    Examples
    --------
    >>> [round(optimal_interval_yr(0.01, 4, c), 2) for c in (0, 0.8, 0.95)]
    [0.3, 0.68, 1.35]
    """
    errors = ErrorList()
    tiny = math.ulp(0.0)
    need(errors, "rate_per_yr", rate_per_yr, tiny, MAX_RATE_PER_YR, f"a number over 0, at most {MAX_RATE_PER_YR:g}")
    need(errors, "test_duration_h", test_duration_h, tiny, MAX_H, f"a number over 0, at most {MAX_H:g}")
    need(errors, "coverage", coverage, 0, math.nextafter(1.0, 0.0), "a share from 0 to under 1")
    errors.raise_if_any()
    return math.sqrt(2 * test_duration_h / HOURS_PER_YR / (rate_per_yr * (1 - coverage)))


class Quality(StrEnum):
    """How good a value is."""

    PUBLISHED = "published"
    FROM_MEMORY = "from memory"
    ASSUMED = "assumed"
    MEASURED = "measured"


@dataclass(frozen=True, slots=True, kw_only=True)
class RateRule:
    """Failure data of one mode of all components of a kind whose names match a pattern.

    Parameters
    ----------
    kind : ComponentKind
    mode : FailureMode
    data : RateData
    pattern : str
        With ``*`` and ``?``; of the rules that fit a component the last counts.
    staggered : bool
        Items that stand in for each other are tested by turns, evenly spread over the interval; else together.
    source : str
        Where the values come from.
    quality : Quality or None
        How good they are, where that is said.

    Raises
    ------
    InputError
        For a mode that the kind does not have.
    """

    kind: ComponentKind
    mode: FailureMode
    data: RateData
    pattern: str = "*"
    staggered: bool = False
    source: str = ""
    quality: Quality | None = None

    def __post_init__(self) -> None:
        allowed = MODES[self.kind]
        if self.mode not in allowed:
            raise reject(f"mode of {self.kind}", str(self.mode), f"one of {', '.join(allowed)}")


def need(errors: ErrorList, subject: str, value: object, low: float, high: float, what: str = "") -> None:
    """Note what is no finite number from ``low`` to ``high``."""
    good = isinstance(value, (int, float)) and not isinstance(value, bool)
    if not good or not low <= float(str(value)) <= high:
        errors.add(subject, value, what or f"a number from {low:g} to {high:g}")
