"""R5 with computed quantities: an open CT core gives no current, a lost VT no voltage, and elements do what follows."""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import bind
from schemesim.engine.electrical import ElectricalSensing
from schemesim.engine.event import run_event
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import LogicalSensing, Sensing
from schemesim.errors import InputError
from schemesim.scheme.dress import dress
from schemesim.scheme.phasor_elements import Biased
from schemesim.scheme.policy import Policy, duplicate_chain, single_set
from schemesim.scheme.settings import Settings
from schemesim.scheme.settings_rules import settings_for
from tests.rules.small import at, chain
from tests.unit.electrical_plants import with_impedances

PLANT = with_impedances(chain())


def made(policy: Policy) -> tuple[Program, Settings]:
    scheme = dress(PLANT, policy)
    return compile_scheme(PLANT, scheme), settings_for(PLANT, scheme)


def opened(program: Program, sensing: Sensing, place: str, *yes: str) -> dict[str, int]:
    """Breakers and when each is energised, in ms."""
    run = run_event(bind(program, at(place), sensing), FixedAnswers(program, yes))
    return {o.breaker: o.t_trip_us // 1000 for o in run.outcome.openings}


@pytest.fixture(scope="module")
def chains() -> tuple[Program, Settings]:
    return made(duplicate_chain())


CORE = "Birch.L2.CTb/core 1: open"
L2 = {"Birch.L2.CB": 20, "Cedar.L2.CB": 20}


def test_r05_an_open_core_unbalances_a_line_differential(chains: tuple[Program, Settings]) -> None:
    """A fault on the bus at Birch: L2 carries what G3 feeds, which 87L reads at Cedar only."""
    program, settings = chains
    whole = opened(program, ElectricalSensing(settings), "Birch.B1")
    assert "Cedar.L2.CB" not in whole
    unbalanced = opened(program, ElectricalSensing(settings), "Birch.B1", CORE)
    assert {name: unbalanced.get(name) for name in L2} == L2


def test_r05_an_open_core_does_nothing_where_the_current_is_too_small(chains: tuple[Program, Settings]) -> None:
    """G3 behind j20 and 41.2 ohm of line: 1.25 kA. Set to 2 kA it does not pick up; the graph cannot tell."""
    program, settings = chains
    blunt = settings
    for name, s in settings.of.items():
        if "L2/1 87L" in name and isinstance(s.element, Biased):
            blunt = blunt.changed(name, pick_up_a=2000.0)
    without_core = opened(program, ElectricalSensing(blunt), "Birch.B1", CORE)
    assert "Cedar.L2.CB" not in without_core
    assert "Cedar.L2.CB" in opened(program, LogicalSensing(), "Birch.B1", CORE)


def test_r05_the_block_of_an_open_core_is_the_differential_without_it(chains: tuple[Program, Settings]) -> None:
    _, settings = chains
    through = settings.of["Birch/L2/1 87L through Birch.L2.CTb"]
    assert through.missing == frozenset({"Birch.L2.CTb"})
    assert isinstance(through.element, Biased)
    assert {t.ct for t in through.element.terminals} == {"Birch.L2.CTb", "Cedar.L2.CTb"}


def test_r05_a_lost_voltage_lets_an_unsupervised_distance_element_trip_on_current() -> None:
    """A fault at the middle of L2, 150 km from Alder, beyond its zone 1 of 80 km; its VT is lost.

    Without voltage it measures nothing but current: it trips L1 at 20 ms. Within reach on the graph it never was.
    """
    program, settings = made(replace(single_set(), vt_supervision=False))
    lost = "Alder.L1.VT/winding 1: lost"
    assert lost in {q.name for q in program.questions}
    sensing = ElectricalSensing(settings)
    assert "Alder.L1.CB" not in opened(program, sensing, "L2@0.5")
    assert opened(program, sensing, "L2@0.5", lost)["Alder.L1.CB"] == 20
    assert "Alder.L1.CB" not in opened(program, LogicalSensing(), "L2@0.5", lost)


def test_r05_a_supervised_element_is_blocked_by_a_lost_voltage() -> None:
    """Single set, supervised: zone 1 at Alder does not trip at once for a fault on its own line."""
    program, settings = made(single_set())
    lost = "Alder.L1.VT/winding 1: lost"
    sensing = ElectricalSensing(settings)
    assert opened(program, sensing, "L1@0.1")["Alder.L1.CB"] == 20
    assert opened(program, sensing, "L1@0.1", lost).get("Alder.L1.CB", 1000) > 20


def test_r05_a_missing_signal_has_to_be_one_the_element_stands_on(chains: tuple[Program, Settings]) -> None:
    program, settings = chains
    wrong = replace(settings.of["Birch/L2/1 21-1"], missing=frozenset({"Cedar.L2.CTb"}))
    with pytest.raises(InputError, match="missing signal of 'Birch/L2/1 21-1'"):
        bind(program, at("L2"), ElectricalSensing(settings.updated([wrong])))
