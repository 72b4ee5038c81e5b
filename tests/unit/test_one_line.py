"""One-line diagrams: what they hold, and that nothing lies on anything else."""

from __future__ import annotations

import io
from collections import Counter
from functools import cache
from itertools import combinations, pairwise
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from schemesim.errors import InputError
from schemesim.plant.layouts import (
    Bay,
    CtPlacement,
    breaker_and_a_half,
    double_bus,
    feeder,
    generator,
    line,
    ring,
    sectionalised_bus,
    single_bus,
)
from schemesim.plant.model import (
    Device,
    DeviceKind,
    Location,
    Plant,
    PlantBuilder,
    Section,
    SectionKind,
    Source,
)
from schemesim.plant.terminals import protected_object
from schemesim.plant.zones import isolation_zones
from schemesim.report.geometry import Sheet
from schemesim.report.grid_layout import arrange, neighbourhood
from schemesim.report.one_line import dead_sections, plot_one_line
from schemesim.report.one_line_drawing import bolt_of, fault_point
from schemesim.report.station_layout import diameter_of, lay_out, ring_of
from schemesim.report.station_parts import station_names, station_parts
from schemesim.report.timeline import timeline
from schemesim.scenario import Scenario, load_scenario

ROOT = Path(__file__).resolve().parents[2]


@cache
def demo() -> Scenario:
    return load_scenario(ROOT / "scenarios" / "demo.yaml")


@cache
def area_a() -> Plant:
    return load_scenario(ROOT / "scenarios" / "rts96_area_a.yaml").plant


def station(layout: str, circuits: int, ct: CtPlacement = CtPlacement.BOTH) -> Plant:
    """A station of one layout: circuits 0, 3, 6 … are generators, 1, 4 … lines, the others feeders."""
    b = PlantBuilder()
    bays = []
    for i in range(circuits):
        name = f"{'GLF'[i % 3]}{i}"
        bays.append(Bay(name, name))
        if i % 3 == 0:
            generator(b, name)
        elif i % 3 == 1:
            line(b, name, 10.0)
        else:
            feeder(b, name, load_mw=10)
    layouts = {
        "single": single_bus,
        "sections": sectionalised_bus,
        "double": double_bus,
        "ring": ring,
        "diameters": breaker_and_a_half,
    }
    layouts[layout](b, "Elm", bays, ct=ct)
    return b.build()


STATIONS = [
    (layout, n, ct)
    for layout in ("single", "sections", "double", "ring", "diameters")
    for n in (2, 3, 6)
    for ct in (CtPlacement.BOTH, CtPlacement.BUS_SIDE, CtPlacement.DEAD_TANK)
]


def hand_built() -> Plant:
    """No layout of the library: two buses, three junctions in a triangle, a fuse, an open tie, no station names."""
    sections = [Section(name=n, kind=SectionKind.BUS) for n in ("B1", "B2")]
    sections += [Section(name=f"J{i}", kind=SectionKind.CONDUCTOR) for i in (1, 2, 3)]
    sections += [Section(name=n, kind=SectionKind.FEEDER) for n in ("F1", "F2")]
    pairs = [("B1", "J1"), ("J1", "J2"), ("J2", "J3"), ("J3", "J1"), ("J3", "B2"), ("J2", "F1"), ("B2", "F2")]
    devices = [Device(name=f"CB{i}", kind=DeviceKind.BREAKER, a=a, b=b) for i, (a, b) in enumerate(pairs)]
    devices[-1] = Device(name="fuse", kind=DeviceKind.FUSE, a="B2", b="F2")
    devices.append(Device(name="tie", kind=DeviceKind.SWITCH, a="B1", b="B2", closed=False))
    return Plant(sections=tuple(sections), devices=tuple(devices), sources=(Source(name="S", section="B1"),))


def gids(ax: Axes, kind: str) -> list[str]:
    """What is drawn of a kind, each artist once."""
    drawn = (a.get_gid() for a in ax.get_children())
    return [g.removeprefix(f"{kind}: ") for g in drawn if g and g.startswith(f"{kind}: ")]


def texts(ax: Axes) -> list[str]:
    return [t.get_text() for t in ax.texts]


