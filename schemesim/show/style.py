"""Colours, sizes and small helpers that all pictures share.

The colours are those of M. Okabe and K. Ito, "Color universal design", 2008, chosen to be
told apart with any colour vision; hatches, dashes and markers tell the same in greyscale.
Nothing here touches matplotlib's global state, and no figure is known to pyplot.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.axes import Axes

BLACK, ORANGE, SKY, GREEN = "#000000", "#E69F00", "#56B4E9", "#009E73"
YELLOW, BLUE, VERMILLION, PURPLE = "#F0E442", "#0072B2", "#D55E00", "#CC79A7"
GREY, PALE = "#7F7F7F", "#F1F1F1"

FONT_PT = 8.0
WIDTH_IN = 7.0
"""Width of a chart that fits a page."""

CYCLE = (
    (BLUE, "-", "o"),
    (VERMILLION, "--", "s"),
    (GREEN, "-.", "^"),
    (PURPLE, (0, (1, 1)), "D"),
    (ORANGE, (0, (5, 1, 1, 1, 1, 1)), "v"),
    (SKY, (0, (8, 2)), "P"),
    (BLACK, (0, (2, 2)), "X"),
)
"""Colour, dash and marker of one curve after the other."""


def new_axes(
    ax: Axes | None,
    height_in: float,
    *,
    width_in: float = WIDTH_IN,
    left_in: float = 0.9,
    right_in: float = 0.25,
    top_in: float = 0.5,
    bottom_in: float = 0.65,
) -> Axes:
    """The axes given, or those of a new figure with fixed margins; ``height_in`` is that of the axes alone."""
    if ax is not None:
        return ax
    from matplotlib.figure import Figure  # heavy: only when a picture is asked for

    height = height_in + top_in + bottom_in
    figure = Figure(figsize=(width_in, height))
    box = (left_in / width_in, bottom_in / height)
    return figure.add_axes((*box, 1 - (left_in + right_in) / width_in, height_in / height))


def tidy(ax: Axes, *, title: str = "", x: str = "", y: str = "", grid: str = "") -> None:
    """Labels, small print, no frame above and on the right; ``grid`` is x, y or both."""
    if title:
        ax.set_title(title, fontsize=FONT_PT + 1, loc="left")
    ax.set_xlabel(x, fontsize=FONT_PT)
    ax.set_ylabel(y, fontsize=FONT_PT)
    ax.tick_params(which="both", labelsize=FONT_PT)
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    if grid:
        which: Any = grid
        ax.grid(True, axis=which, color="#DDDDDD", linewidth=0.6, zorder=0)
        ax.set_axisbelow(True)


def below(ax: Axes, *, columns: int = 3, away_pt: float = 30) -> None:
    """A legend under the axes, of what has a label."""
    handles, _ = ax.get_legend_handles_labels()
    if handles:
        ax.legend(
            loc="upper center", bbox_to_anchor=(0.5, 0), borderaxespad=away_pt / FONT_PT, ncol=columns,
            fontsize=FONT_PT, frameon=False, handlelength=2.6,
        )  # fmt: skip
