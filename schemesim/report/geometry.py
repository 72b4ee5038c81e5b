"""Where everything of a one-line diagram stands: wires of sections, spots of devices, ends of circuits.

Lengths are in steps of a device; y points up.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, replace
from itertools import pairwise

from schemesim.report.station_parts import Chain

Point = tuple[float, float]
Wire = tuple[Point, ...]

STEP = 0.62
"""From one device of a chain to the next."""


@dataclass(frozen=True, slots=True)
class Spot:
    """Where a device stands; ``across`` if its wire is horizontal; its label goes (dx, dy) away."""

    x: float
    y: float
    across: bool
    dx: float = 0.3
    dy: float = 0.0


@dataclass(frozen=True, slots=True)
class End:
    """Where a circuit leaves a station: up (1) or down (-1)."""

    section: str
    station: str
    at: float
    x: float
    y: float
    up: int


@dataclass
class Sheet:
    """A drawing under way."""

    wires: dict[str, list[Wire]] = field(default_factory=dict)
    spots: dict[str, Spot] = field(default_factory=dict)
    ends: list[End] = field(default_factory=list)
    buses: dict[str, tuple[Point, Point]] = field(default_factory=dict)
    dots: list[Point] = field(default_factory=list)

    def wire(self, section: str, *points: Point) -> None:
        """Add a wire of a section."""
        if len(points) > 1:
            self.wires.setdefault(section, []).append(points)

    def chain(self, chain: Chain, path: Sequence[Point], *, leg: int | None = None, side: Point = (0.3, 0.0)) -> None:
        """Lay a chain along a path, its devices in the middle of one leg (the longest by default)."""
        legs = list(pairwise(path))
        lengths = [math.dist(p, q) for p, q in legs]
        chosen = max(range(len(legs)), key=lambda i: (lengths[i], -i)) if leg is None else leg
        (x0, y0), (x1, y1) = legs[chosen]
        count = len(chain.devices)
        gap = min(STEP, lengths[chosen] / (count + 1))
        middle = lengths[chosen] / 2
        shares = [(middle + (i - (count - 1) / 2) * gap) / lengths[chosen] for i in range(count)]
        points = [(x0 + s * (x1 - x0), y0 + s * (y1 - y0)) for s in shares]
        across = abs(x1 - x0) > abs(y1 - y0)
        for d, (x, y) in zip(chain.devices, points, strict=True):
            self.spots[d.name] = Spot(x, y, across, *side)
        self.wire(chain.a.section, *path[: chosen + 1], points[0])
        for section, (p, q) in zip(chain.between, pairwise(points), strict=True):
            self.wire(section, p, q)
        self.wire(chain.b.section, points[-1], *path[chosen + 1 :])

    def box(self) -> tuple[float, float, float, float]:
        """Left, bottom, right and top of all that is drawn."""
        points = [p for wires in self.wires.values() for w in wires for p in w]
        points += [p for pair in self.buses.values() for p in pair] + [(s.x, s.y) for s in self.spots.values()]
        points = points or [(0.0, 0.0)]
        xs, ys = [p[0] for p in points], [p[1] for p in points]
        return min(xs), min(ys), max(xs), max(ys)

    def level(self) -> None:
        """Draw the ends of all circuits out to the same height, those below likewise."""
        for up in (1, -1):
            ends = [e for e in self.ends if e.up == up]
            if not ends:
                continue
            _, bottom, _, top = self.box()
            y = max(top, max(e.y for e in ends)) if up == 1 else min(bottom, min(e.y for e in ends))
            for n, e in enumerate(self.ends):
                if e.up == up:
                    if e.y != y:
                        self.wire(e.section, (e.x, e.y), (e.x, y))
                    self.ends[n] = replace(e, y=y)

    def put(self, other: Sheet, dx: float, dy: float) -> None:
        """Add another sheet, moved."""

        def moved(points: Iterable[Point]) -> Wire:
            return tuple((x + dx, y + dy) for x, y in points)

        for name, wires in other.wires.items():
            self.wires.setdefault(name, []).extend(moved(w) for w in wires)
        for name, s in other.spots.items():
            self.spots[name] = replace(s, x=s.x + dx, y=s.y + dy)
        self.ends.extend(replace(e, x=e.x + dx, y=e.y + dy) for e in other.ends)
        for name, (p, q) in other.buses.items():
            left, right = moved((p, q))
            self.buses[name] = left, right
        self.dots.extend(moved(other.dots))
