"""The coverage audit, worked out by hand for every place a CT can stand.

The plant, unless a test says otherwise:

    G1 - [Alder bus B1] - L1 - [Birch bus B1] - G2
                |
                F1 (load)

G1 and G2 are generators with a trip. At Birch and in the other bays at Alder the CTs stand on
both sides; at Alder.L1 they stand where the test puts them. Isolation zones end at breakers:
the conductor ``b`` between bus-side CT and breaker belongs to the bus, ``c`` to the line.

    bus  fault needs   Alder.G1.CB, Alder.L1.CB (the load's breaker Alder.F1.CB is intended, not needed)
    line fault needs   Alder.L1.CB, Birch.L1.CB
    bus  zone trips    Alder.G1.CB, Alder.L1.CB, Alder.F1.CB
    line zone trips    Alder.L1.CB, Birch.L1.CB
"""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.errors import InputError
from schemesim.plant.coverage import CoverageAudit, coverage_audit, default_objects
from schemesim.plant.layouts import (
    Bay,
    CtPlacement,
    breaker_and_a_half,
    double_bus,
    feeder,
    generator,
    infeed,
    line,
    ring,
    single_bus,
    transformer,
)
from schemesim.plant.model import Device, DeviceKind, Dispatch, Plant, PlantBuilder, Section, SectionKind, Source
from schemesim.plant.terminals import ProtectedObject, protected_object

BUS = {"Alder.G1.CB", "Alder.L1.CB", "Alder.F1.CB"}
LINE = {"Alder.L1.CB", "Birch.L1.CB"}


def plant_with(ct: CtPlacement | None, *, breaker: bool = True) -> Plant:
    b = PlantBuilder()
    generator(b, "G1", station="Alder")
    generator(b, "G2", station="Birch")
    feeder(b, "F1", 25.0, station="Alder")
    line(b, "L1", 40.0)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1", ct=ct, breaker=breaker), Bay("F1", "F1")])
    single_bus(b, "Birch", [Bay("G2", "G2"), Bay("L1", "L1", at=1.0)])
    b.add(Dispatch(name="G1 out", out=frozenset({"G1.unit"})))
    return b.build()


def terminals(plant: Plant, element: str) -> dict[str, str]:
    return {t.ct: t.inner for t in protected_object(plant, element).terminals}


@pytest.mark.parametrize(
    ("ct", "b", "c"),
    [
        (CtPlacement.BOTH, "Alder.L1.b", "Alder.L1.c"),
        (CtPlacement.DEAD_TANK, "Alder.L1.tank_b", "Alder.L1.tank_c"),
    ],
)
def test_cts_on_both_sides(ct: CtPlacement, b: str, c: str) -> None:
    """Each zone reaches to the CT beyond the breaker: b and c lie in both, both trip, nothing is missing."""
    plant = plant_with(ct)
    assert terminals(plant, "L1") == {"Alder.L1.CTb": b, "Birch.L1.CTb": "Birch.L1.b"}
    assert terminals(plant, "Alder.B1")["Alder.L1.CTc"] == c
    audit = coverage_audit(plant)
    for section, own, needed, needless in (
        (b, "Alder.B1", BUS - {"Alder.F1.CB"}, {"Birch.L1.CB"}),
        (c, "L1", LINE, {"Alder.G1.CB", "Alder.F1.CB"}),
    ):
        row = audit[section]
        assert row.isolation_zone == own
        assert row.protected_zones == ("Alder.B1", "L1")
        assert row.overlap
        assert not row.dead_zone
        assert row.needed == needed
        assert row.tripped == BUS | LINE
        assert row.cross_trips == frozenset()
        assert row.needless == needless
    assert not (audit.gaps + audit.dead_zones)
    assert audit.blind == audit.untripped == ()
    assert audit.merged == {}


def test_sections_in_one_zone_only_trip_their_own_border() -> None:
    audit = coverage_audit(plant_with(CtPlacement.BOTH))
    bus, mid, unit = audit["Alder.B1"], audit["L1"], audit["G1"]
    assert (bus.protected_zones, mid.protected_zones, unit.protected_zones) == (("Alder.B1",), ("L1",), ("G1",))
    assert bus.tripped == BUS
    assert bus.needed == BUS - {"Alder.F1.CB"}
    assert mid.tripped == mid.needed == LINE
    assert unit.tripped == unit.needed == {"Alder.G1.CB", "G1.unit"}
    assert bus.needless == mid.needless == unit.needless == frozenset()
    # Overlaps are the two short conductors of each of the five breakers, and nothing else.
    bays = ("Alder.G1", "Alder.L1", "Alder.F1", "Birch.G2", "Birch.L1")
    assert {r.section for r in audit.overlaps} == {f"{bay}.{side}" for bay in bays for side in "bc"}


