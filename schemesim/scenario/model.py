"""A scenario: a plant, the policies it is protected with, failure data, and what to study."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from fnmatch import fnmatchcase
from typing import TYPE_CHECKING

from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.sensing import Event, NoFault
from schemesim.errors import ErrorList, nearest, reject
from schemesim.plant.model import Location, Plant, SectionKind
from schemesim.plant.net_case import FaultType
from schemesim.scenario.locate import Data
from schemesim.scenario.sensed import SensingKind, sensing_of
from schemesim.scheme.dress import dress
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import Ask, Scheme
from schemesim.scheme.policy import Policy
from schemesim.study.footnote import Monitored
from schemesim.study.money import Money

if TYPE_CHECKING:
    from schemesim.engine.case import Case
    from schemesim.engine.outcome import Run
    from schemesim.engine.program import Program
    from schemesim.engine.sensing import Sensing

DEFAULT_LIMIT_US = 150_000
"""Limit of the clearing time where a file states none: an assumed value, common practice at transmission voltages."""


BACKUP_LIMIT_US = 250_000
"""Longest clearing with a breaker stuck where a file states none: 15 cycles of 60 Hz (IEEE C37.119, from memory)."""

ZONE_2_LIMIT_US = 500_000
"""Longest clearing by a remote zone 2 where a file states none: 30 cycles of 60 Hz (common practice)."""


@dataclass(frozen=True)
class Limits:
    """How long clearing may take.

    Parameters
    ----------
    default_us : int
        Limit in microseconds.
    by_kv : tuple of (kV, microseconds)
        Limits of sections of a nominal voltage.
    backup_us, zone_2_us : int
        Limits of clearing with a breaker stuck, and by a remote zone 2.

    Examples
    --------
    >>> Limits(150_000, ((230.0, 100_000),)).at(230.0)
    100000
    """

    default_us: int = DEFAULT_LIMIT_US
    by_kv: tuple[tuple[float, int], ...] = ()
    backup_us: int = BACKUP_LIMIT_US
    zone_2_us: int = ZONE_2_LIMIT_US

    def at(self, kv: float) -> int:
        """The limit in microseconds at a nominal voltage in kV."""
        return dict(self.by_kv).get(kv, self.default_us)


@dataclass(frozen=True)
class StudySettings:
    """How to study.

    Parameters
    ----------
    epsilon : float
        Probability that may stay unexplored at each location.
    horizon_us : int
        Longest run in microseconds.
    positions : tuple of float
        Fault positions along each line, from 0 to 1.
    dispatch : str or None
        State of the sources; None: all in service.
    seed, trials : int
        Of Monte Carlo.
    restore_h : float
        Hours until lost load is restored.
    sensing : SensingKind
    fault : FaultType
        Of every location, with ``sensing`` electrical.
    fault_ohm : float
        Fault resistance in ohm, likewise.
    """

    epsilon: float = 1e-5
    horizon_us: int = DEFAULT_HORIZON_US
    positions: tuple[float, ...] = (0.1, 0.5, 0.9)
    dispatch: str | None = None
    seed: int = 0
    trials: int = 10_000
    restore_h: float = 0.0
    sensing: SensingKind = SensingKind.LOGICAL
    fault: FaultType = FaultType.LLL
    fault_ohm: float = 0.0


@dataclass(frozen=True, slots=True)
class OutageHours:
    """How long items are out for planned work in a year.

    Parameters
    ----------
    hours_per_yr : float
        Of each item.
    kind : str
        ``"set"``, ``"dc"``, ``"channel"`` or ``"breaker"``; empty: of any kind.
    pattern : str
        Names of outages; ``*`` and ``?`` stand for any text.
    """

    hours_per_yr: float
    kind: str = ""
    pattern: str = "*"

    def of(self, kind: str, name: str) -> bool:
        """Whether an outage is meant."""
        return self.kind in ("", kind) and (name == self.pattern or fnmatchcase(name, self.pattern))


@dataclass(frozen=True, slots=True)
class Maintenance:
    """What is monitored, and how long items are out for planned work; of several entries the last that fits counts.

    Parameters
    ----------
    monitored : tuple of Monitored
    outage_hours : tuple of OutageHours
    """

    monitored: tuple[Monitored, ...] = ()
    outage_hours: tuple[OutageHours, ...] = ()


@dataclass(frozen=True)
class ListedRun:
    """One run listed in a scenario: an event and what fails.

    Parameters
    ----------
    name : str
    event : Location or NoFault
        The fault, or the component that trips with no fault (rule R18).
    failures : tuple of Ask
        Component and failure mode, all others work.
    common_causes : tuple of str
        Common causes that happen.
    out_of_service : frozenset of str
        Components out for work, besides those of the scenario.
    policy : str or None
        Another policy than that in use.
    dispatch : str or None
        Another dispatch than that of the study.
    expect : str
        What is expected, in words.
    """

    name: str
    event: Event
    failures: tuple[Ask, ...] = ()
    common_causes: tuple[str, ...] = ()
    out_of_service: frozenset[str] = frozenset()
    policy: str | None = None
    dispatch: str | None = None
    expect: str = ""

    @property
    def questions(self) -> tuple[str, ...]:
        """Names of the questions answered yes."""
        causes = (f"common cause {name}" for name in self.common_causes)
        return (*(f"{a.component}: {a.mode}" for a in self.failures), *causes)


@dataclass(frozen=True, repr=False)
class Scenario:
    """Everything a scenario file says, as a model.

    Parameters
    ----------
    plant : Plant
    policies : mapping of str to Policy
        Policies by name.
    policy : str
        The one in use.
    exceptions : mapping of str to str
        Policy of single elements or breakers.
    data : FailureData
    frequencies : mapping of Location to faults per year
        Every fault location, in the order of the plant's.
    limits : Limits
    study : StudySettings
    runs : tuple of ListedRun
        In the order of their names.
    out_of_service : frozenset of str
    frequency_hz : float or None
        Power frequency; None where it is not stated.
    name, description : str
    money : Money or None
        Costs and values, for decisions.
    maintenance : Maintenance

    Raises
    ------
    InputError
        If a policy named is not there.
    """

    plant: Plant
    policies: Mapping[str, Policy]
    policy: str
    exceptions: Mapping[str, str] = field(default_factory=dict)
    data: FailureData = field(default_factory=FailureData)
    frequencies: Mapping[Location, float] = field(default_factory=dict)
    limits: Limits = field(default_factory=Limits)
    study: StudySettings = field(default_factory=StudySettings)
    runs: tuple[ListedRun, ...] = ()
    out_of_service: frozenset[str] = frozenset()
    frequency_hz: float | None = None
    name: str = ""
    description: str = ""
    money: Money | None = None
    maintenance: Maintenance = field(default_factory=Maintenance)
    document: Data = field(default=None, compare=False, repr=False)
    """The plain data it was read from, used again when saved as long as it says the same."""
    _made: dict[object, object] = field(default_factory=dict, init=False, compare=False, repr=False)

    def __repr__(self) -> str:
        what = f"{len(self.plant.breakers)} breakers, {len(self.policies)} policies, {len(self.runs)} listed runs"
        return f"Scenario({self.name or 'without a name'}: {what})"

    def __post_init__(self) -> None:
        errors = ErrorList()
        for name in (self.policy, *self.exceptions.values(), *(r.policy for r in self.runs if r.policy)):
            if name not in self.policies:
                errors.add("policy", name, f"one of {sorted(self.policies)}", tip=nearest(name, self.policies))
        errors.raise_if_any()
        object.__setattr__(self, "runs", tuple(sorted(self.runs, key=lambda r: r.name)))

    def scheme(self, policy: str | None = None, out_of_service: frozenset[str] = frozenset()) -> Scheme:
        """The plant dressed by a policy, that in use by default; computed once.

        Parameters
        ----------
        policy : str or None
        out_of_service : frozenset of str
            Components out for work besides those of the scenario; those the policy does
            not have are left aside.

        Raises
        ------
        InputError
            For a policy that is not there, or a plant that cannot carry it.
        """
        name = self.policy if policy is None else policy
        if name not in self.policies:
            raise reject("policy", name, f"one of {sorted(self.policies)}", tip=nearest(name, self.policies))
        out = self.out_of_service | out_of_service
        key = ("scheme", name, out)
        if key not in self._made:
            plain: tuple[str, str, frozenset[str]] = ("scheme", name, frozenset())
            if plain not in self._made:
                special = {e: self.policies[p] for e, p in self.exceptions.items()}
                self._made[plain] = dress(self.plant, self.policies[name], self.data, exceptions=special)
            scheme = self._made[plain]
            assert isinstance(scheme, Scheme)  # what was put there above
            if out:
                self._made[key] = replace(scheme, out_of_service=out & set(scheme.component))
        found = self._made[key]
        assert isinstance(found, Scheme)
        return found

    def program(self, policy: str | None = None, out_of_service: frozenset[str] = frozenset()) -> Program:
        """The compiled scheme of a policy; computed once."""
        from schemesim.engine.program import Program, compile_scheme

        key = ("program", policy or self.policy, self.out_of_service | out_of_service)
        if key not in self._made:
            self._made[key] = compile_scheme(self.plant, self.scheme(policy, out_of_service))
        found = self._made[key]
        assert isinstance(found, Program)
        return found

    def case(
        self,
        event: Event,
        policy: str | None = None,
        *,
        dispatch: str | None = None,
        out_of_service: frozenset[str] = frozenset(),
    ) -> Case:
        """An event bound to the program of a policy."""
        from schemesim.engine.case import bind

        state = dispatch if dispatch is not None else self.study.dispatch
        return bind(self.program(policy, out_of_service), event, self.sensing(), dispatch=state)

    def sensing(self) -> Sensing:
        """What decides which elements see a fault, the same object for every policy."""
        if "sensing" not in self._made:
            s = self.study
            self._made["sensing"] = sensing_of(s.sensing, s.fault, s.fault_ohm)
        return self._made["sensing"]  # type: ignore[return-value]  # what was put there above

    def listed(self, name: str) -> ListedRun:
        """A listed run by its name.

        Raises
        ------
        InputError
            If there is none, with the nearest name.
        """
        for run in self.runs:
            if run.name == name:
                return run
        known = [r.name for r in self.runs]
        raise reject("run", name, f"one of {known}" if known else "a scenario with runs", tip=nearest(name, known))

    def case_of(self, run: ListedRun, policy: str | None = None) -> Case:
        """The case of a listed run, under its policy or another."""
        chosen = policy or run.policy
        return self.case(run.event, chosen, dispatch=run.dispatch, out_of_service=run.out_of_service)

    def play(self, run: ListedRun | str, policy: str | None = None) -> Run:
        """A listed run with its log, under its policy or another.

        Failures of components that the policy does not have are left aside, so that a run can
        be compared across policies.
        """
        from schemesim.engine.answers import FixedAnswers
        from schemesim.engine.event import run_event

        listed = self.listed(run) if isinstance(run, str) else run
        case = self.case_of(listed, policy)
        yes = listed.questions
        if policy is not None:
            known = {q.name for q in case.program.questions}
            yes = tuple(q for q in yes if q in known)
        answers = FixedAnswers(case.program, yes)
        return run_event(case, answers, horizon_us=self.study.horizon_us, log=True)

    def limit_us(self, event: Event) -> int:
        """Limit of the clearing time of an event, in microseconds."""
        if isinstance(event, NoFault):
            return self.limits.default_us
        return self.limits.at(self.plant.section[event.section].kv)


def location(plant: Plant, text: str) -> Location:
    """A fault location from text: a section, or a line and a position.

    Raises
    ------
    InputError
        For a section that is not there, or a position that is none.

    Examples
    --------
    >>> from schemesim.plant.model import PlantBuilder
    >>> from schemesim.plant.layouts import generator
    >>> b = PlantBuilder()
    >>> generator(b, "G1")
    >>> location(b.build(), "G1")
    Location(section='G1', position=0.5)
    """
    name, at, given = text.partition("@")
    if name not in plant.section:
        raise reject("fault", name, "the name of a section", tip=nearest(name, plant.section))
    if not at:
        return Location(name)
    try:
        position = float(given)
    except ValueError:
        position = -1.0
    if "_" in given or not 0.0 <= position <= 1.0:
        raise reject("fault", text, "a position from 0 to 1 after the @: L1@0.25")
    if plant.section[name].kind is not SectionKind.LINE and position != 0.5:
        raise reject("fault", text, f"no position: {name!r} is no line")
    return Location(name, position)
