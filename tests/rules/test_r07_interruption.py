"""R7: a breaker carries until its interrupting time.

One that opens but does not interrupt shows 52b and still carries.
"""

from __future__ import annotations

from schemesim.engine.case import Case
from schemesim.engine.outcome import Status
from schemesim.scheme.model import Block, Component, ComponentKind, FailureMode, Not, Role
from tests.rules.hand import at, breaker, case, gate, openings, play, radial, sense, timer, times, trip

CARRIES, LATE = FailureMode.DOES_NOT_INTERRUPT, FailureMode.OPENS_LATE


def failing() -> Case:
    """F1 trips at 20. Two back-ups at IN: by current after 150 ms from 20, by 52a after 150 ms from 20."""
    modes = ((CARRIES, 0.01), (LATE, 0.01))
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t", "oc"),
        gate("coil", "t"),
        breaker("F1.CB", "coil", component="CB1", late_by=timer("x", "oc", 30).pick_up),
        timer("62", "t", 150),
        trip("bf.current", "62", "oc", k=2, role=Role.BREAKER_FAILURE),
        gate("IN.coil", "bf.current"),
        breaker("IN.CB", "IN.coil"),
        trip("bf.52a", "62", "F1.CB", k=2, role=Role.BREAKER_FAILURE),
        gate("F2.coil", "bf.52a"),
        breaker("F2.CB", "F2.coil"),
    ]
    return case(radial(), blocks, [Component("CB1", ComponentKind.BREAKER, modes)], observe={"bf.52a"})


def test_r07_current_flows_until_the_interrupting_time_and_52a_follows() -> None:
    """Energised 20, interrupts 70, the detector (reset 10) drops out at 80, 52a opens at 75."""
    run = play(failing())
    assert openings(run) == {"F1.CB": (20, 70)}
    assert at(run, "F1", "cleared") == 70
    assert at(run, "F1.CB", "52a open") == 75
    assert at(run, "oc", "drops out") == 80
    assert times(run, "62", "operates") == [], "t resets with oc at 80 and stops the timer due at 170"


def test_r07_a_late_breaker_carries_until_its_late_interruption() -> None:
    """50 + 30 late: interrupts at 100, 52a at 105, detector off at 110."""
    run = play(failing(), f"CB1: {LATE}")
    assert openings(run) == {"F1.CB": (20, 100)}
    assert (at(run, "F1.CB", "52a open"), at(run, "oc", "drops out")) == (105, 110)


def test_r07_one_that_opens_but_does_not_interrupt_shows_52b_and_still_carries() -> None:
    """Contacts part at 70 and 52a opens at 75, but the current goes on: not cleared at 70.

    At 170 the timer runs out: the current says failed, IN.CB opens at 220 and clears;
    52a says open, so the back-up by 52a sees no failure.
    """
    run = play(failing(), f"CB1: {CARRIES}")
    assert at(run, "F1.CB", "opens but does not interrupt") == 70
    assert at(run, "F1.CB", "52a open") == 75
    assert openings(run) == {"F1.CB": (20, 70), "IN.CB": (170, 220)}
    assert [o.interrupted for o in run.outcome.openings] == [False, True]
    assert run.outcome.operated == ()
    assert (run.outcome.status, run.outcome.t_clear_us) == (Status.CLEARED, 220_000)
    assert at(run, "oc", "drops out") == 230


def test_r07_52b_as_an_inverted_input_follows_the_auxiliary_contact() -> None:
    """A timer of 100 ms on 52b starts at 75 and runs out at 175; it trips IN.CB, open at 225."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t", "oc"),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
        timer("open for long", Not("F1.CB"), 100),
        trip("t9", "open for long"),
        gate("IN.coil", "t9"),
        breaker("IN.CB", "IN.coil"),
    ]
    assert openings(play(case(radial(), blocks))) == {"F1.CB": (20, 70), "IN.CB": (175, 225)}