@pytest.mark.parametrize(
    ("ct", "section"),
    [(CtPlacement.CIRCUIT_SIDE, "Alder.L1.c"), (CtPlacement.ELEMENT_BUSHINGS, "Alder.L1.lead")],
)
def test_ct_on_the_circuit_side(ct: CtPlacement, section: str) -> None:
    """Between breaker and CT the bus protection sees the fault, and the far end goes on feeding it."""
    plant = plant_with(ct)
    assert terminals(plant, "L1") == {"Alder.L1.CTc": "L1", "Birch.L1.CTb": "Birch.L1.b"}
    assert terminals(plant, "Alder.B1")["Alder.L1.CTc"] == section
    audit = coverage_audit(plant)
    assert [r.section for r in audit.dead_zones] == [section]
    row = audit[section]
    assert (row.isolation_zone, row.protected_zones) == ("L1", ("Alder.B1",))
    assert row.needed == LINE
    assert row.tripped == BUS
    assert row.cross_trips == {"Birch.L1.CB"}
    assert row.needless == {"Alder.G1.CB", "Alder.F1.CB"}


def test_ct_on_the_bus_side() -> None:
    """Between CT and breaker the line protection sees the fault, and the bus goes on feeding it."""
    plant = plant_with(CtPlacement.BUS_SIDE)
    assert terminals(plant, "L1")["Alder.L1.CTb"] == "Alder.L1.b"
    assert terminals(plant, "Alder.B1")["Alder.L1.CTb"] == "Alder.B1"
    audit = coverage_audit(plant)
    assert [r.section for r in audit.dead_zones] == ["Alder.L1.b"]
    row = audit["Alder.L1.b"]
    assert (row.isolation_zone, row.protected_zones) == ("Alder.B1", ("L1",))
    assert row.needed == {"Alder.G1.CB", "Alder.L1.CB"}
    assert row.tripped == LINE
    assert row.cross_trips == {"Alder.G1.CB"}
    assert row.needless == {"Birch.L1.CB"}


def test_what_is_needed_follows_the_dispatch() -> None:
    """With G1 out nothing behind the bus feeds the dead zone: no cross-trip is left to give."""
    row = coverage_audit(plant_with(CtPlacement.BUS_SIDE), dispatch="G1 out")["Alder.L1.b"]
    assert row.needed == {"Alder.L1.CB"}
    assert not row.dead_zone


def test_bay_of_a_load_has_no_dead_zone() -> None:
    """CT on the circuit side of a radial load: the bus protection opens its breaker, nothing feeds from beyond."""
    b = PlantBuilder()
    generator(b, "G1")
    feeder(b, "F1", 25.0)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1", ct=CtPlacement.CIRCUIT_SIDE)])
    audit = coverage_audit(b.build())
    row = audit["Alder.F1.c"]
    assert (row.isolation_zone, row.protected_zones) == ("F1", ("Alder.B1",))
    assert row.needed == {"Alder.F1.CB"}
    assert row.tripped == {"Alder.F1.CB", "Alder.G1.CB"}
    assert row.cross_trips == frozenset()
    assert row.needless == {"Alder.G1.CB"}


def test_dead_zone_of_a_generator_needs_its_trip() -> None:
    """Lead between breaker and generator bushings: the bus protection cannot stop the unit."""
    b = PlantBuilder()
    generator(b, "G1")
    feeder(b, "F1", 25.0)
    single_bus(b, "Alder", [Bay("G1", "G1", ct=CtPlacement.ELEMENT_BUSHINGS), Bay("F1", "F1")])
    audit = coverage_audit(b.build())
    assert [r.section for r in audit.dead_zones] == ["Alder.G1.lead"]
    assert audit["Alder.G1.lead"].cross_trips == {"G1.unit"}
    assert audit["Alder.G1.lead"].needless == {"Alder.F1.CB"}


