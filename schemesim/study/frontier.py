"""Cost against risk: which variants are worth their money, and which addition to make next.

Yearly cost is exact; yearly risk has a bracket and a best estimate. A choice is
*certain* where the brackets decide it and *likely* where only the estimates do.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from schemesim.errors import InputError, reject
from schemesim.show.tables import to_html
from schemesim.study.brackets import Bracket, exactly, show
from schemesim.study.edits import Edit, Recipe
from schemesim.study.money import Costs, Money
from schemesim.study.risk import Explorer, Ledger, event_cost

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes


@dataclass(frozen=True, slots=True)
class Choice:
    """One variant with its yearly cost and risk.

    Attributes
    ----------
    name : str
    cost_per_yr : float
    risk_per_yr : Bracket
    estimate : float
        Best guess of the risk.
    dominated_by : str
        A variant that costs no more and risks no more, one of them less; empty: none, the variant is
        on the frontier.
    certain : bool
        Whether the brackets decide that; False: only the estimates.
    """

    name: str
    cost_per_yr: float
    risk_per_yr: Bracket
    estimate: float
    dominated_by: str
    certain: bool

    @property
    def total_per_yr(self) -> Bracket:
        """Cost and risk together."""
        return exactly(self.cost_per_yr) + self.risk_per_yr


@dataclass(frozen=True)
class Frontier:
    """Every variant by rising cost."""

    unit: str
    choices: tuple[Choice, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """Variants on the frontier, by rising cost."""
        return tuple(c.name for c in self.choices if not c.dominated_by)

    @property
    def least_total(self) -> str:
        """The variant whose cost and estimated risk together are least."""
        return min(self.choices, key=lambda c: c.cost_per_yr + c.estimate).name

    def table(self) -> pd.DataFrame:
        """One row for each variant, in the unit of money per year."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame(
            [
                {
                    "variant": c.name,
                    "cost_per_yr": c.cost_per_yr,
                    "risk_per_yr_low": float(c.risk_per_yr.low),
                    "risk_per_yr_high": float(c.risk_per_yr.high),
                    "risk_per_yr_estimate": c.estimate,
                    "total_per_yr_estimate": c.cost_per_yr + c.estimate,
                    "frontier": not c.dominated_by,
                    "dominated_by": c.dominated_by,
                    "certain": c.certain,
                }
                for c in self.choices
            ]
        )

    def plot(self, ax: Axes | None = None) -> Axes:
        """Risk against cost, brackets as bars, the frontier as a line."""
        from schemesim.show.scatter import Spot, plot_frontier  # heavy: only when a picture is asked for

        least = self.least_total
        spots = [
            Spot(c.name, c.cost_per_yr, float(c.risk_per_yr.low), float(c.risk_per_yr.high), c.estimate,
                 not c.dominated_by, c.name == least)
            for c in self.choices
        ]  # fmt: skip
        return plot_frontier(spots, unit=self.unit, title="cost and risk", ax=ax)

    def __repr__(self) -> str:
        lines = [f"Frontier in {self.unit} a year; least in total: {self.least_total}"]
        for c in self.choices:
            word = f"dominated by {c.dominated_by}" if c.dominated_by else "on the frontier"
            sure = "" if c.certain else " (likely)"
            lines.append(f"  {c.name:24} cost {c.cost_per_yr:.6g}, risk {c.risk_per_yr!r}: {word}{sure}")
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.table())


