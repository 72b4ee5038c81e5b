"""What can be checked only once the plant is dressed: CTs and cores a policy needs, names of components."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import replace
from fnmatch import fnmatchcase

from schemesim.engine.sensing import NoFault
from schemesim.errors import InputError, Problem, nearest
from schemesim.scenario.locate import Path
from schemesim.scenario.maintenance import check_maintenance
from schemesim.scenario.model import ListedRun, Scenario
from schemesim.scenario.money import check_costs
from schemesim.scenario.notes import Notes
from schemesim.scenario.rates import TOP, check_patterns
from schemesim.scheme.model import MODES, Ask, Component, Scheme


def check_dressed(notes: Notes, scenario: Scenario) -> None:
    """Dress the plant by every policy; what does not fit it, or names nothing in it, is noted."""
    schemes = _dress(notes, scenario)
    if notes.problems:
        return
    check_costs(notes, scenario.money, schemes)
    components: dict[str, Component] = {}
    for scheme in schemes.values():
        components.update(scheme.component)
    document = scenario.document if isinstance(scenario.document, dict) else {}
    data = document.get("failure_data")
    order = data.get("common_causes") if isinstance(data, dict) else None
    for i, name in enumerate(_listed(document.get("out_of_service"))):
        _component(notes, ("out_of_service", i), "out_of_service", name, components)
    for i, override in enumerate(scenario.data.overrides):
        path: Path = ("failure_data", "overrides", i)
        fit = [c for c in components.values() if fnmatchcase(c.name, override.pattern)]
        if not fit:
            tip = nearest(override.pattern, components)
            notes.note((*path, "pattern"), "pattern", override.pattern, "a pattern that fits a component", tip)
        for mode in override.modes:
            if fit and not any(mode in MODES[c.kind] for c in fit):
                known = sorted({str(m) for c in fit for m in MODES[c.kind]})
                expected = f"a failure mode of what the pattern fits: {', '.join(known)}"
                notes.note((*path, "modes", str(mode)), "failure mode", str(mode), expected)
    check_patterns(notes, scenario.data.rates, components.values())
    check_maintenance(notes, scenario.maintenance, schemes.values(), scenario.plant)
    by_name = {c.name: c for c in scenario.data.common_causes}
    for i, name in enumerate(_names(order)):
        if name in by_name:
            for ask in by_name[name].members:
                where: Path = ("failure_data", "common_causes", i, "members", ask.component)
                _ask(notes, where, ask, components)
    runs = {r.name: r for r in scenario.runs}
    for i, name in enumerate(_names(document.get("runs"))):
        if name in runs:
            _run(notes, ("runs", i), runs[name], scenario, schemes[runs[name].policy or scenario.policy])


def _listed(value: object) -> list[str]:
    return [v for v in value if isinstance(v, str)] if isinstance(value, list) else []


def _names(value: object) -> list[str]:
    """Names of the items of a list, in its order."""
    return [str(v.get("name")) for v in value if isinstance(v, dict)] if isinstance(value, list) else []


def schemes_of(scenario: Scenario) -> tuple[dict[str, Scheme], dict[Problem, list[str]]]:
    """The plant dressed by every policy, and each mistake with the policies it is made under.

    A policy that nothing in the scenario uses need not go with the exceptions, only with the plant.
    """
    schemes: dict[str, Scheme] = {}
    found: dict[Problem, list[str]] = {}
    money = scenario.money
    used = {scenario.policy, *(r.policy for r in scenario.runs)}
    if money is not None:
        used |= {money.start, *(money.policies or scenario.policies)}
    for name in scenario.policies:
        try:
            try:
                schemes[name] = scenario.scheme(name)
            except InputError:
                if name in used or not scenario.exceptions:
                    raise
                schemes[name] = replace(scenario, exceptions={}).scheme(name)
        except InputError as error:
            for p in error.problems:
                found.setdefault(p, []).append(name)
    return schemes, found


def _dress(notes: Notes, scenario: Scenario) -> dict[str, Scheme]:
    schemes, found = schemes_of(scenario)
    told: set[Path] = set()
    for p, names in found.items():
        where = " and ".join(repr(n) for n in dict.fromkeys(names))
        if scenario.exceptions and re.match(r"coil \S+ of '|exception '|policy of breaker '", p.subject):
            notes.take(InputError([p]), ("exceptions",), tip=f"under policy {where}")
        elif p.subject == "exception to the policy":
            notes.take(InputError([p]), ("exceptions", str(p.value)))
        elif p.subject.startswith(("modes of", "probability of", "no_fault_per_yr of")):
            at = _override(scenario, p)
            if at not in told:  # one of the components it fits tells enough
                notes.take(InputError([p]), at)
            told.add(at)
        else:
            notes.take(InputError([p]), tip=f"under policy {where}")
    return schemes


def _override(scenario: Scenario, problem: Problem) -> Path:
    """The override, or rate, behind a mistake in the failure data of a component: the last that fits it."""
    name = problem.subject.partition("'")[2].removesuffix("'")
    fit = [i for i, o in enumerate(scenario.data.overrides) if fnmatchcase(name, o.pattern)]
    if fit:
        return ("failure_data", "overrides", fit[-1])
    rules = enumerate(scenario.data.rates)
    rated = [(i, r.kind) for i, r in rules if r.pattern != "*" and fnmatchcase(name, r.pattern)]
    if not rated:
        return ("failure_data",)
    return (*TOP, rated[-1][0]) if len({kind for _, kind in rated}) == 1 else TOP


def _component(
    notes: Notes, path: Path, subject: str, name: str, components: Mapping[str, Component], *, of_key: bool = False
) -> bool:
    if name in components:
        return True
    notes.note(path, subject, name, "the name of a component", _closest(name, components), of_key=of_key)
    return False


def _closest(name: str, components: Iterable[str]) -> str:
    """The nearest component; among those of the same place if it names one, since there may be thousands."""
    place = name.rpartition("/")[0]
    near = [c for c in components if c.rpartition("/")[0] == place]
    return nearest(name, near or list(components))


def _ask(notes: Notes, path: Path, ask: Ask, components: Mapping[str, Component]) -> bool:
    if not _component(notes, path, str(path[-2]), ask.component, components, of_key=True):
        return False
    known = MODES[components[ask.component].kind]
    if ask.mode not in known:
        expected = f"a mode of a {components[ask.component].kind}: {', '.join(map(str, known))}"
        notes.note(path, "failure mode", str(ask.mode), expected, nearest(ask.mode, map(str, known)))
        return False
    return True


def _run(notes: Notes, path: Path, run: ListedRun, scenario: Scenario, scheme: Scheme) -> None:
    components = scheme.component
    for name in sorted(run.out_of_service):
        _component(notes, (*path, "out_of_service"), "out_of_service", name, components)
    if isinstance(run.event, NoFault):
        where = (*path, "no_fault")
        name = run.event.component
        if _component(notes, where, "no_fault", name, components) and not components[name].no_fault_per_yr > 0:
            notes.note(where, "no_fault", name, "a component with a no_fault_per_yr over 0")
    out = scenario.out_of_service | run.out_of_service
    for ask in run.failures:
        where = (*path, "failures", ask.component)
        if not _ask(notes, where, ask, components):
            continue
        if ask.component in out:
            notes.note(where, "failures", ask.component, "a component in service")
        elif not 0 < components[ask.component].probability(ask.mode) < 1:
            expected = "a mode with a probability over 0 and under 1 in failure_data"
            notes.note(where, "failures", f"{ask.component}: {ask.mode}", expected)
    known = {c.name: c for c in scheme.common_causes if c.probability > 0 and c.members}
    for name in run.common_causes:
        if name not in known:
            expected = "a common cause with a probability over 0"
            notes.note((*path, "common_causes"), "common_causes", name, expected, nearest(name, known))
