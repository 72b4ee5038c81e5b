"""One station laid out: buses are horizontal, bays are lanes, rings and diameters as one expects them.

- Buses that share bays (by selectors) lie one above the other, others side by side; the
  lanes of lines and transformers go up, those of generators and feeders down.
- Where bays stand between two buses with breakers on both their sides, one bus lies above
  and one below, each diameter a lane between them.
- Junctions in a ring without a bus form a rectangle, as many lines as can be above.
- What is none of these is laid out in rows, by its distance from the buses.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from schemesim.plant.model import Plant, SectionKind
from schemesim.report.geometry import STEP, End, Point, Sheet
from schemesim.report.station_parts import Chain, Group, Node, Parts

LANE = 1.95
"""From one bay to the next."""
DIAMETER = 3.0
BUS_GAP = 0.55
LEAD = 0.75
"""From the last device of a bay to the end of its circuit."""


def lay_out(plant: Plant, parts: Parts) -> Sheet:
    """Draw one station on a sheet of its own."""
    at = _Station(plant, parts)
    if not parts.buses:
        for group in parts.groups:
            order = ring_of(group)
            if order is not None:
                at.ring(group, order)
            elif group.junctions:
                at.rows(group, at.free())
    else:
        at.with_buses()
    at.rest()
    at.sheet.level()
    return at.sheet


def ring_of(group: Group) -> tuple[Node, ...] | None:
    """The junctions of a ring in order; None if they form none."""
    inner = [c for c in group.chains if c.a in group.junctions and c.b in group.junctions]
    degree = {j: sum((c.a == j) + (c.b == j) for c in inner) for j in group.junctions}
    if len(group.junctions) < 2 or any(d != 2 for d in degree.values()):
        return None
    order, used = [group.junctions[0]], set[int]()
    while len(order) < len(group.junctions):
        step = next((i for i, c in enumerate(inner) if i not in used and order[-1] in (c.a, c.b)), None)
        if step is None or inner[step].other(order[-1]) in order:
            return None
        used.add(step)
        order.append(inner[step].other(order[-1]))
    return tuple(order)


def diameter_of(group: Group, buses: Sequence[Node]) -> tuple[Chain, ...] | None:
    """The chains of a diameter from one bus to the other; None if it is none."""
    if not group.junctions:
        return None
    to_bus = [c for c in group.chains if c.a in buses or c.b in buses]
    if len(to_bus) != 2 or not all(c.has_breaker for c in to_bus):
        return None
    first, last = sorted(to_bus, key=lambda c: _bus_of(c, buses))
    if _bus_of(first, buses) == _bus_of(last, buses):
        return None
    here, row, seen = first.other(_bus_of(first, buses)), [first.ahead_of(_bus_of(first, buses))], set[Node]()
    while True:
        seen.add(here)
        onward = [c for c in group.at(here) if c.b in group.junctions and c.b not in seen]
        if len(onward) > 1:
            return None
        if not onward:
            break
        row.append(onward[0])
        here = onward[0].b
    end = last.other(_bus_of(last, buses))
    if here != end or seen != set(group.junctions):
        return None
    return (*row, last.ahead_of(end))


def _bus_of(chain: Chain, buses: Sequence[Node]) -> Node:
    return chain.a if chain.a in buses else chain.b


@dataclass
class _Station:
    plant: Plant
    parts: Parts

    def __post_init__(self) -> None:
        self.sheet = Sheet()

    def free(self) -> float:
        """The first place to the right of all that is drawn."""
        return self.sheet.box()[2] + LANE if self.sheet.spots else 0.0

    def rest(self) -> None:
        """What found no place in any pattern: a lane of its own on the right, joined to its bus by a wire."""
        groups = [Group((), (c,)) for c in self.parts.couplers]
        for group in (*self.parts.groups, *groups):
            left = tuple(c for c in group.chains if c.devices[0].name not in self.sheet.spots)
            if left and group.junctions and len(left) == len(group.chains):
                self.rows(group, self.free())
                left = tuple(c for c in left if c.devices[0].name not in self.sheet.spots)
            for chain in left:
                x, length = self.free(), (len(chain.devices) + 1) * STEP
                self.sheet.chain(chain, [(x, 0.0), (x, length)])
                for node, y, up in ((chain.a, 0.0, -1), (chain.b, length, 1)):
                    self.finish(node, x, y, up)
                    if node.section in self.sheet.buses:
                        side = self.sheet.buses[node.section][1]
                        self.sheet.wire(node.section, (x, y), (x + 0.3 * up, y), (x + 0.3 * up, side[1]), side)

    def goes_up(self, circuits: Sequence[Node]) -> bool:
        """Lines and transformers lead up, to other stations."""
        kinds = {self.plant.section[n.section].kind for n in circuits}
        return bool(kinds & {SectionKind.LINE, SectionKind.TRANSFORMER})

    def end(self, node: Node, x: float, y: float, up: int) -> None:
        self.sheet.ends.append(End(node.section, self.parts.name, node.at, x, y, up))

    def with_buses(self) -> None:
        """Buses, and what hangs on them."""
        buses = self.parts.buses
        diameters = [(g, d) for g in self.parts.groups if (d := diameter_of(g, buses))]
        lanes = [g for g in self.parts.groups if not any(g is other for other, _ in diameters)]
        if diameters:
            self.between(diameters, lanes)
            return
        shared = any(len({n for c in g.chains for n in (c.a, c.b) if n in buses}) > 1 for g in lanes)
        if shared:
            heights = {bus: -i * BUS_GAP for i, bus in enumerate(buses)}
            right = self.lanes(lanes, heights, 0.0, {1: 0.0, -1: 0.0})
            for coupler in self.parts.couplers:
                right = self.coupler(coupler, heights, right)
            for bus, y in heights.items():
                self.bus(bus, 0.0 - LANE / 2, right - LANE / 2, y)
        else:
            self.side_by_side(lanes)

    def bus(self, bus: Node, x0: float, x1: float, y: float) -> None:
        self.sheet.buses[bus.section] = (x0, y), (x1, y)

    def side_by_side(self, lanes: Sequence[Group]) -> None:
        """Buses on one level, the chain between two neighbours in the gap between them."""
        buses, x = self.parts.buses, 0.0
        ends: dict[Node, tuple[float, float]] = {}
        for i, bus in enumerate(buses):
            own = [g for g in lanes if any(bus in (c.a, c.b) for c in g.chains)]
            right = max(self.lanes(own, {bus: 0.0}, x, {1: 0.0, -1: 0.0}), x + LANE)
            ends[bus] = x - LANE / 2, right - LANE / 2
            following = buses[i + 1 : i + 2]
            joining = [c for c in self.parts.couplers if following and {c.a, c.b} == {bus, following[0]}]
            x = right + (max((len(c.devices) for c in joining), default=1) + 1) * STEP
        heights = dict.fromkeys(buses, 0.0)
        far = x
        for chain in self.parts.couplers:
            i, j = sorted((buses.index(chain.a), buses.index(chain.b)))
            if j == i + 1 and not any(c is not chain and {c.a, c.b} == {chain.a, chain.b} for c in self.parts.couplers):
                self.sheet.chain(
                    chain.ahead_of(buses[i]), [(ends[buses[i]][1], 0.0), (ends[buses[j]][0], 0.0)], side=(0.0, -0.42)
                )
            else:
                depth = -(len(chain.devices) + 2) * STEP
                here, there = ends[buses[i]][1] - 0.3, ends[buses[j]][0] + 0.3
                path = [(here, 0.0), (here, depth), (there, depth), (there, 0.0)]
                self.sheet.chain(chain.ahead_of(buses[i]), path, leg=0)
                far = max(far, there)
        for bus in heights:
            self.bus(bus, *ends[bus], 0.0)

    def lanes(self, groups: Sequence[Group], heights: dict[Node, float], x: float, used: dict[int, float]) -> float:
        """Bays up and down from buses that lie one above the other; the first free place is returned."""
        for group in groups:
            up = 1 if self.goes_up(group.circuits) else -1
            width = max(len(group.circuits), 1) * LANE
            if not group.junctions:
                self.simple(group.chains[0], heights, x + used[up], up)
            elif len(group.junctions) == 1:
                self.selected(group, heights, x + used[up], up)
            else:
                width = self.rows(group, x + used[up], heights, up)
            used[up] += width
        return x + max(used.values(), default=0.0)

    def simple(self, chain: Chain, heights: dict[Node, float], x: float, up: int) -> None:
        """A bay straight from its bus."""
        bus = _bus_of(chain, self.parts.buses)
        if bus not in heights:  # from circuit to circuit
            self.loose(chain, x, up)
            return
        c = chain.ahead_of(bus)
        start = heights[bus]
        border = max(heights.values()) if up == 1 else min(heights.values())
        y = border + up * (len(c.devices) + 1) * STEP
        self.sheet.dots.append((x, start))
        self.sheet.wire(c.a.section, (x, start), (x, border))
        self.sheet.chain(c, [(x, border), (x, y)])
        self.finish(c.b, x, y, up)

    def loose(self, chain: Chain, x: float, up: int) -> None:
        """A chain between two circuits, no bus at all."""
        length = (len(chain.devices) + 1) * STEP
        self.sheet.chain(chain, [(x, 0.0), (x, up * length)])
        self.finish(chain.a, x, 0.0, -up)
        self.finish(chain.b, x, up * length, up)

    def finish(self, node: Node, x: float, y: float, up: int) -> None:
        """The last piece of a circuit up to its end."""
        if node.circuit:
            self.sheet.wire(node.section, (x, y), (x, y + up * LEAD))
            self.end(node, x, y + up * LEAD, up)

    def selected(self, group: Group, heights: dict[Node, float], x: float, up: int) -> None:
        """A bay with a junction that selectors join to buses."""
        (junction,) = group.junctions
        chains = group.at(junction)
        selectors = sorted((c for c in chains if c.b in heights), key=lambda c: c.b)
        border = max(heights.values()) if up == 1 else min(heights.values())
        most = max((len(c.devices) for c in selectors), default=0)
        y = border + up * (most + 1) * STEP
        columns = [x + (i - (len(selectors) - 1) / 2) * 0.62 for i in range(len(selectors))]
        for n, (c, column) in enumerate(zip(selectors, columns, strict=True)):
            self.sheet.dots.append((column, heights[c.b]))
            self.sheet.wire(c.b.section, (column, heights[c.b]), (column, border))
            side = (-0.2, 0.17) if n == 0 and len(selectors) > 1 else (0.2, -0.17)
            self.sheet.chain(c, [(column, y), (column, border)], side=side)
        if columns:
            self.sheet.wire(junction.section, (min(*columns, x), y), (max(*columns, x), y))
        onward = [c for c in chains if c.b not in heights]
        for i, c in enumerate(onward):
            column = x + i * LANE
            self.sheet.wire(junction.section, (x, y), (column, y))
            top = y + up * (len(c.devices) + 1) * STEP
            self.sheet.chain(c, [(column, y), (column, top)])
            self.finish(c.b, column, top, up)

    def coupler(self, chain: Chain, heights: dict[Node, float], x: float) -> float:
        """A chain between buses one above the other: down from the upper one, and up to the lower."""
        upper, lower = sorted((chain.a, chain.b), key=lambda n: -heights[n])
        depth = min(heights.values()) - (len(chain.devices) + 1) * STEP
        back = x - 0.55
        path = [(x, heights[upper]), (x, depth), (back, depth), (back, heights[lower])]
        self.sheet.chain(chain.ahead_of(upper), path, leg=0)
        self.sheet.dots += [path[0], path[-1]]
        return x + LANE

    def between(self, diameters: Sequence[tuple[Group, tuple[Chain, ...]]], lanes: Sequence[Group]) -> None:
        """Diameters between an upper bus and a lower one."""
        upper = {chains[0].a for _, chains in diameters}
        height = max(sum((len(c.devices) + 1) * STEP for c in chains) for _, chains in diameters)
        heights = {bus: height if bus in upper else 0.0 for bus in self.parts.buses}
        x = 0.0
        for group, chains in diameters:
            self.diameter(group, chains, x, height)
            x += DIAMETER
        right = x
        for bus, y in heights.items():
            own = [g for g in lanes if any(bus in (c.a, c.b) for c in g.chains)]
            taken = {1: x if y else 0.0, -1: 0.0 if y else x}
            if own:
                right = max(right, self.lanes(own, {bus: y}, 0.0, {1: x, -1: x} if taken else taken))
        for coupler in self.parts.couplers:
            side = [(right, heights[coupler.a]), (right, heights[coupler.b])]
            if side[0][1] == side[1][1]:
                side = [side[0], (right, height / 2), (right + LANE / 2, height / 2), (right + LANE / 2, side[1][1])]
            self.sheet.chain(coupler, side)
            right += LANE
        for bus, y in heights.items():
            self.bus(bus, -0.8, right - DIAMETER + 1.9, y)

    def diameter(self, group: Group, chains: Sequence[Chain], x: float, height: float) -> None:
        """One lane between two buses, circuits leaving it sideways, then up or down."""
        share = height / len(chains)
        self.sheet.dots += [(x, height), (x, 0.0)]
        for i, chain in enumerate(chains):
            self.sheet.chain(chain, [(x, height - i * share), (x, height - (i + 1) * share)], side=(-0.28, 0.0))
        inner = len(chains) - 1
        for i, chain in enumerate(chains[:-1]):
            junction, y = chain.b, height - (i + 1) * share
            leaving = [c for c in group.at(junction) if c.b.circuit]
            self.sheet.dots.append((x, y))
            for n, c in enumerate(leaving):
                up = (1 if self.goes_up([c.b]) else -1) if inner == 1 else (1 if i < inner / 2 else -1)
                column = x + 1.15 + n * 0.5
                end = (height if up == 1 else 0.0) + up * 0.45
                bend: Point = (column, y)
                self.sheet.chain(c, [(x, y), bend, (column, end)], leg=0 if len(c.devices) < 2 else 1, side=(0.0, 0.3))
                self.finish(c.b, column, end, up)

    def ring(self, group: Group, order: tuple[Node, ...]) -> None:
        """A rectangle of breakers, circuits leaving up and down."""
        order = self._turned(group, order)
        n = len(order)
        above, below = order[: (n + 1) // 2], order[(n + 1) // 2 :]
        inner = [c for c in group.chains if c.a in order and c.b in order]
        most = max(len(c.devices) for c in inner)
        left = self.free()
        pitch, height = max((most + 1) * STEP, 2.1), (most + 1) * STEP + 0.5
        right = left + (len(above) - 1) * pitch
        places: dict[Node, Point] = {j: (left + i * pitch, height) for i, j in enumerate(above)}
        for i, j in enumerate(reversed(below)):
            share = i / (len(below) - 1) if len(below) > 1 else 0.5
            places[j] = left + share * (right - left), 0.0
        left_over = list(inner)
        for i, j in enumerate(order):
            k = order[(i + 1) % n]
            chain = next(c for c in left_over if {c.a, c.b} == {j, k})
            left_over.remove(chain)
            p, q = places[j], places[k]
            if p[1] == q[1]:
                self.sheet.chain(chain.ahead_of(j), [p, q], side=(0.0, -0.4 if p[1] else 0.4))
                continue
            away = 1.3 if len(above) == 1 else 0.0
            x = right + away if i < n - 1 else left - away
            path = [p, (x, p[1]), (x, q[1]), q]
            tidy = [a for a, b in zip(path, [*path[1:], None], strict=True) if a != b]
            upright = next(m for m in range(len(tidy) - 1) if tidy[m][0] == tidy[m + 1][0])
            self.sheet.chain(chain.ahead_of(j), tidy, leg=upright)
        for j, (x, y) in places.items():
            up = 1 if j in above else -1
            for m, c in enumerate(c for c in group.at(j) if c.b not in order):
                column, top = x + m * 0.6, y + up * (len(c.devices) + 1) * STEP
                self.sheet.dots.append((x, y))
                self.sheet.wire(j.section, (x, y), (column, y))
                self.sheet.chain(c, [(column, y), (column, top)])
                self.finish(c.b, column, top, up)

    def _turned(self, group: Group, order: tuple[Node, ...]) -> tuple[Node, ...]:
        """The ring turned so that as many lines as can be are above."""
        n = len(order)
        lines = [self.goes_up([c.b for c in group.at(j) if c.b.circuit]) for j in order]
        best = max(range(n), key=lambda s: (sum(lines[(s + i) % n] for i in range((n + 1) // 2)), -s))
        return order[best:] + order[:best]

    def rows(self, group: Group, x: float = 0.0, heights: dict[Node, float] | None = None, up: int = -1) -> float:
        """Anything else: junctions in rows by their distance from the buses; how wide it is is returned."""
        heights = heights or {}
        depth = _depths(group, heights)
        most = max((len(c.devices) for c in group.chains), default=1)
        pitch = (most + 2) * STEP
        border = (max(heights.values()) if up == 1 else min(heights.values())) if heights else 0.0
        places: dict[Node, Point] = {}
        column = x
        for j in sorted(depth, key=lambda j: (depth[j], j)):
            places[j] = column, border + up * pitch * depth[j]
            column += LANE
        drawn: dict[frozenset[Node], int] = {}
        for c in group.chains:
            if c.a.circuit or c.b.circuit or c.a == c.b:  # a loop finds its place at the end
                continue
            pair = frozenset((c.a, c.b))
            shift = drawn.get(pair, 0) * 0.5
            drawn[pair] = drawn.get(pair, 0) + 1
            a, b = sorted((c.a, c.b), key=lambda n: (n in places, depth.get(n, 0), n))
            bx, by = places[b]
            if a in places:
                ax, ay = places[a]
                path = [(ax, ay), (ax + shift, ay - shift), (bx + shift, ay - shift), (bx, by)]
            else:
                path = [(bx + shift, heights.get(a, border)), (bx + shift, by), (bx, by)]
                self.sheet.dots.append(path[0])
            tidy = [p for p, q in zip(path, [*path[1:], None], strict=True) if p != q]
            self.sheet.chain(c.ahead_of(a), tidy)
        for j, (jx, jy) in places.items():
            self.sheet.dots.append((jx, jy))
            for m, c in enumerate(c for c in group.at(j) if c.b.circuit):
                out = jx + 0.6 * (m + 1), jy + up * (len(c.devices) + 1) * STEP
                self.sheet.wire(j.section, (jx, jy), (out[0], jy))
                self.sheet.chain(c, [(out[0], jy), out])
                self.finish(c.b, *out, up)
        return column - x


def _depths(group: Group, heights: dict[Node, float]) -> dict[Node, int]:
    """How many chains each junction is away from the buses (or from the first junction)."""
    start: Callable[[Node], bool] = lambda j: any(c.b in heights for c in group.at(j))  # noqa: E731
    depth = {j: 1 for j in group.junctions if start(j)} or {group.junctions[0]: 1}
    todo = list(depth)
    while todo:
        here = todo.pop(0)
        for c in group.at(here):
            if c.b in group.junctions and c.b not in depth:
                depth[c.b] = depth[here] + 1
                todo.append(c.b)
    return depth
