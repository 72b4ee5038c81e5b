"""R5: a block that needs a failed item behaves as its mode says. R6: contact AND DC AND coil AND mechanism."""

from __future__ import annotations

import pytest

from schemesim.engine.case import Case
from schemesim.engine.outcome import Status
from schemesim.scheme.conditions import InZone, OutOfZone
from schemesim.scheme.model import Ask, Block, Component, ComponentKind, FailureMode, Not, Role
from tests.rules.hand import (
    FAILS,
    LOST,
    at,
    breaker,
    case,
    fails,
    gate,
    openings,
    play,
    radial,
    relay,
    sense,
    timer,
    trip,
)

STUCK, OPEN = FailureMode.DOES_NOT_OPEN, FailureMode.OPEN
DC = (Ask("DC", LOST),)


def full_path() -> Case:
    """oc picks up at 20; t needs R1 and DC; the coil needs itself and DC; CB1 may be stuck."""
    components = [
        relay("R1"),
        Component("DC", ComponentKind.DC, ((LOST, 1e-4),)),
        Component("C1", ComponentKind.COIL, ((FAILS, 1e-3),)),
        Component("CB1", ComponentKind.BREAKER, ((STUCK, 1e-2),)),
    ]
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t", "oc", unless=(*fails("R1"), *DC)),
        gate("coil", "t", unless=(*fails("C1"), *DC)),
        breaker("F1.CB", "coil", component="CB1"),
    ]
    return case(radial(), blocks, components)


def test_r06_a_whole_path_trips() -> None:
    """Picks up 20, coil energised 20, interrupts 70: cleared at 70."""
    run = play(full_path())
    assert openings(run) == {"F1.CB": (20, 70)}
    assert (run.outcome.status, run.outcome.t_clear_us) == (Status.CLEARED, 70_000)


@pytest.mark.parametrize("part", [f"R1: {FAILS}", f"DC: {LOST}", f"C1: {FAILS}", f"CB1: {STUCK}"])
def test_r06_each_part_alone_breaks_the_path(part: str) -> None:
    run = play(full_path(), part)
    assert openings(run) == {}
    assert (run.outcome.status, run.outcome.t_clear_us) == (Status.NOT_CLEARED, None)


def test_r06_a_second_coil_opens_it_unless_the_mechanism_is_stuck() -> None:
    """t drives coil 1 and coil 2, each with its own failure: one of them is enough; a stuck breaker opens by none."""
    components = [
        Component("C1", ComponentKind.COIL, ((FAILS, 1e-3),)),
        Component("C2", ComponentKind.COIL, ((FAILS, 1e-3),)),
        Component("CB1", ComponentKind.BREAKER, ((STUCK, 1e-2),)),
    ]
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t", "oc"),
        gate("coil1", "t", unless=fails("C1")),
        gate("coil2", "t", unless=fails("C2")),
        breaker("F1.CB", "coil1", "coil2", component="CB1"),
    ]
    bound = case(radial(), blocks, components)
    assert openings(play(bound, f"C1: {FAILS}")) == {"F1.CB": (20, 70)}
    assert openings(play(bound, f"C2: {FAILS}")) == {"F1.CB": (20, 70)}
    assert openings(play(bound, f"C1: {FAILS}", f"C2: {FAILS}")) == {}
    assert openings(play(bound, f"CB1: {STUCK}")) == {}


def test_r06_an_energised_coil_commits_the_breaker_though_the_trip_falls_away() -> None:
    """The trip is a pulse of 5 ms, from 20 to 25; the breaker opens at 70 all the same."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        timer("over", "oc", 5),
        trip("t", "oc", Not("over"), k=2),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
    ]
    run = play(case(radial(), blocks))
    assert at(run, "coil", "resets") == 25
    assert openings(run) == {"F1.CB": (20, 70)}


def test_r06_a_pulse_of_no_length_commits_too() -> None:
    """The trip lasts one pass of the instant 20: t operates in pass 0, over in pass 1 ends it."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        timer("over", "oc", 0),
        trip("t", "oc", Not("over"), k=2),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
    ]
    run = play(case(radial(), blocks))
    assert at(run, "coil", "operates") == at(run, "coil", "resets") == 20
    assert openings(run) == {"F1.CB": (20, 70)}


def test_r05_one_battery_takes_everything_that_hangs_on_it() -> None:
    """DC of F1 also feeds its second set; the back-up at IN hangs on another one: 20 + 400, open at 470."""
    components = [Component("DC", ComponentKind.DC, ((LOST, 1e-4),))]
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t1", "oc", unless=DC),
        trip("t2", "oc", unless=DC),
        gate("coil", "t1", "t2"),
        breaker("F1.CB", "coil"),
        sense("in", "IN.CT"),
        timer("in.t", "in", 400),
        trip("t9", "in.t", role=Role.LOCAL),
        gate("IN.coil", "t9"),
        breaker("IN.CB", "IN.coil"),
    ]
    bound = case(radial(), blocks, components)
    assert openings(play(bound)) == {"F1.CB": (20, 70)}
    run = play(bound, f"DC: {LOST}")
    assert openings(run) == {"IN.CB": (420, 470)}
    assert run.outcome.openings[0].role is Role.LOCAL


def differential() -> list[Block]:
    """A differential of the bus: IN.CT, F1.CT and F2.CT enclose B and the three short conductors.

    With the core of F1.CT open it sees nothing of a bus fault that is fed through IN only, and the
    current of a fault beyond F1.CT is missing from its sum.
    """
    sections = frozenset({"B", "IN.c", "F1.c", "F2.c"})
    opened = (Ask("F1.CT.1", OPEN),)
    return [
        sense("87", InZone(sections, ("IN.CT", "F1.CT", "F2.CT"))),
        sense("sum", OutOfZone(sections, "F1.CT"), 30),
        trip("t87", "87"),
        trip("unbalanced", "sum", given=opened),
        gate("coil", "t87", "unbalanced"),
        breaker("IN.CB", "coil"),
        sense("oc", "F1.CT", 50),
        trip("t50", "oc", unless=opened),
        gate("F1.coil", "t50"),
        breaker("F1.CB", "F1.coil"),
    ]


def test_r05_an_open_ct_core_blinds_its_own_function_and_unbalances_a_differential() -> None:
    """A fault on F1. Core well: oc trips F1.CB at 50, open at 100. Core open: oc is blind, the bus trips at 30."""
    core = [Component("F1.CT.1", ComponentKind.CT_CORE, ((OPEN, 1e-4),))]
    bound = case(radial(), differential(), core)
    assert openings(play(bound)) == {"F1.CB": (50, 100)}
    assert openings(play(bound, f"F1.CT.1: {OPEN}")) == {"IN.CB": (30, 80)}


def test_r05_an_open_core_is_no_question_where_its_current_does_not_flow() -> None:
    """A fault on the bus: nothing flows through F1.CT, and the differential trips at 20 whatever its core."""
    core = [Component("F1.CT.1", ComponentKind.CT_CORE, ((OPEN, 1e-4),))]
    bound = case(radial(), differential(), core, at="B")
    assert play(bound).asked == ()
    assert openings(play(bound, f"F1.CT.1: {OPEN}")) == {"IN.CB": (20, 70)}
