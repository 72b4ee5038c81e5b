"""Formats of numbers, tables in notebooks and charts: what they hold, not how their pixels fall."""

from __future__ import annotations

import io
import math
import re
import subprocess
import sys
from collections.abc import Callable
from decimal import Decimal
from itertools import pairwise
from pathlib import Path

import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection, PolyCollection
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle

from schemesim.errors import InputError
from schemesim.show.bars import plot_bars, plot_counts
from schemesim.show.curves import Line, plot_bands, plot_left, plot_time_current
from schemesim.show.matrix import PlaceRow, plot_map
from schemesim.show.numbers import between, power, probability, quantity, time_ms
from schemesim.show.scatter import Spot, plot_frontier
from schemesim.show.tables import cells, ranked, to_html
from schemesim.show.trade import plot_trade
from schemesim.study.brackets import Bracket
from schemesim.study.dials import DialStudy, Figures

ROOT = Path(__file__).resolve().parents[2]
SUPER = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹−", "-0123456789-")


def gids(ax: Axes, kind: str) -> list[str]:
    """What is drawn of a kind, each artist once."""
    drawn = (a.get_gid() for a in ax.get_children())
    return [g.removeprefix(f"{kind}: ") for g in drawn if g and g.startswith(f"{kind}: ")]


def drawn(ax: Axes, gid: str) -> object:
    """The one artist of this name."""
    (found,) = (a for a in ax.get_children() if a.get_gid() == gid)
    return found


def legend(ax: Axes) -> list[str]:
    found = ax.get_legend()
    return [] if found is None else [t.get_text() for t in found.get_texts()]


def read_back(text: str) -> tuple[Decimal, Decimal]:
    """The bounds that a text of a probability says."""
    body, percent, _ = text.partition(" %")
    factor = Decimal("0.01") if percent else Decimal(1)
    if "×10" in body:
        body, exponent = body.split("×10")
        factor = Decimal(1).scaleb(int(exponent.translate(SUPER)))
    ends = [Decimal(part.translate(SUPER)) * factor for part in body.strip("()").split("…")]
    return ends[0], ends[-1]


@given(st.floats(0, 1), st.floats(0, 1))
def test_a_bracket_of_probabilities_is_rounded_outward(a: float, b: float) -> None:
    low, high = min(a, b), max(a, b)
    if high - low <= 1e-11 * high:
        return
    first, last = read_back(probability(low, high))
    assert first <= Decimal(repr(low))
    assert Decimal(repr(high)) <= last
    assert last - first <= 3 * (Decimal(repr(high)) - Decimal(repr(low)))


@given(st.floats(1e-12, 1))
def test_one_probability_keeps_its_digits(p: float) -> None:
    first, last = read_back(probability(p))
    assert first == last
    assert abs(float(first) - p) <= 0.006 * p
    if 0.5 < p < 1 - 1e-9:
        assert abs(float(1 - first) - (1 - p)) <= 0.06 * (1 - p)  # the distance from certainty is what is read


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (probability(0.5), "50 %"),
        (probability(0.9999), "99.99 %"),
        (probability(0.0123), "1.23 %"),
        (probability(2.5e-7), "2.5×10⁻⁷"),
        (probability(0.0), "0"),
        (probability(1.0), "1"),
        (probability(math.nan), "–"),
        (time_ms(70.5), "70.5"),
        (time_ms(1270.0), "1 270"),
        (time_ms(math.inf), "never"),
        (quantity(-1234.5), "−1 234"),
        (quantity(0.0), "0"),
        (quantity(3), "3"),
        (quantity(math.inf), "no bound"),
        (power(-2e-8), "−2×10⁻⁸"),
        (between(0.1, 0.2), "0.1…0.2"),
    ],
)
def test_numbers_as_they_are_read(text: str, expected: str) -> None:
    assert text == expected


def frame() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "location": ["<bus>", "L1"],
            "freq_per_yr": [0.02, 0.25],
            "p_cleared_low": [0.5, 0.999],
            "p_cleared_high": [0.5, 0.9995],
            "t_clear_ms": [70.0, math.inf],
            "fed": [True, False],
            "net_low": [5.0, 7.0],  # not bounds: the low one is over the high one
            "net_high": [3.0, 9.0],
            "dispatch": [None, "night"],
        }
    )


