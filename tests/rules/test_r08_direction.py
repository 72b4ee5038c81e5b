"""R8: direction is geometric, by the shortest electrical path; what is as near ahead as behind is ahead."""

from __future__ import annotations

import pytest

from schemesim.engine.case import bind
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.plant.layouts import Bay, feeder, generator, line, single_bus
from schemesim.plant.model import Device, DeviceKind, Location, Plant, PlantBuilder, Section, SectionKind
from schemesim.plant.terminals import protected_object
from schemesim.scheme.conditions import Direction, Reach
from schemesim.scheme.delays import Fixed
from schemesim.scheme.model import Breaker, Gate, Scheme, Sense

ENDS = ("Alder.L1", "Alder.L2", "Birch.L1", "Birch.L2")


def plant() -> Plant:
    """Alder with a unit, two lines of 20 km to Birch, one of 10 km on to Cedar.

    L1 leaves Alder over a cable joint and a switch more than L2, so it passes more devices.
    """
    b = PlantBuilder()
    for name, length in (("L1", 20.0), ("L2", 20.0), ("L3", 10.0)):
        line(b, name, length)
    generator(b, "G1", station="Alder")
    feeder(b, "F1", station="Cedar", load_mw=5)
    b.add(
        Section(name="yard", kind=SectionKind.CONDUCTOR, station="Alder"),
        Section(name="cable", kind=SectionKind.CONDUCTOR, station="Alder"),
        Section(name="pole", kind=SectionKind.CONDUCTOR, station="Alder"),
        Device(name="joint 1", kind=DeviceKind.JOINT, a="yard", b="cable"),
        Device(name="joint 2", kind=DeviceKind.JOINT, a="cable", b="pole"),
        Device(name="switch", kind=DeviceKind.SWITCH, a="pole", b="L1", b_at=0.0),
    )
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "yard"), Bay("L2", "L2", at=0)])
    single_bus(b, "Birch", [Bay("L1", "L1", at=1), Bay("L2", "L2", at=1), Bay("L3", "L3", at=0)])
    single_bus(b, "Cedar", [Bay("L3", "L3", at=1), Bay("F1", "F1")])
    return b.build()


def seen(fault: Location, direction: Direction, reach: float = 100.0) -> set[str]:
    """At which ends of L1 and L2 an element with this reach and direction picks up before any opening."""
    p = plant()
    terminals = {
        f"{p.device[t.ct].station}.{name}": t for name in ("L1", "L2") for t in protected_object(p, name).terminals
    }
    assert sorted(terminals) == sorted(ENDS)
    blocks = [
        Sense(name=end, condition=Reach((t,), reach, direction), operate=Fixed(0), reset=Fixed(0))
        for end, t in terminals.items()
    ]
    coil = Gate(name="coil", inputs=ENDS)
    breaker = Breaker(name="Cedar.L3.CB", coils=("coil",), interrupting=Fixed(1), auxiliary=Fixed(0))
    case = bind(compile_scheme(p, Scheme((), (*blocks, coil, breaker))), fault, LogicalSensing())
    return {case.names[b] for b, holds in case.topology(0).holds if holds}


@pytest.mark.parametrize("fault", [Location("L3", 0.5), Location("Birch.B1"), Location("Cedar.B1")], ids=str)
def test_r08_parallel_lines_both_see_a_fault_beyond_them_ahead(fault: Location) -> None:
    """From beyond Birch the way to Alder's CTs is 20 km more over either line: ahead for both.

    At Birch the lines' CTs look away from it: behind for both.
    """
    assert seen(fault, Direction.FORWARD) == {"Alder.L1", "Alder.L2"}
    assert seen(fault, Direction.REVERSE) == {"Birch.L1", "Birch.L2"}


def test_r08_a_fault_on_one_line_is_ahead_at_its_ends_and_at_the_far_end_of_the_other() -> None:
    """L1 at a quarter: Alder 5 km, Birch 15 km. L2 carries from Alder to Birch and on to the fault.

    L2 at Alder: behind by 5 km, ahead by 15 + 20 km: behind. At Birch: behind by 15 km, ahead by
    5 + 20 km: behind.
    """
    assert seen(Location("L1", 0.25), Direction.FORWARD) == {"Alder.L1", "Birch.L1"}
    assert seen(Location("L1", 0.25), Direction.REVERSE) == {"Alder.L2", "Birch.L2"}


def test_r08_reach_counts_along_the_way() -> None:
    """L3 in its middle is 25 km from Alder."""
    assert seen(Location("L3", 0.5), Direction.FORWARD, 24.9) == set()
    assert seen(Location("L3", 0.5), Direction.FORWARD, 25.0) == {"Alder.L1", "Alder.L2"}