def frontier(ledgers: Mapping[str, Ledger], money: Money) -> Frontier:
    """Set the yearly cost of variants against their yearly risk.

    Parameters
    ----------
    ledgers : mapping of variant name to Ledger
    money : Money

    Raises
    ------
    InputError
        Without a variant, or where a component in use has no cost.
    """
    if not ledgers:
        raise reject("variants", "none", "at least one")
    cost = {n: money.costs.of(x.program.scheme).per_yr for n, x in ledgers.items()}
    risk = {n: x.estimate(event_cost, money.values) for n, x in ledgers.items()}
    choices: list[Choice] = []
    for n, ledger in ledgers.items():
        sure, maybe, clear = "", "", True
        for m, other in ledgers.items():
            if m == n or cost[m] > cost[n]:
                continue
            less = other.less(ledger, event_cost, money.values)
            cheaper = cost[m] < cost[n]
            if less.high < 0 or (less.high <= 0 and cheaper):
                sure = sure or m
            elif risk[m] < risk[n] or (risk[m] == risk[n] and cheaper):
                maybe = maybe or m
            if less.low < 0 or (less.low <= 0 and cheaper):
                clear = False
        figure = ledger.figure(event_cost, money.values)
        by, certain = (sure, True) if sure else (maybe, not maybe and clear)
        choices.append(Choice(n, cost[n], figure, risk[n], by, certain))
    return Frontier(money.unit, tuple(sorted(choices, key=lambda c: (c.cost_per_yr, c.estimate, c.name))))


@dataclass(frozen=True, slots=True)
class Weighed:
    """One addition weighed at one step.

    Attributes
    ----------
    name : str
    cost_per_yr : float
        What it adds.
    risk_removed : Bracket
        Yearly risk it takes away; negative where it adds some.
    estimate : float
        Best guess of that.
    """

    name: str
    cost_per_yr: float
    risk_removed: Bracket
    estimate: float

    @property
    def net_per_yr(self) -> Bracket:
        """Risk removed less cost added."""
        return self.risk_removed - exactly(self.cost_per_yr)

    @property
    def net_estimate(self) -> float:
        """Best guess of the net benefit."""
        return self.estimate - self.cost_per_yr

    @property
    def ratio(self) -> float:
        """Risk removed for each unit of money spent; infinite where the addition costs nothing and removes risk."""
        if self.cost_per_yr > 0:
            return self.estimate / self.cost_per_yr
        return math.inf if self.net_estimate > 0 else -math.inf

    @property
    def verdict(self) -> str:
        """Whether it pays: ``pays`` or ``does not pay`` (certain), or ``likely pays``, ``likely does not pay``."""
        net = self.net_per_yr
        if net.low > 0 or net.high <= 0:
            return "pays" if net.low > 0 else "does not pay"
        return "likely pays" if self.net_estimate > 0 else "likely does not pay"


@dataclass(frozen=True)
class Step:
    """One step: what was weighed, the best first, and whether the best was made."""

    number: int
    weighed: tuple[Weighed, ...]
    made: str


