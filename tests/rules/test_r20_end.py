"""R20: a run ends when nothing is pending, or at the horizon, and says which."""

from __future__ import annotations

from schemesim.engine.outcome import Status
from schemesim.scheme.model import Block, Not, Role
from tests.rules.hand import FAILS, breaker, case, fails, gate, openings, play, radial, relay, sense, timer, times, trip


def back_up() -> list[Block]:
    """Picks up 20, trips 420, opens 470."""
    return [
        sense("in", "IN.CT"),
        timer("in.t", "in", 400),
        trip("t9", "in.t", unless=fails("R9"), role=Role.LOCAL),
        gate("IN.coil", "t9"),
        breaker("IN.CB", "IN.coil"),
    ]


def test_r20_nothing_pending_ends_the_run_without_a_word_of_the_horizon() -> None:
    bound = case(radial(), back_up(), [relay("R9")])
    cleared, failed = play(bound), play(bound, f"R9: {FAILS}")
    assert (cleared.outcome.status, cleared.outcome.at_horizon) == (Status.CLEARED, False)
    assert (failed.outcome.status, failed.outcome.at_horizon) == (Status.NOT_CLEARED, False)
    assert failed.log[-1].t_us == 420_000, "the relay's question is the last thing that happens"


def test_r20_a_trip_still_pending_at_the_horizon_leaves_the_fault_undetermined() -> None:
    bound = case(radial(), back_up(), [relay("R9")])
    run = play(bound, horizon_us=419_999)
    assert (run.outcome.status, run.outcome.t_clear_us, run.outcome.at_horizon) == (Status.UNDETERMINED, None, True)
    assert run.asked == ()
    last = run.log[-1]
    assert (last.t_us, last.subject, last.what) == (419_999, "run", "ends at the horizon with something pending")


def test_r20_a_breaker_under_way_at_the_horizon_is_pending_too() -> None:
    run = play(case(radial(), back_up(), [relay("R9")]), horizon_us=469_999)
    assert (run.outcome.status, run.outcome.at_horizon) == (Status.UNDETERMINED, True)
    assert openings(run) == {"IN.CB": (420, 470)}, "committed, and due after the horizon"


def test_r20_what_happens_at_the_horizon_itself_still_happens() -> None:
    run = play(case(radial(), back_up(), [relay("R9")]), horizon_us=470_000)
    assert (run.outcome.status, run.outcome.t_clear_us, run.outcome.at_horizon) == (Status.CLEARED, 470_000, False)


def test_r20_what_can_influence_nothing_any_more_is_not_pending() -> None:
    """At 475 the element at IN is still to reset (at 480), which can trip nothing: the run is as good as over."""
    run = play(case(radial(), back_up(), [relay("R9")]), horizon_us=475_000)
    assert (run.outcome.status, run.outcome.at_horizon) == (Status.CLEARED, False)


def test_r20_an_endless_run_is_cut_at_the_horizon() -> None:
    """A flasher of 100 ms drives a trip that waits for what never comes."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        gate("start", "oc", Not("flash"), k=2),
        timer("flash", "start", 100, 100),
        sense("never", "F2.CT"),
        trip("t", "flash", "never", k=2),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
    ]
    run = play(case(radial(), blocks), horizon_us=1_000_000)
    assert times(run, "flash", "operates") == [120, 320, 520, 720, 920]
    assert (run.outcome.status, run.outcome.at_horizon) == (Status.UNDETERMINED, True)
