"""The reference scheme: line L4 of the demo, from breaker and a half at Birch to a single bus at Dunmore.

The line has two sets, each with a relay, DC supply, trip coil and channel of its own: line differential, and
permissive overreach, and local back-up at each end; its three breakers have breaker failure with retrip,
lockout and transfer trip; behind them stand the distance zones of the lines around. Nothing else is dressed.
Every probability of failure is fixed here, so that figures measured on the scheme mean the same for as long as it
stands: eight of 1e-2, sixteen of 1e-3, all others of 1e-4.
"""

from __future__ import annotations

from functools import lru_cache

from schemesim.engine.case import Case, bind
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.plant.model import Location, Plant
from schemesim.scheme.build import BreakerTimes
from schemesim.scheme.delays import Delay, Fixed
from schemesim.scheme.distributions import Empirical, LogNormal, Normal, Triangular, Uniform
from schemesim.scheme.dress import dress
from schemesim.scheme.failure_data import FailureData, Modes, Override
from schemesim.scheme.functions import BreakerFailureTimes, ElementTimes
from schemesim.scheme.model import ComponentKind, FailureMode, Scheme
from schemesim.scheme.policy import (
    BreakerFailurePolicy,
    LineScheme,
    LocalBackup,
    Policy,
    PolicyTimes,
    ProtectionSet,
    Reaches,
)
from tests.benchmarks.grids import scenario

LINE = "L4"
POSITIONS = (0.1, 0.25, 0.5, 0.7, 0.9)
"""Places on the line; the middle one is where nothing else is said."""

OFTEN, SELDOM, RARE = 1e-2, 1e-3, 1e-4

DIFFERENTIAL_US = Normal(22_000, 3_000.0, 12_000, 40_000)
DISTANCE_US = LogNormal(25_000, 0.2, 12_000, 60_000)
RESET_US = Uniform(10_000, 18_000)
CHANNEL_US = Triangular(8_000, 12_000, 25_000)
BREAKER_US = Empirical((42_000, 44_000, 45_000, 46_000, 47_000, 48_000, 50_000, 53_000, 58_000))
LATE_US = Uniform(60_000, 140_000)
DETECTOR_RESET_US = Uniform(12_000, 24_000)
LOCKOUT_US = Triangular(6_000, 9_000, 16_000)

FTO, LOST = FailureMode.FAILURE_TO_OPERATE, FailureMode.LOST
STUCK, LATE, HOLDS = FailureMode.DOES_NOT_OPEN, FailureMode.OPENS_LATE, FailureMode.DOES_NOT_INTERRUPT

BY_KIND: dict[ComponentKind, Modes] = {
    ComponentKind.RELAY: {FTO: SELDOM},
    ComponentKind.VT_WINDING: {LOST: RARE},
    ComponentKind.DC: {LOST: RARE},
    ComponentKind.CHANNEL: {LOST: SELDOM},
    ComponentKind.COIL: {FTO: RARE},
    ComponentKind.BREAKER: {STUCK: RARE, LATE: RARE, HOLDS: RARE},
    ComponentKind.LOCKOUT: {FTO: RARE},
}
PROTECTION = ("Birch/L4/relay *", "Dunmore/L4/relay *", "L4/channel *")
"""The line's own components, which fail often."""

BREAKERS = ("Birch.D2.CB2", "Birch.D2.CB3", "Dunmore.L4.CB")
"""The breakers of the line, which fail seldom; others fail rarely."""


def _times(random: bool) -> tuple[PolicyTimes, BreakerFailureTimes]:
    def time(delay: Delay) -> Delay:
        return delay if random else Fixed(delay.nominal_us)

    relay_reset = time(RESET_US)
    times = PolicyTimes(
        differential=ElementTimes(operate=time(DIFFERENTIAL_US), reset=relay_reset),
        distance=ElementTimes(operate=time(DISTANCE_US), reset=relay_reset),
        breaker=BreakerTimes(interrupting=time(BREAKER_US), late_by=time(LATE_US)),
        lockout=time(LOCKOUT_US),
        channel=time(CHANNEL_US),
    )
    return times, BreakerFailureTimes(detector_reset=time(DETECTOR_RESET_US))


def plant() -> Plant:
    """The plant of the demo."""
    return scenario("demo").plant


def reference_scheme(random: bool) -> Scheme:
    """The scheme, with random delays or all at their nominal times."""
    grid = plant()
    times, of_breaker_failure = _times(random)
    one = ProtectionSet(line=LineScheme.DIFFERENTIAL)
    two = ProtectionSet(
        label="2",
        core="2",
        winding="2",
        dc="2",
        coil="2",
        channel="2",
        lockout="2",
        line=LineScheme.PERMISSIVE_OVERREACH,
    )
    reaches = Reaches(over_reach=1.0)
    bare = Policy(name="nothing", sets=(), remote_backup=False, times=times)
    around = Policy(name="zones", sets=(ProtectionSet(),), intertrip=False, reaches=reaches, times=times)
    line = Policy(
        name="two sets",
        sets=(one, two),
        local_backup=LocalBackup(),
        breaker_failure=BreakerFailurePolicy(times=of_breaker_failure),
        reaches=reaches,
        times=times,
    )
    lines = {s.name: around for s in grid.sections if s.length and s.name != LINE}
    data = FailureData(
        modes=BY_KIND,
        no_fault_per_yr={},
        overrides=(
            *(Override(pattern, {FTO: OFTEN, LOST: OFTEN}) for pattern in PROTECTION),
            *(Override(breaker, {STUCK: SELDOM, LATE: SELDOM}) for breaker in BREAKERS),
            Override("*/BF relay", {FTO: RARE}),
        ),
    )
    return dress(grid, bare, data, exceptions={**lines, LINE: line, **dict.fromkeys(BREAKERS, line)})


@lru_cache
def reference_program(random: bool) -> Program:
    """The scheme compiled."""
    return compile_scheme(plant(), reference_scheme(random))


def reference_case(random: bool, position: float = 0.5) -> Case:
    """A fault on the line, bound anew."""
    return bind(reference_program(random), Location(LINE, position), LogicalSensing())
