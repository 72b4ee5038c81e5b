"""Elements that measure: overcurrent, directional, differential, voltage.

Every element answers one question of the phasors it is given: by how many times its
setting it is exceeded (`multiple`, 1 at the setting, 0 where it looks the other way or
measures nothing). It picks up at 1 and drops out below its drop-out ratio. Settings are
primary values.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass
from enum import StrEnum
from typing import Protocol

from schemesim.errors import ErrorList
from schemesim.plant.net_case import Phasors
from schemesim.plant.terminals import Terminal
from schemesim.scheme.phasor_quantities import Quantities, phases_of

MOST = 1e9
"""Multiple of a quantity without a bound, such as 1/impedance at the CT itself."""


class Element(Protocol):
    """What measures."""

    @property
    def drop_out(self) -> float:
        """Multiple below which it drops out, 1 or less."""

    def multiple(self, q: Quantities) -> float:
        """Quantity ÷ setting."""

    @property
    def looks_at(self) -> tuple[tuple[str, ...], tuple[str, ...]]:
        """Names of the CTs (or sources) and of the VTs it stands on."""


class Part(StrEnum):
    """Which part of a current or voltage is compared with the setting."""

    PHASE = "phase"
    """The greatest of the phases."""
    RESIDUAL = "residual"
    """Three times the zero sequence."""
    NEGATIVE = "negative"
    """The negative sequence."""
    BETWEEN = "between"
    """The smallest voltage between two phases (over-voltage: the greatest)."""


class Polarising(StrEnum):
    """What tells a directional element forward from backward."""

    NEGATIVE = "negative"
    ZERO = "zero"
    MEMORY = "memory"
    """Positive sequence, against the voltage before the fault."""


@dataclass(frozen=True, slots=True)
class Looking:
    """The direction of an element.

    Forward, the negative- (and zero-) sequence voltage is −Z·I of what lies behind; backward, +Z·I
    of what lies ahead. So the sign of Re[−V·conj(I·e^{jθ})] tells, θ the angle of the impedances;
    with memory it is that of Re[V·conj(I·e^{jθ})] of the positive sequence, V before the fault.

    Parameters
    ----------
    vt : str
    by : Polarising
    forward : bool
        Into the inner side of the CTs; else out of it.
    angle_deg : float
        Characteristic angle.

    Examples
    --------
    >>> Looking("B1.VT", Polarising.NEGATIVE, forward=False).angle_deg
    75.0
    """

    vt: str
    by: Polarising = Polarising.MEMORY
    forward: bool = True
    angle_deg: float = 75.0

    def sees(self, q: Quantities, current: Phasors) -> bool:
        """Whether a current flows the way it looks; not without a voltage to tell by."""
        turned = cmath.rect(1.0, math.radians(self.angle_deg))
        if self.by is Polarising.MEMORY:
            torque = (q.remembered(self.vt) * (current[1] * turned).conjugate()).real
        else:
            n = 2 if self.by is Polarising.NEGATIVE else 0
            torque = -(q.voltage(self.vt)[n] * (current[n] * turned).conjugate()).real
        return torque > 0 if self.forward else torque < 0


@dataclass(frozen=True, slots=True, kw_only=True)
class Overcurrent:
    """Overcurrent of phases, residual or negative sequence; directional with ``looking``.

    Parameters
    ----------
    terminals : tuple of Terminal
        CTs whose currents are summed into their inner sides.
    pick_up_a : float
        Primary amperes.
    part : Part
    drop_out : float
        Ratio of drop-out to pick-up.
    looking : Looking or None

    Examples
    --------
    >>> element = Overcurrent(terminals=(Terminal("CT1", "L1"),), pick_up_a=600.0, part=Part.RESIDUAL)
    >>> element.looks_at
    (('CT1',), ())
    """

    terminals: tuple[Terminal, ...]
    pick_up_a: float
    part: Part = Part.PHASE
    drop_out: float = 0.95
    looking: Looking | None = None

    def __post_init__(self) -> None:
        check_settings("overcurrent element", {"pick_up_a": self.pick_up_a}, self.drop_out)

    def multiple(self, q: Quantities) -> float:
        """See :class:`Element`."""
        current = q.current(self.terminals)
        if self.looking is not None and not self.looking.sees(q, current):
            return 0.0
        return size_of(current, self.part) / self.pick_up_a

    @property
    def looks_at(self) -> tuple[tuple[str, ...], tuple[str, ...]]:
        """See :class:`Element`."""
        return tuple(t.ct for t in self.terminals), () if self.looking is None else (self.looking.vt,)


@dataclass(frozen=True, slots=True, kw_only=True)
class Biased:
    """Differential with bias: the sum of the currents into a zone against half the sum of their sizes.

    It operates in a phase where the differential current exceeds ``pick_up_a`` and ``slope`` times
    the bias current; the multiple is that of the greater of the two.

    Parameters
    ----------
    terminals : tuple of Terminal
        Everything that bounds the zone, and the sources inside it by name.
    pick_up_a : float
        Primary amperes, of the terminals whose ratio is 1.
    slope : float
    drop_out : float
    ratios : tuple of float
        Factor of each terminal's current, to bring sides of different voltage together; empty: all 1.
    zero_sequence : bool
        False takes the zero sequence out, as across a transformer.
    share_of : str
        A CT: then the element counts only where that CT carries ``pick_up_a`` itself or the
        greatest part, so that what is left without its core can be told.

    Examples
    --------
    >>> zone = (Terminal("CT1", "L1"), Terminal("CT2", "L1"))
    >>> Biased(terminals=zone, pick_up_a=120.0, slope=0.3).drop_out
    0.95
    """

    terminals: tuple[Terminal, ...]
    pick_up_a: float
    slope: float = 0.3
    drop_out: float = 0.95
    ratios: tuple[float, ...] = ()
    zero_sequence: bool = True
    share_of: str = ""

    def __post_init__(self) -> None:
        check_settings("differential element", {"pick_up_a": self.pick_up_a, "slope": self.slope}, self.drop_out)

    def multiple(self, q: Quantities) -> float:
        """See :class:`Element`."""
        ratios = self.ratios or (1.0,) * len(self.terminals)
        currents = []
        for t, ratio in zip(self.terminals, ratios, strict=True):
            zero, positive, negative = q.at(t)
            kept = zero if self.zero_sequence else 0j
            currents.append(phases_of((kept * ratio, positive * ratio, negative * ratio)))
        if self.share_of:
            size = {t.ct: max(map(abs, i)) for t, i in zip(self.terminals, currents, strict=True)}
            own = size.get(self.share_of, 0.0)
            if own < self.pick_up_a and own < max(size.values(), default=0.0):
                return 0.0
        best = 0.0
        for n in range(3):
            through = 0.5 * sum(abs(i[n]) for i in currents)
            setting = max(self.pick_up_a, self.slope * through)
            best = max(best, abs(sum(i[n] for i in currents)) / setting)
        return best

    @property
    def looks_at(self) -> tuple[tuple[str, ...], tuple[str, ...]]:
        """See :class:`Element`."""
        return tuple(t.ct for t in self.terminals), ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Voltage:
    """Under- or overvoltage at a VT.

    Parameters
    ----------
    vt : str
    setting_v : float
        Primary volts: between phases for ``Part.BETWEEN``, to earth for ``Part.PHASE``.
    under : bool
        Picks up below the setting; the multiple is then setting ÷ voltage.

    Examples
    --------
    >>> Voltage(vt="B1.VT", setting_v=0.7 * 132e3).looks_at
    ((), ('B1.VT',))
    """

    vt: str
    setting_v: float
    under: bool = True
    part: Part = Part.BETWEEN
    drop_out: float = 0.95

    def __post_init__(self) -> None:
        check_settings("voltage element", {"setting_v": self.setting_v}, self.drop_out)

    def multiple(self, q: Quantities) -> float:
        """See :class:`Element`."""
        voltage = q.voltage(self.vt)
        if self.part in (Part.PHASE, Part.BETWEEN):
            a, b, c = phases_of(voltage)
            sizes = [abs(a), abs(b), abs(c)] if self.part is Part.PHASE else [abs(a - b), abs(b - c), abs(c - a)]
            size = min(sizes) if self.under else max(sizes)
        else:
            size = size_of(voltage, self.part)
        if self.under:
            return min(MOST, self.setting_v / size) if size > 0 else MOST
        return size / self.setting_v

    @property
    def looks_at(self) -> tuple[tuple[str, ...], tuple[str, ...]]:
        """See :class:`Element`."""
        return (), (self.vt,)


@dataclass(frozen=True, slots=True)
class Either:
    """The most sensitive of several elements: phase and residual detectors of one breaker-failure relay."""

    elements: tuple[Element, ...]

    @property
    def drop_out(self) -> float:
        """The lowest drop-out of its elements."""
        return min((e.drop_out for e in self.elements), default=1.0)

    def multiple(self, q: Quantities) -> float:
        """See :class:`Element`."""
        return max((e.multiple(q) for e in self.elements), default=0.0)

    @property
    def looks_at(self) -> tuple[tuple[str, ...], tuple[str, ...]]:
        """See :class:`Element`."""
        cts = dict.fromkeys(ct for e in self.elements for ct in e.looks_at[0])
        return tuple(cts), tuple(dict.fromkeys(vt for e in self.elements for vt in e.looks_at[1]))


def size_of(sequence: Phasors, part: Part) -> float:
    """The size of a part of a current or voltage to earth."""
    if part is Part.RESIDUAL:
        return 3.0 * abs(sequence[0])
    if part is Part.NEGATIVE:
        return abs(sequence[2])
    a, b, c = phases_of(sequence)
    if part is Part.BETWEEN:
        return max(abs(a - b), abs(b - c), abs(c - a))
    return max(abs(a), abs(b), abs(c))


def check_settings(subject: str, values: dict[str, float], drop_out: float) -> None:
    """Settings are finite and over zero, a drop-out ratio over 0 and at most 1.

    Raises
    ------
    InputError
        With every mistake.
    """
    errors = ErrorList()
    for what, value in values.items():
        if not 0 < value < math.inf:
            errors.add(f"{what} of {subject}", value, "a finite number over zero")
    if not 0 < drop_out <= 1:
        errors.add(f"drop_out of {subject}", drop_out, "a ratio over 0, at most 1")
    errors.raise_if_any()
