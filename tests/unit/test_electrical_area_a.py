"""Electrical sensing on the IEEE test system's area A under the duplicate-chain policy."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import bind
from schemesim.engine.electrical import ElectricalSensing
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Outcome
from schemesim.engine.sensing import LogicalSensing, Sensing
from schemesim.plant.model import Location
from schemesim.plant.net_case import ShuntFault
from schemesim.plant.net_data import LineImpedance
from schemesim.scenario import Scenario, load_scenario
from schemesim.scenario.sensed import SensingKind
from schemesim.scheme.phasor_distance import Distance
from schemesim.scheme.phasor_quantities import Quantities

FILE = Path(__file__).resolve().parents[2] / "scenarios" / "rts96_area_a.yaml"
POLICY = "duplicate chain"
BEYOND = Location("A33-2", 0.95)
"""On one of two lines between buses 20 and 23, five hundredths of its 15 miles from bus 23."""


@pytest.fixture(scope="module")
def area_a() -> Scenario:
    scenario = load_scenario(FILE)
    return replace(scenario, policy=POLICY, study=replace(scenario.study, sensing=SensingKind.ELECTRICAL))


def play(scenario: Scenario, sensing: Sensing, place: Location, *yes: str) -> Outcome:
    program = scenario.program()
    return run_event(bind(program, place, sensing), FixedAnswers(program, yes)).outcome


@pytest.mark.parametrize("place", [Location("A1"), BEYOND, Location("Bus09.B1"), Location("A7")])
def test_with_nothing_failed_both_sensings_trip_the_same(area_a: Scenario, place: Location) -> None:
    """Main protection sees its own zone whatever feeds it: the same breakers at the same times."""
    by_graph, by_current = play(area_a, LogicalSensing(), place), play(area_a, area_a.sensing(), place)
    assert by_graph.openings == by_current.openings
    assert by_graph.t_clear_us == by_current.t_clear_us


def test_infeed_at_bus_23_keeps_a_zone_that_over_reaches_from_the_next_line(area_a: Scenario) -> None:
    """Zone 1 at bus 12 on A21, over-reaching to 1.04 of the line: by length it sees 0.75 miles beyond bus 23.

    What it measures is Z(A21) + I(A33-2)/I(A21)·Z to the fault (Kirchhoff): several times as far, since the units
    at bus 23 feed the fault too. So the relay's over-reach trips A21 needlessly on the graph only.
    """
    sensing = area_a.sensing()
    assert isinstance(sensing, ElectricalSensing)
    plant, program = area_a.plant, area_a.program()
    wide = sensing.settings_of(program).of["Bus12/A21/1 21-1, beyond its reach"].element
    assert isinstance(wide, Distance)
    network = sensing.network(program, None)
    solved = network.at(ShuntFault(BEYOND)).solve(frozenset())
    q = Quantities(plant, solved, network.prefault())
    near, beyond = plant.section["A21"].impedance, plant.section["A33-2"].impedance
    assert isinstance(near, LineImpedance)
    assert isinstance(beyond, LineImpedance)
    relay = q.current(wide.terminals)[1]
    other = sensing.settings_of(program).of["Bus23/A33-2/1 21-1"].element
    assert isinstance(other, Distance)
    (measured,) = wide.impedances(q).values()
    ratio = q.current(other.terminals)[1] / relay
    assert measured == pytest.approx(near.z1 + ratio * 0.05 * beyond.z1, rel=1e-6)
    assert abs(ratio) > 3
    failure = "Bus12/A21/relay 1: unwanted_operation"
    lost = {"Bus12.D2.CB2", "Bus12.D2.CB3"}
    assert lost <= play(area_a, LogicalSensing(), BEYOND, failure).tripped
    assert not lost & play(area_a, sensing, BEYOND, failure).tripped
