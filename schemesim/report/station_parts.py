"""A station taken apart for drawing: buses, junctions and circuit ends, and the chains of devices between them.

Nothing is declared: what is a bay, a coupler, a diameter or a ring follows from the graph.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

from schemesim.plant.model import Device, DeviceKind, Plant, SectionKind

CIRCUITS = frozenset({SectionKind.LINE, SectionKind.TRANSFORMER, SectionKind.GENERATOR, SectionKind.FEEDER})


@dataclass(frozen=True, slots=True, order=True)
class Node:
    """Where chains end: a bus, a junction, or one end of a circuit (``at`` tells its ends apart)."""

    section: str
    circuit: bool = False
    at: float = 0.0


@dataclass(frozen=True, slots=True)
class Chain:
    """Devices in a row from one node to another; ``between`` are the conductors that join them, one less."""

    a: Node
    b: Node
    devices: tuple[Device, ...]
    between: tuple[str, ...]

    def other(self, node: Node) -> Node:
        """The node at the other end."""
        return self.b if node == self.a else self.a

    def ahead_of(self, node: Node) -> Chain:
        """The same chain, read from one of its ends."""
        return self if node == self.a else Chain(self.b, self.a, self.devices[::-1], self.between[::-1])

    @property
    def has_breaker(self) -> bool:
        """Whether a breaker stands in it."""
        return any(d.kind is DeviceKind.BREAKER for d in self.devices)


@dataclass(frozen=True)
class Group:
    """Junctions that hang together without a bus, with every chain that touches them.

    A bay without a junction is a group of one chain.
    """

    junctions: tuple[Node, ...]
    chains: tuple[Chain, ...]

    def at(self, node: Node) -> tuple[Chain, ...]:
        """Chains that touch a node, read from it."""
        return tuple(c.ahead_of(node) for c in self.chains if node in (c.a, c.b))

    @property
    def circuits(self) -> tuple[Node, ...]:
        """Ends of circuits that leave here."""
        return tuple(sorted({n for c in self.chains for n in (c.a, c.b) if n.circuit}))


@dataclass(frozen=True)
class Parts:
    """What a station consists of."""

    name: str
    buses: tuple[Node, ...]
    couplers: tuple[Chain, ...]
    groups: tuple[Group, ...] = field(default=())


def station_names(plant: Plant) -> tuple[str, ...]:
    """Names of the stations that have devices, in order."""
    return tuple(sorted({d.station for d in plant.devices}))


def station_parts(plant: Plant, station: str) -> Parts:
    """Take a station apart."""
    devices = [d for d in plant.devices if d.station == station]
    chains = _chains(plant, devices)
    nodes = {n for c in chains for n in (c.a, c.b)}
    buses = {n for n in nodes if plant.section[n.section].kind is SectionKind.BUS}
    buses |= {Node(s.name) for s in plant.sections if s.kind is SectionKind.BUS and s.station == station}
    junctions = {n for n in nodes if not n.circuit} - buses
    couplers = tuple(c for c in chains if c.a in buses and c.b in buses)
    groups = []
    left = dict.fromkeys(sorted(junctions))
    while left:
        start = next(iter(left))
        seen, todo = {start}, [start]
        while todo:
            here = todo.pop()
            for c in chains:
                if here in (c.a, c.b):
                    there = c.other(here)
                    if there in junctions and there not in seen:
                        seen.add(there)
                        todo.append(there)
        for n in seen:
            left.pop(n)
        touching = tuple(c for c in chains if c.a in seen or c.b in seen)
        groups.append(Group(tuple(sorted(seen)), touching))
    simple = [Group((), (c,)) for c in chains if not {c.a, c.b} & junctions and c not in couplers]
    return Parts(station, tuple(sorted(buses)), couplers, (*groups, *simple))


def _chains(plant: Plant, devices: Iterable[Device]) -> list[Chain]:
    """Every chain of a station, each once."""
    at: dict[str, list[Device]] = {}
    for d in devices:
        at.setdefault(d.a, []).append(d)
        at.setdefault(d.b, []).append(d)

    def passes(section: str) -> bool:
        conductor = plant.section[section].kind is SectionKind.CONDUCTOR
        return conductor and len(at[section]) == 2 and len(plant.at_section[section]) == 2

    def node(section: str, d: Device) -> Node:
        if plant.section[section].kind in CIRCUITS:
            return Node(section, True, d.a_at if d.a == section else d.b_at)
        return Node(section)

    found: list[Chain] = []
    used: set[str] = set()
    starts = [s for s in sorted(at) if not passes(s)]
    for start in [*starts, *(s for s in sorted(at) if passes(s))]:  # the latter: a loop without any node
        for first in at[start]:
            if first.name in used:
                continue
            row, between, here, d = [first], list[str](), start, first
            used.add(first.name)
            while True:
                here = d.b if d.a == here else d.a
                if not passes(here) or here == start:
                    break
                between.append(here)
                d = next(x for x in at[here] if x.name != d.name)
                row.append(d)
                used.add(d.name)
            found.append(Chain(node(start, first), node(here, d), tuple(row), tuple(between)))
    return found
