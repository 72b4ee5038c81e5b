"""The strokes of a one-line diagram: what :mod:`~schemesim.report.one_line` found out, drawn.

A breaker is a square, filled while closed and hollow when open; one that opened in the run has a
heavy edge and its time beside it, one that failed a cross. A CT is a ring on the wire, a
closed switch a bar across it. So a picture in greyscale tells the same.
"""

from __future__ import annotations

import math
from itertools import pairwise
from typing import TYPE_CHECKING

from schemesim.plant.model import DeviceKind, Location, Plant, SectionKind
from schemesim.report.geometry import End, Point, Wire
from schemesim.report.grid_layout import Placed
from schemesim.report.one_line_pen import UNIT_IN, Pen, short
from schemesim.report.one_line_state import State
from schemesim.report.sequence import plain, shorten
from schemesim.show.style import BLACK, BLUE, FONT_PT, GREY, PURPLE, VERMILLION
from schemesim.ticks import to_ms

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.lines import Line2D

TINTS = ("#F7D79B", "#CFE3F1", "#B5DCC9", "#D9BBD0", "#E4E4E4")
"""Isolation zones: that of the fault has the first."""
OUTLINES = (BLUE, PURPLE, GREY)
LEAST_IN = 6.0
"""Width of a picture at least, so that its title and legend have room."""
_BOLT = ((0, 0), (-0.34, 0.16), (-0.22, 0.26), (-0.52, 0.56), (-0.10, 0.36), (-0.20, 0.25))


def draw(plant: Plant, placed: Placed, state: State, labels: str, ax: Axes | None) -> Axes:
    """Draw everything on the axes given, or on those of a new figure."""
    left, bottom, right, top = _extent(placed)
    lines = state.title.count("\n") + 1 if state.title else 0
    handles = _handles(state, plant, placed)
    width = max((right - left) * UNIT_IN, LEAST_IN)
    columns = max(int(width / 2.1), 1)
    head, foot = 0.12 + 0.18 * lines, 0.2 + 0.17 * math.ceil(len(handles) / columns)
    if ax is None:
        from matplotlib.figure import Figure  # heavy: only when a picture is asked for

        right, height = left + width / UNIT_IN, (top - bottom) * UNIT_IN
        figure = Figure(figsize=(width, height + head + foot))
        whole = height + head + foot
        ax = figure.add_axes((0.0, foot / whole, 1.0, height / whole))
    ax.set_xlim(left, right)
    ax.set_ylim(bottom, top)
    ax.set_aspect("equal")
    ax.set_axis_off()
    pen = Pen(ax, right - left, top - bottom)
    for name, (x0, y0, x1, y1) in placed.frames.items():
        pen.frame(name, x0, y0, x1, y1)
    _zones(pen, placed, state)
    for section, wires in placed.sheet.wires.items():
        for wire in wires:
            pen.wire(section, wire, dead=section in state.dead)
    for bus, ends in placed.sheet.buses.items():
        pen.wire(bus, ends, dead=bus in state.dead, heavy=True)
        pen.text(ends[0][0] - 0.24, ends[0][1], short(bus, plant.section[bus].station), bold=True, away="right")
    for x, y in placed.sheet.dots:
        pen.dot(x, y)
    for name, spot in placed.sheet.spots.items():
        device = plant.device[name]
        pen.device(device, spot, state)
        if labels == "all" or (labels == "breakers" and device.kind is DeviceKind.BREAKER) or name in state.failed:
            pen.label(device, spot, state)
    for end in placed.sheet.ends:
        _end(pen, plant, end, end not in placed.open_ends, state)
    for section, wire in placed.links.items():
        if plant.section[section].kind is SectionKind.TRANSFORMER:
            pen.transformer(*_along(wire, 0.5))
    _inner_sources(pen, plant, placed)
    if state.fault is not None:
        _fault(pen, placed, state.fault)
    if state.title:
        text = "\n".join(shorten(line, int((right - left) * 7.2 * pen.size)) for line in state.title.split("\n"))
        ax.set_title(text, fontsize=max((FONT_PT + 1) * pen.size, 5.0), loc="left", x=0.01)
    ax.legend(
        handles=handles, loc="upper left", bbox_to_anchor=(0.01, 0), borderaxespad=0.3, ncol=columns,
        fontsize=max((FONT_PT - 0.5) * pen.size, 4.5), frameon=False, handlelength=2.0,
    )  # fmt: skip
    return ax


def _extent(placed: Placed) -> tuple[float, float, float, float]:
    left, bottom, right, top = placed.sheet.box()
    labelled = [e.y + 0.75 for e in placed.open_ends if e.up == 1]
    frames = placed.frames.values()
    return (
        min(left, *(f[0] for f in frames)) - 0.2,
        min(bottom, *(f[1] for f in frames)) - 0.2,
        max(right, *(f[2] for f in frames)) + 0.2,
        max(top + (0.45 if placed.links else 0.0), *labelled, *(f[3] for f in frames)) + 0.2,
    )


