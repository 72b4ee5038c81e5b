"""Distance elements: mho and quadrilateral, residual compensation, fault-loop selection."""

from __future__ import annotations

import cmath
import math
from collections.abc import Iterator
from dataclasses import dataclass
from enum import StrEnum

from schemesim.errors import reject
from schemesim.plant.net_case import Phasors
from schemesim.plant.terminals import Terminal
from schemesim.scheme.conditions import Direction
from schemesim.scheme.phasor_elements import MOST, check_settings
from schemesim.scheme.phasor_quantities import A, Quantities, phases_of

_SMALL = 0.1
"""Share of the positive sequence below which a negative or zero sequence does not count."""


class Shape(StrEnum):
    """Form of a distance characteristic."""

    MHO = "mho"
    """A circle through the origin whose diameter is the reach; memory decides the direction."""
    QUADRILATERAL = "quadrilateral"
    """A reactance reach, and a resistive reach on either side of the line's angle."""


@dataclass(frozen=True, slots=True)
class Loop:
    """One measuring loop: its compensated current, its voltage, and that before the fault."""

    name: str
    current: complex
    voltage: complex
    memory: complex


@dataclass(frozen=True, slots=True, kw_only=True)
class Distance:
    """A distance element.

    The impedance of a loop is V/I: between two phases (Va − Vb)/(Ia − Ib), of a phase to earth
    Va/(Ia + k0·3I0) with k0 = (Z0 − Z1)/(3·Z1) of the line. The multiple is the factor by which
    the characteristic could shrink and still hold it. Direction is by the loop's own voltage before the
    fault, so that a fault with no voltage left is told; without it (a lost VT) there is none, and
    what is measured is zero: an element looking both ways operates on current alone.

    Parameters
    ----------
    terminals : tuple of Terminal
        CTs whose currents are summed, into the line.
    vt : str
    reach_ohm : complex
        Positive-sequence impedance of the reach, primary ohm.
    k0 : complex
        Residual compensation; elements to earth measure with it.
    shape : Shape
    resistance_ohm : float
        Resistive reach of a quadrilateral.
    direction : Direction
    least_a : float
        Phase current below which it does not measure.
    drop_out : float

    Notes
    -----
    Loop selection: no zero and no negative sequence is three-phase; no zero sequence is between the
    two phases whose difference is greatest; else the phase in which zero and negative sequence
    agree is the faulted one to earth, or the healthy one of two phases to earth, and the loop of
    smaller impedance decides (common practice). The circle is the static one: memory decides the
    direction and does not widen it.

    Examples
    --------
    >>> zone_1 = Distance(terminals=(Terminal("CT1", "L1"),), vt="B1.VT", reach_ohm=8 + 32j, k0=0.67)
    >>> zone_1.shape, zone_1.direction
    (<Shape.MHO: 'mho'>, <Direction.FORWARD: 'forward'>)
    """

    terminals: tuple[Terminal, ...]
    vt: str
    reach_ohm: complex
    k0: complex = 0j
    shape: Shape = Shape.MHO
    resistance_ohm: float = 0.0
    direction: Direction = Direction.FORWARD
    least_a: float = 1.0
    drop_out: float = 0.95

    def __post_init__(self) -> None:
        check_settings(
            "distance element", {"reach_ohm": abs(self.reach_ohm), "least_a": self.least_a}, self.drop_out
        )
        if self.shape is Shape.QUADRILATERAL and not (0 < self.resistance_ohm < math.inf and self.reach_ohm.imag > 0):
            raise reject(
                "quadrilateral", (self.reach_ohm, self.resistance_ohm), "a reactive and a resistive reach over zero"
            )

    def multiple(self, q: Quantities) -> float:
        """See :class:`schemesim.scheme.phasor_elements.Element`."""
        sign = -1.0 if self.direction is Direction.REVERSE else 1.0
        zero, positive, negative = q.current(self.terminals)
        current = (sign * zero, sign * positive, sign * negative)
        if max(map(abs, phases_of(current))) < self.least_a:
            return 0.0
        return max((self._of(loop) for loop in self.loops(q, current)), default=0.0)

    def loops(self, q: Quantities, current: Phasors) -> Iterator[Loop]:
        """The loops selected for a current."""
        voltage, memory = phases_of(q.voltage(self.vt)), phases_of((0j, q.remembered(self.vt), 0j))
        i, residual = phases_of(current), 3.0 * current[0] * self.k0
        for name in selected(current):
            m, *more = ("abc".index(c) for c in name if c != "n")
            if more:
                n = more[0]
                yield Loop(name, i[m] - i[n], voltage[m] - voltage[n], memory[m] - memory[n])
            else:
                yield Loop(name, i[m] + residual, voltage[m], memory[m])

    def impedances(self, q: Quantities) -> dict[str, complex]:
        """What the loops selected measure, in ohm."""
        current = q.current(self.terminals)
        return {loop.name: loop.voltage / loop.current for loop in self.loops(q, current) if loop.current}

    def _of(self, loop: Loop) -> float:
        if abs(loop.current) < 1e-9:
            return 0.0
        z, reach = loop.voltage / loop.current, self.reach_ohm
        if self.direction is not Direction.BOTH:
            turned = cmath.rect(1.0, cmath.phase(reach))
            if (loop.memory * (loop.current * turned).conjugate()).real <= 0:
                return 0.0
        if abs(z) <= abs(reach) / MOST:
            return MOST
        if self.shape is Shape.QUADRILATERAL:
            slant = z.real - z.imag * reach.real / reach.imag
            if self.direction is Direction.BOTH:
                z = complex(z.real, abs(z.imag))
            share = max(z.imag / reach.imag, abs(slant) / self.resistance_ohm)
            return min(MOST, 1.0 / share) if share > 0 else 0.0
        if self.direction is Direction.BOTH:
            return abs(reach) / abs(z)
        return max(0.0, abs(reach) * math.cos(cmath.phase(z) - cmath.phase(reach)) / abs(z))

    @property
    def looks_at(self) -> tuple[tuple[str, ...], tuple[str, ...]]:
        """See :class:`schemesim.scheme.phasor_elements.Element`."""
        return tuple(t.ct for t in self.terminals), (self.vt,)