def touches(sheet: Sheet, device: Device) -> bool:
    """Whether a wire of both its sections ends where a device stands."""
    spot = sheet.spots[device.name]
    return all(any((spot.x, spot.y) in (w[0], w[-1]) for w in sheet.wires[section]) for section in (device.a, device.b))


@pytest.mark.parametrize(("layout", "circuits", "ct"), STATIONS)
def test_a_station_has_every_device_once_joined_to_both_its_sections(
    layout: str, circuits: int, ct: CtPlacement
) -> None:
    plant = station(layout, circuits, ct)
    sheet = lay_out(plant, station_parts(plant, "Elm"))
    assert set(sheet.spots) == set(plant.device)
    assert [d.name for d in plant.devices if not touches(sheet, d)] == []
    assert {e.section for e in sheet.ends} == {s.name for s in plant.sections if s.name[1:].isdigit()}
    assert len(sheet.ends) == circuits
    assert set(sheet.buses) == {s.name for s in plant.sections if s.kind is SectionKind.BUS}


@pytest.mark.parametrize(("layout", "circuits", "ct"), STATIONS)
def test_no_two_devices_of_a_station_lie_on_each_other(layout: str, circuits: int, ct: CtPlacement) -> None:
    plant = station(layout, circuits, ct)
    sheet = lay_out(plant, station_parts(plant, "Elm"))
    near = [
        (a, b)
        for (a, p), (b, q) in combinations(sorted(sheet.spots.items()), 2)
        if max(abs(p.x - q.x), abs(p.y - q.y)) < 0.3
    ]
    assert near == []


def test_a_plant_built_by_hand_is_drawn_whole() -> None:
    plant = hand_built()
    sheet = lay_out(plant, station_parts(plant, ""))
    assert set(sheet.spots) == set(plant.device)
    assert [d.name for d in plant.devices if not touches(sheet, d)] == []
    ax = plot_one_line(plant)
    assert sorted(gids(ax, "breaker")) == [f"CB{i}: closed" for i in range(6)]
    assert sorted(gids(ax, "switch")) == ["fuse: closed", "tie: open"]
    assert gids(ax, "infeed") == ["S"]


def test_buses_are_horizontal_and_bays_vertical() -> None:
    plant = station("double", 6)
    sheet = lay_out(plant, station_parts(plant, "Elm"))
    for (x0, y0), (x1, y1) in sheet.buses.values():
        assert y0 == y1
        assert x1 - x0 > 4
    for d in plant.devices:
        assert not sheet.spots[d.name].across, d.name
    lines = [e for e in sheet.ends if e.section.startswith("L")]
    others = [e for e in sheet.ends if not e.section.startswith("L")]
    assert {e.up for e in lines} == {1}
    assert {e.up for e in others} == {-1}
    assert {e.y for e in lines} == {max(e.y for e in lines)}


def test_a_ring_is_a_rectangle_with_its_lines_above() -> None:
    plant = demo().plant
    (group,) = station_parts(plant, "Cedar").groups
    order = ring_of(group)
    assert order is not None
    assert len(order) == 4
    sheet = lay_out(plant, station_parts(plant, "Cedar"))
    breakers = [sheet.spots[b] for b in plant.breakers if b.startswith("Cedar.")]
    assert Counter(s.across for s in breakers) == {True: 2, False: 2}
    corners = {(round(x, 6), round(y, 6)) for x, y in sheet.dots}
    assert len(corners) == 4
    assert len({x for x, _ in corners}) == len({y for _, y in corners}) == 2


def test_a_diameter_runs_from_bus_to_bus() -> None:
    plant = demo().plant
    parts = station_parts(plant, "Birch")
    found = [diameter_of(g, parts.buses) for g in parts.groups]
    assert [len(d) for d in found if d is not None] == [3, 3, 3]
    sheet = lay_out(plant, parts)
    columns = {x for x, _ in ((sheet.spots[b].x, 0) for b in plant.breakers if b.startswith("Birch."))}
    assert len(columns) == 3
    heights = sorted({y for (_, y), _ in sheet.buses.values()})
    for b in plant.breakers:
        if b.startswith("Birch."):
            assert heights[0] < sheet.spots[b].y < heights[1]


