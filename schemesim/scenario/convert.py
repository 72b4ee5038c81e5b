"""From what a scenario file says to the model, with the place of every mistake."""

from __future__ import annotations

from dataclasses import replace

from schemesim.errors import InputError
from schemesim.scenario.build_data import failure_data_of
from schemesim.scenario.build_plant import plant_of
from schemesim.scenario.build_study import frequencies_of, limits_of, run_of, settings_of
from schemesim.scenario.locate import Path
from schemesim.scenario.maintenance import maintenance_of
from schemesim.scenario.model import Scenario
from schemesim.scenario.money import money_of
from schemesim.scenario.names import BUILT_IN
from schemesim.scenario.notes import Notes
from schemesim.scenario.parts import Apply
from schemesim.scenario.schema import ScenarioIn
from schemesim.scheme.policy import Policy


def scenario_of(notes: Notes, said: ScenarioIn) -> Scenario | None:
    """The model of a file that fits its schema, or None where mistakes were noted."""
    plant = plant_of(notes, said.plant)
    policies = policies_of(notes, said)
    data = failure_data_of(notes, said.failure_data)
    settings = settings_of(notes, said.study)
    limits = limits_of(notes, said.limits)
    maintenance = maintenance_of(notes, said.maintenance)
    if plant is None:
        return None
    frequencies = frequencies_of(notes, plant, said.fault_frequencies, settings.positions)
    runs = [run_of(notes, plant, run, ("runs", i)) for i, run in enumerate(said.runs)]
    money = money_of(notes, said.money, plant, policies, settings.restore_h)
    if notes.problems:
        return None
    return Scenario(
        plant=plant,
        policies=policies,
        policy=said.policy or next(iter(said.policies)),
        exceptions=dict(sorted(said.exceptions.items())),
        data=data,
        frequencies=frequencies,
        limits=limits,
        study=settings,
        runs=tuple(run for run in runs if run is not None),
        out_of_service=frozenset(said.out_of_service),
        frequency_hz=said.frequency_hz or None,
        name=said.name,
        description=said.description,
        money=money,
        maintenance=maintenance,
    )


def parts_of(notes: Notes, said: ScenarioIn, bad: frozenset[str]) -> None:
    """Note the mistakes of the sections that stand on their own and are not in ``bad``."""
    if "plant" not in bad:
        plant_of(notes, said.plant)
    if not bad & {"policies", "policy", "exceptions", "runs"}:
        policies_of(notes, said)
    if "failure_data" not in bad:
        failure_data_of(notes, said.failure_data)
    if "study" not in bad:
        settings_of(notes, said.study)
    if "limits" not in bad:
        limits_of(notes, said.limits)
    if "maintenance" not in bad:
        maintenance_of(notes, said.maintenance)


def policies_of(notes: Notes, said: ScenarioIn) -> dict[str, Policy]:
    """All policies that are defined or named, with the base of each applied."""
    apply = Apply(notes.tree, said.frequency_hz or None)
    done: dict[str, Policy] = {}

    def resolve(name: str, chain: tuple[str, ...]) -> Policy | None:
        if name in done:
            return done[name]
        if name not in said.policies:
            return replace(BUILT_IN[name], name=name)
        path: Path = ("policies", name)
        part = said.policies[name]
        base_name = getattr(part, "base", "")
        if name in chain:
            notes.note((*path, "base"), "base", base_name, f"no circle ({' → '.join((*chain, name))})")
            return None
        base = resolve(base_name, (*chain, name)) if base_name else Policy()
        if base is None:
            return None
        try:
            done[name] = apply.changed(replace(base, name=name), part, path, without=("name",))
        except InputError as error:
            for p in error.problems:
                key = p.subject.partition(" ")[0]
                notes.take(InputError([p]), (*path, key))
            return None
        return done[name]

    for name in said.policies:
        resolve(name, ())
    named = [said.policy, *said.exceptions.values(), *(r.policy for r in said.runs)]
    if not said.policy and len(said.policies) != 1:
        expected = "the policy in use: one of " + ", ".join([*said.policies, *BUILT_IN])
        notes.note(("policy",), "policy", "nothing", expected)
    for name in named:
        if name and name not in said.policies:
            done[name] = replace(BUILT_IN[name], name=name)
    notes.problems.extend(apply.problems)
    return dict(sorted(done.items()))
