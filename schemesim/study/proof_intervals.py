"""The risk of a scheme against the test interval of a class of its components, and the interval where it is least.

Tested seldom, failures stay hidden; tested often, items are out for their tests. At each interval the risk is
the mean over it: at several phases the class has the age it then has (all of it alike, or by turns where items stand
in for each other), so that two items tested together are old together. All other components are at their
means, as their tests fall anywhere (assumed); and time out for tests is spread alike over the interval, as
items that stand in for each other are not taken out at once (assumed).

One tree is explored for each location, at the worst phase of the longest interval; its leaves are then weighed anew for
each interval and phase. What the leaves do not hold stays in the bracket. The mean over the phases is by quadrature,
exact for polynomials of degree seven in the age; its own error, far below what failure data are known to, is
not in the bracket.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

from schemesim.engine.case import bind
from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import Sensing
from schemesim.errors import ErrorList, reject
from schemesim.plant.model import Location
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import ComponentKind
from schemesim.scheme.redundancy import quadrature
from schemesim.scheme.unavailability import MAX_YR, need, optimal_interval_yr
from schemesim.show.tables import to_html
from schemesim.study.ages import Tested, at_time, class_of, questions_at, weighed
from schemesim.study.brackets import Bracket, exactly, total
from schemesim.study.locations import Progress
from schemesim.study.measures import cleared_by_time
from schemesim.study.register import limits_of
from schemesim.study.tree import MAX_RUNS, Tree, explore

if TYPE_CHECKING:
    import pandas as pd

INTERVALS_YR = (0.25, 0.5, 1.0, 2.0, 3.0, 4.0, 6.0, 8.0, 12.0)
"""Intervals by default."""

NODES = 4
"""Phases of each stretch between two tests."""


@dataclass(frozen=True, slots=True)
class AtInterval:
    """One test interval.

    Attributes
    ----------
    interval_yr : float
    late, uncleared : Bracket
        Faults cleared late or not at all, and not at all: a year, or the share of faults without frequencies; mean
        over the interval.
    late_worst : Bracket
        The first of these just before a test, where it is worst.
    tests_per_yr : float
        Of all components of the class.
    cost : Bracket or None
        Tests, and what late and uncleared faults cost, a year; None without costs.
    """

    interval_yr: float
    late: Bracket
    uncleared: Bracket
    late_worst: Bracket
    tests_per_yr: float
    cost: Bracket | None

    @property
    def weight(self) -> Bracket:
        """What is to be least: the cost where there is one, else late and uncleared faults."""
        return self.late if self.cost is None else self.cost


@dataclass(frozen=True)
class IntervalStudy:
    """The risk of a scheme against the test interval of a class of components.

    Attributes
    ----------
    kind, pattern
        The class.
    rows : tuple of AtInterval
        In rising order.
    components : int
        In the class.
    single_yr : tuple of (str, float)
        For each mode of the class the interval √(2τ/(λ(1−C))) at which one item by itself is least unavailable.
    per_yr : bool
        Whether figures are per year, or shares of faults.
    locations : int
    """

    kind: ComponentKind
    pattern: str
    rows: tuple[AtInterval, ...]
    components: int
    single_yr: tuple[tuple[str, float], ...]
    per_yr: bool
    locations: int

    @property
    def best(self) -> AtInterval:
        """The interval whose middle is least."""
        return min(self.rows, key=lambda r: (r.weight.low + r.weight.high, -r.interval_yr))

    @property
    def may_be_best(self) -> tuple[float, ...]:
        """Intervals that the brackets do not rule out as the best of those studied."""
        least = min(r.weight.high for r in self.rows)
        return tuple(r.interval_yr for r in self.rows if r.weight.low <= least)

    def records(self) -> list[dict[str, object]]:
        """One row for each interval."""
        unit = "_per_yr" if self.per_yr else "_share"
        out = []
        for r in self.rows:
            row: dict[str, object] = {"interval_yr": r.interval_yr}
            for name, b in (("late", r.late), ("uncleared", r.uncleared), ("late_worst", r.late_worst)):
                row |= {f"{name}{unit}_low": float(b.low), f"{name}{unit}_high": float(b.high)}
            row["tests_per_yr"] = r.tests_per_yr
            if r.cost is not None:
                row |= {"cost_per_yr_low": float(r.cost.low), "cost_per_yr_high": float(r.cost.high)}
            row["may_be_best"] = r.interval_yr in self.may_be_best
            out.append(row)
        return out

    def table(self) -> pd.DataFrame:
        """One row for each interval."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame(self.records())

    def __repr__(self) -> str:
        what = "late or uncleared a year" if self.per_yr else "of faults late or uncleared"
        lines = [
            f"IntervalStudy({self.components} of kind {self.kind}, {self.pattern!r}, {self.locations} locations: "
            f"least at {self.best.interval_yr:g} yr)"
        ]
        for r in self.rows:
            cost = "" if r.cost is None else f", cost {r.cost}"
            lines.append(f"  {r.interval_yr:6g} yr  {r.late} {what}{cost}")
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.table())


