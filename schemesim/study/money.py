"""Money: what the components of a scheme cost a year, and what its failures cost.

Costs
-----
A component is bought and installed once in its life and tested at an interval. Its present
value over a life of L years at a discount rate r is bought + installed + the tests at T,
2T … before L, each divided by (1+r)^t; its yearly cost is that times the annuity factor
r/(1 − (1+r)^−L) (1/L at r = 0), as if it were replaced by its like for ever
(textbook formulas of engineering economics). A component without a price is an error, never free.

Damages
-------
An event costs: load lost × restoration time × value of lost load; damage that grows with
the clearing time up to a cap (a fault that is not cleared does the damage of the cap);
where it is cleared after the limit, or not at all, the cost of instability times the probability
that the limit's excess leads to it; and every breaker opened beyond the intended ones. A
trip with no fault costs a sum of its own and the load lost.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, fields
from fnmatch import fnmatchcase
from typing import TYPE_CHECKING

from schemesim.errors import ErrorList
from schemesim.plant.model import Location
from schemesim.scheme.model import Component, ComponentKind, Scheme
from schemesim.show.tables import to_html
from schemesim.study.currency import EXPECTED, is_unit

if TYPE_CHECKING:
    import pandas as pd


def annuity_factor(life_yr: float, discount_rate: float) -> float:
    """Yearly payment at each year's end over a life that is worth 1 now: r/(1 − (1+r)^−L), 1/L at r = 0.

    Examples
    --------
    >>> round(annuity_factor(20, 0.05), 6), annuity_factor(25, 0)
    (0.080243, 0.04)
    """
    if discount_rate == 0:
        return 1 / life_yr
    return discount_rate / -math.expm1(-life_yr * math.log1p(discount_rate))


@dataclass(frozen=True, slots=True, kw_only=True)
class CostRule:
    """What components of a kind, and of a name pattern, cost.

    Parameters
    ----------
    kind : ComponentKind
    pattern : str
        With ``*`` and ``?``; of the rules that fit a component the last counts.
    bought, installed : float
        Once in a life, in the unit of money.
    per_test : float
        Each test.
    test_interval_yr : float or None
        None: never tested.
    life_yr : float or None
        None: as the table says.
    """

    kind: ComponentKind
    pattern: str = "*"
    bought: float = 0.0
    installed: float = 0.0
    per_test: float = 0.0
    test_interval_yr: float | None = None
    life_yr: float | None = None

    def present_value(self, life_yr: float, discount_rate: float) -> float:
        """Cost over a life, as worth at its start.

        Examples
        --------
        >>> rule = CostRule(kind=ComponentKind.RELAY, bought=100, per_test=10, test_interval_yr=4)
        >>> rule.present_value(12, 0.0)
        120.0
        """
        found = float(self.bought + self.installed)
        if self.test_interval_yr is not None and self.per_test:
            count = math.ceil(life_yr / self.test_interval_yr - 1e-9) - 1
            step = math.log1p(discount_rate) * self.test_interval_yr
            found += self.per_test * math.fsum(math.exp(-step * k) for k in range(1, count + 1))
        return found


@dataclass(frozen=True, kw_only=True)
class Costs:
    """The cost table.

    Parameters
    ----------
    rules : tuple of CostRule
    discount_rate : float
        Per year, e.g. 0.05.
    life_yr : float
        Life of components whose rule states none.

    Raises
    ------
    InputError
        With every negative cost, and every life or interval that is not over zero.
    """

    rules: tuple[CostRule, ...] = ()
    discount_rate: float = 0.05
    life_yr: float = 25.0

    def __post_init__(self) -> None:
        errors = ErrorList()
        _need(errors, "discount rate", self.discount_rate, 0, 1)
        _need(errors, "life", self.life_yr, 1, 1000)
        for r in self.rules:
            of = f"of {r.kind} {r.pattern!r}"
            for name in ("bought", "installed", "per_test"):
                _need(errors, f"{name} {of}", getattr(r, name), 0)
            if r.test_interval_yr is not None:
                _need(errors, f"test_interval_yr {of}", r.test_interval_yr, 0.01)
            if r.life_yr is not None:
                _need(errors, f"life_yr {of}", r.life_yr, 1, 1000)
            if r.per_test and r.test_interval_yr is None:
                errors.add(f"per_test {of}", r.per_test, "test_interval_yr beside it")
        errors.raise_if_any()

    def rule_of(self, component: Component) -> CostRule | None:
        """The last rule that fits a component."""
        fit = (r for r in reversed(self.rules) if r.kind is component.kind and fnmatchcase(component.name, r.pattern))
        return next(fit, None)

    def missing(self, components: Iterable[Component]) -> tuple[Component, ...]:
        """Components without a cost."""
        return tuple(c for c in components if self.rule_of(c) is None)

    def of(self, scheme: Scheme) -> SchemeCost:
        """The cost of every component a scheme uses, those out of service included.

        Raises
        ------
        InputError
            Naming every component in use that has no cost.
        """
        errors = ErrorList()
        for c in self.missing(scheme.components):
            errors.add(f"cost of {c.kind} {c.name!r}", "nothing", "a cost, since the scheme uses it (0 if it is free)")
        errors.raise_if_any()
        rows: list[ComponentCost] = []
        for c in scheme.components:
            rule = self.rule_of(c)
            if rule is not None:  # always, after the check above
                life = self.life_yr if rule.life_yr is None else rule.life_yr
                worth = rule.present_value(life, self.discount_rate)
                rows.append(ComponentCost(c.name, c.kind, worth, worth * annuity_factor(life, self.discount_rate)))
        return SchemeCost(tuple(rows))


@dataclass(frozen=True, slots=True)
class ComponentCost:
    """The cost of one component: as a present value over its life, and a year."""

    component: str
    kind: ComponentKind
    present_value: float
    per_yr: float


@dataclass(frozen=True)
class SchemeCost:
    """What a scheme costs."""

    components: tuple[ComponentCost, ...]

    @property
    def present_value(self) -> float:
        """Over the life of each component, all of them."""
        return math.fsum(c.present_value for c in self.components)

    @property
    def per_yr(self) -> float:
        """Yearly cost of all components."""
        return math.fsum(c.per_yr for c in self.components)

    @property
    def by_kind(self) -> Mapping[ComponentKind, float]:
        """Yearly cost by kind of component."""
        kinds = sorted({c.kind for c in self.components})
        return {k: math.fsum(c.per_yr for c in self.components if c.kind is k) for k in kinds}

    def table(self) -> pd.DataFrame:
        """One row for each kind of component."""
        import pandas as pd  # heavy: only when a table is asked for

        counts = {k: sum(c.kind is k for c in self.components) for k in self.by_kind}
        rows = [{"kind": str(k), "count": counts[k], "cost_per_yr": v} for k, v in self.by_kind.items()]
        return pd.DataFrame(rows)

    def __repr__(self) -> str:
        return f"SchemeCost({len(self.components)} components, {self.per_yr:.6g} a year)"

    def _repr_html_(self) -> str:
        return to_html(self.table())


@dataclass(frozen=True, slots=True, kw_only=True)
class Values:
    """What events cost, in the unit of money.

    Parameters
    ----------
    lost_load_per_mwh : float
        Value of lost load.
    restoration_h : float
        Hours until lost load is back.
    damage_per_ms : float
        Damage for each millisecond the fault lasts.
    damage_cap : float
        The most damage one fault does, and what one that is not cleared does.
    instability : float
        Cost of one loss of stability.
    p_unstable_if_late : float
        Probability that a fault cleared after the limit, or not at all, leads to it.
    needless_trip : float
        Each breaker opened beyond the intended ones.
    no_fault_trip : float
        Each trip with no fault that opens a breaker.
    worst_event : float or None
        A bound on the cost of any one event; without one, what losing all load, the cap and
        opening every breaker of the neighbourhood would cost.

    Raises
    ------
    InputError
        With every number that is negative or not finite.
    """

    lost_load_per_mwh: float = 0.0
    restoration_h: float = 0.0
    damage_per_ms: float = 0.0
    damage_cap: float = 0.0
    instability: float = 0.0
    p_unstable_if_late: float = 0.0
    needless_trip: float = 0.0
    no_fault_trip: float = 0.0
    worst_event: float | None = None

    def __post_init__(self) -> None:
        errors = ErrorList()
        for f in fields(self):
            value = getattr(self, f.name)
            if value is not None:
                _need(errors, f.name, value, 0, 1 if f.name == "p_unstable_if_late" else math.inf)
        errors.raise_if_any()


@dataclass(frozen=True, kw_only=True)
class Money:
    """Everything a decision needs about money.

    Parameters
    ----------
    unit : str
        Currency code of ISO 4217, or thousands or millions of it (``kEUR``, ``MEUR``).
    costs : Costs
    values : Values
    start : str
        Name of the policy that additions are made to; empty: the policy in use.
    additions : tuple of str
        Names of the additions weighed; empty: all that are known.
    ranges : tuple of (name, low, high)
        For the tornado: fields of ``Values``, ``discount_rate``, or ``cost of KIND`` and
        ``failures of KIND`` as factors.
    error_factors : tuple of (kind, factor)
        For the uncertainty run: the 95th percentile of a kind's failure data over their median
        (log-normal); ``no_fault`` stands for the rates of tripping with no fault.
    locations : tuple of Location
        Fault locations studied, each standing for others of its kind; empty: all of them.
    policies : tuple of str
        Policies compared, the first the base; empty: all.
    """

    unit: str
    costs: Costs = field(default_factory=Costs)
    values: Values = field(default_factory=Values)
    start: str = ""
    additions: tuple[str, ...] = ()
    ranges: tuple[tuple[str, float, float], ...] = ()
    error_factors: tuple[tuple[str, float], ...] = ()
    locations: tuple[Location, ...] = ()
    policies: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        errors = ErrorList()
        if not is_unit(self.unit):
            errors.add("currency unit", self.unit, EXPECTED)
        known = assumptions()
        for name, low, high in self.ranges:
            if name not in known:
                errors.add("range", name, f"one of {', '.join(known)}")
            top = 1.0 if name in ("p_unstable_if_late", "discount_rate") else math.inf
            _need(errors, f"low of {name}", low, 0, top)
            _need(errors, f"high of {name}", high, 0, top)
            if low > high:
                errors.add(f"range of {name}", (low, high), "a low end at or under the high one")
        kinds = [*map(str, ComponentKind), "no_fault"]
        for kind, factor in self.error_factors:
            if kind not in kinds:
                errors.add("error factor", kind, f"one of {', '.join(kinds)}")
            _need(errors, f"error factor of {kind}", factor, 1, 1000)
        errors.raise_if_any()


def assumptions() -> tuple[str, ...]:
    """Names of what a range can be given for."""
    values = [f.name for f in fields(Values) if f.name != "worst_event"]
    factors = [f"{what} of {kind}" for what in ("cost", "failures") for kind in ComponentKind]
    return (*values, "discount_rate", *factors)


def _need(errors: ErrorList, subject: str, value: object, low: float, high: float = math.inf) -> None:
    good = isinstance(value, (int, float)) and not isinstance(value, bool)
    if not good or not low <= float(str(value)) <= high or math.isinf(float(str(value))):
        most = f"to {high:g}" if high < math.inf else "or more"
        errors.add(subject, value, f"a finite number of {low:g} {most}")
