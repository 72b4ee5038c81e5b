"""A scenario decided in one call: variants, their cost and risk, the next best additions, and how sure that is."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace

from schemesim.engine.program import Program
from schemesim.errors import ErrorList, InputError, nearest, reject
from schemesim.plant.model import Location, Plant, SectionKind
from schemesim.scenario.chosen import Places, chosen_of
from schemesim.scenario.model import Scenario
from schemesim.study.edits import ADDITIONS, Edit, Recipe, addition
from schemesim.study.frontier import Frontier, NextBest, Weigher, frontier
from schemesim.study.money import Money, SchemeCost
from schemesim.study.risk import Explorer, Ledger
from schemesim.study.sensitivity import Tornado, Uncertainty, tornado, uncertainty
from schemesim.study.variants import VariantStudy, study_variants


@dataclass(frozen=True)
class Decision:
    """Everything found for a decision.

    Attributes
    ----------
    money : Money
    rates : mapping of Location to float
        The fault set studied: faults per year, those that a location stands for included.
    left_out_per_yr : float
        Faults per year of kinds of section of which no location is studied.
    variants : VariantStudy
        Policies side by side, the first the base.
    costs : mapping of policy to SchemeCost
    frontier : Frontier
        Of the policies, and of the plan after each addition.
    next_best : NextBest
    tornado : Tornado
    uncertainty : Uncertainty
        Of the policies, and of the plan.
    """

    money: Money
    rates: Mapping[Location, float]
    left_out_per_yr: float
    variants: VariantStudy
    costs: Mapping[str, SchemeCost]
    frontier: Frontier
    next_best: NextBest
    tornado: Tornado
    uncertainty: Uncertainty

    def __repr__(self) -> str:
        left = f"; {self.left_out_per_yr:.3g} a year of other kinds left out" if self.left_out_per_yr else ""
        parts = (self.variants, self.frontier, self.next_best, self.tornado, self.uncertainty)
        faults = f"{sum(self.rates.values()):.6g} faults a year at {len(self.rates)} locations"
        head = f"Decision in {self.money.unit}: {faults}"
        return "\n\n".join([head + left, *(repr(p) for p in parts)])

    def _repr_html_(self) -> str:
        parts = (self.frontier, self.next_best, self.tornado, self.uncertainty, self.variants)
        return "".join(p._repr_html_() for p in parts)


def stand_in(
    plant: Plant, frequencies: Mapping[Location, float], chosen: Iterable[Location]
) -> tuple[dict[Location, float], float]:
    """Fault frequencies of a few locations that stand for all others of the same kind of section.

    All faults of a kind are shared by its locations chosen, in proportion to their own
    frequencies (alike where these are zero): an assumption, good where the stations are alike.

    Returns
    -------
    mapping of Location to faults per year, and the faults per year of kinds with no location chosen
    """
    by_kind: dict[SectionKind, float] = {}
    for at, rate in frequencies.items():
        kind = plant.section[at.section].kind
        by_kind[kind] = by_kind.get(kind, 0.0) + rate
    mine: dict[SectionKind, list[Location]] = {}
    for at in dict.fromkeys(chosen):
        mine.setdefault(plant.section[at.section].kind, []).append(at)
    found: dict[Location, float] = {}
    for kind, places in mine.items():
        own = [frequencies.get(at, 0.0) for at in places]
        weights = own if sum(own) > 0 else [1.0] * len(places)
        found.update({at: by_kind.get(kind, 0.0) * w / sum(weights) for at, w in zip(places, weights, strict=True)})
    return found, sum(rate for kind, rate in by_kind.items() if kind not in mine)


def recipe_of(scenario: Scenario, policy: str | None = None) -> Recipe:
    """What a policy of the scenario is made of, to be edited.

    Raises
    ------
    InputError
        For a policy that is not there.
    """
    name = scenario.policy if policy is None else policy
    if name not in scenario.policies:
        raise reject("policy", name, f"one of {sorted(scenario.policies)}", tip=nearest(name, scenario.policies))
    special = {e: scenario.policies[p] for e, p in scenario.exceptions.items()}
    return Recipe(scenario.plant, scenario.policies[name], scenario.data, special, scenario.out_of_service)


def explorer_of(
    scenario: Scenario,
    locations: Places | None = None,
    *,
    epsilon: float = 1e-3,
    no_fault: bool = True,
) -> tuple[Explorer, float]:
    """What explores variants of a scenario, and the faults per year that are left out (see :func:`stand_in`)."""
    rates, left = dict(scenario.frequencies), 0.0
    if locations is not None:
        rates, left = stand_in(scenario.plant, scenario.frequencies, chosen_of(scenario.plant, locations))
    s = scenario.study
    explorer = Explorer(
        rates, scenario.limit_us, sensing=scenario.sensing(), dispatch=s.dispatch, epsilon=epsilon,
        no_fault=no_fault, horizon_us=s.horizon_us,
    )  # fmt: skip
    return explorer, left


def decide(
    scenario: Scenario,
    policies: Iterable[str] | None = None,
    *,
    edits: Iterable[Edit] = (),
    start: str | None = None,
    locations: Places | None = None,
    epsilon: float = 1e-3,
    no_fault: bool = True,
    trials: int = 0,
    samples: int = 200,
    most_steps: int | None = None,
    whole: bool = False,
) -> Decision:
    """Decide a scenario with its section ``money``.

    Parameters
    ----------
    scenario : Scenario
    policies : iterable of str or None
        Variants; the first is the base. By default those that the scenario's money names, else all, by name.
    edits : iterable of Edit
        Further variants: the start with each edit.
    start : str or None
        Policy that additions are made to; as the scenario says by default.
    locations : iterable of Location or str, or None
        A few locations that stand for all of their kind; as the scenario says by default.
    epsilon : float
        Mass of each tree left unexplored, at most; every single failure at a fault is explored besides.
    no_fault : bool
        Trips with no fault too.
    trials : int
        Trials with common random numbers beside the trees.
    samples : int
        Sets of uncertain failure data.
    most_steps : int or None
        Stop after so many additions.
    whole : bool
        In the tornado make the whole list of additions anew at each end of a range.

    Raises
    ------
    InputError
        Where the scenario has no money, for names that are not there, or for a component in
        use that has no cost.
    """
    money = scenario.money
    if money is None:
        raise reject("money", "nothing", "a section money in the scenario, with costs and values", path="money")
    try:
        return _decided(
            scenario,
            money,
            policies,
            tuple(edits),
            start,
            locations,
            epsilon,
            no_fault,
            trials,
            samples,
            most_steps,
            whole,
        )
    except InputError as error:  # an addition may use what no policy of the file does
        raise InputError(
            replace(p, path="money.costs") if p.subject.startswith("cost of ") else p for p in error.problems
        ) from None


def _decided(
    scenario: Scenario,
    money: Money,
    policies: Iterable[str] | None,
    edits: tuple[Edit, ...],
    start: str | None,
    locations: Places | None,
    epsilon: float,
    no_fault: bool,
    trials: int,
    samples: int,
    most_steps: int | None,
    whole: bool,
) -> Decision:
    names = list(dict.fromkeys((money.policies or scenario.policies) if policies is None else policies))
    errors = ErrorList()
    for name in names:
        if name not in scenario.policies:
            errors.add("policy", name, f"one of {sorted(scenario.policies)}", tip=nearest(name, scenario.policies))
    errors.raise_if_any()
    where = locations if locations is not None else (money.locations or None)
    explorer, left = explorer_of(scenario, where, epsilon=epsilon, no_fault=no_fault)
    first = start or money.start or scenario.policy
    base = recipe_of(scenario, first)
    programs: dict[str, Program] = {name: scenario.program(name) for name in names}
    programs |= {e.name: base.edited(e).program() for e in edits}
    costs = {name: money.costs.of(program.scheme) for name, program in programs.items()}
    study = study_variants(explorer, programs, money.values, trials=trials, seed=scenario.study.seed)
    weigher = Weigher(explorer, base, tuple(addition(name) for name in money.additions or ADDITIONS))
    best = weigher.next_best(money, most_steps)
    ledgers: dict[str, Ledger] = dict(study.ledgers)
    for n in range(1, len(best.order) + 1):
        ledgers[f"{first} + {', '.join(best.order[:n])}"] = weigher.get(best.order[:n])[1]
    spread = dict(study.ledgers)
    if best.order:
        spread[f"{first} + plan"] = best.plan
    return Decision(
        money=money,
        rates=explorer.frequencies,
        left_out_per_yr=left,
        variants=study,
        costs=costs,
        frontier=frontier(ledgers, money),
        next_best=best,
        tornado=tornado(weigher, money, whole=whole, most_steps=most_steps),
        uncertainty=uncertainty(spread, money, samples=samples, seed=scenario.study.seed),
    )