def test_bounds_become_one_bracket_and_units_decide_the_format() -> None:
    headings, texts, numeric = cells(frame())
    assert headings == [
        "location", "freq_per_yr", "p_cleared", "t_clear_ms", "fed", "net_low", "net_high", "dispatch",
    ]  # fmt: skip
    assert texts[0] == ["<bus>", "0.02", "50 %", "70", "yes", "5", "3", "–"]
    assert texts[1] == ["L1", "0.25", "99.90…99.95 %", "never", "no", "7", "9", "night"]
    assert numeric == [False, True, True, True, False, True, True, False]


def test_a_column_of_measures_decides_for_its_row() -> None:
    table = pd.DataFrame(
        {"measure": ["p_cleared", "t_clear_ms", "x"], "low": [0.25, 70, 1e-9], "high": [0.25, 80, 1e-9]}
    )
    headings, texts, _ = cells(table)
    assert headings == ["measure", "bracket"]
    assert [row[1] for row in texts] == ["25 %", "70…80", "1×10⁻⁹"]


def test_html_escapes_and_says_what_it_leaves_out() -> None:
    html = to_html(frame(), caption="a & b", most=1)
    assert "&lt;bus&gt;" in html
    assert "<caption>a &amp; b</caption>" in html
    assert html.count("<tr>") == 2
    assert "1 more rows" in html
    assert to_html(frame()).count("<tr>") == 3
    assert "white-space:nowrap" in to_html(frame())  # figures stay on one line
    assert to_html(frame().head(0)).count("<tr>") == 1


def test_rows_ranked_by_bounds_or_by_a_column() -> None:
    assert list(ranked(frame(), "p_cleared")["location"]) == ["L1", "<bus>"]
    assert list(ranked(frame(), "net_low")["location"]) == ["L1", "<bus>"]
    assert list(ranked(frame(), "fed")["location"]) == ["<bus>", "L1"]


def test_bars_show_what_is_certain_and_what_may_be() -> None:
    ax = plot_bars([("relay", 0.2, 0.3), ("coil", 0.1, 0.1), ("DC", -0.05, 0.02)], title="importance", x="ratio")
    certain, maybe = drawn(ax, "certain: relay"), drawn(ax, "bracket: relay")
    assert isinstance(certain, Rectangle)
    assert isinstance(maybe, Rectangle)
    assert certain.get_width() == 0.2
    assert [maybe.get_x(), maybe.get_width()] == pytest.approx([0.2, 0.1])
    assert maybe.get_hatch()
    assert sorted(gids(ax, "bracket")) == ["DC", "relay"]  # what is exact has none
    dc = drawn(ax, "bracket: DC")
    assert isinstance(dc, Rectangle)
    assert [dc.get_x(), dc.get_width()] == pytest.approx([-0.05, 0.07])
    assert [t.get_text() for t in ax.get_yticklabels()] == ["relay", "coil", "DC"]
    assert ax.get_ylim()[0] > ax.get_ylim()[1]  # the first at the top
    assert [t.get_text() for t in ax.texts] == ["20…30 %", "10 %", "−5…2 %"]
    assert legend(ax) == ["at least", "at most (not all explored)"]


def test_counts_on_a_logarithmic_axis() -> None:
    ax = plot_counts({3: (0.99, 0.992), 5: (0.0, 1e-4)}, x="breakers tripped", marked=3, marked_text="intended: 3")
    assert ax.get_yscale() == "log"
    assert gids(ax, "certain") == ["3"]
    assert gids(ax, "bracket") == ["3", "5"]
    high = drawn(ax, "bracket: 5")
    assert isinstance(high, Rectangle)
    assert high.get_y() + high.get_height() == pytest.approx(1e-4)
    assert gids(ax, "marked") == ["3"]
    assert "intended: 3" in legend(ax)


def test_what_is_not_yet_cleared_falls_in_steps() -> None:
    steps = [(70.0, (0.99, 0.991)), (230.0, (0.9999, 1.0))]
    ax = plot_left(steps, lines=[Line(150, "limit 150 ms", True)])
    most = drawn(ax, "at most")
    assert [float(v) for v in most.get_ydata()] == pytest.approx([1.0, 0.01, 1e-4, 1e-4])  # type: ignore[attr-defined]
    assert [float(v) for v in most.get_xdata()][:3] == [0.0, 70.0, 230.0]  # type: ignore[attr-defined]
    assert gids(ax, "line") == ["limit 150 ms"]
    assert isinstance(drawn(ax, "bracket"), PolyCollection)
    assert ax.get_xlabel().endswith("ms")


