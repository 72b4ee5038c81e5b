"""States at the edge: everything out or open, loops of zero impedance, nothing earthed. A defined result, never NaN."""

from __future__ import annotations

from itertools import combinations
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case, bind
from schemesim.engine.electrical import ElectricalSensing
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Status
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import Measures
from schemesim.plant.layouts import Bay, generator, infeed, line, ring, single_bus, transformer
from schemesim.plant.model import DeviceKind, Dispatch, Location, Plant, PlantBuilder
from schemesim.plant.net_case import FaultType, ShuntFault
from schemesim.plant.net_data import LineImpedance, SourceImpedance, TransformerImpedance
from schemesim.plant.net_faults import network_of
from schemesim.plant.net_solution import PlantSolution
from schemesim.scheme.dress import dress
from schemesim.scheme.policy import duplicate_chain
from schemesim.scheme.settings import Settings
from schemesim.scheme.settings_rules import settings_for
from schemesim.study.element_audit import audit_elements

PHASE = 110e3 / 3**0.5
WIRE = LineImpedance(r_ohm=0, x_ohm=12, r0_ohm=0, x0_ohm=36)
STRONG = SourceImpedance(r_ohm=0, x_ohm=8, r0_ohm=0, x0_ohm=8)


def ringed() -> Plant:
    """A ring of four breakers at Alder, two lines to Birch, units at both; state "dark" has neither."""
    b = PlantBuilder()
    for name in ("L1", "L2"):
        line(b, name, 40, kv=110, impedance=WIRE)
    generator(b, "G1", station="Alder", kv=110, impedance=STRONG)
    generator(b, "G2", station="Alder", kv=110, impedance=STRONG)
    generator(b, "G3", station="Birch", kv=110, impedance=STRONG)
    ring(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1"), Bay("G2", "G2"), Bay("L2", "L2")], kv=110)
    single_bus(b, "Birch", [Bay("L1", "L1", 1.0), Bay("L2", "L2", 1.0), Bay("G3", "G3")], kv=110)
    b.add(Dispatch(name="dark", out=frozenset({"G1.unit", "G2.unit", "G3.unit"})))
    return b.build()


def through(group: str) -> Plant:
    """110 kV, 8 ohm earthed; a transformer of 0.1 on 40 MVA; 33 kV."""
    b = PlantBuilder()
    z = TransformerImpedance(mva=40, kv=(110, 33), r_pu=(0.0,), x_pu=(0.1,), group=group)
    transformer(b, "T1", station="Birch", impedance=z)
    infeed(b, "N", "Birch.B1", impedance=STRONG)
    single_bus(b, "Birch", [Bay("T1", "T1")], kv=110)
    single_bus(b, "Brook", [Bay("T1", "T1", 1.0)], kv=33)
    return b.build()


def figures(plant: Plant, solution: PlantSolution) -> NDArray[Any]:
    """Current of every device and voltage of every bus."""
    currents = [solution.current(d.name, d.b) for d in plant.devices]
    buses = [solution.voltage(s.name) for s in plant.sections if s.name.endswith((".B1", ".J"))]
    return np.array([*currents, *buses])


@pytest.fixture(scope="module")
def plant() -> Plant:
    return ringed()


@pytest.fixture(scope="module")
def settings(plant: Plant) -> Settings:
    return settings_for(plant, dress(plant, duplicate_chain()))


def case_at(plant: Plant, settings: Settings, place: Location, kind: str, dispatch: str | None = None) -> Case:
    program = compile_scheme(plant, dress(plant, duplicate_chain()))
    return bind(program, place, ElectricalSensing(settings, fault=kind, everywhere=True), dispatch=dispatch)


def test_a_ring_of_devices_without_impedance_in_every_state_of_its_breakers(plant: Plant) -> None:
    """All 16 states of the four breakers: what flows to the fault is what comes, and nothing is NaN."""
    network = network_of(plant)
    breakers = sorted(d.name for d in plant.devices if d.kind is DeviceKind.BREAKER and d.station == "Alder")
    assert len(breakers) == 4
    for kind in FaultType:
        faulted = network.at(ShuntFault(Location("L1", 0.0), kind))
        for size in range(5):
            for opened in combinations(breakers, size):
                solution = faulted.solve(frozenset(opened))
                assert solution.fed  # over L1 from Birch, always
                assert np.isfinite(figures(plant, solution)).all()
                for name in opened:
                    assert solution.current(name, plant.device[name].b) == (0, 0, 0)
                into = np.zeros(3, complex)
                for d in plant.at_section["L1"]:
                    into += np.array(solution.current(d.name, "L1"))
                assert into == pytest.approx(np.array(solution.fault), abs=1e-6)
    alone = network.at(ShuntFault(Location("L1", 0.0))).solve(frozenset(breakers))
    assert abs(alone.fault[1]) == pytest.approx(PHASE / 20)  # 8 ohm and L1; L2 hangs open


def test_all_sources_out(plant: Plant, settings: Settings) -> None:
    """Nothing feeds the fault: no current, no trip, not cleared by anyone, nothing to audit."""
    network = network_of(plant, "dark")
    for kind in FaultType:
        solution = network.at(ShuntFault(Location("L1"), kind, 3.0)).solve()
        assert not solution.fed
        assert not figures(plant, solution).any()
    case = case_at(plant, settings, Location("L1"), "lg", "dark")
    run = run_event(case, FixedAnswers(case.program, ()))
    assert run.outcome.openings == ()
    assert run.outcome.status is Status.NOT_FED
    got = audit_elements(case.program, settings, dispatches=["dark"], locations=[Location("L1")])
    assert {(r.must, r.must_not) for r in got.rows} == {(0, 0)}


@pytest.mark.parametrize("kind", ["lll", "ll", "lg", "llg"])
def test_every_element_measures_a_number_in_every_state(plant: Plant, settings: Settings, kind: str) -> None:
    """Each breaker open by itself, each end of L1, and all of them: quantity ÷ setting is zero or more."""
    case = case_at(plant, settings, Location("L1", 0.3), kind)
    assert isinstance(case.sensed, Measures)
    breakers = [d.name for d in plant.devices if d.kind is DeviceKind.BREAKER]
    for opened in [frozenset(), frozenset(breakers), *(frozenset({name}) for name in breakers)]:
        measured = np.array(case.sensed.measured(opened)[0])
        assert len(measured) == len(case.senses)
        assert not np.isnan(measured).any()
        assert (measured >= 0).all()


def test_an_open_line_end_carries_nothing_and_the_other_feeds_alone(plant: Plant) -> None:
    """L2 and both ways to Alder open: L1 hangs at Birch, 8 + 0.7·12 ohm to the fault, zero sequence 8 + 0.7·36."""
    open_end = frozenset(d.name for d in plant.devices if d.kind is DeviceKind.BREAKER and d.station == "Alder")
    network = network_of(plant)
    far = next(d.name for d in plant.at_section["L1"] if d.station == "Alder")
    for kind, ohms in ((FaultType.LLL, 16.4), (FaultType.LG, 2 * 16.4 + 33.2)):
        solution = network.at(ShuntFault(Location("L1", 0.3), kind)).solve(open_end)
        assert solution.fed
        assert abs(solution.fault[1]) == pytest.approx(PHASE / ohms)
        assert solution.current(far, "L1") == pytest.approx((0, 0, 0), abs=1e-9)
        assert np.isfinite(figures(plant, solution)).all()


@pytest.mark.parametrize("group", ["Yy0", "YNy0", "Yd1", "Dy11"])
def test_a_transformer_without_an_earth_in_the_loop_of_the_fault(group: str) -> None:
    """One phase to earth on the side that is not earthed: no current, and that phase at earth."""
    plant = through(group)
    solution = network_of(plant).at(ShuntFault(Location("Brook.B1"), FaultType.LG)).solve()
    assert solution.fed
    assert solution.fault == (0, 0, 0)
    assert abs(sum(solution.voltage("Brook.B1"))) == pytest.approx(0, abs=1e-6)
    assert abs(solution.voltage("Brook.B1")[1]) == pytest.approx(33e3 / 3**0.5)
    assert np.isfinite(figures(plant, solution)).all()


def test_an_earthed_star_behind_a_delta_feeds_an_earth_fault() -> None:
    """Dyn11: the delta closes the zero sequence; 2·(8·0.09 + x) + x ohm at 33 kV, x = 0.1·33²/40."""
    plant = through("Dyn11")
    solution = network_of(plant).at(ShuntFault(Location("Brook.B1"), FaultType.LG)).solve()
    x = 0.1 * 33**2 / 40
    assert abs(solution.fault[1]) == pytest.approx(33e3 / 3**0.5 / (2 * (8 * 0.09 + x) + x))
    at_110 = next(d.name for d in plant.at_section["T1"] if d.station == "Birch")
    assert abs(solution.current(at_110, "T1")[0]) == pytest.approx(0, abs=1e-9)
