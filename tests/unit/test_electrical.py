"""Electrical sensing as a sensing: against logical sensing, its settings, its cases."""

from __future__ import annotations

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case, bind
from schemesim.engine.electrical import ElectricalSensing
from schemesim.engine.event import run_event
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import LogicalSensing, NoFault, Sensing
from schemesim.errors import InputError
from schemesim.plant.model import Plant
from schemesim.plant.terminals import Terminal
from schemesim.scheme.conditions import Current
from schemesim.scheme.dress import dress
from schemesim.scheme.phasor_elements import Overcurrent
from schemesim.scheme.policy import Policy, duplicate_chain, single_set
from schemesim.scheme.settings import Setting, Settings
from schemesim.scheme.settings_rules import settings_for
from tests.rules.small import at, chain
from tests.unit.electrical_plants import with_impedances

PLACES = ("G1", "Alder.B1", "L1@0.05", "L1@0.5", "L1@0.95", "Birch.B1", "L2@0.05", "L2@0.5", "F2", "Cedar.B1")


def made(plant: Plant, policy: Policy) -> tuple[Program, Settings]:
    scheme = dress(plant, policy)
    return compile_scheme(plant, scheme), settings_for(plant, scheme)


@pytest.fixture(scope="module")
def radial() -> tuple[Program, Settings]:
    """One source at Alder; lines, a feeder and nothing that feeds from Cedar."""
    return made(with_impedances(chain(g3=False)), single_set())


@pytest.fixture(scope="module")
def fed_twice() -> tuple[Program, Settings]:
    return made(with_impedances(chain()), duplicate_chain())


def sequence(case: Case, *yes: str) -> tuple[object, ...]:
    """What a run shows: openings with their times, trip outputs and roles, and the clearing."""
    run = run_event(case, FixedAnswers(case.program, yes))
    return run.outcome.openings, run.outcome.t_clear_us, run.outcome.status


@pytest.mark.parametrize("kind", ["lll", "ll", "lg", "llg"])
def test_on_a_radial_plant_both_sensings_give_the_same_sequences(radial: tuple[Program, Settings], kind: str) -> None:
    """Settings by rule are generous there: one source, no infeed. With nothing failed, and with one item failed."""
    program, settings = radial
    failures: list[tuple[str, ...]] = [()]
    wanted = ("Birch.F2.CB: does_not_open", "Birch/F2/relay 1: failure_to_operate", "Alder/DC 1: lost")
    failures += [(q.name,) for q in program.questions if q.name in wanted]
    assert len(failures) == 4
    for place in PLACES:
        cases = [bind(program, at(place), s) for s in (LogicalSensing(), ElectricalSensing(settings, fault=kind))]
        for yes in failures:
            assert sequence(cases[0], *yes) == sequence(cases[1], *yes), (place, yes)


def test_candidates_are_a_superset_of_what_picks_up(fed_twice: tuple[Program, Settings]) -> None:
    """Taking every block for a candidate changes nothing, whatever single failure is drawn."""
    program, settings = fed_twice
    near, everywhere = ElectricalSensing(settings), ElectricalSensing(settings, everywhere=True)
    for place in ("L1@0.05", "Birch.B1", "L2@0.95", "F2"):
        cases = [bind(program, at(place), s) for s in (near, everywhere)]
        assert len(cases[0].names) <= len(cases[1].names)
        asked = {program.questions[q].name for q, _ in run_event(cases[1], FixedAnswers(program, ())).asked}
        for name in ("", *sorted(asked)):
            yes = (name,) if name else ()
            assert sequence(cases[0], *yes) == sequence(cases[1], *yes), (place, name)


def test_what_it_says_depends_on_the_topology_only(fed_twice: tuple[Program, Settings]) -> None:
    program, settings = fed_twice
    sensing: Sensing = ElectricalSensing(settings, fault="lg")
    case, other = bind(program, at("L1@0.1"), sensing), bind(program, at("L1@0.1"), sensing)
    masks = [1 << n for n in range(len(case.breakers))]
    forward = [case.topology(m) for m in masks]
    backward = [other.topology(m) for m in reversed(masks)][::-1]
    assert forward == backward