@dataclass(frozen=True, slots=True, kw_only=True)
class TestCosts:
    """What tests and faults cost, in one unit of money.

    Parameters
    ----------
    per_test : float
        Each test of one component.
    late, uncleared : float
        Each fault cleared late or not at all; and what comes on top where it is not cleared.
    """

    __test__ = False  # no test of this project's own

    per_test: float
    late: float = 0.0
    uncleared: float = 0.0

    def __post_init__(self) -> None:
        errors = ErrorList()
        for name in ("per_test", "late", "uncleared"):
            need(errors, name, getattr(self, name), 0, 1e15)
        errors.raise_if_any()


def study_test_intervals(
    program: Program,
    data: FailureData,
    sensing: Sensing,
    locations: Iterable[Location] | None = None,
    *,
    kind: ComponentKind,
    pattern: str = "*",
    intervals_yr: Iterable[float] = INTERVALS_YR,
    limit_us: int | Mapping[Location, int],
    frequencies: Mapping[Location, float] | None = None,
    staggered: bool | None = None,
    costs: TestCosts | None = None,
    dispatch: str | None = None,
    epsilon: float = 1e-3,
    max_runs: int = MAX_RUNS,
    horizon_us: int = DEFAULT_HORIZON_US,
    progress: Progress | None = None,
) -> IntervalStudy:
    """The risk of a scheme at several test intervals of a class of components.

    Parameters
    ----------
    program : Program
    data : FailureData
        That the scheme was dressed with; the class has its failures from ``data.rates``.
    sensing : Sensing
    locations : iterable of Location or None
        By default every location of the plant.
    kind, pattern
        The class: components of a kind whose names match.
    intervals_yr : iterable of float
    limit_us : int or mapping of Location to int
        Longest clearing time that is in time.
    frequencies : mapping of Location to float, or None
        Faults a year; without them figures are shares of faults, every location weighing the same.
    staggered : bool or None
        Whether items that stand in for each other are tested by turns; None: as their rules say.
    costs : TestCosts or None
        Needs frequencies.
    dispatch, epsilon, max_runs, horizon_us
        Of the trees.
    progress : callable or None

    Raises
    ------
    InputError
        For a class without components, intervals, limits or frequencies that are not as stated.
    """
    chosen = list(dict.fromkeys(program.plant.locations() if locations is None else locations))
    limits = limits_of(program, chosen, limit_us)
    steps = _checked(intervals_yr, frequencies, costs)
    tested = class_of(program.scheme, data, kind, pattern)
    errors = ErrorList()
    for r in dict.fromkeys(r for t in tested for r in t.rules):
        if r.data.test_duration_h > steps[0] * 8760:
            errors.add("interval", steps[0], f"no less than the test of {r.kind}, {r.data.test_duration_h:g} h")
    errors.raise_if_any()
    longest = at_time(program.scheme, data, tested, steps[-1], 1.0, staggered=False)
    grown = compile_scheme(program.plant, longest)
    places = _phases(tested, staggered)
    settings = [
        [questions_at(grown, at_time(program.scheme, data, tested, t, f, staggered)) for f, _ in places] for t in steps
    ]
    weights = [w for _, w in places]
    late: list[list[list[Bracket]]] = [[[] for _ in places] for _ in steps]
    uncleared: list[list[list[Bracket]]] = [[[] for _ in places] for _ in steps]
    weight = exactly(0)
    for n, at in enumerate(chosen):
        case = bind(grown, at, sensing, dispatch=dispatch)
        rate = 1.0 if frequencies is None else frequencies.get(at, 0.0)
        if case.topology(0).fed and rate > 0:
            tree = explore(case, epsilon=epsilon, max_runs=max_runs, horizon_us=horizon_us, complete=1)
            weight = weight + exactly(rate)
            for i, row in enumerate(settings):
                for k, questions in enumerate(row):
                    found = weighed(tree, grown, questions)
                    late[i][k].append(exactly(rate) * _late(found, limits[at]))
                    uncleared[i][k].append(exactly(rate) * found.bracket(lambda o: o.t_clear_us is None))
        if progress is not None:
            progress(n + 1, len(chosen))
    if not weight.high > 0:
        raise reject("locations", [str(at) for at in chosen], "one that is fed, with faults, at least")
    unit = weight if frequencies is None else exactly(1)
    rows = []
    for i, t in enumerate(steps):
        lates = [total(b) / unit for b in late[i]]
        mean, none = _mean(lates, weights), _mean([total(b) / unit for b in uncleared[i]], weights)
        tests = len(tested) / t
        cost = None
        if costs is not None:
            cost = exactly(tests * costs.per_test) + exactly(costs.late) * mean + exactly(costs.uncleared) * none
        ends = [b for b, w in zip(lates, weights, strict=True) if not w]
        worst = Bracket(max(b.low for b in ends), max(b.high for b in ends))
        rows.append(AtInterval(t, mean, none, worst, tests, cost))
    single = {
        f"{r.kind} {r.mode}": optimal_interval_yr(r.data.hidden_per_yr, r.data.test_duration_h)
        for t in tested
        for r in t.rules
        if r.data.hidden_per_yr > 0 and r.data.test_duration_h > 0
    }
    return IntervalStudy(
        kind, pattern, tuple(rows), len(tested), tuple(sorted(single.items())), frequencies is not None, len(chosen)
    )


