"""Teleprotection: blocking against permissive on the loss of a channel, and odds at the figures of IEC 60834-1.

The chain of :mod:`tests.rules.small`. Inside: L1 at 90 km, which Birch has in zone 1 and Alder in zone 2 only.
Beyond: L2 at 5 km, 105 km from Alder and within its zone 2; behind Birch's L1 relay.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

from schemesim.engine.case import bind
from schemesim.engine.outcome import Outcome
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.scheme.delays import Fixed
from schemesim.scheme.dress import dress
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import ComponentKind, FailureMode
from schemesim.scheme.policy import LineScheme, Policy, PolicyTimes, ProtectionSet, single_set
from schemesim.study.tree import explore
from tests.outside.records import MEMORY, PRACTICE, Record
from tests.outside.sequences import openings
from tests.rules.small import at, chain

SUBJECT = "teleprotection"

INSIDE, BEYOND = "L1@0.9", "L2@0.05"
LOST = "L1/channel 1: lost"
POTT, PUTT = LineScheme.PERMISSIVE_OVERREACH, LineScheme.PERMISSIVE_UNDERREACH
BLOCKING, DIFFERENTIAL = LineScheme.BLOCKING, LineScheme.DIFFERENTIAL


def with_line(scheme: LineScheme, channel_ms: int = 15, **changes: object) -> Policy:
    """One set with this scheme, over a channel of so many milliseconds."""
    times = PolicyTimes(channel=Fixed(channel_ms * 1000))
    return single_set(sets=(ProtectionSet(line=scheme),), times=times, **changes)


def played(scheme: LineScheme, place: str, *failed: str) -> dict[str, float]:
    """The whole sequence."""
    return openings(chain(), with_line(scheme), place, *failed)


def share(
    policy: Policy, missing: float, unwanted: float, place: str, event: Callable[[Outcome], bool], *stuck: str
) -> float:
    """Probability of an event with a channel of these figures; breakers named do not open."""
    modes = {ComponentKind.CHANNEL: {FailureMode.LOST: missing, FailureMode.FALSE_RECEIPT: unwanted}}
    if stuck:
        modes[ComponentKind.BREAKER] = {FailureMode.DOES_NOT_OPEN: 0.5}
    program = compile_scheme(chain(), dress(chain(), policy, FailureData(modes=modes, no_fault_per_yr={})))
    case = bind(program, at(place), LogicalSensing())
    opens = [q.name for q in program.questions if q.name.endswith("does_not_open")]
    given: dict[int | str, bool] = {name: name in stuck for name in opens}
    bracket = explore(case, epsilon=0, given=given).bracket(event)
    if bracket.width > 1e-12:
        raise ArithmeticError(f"{bracket} is not exact")
    return float(bracket.low)


def alder_after(limit_ms: float) -> Callable[[Outcome], bool]:
    """Alder.L1.CB opens later than this or not at all."""
    return lambda o: not any(x.breaker == "Alder.L1.CB" and x.t_open_us <= limit_ms * 1000 for x in o.openings)


def alder_opens(outcome: Outcome) -> bool:
    """Alder.L1.CB opens."""
    return "Alder.L1.CB" in outcome.tripped


def not_by(limit_ms: float) -> Callable[[Outcome], bool]:
    """Not cleared by then."""
    return lambda o: o.t_clear_us is None or o.t_clear_us > limit_ms * 1000


LOSS = "permissive loses speed with its channel, blocking loses security (line protection guides)"
PRESETS = "IEC 60834-1, missing and unwanted commands and times"
SPEED = "clearing times of line schemes: relay + channel + breaker; blocking waits its coordinating delay"

BOTH_85 = {"Alder.L1.CB": 85.0, "Birch.L1.CB": 70.0, "cleared": 85.0}
ZONE_2 = {"Alder.L1.CB": 420.0, "Birch.L1.CB": 70.0, "cleared": 420.0}
BLOCKED = {"Alder.L1.CB": 100.0, "Birch.L1.CB": 70.0, "cleared": 100.0}

# L2 at 5 km: Birch has it in zone 1 of L2, Cedar in zone 2 with Birch's permission (or after the coordinating delay).
L2_POTT = {"Birch.L2.CB": 70.0, "Cedar.L2.CB": 85.0, "cleared": 85.0}
L2_BLOCKING = {"Birch.L2.CB": 70.0, "Cedar.L2.CB": 100.0, "cleared": 100.0}

of = partial(Record, SUBJECT)

RECORDS = (
    *(
        of(source, PRACTICE, what, sequence, 0.0005, partial(played, scheme, place, *failed), whole=True)
        for source, what, scheme, place, failed, sequence in (
            (SPEED, "permissive overreach, inside", POTT, INSIDE, (), BOTH_85),
            (SPEED, "permissive underreach, inside", PUTT, INSIDE, (), BOTH_85),
            (SPEED, "blocking, inside", BLOCKING, INSIDE, (), BLOCKED),
            (SPEED, "line differential, inside", DIFFERENTIAL, INSIDE, (),
             {"Alder.L1.CB": 70.0, "Birch.L1.CB": 70.0, "cleared": 70.0}),
            (LOSS, "permissive overreach, inside, channel lost: zone 2", POTT, INSIDE, (LOST,), ZONE_2),
            (LOSS, "blocking, inside, channel lost: no slower", BLOCKING, INSIDE, (LOST,), BLOCKED),
            (LOSS, "permissive overreach, beyond, channel lost: no trip", POTT, BEYOND, (LOST,), L2_POTT),
            (LOSS, "blocking, beyond: blocked", BLOCKING, BEYOND, (), L2_BLOCKING),
            (LOSS, "blocking, beyond, channel lost: trips for nothing", BLOCKING, BEYOND, (LOST,),
             L2_BLOCKING | {"Alder.L1.CB": 100.0}),
            (LOSS, "line differential, inside, channel lost: its own zone 2", DIFFERENTIAL, INSIDE, (LOST,), ZONE_2),
        )
    ),
    of(PRESETS, MEMORY, "permissive overreach 1E-3 missing: end of line not cleared in 150 ms",
       1e-3, 1e-15, lambda: share(with_line(POTT, 20), 1e-3, 0.0, INSIDE, not_by(150))),
    of(PRESETS, MEMORY, "permissive underreach 1E-2 missing: end of line not cleared in 150 ms",
       1e-2, 1e-15, lambda: share(with_line(PUTT, 20), 1e-2, 1e-4, INSIDE, alder_after(150))),
    of(PRESETS, MEMORY, "permissive overreach 1E-3 unwanted: trip for a fault beyond", 1e-3, 1e-15,
       lambda: share(with_line(POTT, 20), 0.0, 1e-3, BEYOND, alder_opens)),
    of(PRESETS, MEMORY, "blocking 1E-3 missing: trip for a fault beyond", 1e-3, 1e-15,
       lambda: share(with_line(BLOCKING), 1e-3, 0.0, BEYOND, alder_opens)),
    of(PRESETS, MEMORY, "blocking 1E-2 unwanted: end of line not cleared in 150 ms", 1e-2, 1e-15,
       lambda: share(with_line(BLOCKING), 0.0, 1e-2, INSIDE, alder_after(150))),
    of(PRESETS, MEMORY,
       "direct intertrip 1E-4 missing, 40 ms: bus fault, line breaker stuck, not in 20 + 10 + 150 + 10 + 40 + 50",
       1e-4, 1e-15,
       lambda: share(with_line(POTT, 40), 1e-4, 0.0, "Birch.B1", not_by(280), "Birch.L1.CB: does_not_open")),
)  # fmt: skip
