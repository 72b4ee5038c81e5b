"""R8: cleared when no closed path joins the fault to a source. R17: in two protected zones both trip."""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.engine.outcome import Status
from schemesim.plant.model import Plant, Section, SectionKind, Source
from schemesim.scheme.conditions import InZone
from schemesim.scheme.model import Block
from tests.rules.hand import at, breaker, case, gate, openings, parallel, play, radial, sense, times, trip


def each_end(opens: dict[str, float]) -> list[Block]:
    """Each breaker is tripped at 20 by the current at its own CT."""
    blocks: list[Block] = []
    for cb, interrupting in opens.items():
        x = cb.removesuffix(".CB")
        blocks += [sense(f"{x}.50", f"{x}.CT"), trip(f"{x}.t", f"{x}.50"), gate(f"{x}.coil", f"{x}.t")]
        blocks.append(breaker(cb, f"{x}.coil", opens=interrupting))
    return blocks


def test_r08_cleared_at_the_opening_of_the_last_end_that_feeds() -> None:
    """L1, fed at both ends: L1a opens at 20 + 50, L1b at 20 + 80 = 100: cleared at 100 and not before."""
    bound = case(parallel(), each_end({"L1a.CB": 50, "L1b.CB": 80}), at="L1")
    run = play(bound)
    assert bound.duty.needed == {"L1a.CB", "L1b.CB"}
    assert openings(run) == {"L1a.CB": (20, 70), "L1b.CB": (20, 100)}
    assert at(run, "L1", "cleared") == 100
    assert run.outcome.t_clear_us == 100_000


def test_r08_the_end_without_a_source_behind_it_need_not_open() -> None:
    """No source at R and L2 away: current flows from S only. L1a alone clears; L1b sees no current."""
    plant = parallel()
    plant = Plant(
        plant.sections, tuple(d for d in plant.devices if not d.name.startswith("L2")), (plant.source["GS"],)
    )
    bound = case(plant, each_end({"L1a.CB": 50, "L1b.CB": 50}), at="L1")
    run = play(bound)
    assert bound.duty.needed == {"L1a.CB"}
    assert openings(run) == {"L1a.CB": (20, 70)}
    assert run.outcome.t_clear_us == 70_000


def test_r08_round_the_parallel_line_the_other_end_carries_until_the_way_is_cut() -> None:
    """No source at R but L2 closed: L1b is fed round S - L2 - R. Both ends open at 70."""
    plant = parallel()
    plant = Plant(plant.sections, plant.devices, (plant.source["GS"],))
    bound = case(plant, each_end({"L1a.CB": 50, "L1b.CB": 50}), at="L1")
    assert bound.duty.needed == {"L1a.CB", "L1b.CB"}
    assert openings(play(bound)) == {"L1a.CB": (20, 70), "L1b.CB": (20, 70)}


def test_r08_a_load_stub_carries_no_fault_current() -> None:
    """A fault on F1: the detector of F2 does not pick up though F2 carries its load."""
    run = play(case(radial(), each_end({"F1.CB": 50, "F2.CB": 50}), at="F1"))
    assert openings(run) == {"F1.CB": (20, 70)}
    assert times(run, "F2.50", "picks up") == []


def test_r08_a_fault_that_no_source_feeds() -> None:
    """A dead section of its own: nothing flows, and the run says so."""
    plant = radial()
    plant = Plant((*plant.sections, Section(name="X", kind=SectionKind.FEEDER)), plant.devices, plant.sources)
    run = play(case(plant, each_end({"F1.CB": 50}), at="X"))
    assert (run.outcome.status, run.outcome.t_clear_us, openings(run)) == (Status.NOT_FED, None, {})


def test_r08_a_source_in_the_zone_of_the_fault_is_cleared_by_its_own_trip() -> None:
    """A generator on F1 with a trip (field, prime mover) of 200 ms from 20: cleared at 220, not at 70."""
    plant = radial()
    plant = Plant(plant.sections, plant.devices, (*plant.sources, Source(name="G1", section="F1", trips=True)))
    blocks: list[Block] = [
        *each_end({"F1.CB": 50}),
        sense("87", InZone(frozenset({"F1"}), ("F1.CT",))),
        trip("G1.t", "87"),
        gate("G1.coil", "G1.t"),
        breaker("G1", "G1.coil", opens=200),
    ]
    bound = case(plant, blocks)
    run = play(bound)
    assert bound.duty.needed == {"F1.CB", "G1"}
    assert openings(run) == {"F1.CB": (20, 70), "G1": (20, 220)}
    assert run.outcome.t_clear_us == 220_000


def test_r08_a_breaker_open_before_the_event_neither_feeds_nor_trips() -> None:
    """F1.CB stands open: a fault on F1 is not fed; one on the bus trips IN.CB alone, F1.CB has nothing to open.

    Its 52a is open from the start, so the trip that waits for it never comes.
    """
    plant = radial()
    devices = tuple(replace(d, closed=d.name != "F1.CB") for d in plant.devices)
    plant = Plant(plant.sections, devices, plant.sources)
    blocks: list[Block] = [
        sense("87", InZone(frozenset({"B"}), ("IN.CT",))),
        trip("t87", "87"),
        trip("if closed", "87", "F1.CB", k=2),
        gate("IN.coil", "t87"),
        gate("F1.coil", "t87"),
        gate("F2.coil", "if closed"),
        breaker("IN.CB", "IN.coil"),
        breaker("F1.CB", "F1.coil"),
        breaker("F2.CB", "F2.coil"),
    ]
    assert openings(play(case(plant, blocks, at="B"))) == {"IN.CB": (20, 70)}
    assert play(case(plant, blocks, at="F1")).outcome.status is Status.NOT_FED


@pytest.mark.parametrize(
    ("section", "expected"),
    [
        ("B", {"IN.CB": (25, 75)}),
        ("F1", {"F1.CB": (20, 70)}),
        ("F1.c", {"F1.CB": (20, 70), "IN.CB": (25, 75)}),
    ],
)
def test_r17_a_fault_where_two_protected_zones_overlap_trips_both(
    section: str, expected: dict[str, tuple[float, float]]
) -> None:
    """The bus differential (25 ms) reaches to F1.CT, the feeder protection (20 ms) begins at the bus side.

    Between CB and CT, on F1.c, both see the fault: both trip, none waits for the other.
    """
    blocks: list[Block] = [
        sense("87B", InZone(frozenset({"B", "F1.c"}), ("IN.CT",)), 25, 0),
        sense("87F", InZone(frozenset({"F1", "F1.c"}), ("IN.CT",)), 20, 0),
        trip("tB", "87B"),
        trip("tF", "87F"),
        gate("IN.coil", "tB"),
        gate("F1.coil", "tF"),
        breaker("IN.CB", "IN.coil"),
        breaker("F1.CB", "F1.coil"),
    ]
    run = play(case(radial(), blocks, at=section))
    assert openings(run) == expected
