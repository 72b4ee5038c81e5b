"""R4: a question is asked as late as its answer can matter, once, in canonical order."""

from __future__ import annotations

from fractions import Fraction

import pytest

from schemesim.engine.answers import ForcedAnswers
from schemesim.engine.event import run_event
from schemesim.scheme.model import (
    Ask,
    Block,
    CommonCause,
    Component,
    ComponentKind,
    FailureMode,
    Gate,
    Latch,
    Not,
    Role,
)
from tests.rules.hand import (
    FAILS,
    asked,
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


def back_up() -> list[Block]:
    """On IN: picks up at 20, timer 400, trip at 420, opens at 470."""
    return [
        sense("in", "IN.CT"),
        timer("in.t", "in", 400),
        trip("t9", "in.t", unless=fails("R9"), role=Role.LOCAL),
        gate("IN.coil", "t9"),
        breaker("IN.CB", "IN.coil"),
    ]


def test_r04_nothing_is_asked_of_an_element_that_does_not_pick_up() -> None:
    """A fault on F2: the elements of F1 see nothing, and the fault is nobody's to clear."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t", "oc", unless=fails("R1")),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay("R1")], at="F2")
    assert play(bound).asked == ()


def test_r04_a_trip_toward_a_committed_breaker_asks_nothing() -> None:
    """R1 at 20 and R2 at 40 on one coil. R1 well: committed at 20, R2 is never asked. R1 fails: R2 is asked at 40."""
    blocks: list[Block] = [
        sense("oc1", "F1.CT", 20),
        sense("oc2", "F1.CT", 40),
        trip("t1", "oc1", unless=fails("R1")),
        trip("t2", "oc2", unless=fails("R2")),
        gate("coil", "t1", "t2"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay("R1"), relay("R2")])
    well, failed = play(bound), play(bound, f"R1: {FAILS}")
    assert asked(bound, well) == [f"R1: {FAILS}"]
    assert openings(well) == {"F1.CB": (20, 70)}
    assert asked(bound, failed) == [f"R1: {FAILS}", f"R2: {FAILS}"]
    assert openings(failed) == {"F1.CB": (40, 90)}
    assert [r.t_us for r in failed.log if r.kind == "question"] == [20_000, 40_000]


def test_r04_it_is_asked_where_something_else_starts_from_it() -> None:
    """As above, but t2 also starts a breaker-failure timer toward IN.CB: now R2 matters at 40, and is asked.

    R2 well: F1.CB is open at 70, the detector (reset 10) off at 80; the timer would run out at 40 + 60.
    """
    blocks: list[Block] = [
        sense("oc1", "F1.CT", 20),
        sense("oc2", "F1.CT", 40),
        trip("t1", "oc1", unless=fails("R1")),
        trip("t2", "oc2", unless=fails("R2")),
        gate("coil", "t1", "t2"),
        breaker("F1.CB", "coil"),
        timer("62", "t2", 60),
        trip("bf", "62", "oc1", k=2, role=Role.BREAKER_FAILURE),
        gate("IN.coil", "bf"),
        breaker("IN.CB", "IN.coil"),
    ]
    bound = case(radial(), blocks, [relay("R1"), relay("R2")])
    run = play(bound)
    assert asked(bound, run) == [f"R1: {FAILS}", f"R2: {FAILS}"]
    assert openings(run) == {"F1.CB": (20, 70)}


def test_r04_a_delayed_element_is_asked_when_its_time_has_run_out() -> None:
    """The back-up on IN picks up at 20; R9 is asked at 420, and only if the fault is still there."""
    main: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t1", "oc", unless=fails("R1")),
        gate("coil", "t1"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), [*main, *back_up()], [relay("R1"), relay("R9")])
    well, failed = play(bound), play(bound, f"R1: {FAILS}")
    assert asked(bound, well) == [f"R1: {FAILS}"]
    assert [(r.subject, r.t_us) for r in failed.log if r.kind == "question"] == [
        (f"R1: {FAILS}", 20_000),
        (f"R9: {FAILS}", 420_000),
    ]
    assert openings(failed) == {"IN.CB": (420, 470)}


def test_r04_a_breaker_is_asked_when_its_coil_is_energised() -> None:
    """Both modes of CB1 at 20, in the order of the modes; those of CB9 only when IN is tripped."""
    stuck, late = FailureMode.DOES_NOT_OPEN, FailureMode.OPENS_LATE
    components = [
        Component("CB1", ComponentKind.BREAKER, ((late, 0.1), (stuck, 0.1))),
        Component("CB9", ComponentKind.BREAKER, ((stuck, 0.1),)),
        relay("R9"),
    ]
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t1", "oc"),
        gate("coil", "t1"),
        breaker("F1.CB", "coil", component="CB1", late_by=timer("x", "oc", 100).pick_up),
        *back_up()[:-1],
        breaker("IN.CB", "IN.coil", component="CB9"),
    ]
    bound = case(radial(), blocks, components)
    assert asked(bound, play(bound)) == [f"CB1: {stuck}", f"CB1: {late}"]
    assert asked(bound, play(bound, f"CB1: {stuck}")) == [f"CB1: {stuck}", f"R9: {FAILS}", f"CB9: {stuck}"]
    late_run = play(bound, f"CB1: {late}")
    assert openings(late_run) == {"F1.CB": (20, 170)}, "50 and 100 late"


def test_r04_a_mode_without_an_effect_is_not_asked() -> None:
    """A breaker with no lateness stated cannot open late: nothing depends on the answer."""
    late = FailureMode.OPENS_LATE
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t1", "oc"),
        gate("coil", "t1"),
        breaker("F1.CB", "coil", component="CB1"),
    ]
    bound = case(radial(), blocks, [Component("CB1", ComponentKind.BREAKER, ((late, 0.1),))])
    assert play(bound).asked == ()


def tie(roles: tuple[Role, Role]) -> list[Block]:
    """Two trips at 20 on one coil."""
    return [
        sense("oc", "F1.CT"),
        trip("a", "oc", unless=fails("RA"), role=roles[0]),
        trip("b", "oc", unless=fails("RB"), role=roles[1]),
        gate("coil", "a", "b"),
        breaker("F1.CB", "coil"),
    ]


@pytest.mark.parametrize(
    ("roles", "order"),
    [
        ((Role.MAIN, Role.LOCAL), ["RA", "RB"]),
        ((Role.LOCAL, Role.MAIN), ["RB", "RA"]),
        ((Role.REMOTE, Role.BREAKER_FAILURE), ["RB", "RA"]),
    ],
)
def test_r04_ties_ask_and_count_in_the_order_of_roles(roles: tuple[Role, Role], order: list[str]) -> None:
    bound = case(radial(), tie(roles), [relay("RA"), relay("RB")])
    first, second = sorted(roles)
    well, failed = play(bound), play(bound, f"{order[0]}: {FAILS}")
    assert asked(bound, well) == [f"{order[0]}: {FAILS}"]
    assert well.outcome.openings[0].role is first
    assert asked(bound, failed) == [f"{r}: {FAILS}" for r in order]
    assert failed.outcome.openings[0].role is second


def test_r04_a_tie_goes_to_main_though_the_back_up_stands_nearer_the_coil() -> None:
    """The back-up feeds the coil at once, the main trip through two gates that ask for themselves.

    Nearest first, the back-up's relay RB is asked before RM; the breaker is not committed
    before the main trip's answers are in, since it would be main at the same instant.
    """
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("b", "oc", unless=fails("RB"), role=Role.LOCAL),
        trip("m", "oc", unless=fails("RM"), role=Role.MAIN),
        gate("m2", "m", unless=fails("RX")),
        gate("either", "b", "m2"),
        gate("coil", "either"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay("RB"), relay("RM"), relay("RX")])
    run = play(bound)
    assert set(asked(bound, run)) == {f"{r}: {FAILS}" for r in ("RB", "RM", "RX")}
    assert (run.outcome.openings[0].role, run.outcome.openings[0].via) == (Role.MAIN, "m")
    assert play(bound, f"RX: {FAILS}").outcome.openings[0].role is Role.LOCAL
    assert play(bound, f"RM: {FAILS}").outcome.openings[0].role is Role.LOCAL


def test_r04_a_tie_over_two_coils_goes_to_main_once_its_coil_is_known_to_be_well() -> None:
    """Main on coil 2, whose own failure is a question; the back-up on coil 1 that asks nothing."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("b", "oc", role=Role.LOCAL),
        trip("m", "oc", role=Role.MAIN),
        gate("coil1", "b"),
        gate("coil2", "m", unless=fails("C2")),
        breaker("F1.CB", "coil1", "coil2"),
    ]
    bound = case(radial(), blocks, [Component("C2", ComponentKind.COIL, ((FAILS, 0.01),))])
    well, failed = play(bound), play(bound, f"C2: {FAILS}")
    assert asked(bound, well) == asked(bound, failed) == [f"C2: {FAILS}"]
    assert well.outcome.openings[0].role is Role.MAIN
    assert failed.outcome.openings[0].role is Role.LOCAL


