"""One fault location studied: every measure of its tree in one frozen record."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from schemesim.engine.case import Case, bind
from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.outcome import Outcome
from schemesim.engine.program import Program
from schemesim.engine.sensing import Sensing
from schemesim.plant.model import Location
from schemesim.scheme.model import Role
from schemesim.show.tables import to_html
from schemesim.study.brackets import Bracket, Expectation
from schemesim.study.losses import load_lost_mw, sections_lost
from schemesim.study.measures import (
    ClearingTime,
    breakers_distribution,
    breakers_excess,
    breakers_mean,
    cleared_by_time,
    clearing_time,
    excess_distribution,
    nominal,
    p_by_role,
    p_cleared,
    p_open,
    p_selective,
    p_undetermined,
    p_within_limit,
)
from schemesim.study.tree import MAX_RUNS, Tree, explore
from schemesim.study.weak_points import SinglePoint, single_points

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes


@dataclass(frozen=True)
class LocationOptions:
    """How each location is studied.

    Attributes
    ----------
    limit_us : int
        Longest clearing time that is in time.
    epsilon : float
        Mass of each tree left unexplored.
    max_runs : int
        Runs a tree may take.
    horizon_us : int
    dispatch : str or None
    """

    limit_us: int
    epsilon: float = 1e-5
    max_runs: int = MAX_RUNS
    horizon_us: int = DEFAULT_HORIZON_US
    dispatch: str | None = None


@dataclass(frozen=True, repr=False)
class LocationResult:
    """What was found for one fault location.

    Attributes
    ----------
    location : Location
    fed : bool
        False if no source feeds the fault: then there is nothing to clear.
    needed, intended : frozenset of str
        Breakers that must open, and that should.
    p_cleared, p_within_limit, p_undetermined, p_selective : Bracket
    p_not_cleared, p_late_or_uncleared : Bracket
        Taken from the tree and not as one less the others, so small ones stay sharp; what is
        undetermined at the horizon counts as not cleared.
    p_by_role : mapping of Role to Bracket
        By what the fault is cleared.
    breakers, excess : mapping of int to Bracket
        Distribution of the number of breakers tripped, and of those beyond the intended.
    breakers_mean, breakers_excess, load_lost_mw, sections_lost : Expectation
    clearing : ClearingTime
    nominal : Outcome or None
        With no failure at all.
    single_points : tuple of SinglePoint
        All of them, however improbable, unless the tree stopped at its budget.
    runs, unexplored, stopped
        As in the tree.
    opens : mapping of breaker to Bracket
        Probability that it opens, for each that does in some run (sources with a trip too).
    """

    location: Location
    fed: bool
    needed: frozenset[str]
    intended: frozenset[str]
    p_cleared: Bracket
    p_within_limit: Bracket
    p_not_cleared: Bracket
    p_late_or_uncleared: Bracket
    p_undetermined: Bracket
    p_selective: Bracket
    p_by_role: Mapping[Role, Bracket]
    breakers: Mapping[int, Bracket]
    excess: Mapping[int, Bracket]
    breakers_mean: Expectation
    breakers_excess: Expectation
    load_lost_mw: Expectation
    sections_lost: Expectation
    clearing: ClearingTime
    nominal: Outcome | None
    single_points: tuple[SinglePoint, ...]
    runs: int
    unexplored: float
    stopped: str
    opens: Mapping[str, Bracket] = field(default_factory=dict)

    @property
    def p_by_main(self) -> Bracket:
        """Probability that main protection clears the fault, timed zones not counted."""
        return self.p_by_role[Role.MAIN]

    @property
    def row(self) -> dict[str, object]:
        """One row of the table; units in the names."""
        p95 = self.clearing.quantile(0.95)
        t = None if self.nominal is None else self.nominal.t_clear_us
        row: dict[str, object] = {"location": str(self.location), "fed": self.fed, "needed": len(self.needed)}
        for name in ("p_cleared", "p_within_limit", "p_by_main"):
            row.update(ends(name, getattr(self, name)))
        for role in list(Role)[1:]:
            row.update(ends(f"p_by_{role.name.lower()}", self.p_by_role[role]))
        row.update(ends("p_selective", self.p_selective))
        row.update(ends("p_undetermined", self.p_undetermined))
        row.update(ends("breakers_mean", self.breakers_mean.bracket))
        row.update(ends("breakers_excess", self.breakers_excess.bracket))
        row["t_clear_ms_nominal"] = in_ms(t)
        row["t_clear_ms_p95_low"], row["t_clear_ms_p95"] = in_ms(p95.low_us, math.inf), in_ms(p95.high_us, math.inf)
        row["t_clear_ms_worst"] = in_ms(self.clearing.worst_us)
        row["p_worst_low"] = float(self.clearing.worst_probability.low)
        row.update(ends("load_lost_mw_mean", self.load_lost_mw.bracket))
        row.update(ends("sections_lost_mean", self.sections_lost.bracket))
        row["single_points"] = len(self.single_points)
        row["single_points_not_cleared"] = sum(s.not_cleared for s in self.single_points)
        row["worst"] = self.worst
        row["runs"], row["unexplored"], row["stopped"] = self.runs, self.unexplored, self.stopped
        return row

    @property
    def worst(self) -> str:
        """The worst single failure and what it does, or an empty text."""
        if not self.single_points:
            return ""
        point = self.single_points[0]
        return f"{point.failure} ({point.kind})"

    def table(self) -> pd.DataFrame:
        """The figures of the one location, one row for each measure; bounds where it has them."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame(
            [{"measure": name, "low": float(b.low), "high": float(b.high)} for name, b in self._figures().items()]
        )

    def _figures(self) -> dict[str, Bracket]:
        names = ("p_cleared", "p_within_limit", "p_selective", "p_undetermined", "p_not_cleared", "p_late_or_uncleared")
        found: dict[str, Bracket] = {name: getattr(self, name) for name in names}
        found |= {f"p_by_{role.name.lower()}": b for role, b in self.p_by_role.items()}
        means = ("breakers_mean", "breakers_excess", "load_lost_mw", "sections_lost")
        return found | {name: getattr(self, name).bracket for name in means}

    def __repr__(self) -> str:
        t = None if self.nominal is None else self.nominal.t_clear_us
        plainly = "not cleared" if t is None else f"cleared at {t / 1000:g} ms"
        lines = [
            f"LocationResult({self.location}: with no failure {plainly}, {len(self.intended)} breakers intended, "
            f"{len(self.single_points)} single points of failure, "
            f"{self.runs} runs)"
        ]
        lines.extend(f"  {name:28} {b}" for name, b in self._figures().items())
        lines.append(f"  {'clearing time, P95':28} {self.clearing.quantile(0.95)}")
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.table(), caption=f"fault on {self.location}")

    def plot_breakers(self, ax: Axes | None = None) -> Axes:
        """The distribution of the number of breakers tripped, on a logarithmic axis, with its brackets."""
        from schemesim.show.bars import plot_counts  # heavy: only when a picture is asked for

        counts = {n: (float(b.low), float(b.high)) for n, b in self.breakers.items()}
        title, few = f"fault on {self.location}: breakers tripped", len(self.intended)
        return plot_counts(counts, title=title, x="breakers tripped", marked=few, marked_text=f"intended: {few}", ax=ax)

    def plot_clearing(self, limit_ms: float | None = None, ax: Axes | None = None) -> Axes:
        """The probability that the fault is not yet cleared after a time, with its bracket; the limit marked."""
        from schemesim.show.curves import Line, plot_left  # heavy: only when a picture is asked for

        steps = [(t / 1000, (float(b.low), float(b.high))) for t, b in self.clearing.cdf]
        lines = [] if limit_ms is None else [Line(limit_ms, f"limit {limit_ms:g} ms", dashed=True)]
        return plot_left(steps, title=f"fault on {self.location}: time to clear it", lines=lines, ax=ax)


