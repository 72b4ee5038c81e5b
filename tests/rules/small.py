"""Small plants of invented places, and a short way to play one event on them.

The chain, used by most rule tests (CTs on both sides of each breaker unless told otherwise):

    G1 - [Alder.B1] -- L1, 100 km -- [Birch.B1] -- L2, 100 km -- [Cedar.B1] - G3
                                         |
                                         F2 (load)

Standard times in ms: relays operate in 20 and reset in 15; lockout 10; breakers 50, auxiliary
contact 5 more; channel 15; breaker-failure timer 150, its detector picks up in 5 and drops out
in 20; zone 2 reaches 120 km in 350, zone 3 220 km in 1000; zone 1 reaches 80 km.
"""

from __future__ import annotations

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import bind
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Run
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import Event, LogicalSensing, NoFault
from schemesim.plant.layouts import Bay, CtPlacement, feeder, generator, line, single_bus
from schemesim.plant.model import Location, Plant, PlantBuilder
from schemesim.scheme.dress import dress
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import Scheme
from schemesim.scheme.policy import Policy

NO_RATES = FailureData(no_fault_per_yr={})
"""The usual modes, and no relay that trips with no fault."""


def chain(*, ct: CtPlacement = CtPlacement.BOTH, g3: bool = True) -> Plant:
    """The chain of three stations; without ``g3`` nothing feeds from Cedar."""
    b = PlantBuilder()
    generator(b, "G1", station="Alder")
    line(b, "L1", 100.0)
    line(b, "L2", 100.0)
    feeder(b, "F2", 30.0, station="Birch")
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1")])
    single_bus(b, "Birch", [Bay("L1", "L1", at=1.0, ct=ct), Bay("L2", "L2"), Bay("F2", "F2")])
    cedar = [Bay("L2", "L2", at=1.0)]
    if g3:
        generator(b, "G3", station="Cedar")
        cedar.append(Bay("G3", "G3"))
    single_bus(b, "Cedar", cedar)
    return b.build()


def at(place: str) -> Event:
    """A fault by ``"L1@0.9"`` or ``"Birch.B1"``; a trip with no fault by ``"!Alder/L1/relay 1"``."""
    if place.startswith("!"):
        return NoFault(place[1:])
    section, _, position = place.partition("@")
    return Location(section, float(position or 0.5))


def play_program(program: Program, place: str, *yes: str, log: bool = True) -> Run:
    """One run in which the failures named happen."""
    return run_event(bind(program, at(place), LogicalSensing()), FixedAnswers(program, yes), log=log)


def play(
    plant: Plant,
    policy: Policy | Scheme,
    place: str,
    *yes: str,
    data: FailureData | None = None,
    out: frozenset[str] = frozenset(),
) -> Run:
    """Dress a plant and play one event in which the failures named happen."""
    scheme = policy
    if isinstance(scheme, Policy):
        scheme = dress(plant, scheme, data, out_of_service=out)
    return play_program(compile_scheme(plant, scheme), place, *yes)


def opened(run: Run) -> dict[str, int]:
    """When each breaker (or unit) opened, in microseconds."""
    return {o.breaker: o.t_open_us for o in run.outcome.openings}


def roles(run: Run) -> dict[str, str]:
    """In which role each was tripped."""
    return {o.breaker: o.role.label for o in run.outcome.openings}


def via(run: Run, breaker: str) -> str:
    """The trip output that tripped a breaker."""
    return next(o.via for o in run.outcome.openings if o.breaker == breaker)


def margin(run: Run, subject: str) -> int:
    """What was left on a timer when it was stopped, in microseconds."""
    (row,) = [r for r in run.log if r.subject == subject and r.margin_us is not None]
    assert row.margin_us is not None
    return row.margin_us


def asked(program: Program, run: Run) -> set[str]:
    """Names of the questions a run asked."""
    return {program.questions[q].name for q, _ in run.asked}
