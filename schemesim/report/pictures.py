"""One clearing sequence as a picture: time runs to the right, one lane for each component.

Bars differ by hatch, height and edge as well as colour, so that a picture in greyscale
reads the same.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from schemesim.engine.outcome import Status
from schemesim.report.lanes import Drawing, Lane, Look, Mark, drawing
from schemesim.report.sequence import ClearingSequence, plain, shorten
from schemesim.show.style import (
    BLACK,
    BLUE,
    FONT_PT,
    GREEN,
    GREY,
    ORANGE,
    PALE,
    PURPLE,
    SKY,
    VERMILLION,
    YELLOW,
)
from schemesim.ticks import to_ms

if TYPE_CHECKING:
    from matplotlib.artist import Artist
    from matplotlib.axes import Axes

LANE_IN = 0.235
"""Height of one lane in inches at the default size."""
WIDTH_IN = 11.0
LABEL_CHARS = 36
TITLE_CHARS = 110
_LEFT_IN, _RIGHT_IN, _TOP_IN, _BOTTOM_IN = 2.75, 0.25, 1.05, 1.25


@dataclass(frozen=True, slots=True)
class Style:
    """How a bar is drawn: its colours, hatch, height (of a lane's) and where it sits in its lane."""

    face: str
    edge: str
    hatch: str
    height: float
    shift: float = 0.0


STYLES = {
    Look.FAULT: Style("#3A3A3A", BLACK, "", 0.62),
    Look.MEASURING: Style("white", BLUE, "", 0.14),
    Look.PICKED_UP: Style(SKY, BLUE, "", 0.62),
    Look.RUNNING: Style("white", VERMILLION, "////", 0.62),
    Look.UNDER_WAY: Style("white", PURPLE, "oo", 0.62),
    Look.ON: Style(BLUE, BLACK, "", 0.42),
    Look.SEALED_IN: Style(GREEN, BLACK, "xxx", 0.62),
    Look.OPENING: Style(ORANGE, BLACK, "\\\\\\", 0.5, -0.14),
    Look.CLOSING: Style(YELLOW, BLACK, "---", 0.5, -0.14),
    Look.CLOSED: Style(GREY, GREY, "", 0.12, 0.3),
}
"""Look of each bar; a positive shift is down."""


def plot_timeline(timeline: ClearingSequence, ax: Axes | None = None, *, short: bool = False) -> Axes:
    """Draw a clearing sequence.

    Time runs to the right in ms, with cycles above. Each component that took part has a
    lane, those of a station together, in the order in which they began. Thin lines with a
    dot lead from cause to effect along the way to every opening; a cross is a failure; the
    margin stands behind a timer that was stopped.

    Parameters
    ----------
    timeline : ClearingSequence
    ax : matplotlib Axes or None
        Where to draw. None makes a figure of a fitting size, apart from pyplot; it is the
        ``figure`` of the axes returned.
    short : bool
        Only what is on the way to an opening or has failed; timers stopped in time are left out.

    Returns
    -------
    matplotlib Axes

    Examples
    --------
    ``plot_timeline(found).figure.savefig("sequence.pdf")``
    """
    what = drawing(timeline)
    what = what.short() if short else what
    moments = moments_of(timeline)
    margin = margin_of(timeline)
    places, headings, total = _places(what, len(moments) + (margin is not None))
    if ax is None:
        from matplotlib.figure import Figure  # heavy: only when a picture is asked for

        height = total * LANE_IN + _TOP_IN + _BOTTOM_IN
        figure = Figure(figsize=(WIDTH_IN, height))
        box = (_LEFT_IN / WIDTH_IN, _BOTTOM_IN / height)
        size = (1 - (_LEFT_IN + _RIGHT_IN) / WIDTH_IN, total * LANE_IN / height)
        ax = figure.add_axes((*box, *size))
    _frame(ax, timeline, what, places, headings, total)
    for lane in what.lanes:
        draw_lane(ax, lane, places[lane.subject])
    _draw_links(ax, what, places)
    draw_moments(ax, moments, total)
    if margin is not None:
        draw_margin(ax, *margin, len(moments))
    legend(ax, what.lanes, bool(what.links))
    return ax


def _places(what: Drawing, first: int) -> tuple[dict[str, float], list[tuple[float, float, str]], float]:
    """Height of each lane, headings (place, last place, station) and how many there are in all.

    The ``first`` lines are left for the labels of moments.
    """
    y = float(first)
    places = {what.fault.subject: y}
    headings: list[tuple[float, float, str]] = []
    y += 1
    for station, lanes in what.stations:
        start = y
        y += 1
        for lane in lanes:
            places[lane.subject] = y
            y += 1
        headings.append((start, y - 1, station or "elsewhere"))
    return places, headings, y


def _frame(
    ax: Axes,
    timeline: ClearingSequence,
    what: Drawing,
    places: dict[str, float],
    headings: list[tuple[float, float, str]],
    total: float,
) -> None:
    """Axes, names of lanes and bands of stations."""
    ax.set_ylim(total - 0.5, -0.5)
    ax.set_xlim(0, extent_ms(ax, what.lanes, what.end_us))
    names: dict[float, str] = {}
    for _, lanes in what.stations:
        short = short_names([lane.label for lane in lanes], LABEL_CHARS)
        names.update({places[lane.subject]: text for lane, text in zip(lanes, short, strict=True)})
    no_fault = timeline.run.outcome.status is Status.NO_FAULT
    begun = what.fault.subject if no_fault else f"fault on {what.fault.subject}"
    names[places[what.fault.subject]] = shorten(begun, LABEL_CHARS)
    stations = {start: station for start, _, station in headings}
    ticks = sorted({**names, **stations})
    ax.set_yticks(ticks, [stations.get(y, names.get(y, "")) for y in ticks], fontsize=FONT_PT)
    for y, label in zip(ticks, ax.get_yticklabels(), strict=True):
        label.set_fontweight("bold" if y in stations else "normal")
    ax.tick_params(axis="y", length=0)
    ax.tick_params(axis="x", labelsize=FONT_PT)
    for n, (start, last, _) in enumerate(headings):
        if n % 2 == 0:
            ax.axhspan(start - 0.5, last + 0.5, facecolor=PALE, edgecolor="none", zorder=0)
    ax.set_xlabel(f"time from the beginning of the {'event' if no_fault else 'fault'}, ms", fontsize=FONT_PT)
    hz = timeline.frequency_hz

    def to_top(ms: Any) -> Any:
        return ms * hz / 1000

    def from_top(top: Any) -> Any:
        return top * 1000 / hz

    cycles = ax.secondary_xaxis("top", functions=(to_top, from_top))
    cycles.set_xlabel(f"cycles of {plain(hz)} Hz", fontsize=FONT_PT)
    cycles.tick_params(labelsize=FONT_PT)
    for side in ("left", "right"):
        ax.spines[side].set_visible(False)
    title = f"{shorten(timeline.title, TITLE_CHARS)}\n{shorten(timeline.ending, TITLE_CHARS)}"
    ax.set_title(title, fontsize=FONT_PT + 1, loc="left")


def short_names(labels: Sequence[str], width: int) -> list[str]:
    """Labels no longer than ``width``, the middle left out; those that would look alike show where they differ.

    Examples
    --------
    >>> short_names(["trip to the far station over channel 1, under way", "pick-up"], 24)
    ['trip to th… 1, under way', 'pick-up']
    >>> short_names(["transfer trip channel 1, on its way", "transfer trip channel 2, on its way"], 20)
    ['trans…nel 1,…its way', 'trans…nel 2,…its way']
    """
    found = [shorten(label, width) for label in labels]
    for text in {text for text in found if found.count(text) > 1 and text not in labels}:
        alike = [n for n, other in enumerate(found) if other == text]
        letters = zip(*(labels[n] for n in alike), strict=False)
        same = next((k for k, column in enumerate(letters) if len(set(column)) > 1), 0)
        head = min(same, width // 4)
        middle = max(same - width // 5, head)
        for n in alike:
            found[n] = f"{labels[n][:head]}…{shorten(labels[n][middle:], width - head - 1)}"
    return found


def extent_ms(ax: Axes, lanes: Iterable[Lane], end_us: int) -> float:
    """Width of the axis such that every text behind a bar or a mark has room."""
    width_in = ax.get_position().width * ax.figure.get_figure(root=True).get_size_inches()[0]
    extent = to_ms(end_us) * 1.03
    for lane in lanes:
        texts = [(b.end_us, b.note) for b in lane.bars if b.note and not b.open_ended]
        for t_us, text in (*texts, *((_behind(lane, m), m.text) for m in lane.marks)):
            share = min((0.3 + len(text) * FONT_PT * 0.56 / 72) / width_in, 0.6)
            extent = max(extent, to_ms(t_us) / (1 - share))
    return extent


def draw_lane(ax: Axes, lane: Lane, y: float) -> None:
    from matplotlib.patches import Rectangle  # heavy: only when a picture is asked for

    right = ax.get_xlim()[1]
    for bar in lane.bars:
        s = STYLES[bar.look]
        start, end = to_ms(bar.start_us), right if bar.open_ended else to_ms(bar.end_us)
        patch = Rectangle(
            (start, y + s.shift - s.height / 2), end - start, s.height,
            facecolor=s.face, edgecolor=s.edge, hatch=s.hatch, linewidth=0.8, zorder=2,
        )  # fmt: skip
        patch.set_gid(f"bar: {bar.look}: {lane.subject}")
        ax.add_patch(patch)
        if bar.note and not bar.open_ended:
            text_beside(ax, end, y, bar.note)
    for mark in lane.marks:
        x = to_ms(mark.t_us)
        (cross,) = ax.plot(
            [x], [y], marker="X", markersize=8, markeredgecolor=BLACK,
            markerfacecolor="white" if mark.prevented else VERMILLION,
            markeredgewidth=0.8, linestyle="none", zorder=6, clip_on=False,
        )  # fmt: skip
        cross.set_gid(f"{'prevented' if mark.prevented else 'failure'}: {lane.subject}")
        text_beside(ax, to_ms(_behind(lane, mark)), y - 0.1, mark.text, bold=True, away_pt=7)


def _behind(lane: Lane, mark: Mark) -> int:
    """Where the text of a mark begins: at the mark, or at the end of a breaker's bar it would cover."""
    return max(
        (b.end_us for b in lane.bars if b.look is Look.OPENING and b.start_us <= mark.t_us <= b.end_us),
        default=mark.t_us,
    )


def text_beside(ax: Axes, x: float, y: float, text: str, *, bold: bool = False, away_pt: float = 4) -> None:
    """A text to the right of a point, on a ground of its own."""
    ax.annotate(
        text, (x, y), (away_pt, 0), textcoords="offset points", va="center", ha="left",
        fontsize=FONT_PT - 0.5, fontweight="bold" if bold else "normal", zorder=7,
        bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.6, "alpha": 0.85},
    )  # fmt: skip


def _draw_links(ax: Axes, what: Drawing, places: dict[str, float]) -> None:
    for link in what.links:
        shift = STYLES[Look.CLOSED].shift if link.contact else 0.0
        start = to_ms(link.t_cause_us), places[link.cause] + shift
        end = to_ms(link.t_effect_us), places[link.effect]
        arrow = ax.annotate(
            "", end, start, zorder=4,
            arrowprops={"arrowstyle": "-|>,head_width=0.16,head_length=0.32", "linewidth": 0.8,
                        "color": BLACK, "shrinkA": 0, "shrinkB": 2},
        )  # fmt: skip
        arrow.set_gid(f"cause: {link.cause} to {link.effect}")
        ax.plot(*start, marker="o", markersize=3, color=BLACK, linestyle="none", zorder=5)


def moments_of(timeline: ClearingSequence) -> list[tuple[float, str, str]]:
    """The instant of clearing and the limit: ms, style of the line, label."""
    found: list[tuple[float, str, str]] = []
    clear, limit = timeline.run.outcome.t_clear_us, timeline.limit_us
    if clear is not None:
        found.append((to_ms(clear), "-", f"cleared {timeline.when(clear)}"))
    if limit is not None:
        found.append((to_ms(limit), "--", f"limit {plain(to_ms(limit))} ms"))
    return found


def draw_moments(ax: Axes, moments: list[tuple[float, str, str]], total: float) -> None:
    """Lines over all lanes, each with its label on a line of its own above them."""
    right = ax.get_xlim()[1]
    for y, (x, line, text) in enumerate(moments):
        width = 1.6 if line == "-" else 1.1
        (drawn,) = ax.plot([x, x], [y - 0.5, total - 0.5], color=BLACK, linestyle=line, linewidth=width, zorder=3)
        drawn.set_gid(text)
        before = x > right / 2
        ax.annotate(
            text, (x, y), (-4 if before else 4, 0), textcoords="offset points", va="center",
            ha="right" if before else "left", fontsize=FONT_PT, fontweight="bold", zorder=7,
            bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.6},
        )  # fmt: skip


def margin_of(timeline: ClearingSequence) -> tuple[float, float, str] | None:
    """From the clearing to the limit: both in ms, and in words; None where one of them is not, or they are one."""
    clear, limit = timeline.run.outcome.t_clear_us, timeline.limit_us
    if clear is None or limit is None or clear == limit:
        return None
    words = f"{plain(to_ms(abs(limit - clear)))} ms {'to spare' if clear < limit else 'too late'}"
    return to_ms(clear), to_ms(limit), words


def draw_margin(ax: Axes, clear_ms: float, limit_ms: float, words: str, y: float) -> None:
    """A line with two heads between the clearing and the limit, and how much that is."""
    heads = {"arrowstyle": "<|-|>,head_width=0.16,head_length=0.32", "linewidth": 1.2, "shrinkA": 0, "shrinkB": 0}
    late = clear_ms > limit_ms
    color = VERMILLION if late else BLACK
    arrow = ax.annotate("", (limit_ms, y), (clear_ms, y), zorder=6, arrowprops={**heads, "color": color})
    arrow.set_gid(f"margin: {words}")
    right = ax.get_xlim()[1]
    end = max(clear_ms, limit_ms)
    behind = end < 0.8 * right
    ax.annotate(
        words, (end if behind else min(clear_ms, limit_ms), y), (4 if behind else -4, 0), textcoords="offset points",
        ha="left" if behind else "right", va="center", fontsize=FONT_PT, color=color, fontweight="bold", zorder=7,
        bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.6},
    )  # fmt: skip