def test_r04_a_component_of_many_functions_is_asked_once() -> None:
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t1", "oc", unless=fails("R1")),
        trip("t2", "oc", unless=fails("R1")),
        gate("coil", "t1", "t2", k=2),
        breaker("F1.CB", "coil"),
        gate("IN.coil", "t2"),
        breaker("IN.CB", "IN.coil"),
    ]
    bound = case(radial(), blocks, [relay("R1")])
    assert asked(bound, play(bound)) == [f"R1: {FAILS}"]
    assert openings(play(bound)) == {"F1.CB": (20, 70), "IN.CB": (20, 70)}
    assert openings(play(bound, f"R1: {FAILS}")) == {}


def test_r04_one_failure_may_suppress_and_be_required() -> None:
    """t1 needs R1 well, t2 needs R1 failed: exactly one of them trips."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t1", "oc", unless=fails("R1")),
        trip("t2", "oc", given=fails("R1")),
        gate("coil1", "t1"),
        gate("coil2", "t2"),
        breaker("F1.CB", "coil1"),
        breaker("IN.CB", "coil2"),
        trip("never", "oc", unless=fails("R1"), given=fails("R1")),
        gate("coil3", "never"),
        breaker("F2.CB", "coil3"),
    ]
    bound = case(radial(), blocks, [relay("R1")])
    assert openings(play(bound)) == {"F1.CB": (20, 70)}
    assert openings(play(bound, f"R1: {FAILS}")) == {"IN.CB": (20, 70)}


def test_r04_an_inversion_turns_a_suppressed_output_into_a_trip() -> None:
    """Blocked unless the blocking relay fails: its question decides, whichever way."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        gate("block", "oc", unless=fails("RB")),
        trip("t", "oc", Not("block"), k=2),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay("RB")])
    assert asked(bound, play(bound)) == [f"RB: {FAILS}"]
    assert openings(play(bound)) == {}
    assert openings(play(bound, f"RB: {FAILS}")) == {"F1.CB": (20, 70)}


