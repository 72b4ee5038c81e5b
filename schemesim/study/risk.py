"""The yearly risk of a variant in money, from one event tree at each fault location.

Trees are explored once and kept with what their endings mean (clearing time, load lost,
needless breakers); prices are put on them afterwards, so another price costs no run.

A tree whose case is the same under two variants (same blocks, same failure data, same
duty) is explored once and shared. In the difference of two variants what is shared cancels
exactly, so an edit that touches one element has a narrow difference.

Rounding: sums of non-negative products in floating point, of under 10^5 terms each, are
within 10^-11 of their value, relative; brackets are widened by that.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Hashable, Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from schemesim.engine.case import Case, bind
from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.program import Program
from schemesim.engine.sensing import Event, LogicalSensing, NoFault, Sensing
from schemesim.errors import ErrorList, reject
from schemesim.plant.model import Location
from schemesim.scheme.model import Breaker, Gate
from schemesim.study.brackets import Bracket
from schemesim.study.losses import lost
from schemesim.study.measures import cleared_by_time, excess
from schemesim.study.money import Values
from schemesim.study.tree import MAX_RUNS, End, Tree, explore

WIDENED = 1e-11

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Columns:
    """What endings mean, one entry each.

    Attributes
    ----------
    t_ms : ndarray
        Clearing time; infinite where the fault is not cleared, 0 where there is none.
    late : ndarray
        1 where a fault is cleared after the limit or not at all.
    load_mw, needless, spurious : ndarray
        Load lost, breakers opened beyond the intended ones, 1 for a trip with no fault.
    """

    t_ms: Floats
    late: Floats
    load_mw: Floats
    needless: Floats
    spurious: Floats


Measure = Callable[[Columns, Values], Floats]
"""A quantity of each ending that is never negative and no more than at the worst."""


def load_cost(c: Columns, v: Values) -> Floats:
    """Cost of lost load."""
    return c.load_mw * (v.restoration_h * v.lost_load_per_mwh)


def damage_cost(c: Columns, v: Values) -> Floats:
    """Damage by the time a fault lasts."""
    grown = np.where(np.isinf(c.t_ms), math.inf if v.damage_cap else 0.0, 0.0)
    finite = np.where(np.isinf(c.t_ms), 0.0, c.t_ms) * v.damage_per_ms
    return np.minimum(grown + finite, v.damage_cap)


def instability_cost(c: Columns, v: Values) -> Floats:
    """Cost of instability."""
    return c.late * (v.p_unstable_if_late * v.instability)


def needless_cost(c: Columns, v: Values) -> Floats:
    """Cost of breakers opened beyond the intended ones in a fault."""
    return c.needless * v.needless_trip


def no_fault_cost(c: Columns, v: Values) -> Floats:
    """Cost of trips with no fault, lost load apart."""
    return c.spurious * v.no_fault_trip


def event_cost(c: Columns, v: Values) -> Floats:
    """Everything an event costs."""
    found: Floats = np.asarray(sum(part(c, v) for part in PARTS.values()), dtype=np.float64)
    return found


PARTS: Mapping[str, Measure] = {
    "load": load_cost,
    "damage": damage_cost,
    "instability": instability_cost,
    "needless_trips": needless_cost,
    "no_fault_trips": no_fault_cost,
}
"""What the cost of an event is made of."""

MEASURES: Mapping[str, Measure] = {
    "risk_per_yr": event_cost,
    **{f"risk_{name}_per_yr": part for name, part in PARTS.items()},
    "uncleared_per_yr": lambda c, _: np.isinf(c.t_ms).astype(np.float64),
    "late_or_uncleared_per_yr": lambda c, _: c.late,
    "load_lost_mw_per_yr": lambda c, _: c.load_mw,
    "needless_trips_per_yr": lambda c, _: c.needless,
    "no_fault_trips_per_yr": lambda c, _: c.spurious,
}
"""Yearly figures of a variant; less is better in all of them."""


@dataclass(frozen=True, eq=False)
class Place:
    """One event studied: its tree, and what its endings mean; ``worst`` has one entry, the bound of each."""

    event: Event
    tree: Tree
    case: Case
    limit_us: int
    columns: Columns
    worst: Columns
    least: Floats
    most: Floats
    unexplored: float

    def bracket(self, measure: Measure, values: Values) -> tuple[float, float]:
        """The mean of a measure for one such event: its low and its high end."""
        each, bound = measure(self.columns, values), float(measure(self.worst, values)[0])
        if measure is event_cost and values.worst_event is not None:
            if each.size and float(each.max()) > values.worst_event:
                raise reject("worst_event", values.worst_event, f"{float(each.max()):g} or more, met at {self.event}")
            bound = min(bound, values.worst_event)
        return float(each @ self.least), float(each @ self.most) + bound * self.unexplored

    def estimate(self, measure: Measure, values: Values) -> float:
        """The mean of a measure over what was explored."""
        explored = float(self.least.sum())
        return float(measure(self.columns, values) @ self.least) / explored if explored else 0.0


@dataclass(frozen=True)
class Ledger:
    """Every event of one variant with its frequency per year."""

    program: Program
    places: tuple[tuple[Place, float], ...]

    @property
    def runs(self) -> int:
        """Runs behind it."""
        return sum(p.tree.runs for p, _ in self.places)

    def figure(self, measure: Measure, values: Values) -> Bracket:
        """A yearly figure."""
        return _sum([(*p.bracket(measure, values), rate) for p, rate in self.places])

    def estimate(self, measure: Measure, values: Values) -> float:
        """A yearly figure from what was explored, as if the rest were like it: a best guess inside the bracket."""
        return math.fsum(rate * p.estimate(measure, values) for p, rate in self.places)

    def less(self, other: Ledger, measure: Measure, values: Values) -> Bracket:
        """This variant less another; what both share cancels exactly."""
        shared = {(id(p), rate) for p, rate in self.places} & {(id(p), rate) for p, rate in other.places}
        mine = [(*p.bracket(measure, values), rate) for p, rate in self.places if (id(p), rate) not in shared]
        others = [(*p.bracket(measure, values), rate) for p, rate in other.places if (id(p), rate) not in shared]
        return _sum(mine) - _sum(others)


def _sum(rows: list[tuple[float, float, float]]) -> Bracket:
    low = math.fsum(rate * a for a, _, rate in rows) * (1 - WIDENED)
    return Bracket(low, max(low, math.fsum(rate * b for _, b, rate in rows) * (1 + WIDENED)))


@dataclass(frozen=True)
class Explorer:
    """Explores variants over the same events, each different case once.

    Parameters
    ----------
    frequencies : mapping of Location to float
        The fault set: faults per year.
    limit_us : callable
        From a location to its limit in microseconds.
    dispatch : str or None
    epsilon : float
        Mass of each tree left unexplored.
    no_fault : bool
        Trips with no fault too.
    complete : int
        Explore every combination of up to so many failures at a fault: with 1 no single failure is
        missed by an estimate.
    max_runs, horizon_us : int
        Of each tree, and of each run.

    Raises
    ------
    InputError
        For frequencies that are negative, not finite or none at all, or a bad epsilon.
    """

    frequencies: Mapping[Location, float]
    limit_us: Callable[[Location], int]
    dispatch: str | None = None
    epsilon: float = 1e-3
    no_fault: bool = True
    complete: int = 1
    max_runs: int = MAX_RUNS
    horizon_us: int = DEFAULT_HORIZON_US
    sensing: Sensing = field(default_factory=LogicalSensing)
    _known: dict[Hashable, Place] = field(default_factory=dict, init=False, compare=False, repr=False)

    def __post_init__(self) -> None:
        errors = ErrorList()
        for at, rate in self.frequencies.items():
            if not 0 <= rate < math.inf:
                errors.add(f"faults per year at {at}", rate, "a finite number of zero or more")
        if not any(self.frequencies.values()):
            errors.add("fault frequencies", "none over zero", "at least one, since risk is counted per year")
        if not 0 < self.epsilon < 1:
            errors.add("epsilon", self.epsilon, "a mass between 0 and 1")
        errors.raise_if_any()

    def ledger(self, program: Program) -> Ledger:
        """Every event of a variant."""
        places: list[tuple[Place, float]] = []
        for at, rate in self.frequencies.items():
            if rate > 0:
                found = self._place(program, at)
                if found is not None:
                    places.append((found, rate))
        for c in program.scheme.components if self.no_fault else ():
            if c.no_fault_per_yr > 0 and c.name not in program.scheme.out_of_service:
                found = self._place(program, NoFault(c.name))
                if found is not None:
                    places.append((found, c.no_fault_per_yr))
        return Ledger(program, tuple(places))

    def _place(self, program: Program, event: Event) -> Place | None:
        case = bind(program, event, self.sensing, dispatch=self.dispatch)
        if isinstance(event, Location) and not case.topology(0).fed:
            return None
        key = signature(case)
        if key not in self._known:
            # A trip with no fault is rare and costs little: its most probable histories are enough.
            complete = self.complete if isinstance(event, Location) else 0
            tree = explore(
                case, epsilon=self.epsilon, max_runs=self.max_runs, horizon_us=self.horizon_us, complete=complete
            )
            limit_us = self.limit_us(event) if isinstance(event, Location) else 0
            self._known[key] = place_of(case, tree, limit_us)
        return self._known[key]


def place_of(case: Case, tree: Tree, limit_us: int) -> Place:
    """A tree with the meaning of its endings."""
    load, _ = lost(case, (1 << len(case.breakers)) - 1)
    if isinstance(case.event, NoFault):
        worst = _columns([(0.0, 0.0, load, 0.0, 1.0)])
    else:
        beyond = len({case.names[b] for b in case.breakers} - case.duty.intended)
        worst = _columns([(math.inf, 1.0, load, float(beyond), 0.0)])
    return Place(
        event=case.event,
        tree=tree,
        case=case,
        limit_us=limit_us,
        columns=_columns([meaning(case, end, limit_us) for end in tree.ends]),
        worst=worst,
        least=np.array([float(tree.floor(m)) for m in tree.masses]),
        most=np.array([float(tree.ceiling(m)) for m in tree.masses]),
        unexplored=float(tree.ceiling(tree.unexplored)),
    )


def meaning(case: Case, end: End, limit_us: int) -> tuple[float, float, float, float, float]:
    """Clearing time in ms, late, load lost in MW, needless breakers, trip with no fault."""
    load, _ = lost(case, end.final_mask)
    o = end.outcome
    if isinstance(case.event, NoFault):
        return 0.0, 0.0, load, 0.0, float(bool(o.openings))
    t = math.inf if o.t_clear_us is None else o.t_clear_us / 1000
    return t, float(not cleared_by_time(o, limit_us)), load, float(excess(case, o)), 0.0


def columns_of(case: Case, ends: list[End], limit_us: int) -> Columns:
    """The meaning of endings."""
    return _columns([meaning(case, end, limit_us) for end in ends])


def _columns(rows: list[tuple[float, float, float, float, float]]) -> Columns:
    return Columns(*np.array(rows, dtype=np.float64).reshape(len(rows), 5).T.copy())


def signature(case: Case) -> Hashable:
    """Equal for two cases whose runs are the same under the same answers, with the same odds of these."""
    program = case.program
    scheme = program.scheme
    blocks = tuple(scheme.block[name] for name in case.names)
    asked = {a.component for b in blocks if isinstance(b, Gate) for a in (*b.unless, *b.given)}
    asked |= {b.component for b in blocks if isinstance(b, Breaker) and b.component}
    causes = tuple(c for c in scheme.common_causes if any(m.component in asked for m in c.members))
    order = tuple(sorted(range(len(blocks)), key=lambda n: case.order[n]))
    named = tuple(tuple(program.questions[q].name for q in group) for group in case.asks)
    extra = () if isinstance(case.event, Location) else (scheme.component[case.event.component],)
    return (
        case.event,
        case.dispatch,
        case.duty,
        blocks,
        case.inputs,
        case.k,
        case.unless,
        case.given,
        named,
        case.certain,
        case.rank,
        case.breakers,
        order,
        tuple(scheme.component[c] for c in sorted(asked)),
        tuple(sorted(asked & scheme.out_of_service)),
        causes,
        extra,
    )
