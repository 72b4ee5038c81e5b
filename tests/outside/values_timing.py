"""Timing: breaker-failure budgets and totals, times of back-up zones, remote back-up."""

from __future__ import annotations

from dataclasses import replace
from functools import partial

from schemesim import ticks
from schemesim.scheme.build import BreakerTimes
from schemesim.scheme.delays import Fixed
from schemesim.scheme.functions import BreakerFailureTimes, ElementTimes
from schemesim.scheme.policy import (
    BreakerFailurePolicy,
    LineScheme,
    Policy,
    PolicyTimes,
    ProtectionSet,
    duplicate_chain,
    single_set,
)
from tests.outside.records import MEMORY, PRACTICE, Record
from tests.outside.sequences import openings, star
from tests.rules.small import chain, margin, play

SUBJECT = "timing"

TOO_FINE = 0.003
"""Milliseconds: each term of a sum in cycles is rounded to a microsecond once."""


def budgeted(timer_us: int, interrupting_us: int, reset_us: int) -> Policy:
    """A policy with the times of a budget; stepped distance, so a fault at 50 km trips both ends at once."""
    times = BreakerFailureTimes(timer=Fixed(timer_us), detector_reset=Fixed(reset_us))
    return single_set(
        sets=(ProtectionSet(line=LineScheme.DISTANCE),),
        times=PolicyTimes(breaker=BreakerTimes(interrupting=Fixed(interrupting_us))),
        breaker_failure=BreakerFailurePolicy(times=times, retrip_coil="1"),
    )


def margin_ms(timer_us: int, breaker_us: int, reset_us: int) -> float:
    """What is left on the timer when the detector is seen to have reset."""
    run = play(chain(), budgeted(timer_us, breaker_us, reset_us), "L1")
    return margin(run, "Alder.L1.CB/50BF timer") / 1000


def margin_cycles(breaker: float, reset: float, spare: float, hz: float = 60.0) -> float:
    """The same in cycles, with a timer that is the sum of all three."""
    timer, opening, dropping = (ticks.from_cycles(n, hz) for n in (breaker + reset + spare, breaker, reset))
    return margin_ms(timer, opening, dropping) * hz / 1000


def least_timer_by_contact_ms() -> float:
    """The least timer with which a breaker tripped without current does not trip the far end for nothing.

    Bus fault at Birch, nothing feeds from Cedar: Birch.L2.CB is supervised by its 52a alone (50 + 10).
    """

    def needless(timer_us: int) -> bool:
        times = BreakerFailureTimes(timer=Fixed(timer_us), detector_reset=Fixed(10_000))
        policy = single_set(
            times=PolicyTimes(breaker=BreakerTimes(auxiliary=Fixed(10_000))),
            breaker_failure=BreakerFailurePolicy(times=times, retrip_coil="1", auxiliary=True),
        )
        return "Cedar.L2.CB" in openings(chain(g3=False), policy, "Birch.B1")

    low, high = 0, 200_000  # needless at low, not at high
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (middle, high) if needless(middle) else (low, middle)
    return high / 1000


STUCK = "Alder.L1.CB: does_not_open"


def added_by_lockout_ms(lockout_ms: int) -> float:
    """What a lockout relay adds to the opening of the breakers around a stuck one."""
    slow = openings(chain(), single_set(times=PolicyTimes(lockout=Fixed(lockout_ms * 1000))), "L1", STUCK)
    return slow["Alder.G1.CB"] - openings(chain(), single_set(lockout=False), "L1", STUCK)["Alder.G1.CB"]


Terms = tuple[float, float, float, float, float]
"""Relay, breaker, reset of the detector, margin, lockout; in cycles."""


def total(terms: Terms, hz: float) -> dict[str, float]:
    """The whole sequence of a stuck breaker, all times in cycles."""
    relay, breaker, reset, spare, lockout = terms
    us = partial(ticks.from_cycles, frequency_hz=hz)
    policy = budgeted(us(breaker + reset + spare), us(breaker), us(reset))
    times = PolicyTimes(
        distance=ElementTimes(operate=Fixed(us(relay))),
        breaker=BreakerTimes(interrupting=Fixed(us(breaker))),
        lockout=Fixed(us(lockout)),
    )
    return openings(chain(), replace(policy, times=times), "L1", STUCK)


