"""Edges of the packed engine: a drop-out of one microsecond, and more signals behind a coil than one number holds."""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.engine.answers import DrawnAnswers
from schemesim.engine.batch import run_batch
from schemesim.engine.event import DEFAULT_HORIZON_US, run_event
from schemesim.engine.layout import layout_of
from schemesim.engine.many import ManyDrawn, ManyDrawnTimes
from schemesim.engine.times import DelayTimes
from schemesim.engine.wiring import wiring_of
from schemesim.scheme.delays import Fixed
from schemesim.scheme.distributions import Uniform
from schemesim.scheme.model import Block, Component, Latch, Not, Role, Timer
from tests.rules.hand import breaker, case, fails, gate, radial, relay, sense, trip

TRIALS = 40

SPREAD = replace(breaker("F1.CB", "coil"), interrupting=Uniform(40_000, 60_000))


def agree(
    blocks: list[Block],
    components: list[Component],
    observe: frozenset[str] = frozenset(),
    horizon_us: int = DEFAULT_HORIZON_US,
) -> int:
    """Rows of a batch with random times against runs one by one; how many outcomes differ among themselves."""
    bound = case(radial(), blocks, components, observe=observe)
    assert bound.random
    program = bound.program
    answers, times = ManyDrawn(program, 3, 0, TRIALS), ManyDrawnTimes(3, 0, TRIALS)
    batch = run_batch(bound, TRIALS, answers, times=times, horizon_us=horizon_us)
    each = [
        run_event(bound, DrawnAnswers(program, 3, t), times=DelayTimes(3, t), horizon_us=horizon_us).outcome
        for t in range(TRIALS)
    ]
    assert [batch.outcome(t) for t in range(TRIALS)] == each
    return len({(o.openings, o.operated) for o in each})


@pytest.mark.parametrize("drop_out_us", [0, 1, 2])
def test_r02_a_drop_out_of_a_microsecond_takes_a_microsecond(drop_out_us: int) -> None:
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        Timer(name="held", input="oc", pick_up=Fixed(0), drop_out=Fixed(drop_out_us)),
        Latch(name="seen", set="held"),
        gate("fell", "seen", Not("held"), k=2),
        trip("t", "oc"),
        gate("coil", "t"),
        SPREAD,
    ]
    assert agree(blocks, [], frozenset({"fell"})) > 1


def test_r12_the_trip_named_stands_behind_more_signals_than_one_number_holds() -> None:
    trips = [f"t{i:02}" for i in range(70)]
    blocks: list[Block] = [sense("oc", "F1.CT")]
    blocks += [
        trip(name, "oc", unless=fails(f"R{name[1:]}"), role=Role.LOCAL if name > "t63" else Role.REMOTE)
        for name in trips
    ]
    blocks += [gate("coil", *trips)]
    blocks.append(SPREAD)
    components = [relay(f"R{name[1:]}", 0.9 if name > "t63" else 0.999) for name in trips]
    bound = case(radial(), blocks, components)
    assert layout_of(wiring_of(bound)).ways[0].width > 1
    assert agree(blocks, components) > 2


@pytest.mark.parametrize("horizon_us", [45_000, 65_000, 75_000])
def test_r20_an_opening_beyond_the_horizon_keeps_its_time(horizon_us: int) -> None:
    blocks: list[Block] = [sense("oc", "F1.CT"), trip("t", "oc"), gate("coil", "t"), SPREAD]
    assert agree(blocks, [], horizon_us=horizon_us) > 1
