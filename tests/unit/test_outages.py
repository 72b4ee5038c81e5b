"""One item out for work: figures by hand and exact, what is reused against a study of everything, bad input."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import pytest

from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.scenario import Scenario, load_scenario
from schemesim.scenario.weak import outages_scenario
from schemesim.scheme.dress import dress
from schemesim.scheme.policy import duplicate_chain
from schemesim.study.location import LocationOptions, study_location
from schemesim.study.outage_results import Outage, OutageStudy
from schemesim.study.outages import planned_outages, study_outages, with_out
from schemesim.study.spoiled import Effect
from tests.unit.small_schemes import brute_force, case_of, feeder_scheme, program_of
from tests.unit.test_trip_matrix import two_stations

SMALL = Path(__file__).resolve().parents[1] / "data" / "small.yaml"
SENSING = LogicalSensing()
F1, F2 = Location("F1"), Location("F2")
PER_YR = {F1: 2.0, F2: 0.5}
LIMIT_US = 200_000
HOURS = {"set": 87.6, "dc": 8.76, "breaker": 876.0}


def of_feeders(**options: Any) -> OutageStudy:
    given: dict[str, Any] = {"limit_us": LIMIT_US, "frequencies": PER_YR, "hours_per_yr": HOURS, "epsilon": 0}
    return study_outages(program_of(feeder_scheme()), SENSING, [F1, F2], **{**given, **options})


@pytest.fixture(scope="module")
def feeders() -> OutageStudy:
    return of_feeders()


def test_what_can_be_out() -> None:
    assert [(o.kind, o.name) for o in planned_outages(program_of(feeder_scheme()))] == [
        ("set", "BF"),  # its outputs name neither element nor set
        ("set", "F1 set 1"),
        ("set", "F1 set 2"),
        ("set", "IN"),
        ("dc", "DC"),
        ("breaker", "F1.CB"),
        ("breaker", "IN.CB"),
    ]
    plant = two_stations()
    program = compile_scheme(plant, dress(plant, duplicate_chain()))
    found = planned_outages(program)
    names = {kind: [o.name for o in found if o.kind == kind] for kind in ("set", "dc", "channel", "breaker")}
    assert names["dc"] == ["Alder/DC 1", "Alder/DC 2", "Birch/DC 1", "Birch/DC 2"]
    assert names["breaker"] == ["Alder.G1.CB", "Alder.L1.CB", "Birch.F1.CB", "Birch.L1.CB"]
    assert {"L1/channel 1", "L1/channel 2"} <= set(names["channel"])
    assert {"Alder/L1 set 1", "Alder/L1 set 2", "Birch/L1 set 1", "Birch/F1 set 2"} <= set(names["set"])
    assert "Alder/Alder.L1.CB set breaker failure" in names["set"]
    (one,) = (o for o in found if o.name == "Alder/L1 set 2")
    assert one.components == {"Alder/L1/relay 2"}
    assert planned_outages(program, ["dc"]) == tuple(o for o in found if o.kind == "dc")
    out = replace(program.scheme, out_of_service=frozenset({"Alder/DC 1"}))
    left = planned_outages(compile_scheme(plant, out), ["dc"])
    assert [o.name for o in left] == names["dc"][1:]


def test_what_becomes_critical_by_hand(feeders: OutageStudy) -> None:
    """Without M1 the other relay is a single point; without DC the infeed's timer clears at 470 ms and alone."""
    base = {p.failure for p in feeders.base.where(F1).single_points}
    assert "M2: failure_to_operate" not in base
    first = feeders.of("F1 set 1")
    assert first.worse == ()
    assert [(at, p.failure, p.kind) for at, p in first.new_points] == [(F1, "M2: failure_to_operate", "late")]
    dc = feeders.of("DC")
    (worse,) = dc.worse
    assert (worse.location, worse.effect) == (F1, Effect.LATE)
    assert (worse.t_clear_us, worse.t_clear_before_us) == (470_000, 70_000)
    assert (worse.breakers, worse.breakers_before) == (1, 1)
    assert [(at, p.failure, p.kind) for at, p in dc.new_points] == [(F1, "IN: failure_to_operate", "not cleared")]
    infeed = feeders.of("IN")  # F2 has nothing else; on F1 all that it backed up is now not cleared
    assert [(w.location, w.effect) for w in infeed.worse] == [(F2, Effect.NOT_CLEARED)]
    assert {(at, p.failure, p.kind) for at, p in infeed.new_points} == {
        (F1, "DC: lost", "not cleared"),
        (F1, "common cause same settings", "not cleared"),
    }
    assert feeders.of("BF").worst is Effect.NONE


