"""Dependability against security: each turn of a dial a step, brackets as crosses."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any, Protocol

from schemesim.show.style import BLACK, CYCLE, below, new_axes, tidy

if TYPE_CHECKING:
    from matplotlib.axes import Axes


class Bounds(Protocol):
    """A bracket."""

    @property
    def low(self) -> Any:
        """Its low bound."""

    @property
    def high(self) -> Any:
        """Its high bound."""


class Turned(Protocol):
    """What one group does at one position of a dial."""

    @property
    def position(self) -> str:
        """Position of the dial."""

    @property
    def name(self) -> str:
        """Name of the group."""

    @property
    def dependability(self) -> Bounds | None:
        """Probability of a trip for a fault inside; None without such faults."""

    @property
    def security(self) -> Bounds | None:
        """Probability of no trip for a fault outside; None without such faults."""


def plot_trade(dial: str, figures: Sequence[Turned], ax: Axes | None = None) -> Axes:
    """The probability of a missing trip against that of an unwanted one, both axes logarithmic.

    Down is more dependable, left is more secure. A group without faults inside or outside is left out.

    Parameters
    ----------
    dial : str
    figures : sequence
        Of each group at each position, in the order of the positions.
    ax : matplotlib Axes or None
    """
    groups: dict[str, list[tuple[str, float, float, float, float]]] = {}
    for f in figures:
        if f.dependability is not None and f.security is not None:
            d, s = f.dependability, f.security
            ends = 1 - float(s.high), 1 - float(s.low), 1 - float(d.high), 1 - float(d.low)
            groups.setdefault(f.name, []).append((f.position, *ends))
    ax = new_axes(ax, 3.6, bottom_in=1.0)
    ax.set_xscale("log")
    ax.set_yscale("log")
    least = [_least(v for points in groups.values() for p in points for v in p[i : i + 2]) for i in (1, 3)]
    positions = list(dict.fromkeys(p[0] for points in groups.values() for p in points))
    for n, (name, points) in enumerate(groups.items()):
        color, dash, _ = CYCLE[n % len(CYCLE)]
        at = [(_middle(p[1], p[2], least[0]), _middle(p[3], p[4], least[1])) for p in points]
        (drawn,) = ax.plot(*zip(*at, strict=True), color=color, linestyle=dash, linewidth=1.1, zorder=3, label=name)
        drawn.set_gid(f"group: {name}")
        for (position, x0, x1, y0, y1), (x, y) in zip(points, at, strict=True):
            across = ax.hlines(y, max(x0, least[0]), max(x1, least[0]), color=color, linewidth=1.0, zorder=2)
            across.set_gid(f"bracket of security: {name}: {position}")
            upright = ax.vlines(x, max(y0, least[1]), max(y1, least[1]), color=color, linewidth=1.0, zorder=2)
            upright.set_gid(f"bracket of dependability: {name}: {position}")
            marker = CYCLE[positions.index(position) % len(CYCLE)][2]
            (mark,) = ax.plot(
                [x], [y], linestyle="none", marker=marker, markersize=7, markerfacecolor="white",
                markeredgecolor=color, markeredgewidth=1.4, zorder=4,
            )  # fmt: skip
            mark.set_gid(f"position: {name}: {position}")
    for n, position in enumerate(positions):
        ax.plot(
            [], [], linestyle="none", marker=CYCLE[n % len(CYCLE)][2], markersize=7, markerfacecolor="white",
            markeredgecolor=BLACK, label=f"{dial} {position}",
        )  # fmt: skip
    ax.margins(0.12, 0.15)
    tidy(
        ax,
        title=f"dependability and security by {dial}",
        x="probability of an unwanted trip, fault outside (left: more secure)",
        y="probability of no trip, fault inside (down: more dependable)",
        grid="both",
    )
    below(ax, columns=4)
    return ax


def _least(values: Any) -> float:
    """Where a bound of zero is drawn on a logarithmic axis: a step below the least that is more."""
    return min((v for v in values if v > 0), default=1e-9) / 2


def _middle(low: float, high: float, least: float) -> float:
    return max((low + high) / 2, least)
