"""R11: breaker failure starts at trip initiation, sealed in until current (or 52a) resets.

It operates if the timer has expired AND current persists. The chain (see :mod:`tests.rules.small`),
one fault on L1 at 50 km: both ends trip at 20 ms and open at 70, which clears it. At Alder.L1.CB
the detector, picked up since 5, drops out 20 after the current has gone: at 90.
"""

from __future__ import annotations

from collections.abc import Generator
from dataclasses import replace
from typing import Any

import pytest
import simpy

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import bind
from schemesim.engine.event import EventRun, run_event
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.plant.layouts import CtPlacement
from schemesim.scheme.conditions import External
from schemesim.scheme.delays import Fixed
from schemesim.scheme.dress import dress
from schemesim.scheme.functions import BreakerFailureTimes
from schemesim.scheme.model import Sense
from schemesim.scheme.policy import BreakerFailurePolicy, Policy, Start, single_set
from tests.rules.small import NO_RATES, at, chain, margin, opened, play, roles

LINE = {"Alder.L1.CB": 70_000, "Birch.L1.CB": 70_000}
STUCK = "Alder.L1.CB: does_not_open"


def with_bf(timer_us: int = 150_000, **changes: object) -> Policy:
    bf = BreakerFailurePolicy(times=BreakerFailureTimes(timer=Fixed(timer_us)), retrip_coil="1")
    return single_set(breaker_failure=replace(bf, **changes))  # type: ignore[arg-type]  # checked by replace itself


def test_r11_a_breaker_that_opens_stops_the_timer_when_the_detector_resets() -> None:
    # Started at 20 for 150: due at 170, stopped at 90.
    run = play(chain(), with_bf(), "L1")
    assert opened(run) == LINE
    assert margin(run, "Alder.L1.CB/50BF timer") == 170_000 - 90_000


def test_r11_a_stuck_breaker() -> None:
    # 20 + 150: 50BF at 170; lockout at 180; Alder.G1.CB open at 230. Birch.L1.CB was open at 70.
    run = play(chain(), with_bf(), "L1", STUCK)
    assert opened(run) == {"Birch.L1.CB": 70_000, "Alder.G1.CB": 230_000}
    assert run.outcome.t_clear_us == 230_000
    assert roles(run)["Alder.G1.CB"] == "breaker failure"


def test_r11_a_breaker_that_opens_late_is_not_waited_for() -> None:
    # 100 late: open at 170, the instant at which the timer runs out; the detector has 20 to go.
    run = play(chain(), with_bf(), "L1", "Alder.L1.CB: opens_late")
    assert opened(run) == {"Birch.L1.CB": 70_000, "Alder.L1.CB": 170_000, "Alder.G1.CB": 230_000}
    assert run.outcome.t_clear_us == 170_000


def test_r11_a_breaker_that_does_not_interrupt_shows_open_and_carries_on() -> None:
    run = play(chain(), with_bf(), "L1", "Alder.L1.CB: does_not_interrupt")
    assert run.outcome.t_clear_us == 230_000
    assert opened(run) == {**LINE, "Alder.G1.CB": 230_000}


@pytest.mark.parametrize(
    ("timer_us", "needless"),
    # The breaker takes 50 and the detector resets 20 later: 70 is just enough, and 1 us less is not.
    # Then 50BF at 20 + 69.999, lockout 10, breaker 50.
    [(70_000, {}), (69_999, {"Alder.G1.CB": 149_999}), (50_000, {"Alder.G1.CB": 130_000})],
)
def test_r11_the_detectors_reset_counts(timer_us: int, needless: dict[str, int]) -> None:
    run = play(chain(), with_bf(timer_us), "L1")
    at_alder = {name: t for name, t in opened(run).items() if name.startswith("Alder")}
    assert at_alder == {"Alder.L1.CB": 70_000, **needless}
    assert run.outcome.t_clear_us == 70_000


# --- what starts the timer ------------------------------------------------------------------


TRIP, CURRENT = "Alder/L1/1 21-1", "Alder.L1.CB/50BF current"


def by_hand(start: Start, initiated_ms: tuple[int, int], current_from_ms: int) -> dict[str, int]:
    """Openings for a stuck Alder.L1.CB whose trip (from, to) and current (from) are set by hand.

    The trip picks up and resets at once; the detector keeps its 5 ms. Nothing else sees anything.
    """
    plant = chain()
    scheme = dress(plant, with_bf(start=start), NO_RATES)
    by_hand = [replace(b, condition=External()) for b in scheme.blocks if isinstance(b, Sense)]
    at_once = [replace(b, operate=Fixed(0), reset=Fixed(0)) if b.name == TRIP else b for b in by_hand]
    others = [b for b in scheme.blocks if not isinstance(b, Sense)]
    program = compile_scheme(plant, replace(scheme, blocks=(*at_once, *others)))
    on, off = initiated_ms
    steps = sorted([(on, TRIP, True), (off, TRIP, False), (current_from_ms, CURRENT, True)])

    def script(run: EventRun) -> Generator[simpy.Event, Any, Any]:
        for when_ms, name, state in steps:
            yield run.env.timeout(when_ms * 1000 - int(run.env.now))
            run.force(name, state)

    case = bind(program, at("L1"), LogicalSensing())
    return opened(run_event(case, FixedAnswers(program, (STUCK,)), processes=(script,)))


