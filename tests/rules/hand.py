"""Small plants and short ways to write schemes whose clearing sequence is worked out by hand.

Times are in ms here and nowhere else in the tests of the rules.
"""

from __future__ import annotations

from collections.abc import Iterable, Set
from typing import Any

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case, bind
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Run
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import Event, LogicalSensing
from schemesim.plant.model import Device, DeviceKind, Location, Plant, PlantBuilder, Section, SectionKind, Source
from schemesim.scheme.conditions import Condition, Current
from schemesim.scheme.delays import Fixed
from schemesim.scheme.model import (
    Ask,
    Block,
    Breaker,
    CommonCause,
    Component,
    ComponentKind,
    Contact,
    FailureMode,
    Gate,
    Input,
    Probability,
    Role,
    Scheme,
    Sense,
    Timer,
)

FAILS = FailureMode.FAILURE_TO_OPERATE
LOST = FailureMode.LOST


def ms(value: float) -> Fixed:
    """A fixed time."""
    return Fixed(round(value * 1000))


def radial() -> Plant:
    """Source G - IN - CT - CB - bus B, and two feeders F1, F2 with a CB and a CT each (CT on the feeder side)."""
    b = PlantBuilder()
    b.add(Section(name="B", kind=SectionKind.BUS), Source(name="G", section="IN"))
    for name, load in (("IN", 0.0), ("F1", 10.0), ("F2", 5.0)):
        b.add(Section(name=name, kind=SectionKind.FEEDER, load_mw=load))
        b.add(Section(name=f"{name}.c", kind=SectionKind.CONDUCTOR))
        b.add(Device(name=f"{name}.CB", kind=DeviceKind.BREAKER, a="B", b=f"{name}.c"))
        b.add(Device(name=f"{name}.CT", kind=DeviceKind.CT, a=f"{name}.c", b=name, cores=("1", "2")))
    return b.build()


def parallel() -> Plant:
    """Sources GS at bus S and GR at bus R; lines L1, L2 of 100 km in parallel, ends a at S and b at R."""
    b = PlantBuilder()
    b.add(Section(name="S", kind=SectionKind.BUS), Section(name="R", kind=SectionKind.BUS))
    b.add(Source(name="GS", section="S"), Source(name="GR", section="R"))
    for line in ("L1", "L2"):
        b.add(Section(name=line, kind=SectionKind.LINE, length=100.0))
        for end, bus, at in (("a", "S", 0.0), ("b", "R", 1.0)):
            x = line + end
            b.add(Section(name=f"{x}.c", kind=SectionKind.CONDUCTOR))
            b.add(Device(name=f"{x}.CB", kind=DeviceKind.BREAKER, a=bus, b=f"{x}.c"))
            b.add(Device(name=f"{x}.CT", kind=DeviceKind.CT, a=f"{x}.c", b=line, b_at=at, cores=("1",)))
    return b.build()


def sense(name: str, condition: Condition | str, operate: float = 20, reset: float = 10) -> Sense:
    """A sense block; a text stands for current through that CT."""
    if isinstance(condition, str):
        condition = Current((condition,))
    return Sense(name=name, condition=condition, operate=ms(operate), reset=ms(reset))


def timer(name: str, item: Input, pick_up: float = 0, drop_out: float = 0) -> Timer:
    """A timer."""
    return Timer(name=name, input=item, pick_up=ms(pick_up), drop_out=ms(drop_out))


def gate(name: str, *inputs: Input, k: int = 1, unless: Iterable[Ask] = (), given: Iterable[Ask] = ()) -> Gate:
    """A gate that is no trip output."""
    return Gate(name=name, inputs=inputs, k=k, unless=tuple(unless), given=tuple(given))


def trip(
    name: str,
    *inputs: Input,
    k: int = 1,
    unless: Iterable[Ask] = (),
    given: Iterable[Ask] = (),
    role: Role = Role.MAIN,
) -> Gate:
    """A trip output with the same role for every fault."""
    contact = Contact("50", role, beyond=role)
    return Gate(name=name, inputs=inputs, k=k, unless=tuple(unless), given=tuple(given), contact=contact)


def breaker(name: str, *coils: str, opens: float = 50, auxiliary: float = 5, **more: Any) -> Breaker:
    """A breaker block."""
    return Breaker(name=name, coils=coils, interrupting=ms(opens), auxiliary=ms(auxiliary), **more)


def relay(name: str, p: Probability = 0.01) -> Component:
    """A relay that may fail to operate."""
    return Component(name, ComponentKind.RELAY, ((FAILS, p),))


def fails(name: str) -> tuple[Ask, ...]:
    """For ``unless``: this item fails to operate."""
    return (Ask(name, FAILS),)


def case(
    plant: Plant,
    blocks: Iterable[Block],
    components: Iterable[Component] = (),
    at: Event | str = "F1",
    *,
    causes: Iterable[CommonCause] = (),
    out: Set[str] = frozenset(),
    observe: Set[str] = frozenset(),
) -> Case:
    """Compile and bind; ``at`` is a section or an event."""
    scheme = Scheme(tuple(components), tuple(blocks), tuple(causes), frozenset(out))
    event = Location(at) if isinstance(at, str) else at
    return bind(compile_scheme(plant, scheme), event, LogicalSensing(), observe=observe)


def play(bound: Case, *yes: str, **more: Any) -> Run:
    """Run with the failures named and keep the log."""
    return run_event(bound, FixedAnswers(bound.program, yes), log=True, **more)


def openings(run: Run) -> dict[str, tuple[float, float]]:
    """Breaker -> (energised, opens), in ms."""
    return {o.breaker: (o.t_trip_us / 1000, o.t_open_us / 1000) for o in run.outcome.openings}


def asked(bound: Case, run: Run) -> list[str]:
    """Names of the questions asked, in order."""
    return [bound.questions[q].name for q, _ in run.asked]


def times(run: Run, subject: str, what: str) -> list[float]:
    """When something is said of a subject in the log, in ms."""
    return [row.t_us / 1000 for row in run.log if (row.subject, row.what) == (subject, what)]


def at(run: Run, subject: str, what: str) -> float:
    """The one time something is said of a subject in the log, in ms."""
    found = times(run, subject, what)
    if len(found) != 1:
        raise LookupError(f"{subject} {what}: {found} in {[(r.t_us, r.subject, r.what) for r in run.log]}")
    return found[0]
