"""Trips with no fault at all (rule R18): how many breakers they open, and how many times a year.

Each component with a rate of tripping on its own is an initiating event, run through
the same engine and tree. Nothing is needed, so every breaker opened is unwanted.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING

from schemesim.engine.case import bind
from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.program import Program
from schemesim.engine.sensing import NoFault, Sensing
from schemesim.errors import reject
from schemesim.scheme.model import Probability
from schemesim.show.tables import to_html
from schemesim.study.brackets import Bracket, Expectation, exactly, total
from schemesim.study.losses import load_lost_mw
from schemesim.study.measures import breakers_mean
from schemesim.study.tree import explore

if TYPE_CHECKING:
    import pandas as pd

EPSILON = 1e-6


@dataclass(frozen=True)
class NoFaultTrip:
    """What the trip of one component with no fault leads to.

    Attributes
    ----------
    component : str
    per_yr : float
        How often, per year.
    p_any : Bracket
        Probability that a breaker opens at all.
    breakers : Expectation
        Mean number of breakers opened.
    load_lost_mw : Expectation
    """

    component: str
    per_yr: float
    p_any: Bracket
    breakers: Expectation
    load_lost_mw: Expectation
    runs: int
    unexplored: Probability

    @property
    def trips_per_yr(self) -> Bracket:
        """Unwanted operations (a breaker opens) per year."""
        return exactly(self.per_yr) * self.p_any

    @property
    def breakers_per_yr(self) -> Bracket:
        """Breakers opened needlessly per year."""
        return exactly(self.per_yr) * self.breakers.bracket


@dataclass(frozen=True)
class NoFaultStudy:
    """Every component that trips without a fault."""

    trips: tuple[NoFaultTrip, ...]

    @property
    def trips_per_yr(self) -> Bracket:
        """Unwanted operations per year, all components."""
        return total(t.trips_per_yr for t in self.trips)

    @property
    def breakers_per_yr(self) -> Bracket:
        """Breakers opened needlessly per year, all components."""
        return total(t.breakers_per_yr for t in self.trips)

    def table(self) -> pd.DataFrame:
        """One row for each component."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame(
            [
                {
                    "component": t.component,
                    "freq_per_yr": t.per_yr,
                    "p_any_low": float(t.p_any.low),
                    "p_any_high": float(t.p_any.high),
                    "breakers_mean_low": float(t.breakers.bracket.low),
                    "breakers_mean_high": float(t.breakers.bracket.high),
                    "breakers_per_yr_low": float(t.breakers_per_yr.low),
                    "breakers_per_yr_high": float(t.breakers_per_yr.high),
                    "load_lost_mw_mean_low": float(t.load_lost_mw.bracket.low),
                    "load_lost_mw_mean_high": float(t.load_lost_mw.bracket.high),
                    "runs": t.runs,
                    "unexplored": float(t.unexplored),
                }
                for t in self.trips
            ]
        )

    def __repr__(self) -> str:
        return f"NoFaultStudy({len(self.trips)} components, {self.trips_per_yr} trips a year)"

    def _repr_html_(self) -> str:
        return to_html(self.table())


def study_no_fault(
    program: Program,
    sensing: Sensing,
    components: Iterable[str] | None = None,
    *,
    dispatch: str | None = None,
    epsilon: float = EPSILON,
    max_runs: int = 20_000,
    horizon_us: int = DEFAULT_HORIZON_US,
) -> NoFaultStudy:
    """Study the trips with no fault of each component that has a rate of them.

    Parameters
    ----------
    program : Program
    sensing : Sensing
    components : iterable of str or None
        Only these; by default all with a rate over zero.
    dispatch : str or None
    epsilon : float
        Mass of each tree left unexplored.
    max_runs : int
    horizon_us : int

    Raises
    ------
    InputError
        For a component that is not there.
    """
    known = program.scheme.component
    chosen = sorted(known) if components is None else sorted(set(components))
    for name in chosen:
        if name not in known:
            raise reject("component", name, "the name of a component")
    trips = []
    for name in chosen:
        rate = known[name].no_fault_per_yr
        if rate == 0 or name in program.scheme.out_of_service:
            continue
        case = bind(program, NoFault(name), sensing, dispatch=dispatch)
        tree = explore(case, epsilon=epsilon, max_runs=max_runs, horizon_us=horizon_us)
        trips.append(
            NoFaultTrip(
                component=name,
                per_yr=rate,
                p_any=tree.bracket(lambda o: bool(o.openings)),
                breakers=breakers_mean(tree, case),
                load_lost_mw=load_lost_mw(tree, case),
                runs=tree.runs,
                unexplored=tree.unexplored,
            )
        )
    return NoFaultStudy(tuple(trips))