def test_sections_of_a_bus_lie_side_by_side_with_their_breaker_between() -> None:
    plant = station("sections", 6)
    sheet = lay_out(plant, station_parts(plant, "Elm"))
    (_, y1), (x1, _) = sheet.buses["Elm.B1"]
    (x2, y2), _ = sheet.buses["Elm.B2"]
    assert y1 == y2
    assert x1 < sheet.spots["Elm.S1.CB"].x < x2
    assert sheet.spots["Elm.S1.CB"].across


def test_what_is_drawn_of_a_whole_grid() -> None:
    plant = demo().plant
    ax = plot_one_line(plant)
    assert sorted(gids(ax, "breaker")) == [f"{b}: closed" for b in plant.breakers]
    assert sorted(gids(ax, "ct")) == sorted(d.name for d in plant.devices if d.kind is DeviceKind.CT)
    assert sorted(gids(ax, "station")) == ["Alder", "Birch", "Cedar", "Dunmore"]
    assert sorted(gids(ax, "generator")) == ["G1", "G2", "G3"]
    assert set(gids(ax, "section")) == {s.name for s in plant.sections}
    assert set(gids(ax, "isolation zone")) == {s.name for s in plant.sections}
    assert gids(ax, "fault") == []
    counted = Counter(texts(ax))
    for name in ("Alder", "Birch", "Cedar", "Dunmore", "L1.CB", "BC.CB", "D2.CB3", "F1\n30 MW"):
        assert counted[name] == 1, name
    assert [counted[name] for name in ("L1", "L2", "L3", "L4", "L5")] == [2] * 5  # the name stands at both ends


def test_zones_side_by_side_have_different_tints() -> None:
    plant = area_a()
    ax = plot_one_line(plant, stations=neighbourhood(plant, "Bus11"), isolation="all")
    zones = isolation_zones(plant)
    tint: dict[str, set[object]] = {}
    for drawn in ax.lines:
        gid = str(drawn.get_gid())
        if gid.startswith("isolation zone: "):
            tint.setdefault(zones.of[gid.removeprefix("isolation zone: ")], set()).add(drawn.get_color())
    assert all(len(colours) == 1 for colours in tint.values())
    beside = [(a, b) for a, b in zones.sides.values() if a in tint and b in tint and a != b]
    assert len(beside) > 10
    assert [(a, b) for a, b in beside if tint[a] == tint[b]] == []


def test_a_fault_shows_its_zones_what_tripped_and_what_failed() -> None:
    # Breaker failure at Dunmore: L4.CB stays closed, the rest of the bus opens at 230 ms, Birch at 70 ms.
    case = demo().case_of(demo().listed("breaker failure"))
    run = demo().play("breaker failure")
    ax = plot_one_line(timeline(case, run, limit_ms=150))
    tripped = {name.removesuffix(": tripped") for name in gids(ax, "breaker") if name.endswith(": tripped")}
    assert tripped == {"Birch.D2.CB2", "Birch.D2.CB3", "Dunmore.L5.CB", "Dunmore.F5.CB", "Dunmore.F6.CB"}
    assert gids(ax, "failure") == ["Dunmore.L4.CB"]
    assert gids(ax, "fault") == ["L4@0.7"]
    zones = isolation_zones(demo().plant)
    assert set(gids(ax, "isolation zone")) == zones.members[zones.of["L4"]]
    outlined = {g.removeprefix("L4: ") for g in gids(ax, "protected zone")}
    assert outlined == protected_object(demo().plant, "L4").zone
    found = texts(ax)
    assert "D2.CB2\n70 ms" in found
    assert "F5.CB\n230 ms\nbeyond" in found
    assert "L4.CB\ndoes not\nopen" in found
    assert ax.get_title(loc="left").startswith("fault on L4@0.7; Dunmore.L4.CB: does_not_open")
    legend = ax.get_legend()
    assert legend is not None
    words = [t.get_text() for t in legend.get_texts()]
    assert {
        "failure",
        "opened, with its time; beyond: not intended",
        "protected zone of L4",
        "left without a source",
    } <= set(words)


def test_what_is_left_without_a_source_is_dotted() -> None:
    plant = demo().plant
    dead = dead_sections(plant, frozenset({"Alder.F1.CB"}))
    assert dead == {"F1", "Alder.F1.c"}
    assert dead_sections(plant, frozenset({"Alder.G1.CB", "G1.unit"})) == {"G1", "Alder.G1.c"}
    assert dead_sections(plant, frozenset({"Alder.L1.CB"})) == frozenset()  # L1 is fed from Birch


