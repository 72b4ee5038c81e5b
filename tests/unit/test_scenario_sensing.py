"""The key `sensing` of a scenario: what it stands for, what it needs, and that it is kept."""

from __future__ import annotations

import pickle

import pytest

from schemesim.engine.case import bind
from schemesim.engine.electrical import ElectricalSensing
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.plant.net_case import FaultType
from schemesim.scenario import Scenario, scenario_from_text, scenario_text
from schemesim.scenario.deciding import explorer_of
from schemesim.scenario.sensed import SensingKind
from schemesim.scenario.studying import study_scenario
from schemesim.scenario.timers import dial_scenario
from schemesim.scheme.phasor_distance import Distance

TEXT = """
schemesim: 1
policy: single_set
plant:
  stations: [{name: Ash, layout: single_bus, kv: 20, bays: [G, F]}]
  generators: [{name: G, station: Ash, kv: 20, impedance_pu: 0.2}]
  feeders: [{name: F, station: Ash, kv: 20, load_mw: 5}]
study: {epsilon: 0.001, sensing: electrical, fault: ll, fault_ohm: 0.5}
"""


@pytest.fixture(scope="module")
def electrical() -> Scenario:
    return scenario_from_text(TEXT)


def test_what_the_keys_say(electrical: Scenario) -> None:
    s = electrical.study
    assert (s.sensing, s.fault, s.fault_ohm) == (SensingKind.ELECTRICAL, FaultType.LL, 0.5)
    sensing = electrical.sensing()
    assert isinstance(sensing, ElectricalSensing)
    assert (sensing.fault, sensing.resistance_ohm) == (FaultType.LL, 0.5)
    assert electrical.sensing() is sensing


def test_left_out_it_is_logical_and_saving_keeps_it(electrical: Scenario) -> None:
    plain = scenario_from_text(TEXT.replace("sensing: electrical, fault: ll, fault_ohm: 0.5", "seed: 1"))
    assert isinstance(plain.sensing(), LogicalSensing)
    for scenario in (electrical, plain):
        assert scenario_from_text(scenario_text(scenario)).study == scenario.study


def test_a_study_and_a_case_use_it(electrical: Scenario) -> None:
    """Without fault resistance both sensings agree; with 0.5 ohm the unit's timed back-up of j0.04 ohm is blind."""
    places = [Location("F"), Location("Ash.B1")]
    logical = scenario_from_text(TEXT.replace("electrical", "logical"))
    solid = scenario_from_text(TEXT.replace("fault_ohm: 0.5", "fault_ohm: 0"))
    studies = [study_scenario(s, locations=places).measures() for s in (logical, solid, electrical)]
    by_graph, by_current, through_ohms = studies
    assert by_graph == by_current
    assert through_ohms["p_by_main"].contains(by_graph["p_by_main"].low)
    assert through_ohms["p_cleared"].high < by_graph["p_cleared"].low
    sensing = electrical.sensing()
    assert isinstance(sensing, ElectricalSensing)
    element = sensing.settings_of(electrical.program()).of["Ash/G/timed 1 51"].element
    assert isinstance(element, Distance)
    assert element.reach_ohm == pytest.approx(0.04j)
    assert type(electrical.case(Location("F")).sensed) is not type(logical.case(Location("F")).sensed)


def test_it_can_be_sent_to_another_process(electrical: Scenario) -> None:
    sensing = electrical.sensing()
    case = bind(electrical.program(), Location("F"), sensing)
    again = pickle.loads(pickle.dumps(sensing))
    assert bind(electrical.program(), Location("F"), again).topology(0) == case.topology(0)


def test_mistakes_are_told_with_their_place() -> None:
    with pytest.raises(InputError) as caught:
        scenario_from_text(TEXT.replace("electrical", "eletrical").replace("fault: ll", "fault: lng"))
    assert {p.path for p in caught.value.problems} == {"study.sensing", "study.fault"}
    assert all(p.line == 8 for p in caught.value.problems)


def test_a_plant_without_impedances_is_refused_when_it_is_asked() -> None:
    bare = scenario_from_text(TEXT.replace(", impedance_pu: 0.2", ""))
    with pytest.raises(InputError, match="impedance"):
        bare.case(Location("F"))


def test_settings_are_chosen_for_each_policy_and_each_variant() -> None:
    """One sensing serves every scheme of a scenario: policies, edits, positions of a dial."""
    more = "policies: {mine: {base: duplicate_relay}}\nfault_frequencies: {by_kind: {feeder: 0.1}}\n"
    two = scenario_from_text(TEXT + more)
    sensing = two.sensing()
    assert isinstance(sensing, ElectricalSensing)
    counts = {name: len(sensing.settings_of(two.program(name)).items) for name in ("mine", "single_set")}
    assert counts["mine"] > counts["single_set"]
    explorer, _ = explorer_of(two)
    assert explorer.sensing is sensing
    solid = TEXT.replace("fault_ohm: 0.5", "fault_ohm: 0")
    by_current, by_graph = (
        dial_scenario(scenario_from_text(text), "votes", ["1oo1", "1oo2"], locations=[Location("F")])
        for text in (solid, solid.replace("electrical", "logical"))
    )
    assert by_current == by_graph
    assert by_current.positions == ("1oo1", "1oo2")
