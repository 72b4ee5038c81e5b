"""What the network equations are asked and what they answer.

A fault is a shunt at a location; a topology is the set of devices (and sources) opened since the state before the
fault. Phasors are sequence components (zero, positive, negative) of phase a, root mean square, in volts and
amperes. Sequence quantities of all places stand in one frame: that of the voltages before the fault, in which the
positive sequence of the earliest named source's voltage level has angle zero.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from typing import Protocol

from schemesim.plant.model import Location

Phasors = tuple[complex, complex, complex]
"""Zero, positive and negative sequence of phase a, in this order."""


class FaultType(StrEnum):
    """Which conductors a fault joins."""

    LLL = "lll"
    """All three phases (with earth or without: it makes no difference)."""
    LL = "ll"
    """Phases b and c."""
    LG = "lg"
    """Phase a and earth."""
    LLG = "llg"
    """Phases b and c, and earth."""


@dataclass(frozen=True, slots=True, order=True)
class ShuntFault:
    """A fault of one type at one place.

    Parameters
    ----------
    location : Location
        Along a line: its position from 0 to 1. In a transformer: below 0.5 the terminals of its first winding, else
        those of its last.
    type : FaultType
    resistance_ohm : float
        Three-phase: in each phase; line to line: between the two; to earth: from the phase, or the two
        phases joined, to earth.
    """

    location: Location
    type: FaultType = FaultType.LLL
    resistance_ohm: float = 0.0


class Solution(Protocol):
    """Currents and voltages of one fault in one topology, computed when asked."""

    @property
    def fed(self) -> bool:
        """A source still drives current into the fault (before a fault: always True)."""
        ...

    @property
    def fault(self) -> Phasors:
        """Current from the network into the fault, in A."""
        ...

    def current(self, device: str, into: str) -> Phasors:
        """Current in A through a device (or from a source) into section ``into``, one of the two it joins.

        Zero through what is open or joined to no source.
        """
        ...

    def voltage(self, section: str, at: str = "") -> Phasors:
        """Phase-to-earth voltage in V of a section; zero where no source is joined.

        A line or a transformer has as many voltages as ends: ``at`` is then the name of a device or VT
        attached at the one meant (a VT: the end at its station).
        """
        ...


class FaultedNetwork(Protocol):
    """A plant with one fault, in any topology."""

    def solve(self, opened: frozenset[str] = frozenset()) -> Solution:
        """The solution with these devices and sources open besides those open from the start; cached."""
        ...


class Network(Protocol):
    """The equations of a plant in one dispatch state, factorised once."""

    def at(self, fault: ShuntFault) -> FaultedNetwork:
        """The network with a fault, which is checked; cached."""
        ...

    def prefault(self, opened: frozenset[str] = frozenset()) -> Solution:
        """Voltages before the fault: no load, so no currents, and the stated voltage wherever a source is joined."""
        ...