def study_location(program: Program, location: Location, sensing: Sensing, options: LocationOptions) -> LocationResult:
    """Bind one fault location, explore its tree and measure it.

    Every single failure is explored, however improbable; further combinations down to epsilon.
    """
    case = bind(program, location, sensing, dispatch=options.dispatch)
    tree = explore(
        case,
        epsilon=options.epsilon,
        max_runs=options.max_runs,
        horizon_us=options.horizon_us,
        complete=1,
    )
    return measure(case, location, tree, options.limit_us)


def measure(case: Case, location: Location, tree: Tree, limit_us: int) -> LocationResult:
    """Every measure of a tree that is already explored."""
    return LocationResult(
        location=location,
        fed=case.topology(0).fed,
        needed=case.duty.needed,
        intended=case.duty.intended,
        p_cleared=p_cleared(tree),
        p_within_limit=p_within_limit(tree, limit_us),
        p_not_cleared=tree.bracket(lambda o: o.t_clear_us is None),
        p_late_or_uncleared=tree.bracket(lambda o: not cleared_by_time(o, limit_us)),
        p_undetermined=p_undetermined(tree),
        p_selective=p_selective(tree, case),
        p_by_role=p_by_role(tree, case),
        breakers=breakers_distribution(tree),
        excess=excess_distribution(tree, case),
        breakers_mean=breakers_mean(tree, case),
        breakers_excess=breakers_excess(tree, case),
        load_lost_mw=load_lost_mw(tree, case),
        sections_lost=sections_lost(tree, case),
        clearing=clearing_time(tree),
        nominal=nominal(tree),
        single_points=single_points(tree, case, limit_us),
        runs=tree.runs,
        unexplored=float(tree.unexplored),
        stopped=tree.stopped,
        opens=p_open(tree),
    )


def ends(name: str, bracket: Bracket) -> dict[str, object]:
    """Low and high as two columns."""
    return {f"{name}_low": float(bracket.low), f"{name}_high": float(bracket.high)}


def in_ms(t_us: int | None, none: float | None = None) -> float | None:
    """Microseconds in ms, or what stands for none."""
    return none if t_us is None else t_us / 1000
