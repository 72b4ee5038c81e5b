"""Station layouts, each held against the devices it should have, counted and named by hand."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import pytest

from schemesim.errors import InputError
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
    sectionalised_bus,
    single_bus,
    transformer,
)
from schemesim.plant.model import DeviceKind, Plant, PlantBuilder, SectionKind
from schemesim.plant.zones import isolation_zones

FOUR = (Bay("G1", "G1"), Bay("L1", "L1"), Bay("L2", "L2"), Bay("F1", "F1"))


def circuits() -> PlantBuilder:
    b = PlantBuilder()
    generator(b, "G1", station="Alder")
    line(b, "L1", 40.0)
    line(b, "L2", 60.0)
    feeder(b, "F1", 25.0, station="Alder")
    return b


def ends(plant: Plant, device: str) -> tuple[str, str]:
    d = plant.device[device]
    return d.a, d.b


def of_kind(plant: Plant, kind: DeviceKind) -> list[str]:
    return [d.name for d in plant.devices if d.kind is kind]


def test_three_breakers_in_few_lines() -> None:
    b = PlantBuilder()
    generator(b, "G1")
    line(b, "L1", 40.0, kv=230)
    feeder(b, "F1", 25.0)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1"), Bay("F1", "F1")], kv=230)
    plant = b.build()
    assert plant.breakers == ("Alder.F1.CB", "Alder.G1.CB", "Alder.L1.CB")
    assert plant.section["Alder.B1"].kv == plant.section["L1"].kv == 230
    assert plant.section["F1"].load_mw == 25.0


# bus ... circuit, device by device: (name, one end, other end).
CHAINS: Mapping[CtPlacement, tuple[tuple[str, str, str], ...]] = {
    CtPlacement.BOTH: (
        ("Alder.L1.CTb", "Alder.B1", "Alder.L1.b"),
        ("Alder.L1.CB", "Alder.L1.b", "Alder.L1.c"),
        ("Alder.L1.CTc", "Alder.L1.c", "L1"),
    ),
    CtPlacement.BUS_SIDE: (
        ("Alder.L1.CTb", "Alder.B1", "Alder.L1.b"),
        ("Alder.L1.CB", "Alder.L1.b", "L1"),
    ),
    CtPlacement.CIRCUIT_SIDE: (
        ("Alder.L1.CB", "Alder.B1", "Alder.L1.c"),
        ("Alder.L1.CTc", "Alder.L1.c", "L1"),
    ),
    CtPlacement.DEAD_TANK: (
        ("Alder.L1.CTb", "Alder.B1", "Alder.L1.tank_b"),
        ("Alder.L1.CB", "Alder.L1.tank_b", "Alder.L1.tank_c"),
        ("Alder.L1.CTc", "Alder.L1.tank_c", "L1"),
    ),
    CtPlacement.ELEMENT_BUSHINGS: (
        ("Alder.L1.CB", "Alder.B1", "Alder.L1.lead"),
        ("Alder.L1.CTc", "Alder.L1.lead", "L1"),
    ),
}


def test_ct_placement_may_be_given_by_its_plain_name() -> None:
    b = circuits()
    single_bus(b, "Alder", [Bay("L1", "L1", ct=CtPlacement("dead_tank"))], ct="both")  # type: ignore[arg-type]
    single_bus(b, "Birch", [Bay("L1", "L1", at=1.0)], ct="element_bushings")  # type: ignore[arg-type]
    plant = b.build()
    assert {"Alder.L1.tank_b", "Alder.L1.tank_c", "Birch.L1.lead"} <= set(plant.section)


def test_every_ct_placement_is_tried() -> None:
    assert set(CHAINS) == set(CtPlacement)


@pytest.mark.parametrize("ct", list(CtPlacement))
@pytest.mark.parametrize("own", [False, True])
def test_single_bus_ct_placement(ct: CtPlacement, own: bool) -> None:
    """The placement of the station, or the same one given to the bay alone."""
    b = circuits()
    if own:
        other = CtPlacement.BUS_SIDE if ct is CtPlacement.CIRCUIT_SIDE else CtPlacement.CIRCUIT_SIDE
        single_bus(b, "Alder", [Bay("L1", "L1", at=1.0, ct=ct)], ct=other)
    else:
        single_bus(b, "Alder", [Bay("L1", "L1", at=1.0)], ct=ct)
    plant = b.build()
    assert sorted((d.name, d.a, d.b) for d in plant.devices) == sorted(CHAINS[ct])
    last = plant.device[CHAINS[ct][-1][0]]
    assert (last.a_at, last.b_at) == (0.0, 1.0)  # attached at the far end of the line
    assert all(d.a_at == d.b_at == 0.0 for d in plant.devices if d.name != last.name)


def test_everything_of_a_station_carries_its_name_cores_and_windings() -> None:
    b = circuits()
    single_bus(b, "Alder", FOUR, kv=132)
    plant = b.build()
    assert {d.station for d in plant.devices} == {"Alder"}
    own = [s for s in plant.sections if s.name.startswith("Alder.")]
    assert len(own) == 1 + 2 * 4  # the bus, two short conductors a bay
    assert {(s.station, s.kv) for s in own} == {("Alder", 132)}
    assert {d.cores for d in plant.devices if d.kind is DeviceKind.CT} == {("1", "2", "3", "4")}
    assert {(v.name, v.section, v.windings) for v in plant.vts} == {
        ("Alder.B1.VT", "Alder.B1", ("1", "2")),
        ("Alder.G1.VT", "G1", ("1", "2")),
        ("Alder.L1.VT", "L1", ("1", "2")),
        ("Alder.L2.VT", "L2", ("1", "2")),
        ("Alder.F1.VT", "F1", ("1", "2")),
    }


def test_cores_and_windings_are_the_users() -> None:
    b = circuits()
    single_bus(b, "Alder", FOUR, cores=("P1", "P2"), windings=())
    plant = b.build()
    assert {d.cores for d in plant.devices if d.kind is DeviceKind.CT} == {("P1", "P2")}
    assert plant.vts == ()


def test_a_line_has_a_vt_at_each_end() -> None:
    b = circuits()
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1")])
    single_bus(b, "Birch", [Bay("L1", "L1", at=1.0)])
    assert {v.name for v in b.build().vts if v.section == "L1"} == {"Alder.L1.VT", "Birch.L1.VT"}


def test_bay_without_breaker() -> None:
    b = circuits()
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1", at=1.0, breaker=False)])
    plant = b.build()
    assert plant.breakers == ("Alder.G1.CB",)
    d = plant.device["Alder.L1.SW"]
    assert (d.kind, d.a, d.b, d.b_at, d.closed) == (DeviceKind.SWITCH, "Alder.B1", "L1", 1.0, True)
    assert [n for n in plant.device if n.startswith("Alder.L1")] == ["Alder.L1.SW"]


@pytest.mark.parametrize(
    ("ct", "chain"),
    [
        (
            CtPlacement.BUS_SIDE,
            {"Alder.L1.CTb": ("Alder.B1", "Alder.L1.b"), "Alder.L1.SW": ("Alder.L1.b", "L1")},
        ),
        (
            CtPlacement.CIRCUIT_SIDE,
            {"Alder.L1.SW": ("Alder.B1", "Alder.L1.c"), "Alder.L1.CTc": ("Alder.L1.c", "L1")},
        ),
        (
            CtPlacement.ELEMENT_BUSHINGS,
            {"Alder.L1.SW": ("Alder.B1", "Alder.L1.lead"), "Alder.L1.CTc": ("Alder.L1.lead", "L1")},
        ),
    ],
)
def test_bay_without_breaker_may_have_a_ct_on_one_side(
    ct: CtPlacement, chain: Mapping[str, tuple[str, str]]
) -> None:
    b = circuits()
    single_bus(b, "Alder", [Bay("L1", "L1", at=1.0, ct=ct, breaker=False)])
    plant = b.build()
    assert {n: ends(plant, n) for n in plant.device} == chain
    assert [d.b_at for d in plant.devices if d.b == "L1"] == [1.0]


def test_sectionalised_bus_takes_turns_and_follows_the_selection() -> None:
    b = circuits()
    sectionalised_bus(b, "Alder", FOUR, sections=3, selection={"L2": 2}, ct=CtPlacement.CIRCUIT_SIDE)
    plant = b.build()
    # Turns would be G1 1, L1 2, L2 3, F1 1 again; L2 is put on 2.
    assert {bay: ends(plant, f"Alder.{bay}.CB")[0] for bay in ("G1", "L1", "L2", "F1")} == {
        "G1": "Alder.B1",
        "L1": "Alder.B2",
        "L2": "Alder.B2",
        "F1": "Alder.B1",
    }
    assert ends(plant, "Alder.S1.CB") == ("Alder.B1", "Alder.S1.c")
    assert ends(plant, "Alder.S1.CTc") == ("Alder.S1.c", "Alder.B2")
    assert ends(plant, "Alder.S2.CTc") == ("Alder.S2.c", "Alder.B3")
    assert len(plant.breakers) == 4 + 2
    assert {s.name for s in plant.sections if s.kind is SectionKind.BUS} == {
        "Alder.B1",
        "Alder.B2",
        "Alder.B3",
    }


@pytest.mark.parametrize(
    ("selection", "closed"),
    [
        (None, {"G1": 1, "L1": 2, "L2": 1, "F1": 2}),
        ({"L1": 1, "L2": 2}, {"G1": 1, "L1": 1, "L2": 2, "F1": 2}),
    ],
)
def test_double_bus_selectors(selection: dict[str, int] | None, closed: dict[str, int]) -> None:
    b = circuits()
    double_bus(b, "Alder", FOUR, selection=selection)
    plant = b.build()
    for bay, bus in closed.items():
        for i in (1, 2):
            d = plant.device[f"Alder.{bay}.DS{i}"]
            assert (d.kind, d.a, d.b) == (DeviceKind.SWITCH, f"Alder.B{i}", f"Alder.{bay}.n")
            assert d.closed is (i == bus)
        assert ends(plant, f"Alder.{bay}.CTb") == (f"Alder.{bay}.n", f"Alder.{bay}.b")
        assert isolation_zones(plant).of[f"Alder.{bay}.n"] == f"Alder.B{bus}"
    assert ends(plant, "Alder.BC.CTb") == ("Alder.B1", "Alder.BC.b")
    assert ends(plant, "Alder.BC.CB") == ("Alder.BC.b", "Alder.BC.c")
    assert ends(plant, "Alder.BC.CTc") == ("Alder.BC.c", "Alder.B2")
    assert len(plant.breakers) == 5
    assert plant.device["Alder.BC.CB"].closed


def test_double_bus_with_open_coupler() -> None:
    b = circuits()
    double_bus(b, "Alder", FOUR, coupler_closed=False)
    plant = b.build()
    assert [d.name for d in plant.devices if d.kind is DeviceKind.BREAKER and not d.closed] == ["Alder.BC.CB"]


def test_breakers_between_buses_keep_their_cts_when_those_of_the_bays_are_in_bushings() -> None:
    b = circuits()
    double_bus(b, "Alder", FOUR, ct=CtPlacement.ELEMENT_BUSHINGS)
    plant = b.build()
    assert ends(plant, "Alder.G1.CTc") == ("Alder.G1.lead", "G1")
    assert {"Alder.BC.CTb", "Alder.BC.CTc"} <= set(plant.device)


def test_ring() -> None:
    """Four bays: breakers 1 G1-L1, 2 L1-L2, 3 L2-F1, 4 F1-G1, a CT on both sides of each."""
    b = circuits()
    ring(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1", at=1.0), Bay("L2", "L2"), Bay("F1", "F1")])
    plant = b.build()
    assert plant.breakers == ("Alder.CB1", "Alder.CB2", "Alder.CB3", "Alder.CB4")
    order = ("G1", "L1", "L2", "F1")
    for i, (here, after) in enumerate(zip(order, order[1:] + order[:1], strict=True), start=1):
        assert ends(plant, f"Alder.CTb{i}") == (f"Alder.{here}.J", f"Alder.b{i}")
        assert ends(plant, f"Alder.CB{i}") == (f"Alder.b{i}", f"Alder.c{i}")
        assert ends(plant, f"Alder.CTc{i}") == (f"Alder.c{i}", f"Alder.{after}.J")
        assert ends(plant, f"Alder.{here}.DS") == (f"Alder.{here}.J", here)
        assert plant.section[f"Alder.{here}.J"].kind is SectionKind.CONDUCTOR
    assert plant.device["Alder.L1.DS"].b_at == 1.0
    assert len(of_kind(plant, DeviceKind.CT)) == 8
    assert {v.name for v in plant.vts} == {"Alder.G1.VT", "Alder.L1.VT", "Alder.L2.VT", "Alder.F1.VT"}


def test_ring_bay_with_its_own_ct_placement() -> None:
    """L1 is the second bay, so its placement is that of breaker 2."""
    b = circuits()
    bays = [Bay("G1", "G1"), Bay("L1", "L1", ct=CtPlacement.BUS_SIDE), Bay("L2", "L2")]
    ring(b, "Alder", bays)
    names = set(of_kind(b.build(), DeviceKind.CT))
    assert names == {"Alder.CTb1", "Alder.CTc1", "Alder.CTb2", "Alder.CTb3", "Alder.CTc3"}


def test_breaker_and_a_half_with_a_bay_left_over() -> None:
    """G1 and L1 share diameter 1 of three breakers, L2 has diameter 2 of two."""
    b = circuits()
    breaker_and_a_half(b, "Alder", FOUR[:3], ct=CtPlacement.BOTH)
    plant = b.build()
    between = {
        "Alder.D1.CB1": ("Alder.B1", "Alder.G1.J"),
        "Alder.D1.CB2": ("Alder.G1.J", "Alder.L1.J"),
        "Alder.D1.CB3": ("Alder.B2", "Alder.L1.J"),
        "Alder.D2.CB1": ("Alder.B1", "Alder.L2.J"),
        "Alder.D2.CB2": ("Alder.B2", "Alder.L2.J"),
    }
    assert set(plant.breakers) == set(between)
    for name, (first, second) in between.items():
        stem, n = name.split("CB")
        assert ends(plant, name) == (f"{stem}b{n}", f"{stem}c{n}")
        assert ends(plant, f"{stem}CTb{n}") == (first, f"{stem}b{n}")
        assert ends(plant, f"{stem}CTc{n}") == (f"{stem}c{n}", second)
    assert {v.name for v in plant.vts} >= {"Alder.B1.VT", "Alder.B2.VT", "Alder.L2.VT"}


def test_breaker_and_a_half_bay_with_its_own_ct_placement() -> None:
    """It governs the outer breaker of the bay: L1 is second, so D1.CB3."""
    b = circuits()
    bays = [Bay("G1", "G1"), Bay("L1", "L1", ct=CtPlacement.CIRCUIT_SIDE)]
    breaker_and_a_half(b, "Alder", bays, ct=CtPlacement.BUS_SIDE)
    assert of_kind(b.build(), DeviceKind.CT) == ["Alder.D1.CTb1", "Alder.D1.CTb2", "Alder.D1.CTc3"]


def test_elements() -> None:
    b = PlantBuilder()
    transformer(b, "T1", station="Alder", kv=230, length=12.0)
    generator(b, "G1", station="Alder", trips=False, impedance_pu=0.2)
    infeed(b, "Grid", "T1", station="Alder", impedance_pu=0.05)
    infeed(b, "Strong", "T1", feeds_own_zone=True)
    plant = b.build()
    assert (plant.section["T1"].kind, plant.section["T1"].length) == (SectionKind.TRANSFORMER, 12.0)
    assert plant.tripping_sources == ()
    grid, strong, unit = plant.source["Grid"], plant.source["Strong"], plant.source["G1.unit"]
    assert (grid.section, grid.station, grid.feeds_own_zone, grid.impedance_pu) == ("T1", "Alder", False, 0.05)
    assert (strong.feeds_own_zone, strong.trips) == (True, False)
    assert (unit.section, unit.feeds_own_zone, unit.impedance_pu) == ("G1", True, 0.2)


Add = Callable[[PlantBuilder], None]
ONE = [Bay("L1", "L1")]


@pytest.mark.parametrize(
    ("add", "subject", "value"),
    [
        (lambda b: single_bus(b, "", ONE), "name of a station", ""),
        (lambda b: single_bus(b, "A@1", ONE), "name of a station", "A@1"),
        (lambda b: single_bus(b, "Alder", []), "bays of station 'Alder'", []),
        (lambda b: single_bus(b, "Alder", ONE, kv=-1), "kv of station 'Alder'", -1),
        (lambda b: single_bus(b, "Alder", ONE, cores=()), "CT cores of station 'Alder'", ()),
        (
            lambda b: single_bus(b, "Alder", ONE, windings=("1", "1")),
            "VT windings of station 'Alder'",
            ("1", "1"),
        ),
        (lambda b: single_bus(b, "Alder", [*ONE, *ONE]), "name of a bay of station 'Alder'", "L1"),
        (lambda b: single_bus(b, "Alder", [Bay("L\t1", "L1")]), "name of a bay of station 'Alder'", "L\t1"),
        (lambda b: single_bus(b, "Alder", [Bay("L1", "")]), "circuit of bay 'L1' of station 'Alder'", ""),
        (
            lambda b: single_bus(b, "Alder", [Bay("L1", "L1", at=1.5)]),
            "position of bay 'L1' of station 'Alder'",
            1.5,
        ),
        (
            lambda b: single_bus(b, "Alder", [Bay("L1", "L1", ct=CtPlacement.BOTH, breaker=False)]),
            "CT placement of bay 'L1' of station 'Alder'",
            "both",
        ),
        (
            lambda b: sectionalised_bus(b, "Alder", ONE, sections=1),
            "sections of station 'Alder'",
            1,
        ),
        (
            lambda b: sectionalised_bus(b, "Alder", ONE, selection={"L1": 3}),
            "bus of bay 'L1' of station 'Alder'",
            3,
        ),
        (lambda b: double_bus(b, "Alder", ONE, selection={"L2": 1}), "selection of station 'Alder'", "L2"),
        (
            lambda b: double_bus(b, "Alder", ONE, selection={"L1": True}),
            "bus of bay 'L1' of station 'Alder'",
            True,
        ),
        (
            lambda b: double_bus(b, "Alder", ONE, selection={"L1": 1.0}),  # type: ignore[dict-item]
            "bus of bay 'L1' of station 'Alder'",
            1.0,
        ),
        (lambda b: ring(b, "Alder", ONE), "bays of station 'Alder'", ["L1"]),
        (
            lambda b: ring(b, "Alder", FOUR, ct=CtPlacement.ELEMENT_BUSHINGS),
            "CT placement of station 'Alder'",
            "element_bushings",
        ),
        (
            lambda b: breaker_and_a_half(b, "Alder", [Bay("L1", "L1", breaker=False)]),
            "bay 'L1' of station 'Alder'",
            "no breaker",
        ),
    ],
)
def test_bad_arguments_are_refused_and_nothing_is_added(add: Add, subject: str, value: object) -> None:
    b = PlantBuilder()
    with pytest.raises(InputError) as caught:
        add(b)
    assert [(p.subject, p.value) for p in caught.value.problems] == [(subject, value)]
    assert b.sections + b.devices + b.vts == []


def test_all_mistakes_come_at_once() -> None:
    bays = [Bay("L1", "L1", at=-1.0), Bay("L1", "L1", at=float("nan"))]
    with pytest.raises(InputError) as caught:
        double_bus(PlantBuilder(), " Alder", bays, kv=float("inf"), selection={"L1": 0, "L10": 1})
    # station name, kv, two positions, a name twice, a bus that is not there, an unknown bay (with a tip)
    assert len(caught.value.problems) == 7
    assert [p.tip for p in caught.value.problems if p.value == "L10"] == ["did you mean 'L1'?"]


def test_a_circuit_that_is_not_there_is_named_when_built() -> None:
    b = circuits()
    single_bus(b, "Alder", [Bay("L3", "L10")])
    with pytest.raises(InputError, match=r"end of device 'Alder\.L3\.CTc': got 'L10'.*did you mean 'L1'"):
        b.build()
