"""A scenario as one page: its study, its register, and clearing sequences worth looking at."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Executor
from dataclasses import fields

from schemesim.engine.sensing import NoFault
from schemesim.errors import reject
from schemesim.report.page import Assumption, HtmlPage, PageCase, PageContent, html_page
from schemesim.report.timeline import replay, timeline
from schemesim.scenario.chosen import Places, chosen_of
from schemesim.scenario.model import Scenario
from schemesim.scenario.studying import study_scenario
from schemesim.scenario.weak import register_scenario
from schemesim.scheme.delays import Delay
from schemesim.scheme.failure_data import NO_FAULT_PER_YR, ORDERS_OF_MAGNITUDE, FailureData
from schemesim.scheme.policy import BreakerFailurePolicy, LocalBackup, Policy
from schemesim.scheme.unavailability import RateRule
from schemesim.study.location import LocationResult
from schemesim.study.locations import LocationStudy
from schemesim.study.register import Register

Stage = Callable[[str], Callable[[int, int], None]]
"""Given the name of a stage, what is called with the number of pieces done and of all."""

MAX_CASES = 100
"""Most clearing sequences of single failures on a page, the worst first."""

_GRADES = {"not cleared": 0, "late": 1, "more breakers": 2}
_SHIPPED = "shipped order of magnitude, from memory of the trade's literature"
_FILE = "scenario"


def report_scenario(
    scenario: Scenario,
    policy: str | None = None,
    *,
    study: LocationStudy | None = None,
    register: Register | None = None,
    locations: Places | None = None,
    epsilon: float | None = None,
    max_cases: int = MAX_CASES,
    executor: Executor | None = None,
    stage: Stage | None = None,
) -> HtmlPage:
    """A self-contained HTML page on a scenario under one policy.

    It lists the runs of the scenario, the worst of the studied locations with nothing failing, and for each
    location its worst single failure.

    Parameters
    ----------
    scenario : Scenario
    policy : str or None
        The policy in use by default.
    study : LocationStudy or None
        What :func:`~schemesim.scenario.studying.study_scenario` found; it is studied here otherwise.
    register : Register or None
        What :func:`~schemesim.scenario.weak.register_scenario` found; it is made here otherwise.
    locations : iterable of Location or str, or None
        By default every location of the scenario.
    epsilon : float or None
        Probability left unexplored at each location; as in the scenario by default.
    max_cases : int
        Most locations whose worst single failure is drawn, those that leave the fault first.
    executor : concurrent.futures.Executor or None
        Runs the work; the page is the same with any, or with none.
    stage : callable or None
        Called with the name of each stage of the work; returns what is told its progress.

    Returns
    -------
    HtmlPage
        ``.save(path)`` writes the file; ``.html`` is its text.

    Raises
    ------
    InputError
        For a policy or location that is not there.

    Examples
    --------
    ``report_scenario(load_scenario("demo.yaml")).save("demo.html")``
    """
    given: object = max_cases
    if isinstance(given, bool) or not isinstance(given, int) or given < 0:
        raise reject("max_cases", max_cases, "a whole number, zero or more")
    name = scenario.policy if policy is None else policy
    program = scenario.program(name)
    told = _untold if stage is None else stage
    chosen = None if locations is None else chosen_of(scenario.plant, locations)
    if study is None:
        study = study_scenario(
            scenario, name, locations=chosen, epsilon=epsilon, executor=executor, progress=told("locations")
        )
    places = [r.location for r in study.results]
    if register is None:
        register = register_scenario(
            scenario, name, locations=places, executor=executor, progress=told("single failures")
        )
    cases = (*_listed(scenario, name), *_worst(scenario, name, study, max_cases))
    content = PageContent(
        title=scenario.name or "Study",
        subtitle=f"policy “{name}”, {len(scenario.plant.breakers)} breakers, {len(places)} fault locations",
        description=scenario.description,
        program=program,
        study=study,
        limits_us={at: scenario.limit_us(at) for at in places},
        cases=cases,
        register=register,
        assumptions=tuple(assumptions_of(scenario, name)),
        settings=_settings(scenario, name, study),
    )
    return html_page(content, told("pictures"))


def _untold(_stage: str) -> Callable[[int, int], None]:
    return lambda _done, _of: None


def _listed(scenario: Scenario, policy: str) -> list[PageCase]:
    """The runs that the scenario lists, each under its own policy or the one reported."""
    found = []
    for run in scenario.runs:
        mine = run.policy or policy
        case = scenario.case_of(run, mine)
        known = {q.name for q in case.program.questions}
        lacking = [q for q in run.questions if q not in known]
        if isinstance(run.event, NoFault) and run.event.component not in case.program.scheme.component:
            continue
        played = replay(case, [q for q in run.questions if q in known], horizon_us=scenario.study.horizon_us)
        sequence = timeline(
            case, played, frequency_hz=scenario.frequency_hz or 50.0, limit_ms=scenario.limit_us(run.event) / 1000
        )
        text = run.expect if mine == policy else f"Under policy “{mine}”. {run.expect}".strip()
        if lacking:
            text = f"{text} Left out, as this policy has no such thing: {', '.join(lacking)}.".strip()
        found.append(PageCase(f"run: {run.name}", sequence, text=text))
    return found


def _worst(scenario: Scenario, policy: str, study: LocationStudy, most: int) -> list[PageCase]:
    """Nothing failing where that takes longest, then the worst single failure of each location."""

    def grade(r: LocationResult) -> tuple[int, float]:
        point = r.single_points[0]
        return _GRADES[point.kind], -float(point.probability) * study.weight(r)

    found: list[PageCase] = []
    fed = [r for r in study.results if r.fed and r.nominal is not None]
    if fed:
        slowest = max(fed, key=lambda r: float("inf") if (t := _nominal_us(r)) is None else t)
        found.append(_case(scenario, policy, slowest, "nothing fails", ()))
    order = sorted((r for r in study.results if r.single_points), key=grade)[:most]
    for r in (r for r in study.results if r in order):
        point = r.single_points[0]
        found.append(_case(scenario, policy, r, point.failure, (point.failure,)))
    return found


def _nominal_us(r: LocationResult) -> int | None:
    return None if r.nominal is None else r.nominal.t_clear_us


def _case(scenario: Scenario, policy: str, r: LocationResult, name: str, failures: tuple[str, ...]) -> PageCase:
    case = scenario.case(r.location, policy)
    played = replay(case, failures, horizon_us=scenario.study.horizon_us)
    limit_ms = scenario.limit_us(r.location) / 1000
    sequence = timeline(case, played, frequency_hz=scenario.frequency_hz or 50.0, limit_ms=limit_ms)
    return PageCase(f"{r.location}: {name}", sequence, location=str(r.location))


# --- what the results rest on -------------------------------------------------------------


def assumptions_of(scenario: Scenario, policy: str | None = None) -> list[Assumption]:
    """What a study of a scenario rests on, each with its source.

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, generator, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> from schemesim.scheme.policy import single_set
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder")
    >>> single_bus(b, "Alder", [Bay("G1", "G1")])
    >>> found = assumptions_of(Scenario(b.build(), {"single": single_set()}, "single"))
    >>> [a.topic for a in found][:2]
    ['what a relay sees', 'clearing']
    """
    name = scenario.policy if policy is None else policy
    chosen, data = scenario.policies[name], scenario.data
    found = [
        Assumption("what a relay sees", "Reach and direction are geometric, along the shortest electrical path; "
                   "currents and voltages are not computed.", "logical sensing of schemesim"),
        Assumption("clearing", "A fault is cleared when no closed path joins it to a source.", "rule R8 of schemesim"),
        Assumption("delays", "The odds are those at nominal delays.", "event tree of schemesim"),
        Assumption("plant", f"{len(scenario.plant.breakers)} breakers, {len(scenario.plant.sources)} sources, "
                   f"all as stated; lengths in {scenario.plant.length_unit}.", _FILE),
        *_limits(scenario),
        *_failure_data(data),
        Assumption("trips with no fault per year",
                   "; ".join(f"{kind}: {rate:g}" for kind, rate in data.no_fault_per_yr.items()) or "none",
                   "shipped, an assumed order of magnitude" if data.no_fault_per_yr == NO_FAULT_PER_YR else _FILE),
        _frequencies(scenario),
    ]  # fmt: skip
    found += _policy_times(chosen, name)
    for element, other in scenario.exceptions.items():
        found.append(Assumption("exception", f"{element} is protected by policy “{other}”", _FILE))
    if scenario.out_of_service:
        found.append(Assumption("out of service", ", ".join(sorted(scenario.out_of_service)), _FILE))
    if scenario.study.dispatch:
        found.append(Assumption("dispatch", scenario.study.dispatch, _FILE))
    return found


def _limits(scenario: Scenario) -> list[Assumption]:
    limits = scenario.limits
    said = isinstance(scenario.document, dict) and "limits" in scenario.document
    source = _FILE if said else "assumed, common practice at transmission voltages"
    found = [Assumption("limit of the clearing time", f"{limits.default_us / 1000:g} ms", source)]
    for kv, limit in limits.by_kv:
        found.append(Assumption("limit of the clearing time", f"{limit / 1000:g} ms at {kv:g} kV", _FILE))
    return found


def _failure_data(data: FailureData) -> list[Assumption]:
    found = []
    for kind, modes in data.modes.items():
        for mode, p in modes.items():
            shipped = ORDERS_OF_MAGNITUDE.get(kind, {}).get(mode) == p
            said = f"{kind.replace('_', ' ')}, {mode.replace('_', ' ')}: {float(p):g} on demand"
            found.append(Assumption("failure data", said, f"{_SHIPPED} (or stated alike)" if shipped else _FILE))
    found += [Assumption("failure data", _rate(rule), _rate_source(rule)) for rule in data.rates]
    for o in data.overrides:
        parts = [f"{m.replace('_', ' ')} {float(p):g} on demand" for m, p in o.modes.items()]
        parts += [] if o.no_fault_per_yr is None else [f"{o.no_fault_per_yr:g} trips with no fault a year"]
        found.append(Assumption("failure data", f"{o.pattern}: {', '.join(parts)}", _FILE))
    if data.relay_beta:
        said = f"{data.relay_beta:.3g} of a relay's failures to operate is common to all relays of the element there"
        found.append(Assumption("common cause", said, _FILE))
    for cause in data.common_causes:
        said = f"{cause.name}: {float(cause.probability):g} on demand"
        found.append(Assumption("common cause", said, _FILE))
    return found


def _rate(rule: RateRule) -> str:
    """What a rule says, in words.

    Examples
    --------
    >>> from schemesim.scheme.model import ComponentKind, FailureMode
    >>> from schemesim.scheme.unavailability import RateData
    >>> data = RateData(rate_per_yr=0.01, coverage=0.97, test_interval_yr=6.0, repair_h=24.0)
    >>> _rate(RateRule(kind=ComponentKind.RELAY, mode=FailureMode.FAILURE_TO_OPERATE, data=data))
    'relay, failure to operate: 0.01 a year, 97 % found at once, tested every 6 years, repaired in 24 h'
    """
    d = rule.data
    parts = [f"{d.rate_per_yr:g} a year"] if d.rate_per_yr else []
    if d.revealed:
        parts.append("found at once")
    elif d.coverage:
        parts.append(f"{100 * d.coverage:g} % found at once")
    if d.test_interval_yr is not None:
        every = "year" if d.test_interval_yr == 1 else f"{d.test_interval_yr:g} years"
        lasts = f" for {d.test_duration_h:g} h" if d.test_duration_h else ""
        parts.append(f"tested every {every}{lasts}{', by turns' if rule.staggered else ''}")
    if d.repair_h:
        parts.append(f"repaired in {d.repair_h:g} h")
    if d.on_demand:
        parts.append(f"{d.on_demand:g} on demand" + (" besides" if d.rate_per_yr else ""))
    where = "" if rule.pattern == "*" else f" of {rule.pattern}"
    return f"{rule.kind.replace('_', ' ')}{where}, {rule.mode.replace('_', ' ')}: {', '.join(parts)}"


def _rate_source(rule: RateRule) -> str:
    said = [*([str(rule.quality)] if rule.quality else []), *([rule.source] if rule.source else [])]
    return f"{_FILE}: {'; '.join(said)}" if said else _FILE


def _policy_times(policy: Policy, name: str) -> list[Assumption]:
    """The times of a policy, those of one part together; those as shipped and those stated told apart."""
    usual = dict(_times(Policy(local_backup=LocalBackup(), breaker_failure=BreakerFailurePolicy())))
    found: dict[tuple[str, bool], list[str]] = {}
    for path, value in _times(policy):
        part, _, last = path.rpartition(": ")
        found.setdefault((part, usual.get(path) == value), []).append(f"{last} {value}")
    shipped, stated = "as shipped: assumed, common practice", f"policy “{name}” of the scenario"
    return [
        Assumption("times", f"{part}: {', '.join(values)}", shipped if alike else stated)
        for (part, alike), values in found.items()
    ]


def _frequencies(scenario: Scenario) -> Assumption:
    total = sum(scenario.frequencies.values())
    if not total:
        return Assumption("fault frequencies", "none stated: each location weighs alike", _FILE)
    said = f"{total:.4g} faults a year over {len(scenario.frequencies)} locations, permanent and transient together"
    return Assumption("fault frequencies", said, _FILE)


def _times(part: object, path: str = "") -> list[tuple[str, str]]:
    """Every time of a policy, by its path."""
    found: list[tuple[str, str]] = []
    for f in fields(part):  # type: ignore[arg-type]  # called with dataclasses only
        value = getattr(part, f.name)
        word = "local back-up" if f.name == "local_backup" else f.name.replace("_", " ")
        if isinstance(value, Delay):
            kind = "" if value.is_fixed else f" nominal, {type(value).__name__.lower()}"
            found.append((f"{'others' if path == 'times' else path}: {word}", f"{value.nominal_us / 1000:g} ms{kind}"))
        elif hasattr(value, "__dataclass_fields__"):
            found += _times(value, path if path and word == "times" else word)
    return found


def _settings(scenario: Scenario, policy: str, study: LocationStudy) -> dict[str, str]:
    s = scenario.study
    return {
        "scenario": scenario.name or "without a name",
        "policy": policy,
        "seed": f"{s.seed} (nothing on this page is drawn at random)",
        "left unexplored at each location": f"{study.options.epsilon:g} at most",
        "histories explored": str(sum(r.runs for r in study.results)),
        "longest run": f"{s.horizon_us / 1000:g} ms",
        "dispatch": s.dispatch or "all sources in service",
        "power frequency": f"{scenario.frequency_hz:g} Hz" if scenario.frequency_hz else "not stated; cycles at 50 Hz",
        "complete": "yes" if study.complete else "no, interrupted",
    }
