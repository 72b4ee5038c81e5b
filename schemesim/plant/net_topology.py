"""What hangs together, in one sequence, once some buses have fallen into pieces.

The buses that fall into pieces are cut out of the network; what is left of it are parts, found once for such a set of
buses. For each topology only the pieces and the parts around them are joined anew.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from schemesim.plant.net_equations import Equations
from schemesim.plant.net_matrices import Flags, Ints
from schemesim.plant.net_station import Split


@dataclass(frozen=True)
class Cut:
    """Some buses cut out of the network, in one sequence.

    Attributes
    ----------
    sequence : int
    buses : tuple of int
        In the order they were cut.
    label, earthed : arrays
        Part each bus is in, and whether each part is earthed.
    parts : mapping of part to vertex
        Parts beside the buses cut out.
    fixed : tuple of int
        Vertices of parts that are earthed, and of those with an anchor.
    ways : mapping of bus to (vertex or -1, bus, terminal) triples for each of its terminals
        Where each terminal leads: to a part, or to a terminal (by place) of another bus cut out.
    leads : mapping of bus to whether each of its terminals leads to earth
    anchored : frozenset of int
    """

    sequence: int
    buses: tuple[int, ...]
    label: Ints
    earthed: Flags
    parts: Mapping[int, int]
    fixed: tuple[tuple[int, ...], tuple[int, ...]]
    ways: Mapping[int, tuple[tuple[tuple[int, int, int], ...], ...]]
    leads: Mapping[int, tuple[bool, ...]]
    anchored: frozenset[int]


@dataclass(frozen=True)
class Joined:
    """The pieces of the buses cut out, in one topology and one sequence.

    Attributes
    ----------
    first : mapping of bus to the vertex of its first piece
    group : tuple of int
        Group each vertex is in; that of vertex 0 is earthed.
    main : mapping of bus to the piece that keeps the bus's place in the bus matrix
    parted : tuple of (bus, piece)
        Pieces whose voltage is an unknown of its own. Others stay tied to the main piece: they draw nothing,
        having no other way to earth.
    """

    first: Mapping[int, int]
    group: tuple[int, ...]
    main: Mapping[int, int]
    parted: tuple[tuple[int, int], ...]


def cut_of(equations: Equations, sequence: int, buses: Sequence[int]) -> Cut:
    """Cut buses out of the network in one sequence (negative: as positive)."""
    s = min(sequence, 1)
    label, earthed = equations.without(s, buses)
    anchored = equations.matrix(s).anchors
    inside = {b: {t: n for n, t in enumerate(equations.bus(b).terminals)} for b in buses}
    parts: dict[int, int] = {}
    ways = {}
    for b in buses:
        mine = []
        for t in equations.bus(b).terminals:
            to = []
            for other in equations.partners[s].get(t, ()):
                there = int(equations.bus_at[other])
                if there in inside:
                    to.append((-1, there, inside[there][other]))
                else:
                    to.append((parts.setdefault(int(label[there]), 1 + len(parts)), -1, -1))
            mine.append(tuple(to))
        ways[b] = tuple(mine)
    leads = {b: tuple(bool(equations.elements.grounded[s][t]) for t in equations.bus(b).terminals) for b in buses}
    real = tuple(v for part, v in parts.items() if earthed[part])
    held = {int(label[b]) for b in anchored if b not in inside}
    return Cut(
        sequence=s,
        buses=tuple(buses),
        label=label,
        earthed=earthed,
        parts=parts,
        fixed=(real, tuple(v for part, v in parts.items() if part in held)),
        ways=ways,
        leads=leads,
        anchored=anchored & frozenset(buses),
    )


def joined(equations: Equations, cut: Cut, splits: Mapping[int, Split]) -> Joined:
    """Join pieces and parts in one topology; ``splits`` has the buses with something open."""
    whole: frozenset[str] = frozenset()
    split = {b: splits[b] if b in splits else equations.split(b, whole) for b in cut.buses}
    count = 1 + len(cut.parts)
    first = {}
    for b in cut.buses:
        first[b] = count
        count += split[b].pieces
    parent = list(range(count))

    def root(v: int) -> int:
        while parent[v] != v:
            parent[v] = parent[parent[v]]
            v = parent[v]
        return v

    for v in cut.fixed[0]:
        parent[root(v)] = root(0)
    for b in cut.buses:
        base, at = first[b], split[b].piece_at
        for n, (to, lead) in enumerate(zip(cut.ways[b], cut.leads[b], strict=True)):
            here = root(base + at[n])
            if lead:
                parent[here] = root(0)
                here = root(here)
            for vertex, bus, terminal in to:
                parent[root(vertex if bus < 0 else first[bus] + split[bus].piece_at[terminal])] = here
    group = tuple(root(v) for v in range(count))
    main = {}
    for b in cut.buses:
        pieces = range(split[b].pieces)
        main[b] = next((p for p in pieces if group[first[b] + p] == group[0]), 0)
    for v in cut.fixed[1]:
        parent[root(v)] = root(0)
    for b in cut.anchored:
        parent[root(first[b] + main[b])] = root(0)
    parted = []
    for b in cut.buses:
        for p in range(split[b].pieces):
            if p != main[b]:
                here, there = root(first[b] + p), root(first[b] + main[b])
                if here == there:
                    parted.append((b, p))
                parent[here] = there
    return Joined(first, group, main, tuple(parted))


@dataclass(frozen=True)
class State:
    """Pieces of one topology in one sequence."""

    cut: Cut
    joined: Joined

    def group(self, bus: int, piece: int) -> int:
        """Group of a piece of a bus; -1 - part for what touches no bus cut out."""
        if bus in self.joined.first:
            return self.joined.group[self.joined.first[bus] + piece]
        part = int(self.cut.label[bus])
        vertex = self.cut.parts.get(part)
        return -1 - part if vertex is None else self.joined.group[vertex]

    def earthed(self, bus: int, piece: int) -> bool:
        """Whether a piece of a bus is joined to earth (in positive sequence: to a source)."""
        group = self.group(bus, piece)
        return bool(self.cut.earthed[-1 - group]) if group < 0 else group == self.joined.group[0]


class Topologies:
    """The buses cut out so far, in one sequence; it grows."""

    def __init__(self, equations: Equations, sequence: int) -> None:
        self.equations = equations
        self.sequence = sequence
        self._cut: Cut | None = None

    def state(self, splits: Mapping[int, Split]) -> State:
        """The pieces of a topology."""
        apart = [b for b, split in splits.items() if split.pieces > 1]
        if self._cut is None or not set(apart) <= set(self._cut.buses):
            before = self._cut.buses if self._cut is not None else ()
            self._cut = cut_of(self.equations, self.sequence, tuple(dict.fromkeys((*before, *apart))))
        return State(self._cut, joined(self.equations, self._cut, splits))
