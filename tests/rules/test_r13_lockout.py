"""R13: a lockout latches, adds its own time, blocks closing and is one component for all its contacts."""

from __future__ import annotations

from schemesim.engine.case import Case
from schemesim.engine.outcome import Status
from schemesim.scheme.model import Block, Component, ComponentKind, Latch, Not, Role
from tests.rules.hand import (
    FAILS,
    asked,
    at,
    breaker,
    case,
    fails,
    gate,
    ms,
    openings,
    play,
    radial,
    sense,
    timer,
    times,
    trip,
)


def reclosing(locked_by: str) -> Case:
    """F1 with one automatic reclosing, dead time 300 ms from 52b, closing time 60 ms.

    ``shot`` remembers the first closing command; ``locked_by`` with a shot behind it seals in the lockout.
    """
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t", "oc"),
        gate("coil", "t"),
        timer("dead", Not("F1.CB"), 300),
        gate("close", "dead", Not("86"), k=2),
        Latch(name="shot", set="close"),
        gate("lock", locked_by, "shot", k=2),
        Latch(name="86", set="lock"),
        breaker("F1.CB", "coil", close="close", closing=ms(60)),
    ]
    return case(radial(), blocks)


def test_r13_reclosing_onto_the_fault_trips_again_and_locks_out() -> None:
    """Energised 20, open 70, 52b 75; dead time over at 375: closing, closed at 435: fed again.

    oc (off at 80) picks up anew at 455, trips, and with the shot behind it the lockout seals in at 455.
    Open at 505, 52b at 510; at 810 the dead time is over again, but the lockout blocks the closing.
    Cleared means first cleared: 70.
    """
    run = play(reclosing("t"))
    assert at(run, "F1.CB", "closing") == 375
    assert at(run, "F1.CB", "closes") == 435
    assert at(run, "F1", "fed again") == 435
    assert times(run, "oc", "picks up") == [20, 455]
    assert at(run, "86", "seals in") == 455
    assert times(run, "F1.CB", "opens") == [70, 505]
    assert times(run, "dead", "operates") == [375, 810]
    assert (run.outcome.status, run.outcome.t_clear_us) == (Status.CLEARED, 70_000)
    assert openings(run) == {"F1.CB": (20, 70)}
    assert run.final_mask == 1, "it ends open"
    assert not run.outcome.at_horizon


def test_r13_without_a_lockout_it_would_pump_until_the_horizon() -> None:
    """The lock waits for 86 itself, which never comes: every 435 ms the breaker closes again."""
    run = play(reclosing("86"), horizon_us=2_000_000)
    assert times(run, "F1.CB", "closes") == [435, 870, 1305, 1740]
    assert run.outcome.at_horizon
    assert run.outcome.status is Status.CLEARED


def test_r13_a_trip_that_stands_keeps_an_open_breaker_open() -> None:
    """t seals in (no lockout in the closing circuit): the command at 375 finds the coil energised."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        Latch(name="94", set="oc"),
        trip("t", "94"),
        gate("coil", "t"),
        timer("dead", Not("F1.CB"), 300),
        breaker("F1.CB", "coil", close="dead", closing=ms(60)),
    ]
    run = play(case(radial(), blocks))
    assert at(run, "dead", "operates") == 375
    assert times(run, "F1.CB", "closing") == []


def test_r13_a_command_given_before_the_breaker_is_open_closes_it_once_it_is() -> None:
    """The command stands from 40, the breaker opens at 70 and shows 52b at 75: it starts closing at 75, closed 135."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t", "oc", Not("early"), k=2),
        gate("coil", "t"),
        timer("early", "oc", 20, 500),
        breaker("F1.CB", "coil", close="early", closing=ms(60)),
    ]
    run = play(case(radial(), blocks))
    assert at(run, "early", "operates") == 40
    assert at(run, "F1.CB", "closing") == 75
    assert at(run, "F1.CB", "closes") == 135


def busbar() -> Case:
    """87B by current at IN (20 ms) through a lockout of 8 ms that trips IN, F1 and F2."""
    blocks: list[Block] = [
        sense("87B", "IN.CT"),
        Latch(name="86.coil", set="87B"),
        timer("86.time", "86.coil", 8),
        trip("86", "86.time", unless=fails("86B"), role=Role.MAIN),
    ]
    for name in ("IN", "F1", "F2"):
        blocks += [gate(f"{name}.coil", "86"), breaker(f"{name}.CB", f"{name}.coil")]
    return case(radial(), blocks, [Component("86B", ComponentKind.LOCKOUT, ((FAILS, 0.001),))], at="B")


def test_r13_it_adds_its_own_time_and_stays() -> None:
    """Picks up at 20, the lockout's contacts close at 28, everything opens at 78; it never resets."""
    bound = busbar()
    run = play(bound)
    assert openings(run) == {"F1.CB": (28, 78), "F2.CB": (28, 78), "IN.CB": (28, 78)}
    assert at(run, "87B", "drops out") == 88
    assert times(run, "86", "resets") == []


def test_r13_one_component_for_all_its_contacts() -> None:
    bound = busbar()
    run = play(bound, f"86B: {FAILS}")
    assert asked(bound, run) == [f"86B: {FAILS}"]
    assert openings(run) == {}
