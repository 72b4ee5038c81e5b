"""Load current in runs without a fault, load lost, and the reduction to a neighbourhood; by hand."""

from __future__ import annotations

from pathlib import Path

import networkx as nx
from hypothesis import given
from hypothesis import strategies as st

from schemesim.plant.current import Neighbourhood, Supply, on_simple_paths
from schemesim.plant.grid import Vertex, grid_of, reduce_blocks
from schemesim.plant.layouts import Bay, feeder, generator, infeed, line, single_bus
from schemesim.plant.model import Dispatch, Plant, PlantBuilder
from schemesim.scenario import load_scenario


def one_bus() -> Plant:
    """G1 (generator), L1 (line with an infeed), loads F1 of 10 MW and F2 of 20 MW, line L2 to nowhere."""
    b = PlantBuilder()
    generator(b, "G1")
    line(b, "L1", 40.0)
    line(b, "L2", 40.0)
    infeed(b, "Grid", "L1")
    feeder(b, "F1", 10.0)
    feeder(b, "F2", 20.0)
    b.add(Dispatch(name="G1 out", out=frozenset({"G1.unit"})))
    single_bus(b, "Alder", [Bay(x, x) for x in ("G1", "L1", "L2", "F1", "F2")])
    return b.build()


ALL = {f"Alder.{x}.CB" for x in ("G1", "L1", "L2", "F1", "F2")}


def test_load_current_runs_from_sources_to_loads() -> None:
    """Both sources and both loads carry; the open-ended line does not. Nothing is *fed*: there is no fault."""
    around = Neighbourhood(one_bus(), None, ALL)
    assert around.supply(frozenset()) == Supply(False, frozenset(ALL - {"Alder.L2.CB"}))
    assert around.supply({"Alder.F1.CB"}).carrying == ALL - {"Alder.L2.CB", "Alder.F1.CB"}
    assert around.supply({"Alder.F1.CB", "Alder.F2.CB"}).carrying == frozenset()
    assert around.supply({"Alder.G1.CB", "Alder.L1.CB"}).carrying == frozenset()


def test_load_current_follows_the_dispatch() -> None:
    around = Neighbourhood(one_bus(), None, ALL, dispatch="G1 out")
    assert around.supply(frozenset()).carrying == {"Alder.L1.CB", "Alder.F1.CB", "Alder.F2.CB"}


def test_load_lost_without_a_fault() -> None:
    """A needless trip of one load loses that load alone: loads do not supply each other."""
    around = Neighbourhood(one_bus(), None, ALL)
    assert around.lost(frozenset()) == (0.0, ())
    load, sections = around.lost({"Alder.F1.CB"})
    assert load == 10.0
    assert sections == ("Alder.F1.c", "F1")
    assert around.lost({"Alder.G1.CB"}) == (0.0, ())  # the generator supplies itself
    load, _ = around.lost({"Alder.G1.CB", "Alder.L1.CB"})
    assert load == 30.0


def test_load_lost_with_the_bus_cleared() -> None:
    """Every breaker of the bus open: both loads and the open-ended line are dead, as is the bus."""
    around = Neighbourhood(one_bus(), "Alder.B1", ALL)
    load, sections = around.lost(ALL)
    assert load == 30.0
    assert {"Alder.B1", "F1", "F2", "L2"} <= set(sections)
    assert not {"L1", "G1"} & set(sections)


def test_load_of_a_faulted_zone_is_lost_though_its_equivalent_feeds_nothing() -> None:
    """The bus is supplied by an equivalent that feeds nothing into a fault there: it did supply the load."""
    b = PlantBuilder()
    feeder(b, "F1", 10.0)
    single_bus(b, "Alder", [Bay("F1", "F1")])
    infeed(b, "Grid", "Alder.B1")
    b.add(Dispatch(name="Grid out", out=frozenset({"Grid"})))
    plant = b.build()
    around = Neighbourhood(plant, "Alder.B1", {"Alder.F1.CB"}, idle=frozenset({"Grid"}))
    assert not around.supply(frozenset()).fed
    load, sections = around.lost({"Alder.F1.CB"})
    assert (load, "F1" in sections) == (10.0, True)
    out = Neighbourhood(plant, "Alder.B1", {"Alder.F1.CB"}, "Grid out", frozenset({"Grid"}))
    assert out.lost({"Alder.F1.CB"}) == (0.0, ())  # it was dead before


def vertex(name: str) -> Vertex:
    return ("section", name)


def test_reduction_by_hand() -> None:
    """Square a-b-c-d with a tail d-e-f: terminals a, c and f.

    The square shares a, c and d with the rest and becomes the cycle a-c-d; the bridges d-e and e-f stay
    edges.
    """
    graph: nx.Graph[Vertex] = nx.Graph()
    nx.add_cycle(graph, [vertex(x) for x in "abcd"])
    nx.add_path(graph, [vertex(x) for x in "def"])
    reduced = reduce_blocks(graph, {vertex("a"), vertex("c"), vertex("f")})
    edges = {frozenset((a[1], b[1])) for a, b in reduced.edges}
    assert edges == {frozenset(pair) for pair in ("ac", "cd", "ad", "de", "ef")}


