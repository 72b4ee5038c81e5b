"""R15: over-reach is asked only where the element would see the fault. R16: delay, loss, false receipt of a channel."""

from __future__ import annotations

import pytest

from schemesim.engine.case import Case
from schemesim.plant.model import Location, Plant
from schemesim.plant.terminals import Terminal
from schemesim.scheme.conditions import Always, Reach
from schemesim.scheme.model import Ask, Block, Component, ComponentKind, FailureMode, Not
from tests.rules.hand import (
    LOST,
    asked,
    breaker,
    case,
    gate,
    openings,
    parallel,
    play,
    sense,
    timer,
    trip,
)

OVER, FALSE = FailureMode.UNWANTED_OPERATION, FailureMode.FALSE_RECEIPT
A = (Terminal("L1a.CT", "L1"),)
B = (Terminal("L1b.CT", "L1"),)


def in_a_row() -> Plant:
    """L1 from S to R, and L2 beyond R with nothing at its other end; sources at S and R."""
    plant = parallel()
    devices = tuple(d for d in plant.devices if not d.name.startswith("L2a"))
    return Plant(plant.sections, devices, plant.sources)


def zone_1(at: Location) -> Case:
    """At L1a: zone 1 to 80 km at 20 ms; if it over-reaches it sees 120 km, into the bus and line behind R."""
    blocks: list[Block] = [
        sense("z1", Reach(A, 80.0)),
        sense("z1+", Reach(A, 120.0)),
        gate("over", "z1+", given=(Ask("R1", OVER),)),
        trip("t", "z1", "over"),
        gate("coil", "t"),
        breaker("L1a.CB", "coil"),
    ]
    return case(in_a_row(), blocks, [Component("R1", ComponentKind.RELAY, ((OVER, 0.01),))], at=at)


@pytest.mark.parametrize(
    ("at", "exposed", "trips"),
    [
        (Location("L1", 0.5), False, True),  # 50 km: in zone 1 anyway, nothing to add
        (Location("L1", 0.9), True, False),  # 90 km: only if it over-reaches
        (Location("R"), True, False),  # 100 km
        (Location("L2", 0.9), True, False),  # 110 km
        (Location("L2", 0.6), False, False),  # 140 km: out of reach even so
        (Location("S"), False, False),  # behind
    ],
)
def test_r15_over_reach_is_asked_where_the_fault_is_exposed_to_it(at: Location, exposed: bool, trips: bool) -> None:
    bound = zone_1(at)
    plain, over = play(bound), play(bound, f"R1: {OVER}")
    assert bool(openings(plain)) is trips
    assert bool(openings(over)) is (trips or exposed)
    assert asked(bound, plain) == ([f"R1: {OVER}"] if exposed else [])


def permissive(at: Location) -> Case:
    """At each end a forward element of 120 km sends a permission over a channel of 15 ms; with its own it trips.

    Behind it stands a second zone of 400 ms.
    """
    modes = ((LOST, 0.01), (FALSE, 0.001))
    blocks: list[Block] = []
    for end, far, terminals in (("a", "b", A), ("b", "a", B)):
        blocks += [
            sense(f"z.{end}", Reach(terminals, 120.0)),
            timer(f"sent.{end}", f"z.{end}", 15),
            gate(f"real.{end}", f"sent.{far}", unless=(Ask("channel", LOST),)),
            sense(f"any.{end}", Always(), 0),
            gate(f"false.{end}", f"any.{end}", given=(Ask("channel", FALSE),)),
            gate(f"received.{end}", f"real.{end}", f"false.{end}"),
            trip(f"85.{end}", f"z.{end}", f"received.{end}", k=2),
            timer(f"z2.{end}", f"z.{end}", 400),
            gate(f"coil.{end}", f"85.{end}", f"z2.{end}"),
            breaker(f"L1{end}.CB", f"coil.{end}"),
        ]
    return case(in_a_row(), blocks, [Component("channel", ComponentKind.CHANNEL, modes)], at=at)


def test_r16_a_permission_arrives_after_the_channels_time() -> None:
    """90 km from S: both ends see it ahead at 20, permissions arrive at 35, both open at 85."""
    assert openings(play(permissive(Location("L1", 0.9)))) == {"L1a.CB": (35, 85), "L1b.CB": (35, 85)}


def test_r16_without_its_channel_the_permissive_scheme_loses_speed() -> None:
    """The second zones trip at 420, open at 470."""
    run = play(permissive(Location("L1", 0.9)), f"channel: {LOST}")
    assert openings(run) == {"L1a.CB": (420, 470), "L1b.CB": (420, 470)}


def test_r16_a_false_permission_costs_security_where_one_end_sees_ahead() -> None:
    """L2 at 10 km from R: end a of L1 sees it at 110 km ahead, end b behind.

    Channel well: a waits for its second zone (nobody else clears: 420, 470). False receipt: a trips at 20.
    """
    bound = permissive(Location("L2", 0.9))
    assert openings(play(bound)) == {"L1a.CB": (420, 470)}
    assert openings(play(bound, f"channel: {FALSE}")) == {"L1a.CB": (20, 70)}


def test_r16_a_false_permission_is_not_asked_once_the_real_one_has_been_received() -> None:
    """At 35 both receipts are there for the reason they should; before 20 nobody cares what the channel says."""
    bound = permissive(Location("L1", 0.9))
    run = play(bound)
    first = min(r.t_us for r in run.log if r.kind == "question")
    assert first == 20_000


def blocking(at: Location) -> Case:
    """End a trips in 120 km after a coordinating delay of 25 ms unless a block arrives; end b looks behind itself."""
    reverse = (Terminal("L1b.CT", "L1b.c"),)
    blocks: list[Block] = [
        sense("z", Reach(A, 120.0)),
        timer("wait", "z", 25),
        sense("behind b", Reach(reverse, 150.0), 10),
        timer("sent", "behind b", 15),
        gate("block", "sent", unless=(Ask("channel", LOST),)),
        trip("85", "wait", Not("block"), k=2),
        gate("coil", "85"),
        breaker("L1a.CB", "coil"),
    ]
    return case(in_a_row(), blocks, [Component("channel", ComponentKind.CHANNEL, ((LOST, 0.01),))], at=at)


def test_r16_blocking_always_waits_its_coordinating_delay() -> None:
    """90 km, on the line: no block, z at 20, trips at 45, opens at 95; the channel is not even asked."""
    bound = blocking(Location("L1", 0.9))
    run = play(bound)
    assert openings(run) == {"L1a.CB": (45, 95)}
    assert run.asked == ()


def test_r16_blocking_loses_security_with_its_channel() -> None:
    """A fault beyond R, 110 km ahead of a: the block leaves b at 10, arrives at 25. Channel lost: a trips at 45."""
    bound = blocking(Location("L2", 0.9))
    assert openings(play(bound)) == {}
    assert openings(play(bound, f"channel: {LOST}")) == {"L1a.CB": (45, 95)}
