"""Dials: voting held to its closed forms by exact trees, reach and line schemes to cases worked out by hand."""

from __future__ import annotations

from fractions import Fraction

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import bind
from schemesim.engine.event import run_event
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.layouts import Bay, feeder, generator, single_bus
from schemesim.plant.model import Location, Plant, PlantBuilder
from schemesim.scheme.dress import dress
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import ComponentKind, FailureMode
from schemesim.scheme.policy import Policy, ProtectionSet
from schemesim.study.brackets import Bracket, exactly
from schemesim.study.dials import VOTES, DialStudy, dial_policies, study_dial
from tests.rules.small import chain

F = Fraction
FAILS, UNWANTED, RATE = F(1, 10), F(1, 50), 0.25
BUS, F1 = Location("Alder.B1"), Location("F1")
PLAIN = Policy(remote_backup=False)

RELAYS = FailureData(
    modes={
        ComponentKind.RELAY: {FailureMode.FAILURE_TO_OPERATE: FAILS, FailureMode.UNWANTED_OPERATION: UNWANTED},
    },
    no_fault_per_yr={ComponentKind.RELAY: RATE},
)


def station() -> Plant:
    b = PlantBuilder()
    generator(b, "G1", station="Alder")
    feeder(b, "F1", station="Alder", load_mw=10)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1")])
    return b.build()


@pytest.fixture(scope="module")
def voting() -> DialStudy:
    points = dial_policies(PLAIN, "votes", VOTES)
    return study_dial(
        station(), points, dial="votes", elements=["Alder.B1"], data=RELAYS, locations=[BUS, F1], epsilon=0
    )


def agree(k: int, n: int, p: Fraction) -> Fraction:
    """P(at least k of n) from the closed forms of the literature."""
    return {(1, 1): p, (1, 2): 1 - (1 - p) ** 2, (2, 2): p**2, (2, 3): 3 * p**2 - 2 * p**3}[(k, n)]


@pytest.mark.parametrize("position", VOTES)
def test_voting_by_closed_forms(voting: DialStudy, position: str) -> None:
    """Bus protection: for a bus fault each relay operates with 9/10, for one on the feeder without need with 1/50."""
    k, n = int(position[0]), int(position[-1])
    found = next(f for f in voting.curve("Alder/Alder.B1") if f.position == position)
    assert found.dependability == exactly(agree(k, n, 1 - FAILS))
    assert found.security == exactly(1 - agree(k, n, UNWANTED))


@pytest.mark.parametrize("position", VOTES)
def test_each_relay_counts_alone(voting: DialStudy, position: str) -> None:
    for f in voting.figures:
        if f.position == position and f.kind in ("relay", "set"):
            assert f.dependability == exactly(1 - FAILS)
            assert f.security == exactly(1 - UNWANTED)
    names = {f.name for f in voting.figures if f.position == position and f.kind == "relay"}
    assert names == {f"Alder/Alder.B1/relay {i}" for i in range(1, int(position[-1]) + 1)}


def test_a_relay_that_trips_alone_is_outvoted(voting: DialStudy) -> None:
    """1oo1 0.25 a year, 1oo2 twice that; two out of two or three need a second one, which sees no fault."""
    rates = {f.position: f.no_fault_per_yr for f in voting.curve("Alder/Alder.B1")}
    assert rates["1oo1"].contains(RATE)
    assert rates["1oo2"].contains(2 * RATE)
    assert rates["2oo2"] == exactly(0)
    assert rates["2oo3"] == exactly(0)


def test_counted_votes_are_those_of_the_gate() -> None:
    """The voting gate itself, played: with one of two relays failed 2oo2 trips no breaker, 1oo2 does."""
    for position, cleared in (("1oo2", True), ("2oo2", False), ("2oo3", True)):
        ((_, policy),) = dial_policies(PLAIN, "votes", [position])
        program = compile_scheme(station(), dress(station(), policy, RELAYS))
        case = bind(program, BUS, LogicalSensing())
        ran = run_event(case, FixedAnswers(program, ["Alder/Alder.B1/relay 1: failure_to_operate"]))
        assert (ran.outcome.t_clear_us is not None) == cleared


def test_the_station_takes_its_elements_together() -> None:
    """Fault on the feeder: inside for its own relay, outside for the bus protection; both are of the station."""
    found = study_dial(station(), [("as is", PLAIN)], data=RELAYS, locations=[F1], epsilon=0)
    (whole,) = found.curve("Alder")
    assert whole.dependability == exactly(1 - FAILS)
    (bus,) = found.curve("Alder/Alder.B1")
    (unit,) = found.curve("Alder/G1")
    assert bus.dependability is None
    assert (bus.security, unit.security) == (exactly(1 - UNWANTED), exactly(1))
    assert whole.security == exactly(1 - UNWANTED)


def line_data(lost: Fraction) -> FailureData:
    return FailureData(modes={ComponentKind.CHANNEL: {FailureMode.LOST: lost}}, no_fault_per_yr={})


