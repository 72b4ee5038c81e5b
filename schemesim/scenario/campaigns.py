"""Campaigns on a scenario: made from one, made again from a store, and exported."""

from __future__ import annotations

from collections.abc import Iterable

from schemesim.engine.sensing import Event, NoFault
from schemesim.errors import InputError, nearest, reject
from schemesim.plant.model import Location
from schemesim.scenario.chosen import Places, chosen_of
from schemesim.scenario.files import scenario_from_text, scenario_text
from schemesim.scenario.model import Scenario
from schemesim.scenario.writing import write_whole
from schemesim.study.campaign import Campaign, event_of
from schemesim.study.campaign_export import csv_bytes, ending_rows, parquet_bytes
from schemesim.study.campaign_run import load_campaign
from schemesim.study.montecarlo import Method
from schemesim.study.store import Store


def campaign_scenario(
    scenario: Scenario,
    policies: Iterable[str] | None = None,
    *,
    locations: Places | None = None,
    no_fault: bool = False,
    trials: int | None = None,
    seed: int | None = None,
    failures: Iterable[Iterable[str]] = (),
    observe: Iterable[str] = (),
) -> Campaign:
    """A campaign over the fault locations of a scenario, its policies as variants.

    Parameters
    ----------
    scenario : Scenario
    policies : iterable of str or None
        The policy in use by default.
    locations : iterable of Location or str, or None
        By default every location of the scenario.
    no_fault : bool
        Trips with no fault too: of each component that has a rate under every policy.
    trials, seed : int or None
        As in the scenario by default.
    failures : iterable of failure sets
        Each the names of its failures, instead of trials.
    observe : iterable of str
        Trip outputs watched for dependability and security.

    Raises
    ------
    InputError
        For policies, locations, failures or numbers that are none.
    """
    names = [scenario.policy] if policies is None else list(dict.fromkeys(policies))
    for name in names:
        if name not in scenario.policies:
            known = sorted(scenario.policies)
            raise reject("policy", name, f"one of {known}", tip=nearest(name, known))
    events: list[Event] = [*chosen_of(scenario.plant, scenario.frequencies if locations is None else locations)]
    if no_fault:
        schemes = [scenario.scheme(name) for name in names]
        common = set.intersection(*({c.name for c in s.components if c.no_fault_per_yr > 0} for s in schemes))
        events += [NoFault(name) for name in sorted(common - scenario.out_of_service)]
    sets = tuple(tuple(names) for names in failures)
    return Campaign(
        variants={name: scenario.program(name) for name in names},
        events=tuple(events),
        trials=0 if sets else scenario.study.trials if trials is None else trials,
        seed=scenario.study.seed if seed is None else seed,
        failures=sets,
        limit_us={e: scenario.limit_us(e) for e in events if not _unknown(scenario, e)} or 0,
        observe=frozenset(observe),
        sensing={name: scenario.sensing() for name in names},
        dispatch=scenario.study.dispatch,
        horizon_us=scenario.study.horizon_us,
    )


def _unknown(scenario: Scenario, event: Event) -> bool:
    return isinstance(event, Location) and event.section not in scenario.plant.section


def source_of(scenario: Scenario) -> str:
    """Text to keep in a store, so that the campaign can be made from it again; empty where it cannot be written."""
    try:
        return scenario_text(scenario)
    except InputError:  # a scenario that was never a file may hold what a file cannot say
        return ""


def campaign_in(store: str) -> tuple[Scenario, Campaign]:
    """The scenario and the campaign of a store.

    Raises
    ------
    InputError
        For a file that is no store, or a store that was made without a scenario.
    """
    with Store(store) as kept:
        about, source, trials = kept.about, kept.source, kept.trials
    if not source:
        raise reject("store", store, "one made from a scenario, or the campaign itself: schemesim.replay_trial")
    scenario = scenario_from_text(source, f"scenario in {store}")
    names = [name for name, _ in about["variants"]]
    events = [event_of(data) for data in about["events"]]
    campaign = Campaign(
        variants={name: scenario.program(name) for name in names},
        events=tuple(events),
        trials=0 if about["failures"] else trials,
        seed=about["seed"] or 0,
        failures=tuple(map(tuple, about["failures"])),
        limit_us={e: scenario.limit_us(e) for e in events},
        observe=frozenset(about["observe"]),
        sensing={name: scenario.sensing() for name in names},
        dispatch=about["dispatch"],
        horizon_us=about["horizon_us"],
    )
    return scenario, campaign


def export_campaign(
    store: str, path: str, *, measures: bool = False, confidence: float = 0.95, method: Method = "wilson"
) -> int:
    """Write what is in a store as CSV or Parquet, whole or not at all.

    Parameters
    ----------
    store : str
    path : str
        Ends in ``.csv`` or ``.parquet``.
    measures : bool
        One row for each place with its measures; else one for each place, ending and clearing time.
    confidence : float
    method : {"wilson", "clopper_pearson"}
        Of the intervals of measures.

    Returns
    -------
    int
        Rows written.

    Raises
    ------
    InputError
        For a store or a path that is none, or Parquet without pyarrow.
    """
    if not path.endswith((".csv", ".parquet")):
        raise reject("export", path, "a file name that ends in .csv or .parquet")
    if measures:
        rows = load_campaign(store).rows(confidence, method)
    else:
        with Store(store) as kept:
            rows = list(ending_rows(kept))
    write_whole(path, csv_bytes(rows) if path.endswith(".csv") else parquet_bytes(rows))
    return len(rows)