def legend(ax: Axes, lanes: Sequence[Lane], links: bool, columns: int = 4) -> None:
    """What is there to be explained, and no more."""
    from matplotlib.lines import Line2D  # heavy: only when a picture is asked for
    from matplotlib.patches import Patch

    used = {bar.look for lane in lanes for bar in lane.bars}
    handles: list[Artist] = [
        Patch(facecolor=s.face, edgecolor=s.edge, hatch=s.hatch, label=str(look))
        for look, s in STYLES.items()
        if look in used
    ]
    marks = {mark.prevented for lane in lanes for mark in lane.marks}
    for prevented, label, face in ((False, "failure", VERMILLION), (True, "no output, for a failure", "white")):
        if prevented in marks:
            cross = Line2D([], [], linestyle="none", marker="X", markersize=8, label=label)
            cross.set_markerfacecolor(face)
            cross.set_markeredgecolor(BLACK)
            handles.append(cross)
    if links:
        handles.append(Line2D([], [], color=BLACK, linewidth=0.8, marker="o", markersize=3, label="cause to effect"))
    ax.legend(
        handles=handles, loc="upper center", bbox_to_anchor=(0.5, 0), borderaxespad=5.5, ncol=columns,
        fontsize=FONT_PT, frameon=False, handlelength=2.4, handleheight=1.0,
    )  # fmt: skip