@pytest.mark.parametrize(("name", "out"), [("F1 set 1", "M1"), ("BF", "BF"), ("DC", "DC"), ("IN", "IN")])
def test_yearly_contributions_are_exact(feeders: OutageStudy, name: str, out: str) -> None:
    """Against the sum over every state of the components, with the item out and in service."""
    result = feeders.of(name)
    hours = HOURS[result.outage.kind]
    share = Fraction(hours) / 8760

    def per_yr(scheme: Any, limit_us: int) -> Fraction:
        total = Fraction(0)
        for at, rate in PER_YR.items():
            for end, p in brute_force(case_of(scheme, at.section)).items():
                t = end.outcome.t_clear_us
                total += Fraction(rate) * p * (t is None or t > limit_us)
        return total

    whole, less = feeder_scheme(), replace(feeder_scheme(), out_of_service=frozenset({out}))
    never = 10**9
    for limit, now, added in (
        (never, result.uncleared_per_yr, result.added_uncleared_per_yr),
        (LIMIT_US, result.late_or_uncleared_per_yr, result.added_late_or_uncleared_per_yr),
    ):
        assert now is not None
        assert added is not None
        then = per_yr(less, limit)
        assert now.contains(share * then)
        assert added.contains(share * (then - per_yr(whole, limit)))
        assert max(now.width, added.width) < 1e-12


def test_a_breaker_out_is_open_and_isolated(feeders: OutageStudy) -> None:
    cut = feeders.of("F1.CB")
    assert not cut.study.where(F1).fed
    assert cut.study.where(F2).p_not_cleared.overlaps(feeders.base.where(F2).p_not_cleared)
    nothing = feeders.of("IN.CB")  # the only source is behind it: what could go wrong no longer can
    assert (nothing.worse, nothing.new_points) == ((), ())
    assert nothing.uncleared_per_yr is not None
    assert nothing.uncleared_per_yr.high == 0
    assert nothing.added_uncleared_per_yr is not None
    assert nothing.added_uncleared_per_yr.high < 0


def test_what_is_reused_is_what_a_study_of_everything_gives() -> None:
    """Every component outage on two stations, each location studied again in full."""
    plant = two_stations()
    program = compile_scheme(plant, dress(plant, duplicate_chain()))
    at = [Location("L1", 0.9), Location("Birch.B1"), Location("F1"), Location("G1")]
    outages = [o for o in planned_outages(program) if o.components][::2]
    found = study_outages(program, SENSING, at, limit_us=LIMIT_US, outages=outages, epsilon=1e-2)
    assert 0 < sum(r.affected for r in found.results) < len(at) * len(outages)
    options = LocationOptions(LIMIT_US, 1e-2)
    for r in found.results:
        version = with_out(program, r.outage)
        for where in at:
            whole = study_location(version, where, SENSING, options)
            assert r.study.where(where) == whole, (r.outage.name, where)


@pytest.fixture(scope="module")
def small() -> Scenario:
    return load_scenario(SMALL)