@dataclass(frozen=True)
class NextBest:
    """Additions in the order in which they buy the most, until nothing pays.

    Attributes
    ----------
    unit : str
    steps : tuple of Step
        The last is the one at which nothing was made.
    impossible : tuple of (str, str)
        Additions the plant cannot carry, and why.
    start, plan : Ledger
        Before the first addition and after the last.
    """

    unit: str
    steps: tuple[Step, ...]
    impossible: tuple[tuple[str, str], ...]
    start: Ledger
    plan: Ledger

    @property
    def order(self) -> tuple[str, ...]:
        """Additions made, in order."""
        return tuple(s.made for s in self.steps if s.made)

    def table(self) -> pd.DataFrame:
        """One row for each addition weighed at each step."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame(
            [
                {
                    "step": s.number,
                    "addition": w.name,
                    "cost_per_yr": w.cost_per_yr,
                    "risk_removed_low": float(w.risk_removed.low),
                    "risk_removed_high": float(w.risk_removed.high),
                    "risk_removed_estimate": w.estimate,
                    "per_unit": w.ratio,
                    "net_estimate": w.net_estimate,
                    "verdict": w.verdict,
                    "made": w.name == s.made,
                }
                for s in self.steps
                for w in s.weighed
            ]
        )

    def __repr__(self) -> str:
        lines = [f"NextBest in {self.unit} a year: {', then '.join(self.order) or 'nothing pays'}"]
        for s in self.steps:
            for w in s.weighed:
                mark = "+" if w.name == s.made else " "
                removed = show(w.risk_removed.low, w.risk_removed.high)
                lines.append(
                    f"  {s.number} {mark} {w.name:20} cost {w.cost_per_yr:10.6g}  removes {removed:24} {w.verdict}"
                )
        lines.extend(f"  not possible: {name}: {why}" for name, why in self.impossible)
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.table())


@dataclass(frozen=True)
class Weigher:
    """Explores a base and its additions; each combination once, whatever the prices.

    Parameters
    ----------
    explorer : Explorer
    base : Recipe
    edits : tuple of Edit
    """

    explorer: Explorer
    base: Recipe
    edits: tuple[Edit, ...]
    _known: dict[tuple[str, ...], tuple[Recipe, Ledger] | InputError] = field(
        default_factory=dict, init=False, compare=False, repr=False
    )

    def get(self, made: tuple[str, ...]) -> tuple[Recipe, Ledger]:
        """The recipe and the ledger after these additions.

        Raises
        ------
        InputError
            Where the plant cannot carry them.
        """
        if made not in self._known:
            try:
                recipe = self.base
                if made:
                    last = next(e for e in self.edits if e.name == made[-1])
                    recipe = self.get(made[:-1])[0].edited(last)
                self._known[made] = (recipe, self.explorer.ledger(recipe.program()))
            except InputError as error:
                self._known[made] = error
        found = self._known[made]
        if isinstance(found, InputError):
            raise found
        return found

    def next_best(self, money: Money, most_steps: int | None = None) -> NextBest:
        """Make the addition that buys the most risk for its money, and again, until nothing pays.

        The order is by the best estimates of risk removed for each unit of money; an addition
        is made only where its estimated net benefit is over zero. Additions that change nothing (there already,
        or nothing for them to stand on yet) are not weighed.

        Parameters
        ----------
        money : Money
        most_steps : int or None
            Stop after so many additions.

        Raises
        ------
        InputError
            Where a component in use has no cost.
        """
        made: tuple[str, ...] = ()
        recipe, start = self.get(())
        now = start
        steps: list[Step] = []
        impossible: dict[str, str] = {}
        while True:
            cost, risk = _price(now, money.costs), now.estimate(event_cost, money.values)
            weighed: list[Weighed] = []
            for edit in self.edits:
                if edit.name in made or recipe.edited(edit) == recipe:
                    continue
                try:
                    _, then = self.get((*made, edit.name))
                except InputError as error:
                    impossible[edit.name] = str(error).splitlines()[0]
                    continue
                impossible.pop(edit.name, None)
                removed = now.less(then, event_cost, money.values)
                better = risk - then.estimate(event_cost, money.values)
                weighed.append(Weighed(edit.name, _price(then, money.costs) - cost, removed, better))
            weighed.sort(key=lambda w: (w.net_estimate <= 0, -w.ratio, w.name))
            enough = most_steps is not None and len(made) >= most_steps
            best = weighed[0].name if weighed and weighed[0].net_estimate > 0 and not enough else ""
            if weighed:
                steps.append(Step(len(steps) + 1, tuple(weighed), best))
            if not best:
                return NextBest(money.unit, tuple(steps), tuple(impossible.items()), start, now)
            made = (*made, best)
            recipe, now = self.get(made)


def next_best(
    explorer: Explorer, base: Recipe, edits: Iterable[Edit], money: Money, most_steps: int | None = None
) -> NextBest:
    """Which single addition buys the most risk for its money, the next, and so on; see :meth:`Weigher.next_best`."""
    return Weigher(explorer, base, tuple(edits)).next_best(money, most_steps)


def _price(ledger: Ledger, costs: Costs) -> float:
    return costs.of(ledger.program.scheme).per_yr
