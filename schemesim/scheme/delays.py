"""Times that are fixed or random (rule R19).

A delay turns one uniform number into one time, through the inverse of its
distribution function. It holds no state and draws nothing itself: who asks twice
with the same uniform gets the same time, so the time of a block stays put within
a run and is shared by every engine and every variant.

All times are whole microseconds (rule R1); results are rounded to the nearest.

========== =============================== ==================================
kind       distribution                    nominal value (nothing random)
========== =============================== ==================================
Fixed      one value                       that value
Uniform    flat from low to high           the middle (mean and median)
Triangular low, mode, high                 the mode
Normal     truncated to low..high          the mean asked for (the mode)
LogNormal  truncated to low..high          the median asked for
Empirical  a sample, each value alike      the median (the upper one of two)
========== =============================== ==================================
"""

from __future__ import annotations

import math
import operator
from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import NormalDist
from typing import TYPE_CHECKING, Any

import numpy as np

from schemesim.errors import ErrorList, reject
from schemesim.ticks import MAX_MS, US_PER_MS, from_ms

if TYPE_CHECKING:
    from numpy.typing import NDArray

MAX_US = int(MAX_MS * US_PER_MS)
"""Longest time accepted, in microseconds."""

MAX_SIGMA = 10.0
"""Largest log-standard deviation accepted (more is a slip of units)."""

_STANDARD = NormalDist()
_A_TIME = f"a whole number of microseconds from 0 to {MAX_US}"


class Delay(ABC):
    """A time that is fixed, or random through its inverse distribution function.

    Examples
    --------
    >>> opening = Uniform(40_000, 50_000)
    >>> opening.nominal_us, opening.at(0.25), opening.is_fixed
    (45000, 42500, False)
    """

    __slots__ = ()

    @property
    @abstractmethod
    def nominal_us(self) -> int:
        """The time in microseconds when nothing is random; see the table of the module."""

    @property
    def is_fixed(self) -> bool:
        """Whether every uniform gives the same time."""
        low, high = self._span()
        return low == high

    @abstractmethod
    def _inverse(self, u: float) -> float:
        """Inverse distribution function in microseconds, before rounding."""

    @abstractmethod
    def _span(self) -> tuple[int, int]:
        """Shortest and longest time possible."""

    def at(self, u: float) -> int:
        """The time at a uniform number.

        Parameters
        ----------
        u : float
            From 0 (included) to 1 (excluded).

        Returns
        -------
        int
            The time in microseconds, zero or more; it never falls as `u` rises.

        Raises
        ------
        InputError
            If `u` is outside [0, 1) or NaN.
        """
        if not 0.0 <= u < 1.0:
            raise reject("uniform number", u, "a number from 0 (included) to 1 (excluded)")
        low, high = self._span()
        if low == high:
            return low
        return min(max(round(self._inverse(float(u))), low), high)

    def at_array(self, u: NDArray[np.float64]) -> NDArray[np.int64]:
        """The times at many uniform numbers, in an array of the same shape.

        Element by element exactly what :meth:`at` gives: it is the same arithmetic, since
        vectorised logarithms may differ from scalar ones in the last digit.

        Raises
        ------
        InputError
            If any element is outside [0, 1) or NaN.
        """
        flat = np.asarray(u, dtype=np.float64)
        times = np.fromiter((self.at(x) for x in flat.ravel().tolist()), dtype=np.int64, count=flat.size)
        return times.reshape(flat.shape)


