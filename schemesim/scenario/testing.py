"""A scenario's test intervals and its misoperations: one call each.

What they say of the demo with the starting values that ship and a beta factor of 0.05, in plain words. A relay by
itself is least unavailable when tested every 1.35 years. For a fault in the middle of L1 the scheme, which has two
sets there, is best at one to two years if all relays are tested together, at one to three if by turns; the curve is so
flat that from one year to four it moves by a per cent or two, less than failure data are known to: what a test costs
decides.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import replace

from schemesim.errors import nearest, reject
from schemesim.plant.model import Location
from schemesim.scenario.chosen import Places, chosen_of
from schemesim.scenario.model import Scenario
from schemesim.scheme.model import ComponentKind
from schemesim.scheme.starting_values import StartingValues
from schemesim.study.misoperations import MisoperationStudy, study_misoperations
from schemesim.study.proof_intervals import INTERVALS_YR, IntervalStudy, TestCosts, study_test_intervals

Progress = Callable[[int, int], None]


def with_values(scenario: Scenario, values: StartingValues) -> Scenario:
    """The scenario with its failure data replaced by a table's; beta factor, causes and trips with no fault stay."""
    old = scenario.data
    data = values.failure_data(old.over, old.relay_beta)
    data = replace(data, no_fault_per_yr=old.no_fault_per_yr, common_causes=old.common_causes)
    return replace(scenario, data=data, document=None)


def intervals_scenario(
    scenario: Scenario,
    kind: ComponentKind | str,
    pattern: str = "*",
    policy: str | None = None,
    *,
    intervals_yr: Iterable[float] = INTERVALS_YR,
    locations: Places | None = None,
    staggered: bool | None = None,
    epsilon: float = 1e-4,
    progress: Progress | None = None,
) -> IntervalStudy:
    """The risk of a scenario against the test interval of a class of components.

    With a section ``money`` a test costs what its rules say (``per_test``; the mean over the class), and a fault
    cleared late or not at all the cost of instability times its probability, one not cleared the cap of the damage
    besides. Lost load is not counted. Tests are those of the whole class: with some locations only, name a pattern
    that goes with them.

    Parameters
    ----------
    scenario : Scenario
    kind, pattern
        The class; its failure data must be given by ``failure_data: rates``.
    policy : str or None
        The policy in use by default.
    intervals_yr, staggered, epsilon, progress
        See :func:`~schemesim.study.proof_intervals.study_test_intervals`.
    locations : iterable of Location or str, or None
        By default every location of the scenario.

    Raises
    ------
    InputError
        For a kind that is none, a test that has no cost beside a section ``money``, and as that function does.
    """
    known = [str(k) for k in ComponentKind]
    if kind not in known:
        raise reject("kind of component", str(kind), f"one of {', '.join(known)}", tip=nearest(str(kind), known))
    chosen = _chosen(scenario, locations)
    rates = _rates(scenario, chosen)
    return study_test_intervals(
        scenario.program(policy),
        scenario.data,
        scenario.sensing(),
        chosen,
        kind=ComponentKind(kind),
        pattern=pattern,
        intervals_yr=intervals_yr,
        limit_us={at: scenario.limit_us(at) for at in chosen},
        frequencies=rates,
        staggered=staggered,
        costs=None if rates is None else _costs(scenario, ComponentKind(kind), pattern, policy),
        dispatch=scenario.study.dispatch,
        epsilon=epsilon,
        horizon_us=scenario.study.horizon_us,
        progress=progress,
    )


def misoperations_scenario(
    scenario: Scenario,
    policy: str | None = None,
    *,
    locations: Places | None = None,
    no_fault: bool = True,
    epsilon: float = 1e-4,
) -> MisoperationStudy:
    """Misoperations of a scenario by the categories of PRC-004.

    Parameters
    ----------
    scenario : Scenario
    policy : str or None
        The policy in use by default.
    locations : iterable of Location or str, or None
        By default every location of the scenario.
    no_fault, epsilon
        See :func:`~schemesim.study.misoperations.study_misoperations`.
    """
    chosen = _chosen(scenario, locations)
    return study_misoperations(
        scenario.program(policy),
        scenario.sensing(),
        chosen,
        frequencies=_rates(scenario, chosen),
        no_fault=no_fault,
        dispatch=scenario.study.dispatch,
        epsilon=epsilon,
        horizon_us=scenario.study.horizon_us,
    )


def _costs(scenario: Scenario, kind: ComponentKind, pattern: str, policy: str | None) -> TestCosts | None:
    """What tests and faults cost, from the section ``money``; None without one."""
    from fnmatch import fnmatchcase

    money = scenario.money
    if money is None:
        return None
    mine = [c for c in scenario.scheme(policy).components if c.kind is kind and fnmatchcase(c.name, pattern)]
    prices = []
    for c in mine:
        rule = money.costs.rule_of(c)
        if rule is None or rule.test_interval_yr is None:
            expected = "per_test and test_interval_yr in money.costs (0 if a test is free)"
            raise reject(f"cost of a test of {c.name!r}", "nothing", expected)
        prices.append(rule.per_test)
    values = money.values
    return TestCosts(
        per_test=sum(prices) / len(prices) if prices else 0.0,
        late=values.instability * values.p_unstable_if_late,
        uncleared=values.damage_cap,
    )


def _rates(scenario: Scenario, chosen: Iterable[Location]) -> dict[Location, float] | None:
    rates = {at: scenario.frequencies.get(at, 0.0) for at in chosen}
    return rates if any(rates.values()) else None


def _chosen(scenario: Scenario, locations: Places | None) -> list[Location]:
    return chosen_of(scenario.plant, scenario.frequencies if locations is None else locations)
