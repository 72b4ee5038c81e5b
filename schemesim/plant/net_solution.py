"""Currents and voltages of one fault in one topology, worked out when asked."""

from __future__ import annotations

import cmath
import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from schemesim.errors import nearest, reject
from schemesim.plant.model import Device, DeviceKind
from schemesim.plant.net_case import FaultType, Phasors
from schemesim.plant.net_elements import place_of
from schemesim.plant.net_equations import POSITIVE, ZERO, Equations
from schemesim.plant.net_matrices import BASE_MVA, Complexes
from schemesim.plant.net_ports import FaultPort, Ports, Response
from schemesim.plant.net_station import Split
from schemesim.plant.net_topology import State

NOTHING: Phasors = (0j, 0j, 0j)
_NOISE = 1e-12
"""A current below this share of the fault's is one of rounding: it is zero."""


@dataclass(frozen=True)
class Driven:
    """What drives the currents of a solution: the fault.

    Attributes
    ----------
    type : FaultType
    port : FaultPort
    where : (bus, piece)
        Of the fault, or of one end of the line it is on.
    ports, responses : mappings by sequence
    currents : mapping by sequence
        Into the fault, in per unit.
    """

    type: FaultType
    port: FaultPort
    where: tuple[int, int]
    ports: Mapping[int, Ports]
    responses: Mapping[int, Response]
    currents: Mapping[int, complex]