def test_bands_leave_out_what_is_not_there() -> None:
    ax = plot_bands(
        [100, 150, 200], {"needless": [(1e-3, 2e-3), (1e-4, 1e-4), None], "late": [(0.0, 0.0), (1e-5, 1e-5), (1, 1)]},
        x="setting, ms", y="probability", good=(120, 180), good_text="band", lines=[Line(150, "set 150 ms")],
    )  # fmt: skip
    curve = drawn(ax, "curve: needless")
    assert [float(v) for v in curve.get_xdata()] == [100, 150]  # type: ignore[attr-defined]
    assert [float(v) for v in curve.get_ydata()] == [2e-3, 1e-4]  # type: ignore[attr-defined]
    assert gids(ax, "bracket") == ["needless"]
    assert gids(ax, "good") == ["120 to 180"]
    assert legend(ax) == ["band", "needless", "late"]
    mark = drawn(ax, "line: set 150 ms").get_color()  # type: ignore[attr-defined]
    assert mark not in {line.get_color() for line in ax.lines if str(line.get_gid()).startswith("curve: ")}


def test_time_current_curves_take_any_callable() -> None:
    # IEC 60255-151, standard inverse: t = TMS · 0.14 / (M^0.02 − 1); at M = 10 and TMS = 0.1: 0.297 s.
    def standard(multiple: float) -> float:
        return float(0.1 * 0.14 / (multiple**0.02 - 1))

    def step(multiple: float) -> float | None:
        return 0.05 if multiple >= 8 else None

    ax = plot_time_current({"inverse": standard, "step": step}, marks={"close in": 10.0}, grading_s=0.3)
    assert (ax.get_xscale(), ax.get_yscale()) == ("log", "log")
    assert gids(ax, "curve") == ["inverse", "step"]
    assert gids(ax, "at close in") == ["step", "inverse"]
    texts = [t.get_text() for t in ax.texts]
    assert "0.297 s" in texts
    assert "0.05 s" in texts
    assert gids(ax, "short of grading") == ["step to inverse"]  # 0.247 s apart
    gap = drawn(ax, "curve: step")
    assert all(math.isnan(y) for x, y in zip(gap.get_xdata(), gap.get_ydata(), strict=True) if x < 8)  # type: ignore[attr-defined]
    assert ax.get_ylabel() == "operate time, s"


def test_time_current_curves_in_amperes_on_one_axis() -> None:
    # IEC 60255-151 very inverse: t = 13.5 / (M − 1) · TMS. At 1200 A: M = 3 and 4, TMS 0.1 and 0.2: 0.675 s and 0.9 s.
    class Inverse:
        def __init__(self, dial: float) -> None:
            self.dial = dial

        def operate_s(self, multiple: float) -> float:
            return self.dial * 13.5 / (multiple - 1) if multiple > 1 else math.inf

    curves = {"far": Inverse(0.1), "near": Inverse(0.2)}
    ax = plot_time_current(curves, pick_ups_a={"far": 400, "near": 300}, marks={"end of line": 1200})
    assert ax.get_xlabel() == "current, A"
    assert [t.get_text() for t in ax.texts if t.get_text().endswith(" s")] == ["0.675 s", "0.9 s"]
    with pytest.raises(InputError, match="near"):
        plot_time_current(curves, pick_ups_a={"far": 400})


def test_time_current_curves_refuse_a_range_that_is_none() -> None:
    with pytest.raises(InputError) as caught:
        plot_time_current({}, least=0, most=-1, marks={"here": math.inf})
    assert all(word in str(caught.value) for word in ("least multiple", "most multiple", "'here'"))


