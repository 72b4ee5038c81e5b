"""Isolation zones, the graph of zones, needed and intended breakers; worked out by hand."""

from __future__ import annotations

from itertools import product
from random import Random

import networkx as nx
import pytest
from hypothesis import given
from hypothesis import strategies as st

from schemesim.errors import InputError
from schemesim.plant.coverage import coverage_audit
from schemesim.plant.current import Neighbourhood
from schemesim.plant.layouts import (
    Bay,
    breaker_and_a_half,
    double_bus,
    feeder,
    generator,
    infeed,
    line,
    ring,
    single_bus,
)
from schemesim.plant.model import (
    Device,
    DeviceKind,
    Dispatch,
    Plant,
    PlantBuilder,
    Section,
    SectionKind,
    Source,
    VoltageTransformer,
)
from schemesim.plant.terminals import protected_object
from schemesim.plant.zones import around, duty, isolation_zones, merged_elements, zone_graph


def two_stations(*, trips: bool = True) -> PlantBuilder:
    """G1 and load F1 at Alder, line L1 to Birch, G2 at Birch; CTs on both sides of every breaker."""
    b = PlantBuilder()
    generator(b, "G1", station="Alder", trips=trips)
    generator(b, "G2", station="Birch")
    feeder(b, "F1", 25.0, station="Alder")
    line(b, "L1", 40.0)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1"), Bay("F1", "F1")])
    single_bus(b, "Birch", [Bay("G2", "G2"), Bay("L1", "L1", at=1.0)])
    b.add(Dispatch(name="G2 out", out=frozenset({"G2.unit"})))
    return b


def needed(plant: Plant, section: str, dispatch: str | None = None) -> set[str]:
    return set(duty(plant, isolation_zones(plant), section, dispatch).needed)


def test_zones_end_at_breakers_and_not_at_cts() -> None:
    zones = isolation_zones(two_stations().build())
    assert {name: set(members) for name, members in zones.members.items()} == {
        "Alder.B1": {"Alder.B1", "Alder.G1.b", "Alder.L1.b", "Alder.F1.b"},
        "Birch.B1": {"Birch.B1", "Birch.G2.b", "Birch.L1.b"},
        "L1": {"L1", "Alder.L1.c", "Birch.L1.c"},
        "G1": {"G1", "Alder.G1.c"},
        "G2": {"G2", "Birch.G2.c"},
        "F1": {"F1", "Alder.F1.c"},
    }
    assert zones.border["L1"] == {"Alder.L1.CB", "Birch.L1.CB"}
    assert zones.border["Alder.B1"] == {"Alder.G1.CB", "Alder.L1.CB", "Alder.F1.CB"}


def test_zone_graph_is_a_networkx_graph() -> None:
    graph = zone_graph(two_stations().build())
    assert isinstance(graph, nx.MultiGraph)
    edges = {key: {a, b} for a, b, key in graph.edges(keys=True)}
    assert edges == {
        "Alder.G1.CB": {"Alder.B1", "G1"},
        "Alder.F1.CB": {"Alder.B1", "F1"},
        "Alder.L1.CB": {"Alder.B1", "L1"},
        "Birch.L1.CB": {"Birch.B1", "L1"},
        "Birch.G2.CB": {"Birch.B1", "G2"},
    }
    assert nx.shortest_path(graph, "F1", "G2") == ["F1", "Alder.B1", "L1", "Birch.B1", "G2"]
    assert graph.nodes["G1"]["sources"] == ("G1.unit",)
    assert graph.nodes["F1"]["load_mw"] == 25.0
    assert graph.edges["Alder.B1", "L1", "Alder.L1.CB"]["closed"] is True


def test_open_breaker_is_an_edge_of_the_graph_and_on_no_border() -> None:
    b = PlantBuilder()
    generator(b, "G1")
    generator(b, "G2")
    double_bus(b, "Alder", [Bay("G1", "G1"), Bay("G2", "G2")], coupler_closed=False)
    plant = b.build()
    assert zone_graph(plant).edges["Alder.B1", "Alder.B2", "Alder.BC.CB"]["closed"] is False
    zones = isolation_zones(plant)
    assert zones.border["Alder.B1"] == {"Alder.G1.CB"}
    assert around(zones, "Alder.BC.CB") == frozenset()
    assert needed(plant, "Alder.B1") == {"Alder.G1.CB"}


