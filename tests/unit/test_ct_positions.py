"""The CT of a breaker in another place: the plant is the one the layout would have made, and faults stay as many."""

from __future__ import annotations

import math

import pytest

from schemesim.errors import InputError
from schemesim.plant.coverage import coverage_audit
from schemesim.plant.ct_positions import ct_frequencies, with_ct
from schemesim.plant.layouts import Bay, CtPlacement, feeder, generator, line, ring, single_bus
from schemesim.plant.model import Location, Plant, PlantBuilder

PLACES = (CtPlacement.BOTH, CtPlacement.BUS_SIDE, CtPlacement.CIRCUIT_SIDE)


def grid(ct: CtPlacement) -> Plant:
    """A line between Alder and Birch, with the CT of its bay at Birch in some place."""
    b = PlantBuilder()
    line(b, "L1", 40)
    generator(b, "G1", station="Alder")
    generator(b, "G2", station="Birch")
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1", at=0)])
    single_bus(b, "Birch", [Bay("L1", "L1", at=1, ct=ct), Bay("G2", "G2")])
    return b.build()


@pytest.mark.parametrize("after", PLACES)
@pytest.mark.parametrize("before", PLACES)
def test_it_is_as_the_layout_would_have_made_it(before: CtPlacement, after: CtPlacement) -> None:
    assert with_ct(grid(before), "Birch.L1.CB", after) == grid(after)
    assert with_ct(grid(before), "Birch.L1", str(after)) == grid(after)


def test_the_dead_zone_moves_with_it() -> None:
    def dead(plant: Plant) -> list[str]:
        return [row.section for row in coverage_audit(plant).rows if row.dead_zone]

    plant = grid(CtPlacement.BOTH)
    assert dead(plant) == []
    assert dead(with_ct(plant, "Birch.L1.CB", "bus_side")) == ["Birch.L1.b"]
    assert dead(with_ct(plant, "Birch.L1.CB", "circuit_side")) == ["Birch.L1.c"]


def test_a_breaker_with_a_number() -> None:
    b = PlantBuilder()
    generator(b, "G1", station="Alder")
    for n in (1, 2):
        feeder(b, f"F{n}", 10, station="Alder")
    ring(b, "Alder", [Bay(x, x) for x in ("G1", "F1", "F2")])
    plant = b.build()
    name = plant.breakers[0]
    moved = with_ct(plant, name, "bus_side")
    assert len(moved.devices) == len(plant.devices) - 1
    assert with_ct(moved, name, "both") == plant


@pytest.mark.parametrize("before", PLACES)
@pytest.mark.parametrize("after", PLACES)
def test_faults_stay_as_many(before: CtPlacement, after: CtPlacement) -> None:
    plant = grid(before)
    moved = with_ct(plant, "Birch.L1.CB", after)
    rates = dict.fromkeys(plant.locations(), 0.002)
    found = ct_frequencies(rates, plant, moved)
    assert set(found) == set(moved.locations())
    assert math.isclose(sum(found.values()), sum(rates.values()), rel_tol=1e-12)
    away = {p: f for p, f in found.items() if not p.section.startswith("Birch.L1.")}
    assert away == {p: f for p, f in rates.items() if not p.section.startswith("Birch.L1.")}


def test_a_position_without_faults_stays_without() -> None:
    plant = grid(CtPlacement.BUS_SIDE)
    rates = {Location("L1", 0.5): 0.1}
    assert ct_frequencies(rates, plant, with_ct(plant, "Birch.L1", "both")) == rates


@pytest.mark.parametrize(
    ("breaker", "ct", "expected"),
    [
        ("Birch.L2.CB", "both", "the name of a breaker"),
        ("Birch.L1.CB", "line_side", "the line side is the circuit side"),
        ("Birch.L1.CB", "dead_tank", "one of both, bus_side, circuit_side"),
    ],
)
def test_what_cannot_be_moved(breaker: str, ct: str, expected: str) -> None:
    with pytest.raises(InputError, match=expected):
        with_ct(grid(CtPlacement.BOTH), breaker, ct)


def test_cts_inside_a_tank_stay() -> None:
    with pytest.raises(InputError, match="free-standing"):
        with_ct(grid(CtPlacement.DEAD_TANK), "Birch.L1.CB", "bus_side")
