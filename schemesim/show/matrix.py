"""A map of what opens where: a row for each place, a column for each breaker, dots by probability.

Size tells the probability, so the picture reads the same in greyscale; a frame is what is intended.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from schemesim.show.style import BLACK, BLUE, FONT_PT, GREY, VERMILLION, new_axes

if TYPE_CHECKING:
    from matplotlib.axes import Axes

CELL_IN = 0.2
LETTER_IN = 0.085
HEADING_IN = 0.17
"""Of the stations' names: room for a bold letter, and the height of a line."""
CLASSES = (
    (0.5, 9.0, "1/2 or more"),
    (1e-2, 6.8, "10⁻² or more"),
    (1e-3, 5.0, "10⁻³ or more"),
    (1e-4, 3.4, "10⁻⁴ or more"),
    (0.0, 1.9, "less"),
)
"""Least probability, size of the dot, words."""


@dataclass(frozen=True, slots=True)
class PlaceRow:
    """One row: what is intended to open, and the probability with which each opens."""

    name: str
    intended: frozenset[str]
    opens: Mapping[str, float]

    def at(self, columns: Mapping[str, int]) -> tuple[float, str]:
        """Where it comes in a sorted map: by the middle of what is intended to open."""
        here = [columns[b] for b in self.intended if b in columns]
        return (sum(here) / len(here) if here else float(len(columns)), self.name)


def plot_map(
    rows: Sequence[PlaceRow], groups: Mapping[str, Sequence[str]], *, title: str = "", ax: Axes | None = None
) -> Axes:
    """Draw the map, rows sorted so that those with the same breakers stand together.

    Parameters
    ----------
    rows : sequence of PlaceRow
    groups : mapping of station to sequence of str
        Breakers in the order of the columns, those of a station together.
    title : str
    ax : matplotlib Axes or None
    """
    names = [b for some in groups.values() for b in some]
    column = {b: n for n, b in enumerate(names)}
    ordered = sorted(rows, key=lambda r: r.at(column))
    longest = max((len(r.name) for r in rows), default=0)
    wide = max((len(_short(b, s)) for s, some in groups.items() for b in some), default=0)
    headings = _headings(groups, column)
    raised = max((level for *_, level in headings), default=0)
    left, top = 0.3 + longest * 0.062, 0.75 + wide * 0.058 + raised * HEADING_IN
    width = left + 0.3 + max(len(names), 12) * CELL_IN
    height = max(len(rows), 1) * CELL_IN
    ax = new_axes(ax, height, width_in=width, left_in=left, right_in=0.3, top_in=top, bottom_in=0.75)
    ax.set_xlim(-0.5, max(len(names), 12) - 0.5)
    ax.set_ylim(len(rows) - 0.5, -0.5)
    _bands(ax, groups, column, len(rows))
    for station, middle, level in headings:
        ax.annotate(
            station, (middle, 1), (0, 8 + wide * 4.4 + level * HEADING_IN * 72), xycoords=("data", "axes fraction"),
            textcoords="offset points", ha="center", va="bottom", fontsize=FONT_PT, fontweight="bold",
        )  # fmt: skip
    for y, row in enumerate(ordered):
        for b in sorted(row.intended & set(column)):
            _frame(ax, column[b], y, f"intended: {row.name}: {b}")
        for least, size, _ in CLASSES:
            upper = min((c[0] for c in CLASSES if c[0] > least), default=2.0)
            for inside, color in ((True, BLUE), (False, VERMILLION)):
                some = [
                    b for b, p in row.opens.items()
                    if least <= p < upper and p > 0 and (b in row.intended) is inside and b in column
                ]  # fmt: skip
                if some:
                    (dots,) = ax.plot(
                        [column[b] for b in some], [y] * len(some), linestyle="none", marker="o" if inside else "D",
                        markersize=size if inside else size * 0.82, color=color, markeredgewidth=0, zorder=4,
                    )  # fmt: skip
                    dots.set_gid(f"{'inside' if inside else 'beyond'}: {row.name}: {', '.join(sorted(some))}")
    ax.set_xticks(range(len(names)), [_short(b, s) for s, some in groups.items() for b in some], rotation=90)
    ax.set_yticks(range(len(ordered)), [r.name for r in ordered])
    ax.tick_params(length=0, labelsize=FONT_PT - 1, top=True, labeltop=True, bottom=False, labelbottom=False, pad=2)
    for side in ax.spines.values():
        side.set_visible(False)
    ax.set_title(title, fontsize=FONT_PT + 1, loc="left", pad=(top - 0.3) * 72)
    _legend(ax)
    return ax


def _short(name: str, group: str) -> str:
    return name.removeprefix(f"{group}.") if group else name


def _headings(groups: Mapping[str, Sequence[str]], column: Mapping[str, int]) -> list[tuple[str, float, int]]:
    """Name, middle and level of each group's heading: one that would run into its neighbour is raised."""
    found: list[tuple[str, float, int]] = []
    ends: list[float] = []
    for station, some in groups.items():
        if some:
            words = station or "others"
            middle, half = (column[some[0]] + column[some[-1]]) / 2, len(words) * LETTER_IN / CELL_IN / 2
            level = next((n for n, end in enumerate(ends) if middle - half >= end), len(ends))
            ends[level : level + 1] = [middle + half]
            found.append((words, middle, level))
    return found


def _bands(ax: Axes, groups: Mapping[str, Sequence[str]], column: Mapping[str, int], rows: int) -> None:
    """A grey ground under every other station, and hair lines between rows."""
    for n, some in enumerate(groups.values()):
        if not some:
            continue
        first, last = column[some[0]], column[some[-1]]
        if n % 2 == 0:
            ax.axvspan(first - 0.5, last + 0.5, facecolor="#F1F1F1", edgecolor="none", zorder=0)
    for y in range(rows + 1):
        ax.axhline(y - 0.5, color="#E2E2E2", linewidth=0.4, zorder=1)


def _frame(ax: Axes, x: float, y: float, gid: str) -> None:
    from matplotlib.patches import Rectangle  # heavy: only when a picture is asked for

    box = Rectangle((x - 0.43, y - 0.43), 0.86, 0.86, facecolor="white", edgecolor=BLACK, linewidth=0.7, zorder=2)
    box.set_gid(gid)
    ax.add_patch(box)


def _legend(ax: Axes) -> None:
    from matplotlib.lines import Line2D  # heavy: only when a picture is asked for

    frame = Line2D([], [], linestyle="none", marker="s", markersize=8, label="intended to open")
    frame.set_markerfacecolor("white")
    frame.set_markeredgecolor(BLACK)
    opens = Line2D([], [], linestyle="none", marker="o", color=BLUE, label="opens")
    beyond = Line2D([], [], linestyle="none", marker="D", color=VERMILLION, markersize=5, label="opens beyond that")
    sizes = [
        Line2D([], [], linestyle="none", marker="o", color=GREY, markersize=size, label=words)
        for _, size, words in CLASSES
    ]
    ax.legend(
        handles=[frame, opens, beyond, *sizes], loc="upper left", bbox_to_anchor=(0, 0), borderaxespad=0.6, ncol=4,
        fontsize=FONT_PT - 1, frameon=False, handletextpad=0.2, columnspacing=1.0, title="probability by size",
        title_fontsize=FONT_PT - 1, alignment="left",
    )  # fmt: skip
