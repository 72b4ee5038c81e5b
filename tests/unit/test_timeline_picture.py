"""Clearing sequences as pictures: what they hold, not how their pixels fall."""

from __future__ import annotations

import io
import subprocess
import sys
from itertools import combinations

import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from schemesim.errors import InputError
from schemesim.report.compared import plot_timelines
from schemesim.report.lanes import Look, drawing
from schemesim.report.pictures import STYLES, plot_timeline
from schemesim.report.timeline import replay, timeline
from tests.unit.timelines import (
    NO_FAILURE,
    ROOT,
    SITUATIONS,
    STUCK,
    bars,
    case_of,
    each,
    picture_of,
    text_of,
    timeline_of,
)

# --- the picture --------------------------------------------------------------------------


@each
def test_both_axes_carry_their_units_and_agree(situation: str) -> None:
    ax = picture_of(situation)
    assert ax.get_xlabel() == "time from the beginning of the fault, ms"
    (top,) = ax.child_axes
    assert top.get_xlabel() == "cycles of 50 Hz"
    ax.figure.draw_without_rendering()  # type: ignore[union-attr]  # it is a whole figure
    assert top.get_xlim() == pytest.approx(tuple(ms / 20 for ms in ax.get_xlim()))


@each
def test_the_clearing_and_the_limit_stand_at_their_times(situation: str) -> None:
    found, ax = timeline_of(situation), picture_of(situation)
    clear = found.run.outcome.t_clear_us
    assert clear is not None
    label = f"cleared {clear / 1000:g} ms ({clear / 20_000:.2f} cycles)"
    (line,) = [item for item in ax.lines if item.get_gid() == label]
    assert np.asarray(line.get_xdata()).tolist() == [clear / 1000] * 2
    assert line.get_linestyle() == "-"
    (limit,) = [item for item in ax.lines if item.get_gid() == "limit 150 ms"]
    assert np.asarray(limit.get_xdata()).tolist() == [150.0, 150.0]
    assert limit.get_linestyle() == "--"
    assert {label, "limit 150 ms"} <= set(text_of(ax))
    (fault,) = bars(ax, Look.FAULT)
    assert fault.get_width() == clear / 1000


@each
def test_each_opening_has_a_bar_from_its_coil_to_the_interruption(situation: str) -> None:
    ax = picture_of(situation)
    for o in timeline_of(situation).run.outcome.openings:
        (bar,) = bars(ax, Look.OPENING, o.breaker)
        assert bar.get_x() == o.t_trip_us / 1000
        assert bar.get_x() + bar.get_width() == pytest.approx(o.t_open_us / 1000)
        (contact,) = bars(ax, Look.CLOSED, o.breaker)
        assert contact.get_x() + contact.get_width() > bar.get_x() + bar.get_width() - 1e-9


@each
def test_timers_are_hatched_and_stopped_ones_carry_their_margin(situation: str) -> None:
    found, ax = timeline_of(situation), picture_of(situation)
    rows = [found.run.log[i] for i in found.kept]
    margins = sorted(f"{r.margin_us / 1000:g} ms left" for r in rows if r.kind == "timer" and r.margin_us is not None)
    assert sorted(text for text in text_of(ax) if text.endswith("left")) == margins
    assert margins
    running = bars(ax, Look.RUNNING)
    assert len(running) >= len(margins)
    assert all(bar.get_hatch() for bar in running)


@each
def test_every_failure_is_marked_and_named(situation: str) -> None:
    _, yes = SITUATIONS[situation]
    ax = picture_of(situation)
    marked = sorted((item.get_gid() or "") for item in ax.lines if (item.get_gid() or "").startswith("failure"))
    assert marked == sorted(f"failure: {name.split(': ')[0]}" for name in yes)
    for name in yes:
        component, mode = name.split(": ")
        before = "" if component.endswith("CB") else ", before the fault"  # a breaker fails when it is told to open
        assert mode.replace("_", " ") + before in text_of(ax)


def test_looks_differ_without_colour() -> None:
    def grey(colour: str) -> float:
        named = {"white": "#FFFFFF"}.get(colour, colour)
        r, g, b = (int(named[i : i + 2], 16) for i in (1, 3, 5))
        return 0.299 * r + 0.587 * g + 0.114 * b

    for one, other in combinations(STYLES.values(), 2):
        same_form = one.hatch == other.hatch and one.height == other.height
        assert not same_form or abs(grey(one.face) - grey(other.face)) > 40


@each
def test_links_run_along_the_way_to_openings_and_failures(situation: str) -> None:
    found = timeline_of(situation)
    what = drawing(found)
    lanes = {lane.subject for lane in what.lanes}
    assert all(link.cause in lanes and link.effect in lanes for link in what.links)
    assert all(link.t_cause_us <= link.t_effect_us for link in what.links)
    reached = {what.fault.subject}
    for _ in what.links:
        reached |= {link.effect for link in what.links if link.cause in reached}
    assert {o.breaker for o in found.run.outcome.openings} <= reached
    drawn = [t for t in picture_of(situation).texts if (t.get_gid() or "").startswith("cause: ")]
    assert len(drawn) == len(what.links)


