"""Times that are fixed or random (rule R19).

A delay turns one uniform number into one time, through the inverse of its
distribution function. It holds no state and draws nothing itself: who asks twice
with the same uniform gets the same time, so the time of a block stays put within
a run and is shared by every engine and every variant.

All times are whole microseconds (rule R1). Here are what every delay answers and
the one that never changes, `Fixed`, whose nominal value is its only one; the random
kinds stand in `schemesim.scheme.distributions`.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass, fields
from typing import TYPE_CHECKING, Any

import numpy as np

from schemesim.errors import ErrorList, reject
from schemesim.scheme.delay_checks import A_TIME, take_times, whole_us
from schemesim.ticks import from_ms, looks_like_seconds

if TYPE_CHECKING:
    from numpy.typing import NDArray


class Delay(ABC):
    """A time that is fixed, or random through its inverse distribution function.

    Examples
    --------
    >>> from schemesim.scheme.distributions import Uniform
    >>> opening = Uniform(40_000, 50_000)
    >>> opening.nominal_us, opening.at(0.25), opening.is_fixed
    (45000, 42500, False)
    """

    __slots__ = ()

    @property
    @abstractmethod
    def nominal_us(self) -> int:
        """The time in microseconds when nothing is random; the kind says which."""

    @property
    def is_fixed(self) -> bool:
        """Whether every uniform gives the same time."""
        low, high = self._span()
        return low == high

    @abstractmethod
    def _inverse(self, u: float) -> float:
        """Inverse distribution function in microseconds, before rounding."""

    def _inverse_array(self, u: NDArray[np.float64]) -> NDArray[np.float64]:
        """The same for many uniforms, but for rounding errors well within ``_margin_us`` of :meth:`at_array`."""
        return np.fromiter((self._inverse(x) for x in u.tolist()), dtype=np.float64, count=u.size)

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

        Element by element exactly what :meth:`at` gives. Vectorised logarithms and exponentials may
        differ from scalar ones in the last digits, so what comes near the middle between
        two microseconds is computed once more, one by one.

        Raises
        ------
        InputError
            If any element is outside [0, 1) or NaN.
        """
        shaped = np.asarray(u, dtype=np.float64)
        flat = shaped.ravel()
        outside = ~((flat >= 0.0) & (flat < 1.0))
        if outside.any():
            raise reject("uniform number", float(flat[outside][0]), "a number from 0 (included) to 1 (excluded)")
        low, high = self._span()
        if low == high:
            return np.full(shaped.shape, low, dtype=np.int64)
        values = self._inverse_array(flat)
        times = np.clip(np.rint(values), low, high).astype(np.int64)
        (doubtful,) = np.nonzero(np.abs(values - np.floor(values) - 0.5) <= _margin_us(high))
        for place in doubtful.tolist():
            times[place] = self.at(float(flat[place]))
        return times.reshape(shaped.shape)


def _margin_us(longest_us: int) -> float:
    """How near to the middle between two microseconds a time is computed once more: far over any rounding error.

    Both ways round each of some ten operations to 2**-53, and the inverse of the normal distribution
    to a few 1e-15 of itself; a log-normal may multiply that by its exponent, 400 at most.
    """
    return 1e-3 + 1e-11 * longest_us


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
        take_times(self, errors, "us")
        errors.raise_if_any()

    @property
    def nominal_us(self) -> int:
        """The time itself."""
        return self.us

    def _inverse(self, u: float) -> float:  # noqa: ARG002 - the same for every u
        return self.us

    def _span(self) -> tuple[int, int]:
        return self.us, self.us


def check_delays(owner: Any) -> None:
    """Refuse a dataclass whose fields of type ``Delay`` hold something else, with every such field.

    Raises
    ------
    InputError
    """
    errors = ErrorList()
    for f in fields(owner):
        value = getattr(owner, f.name)
        if not str(f.type).startswith("Delay") or isinstance(value, Delay) or (value is None and "None" in f.type):
            continue
        number = isinstance(value, (int, float)) and not isinstance(value, bool)
        tip = f"fixed_ms({value:g}) is {value:g} ms" if number else ""
        errors.add(f"{f.name} of {type(owner).__name__}", value, "a Delay", tip=tip)
    errors.raise_if_any()


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
    time = whole_us(value)
    if time is None:
        raise reject("delay", value, f"{A_TIME}, or a Delay", tip="fixed_ms takes milliseconds")
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
        If it is negative, NaN, infinite, not a number or too long, or over zero and under 1 ms: nothing in a
        protection scheme is so quick, so it is meant in seconds (``Fixed`` takes microseconds, any of them).

    Examples
    --------
    >>> fixed_ms(12.5)
    Fixed(us=12500)
    >>> fixed_ms(0.02)  # doctest: +ELLIPSIS
    Traceback (most recent call last):
    ...
    schemesim.errors.InputError: delay: got 0.02, expected 0, or a time of 1 ms or more (is it in seconds? 0.02 s ...)
    """
    time = Fixed(from_ms(ms, "delay"))
    tip = looks_like_seconds(ms)
    if tip:
        raise reject("delay", ms, "0, or a time of 1 ms or more", tip=tip)
    return time