def test_a_line_between_stations_drawn_together_is_one_wire_with_the_fault_on_it() -> None:
    plant = demo().plant
    placed = arrange(plant, station_names(plant))
    assert set(placed.links) == {"L1", "L2", "L3", "L4", "L5"}
    assert {e.section for e in placed.open_ends} == {"G1", "G2", "G3", "F1", "F2", "F3", "F4", "F5", "F6"}
    for section, wire in placed.links.items():
        for (x0, y0), (x1, y1) in pairwise(wire):
            assert x0 == x1 or y0 == y1, section
    alone = arrange(plant, ["Alder"])
    assert alone.links == {}
    assert {e.section for e in alone.open_ends} == {"L1", "L2", "G1", "G2", "F1"}


def test_links_do_not_run_on_each_other() -> None:
    placed = arrange(area_a(), neighbourhood(area_a(), "Bus11"))
    assert len(placed.links) >= 4
    flat = [
        (section, y0, min(x0, x1), max(x0, x1))
        for section, wire in placed.links.items()
        for (x0, y0), (x1, y1) in pairwise(wire)
        if y0 == y1 and x0 != x1
    ]
    clash = [
        (a[0], b[0])
        for a, b in combinations(flat, 2)
        if a[0] != b[0] and abs(a[1] - b[1]) < 0.2 and a[2] < b[3] and b[2] < a[3]
    ]
    assert clash == []


def test_frames_of_stations_do_not_overlap() -> None:
    for plant, names in ((demo().plant, station_names(demo().plant)), (area_a(), neighbourhood(area_a(), "Bus09"))):
        frames = arrange(plant, names).frames
        assert set(frames) == set(names)
        clash = [
            (a, b)
            for (a, p), (b, q) in combinations(frames.items(), 2)
            if p[0] < q[2] and q[0] < p[2] and p[1] < q[3] and q[1] < p[3]
        ]
        assert clash == []


@pytest.mark.parametrize("name", ["Alder", "Birch", "Cedar", "Dunmore"])
def test_no_text_of_a_station_lies_on_another(name: str) -> None:
    from matplotlib.backends.backend_agg import FigureCanvasAgg

    ax = plot_one_line(demo().plant, stations=[name], labels="all")
    figure = ax.figure
    assert isinstance(figure, Figure)
    renderer = FigureCanvasAgg(figure).get_renderer()  # type: ignore[no-untyped-call]  # matplotlib types it not
    boxes = [(t.get_text(), t.get_window_extent(renderer)) for t in ax.texts]
    clash = [(a, b) for (a, p), (b, q) in combinations(boxes, 2) if p.shrunk(0.9, 0.8).overlaps(q.shrunk(0.9, 0.8))]
    assert clash == []
    width, height = figure.canvas.get_width_height()
    outside = [t for t, box in boxes if box.x0 < 0 or box.y0 < 0 or box.x1 > width or box.y1 > height]
    assert outside == []


def test_vector_and_raster_and_an_axis_of_ones_own() -> None:
    figure = Figure(figsize=(5, 4))
    ax = figure.add_subplot()
    assert plot_one_line(demo().plant, stations=["Cedar"], ax=ax) is ax
    for kind, start in (("svg", b"<?xml"), ("pdf", b"%PDF"), ("png", b"\x89PNG")):
        data = io.BytesIO()
        figure.savefig(data, format=kind)
        assert data.getvalue().startswith(start)


def test_labels_can_be_left_out() -> None:
    assert not {"CB1", "CB2", "CB3", "CB4"} & set(texts(plot_one_line(demo().plant, stations=["Cedar"], labels="none")))
    named = set(texts(plot_one_line(demo().plant, stations=["Cedar"], labels="all")))
    assert {"CB1", "CTb1", "CTc1", "L3.DS"} <= named


def test_neighbourhoods_grow_by_steps() -> None:
    plant = demo().plant
    assert neighbourhood(plant, "Alder", 0) == ("Alder",)
    assert neighbourhood(plant, "Alder") == ("Alder", "Birch")
    assert neighbourhood(plant, "Alder", 2) == ("Alder", "Birch", "Cedar", "Dunmore")


