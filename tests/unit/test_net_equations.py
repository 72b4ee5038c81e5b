"""The network equations against brute force: random plants, faults and openings; Kirchhoff's laws; islands."""

from __future__ import annotations

import random
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from schemesim.errors import InputError
from schemesim.plant.layouts import Bay, breaker_and_a_half, generator, infeed, line, single_bus, transformer
from schemesim.plant.model import Location, Plant, PlantBuilder, SectionKind
from schemesim.plant.net_case import FaultType, Phasors, ShuntFault
from schemesim.plant.net_data import LineImpedance, SourceImpedance, TransformerImpedance
from schemesim.plant.net_faults import network_of
from schemesim.plant.net_solution import PlantSolution
from tests.unit.net_oracle import Oracle
from tests.unit.net_plants import opened, random_fault, random_openings, random_plant

SEEDS = st.integers(0, 2**32)


def everything(plant: Plant, solution: PlantSolution) -> NDArray[Any]:
    """Currents of all devices (a to b) and sources, then voltages of all sections with one node."""
    found: list[Phasors] = [solution.fault]
    found += [solution.current(d.name, d.b) for d in plant.devices]
    found += [solution.current(s.name, s.section) for s in plant.sources]
    return np.array(found)


def voltages(plant: Plant, solution: PlantSolution) -> NDArray[Any]:
    """Voltages of all sections, lines and transformers at each device."""
    found: list[Phasors] = []
    for s in plant.sections:
        if s.impedance is None:
            found.append(solution.voltage(s.name))
        else:
            found += [solution.voltage(s.name, d.name) for d in plant.at_section[s.name]]
    return np.array(found)


@given(SEEDS)
@settings(max_examples=25, deadline=None)
def test_every_current_and_voltage_is_that_of_brute_force(seed: int) -> None:
    rng = random.Random(seed)
    plant = random_plant(rng)
    network = network_of(plant)
    fault = random_fault(rng, plant)
    for _ in range(2):
        names = random_openings(rng, plant)
        solution = network.at(fault).solve(names)
        oracle = Oracle(plant, fault, names)
        turned = np.exp(1j * network.equations.elements.angle[network.at(fault).port.bus])
        scale = max(abs(oracle.driven).max(), 1.0)
        assert solution.fed == (oracle.sequences[1][1] is not None)
        for d in plant.devices:
            assert solution.current(d.name, d.b) == pytest.approx(oracle.current(d.name) * turned, abs=1e-8 * scale)
        for s in plant.sources:
            found = solution.current(s.name, s.section)
            assert found == pytest.approx(oracle.current(s.name) * turned, abs=1e-8 * scale)
        before = network.prefault(names)
        for x in plant.sections:
            if x.impedance is None and before.voltage(x.name)[1] != 0:
                change = np.array(solution.voltage(x.name)) - before.voltage(x.name)
                assert change[1:] == pytest.approx((oracle.change(x.name) * turned)[1:], abs=1e-8 * 1e3 * x.kv)


@given(SEEDS)
@settings(max_examples=40, deadline=None)
def test_low_rank_updates_equal_a_fresh_factorisation(seed: int) -> None:
    rng = random.Random(seed)
    plant = random_plant(rng)
    network = network_of(plant)
    fault = random_fault(rng, plant)
    for _ in range(3):
        names = random_openings(rng, plant)
        updated = network.at(fault).solve(names)
        afresh = network_of(opened(plant, names), "out").at(fault).solve()
        assert updated.fed == afresh.fed
        scale = max(abs(np.array(updated.fault)).max(), 1.0)
        # Where an opening parts the plant, each island of the fresh one has a frame of its own.
        frame = [x.fault[1] / abs(x.fault[1]) if x.fault[1] else 1.0 for x in (updated, afresh)]
        assert everything(plant, updated) / frame[0] == pytest.approx(
            everything(plant, afresh) / frame[1], abs=1e-9 * scale
        )
        near = 1e-9 * 110e3
        assert abs(voltages(plant, updated)) == pytest.approx(abs(voltages(plant, afresh)), abs=near)
        if not network.equations.elements.angle.any():
            assert voltages(plant, updated) == pytest.approx(voltages(plant, afresh), abs=near)


