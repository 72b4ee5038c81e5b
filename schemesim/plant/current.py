"""Which devices carry fault current, by connectivity alone (rule R8).

A device carries fault current while it lies on a simple path from a source to the
fault: it is in the same biconnected part as an edge added between the sources (one
common node) and the fault. Load stubs carry none.

Only the devices that may open or are measured in the neighbourhood of a fault matter,
so the rest of the grid is reduced once per fault; see :mod:`schemesim.plant.grid`.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence, Set
from dataclasses import dataclass

import networkx as nx

from schemesim.plant.grid import LOADS, SOURCES, Grid, Vertex, grid_of, reduce_blocks, without_chains
from schemesim.plant.model import Plant


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
    grid : Grid or None
        The plant in this dispatch state, divided into parts, with loads where there is no fault;
        made here by default.
    """

    def __init__(
        self,
        plant: Plant,
        fault: str | None,
        kept: Iterable[str],
        dispatch: str | None = None,
        idle: Set[str] = frozenset(),
        grid: Grid | None = None,
    ) -> None:
        self.plant = plant
        self.kept = tuple(sorted(set(kept)))
        self.fault: Vertex | None = None if fault is None else ("section", fault)
        self.target: Vertex = LOADS if fault is None else ("section", fault)
        if grid is None:
            grid = grid_of(plant, dispatch, loads=fault is None)
        idle_ends: list[Vertex] = [("section", plant.source[n].section) for n in sorted(idle) if n in grid.of_link]
        near = {grid.of_link[name] for name in (*self.kept, *idle) if name in grid.of_link}
        if fault is not None and fault in grid.of_section:
            near.add(grid.of_section[fault])
        self._links: dict[str, tuple[Vertex, Vertex]] = {}
        self._inside: dict[Vertex, tuple[str, ...]] = {}
        graph: nx.Graph[Vertex] = nx.Graph()
        joined: nx.Graph[Vertex] = nx.Graph()
        for v in (SOURCES, self.target, *idle_ends):
            graph.add_node(v)
            joined.add_node(v)
        taken = set(self.kept)
        for n, part in enumerate(grid.parts):
            if n not in near:
                graph.add_edges_from(part.reduced)
                for ports, inside in part.pieces:
                    nx.add_path(joined, ports)
                    self._inside[ports[0]] = self._inside.get(ports[0], ()) + inside
                continue
            joined.add_nodes_from(("section", name) for name in part.inside)
            for name, a, b in part.links:
                if name in idle:
                    continue
                if name in taken:
                    self._links[name] = (a, b)
                    joined.add_nodes_from((a, b))
                else:
                    nx.add_path(graph, (a, ("device", name), b))
                    joined.add_edge(a, b)
            graph.add_edges_from((LOADS, v) for v in part.loads)
        self._part: dict[Vertex, int] = {}
        self._vertices = [tuple(part) for part in nx.connected_components(joined)]
        for index, vertices in enumerate(self._vertices):
            self._part.update(dict.fromkeys(vertices, index))
        self._idle = [self._part[v] for v in idle_ends]
        terminals = {SOURCES, self.target}
        for ends in self._links.values():
            terminals.update(ends)
        self._reduced = without_chains(reduce_blocks(graph, terminals), terminals)
        places = [*sorted(self._reduced), *(("device", name) for name in self._links)]
        self._place = {v: n for n, v in enumerate(places)}
        self._next: list[list[int]] = [[] for _ in places]
        edges = [*self._reduced.edges]
        edges += [(("device", name), end) for name, ends in self._links.items() for end in ends]
        for v, w in edges:
            self._next[self._place[v]].append(self._place[w])
            self._next[self._place[w]].append(self._place[v])

    def supply(self, opened: Set[str]) -> Supply:
        """Whether the fault is fed and which kept devices carry, with some devices open."""
        shut = {self._place[("device", name)] for name in opened if name in self._links}
        fed, between = on_simple_paths(self._next, self._place[SOURCES], self._place[self.target], shut)
        carrying = frozenset(name for name in self._links if self._place[("device", name)] in between)
        return Supply(self.fault is not None and fed, carrying)

    def lost(self, opened: Set[str]) -> tuple[float, tuple[str, ...]]:
        """Load (MW) and sections that no closed path joins to a source any more.

        Sections without a supply before the fault are not counted; idle sources supplied
        theirs until the fault.
        """
        before, after = self._dead(frozenset(), self._idle), self._dead(opened)
        names = sorted(name for index in after - before for name in self._members(index))
        return sum(self.plant.section[name].load_mw for name in names), tuple(names)

    def _members(self, index: int) -> Iterable[str]:
        for vertex in self._vertices[index]:
            kind, name = vertex
            if kind == "section":
                yield name
            yield from self._inside.get(vertex, ())

    def _dead(self, opened: Set[str], supplied: Iterable[int] = ()) -> set[int]:
        joined: nx.Graph[int] = nx.Graph()
        joined.add_nodes_from(range(len(self._vertices)))
        joined.add_edges_from((self._part[SOURCES], index) for index in supplied)
        for name, (a, b) in self._links.items():
            if name not in opened:
                joined.add_edge(self._part[a], self._part[b])
        alive = nx.node_connected_component(joined, self._part[SOURCES])
        return set(joined) - alive


def on_simple_paths(around: Sequence[Sequence[int]], start: int, end: int, without: Set[int]) -> tuple[bool, set[int]]:
    """Whether two vertices are joined, and every vertex on a simple path between them.

    These are the vertices of the biconnected block of an edge added between the two. One search from
    ``start`` along that edge numbers what it meets; a vertex stays in the block of its parent if
    it, or what was met through it, leads back to before the parent (Hopcroft and Tarjan, Algorithm 447,
    Communications of the ACM 16, 1973).

    Parameters
    ----------
    around : sequence of sequences of int
        Neighbours of each vertex.
    start, end : int
        Two different vertices.
    without : set of int
        Vertices left out, neither of the two among them.

    Examples
    --------
    A path 0-1-2 with a stub 3 at its middle, and 4 apart:

    >>> on_simple_paths([[1], [0, 2, 3], [1], [1], []], 0, 2, set())
    (True, {0, 1, 2})
    >>> on_simple_paths([[1], [0, 2, 3], [1], [1], []], 0, 4, set())
    (False, {0, 4})
    """
    number = [-1] * len(around)
    low = [0] * len(around)
    parent = [start] * len(around)
    for v in without:
        number[v] = len(around)  # as if met after everything: it leads nowhere
    number[start], number[end], low[end] = 0, 1, 1
    met, joined = [end], start in around[end]
    stack = [(end, iter(around[end]))]
    while stack:
        v, ways = stack[-1]
        for w in ways:
            if number[w] < 0:
                number[w] = low[w] = len(met) + 1
                parent[w] = v
                met.append(w)
                stack.append((w, iter(around[w])))
                break
            if w != parent[v]:
                low[v] = min(low[v], number[w])
                joined |= w == start
        else:
            stack.pop()
            if stack:
                up = parent[v]
                low[up] = min(low[up], low[v])
    between = {start, end}
    for w in met[1:]:
        if parent[w] in between and low[w] < number[parent[w]]:
            between.add(w)
    return joined, between
