"""Electrical distances and direction, by hand.

Alder and Birch are joined by parallel lines L1 (40 km) and L2 (50 km), Birch and Cedar by L3 (60 km).
Position 0 of each line is its first station. Each bay is CT, breaker, CT: three devices.
"""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.plant.layouts import Bay, generator, line, single_bus
from schemesim.plant.model import Location, Plant, PlantBuilder
from schemesim.plant.paths import DEVICE_BITS, PathGraph, weight, within


def grid() -> Plant:
    b = PlantBuilder()
    generator(b, "G1")
    for name, length in (("L1", 40.0), ("L2", 50.0), ("L3", 60.0)):
        line(b, name, length)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1"), Bay("L2", "L2")])
    single_bus(b, "Birch", [Bay("L1", "L1", at=1.0), Bay("L2", "L2", at=1.0), Bay("L3", "L3")])
    single_bus(b, "Cedar", [Bay("L3", "L3", at=1.0)])
    return b.build()


def at(fault: Location, opened: set[str], section: str, position: float = 0.0) -> tuple[float, int]:
    """Distance in km and devices passed."""
    found = PathGraph(grid()).distances(fault, opened, cutoff=1000.0)[(section, position)]
    return (found >> DEVICE_BITS) / 1000, found % (1 << DEVICE_BITS)


def test_positions_along_the_faulted_line() -> None:
    fault = Location("L1", 0.25)
    assert at(fault, set(), "L1", 0.0) == (10.0, 0)
    assert at(fault, set(), "L1", 1.0) == (30.0, 0)
    assert at(fault, set(), "Alder.L1.c") == (10.0, 1)
    assert at(fault, set(), "Alder.B1") == (10.0, 3)
    assert at(fault, set(), "Birch.B1") == (30.0, 3)
    assert at(fault, set(), "L3", 0.0) == (30.0, 6)
    assert at(fault, set(), "L3", 1.0) == (90.0, 6)


@pytest.mark.parametrize(("position", "near", "far"), [(0.0, 0.0, 40.0), (1.0, 40.0, 0.0)])
def test_fault_at_the_very_end_of_a_line(position: float, near: float, far: float) -> None:
    fault = Location("L1", position)
    assert at(fault, set(), "L1", 0.0) == (near, 0)
    assert at(fault, set(), "L1", 1.0) == (far, 0)


def test_the_shorter_of_parallel_lines_counts() -> None:
    """From a bus fault at Alder to Birch: 40 km by L1 (six devices), not 50 km by L2."""
    assert at(Location("Alder.B1"), set(), "Birch.B1") == (40.0, 6)
    # The far end of L2 is nearer by L1, Birch and three devices more than along L2 itself.
    assert at(Location("Alder.B1"), set(), "L2", 1.0) == (40.0, 9)


def test_an_opened_device_lengthens_the_path() -> None:
    fault = Location("L1", 0.25)
    # Birch.L1 open: by Alder, 10 km, and L2, 50 km; three devices in each of three bays.
    assert at(fault, {"Birch.L1.CB"}, "Birch.B1") == (60.0, 9)
    # Alder.L1 open: by Birch, 30 km, and L2.
    assert at(fault, {"Alder.L1.CB"}, "Alder.B1") == (80.0, 9)


def test_what_is_cut_off_has_no_distance() -> None:
    graph = PathGraph(grid())
    both = {"Alder.L1.CB", "Birch.L1.CB"}
    found = graph.distances(Location("L1", 0.25), both, cutoff=1000.0)
    assert {section for section, _ in found} == {"L1", "Alder.L1.c", "Birch.L1.c"}


def test_a_device_open_before_the_fault_passes_nothing() -> None:
    b = PlantBuilder()
    generator(b, "G1")
    line(b, "L1", 40.0)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1")])
    b.devices = [replace(d, closed=d.name != "Alder.L1.CB") for d in b.devices]
    found = PathGraph(b.build()).distances(Location("L1", 0.5), set(), cutoff=1000.0)
    assert ("Alder.B1", 0.0) not in found


def test_reach_is_inclusive_and_devices_do_not_count_against_it() -> None:
    """Zone 1 of 30 km and a bus at 30 km behind three devices."""
    graph = PathGraph(grid())
    bus = graph.distances(Location("L1", 0.25), set(), cutoff=30.0)[("Birch.B1", 0.0)]
    assert bus == weight(30.0) + 3
    assert within(bus, 30.0)
    assert not within(bus, 29.999)


def test_cutoff_stops_the_search() -> None:
    graph = PathGraph(grid())
    found = graph.distances(Location("L1", 0.25), set(), cutoff=29.0)
    assert ("Alder.B1", 0.0) in found
    assert ("Birch.B1", 0.0) not in found
    assert ("L1", 1.0) not in found


@pytest.mark.parametrize(
    ("fault", "opened", "alder", "birch"),
    [
        # On the line, anywhere: both ends see it forward.
        (Location("L1", 0.0), set(), "line", "line"),
        (Location("L1", 0.9), set(), "line", "line"),
        # On L2 at 10 km from Alder: Alder 10 km away sees it behind; Birch sees it behind by its own bus,
        # 40 km off, rather than by L1, 50 km off.
        (Location("L2", 0.2), set(), "bus", "bus"),
        # At 2 km from Alder Birch is 48 km away by L2 and 42 km by L1: now it looks through L1.
        (Location("L2", 0.04), set(), "bus", "line"),
        # With the breaker of L2 at Birch open, Birch reaches it through L1 only.
        (Location("L2", 0.2), {"Birch.L2.CB"}, "bus", "line"),
        (Location("Alder.B1"), set(), "bus", "line"),
        (Location("L3", 0.5), set(), "line", "bus"),
        # Between breaker and CT: the CT on the line's side sees it on its bus side.
        (Location("Alder.L1.c"), set(), "bus", "line"),
    ],
)
def test_direction_is_the_nearer_side_of_a_ct(fault: Location, opened: set[str], alder: str, birch: str) -> None:
    graph = PathGraph(grid())
    found = graph.distances(fault, opened, cutoff=1000.0)
    for station, expected in (("Alder", alder), ("Birch", birch)):
        ct = f"{station}.L1.CTc"
        toward_line = found[graph.point(ct, "L1")]
        toward_bus = found[graph.point(ct, f"{station}.L1.c")]
        assert abs(toward_line - toward_bus) == 1  # just the CT itself lies between
        assert ("line" if toward_line < toward_bus else "bus") == expected


def test_a_tap_along_a_line_is_a_point_of_it() -> None:
    """A load tapped at 0.75 of a 40 km line: 20 km from a fault at 0.25."""
    b = PlantBuilder()
    generator(b, "G1")
    generator(b, "G2")
    line(b, "L1", 40.0)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1")])
    single_bus(b, "Tap", [Bay("G2", "G2"), Bay("L1", "L1", at=0.75)])
    graph = PathGraph(b.build())
    assert graph.point("Tap.L1.CTc", "L1") == ("L1", 0.75)
    found = graph.distances(Location("L1", 0.25), set(), cutoff=100.0)
    assert found[("L1", 0.75)] == weight(20.0)
    assert found[("Tap.B1", 0.0)] == weight(20.0) + 3
