"""The demo: each part of its policy decides one listed run, by figures worked out by hand.

Times used throughout, in ms, as the head of the file states them: element 20, lockout 10,
channel 15, breaker 50, auxiliary contact 5, breaker-failure timer 150, end-fault logic 40,
zone 2 350, zone 3 1000, local back-up of a line 400, of a feeder 150, of a generator 1200.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import NamedTuple

import pytest
import yaml

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Run, Status
from schemesim.plant.coverage import coverage_audit
from schemesim.plant.model import DeviceKind
from schemesim.scenario import Scenario, load_scenario, scenario_from_text
from schemesim.scheme.model import Role
from schemesim.scheme.policy import LineScheme, Policy
from schemesim.study.losses import lost
from schemesim.study.measures import cleared_by

FILE = Path(__file__).resolve().parents[2] / "scenarios" / "demo.yaml"

BIRCH_L3 = {"Birch.D1.CB2", "Birch.D1.CB3"}
BIRCH_L4 = {"Birch.D2.CB2", "Birch.D2.CB3"}
CEDAR_L3 = {"Cedar.CB1", "Cedar.CB4"}
CEDAR_L5 = {"Cedar.CB2", "Cedar.CB3"}
DUNMORE = {"Dunmore.L4.CB", "Dunmore.L5.CB", "Dunmore.F5.CB", "Dunmore.F6.CB"}
L1_ENDS = {"Alder.L1.CB", "Birch.D1.CB1", "Birch.D1.CB2"}
ALDER_FROM_ALL_SIDES = {
    *{"Birch.D1.CB1", "Birch.D1.CB2", "Birch.D2.CB1", "Birch.D2.CB2"},
    *{"Alder.G1.CB", "Alder.G2.CB", "G1.unit", "G2.unit"},
}


@pytest.fixture(scope="module")
def demo() -> Scenario:
    return load_scenario(FILE)


def play(demo: Scenario, run: str, policy: Policy | None = None) -> tuple[Run, Role | None]:
    """A listed run under its own policy, or under another, and the role of what cleared it."""
    if policy is None:
        return demo.play(run), cleared_by(demo.case_of(demo.listed(run)), demo.play(run).outcome)
    other = replace(demo, policies={**demo.policies, "changed": policy})
    ran = other.play(run, "changed")
    return ran, cleared_by(other.case_of(other.listed(run), "changed"), ran.outcome)


class Found(NamedTuple):
    """Clearing time in ms (None: not cleared), what opened, and the role of what cleared the fault."""

    ms: float | None
    opened: set[str]
    role: Role | None


def found(demo: Scenario, run: str, policy: Policy | None = None) -> Found:
    ran, role = play(demo, run, policy)
    t = ran.outcome.t_clear_us
    return Found(None if t is None else t / 1000, set(ran.outcome.tripped), role)


# --- the plant ----------------------------------------------------------------------------


def test_four_layouts_and_more_than_twenty_breakers(demo: Scenario) -> None:
    stations = yaml.safe_load(FILE.read_text(encoding="utf-8"))["plant"]["stations"]
    assert [s["layout"] for s in stations] == ["double_bus", "breaker_and_a_half", "ring", "single_bus"]
    # Alder: five bays and a coupler; Birch: three diameters of three; Cedar: four; Dunmore: four.
    per_station = dict.fromkeys(("Alder", "Birch", "Cedar", "Dunmore"), 0)
    for d in demo.plant.devices:
        if d.kind is DeviceKind.BREAKER:
            per_station[d.station] += 1
    assert per_station == {"Alder": 6, "Birch": 9, "Cedar": 4, "Dunmore": 4}


def test_everything_is_covered_and_the_only_dead_zones_are_at_dunmore(demo: Scenario) -> None:
    audit = coverage_audit(demo.plant)
    assert not audit.gaps
    assert not audit.blind
    assert not audit.untripped
    # Behind the CTs of F5 and F6 stands no source: the bus trip isolates these two well enough.
    assert {r.section for r in audit.dead_zones} == {"Dunmore.L4.c", "Dunmore.L5.c"}
    assert audit["Dunmore.L4.c"].cross_trips == BIRCH_L4


# --- each part, with and without ----------------------------------------------------------


def one_battery(p: Policy) -> Policy:
    assert p.local_backup is not None
    return replace(
        p,
        sets=tuple(replace(s, dc="1") for s in p.sets),
        local_backup=replace(p.local_backup, dc="1"),
        coil_dc=(("1", "1"), ("2", "1")),
    )


def no_retrip(p: Policy) -> Policy:
    assert p.breaker_failure is not None
    times = replace(p.breaker_failure.times, retrip=None)
    return replace(p, breaker_failure=replace(p.breaker_failure, times=times))


def no_transfer_trip(p: Policy) -> Policy:
    assert p.breaker_failure is not None
    return replace(p, breaker_failure=replace(p.breaker_failure, transfer_trip=False))


def no_channel_scheme(p: Policy) -> Policy:
    return replace(p, sets=tuple(replace(s, line=LineScheme.DISTANCE) for s in p.sets))


class Part(NamedTuple):
    """A listed run, what the policy loses, and what comes out with the part and without it."""

    run: str
    taken: Callable[[Policy], Policy]
    with_it: Found
    without: Found


PARTS = [
    # Set 2 at Alder: zone 1 20, breaker 50. Without: local back-up 20 + 400 + 50.
    Part(
        "duplicate",
        lambda p: replace(p, sets=p.sets[:1]),
        Found(20 + 50, L1_ENDS, Role.MAIN),
        Found(20 + 400 + 50, L1_ENDS, Role.LOCAL),
    ),
    # 20 + 150 + 50 by the feeder's local back-up. Without, the last to go are Alder's two
    # generators, by their timed back-up: 20 + 1200 + 50.
    Part(
        "local back-up",
        lambda p: replace(p, local_backup=None),
        Found(20 + 150 + 50, {"Alder.F1.CB"}, Role.LOCAL),
        Found(20 + 1200 + 50, ALDER_FROM_ALL_SIDES, Role.REMOTE),
    ),
    # Main 20, timer 150, lockout 10, breaker 50. Without: zone 3 of L5 at Cedar, 20 + 1000 + 50
    # (2.2 x 35 km reach 77; the fault lies 35 + 9 km away).
    Part(
        "breaker failure",
        lambda p: replace(p, breaker_failure=None),
        Found(20 + 150 + 10 + 50, BIRCH_L4 | DUNMORE - {"Dunmore.L4.CB"}, Role.BREAKER_FAILURE),
        Found(20 + 1000 + 50, BIRCH_L4 | CEDAR_L5, Role.REMOTE),
    ),
    # Retrip at once: 20 + 50. Without: local back-up 20 + 150 + 50, but breaker failure has
    # tripped the rest of Dunmore at 20 + 150 + 10 = 180, before current has ceased at 220.
    Part(
        "retrip",
        no_retrip,
        Found(20 + 50, {"Dunmore.F5.CB"}, Role.BREAKER_FAILURE),
        Found(20 + 150 + 50, DUNMORE, Role.LOCAL),
    ),
    # Bus trip 20 + lockout 10, timer 150, lockout 10, channel 15, breaker 50. Without: zone 2
    # at Birch (1.2 x 30 km), 20 + 350 + 50.
    Part(
        "transfer trip",
        no_transfer_trip,
        Found(20 + 10 + 150 + 10 + 15 + 50, BIRCH_L4 | DUNMORE - {"Dunmore.L4.CB"}, Role.BREAKER_FAILURE),
        Found(20 + 350 + 50, BIRCH_L4 | DUNMORE - {"Dunmore.L4.CB"}, Role.REMOTE),
    ),
    # Bus trip 30, breaker 50, its contact 5, logic 40, channel 15, breaker 50. Without: breaker
    # failure, whose CT still carries: 30 + 150 + 10 + 15 + 50.
    Part(
        "dead zone",
        lambda p: replace(p, end_fault=False),
        Found(30 + 50 + 5 + 40 + 15 + 50, BIRCH_L4 | DUNMORE, Role.BREAKER_FAILURE),
        Found(30 + 150 + 10 + 15 + 50, BIRCH_L4 | DUNMORE, Role.BREAKER_FAILURE),
    ),
    # Permission sent at 20, received at 35, breaker 50. Without: zone 2, 20 + 350 + 50.
    Part(
        "channel scheme",
        no_channel_scheme,
        Found(20 + 15 + 50, BIRCH_L3 | CEDAR_L3, Role.MAIN),
        Found(20 + 350 + 50, BIRCH_L3 | CEDAR_L3, Role.MAIN_TIMED),
    ),
    # Set 2 stands on DC 2. With all on DC 1 nothing at Dunmore works: zone 3 at Cedar.
    Part(
        "DC domain",
        one_battery,
        Found(20 + 50, {*BIRCH_L4, "Dunmore.L4.CB"}, Role.MAIN),
        Found(20 + 1000 + 50, BIRCH_L4 | CEDAR_L5, Role.REMOTE),
    ),
    # Zone 3 of L4 at Birch: 2.2 x 30 km reach 66; the fault lies 30 + 10.5 km away.
    Part(
        "remote back-up",
        lambda p: replace(p, remote_backup=False),
        Found(20 + 1000 + 50, BIRCH_L4 | CEDAR_L5, Role.REMOTE),
        Found(None, CEDAR_L5, None),
    ),
]


@pytest.mark.parametrize("part", PARTS, ids=lambda p: p.run)
def test_each_part_decides_its_run(demo: Scenario, part: Part) -> None:
    full = demo.policies["full"]
    assert part.taken(full) != full
    assert found(demo, part.run) == part.with_it
    assert found(demo, part.run, part.taken(full)) == part.without


@pytest.mark.parametrize("part", PARTS, ids=lambda p: p.run)
def test_the_text_of_a_run_states_these_figures(demo: Scenario, part: Part) -> None:
    text = demo.listed(part.run).expect
    if part.run == "DC domain":  # what comes of it without stands in the run beside it
        text += " " + demo.listed("DC domain, one battery").expect
    assert re.search(rf"\b{len(part.with_it.opened)} breakers?\b", text)
    assert re.search(rf"\b{part.with_it.ms:g} ms", text)
    if part.without.ms is None:
        assert "the fault stays" in text
    else:
        assert re.search(rf"\b{part.without.ms:g} ms", text)


def test_no_dead_zone_with_cts_on_both_sides() -> None:
    """Bus and line protection overlap at the breaker: both trip, Birch by zone 1 at once, 20 + 50."""
    text = FILE.read_text(encoding="utf-8")
    assert text.count("    ct: circuit_side\n") == 1
    both = scenario_from_text(text.replace("    ct: circuit_side\n", "    ct: both\n"))
    ran = found(both, "dead zone")
    # the section beside the line's CT lies in both protected zones, so the bus is tripped too
    assert ran.ms == 20 + 50
    assert ran.role is Role.MAIN


def test_a_dc_domain_decides_where_it_is_the_only_one(demo: Scenario) -> None:
    listed = demo.listed("DC domain, one battery")
    assert demo.policies["one battery"] == replace(one_battery(demo.policies["full"]), name="one battery")
    assert found(demo, listed.name) == Found(20 + 1000 + 50, BIRCH_L4 | CEDAR_L5, Role.REMOTE)
    intact = replace(demo, runs=(replace(listed, failures=()),))
    assert found(intact, listed.name) == Found(20 + 50, {*BIRCH_L4, "Dunmore.L4.CB"}, Role.MAIN)


def test_remote_back_up_is_not_called_while_dc_lasts(demo: Scenario) -> None:
    listed = demo.listed("remote back-up")
    for kept in (0, 1):  # either domain is enough
        half = replace(demo, runs=(replace(listed, failures=(listed.failures[kept],)),))
        assert found(half, listed.name) == Found(20 + 50, {*CEDAR_L5, "Dunmore.L5.CB"}, Role.MAIN)


# --- the other listed runs ----------------------------------------------------------------


def test_nothing_fails(demo: Scenario) -> None:
    assert found(demo, "nothing fails") == Found(20 + 50, L1_ENDS, Role.MAIN)


def test_a_channel_of_two_is_enough(demo: Scenario) -> None:
    """Both gone: zone 2, 20 + 350 + 50. Channel 1 at work: differential, 20 + 50; channel 2: 20 + 15 + 50."""
    listed = demo.listed("no channel left")
    ends = BIRCH_L3 | CEDAR_L3
    assert found(demo, listed.name) == Found(20 + 350 + 50, ends, Role.MAIN_TIMED)
    only_one = replace(demo, runs=(replace(listed, failures=()),))
    assert found(only_one, listed.name) == Found(20 + 50, ends, Role.MAIN)
    only_two = replace(demo, runs=(replace(listed, out_of_service=frozenset()),))
    assert found(only_two, listed.name) == Found(20 + 15 + 50, ends, Role.MAIN)


def test_a_needless_trip_loses_nothing(demo: Scenario) -> None:
    ran, _ = play(demo, "no fault")
    assert ran.outcome.status is Status.NO_FAULT
    assert ran.outcome.tripped == {"Birch.D1.CB1", "Birch.D1.CB2"}
    case = demo.case_of(demo.listed("no fault"))
    assert lost(case, ran.final_mask) == (0.0, ())


def test_every_listed_run_is_tested_here(demo: Scenario) -> None:
    others = {"nothing fails", "no channel left", "DC domain, one battery", "no fault"}
    assert {r.name for r in demo.runs} == others | {p.run for p in PARTS}


# --- with nothing failing -----------------------------------------------------------------


@pytest.mark.parametrize(
    ("policy", "dead_zone_ms"),
    # without end-fault logic breaker failure clears the dead zones (see above)
    [("full", 190), ("one battery", 190), ("single", 255), ("relay twice", 255)],
)
def test_every_location_is_cleared_in_time_but_the_dead_zones(demo: Scenario, policy: str, dead_zone_ms: int) -> None:
    dead = {"Dunmore.L4.c", "Dunmore.L5.c"}
    # bus, unit: 20 + 10 + 50; line, by permission at the far end: 20 + 15 + 50; feeder: 20 + 50
    times = {70_000, 80_000, 85_000}
    seen = set()
    for at in demo.frequencies:
        case = demo.case(at, policy)
        outcome = run_event(case, FixedAnswers(case.program, ())).outcome
        where = str(at)
        assert case.duty.needed <= outcome.tripped, where
        assert not outcome.at_horizon, where
        if at.section in dead:
            seen.add(at.section)
            assert outcome.t_clear_us == dead_zone_ms * 1000, where
            assert cleared_by(case, outcome) is Role.BREAKER_FAILURE, where
        else:
            assert outcome.t_clear_us in times, where
            assert cleared_by(case, outcome) is Role.MAIN, where
    assert seen == dead
    assert len(demo.frequencies) == len(demo.plant.sections) + 2 * 5  # three positions on each of five lines
