"""Every result as a table: pandas writes it to CSV, Excel and LaTeX and reads the same figures back."""

from __future__ import annotations

import io
import math
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
from matplotlib.axes import Axes

from schemesim.engine.sensing import LogicalSensing
from schemesim.plant.coverage import coverage_audit
from schemesim.plant.model import Location
from schemesim.report.timeline import timeline
from schemesim.scenario import Scenario, load_scenario
from schemesim.scenario.studying import study_scenario
from schemesim.scheme.independence import independence
from schemesim.scheme.trip_matrix import trip_matrix
from schemesim.show.tables import cells, readable
from schemesim.study.brackets import Bracket
from schemesim.study.comparison import compare
from schemesim.study.frontier import Choice, Frontier
from schemesim.study.importance_study import study_importance
from schemesim.study.injection import inject
from schemesim.study.intervals import wilson
from schemesim.study.locations import LocationStudy
from schemesim.study.montecarlo import simulate
from schemesim.study.spread import breakers_over, cleared_over
from schemesim.study.timer_study import study_timers

ROOT = Path(__file__).resolve().parents[2]
PLACES = (Location("F5"), Location("Dunmore.L4.c"))


@cache
def demo() -> Scenario:
    return load_scenario(ROOT / "scenarios" / "demo.yaml")


@cache
def studied(policy: str = "full") -> LocationStudy:
    return study_scenario(demo(), policy, locations=PLACES, epsilon=1e-2)


@cache
def result(name: str) -> Any:
    program, sensing = demo().program(), LogicalSensing()
    match name:
        case "timeline":
            return timeline(demo().case_of(demo().listed("retrip")), demo().play("retrip"), limit_ms=150)
        case "locations":
            return studied()
        case "location":
            return studied().results[0]
        case "trials":
            return simulate(demo().case(Location("Dunmore.L4.c")), 400, seed=1)
        case "comparison":
            return compare({"full": studied(), "single": studied("single")})
        case "injection":
            return inject(demo().case(Location("F5")), order=1)
        case "coverage":
            return coverage_audit(demo().plant)
        case "trip matrix":
            return trip_matrix(demo().scheme())
        case "independence":
            return independence(demo().scheme(), ["F5"])
        case "importance":
            return study_importance(program, sensing, PLACES[:1], limit_us=150_000, epsilon=1e-2, epsilon_given=0.3)
        case "timers":
            return study_timers(program, sensing, PLACES[:1], limit_us=300_000, step_us=20_000)
        case _:
            choices = (
                Choice("bare", 10.0, Bracket(90, 110), 100.0, "", True),
                Choice("both", 30.0, Bracket(20, 20), 20.0, "", True),
            )
            return Frontier("EUR", choices)


RESULTS = (
    "timeline", "locations", "location", "trials", "comparison", "injection", "coverage", "trip matrix", "independence",
    "importance", "timers", "frontier",
)  # fmt: skip
each = pytest.mark.parametrize("name", RESULTS)


def same(written: pd.DataFrame, read: pd.DataFrame) -> None:
    """The same columns, rows and numbers, the latter to the last digit but one."""
    assert list(read.columns) == [str(c) for c in written.columns]
    assert len(read) == len(written)
    for name in written.columns:
        if pd.api.types.is_float_dtype(written[name]) and not pd.api.types.is_extension_array_dtype(written[name]):
            pairs = zip(written[name], read[str(name)].astype(float), strict=True)
            assert all(math.isclose(a, b, rel_tol=1e-12) or (math.isnan(a) and math.isnan(b)) for a, b in pairs), name


@each
def test_a_result_is_a_frame_with_named_columns_and_plain_text(name: str) -> None:
    frame = result(name).table()
    assert isinstance(frame, pd.DataFrame)
    assert len(frame) > 0
    assert frame.columns.is_unique
    assert "<" not in repr(result(name)).replace("<=", "")
    assert "object at 0x" not in repr(result(name))


@each
def test_a_result_shows_every_column_in_a_notebook(name: str) -> None:
    html = result(name)._repr_html_()
    assert "<table" in html
    frame = result(name).table()
    headings = [h for h in cells(frame)[0] if (name, h) != ("timeline", "kind")]  # a timeline leaves the kind out
    assert [h for h in headings if f">{h}<" not in html] == []


@each
def test_csv(name: str) -> None:
    frame = result(name).table()
    same(frame, pd.read_csv(io.StringIO(frame.to_csv(index=False))))


@each
def test_excel(name: str) -> None:
    frame, book = result(name).table(), io.BytesIO()
    frame.replace([math.inf, -math.inf], "never").to_excel(book, index=False)
    read = pd.read_excel(io.BytesIO(book.getvalue()))
    same(frame, read.replace("never", math.inf).infer_objects())


@each
def test_latex(name: str) -> None:
    frame = readable(result(name).table())
    text = frame.to_latex(index=False, escape=True)
    assert text.startswith("\\begin{tabular}")
    body = text.split("\\midrule")[1].split("\\bottomrule")[0]
    assert body.count("\\\\") == len(frame)


