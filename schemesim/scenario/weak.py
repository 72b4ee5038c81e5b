"""A scenario's single points of failure, and what becomes critical with one item out for work: one call each.

What they say of the demo, in plain words. With a single set every group of the footnote is filled: a relay,
a channel, a DC supply, a trip coil or a lockout relay alone makes some fault late or leaves it. A second
relay in every place ("relay twice") empties the first group and no other: both hang on one core, supply, coil and
channel, so the register stays nearly as long. A second chain throughout ("full") empties all four groups; what is
left stands apart: breakers (one beside every fault, however many relays), relays that trip beyond their zone, and the
common causes that the audit finds shared. Taking the second battery away again ("one battery") brings back one
group, the DC supplies, and with it the worst entries of all: with no DC at Birch or Alder nothing there clears a fault.
That is with nothing monitored. The demo's channels and trip coils are monitored and reported, and Alder's batteries for
low voltage and open circuit: these are exempt, whatever they spoil. A lockout relay is not, nor are the batteries
elsewhere, which are watched for low voltage alone.

One item out turns a duplicate into a single set for as long as the work takes. With the first DC supply of Alder
out, a fault on L1 is still cleared in time, but hangs on the second supply, relay, core, winding and coil; as the
breaker-failure relays hang on the first supply, a stuck breaker there is not backed up at all. With only the first
set of L1 out at Alder the stuck breaker is.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from concurrent.futures import Executor

from schemesim.errors import nearest, reject
from schemesim.plant.model import Location
from schemesim.scenario.chosen import Places, chosen_of
from schemesim.scenario.maintenance import hours_by_name
from schemesim.scenario.model import Scenario
from schemesim.study.footnote import Monitored
from schemesim.study.outage_results import KINDS, Outage, OutageStudy
from schemesim.study.outages import planned_outages, study_outages
from schemesim.study.register import Register, register

Progress = Callable[[int, int], None]


def register_scenario(
    scenario: Scenario,
    policy: str | None = None,
    *,
    locations: Places | None = None,
    monitored: Iterable[Monitored] | None = None,
    pairs: bool = False,
    executor: Executor | None = None,
    progress: Progress | None = None,
) -> Register:
    """The register of single points of failure of a scenario, each location against the limit of its voltage.

    Parameters
    ----------
    scenario : Scenario
    policy : str or None
        The policy in use by default.
    locations : iterable of Location or str, or None
        By default every location of the scenario.
    monitored : iterable of Monitored or None
        By default as ``maintenance`` says.
    pairs, executor, progress
        See :func:`~schemesim.study.register.register`.
    """
    chosen = _chosen(scenario, locations)
    program = scenario.program(policy)
    if monitored is None:  # an entry may fit the components of other policies only
        parts = program.scheme.components
        monitored = [m for m in scenario.maintenance.monitored if any(m.of(c.name, c.kind) for c in parts)]
    return register(
        program,
        scenario.sensing(),
        chosen,
        limit_us={at: scenario.limit_us(at) for at in chosen},
        monitored=monitored,
        pairs=pairs,
        dispatch=scenario.study.dispatch,
        horizon_us=scenario.study.horizon_us,
        executor=executor,
        progress=progress,
    )


def outages_scenario(
    scenario: Scenario,
    policy: str | None = None,
    *,
    locations: Places | None = None,
    kinds: Iterable[str] = KINDS,
    names: Iterable[str] | None = None,
    hours_per_yr: Mapping[str, float] | None = None,
    epsilon: float = 1e-3,
    executor: Executor | None = None,
    progress: Progress | None = None,
) -> OutageStudy:
    """A scenario with each set, DC domain, channel or breaker out for work.

    Parameters
    ----------
    scenario : Scenario
    policy : str or None
        The policy in use by default.
    locations : iterable of Location or str, or None
        By default every location of the scenario.
    kinds : iterable of str
        Of ``"set"``, ``"dc"``, ``"channel"``, ``"breaker"``.
    names : iterable of str or None
        Only these outages, as named by :func:`~schemesim.study.outages.planned_outages`.
    hours_per_yr : mapping of str to float, or None
        By default as ``maintenance`` says.
    epsilon, executor, progress
        See :func:`~schemesim.study.outages.study_outages`.

    Raises
    ------
    InputError
        For an outage that is none, and as that function does.
    """
    chosen = _chosen(scenario, locations)
    program = scenario.program(policy)
    outages: tuple[Outage, ...] = planned_outages(program, kinds)
    if names is not None:
        by_name = {o.name: o for o in outages}
        wanted = list(dict.fromkeys(names))
        for name in wanted:
            if name not in by_name:
                raise reject("outage", name, "an item that can be taken out", tip=nearest(name, by_name))
        outages = tuple(by_name[name] for name in wanted)
    if hours_per_yr is None:
        hours_per_yr = hours_by_name(scenario.maintenance.outage_hours, outages)
    rates = {at: scenario.frequencies.get(at, 0.0) for at in chosen}
    return study_outages(
        program,
        scenario.sensing(),
        chosen,
        limit_us={at: scenario.limit_us(at) for at in chosen},
        outages=outages,
        hours_per_yr=hours_per_yr,
        frequencies=rates if any(rates.values()) else None,
        epsilon=epsilon,
        dispatch=scenario.study.dispatch,
        horizon_us=scenario.study.horizon_us,
        executor=executor,
        progress=progress,
    )


def _chosen(scenario: Scenario, locations: Places | None) -> list[Location]:
    return chosen_of(scenario.plant, scenario.frequencies if locations is None else locations)
