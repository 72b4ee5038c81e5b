"""Currents and voltages of faults on a plant, in any topology.

The fault is fed by the voltage before it (the same everywhere, no load: IEC 60909-0, equivalent voltage source at the
fault; superposition) through the sequence networks joined as its type says (Anderson, Analysis of Faulted Power
Systems, 1973, chapter 2).
"""

from __future__ import annotations

import math
from collections import OrderedDict
from collections.abc import Mapping
from typing import TypeVar

from schemesim.errors import nearest, reject
from schemesim.plant.model import Location, Plant
from schemesim.plant.net_case import FaultType, ShuntFault
from schemesim.plant.net_elements import elements_of
from schemesim.plant.net_equations import NEGATIVE, POSITIVE, ZERO, Equations
from schemesim.plant.net_matrices import BASE_MVA
from schemesim.plant.net_ports import FaultPort, Ports, Response
from schemesim.plant.net_solution import Driven, PlantSolution
from schemesim.plant.net_station import Split
from schemesim.plant.net_topology import Topologies

_NEEDED = {
    FaultType.LLL: (POSITIVE,),
    FaultType.LL: (POSITIVE, NEGATIVE),
    FaultType.LG: (POSITIVE, NEGATIVE, ZERO),
    FaultType.LLG: (POSITIVE, NEGATIVE, ZERO),
}

_Key = TypeVar("_Key")
_Value = TypeVar("_Value")


def network_of(plant: Plant, dispatch: str | None = None, *, voltage_factor: float = 1.0) -> PlantNetwork:
    """The equations of a plant in one dispatch state, for faults of any kind.

    Parameters
    ----------
    plant : Plant
        Its lines, transformers and sources in service with impedances, its sections with nominal voltages.
    dispatch : str or None
        State of the sources; all in service by default.
    voltage_factor : float
        Voltage before a fault over the nominal one, everywhere: 1, or the factor c of IEC 60909.

    Raises
    ------
    InputError
        For an unknown dispatch, missing impedances or voltages, or a voltage factor that is not over zero.

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, infeed, line, single_bus
    >>> from schemesim.plant.model import Location, PlantBuilder
    >>> from schemesim.plant.net_case import ShuntFault
    >>> from schemesim.plant.net_data import LineImpedance, SourceImpedance
    >>> b = PlantBuilder()
    >>> line(b, "L1", 40, kv=110, impedance=LineImpedance(r_ohm=0, x_ohm=12))
    >>> infeed(b, "N", "Alder.B1", impedance=SourceImpedance(r_ohm=0, x_ohm=8))
    >>> single_bus(b, "Alder", [Bay("L1", "L1")], kv=110)
    >>> solution = network_of(b.build()).at(ShuntFault(Location("L1", 1.0))).solve()
    >>> round(abs(solution.current("Alder.L1.CTc", "L1")[1]))  # 110 kV / sqrt 3 / 20 ohm
    3175
    """
    if not (math.isfinite(voltage_factor) and voltage_factor > 0):
        raise reject("voltage factor", voltage_factor, "a number over zero, mostly from 0.9 to 1.1")
    return PlantNetwork(Equations(elements_of(plant, dispatch)), voltage_factor)


class PlantNetwork:
    """A :class:`~schemesim.plant.net_case.Network`; made by :func:`network_of`."""

    def __init__(self, equations: Equations, voltage_factor: float = 1.0) -> None:
        self.equations = equations
        self.voltage_factor = voltage_factor
        self._faults: OrderedDict[ShuntFault, FaultedPlant] = OrderedDict()
        self._before = Topologies(equations, POSITIVE)

    def __repr__(self) -> str:
        return f"PlantNetwork({self.equations.buses} buses, {len(self.equations.elements.at)} terminals)"

    def at(self, fault: ShuntFault) -> FaultedPlant:
        """The network with a fault.

        Raises
        ------
        InputError
            For a section or position that is not there, a resistance below zero, a fault to earth where the
            zero sequence of some line is not known.
        """
        if fault not in self._faults:
            _keep(self._faults, fault, FaultedPlant(self.equations, fault, self.voltage_factor), 64)
        self._faults.move_to_end(fault)
        return self._faults[fault]

    def prefault(self, opened: frozenset[str] = frozenset()) -> PlantSolution:
        """Voltages before the fault."""
        splits = _splits(self.equations, opened)
        state = self._before.state(splits)
        return PlantSolution(self.equations, self.voltage_factor, opened, splits, {POSITIVE: state})


