"""R9: after every opening sensing is evaluated anew: elements reset, pick up, turn round."""

from __future__ import annotations

from schemesim.engine.outcome import Status
from schemesim.plant.model import Location, Plant
from schemesim.plant.terminals import Terminal
from schemesim.scheme.conditions import Direction, Reach
from schemesim.scheme.model import Block, Not, Role
from tests.rules.hand import at, breaker, case, gate, openings, parallel, play, radial, sense, timer, times, trip


def forward(name: str, end: str, reach: float, operate: float = 20) -> Block:
    """A directional element at a line end, looking into its line."""
    line = end[:-1]
    return sense(name, Reach((Terminal(f"{end}.CT", line),), reach, Direction.FORWARD), operate)


def tripped(end: str, by: str, opens: float = 50) -> list[Block]:
    """The breaker of a line end."""
    return [trip(f"{end}.t", by), gate(f"{end}.coil", f"{end}.t"), breaker(f"{end}.CB", f"{end}.coil", opens=opens)]


def test_r09_an_element_resets_when_its_infeed_goes() -> None:
    """F1 opens at 70; the back-up at IN (on at 20, 400 ms to run) loses its current: off at 80, margin 340."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t", "oc"),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
        sense("in", "IN.CT"),
        timer("in.t", "in", 400),
        trip("t9", "in.t", role=Role.LOCAL),
        gate("IN.coil", "t9"),
        breaker("IN.CB", "IN.coil"),
    ]
    run = play(case(radial(), blocks))
    assert at(run, "in", "drops out") == 80
    (stopped,) = [r for r in run.log if r.subject == "in.t" and r.what == "stopped before operating"]
    assert (stopped.t_us, stopped.margin_us) == (80_000, 340_000)
    assert openings(run) == {"F1.CB": (20, 70)}


def test_r09_an_element_that_saw_the_fault_behind_it_sees_it_ahead_after_another_opening() -> None:
    """Current reversal on the healthy line of a pair; fault on L1 at 10 km from S, 90 km from R.

    The element at R on L2 looks into L2, reach 120 km. With L1b closed the fault is nearest through
    R: behind it. L1b trips at 20 and opens at 70; now the only way is L2, S, L1: 110 km ahead.
    It picks up at 70 + 20 = 90 and trips L2b, open at 140. L1a is slow (100 ms): open at 120, too late.
    """
    blocks: list[Block] = [
        *tripped("L1a", "a", opens=100),
        forward("a", "L1a", 110),
        *tripped("L1b", "b"),
        forward("b", "L1b", 110),
        *tripped("L2b", "z"),
        forward("z", "L2b", 120),
    ]
    run = play(case(parallel(), blocks, at=Location("L1", 0.1)))
    assert at(run, "z", "picks up") == 90
    assert openings(run) == {"L1a.CB": (20, 120), "L1b.CB": (20, 70), "L2b.CB": (90, 140)}
    assert run.outcome.t_clear_us == 120_000


def test_r09_it_resets_if_the_fault_is_cleared_before_it_has_operated() -> None:
    """The same with L1a opening at 80: the element saw the fault ahead from 70 to 80, 10 of its 20 ms."""
    blocks: list[Block] = [
        *tripped("L1a", "a", opens=60),
        forward("a", "L1a", 110),
        *tripped("L1b", "b"),
        forward("b", "L1b", 110),
        *tripped("L2b", "z"),
        forward("z", "L2b", 120),
    ]
    run = play(case(parallel(), blocks, at=Location("L1", 0.1)))
    assert openings(run) == {"L1a.CB": (20, 80), "L1b.CB": (20, 70)}
    (stopped,) = [r for r in run.log if r.subject == "z" and r.what == "stopped before operating"]
    assert (stopped.t_us, stopped.margin_us) == (80_000, 10_000)


def test_r09_sequential_tripping_one_end_waits_for_the_other() -> None:
    """No source at R, and L1b has no protection. A fault on L1 at 10 km from S is fed by L1a and round L2 and R.

    L2a looks from S into L2 with a reach of 250 km. The fault lies behind it (10 km by S) until L1a opens at 70;
    then the way is L2, R, L1: 100 + 90 = 190 km ahead. It picks up at 90 and trips; L2a opens at 140, which cuts
    the last way: cleared at 140.
    """
    plant = parallel()
    plant = Plant(plant.sections, plant.devices, (plant.source["GS"],))
    blocks = [*tripped("L1a", "a"), forward("a", "L1a", 80), *tripped("L2a", "z"), forward("z", "L2a", 250)]
    run = play(case(plant, blocks, at=Location("L1", 0.1)))
    assert times(run, "z", "picks up") == [90]
    assert openings(run) == {"L1a.CB": (20, 70), "L2a.CB": (90, 140)}
    assert (run.outcome.status, run.outcome.t_clear_us) == (Status.CLEARED, 140_000)


def test_r09_a_reverse_element_holds_and_lets_go_the_other_way_round() -> None:
    """At L2b a reverse element (operate 5, reset 10) sees the fault behind it from 0 to 70: on at 5, off at 80.

    It blocks z2 with a hold of 60 ms after it drops out: until 140. Without the hold the forward element would trip at
    90; with it, the fault is cleared at 120 (L1a) and z2 is off at 130 before the block falls away.
    """
    reverse = sense("rev", Reach((Terminal("L2b.CT", "L2"),), 150.0, Direction.REVERSE), 5, 10)
    blocks: list[Block] = [
        *tripped("L1a", "a", opens=100),
        forward("a", "L1a", 110),
        *tripped("L1b", "b"),
        forward("b", "L1b", 110),
        forward("z", "L2b", 120),
        reverse,
        timer("hold", "rev", 0, 60),
        trip("L2b.t", "z", Not("hold"), k=2),
        gate("L2b.coil", "L2b.t"),
        breaker("L2b.CB", "L2b.coil"),
    ]
    run = play(case(parallel(), blocks, at=Location("L1", 0.1)))
    assert (at(run, "rev", "picks up"), at(run, "rev", "drops out")) == (5, 80)
    assert at(run, "hold", "resets") == 140
    assert (at(run, "z", "picks up"), at(run, "z", "drops out")) == (90, 130)
    assert openings(run) == {"L1a.CB": (20, 120), "L1b.CB": (20, 70)}