@pytest.mark.parametrize(
    ("section", "must", "may"),
    [
        # The line: sources on both sides.
        ("L1", {"Alder.L1.CB", "Birch.L1.CB"}, {"Alder.L1.CB", "Birch.L1.CB"}),
        # A conductor between breaker and circuit-side CT is in the line's isolation zone.
        ("Alder.L1.c", {"Alder.L1.CB", "Birch.L1.CB"}, {"Alder.L1.CB", "Birch.L1.CB"}),
        # The bus: the breaker to the radial load is intended and not needed.
        ("Alder.B1", {"Alder.G1.CB", "Alder.L1.CB"}, {"Alder.G1.CB", "Alder.L1.CB", "Alder.F1.CB"}),
        ("Alder.L1.b", {"Alder.G1.CB", "Alder.L1.CB"}, {"Alder.G1.CB", "Alder.L1.CB", "Alder.F1.CB"}),
        ("F1", {"Alder.F1.CB"}, {"Alder.F1.CB"}),
        # A generator feeds its own zone: its trip is needed besides its breaker.
        ("G1", {"Alder.G1.CB", "G1.unit"}, {"Alder.G1.CB", "G1.unit"}),
    ],
)
def test_needed_and_intended(section: str, must: set[str], may: set[str]) -> None:
    plant = two_stations().build()
    found = duty(plant, isolation_zones(plant), section)
    assert (set(found.needed), set(found.intended), found.untripped) == (must, may, ())


def test_generator_without_a_trip_goes_on_feeding() -> None:
    plant = two_stations(trips=False).build()
    found = duty(plant, isolation_zones(plant), "Alder.G1.c")
    assert found.needed == found.intended == {"Alder.G1.CB"}
    assert found.untripped == ("G1.unit",)


def test_equivalent_that_feeds_nothing_into_its_own_zone() -> None:
    b = PlantBuilder()
    line(b, "L1", 10.0)
    feeder(b, "F1", 5.0)
    infeed(b, "Grid", "L1")
    single_bus(b, "Alder", [Bay("L1", "L1"), Bay("F1", "F1")])
    plant = b.build()
    found = duty(plant, isolation_zones(plant), "L1")
    assert found.needed == frozenset()
    assert found.intended == {"Alder.L1.CB"}
    assert found.untripped == ()
    assert needed(plant, "Alder.B1") == {"Alder.L1.CB"}  # it does feed the bus


def test_dispatch_with_a_source_out() -> None:
    """With G2 out, everything beyond Birch is dead: only what comes from G1 has to open."""
    plant = two_stations().build()
    assert needed(plant, "L1", "G2 out") == {"Alder.L1.CB"}
    assert needed(plant, "Alder.B1", "G2 out") == {"Alder.G1.CB"}
    assert needed(plant, "G2", "G2 out") == {"Birch.G2.CB"}
    zones = isolation_zones(plant)
    assert duty(plant, zones, "L1", "G2 out").intended == {"Alder.L1.CB", "Birch.L1.CB"}


def test_designed_intertrips_are_intended() -> None:
    plant = two_stations().build()
    found = duty(plant, isolation_zones(plant), "L1", intertrips=frozenset({"Birch.G2.CB"}))
    assert found.intended == {"Alder.L1.CB", "Birch.L1.CB", "Birch.G2.CB"}
    assert found.needed == {"Alder.L1.CB", "Birch.L1.CB"}


def test_unknown_names_are_refused() -> None:
    plant = two_stations().build()
    zones = isolation_zones(plant)
    with pytest.raises(InputError, match=r"section: got 'L10'.*did you mean 'L1'"):
        duty(plant, zones, "L10")
    with pytest.raises(InputError, match=r"dispatch: got 'G1 out'.*did you mean 'G2 out'"):
        duty(plant, zones, "L1", "G1 out")


def selected(selection: dict[str, int] | None) -> Plant:
    """Double bus: generator G1, line L1 with a source behind it, loads F1 and F2."""
    b = PlantBuilder()
    generator(b, "G1")
    line(b, "L1", 40.0)
    infeed(b, "Grid", "L1")
    feeder(b, "F1", 10.0)
    feeder(b, "F2", 10.0)
    bays = [Bay("G1", "G1"), Bay("L1", "L1"), Bay("F1", "F1"), Bay("F2", "F2")]
    double_bus(b, "Cedar", bays, selection=selection)
    return b.build()