def test_mistakes_name_what_is_known() -> None:
    plant = demo().plant
    with pytest.raises(InputError, match="'Alder'"):
        plot_one_line(plant, stations=["Aldr"])
    with pytest.raises(InputError, match="labels"):
        plot_one_line(plant, labels="some")
    with pytest.raises(InputError, match="'L1'"):
        plot_one_line(plant, fault=Location("L11"))
    with pytest.raises(InputError, match="section@position"):
        plot_one_line(plant, fault="L1@half")
    with pytest.raises(InputError, match="isolation"):
        plot_one_line(plant, isolation="every")
    with pytest.raises(InputError, match="protected zone"):
        plot_one_line(plant, protected=["L99"])
    with pytest.raises(InputError, match="station"):
        neighbourhood(plant, "Oak")


@st.composite
def any_plant(draw: st.DrawFn) -> Plant:
    """Sections of any kind joined by devices of any kind in any way: loops, parallel ones, islands."""
    kinds = draw(st.lists(st.sampled_from(list(SectionKind)), min_size=2, max_size=9))
    sections = tuple(Section(name=f"S{i}", kind=k, length=1.0) for i, k in enumerate(kinds))
    ends = st.tuples(st.integers(0, len(kinds) - 1), st.integers(0, len(kinds) - 1)).filter(lambda p: p[0] != p[1])
    what = st.tuples(ends, st.sampled_from(list(DeviceKind)), st.booleans(), st.sampled_from(["", "Elm", "Fir"]))
    devices = tuple(
        Device(
            name=f"D{i}", kind=kind, a=f"S{a}", b=f"S{b}", closed=closed, station=at,
            cores=("1",) if kind is DeviceKind.CT else (),
        )
        for i, ((a, b), kind, closed, at) in enumerate(draw(st.lists(what, min_size=1, max_size=14)))
    )  # fmt: skip
    return Plant(sections=sections, devices=devices, sources=(Source(name="G", section="S0"),))


@settings(max_examples=120, deadline=None)
@given(any_plant())
def test_any_plant_can_be_drawn_with_every_device_on_its_wires(plant: Plant) -> None:
    placed = arrange(plant, station_names(plant))
    assert set(placed.sheet.spots) == set(plant.device)
    assert [d.name for d in plant.devices if not touches(placed.sheet, d)] == []


@settings(max_examples=10, deadline=None)
@given(any_plant())
def test_any_plant_is_drawn_to_the_end(plant: Plant) -> None:
    ax = plot_one_line(plant, fault="S1", labels="all")
    drawn = gids(ax, "breaker") + gids(ax, "ct") + gids(ax, "switch")
    joints = [d for d in plant.devices if d.kind is DeviceKind.JOINT]
    assert len(drawn) + len(joints) == len(plant.devices)


@pytest.mark.parametrize("ct", [CtPlacement.CIRCUIT_SIDE, CtPlacement.BUS_SIDE])
def test_the_mark_of_a_fault_beside_a_breaker_covers_no_symbol(ct: CtPlacement) -> None:
    b = PlantBuilder()
    generator(b, "G1", station="Elm")
    feeder(b, "F1", station="Elm", load_mw=10)
    single_bus(b, "Elm", [Bay("G1", "G1"), Bay("F1", "F1", ct=ct)])
    plant = b.build()
    breaker = plant.device["Elm.F1.CB"]
    sheet = arrange(plant, ["Elm"])
    beside = sorted({breaker.a, breaker.b} - set(sheet.sheet.buses))
    assert beside
    for section in beside:
        at = fault_point(sheet, Location(section))
        assert at is not None
        shape = bolt_of(sheet, at)
        for side in (1, -1):
            corners = [(at[0] + side * x, at[1] + y) for x, y in shape]
            edge = [
                (p[0] + n / 10 * (q[0] - p[0]), p[1] + n / 10 * (q[1] - p[1]))
                for p, q in pairwise([*corners, corners[0]])
                for n in range(10)
            ]
            for name, spot in sheet.sheet.spots.items():
                assert not [p for p in edge if abs(p[0] - spot.x) < 0.1 and abs(p[1] - spot.y) < 0.1], (section, name)
