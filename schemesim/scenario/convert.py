"""From what a scenario file says to the model, with the place of every mistake."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import replace
from fnmatch import fnmatchcase

from schemesim.engine.sensing import Event, NoFault
from schemesim.errors import InputError, Problem, nearest
from schemesim.plant import layouts
from schemesim.plant.model import (
    Device,
    Dispatch,
    Location,
    Plant,
    PlantBuilder,
    Section,
    SectionKind,
    Source,
    VoltageTransformer,
)
from schemesim.scenario.locate import Path, Tree
from schemesim.scenario.model import Limits, ListedRun, Scenario, StudySettings, location
from schemesim.scenario.names import BUILT_IN, Names
from schemesim.scenario.parts import Apply
from schemesim.scenario.schema import (
    DeviceIn,
    FailureDataIn,
    FrequenciesIn,
    Layout,
    PlantIn,
    RunIn,
    ScenarioIn,
    SourceIn,
    StationIn,
)
from schemesim.scheme.failure_data import NO_FAULT_PER_YR, ORDERS_OF_MAGNITUDE, FailureData, Modes, Override
from schemesim.scheme.model import MODES, Ask, CommonCause, ComponentKind, FailureMode
from schemesim.scheme.policy import Policy
from schemesim.ticks import from_ms

_QUOTED = re.compile(r"'([^']*)'")
_ALL_MODES = tuple(str(mode) for mode in FailureMode)


class Converter:
    """Builds the model of a file that fits its schema, and notes every mistake.

    Parameters
    ----------
    tree : Tree
    names : Names
        Names the file defines, to find the place of a mistake the model reports.
    """

    def __init__(self, tree: Tree, names: Names) -> None:
        self.tree, self.names = tree, names
        self.problems: list[Problem] = []

    def note(self, path: Path, subject: str, value: object, expectation: str, tip: str = "") -> None:
        """Note a mistake."""
        self.problems.append(self.tree.problem(path, subject, value, expectation, tip=tip))

    def take(self, error: InputError, path: Path | None = None, tip: str = "") -> None:
        """Note the mistakes of the model, where what they name stands."""
        for p in error.problems:
            where = path if path is not None else self.place(p)
            self.note(where, p.subject, p.value, p.expectation, "; ".join(t for t in (p.tip, tip) if t))

    def place(self, problem: Problem) -> Path:
        """Where the thing a mistake names stands: the last name that is known wins."""
        for text in (problem.subject, str(problem.value)):
            for name in reversed(_QUOTED.findall(text)):
                for known in (name, name.partition("/")[0]):
                    found = self.names.place(known)
                    if found is not None:
                        return found
        return ("plant",)

    def scenario(self, said: ScenarioIn) -> Scenario | None:
        """The model, or None where mistakes were noted."""
        plant = self.plant(said.plant)
        policies = self.policies(said)
        data = self.failure_data(said.failure_data)
        if plant is None or self.problems:
            return None
        settings = self.settings(said)
        frequencies = self.frequencies(plant, said.fault_frequencies, settings.positions)
        runs = tuple(r for i, run in enumerate(said.runs) if (r := self.run(plant, run, ("runs", i))) is not None)
        if self.problems:
            return None
        return Scenario(
            plant=plant,
            policies=policies,
            policy=said.policy or next(iter(policies)),
            exceptions=dict(sorted(said.exceptions.items())),
            data=data,
            frequencies=frequencies,
            limits=self.limits(said),
            study=settings,
            runs=runs,
            out_of_service=frozenset(said.out_of_service),
            frequency_hz=said.frequency_hz or None,
            name=said.name,
            description=said.description,
        )

    # --- plant ------------------------------------------------------------------------

    def plant(self, said: PlantIn) -> Plant | None:
        """The plant, or None where mistakes were noted."""
        b = PlantBuilder(said.length_unit)
        for x in said.lines:
            layouts.line(b, x.name, x.length, kv=x.kv, load_mw=x.load_mw)
        for t in said.transformers:
            layouts.transformer(b, t.name, station=t.station, kv=t.kv, length=t.length)
        for g in said.generators:
            layouts.generator(
                b, g.name, station=g.station, kv=g.kv, trips=g.trips, impedance_pu=g.impedance_pu
            )
        for f in said.feeders:
            layouts.feeder(b, f.name, f.load_mw, station=f.station, kv=f.kv, length=f.length)
        for i in said.infeeds:
            layouts.infeed(
                b,
                i.name,
                i.section,
                station=i.station,
                feeds_own_zone=i.feeds_own_zone,
                impedance_pu=i.impedance_pu,
            )
        for s in said.sections:
            b.add(Section(**_all(s)))  # type: ignore[arg-type]  # the schema has the same fields
        for d in said.devices:
            b.add(_device(d))
        for source in said.sources:
            b.add(_source(source))
        for v in said.voltage_transformers:
            b.add(VoltageTransformer(name=v.name, section=v.section, station=v.station, windings=tuple(v.windings)))
        for state in said.dispatches:
            b.add(Dispatch(name=state.name, out=frozenset(state.out)))
        before = len(self.problems)
        for n, station in enumerate(said.stations):
            self.station(b, station, ("plant", "stations", n))
        if len(self.problems) > before:
            return None
        try:
            return b.build()
        except InputError as error:
            self.take(error)
        return None

    def station(self, b: PlantBuilder, said: StationIn, path: Path) -> None:
        """Lay out a station."""
        bays = [layouts.Bay(x.name or x.to, x.to, x.at, x.ct, x.breaker) for x in said.bays]
        common = {
            "kv": said.kv,
            "ct": said.ct,
            "cores": tuple(said.cores),
            "windings": tuple(said.windings),
        }
        mine = {
            Layout.SECTIONALISED_BUS: ("sections", "selection"),
            Layout.DOUBLE_BUS: ("selection", "coupler_closed"),
        }.get(said.layout, ())
        for key in ("sections", "selection", "coupler_closed"):
            if key in said.model_fields_set and key not in mine:
                self.note((*path, key), key, getattr(said, key), f"no such key for the layout {said.layout}")
                return
        special = {key: getattr(said, key) for key in mine}
        try:
            getattr(layouts, str(said.layout))(b, said.name, bays, **common, **special)
        except InputError as error:
            for p in error.problems:
                self.note(self.in_station(p, said, path), p.subject, p.value, p.expectation, p.tip)

    def in_station(self, problem: Problem, said: StationIn, path: Path) -> Path:
        """Where in a station a mistake of its layout stands."""
        for i, bay in enumerate(said.bays):
            if f"bay {bay.name or bay.to!r} " in problem.subject or f"bay {(bay.name or bay.to)!r} " in problem.subject:
                return (*path, "bays", i)
        for word, key in (("CT placement", "ct"), ("CT cores", "cores"), ("VT windings", "windings"), ("bays", "bays")):
            if problem.subject.startswith(word):
                return (*path, key)
        return path

    # --- policies ---------------------------------------------------------------------

    def policies(self, said: ScenarioIn) -> dict[str, Policy]:
        """All policies that are defined or named, with the base of each applied."""
        apply = Apply(self.tree, said.frequency_hz or None)
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
                self.note((*path, "base"), "base", base_name, f"no circle ({' → '.join((*chain, name))})")
                return None
            base = resolve(base_name, (*chain, name)) if base_name else Policy()
            if base is None:
                return None
            try:
                done[name] = apply.changed(replace(base, name=name), part, path, without=("name",))
            except InputError as error:
                for p in error.problems:
                    key = p.subject.partition(" ")[0]
                    self.take(InputError([p]), (*path, key))
                return None
            return done[name]

        for name in said.policies:
            resolve(name, ())
        named = [said.policy, *said.exceptions.values(), *(r.policy for r in said.runs)]
        if not said.policy and len(said.policies) != 1:
            expected = "the policy in use: one of " + ", ".join([*said.policies, *BUILT_IN])
            self.note(("policy",), "policy", "nothing", expected)
        for name in named:
            if name and name not in said.policies:
                done[name] = replace(BUILT_IN[name], name=name)
        self.problems.extend(apply.problems)
        return dict(sorted(done.items()))

    # --- failure data -----------------------------------------------------------------

    def failure_data(self, said: FailureDataIn) -> FailureData:
        """Failure data, on top of the defaults unless they are declined."""
        top: Path = ("failure_data",)
        start: Mapping[ComponentKind, Modes] = ORDERS_OF_MAGNITUDE if said.start_from_defaults else {}
        rates = dict(NO_FAULT_PER_YR) if said.start_from_defaults else {}
        modes = {kind: dict(m) for kind, m in start.items()}
        for key, given in said.modes.items():
            kind = self.kind((*top, "modes", key), key)
            if kind is not None:
                allowed = MODES[kind]
                modes[kind] = modes.get(kind, {}) | self.modes((*top, "modes", key), given, allowed)
                self.check_sum((*top, "modes", key), f"modes of {key}", modes[kind])
        for key, rate in said.no_fault_per_yr.items():
            kind = self.kind((*top, "no_fault_per_yr", key), key)
            if kind is not None:
                rates[kind] = rate
        overrides: list[Override] = []
        for i, o in enumerate(said.overrides):
            path = (*top, "overrides", i)
            found = self.modes((*path, "modes"), o.modes, tuple(FailureMode))
            self.check_sum((*path, "modes"), f"modes of {o.pattern!r}", found)
            rate_of = o.no_fault_per_yr if "no_fault_per_yr" in o.model_fields_set else None
            overrides.append(Override(o.pattern, found, rate_of))
        causes: list[CommonCause] = []
        for i, c in enumerate(said.common_causes):
            path = (*top, "common_causes", i, "members")
            if not c.members:
                self.note(path, "members", c.members, "at least one component and its mode")
            asks = [
                Ask(component, mode)
                for component, word in sorted(c.members.items())
                if (mode := self.mode((*path, component), word, tuple(FailureMode))) is not None
            ]
            causes.append(CommonCause(c.name, tuple(asks), c.probability))
        return FailureData(
            modes=modes,
            no_fault_per_yr=rates,
            overrides=tuple(overrides),
            relay_beta=said.relay_beta,
            common_causes=tuple(sorted(causes, key=lambda c: c.name)),
        )

    def kind(self, path: Path, word: str) -> ComponentKind | None:
        """A kind of component."""
        known = [str(k) for k in ComponentKind]
        if word in known:
            return ComponentKind(word)
        expected = f"a kind of component: {', '.join(known)}"
        self.problems.append(
            self.tree.problem(path, str(path[-2]), word, expected, tip=nearest(word, known), of_key=True)
        )
        return None

    def modes(
        self, path: Path, given: Mapping[str, float], allowed: tuple[FailureMode, ...]
    ) -> dict[FailureMode, float]:
        """Modes by their words."""
        found = {self.mode((*path, word), word, allowed): p for word, p in given.items()}
        return {mode: p for mode, p in found.items() if mode is not None}

    def mode(self, path: Path, word: str, allowed: tuple[FailureMode, ...]) -> FailureMode | None:
        """A failure mode among those allowed."""
        known = [str(m) for m in allowed]
        if word in known:
            return FailureMode(word)
        expected = f"a failure mode: {', '.join(known)}"
        self.note(path, "failure mode", word, expected, nearest(word, known))
        return None

    def check_sum(self, path: Path, subject: str, modes: Mapping[FailureMode, object]) -> None:
        """Modes of one component exclude each other, so they sum to one or less."""
        total = sum(float(str(p)) for p in modes.values())
        if total > 1 + 1e-12:
            self.note(path, subject, total, "probabilities that sum to 1 or less")

    # --- study ------------------------------------------------------------------------

    def settings(self, said: ScenarioIn) -> StudySettings:
        """Settings of the study."""
        default, s = StudySettings(), said.study
        given = s.model_fields_set
        positions = tuple(sorted(set(s.positions)))
        if len(positions) < len(s.positions):
            self.note(("study", "positions"), "positions", s.positions, "each position once")
        return StudySettings(
            epsilon=s.epsilon if "epsilon" in given else default.epsilon,
            horizon_us=default.horizon_us if s.horizon_ms is None else from_ms(s.horizon_ms),
            positions=positions if "positions" in given else default.positions,
            dispatch=s.dispatch or None,
            seed=s.seed,
            trials=s.trials if "trials" in given else default.trials,
            restore_h=s.restore_h,
        )

    def limits(self, said: ScenarioIn) -> Limits:
        """Limits of the clearing time."""
        given = said.limits
        default = Limits().default_us if given.limit_ms is None else from_ms(given.limit_ms)
        by_kv = {x.kv: from_ms(x.limit_ms or 0.0) for x in given.by_kv}
        if len(by_kv) < len(given.by_kv):
            self.note(("limits", "by_kv"), "by_kv", [x.kv for x in given.by_kv], "each voltage once")
        return Limits(default, tuple(sorted(by_kv.items())))

    def frequencies(
        self, plant: Plant, said: FrequenciesIn, positions: Iterable[float]
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
                self.note((*top, "by_kind", key), "by_kind", key, expected, nearest(key, known))
        if SectionKind.LINE in by_kind and "per_length_per_yr" in said.model_fields_set:
            self.note((*top, "by_kind", "line"), "by_kind", "line", "lines either by kind or by length")
        whole: dict[str, float] = {}
        single: dict[Location, float] = {}
        for key, rate in said.elements.items():
            try:
                where = location(plant, key)
            except InputError as error:
                self.take(error, (*top, "elements", key))
                continue
            if "@" in key:
                single[where] = rate
            else:
                whole[key] = rate
        for name in sorted(set(whole) & {x.section for x in single}):
            self.note((*top, "elements", name), "elements", name, "either the whole line or positions on it")
        found: dict[Location, float] = {}
        apart = {x.section for x in single}
        for where in plant.locations(positions):
            section = plant.section[where.section]
            rate = by_kind.get(section.kind, 0.0)
            if section.kind is SectionKind.LINE:
                rate = (by_kind.get(section.kind, said.per_length_per_yr * section.length)) / len(list(positions))
                if section.name in whole:
                    rate = whole[section.name] / len(list(positions))
            else:
                rate = whole.get(section.name, rate)
            found[where] = 0.0 if section.name in apart else rate
        return dict(sorted((found | single).items()))

    def run(self, plant: Plant, said: RunIn, path: Path) -> ListedRun | None:
        """A listed run."""
        event: Event
        if bool(said.fault) == bool(said.no_fault):
            self.note(path, "run", said.name, "either fault (a location) or no_fault (a component)")
            return None
        if said.fault:
            try:
                event = location(plant, said.fault)
            except InputError as error:
                self.take(error, (*path, "fault"))
                return None
        else:
            event = NoFault(said.no_fault)
        asks = [
            Ask(component, mode)
            for component, word in sorted(said.failures.items())
            if (mode := self.mode((*path, "failures", component), word, tuple(FailureMode))) is not None
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

    # --- the whole --------------------------------------------------------------------

    def check_dressed(self, scenario: Scenario) -> None:
        """Dress the plant by every policy; what does not fit it or names nothing in it is noted."""
        from schemesim.scenario.dressed import check_dressed

        check_dressed(self, scenario)


def matches(pattern: str, names: Iterable[str]) -> bool:
    """Whether a pattern of an override fits any of the names."""
    return any(fnmatchcase(name, pattern) for name in names)


def _all(said: object) -> dict[str, object]:
    return dict(said)  # type: ignore[call-overload, no-any-return]  # a pydantic model yields its fields


def _device(d: DeviceIn) -> Device:
    return Device(
        name=d.name,
        kind=d.kind,
        a=d.a,
        b=d.b,
        a_at=d.a_at,
        b_at=d.b_at,
        station=d.station,
        closed=d.closed,
        cores=tuple(d.cores),
    )


def _source(s: SourceIn) -> Source:
    return Source(
        name=s.name,
        section=s.section,
        station=s.station,
        trips=s.trips,
        feeds_own_zone=s.feeds_own_zone,
        impedance_pu=s.impedance_pu,
    )