@given(SEEDS)
@settings(max_examples=40, deadline=None)
def test_kirchhoff_holds_at_every_section_and_round_every_line(seed: int) -> None:
    rng = random.Random(seed)
    plant = random_plant(rng)
    fault = random_fault(rng, plant)
    names = random_openings(rng, plant)
    solution = network_of(plant).at(fault).solve(names)
    scale = max(abs(np.array(solution.fault)).max(), 1.0)
    coupled = {name for c in plant.couplings for name in (c.a, c.b)}
    for s in plant.sections:
        if s.kind is SectionKind.TRANSFORMER:
            continue  # its neutral and delta windings carry the rest
        into = [solution.current(d.name, s.name) for d in plant.at_section[s.name]]
        into += [solution.current(x.name, x.section) for x in plant.sources if x.section == s.name]
        total = np.sum(np.array(into), axis=0) if into else np.zeros(3)
        here = solution.fault if fault.location.section == s.name else (0, 0, 0)
        assert total == pytest.approx(np.array(here), abs=1e-9 * scale), s.name
        if isinstance(s.impedance, LineImpedance) and s.name != fault.location.section:
            first, last = (next(d for d in plant.at_section[s.name] if d.b_at == x) for x in (0.0, 1.0))
            u = np.array(solution.voltage(s.name, first.name)) - solution.voltage(s.name, last.name)
            i = np.array(solution.current(first.name, s.name))
            dead = solution.voltage(s.name, first.name)[1] == 0 or solution.voltage(s.name, last.name)[1] == 0
            if not dead:
                assert u[1:] == pytest.approx(s.impedance.z1 * i[1:], abs=1e-9 * 110e3)
                if s.name not in coupled:
                    assert u[0] == pytest.approx((s.impedance.z0 or 0) * i[0], abs=1e-9 * 110e3)


@given(SEEDS)
@settings(max_examples=30, deadline=None)
def test_the_voltage_at_the_fault_is_what_its_type_says(seed: int) -> None:
    rng = random.Random(seed)
    plant = random_plant(rng)
    sections = [s.name for s in plant.sections if s.impedance is None]
    fault = ShuntFault(Location(rng.choice(sections)), rng.choice(tuple(FaultType)), rng.choice((0.0, 7.0)))
    solution = network_of(plant).at(fault).solve(random_openings(rng, plant))
    if not solution.fed:
        assert solution.fault == (0, 0, 0)
        return
    a = np.exp(2j * np.pi / 3)
    phases = np.array([[1, 1, 1], [1, a**2, a], [1, a, a**2]])
    u, i = phases @ solution.voltage(fault.location.section), phases @ solution.fault
    r, near = fault.resistance_ohm, 1e-8 * 110e3
    if fault.type is FaultType.LLL:
        assert u == pytest.approx(r * i, abs=near)
    elif fault.type is FaultType.LG:
        assert u[0] == pytest.approx(r * i[0], abs=near)
        assert i[1:] == pytest.approx(np.zeros(2), abs=1e-8 * max(abs(i[0]), 1))
    elif fault.type is FaultType.LL:
        assert u[1] - u[2] == pytest.approx(r * i[1], abs=near)
        assert i[0] == pytest.approx(0, abs=1e-8 * abs(i[1]))
    else:
        assert u[1] == pytest.approx(u[2], abs=near)
        assert u[1] == pytest.approx(r * (i[1] + i[2]), abs=near)


def test_what_is_not_at_hand_is_the_same(monkeypatch: pytest.MonkeyPatch) -> None:
    for seed in range(12):
        rng = random.Random(seed)
        plant = random_plant(rng)
        fault, names = random_fault(rng, plant), random_openings(rng, plant)
        near = network_of(plant).at(fault).solve(names)
        expected, volts = everything(plant, near), voltages(plant, near)
        with monkeypatch.context() as changed:
            changed.setattr("schemesim.plant.net_ports.MOST_TERMINALS", 0)
            far = network_of(plant).at(fault).solve(names)
            assert everything(plant, far) == pytest.approx(expected, abs=1e-9 * max(abs(expected).max(), 1.0))
            assert voltages(plant, far) == pytest.approx(volts, abs=1e-9 * 110e3)


