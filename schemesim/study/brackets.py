"""Brackets: a low and a high value between which the true one certainly lies.

Arithmetic on brackets is done in exact fractions and rounded outward once, so what
held before holds after. Where every bound is a ``Fraction`` nothing is rounded at all.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from fractions import Fraction

from schemesim.errors import reject
from schemesim.show.numbers import between

Number = float | Fraction


@dataclass(frozen=True, slots=True)
class Bracket:
    """The true value lies from ``low`` to ``high``, bounds included.

    Raises
    ------
    InputError
        If ``low`` is over ``high`` or one of them is no number.

    Examples
    --------
    >>> cleared = Bracket(0.9997123, 0.9997154)
    >>> cleared
    0.9997123…0.9997154
    >>> cleared.contains(0.999713), cleared.overlaps(Bracket(0.9, 0.95))
    (True, False)
    """

    low: Number
    high: Number

    def __post_init__(self) -> None:
        if not self.low <= self.high:
            raise reject("bracket", (self.low, self.high), "a low bound at or under the high one")

    @property
    def width(self) -> Number:
        """High less low."""
        return 0.0 if self.low == self.high else self.high - self.low

    def contains(self, value: Number) -> bool:
        """Whether a value lies in it."""
        return self.low <= value <= self.high

    def overlaps(self, other: Bracket) -> bool:
        """Whether both can hold the same value: if not, one is certainly less than the other."""
        return self.low <= other.high and other.low <= self.high

    def __add__(self, other: Bracket) -> Bracket:
        return _outward(self, other, [_sum(self.low, other.low)], [_sum(self.high, other.high)])

    def __sub__(self, other: Bracket) -> Bracket:
        return _outward(self, other, [_sum(self.low, -other.high)], [_sum(self.high, -other.low)])

    def __mul__(self, other: Bracket) -> Bracket:
        corners = [_product(a, b) for a in (self.low, self.high) for b in (other.low, other.high)]
        return _outward(self, other, corners, corners)

    def __truediv__(self, other: Bracket) -> Bracket:
        """The quotient; unbounded where the divisor may be zero (both are then taken as zero or more)."""
        if other.low > 0:
            corners = [_quotient(a, b) for a in (self.low, self.high) for b in (other.low, other.high)]
            return _outward(self, other, corners, corners)
        if self.low < 0 or other.low < 0:
            return Bracket(-math.inf, math.inf)
        low = _quotient(self.low, other.high) if other.high > 0 else 0
        return _outward(self, other, [low], [math.inf])

    def __repr__(self) -> str:
        return show(self.low, self.high)


def exactly(value: Number) -> Bracket:
    """A bracket that holds one value."""
    return Bracket(value, value)


def total(brackets: Iterable[Bracket]) -> Bracket:
    """The sum of brackets."""
    out = exactly(Fraction(0))
    for b in brackets:
        out = out + b
    return out


def round_down(value: Fraction) -> float:
    """The largest float at or under an exact value."""
    near = _nearest(value)
    return near if near == -math.inf or Fraction(min(near, _MOST)) <= value else math.nextafter(near, -math.inf)


def round_up(value: Fraction) -> float:
    """The smallest float at or over an exact value."""
    return -round_down(-value)


_MOST = math.nextafter(math.inf, 0.0)


def _nearest(value: Fraction) -> float:
    try:
        return float(value)
    except OverflowError:
        return _MOST if value > 0 else -math.inf


def _infinite(x: Number) -> bool:
    return isinstance(x, float) and math.isinf(x)


def _sum(a: Number, b: Number) -> Number:
    return float(a) + float(b) if _infinite(a) or _infinite(b) else Fraction(a) + Fraction(b)


def _product(a: Number, b: Number) -> Number:
    if a == 0 or b == 0:
        return Fraction(0)
    return float(a) * float(b) if _infinite(a) or _infinite(b) else Fraction(a) * Fraction(b)


def _quotient(a: Number, b: Number) -> Number:
    if _infinite(b):
        return Fraction(0)
    return float(a) if _infinite(a) else Fraction(a) / Fraction(b)


def _outward(a: Bracket, b: Bracket, lows: list[Number], highs: list[Number]) -> Bracket:
    low, high = min(lows), max(highs)
    if any(isinstance(x, float) for x in (a.low, a.high, b.low, b.high)):
        return Bracket(
            round_down(low) if isinstance(low, Fraction) else low,
            round_up(high) if isinstance(high, Fraction) else high,
        )
    return Bracket(low, high)


@dataclass(frozen=True, slots=True)
class Expectation:
    """A mean, as far as it is known.

    Attributes
    ----------
    explored : Number
        E[X; explored]: the sum over what was explored, each value with its probability.
    unexplored : Number
        Mass not explored: no more than this.
    bracket : Bracket
        Holds the mean; its high end is infinite where X has no bound.
    """

    explored: Number
    unexplored: Number
    bracket: Bracket

    def __repr__(self) -> str:
        if self.bracket.high == math.inf:
            return f"{float(self.explored):.6g} explored, {float(self.unexplored):.2g} of the mass unexplored"
        return repr(self.bracket)


def show(low: Number, high: Number) -> str:
    """A bracket in words, its digits cut outward so that what is printed still holds.

    Examples
    --------
    >>> show(0.25, 0.25), show(1.2e-9, 3.1e-9), show(0.0, float("inf"))
    ('0.25', '1.2e-9…3.1e-9', '0…inf')
    """
    return between(float(low), float(high))