def test_r04_two_out_of_three_asks_no_more_than_it_needs() -> None:
    """Three relays vote. A and B well: C is not asked. A fails: B and C are."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        *(gate(f"v{r}", "oc", unless=fails(f"R{r}")) for r in "abc"),
        trip("vote", "va", "vb", "vc", k=2),
        gate("coil", "vote"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay(f"R{r}") for r in "abc"])

    def names(*letters: str) -> list[str]:
        return [f"R{r}: {FAILS}" for r in letters]

    assert asked(bound, play(bound)) == names("a", "b")
    assert asked(bound, play(bound, *names("a"))) == names("a", "b", "c")
    assert asked(bound, play(bound, *names("a", "b"))) == names("a", "b")
    assert openings(play(bound, *names("a", "b"))) == {}
    assert openings(play(bound, *names("c"))) == {"F1.CB": (20, 70)}


def test_r04_a_latch_that_is_sealed_in_asks_nothing_more() -> None:
    """Set by R1 at 20 and for good; R1 lets go at 30, and R2 would set it again at 40: not asked."""
    blocks: list[Block] = [
        sense("oc1", "F1.CT", 20),
        sense("oc2", "F1.CT", 40),
        timer("over", "oc1", 10),
        gate("s1", "oc1", Not("over"), k=2, unless=fails("R1")),
        gate("s2", "oc2", unless=fails("R2")),
        gate("set", "s1", "s2"),
        Latch(name="l", set="set"),
        timer("wait", "l", 100),
        trip("t", "wait"),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay("R1"), relay("R2")])
    assert asked(bound, play(bound)) == [f"R1: {FAILS}"]
    assert openings(play(bound)) == {"F1.CB": (120, 170)}


def test_r04_a_common_cause_is_asked_before_the_members_own_part_and_joined_by_or() -> None:
    cause = CommonCause("settings", (Ask("R1", FAILS), Ask("R2", FAILS)), Fraction(1, 100))
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t1", "oc", unless=fails("R1")),
        trip("t2", "oc", unless=fails("R2")),
        gate("coil", "t1", "t2"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay("R1"), relay("R2")], causes=[cause])
    assert asked(bound, play(bound)) == ["common cause settings", f"R1: {FAILS}"]
    both = play(bound, "common cause settings")
    assert asked(bound, both) == ["common cause settings"]
    assert openings(both) == {}
    own = play(bound, f"R1: {FAILS}", f"R2: {FAILS}")
    assert asked(bound, own) == ["common cause settings", f"R1: {FAILS}", f"R2: {FAILS}"]
    assert openings(own) == {}


def test_r04_exclusive_modes_renormalise_and_end_with_a_yes() -> None:
    """does_not_open 1/4, opens_late 1/4, does_not_interrupt 1/2 of one breaker, asked in this order.

    1/4; then (1/4)/(1 - 1/4) = 1/3; then (1/2)/(1 - 1/2) = 1. Nothing is asked after a yes.
    """
    stuck, late = FailureMode.DOES_NOT_OPEN, FailureMode.OPENS_LATE
    carries = FailureMode.DOES_NOT_INTERRUPT
    modes = ((stuck, Fraction(1, 4)), (late, Fraction(1, 4)), (carries, Fraction(1, 2)))
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t", "oc"),
        gate("coil", "t"),
        breaker("F1.CB", "coil", component="CB1", late_by=timer("x", "oc", 100).pick_up),
    ]
    bound = case(radial(), blocks, [Component("CB1", ComponentKind.BREAKER, modes)])
    assert play(bound, f"CB1: {carries}").probabilities == (Fraction(1, 4), Fraction(1, 3), Fraction(1))
    assert play(bound, f"CB1: {late}").probabilities == (Fraction(1, 4), Fraction(1, 3))
    assert play(bound, f"CB1: {stuck}").probabilities == (Fraction(1, 4),)


def test_r04_certain_failures_and_items_out_of_service_ask_nothing() -> None:
    """R1 fails for certain, R2 is out for work: R3 alone is a question."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        *(trip(f"t{n}", "oc", unless=fails(f"R{n}")) for n in (1, 2, 3)),
        gate("coil", "t1", "t2", "t3"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay("R1", 1), relay("R2", 0.5), relay("R3")], out={"R2"})
    assert [q.name for q in bound.questions] == [f"R3: {FAILS}"]
    assert openings(play(bound)) == {"F1.CB": (20, 70)}
    assert openings(play(bound, f"R3: {FAILS}")) == {}