def test_a_trip_without_a_fault_is_left_to_the_load_current(fed_twice: tuple[Program, Settings]) -> None:
    program, settings = fed_twice
    event = NoFault("Alder/L1/relay 1")
    logical, electrical = bind(program, event, LogicalSensing()), bind(program, event, ElectricalSensing(settings))
    assert sequence(logical) == sequence(electrical)
    assert sequence(electrical)[0]


def test_a_setting_that_sees_nothing_keeps_a_breaker_shut(fed_twice: tuple[Program, Settings]) -> None:
    """Every differential share of set 1 and every distance zone at Alder set too high: L1 is cleared otherwise."""
    program, settings = fed_twice
    for name in settings.of:
        if name.startswith("Alder/L1/") and "21" in name:
            settings = settings.changed(name, reach_ohm=1e-3j)
        elif "87L sees" in name:
            settings = settings.changed(name, pick_up_a=1e6)
    plain = sequence(bind(program, at("L1@0.5"), ElectricalSensing(made(program.plant, duplicate_chain())[1])))
    blind = sequence(bind(program, at("L1@0.5"), ElectricalSensing(settings)))
    assert isinstance(plain[1], int)
    assert blind != plain


def test_the_load_lost_is_that_of_the_graph(fed_twice: tuple[Program, Settings]) -> None:
    program, settings = fed_twice
    opened = frozenset({"Birch.F2.CB"})
    lost = [bind(program, at("F2"), s).sensed.lost(opened) for s in (LogicalSensing(), ElectricalSensing(settings))]
    assert lost[0] == lost[1]
    assert lost[0][0] == 30.0


def test_blocks_without_a_setting_are_told_all_at_once(fed_twice: tuple[Program, Settings]) -> None:
    program, settings = fed_twice
    kept = Settings(tuple(s for s in settings.items if "50BF" not in s.block))
    with pytest.raises(InputError, match="50BF current") as caught:
        bind(program, at("Birch.B1"), ElectricalSensing(kept))
    assert len(caught.value.problems) >= 3


def test_settings_that_fit_nothing_are_told(fed_twice: tuple[Program, Settings]) -> None:
    program, settings = fed_twice
    element = Overcurrent(terminals=(Terminal("Alder.L1.CTx", "L1"),), pick_up_a=1.0)
    wrong = settings.updated([Setting("Alder/L1/1 21-9", element)])
    with pytest.raises(InputError) as caught:
        bind(program, at("L1"), ElectricalSensing(wrong))
    assert [p.value for p in caught.value.problems] == ["Alder/L1/1 21-9", "Alder.L1.CTx"]


def test_conditions_alone_may_be_bound(fed_twice: tuple[Program, Settings]) -> None:
    """A caller that knows conditions only gets the first block's element of each; a stranger's is refused."""
    program, settings = fed_twice
    sensing = ElectricalSensing(settings)
    case = bind(program, at("L1"), sensing)
    conditions = [program.scheme.block[case.names[s]].condition for s in case.senses]  # type: ignore[union-attr]
    sensed = sensing.bind(program, at("L1"), None, conditions, [case.names[b] for b in case.breakers])
    assert sensed.state(frozenset())[1]
    with pytest.raises(InputError, match="fault"):
        ElectricalSensing(settings, fault="ln")
    with pytest.raises(InputError, match="conditions"):
        sensing.bind(program, at("L1"), None, [Current(("nowhere",))], ())


def test_blocks_without_a_curve_have_no_speed(fed_twice: tuple[Program, Settings]) -> None:
    program, settings = fed_twice
    case = bind(program, at("L1"), ElectricalSensing(settings))
    assert case.inverse == {}
    assert case.topology(0).rates == ()
