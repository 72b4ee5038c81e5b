"""Curves with brackets as bands: what is left uncleared against time, a timer's trade-off, a dial, operate times."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

from schemesim.errors import ErrorList
from schemesim.show.style import BLACK, CYCLE, FONT_PT, ORANGE, VERMILLION, below, new_axes, tidy

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Band = tuple[float, float]


@dataclass(frozen=True, slots=True)
class Line:
    """A line straight up, with its label on top; dashed for a limit."""

    x: float
    text: str
    dashed: bool = False


def plot_left(
    steps: Sequence[tuple[float, Band]], *, title: str = "", lines: Sequence[Line] = (), ax: Axes | None = None
) -> Axes:
    """The probability that a fault is still there after a time, on a logarithmic axis, as a band of two steps.

    Parameters
    ----------
    steps : sequence of (ms, (low, high))
        For each time the bounds of the probability that the fault is cleared by then.
    title : str
    lines : sequence of Line
        Moments marked, such as the limit.
    ax : matplotlib Axes or None
    """
    ax = new_axes(ax, 2.8, bottom_in=0.95)
    times = [0.0, *(t for t, _ in steps)]
    most = [1.0, *(1 - low for _, (low, _) in steps)]
    least = [1.0, *(1 - high for _, (_, high) in steps)]
    end = max([*times, *(line.x for line in lines)], default=1.0) * 1.12 or 1.0
    times.append(end)
    most.append(most[-1])
    least.append(least[-1])
    positive = [p for p in (*most, *least) if p > 0]
    floor = 10 ** (math.floor(math.log10(min(positive, default=1e-6))) - 0.3)
    ax.set_yscale("log")
    band = ax.fill_between(
        times, [max(p, floor) for p in least], [max(p, floor) for p in most], step="post", facecolor="#CFE3F1",
        edgecolor="none", hatch="....", linewidth=0, zorder=2, label="between these (not all explored)",
    )  # fmt: skip
    band.set_gid("bracket")
    for values, style, words in ((most, "-", "at most"), (least, "--", "at least")):
        (drawn,) = ax.step(
            times, [max(p, floor) for p in values], where="post", color=BLACK, linestyle=style, linewidth=1.2, zorder=3,
            label=words,
        )  # fmt: skip
        drawn.set_gid(words)
    ax.set_xlim(0, end)
    ax.set_ylim(floor, 2.5)
    tidy(ax, title=title, x="time from the beginning of the fault, ms", y="probability: not yet cleared", grid="y")
    mark_lines(ax, lines)
    below(ax)
    return ax


def mark_lines(ax: Axes, lines: Sequence[Line], color: str = VERMILLION) -> None:
    """Draw marked places of the x axis, labels along the lines so that neighbours do not collide."""
    for line in lines:
        style = "--" if line.dashed else "-"
        drawn = ax.axvline(line.x, color=color, linestyle=style, linewidth=1.1, zorder=4)
        drawn.set_gid(f"line: {line.text}")
        ax.annotate(
            line.text, (line.x, 1), (-2, -3), xycoords=("data", "axes fraction"), textcoords="offset points",
            rotation=90, ha="right", va="top", fontsize=FONT_PT - 1, zorder=6,
            bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.5, "alpha": 0.85},
        )  # fmt: skip


def plot_bands(
    x_values: Sequence[float],
    curves: Mapping[str, Sequence[Band | None]],
    *,
    title: str = "",
    x: str = "",
    y: str = "",
    log: bool = True,
    lines: Sequence[Line] = (),
    good: Band | None = None,
    good_text: str = "",
    ax: Axes | None = None,
) -> Axes:
    """Several brackets against one quantity.

    Parameters
    ----------
    x_values : sequence of float
    curves : mapping of label to sequence of (low, high) or None
        One bracket for each value, None where there is none.
    title, x, y : str
    log : bool
        Whether the y axis is logarithmic.
    lines : sequence of Line
    good : (float, float) or None
        A range of x to be shaded, explained by ``good_text``.
    ax : matplotlib Axes or None
    """
    ax = new_axes(ax, 2.8, bottom_in=1.0)
    positive = [v for curve in curves.values() for b in curve if b for v in b if v > 0]
    top = max(positive, default=1.0)
    floor = min(max(min(positive, default=top), top * 1e-12) / 3, top * 1e-4) if log else -math.inf
    if log:
        ax.set_yscale("log")
        ax.set_ylim(floor, top * 4)
    if good is not None:
        span = ax.axvspan(
            *good, facecolor="#EDF6F1", edgecolor="#BFD9CB", hatch="..", linewidth=0, zorder=0, label=good_text
        )
        span.set_gid(f"good: {good[0]:g} to {good[1]:g}")
    for n, (label, curve) in enumerate(curves.items()):
        color, dash, marker = CYCLE[n % len(CYCLE)]
        there = [(v, b) for v, b in zip(x_values, curve, strict=True) if b is not None]
        at = [v for v, _ in there]
        lows, highs = [max(b[0], floor) for _, b in there], [max(b[1], floor) for _, b in there]
        look: dict[str, Any] = {"color": color, "linestyle": dash, "linewidth": 1.3, "zorder": 3}
        spare: dict[str, Any] = {"marker": marker, "markersize": 3.5} if len(at) < 40 else {}
        (drawn,) = ax.plot(at, highs, label=label, **look, **spare)
        drawn.set_gid(f"curve: {label}")
        if lows != highs:
            band = ax.fill_between(at, lows, highs, facecolor=color, alpha=0.25, linewidth=0, zorder=2)
            band.set_gid(f"bracket: {label}")
            ax.plot(at, lows, **{**look, "linewidth": 0.7})
    tidy(ax, title=title, x=x, y=y, grid="y")
    mark_lines(ax, lines, BLACK)  # no colour of a curve
    below(ax, columns=2)
    return ax


class Timed(Protocol):
    """A characteristic that tells its operate time."""

    def operate_s(self, multiple: float, /) -> float | None:
        """Operate time in seconds at a multiple of the pick-up current."""


def plot_time_current(
    curves: Mapping[str, Timed | Callable[[float], float | None]],
    *,
    pick_ups_a: Mapping[str, float] | None = None,
    least: float = 1.05,
    most: float = 20.0,
    marks: Mapping[str, float] | None = None,
    grading_s: float | None = None,
    title: str = "",
    ax: Axes | None = None,
) -> Axes:
    """Time-current characteristics, both axes logarithmic.

    Parameters
    ----------
    curves : mapping of label to curve or callable
        From the multiple of the pick-up current to the operate time in seconds; no time, infinity
        or a mistake in value (below pick-up) leaves a gap.
    pick_ups_a : mapping of label to float or None
        Pick-up current of each curve in A; then the axis is the current in A, so that relays with
        different pick-ups can be set beside each other, and marks are in A too.
    least, most : float
        Range of multiples.
    marks : mapping of label to float or None
        Multiples marked by a line, such as the current of a close-in fault; the time of each
        curve is written where they cross.
    grading_s : float or None
        A grading margin in seconds, drawn at each mark between neighbouring curves that lie closer.
    title : str
    ax : matplotlib Axes or None

    Raises
    ------
    InputError
        For a range that is none.

    Examples
    --------
    >>> ax = plot_time_current({"standard inverse, 0.1": lambda m: 0.1 * 0.14 / (m**0.02 - 1)})
    >>> ax.get_xlabel()
    'current, multiples of pick-up'
    """
    errors = ErrorList()
    if not 0 < least < math.inf:
        errors.add("least multiple", least, "a finite number over zero")
    if not least < most < math.inf:
        errors.add("most multiple", most, "a finite number over the least multiple")
    for name, at in (marks or {}).items():
        if not 0 < at < math.inf:
            errors.add(f"mark {name!r}", at, "a finite multiple (or current) over zero")
    for label in curves if pick_ups_a is not None else ():
        if not 0 < (pick_ups_a or {}).get(label, 0) < math.inf:
            errors.add(f"pick-up of {label!r}", (pick_ups_a or {}).get(label), "a finite current over zero, in A")
    errors.raise_if_any()
    scale = {label: 1.0 if pick_ups_a is None else float(pick_ups_a[label]) for label in curves}
    least, most = least * min(scale.values(), default=1.0), most * max(scale.values(), default=1.0)
    ax = new_axes(ax, 4.2, bottom_in=1.0, left_in=0.8)
    ax.set_xscale("log")
    ax.set_yscale("log")
    multiples = [least * (most / least) ** (i / 240) for i in range(241)]
    for n, (label, curve) in enumerate(curves.items()):
        color, dash, _ = CYCLE[n % len(CYCLE)]
        times = [_time(curve, m / scale[label]) for m in multiples]
        (drawn,) = ax.plot(multiples, times, color=color, linestyle=dash, linewidth=1.5, label=label, zorder=3)
        drawn.set_gid(f"curve: {label}")
    explained = False
    for name, at in (marks or {}).items():
        mark_lines(ax, [Line(at, name)])
        found = sorted(
            (t, label) for label, curve in curves.items() if not math.isnan(t := _time(curve, at / scale[label]))
        )
        for i, (t, label) in enumerate(found):
            (dot,) = ax.plot([at], [t], marker="o", markersize=4, color=BLACK, linestyle="none", zorder=5)
            dot.set_gid(f"at {name}: {label}")
            right = i % 2 == 0  # by turns, so that times close together can be read
            text = ax.annotate(
                f"{t:.3g} s", (at, t), (4 if right else -4, 2), textcoords="offset points", fontsize=FONT_PT - 1,
                ha="left" if right else "right", zorder=6,
                bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.3, "alpha": 0.8},
            )  # fmt: skip
            text.set_gid(f"time at {name}: {label}")
            if grading_s is not None and i and t - found[i - 1][0] < grading_s:
                words = "" if explained else f"closer than {grading_s:g} s"
                explained = True
                (short,) = ax.plot([at, at], [found[i - 1][0], t], color=ORANGE, linewidth=4, zorder=4, label=words)
                short.set_gid(f"short of grading: {found[i - 1][1]} to {label}")
    ax.set_xlim(least, most)
    words = "current, multiples of pick-up" if pick_ups_a is None else "current, A"
    tidy(ax, title=title, x=words, y="operate time, s")
    ax.grid(True, which="both", color="#E3E3E3", linewidth=0.5)
    ticks = [m * 10.0**e for e in range(-3, 7) for m in (1, 1.5, 2, 3, 5, 7) if least <= m * 10.0**e <= most]
    ax.set_xticks(ticks, [f"{m:g}" for m in ticks])
    ax.set_xticks([], minor=True)
    low, high = (t * f for t, f in zip(ax.get_ylim(), (1.0, 1.0), strict=True))
    steps = [s * 10.0**e for e in range(-3, 5) for s in (1, 2, 5) if low <= s * 10.0**e <= high]
    ax.set_yticks(steps, [f"{s:g}" for s in steps])
    ax.set_yticks([], minor=True)
    below(ax, columns=2)
    return ax


def _time(curve: Timed | Callable[[float], float | None], multiple: float) -> float:
    """An operate time in seconds; no number where the curve has none."""
    operate: Any = getattr(curve, "operate_s", curve)
    try:
        t = operate(multiple)
    except (ArithmeticError, ValueError):
        return math.nan
    return math.nan if t is None or not 0 < t < math.inf else float(t)
