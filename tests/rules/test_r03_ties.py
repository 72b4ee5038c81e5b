"""R3: what is due at an instant sees its inputs as they stood at the end of the pass before."""

from __future__ import annotations

from itertools import permutations

import pytest

from schemesim.scheme.model import Block, Latch, Not
from tests.rules.hand import at, breaker, case, gate, openings, play, radial, sense, timer, times, trip


def pulse(length: float) -> list[Block]:
    """oc picks up at 20; the pulse is true from 20 until 20 + length."""
    return [sense("oc", "F1.CT"), timer("over", "oc", length), gate("pulse", "oc", Not("over"), k=2)]


def test_r03_a_timer_that_runs_out_at_the_instant_its_input_falls_has_operated() -> None:
    """The pulse lasts from 20 to 50; a timer of 30 ms on it is due at 50: it operates, F1.CB opens at 100."""
    blocks = [*pulse(30), timer("t", "pulse", 30), trip("x", "t"), gate("coil", "x"), breaker("F1.CB", "coil")]
    run = play(case(radial(), blocks))
    assert at(run, "pulse", "resets") == at(run, "t", "operates") == 50
    assert at(run, "t", "resets") == 50, "with no drop-out delay it resets in the next pass"
    assert openings(run) == {"F1.CB": (50, 100)}


def test_r03_a_microsecond_later_it_has_been_stopped() -> None:
    """The same with a timer of 30.001 ms: stopped at 50 with a margin of one microsecond."""
    blocks = [*pulse(30), timer("t", "pulse", 30.001), trip("x", "t"), gate("coil", "x"), breaker("F1.CB", "coil")]
    run = play(case(radial(), blocks))
    (stopped,) = [r for r in run.log if r.what == "stopped before operating"]
    assert (stopped.subject, stopped.t_us, stopped.margin_us) == ("t", 50_000, 1)
    assert openings(run) == {}


def test_r03_a_drop_out_that_runs_out_at_the_instant_its_input_rises_has_dropped_out() -> None:
    """pulse 20..40; t operates at 20 and holds for 25 ms, until 65; again rises at 65: t is off, then on again."""
    blocks: list[Block] = [
        *pulse(20),
        timer("again", "oc", 45),
        gate("both", "pulse", "again"),
        timer("t", "both", 0, 25),
        trip("x", "t", "again", k=2),
        gate("coil", "x"),
        breaker("F1.CB", "coil"),
    ]
    run = play(case(radial(), blocks))
    assert times(run, "t", "resets")[:1] == [65]
    assert times(run, "t", "operates") == [20, 65]
    assert openings(run) == {"F1.CB": (65, 115)}


def test_r03_a_detector_that_drops_out_when_the_timer_runs_out_has_dropped_out() -> None:
    """F1.CB: energised 20, open 70, the detector is off at 80. A timer of 60 ms from 20 is due at 80 as well.

    Both expire in one pass and the gate sees both: no current any more, no trip. A
    microsecond less and it trips at 79.999.
    """

    def blocks(setting: float) -> list[Block]:
        return [
            sense("oc", "F1.CT"),
            trip("t", "oc"),
            gate("coil", "t"),
            breaker("F1.CB", "coil"),
            Latch(name="start", set="t"),
            timer("62", "start", setting),
            trip("bf", "62", "oc", k=2),
            gate("IN.coil", "bf"),
            breaker("IN.CB", "IN.coil"),
        ]

    assert openings(play(case(radial(), blocks(60)))) == {"F1.CB": (20, 70)}
    assert openings(play(case(radial(), blocks(59.999)))) == {"F1.CB": (20, 70), "IN.CB": (79.999, 129.999)}


@pytest.mark.parametrize("names", list(permutations("pqr")))
def test_r03_names_decide_nothing_but_the_order_of_rows(names: tuple[str, ...]) -> None:
    """Three timers due at 50 on a pulse that falls at 50 have all operated, whatever they are called."""
    ts = [timer(n, "pulse", 30) for n in names]
    blocks: list[Block] = [*pulse(30), *ts, trip("x", *names, k=3), gate("coil", "x"), breaker("F1.CB", "coil")]
    assert openings(play(case(radial(), blocks))) == {"F1.CB": (50, 100)}


def test_r03_set_and_reset_at_one_instant_reset_wins() -> None:
    """Both inputs rise at 30: the latch stays off. Reset first falls at 40 with set still there: it seals in."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        timer("s", "oc", 10),
        timer("end", "oc", 20),
        gate("r", "s", Not("end"), k=2),
        Latch(name="l", set="s", reset="r"),
        trip("x", "l"),
        gate("coil", "x"),
        breaker("F1.CB", "coil"),
    ]
    run = play(case(radial(), blocks))
    assert times(run, "l", "seals in") == [40]
    assert openings(run) == {"F1.CB": (40, 90)}
