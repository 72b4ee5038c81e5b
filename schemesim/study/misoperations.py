"""Misoperations of protection, by the six categories of NERC PRC-004 (published; wording from memory).

The standard judges the *composite protection system* of an element: all the protection that works together to
protect it, back-up by the protection of other elements excluded. Failure of one part is no misoperation as long as
the whole performs. The categories, as they are told apart here:

- *failure to trip, during fault*: the protection of the faulted element leaves a needed breaker without a trip.
- *slow trip, during fault*: it trips all of them, one later than in the run without failures, and so late that the
  protection of another element operated.
- *unnecessary trip, during fault*: a main function operated beyond its zone; or breakers beyond the intended
  ones were opened by back-up or breaker failure although nothing failed to trip or open, and nothing was late.
- *unnecessary trip, other than fault*: a breaker opened with no fault.
- *failure to trip* and *slow trip, other than fault* need a condition other than a fault that calls for a trip (a loss
  of synchronism, an overload). No event here is one, so both are always empty; they stand in the table all the same.

A breaker that stays is no part of protection: its question is asked only where a coil of it is energised, so a yes
tells that protection did its part. One that others trip no later than its own protection would have is no failure of
that. Trips by main functions (timed zones and transfer trips included), by local back-up
of the element itself and by breaker failure of the very breaker (retrip) count as its own.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from typing import TYPE_CHECKING

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case, bind
from schemesim.engine.event import DEFAULT_HORIZON_US, run_event
from schemesim.engine.outcome import Opening, Outcome
from schemesim.engine.program import Program
from schemesim.engine.sensing import NoFault, Sensing
from schemesim.errors import ErrorList, nearest
from schemesim.plant.model import Location
from schemesim.scheme.model import Breaker, FailureMode, Probability, Role
from schemesim.show.tables import to_html
from schemesim.study.brackets import Bracket, exactly, total
from schemesim.study.tree import MAX_RUNS, explore

if TYPE_CHECKING:
    import pandas as pd


class Misoperation(StrEnum):
    """The categories of the standard."""

    FAILURE_TO_TRIP = "failure to trip, during fault"
    FAILURE_TO_TRIP_OTHER = "failure to trip, other than fault"
    SLOW_TRIP = "slow trip, during fault"
    SLOW_TRIP_OTHER = "slow trip, other than fault"
    UNNECESSARY_TRIP = "unnecessary trip, during fault"
    UNNECESSARY_TRIP_OTHER = "unnecessary trip, other than fault"


def misoperation(
    outcome: Outcome, case: Case, failures: Iterable[str] = (), *, nominal: Outcome | None = None
) -> frozenset[Misoperation]:
    """The categories of misoperation a run falls into; empty where protection operated correctly.

    Parameters
    ----------
    outcome : Outcome
    case : Case
    failures : iterable of str
        Names of the questions answered yes in the run. Without them a breaker that stays counts as not tripped.
    nominal : Outcome or None
        The outcome without failures; run if not given.
    """
    if isinstance(case.event, NoFault):
        return frozenset({Misoperation.UNNECESSARY_TRIP_OTHER} if outcome.openings else ())
    if not case.topology(0).fed:
        return frozenset()
    if nominal is None:
        nominal = run_event(case, FixedAnswers(case.program), horizon_us=DEFAULT_HORIZON_US).outcome
    stays = _staying(case.program, failures)
    opened = {o.breaker: o for o in outcome.openings}
    best = {o.breaker: o for o in nominal.openings}
    own = {b: o for b, o in opened.items() if _own(case, o)}
    found = set()
    needed = case.duty.needed
    others = [o for o in outcome.openings if not _own(case, o)]
    later = {b for b in needed if b in own and (b not in best or own[b].t_trip_us > best[b].t_trip_us)}
    early = {b for b, o in opened.items() if b in best and o.t_trip_us <= best[b].t_trip_us}
    if needed - own.keys() - stays - early:
        found.add(Misoperation.FAILURE_TO_TRIP)
    elif later and any(o.role in (Role.LOCAL, Role.REMOTE) for o in others):
        found.add(Misoperation.SLOW_TRIP)
    well = not found and all(_in_time(opened.get(b), best.get(b)) for b in needed)
    beyond = [o for o in others if o.breaker not in case.duty.intended]
    if any(o.role is Role.UNWANTED for o in outcome.openings) or (well and beyond):
        found.add(Misoperation.UNNECESSARY_TRIP)
    return frozenset(found)


def _own(case: Case, opening: Opening) -> bool:
    """Whether the protection of the faulted element tripped the breaker."""
    if opening.role in (Role.MAIN, Role.MAIN_TIMED):
        return True
    contact = case.program.scheme.contacts.get(opening.via)
    if contact is None or isinstance(case.event, NoFault):
        return False
    if opening.role is Role.LOCAL:
        return case.event.section in contact.protects
    return opening.role is Role.BREAKER_FAILURE and contact.element == opening.breaker


def _in_time(opening: Opening | None, best: Opening | None) -> bool:
    return opening is not None and opening.interrupted and best is not None and opening.t_open_us <= best.t_open_us


def _staying(program: Program, failures: Iterable[str]) -> frozenset[str]:
    """Breakers that do not open, by a failure of their own, a common cause or for being out of service."""
    stays = FailureMode.DOES_NOT_OPEN
    yes = set(failures)
    bad = {q.component for q in program.questions if q.name in yes and q.component and q.mode == stays}
    for cause in program.scheme.common_causes:
        if f"common cause {cause.name}" in yes:
            bad |= {a.component for a in cause.members if a.mode is stays}
    bad |= program.scheme.out_of_service
    blocks = program.scheme.blocks
    return frozenset(b.name for b in blocks if isinstance(b, Breaker) and b.component in bad)


@dataclass(frozen=True)
class Judged:
    """One event: a fault location, or a component that trips with no fault.

    Attributes
    ----------
    event : str
    per_yr : float or None
        How often a year; None where it is not known.
    p : mapping of Misoperation to Bracket
        Probability of each category; one run can fall into two.
    p_any : Bracket
        Probability of any.
    """

    event: str
    per_yr: float | None
    p: Mapping[Misoperation, Bracket]
    p_any: Bracket

    @property
    def row(self) -> dict[str, object]:
        """One row of the table."""
        row: dict[str, object] = {"event": self.event, "freq_per_yr": self.per_yr}
        for name, b in (("any", self.p_any), *((m.name.lower(), self.p[m]) for m in Misoperation)):
            row |= {f"p_{name}_low": float(b.low), f"p_{name}_high": float(b.high)}
        return row


@dataclass(frozen=True)
class MisoperationStudy:
    """Misoperations at every fault location, and with no fault."""

    judged: tuple[Judged, ...] = field(default=())

    def per_yr(self, category: Misoperation) -> Bracket | None:
        """Misoperations of a category a year; None where some event has no frequency."""
        if any(j.per_yr is None for j in self.judged):
            return None
        found = total(exactly(j.per_yr or 0.0) * j.p[category] for j in self.judged)
        return Bracket(max(found.low, 0), found.high)

    def table(self) -> pd.DataFrame:
        """One row for each event."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame([j.row for j in self.judged])

    def summary(self) -> pd.DataFrame:
        """One row for each category: how many a year."""
        import pandas as pd  # heavy: only when a table is asked for

        rows = []
        for m in Misoperation:
            b = self.per_yr(m)
            ends = (None, None) if b is None else (float(b.low), float(b.high))
            rows.append({"category": str(m), "per_yr_low": ends[0], "per_yr_high": ends[1]})
        return pd.DataFrame(rows)

    def __repr__(self) -> str:
        lines = [f"MisoperationStudy({len(self.judged)} events)"]
        for m in Misoperation:
            b = self.per_yr(m)
            lines.append(f"  {m:36} {'no frequencies' if b is None else f'{b} a year'}")
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.summary()) + to_html(self.table())


