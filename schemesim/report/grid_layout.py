"""Stations laid out beside each other, and the lines between them.

Ends of circuits lie at the upper or lower edge of their row of stations. Between the rows
run channels; a line takes a track of its own in a channel, and crosses a row in a gap
beside a station.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, replace
from itertools import permutations

from schemesim.errors import nearest, reject
from schemesim.plant.model import Plant
from schemesim.report.geometry import End, Point, Sheet, Wire
from schemesim.report.station_layout import lay_out
from schemesim.report.station_parts import CIRCUITS, station_names, station_parts

LEFT, RIGHT, ABOVE, BELOW = 0.7, 1.05, 0.4, 1.3
"""How far a station's frame stands out: room for labels on each side, and below for its name."""
GAP = LEFT + RIGHT + 0.7
TRACK = 0.45
MARGIN = 1.5
"""Between the ends of circuits and the first track."""
MOST_ORDERED = 7


@dataclass(frozen=True)
class Placed:
    """A whole one-line diagram: the sheet, where each station stands, links drawn and ends left open.

    Attributes
    ----------
    sheet : Sheet
    frames : mapping of station to (left, bottom, right, top)
    links : mapping of circuit to its wire, from its end at position 0 to that at 1
    open_ends : tuple of End
        Ends whose other end is not drawn (or that have none).
    """

    sheet: Sheet
    frames: dict[str, tuple[float, float, float, float]]
    links: dict[str, Wire]
    open_ends: tuple[End, ...] = field(default=())


def neighbourhood(plant: Plant, station: str, steps: int = 1) -> tuple[str, ...]:
    """The stations no more than so many circuits away from one, itself included, nearest first.

    Raises
    ------
    InputError
        If there is no such station.

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, generator, line, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> b = PlantBuilder()
    >>> generator(b, "G1")
    >>> line(b, "L1", 40.0)
    >>> line(b, "L2", 40.0)
    >>> single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1")])
    >>> single_bus(b, "Birch", [Bay("L1", "L1", at=1.0), Bay("L2", "L2")])
    >>> single_bus(b, "Cedar", [Bay("L2", "L2", at=1.0)])
    >>> neighbourhood(b.build(), "Alder")
    ('Alder', 'Birch')
    """
    check_stations(plant, [station])
    beside = _beside(plant)
    found, edge = [station], [station]
    for _ in range(steps):
        edge = sorted({n for s in edge for n in beside[s]} - set(found))
        found += edge
    return tuple(found)


def check_stations(plant: Plant, stations: Iterable[str]) -> None:
    """Refuse a station that is not there."""
    known = station_names(plant)
    for station in stations:
        if station not in known:
            raise reject("station", station, "the name of a station with devices", tip=nearest(station, known))


def _beside(plant: Plant) -> dict[str, set[str]]:
    """Stations joined to each by a circuit."""
    found: dict[str, set[str]] = {s: set() for s in station_names(plant)}
    for section in plant.sections:
        here = {d.station for d in plant.at_section[section.name]}
        for s in here:
            found[s] |= here - {s}
    return found


def arrange(plant: Plant, stations: Sequence[str], widest: float = 36.0) -> Placed:
    """Lay out stations in rows no wider than so many steps, and the lines between them."""
    sheets = {s: lay_out(plant, station_parts(plant, s)) for s in stations}
    order = _ordered(plant, stations)
    rows: list[list[str]] = [[]]
    taken = 0.0
    for s in order:
        left, _, right, _ = sheets[s].box()
        if rows[-1] and taken + right - left > widest:
            rows.append([])
            taken = 0.0
        rows[-1].append(s)
        taken += right - left + GAP
    whole, frames = Sheet(), dict[str, tuple[float, float, float, float]]()
    pairs = _pairs(plant, sheets.values())
    row_of = {s: n for n, row in enumerate(rows) for s in row}
    crossing = _channels(pairs, row_of)
    y = 0.0
    for n, row in enumerate(rows):
        y -= MARGIN + TRACK * max(crossing.get(n, 0) - 1, 0)
        tops = {s: sheets[s].box()[3] for s in row}
        bottoms = {s: sheets[s].box()[1] for s in row}
        x = 0.0
        deep = max(tops[s] - bottoms[s] for s in row)
        for s in row:
            left, bottom, right, top = sheets[s].box()
            lowest = _stretch(sheets[s], top - deep, {e[0] for pair in pairs for e in pair})
            whole.put(sheets[s], x - left, y - top)
            frames[s] = x - LEFT, y - top + min(bottom, lowest) - BELOW, x + right - left + RIGHT, y + ABOVE
            x += right - left + GAP + 0.45 * _rising(pairs, s)
        y -= deep + MARGIN
    links, joined = _links(pairs, whole, frames, row_of, len(rows))
    left_open = tuple(e for e in whole.ends if (e.section, e.station, e.at) not in joined)
    return Placed(whole, frames, links, left_open)


def _stretch(sheet: Sheet, depth: float, joined: Iterable[str]) -> float:
    """Draw the lower ends that are joined to others out to the depth of the row, where the last of them is."""
    lowest = 0.0
    for n, e in enumerate(sheet.ends):
        if e.up == -1 and e.section in joined:
            sheet.wire(e.section, (e.x, e.y), (e.x, depth))
            sheet.ends[n] = replace(e, y=depth)
            lowest = depth
    return lowest


