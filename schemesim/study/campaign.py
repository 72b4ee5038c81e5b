"""Campaigns: events under several variants of a scheme, with drawn trials or given failure sets.

A *place* is one event (a fault location, a trip with no fault) under one variant.
:func:`schemesim.study.campaign_run.run_campaign` runs what of a campaign is not in its store yet.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.program import Program
from schemesim.engine.sensing import Event, LogicalSensing, NoFault, Sensing
from schemesim.errors import ErrorList, nearest, reject
from schemesim.plant.model import Location
from schemesim.scheme.model import MODES, Gate
from schemesim.study.campaign_key import digest, versions
from schemesim.study.campaign_work import Work, packed


@dataclass(frozen=True, eq=False, repr=False)
class Campaign:
    """What is to be run.

    Attributes
    ----------
    variants : mapping of str to Program
    events : tuple of Event
        Each is run under each variant.
    trials : int
        Trials at each place; trial t of a seed is the same everywhere (rule R19).
    seed : int
        Zero or more.
    failures : tuple of tuple of str
        Failure sets, each the names of its questions, instead of trials: trial n is set n, at nominal delays.
        What a variant does not have is left aside there.
    limit_us : int or mapping of Event to int
        Longest clearing time that is in time; measures use it, counts do not depend on it.
    observe : frozenset of str
        Trip outputs whose operation is counted, for dependability and security; see
        :func:`schemesim.study.dependability.outputs_of`.
    sensing : Sensing or mapping of str to Sensing
        Of all variants, or of each.
    dispatch : str or None
    horizon_us : int

    Raises
    ------
    InputError
        With every mistake: no variant or event, events that print alike, unknown sections, components, failures or
        outputs, numbers that are not whole or negative, neither or both of trials and failures.
    """

    variants: Mapping[str, Program]
    events: tuple[Event, ...]
    trials: int = 0
    seed: int = 0
    failures: tuple[tuple[str, ...], ...] = ()
    limit_us: int | Mapping[Event, int] = 150_000
    observe: frozenset[str] = frozenset()
    sensing: Sensing | Mapping[str, Sensing] = field(default_factory=LogicalSensing)
    dispatch: str | None = None
    horizon_us: int = DEFAULT_HORIZON_US
    _packed: dict[str, bytes] = field(default_factory=dict, init=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "events", tuple(self.events))
        object.__setattr__(self, "failures", tuple(tuple(sorted(names)) for names in self.failures))
        object.__setattr__(self, "observe", frozenset(self.observe))
        _check(self).raise_if_any()

    def __repr__(self) -> str:
        what = f"{len(self.failures)} failure sets" if self.failures else f"{self.trials} trials, seed {self.seed}"
        return f"Campaign({len(self.events)} events × {len(self.variants)} variants × {what})"

    @property
    def rounds(self) -> int:
        """Trials at each place: drawn ones, or failure sets."""
        return len(self.failures) or self.trials

    @cached_property
    def places(self) -> tuple[tuple[str, Event], ...]:
        """Every variant with every event, in the order of their numbers."""
        return tuple((variant, event) for variant in self.variants for event in self.events)

    def number(self, variant: str, event: Event | str) -> int:
        """The number of a place, the event by itself or as printed.

        Raises
        ------
        InputError
            If it is not part of the campaign.
        """
        for n, (name, at) in enumerate(self.places):
            if name == variant and event in (at, str(at)):
                return n
        errors = ErrorList()
        if variant not in self.variants:
            errors.add("variant", variant, "a variant of the campaign", tip=nearest(variant, self.variants))
        known = [str(e) for e in self.events]
        if str(event) not in known:
            errors.add("location", str(event), "an event of the campaign", tip=nearest(str(event), known))
        errors.raise_if_any()
        raise reject("place", (variant, str(event)), "a place of the campaign")

    def limit_at(self, event: Event) -> int:
        """Limit of the clearing time of an event, in microseconds."""
        return self.limit_us if isinstance(self.limit_us, int) else self.limit_us[event]

    def sensing_of(self, variant: str) -> Sensing:
        """The sensing of a variant."""
        return self.sensing[variant] if isinstance(self.sensing, Mapping) else self.sensing

    @cached_property
    def keys(self) -> Mapping[str, str]:
        """Digest of the plant and scheme of each variant."""
        return {name: digest((p.plant, p.scheme, self.sensing_of(name))) for name, p in self.variants.items()}

    def about(self) -> dict[str, object]:
        """Everything the counts depend on, as plain data; the numbers of trials and of a chunk are no part of it."""
        return {
            "variants": [[name, key] for name, key in self.keys.items()],
            "events": [_event_data(e) for e in self.events],
            "seed": self.seed if not self.failures else None,
            "failures": [list(names) for names in self.failures],
            "observe": sorted(self.observe),
            "dispatch": self.dispatch,
            "horizon_us": self.horizon_us,
            "versions": dict(versions()),
        }

    def work(self, place: int, first: int, end: int) -> Work:
        """A range of trials at a place, ready to be run."""
        variant, event = self.places[place]
        sets = self.failures[first:end] if self.failures else None
        return Work(
            place=place, key=self.keys[variant], event=event, first=first, end=end, seed=self.seed, failures=sets,
            observe=self.observe, dispatch=self.dispatch, horizon_us=self.horizon_us, versions=versions(),
        )  # fmt: skip

    def packed(self, place: int) -> bytes:
        """The scheme of a place, ready to travel."""
        variant = self.places[place][0]
        if variant not in self._packed:
            self._packed[variant] = packed(self.variants[variant], self.sensing_of(variant))
        return self._packed[variant]


def _event_data(event: Event) -> list[object]:
    return [event.section, event.position] if isinstance(event, Location) else [event.component]


def event_of(data: list[Any]) -> Event:
    """The event of the plain data in ``Campaign.about()["events"]``."""
    return Location(data[0], data[1]) if len(data) == 2 else NoFault(data[0])


def whole(errors: ErrorList, name: str, value: object, least: int) -> None:
    """Note a value that is no whole number, or less than the least."""
    if isinstance(value, bool) or not isinstance(value, int) or value < least:
        errors.add(name, value, f"a whole number of {least} or more")


def _check(c: Campaign) -> ErrorList:
    errors = ErrorList()
    for name, value, least in (("trials", c.trials, 0), ("seed", c.seed, 0), ("horizon_us", c.horizon_us, 0)):
        whole(errors, name, value, least)
    for name, items in (("variants", c.variants), ("events", c.events)):
        if not items:
            errors.add(name, "none", "at least one")
    if isinstance(c.sensing, Mapping) and (lacking := sorted(set(c.variants) - set(c.sensing))):
        errors.add("sensing", "none", f"one for each variant; {', '.join(lacking)} has none")
    if bool(c.failures) == bool(c.trials):
        got = f"{c.trials} trials and {len(c.failures)} failure sets"
        errors.add("campaign", got, "either trials or failure sets, one or more")
    programs = list(c.variants.values())
    for program in programs:
        dispatches = {d.name for d in program.plant.dispatches}
        if c.dispatch is not None and c.dispatch not in dispatches:
            errors.add("dispatch", c.dispatch, f"one of {sorted(dispatches)}", tip=nearest(c.dispatch, dispatches))
            break
    seen: dict[str, Event] = {}
    for event in c.events:
        if seen.setdefault(str(event), event) != event or list(c.events).count(event) > 1:
            errors.add("event", str(event), "each event once, and no two that print alike")
        _check_event(errors, event, programs)
        if not isinstance(c.limit_us, int) and event not in c.limit_us:
            errors.add("limit_us", "none", f"a limit for {event}")
        elif not isinstance(event, NoFault) or isinstance(c.limit_us, int):
            whole(errors, f"limit_us of {event}", c.limit_at(event), 0)
    questions = {q.name for p in programs for q in p.questions}
    possible = {f"{k.name}: {m}" for p in programs for k in p.scheme.components for m in MODES[k.kind]}
    for name in sorted({name for names in c.failures for name in names} - questions):
        tip = "its probability is nil or certain" if name in possible else nearest(name, questions)
        errors.add("failure", name, "the name of a question of a variant", tip=tip)
    gates = {b.name for p in programs for b in p.scheme.blocks if isinstance(b, Gate) and b.contact}
    for name in sorted(c.observe - gates):
        errors.add("observed output", name, "the name of a trip output of a variant", tip=nearest(name, gates))
    return errors


def _check_event(errors: ErrorList, event: Event, programs: list[Program]) -> None:
    if isinstance(event, NoFault):
        known = {k.name for p in programs for k in p.scheme.components}
        if any(event.component not in p.scheme.component for p in programs):
            tip = nearest(event.component, known)
            errors.add("component that trips with no fault", event.component, "a component of every variant", tip=tip)
    elif isinstance(event, Location):
        for p in programs:
            if event.section not in p.plant.section:
                errors.add("section", event.section, "a section", tip=nearest(event.section, p.plant.section))
                break
        if not 0.0 <= event.position <= 1.0:
            errors.add(f"position on {event.section!r}", event.position, "a number from 0 to 1")
    else:
        errors.add("event", event, "a Location or a NoFault")
