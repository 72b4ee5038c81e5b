"""R8 at the level of the plant: who carries fault current, and whether the fault is fed.

Brute force: a device carries while it lies on a path without repeated sections from a source to the
fault. The paths are listed one by one on the whole plant, with no common node of the sources and no
reduction; the library's answer comes from biconnected parts of a reduced graph.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Set

import networkx as nx
from hypothesis import event, given, settings
from hypothesis import strategies as st

from schemesim.plant.current import Neighbourhood, Supply
from schemesim.plant.layouts import Bay, feeder, generator, infeed, line, ring, single_bus
from schemesim.plant.model import Device, DeviceKind, Dispatch, Plant, PlantBuilder, Section, SectionKind, Source


def bipartite(plant: Plant, opened: Set[str]) -> nx.Graph[str]:
    """Sections and closed devices as nodes, in one namespace (their names differ)."""
    graph: nx.Graph[str] = nx.Graph()
    graph.add_nodes_from(plant.section)
    for d in plant.devices:
        if d.closed and d.name not in opened:
            graph.add_edges_from(((d.a, d.name), (d.name, d.b)))
    return graph


def paths(graph: nx.Graph[str], start: str, target: str) -> Iterator[list[str]]:
    if start == target:
        yield [start]
    else:
        yield from nx.all_simple_paths(graph, start, target)


def brute(
    plant: Plant, fault: str | None, kept: Iterable[str], opened: Set[str], dispatch: str | None, idle: Set[str]
) -> Supply:
    graph = bipartite(plant, opened)
    targets = [fault] if fault is not None else [s.name for s in plant.sections if s.load_mw > 0]
    carrying: set[str] = set()
    for source in plant.sources_in(dispatch):
        if source.name in opened or source.name in idle:
            continue
        for target in targets:
            for path in paths(graph, source.section, target):
                carrying.update(path)
                carrying.add(source.name)
    fed = fault is not None and bool(carrying)
    return Supply(fed, frozenset(carrying & set(kept)))


def brute_lost(plant: Plant, opened: Set[str], dispatch: str | None, idle: Set[str]) -> tuple[float, list[str]]:
    def dead(opened: Set[str], idle: Set[str]) -> set[str]:
        graph = bipartite(plant, opened)
        alive: set[str] = set()
        for source in plant.sources_in(dispatch):
            if source.name not in opened and source.name not in idle:
                alive |= nx.node_connected_component(graph, source.section)
        return set(plant.section) - alive

    gone = dead(opened, idle) - dead(frozenset(), frozenset())
    return sum(plant.section[n].load_mw for n in gone), sorted(gone)


@st.composite
def plants(draw: st.DrawFn) -> Plant:
    """Up to seven sections, up to ten devices between any two of them, up to three sources."""
    names = [f"S{i}" for i in range(draw(st.integers(2, 7)))]
    end = st.sampled_from(names)
    pairs = draw(
        st.lists(st.tuples(end, end).filter(lambda p: p[0] != p[1]), min_size=1, max_size=10)
    )
    kinds = (DeviceKind.BREAKER, DeviceKind.SWITCH, DeviceKind.JOINT)
    at = draw(st.lists(end, min_size=1, max_size=3))
    return Plant(
        sections=tuple(
            Section(name=n, kind=SectionKind.BUS, load_mw=draw(st.sampled_from([0.0, 0.0, 2.0**i])))
            for i, n in enumerate(names)
        ),
        devices=tuple(
            Device(
                name=f"D{i}",
                kind=draw(st.sampled_from(kinds)),
                a=a,
                b=b,
                closed=draw(st.sampled_from([True, True, True, False])),
            )
            for i, (a, b) in enumerate(pairs)
        ),
        sources=tuple(Source(name=f"G{i}", section=s, trips=True) for i, s in enumerate(at)),
        dispatches=(Dispatch(name="first out", out=frozenset({"G0"})),),
    )


@given(plants(), st.data())
@settings(max_examples=400)
def test_r08_carrying_and_fed_equal_the_listed_simple_paths(plant: Plant, data: st.DataObject) -> None:
    fault = data.draw(st.sampled_from([None, *plant.section]), "fault")
    names = sorted([*plant.device, *plant.source])
    kept = data.draw(st.sets(st.sampled_from(names)), "kept")
    dispatch = data.draw(st.sampled_from([None, None, "first out"]), "dispatch")
    idle = data.draw(st.sets(st.sampled_from(sorted(plant.source)), max_size=1), "idle") if fault else set()
    around = Neighbourhood(plant, fault, kept - idle, dispatch, frozenset(idle))
    for _ in range(3):
        opened = data.draw(st.sets(st.sampled_from(sorted(kept - idle))), "opened") if kept - idle else set()
        expected = brute(plant, fault, kept - idle, opened, dispatch, idle)
        assert around.supply(opened) == expected
        event(f"fault {fault is not None}, fed {expected.fed}, some carry {bool(expected.carrying)}")
        load, sections = around.lost(opened)
        assert (load, list(sections)) == brute_lost(plant, opened, dispatch, idle)


@given(plants(), st.data())
def test_r08_what_is_kept_changes_no_answer(plant: Plant, data: st.DataObject) -> None:
    """The reduction: with everything kept (nothing reduced) or a few devices kept, the few answer alike."""
    fault = data.draw(st.sampled_from(sorted(plant.section)), "fault")
    names = sorted([*plant.device, *plant.source])
    few = data.draw(st.sets(st.sampled_from(names), max_size=4), "few")
    opened = data.draw(st.sets(st.sampled_from(sorted(few))), "opened") if few else set()
    whole = Neighbourhood(plant, fault, names).supply(opened)
    part = Neighbourhood(plant, fault, few).supply(opened)
    assert part.fed is whole.fed
    assert part.carrying == whole.carrying & few


def grid() -> PlantBuilder:
    """Alder and Birch joined by two lines; G1 at Alder, an infeed on line L3 at Birch, a load at Birch."""
    b = PlantBuilder()
    generator(b, "G1")
    feeder(b, "F1", 10.0)
    for name in ("L1", "L2", "L3"):
        line(b, name, 40.0)
    infeed(b, "Grid", "L3")
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1"), Bay("L2", "L2")])
    bays = [Bay("L1", "L1", at=1.0), Bay("L2", "L2", at=1.0), Bay("L3", "L3"), Bay("F1", "F1")]
    single_bus(b, "Birch", bays)
    return b


BREAKERS = {
    "Alder.G1.CB",
    "Alder.L1.CB",
    "Alder.L2.CB",
    "Birch.L1.CB",
    "Birch.L2.CB",
    "Birch.L3.CB",
    "Birch.F1.CB",
}


def test_r08_sequential_opening_by_hand() -> None:
    """A fault on L1. The load's breaker never carries; L2 carries from one side or the other all along.

    All closed: everything but the load carries.
    Alder.L1 open: G1 feeds by L2 and Birch; all but Alder.L1 and the load carry.
    Birch.L1 open instead: the infeed reaches Alder by L2.
    Both open: nothing feeds it, nothing carries.
    """
    around = Neighbourhood(grid().build(), "L1", BREAKERS)
    assert around.supply(frozenset()) == Supply(True, frozenset(BREAKERS - {"Birch.F1.CB"}))
    for one in ("Alder.L1.CB", "Birch.L1.CB"):
        assert around.supply({one}) == Supply(True, frozenset(BREAKERS - {"Birch.F1.CB", one}))
    assert around.supply({"Alder.L1.CB", "Birch.L1.CB"}) == Supply(False, frozenset())
    # With Alder.L1 and G1 open only the infeed is left, straight from L3: L2 hangs loose.
    assert around.supply({"Alder.L1.CB", "Alder.G1.CB"}) == Supply(
        True, frozenset({"Birch.L1.CB", "Birch.L3.CB"})
    )


def test_r08_fault_beyond_a_stub_is_carried_by_the_stub() -> None:
    """A fault on the load feeder: both lines, both sources and now the load's breaker carry."""
    around = Neighbourhood(grid().build(), "F1", BREAKERS)
    assert around.supply(frozenset()) == Supply(True, frozenset(BREAKERS))
    assert around.supply({"Birch.F1.CB"}) == Supply(False, frozenset())