def radial(z0: bool = True) -> Plant:
    """110 kV: a source of 8 ohm at Alder, a line of 12 ohm, a transformer YNd1 to 33 kV at Birch."""
    b = PlantBuilder()
    zero = {"r0_ohm": 0.0, "x0_ohm": 36.0} if z0 else {}
    line(b, "L1", 40, kv=110, impedance=LineImpedance(r_ohm=0, x_ohm=12, **zero))
    z = TransformerImpedance(mva=40, kv=(110, 33), r_pu=(0.0,), x_pu=(0.1,), group="Dyn11")
    transformer(b, "T1", station="Birch", impedance=z)
    generator(b, "G1", station="Alder", kv=110, impedance=SourceImpedance(r_ohm=0, x_ohm=8, r0_ohm=0, x0_ohm=8))
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1")], kv=110)
    single_bus(b, "Birch", [Bay("L1", "L1", 1.0), Bay("T1", "T1")], kv=110)
    single_bus(b, "Brook", [Bay("T1", "T1", 1.0)], kv=33)
    return b.build()


def test_a_part_without_a_source_has_no_current_and_no_voltage() -> None:
    network = network_of(radial())
    away = frozenset({"Alder.L1.CB"})
    for kind in FaultType:
        solution = network.at(ShuntFault(Location("Birch.B1"), kind)).solve(away)
        assert not solution.fed
        assert not everything(radial(), solution).any()
        assert solution.voltage("Birch.B1") == (0, 0, 0)
        assert abs(solution.voltage("Alder.B1")[1]) == pytest.approx(110e3 / 3**0.5)
    before = network.prefault(away)
    assert before.voltage("L1", "Alder.L1.VT") == (0, 0, 0)
    assert abs(before.voltage("Alder.B1")[1]) == pytest.approx(110e3 / 3**0.5)


def test_no_source_at_all() -> None:
    network = network_of(radial())
    solution = network.at(ShuntFault(Location("L1"), FaultType.LG)).solve(frozenset({"G1.unit"}))
    assert not solution.fed
    assert not everything(radial(), solution).any()
    assert not voltages(radial(), solution).any()


def test_an_earth_fault_where_nothing_is_earthed_displaces_the_neutral() -> None:
    """Beyond a breaker opened at the earthed source's side nothing is earthed; a second source there is not."""
    b = PlantBuilder()
    line(b, "L1", 40, kv=110, impedance=LineImpedance(r_ohm=0, x_ohm=12, r0_ohm=0, x0_ohm=36))
    infeed(b, "N", "Alder.B1", impedance=SourceImpedance(r_ohm=0, x_ohm=8, r0_ohm=0, x0_ohm=8))
    infeed(b, "M", "Birch.B1", impedance=SourceImpedance(r_ohm=0, x_ohm=8))
    single_bus(b, "Alder", [Bay("L1", "L1")], kv=110)
    single_bus(b, "Birch", [Bay("L1", "L1", 1.0)], kv=110)
    network = network_of(b.build())
    phase = 110e3 / 3**0.5
    solution = network.at(ShuntFault(Location("L1"), FaultType.LG)).solve(frozenset({"Alder.L1.CB"}))
    assert solution.fed
    assert solution.fault == (0, 0, 0)
    assert solution.voltage("Birch.B1") == pytest.approx((-phase, phase, 0))
    assert solution.voltage("Alder.B1") == pytest.approx((0, phase, 0))
    both = network.at(ShuntFault(Location("L1"), FaultType.LLG)).solve(frozenset({"Alder.L1.CB"}))
    assert both.voltage("Birch.B1")[0] == pytest.approx(phase / 2)  # phases b and c at earth: a at 1.5 times


