"""How far a decision hangs on its assumptions: a tornado, and a run over uncertain failure data.

Failure data enter a tree only as the probabilities of its answers, so another set of
them puts other weights on the same leaves and needs no run. What the tree left unexplored
is one less the sum of the new weights: the bracket stays true and is wider where failures are likelier.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from statistics import NormalDist
from typing import TYPE_CHECKING

import numpy as np

from schemesim.engine.draws import uniforms
from schemesim.engine.sensing import NoFault
from schemesim.errors import ErrorList
from schemesim.scheme.model import Scheme
from schemesim.show.tables import to_html
from schemesim.study.frontier import Weigher
from schemesim.study.money import Costs, Money, Values
from schemesim.study.risk import Floats, Ledger, Place, event_cost

if TYPE_CHECKING:
    import pandas as pd

Factors = Mapping[str, Floats]
"""Factors on failure data by kind of component, one entry each sample; ``no_fault`` on the rates of tripping."""

QUANTILES = (0.05, 0.5, 0.95)


@dataclass(frozen=True, slots=True)
class Sampled:
    """A yearly figure for each sample: its bounds, and the best estimate between them."""

    low: Floats
    high: Floats
    estimate: Floats


def reweighted(ledger: Ledger, values: Values, factors: Factors, samples: int) -> Sampled:
    """Yearly risk under other failure data, from the leaves already explored.

    Parameters
    ----------
    ledger : Ledger
    values : Values
    factors : mapping of kind (or ``no_fault``) to ndarray of shape (samples,)
        Each probability of a kind's modes is multiplied; modes of one component that would sum to
        more than one are scaled down together. A common cause goes with the kind of its first member.
    samples : int
    """
    low, high, estimate = np.zeros(samples), np.zeros(samples), np.zeros(samples)
    scheme = ledger.program.scheme
    for place, rate in ledger.places:
        each = event_cost(place.columns, values)
        bound = float(event_cost(place.worst, values)[0])
        if values.worst_event is not None:
            bound = min(bound, values.worst_event)
        masses = _masses(place, scheme, factors, samples)
        explored = masses.sum(axis=0)
        mean = each @ masses
        often = rate * factors.get("no_fault", np.ones(samples)) if isinstance(place.event, NoFault) else rate
        low += often * mean
        high += often * (mean + bound * np.clip(1 - explored, 0, 1))
        estimate += often * mean / np.where(explored > 0, explored, 1)
    return Sampled(low, high, estimate)


def _masses(place: Place, scheme: Scheme, factors: Factors, samples: int) -> Floats:
    """The mass of each ending in each sample."""
    tree = place.tree
    siblings = place.case.program.siblings
    chance: dict[int, Floats] = {}
    odds: dict[tuple[int, tuple[int, ...]], tuple[Floats, Floats]] = {}

    def of(q: int) -> Floats:
        if q not in chance:
            group = [q, *siblings[q]]
            kind = _kind(scheme, tree.questions[q].component, tree.questions[q].name)
            factor = factors.get(kind, np.ones(samples))
            total = factor * float(sum(tree.questions[j].probability for j in group))
            chance[q] = factor * float(tree.questions[q].probability) / np.maximum(total, 1.0)
        return chance[q]

    def answers(q: int, refused: tuple[int, ...]) -> tuple[Floats, Floats]:
        key = q, refused
        if key not in odds:
            rest = 1 - sum((of(r) for r in refused), np.zeros(samples))
            yes = np.clip(of(q) / np.where(rest > 0, rest, 1.0), 0.0, 1.0)
            odds[key] = yes, 1 - yes
        return odds[key]

    found = np.zeros((len(tree.ends), samples))
    for leaf in tree.leaves:
        mass = np.ones(samples)
        known: dict[int, bool] = {}
        for q, answer in leaf.asked:
            refused = tuple(sorted(s for s in siblings[q] if known.get(s) is False))
            yes, no = answers(q, refused)
            mass = mass * (yes if answer else no)
            known[q] = answer
        found[leaf.end] += mass
    return found


def _kind(scheme: Scheme, component: str, question: str) -> str:
    if component:
        return str(scheme.component[component].kind)
    for cause in scheme.common_causes:
        if question.endswith(cause.name) and cause.members:
            return str(scheme.component[cause.members[0].component].kind)
    return ""


@dataclass(frozen=True, slots=True)
class Bar:
    """One assumption of a tornado.

    Attributes
    ----------
    assumption : str
    low, high : float
        Ends of its range.
    net_low, net_base, net_high : float
        Yearly net benefit of the plan (risk removed less cost added) at the low end, as assumed,
        and at the high end; best estimates.
    order_low, order_high : tuple of str
        Additions in order at each end.
    order_changes : bool
        Whether one of them differs from the order as assumed.
    """

    assumption: str
    low: float
    high: float
    net_low: float
    net_base: float
    net_high: float
    order_low: tuple[str, ...]
    order_high: tuple[str, ...]
    order_changes: bool

    @property
    def swing(self) -> float:
        """How far the net benefit moves over the range."""
        found = (self.net_low, self.net_base, self.net_high)
        return max(found) - min(found)


@dataclass(frozen=True)
class Tornado:
    """Assumptions by falling swing of the plan's net benefit."""

    unit: str
    order: tuple[str, ...]
    whole: bool
    bars: tuple[Bar, ...]

    def table(self) -> pd.DataFrame:
        """One row for each assumption."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame(
            [
                {
                    "assumption": b.assumption,
                    "range_from": b.low,
                    "range_to": b.high,
                    "net_low": b.net_low,
                    "net_base": b.net_base,
                    "net_high": b.net_high,
                    "swing": b.swing,
                    "order_changes": b.order_changes,
                    "order_low": ", ".join(b.order_low),
                    "order_high": ", ".join(b.order_high),
                }
                for b in self.bars
            ]
        )

    def __repr__(self) -> str:
        what = "plan" if self.whole else "first additions"
        lines = [f"Tornado, net benefit in {self.unit} a year; {what}: {', '.join(self.order) or 'nothing pays'}"]
        for b in self.bars:
            change = "order changes" if b.order_changes else "same order"
            span = f"{b.low:g} to {b.high:g}"
            lines.append(f"  {b.assumption:24} {span:18} net {b.net_low:.6g} to {b.net_high:.6g}, {change}")
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.table())


def tornado(weigher: Weigher, money: Money, *, whole: bool = False, most_steps: int | None = None) -> Tornado:
    """Move each assumption over its range and see what it does to the plan and to the order of additions.

    Parameters
    ----------
    weigher : Weigher
    money : Money
        With ``ranges``.
    whole : bool
        Make the whole list of additions anew at each end; False: order the additions weighed
        first, which takes no further run. Failure data are moved for the first additions only.
    most_steps : int or None
        As in :meth:`Weigher.next_best`.
    """
    plan = weigher.next_best(money, most_steps)
    first = {w.name: weigher.get((w.name,))[1] for w in (plan.steps[0].weighed if plan.steps else ())}

    def net(m: Money, factors: Factors) -> float:
        return _gain(plan.start, plan.plan, m, factors)

    def order(m: Money, factors: Factors) -> tuple[str, ...]:
        if whole and not factors:
            return weigher.next_best(m, most_steps).order
        before = m.costs.of(plan.start.program.scheme).per_yr
        ranked: list[tuple[float, str]] = []
        for name, ledger in first.items():
            gain = _gain(plan.start, ledger, m, factors)
            cost = m.costs.of(ledger.program.scheme).per_yr - before
            if gain > 0:
                ranked.append((-(gain + cost) / cost if cost > 0 else -math.inf, name))
        return tuple(name for _, name in sorted(ranked))

    base_net, base_order, first_order = net(money, {}), order(money, {}), order(money, {"": np.ones(1)})
    bars: list[Bar] = []
    for name, low, high in money.ranges:
        at_low, at_high = moved(money, name, low), moved(money, name, high)
        found = order(*at_low), order(*at_high)
        compared = first_order if name.startswith("failures of ") else base_order
        changes = any(o != compared for o in found)
        bars.append(Bar(name, low, high, net(*at_low), base_net, net(*at_high), *found, changes))
    return Tornado(money.unit, base_order, whole, tuple(sorted(bars, key=lambda b: (-b.swing, b.assumption))))


def _gain(before: Ledger, after: Ledger, money: Money, factors: Factors) -> float:
    """Yearly risk removed less cost added."""
    cost = money.costs.of(after.program.scheme).per_yr - money.costs.of(before.program.scheme).per_yr
    values = money.values
    if any(factors):
        old, new = (float(reweighted(x, values, factors, 1).estimate[0]) for x in (before, after))
    else:
        old, new = (x.estimate(event_cost, values) for x in (before, after))
    return old - new - cost


def moved(money: Money, assumption: str, value: float) -> tuple[Money, Factors]:
    """Money with one assumption at another value, and factors on failure data."""
    what, _, kind = assumption.partition(" of ")
    if what == "failures":
        return money, {kind: np.array([value])}
    if what == "cost":
        rules = tuple(
            replace(r, bought=r.bought * value, installed=r.installed * value, per_test=r.per_test * value)
            if r.kind == kind
            else r
            for r in money.costs.rules
        )
        return replace(money, costs=replace(money.costs, rules=rules)), {}
    if assumption == "discount_rate":
        costs: Costs = replace(money.costs, discount_rate=value)
        return replace(money, costs=costs), {}
    changed: Values = replace(money.values, **{assumption: value})
    return replace(money, values=changed), {}


@dataclass(frozen=True, slots=True)
class Spread:
    """One variant over uncertain failure data.

    Attributes
    ----------
    variant : str
    cost_per_yr : float
    quantiles : tuple of (share, low, high)
        Quantiles of the yearly risk; each lies between the two.
    mean : float
        Of the estimated risk.
    p_less_risk, p_less_total : float
        Share of the samples in which it risks less than the base, and in which its cost and risk
        together are less, by the estimates; not a number for the base.
    """

    variant: str
    cost_per_yr: float
    quantiles: tuple[tuple[float, float, float], ...]
    mean: float
    p_less_risk: float
    p_less_total: float


@dataclass(frozen=True)
class Uncertainty:
    """Yearly risk of every variant over uncertain failure data; the first is the base."""

    unit: str
    samples: int
    seed: int
    spreads: tuple[Spread, ...]

    def of(self, variant: str) -> Spread:
        """One variant."""
        return next(s for s in self.spreads if s.variant == variant)

    def table(self) -> pd.DataFrame:
        """One row for each variant."""
        import pandas as pd  # heavy: only when a table is asked for

        rows: list[dict[str, object]] = []
        for s in self.spreads:
            row: dict[str, object] = {"variant": s.variant, "cost_per_yr": s.cost_per_yr, "risk_per_yr_mean": s.mean}
            for share, low, high in s.quantiles:
                row[f"risk_per_yr_p{100 * share:g}_low"], row[f"risk_per_yr_p{100 * share:g}_high"] = low, high
            row["p_less_risk"], row["p_less_total"] = s.p_less_risk, s.p_less_total
            rows.append(row)
        return pd.DataFrame(rows)

    def __repr__(self) -> str:
        lines = [f"Uncertainty in {self.unit} a year, {self.samples} samples of the failure data, seed {self.seed}"]
        for s in self.spreads:
            told = ", ".join(f"p{100 * share:g} {low:.6g}…{high:.6g}" for share, low, high in s.quantiles)
            sure = "" if math.isnan(s.p_less_total) else f"; less in total in {100 * s.p_less_total:.3g} %"
            lines.append(f"  {s.variant:24} {told}{sure}")
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.table())


def draw_factors(error_factors: Mapping[str, float], samples: int, seed: int) -> Factors:
    """Log-normal factors with median 1: the 95th percentile is the error factor (σ = ln EF / 1.645).

    The same for every variant, looked up by seed and kind.
    """
    normal = NormalDist()
    z95 = normal.inv_cdf(0.95)
    out: dict[str, Floats] = {}
    for kind, factor in error_factors.items():
        u = uniforms(seed, f"failure data of {kind}", 0, samples)
        z = np.array([normal.inv_cdf(min(max(float(x), 1e-12), 1 - 1e-12)) for x in u])
        out[kind] = np.exp(math.log(factor) / z95 * z)
    return out


def uncertainty(ledgers: Mapping[str, Ledger], money: Money, *, samples: int = 200, seed: int = 0) -> Uncertainty:
    """The yearly risk of variants over uncertain failure data.

    Parameters
    ----------
    ledgers : mapping of variant name to Ledger
        The first is the base.
    money : Money
        With ``error_factors``.
    samples : int
        Sets of failure data drawn, the same for every variant.
    seed : int

    Raises
    ------
    InputError
        Without a variant, with fewer than two samples, or for a component without a cost.
    """
    errors = ErrorList()
    for name, value, least in (("samples", samples, 2), ("seed", seed, 0)):
        given: object = value
        if isinstance(given, bool) or not isinstance(given, int) or given < least:
            errors.add(name, given, f"a whole number of {least} or more")
    if not ledgers:
        errors.add("variants", "none", "at least one")
    errors.raise_if_any()
    factors = draw_factors(dict(money.error_factors), samples, seed)
    found = {n: reweighted(x, money.values, factors, samples) for n, x in ledgers.items()}
    cost = {n: money.costs.of(x.program.scheme).per_yr for n, x in ledgers.items()}
    base = next(iter(ledgers))
    spreads: list[Spread] = []
    for n, s in found.items():
        told = tuple((q, float(np.quantile(s.low, q)), float(np.quantile(s.high, q))) for q in QUANTILES)
        less = total = math.nan
        if n != base:
            change = s.estimate - found[base].estimate
            less, total = float((change < 0).mean()), float((change + cost[n] - cost[base] < 0).mean())
        spreads.append(Spread(n, cost[n], told, float(s.estimate.mean()), less, total))
    return Uncertainty(money.unit, samples, seed, tuple(spreads))