def _zones(pen: Pen, placed: Placed, state: State) -> None:
    """Tinted bands along the wires of isolation zones; outlines around those of protected zones."""
    paths = {**placed.sheet.wires}
    for bus, ends in placed.sheet.buses.items():
        paths[bus] = [*paths.get(bus, []), ends]
    rank = len(state.protected)
    for n, (element, zone) in enumerate(sorted(state.protected.items())):
        width = 13.0 + 4.0 * (rank - 1 - n)
        color = OUTLINES[n % len(OUTLINES)]
        for inner in (False, True):
            for section in sorted(zone & set(paths)):
                for wire in paths[section]:
                    pen.line(
                        wire, color="white" if inner else color, width=width - (2.4 if inner else 0),
                        z=1.0 + 0.02 * n + (0.01 if inner else 0), solid_capstyle="round", solid_joinstyle="round",
                        gid="" if inner else f"protected zone: {element}: {section}",
                    )  # fmt: skip
    for section, tint in state.isolation.items():
        for wire in paths.get(section, ()):
            pen.line(
                wire, color=TINTS[tint % len(TINTS)], width=8.0, z=2, solid_capstyle="round",
                solid_joinstyle="round", gid=f"isolation zone: {section}",
            )  # fmt: skip


def _end(pen: Pen, plant: Plant, end: End, joined: bool, state: State) -> None:
    """What a circuit is, where it leaves the station."""
    from matplotlib.patches import Circle, Polygon  # heavy: only when a picture is asked for

    section = plant.section[end.section]
    name, up = short(section.name, end.station), end.up
    x, y = end.x, end.y
    if joined:
        pen.text(x + 0.12, y + 0.16 * up, name, points=FONT_PT - 1)
        return
    if section.kind is SectionKind.GENERATOR:
        ring = Circle((x, y), 0.27, facecolor="white", edgecolor=BLACK, zorder=6)
        ring.set_linewidth(1.0 * pen.size)
        pen.add(ring, f"generator: {section.name}")
        pen.text(x, y - 0.02, "G", away="center", points=FONT_PT - 0.5)
        text = name
        tripped = [
            state.openings[s.name] for s in plant.sources if s.section == section.name and s.name in state.openings
        ]
        for o in tripped:
            text += f"\ntripped {plain(to_ms(o.t_open_us))} ms"
        pen.text(x, y + 0.36 * up, text, away="center", va="bottom" if up == 1 else "top", bold=bool(tripped))
        return
    if section.kind is SectionKind.TRANSFORMER:
        pen.transformer(x, y, False)
    else:
        arrow = Polygon([(x - 0.13, y - 0.12 * up), (x + 0.13, y - 0.12 * up), (x, y + 0.16 * up)], closed=True)
        arrow.set_facecolor(BLACK)
        arrow.set_zorder(6)
        pen.add(arrow, f"end: {section.name}")
    elsewhere = sorted({d.station for d in plant.at_section[section.name]} - {end.station})
    lines = [name]
    if section.load_mw:
        lines.append(f"{plain(section.load_mw)} MW")
    if elsewhere:
        lines.append(f"to {', '.join(elsewhere)}")
    text = "\n".join(lines)
    away = 0.42 if section.kind is SectionKind.TRANSFORMER else 0.24
    pen.text(x, y + away * up, text, away="center", va="bottom" if up == 1 else "top", points=FONT_PT - 1)


def _inner_sources(pen: Pen, plant: Plant, placed: Placed) -> None:
    """Infeeds that are no generator of their own: a mark at their bus or circuit."""
    from matplotlib.patches import Circle  # heavy: only when a picture is asked for

    for source in plant.sources:
        if plant.section[source.section].kind is SectionKind.GENERATOR:
            continue
        if source.section in placed.sheet.buses:
            x, y = placed.sheet.buses[source.section][1]
        else:
            at = [e for e in placed.sheet.ends if e.section == source.section]
            if not at:
                continue
            x, y = at[0].x + 0.4, at[0].y
        ring = Circle((x, y), 0.22, facecolor="white", edgecolor=BLACK, zorder=6)
        pen.add(ring, f"infeed: {source.name}")
        pen.text(x, y, "~", away="center", points=FONT_PT)
        pen.text(x, y - 0.36, short(source.name, source.station), away="center")


def _along(wire: Wire, share: float) -> tuple[float, float, bool]:
    """A point of a wire, and whether it runs across there."""
    legs = [(p, q, abs(q[0] - p[0]) + abs(q[1] - p[1])) for p, q in pairwise(wire)]
    rest = share * sum(length for _, _, length in legs)
    for p, q, length in legs:
        if rest <= length and length:
            t = rest / length
            return p[0] + t * (q[0] - p[0]), p[1] + t * (q[1] - p[1]), abs(q[0] - p[0]) > abs(q[1] - p[1])
        rest -= length
    return (*wire[-1], False)


