"""Every location, the sums over them, and variants side by side."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor
from dataclasses import replace
from fractions import Fraction
from typing import Any

import pytest

from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.model import Dispatch, Location
from schemesim.scheme.model import Scheme
from schemesim.study.brackets import Bracket, exactly
from schemesim.study.comparison import compare
from schemesim.study.location import LocationOptions
from schemesim.study.locations import LocationStudy, iter_locations, spread_frequency, study_locations
from schemesim.study.no_fault import study_no_fault
from tests.unit.small_schemes import as_float, feeder_scheme, program_of, radial_plant
from tests.unit.test_measures import BF, BOTH_OPEN, FINE, IN, INFEED_ALONE, MAIN, NOT_CLEARED, STUCK, TRIP

LIMIT_US = 200_000
SENSING = LogicalSensing()
F1, F2 = Location("F1"), Location("F2")
PER_YR = {F1: 2.0, F2: 0.5}


def study(scheme: Scheme, **options: Any) -> LocationStudy:
    return study_locations(program_of(scheme), SENSING, **{"limit_us": LIMIT_US, "epsilon": 0, **options})


@pytest.fixture(scope="module")
def exact() -> LocationStudy:
    no_fault = study_no_fault(program_of(feeder_scheme()), SENSING, epsilon=0)
    return study(feeder_scheme(), locations=[F1, F2], frequencies=PER_YR, no_fault=no_fault)


def holds(bracket: Bracket, value: Fraction) -> None:
    """The bracket holds the exact value and is no wider than the rounding of a few floats."""
    assert bracket.contains(value)
    assert bracket.width < 1e-12


def test_figures_per_year_by_hand(exact: LocationStudy) -> None:
    """F1 twice a year, F2 every second year: F2 has the infeed's timer only (one breaker too many, too late)."""
    got = exact.measures()
    holds(got["faults_per_yr"], Fraction(5, 2))
    holds(got["uncleared_per_yr"], 2 * NOT_CLEARED + IN / 2)
    holds(got["late_or_uncleared_per_yr"], 2 * (1 - TRIP * FINE) + Fraction(1, 2))
    needless = 2 * (BOTH_OPEN + INFEED_ALONE) + (1 - IN) / 2
    holds(got["fault_needless_trips_per_yr"], needless)
    alone = (1 - Fraction(1, 100)) * (FINE + Fraction(1, 16) * (2 - BF) + STUCK * (1 - BF)) / 4
    holds(got["no_fault_trips_per_yr"], alone)
    holds(got["needless_trips_per_yr"], needless + alone)
    holds(got["p_cleared"], 1 - (2 * NOT_CLEARED + IN / 2) / Fraction(5, 2))
    holds(got["p_by_main"], 2 * MAIN / Fraction(5, 2))


def test_without_frequencies_every_location_weighs_the_same() -> None:
    got = study(feeder_scheme(), locations=[F1, F2]).measures()
    assert got["p_cleared"] == exactly(1 - (NOT_CLEARED + IN) / 2)
    assert not any(name.endswith("per_yr") for name in got)


def test_table_and_summary(exact: LocationStudy) -> None:
    table = exact.table()
    assert table["location"].tolist() == ["F1", "F2"]
    assert table["freq_per_yr"].tolist() == [2.0, 0.5]
    assert table["t_clear_ms_nominal"].tolist() == [70.0, 470.0]
    assert table["t_clear_ms_p95"].tolist() == [220.0, 470.0]
    assert table["breakers_mean_low"][1] == pytest.approx(float(1 - IN))
    assert table["single_points"].tolist() == [4, 1]
    assert table["worst"][1] == "IN: failure_to_operate (not cleared)"
    for name in ("p_cleared", "p_within_limit", "p_by_main", "p_selective", "breakers_excess"):
        assert (table[f"{name}_low"] <= table[f"{name}_high"]).all()
    summary = exact.summary().set_index("measure")
    assert summary.loc["faults_per_yr", "low"] == 2.5
    assert "F1" in exact._repr_html_()
    assert "uncleared_per_yr" in repr(exact)
    assert exact.single_points["IN: failure_to_operate"] == ("F2",)
    assert exact.where("F1") is exact.results[0]
    with pytest.raises(InputError, match="a location studied"):
        exact.where("F3")


def test_a_fault_on_a_source_without_a_breaker_stays() -> None:
    result = study(feeder_scheme(), locations=[Location("IN")]).results[0]
    assert result.fed
    assert result.p_cleared == exactly(0)
    assert result.single_points == ()  # no failure is to blame


def test_a_fault_no_source_feeds_has_no_weight() -> None:
    plant = replace(radial_plant(), dispatches=(Dispatch(name="none", out=frozenset({"G"})),))
    program = compile_scheme(plant, feeder_scheme())
    found = study_locations(program, SENSING, [F1], limit_us=LIMIT_US, dispatch="none", epsilon=0)
    assert not found.results[0].fed
    assert found.measures()["p_cleared"] == Bracket(0, 1)  # nothing is known: no fault counts


@pytest.mark.parametrize("pool", [ThreadPoolExecutor, ProcessPoolExecutor])
def test_any_executor_gives_the_same(pool: Callable[[int], Any]) -> None:
    alone = study(feeder_scheme(as_float), epsilon=1e-4)
    with pool(2) as executor:
        assert study(feeder_scheme(as_float), epsilon=1e-4, executor=executor) == alone
    assert len(alone.results) == 7