Pair = tuple[tuple[str, str, float, int], tuple[str, str, float, int]]


def _pairs(plant: Plant, sheets: Iterable[Sheet]) -> list[Pair]:
    """Circuits with two ends drawn: (circuit, station, position, up) of both, the lower position first."""
    ends: dict[str, list[tuple[str, str, float, int]]] = {}
    for sheet in sheets:
        for e in sheet.ends:
            if plant.section[e.section].kind in CIRCUITS:
                ends.setdefault(e.section, []).append((e.section, e.station, e.at, e.up))
    found: list[Pair] = []
    for row in ends.values():
        if len(row) == 2:
            first, second = sorted(row, key=lambda e: (e[2], e[1]))
            found.append((first, second))
    return found


def _channel(end: tuple[str, str, float, int], row_of: dict[str, int]) -> int:
    return row_of[end[1]] + (0 if end[3] == 1 else 1)


def _channels(pairs: Sequence[Pair], row_of: dict[str, int]) -> dict[int, int]:
    """How many tracks each channel may need."""
    need: dict[int, int] = {}
    for pair in pairs:
        for channel in {_channel(e, row_of) for e in pair}:
            need[channel] = need.get(channel, 0) + 1
    return need


def _rising(pairs: Sequence[Pair], station: str) -> int:
    """How many circuits may pass beside a station from one channel to another."""
    return sum(pair[0][3] != pair[1][3] and station == pair[0][1] for pair in pairs)


def _ordered(plant: Plant, stations: Sequence[str]) -> tuple[str, ...]:
    """Stations in an order in which those joined stand close together."""
    beside = _beside(plant)
    if len(stations) > MOST_ORDERED:
        order = [stations[0]]
        left = set(stations[1:])
        while left:
            last = max(left, key=lambda s: (max((order.index(n) for n in beside[s] if n in order), default=-1), s))
            order.append(last)
            left.remove(last)
        return tuple(order)

    def length(order: Sequence[str]) -> int:
        at = {s: n for n, s in enumerate(order)}
        return sum(abs(at[s] - at[n]) for s in order for n in beside[s] if n in at)

    return min(permutations(sorted(stations)), key=lambda order: (length(order), order))


def _links(
    pairs: Sequence[Pair],
    sheet: Sheet,
    frames: dict[str, tuple[float, float, float, float]],
    row_of: dict[str, int],
    rows: int,
) -> tuple[dict[str, Wire], set[tuple[str, str, float]]]:
    """A wire for each circuit between two ends drawn."""
    place = {(e.section, e.station, e.at): e for e in sheet.ends}
    base: dict[int, float] = {}
    for s, (_, bottom, _, top) in frames.items():
        base[row_of[s]] = top - ABOVE + MARGIN * 0.7
        if row_of[s] == rows - 1:
            base[rows] = min(base.get(rows, 0.0), bottom - 0.35)
    upward = dict.fromkeys(range(rows), 1) | {rows: -1}
    tracks: dict[int, list[list[tuple[float, float]]]] = {n: [] for n in range(rows + 1)}
    gaps: dict[str, int] = {}
    margin = max(f[2] for f in frames.values()) + 1.0

    def track(channel: int, x0: float, x1: float) -> float:
        low, high = min(x0, x1) - 0.3, max(x0, x1) + 0.3
        free = (n for n, taken in enumerate(tracks[channel]) if all(high < a or low > b for a, b in taken))
        n = next(free, len(tracks[channel]))
        if n == len(tracks[channel]):
            tracks[channel].append([])
        tracks[channel][n].append((low, high))
        return base[channel] + upward[channel] * n * TRACK

    links: dict[str, Wire] = {}
    joined: set[tuple[str, str, float]] = set()

    def reach(pair: Pair) -> float:
        first, second = (place[e[:3]] for e in pair)
        return abs(first.x - second.x)

    for pair in sorted(pairs, key=lambda p: (reach(p), p[0])):
        first, second = (place[e[:3]] for e in pair)
        one, two = (_channel(e, row_of) for e in pair)
        if one == two:
            y = track(one, first.x, second.x)
            path: list[Point] = [(first.x, first.y), (first.x, y), (second.x, y), (second.x, second.y)]
        else:
            if abs(one - two) == 1:
                row = min(one, two)
                near = first.station if row_of[first.station] == row else second.station
                right = frames[near][2]
                following = (f[0] for s, f in frames.items() if row_of[s] == row and f[0] > right)
                beyond = min(following, default=right + GAP)
                gaps[near] = gaps.get(near, 0) + 1
                x = min(right + 0.1 + 0.4 * gaps[near], beyond - 0.2)
            else:
                margin += 0.4
                x = margin
            y1, y2 = track(one, first.x, x), track(two, x, second.x)
            path = [(first.x, first.y), (first.x, y1), (x, y1), (x, y2), (second.x, y2), (second.x, second.y)]
        links[first.section] = tuple(path)
        joined |= {pair[0][:3], pair[1][:3]}
        sheet.wire(first.section, *path)
    return links, joined
