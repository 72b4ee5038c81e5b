"""Two clearing sequences in one picture: what differs between them, the one above the other.

So a reader sees what a failure, a setting or a further duplicate makes of the same fault.
"""

from __future__ import annotations

from collections.abc import Set
from typing import TYPE_CHECKING

from schemesim.errors import reject
from schemesim.report.lanes import Drawing, Lane, drawing
from schemesim.report.pictures import (
    LABEL_CHARS,
    LANE_IN,
    TITLE_CHARS,
    WIDTH_IN,
    draw_lane,
    draw_margin,
    draw_moments,
    extent_ms,
    legend,
    short_names,
)
from schemesim.report.sequence import ClearingSequence, plain, shorten
from schemesim.show.style import FONT_PT, PALE
from schemesim.ticks import to_ms

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_LEFT_IN, _RIGHT_IN, _TOP_IN, _BOTTOM_IN = 3.3, 0.25, 0.75, 1.6


def plot_timelines(
    first: ClearingSequence,
    second: ClearingSequence,
    labels: tuple[str, str] = ("first", "second"),
    ax: Axes | None = None,
    *,
    all: bool = False,
) -> Axes:
    """Draw two clearing sequences, one lane of each for every component in which they differ.

    Shown are the components on the way to an opening or a failure in either of them.

    Parameters
    ----------
    first, second : timeline
    labels : (str, str)
        What each is, in a word or two.
    ax : matplotlib Axes or None
        Where to draw. None makes a figure of a fitting size.
    all : bool
        Also the components that do the same in both, and those on no such way.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    InputError
        If both labels are the same.
    """
    if labels[0] == labels[1]:
        raise reject("labels", labels, "two different ones")
    alone = drawing(first), drawing(second)
    shown = alone[0].way | alone[1].way
    if all:
        shown |= {lane.subject for d in alone for lane in d.lanes}
    shown -= {d.fault.subject for d in alone}
    drawings = drawing(first, shown), drawing(second, shown)
    groups, same = _paired(*drawings, shown, all=all)
    moments, apart = _head(first, second, labels)
    head = len(moments) + (apart is not None)
    total = head + sum(1 + 2 * len(pairs) for _, pairs in groups)
    if ax is None:
        from matplotlib.figure import Figure  # heavy: only when a picture is asked for

        height = total * LANE_IN + _TOP_IN + _BOTTOM_IN
        figure = Figure(figsize=(WIDTH_IN, height))
        box = _LEFT_IN / WIDTH_IN, _BOTTOM_IN / height
        ax = figure.add_axes((*box, 1 - (_LEFT_IN + _RIGHT_IN) / WIDTH_IN, total * LANE_IN / height))
    lanes = [lane for _, pairs in groups for pair in pairs for lane in pair if lane is not None]
    ax.set_ylim(total - 0.5, -0.5)
    ax.set_xlim(0, extent_ms(ax, lanes, max(d.end_us for d in drawings)))
    y = float(head)
    ticks: dict[float, tuple[str, bool]] = {}
    for n, (station, pairs) in enumerate(groups):
        if n % 2 == 0:
            ax.axhspan(y - 0.5, y + 2 * len(pairs) + 0.5, facecolor=PALE, edgecolor="none", zorder=0)
        ticks[y] = station, True
        y += 1
        width = LABEL_CHARS - max(map(len, labels))
        names = short_names([next(x for x in pair if x is not None).label for pair in pairs], width)
        for name, pair in zip(names, pairs, strict=True):
            for row, (lane, label) in enumerate(zip(pair, labels, strict=True)):
                other = lane is not None and row == 1 and pair[0] is not None and lane.subject != pair[0].subject
                own = lane.label if other and lane is not None else name  # faults at two places
                ticks[y] = (f"{own} · {label}" if row == 0 or other else label), False
                if lane is not None:
                    draw_lane(ax, lane, y)
                y += 1
            ax.axhline(y - 0.5, color="#D0D0D0", linewidth=0.5, zorder=1)
    ax.set_yticks(list(ticks), [text for text, _ in ticks.values()], fontsize=FONT_PT)
    for (_, bold), written in zip(ticks.values(), ax.get_yticklabels(), strict=True):
        written.set_fontweight("bold" if bold else "normal")
    ax.tick_params(axis="y", length=0)
    ax.tick_params(axis="x", labelsize=FONT_PT)
    for side in ("left", "right", "top"):
        ax.spines[side].set_visible(False)
    draw_moments(ax, moments, total)
    if apart is not None:
        draw_margin(ax, *apart, len(moments))
    ax.set_xlabel("time from the beginning of the fault, ms", fontsize=FONT_PT)
    told = "" if all or not same else f"\n{same} more do the same in both and are left out"
    titles = (
        f"{label}: {shorten(t.title, TITLE_CHARS - 20)}" for label, t in zip(labels, (first, second), strict=True)
    )
    ax.set_title("\n".join(titles) + told, fontsize=FONT_PT + 1, loc="left")
    legend(ax, lanes, links=False, columns=3)
    return ax


Pair = tuple[Lane | None, Lane | None]


def _paired(first: Drawing, second: Drawing, shown: Set[str], *, all: bool) -> tuple[list[tuple[str, list[Pair]]], int]:
    """Lanes of both by station, those that differ (or all), and how many are the same."""
    mine = {lane.subject: lane for lane in first.lanes}
    other = {lane.subject: lane for lane in second.lanes}
    stations: dict[str, list[str]] = {}
    for station, lanes in (*first.stations, *second.stations):
        here = stations.setdefault(station, [])
        here += [lane.subject for lane in lanes if lane.subject in shown and lane.subject not in here]
    faults: Pair = (first.fault, second.fault)
    groups: list[tuple[str, list[Pair]]] = [("fault", [faults])]
    left_out = 0
    if not all and (first.fault.subject, first.fault.bars) == (second.fault.subject, second.fault.bars):
        groups, left_out = [], 1
    for station, subjects in stations.items():
        pairs: list[Pair] = []
        for subject in subjects:
            a, b = mine.get(subject), other.get(subject)
            if not all and a is not None and b is not None and (a.bars, a.marks) == (b.bars, b.marks):
                left_out += 1
            else:
                pairs.append((a, b))
        if pairs:
            groups.append((station, pairs))
    return groups, left_out


def _head(
    first: ClearingSequence, second: ClearingSequence, labels: tuple[str, str]
) -> tuple[list[tuple[float, str, str]], tuple[float, float, str] | None]:
    """Both clearings and the limits as lines, and how far the clearings are apart."""
    moments: list[tuple[float, str, str]] = []
    for timeline, label, style in zip((first, second), labels, ("-", "-."), strict=True):
        clear = timeline.run.outcome.t_clear_us
        if clear is not None:
            moments.append((to_ms(clear), style, f"{label}: cleared {timeline.when(clear)}"))
    limits = sorted({t.limit_us for t in (first, second) if t.limit_us is not None})
    moments += [(to_ms(limit), "--", f"limit {plain(to_ms(limit))} ms") for limit in limits]
    clears = [t.run.outcome.t_clear_us for t in (first, second)]
    if clears[0] is None or clears[1] is None or clears[0] == clears[1]:
        return moments, None
    early, late = sorted(to_ms(t) for t in clears if t is not None)
    return moments, (early, late, f"{plain(late - early)} ms apart")