class PlantSolution:
    """A :class:`~schemesim.plant.net_case.Solution`; made by ``solve`` of a network with a fault."""

    def __init__(
        self,
        equations: Equations,
        voltage_factor: float,
        opened: frozenset[str],
        splits: Mapping[int, Split],
        states: Mapping[int, State],
        driven: Driven | None = None,
    ) -> None:
        self.equations = equations
        self.opened = opened
        self._factor = voltage_factor
        self._splits = splits
        self._states = states
        self._by = driven
        self._responses: Mapping[int, Response] = driven.responses if driven is not None else {}
        self._driven: Mapping[int, complex] = driven.currents if driven is not None else {}
        self._flows: dict[int, list[Phasors]] = {}
        self._out: dict[int, list[Phasors]] = {}
        self._all: dict[int, Complexes] = {}

    def __repr__(self) -> str:
        return f"PlantSolution({'fed' if self.fed else 'not fed'}, opened: {', '.join(sorted(self.opened)) or 'none'})"

    @property
    def fed(self) -> bool:
        """A source still drives current into the fault."""
        return self._by is None or POSITIVE in self._responses

    @property
    def fault(self) -> Phasors:
        """Current from the network into the fault, in A: zero, positive, negative sequence."""
        if self._by is None:
            return NOTHING
        i = self._driven
        return self._turned(self._by.port.bus, (i.get(0, 0j), i.get(1, 0j), i.get(2, 0j)), current=True)

    def current(self, device: str, into: str) -> Phasors:
        """Current in A through a device, or from a source, into a section: zero, positive, negative sequence.

        Raises
        ------
        InputError
            For an unknown device, or a section it does not join.
        """
        plant = self.equations.elements.plant
        item = plant.device.get(device) or plant.source.get(device)
        if item is None:
            known = (*plant.device, *plant.source)
            raise reject("device", device, "the name of a device or source", tip=nearest(device, known))
        sides = (item.a, item.b) if isinstance(item, Device) else (item.section,)
        if into not in sides:
            raise reject(f"side of {device!r}", into, f"one of {', '.join(sides)}")
        bus = self.equations.bus_of_device.get(device)
        if bus is None or device in self.opened or not self._driven:
            return NOTHING
        if len(sides) == 1:
            n = self.equations.bus(bus).sources.index(device)
            found = _negative(self._leaving(bus)[n])
        else:
            found = self._through(bus)[self.equations.bus(bus).place[device]]
            found = found if into == sides[1] else _negative(found)
        return self._turned(bus, found, current=True)

    def voltage(self, section: str, at: str = "") -> Phasors:
        """Phase-to-earth voltage in V of a section (at a device or VT of it): zero, positive, negative sequence.

        Raises
        ------
        InputError
            For an unknown section, or a line or transformer without saying at which end.
        """
        node = _node_at(self.equations, section, at)
        bus = int(self.equations.elements.bus_of[node])
        split = self._splits.get(bus)
        piece = 0 if split is None else split.piece_of[split.bus.nodes[node]]
        if not self._states[POSITIVE].earthed(bus, piece):
            return NOTHING
        u = [0j, complex(self._factor), 0j]
        for s, i in self._driven.items():
            if s in self._responses and self._states[min(s, 1)].earthed(bus, piece):
                own = self._responses[s].above.get((bus, piece), 0j)
                u[s] += i * (self._voltage(s, bus) + own)
        if ZERO in self._states and not self._states[ZERO].earthed(bus, piece):
            u[0] = self._displaced(bus, piece)
        return self._turned(bus, (u[0], u[1], u[2]), current=False)

    def _displaced(self, bus: int, piece: int) -> complex:
        """Zero-sequence voltage of what has no earth but the fault: that of the fault itself."""
        by, state = self._by, self._states[ZERO]
        if by is None or not self._driven:
            return 0j
        if state.earthed(*by.where) or state.group(*by.where) != state.group(bus, piece):
            return 0j
        if by.type is FaultType.LG:
            return complex(-self._factor)
        return self._factor - self._driven[POSITIVE] * self._responses[POSITIVE].z

    def _voltage(self, sequence: int, bus: int) -> complex:
        """Voltage of a bus for one ampere into the fault."""
        assert self._by is not None  # what has currents has a fault
        ports = self._by.ports[sequence]
        if ports.at_hand(bus):
            return ports.voltage(bus, self._responses[sequence])
        return complex(self._everywhere(sequence)[bus])

    def _currents(self, sequence: int, bus: int) -> Complexes:
        """Currents into the terminals of a bus for one ampere into the fault."""
        assert self._by is not None  # what has currents has a fault
        ports = self._by.ports[sequence]
        if ports.at_hand(bus):
            return ports.currents(bus, self._responses[sequence])
        return ports.currents_from(bus, self._responses[sequence], self._everywhere(sequence))

    def _everywhere(self, sequence: int) -> Complexes:
        assert self._by is not None  # what has currents has a fault
        ports = self._by.ports[sequence]
        key = id(ports)  # one and the same for positive and negative where these are alike
        if key not in self._all:
            self._all[key] = ports.everywhere(self._responses[sequence])
        return self._all[key]

    def _leaving(self, bus: int) -> list[Phasors]:
        """Current out of a bus into each of its terminals, in per unit."""
        if bus not in self._out:
            by = {
                s: (i * self._currents(s, bus)).tolist()
                for s, i in self._driven.items()
                if s in self._responses
            }
            none = [0j] * len(self.equations.bus(bus).terminals)
            self._out[bus] = list(zip(by.get(0, none), by.get(1, none), by.get(2, none), strict=True))
        return self._out[bus]

    def _through(self, bus: int) -> list[Phasors]:
        """Current through each device of a bus from its first end to its second, in per unit."""
        if bus not in self._flows:
            split = self._splits.get(bus) or self.equations.split(bus, frozenset())
            leaving = np.zeros((len(split.piece_of), 3), dtype=complex)
            pairs = zip(split.bus.terminal_nodes, split.piece_at, self._leaving(bus), strict=True)
            for node, piece, out in pairs:
                if piece == split.piece_of[node]:
                    leaving[node] += out
            port = self._by.port if self._by is not None else None
            if port is not None and port.bus == bus and not port.terminals:
                leaving[port.node] += [self._driven.get(s, 0j) for s in range(3)]
            flows = split.shares @ leaving
            flows[np.abs(flows) < _NOISE * max(map(abs, self._driven.values()))] = 0
            self._flows[bus] = [(a, b, c) for a, b, c in flows.tolist()]
        return self._flows[bus]

    def _turned(self, bus: int, found: Phasors, current: bool) -> Phasors:
        """From per unit to A or V, with the phase shifts of transformers put back."""
        e = self.equations.elements
        kv = float(e.kv[bus])
        scale = BASE_MVA * 1e3 / (math.sqrt(3) * kv) if current else kv * 1e3 / math.sqrt(3)
        here = float(e.angle[bus])
        there = here if self._by is None else float(e.angle[self._by.port.bus])
        if here == there == 0.0:
            return found[0] * scale, found[1] * scale, found[2] * scale
        zero, positive, negative = (scale * cmath.exp(1j * x) for x in (there, here, 2 * there - here))
        return found[0] * zero, found[1] * positive, found[2] * negative


def _negative(x: Phasors) -> Phasors:
    return -x[0], -x[1], -x[2]


def _node_at(equations: Equations, section: str, at: str) -> int:
    elements = equations.elements
    plant = elements.plant
    if section in elements.node_of:
        return elements.node_of[section]
    if section not in elements.ends_of:
        raise reject("section", section, "the name of a section", tip=nearest(section, plant.section))
    ends = dict(elements.ends_of[section])
    station = equations.station_of_vt.get((at, section))
    beside = [d for d in plant.at_section[section] if d.name == at or (station is not None and d.station == station)]
    if not beside:
        attached = [d.name for d in plant.at_section[section] if d.kind is not DeviceKind.JOINT]
        raise reject(f"end of {section!r}", at or "none", f"a device or VT there, e.g. {', '.join(attached)}")
    place = beside[0].a_at if beside[0].a == section else beside[0].b_at
    return ends[place_of(plant.section[section], place)]