@each
def test_what_is_readable_says_every_row(name: str) -> None:
    frame = result(name).table()
    found = readable(frame)
    assert len(found) == len(frame)
    assert not any(str(c).endswith("_low") and f"{str(c).removesuffix('_low')}_high" in found for c in found)
    assert all(isinstance(v, str) for v in found.to_numpy().ravel())


def test_locations_are_shown_by_what_matters() -> None:
    found = result("locations")
    ranked = [str(r.location) for r in found.ranked]
    # In the dead zone a fault is always late but falls 0.002 times a year; on F5 0.5 times, late with 3e-4 or more.
    late = {str(r.location): found.weight(r) * float(r.p_late_or_uncleared.low) for r in found.results}
    assert ranked == sorted(late, key=lambda at: -late[at])
    html = found._repr_html_()
    assert html.index(f">{ranked[0]}<") < html.index(f">{ranked[1]}<")
    assert list(found.table()["location"]) == ["F5", "Dunmore.L4.c"]  # as studied
    assert list(found.table(ranked=True)["location"]) == ranked


PICTURES: dict[str, Callable[[Axes | None], Axes]] = {
    "timeline": lambda ax: result("timeline").plot(ax),
    "one line": lambda ax: result("timeline").plot_one_line(ax=ax),
    "map": lambda ax: result("locations").plot(ax=ax),
    "breakers": lambda ax: result("locations").results[0].plot_breakers(ax),
    "clearing": lambda ax: result("locations").results[0].plot_clearing(150, ax),
    "breakers of all": lambda ax: result("locations").plot_breakers(ax),
    "clearing of all": lambda ax: result("locations").plot_clearing(ax),
    "trials": lambda ax: result("trials").plot(ax=ax),
    "importance": lambda ax: result("importance").plot(ax=ax),
    "timer": lambda ax: result("timers").results[0].plot(ax),
    "frontier": lambda ax: result("frontier").plot(ax),
}


@pytest.mark.parametrize("name", sorted(PICTURES))
def test_results_draw_on_the_axis_they_are_given(name: str) -> None:
    from matplotlib.figure import Figure

    ax = Figure().add_subplot()
    assert PICTURES[name](ax) is ax
    assert len(ax.get_children()) > 10


def gids(ax: Axes, kind: str) -> list[str]:
    drawn = (a.get_gid() for a in ax.get_children())
    return [g.removeprefix(f"{kind}: ") for g in drawn if g and g.startswith(f"{kind}: ")]


def test_the_map_holds_what_the_study_found() -> None:
    ax = result("locations").plot()
    rows = [t.get_text() for t in ax.get_yticklabels()]
    assert sorted(rows) == ["Dunmore.L4.c", "F5"]
    # The dead zone belongs to the zone of L4: its breakers at Birch and at Dunmore are intended.
    intended = {g.removeprefix("Dunmore.L4.c: ") for g in gids(ax, "intended") if g.startswith("Dunmore.L4.c: ")}
    assert intended == {"Birch.D2.CB2", "Birch.D2.CB3", "Dunmore.L4.CB"}
    beyond = {b for g in gids(ax, "beyond") if g.startswith("Dunmore.L4.c: ") for b in g.split(": ")[1].split(", ")}
    assert {"Dunmore.F5.CB", "Dunmore.F6.CB", "Dunmore.L5.CB"} <= beyond  # the bus trips needlessly


def test_importance_bars_are_those_of_the_table() -> None:
    found = result("importance")
    ax = found.plot(most=5)
    assert [t.get_text() for t in ax.get_yticklabels()] == list(found.table()["component"].head(5))


def test_the_timer_marks_its_setting() -> None:
    found = result("timers").results[0]
    assert f"set {found.race.delay.nominal_us / 1000:g} ms" in gids(found.plot(), "line")
    assert len(gids(found.plot(), "curve")) == 2


def test_distributions_over_locations_are_the_weighted_mean() -> None:
    found = result("locations")
    mine = {str(r.location): r for r in found.results}
    weights = {name: found.weight(r) for name, r in mine.items()}
    counts = breakers_over(found.results, found.weighted)
    assert set(counts) == {n for r in found.results for n in r.breakers}
    for n, share in counts.items():
        low = sum(weights[name] * float(r.breakers[n].low) for name, r in mine.items() if n in r.breakers)
        assert float(share.low) == pytest.approx(low / sum(weights.values()), abs=1e-12)
    last = cleared_over(found.results, found.weighted)[-1][1]
    low = sum(weights[name] * float(r.clearing.cdf[-1][1].low) for name, r in mine.items()) / sum(weights.values())
    assert float(last.low) == pytest.approx(low, abs=1e-12)
    assert sum(float(b.low) for b in counts.values()) <= 1 <= sum(float(b.high) for b in counts.values())


def test_trials_show_their_intervals() -> None:
    found = result("trials")
    shares = found.breakers()
    assert sum(s.successes for s in shares.values()) == found.trials == 400
    for n, s in shares.items():
        assert (s.low, s.high) == wilson(found.count(lambda o, n=n: len(o.tripped) == n), 400)
    ax = found.plot(0.9)
    assert gids(ax, "bracket") == [str(n) for n in shares]
    legend = ax.get_legend()
    assert legend is not None
    assert [t.get_text() for t in legend.get_texts()] == ["below the 90 % interval", "90 % interval"]
