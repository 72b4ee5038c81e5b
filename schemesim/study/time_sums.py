"""Sums of random times: how probable is it that a chain of delays takes longer than some time?

The distributions of the delays are put on a grid twice, every time rounded down and every
time rounded up; the sums are then convolved for both. What is asked of the sum lies between, so each
answer is a bracket. Delays that do not vary are added as they are: where none varies, nothing is rounded at all.

The longest and the earliest of several chains are taken from their distribution functions. Where
chains share a delay they are not independent but associated (each grows with every delay), and
the function of their maximum lies between the product and the least of theirs (J. D. Esary,
F. Proschan, D. W. Walkup, Ann. Math. Statist. 38 (1967) 1466–1474); both are kept as bounds.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from math import ceil, floor

import numpy as np
from numpy.typing import NDArray

from schemesim.scheme.delays import Delay
from schemesim.study.brackets import Bracket

CELLS = 1000
"""Cells of the grid under the widest delay."""

_ROUNDING = 1e-12  # sums of under 10^6 terms of 1 in all, in floating point
_LAST = 1.0 - 2.0**-53  # the last uniform number before 1

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Grid:
    """A time from below and from above: masses at ``start_us``, ``start_us + step_us`` …"""

    start_us: int
    step_us: int
    down: Floats
    up: Floats

    @property
    def low_us(self) -> int:
        """No shorter than this."""
        return self.start_us + self.step_us * int(np.flatnonzero(self.down)[0])

    @property
    def high_us(self) -> int:
        """No longer than this."""
        return self.start_us + self.step_us * int(np.flatnonzero(self.up)[-1])

    def exceeds(self, t_us: int) -> Bracket:
        """The probability that it is longer than a time."""
        first = max(floor((t_us - self.start_us) / self.step_us) + 1, 0)
        low, high = float(self.down[first:].sum()), float(self.up[first:].sum())
        if self.down.size == 1 or high == 0.0:
            return Bracket(low, high)
        if low > 0 and not self.down[:first].any():
            return Bracket(1.0, 1.0)
        return Bracket(max(low - _ROUNDING, 0.0), min(high + _ROUNDING, 1.0))

    def plus(self, other: Grid) -> Grid:
        """The sum of two independent times."""
        down, up = np.convolve(self.down, other.down), np.convolve(self.up, other.up)
        return Grid(self.start_us + other.start_us, self.step_us, down, up)

    def negative(self) -> Grid:
        """Its negative: what was rounded down is rounded up."""
        end = self.start_us + self.step_us * (self.down.size - 1)
        return Grid(-end, self.step_us, self.up[::-1], self.down[::-1])

    def _functions(self, start_us: int, size: int) -> tuple[Floats, Floats]:
        """Distribution functions of both on a grid that begins elsewhere."""
        found = []
        for masses, offset in (
            (self.down, floor((self.start_us - start_us) / self.step_us)),
            (self.up, ceil((self.start_us - start_us) / self.step_us)),
        ):
            placed = np.zeros(size)
            placed[offset : offset + masses.size] = masses
            found.append(np.minimum(np.cumsum(placed), 1.0))
        return found[0], found[1]


def point(t_us: int, step_us: int = 1) -> Grid:
    """A time that does not vary."""
    return Grid(t_us, step_us, np.ones(1), np.ones(1))


def latest(grids: list[Grid], *, independent: bool) -> Grid:
    """The longest of several times; where they are not independent but associated, both bounds are kept."""
    return _extreme(grids, independent, longest=True)


def earliest(grids: list[Grid], *, independent: bool) -> Grid:
    """The shortest of several times."""
    return _extreme([g.negative() for g in grids], independent, longest=False)


def _extreme(grids: list[Grid], independent: bool, *, longest: bool) -> Grid:
    if len(grids) == 1:
        return grids[0] if longest else grids[0].negative()
    step = grids[0].step_us
    if all(g.down.size == 1 for g in grids):
        found = point(max(g.start_us for g in grids), step)
        return found if longest else found.negative()
    start = min(g.start_us for g in grids)
    size = max(ceil((g.start_us - start) / step) + g.down.size for g in grids) + 1
    functions = [g._functions(start, size) for g in grids]
    least = np.min([f for f, _ in functions], axis=0)
    product = np.prod([f for f, _ in functions], axis=0)
    down = product if independent else least
    up = np.prod([f for _, f in functions], axis=0)
    out = Grid(start, step, np.diff(down, prepend=0.0), np.diff(up, prepend=0.0))
    return out if longest else out.negative()


@dataclass(frozen=True)
class Span:
    """A sum of independent delays.

    Parameters
    ----------
    parts : tuple of Delay or Span
        Added.
    longest, shortest : tuple of tuple of Delay or Span
        Chains of which the longest, and the shortest, is added; () for none.
    less : tuple of Delay
        Taken away.
    shared : bool
        The chains of ``longest`` or ``shortest`` share delays, so the result is bounded only.

    Examples
    --------
    >>> from schemesim.scheme.delays import Fixed
    >>> from schemesim.scheme.distributions import Uniform
    >>> opening_and_reset = Span((Uniform(40_000, 60_000), Fixed(20_000)))
    >>> opening_and_reset.nominal_us
    70000
    >>> opening_and_reset.grid().exceeds(80_000), opening_and_reset.grid().exceeds(59_999)
    (0, 1)
    """

    parts: Links = ()
    longest: tuple[Links, ...] = ()
    shortest: tuple[Links, ...] = ()
    less: tuple[Delay, ...] = ()
    shared: bool = False

    @property
    def delays(self) -> tuple[Delay, ...]:
        """Every delay in it."""
        links = (d for chain in (self.parts, *self.longest, *self.shortest) for d in chain)
        return (*(x for d in links for x in (d.delays if isinstance(d, Span) else (d,))), *self.less)

    @property
    def nominal_us(self) -> int:
        """The sum where nothing is random."""

        def of(chain: Links) -> int:
            return sum(d.nominal_us for d in chain)

        found = of(self.parts) - of(self.less)
        if self.longest:
            found += max(of(c) for c in self.longest)
        return found + (min(of(c) for c in self.shortest) if self.shortest else 0)

    def plus(self, *parts: Delay, less: tuple[Delay, ...] = ()) -> Span:
        """With more delays added, or taken away."""
        return Span((*self.parts, *parts), self.longest, self.shortest, (*self.less, *less), self.shared)

    def grid(self, cells: int = CELLS) -> Grid:
        """Its distribution, from below and from above."""
        width = max((high - low for low, high in map(_span, self.delays)), default=0)
        return self._on(max(1, width // cells))

    def _on(self, step: int) -> Grid:
        def of(chain: Links) -> Grid:
            total = point(0, step)
            for d in chain:
                total = total.plus(d._on(step) if isinstance(d, Span) else _on_grid(d, step))
            return total

        total = of(self.parts)
        if self.longest:
            total = total.plus(latest([of(c) for c in self.longest], independent=not self.shared))
        if self.shortest:
            total = total.plus(earliest([of(c) for c in self.shortest], independent=not self.shared))
        for d in self.less:
            total = total.plus(_on_grid(d, step).negative())
        return total


Links = tuple[Delay | Span, ...]
"""A chain of delays, each with one time or with that of the longest or shortest of several ways."""


def _span(delay: Delay) -> tuple[int, int]:
    return delay.at(0.0), delay.at(_LAST)


@lru_cache(maxsize=256)
def _on_grid(delay: Delay, step_us: int) -> Grid:
    low, high = _span(delay)
    if low == high:
        return point(low, step_us)
    count = ceil((high - low) / step_us) + 1
    edges = [low + i * step_us for i in range(count)]
    at_or_under = np.array([_p_at_most(delay, t) for t in edges])
    under = at_or_under if step_us == 1 else np.array([*(_p_at_most(delay, t - 1) for t in edges), 1.0])
    down = np.diff(at_or_under, prepend=0.0) if step_us == 1 else np.diff(under)
    return Grid(low, step_us, down, np.diff(at_or_under, prepend=0.0))


def _p_at_most(delay: Delay, t_us: int) -> float:
    """P(delay <= t): the last uniform number that still gives no more."""
    if delay.at(_LAST) <= t_us:
        return 1.0
    if delay.at(0.0) > t_us:
        return 0.0
    low, high = 0.0, 1.0
    while high - low > 1e-15:
        middle = (low + high) / 2
        if middle in (low, high):
            break
        if delay.at(middle) <= t_us:
            low = middle
        else:
            high = middle
    return low