def test_r08_a_source_in_the_faulted_zone_feeds_until_it_trips() -> None:
    around = Neighbourhood(grid().build(), "G1", {"Alder.G1.CB", "G1.unit"})
    assert around.supply(frozenset()) == Supply(True, frozenset({"Alder.G1.CB", "G1.unit"}))
    assert around.supply({"Alder.G1.CB"}) == Supply(True, frozenset({"G1.unit"}))
    assert around.supply({"G1.unit"}) == Supply(True, frozenset({"Alder.G1.CB"}))
    assert around.supply({"Alder.G1.CB", "G1.unit"}) == Supply(False, frozenset())


def test_r08_ring_is_fed_both_ways_round() -> None:
    """Breakers 1 L1-L2, 2 L2-L3, 3 L3-L1; the one source on L1, the fault on L2."""
    b = PlantBuilder()
    for name in ("L1", "L2", "L3"):
        line(b, name, 40.0)
    infeed(b, "Grid", "L1")
    ring(b, "Dale", [Bay("L1", "L1"), Bay("L2", "L2"), Bay("L3", "L3")])
    around = Neighbourhood(b.build(), "L2", {"Dale.CB1", "Dale.CB2", "Dale.CB3"})
    assert around.supply(frozenset()).carrying == {"Dale.CB1", "Dale.CB2", "Dale.CB3"}
    assert around.supply({"Dale.CB1"}) == Supply(True, frozenset({"Dale.CB2", "Dale.CB3"}))
    assert around.supply({"Dale.CB3"}) == Supply(True, frozenset({"Dale.CB1"}))
    assert around.supply({"Dale.CB1", "Dale.CB3"}) == Supply(False, frozenset())
