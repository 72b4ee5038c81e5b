"""Which devices carry fault current, by connectivity alone (rule R8).

A device carries fault current while it lies on a simple path from a source to the
fault: it is in the same biconnected part as an edge added between the sources (one
common node) and the fault. Load stubs carry none.

Only the devices that may open or are measured in the neighbourhood of a fault matter,
so the rest of the grid is reduced once per fault: each of its biconnected blocks is
replaced by a cycle through the vertices it shares with what is kept. That changes
no block relation among the kept devices: a kept device is in a block's biconnected
part exactly when a path through it joins two different vertices of that block, and
two devices outside it share a cycle only where no edge of it is used.
"""

from __future__ import annotations

from collections.abc import Iterable, Set
from dataclasses import dataclass
from typing import cast

import networkx as nx

from schemesim.plant.model import Plant

Vertex = tuple[str, str]
"""Kind ('section', 'device', 'grid') and name."""

SOURCES: Vertex = ("grid", "sources")
LOADS: Vertex = ("grid", "loads")


@dataclass(frozen=True)
class Supply:
    """What is left of the supply in one topology.

    Attributes
    ----------
    fed : bool
        A closed path joins the fault to a source (for a run without a fault: False).
    carrying : frozenset of str
        Kept devices that carry fault current (load current in a run without a fault).
    """

    fed: bool
    carrying: frozenset[str]


class Neighbourhood:
    """The plant as one fault sees it, everything that cannot change reduced.

    Parameters
    ----------
    plant : Plant
    fault : str or None
        Faulted section; None for a run without a fault, where load current counts.
    kept : iterable of str
        Devices (and sources with a trip) that may open or are measured.
    dispatch : str or None
        Dispatch state; all sources by default.
    idle : set of str
        Sources left out: those inside the fault's own isolation zone that are declared
        equivalents feeding nothing.
    """

    def __init__(
        self,
        plant: Plant,
        fault: str | None,
        kept: Iterable[str],
        dispatch: str | None = None,
        idle: Set[str] = frozenset(),
    ) -> None:
        self.plant = plant
        self.kept = tuple(sorted(set(kept)))
        self.fault: Vertex | None = None if fault is None else ("section", fault)
        self._links: dict[str, tuple[Vertex, Vertex]] = {}
        full = _full_graph(plant, dispatch, idle)
        for name in self.kept:
            v: Vertex = ("device", name)
            if v in full:
                a, b = list(full[v])
                self._links[name] = (a, b)
                full.remove_node(v)
        self.target: Vertex = LOADS if self.fault is None else self.fault
        full.add_nodes_from((SOURCES, self.target))
        self._part: dict[Vertex, int] = {}
        self._load_mw: list[float] = []
        self._members: list[tuple[str, ...]] = []
        for index, part in enumerate(nx.connected_components(full)):
            names = sorted(name for kind, name in part if kind == "section")
            self._part.update(dict.fromkeys(part, index))
            self._load_mw.append(sum(plant.section[n].load_mw for n in names))
            self._members.append(tuple(names))
        in_service = [s for s in plant.sources_in(dispatch) if s.name in idle]
        self._idle = [self._part[("section", s.section)] for s in in_service]
        if fault is None:  # after the parts: the common node of the loads supplies none of them
            full.add_edges_from((LOADS, ("section", s.name)) for s in plant.sections if s.load_mw > 0)
        terminals = {SOURCES, self.target}
        for ends in self._links.values():
            terminals.update(ends)
        self._reduced = reduce_blocks(full, terminals)

    def supply(self, opened: Set[str]) -> Supply:
        """Whether the fault is fed and which kept devices carry, with some devices open."""
        graph = self._reduced.copy()
        for name, (a, b) in self._links.items():
            if name not in opened:
                v: Vertex = ("device", name)
                graph.add_edge(a, v)
                graph.add_edge(v, b)
        fed = self.fault is not None and nx.has_path(graph, SOURCES, self.target)
        graph.add_edge(SOURCES, self.target)
        for block in _blocks(graph):
            if SOURCES in block and self.target in block:
                return Supply(fed, frozenset(name for name in self._links if ("device", name) in block))
        return Supply(fed, frozenset())

    def lost(self, opened: Set[str]) -> tuple[float, tuple[str, ...]]:
        """Load (MW) and sections that no closed path joins to a source any more.

        Sections without a supply before the fault are not counted; idle sources supplied
        theirs until the fault.
        """
        before, after = self._dead(frozenset(), self._idle), self._dead(opened)
        gone = sorted(after - before)
        names = sorted(name for index in gone for name in self._members[index])
        return sum(self._load_mw[index] for index in gone), tuple(names)

    def _dead(self, opened: Set[str], supplied: Iterable[int] = ()) -> set[int]:
        joined: nx.Graph[int] = nx.Graph()
        joined.add_nodes_from(range(len(self._members)))
        joined.add_edges_from((self._part[SOURCES], index) for index in supplied)
        for name, (a, b) in self._links.items():
            if name not in opened:
                joined.add_edge(self._part[a], self._part[b])
        alive = nx.node_connected_component(joined, self._part[SOURCES])
        return set(joined) - alive


def reduce_blocks(graph: nx.Graph[Vertex], terminals: Set[Vertex]) -> nx.Graph[Vertex]:
    """A small graph with the same biconnected relations among whatever is hung on its terminals.

    The forest of blocks and cut vertices is pruned to what lies between terminals; each
    block left becomes a cycle through the vertices it still shares (an edge for two).
    """
    forest: nx.Graph[Vertex | int] = nx.Graph()
    forest.add_nodes_from(terminals)
    blocks = _blocks(graph)
    count: dict[Vertex, int] = {}
    for block in blocks:
        for v in block:
            count[v] = count.get(v, 0) + 1
    for index, block in enumerate(blocks):
        for v in block:
            if count[v] > 1 or v in terminals:
                forest.add_edge(index, v)
    leaves = [n for n in forest if forest.degree(n) <= 1 and n not in terminals]
    while leaves:
        leaf = leaves.pop()
        if leaf not in forest:
            continue
        around = list(forest[leaf])
        forest.remove_node(leaf)
        leaves.extend(n for n in around if forest.degree(n) <= 1 and n not in terminals)
    reduced: nx.Graph[Vertex] = nx.Graph()
    reduced.add_nodes_from(terminals)
    for node in forest:
        if isinstance(node, int):
            ports = sorted(v for v in forest[node] if not isinstance(v, int))
            if len(ports) == 2:
                reduced.add_edge(ports[0], ports[1])
            elif len(ports) > 2:
                nx.add_cycle(reduced, ports)
    return reduced


def _blocks(graph: nx.Graph[Vertex]) -> list[set[Vertex]]:
    return list(cast("Iterable[set[Vertex]]", nx.biconnected_components(graph)))


def _full_graph(plant: Plant, dispatch: str | None, idle: Set[str]) -> nx.Graph[Vertex]:
    graph: nx.Graph[Vertex] = nx.Graph()
    graph.add_nodes_from(("section", s.name) for s in plant.sections)
    for d in plant.devices:
        if d.closed:
            graph.add_edge(("device", d.name), ("section", d.a))
            graph.add_edge(("device", d.name), ("section", d.b))
    for s in plant.sources_in(dispatch):
        if s.name not in idle:
            graph.add_edge(("device", s.name), SOURCES)
            graph.add_edge(("device", s.name), ("section", s.section))
    return graph