def test_absent_breaker_without_a_ct() -> None:
    """Bus and line are one isolation zone and one protected object, named by the bus."""
    plant = plant_with(None, breaker=False)
    audit = coverage_audit(plant)
    assert audit.merged == {"Alder.B1": ("Alder.B1", "L1")}
    assert {o.element for o in default_objects(plant)} == {"Alder.B1", "Birch.B1", "F1", "G1", "G2"}
    row = audit["L1"]
    assert (row.isolation_zone, row.protected_zones) == ("Alder.B1", ("Alder.B1",))
    assert row.needed == {"Alder.G1.CB", "Birch.L1.CB"}
    assert row.tripped == {"Alder.G1.CB", "Alder.F1.CB", "Birch.L1.CB"}
    assert not audit.gaps
    assert not audit.dead_zones


def test_absent_breaker_with_a_ct() -> None:
    """The CT tells bus and line apart; either must trip everything around both."""
    plant = plant_with(CtPlacement.CIRCUIT_SIDE, breaker=False)
    assert terminals(plant, "L1") == {"Alder.L1.CTc": "L1", "Birch.L1.CTb": "Birch.L1.b"}
    assert terminals(plant, "Alder.B1")["Alder.L1.CTc"] == "Alder.L1.c"
    audit = coverage_audit(plant)
    assert audit.merged == {"Alder.B1": ("Alder.B1", "L1")}
    around = {"Alder.G1.CB", "Alder.F1.CB", "Birch.L1.CB"}
    for section, zone in (("L1", "L1"), ("Alder.L1.c", "Alder.B1"), ("Alder.B1", "Alder.B1")):
        assert audit[section].protected_zones == (zone,)
        assert audit[section].tripped == around
        assert audit[section].needed == around - {"Alder.F1.CB"}
        assert not audit[section].dead_zone


def test_breaker_without_a_ct_is_blind() -> None:
    """S - B -[CB]- F, no CT at all: each zone ends at the breaker for want of anything better."""
    plant = Plant(
        sections=(Section(name="B", kind=SectionKind.BUS), Section(name="F", kind=SectionKind.FEEDER)),
        devices=(Device(name="CB", kind=DeviceKind.BREAKER, a="B", b="F"),),
        sources=(Source(name="S", section="B"),),
    )
    audit = coverage_audit(plant)
    assert audit.blind == ("CB",)
    assert audit.untripped == ("S",)
    assert audit["F"].protected_zones == ("F",)


def test_gap_where_nothing_is_asked_to_look() -> None:
    """Only the bus is protected: the line up to the bus zone's CTs is a gap, nothing trips, nothing to cross-trip."""
    plant = plant_with(CtPlacement.BOTH)
    audit = coverage_audit(plant, [protected_object(plant, "Alder.B1")])
    covered = {"Alder.B1"} | {f"Alder.{bay}.{side}" for bay in ("G1", "L1", "F1") for side in "bc"}
    assert {r.section for r in audit.gaps} == set(plant.section) - covered
    row = audit["L1"]
    assert row.gap
    assert row.needed == LINE
    assert row.tripped == frozenset()
    assert row.cross_trips == frozenset()
    # The conductor on the line's side of the breaker is seen by the bus alone now: a dead zone.
    assert audit["Alder.L1.c"].cross_trips == {"Birch.L1.CB"}


def test_object_of_something_that_is_not_there_is_refused() -> None:
    plant = plant_with(CtPlacement.BOTH)
    wrong = ProtectedObject("Alder.B9", (), frozenset({"Alder.B1", "L11"}), ())
    with pytest.raises(InputError) as caught:
        coverage_audit(plant, [wrong])
    assert [p.value for p in caught.value.problems] == ["Alder.B9", "L11"]


def coupled(ct: CtPlacement, selection: dict[str, int]) -> CoverageAudit:
    b = PlantBuilder()
    generator(b, "G1")
    generator(b, "G2")
    line(b, "L1", 40.0)
    infeed(b, "Grid", "L1")
    bays = [replace(bay, ct=CtPlacement.BOTH) for bay in (Bay("G1", "G1"), Bay("G2", "G2"), Bay("L1", "L1"))]
    double_bus(b, "Cedar", bays, selection=selection, ct=ct)
    return coverage_audit(b.build())


def test_coupler_with_cts_on_both_sides() -> None:
    audit = coupled(CtPlacement.BOTH, {"G1": 1, "G2": 2, "L1": 1})
    for section in ("Cedar.BC.b", "Cedar.BC.c"):
        assert audit[section].protected_zones == ("Cedar.B1", "Cedar.B2")
        assert audit[section].tripped == {"Cedar.G1.CB", "Cedar.G2.CB", "Cedar.L1.CB", "Cedar.BC.CB"}
    assert audit["Cedar.BC.b"].needless == {"Cedar.G2.CB"}
    assert audit["Cedar.BC.c"].needless == {"Cedar.G1.CB", "Cedar.L1.CB"}
    assert audit.dead_zones == ()