def study_misoperations(
    program: Program,
    sensing: Sensing,
    locations: Iterable[Location] | None = None,
    *,
    frequencies: Mapping[Location, float] | None = None,
    no_fault: bool = True,
    dispatch: str | None = None,
    epsilon: float = 1e-4,
    max_runs: int = MAX_RUNS,
    horizon_us: int = DEFAULT_HORIZON_US,
) -> MisoperationStudy:
    """How probable each category of misoperation is at every fault location, and with no fault.

    Parameters
    ----------
    program : Program
    sensing : Sensing
    locations : iterable of Location or None
        By default every location of the plant; where no source feeds the fault it is left out.
    frequencies : mapping of Location to float, or None
        Faults a year.
    no_fault : bool
        Trips with no fault too, of every component with a rate of them.
    dispatch, epsilon, max_runs, horizon_us
        Of the trees.

    Raises
    ------
    InputError
        For locations or frequencies that are not as stated.
    """
    chosen = list(dict.fromkeys(program.plant.locations() if locations is None else locations))
    errors, known = ErrorList(), program.plant.section
    for at in chosen:
        if at.section not in known:
            errors.add("section", at.section, "a section", tip=nearest(at.section, known))
    for at, freq in (frequencies or {}).items():
        if not 0 <= freq < float("inf"):
            errors.add(f"faults per year at {at}", freq, "a finite number of zero or more")
    errors.raise_if_any()
    events: list[tuple[Location | NoFault, float | None]] = [
        (at, None if frequencies is None else frequencies.get(at, 0.0)) for at in chosen
    ]
    if no_fault:
        out = program.scheme.out_of_service
        rated = [c for c in program.scheme.components if c.no_fault_per_yr > 0 and c.name not in out]
        events += [(NoFault(c.name), c.no_fault_per_yr) for c in rated]
    judged = []
    for event, rate in events:
        case = bind(program, event, sensing, dispatch=dispatch)
        if isinstance(event, NoFault) or case.topology(0).fed:
            judged.append(_judged(case, rate, epsilon, max_runs, horizon_us))
    return MisoperationStudy(tuple(judged))


def _judged(case: Case, rate: float | None, epsilon: float, max_runs: int, horizon_us: int) -> Judged:
    tree = explore(case, epsilon=epsilon, max_runs=max_runs, horizon_us=horizon_us, complete=1)
    nominal = run_event(case, FixedAnswers(case.program), horizon_us=horizon_us).outcome
    groups: dict[Misoperation, list[Probability]] = {m: [] for m in Misoperation}
    spoiled: list[Probability] = []
    for leaf in tree.leaves:
        found = misoperation(tree.ends[leaf.end].outcome, case, tree.names(leaf.yes), nominal=nominal)
        for m in found:
            groups[m].append(leaf.probability)
        if found:
            spoiled.append(leaf.probability)
    fault = isinstance(case.event, Location)
    never = {Misoperation.FAILURE_TO_TRIP_OTHER, Misoperation.SLOW_TRIP_OTHER}
    alone = {Misoperation.UNNECESSARY_TRIP_OTHER}
    never |= alone if fault else set(Misoperation) - alone
    p = {m: exactly(0) if m in never else tree.bracket_of(masses) for m, masses in groups.items()}
    name = f"no fault, {case.event.component}" if isinstance(case.event, NoFault) else str(case.event)
    return Judged(name, rate, p, tree.bracket_of(spoiled))