def test_order_of_declaration_and_of_locations_changes_nothing() -> None:
    scheme = feeder_scheme(as_float)
    turned = Scheme(scheme.components[::-1], scheme.blocks[::-1], scheme.common_causes)
    one, other = study(scheme, locations=[F1, F2]), study(turned, locations=[F2, F1])
    assert one.results == other.results[::-1]


def test_results_come_one_by_one() -> None:
    options = LocationOptions(LIMIT_US)
    program = program_of(feeder_scheme(as_float))
    results = iter_locations(program, SENSING, [F1, F2], options)
    assert next(results).location == F1
    with ThreadPoolExecutor(1) as executor:
        pooled = iter_locations(program, SENSING, [F1, F2], options, executor=executor)
        assert [r.location for r in pooled] == [F1, F2]


def test_progress_and_interruption() -> None:
    calls: list[tuple[int, int]] = []

    def progress(done: int, every: int) -> None:
        calls.append((done, every))
        if done == 3:
            raise KeyboardInterrupt

    part = study(feeder_scheme(as_float), progress=progress)
    assert calls == [(1, 7), (2, 7), (3, 7)]
    assert not part.complete
    whole = study(feeder_scheme(as_float))
    assert part.results == whole.results[:3]
    assert "interrupted" in repr(part)
    assert whole.complete


def test_a_small_budget_says_so_and_holds() -> None:
    whole = study(feeder_scheme(), locations=[F1]).results[0]
    for budget in (1, 3, 10):
        part = study(feeder_scheme(), locations=[F1], max_runs=budget).results[0]
        assert (part.stopped, part.runs) == ("budget", budget)
        assert part.p_cleared.contains(whole.p_cleared.low)
        assert part.p_cleared.width > 0


def test_variants_side_by_side() -> None:
    scheme = feeder_scheme()

    def without(*names: str) -> Scheme:
        return replace(scheme, out_of_service=frozenset(names))

    studies = {
        "single": study(without("M2"), locations=[F1], frequencies={F1: 1.0}),
        "duplicate": study(scheme, locations=[F1], frequencies={F1: 1.0}),
        "no breaker failure": study(without("M2", "BF"), locations=[F1], frequencies={F1: 1.0}),
    }
    found = compare(studies)
    assert found.base == "single"
    assert found.of("p_cleared", "single").verdict == ""
    assert found.of("p_cleared", "duplicate").verdict == "better"
    assert found.of("uncleared_per_yr", "duplicate").verdict == "better"
    assert found.of("p_cleared", "no breaker failure").verdict == "worse"
    assert found.of("p_by_main", "duplicate").difference.low > 0
    assert found.of("p_by_main_timed", "duplicate").verdict == "same"  # nought in both
    # The one relay is a single point of failure, the duplicated one is none. (A slow one is still in time.)
    assert found.of("single_points", "single").value == exactly(5)
    assert found.of("single_points", "duplicate").value == exactly(4)
    assert found.of("single_points_late", "duplicate").value == exactly(4)
    assert found.of("single_points_not_cleared", "no breaker failure").value == exactly(0)  # the infeed's timer is left
    table = found.table()
    assert table["duplicate vs single"].notna().all()
    assert "better" in repr(found)


def test_better_is_said_only_without_overlap() -> None:
    scheme = feeder_scheme()
    rough = {
        name: study(replace(scheme, out_of_service=frozenset(out)), locations=[F1], max_runs=1)
        for name, out in (("single", {"M2"}), ("duplicate", set()))
    }
    row = compare(rough).of("p_cleared", "duplicate")
    assert row.verdict == "not told apart"
    assert row.difference.contains(Fraction(0))


def test_only_like_is_compared() -> None:
    one = study(feeder_scheme(), locations=[F1])
    for other in (
        study(feeder_scheme(), locations=[F2]),
        study(feeder_scheme(), locations=[F1], limit_us=1000),
        study(feeder_scheme(), locations=[F1], frequencies={F1: 1.0}),
    ):
        with pytest.raises(InputError, match="locations, frequencies and limit"):
            compare({"a": one, "b": other})
    with pytest.raises(InputError, match="at least one"):
        compare({})


@pytest.mark.parametrize(
    ("options", "subject"),
    [
        ({"locations": [Location("F1.d")]}, "did you mean"),
        ({"limit_us": -1}, "limit_us"),
        ({"frequencies": {F1: -1.0}}, "faults per year"),
        ({"frequencies": {Location("F9"): 1.0}}, "one of the locations studied"),
        ({"epsilon": 2}, "epsilon"),
    ],
)
def test_bad_options_are_refused(options: dict[str, Any], subject: str) -> None:
    with pytest.raises(InputError, match=subject):
        study(feeder_scheme(), **options)


def test_frequencies_are_shared_by_the_locations_of_a_section() -> None:
    along = [Location("L", 0.1), Location("L", 0.5), Location("L", 0.9), Location("B")]
    rates = spread_frequency(along, {"L": 0.3})
    assert sum(rates.values()) == pytest.approx(0.3)
    assert rates[Location("B")] == 0


def test_a_location_is_found_by_its_name_with_or_without_the_position_in_the_middle() -> None:
    found = study(feeder_scheme(), locations=[F1])
    assert found.where("F1") is found.where("F1@0.5") is found.where(F1)
    with pytest.raises(InputError, match="a location studied"):
        found.where("F1@0.4")