@pytest.mark.parametrize(
    ("selection", "cross", "needless"),
    [
        ({"G1": 1, "G2": 2, "L1": 1}, {"Cedar.G1.CB", "Cedar.L1.CB"}, {"Cedar.G2.CB"}),
        # L1 taken over to bus 2: it is now tripped needlessly instead of missing.
        ({"G1": 1, "G2": 2, "L1": 2}, {"Cedar.G1.CB"}, {"Cedar.G2.CB", "Cedar.L1.CB"}),
    ],
)
def test_coupler_with_one_ct(selection: dict[str, int], cross: set[str], needless: set[str]) -> None:
    """CT on the side of bus 1: between it and the breaker lies bus 1's zone, seen by bus 2's protection."""
    audit = coupled(CtPlacement.BUS_SIDE, selection)
    assert [r.section for r in audit.dead_zones] == ["Cedar.BC.b"]
    row = audit["Cedar.BC.b"]
    assert (row.isolation_zone, row.protected_zones) == ("Cedar.B1", ("Cedar.B2",))
    assert row.cross_trips == cross
    assert row.needless == needless


def test_buses_joined_by_a_closed_switch_are_one_object() -> None:
    b = PlantBuilder()
    generator(b, "G1")
    generator(b, "G2")
    double_bus(b, "Cedar", [Bay("G1", "G1"), Bay("G2", "G2")])
    b.add(Device(name="Cedar.G1.on-load", kind=DeviceKind.SWITCH, a="Cedar.B2", b="Cedar.G1.n"))
    plant = b.build()
    audit = coverage_audit(plant)
    assert audit.merged == {"Cedar.B1": ("Cedar.B1", "Cedar.B2")}
    assert [o.element for o in default_objects(plant)] == ["Cedar.B1", "G1", "G2"]
    assert audit["Cedar.B2"].protected_zones == ("Cedar.B1",)
    # The coupler now isolates nothing: it is on no border, nothing has to open it, and its CTs, with
    # the object on both sides of each, bound nothing.
    assert set(terminals(plant, "Cedar.B1")) == {"Cedar.G1.CTc", "Cedar.G2.CTc"}
    assert audit["Cedar.BC.b"].protected_zones == audit["Cedar.BC.c"].protected_zones == ("Cedar.B1",)
    assert not audit.gaps
    assert audit["Cedar.B2"].needed == audit["Cedar.B2"].tripped == {"Cedar.G1.CB", "Cedar.G2.CB"}


def meshed() -> PlantBuilder:
    b = PlantBuilder()
    for i in (1, 2, 3):
        line(b, f"L{i}", 40.0)
        infeed(b, f"Grid {i}", f"L{i}")
    return b


def test_ring() -> None:
    """Breakers 1 L1-L2, 2 L2-L3, 3 L3-L1. One CT, on the side of the bay a breaker is numbered after.

    Breaker 1: CT on L1's side; the conductor b1 between them is in L1's isolation zone and in L2's
    protected zone. L2 trips 1 and 2; L1 needs 1 and 3.
    """
    b = meshed()
    ring(b, "Dale", [Bay("L1", "L1"), Bay("L2", "L2"), Bay("L3", "L3")], ct=CtPlacement.BUS_SIDE)
    plant = b.build()
    assert terminals(plant, "L2") == {"Dale.CTb1": "Dale.b1", "Dale.CTb2": "Dale.L2.J"}
    audit = coverage_audit(plant)
    assert [r.section for r in audit.dead_zones] == ["Dale.b1", "Dale.b2", "Dale.b3"]
    row = audit["Dale.b1"]
    assert (row.isolation_zone, row.protected_zones) == ("L1", ("L2",))
    assert row.needed == {"Dale.CB1", "Dale.CB3"}
    assert row.tripped == {"Dale.CB1", "Dale.CB2"}
    assert row.cross_trips == {"Dale.CB3"}
    assert row.needless == {"Dale.CB2"}
    assert audit["Dale.L1.J"].protected_zones == ("L1",)


