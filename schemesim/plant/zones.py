"""Isolation zones, the graph of zones, and the breakers a fault needs.

An isolation zone is what the breakers can cut out together: sections joined by
closed devices other than breakers, so it follows the bus selection and sections
with no breaker between them fall together.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping
from dataclasses import dataclass

import networkx as nx

from schemesim.errors import nearest, reject
from schemesim.plant.model import DeviceKind, Graph, Plant, SectionKind

_NAMING_ORDER = (
    SectionKind.BUS,
    SectionKind.LINE,
    SectionKind.TRANSFORMER,
    SectionKind.GENERATOR,
    SectionKind.FEEDER,
    SectionKind.CONDUCTOR,
)


@dataclass(frozen=True)
class Zones:
    """The isolation zones of a plant in its state before the fault.

    Attributes
    ----------
    of : mapping of section name to zone name
    members : mapping of zone name to its sections
    border : mapping of zone name to the closed breakers between it and another zone
    sides : mapping of closed breaker name to its two zones
    """

    of: Mapping[str, str]
    members: Mapping[str, frozenset[str]]
    border: Mapping[str, frozenset[str]]
    sides: Mapping[str, tuple[str, str]]


def isolation_zones(plant: Plant) -> Zones:
    """Partition the sections of a plant into isolation zones.

    Examples
    --------
    >>> from schemesim.plant.model import Device, Section, Source
    >>> plant = Plant(
    ...     sections=(Section(name="B", kind=SectionKind.BUS), Section(name="F", kind=SectionKind.FEEDER)),
    ...     devices=(Device(name="CB", kind=DeviceKind.BREAKER, a="B", b="F"),),
    ...     sources=(Source(name="S", section="B"),),
    ... )
    >>> sorted(isolation_zones(plant).members)
    ['B', 'F']
    """
    graph: nx.Graph[str] = nx.Graph()
    graph.add_nodes_from(s.name for s in plant.sections)
    graph.add_edges_from((d.a, d.b) for d in plant.devices if d.closed and d.kind is not DeviceKind.BREAKER)
    members: dict[str, frozenset[str]] = {}
    of: dict[str, str] = {}
    for part in nx.connected_components(graph):
        name = min(part, key=lambda n: (_NAMING_ORDER.index(plant.section[n].kind), n))
        members[name] = frozenset(part)
        of.update(dict.fromkeys(part, name))
    border: dict[str, set[str]] = {name: set() for name in members}
    sides: dict[str, tuple[str, str]] = {}
    for d in plant.devices:
        if d.kind is DeviceKind.BREAKER and d.closed:
            za, zb = of[d.a], of[d.b]
            sides[d.name] = (za, zb)
            if za != zb:
                border[za].add(d.name)
                border[zb].add(d.name)
    return Zones(
        of=of,
        members=dict(sorted(members.items())),
        border={name: frozenset(b) for name, b in sorted(border.items())},
        sides=sides,
    )


def zone_graph(plant: Plant) -> Graph:
    """The graph of zones as a networkx multigraph a user can take and draw.

    Nodes are isolation zones (attributes ``sections``, ``sources``, ``load_mw``),
    edges are breakers (key: name, attribute ``closed``).
    """
    zones = isolation_zones(plant)
    graph: nx.MultiGraph[str] = nx.MultiGraph()
    for name, members in zones.members.items():
        graph.add_node(
            name,
            sections=tuple(sorted(members)),
            sources=tuple(s.name for s in plant.sources if s.section in members),
            load_mw=sum(plant.section[m].load_mw for m in members),
        )
    for d in plant.devices:
        if d.kind is DeviceKind.BREAKER:
            graph.add_edge(zones.of[d.a], zones.of[d.b], key=d.name, closed=d.closed)
    return graph


def merged_elements(plant: Plant) -> dict[str, tuple[str, ...]]:
    """Zones in which two or more elements fall together for want of a breaker between them.

    Returns
    -------
    dict
        Zone name to the buses, lines, transformers, generators and feeders in it.
    """
    zones = isolation_zones(plant)
    out: dict[str, tuple[str, ...]] = {}
    for name, members in zones.members.items():
        elements = sorted(m for m in members if plant.section[m].kind is not SectionKind.CONDUCTOR)
        if len(elements) > 1:
            out[name] = tuple(elements)
    return out


@dataclass(frozen=True)
class Duty:
    """What must and what may open for a fault.

    Attributes
    ----------
    needed : frozenset of str
        Border breakers with a source behind them once the zone is taken away, and
        sources inside the zone that have a trip of their own.
    intended : frozenset of str
        The whole border of the zone, sources inside it, and the designed intertrips.
    untripped : tuple of str
        Sources inside the zone that feed the fault and have no trip: nothing clears it.
    """

    needed: frozenset[str]
    intended: frozenset[str]
    untripped: tuple[str, ...] = ()


def duty(
    plant: Plant,
    zones: Zones,
    section: str,
    dispatch: str | None = None,
    intertrips: frozenset[str] = frozenset(),
) -> Duty:
    """Needed and intended breakers of a fault on a section.

    Parameters
    ----------
    plant, zones
        The plant and its isolation zones.
    section : str
        The faulted section.
    dispatch : str or None
        Dispatch state; all sources by default.
    intertrips : frozenset of str
        Breakers that the scheme trips by design for faults in this zone besides its border.

    Raises
    ------
    InputError
        If the section or the dispatch is not known.
    """
    if section not in zones.of:
        raise reject("section", section, "the name of a section", tip=nearest(section, zones.of))
    zone = zones.of[section]
    fed = {zones.of[s.section] for s in plant.sources_in(dispatch)}
    needed = set()
    for name in zones.border[zone]:
        za, zb = zones.sides[name]
        if _reaches_source(zones, zb if za == zone else za, zone, fed):
            needed.add(name)
    inside = [s for s in plant.sources_in(dispatch) if s.section in zones.members[zone] and s.feeds_own_zone]
    own = {s.name for s in inside if s.trips}
    return Duty(
        needed=frozenset(needed | own),
        intended=zones.border[zone] | own | intertrips,
        untripped=tuple(s.name for s in inside if not s.trips),
    )


def around(zones: Zones, breaker: str) -> frozenset[str]:
    """Every breaker around a failed one: the borders of the zones on both its sides (rule R12)."""
    if breaker not in zones.sides:
        return frozenset()
    za, zb = zones.sides[breaker]
    return (zones.border[za] | zones.border[zb]) - {breaker}


def _reaches_source(zones: Zones, start: str, without: str, fed: set[str]) -> bool:
    queue, seen = deque([start]), {start, without}
    while queue:
        zone = queue.popleft()
        if zone in fed:
            return True
        for name in sorted(zones.border[zone]):
            for other in zones.sides[name]:
                if other not in seen:
                    seen.add(other)
                    queue.append(other)
    return False
