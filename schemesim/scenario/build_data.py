"""Failure data of a scenario file."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

from schemesim.errors import nearest
from schemesim.scenario.locate import Path
from schemesim.scenario.notes import Notes
from schemesim.scenario.rates import rates_of
from schemesim.scenario.schema import FailureDataIn
from schemesim.scheme.failure_data import NO_FAULT_PER_YR, ORDERS_OF_MAGNITUDE, FailureData, Modes, Override
from schemesim.scheme.model import MODES, Ask, CommonCause, ComponentKind, FailureMode, Probability
from schemesim.scheme.unavailability import Over, RateRule, unavailability


def failure_data_of(notes: Notes, said: FailureDataIn) -> FailureData:
    """Failure data, on top of the defaults unless they are declined."""
    top: Path = ("failure_data",)
    start: Mapping[ComponentKind, Modes] = ORDERS_OF_MAGNITUDE if said.start_from_defaults else {}
    rates = dict(NO_FAULT_PER_YR) if said.start_from_defaults else {}
    modes: dict[ComponentKind, dict[FailureMode, Probability]] = {kind: dict(m) for kind, m in start.items()}
    for key, given in said.modes.items():
        kind = kind_of(notes, (*top, "modes", key), key)
        if kind is not None:
            allowed = MODES[kind]
            modes[kind] = modes.get(kind, {}) | modes_of(notes, (*top, "modes", key), given, allowed)
            check_sum(notes, (*top, "modes", key), f"modes of {key}", modes[kind])
    rules = rates_of(notes, said.rates)
    for rated in sorted({r.kind for r in rules}):
        together = everywhere(modes.get(rated, {}), rules, rated, said.rates_over)
        check_sum(notes, (*top, "rates"), f"modes of {rated}", together)
    for key, rate in said.no_fault_per_yr.items():
        kind = kind_of(notes, (*top, "no_fault_per_yr", key), key)
        if kind is not None:
            rates[kind] = rate
    overrides: list[Override] = []
    for i, o in enumerate(said.overrides):
        path = (*top, "overrides", i)
        found = modes_of(notes, (*path, "modes"), o.modes, tuple(FailureMode))
        check_sum(notes, (*path, "modes"), f"modes of {o.pattern!r}", found)
        rate_of = o.no_fault_per_yr if "no_fault_per_yr" in o.model_fields_set else None
        overrides.append(Override(o.pattern, found, rate_of))
    causes: list[CommonCause] = []
    for i, c in enumerate(said.common_causes):
        path = (*top, "common_causes", i, "members")
        if not c.members:
            notes.note(path, "members", c.members, "at least one component and its mode")
        asks = [
            Ask(component, mode)
            for component, word in sorted(c.members.items())
            if (mode := mode_of(notes, (*path, component), word, tuple(FailureMode))) is not None
        ]
        causes.append(CommonCause(c.name, tuple(asks), c.probability))
    return FailureData(
        modes=modes,
        no_fault_per_yr=rates,
        overrides=tuple(overrides),
        relay_beta=said.relay_beta,
        common_causes=tuple(sorted(causes, key=lambda c: c.name)),
        rates=rules,
        over=said.rates_over,
    )


def everywhere(start: Modes, rules: Iterable[RateRule], kind: ComponentKind, over: Over) -> Modes:
    """Modes of a kind where only the rules for all its components hold."""
    fit = (r for r in rules if r.kind is kind and r.pattern == "*")
    return {**start, **{r.mode: unavailability(r.data).over(over) for r in fit}}


def kind_of(notes: Notes, path: Path, word: str) -> ComponentKind | None:
    """A kind of component."""
    known = [str(k) for k in ComponentKind]
    if word in known:
        return ComponentKind(word)
    expected = f"a kind of component: {', '.join(known)}"
    notes.note(path, str(path[-2]), word, expected, nearest(word, known), of_key=True)
    return None


def modes_of(
    notes: Notes, path: Path, given: Mapping[str, float], allowed: tuple[FailureMode, ...]
) -> dict[FailureMode, Probability]:
    """Modes by their words."""
    found = {mode_of(notes, (*path, word), word, allowed): p for word, p in given.items()}
    return {mode: p for mode, p in found.items() if mode is not None}


def mode_of(notes: Notes, path: Path, word: str, allowed: tuple[FailureMode, ...]) -> FailureMode | None:
    """A failure mode among those allowed."""
    known = [str(m) for m in allowed]
    if word in known:
        return FailureMode(word)
    expected = f"a failure mode: {', '.join(known)}"
    notes.note(path, "failure mode", word, expected, nearest(word, known))
    return None


def check_sum(notes: Notes, path: Path, subject: str, modes: Modes) -> None:
    """Modes of one component exclude each other, so they sum to one or less."""
    total = float(sum(modes.values()))
    if total > 1 + 1e-12:
        notes.note(path, subject, total, "probabilities that sum to 1 or less")