@pytest.mark.parametrize(
    ("start", "t_open_us"),
    [
        # Initiated from 10 on; current from 60, detected at 65.
        # By initiate alone the timer runs from 10 to 160; lockout 170; Alder.G1.CB at 220, and Birch.L1.CB
        # by transfer trip 15 later.
        (Start.INITIATE, 220_000),
        # By initiate AND current it runs from 65 to 215; 225; 275.
        (Start.INITIATE_AND_CURRENT, 275_000),
    ],
)
def test_r11_started_by_initiate_or_by_initiate_and_current(start: Start, t_open_us: int) -> None:
    assert by_hand(start, (10, 1000), 60) == {"Alder.G1.CB": t_open_us, "Birch.L1.CB": t_open_us + 15_000}


@pytest.mark.parametrize("start", list(Start))
def test_r11_sealed_in_while_current_flows(start: Start) -> None:
    # Current from 0, detected at 5; the trip lasts from 10 to 40 only. Sealed in at 10: 160, 170, 220.
    assert by_hand(start, (10, 40), 0) == {"Alder.G1.CB": 220_000, "Birch.L1.CB": 235_000}


@pytest.mark.parametrize("start", list(Start))
def test_r11_not_sealed_in_without_current(start: Start) -> None:
    # The trip has gone at 40; current comes at 60. Nothing is sealed in, nothing operates.
    assert by_hand(start, (10, 40), 60) == {}


# --- 52a supervision ------------------------------------------------------------------------


@pytest.mark.parametrize(("auxiliary", "around"), [(False, {}), (True, {"Cedar.L2.CB": 255_000})])
def test_r11_the_auxiliary_contact_stands_in_for_current(auxiliary: bool, around: dict[str, int]) -> None:
    # Nothing feeds from Cedar. Bus fault at Birch: 87B 20, lockout 30. Birch.L2.CB is stuck and carries no
    # current, but its 52a says closed: timer to 180, lockout 190, Cedar.L2.CB by transfer trip 205, open 255.
    plant = chain(g3=False)
    run = play(plant, with_bf(auxiliary=auxiliary), "Birch.B1", "Birch.L2.CB: does_not_open")
    assert opened(run) == {"Birch.L1.CB": 80_000, "Birch.F2.CB": 80_000, **around}


def test_r11_a_wrong_auxiliary_contact_trips_needlessly() -> None:
    # Alder.L1.CB opens at 70, but its 52a goes on saying closed: 50BF 170, lockout 180, Alder.G1.CB 230.
    wrong = "Alder.L1.CB: auxiliary_wrong"
    run = play(chain(), with_bf(auxiliary=True), "L1", wrong)
    assert opened(run) == {**LINE, "Alder.G1.CB": 230_000}
    assert opened(play(chain(), with_bf(), "L1")) == LINE
    assert opened(play(chain(), with_bf(auxiliary=True), "L1")) == LINE


@pytest.mark.parametrize(
    ("timer_us", "around"), [(70_000, {}), (54_999, {"Cedar.L2.CB": 159_999, "Alder.L1.CB": 159_999})]
)
def test_r11_the_auxiliary_contacts_time_counts(timer_us: int, around: dict[str, int]) -> None:
    # The same without a failure: initiated at 30, open at 80, 52a follows at 85. A timer of 54.999 is out
    # before: lockout 10, channel 15, breaker 50 later Cedar.L2.CB has opened for nothing, and Alder.L1.CB
    # likewise. At Birch.L1.CB the detector drops out at 100: there 70 is just enough.
    run = play(chain(g3=False), with_bf(timer_us, auxiliary=True), "Birch.B1")
    assert opened(run) == {"Birch.L1.CB": 80_000, "Birch.L2.CB": 80_000, "Birch.F2.CB": 80_000, **around}


# --- what the detector measures ---------------------------------------------------------------


def test_r11_current_in_the_dead_zone_counts_as_the_breakers() -> None:
    # At Birch.L1 the only CT stands on the circuit side; the fault falls between breaker and CT. Birch's 87B
    # takes it for its own: 20, lockout 30, open at 80. Alder still feeds it through the CT, so the
    # detector stays up: 50BF at 30 + 150, lockout 190, transfer trip 205, Alder.L1.CB open at 255.
    plant = chain(ct=CtPlacement.CIRCUIT_SIDE)
    run = play(plant, with_bf(), "Birch.L1.c")
    assert opened(run)["Birch.L1.CB"] == 80_000
    assert opened(run)["Alder.L1.CB"] == run.outcome.t_clear_us == 255_000
    # Without it Alder's zone 2 clears: 20 + 350 + 50.
    assert play(plant, single_set(breaker_failure=None), "Birch.L1.c").outcome.t_clear_us == 420_000