def test_the_frontier_its_brackets_and_every_name() -> None:
    spots = [
        Spot("bare", 10, 90, 110, 100, True),
        Spot("both", 30, 20, 20, 20, True, least=True),
        Spot("odd", 40, 25, 45, 30, False),
    ]
    ax = plot_frontier(spots, unit="EUR")
    assert gids(ax, "bracket") == ["bare", "odd"]
    bar = drawn(ax, "bracket: bare")
    assert isinstance(bar, LineCollection)
    assert bar.get_segments()[0].tolist() == [[10, 90], [10, 110]]
    assert gids(ax, "least") == ["both"]
    edge = drawn(ax, "frontier")
    assert list(edge.get_xdata()) == [10, 30, 30]  # type: ignore[attr-defined]  # the risk stays until the next is bought
    assert list(edge.get_ydata()) == [100, 100, 20]  # type: ignore[attr-defined]
    assert sorted(gids(ax, "name")) == ["bare", "both", "odd"]
    assert "EUR a year" in ax.get_xlabel()


def test_names_on_the_frontier_do_not_collide() -> None:
    spots = [Spot(f"variant {i}, a long name that wraps", 10 + i, 100, 100, 100.0 + i / 9, True) for i in range(8)]
    ax = plot_frontier(spots, unit="EUR")
    figure = ax.figure
    assert isinstance(figure, Figure)
    figure.savefig(io.BytesIO(), format="png")
    boxes = sorted((t.get_window_extent() for t in ax.texts), key=lambda b: b.y0)
    assert len(boxes) == 8
    assert all(a.y1 <= b.y0 + 1 for a, b in pairwise(boxes))


def test_the_map_is_sorted_and_tells_intended_from_beyond() -> None:
    rows = [
        PlaceRow("Z", frozenset({"A.1"}), {"A.1": 1.0, "A.2": 5e-3, "B.1": 1e-7}),
        PlaceRow("A", frozenset({"B.1", "B.2"}), {"B.1": 1.0}),
    ]
    ax = plot_map(rows, {"A": ["A.1", "A.2"], "B": ["B.1", "B.2"], "": ["G1.unit"]})
    assert [t.get_text() for t in ax.get_yticklabels()] == ["Z", "A"]  # by their breakers, not by name
    assert [t.get_text() for t in ax.get_xticklabels()] == ["1", "2", "1", "2", "G1.unit"]
    assert sorted(gids(ax, "intended")) == ["A: B.1", "A: B.2", "Z: A.1"]
    assert sorted(gids(ax, "inside")) == ["A: B.1", "Z: A.1"]
    assert sorted(gids(ax, "beyond")) == ["Z: A.2", "Z: B.1"]
    sizes = [drawn(ax, f"beyond: Z: {b}").get_markersize() for b in ("A.2", "B.1")]  # type: ignore[attr-defined]
    assert sizes[0] > sizes[1]


def test_headings_of_narrow_stations_in_the_map_do_not_run_together() -> None:
    names = {"Heron Mill": ["Heron Mill.1", "Heron Mill.2"], "Quarry Bank": ["Quarry Bank.1"], "": ["G1.unit"]}
    ax = plot_map([PlaceRow("F1", frozenset({"Heron Mill.1"}), {"Heron Mill.1": 1.0})], names, title="what opens")
    figure = ax.figure
    assert isinstance(figure, Figure)
    figure.savefig(io.BytesIO(), format="png")
    headings = [t for t in ax.texts if t.get_text() in ("Heron Mill", "Quarry Bank", "others")]
    boxes = [t.get_window_extent() for t in (*headings, ax.title, ax._left_title)]  # type: ignore[attr-defined]
    assert len(headings) == 3
    assert not any(a.overlaps(b) for n, a in enumerate(boxes[:3]) for b in (*boxes[:n], boxes[4]))


def test_dependability_and_security_turn_by_turn() -> None:
    figures = [
        Figures("1oo1", "station", "Alder", Bracket(0.99, 0.992), Bracket(0.999, 0.9992), Bracket(0, 0)),
        Figures("2oo2", "station", "Alder", Bracket(0.98, 0.98), Bracket(0.99999, 1.0), Bracket(0, 0)),
        Figures("1oo1", "station", "Birch", None, Bracket(0.9, 0.9), Bracket(0, 0)),
    ]
    ax = plot_trade("votes", figures)
    assert gids(ax, "group") == ["Alder"]  # Birch has no fault inside
    assert gids(ax, "position") == ["Alder: 1oo1", "Alder: 2oo2"]
    upright = drawn(ax, "bracket of dependability: Alder: 1oo1")
    assert isinstance(upright, LineCollection)
    assert upright.get_segments()[0][:, 1].tolist() == pytest.approx([0.008, 0.01])
    assert legend(ax) == ["Alder", "votes 1oo1", "votes 2oo2"]


