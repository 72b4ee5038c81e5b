"""The strokes of a one-line diagram: wires, devices and their labels."""

from __future__ import annotations

from textwrap import wrap
from typing import TYPE_CHECKING, Any

from schemesim.plant.model import Device, DeviceKind
from schemesim.report.geometry import Point, Spot, Wire
from schemesim.report.one_line_state import State
from schemesim.report.sequence import plain
from schemesim.show.style import BLACK, FONT_PT, GREY, VERMILLION
from schemesim.ticks import to_ms

if TYPE_CHECKING:
    from matplotlib.axes import Axes

UNIT_IN = 0.4
"""Inches of one step at the default size."""


def short(name: str, station: str) -> str:
    return name.removeprefix(f"{station}.") if station else name


class Pen:
    """Draws in steps; texts and lines shrink with the axes."""

    def __init__(self, ax: Axes, width: float, height: float) -> None:
        self.ax = ax
        w, h = ax.figure.get_figure(root=True).get_size_inches()
        box = ax.get_position()
        self.size = max(min(w * box.width / (width * UNIT_IN), h * box.height / (height * UNIT_IN), 1.0), 0.3)

    def add(self, patch: Any, gid: str = "") -> None:
        if gid:
            patch.set_gid(gid)
        self.ax.add_patch(patch)

    def line(
        self, points: Wire, *, color: str = BLACK, width: float = 1.0, z: float = 3, gid: str = "", **how: Any
    ) -> None:
        xs, ys = zip(*points, strict=True)
        (drawn,) = self.ax.plot(xs, ys, color=color, linewidth=width * self.size, zorder=z, **how)
        if gid:
            drawn.set_gid(gid)

    def text(
        self, x: float, y: float, text: str, *, bold: bool = False, away: str = "left", z: float = 8, **how: Any
    ) -> None:
        how.setdefault("color", BLACK)
        how.setdefault("va", "center")
        size = how.pop("points", FONT_PT - 1.5)
        from matplotlib.patheffects import withStroke  # heavy: only when a picture is asked for

        drawn = self.ax.text(
            x, y, text, ha=away, fontsize=size * self.size, fontweight="bold" if bold else "normal",
            zorder=z, linespacing=1.05, **how,
        )  # fmt: skip
        drawn.set_path_effects([withStroke(linewidth=2.0 * self.size, foreground="#F7F7F7")])

    def frame(self, name: str, x0: float, y0: float, x1: float, y1: float) -> None:
        from matplotlib.patches import Rectangle  # heavy: only when a picture is asked for

        box = Rectangle((x0, y0), x1 - x0, y1 - y0, facecolor="#F7F7F7", edgecolor="#DDDDDD")
        box.set_linewidth(0.6)
        box.set_zorder(0)
        self.add(box, f"station: {name}")
        self.text(x0 + 0.15, y0 + 0.3, name or "plant", bold=True, points=FONT_PT + 1)

    def wire(self, section: str, wire: Wire, *, dead: bool, heavy: bool = False) -> None:
        how: dict[str, Any] = {"linestyle": (0, (1.2, 1.2))} if dead else {"solid_capstyle": "butt"}
        width = 3.2 if heavy else 1.0
        self.line(wire, color=GREY if dead else BLACK, width=width, gid=f"section: {section}", **how)

    def dot(self, x: float, y: float) -> None:
        self.ax.plot([x], [y], marker="o", markersize=3.0 * self.size, color=BLACK, linestyle="none", zorder=5)

    def square(self, spot: Spot, half: float, **how: Any) -> Any:
        from matplotlib.patches import Rectangle  # heavy: only when a picture is asked for

        return Rectangle((spot.x - half, spot.y - half), 2 * half, 2 * half, **how)

    def device(self, device: Device, spot: Spot, state: State) -> None:
        from matplotlib.patches import Circle  # heavy: only when a picture is asked for

        if device.kind is DeviceKind.BREAKER:
            opening = state.openings.get(device.name)
            face = "white" if opening is not None or not device.closed else BLACK
            edge, width = (VERMILLION, 2.0) if opening is not None else (BLACK, 0.9)
            what = "tripped" if opening is not None else "closed" if device.closed else "open"
            self.add(
                self.square(spot, 0.16, facecolor=face, edgecolor=edge, linewidth=width * self.size, zorder=6),
                f"breaker: {device.name}: {what}",
            )
        elif device.kind is DeviceKind.CT:
            ring = Circle((spot.x, spot.y), 0.105, facecolor="none", edgecolor=BLACK, zorder=6)
            ring.set_linewidth(0.9 * self.size)
            self.add(ring, f"ct: {device.name}")
        elif device.kind is DeviceKind.JOINT:
            self.dot(spot.x, spot.y)
        else:
            self.switch(device, spot)
        if device.name in state.failed:
            (cross,) = self.ax.plot(
                [spot.x], [spot.y], marker="X", markersize=9 * self.size, markerfacecolor=VERMILLION,
                markeredgecolor="white", markeredgewidth=0.8, linestyle="none", zorder=9,
            )  # fmt: skip
            cross.set_gid(f"failure: {device.name}")

    def switch(self, device: Device, spot: Spot) -> None:
        """A bar across the wire; open: a gap with a slanting blade; a fuse: a hollow oblong."""
        along: Point = (1.0, 0.0) if spot.across else (0.0, 1.0)
        cross = along[1], along[0]
        gid = f"switch: {device.name}: {'closed' if device.closed else 'open'}"
        a, b = 0.14, 0.12

        def at(u: float, v: float) -> Point:
            return spot.x + u * along[0] + v * cross[0], spot.y + u * along[1] + v * cross[1]

        if device.kind is DeviceKind.FUSE:
            corners = (at(-a, -0.07), at(a, -0.07), at(a, 0.07), at(-a, 0.07), at(-a, -0.07))
            self.line(corners, z=6, gid=gid)
        elif device.closed:
            self.line((at(0, -b), at(0, b)), width=1.3, z=6, gid=gid)
        else:
            self.line((at(-a, 0), at(a, 0)), color="#F7F7F7", width=3.0, z=4)
            self.line((at(-a, 0), at(a * 0.8, 0.17)), width=1.1, z=6, gid=gid)

    def label(self, device: Device, spot: Spot, state: State) -> None:
        text = short(device.name, device.station)
        opening = state.openings.get(device.name)
        bold = opening is not None
        if opening is not None:
            needless = state.intended and device.name not in state.intended
            text += f"\n{plain(to_ms(opening.t_open_us))} ms" + ("\nbeyond" if needless else "")
        if device.name in state.failed:
            text += "\n" + "\n".join(wrap(state.failed[device.name], 12))
            bold = True
        beside = spot.dx != 0
        away = ("left" if spot.dx > 0 else "right") if beside else "center"
        va = "center" if beside else ("bottom" if spot.dy > 0 else "top")
        dy = spot.dy if beside else (0.24 if spot.dy > 0 else -0.24)
        color = VERMILLION if device.name in state.failed else BLACK
        self.text(spot.x + spot.dx, spot.y + dy, text, bold=bold, away=away, va=va, color=color, z=5.5)

    def transformer(self, x: float, y: float, across: bool) -> None:
        from matplotlib.patches import Circle  # heavy: only when a picture is asked for

        for s in (-0.13, 0.13):
            middle = (x + s, y) if across else (x, y + s)
            ring = Circle(middle, 0.22, facecolor="white" if s < 0 else "none", edgecolor=BLACK, zorder=7)
            ring.set_linewidth(1.0 * self.size)
            self.add(ring)
