"""One value from outside, what we make of it, and the difference in units of its tolerance."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from collections.abc import Set as AbstractSet
from dataclasses import dataclass
from enum import StrEnum
from fractions import Fraction

Number = float | Fraction
Value = Number | str | AbstractSet[str] | Mapping[str, Number]
"""A number, a word, a set of names, or a number for each of several names (a whole sequence or whole odds)."""


class Quality(StrEnum):
    """How sure it is that the source says so."""

    PUBLISHED = "published"
    FROM_MEMORY = "from memory"
    PRACTICE = "common practice"
    DERIVED = "derived"
    LIBRARY = "library"


PUBLISHED, MEMORY, PRACTICE, DERIVED, LIBRARY = (
    Quality.PUBLISHED, Quality.FROM_MEMORY, Quality.PRACTICE, Quality.DERIVED, Quality.LIBRARY
)  # fmt: skip


@dataclass(frozen=True)
class Record:
    """A value from outside.

    Attributes
    ----------
    subject, source : str
    quality : Quality
        ``derived``: follows from a definition by arithmetic written beside it; ``library``: computed by a reference
        library on the spot.
    what : str
        What is compared, with its unit.
    value : Value or callable that returns one
    tolerance : float
        How far ours may be from it; half a digit of what is printed in the source as a rule, 0 where it is exact.
    ours : callable
        Computes ours.
    whole : bool
        A whole clearing sequence, or the odds of a whole scheme.
    """

    subject: str
    source: str
    quality: Quality
    what: str
    value: Value | Callable[[], Value]
    tolerance: float
    ours: Callable[[], Value]
    whole: bool = False

    def reference(self) -> Value:
        """The value from outside."""
        return self.value() if callable(self.value) else self.value

    def compared(self) -> Compared:
        """What comes out here, beside it."""
        value, ours = self.reference(), self.ours()
        apart = difference(value, ours)
        units = apart / self.tolerance if self.tolerance else (0.0 if apart == 0 else math.inf)
        return Compared(self, value, ours, apart, units)


@dataclass(frozen=True)
class Compared:
    """A value from outside beside ours.

    Attributes
    ----------
    difference : float
        Of several numbers the largest; infinite where a name stands on one side only.
    units : float
        The difference in units of the tolerance: in tolerance up to 1.
    """

    record: Record
    value: Value
    ours: Value
    difference: float
    units: float

    @property
    def fits(self) -> bool:
        """Whether ours is within the tolerance."""
        return self.units <= 1 + 1e-9


def difference(value: Value, ours: Value) -> float:
    """How far ours is from the value; see :class:`Compared`."""
    if isinstance(value, Mapping):
        if not isinstance(ours, Mapping) or value.keys() != ours.keys():
            return math.inf
        return max((difference(value[name], ours[name]) for name in value), default=0.0)
    if isinstance(value, (str, AbstractSet)) or isinstance(ours, (str, AbstractSet, Mapping)):
        return 0.0 if value == ours else math.inf
    apart = abs(float(Fraction(ours) - Fraction(value))) if _finite(value, ours) else abs(float(ours) - float(value))
    return math.inf if math.isnan(apart) else apart


def _finite(*numbers: Number) -> bool:
    return all(math.isfinite(n) for n in numbers)


def half(printed: str) -> float:
    """Half of the last digit of a printed number.

    Examples
    --------
    >>> half("0.0321"), half("1.1E-2")
    (5e-05, 0.0005)
    """
    digits, _, exponent = printed.upper().partition("E")
    places = len(digits.partition(".")[2])
    return float(f"5E{int(exponent or 0) - places - 1}")