def test_blocking_against_permissive() -> None:
    """Near the far end zone 1 is blind. Permissive needs the channel there; blocking needs it for a fault beyond."""
    lost = F(1, 20)
    points = dial_policies(
        Policy(sets=(ProtectionSet(),), intertrip=False), "line", ["permissive_overreach", "blocking"]
    )
    found = study_dial(
        chain(), points, dial="line", stations=["Alder"], elements=["L1"], data=line_data(lost),
        locations=[Location("L1", 0.9), Location("Birch.B1")], epsilon=0,
    )  # fmt: skip
    permissive, blocking = found.curve("Alder/L1")
    assert permissive.dependability == exactly(1 - lost)
    assert permissive.security == exactly(1)
    assert blocking.dependability == exactly(1)
    assert blocking.security == exactly(1 - lost)


def test_reach_buys_dependability_with_security() -> None:
    """Zone 1 of 70 or 80 km, a third more if it over-reaches: 91 or 104 km of a line of 100.

    A fault at 75 km is seen by the longer one, and by the shorter only if it over-reaches; one 2 km beyond
    the far bus is seen by the longer one if it over-reaches.
    """
    data = FailureData(modes={ComponentKind.RELAY: {FailureMode.UNWANTED_OPERATION: UNWANTED}}, no_fault_per_yr={})
    points = dial_policies(Policy(intertrip=False), "zone_1", [0.7, 0.8])
    options = {"dial": "zone_1", "stations": ["Alder"], "elements": ["L1"], "data": data, "epsilon": 0}
    at = [Location("L1", 0.75), Location("L2", 0.02)]
    found = study_dial(chain(), points, locations=at, **options)  # type: ignore[arg-type]
    short, long = found.curve("Alder/L1")
    assert (short.position, long.position) == ("0.7", "0.8")
    assert short.dependability == exactly(UNWANTED)
    assert short.security == exactly(1)
    assert long.dependability == exactly(1)
    assert long.security == exactly(1 - UNWANTED)
    # Timed zones see in the end what zone 1 does not, unless the bus protection has opened their breaker needlessly.
    timed = study_dial(chain(), points, locations=at, timed=True, **options)  # type: ignore[arg-type]
    assert timed.curve("Alder/L1")[0].dependability == exactly(1 - (1 - UNWANTED) * UNWANTED)


def test_faults_are_weighted_by_frequency() -> None:
    found = study_dial(
        station(), [("as is", PLAIN)], data=RELAYS, elements=["F1", "Alder.B1"], locations=[BUS, F1],
        frequencies={BUS: 1.0, F1: 3.0}, epsilon=0,
    )  # fmt: skip
    (whole,) = found.curve("Alder")
    # A quarter of the faults has the feeder's relay outside, which is never wrong for a bus fault.
    security: Bracket | None = whole.security
    assert security is not None
    assert security.contains(F(1, 4) + F(3, 4) * (1 - UNWANTED))


def test_a_tree_cut_short_gives_a_bracket_that_holds(voting: DialStudy) -> None:
    points = dial_policies(PLAIN, "votes", ["2oo3"])
    rough = study_dial(
        station(), points, dial="votes", elements=["Alder.B1"], data=RELAYS, locations=[BUS, F1], epsilon=0.2
    )
    (found,) = rough.curve("Alder/Alder.B1")
    exact = next(f for f in voting.curve("Alder/Alder.B1") if f.position == "2oo3")
    assert found.dependability is not None
    assert exact.dependability is not None
    assert found.dependability.width > 0
    assert found.dependability.contains(exact.dependability.low)


def test_the_table_keeps_the_positions_of_a_group_together(voting: DialStudy) -> None:
    table = voting.table("element")
    assert table["votes"].tolist() == list(VOTES)
    assert set(voting.table()["kind"]) == {"relay", "set", "element", "station"}


def test_mistakes() -> None:
    for dial, values, told in (
        ("vote", ["1oo1"], "dial: got 'vote', expected one of"),
        ("votes", ["3oo2"], "votes: got '3oo2'"),
        ("votes", [], "positions of votes"),
        ("line", ["differental"], "did you mean 'differential'|differential"),
        ("zone_1", ["far"], "zone_1: got 'far', expected a number"),
        ("zone_1", [1.5], "zone 1, 2 and 3 over zero"),
    ):
        with pytest.raises(InputError, match=told):
            dial_policies(PLAIN, dial, values)
    with pytest.raises(InputError, match="none twice"):
        study_dial(station(), [("a", PLAIN), ("a", PLAIN)])
    with pytest.raises(InputError, match="station: got 'Adler'"):
        study_dial(station(), [("a", PLAIN)], stations=["Adler"])
    with pytest.raises(InputError, match="group: got 'Alder/B1'"):
        study_dial(station(), [("a", PLAIN)], data=RELAYS, locations=[BUS], elements=["Alder.B1"]).curve("Alder/B1")