def _late(tree: Tree, limit_us: int) -> Bracket:
    return tree.bracket(lambda o: not cleared_by_time(o, limit_us))


def _mean(values: list[Bracket], weights: list[float]) -> Bracket:
    return total(exactly(w) * b for b, w in zip(values, weights, strict=True) if w)


def _phases(tested: tuple[Tested, ...], staggered: bool | None) -> list[tuple[float, float]]:
    """Phases of the interval and their weights; those just before a test have the weight 0."""
    turns = [t.of for t in tested if (t.staggered if staggered is None else staggered)]
    pieces = math.lcm(*turns) if turns else 1
    inside = [((p + x) / pieces, w / pieces) for p in range(pieces) for x, w in quadrature(NODES)]
    return inside + [((p + 1) / pieces - 1e-9 / pieces, 0.0) for p in range(pieces)]


def _checked(
    intervals_yr: Iterable[float], frequencies: Mapping[Location, float] | None, costs: TestCosts | None
) -> list[float]:
    errors = ErrorList()
    steps = list(intervals_yr)
    for t in steps:
        need(errors, "interval", t, math.ulp(0.0), MAX_YR, f"a number of years over 0, at most {MAX_YR:g}")
    if not steps:
        errors.add("intervals", "none", "one at least")
    for at, rate in (frequencies or {}).items():
        if not 0 <= rate < math.inf:
            errors.add(f"faults per year at {at}", rate, "a finite number of zero or more")
    if costs is not None and frequencies is None:
        errors.add("costs", costs, "fault frequencies beside them: without these nothing is per year")
    errors.raise_if_any()
    return sorted(set(steps))
