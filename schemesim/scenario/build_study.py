"""What a scenario file wants studied: settings, limits, fault frequencies, listed runs."""

from __future__ import annotations

from schemesim.engine.sensing import Event, NoFault
from schemesim.errors import InputError, nearest
from schemesim.plant.model import Location, Plant, SectionKind
from schemesim.scenario.build_data import mode_of
from schemesim.scenario.locate import Path
from schemesim.scenario.model import Limits, ListedRun, StudySettings, location
from schemesim.scenario.notes import Notes
from schemesim.scenario.schema import FrequenciesIn, LimitsIn, RunIn, StudyIn
from schemesim.scheme.model import Ask, FailureMode
from schemesim.ticks import from_ms


def settings_of(notes: Notes, s: StudyIn) -> StudySettings:
    """Settings of the study."""
    default = StudySettings()
    given = s.model_fields_set
    positions = tuple(sorted(set(s.positions)))
    if len(positions) < len(s.positions):
        notes.note(("study", "positions"), "positions", s.positions, "each position once")
    return StudySettings(
        epsilon=s.epsilon if "epsilon" in given else default.epsilon,
        horizon_us=default.horizon_us if s.horizon_ms is None else from_ms(s.horizon_ms),
        positions=positions if "positions" in given else default.positions,
        dispatch=s.dispatch or None,
        seed=s.seed,
        trials=s.trials if "trials" in given else default.trials,
        restore_h=s.restore_h,
        sensing=s.sensing,
        fault=s.fault,
        fault_ohm=s.fault_ohm,
    )


def limits_of(notes: Notes, given: LimitsIn) -> Limits:
    """Limits of the clearing time."""
    usual = Limits()
    default = usual.default_us if given.limit_ms is None else from_ms(given.limit_ms)
    backup = usual.backup_us if given.backup_ms is None else from_ms(given.backup_ms)
    zone_2 = usual.zone_2_us if given.zone_2_ms is None else from_ms(given.zone_2_ms)
    by_kv = {x.kv: from_ms(x.limit_ms or 0.0) for x in given.by_kv}
    if len(by_kv) < len(given.by_kv):
        notes.note(("limits", "by_kv"), "by_kv", [x.kv for x in given.by_kv], "each voltage once")
    return Limits(default, tuple(sorted(by_kv.items())), backup, zone_2)


def frequencies_of(
    notes: Notes, plant: Plant, said: FrequenciesIn, positions: tuple[float, ...]
) -> dict[Location, float]:
    """Faults per year at every location; what a line has is split evenly over its positions."""
    top: Path = ("fault_frequencies",)
    by_kind: dict[SectionKind, float] = {}
    known = [str(k) for k in SectionKind]
    for key, rate in said.by_kind.items():
        if key in known:
            by_kind[SectionKind(key)] = rate
        else:
            expected = f"a kind of section: {', '.join(known)}"
            notes.note((*top, "by_kind", key), "by_kind", key, expected, nearest(key, known))
    if SectionKind.LINE in by_kind and "per_length_per_yr" in said.model_fields_set:
        notes.note((*top, "by_kind", "line"), "by_kind", "line", "lines either by kind or by length")
    whole: dict[str, float] = {}
    single: dict[Location, float] = {}
    for key, rate in said.elements.items():
        try:
            where = location(plant, key)
        except InputError as error:
            notes.take(error, (*top, "elements", key))
            continue
        if "@" in key:
            single[where] = rate
        else:
            whole[key] = rate
    for name in sorted(set(whole) & {x.section for x in single}):
        notes.note((*top, "elements", name), "elements", name, "either the whole line or positions on it")
    apart = {x.section for x in single}
    found: dict[Location, float] = {}
    for where in plant.locations(positions):
        section = plant.section[where.section]
        rate = by_kind.get(section.kind, 0.0)
        if section.kind is SectionKind.LINE:
            rate = by_kind.get(section.kind, said.per_length_per_yr * section.length)
        rate = 0.0 if section.name in apart else whole.get(section.name, rate)
        found[where] = rate / len(positions) if section.kind is SectionKind.LINE else rate
    return dict(sorted((found | single).items()))


def run_of(notes: Notes, plant: Plant, said: RunIn, path: Path) -> ListedRun | None:
    """A listed run."""
    event: Event
    if bool(said.fault) == bool(said.no_fault):
        notes.note(path, "run", said.name, "either fault (a location) or no_fault (a component)")
        return None
    if said.fault:
        try:
            event = location(plant, said.fault)
        except InputError as error:
            notes.take(error, (*path, "fault"))
            return None
    else:
        event = NoFault(said.no_fault)
    asks = [
        Ask(component, mode)
        for component, word in sorted(said.failures.items())
        if (mode := mode_of(notes, (*path, "failures", component), word, tuple(FailureMode))) is not None
    ]
    return ListedRun(
        name=said.name,
        event=event,
        failures=tuple(asks),
        common_causes=tuple(sorted(set(said.common_causes))),
        out_of_service=frozenset(said.out_of_service),
        policy=said.policy or None,
        dispatch=said.dispatch or None,
        expect=said.expect,
    )
