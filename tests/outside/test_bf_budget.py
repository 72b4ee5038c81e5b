"""Breaker-failure timer budgets of common practice: the run leaves exactly the margin that the budget sets aside.

Common practice, with an interrupting time of 50 ms:

    current detector     50 breaker + 25 reset                     + 50 margin = 125 ms
    element reset        50 breaker + 50 reset + 10 auxiliary       + 50 margin = 160 ms
    auxiliary contact    50 breaker + 10 contact                    + 50 margin = 110 ms
    an auxiliary tripping relay ahead of the coil adds 10 to 15 ms

and, in cycles of 60 Hz, after IEEE C37.119 (from memory): breaker 2, 3 or 5, reset 1 to 1.5, margin 3 to 5.
The margin is what is left on the timer when current (or the contact) is seen to be gone.
"""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.scheme.build import BreakerTimes
from schemesim.scheme.delays import Fixed
from schemesim.scheme.functions import BreakerFailureTimes
from schemesim.scheme.policy import BreakerFailurePolicy, LineScheme, Policy, PolicyTimes, ProtectionSet, single_set
from schemesim.ticks import from_cycles
from tests.rules.small import chain, margin, opened, play


def budgeted(timer_us: int, interrupting_us: int, reset_us: int) -> Policy:
    """A policy with the times of a budget; stepped distance, so a fault at 50 km trips both ends at once."""
    times = BreakerFailureTimes(timer=Fixed(timer_us), detector_reset=Fixed(reset_us))
    return single_set(
        sets=(ProtectionSet(line=LineScheme.DISTANCE),),
        times=PolicyTimes(breaker=BreakerTimes(interrupting=Fixed(interrupting_us))),
        breaker_failure=BreakerFailurePolicy(times=times, retrip_coil="1"),
    )


@pytest.mark.parametrize(
    ("timer_ms", "breaker_ms", "reset_ms", "margin_ms"),
    [
        (125, 50, 25, 50),  # current detector
        (160, 50, 50 + 10, 50),  # element reset and the auxiliary relay behind it
    ],
)
def test_budget_by_current(timer_ms: int, breaker_ms: int, reset_ms: int, margin_ms: int) -> None:
    run = play(chain(), budgeted(timer_ms * 1000, breaker_ms * 1000, reset_ms * 1000), "L1")
    assert margin(run, "Alder.L1.CB/50BF timer") == margin_ms * 1000
    assert set(opened(run)) == {"Alder.L1.CB", "Birch.L1.CB"}


@pytest.mark.parametrize(("breaker", "reset", "spare"), [(2, 1, 3), (3, 1.5, 3), (5, 1.5, 5)])
def test_budget_in_cycles(breaker: float, reset: float, spare: float) -> None:
    # Each term is rounded to a microsecond once; the margin is the timer less the other two.
    hz = 60.0
    timer, opening, dropping = (from_cycles(n, hz) for n in (breaker + reset + spare, breaker, reset))
    run = play(chain(), budgeted(timer, opening, dropping), "L1")
    left = margin(run, "Alder.L1.CB/50BF timer")
    assert left == timer - opening - dropping
    assert left == pytest.approx(spare * 1e6 / hz, abs=2)


@pytest.mark.parametrize(
    ("timer_us", "needless"),
    # The breaker that carries no current is supervised by its contact alone: 50 + 10 of 110. Where the margin of
    # 50 and a microsecond is taken away the far end is tripped for nothing.
    [(110_000, False), (60_000, False), (59_999, True)],
)
def test_budget_by_auxiliary_contact(timer_us: int, needless: bool) -> None:
    # Bus fault at Birch, nothing feeds from Cedar: Birch.L2.CB is tripped without current. The detectors of the
    # others, which do carry, reset within the same 10.
    times = BreakerFailureTimes(timer=Fixed(timer_us), detector_reset=Fixed(10_000))
    policy = single_set(
        times=PolicyTimes(breaker=BreakerTimes(auxiliary=Fixed(10_000))),
        breaker_failure=BreakerFailurePolicy(times=times, retrip_coil="1", auxiliary=True),
    )
    run = play(chain(g3=False), policy, "Birch.B1")
    assert ("Cedar.L2.CB" in opened(run)) == needless


@pytest.mark.parametrize("auxiliary_relay_ms", [10, 15])
def test_an_auxiliary_tripping_relay_adds_its_time(auxiliary_relay_ms: int) -> None:
    # Breaker failure that goes through a lockout of 10 to 15 ms opens the breakers around later by just that.
    stuck = "Alder.L1.CB: does_not_open"
    with_relay = single_set(times=PolicyTimes(lockout=Fixed(auxiliary_relay_ms * 1000)))
    slow = opened(play(chain(), with_relay, "L1", stuck))["Alder.G1.CB"]
    quick = opened(play(chain(), single_set(lockout=False), "L1", stuck))["Alder.G1.CB"]
    assert slow - quick == auxiliary_relay_ms * 1000


def test_total_backup_clearing_within_practice() -> None:
    # IEEE C37.119 (from memory): total 10 to 15 cycles. Relay 1, timer 3 + 1 + 4, lockout 1, breaker 3: 13 cycles.
    hz = 60.0
    cycle = from_cycles(1, hz)
    breaker = BreakerTimes(interrupting=Fixed(3 * cycle))
    policy = replace(budgeted(8 * cycle, 3 * cycle, cycle), times=PolicyTimes(breaker=breaker, lockout=Fixed(cycle)))
    run = play(chain(), policy, "L1", "Alder.L1.CB: does_not_open")
    relay_us = 20_000
    total = run.outcome.t_clear_us
    assert total == relay_us + (8 + 1 + 3) * cycle
    assert 10 * cycle <= total <= 15 * cycle