def selected(current: Phasors) -> tuple[str, ...]:
    """The loops to measure, by the sequence components of the current.

    Examples
    --------
    >>> selected((0j, -1j, 0j)), selected((0j, -1j, 1j)), selected((-1j, -1j, -1j))
    (('bc',), ('bc',), ('an', 'bc'))
    """
    zero, positive, negative = current
    least = _SMALL * max(map(abs, current))
    if abs(zero) <= least:
        if abs(negative) <= least:
            return ("bc",)
        a, b, c = phases_of((0j, positive, negative))
        sizes = {"ab": abs(a - b), "bc": abs(b - c), "ca": abs(c - a)}
        return (max(sizes, key=lambda name: (round(sizes[name], 9), name)),)
    if abs(negative) <= least:
        return ("an", "bn", "cn")
    turns = {"a": negative, "b": A * negative, "c": A.conjugate() * negative}
    agree = {name: (value * zero.conjugate()).real for name, value in turns.items()}
    phase = max(agree, key=lambda name: (agree[name], name))
    return (f"{phase}n", {"a": "bc", "b": "ca", "c": "ab"}[phase])


def residual_compensation(z1: complex, z0: complex | None) -> complex:
    """k0 = (Z0 − Z1)/(3·Z1) of a line; 0 where its zero sequence is not known.

    Examples
    --------
    >>> residual_compensation(10j, 30j)
    (0.6666666666666666+0j)
    """
    return 0j if z0 is None else (z0 - z1) / (3.0 * z1)
