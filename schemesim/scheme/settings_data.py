"""What settings are chosen from: voltages, loads, lines and the smallest fault currents of a plant."""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from functools import cached_property

from schemesim.plant.coverage import default_objects
from schemesim.plant.model import DeviceKind, Location, Plant, Section, SectionKind
from schemesim.plant.net_case import FaultType, Network, ShuntFault
from schemesim.plant.net_data import LineImpedance
from schemesim.plant.terminals import ProtectedObject, Terminal, other_end
from schemesim.scheme.phasor_elements import Part, size_of

NetworkOf = Callable[[Plant, str | None], Network]
"""Makes the network equations of a plant in a dispatch state."""

SURGE_OHM = 380.0
"""Surge impedance of an overhead line (common practice)."""

_FEEDS = 0.01
"""Share of the fault current below which a CT is taken to carry none of it."""


@dataclass(frozen=True)
class PlantData:
    """Figures of one plant from which settings are chosen.

    Parameters
    ----------
    plant : Plant
    network : NetworkOf
    max_load_a : mapping of section name to amperes
        Greatest load current; where none is given, a feeder's is that of its load and any other's
        twice the natural load of an overhead line of its voltage.
    dispatches : tuple of (str or None)
        States over which the smallest fault current is sought.
    """

    plant: Plant
    network: NetworkOf
    max_load_a: Mapping[str, float] = field(default_factory=dict)
    dispatches: tuple[str | None, ...] = (None,)

    @cached_property
    def objects(self) -> tuple[ProtectedObject, ...]:
        """The protected objects of the plant."""
        return default_objects(self.plant)

    @cached_property
    def by_zone(self) -> Mapping[frozenset[str], ProtectedObject]:
        """Objects by their protected zone."""
        return {o.zone: o for o in self.objects}

    def element_at(self, start: str, stop: Iterable[str]) -> Section:
        """The first section met from ``start`` that is no short conductor, without passing the devices in ``stop``."""
        plant, stops = self.plant, set(stop)
        queue, seen = deque([start]), {start}
        while queue:
            here = queue.popleft()
            if plant.section[here].kind is not SectionKind.CONDUCTOR:
                return plant.section[here]
            for d in plant.at_section[here]:
                there = other_end(d, here)
                if d.name not in stops and d.closed and there not in seen:
                    seen.add(there)
                    queue.append(there)
        return plant.section[start]

    def element_of(self, terminals: tuple[Terminal, ...]) -> Section:
        """What stands on the inner side of a set of CTs."""
        return self.element_at(terminals[0].inner, [t.ct for t in terminals])

    def kv_at(self, terminal: Terminal) -> float:
        """Nominal voltage at a CT: of the nearest section that states one, transformers apart."""
        plant = self.plant
        if terminal.ct in plant.source:
            start = [plant.source[terminal.ct].section]
        else:
            d = plant.device[terminal.ct]
            start = [d.a, d.b]
        queue, seen = deque(start), set(start)
        while queue:
            here = queue.popleft()
            section = plant.section[here]
            if section.kind is SectionKind.TRANSFORMER:
                continue
            if section.kv > 0:
                return section.kv
            for x in plant.at_section[here]:
                there = other_end(x, here)
                if there not in seen:
                    seen.add(there)
                    queue.append(there)
        return 0.0

    def load_a(self, terminal: Terminal) -> tuple[float, str]:
        """Greatest load current at a CT, and where it comes from."""
        section = self.element_at(terminal.inner, [terminal.ct])
        given = self.max_load_a.get(section.name)
        if given is not None:
            return given, f"greatest load of {section.name}: {given:g} A, as given"
        kv = self.kv_at(terminal) or 100.0
        if section.load_mw > 0:
            load = section.load_mw * 1e3 / (math.sqrt(3.0) * kv)
            return load, f"greatest load of {section.name}: {section.load_mw:g} MW = {load:.0f} A"
        load = 2.0 * kv * 1e3 / (math.sqrt(3.0) * SURGE_OHM)
        return load, f"greatest load taken as twice the natural load at {kv:g} kV: {load:.0f} A (assumed)"

    def vt_at(self, station: str, element: Section, kv: float) -> str | None:
        """The VT an element uses: on what it protects, else on a bus of its station and voltage."""
        here = [v for v in self.plant.vts if v.station == station]
        mine = [v for v in here if v.section == element.name]
        level = [v for v in here if self.plant.section[v.section].kv in (0.0, kv)]
        found = mine or level or here
        return found[0].name if found else None

    def lines_at(self, station: str, kv: float) -> list[Section]:
        """Lines with an end at a station, of a voltage."""
        names: set[str] = set()
        for d in self.plant.devices:
            if d.station == station:
                names.update((d.a, d.b))
        lines = [self.plant.section[n] for n in sorted(names) if self.plant.section[n].kind is SectionKind.LINE]
        return [s for s in lines if isinstance(s.impedance, LineImpedance) and s.kv in (0.0, kv)]

    def fault_places(self, o: ProtectedObject) -> tuple[Location, ...]:
        """Where faults on an object are tried: a line at its two ends, everything else once."""
        section = self.plant.section[o.element]
        if section.kind in (SectionKind.LINE, SectionKind.TRANSFORMER):
            return (Location(section.name, 0.0), Location(section.name, 1.0))
        return (Location(section.name),)

    @cached_property
    def least_fault(self) -> Mapping[tuple[str, str], tuple[float, str]]:
        """Smallest phase current of (object, CT) for a fault between two phases on the object, and where.

        CTs that carry less than a hundredth of the fault current are left out: nothing feeds through them.
        """
        found: dict[tuple[str, str], tuple[float, str]] = {}
        for dispatch in self.dispatches:
            network = self.network(self.plant, dispatch)
            for o in self.objects:
                for place in self.fault_places(o):
                    solved = network.at(ShuntFault(place, FaultType.LL)).solve(frozenset())
                    total = size_of(solved.fault, Part.PHASE)
                    for t in o.terminals:
                        size = size_of(solved.current(t.ct, t.inner), Part.PHASE)
                        if size > _FEEDS * total and size < found.get((o.element, t.ct), (math.inf, ""))[0]:
                            state = "" if dispatch is None else f", {dispatch}"
                            found[(o.element, t.ct)] = size, f"{place}{state}"
        return found

    def least_fault_of(self, element: str, cts: Iterable[str]) -> tuple[float, str] | None:
        """Smallest of several CTs for faults on an object; None where nothing feeds through them."""
        return min((self.least_fault[(element, ct)] for ct in cts if (element, ct) in self.least_fault), default=None)

    def least_beside(self, ct: str) -> tuple[float, str] | None:
        """Smallest current of a CT for faults on any object it bounds."""
        return min((v for (_, name), v in self.least_fault.items() if name == ct), default=None)

    def station_of(self, terminals: tuple[Terminal, ...]) -> str:
        """Where a set of CTs stands."""
        device = self.plant.device.get(terminals[0].ct)
        return device.station if device is not None else self.plant.source[terminals[0].ct].station

    def is_ct(self, name: str) -> bool:
        """Whether a name is that of a CT."""
        device = self.plant.device.get(name)
        return device is not None and device.kind is DeviceKind.CT