def test_a_dial_draws_the_kind_it_is_asked_for() -> None:
    figures = tuple(
        Figures(position, kind, name, Bracket(0.99, 0.992), Bracket(0.999, 0.9992), Bracket(0, 0))
        for position in ("1oo1", "2oo2")
        for kind, name in (("station", "Alder"), ("relay", "Alder/L1/relay 1"))
    )
    study = DialStudy("votes", ("1oo1", "2oo2"), figures)
    assert gids(study.plot(), "group") == ["Alder"]
    assert gids(study.plot("relay"), "group") == ["Alder/L1/relay 1"]


CHARTS: dict[str, Callable[[Axes | None], Axes]] = {
    "bars": lambda ax: plot_bars([("a", 1, 2)], shares=False, ax=ax),
    "counts": lambda ax: plot_counts({1: (0.5, 0.6)}, ax=ax),
    "left": lambda ax: plot_left([(70, (0.9, 0.9))], ax=ax),
    "bands": lambda ax: plot_bands([1, 2], {"a": [(0.1, 0.2), (0.1, 0.3)]}, ax=ax),
    "time-current": lambda ax: plot_time_current({"a": lambda m: 1 / m}, ax=ax),
    "frontier": lambda ax: plot_frontier([Spot("a", 1, 1, 2, 1, True)], unit="EUR", ax=ax),
    "map": lambda ax: plot_map([PlaceRow("a", frozenset({"b"}), {"b": 1})], {"": ["b"]}, ax=ax),
    "trade": lambda ax: plot_trade("votes", [], ax=ax),
}


@pytest.mark.parametrize("name", sorted(CHARTS))
def test_charts_draw_on_an_axis_of_ones_own_and_save_as_vector_and_raster(name: str) -> None:
    figure = Figure()
    ax = figure.add_subplot()
    assert CHARTS[name](ax) is ax
    for kind, start in (("svg", b"<?xml"), ("png", b"\x89PNG")):
        data = io.BytesIO()
        figure.savefig(data, format=kind)
        assert data.getvalue().startswith(start)
    assert CHARTS[name](None).figure is not figure


@pytest.mark.parametrize("make", [lambda: plot_bars([], ax=None), lambda: plot_counts({}), lambda: plot_left([])])
def test_charts_of_nothing_are_empty_and_no_error(make: Callable[[], Axes]) -> None:
    assert len(make().texts) == 0


def test_charts_leave_pyplot_and_the_settings_alone() -> None:
    code = (
        "import sys, matplotlib; before = dict(matplotlib.rcParams);"
        "from tests.unit.test_show import CHARTS; [make(None) for make in CHARTS.values()];"
        "print('matplotlib.pyplot' in sys.modules, before == dict(matplotlib.rcParams))"
    )
    run = subprocess.run(
        [sys.executable, "-c", code], cwd=ROOT, check=True, capture_output=True, text=True, timeout=120
    )
    assert run.stdout.split() == ["False", "True"]


def test_modules_that_show_load_nothing_heavy() -> None:
    names = sorted(path.stem for path in (ROOT / "schemesim" / "show").glob("[a-z]*.py"))
    code = "import sys;" + "".join(f"import schemesim.show.{n};" for n in names)
    code += "print('matplotlib' in sys.modules, 'pandas' in sys.modules)"
    run = subprocess.run([sys.executable, "-c", code], cwd=ROOT, check=True, capture_output=True, text=True, timeout=60)
    assert len(names) >= 8
    assert run.stdout.split() == ["False", "False"]


def test_colours_differ_in_lightness_or_dash() -> None:
    """Two curves that follow each other differ in dash and marker, so that greyscale tells them apart."""
    from schemesim.show.style import CYCLE

    assert len({str(dash) for _, dash, _ in CYCLE}) == len({m for _, _, m in CYCLE}) == len(CYCLE)
    assert all(re.fullmatch("#[0-9A-F]{6}", color) for color, _, _ in CYCLE)
