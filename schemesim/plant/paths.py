"""Electrical distances from a fault along the graph of the plant.

Distances are integers so that equal paths tie exactly: lengths in thousandths of the
length unit in the high bits, the number of devices passed in the low bits. So the
two sides of a CT on the path always differ, and the nearer side tells the direction.
"""

from __future__ import annotations

import heapq
from collections.abc import Set
from functools import cached_property
from itertools import pairwise

from schemesim.plant.model import Location, Plant
from schemesim.plant.terminals import Terminal

DEVICE_BITS = 16
_PER_UNIT = 1000

Point = tuple[str, float]
"""A section and the position along it at which devices are attached."""



def weight(length: float) -> int:
    """The integer distance of a length."""
    return round(length * _PER_UNIT) << DEVICE_BITS


def lengths(distance: int) -> int:
    """The length in a distance, the devices passed not counted."""
    return distance >> DEVICE_BITS


def within(distance: int, reach: float) -> bool:
    """Whether a distance, the devices passed not counted, is within a reach in length units."""
    return (distance >> DEVICE_BITS) <= round(reach * _PER_UNIT)


class PathGraph:
    """Points of the plant (where devices are attached) and the distances between them.

    Built once for a plant. ``distances`` then costs only the neighbourhood of the fault.
    """

    def __init__(self, plant: Plant) -> None:
        self.plant = plant
        self._ahead: dict[tuple[Terminal, ...], tuple[tuple[Point, int], ...]] = {}

    @cached_property
    def _points(self) -> dict[str, tuple[float, ...]]:
        found: dict[str, set[float]] = {s.name: set() for s in self.plant.sections}
        for d in self.plant.devices:
            found[d.a].add(self._at(d.a, d.a_at))
            found[d.b].add(self._at(d.b, d.b_at))
        return {name: tuple(sorted(ps)) for name, ps in found.items()}

    @cached_property
    def _near(self) -> dict[tuple[str, float], tuple[tuple[tuple[str, float], int, str], ...]]:
        near: dict[tuple[str, float], list[tuple[tuple[str, float], int, str]]] = {}
        for name, points in self._points.items():
            length = self.plant.section[name].length
            for p in points:
                near[(name, p)] = []
            for p, q in pairwise(points):
                w = weight((q - p) * length)
                near[(name, p)].append(((name, q), w, ""))
                near[(name, q)].append(((name, p), w, ""))
        for d in self.plant.devices:
            if d.closed:
                a, b = (d.a, self._at(d.a, d.a_at)), (d.b, self._at(d.b, d.b_at))
                near[a].append((b, 1, d.name))
                near[b].append((a, 1, d.name))
        return {point: tuple(links) for point, links in near.items()}

    def _at(self, section: str, at: float) -> float:
        return at if self.plant.section[section].length > 0 else 0.0

    def point(self, device: str, side: str) -> tuple[str, float]:
        """Where a device is attached on one of its sides."""
        d = self.plant.device[device]
        return (side, self._at(side, d.a_at if side == d.a else d.b_at))

    def points_of(self, section: str) -> tuple[tuple[str, float], ...]:
        """The points of one section at which devices are attached."""
        return tuple((section, p) for p in self._points[section])

    def ahead(self, terminals: tuple[Terminal, ...]) -> tuple[tuple[Point, int], ...]:
        """What lies ahead of a set of CTs, on their inner side, at the end of the first length.

        Returns
        -------
        tuple of (point, distance to it)
            For a line end: the other end of the line and the line's length. A fault that is no
            nearer behind the CTs than it is by that way is ahead of them too: of two parallel
            lines to a fault beyond, either sees it forward.
        """
        known = self._ahead.get(terminals)
        if known is None:
            own = {t.ct for t in terminals}
            queue = [self.point(t.ct, t.inner) for t in terminals]
            seen, found = set(queue), []
            while queue:
                for other, w, device in self._near[queue.pop()]:
                    if device in own or other in seen:
                        continue
                    if w >> DEVICE_BITS:
                        found.append((other, w))
                    else:
                        seen.add(other)
                        queue.append(other)
            known = self._ahead[terminals] = tuple(sorted(found))
        return known

    def distances(
        self, fault: Location, opened: Set[str], cutoff: float
    ) -> dict[tuple[str, float], int]:
        """Shortest distances from a fault through closed devices.

        Parameters
        ----------
        fault : Location
        opened : set of str
            Devices that no longer conduct.
        cutoff : float
            Longest reach of interest, in length units.

        Returns
        -------
        dict
            Point (section, position) to integer distance, within the cutoff only.
        """
        length = self.plant.section[fault.section].length
        limit = weight(cutoff) + (1 << DEVICE_BITS) - 1
        heap: list[tuple[int, tuple[str, float]]] = [
            (weight(abs(p - fault.position) * length) if length else 0, (fault.section, p))
            for p in self._points[fault.section]
        ]
        heapq.heapify(heap)
        done: dict[tuple[str, float], int] = {}
        while heap:
            dist, point = heapq.heappop(heap)
            if point in done or dist > limit:
                continue
            done[point] = dist
            for other, w, device in self._near[point]:
                if other not in done and device not in opened:
                    heapq.heappush(heap, (dist + w, other))
        return done
