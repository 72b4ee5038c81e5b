"""Cost against risk, with the frontier as a line and brackets as bars."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from textwrap import wrap
from typing import TYPE_CHECKING

from schemesim.show.style import BLACK, BLUE, FONT_PT, GREY, VERMILLION, below, new_axes, tidy

if TYPE_CHECKING:
    from matplotlib.axes import Axes


NAME_CHARS = 26


@dataclass(frozen=True, slots=True)
class Spot:
    """One choice: its cost, its risk with bounds, whether it is on the frontier and the cheapest in all."""

    name: str
    cost: float
    low: float
    high: float
    estimate: float
    on_frontier: bool
    least: bool = False


def plot_frontier(spots: Sequence[Spot], *, unit: str, title: str = "", ax: Axes | None = None) -> Axes:
    """Risk against cost, both in a unit of money a year; names stand on the right, joined to their spots."""
    ax = new_axes(ax, 3.4, right_in=1.9, bottom_in=0.95)
    on = sorted((s for s in spots if s.on_frontier), key=lambda s: s.cost)
    if on:
        xs = [x for a, b in pairwise(on) for x in (a.cost, b.cost)] or [on[0].cost]
        ys = [y for a, _ in pairwise(on) for y in (a.estimate, a.estimate)] or [on[0].estimate]
        (edge,) = ax.plot(
            [*xs, on[-1].cost], [*ys, on[-1].estimate], color=BLUE, linewidth=1.2, zorder=2, label="frontier"
        )
        edge.set_gid("frontier")
    for kind, words, marker, face in (
        (True, "on the frontier", "o", BLUE),
        (False, "another costs and risks no more", "o", "white"),
    ):
        some = [s for s in spots if s.on_frontier is kind]
        if some:
            (dots,) = ax.plot(
                [s.cost for s in some], [s.estimate for s in some], linestyle="none", marker=marker, markersize=6,
                markerfacecolor=face, markeredgecolor=BLACK, zorder=4, label=words,
            )  # fmt: skip
            dots.set_gid(words)
    for s in spots:
        if s.least:
            (ring,) = ax.plot(
                [s.cost], [s.estimate], linestyle="none", marker="o", markersize=12, markerfacecolor="none",
                markeredgecolor=VERMILLION, markeredgewidth=1.6, zorder=3, label="least cost and risk together",
            )  # fmt: skip
            ring.set_gid(f"least: {s.name}")
        if s.high > s.low:
            bar = ax.vlines(s.cost, s.low, s.high, color=BLACK, linewidth=0.9, zorder=3)
            bar.set_gid(f"bracket: {s.name}")
            ax.plot([s.cost] * 2, [s.low, s.high], linestyle="none", marker="_", markersize=6, color=BLACK, zorder=3)
    ax.margins(0.06, 0.12)
    bottom, top = ax.get_ylim()
    ax.set_ylim(max(bottom, 0.0) if all(s.low >= 0 for s in spots) else bottom, top)
    tidy(ax, title=title, x=f"cost, {unit} a year", y=f"risk, {unit} a year", grid="both")
    for axis in (ax.xaxis, ax.yaxis):
        axis.set_major_formatter(lambda v, _: f"{v:,.0f}".replace(",", " "))
    _names(ax, spots)
    below(ax, columns=2)
    return ax


def _names(ax: Axes, spots: Sequence[Spot]) -> None:
    """Names in a column right of the axes, none on another, in the order of height."""
    bottom, top = ax.get_ylim()
    order = sorted(spots, key=lambda s: (-s.estimate, s.cost))
    texts = ["\n".join(wrap(s.name, NAME_CHARS)[:3]) for s in order]
    height_pt = ax.get_position().height * ax.figure.get_figure(root=True).get_size_inches()[1] * 72
    halves = [(t.count("\n") + 1) * (FONT_PT * 1.3) / height_pt / 2 for t in texts]
    places: list[float] = []
    for n, s in enumerate(order):
        wanted = (s.estimate - bottom) / (top - bottom or 1.0)
        places.append(min(wanted, places[-1] - halves[n - 1] - halves[n]) if places else wanted)
    if places and places[-1] < 0:  # too low: push up from the bottom
        places[-1] = 0.0
        for n in range(len(places) - 2, -1, -1):
            places[n] = max(places[n], places[n + 1] + halves[n] + halves[n + 1])
    for s, words, y in zip(order, texts, places, strict=True):
        text = ax.annotate(
            words, (s.cost, s.estimate), (1.02, y), textcoords="axes fraction", fontsize=FONT_PT, va="center",
            fontweight="bold" if s.on_frontier else "normal", annotation_clip=False,
            arrowprops={"arrowstyle": "-", "linewidth": 0.5, "color": GREY, "shrinkA": 0, "shrinkB": 4},
        )  # fmt: skip
        text.set_gid(f"name: {s.name}")
