"""The same network by the textbook and by brute force: every section, device and branch an unknown of one dense system.

Volts, amperes and ohms; device currents are unknowns and their voltage drop is zero (modified nodal analysis);
transformers are ideal ones with complex ratios behind their leakage impedance. Least squares of least norm leave the
split of loops of devices as between equal small impedances, and nothing where nothing is driven. The fault is put
together from its conditions in phases a, b, c.
"""

from __future__ import annotations

import cmath
import math
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lstsq

from schemesim.plant.model import Plant
from schemesim.plant.net_case import FaultType, ShuntFault
from schemesim.plant.net_data import LineImpedance, TransformerImpedance

A = cmath.exp(2j * math.pi / 3)
TO_PHASES = np.array([[1, 1, 1], [1, A**2, A], [1, A, A**2]])  # from zero, positive, negative


class Oracle:
    """A plant with one fault and some devices open, solved anew in each sequence."""

    def __init__(self, plant: Plant, fault: ShuntFault, opened: frozenset[str], factor: float = 1.0) -> None:
        self.plant, self.fault, self.opened = plant, fault, opened
        self.unknown: dict[object, int] = {}
        self.sequences = [self._sequence(s) for s in range(3)]
        kv = self._fault_kv()
        self.driven = self._phases(factor * kv * 1e3 / math.sqrt(3))

    def _n(self, what: object) -> int:
        return self.unknown.setdefault(what, len(self.unknown))

    def _ends(self, section: str) -> list[float]:
        s = self.plant.section[section]
        if s.impedance is None:
            return [0.0]
        if isinstance(s.impedance, TransformerImpedance):
            return [0.0, 1.0]
        at = {d.a_at if d.a == section else d.b_at for d in self.plant.at_section[section]} | {0.0, 1.0}
        if self.fault.location.section == section:
            at.add(self.fault.location.position)
        return sorted(at)

    def _node(self, section: str, at: float) -> tuple[str, str, float]:
        s = self.plant.section[section]
        if s.impedance is None:
            at = 0.0
        elif isinstance(s.impedance, TransformerImpedance):
            at = float(round(at))
        return ("v", section, at)

    def _fault_node(self) -> tuple[str, str, float]:
        where = self.fault.location
        transformer = isinstance(self.plant.section[where.section].impedance, TransformerImpedance)
        return self._node(where.section, (0.0 if where.position < 0.5 else 1.0) if transformer else where.position)

    def _fault_kv(self) -> float:
        section = self.plant.section[self.fault.location.section]
        if isinstance(section.impedance, TransformerImpedance):
            return section.impedance.kv[0 if self.fault.location.position < 0.5 else -1]
        return section.kv

    def _sequence(self, s: int) -> tuple[NDArray[Any], complex | None, dict[object, int]]:
        """Response to one ampere drawn at the fault; the voltage there is minus the impedance seen, None: open."""
        self.unknown = {}
        equations: list[dict[int, complex]] = []
        leaving: dict[object, list[tuple[int, complex]]] = {}

        def leaves(node: object, current: object, share: complex = 1.0) -> None:
            leaving.setdefault(node, []).append((self._n(current), share))

        for name in self.plant.section:
            for at in self._ends(name):
                leaving.setdefault(self._node(name, at), [])
        for d in self.plant.devices:
            a, b = self._node(d.a, d.a_at), self._node(d.b, d.b_at)
            i = ("i", d.name)
            leaves(a, i)
            leaves(b, i, -1.0)
            if d.closed and d.name not in self.opened:
                equations.append({self._n(a): 1.0, self._n(b): -1.0})
            else:
                equations.append({self._n(i): 1.0})
        for source in self.plant.sources:
            z = source.impedance
            assert z is not None
            zs = (z.z0, z.z1, z.z2)[s]
            i, node = ("i", source.name), self._node(source.section, 0.0)
            leaves(node, i, -1.0)
            if source.name in self.opened or zs is None:
                equations.append({self._n(i): 1.0})
            else:
                equations.append({self._n(node): 1.0, self._n(i): zs})
        self._lines(s, leaves, equations)
        self._transformers(s, leaves, equations)
        right: NDArray[np.complex128] = np.zeros(len(equations) + len(leaving), dtype=complex)
        for row, (place, parts) in enumerate(leaving.items(), start=len(equations)):
            equation: dict[int, complex] = {}
            for n, share in parts:
                equation[n] = equation.get(n, 0.0) + share
            equations.append(equation)
            if place == self._fault_node():
                right[row] = -1.0
        matrix: NDArray[np.complex128] = np.zeros((len(equations), len(self.unknown)), dtype=complex)
        for row, equation in enumerate(equations):
            for n, value in equation.items():
                matrix[row, n] = value
        found: NDArray[Any] = lstsq(matrix, right, cond=1e-11, lapack_driver="gelsy")[0]
        consistent = np.allclose(matrix @ found, right, atol=1e-6)
        z = -found[self.unknown[self._fault_node()]] if consistent else None
        return found, z, dict(self.unknown)

    def _lines(self, s: int, leaves: Any, equations: list[dict[int, complex]]) -> None:
        for section in self.plant.sections:
            z = section.impedance
            if not isinstance(z, LineImpedance):
                continue
            own = z.z0 if s == 0 else z.z1
            assert own is not None
            ends = self._ends(section.name)
            coupled = {c.b if c.a == section.name else c.a: c.z0 for c in self.plant.couplings
                       if s == 0 and section.name in (c.a, c.b)}  # fmt: skip
            for x, y in pairwise(ends):
                i = ("line", section.name, x)
                a, b = self._node(section.name, x), self._node(section.name, y)
                leaves(a, i)
                leaves(b, i, -1.0)
                equation: dict[int, complex] = {self._n(a): 1.0, self._n(b): -1.0, self._n(i): -own * (y - x)}
                for other, mutual in coupled.items():
                    others = self._ends(other)
                    for u, v in pairwise(others):
                        over = max(0.0, min(v, y) - max(u, x))
                        n = self._n(("line", other, u))
                        equation[n] = equation.get(n, 0.0) - mutual * over
                equations.append(equation)

    def _transformers(self, s: int, leaves: Any, equations: list[dict[int, complex]]) -> None:
        for section in self.plant.sections:
            t = section.impedance
            if not isinstance(t, TransformerImpedance):
                continue
            v1, v2 = (self._n(self._node(section.name, x)) for x in (0.0, 1.0))
            i1, i2 = (("winding", section.name, n) for n in (1, 2))
            leaves(self._node(section.name, 0.0), i1)
            leaves(self._node(section.name, 1.0), i2)
            n1, n2 = self._n(i1), self._n(i2)
            k = t.kv[0] / t.kv[1]
            shift = math.radians(t.shifts[1]) * (1, 1, -1)[s]
            ratio = k * cmath.exp(-1j * shift)
            z = t.z1[0] if s else t.z0[0]
            z1, z2 = z * t.kv[0] ** 2 / t.mva, z * t.kv[1] ** 2 / t.mva
            e1, e2 = t.earth_ohm
            if s:
                equations.append({v1: 1.0, v2: -ratio, n1: -z1})
                equations.append({n2: 1.0, n1: ratio.conjugate()})
            elif t.windings == ("YN", "YN"):
                equations.append({v1: 1.0, v2: -ratio, n1: -(z1 + 3 * e1 + 3 * e2 * k**2)})
                equations.append({n2: 1.0, n1: ratio.conjugate()})
            else:
                first = t.windings == ("YN", "D")
                second = t.windings == ("D", "YN")
                equations.append({v1: 1.0, n1: -(z1 + 3 * e1)} if first else {n1: 1.0})
                equations.append({v2: 1.0, n2: -(z2 + 3 * e2)} if second else {n2: 1.0})

    def _phases(self, u: float) -> NDArray[Any]:
        """Currents into the fault by sequence from its conditions in phases; voltage before it: u in phase a."""
        seen = [z for _, z, _ in self.sequences]
        r, kind = self.fault.resistance_ohm, self.fault.type
        if seen[1] is None:
            return np.zeros(3, dtype=complex)
        isolated = seen[0] is None
        zs = np.diag([0.0 if isolated else seen[0], seen[1], seen[2]])
        i = TO_PHASES  # phase currents from sequence currents
        v = -TO_PHASES @ zs  # phase voltages from sequence currents, plus those before
        before = TO_PHASES @ np.array([0, u, 0])
        rows: list[Any]
        if kind is FaultType.LLL:
            rows = [(i[0] + i[1] + i[2], 0), (v[0] - r * i[0] - v[1] + r * i[1], before[1] - before[0]),
                    (v[1] - r * i[1] - v[2] + r * i[2], before[2] - before[1])]  # fmt: skip
        elif kind is FaultType.LL or (kind is FaultType.LLG and isolated):
            between = r if kind is FaultType.LL else 0.0
            rows = [(i[0], 0), (i[1] + i[2], 0), (v[1] - v[2] - between * i[1], before[2] - before[1])]
        elif kind is FaultType.LG:
            if isolated:
                return np.zeros(3, dtype=complex)
            rows = [(i[1], 0), (i[2], 0), (v[0] - r * i[0], -before[0])]
        else:
            rows = [(i[0], 0), (v[1] - v[2], before[2] - before[1]), (v[1] - r * (i[1] + i[2]), -before[1])]
        return np.linalg.solve(np.array([row for row, _ in rows]), np.array([right for _, right in rows]))

    def current(self, name: str) -> NDArray[Any]:
        """Sequence currents through a device from a to b, or from a source, in A."""
        return np.array(
            [self.driven[s] * found[names[("i", name)]] if self.driven[s] else 0j
             for s, (found, _, names) in enumerate(self.sequences)]
        )  # fmt: skip

    def change(self, section: str, at: float = 0.0) -> NDArray[Any]:
        """Change of the sequence voltages of a section by the fault, in V."""
        return np.array(
            [self.driven[s] * found[names[self._node(section, at)]]
             if self.driven[s] and self._node(section, at) in names else 0j
             for s, (found, _, names) in enumerate(self.sequences)]
        )  # fmt: skip