def test_of_a_scenario_and_on_any_executor(small: Scenario) -> None:
    at = [where for where in small.frequencies if str(where) in ("F1", "L1@0.2")]
    options: dict[str, Any] = {"locations": at, "kinds": ["dc"], "epsilon": 1e-2, "hours_per_yr": {"dc": 4}}
    done: list[tuple[int, int]] = []
    alone = outages_scenario(small, "plain", progress=lambda n, of: done.append((n, of)), **options)
    assert done == [(n, len(done)) for n in range(1, len(done) + 1)]
    with ThreadPoolExecutor(2) as pool:
        shared = outages_scenario(small, "plain", executor=pool, **options)
    assert shared.results == alone.results
    one = outages_scenario(small, "plain", names=["Birch/DC 1"], **options)
    assert one.results == tuple(r for r in alone.results if r.outage.name == "Birch/DC 1")
    assert len(alone.table()) == len(alone.results) == 2
    critical = alone.critical()
    assert len(critical) == sum(len(r.worse) + len(r.new_points) for r in alone.results) > 0
    assert {"not cleared"} <= set(critical["effect"])  # one DC of one set: faults stay
    assert "<table" in alone._repr_html_()
    assert "2 outages at 2 locations" in repr(alone)


def test_hours_by_name_win_over_those_of_the_kind() -> None:
    found = of_feeders(hours_per_yr={"set": 10, "F1 set *": 20, "dc": 0, "breaker": 1})
    assert [r.hours_per_yr for r in found.results] == [10, 20, 20, 10, 0, 1, 1]
    none = of_feeders(hours_per_yr=None)
    assert none.uncleared_per_yr is None
    assert none.of("DC").row["added_uncleared_per_yr_low"] is None


def test_an_interrupt_keeps_the_outages_that_are_finished() -> None:
    def stop(done: int, _: int) -> None:
        if done == 4:  # both feeders, then one of those an outage bears on
            raise KeyboardInterrupt

    found = of_feeders(progress=stop)
    assert not found.complete
    assert len(found.results) < 7
    assert len(found.base.results) == 2


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ({"hours_per_yr": {"set": 1}}, "'DC'"),
        ({"hours_per_yr": {**HOURS, "set": -1}}, "hours from 0 to 8760"),
        ({"hours_per_yr": {**HOURS, "set": 8761}}, "hours from 0 to 8760"),
        ({"hours_per_yr": {**HOURS, "F9 set 1": 1}}, "F9 set 1"),
        ({"frequencies": {F1: -1.0}}, "faults per year at F1"),
        ({"limit_us": 1.5}, "limit_us"),
    ],
)
def test_bad_input_is_refused(options: dict[str, Any], said: str) -> None:
    with pytest.raises(InputError, match=said):
        of_feeders(**options)


def test_bad_names_are_refused(small: Scenario) -> None:
    with pytest.raises(InputError, match="did you mean 'dc'"):
        planned_outages(program_of(feeder_scheme()), ["dcs"])
    with pytest.raises(InputError, match="did you mean 'Birch/DC 1'"):
        outages_scenario(small, names=["Birch/DC1"])
    with pytest.raises(InputError, match="an outage studied"):
        of_feeders(outages=[Outage("dc", "DC", frozenset({"DC"}))]).of("F1 set 1")


def test_what_is_said_of_the_demo() -> None:
    """With one DC supply of Alder out L1 hangs on the other, and a stuck breaker is not backed up."""
    demo = load_scenario(SMALL.parents[2] / "scenarios" / "demo.yaml")
    names = ["Alder/DC 1", "Alder/L1 set 1"]
    found = outages_scenario(demo, "full", locations=[Location("L1")], names=names)
    points = {r.outage.name: {p.failure: p.kind for _, p in r.new_points} for r in found.results}
    assert [r.worst for r in found.results] == [Effect.NONE, Effect.NONE]
    supply = points["Alder/DC 1"]
    assert {supply["Alder/DC 2: lost"], supply["Alder.L1.CB/coil 2: failure_to_operate"]} == {"not cleared"}
    assert {supply[f"Alder.L1.{x}"] for x in ("CTb/core 2: open", "VT/winding 2: lost")} == {"late"}
    assert supply["Alder/L1/relay 2: failure_to_operate"] == "late"
    assert supply["Alder.L1.CB: does_not_open"] == "not cleared"
    assert "Alder.L1.CB: does_not_open" not in points["Alder/L1 set 1"]
    assert points["Alder/L1 set 1"]["Alder/L1/relay 2: failure_to_operate"] == "late"