def test_reduction_drops_what_no_path_between_terminals_uses() -> None:
    """With a and c only, the tail goes, and the square is one edge between them."""
    graph: nx.Graph[Vertex] = nx.Graph()
    nx.add_cycle(graph, [vertex(x) for x in "abcd"])
    nx.add_path(graph, [vertex(x) for x in "def"])
    reduced = reduce_blocks(graph, {vertex("a"), vertex("c")})
    assert set(reduced) == {vertex("a"), vertex("c")}
    assert reduced.number_of_edges() == 1


def test_the_reduced_grid_does_not_grow_with_what_lies_beyond() -> None:
    """A chain of n stations with a source at each end: what is left for the first line does not depend on n."""

    def size(stations: int) -> int:
        b = PlantBuilder()
        generator(b, "G1")
        generator(b, "G2")
        for i in range(1, stations):
            for side in ("a", "b"):
                line(b, f"L{i}{side}", 10.0)
        for i in range(1, stations + 1):
            bays = [Bay("G1", "G1")] if i == 1 else [Bay("G2", "G2")] if i == stations else []
            bays += [Bay(f"L{i - 1}{s}", f"L{i - 1}{s}", at=1.0) for s in "ab" if i > 1]
            bays += [Bay(f"L{i}{s}", f"L{i}{s}") for s in "ab" if i < stations]
            single_bus(b, f"Station {i}", bays)
        around = Neighbourhood(b.build(), "L1a", {"Station 1.L1a.CB", "Station 2.L1a.CB"})
        assert around.supply(frozenset()).fed
        return around._reduced.number_of_nodes()

    assert size(3) == size(6) == size(12)



DEMO = load_scenario(Path(__file__).resolve().parents[2] / "scenarios" / "demo.yaml").plant
DEVICES = [d.name for d in DEMO.devices] + [s.name for s in DEMO.sources]


@given(
    fault=st.none() | st.sampled_from([s.name for s in DEMO.sections]),
    kept=st.sets(st.sampled_from(DEVICES), max_size=12),
    dispatch=st.none() | st.just("night"),
    data=st.data(),
)
def test_parts_reduced_from_afar_answer_as_the_whole_plant(
    fault: str | None, kept: set[str], dispatch: str | None, data: st.DataObject
) -> None:
    """Four stations: with every device kept nothing is reduced; with a few, most stations are."""
    opened = data.draw(st.sets(st.sampled_from(sorted(kept)))) if kept else set()
    idle = data.draw(st.sets(st.sampled_from([s.name for s in DEMO.sources]))) if fault is not None else set()
    idle -= kept
    few = Neighbourhood(DEMO, fault, kept, dispatch, idle)
    whole = Neighbourhood(DEMO, fault, set(DEVICES) - idle, dispatch, idle)
    near, all_of_it = few.supply(opened), whole.supply(opened)
    assert (near.fed, near.carrying) == (all_of_it.fed, all_of_it.carrying & kept)
    assert few.lost(opened) == whole.lost(opened)


def test_a_plant_falls_into_its_stations() -> None:
    """Lines belong to no part; each of the four stations hangs together (its switches closed)."""
    grid = grid_of(DEMO)
    stations = {DEMO.section[part.inside[0]].station for part in grid.parts if len(part.inside) > 1}
    assert stations == {"Alder", "Birch", "Cedar", "Dunmore"}
    assert all(
        DEMO.section[name].station == DEMO.section[part.inside[0]].station
        for part in grid.parts
        for name in part.inside
    )
    assert "L1" not in grid.of_section
    dunmore = grid.parts[grid.of_section["Dunmore.B1"]]
    assert dunmore.ports == {vertex("L4"), vertex("L5")}  # no unit stands there
    assert {frozenset(edge) for edge in dunmore.reduced} == {frozenset(dunmore.ports)}
    assert not {"G2.unit", "G3.unit"} & set(grid_of(DEMO, "night").of_link)


@given(
    st.lists(st.tuples(st.integers(0, 9), st.integers(0, 9)).filter(lambda e: e[0] != e[1]), max_size=16),
    st.sets(st.integers(2, 9), max_size=3),
)
def test_simple_paths_are_those_of_brute_force(edges: list[tuple[int, int]], without: set[int]) -> None:
    """Every simple path between 0 and 1 listed one by one."""
    graph: nx.Graph[int] = nx.Graph()
    graph.add_nodes_from(range(10))
    graph.add_edges_from(edges)
    around = [sorted(graph[v]) for v in range(10)]
    graph.remove_nodes_from(without)
    paths = list(nx.all_simple_paths(graph, 0, 1))
    assert on_simple_paths(around, 0, 1, without) == (bool(paths), {0, 1}.union(*paths))
