"""Settings chosen by rule: values worked out from the plant, reasons, overrides, what is missing."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from schemesim.errors import InputError
from schemesim.plant.layouts import Bay, breaker_and_a_half, feeder, generator, line, single_bus, transformer
from schemesim.plant.model import Dispatch, Location, PlantBuilder
from schemesim.plant.net_case import ShuntFault
from schemesim.plant.net_data import TransformerImpedance
from schemesim.plant.net_faults import network_of
from schemesim.plant.terminals import Terminal
from schemesim.scheme.conditions import OutOfZone, Undervoltage
from schemesim.scheme.dress import dress
from schemesim.scheme.model import Scheme, Sense
from schemesim.scheme.phasor_distance import Distance, Shape
from schemesim.scheme.phasor_elements import Biased, Overcurrent, Voltage
from schemesim.scheme.phasor_quantities import Quantities
from schemesim.scheme.policy import LocalBackup, duplicate_chain, single_set
from schemesim.scheme.settings import Choice, Setting, Settings
from schemesim.scheme.settings_rules import SettingRules, settings_for
from tests.rules.hand import sense
from tests.rules.small import chain
from tests.unit.electrical_plants import KV, two_ends, with_impedances

PLANT = with_impedances(chain())
SCHEME = dress(PLANT, duplicate_chain())
Z_L1 = 10 + 40j
NATURAL = 132e3 / (math.sqrt(3) * 380)
"""Natural load at 132 kV, A."""


@pytest.fixture(scope="module")
def settings() -> Settings:
    return settings_for(PLANT, SCHEME)


def reason(settings: Settings, block: str, what: str) -> str:
    (choice,) = [c for c in settings.of[block].choices if c.what == what]
    return choice.reason


def test_every_block_that_measures_has_a_setting_with_a_reason(settings: Settings) -> None:
    measuring = {b.name for b in SCHEME.blocks if isinstance(b, Sense) and "no fault" not in b.name}
    assert set(settings.of) == measuring
    assert all(s.choices and all(c.reason for c in s.choices) for s in settings.items)


def test_reaches_are_shares_of_the_line(settings: Settings) -> None:
    for block, share in (("21-1", 0.8), ("21-2", 1.2), ("21-3", 2.2), ("21-1, beyond its reach", 0.8 * 1.3)):
        element = settings.of[f"Alder/L1/1 {block}"].element
        assert isinstance(element, Distance)
        assert element.reach_ohm == pytest.approx(share * Z_L1, rel=1e-9)
        assert element.k0 == pytest.approx((30 + 120j - Z_L1) / (3 * Z_L1))
        assert element.vt == "Alder.L1.VT"
    assert "0.8 of L1, 41.2 ohm" in reason(settings, "Alder/L1/1 21-1", "reach_ohm")


def test_a_feeder_picks_up_between_load_and_the_smallest_fault(settings: Settings) -> None:
    """30 MW at 132 kV are 131 A; 1.3 times that."""
    element = settings.of["Birch/F2/1 50"].element
    assert isinstance(element, Overcurrent)
    assert element.pick_up_a == pytest.approx(1.3 * 30e3 / (math.sqrt(3) * 132))
    assert "30 MW = 131 A" in reason(settings, "Birch/F2/1 50", "pick_up_a")


def test_the_smallest_fault_goes_before_the_load() -> None:
    """With 2000 A of load 1.3 times that is above the smallest fault: half of that instead. It is less in "low"."""
    low = replace(PLANT, dispatches=(Dispatch(name="low", out=frozenset({"G3.unit"})),))
    scheme = dress(low, duplicate_chain())
    found = settings_for(low, scheme, max_load_a={"F2": 2000.0})
    element = found.of["Birch/F2/1 50"].element
    assert isinstance(element, Overcurrent)
    both, one = [132e3 / math.sqrt(3) * math.sqrt(3) / 2 / abs(z) for z in ((20j + Z_L1) / 2, 20j + Z_L1)]
    assert element.pick_up_a == pytest.approx(0.5 * one, rel=1e-6)
    assert reason(found, "Birch/F2/1 50", "pick_up_a").endswith("F2, low (1.3 times load is more)")
    only_all = settings_for(low, scheme, max_load_a={"F2": 2000.0}, dispatches=(None,)).of["Birch/F2/1 50"].element
    assert isinstance(only_all, Overcurrent)
    assert only_all.pick_up_a == pytest.approx(0.5 * both, rel=1e-6)


def test_differentials_and_detectors_are_shares_of_load(settings: Settings) -> None:
    bus = settings.of["Birch/Birch.B1/1 87B sees Birch.L1.CTc"].element
    assert isinstance(bus, Biased)
    assert bus.pick_up_a == pytest.approx(0.3 * 2 * NATURAL)
    assert {t.ct for t in bus.terminals} == {"Birch.F2.CTc", "Birch.L1.CTc", "Birch.L2.CTc"}
    unit = settings.of["Alder/G1/1 87G sees G1.unit"].element
    assert isinstance(unit, Biased)
    assert Terminal("G1.unit", "G1") in unit.terminals
    detector = settings.of["Birch.L1.CB/50BF current"].element
    assert isinstance(detector, Overcurrent)
    assert detector.pick_up_a == pytest.approx(0.2 * 2 * NATURAL)


def test_what_only_fails_near_by_counts_for_faults_near_by_only(settings: Settings) -> None:
    wide = settings.of["Birch/Birch.B1/1 87B, beyond its zone"]
    assert wide.only is not None
    assert not wide.counts("Birch.B1")
    assert wide.counts("L1")


def test_elements_that_look_at_the_bus_behind_reach_a_share_of_the_shortest_line() -> None:
    scheme = dress(PLANT, replace(duplicate_chain(), local_backup=LocalBackup()))
    found = settings_for(PLANT, scheme)
    element = found.of["Birch/L1/local 2 67 reverse"].element
    assert isinstance(element, Distance)
    assert element.reach_ohm == pytest.approx(0.1 * Z_L1)
    assert element.direction == "reverse"


def test_rules_may_be_changed() -> None:
    rules = SettingRules(shape=Shape.QUADRILATERAL, resistance_of_reach=0.5, drop_out=0.9, slope=0.5)
    found = settings_for(PLANT, SCHEME, rules=rules)
    zone, bus = found.of["Alder/L1/1 21-1"].element, found.of["Birch/Birch.B1/1 87B sees Birch.L1.CTc"].element
    assert isinstance(zone, Distance)
    assert isinstance(bus, Biased)
    assert (zone.shape, zone.drop_out, bus.slope) == (Shape.QUADRILATERAL, 0.9, 0.5)
    assert zone.resistance_ohm == pytest.approx(0.5 * 0.8 * abs(Z_L1))


def test_a_value_is_overridden_and_says_so(settings: Settings) -> None:
    mine = settings.changed("Alder/L1/1 21-1", reach_ohm=20j, drop_out=0.9)
    element = mine.of["Alder/L1/1 21-1"].element
    assert isinstance(element, Distance)
    assert (element.reach_ohm, element.drop_out) == (20j, 0.9)
    assert mine.of["Alder/L1/1 21-1"].choices[-2:] == (
        Choice("reach_ohm", 20j, "as given"), Choice("drop_out", 0.9, "as given")
    )  # fmt: skip
    assert settings.of["Alder/L1/1 21-1"].element != element
    other = settings.changed("Alder/L1/1 21-1", element=Voltage(vt="x", setting_v=1.0))
    assert isinstance(other.of["Alder/L1/1 21-1"].element, Voltage)


def test_mistakes_in_overrides(settings: Settings) -> None:
    with pytest.raises(InputError, match="did you mean 'Alder/L1/1 21-"):
        settings.changed("Alder/L1/1 21-", reach_ohm=20j)
    with pytest.raises(InputError, match="reach_ohm"):
        settings.changed("Alder/L1/1 21-1", reach=20j)
    with pytest.raises(InputError, match="over zero"):
        settings.changed("Birch/F2/1 50", pick_up_a=-5.0)
    item = settings.items[0]
    with pytest.raises(InputError, match="one setting of each block"):
        Settings((item, item))


def test_the_table_prints_every_choice(settings: Settings) -> None:
    table = settings.table()
    assert list(table.columns) == ["block", "element", "what", "value", "reason"]
    assert len(table) == sum(len(s.choices) for s in settings.items)
    assert "<table" in settings._repr_html_()
    kept = list(table["value"])
    assert kept == [c.value for s in settings.items for c in s.choices]
    assert {float, complex} <= {type(value) for value in kept}


def test_undervoltage_and_what_lies_out_of_a_zone() -> None:
    plant = two_ends()
    senses = (sense("27", Undervoltage("S", 50.0)), sense("out", OutOfZone(frozenset({"L1"}), "L1a.CT")))
    found = settings_for(plant, Scheme((), senses))
    low = found.of["27"].element
    assert isinstance(low, Voltage)
    assert low.setting_v == pytest.approx(0.7 * KV * 1e3)
    assert not found.of["out"].counts("L1")
    assert found.of["out"].counts("L2")


def test_a_vt_that_is_not_there_is_told_for_every_element() -> None:
    bare = replace(PLANT, vts=())
    with pytest.raises(InputError, match="voltage transformer") as caught:
        settings_for(bare, SCHEME)
    assert len(caught.value.problems) == sum("21" in s.name or "51" in s.name for s in SCHEME.blocks
                                             if isinstance(s, Sense))  # fmt: skip


def test_a_transformer_backup_looks_through_it() -> None:
    b = PlantBuilder()
    generator(b, "G1", station="Alder")
    transformer(b, "T1", station="Alder", length=40.0)
    line(b, "L1", 100.0)
    generator(b, "G2", station="Birch")
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("T1", "T1")])
    single_bus(b, "Alder33", [Bay("T1", "T1", at=1.0), Bay("L1", "L1")])
    single_bus(b, "Birch", [Bay("L1", "L1", at=1.0), Bay("G2", "G2")])
    plant = with_impedances(b.build())
    z = TransformerImpedance(mva=100.0, kv=(132.0, 132.0), r_pu=(0.0,), x_pu=(0.1,), group="YNyn0")
    plant = replace(
        plant, sections=tuple(replace(s, impedance=z) if s.name == "T1" else s for s in plant.sections)
    )
    scheme = dress(plant, single_set())
    found = settings_for(plant, scheme)
    element = found.of["Alder/T1/timed 1 51"].element
    assert isinstance(element, Distance)
    assert element.reach_ohm == pytest.approx(1.1j * 0.1 * 132**2 / 100)
    assert isinstance(found.of["Alder/T1/1 87T sees Alder.T1.CTb"].element, Biased)


def test_settings_stand_by_the_names_of_their_blocks() -> None:
    element = Overcurrent(terminals=(Terminal("CT", "L"),), pick_up_a=1.0)
    assert [s.block for s in Settings((Setting("b", element), Setting("a", element))).items] == ["a", "b"]


def test_a_feeder_between_two_breakers_measures_the_sum_of_its_cts() -> None:
    """Breaker and a half: a fault on bus 1 draws current through both CTs past the feeder; one on it, into both."""
    b = PlantBuilder()
    for unit in ("G1", "G2"):
        generator(b, unit, station="Alder")
    feeder(b, "F1", station="Alder", load_mw=30.0)
    breaker_and_a_half(b, "Alder", [Bay("F1", "F1"), Bay("G1", "G1"), Bay("G2", "G2")])
    plant = with_impedances(b.build())
    element = settings_for(plant, dress(plant, single_set())).of["Alder/F1/1 50"].element
    assert isinstance(element, Overcurrent)
    assert len(element.terminals) == 2
    network = network_of(plant)
    seen = {}
    for place in ("Alder.B1", "F1"):
        solved = network.at(ShuntFault(Location(place))).solve(frozenset())
        q = Quantities(plant, solved, network.prefault())
        single = max(replace(element, terminals=(t,)).multiple(q) for t in element.terminals)
        seen[place] = single, element.multiple(q)
    assert seen["Alder.B1"][0] > 1
    assert seen["Alder.B1"][1] == pytest.approx(0.0, abs=1e-6)
    assert seen["F1"][1] >= seen["F1"][0] > 1