def test_r04_what_the_study_observes_is_asked_though_the_breaker_is_committed() -> None:
    """t2 adds nothing to the openings, but the study wants to know whether it operated."""
    blocks: list[Block] = [
        sense("oc1", "F1.CT", 20),
        sense("oc2", "F1.CT", 40),
        trip("t1", "oc1"),
        trip("t2", "oc2", unless=fails("R2")),
        gate("coil", "t1", "t2"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay("R2")], observe={"t2"})
    run = play(bound)
    assert asked(bound, run) == [f"R2: {FAILS}"]
    assert run.outcome.operated == (("t2", 40_000),)
    assert play(bound, f"R2: {FAILS}").outcome.operated == ()


def test_r04_an_answer_given_for_what_is_not_asked_changes_nothing() -> None:
    """R2 in the example of the committed breaker, whatever is answered for it."""
    blocks: list[Block] = [
        sense("oc1", "F1.CT", 20),
        sense("oc2", "F1.CT", 40),
        trip("t1", "oc1", unless=fails("R1")),
        trip("t2", "oc2", unless=fails("R2")),
        gate("coil", "t1", "t2"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay("R1"), relay("R2")])
    plain, flipped = (run_event(bound, ForcedAnswers({0: False, 1: other})) for other in (False, True))
    assert plain == flipped


def test_r04_a_question_may_be_asked_for_the_state_before_the_event() -> None:
    """A guard that has been true for long, unless its relay fails: no time runs from the fault.

    The guard's timer of 300 ms ran out before the event, so the trip waits for oc alone: 20, open 70.
    R1 failed: the guard was never there, and nothing trips.
    """
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        Gate(name="healthy", inputs=(Not("oc"),), unless=fails("R1")),
        timer("guard", "healthy", 300, 100),
        trip("t", "oc", "guard", k=2),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay("R1")])
    assert openings(play(bound)) == {"F1.CB": (20, 70)}
    assert openings(play(bound, f"R1: {FAILS}")) == {}