def test_a_delta_star_transformer_turns_the_phases() -> None:
    """Dyn11 with a phase-to-phase fault behind it: two shares of one half and one of the whole (textbook 1-1-2)."""
    network = network_of(radial())
    solution = network.at(ShuntFault(Location("Brook.B1"), FaultType.LL)).solve()
    a = np.exp(2j * np.pi / 3)
    phases = np.array([[1, 1, 1], [1, a**2, a], [1, a, a**2]])
    high = np.abs(phases @ solution.current("Birch.T1.CTc", "T1")) * 110 / 33
    low = np.abs(phases @ solution.fault)
    assert low[0] == pytest.approx(0, abs=1e-6)
    assert sorted(high / low[1]) == pytest.approx([1 / 3**0.5, 1 / 3**0.5, 2 / 3**0.5])


def test_a_loop_of_devices_shares_as_equal_impedances() -> None:
    """Breaker and a half, two bays: seven devices each way round between them (worked by hand: equal halves)."""
    b = PlantBuilder()
    generator(b, "G1", station="Alder", kv=110, impedance=SourceImpedance(r_ohm=0, x_ohm=8))
    line(b, "L1", 40, kv=110, impedance=LineImpedance(r_ohm=0, x_ohm=12))
    line(b, "L2", 40, kv=110, impedance=LineImpedance(r_ohm=0, x_ohm=12))
    generator(b, "G2", station="Alder", kv=110, impedance=SourceImpedance(r_ohm=0, x_ohm=8))
    bays = [Bay("G1", "G1"), Bay("L1", "L1"), Bay("G2", "G2"), Bay("L2", "L2")]
    breaker_and_a_half(b, "Alder", bays, kv=110)
    network = network_of(b.build())
    solution = network.at(ShuntFault(Location("L1", 0.0))).solve()
    total = abs(solution.fault[1])
    middle = abs(solution.current("Alder.D1.CB2", "Alder.D1.c2")[1])
    outer = abs(solution.current("Alder.D1.CB3", "Alder.D1.c3")[1])
    assert middle + outer == pytest.approx(total)
    # Paths of three devices (CT, breaker, CT) each: G1 to L1 straight over D1.CB2, or over D1.CB1 and B1 to the second
    # diameter and back by B2; G2 the other way. Mesh equation with unit impedances for each path of three:
    # ring CB1(x) CB2(y) CB3(z) | CB1'(x') CB2'(y') CB3'(z'), each source 1/2: y + x = 1/2, x = x', y' = 1/2 + x'...
    x = np.linalg.solve([[1, 1, 0], [0, 1, 1], [2, -2, 2]], [0.5, 1.0, -1.0])
    assert middle / total == pytest.approx(x[1])


@pytest.mark.parametrize(
    ("fault", "said"),
    [
        (ShuntFault(Location("Birch.B2")), "did you mean 'Birch.B1'"),
        (ShuntFault(Location("L1", 1.5)), "a number from 0 to 1"),
        (ShuntFault(Location("L1"), FaultType.LLL, -1.0), "zero or more"),
        (ShuntFault(Location("L1"), FaultType.LG), "zero-sequence impedance of every line"),
    ],
)
def test_a_fault_that_cannot_be_is_refused(fault: ShuntFault, said: str) -> None:
    with pytest.raises(InputError, match=said):
        network_of(radial(z0=False)).at(fault)


def test_what_has_no_impedance_is_named_all_at_once() -> None:
    b = PlantBuilder()
    line(b, "L1", 40, kv=110)
    line(b, "L2", 40, kv=110)
    infeed(b, "N", "Alder.B1")
    single_bus(b, "Alder", [Bay("L1", "L1"), Bay("L2", "L2")], kv=110)
    with pytest.raises(InputError) as error:
        network_of(b.build())
    assert [p.subject for p in error.value.problems] == ["impedance of line 'L1'", "impedance of line 'L2'"]


def test_unknown_names_and_sides_are_refused() -> None:
    network = network_of(radial())
    faulted = network.at(ShuntFault(Location("L1")))
    with pytest.raises(InputError, match=r"did you mean 'Alder\.L1\.CB'"):
        faulted.solve(frozenset({"Alder.L1.BC"}))
    with pytest.raises(InputError, match="one of Alder"):
        faulted.solve().current("Alder.L1.CB", "L1")
    with pytest.raises(InputError, match="a device or VT there"):
        faulted.solve().voltage("L1")
    with pytest.raises(InputError, match="over zero"):
        network_of(radial(), voltage_factor=0)
