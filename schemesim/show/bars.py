"""Bars with brackets: solid up to what is certain, hatched up to what may be."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

from schemesim.show.numbers import probability, quantity
from schemesim.show.style import BLACK, BLUE, FONT_PT, VERMILLION, new_axes, tidy

if TYPE_CHECKING:
    from matplotlib.axes import Axes

ROW_IN = 0.24
EXPLORED = "at least", "at most (not all explored)"


def plot_bars(
    rows: Sequence[tuple[str, float, float]],
    *,
    title: str = "",
    x: str = "",
    shares: bool = True,
    ax: Axes | None = None,
) -> Axes:
    """Horizontal bars, the first row at the top, each with its bracket and its figures behind it.

    Parameters
    ----------
    rows : sequence of (label, low, high)
    title, x : str
        What it is about, and the label of the axis with its unit.
    shares : bool
        Whether figures are probabilities or shares (else quantities).
    ax : matplotlib Axes or None
        Where to draw; None makes a figure of a fitting size.
    """
    longest = max((len(label) for label, _, _ in rows), default=0)
    ax = new_axes(ax, max(len(rows), 1) * ROW_IN, left_in=min(0.3 + longest * 0.062, 3.6), bottom_in=0.85)
    write = probability if shares else quantity
    for n, (label, low, high) in enumerate(rows):
        ends = sorted((low, high))
        certain = ends[0] if ends[0] > 0 else (ends[1] if ends[1] < 0 else 0.0)
        (solid,) = ax.barh([n], [certain], height=0.6, color=BLUE, edgecolor=BLACK, linewidth=0.6, zorder=2)
        solid.set_gid(f"certain: {label}")
        if ends[1] > ends[0]:
            start = certain if certain > 0 else ends[0]
            width = (certain if certain < 0 else ends[1]) - start
            (maybe,) = ax.barh(
                [n], [width], left=[start], height=0.6, color="white", edgecolor=BLUE, hatch="/////",
                linewidth=0.6, zorder=2,
            )  # fmt: skip
            maybe.set_gid(f"bracket: {label}")
        text = ax.annotate(
            write(low, high), (max(ends[1], 0), n), (3, 0), textcoords="offset points", va="center",
            fontsize=FONT_PT - 1, zorder=5,
        )  # fmt: skip
        text.set_gid(f"figure: {label}")
    ax.set_yticks(range(len(rows)), [label for label, _, _ in rows])
    ax.set_ylim(len(rows) - 0.4, -0.6)
    tidy(ax, title=title, x=x, grid="x")
    ax.tick_params(axis="y", length=0)
    if any(low < 0 for _, low, _ in rows):
        ax.axvline(0, color=BLACK, linewidth=0.8)
    left, right = ax.get_xlim()
    ax.set_xlim(left, right + (right - left) * 0.22)
    _explain(ax, any(high > low for _, low, high in rows))
    return ax


def plot_counts(
    counts: Mapping[int, tuple[float, float]], *, title: str = "", x: str = "", marked: int | None = None,
    marked_text: str = "", words: tuple[str, str] = EXPLORED, ax: Axes | None = None,
) -> Axes:  # fmt: skip
    """The probability of each whole number on a logarithmic axis, with its bracket.

    Parameters
    ----------
    counts : mapping of int to (low, high)
    title, x : str
    marked : int or None
        A number pointed out by ``marked_text``.
    words : (str, str)
        What the bars up to the low and up to the high bound are called.
    ax : matplotlib Axes or None
    """
    ax = new_axes(ax, 2.6, bottom_in=0.95)
    ax.set_yscale("log")
    positive = [v for pair in counts.values() for v in pair if v > 0]
    least = min(positive, default=1e-6) / 10**0.5
    for n, (low, high) in counts.items():
        if low > 0:
            (solid,) = ax.bar(
                [n], [low - least], bottom=[least], width=0.6, color=BLUE, edgecolor=BLACK, linewidth=0.6, zorder=2
            )
            solid.set_gid(f"certain: {n}")
        if high > max(low, least):
            base = max(low, least)
            (maybe,) = ax.bar(
                [n], [high - base], bottom=[base], width=0.6, color="white", edgecolor=BLUE, hatch="/////",
                linewidth=0.6, zorder=2,
            )  # fmt: skip
            maybe.set_gid(f"bracket: {n}")
        if high > 0:
            ax.annotate(
                _two_lines(probability(low, high)), (n, high), (0, 2), textcoords="offset points", ha="center",
                fontsize=FONT_PT - 1.5, zorder=5, bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.3},
            )  # fmt: skip
    ax.set_ylim(least, 12.0)
    ax.set_xticks(sorted(counts))
    ax.set_xlim(min(counts, default=0) - 0.8, max(counts, default=0) + 0.8)
    tidy(ax, title=title, x=x, y="probability", grid="y")
    if marked is not None:
        line = ax.axvline(marked, color=VERMILLION, linestyle="--", linewidth=1.2, zorder=1, label=marked_text)
        line.set_gid(f"marked: {marked}")
    _explain(ax, any(high > low for low, high in counts.values()), words)
    return ax


def _two_lines(text: str) -> str:
    """A bracket that is long for a bar, on two lines."""
    return text.replace("…", "…\n") if len(text) > 9 else text


def _explain(ax: Axes, brackets: bool, words: tuple[str, str] = EXPLORED) -> None:
    """What solid and hatched mean."""
    from matplotlib.patches import Patch  # heavy: only when a picture is asked for

    handles, _ = ax.get_legend_handles_labels()
    if brackets:
        handles = [
            Patch(facecolor=BLUE, edgecolor=BLACK, label=words[0]),
            Patch(facecolor="white", edgecolor=BLUE, hatch="/////", label=words[1]),
            *handles,
        ]
    if handles:
        ax.legend(
            handles=handles, loc="upper center", bbox_to_anchor=(0.5, 0), borderaxespad=4.4, ncol=3,
            fontsize=FONT_PT, frameon=False,
        )  # fmt: skip
