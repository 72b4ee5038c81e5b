"""What CTs and VTs give to elements that measure: phasors of one fault in one topology.

Currents are primary amperes and voltages primary volts, root mean square, as sequence
components (zero, positive, negative) of phase a. A CT core that is open gives no current
and a lost VT no voltage (rule R5).
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Iterable
from dataclasses import dataclass, field

from schemesim.plant.model import Plant
from schemesim.plant.net_case import Phasors, Solution
from schemesim.plant.terminals import Terminal

A = cmath.rect(1.0, math.radians(120.0))
"""The operator that turns by a third of a turn."""

NONE: Phasors = (0j, 0j, 0j)


def phases_of(sequence: Phasors) -> Phasors:
    """Phases a, b and c of sequence components (zero, positive, negative).

    Examples
    --------
    >>> [round(abs(x), 6) for x in phases_of((0j, 1 + 0j, 0j))]
    [1.0, 1.0, 1.0]
    """
    zero, positive, negative = sequence
    return (
        zero + positive + negative,
        zero + A.conjugate() * positive + A * negative,
        zero + A * positive + A.conjugate() * negative,
    )


@dataclass(frozen=True)
class Quantities:
    """Phasors at CTs and VTs.

    Parameters
    ----------
    plant : Plant
    solution : Solution
        Of the fault in the present topology.
    memory : Solution
        Before the fault, for what polarises by memory.
    open_cts, lost_vts : frozenset of str
        CTs whose core is open, VTs whose winding is lost.
    whole : Quantities or None
        The same with nothing missing, where it is at hand: what it knows is not computed again.
    """

    plant: Plant
    solution: Solution
    memory: Solution
    open_cts: frozenset[str] = frozenset()
    lost_vts: frozenset[str] = frozenset()
    whole: Quantities | None = None
    _currents: dict[Terminal, Phasors] = field(default_factory=dict)
    _voltages: dict[str, Phasors] = field(default_factory=dict)
    _remembered: dict[str, complex] = field(default_factory=dict)
    _sections: dict[str, str] = field(default_factory=dict)

    def current(self, terminals: Iterable[Terminal]) -> Phasors:
        """Sum of the currents of CTs (or of sources by their name) into their inner side."""
        zero = positive = negative = 0j
        for t in terminals:
            i = self.at(t)
            zero, positive, negative = zero + i[0], positive + i[1], negative + i[2]
        return zero, positive, negative

    def at(self, terminal: Terminal) -> Phasors:
        """Current of one CT into its inner side."""
        found = self._currents.get(terminal)
        if found is None:
            if terminal.ct in self.open_cts:
                found = NONE
            elif self.whole is not None:
                found = self.whole.at(terminal)
            else:
                found = self.solution.current(terminal.ct, terminal.inner)
            self._currents[terminal] = found
        return found

    def without(self, missing: frozenset[str]) -> Quantities:
        """The same without the signals of some CTs or VTs (rule R5)."""
        if not missing:
            return self
        cts, vts = self.open_cts | missing, self.lost_vts | missing
        return Quantities(self.plant, self.solution, self.memory, cts, vts, self)

    def voltage(self, vt: str) -> Phasors:
        """Phase-to-earth voltage at a VT."""
        found = self._voltages.get(vt)
        if found is None:
            if vt in self.lost_vts:
                found = NONE
            elif self.whole is not None:
                found = self.whole.voltage(vt)
            else:
                found = self.solution.voltage(self._section_of(vt), vt)
            self._voltages[vt] = found
        return found

    def remembered(self, vt: str) -> complex:
        """Positive-sequence voltage at a VT before the fault; 0 where the VT is lost."""
        found = self._remembered.get(vt)
        if found is None:
            if vt in self.lost_vts:
                found = 0j
            elif self.whole is not None:
                found = self.whole.remembered(vt)
            else:
                found = self.memory.voltage(self._section_of(vt), vt)[1]
            self._remembered[vt] = found
        return found

    def _section_of(self, vt: str) -> str:
        if not self._sections:
            self._sections.update((v.name, v.section) for v in self.plant.vts)
        return self._sections[vt]