@each
def test_nothing_written_overlaps_or_leaves_the_picture(situation: str) -> None:
    from matplotlib.backends.backend_agg import FigureCanvasAgg

    ax = picture_of(situation)
    figure = ax.figure
    assert isinstance(figure, Figure)
    renderer = FigureCanvasAgg(figure).get_renderer()  # type: ignore[no-untyped-call]  # matplotlib types it not
    figure.draw(renderer)
    whole = figure.bbox
    labels = [t for t in ax.get_yticklabels() if t.get_text()]
    assert len(labels) == len(drawing(timeline_of(situation)).lanes) + len(drawing(timeline_of(situation)).stations)
    legend = ax.get_legend()
    assert legend is not None
    texts = [*labels, *(t for t in ax.texts if t.get_text()), ax.xaxis.label, *legend.get_texts()]
    boxes = [(t.get_text(), t.get_window_extent(renderer)) for t in texts]
    for text, box in boxes:
        assert whole.x0 <= box.x0 < box.x1 <= whole.x1, text
        assert whole.y0 <= box.y0 < box.y1 <= whole.y1, text
    for (text, box), (other, box_2) in combinations(boxes, 2):
        assert not box.shrunk(0.9, 0.75).overlaps(box_2.shrunk(0.9, 0.75)), (text, other)


def test_it_draws_on_a_given_axis_and_in_any_format() -> None:
    figure = Figure(figsize=(9, 9))
    ax = figure.add_subplot()
    assert timeline_of("stuck").plot(ax) is ax
    for kind, start in (("png", b"\x89PNG"), ("svg", b"<?xml"), ("pdf", b"%PDF")):
        out = io.BytesIO()
        figure.savefig(out, format=kind)
        assert out.getvalue().startswith(start)


def test_no_state_of_matplotlib_changes() -> None:
    import matplotlib

    before = dict(matplotlib.rcParams)
    plot_timeline(timeline_of("dead zone"))
    assert dict(matplotlib.rcParams) == before


def test_the_table_needs_no_plotting_and_the_picture_no_pyplot() -> None:
    code = (
        "import sys, schemesim.report.timeline as t; print('matplotlib' in sys.modules, 'pandas' in sys.modules);"
        "import schemesim.report.pictures as p; print('matplotlib' in sys.modules);"
        "from tests.unit.test_timeline import timeline_of; p.plot_timeline(timeline_of('main'));"
        "print('matplotlib.pyplot' in sys.modules)"
    )
    run = subprocess.run(
        [sys.executable, "-c", code], cwd=ROOT, check=True, capture_output=True, text=True, timeout=120
    )
    assert run.stdout.split() == ["False"] * 4


def gids_of(ax: Axes, kind: str) -> list[str]:
    drawn = (a.get_gid() for a in ax.get_children())
    return [g.removeprefix(f"{kind}: ") for g in drawn if g and g.startswith(f"{kind}: ")]


@pytest.mark.parametrize(("limit_ms", "words"), [(150, "80 ms to spare"), (50, "20 ms too late")])
def test_the_margin_to_the_limit_is_drawn(limit_ms: float, words: str) -> None:
    # Main protection clears at 70 ms: 20 measuring, 50 interrupting.
    case = case_of("L1")
    ax = plot_timeline(timeline(case, replay(case, NO_FAILURE), limit_ms=limit_ms))
    assert gids_of(ax, "margin") == [words]
    assert words in text_of(ax)
    assert gids_of(plot_timeline(timeline(case, replay(case, NO_FAILURE))), "margin") == []


def test_the_short_picture_keeps_what_led_to_openings_and_failures() -> None:
    found = timeline_of("stuck")
    whole, short = gids_of(found.plot(), "bar"), gids_of(found.plot(short=True), "bar")
    assert set(short) < set(whole)
    assert "timer running: Elm.L1.CB/50BF timer" in short
    assert not any("21-3 timer" in bar for bar in short)  # stopped in time
    assert gids_of(found.plot(short=True), "cause") == gids_of(found.plot(), "cause")
    assert gids_of(found.plot(short=True), "failure") == ["Elm.L1.CB"]


def test_two_sequences_show_what_differs() -> None:
    case = case_of("L1")
    main, stuck = (timeline(case, replay(case, failures), limit_ms=150) for failures in (NO_FAILURE, STUCK))
    ax = plot_timelines(main, stuck, ("sound", "stuck"))
    labels = [t.get_text() for t in ax.get_yticklabels()]
    assert "L1.CB · sound" in labels
    assert labels[labels.index("L1.CB · sound") + 1] == "stuck"
    # The far end does the same in both: left out unless all is asked for.
    assert not any(name.startswith("coil energised") and "Fir.L1.CB" in name for name in gids_of(ax, "bar"))
    every = plot_timelines(main, stuck, ("sound", "stuck"), all=True)
    assert gids_of(every, "bar").count("coil energised, until interrupted: Fir.L1.CB") == 2
    assert gids_of(ax, "failure") == ["Elm.L1.CB"]
    texts = text_of(ax)
    assert any(t.startswith("sound: cleared 70 ms") for t in texts)
    assert any(t.startswith("stuck: cleared ") for t in texts)
    assert gids_of(ax, "margin") == [f"{(stuck.run.outcome.t_clear_us or 0) / 1000 - 70:g} ms apart"]
    with pytest.raises(InputError, match="labels"):
        plot_timelines(main, stuck, ("same", "same"))


def test_two_sequences_alike_have_no_lane_that_differs() -> None:
    found = timeline_of("main")
    assert gids_of(plot_timelines(found, found), "bar") == []


def test_faults_at_two_places_are_compared_one_above_the_other() -> None:
    found = [timeline(c, replay(c, NO_FAILURE)) for c in (case_of("L1"), case_of("F1"))]
    ax = plot_timelines(found[0], found[1], ("line", "feeder"))
    assert [t.get_text() for t in ax.get_yticklabels()][:3] == ["fault", "L1 · line", "F1 · feeder"]
    assert [g for g in gids_of(ax, "bar") if g.startswith("fault fed")] == ["fault fed: L1", "fault fed: F1"]
