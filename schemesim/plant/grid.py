"""The grid as every fault sees it from afar: parts between lines and transformers, each reduced once.

What carries fault current is a matter of biconnected blocks (rule R8). A block of which
only some vertices matter is replaced by a cycle through these. That changes no block
relation among the rest: what is outside is in the block's biconnected part exactly when a path
through it joins two different vertices of that block, and two devices outside share a
cycle only where no edge of it is used.

The plant falls into parts (mostly stations) once its lines and transformers are taken away. A part in
which nothing opens or is measured is reduced to what it is between its lines,
transformers and sources; that is kept for all faults, so a fault costs its neighbourhood
and a handful of edges for each part beyond.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Set
from dataclasses import dataclass
from functools import cached_property
from typing import NamedTuple, cast

import networkx as nx

from schemesim.plant.model import Plant, SectionKind

Vertex = tuple[str, str]
"""Kind ('section', 'device', 'grid') and name."""

SOURCES: Vertex = ("grid", "sources")
LOADS: Vertex = ("grid", "loads")

_SHARED = (SectionKind.LINE, SectionKind.TRANSFORMER)


class Link(NamedTuple):
    """A closed device or a source in service, and what it joins."""

    name: str
    a: Vertex
    b: Vertex


class Piece(NamedTuple):
    """Sections of a part that hang together: its ports among them, and those inside."""

    ports: tuple[Vertex, ...]
    inside: tuple[str, ...]


@dataclass(frozen=True)
class Part:
    """What hangs together once lines and transformers are taken away.

    Attributes
    ----------
    links : tuple of Link
    inside : tuple of str
        Sections that no other part touches.
    loads : tuple of Vertex
        Sections with load, inside or shared, where loads count (runs without a fault).
    """

    links: tuple[Link, ...]
    inside: tuple[str, ...]
    loads: tuple[Vertex, ...] = ()

    @cached_property
    def ports(self) -> frozenset[Vertex]:
        """The sources and the shared sections it touches."""
        own = {("section", name) for name in self.inside}
        touched = {v for link in self.links for v in (link.a, link.b)}.union(self.loads)
        return frozenset(touched - own)

    @cached_property
    def reduced(self) -> tuple[tuple[Vertex, Vertex], ...]:
        """Edges with the same block relations between its ports (and the loads)."""
        graph: nx.Graph[Vertex] = nx.Graph()
        for name, a, b in self.links:
            nx.add_path(graph, (a, ("device", name), b))
        graph.add_edges_from((LOADS, v) for v in self.loads)
        ports = self.ports | {LOADS} if self.loads else self.ports
        return tuple(without_chains(reduce_blocks(graph, ports), ports).edges)

    @cached_property
    def pieces(self) -> tuple[Piece, ...]:
        """Its connected pieces that touch a port; what touches none has no supply and never will."""
        graph: nx.Graph[Vertex] = nx.Graph()
        graph.add_edges_from((a, b) for _, a, b in self.links)
        found = []
        for piece in nx.connected_components(graph):
            ports = tuple(sorted(piece & self.ports))
            if ports:
                found.append(Piece(ports, tuple(sorted(name for _, name in piece.difference(ports)))))
        return tuple(found)


@dataclass(frozen=True)
class Grid:
    """A plant in one state of its sources, divided into parts.

    Attributes
    ----------
    parts : tuple of Part
    of_link : mapping of device or source name to its part
        Open devices and sources out of service are in none.
    of_section : mapping of section name to the part it is inside of
    """

    parts: tuple[Part, ...]
    of_link: Mapping[str, int]
    of_section: Mapping[str, int]


def grid_of(plant: Plant, dispatch: str | None = None, *, loads: bool = False) -> Grid:
    """Divide a plant into parts.

    Parameters
    ----------
    plant : Plant
    dispatch : str or None
        Dispatch state; all sources by default.
    loads : bool
        Loads count: for a run without a fault.

    Raises
    ------
    InputError
        If the dispatch is not known.
    """
    links = [Link(d.name, ("section", d.a), ("section", d.b)) for d in plant.devices if d.closed]
    links += [Link(s.name, SOURCES, ("section", s.section)) for s in plant.sources_in(dispatch)]
    shared = {s.name for s in plant.sections if s.kind in _SHARED}
    graph: nx.Graph[Vertex] = nx.Graph()
    graph.add_nodes_from(("section", s.name) for s in plant.sections if s.name not in shared)
    for link in links:
        graph.add_node(("device", link.name))
        ends = (v for v in (link.a, link.b) if v in graph)
        graph.add_edges_from((("device", link.name), v) for v in ends)
    of: dict[Vertex, int] = {}
    inside: list[tuple[str, ...]] = []
    for part in nx.connected_components(graph):
        of.update(dict.fromkeys(part, len(inside)))
        inside.append(tuple(sorted(name for kind, name in part if kind == "section")))
    mine: list[list[Link]] = [[] for _ in inside]
    for link in links:
        mine[of[("device", link.name)]].append(link)
    fed: list[list[Vertex]] = [[] for _ in inside]
    alone: list[Part] = []
    for s in plant.sections:
        if loads and s.load_mw > 0:
            v: Vertex = ("section", s.name)
            if v in of:
                fed[of[v]].append(v)
            else:
                alone.append(Part((), (), (v,)))
    parts = [Part(tuple(m), i, tuple(f)) for m, i, f in zip(mine, inside, fed, strict=True)]
    return Grid(
        parts=(*parts, *alone),
        of_link={name: n for (kind, name), n in of.items() if kind == "device"},
        of_section={name: n for (kind, name), n in of.items() if kind == "section"},
    )


def reduce_blocks(graph: nx.Graph[Vertex], terminals: Set[Vertex]) -> nx.Graph[Vertex]:
    """A small graph with the same biconnected relations among whatever is hung on its terminals.

    The forest of blocks and cut vertices is pruned to what lies between terminals; each
    block left becomes a cycle through the vertices it still shares (an edge for two).
    """
    forest: nx.Graph[Vertex | int] = nx.Graph()
    forest.add_nodes_from(terminals)
    blocks = blocks_of(graph)
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


def without_chains(graph: nx.Graph[Vertex], terminals: Set[Vertex]) -> nx.Graph[Vertex]:
    """The graph with each vertex of two neighbours that is no terminal replaced by an edge between these."""
    short = graph.copy()
    for v in graph:
        if v not in terminals and short.degree(v) == 2:
            a, b = short[v]
            short.remove_node(v)
            short.add_edge(a, b)
    return short


def blocks_of(graph: nx.Graph[Vertex]) -> list[set[Vertex]]:
    """The biconnected blocks of a graph, each as its vertices."""
    return list(cast("Iterable[set[Vertex]]", nx.biconnected_components(graph)))