@pytest.mark.parametrize(
    ("selection", "border_1", "border_2", "needed_1", "needed_2"),
    [
        (
            # Turns: G1 and F1 on bus 1, L1 and F2 on bus 2. Each bus has one source of its own, the
            # other comes over the coupler.
            None,
            {"G1", "F1", "BC"},
            {"L1", "F2", "BC"},
            {"G1", "BC"},
            {"L1", "BC"},
        ),
        (
            # L1 taken over to bus 1: both sources are there, bus 2 is fed over the coupler only.
            {"L1": 1},
            {"G1", "L1", "F1", "BC"},
            {"F2", "BC"},
            {"G1", "L1"},
            {"BC"},
        ),
        (
            # All on bus 2: bus 1 is empty.
            {"G1": 2, "F1": 2},
            {"BC"},
            {"G1", "L1", "F1", "F2", "BC"},
            {"BC"},
            {"G1", "L1"},
        ),
    ],
)
def test_double_bus_follows_the_selection(
    selection: dict[str, int] | None,
    border_1: set[str],
    border_2: set[str],
    needed_1: set[str],
    needed_2: set[str],
) -> None:
    def breakers(bays: set[str]) -> set[str]:
        return {f"Cedar.{bay}.CB" for bay in bays}

    plant = selected(selection)
    zones = isolation_zones(plant)
    assert zones.border["Cedar.B1"] == breakers(border_1)
    assert zones.border["Cedar.B2"] == breakers(border_2)
    assert needed(plant, "Cedar.B1") == breakers(needed_1)
    assert needed(plant, "Cedar.B2") == breakers(needed_2)
    # A coupler that fails is surrounded by everything; a bay's breaker by its own bus and circuit.
    assert around(zones, "Cedar.BC.CB") == breakers({"G1", "L1", "F1", "F2"})
    own_bus = border_1 if "F1" in border_1 else border_2
    assert around(zones, "Cedar.F1.CB") == breakers(own_bus - {"F1"})


def test_around_a_line_breaker_reaches_the_remote_end() -> None:
    zones = isolation_zones(two_stations().build())
    assert around(zones, "Alder.L1.CB") == {"Alder.G1.CB", "Alder.F1.CB", "Birch.L1.CB"}
    assert around(zones, "no such breaker") == frozenset()


def test_ring() -> None:
    """Breakers 1 L1-L2, 2 L2-L3, 3 L3-F1, 4 F1-L1; sources behind L1 and L2."""
    b = PlantBuilder()
    for name in ("L1", "L2", "L3"):
        line(b, name, 40.0)
    feeder(b, "F1", 10.0)
    infeed(b, "Grid 1", "L1")
    infeed(b, "Grid 2", "L2")
    ring(b, "Dale", [Bay("L1", "L1"), Bay("L2", "L2"), Bay("L3", "L3"), Bay("F1", "F1")])
    b.add(Dispatch(name="Grid 1 out", out=frozenset({"Grid 1"})))
    plant = b.build()
    assert needed(plant, "L1") == {"Dale.CB1", "Dale.CB4"}  # 4: from L2 round by L3 and F1
    assert needed(plant, "L3") == {"Dale.CB2", "Dale.CB3"}
    assert needed(plant, "Dale.F1.J") == {"Dale.CB3", "Dale.CB4"}
    # With source 1 out, the only source is inside the zone of L2 and feeds nothing into it.
    assert needed(plant, "L2", "Grid 1 out") == set()
    zones = isolation_zones(plant)
    assert zones.members["L2"] == {"L2", "Dale.L2.J", "Dale.c1", "Dale.b2"}
    assert around(zones, "Dale.CB1") == {"Dale.CB2", "Dale.CB4"}


def test_breaker_and_a_half() -> None:
    """D1: B1 - 1 - L1 - 2 - L2 - 3 - B2; D2: B1 - 1 - F1 - 2 - B2. The one source is behind L1."""
    b = PlantBuilder()
    line(b, "L1", 40.0)
    line(b, "L2", 40.0)
    feeder(b, "F1", 10.0)
    infeed(b, "Grid", "L1")
    breaker_and_a_half(b, "Elm", [Bay("L1", "L1"), Bay("L2", "L2"), Bay("F1", "F1")])
    plant = b.build()
    # D2.CB1 is fed the long way: L1, L2, B2, F1.
    assert needed(plant, "Elm.B1") == {"Elm.D1.CB1", "Elm.D2.CB1"}
    # D1.CB3 from L1 over D1.CB2; D2.CB2 from L1 over B1 and F1.
    assert needed(plant, "Elm.B2") == {"Elm.D1.CB3", "Elm.D2.CB2"}
    assert needed(plant, "L2") == {"Elm.D1.CB2", "Elm.D1.CB3"}
    assert needed(plant, "F1") == {"Elm.D2.CB1", "Elm.D2.CB2"}
    assert needed(plant, "L1") == set()
    zones = isolation_zones(plant)
    assert around(zones, "Elm.D1.CB2") == {"Elm.D1.CB1", "Elm.D1.CB3"}
    assert around(zones, "Elm.D1.CB1") == {"Elm.D2.CB1", "Elm.D1.CB2"}


def test_absent_breaker_merges_zones() -> None:
    b = PlantBuilder()
    generator(b, "G1")
    feeder(b, "F1", 5.0)
    line(b, "L1", 40.0)
    infeed(b, "Grid", "L1")
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1", breaker=False), Bay("L1", "L1")])
    plant = b.build()
    assert merged_elements(plant) == {"Alder.B1": ("Alder.B1", "F1")}
    assert needed(plant, "F1") == needed(plant, "Alder.B1") == {"Alder.G1.CB", "Alder.L1.CB"}
    assert merged_elements(two_stations().build()) == {}