def test_ring_with_cts_on_both_sides_has_no_dead_zone() -> None:
    b = meshed()
    ring(b, "Dale", [Bay("L1", "L1"), Bay("L2", "L2"), Bay("L3", "L3")])
    audit = coverage_audit(b.build())
    assert {r.section for r in audit.overlaps} == {f"Dale.{side}{i}" for side in "bc" for i in (1, 2, 3)}
    assert audit["Dale.b1"].protected_zones == ("L1", "L2")
    assert audit.dead_zones == audit.gaps == ()
    assert audit.blind == ()


def test_breaker_and_a_half() -> None:
    """D1: B1 -1- L1 -2- L2 -3- B2; D2: B1 -1- L3 -2- B2. CTs on the circuit side, which in the
    middle breaker is L2's.

    D1.c1 (breaker 1, L1's side) is in L1's isolation zone, in the bus B1's protected zone: B1 trips
    D1.CB1 and D2.CB1, L1 needs D1.CB1 and D1.CB2. D1.c2 is in L2's zone and L1 sees it: L1 trips 1
    and 2, L2 needs 2 and 3.
    """
    b = meshed()
    bays = [Bay("L1", "L1"), Bay("L2", "L2"), Bay("L3", "L3")]
    breaker_and_a_half(b, "Elm", bays, ct=CtPlacement.CIRCUIT_SIDE)
    plant = b.build()
    assert terminals(plant, "L1") == {"Elm.D1.CTc1": "Elm.L1.J", "Elm.D1.CTc2": "Elm.D1.c2"}
    audit = coverage_audit(plant)
    c1, c2 = audit["Elm.D1.c1"], audit["Elm.D1.c2"]
    assert (c1.isolation_zone, c1.protected_zones) == ("L1", ("Elm.B1",))
    assert c1.cross_trips == {"Elm.D1.CB2"}
    assert c1.needless == {"Elm.D2.CB1"}
    assert (c2.isolation_zone, c2.protected_zones) == ("L2", ("L1",))
    assert c2.cross_trips == {"Elm.D1.CB3"}
    assert c2.needless == {"Elm.D1.CB1"}
    assert [r.section for r in audit.dead_zones] == [
        "Elm.D1.c1",
        "Elm.D1.c2",
        "Elm.D1.c3",
        "Elm.D2.c1",
        "Elm.D2.c2",
    ]


def test_transformer_between_two_voltages_is_one_zone() -> None:
    """HV and LV breaker stand at two stations; the transformer's zone trips both."""
    b = PlantBuilder()
    transformer(b, "T1", station="Fir")
    generator(b, "G1")
    feeder(b, "F1", 10.0)
    single_bus(b, "Fir 230", [Bay("G1", "G1"), Bay("T1", "T1")])
    single_bus(b, "Fir 33", [Bay("T1", "T1", ct=CtPlacement.ELEMENT_BUSHINGS), Bay("F1", "F1")])
    audit = coverage_audit(b.build())
    assert audit["T1"].tripped == {"Fir 230.T1.CB", "Fir 33.T1.CB"}
    assert audit["T1"].needed == {"Fir 230.T1.CB"}
    # The lead on the LV side is seen by the LV bus only, and its HV breaker goes on feeding.
    assert audit["Fir 33.T1.lead"].cross_trips == {"Fir 230.T1.CB"}


def test_table_and_text() -> None:
    audit = coverage_audit(plant_with(CtPlacement.CIRCUIT_SIDE))
    table = audit.table().set_index("section")
    assert list(table.index) == [r.section for r in audit.rows] == sorted(plant_with(CtPlacement.CIRCUIT_SIDE).section)
    row = table.loc["Alder.L1.c"]
    assert row["needed"] == "Alder.L1.CB, Birch.L1.CB"
    assert row["cross_trips"] == "Birch.L1.CB"
    assert row["needless"] == "Alder.F1.CB, Alder.G1.CB"
    assert row["dead_zone"]
    assert not row["gap"]
    # 6 elements, two conductors in each of four bays, one at Alder.L1.
    assert repr(audit).splitlines() == [
        "Coverage audit of 15 sections: 0 in a gap, 8 in an overlap, 1 in a dead zone",
        "  dead zone  Alder.L1.c: seen by Alder.B1",
        "             cross-trip Birch.L1.CB",
        "             tripped needlessly Alder.F1.CB, Alder.G1.CB",
    ]
    assert audit._repr_html_().count("<tr") == 1 + len(audit.rows)
    with pytest.raises(InputError, match="no such section"):
        audit["no such section"]
