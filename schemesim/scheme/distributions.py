"""Random times (rule R19): the distributions a delay may follow.

All times are whole microseconds (rule R1); results are rounded to the nearest.

========== =============================== ==================================
kind       distribution                    nominal value (nothing random)
========== =============================== ==================================
Uniform    flat from low to high           the middle (mean and median)
Triangular low, mode, high                 the mode
Normal     truncated to low..high          the mean asked for (the mode)
LogNormal  truncated to low..high          the median asked for
Empirical  a sample, each value alike      the median (the upper one of two)
========== =============================== ==================================
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import NormalDist
from typing import TYPE_CHECKING

import numpy as np

from schemesim.errors import ErrorList, reject
from schemesim.scheme.delay_checks import A_TIME, MAX_US, take_spread, take_times, whole_us
from schemesim.scheme.delays import Delay

if TYPE_CHECKING:
    from numpy.typing import NDArray

MAX_SIGMA = 10.0
"""Largest log-standard deviation accepted (more is a slip of units)."""

_STANDARD = NormalDist()


@dataclass(frozen=True, slots=True)
class Uniform(Delay):
    """Every time from `low_us` to `high_us` equally likely.

    Parameters
    ----------
    low_us, high_us : int
        Shortest and longest time in microseconds.

    Raises
    ------
    InputError
        If a time is not a whole number from 0 to ``MAX_US``, or low is over high; all mistakes at once.

    Examples
    --------
    >>> Uniform(0, 1000).at(0.1)
    100
    """

    low_us: int
    high_us: int

    def __post_init__(self) -> None:
        errors = ErrorList()
        take_times(self, errors, "low_us", "high_us")
        errors.raise_if_any()

    @property
    def nominal_us(self) -> int:
        """The middle: mean and median."""
        return self.at(0.5)

    def _inverse(self, u: float) -> float:
        return self.low_us + u * (self.high_us - self.low_us)

    def _inverse_array(self, u: NDArray[np.float64]) -> NDArray[np.float64]:
        return self.low_us + u * (self.high_us - self.low_us)

    def _span(self) -> tuple[int, int]:
        return self.low_us, self.high_us


@dataclass(frozen=True, slots=True)
class Triangular(Delay):
    """Density rising from `low_us` to `mode_us` and falling to `high_us`.

    Parameters
    ----------
    low_us, mode_us, high_us : int
        Shortest, likeliest and longest time in microseconds.

    Raises
    ------
    InputError
        If a time is not a whole number from 0 to ``MAX_US``, or they are out of order; all mistakes at once.

    Examples
    --------
    >>> Triangular(0, 1000, 2000).at(0.125)
    500
    """

    low_us: int
    mode_us: int
    high_us: int

    def __post_init__(self) -> None:
        errors = ErrorList()
        take_times(self, errors, "low_us", "mode_us", "high_us")
        errors.raise_if_any()

    @property
    def nominal_us(self) -> int:
        """The mode."""
        return self.mode_us

    def _inverse(self, u: float) -> float:
        width = self.high_us - self.low_us
        rise = self.mode_us - self.low_us
        if u * width < rise:
            return self.low_us + math.sqrt(u * width * rise)
        return self.high_us - math.sqrt((1.0 - u) * width * (width - rise))

    def _inverse_array(self, u: NDArray[np.float64]) -> NDArray[np.float64]:
        width = self.high_us - self.low_us
        rise = self.mode_us - self.low_us
        rising = self.low_us + np.sqrt(u * width * rise)
        return np.where(u * width < rise, rising, self.high_us - np.sqrt((1.0 - u) * width * (width - rise)))

    def _span(self) -> tuple[int, int]:
        return self.low_us, self.high_us


@dataclass(frozen=True, slots=True)
class Normal(Delay):
    """A normal distribution cut off below `low_us` and above `high_us`.

    Parameters
    ----------
    mean_us : int
        Mean before the cut, in microseconds; it lies inside the bounds, and is the mode after the cut.
    sd_us : float
        Standard deviation before the cut, in microseconds, over 0.
    low_us, high_us : int
        Shortest and longest time in microseconds.

    Raises
    ------
    InputError
        If a time is not a whole number from 0 to ``MAX_US``, the order is not low, mean, high, or the
        standard deviation is not a finite number over 0; all mistakes at once.

    Examples
    --------
    >>> Normal(50_000, 5_000, 40_000, 60_000).at(0.5)
    50000
    """

    mean_us: int
    sd_us: float
    low_us: int
    high_us: int

    def __post_init__(self) -> None:
        errors = ErrorList()
        take_times(self, errors, "low_us", "mean_us", "high_us")
        take_spread(self, errors, "sd_us", MAX_US, "use Fixed for a time without spread")
        errors.raise_if_any()

    @property
    def nominal_us(self) -> int:
        """The mean asked for, which is the mode after the cut."""
        return self.mean_us

    def _inverse(self, u: float) -> float:
        z_low = (self.low_us - self.mean_us) / self.sd_us
        z_high = (self.high_us - self.mean_us) / self.sd_us
        z = _between(u, z_low, z_high)
        if z <= z_low:
            return self.low_us
        return self.high_us if z >= z_high else self.mean_us + self.sd_us * z

    def _inverse_array(self, u: NDArray[np.float64]) -> NDArray[np.float64]:
        z_low = (self.low_us - self.mean_us) / self.sd_us
        z_high = (self.high_us - self.mean_us) / self.sd_us
        z = _all_between(u, z_low, z_high)
        inside = self.mean_us + self.sd_us * np.clip(z, z_low, z_high)
        return np.where(z <= z_low, self.low_us, np.where(z >= z_high, self.high_us, inside))

    def _span(self) -> tuple[int, int]:
        return self.low_us, self.high_us


@dataclass(frozen=True, slots=True)
class LogNormal(Delay):
    """A log-normal distribution cut off below `low_us` and above `high_us`.

    Parameters
    ----------
    median_us : int
        Median before the cut, in microseconds, over 0 and inside the bounds.
    sigma : float
        Standard deviation of the natural logarithm, over 0, at most ``MAX_SIGMA``.
    low_us, high_us : int
        Shortest and longest time in microseconds.

    Raises
    ------
    InputError
        If a time is not a whole number from 0 to ``MAX_US``, the median is 0, the order is not low,
        median, high, or sigma is out of bounds; all mistakes at once.

    Examples
    --------
    >>> LogNormal(20_000, 0.5, 0, 1_000_000).nominal_us
    20000
    """

    median_us: int
    sigma: float
    low_us: int
    high_us: int

    def __post_init__(self) -> None:
        errors = ErrorList()
        take_times(self, errors, "low_us", "median_us", "high_us")
        if whole_us(self.median_us) == 0:
            errors.add("LogNormal median_us", self.median_us, "a time over 0 (its logarithm is taken)")
        take_spread(self, errors, "sigma", MAX_SIGMA, "use Fixed for a time without spread")
        errors.raise_if_any()

    @property
    def nominal_us(self) -> int:
        """The median asked for (before the cut)."""
        return self.median_us

    def _inverse(self, u: float) -> float:
        z_low = math.log(self.low_us / self.median_us) / self.sigma if self.low_us else -math.inf
        z_high = math.log(self.high_us / self.median_us) / self.sigma
        z = _between(u, z_low, z_high)
        if z <= z_low:
            return self.low_us
        return self.high_us if z >= z_high else self.median_us * math.exp(self.sigma * z)

    def _inverse_array(self, u: NDArray[np.float64]) -> NDArray[np.float64]:
        z_low = math.log(self.low_us / self.median_us) / self.sigma if self.low_us else -math.inf
        z_high = math.log(self.high_us / self.median_us) / self.sigma
        z = _all_between(u, z_low, z_high)
        inside = self.median_us * np.exp(self.sigma * np.clip(z, z_low, z_high))
        return np.where(z <= z_low, self.low_us, np.where(z >= z_high, self.high_us, inside))

    def _span(self) -> tuple[int, int]:
        return self.low_us, self.high_us


@dataclass(frozen=True, slots=True)
class Empirical(Delay):
    """Times that were observed, each one equally likely.

    Parameters
    ----------
    sample_us : tuple of int
        Times in microseconds, at least one, in any order; kept sorted, so that order changes nothing.

    Raises
    ------
    InputError
        If the sample is empty or a time is not a whole number from 0 to ``MAX_US``; all mistakes at once.

    Examples
    --------
    >>> measured = Empirical((52_000, 48_000, 50_000))
    >>> [measured.at(u) for u in (0.0, 0.5, 0.99)]
    [48000, 50000, 52000]
    """

    sample_us: tuple[int, ...]

    def __post_init__(self) -> None:
        sample: object = self.sample_us
        if not isinstance(sample, (Sequence, np.ndarray)) or isinstance(sample, (str, bytes)):
            raise reject("Empirical sample_us", sample, "a sequence of times in microseconds")
        errors = ErrorList()
        given = tuple(sample)
        if not given:
            errors.add("Empirical sample_us", given, "at least one time")
        whole = [whole_us(value) for value in given]
        for place, (value, time) in enumerate(zip(given, whole, strict=True)):
            if time is None:
                errors.add(f"Empirical sample_us[{place}]", value, A_TIME)
        errors.raise_if_any()
        object.__setattr__(self, "sample_us", tuple(sorted(time for time in whole if time is not None)))

    @property
    def nominal_us(self) -> int:
        """The median; of an even sample the upper one of the two in the middle."""
        return self.at(0.5)

    def _inverse(self, u: float) -> float:
        size = len(self.sample_us)
        return self.sample_us[min(int(u * size), size - 1)]

    def _inverse_array(self, u: NDArray[np.float64]) -> NDArray[np.float64]:
        size = len(self.sample_us)
        return np.array(self.sample_us, dtype=np.float64)[np.minimum((u * size).astype(np.intp), size - 1)]

    def _span(self) -> tuple[int, int]:
        return self.sample_us[0], self.sample_us[-1]


def _below(z: float) -> float:
    """Standard normal distribution function, without loss of digits in the lower tail."""
    return 0.5 * math.erfc(-z / math.sqrt(2.0))


def _between(u: float, z_low: float, z_high: float) -> float:
    """Inverse of the standard normal distribution cut to z_low..z_high, where z_low <= 0 <= z_high.

    Each half is computed from its own tail, so neither loses digits.
    """
    under, over = _below(z_low), _below(-z_high)
    inside = 1.0 - under - over
    lower = under + u * inside
    if lower <= 0.0:
        return z_low
    if lower <= 0.5:
        return _STANDARD.inv_cdf(lower)
    return -_STANDARD.inv_cdf(min(over + (1.0 - u) * inside, 0.5))


def _all_between(u: NDArray[np.float64], z_low: float, z_high: float) -> NDArray[np.float64]:
    """The same for many numbers."""
    from scipy.special import ndtri  # heavy: only when such a delay is drawn in bulk

    under, over = _below(z_low), _below(-z_high)
    inside = 1.0 - under - over
    lower = under + u * inside
    upper = np.minimum(over + (1.0 - u) * inside, 0.5)
    z = np.where(lower <= 0.5, ndtri(np.maximum(lower, 0.0)), -ndtri(upper))
    return np.where(lower <= 0.0, z_low, z)