def summed(terms: Terms, hz: float) -> dict[str, float]:
    """The same by adding up: the far end at relay and breaker, the back-up breaker after timer and lockout."""
    relay, breaker, reset, spare, lockout = terms
    cycle_ms = 1000 / hz
    end = (relay + breaker + reset + spare + lockout + breaker) * cycle_ms
    return {"Birch.L1.CB": (relay + breaker) * cycle_ms, "Alder.G1.CB": end, "cleared": end}


C37_119 = "IEEE C37.119, terms of a breaker-failure total"
BUDGET = "breaker-failure timer budget, interrupting time of 50 ms"
DARK = ("Birch/DC 1: lost", "Birch/DC 2: lost")
PLAIN = single_set(sets=(ProtectionSet(line=LineScheme.DISTANCE),), breaker_failure=None)

of = partial(Record, SUBJECT)

RECORDS = (
    *(
        of(BUDGET, PRACTICE, f"{how}: margin in ms", 50.0, 0.0005,
           partial(margin_ms, t * 1000, 50_000, r * 1000))
        for how, t, r in (("50 breaker + 25 reset + 50 = 125", 125, 25), ("50 + 50 + 10 auxiliary + 50 = 160", 160, 60))
    ),
    of(BUDGET, PRACTICE, "52a contact, 50 + 10 + 50 = 110: least timer without margin", 60.0, 0.0005,
       least_timer_by_contact_ms),
    *(
        of("auxiliary tripping relay adds 10 to 15 ms", PRACTICE, f"relay of {n} ms: later by", float(n),
           0.0005, partial(added_by_lockout_ms, n))
        for n in (10, 15)
    ),
    *(
        of(C37_119, MEMORY, f"{b}-cycle breaker, reset {r:g}: margin in cycles of 60 Hz",
           float(m), 0.001, partial(margin_cycles, b, r, m))
        for b, r, m in ((2, 1, 3), (3, 1.5, 3), (5, 1.5, 5))
    ),
    *(
        of(C37_119, MEMORY, f"{what} stuck, {sum((*terms, terms[1])):g} cycles of {hz:g} Hz: sequence",
           partial(summed, terms, hz), TOO_FINE, partial(total, terms, hz), whole=True)
        for what, terms, hz in (
            ("two-cycle breaker, quick end,", (1, 2, 1, 3, 1), 60.0),
            ("two-cycle breaker, slow end,", (2, 2, 1.5, 5, 1), 60.0),
            ("three-cycle breaker,", (1, 3, 1.5, 4, 0.5), 60.0),
            ("two-cycle breaker,", (1, 2, 1, 3, 0.5), 50.0),
        )
    ),
    of("remote back-up: zone 2 in 0.3–0.5 s, zone 3 in about 1 s", PRACTICE,
       "bus of a dark station: 20 + 350 + 50 from both sides",
       {"Alder.L1.CB": 420.0, "Cedar.L2.CB": 420.0, "cleared": 420.0}, 0.0005,
       lambda: openings(chain(), duplicate_chain(), "Birch.B1", *DARK), whole=True),
    of("remote back-up: zone 2 in 0.3–0.5 s, zone 3 in about 1 s", PRACTICE,
       "line of a dark station with infeed from both sides: 20 + 50, and 20 + 1000 + 50 by zone 3",
       {"Alder.L1.CB": 70.0, "Cedar.L2.CB": 1070.0, "cleared": 1070.0}, 0.0005,
       lambda: openings(chain(), duplicate_chain(), "L1", *DARK), whole=True),
    of("remote back-up with infeed, by length: each remote end has zone 3 beyond the next line", PRACTICE,
       "relay silent at Birch, L2 at 50 km: Alder at 150 of 220 km and Dale at 110 of 132 km by zone 3",
       {"Cedar.L2.CB": 70.0, "Alder.L1.CB": 1070.0, "Dale.L3.CB": 1070.0, "cleared": 1070.0}, 0.0005,
       lambda: openings(star(), PLAIN, "L2", "Birch/L2/relay 1: failure_to_operate"), whole=True),
    of("stepped distance: 80 % at once at each end, the rest in zone 2", PRACTICE,
       "fault at 90 %: the near end at once, the far end in zone 2",
       {"Birch.L1.CB": 70.0, "Alder.L1.CB": 420.0, "cleared": 420.0}, 0.0005,
       lambda: openings(chain(), PLAIN, "L1@0.9"), whole=True),
)  # fmt: skip