def fault_point(placed: Placed, fault: Location) -> Point | None:
    """Where the mark of a fault points to; None if its section is not drawn."""
    if fault.section in placed.links:
        x, y, _ = _along(placed.links[fault.section], fault.position)
        return x, y
    if fault.section in placed.sheet.buses:
        (x0, y0), (x1, _) = placed.sheet.buses[fault.section]
        return x0 + 0.12 * (x1 - x0), y0
    ends = [e for e in placed.sheet.ends if e.section == fault.section]
    if ends:
        nearest_end = min(ends, key=lambda e: abs(e.at - fault.position))
        return nearest_end.x, nearest_end.y - 0.45 * nearest_end.up
    wires = placed.sheet.wires.get(fault.section)
    if not wires:
        return None
    longest = max(wires, key=lambda w: sum(abs(q[0] - p[0]) + abs(q[1] - p[1]) for p, q in pairwise(w)))
    x, y, _ = _along(longest, 0.5)
    return x, y


def bolt_of(placed: Placed, at: Point) -> list[Point]:
    """The mark of a fault, its tip at nought: flat and away from a device close by, so that it covers none."""
    close = [s.y - at[1] for s in placed.sheet.spots.values() if abs(s.x - at[0]) < 0.2 and abs(s.y - at[1]) < 0.5]
    if not close:
        return list(_BOLT)
    up = -1 if min(close, key=abs) > 0 else 1
    return [(1.1 * x, 0.45 * up * y) for x, y in _BOLT]


def _fault(pen: Pen, placed: Placed, fault: Location) -> None:
    from matplotlib.patches import Polygon  # heavy: only when a picture is asked for

    at = fault_point(placed, fault)
    if at is None:
        return
    crowded = any(s.dx < 0 and abs(s.x - at[0]) < 0.5 and abs(s.y - at[1]) < 0.8 for s in placed.sheet.spots.values())
    side = -1 if crowded else 1  # away from labels on the left
    bolt = Polygon([(at[0] + side * x, at[1] + y) for x, y in bolt_of(placed, at)], closed=True)
    bolt.set_facecolor(VERMILLION)
    bolt.set_edgecolor(BLACK)
    bolt.set_linewidth(0.7 * pen.size)
    bolt.set_zorder(10)
    pen.add(bolt, f"fault: {fault}")


def _handles(state: State, plant: Plant, placed: Placed) -> list[Line2D]:
    """What is there to be explained, and no more."""
    from matplotlib.lines import Line2D  # heavy: only when a picture is asked for
    from matplotlib.markers import MarkerStyle
    from matplotlib.path import Path

    def square(face: str, edge: str, width: float, label: str) -> Line2D:
        mark = Line2D([], [], linestyle="none", marker="s", markersize=6, label=label)
        mark.set_markerfacecolor(face)
        mark.set_markeredgecolor(edge)
        mark.set_markeredgewidth(width)
        return mark

    drawn = [plant.device[name] for name in placed.sheet.spots]
    handles: list[Line2D] = []
    if state.fault is not None and fault_point(placed, state.fault) is not None:
        bolt = Line2D(
            [], [], linestyle="none", marker=MarkerStyle(Path([*_BOLT, _BOLT[0]])), label=f"fault on {state.fault}"
        )
        bolt.set_markersize(20)
        bolt.set_markerfacecolor(VERMILLION)
        bolt.set_markeredgecolor(BLACK)
        handles.append(bolt)
    handles += [square(BLACK, BLACK, 0.9, "breaker, closed")]
    if any(d.kind is DeviceKind.BREAKER and not d.closed and d.name not in state.openings for d in drawn):
        handles.append(square("white", BLACK, 0.9, "breaker, open before"))
    if any(d.name in state.openings for d in drawn):
        handles.append(square("white", VERMILLION, 2.0, "opened, with its time"))
        if state.intended and any(n in state.openings and n not in state.intended for n in placed.sheet.spots):
            handles[-1].set_label("opened, with its time; beyond: not intended")
    if any(d.kind is DeviceKind.CT for d in drawn):
        ring = Line2D([], [], linestyle="none", marker="o", markersize=5, color=BLACK, label="CT")
        ring.set_markerfacecolor("none")
        handles.append(ring)
    if any(d.name in state.failed for d in drawn):
        handles.append(Line2D([], [], linestyle="none", marker="X", markersize=8, color=VERMILLION, label="failure"))
    if any(s in state.dead for s in placed.sheet.wires):
        handles.append(Line2D([], [], color=GREY, linestyle=":", linewidth=1.2, label="left without a source"))
    if state.isolation:
        one = state.fault is not None and len(set(state.isolation.values())) == 1
        words = "isolation zone of the fault" if one else "isolation zones, each in one tint"
        handles.append(Line2D([], [], color=TINTS[0], linewidth=8, label=words))
    for n, element in enumerate(sorted(state.protected)):
        handles.append(
            Line2D([], [], color=OUTLINES[n % len(OUTLINES)], linewidth=1.4, label=f"protected zone of {element}")
        )
    return handles