class FaultedPlant:
    """A :class:`~schemesim.plant.net_case.FaultedNetwork`; made by :meth:`PlantNetwork.at`."""

    def __init__(self, equations: Equations, fault: ShuntFault, voltage_factor: float) -> None:
        self.equations = equations
        self.fault = fault
        self.voltage_factor = voltage_factor
        self.port = _port(equations, fault)
        self._pieces = {s: Topologies(equations, s) for s in {min(s, 1) for s in _NEEDED[fault.type]}}
        self.ports: dict[int, Ports] = {}
        for s in _NEEDED[fault.type]:
            same = s == NEGATIVE and equations.elements.same_negative
            self.ports[s] = self.ports[POSITIVE] if same else Ports(equations, s, self.port)
        self._solved: OrderedDict[frozenset[str], PlantSolution] = OrderedDict()

    def __repr__(self) -> str:
        return f"FaultedPlant({self.fault.type} at {self.fault.location}, {len(self._solved)} topologies)"

    def prepare(self, devices: frozenset[str]) -> None:
        """Make known at once what the opening of any of some devices and sources will need (a saving of time only)."""
        buses = sorted(_splits(self.equations, devices))
        for ports in self.ports.values():
            ports.extend(buses)
        for topologies in self._pieces.values():
            topologies.state(_splits(self.equations, devices))

    def solve(self, opened: frozenset[str] = frozenset()) -> PlantSolution:
        """The solution of a topology.

        Raises
        ------
        InputError
            For a name in ``opened`` that no device and no source has.
        """
        if opened in self._solved:
            self._solved.move_to_end(opened)
            return self._solved[opened]
        splits = _splits(self.equations, opened)
        states = {s: topologies.state(splits) for s, topologies in self._pieces.items()}
        where = self._place(splits)
        responses: dict[int, Response] = {}
        if states[POSITIVE].earthed(*where):
            for s, ports in self.ports.items():
                if s == NEGATIVE and ports is self.ports[POSITIVE]:
                    responses[s] = responses[POSITIVE]
                elif states[min(s, 1)].earthed(*where):
                    parted = states[min(s, 1)].joined.parted
                    ports.extend(b for b, _ in parted)
                    responses[s] = ports.respond(splits, parted)
        driven = Driven(self.fault.type, self.port, where, self.ports, responses, self._driven(responses))
        found = PlantSolution(self.equations, self.voltage_factor, opened, splits, states, driven)
        _keep(self._solved, opened, found, 4096)
        return found

    def _place(self, splits: Mapping[int, Split]) -> tuple[int, int]:
        """Bus and piece of the fault (of one end of the line it is on)."""
        if not self.port.terminals:
            bus = self.port.bus
            return bus, splits[bus].piece_of[self.port.node] if bus in splits else 0
        t = self.port.terminals[0][0]
        bus = int(self.equations.bus_at[t])
        return bus, splits[bus].piece_at[self.equations.bus(bus).terminals.index(t)] if bus in splits else 0

    def _driven(self, responses: Mapping[int, Response]) -> dict[int, complex]:
        """Current into the fault by sequence, in per unit."""
        if POSITIVE not in responses:
            return {}
        bus = self.port.bus
        r = self.fault.resistance_ohm * BASE_MVA / float(self.equations.elements.kv[bus]) ** 2
        u = self.voltage_factor
        z1 = responses[POSITIVE].z
        if self.fault.type is FaultType.LLL:
            return {POSITIVE: u / (z1 + r)}
        z2 = responses[NEGATIVE].z
        open_zero = ZERO not in responses
        if self.fault.type is FaultType.LG:
            i = 0j if open_zero else u / (responses[ZERO].z + z1 + z2 + 3 * r)
            return {ZERO: i, POSITIVE: i, NEGATIVE: i}
        if self.fault.type is FaultType.LL or open_zero:
            i = u / (z1 + z2 + (r if self.fault.type is FaultType.LL else 0.0))
            return {POSITIVE: i, NEGATIVE: -i}
        zg = responses[ZERO].z + 3 * r
        i = u / (z1 + z2 * zg / (z2 + zg))
        return {ZERO: -i * z2 / (z2 + zg), POSITIVE: i, NEGATIVE: -i * zg / (z2 + zg)}


def _keep(store: OrderedDict[_Key, _Value], key: _Key, value: _Value, most: int) -> None:
    store[key] = value
    while len(store) > most:
        store.popitem(last=False)


def _splits(equations: Equations, opened: frozenset[str]) -> dict[int, Split]:
    """The buses with something open, and what they fall into."""
    plant = equations.elements.plant
    by_bus: dict[int, list[str]] = {}
    for name in sorted(opened):
        bus = equations.bus_of_device.get(name)
        if bus is not None:
            by_bus.setdefault(bus, []).append(name)
        elif name not in plant.device and name not in plant.source:
            known = (*plant.device, *plant.source)
            raise reject("opened", name, "the name of a device or source", tip=nearest(name, known))
    return {bus: equations.split(bus, frozenset(names)) for bus, names in by_bus.items()}


def _port(equations: Equations, fault: ShuntFault) -> FaultPort:
    elements, where = equations.elements, fault.location
    plant = elements.plant
    if where.section not in plant.section:
        tip = nearest(where.section, plant.section)
        raise reject("section of a fault", where.section, "the name of a section", tip=tip)
    if not 0.0 <= where.position <= 1.0:
        raise reject(f"position of a fault on {where.section!r}", where.position, "a number from 0 to 1")
    if not (math.isfinite(fault.resistance_ohm) and fault.resistance_ohm >= 0):
        raise reject("resistance of a fault", fault.resistance_ohm, "zero or more, in ohm")
    if ZERO in _NEEDED[fault.type] and elements.unknown_zero:
        lines = ", ".join(elements.unknown_zero[:3]) + (" …" if len(elements.unknown_zero) > 3 else "")
        expected = "the zero-sequence impedance of every line (r0_ohm, x0_ohm), for faults to earth"
        raise reject("zero sequence", f"not known of {lines}", expected)
    if where.section not in elements.segments:
        return _node_port(equations, where)
    segment = next(s for s in elements.segments[where.section] if where.position <= s.end)
    x = (where.position - segment.start) / (segment.end - segment.start)
    first, last = segment.terminals
    bus = int(elements.bus_of[elements.at[first]])
    z = (x * (1 - x) * segment.z[0], x * (1 - x) * segment.z[1], x * (1 - x) * segment.z[2])
    return FaultPort(bus, -1, ((first, 1 - x), (last, x)), z)


def _node_port(equations: Equations, where: Location) -> FaultPort:
    elements = equations.elements
    if where.section in elements.node_of:
        node = elements.node_of[where.section]
    else:
        node = elements.ends_of[where.section][0 if where.position < 0.5 else -1][1]
    bus = int(elements.bus_of[node])
    return FaultPort(bus, equations.bus(bus).nodes[node])