def test_breaker_with_both_sides_in_one_zone_isolates_nothing() -> None:
    """A closed bypass switch around a line's breaker: it is on no border, and the zones fall together."""
    b = two_stations()
    b.add(Device(name="Alder.L1.BP", kind=DeviceKind.SWITCH, a="Alder.B1", b="L1"))
    plant = b.build()
    zones = isolation_zones(plant)
    assert zones.border["Alder.B1"] == {"Alder.G1.CB", "Alder.F1.CB", "Birch.L1.CB"}
    assert merged_elements(plant) == {"Alder.B1": ("Alder.B1", "L1")}
    assert around(zones, "Alder.L1.CB") == zones.border["Alder.B1"]


@given(st.randoms(use_true_random=False))
def test_order_of_declaration_changes_nothing(random: Random) -> None:
    """Items shuffled, devices turned end for end: the same zones, duties, objects and audit."""
    b = two_stations()
    shuffled = PlantBuilder()
    items: list[Section | Device | Source | VoltageTransformer | Dispatch]
    items = [*b.sections, *b.devices, *b.sources, *b.vts, *b.dispatches]
    random.shuffle(items)
    for item in items:
        if isinstance(item, Device) and random.random() < 0.5:
            shuffled.add(
                Device(
                    name=item.name,
                    kind=item.kind,
                    a=item.b,
                    b=item.a,
                    a_at=item.b_at,
                    b_at=item.a_at,
                    station=item.station,
                    closed=item.closed,
                    cores=item.cores,
                )
            )
        else:
            shuffled.add(item)
    one, two = b.build(), shuffled.build()
    za, zb = isolation_zones(one), isolation_zones(two)
    assert (za.of, za.members, za.border) == (zb.of, zb.members, zb.border)
    for s in one.section:
        assert duty(one, za, s) == duty(two, zb, s)
        assert protected_object(one, s) == protected_object(two, s)
    assert coverage_audit(one) == coverage_audit(two)
    assert list(zone_graph(one)) == list(zone_graph(two))


@st.composite
def breaker_plants(draw: st.DrawFn) -> Plant:
    """A few sections joined at random by breakers and switches, one to three sources."""
    n = draw(st.integers(2, 6))
    names = [f"S{i}" for i in range(n)]
    pairs = st.tuples(st.sampled_from(names), st.sampled_from(names)).filter(lambda p: p[0] != p[1])
    kinds = st.sampled_from([DeviceKind.BREAKER, DeviceKind.BREAKER, DeviceKind.SWITCH])
    drawn = draw(st.lists(st.tuples(pairs, kinds, st.booleans()), min_size=1, max_size=9))
    at = draw(st.lists(st.tuples(st.sampled_from(names), st.booleans(), st.booleans()), min_size=1, max_size=3))
    return Plant(
        sections=tuple(Section(name=x, kind=SectionKind.BUS) for x in names),
        devices=tuple(
            Device(name=f"D{i}", kind=kind, a=a, b=b, closed=closed or kind is DeviceKind.BREAKER)
            for i, ((a, b), kind, closed) in enumerate(drawn)
        ),
        sources=tuple(
            Source(name=f"G{i}", section=s, trips=trips, feeds_own_zone=feeds)
            for i, (s, trips, feeds) in enumerate(at)
        ),
    )


@given(breaker_plants())
def test_opening_all_that_is_needed_clears_and_nothing_less_does(plant: Plant) -> None:
    zones = isolation_zones(plant)
    for zone, members in zones.members.items():
        found = duty(plant, zones, zone)
        idle = {s.name for s in plant.sources if s.section in members and not s.feeds_own_zone}
        graph = plant.graph
        for d in plant.devices:
            if not d.closed or d.name in found.needed:
                graph.remove_edge(d.a, d.b, key=d.name)
        feeding = [s for s in plant.sources if s.name not in found.needed | idle]
        reached = [s.name for s in feeding if nx.has_path(graph, s.section, zone)]
        assert sorted(reached) == sorted(found.untripped)
        around_fault = Neighbourhood(plant, zone, found.needed, idle=idle)
        for left in found.needed:
            assert around_fault.supply(found.needed - {left}).fed
        assert around_fault.supply(found.needed).fed is bool(found.untripped)


def test_every_pair_of_selections_gives_a_partition() -> None:
    for g1, l1, f1 in product((1, 2), repeat=3):
        plant = selected({"G1": g1, "L1": l1, "F1": f1})
        zones = isolation_zones(plant)
        held = [s for members in zones.members.values() for s in members]
        assert sorted(held) == [s.name for s in plant.sections]
        assert zones.of["Cedar.G1.b"] == f"Cedar.B{g1}"
        assert zones.of["Cedar.F1.b"] == f"Cedar.B{f1}"
