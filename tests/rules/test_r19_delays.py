"""R19: one uniform for each seed, trial and block name, constant within the run."""

from __future__ import annotations

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.draws import uniform
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Run
from schemesim.engine.times import DelayTimes
from schemesim.scheme.conditions import Current
from schemesim.scheme.distributions import Uniform
from schemesim.scheme.model import Block, Breaker, Latch, Not, Sense
from tests.rules.hand import case, gate, ms, openings, radial, timer, times, trip

OPERATE, OPENS, CLOSING, LATE = (
    Uniform(15_000, 25_000),
    Uniform(40_000, 60_000),
    Uniform(50_000, 70_000),
    Uniform(1_000, 9_000),
)


def blocks() -> list[Block]:
    """F1 with one reclosing 300 ms after 52b."""
    return [
        Sense(name="oc", condition=Current(("F1.CT",)), operate=OPERATE, reset=ms(10)),
        trip("t", "oc"),
        gate("coil", "t"),
        timer("dead", Not("F1.CB"), 300),
        Latch(name="86", set="again"),
        gate("again", "t", "shot", k=2),
        Latch(name="shot", set="close"),
        gate("close", "dead", Not("86"), k=2),
        Breaker(
            name="F1.CB",
            coils=("coil",),
            interrupting=OPENS,
            auxiliary=ms(5),
            close="close",
            closing=CLOSING,
        ),
    ]


def drawn(more: list[Block], seed: int, trial: int) -> Run:
    bound = case(radial(), blocks() + more)
    return run_event(bound, FixedAnswers(bound.program), times=DelayTimes(seed, trial), log=True)


@pytest.mark.parametrize("trial", [0, 1, 7])
def test_r19_each_delay_is_the_inverse_distribution_at_the_uniform_of_its_name(trial: int) -> None:
    run = drawn([], 5, trial)
    (opening,) = run.outcome.openings
    operate = OPERATE.at(uniform(5, "oc on", trial))
    opens = OPENS.at(uniform(5, "F1.CB on", trial))
    assert (opening.t_trip_us, opening.t_open_us) == (operate, operate + opens)


def test_r19_the_time_is_the_same_again_within_the_run() -> None:
    """It operates, opens, recloses, operates and opens again: with the same two times."""
    run = drawn([], 5, 3)
    first, second = times(run, "oc", "picks up")
    opened, again = times(run, "F1.CB", "opens")
    (closed,) = times(run, "F1.CB", "closes")
    (closing,) = times(run, "F1.CB", "closing")
    assert second - closed == pytest.approx(first, abs=1e-9)
    assert again - second == pytest.approx(opened - first, abs=1e-9)
    assert closed - closing == pytest.approx(CLOSING.at(uniform(5, "F1.CB close", 3)) / 1000, abs=1e-9)


def test_r19_other_blocks_trials_and_seeds() -> None:
    """Blocks that come in leave the others' times alone; another trial or seed does not."""
    extra: list[Block] = [
        Sense(name="a", condition=Current(("IN.CT",)), operate=OPERATE, reset=LATE),
        timer("a.t", "a", 5000),
        trip("a.x", "a.t"),
        gate("a.coil", "a.x"),
        Breaker(name="IN.CB", coils=("a.coil",), interrupting=OPENS, auxiliary=LATE),
    ]
    assert openings(drawn(extra, 5, 3)) == openings(drawn([], 5, 3))
    assert drawn([], 5, 3).outcome == drawn([], 5, 3).outcome
    assert openings(drawn([], 5, 4)) != openings(drawn([], 5, 3)) != openings(drawn([], 6, 3))


def test_r19_without_draws_the_nominal_times_hold() -> None:
    """The middle of each: picks up at 20, opens 50 later."""
    bound = case(radial(), blocks())
    assert openings(run_event(bound, FixedAnswers(bound.program))) == {"F1.CB": (20, 70)}
