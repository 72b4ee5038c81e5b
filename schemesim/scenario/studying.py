"""A scenario studied: every fault location under a policy, each against the limit of its voltage."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Executor
from dataclasses import replace

from schemesim.errors import ErrorList, nearest
from schemesim.plant.model import Location
from schemesim.scenario.chosen import Places, chosen_of
from schemesim.scenario.model import Scenario
from schemesim.study.location import LocationOptions, LocationResult
from schemesim.study.locations import LocationStudy, iter_locations
from schemesim.study.no_fault import NoFaultStudy, study_no_fault

Progress = Callable[[int, int], None]


def study_scenario(
    scenario: Scenario,
    policy: str | None = None,
    *,
    locations: Places | None = None,
    epsilon: float | None = None,
    no_fault: bool = False,
    executor: Executor | None = None,
    progress: Progress | None = None,
) -> LocationStudy:
    """Study the fault locations of a scenario under one policy.

    Parameters
    ----------
    scenario : Scenario
    policy : str or None
        The policy in use by default.
    locations : iterable of Location or str, or None
        By default every location of the scenario.
    epsilon : float or None
        Probability left unexplored at each location; as in the scenario by default.
    no_fault : bool
        Study trips with no fault too (rule R18).
    executor : concurrent.futures.Executor or None
        Runs the work; the results are the same with any, or with none.
    progress : callable or None
        Called with the number of locations done and of all.

    Returns
    -------
    LocationStudy
        In the order of the locations asked for, weighted by the scenario's fault frequencies if
        any is over zero; ``options.limit_us`` is the default limit. A keyboard interrupt ends
        the study early: what was finished is kept, ``complete`` is False.

    Raises
    ------
    InputError
        For a policy or section that is not there.
    """
    chosen = chosen_of(scenario.plant, scenario.frequencies if locations is None else locations)
    errors = ErrorList()
    for at in chosen:
        if at.section not in scenario.plant.section:
            errors.add("section", at.section, "a section", tip=nearest(at.section, scenario.plant.section))
    errors.raise_if_any()
    program, s = scenario.program(policy), scenario.study
    options = LocationOptions(
        limit_us=scenario.limits.default_us,
        epsilon=s.epsilon if epsilon is None else epsilon,
        horizon_us=s.horizon_us,
        dispatch=s.dispatch,
    )
    by_limit: dict[int, list[Location]] = {}
    for at in chosen:
        by_limit.setdefault(scenario.limit_us(at), []).append(at)
    found: dict[Location, LocationResult] = {}
    apart: NoFaultStudy | None = None
    complete = True
    try:
        for limit_us, group in sorted(by_limit.items()):
            mine = replace(options, limit_us=limit_us)
            for result in iter_locations(program, scenario.sensing(), group, mine, executor=executor):
                found[result.location] = result
                if progress is not None:
                    progress(len(found), len(chosen))
        if no_fault:
            apart = study_no_fault(
                program, scenario.sensing(), dispatch=s.dispatch, epsilon=options.epsilon, horizon_us=s.horizon_us
            )
    except KeyboardInterrupt:
        complete = False
    rates = {at: scenario.frequencies.get(at, 0.0) for at in chosen}
    results = tuple(found[at] for at in chosen if at in found)
    return LocationStudy(results, options, rates if any(rates.values()) else None, apart, complete)