@dataclass(frozen=True, slots=True)
class Fixed(Delay):
    """Always the same time.

    Parameters
    ----------
    us : int
        The time in microseconds.

    Raises
    ------
    InputError
        If it is not a whole number from 0 to ``MAX_US``.

    Examples
    --------
    >>> Fixed(20_000).at(0.9)
    20000
    """

    us: int

    def __post_init__(self) -> None:
        errors = ErrorList()
        _take_times(self, errors, "us")
        errors.raise_if_any()

    @property
    def nominal_us(self) -> int:
        """The time itself."""
        return self.us

    def _inverse(self, u: float) -> float:  # noqa: ARG002 - the same for every u
        return self.us

    def _span(self) -> tuple[int, int]:
        return self.us, self.us


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
        _take_times(self, errors, "low_us", "high_us")
        errors.raise_if_any()

    @property
    def nominal_us(self) -> int:
        """The middle: mean and median."""
        return self.at(0.5)

    def _inverse(self, u: float) -> float:
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
        _take_times(self, errors, "low_us", "mode_us", "high_us")
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
        _take_times(self, errors, "low_us", "mean_us", "high_us")
        _take_spread(self, errors, "sd_us", MAX_US, "use Fixed for a time without spread")
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
        _take_times(self, errors, "low_us", "median_us", "high_us")
        if _whole(self.median_us) == 0:
            errors.add("LogNormal median_us", self.median_us, "a time over 0 (its logarithm is taken)")
        _take_spread(self, errors, "sigma", MAX_SIGMA, "use Fixed for a time without spread")
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
        whole = [_whole(value) for value in given]
        for place, (value, time) in enumerate(zip(given, whole, strict=True)):
            if time is None:
                errors.add(f"Empirical sample_us[{place}]", value, _A_TIME)
        errors.raise_if_any()
        object.__setattr__(self, "sample_us", tuple(sorted(time for time in whole if time is not None)))

    @property
    def nominal_us(self) -> int:
        """The median; of an even sample the upper one of the two in the middle."""
        return self.at(0.5)

    def _inverse(self, u: float) -> float:
        size = len(self.sample_us)
        return self.sample_us[min(int(u * size), size - 1)]

    def _span(self) -> tuple[int, int]:
        return self.sample_us[0], self.sample_us[-1]


def as_delay(value: int | Delay) -> Delay:
    """A delay from whole microseconds, or the delay itself.

    Parameters
    ----------
    value : int or Delay
        Time in microseconds, or a delay that is passed through.

    Raises
    ------
    InputError
        If it is neither, or a time out of bounds.

    Examples
    --------
    >>> as_delay(30_000)
    Fixed(us=30000)
    """
    if isinstance(value, Delay):
        return value
    time = _whole(value)
    if time is None:
        raise reject("delay", value, f"{_A_TIME}, or a Delay", tip="fixed_ms takes milliseconds")
    return Fixed(time)


def fixed_ms(ms: float) -> Fixed:
    """A fixed delay from milliseconds.

    Parameters
    ----------
    ms : float
        Time in ms, rounded to the nearest whole microsecond.

    Raises
    ------
    InputError
        If it is negative, NaN, infinite, not a number or too long.

    Examples
    --------
    >>> fixed_ms(12.5)
    Fixed(us=12500)
    """
    return Fixed(from_ms(ms, "delay"))


def _whole(value: object) -> int | None:
    """The value as a plain whole number of microseconds, or None where it is not one in bounds."""
    if isinstance(value, (bool, np.bool_)):
        return None
    number: Any = value
    try:
        time = operator.index(number)
    except TypeError:
        return None
    return time if 0 <= time <= MAX_US else None


def _take_times(delay: Delay, errors: ErrorList, *names: str) -> None:
    """Check times named in rising order; keep them as plain integers."""
    kind = type(delay).__name__
    last: tuple[str, int] | None = None
    for name in names:
        value = getattr(delay, name)
        time = _whole(value)
        if time is None:
            errors.add(f"{kind} {name}", value, _A_TIME)
            continue
        object.__setattr__(delay, name, time)
        if last is not None and time < last[1]:
            errors.add(f"{kind} {name}", time, f"at least {last[0]} = {last[1]}")
        else:
            last = name, time


def _take_spread(delay: Delay, errors: ErrorList, name: str, most: float, tip: str) -> None:
    """Check a spread: a finite number over zero; keep it as a plain float."""
    value = getattr(delay, name)
    is_number = isinstance(value, (int, float, np.integer, np.floating)) and not isinstance(value, bool)
    if not is_number or not 0 < value <= most:
        errors.add(f"{type(delay).__name__} {name}", value, f"a number over 0, at most {most:g}", tip=tip)
        return
    object.__setattr__(delay, name, float(value))


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
