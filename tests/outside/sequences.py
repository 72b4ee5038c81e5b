"""Whole clearing sequences of the small plants, in milliseconds, and what they take out of service."""

from __future__ import annotations

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case, bind
from schemesim.engine.electrical import ElectricalSensing
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Run
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.plant.layouts import (
    Bay,
    breaker_and_a_half,
    double_bus,
    generator,
    line,
    ring,
    sectionalised_bus,
    single_bus,
)
from schemesim.plant.model import Plant, PlantBuilder, SectionKind
from schemesim.scheme.dress import dress
from schemesim.scheme.policy import Policy
from schemesim.scheme.settings_rules import settings_for
from schemesim.study.losses import lost
from tests.rules.small import at

NOT_CLEARED = -1.0
FAR = {"L1": "East", "L2": "North", "L3": "South", "L4": "West"}


def played(plant: Plant, policy: Policy, place: str, *failed: str) -> tuple[Case, Run]:
    """A plant dressed and one fault played on it."""
    case = bind(compile_scheme(plant, dress(plant, policy)), at(place), LogicalSensing())
    return case, run_event(case, FixedAnswers(case.program, failed))


def openings(plant: Plant, policy: Policy, place: str, *failed: str) -> dict[str, float]:
    """When each breaker opens in ms, and ``cleared`` (less than nothing: never)."""
    return in_ms(played(plant, policy, place, *failed)[1])


def in_ms(run: Run) -> dict[str, float]:
    """Openings of a run and its clearing time."""
    cleared = run.outcome.t_clear_us
    found = {o.breaker: o.t_open_us / 1000 for o in run.outcome.openings}
    return found | {"cleared": NOT_CLEARED if cleared is None else cleared / 1000}


def clearing(plant: Plant, policy: Policy, place: str, *failed: str) -> float:
    """When the fault is cleared, in ms."""
    return openings(plant, policy, place, *failed)["cleared"]


def hub(layout: str, **keywords: object) -> Plant:
    """Dale, of a layout, with L1 to L4 of 60 km to four stations of one bus with a generator each."""
    b = PlantBuilder()
    for name, station in FAR.items():
        line(b, name, 60.0)
        generator(b, f"G{name[1]}", station=station)
        single_bus(b, station, [Bay(name, name, at=1.0), Bay(f"G{name[1]}", f"G{name[1]}")])
    build = {
        "single bus": single_bus,
        "sectionalised bus": sectionalised_bus,
        "double bus": double_bus,
        "ring": ring,
        "breaker and a half": breaker_and_a_half,
    }[layout]
    build(b, "Dale", [Bay(name, name) for name in FAR], **keywords)  # type: ignore[arg-type]  # those of the layout
    return b.build()


def star() -> Plant:
    """The chain with a third line, of 60 km, from Birch to Dale, which feeds in."""
    b = PlantBuilder()
    line(b, "L3", 60.0)
    for name, length in (("L1", 100.0), ("L2", 100.0)):
        line(b, name, length)
    ends = (("G1", "Alder", 0.0, "L1"), ("G3", "Cedar", 1.0, "L2"), ("G4", "Dale", 1.0, "L3"))
    for unit, station, end, circuit in ends:
        generator(b, unit, station=station)
        single_bus(b, station, [Bay(circuit, circuit, at=end), Bay(unit, unit)])
    single_bus(b, "Birch", [Bay("L1", "L1", at=1.0), Bay("L2", "L2"), Bay("L3", "L3")])
    return b.build()


def measured(plant: Plant, policy: Policy, place: str, *failed: str) -> dict[str, float]:
    """As ``openings``, for a three-phase fault by computed currents, elements set by the rules of the project."""
    scheme = dress(plant, policy)
    sensing = ElectricalSensing(settings_for(plant, scheme))
    case = bind(compile_scheme(plant, scheme), at(place), sensing)
    return in_ms(run_event(case, FixedAnswers(case.program, failed)))


def tripped_at_dale(layout: str, policy: Policy, place: str, *failed: str) -> frozenset[str]:
    """Breakers opened at the station of the layout, short names."""
    _, run = played(hub(layout), policy, place, *failed)
    return frozenset(b.removeprefix("Dale.") for b in run.outcome.tripped if b.startswith("Dale."))


def circuits_out(layout: str, policy: Policy, place: str, *failed: str) -> frozenset[str]:
    """Lines and buses of the station out of service in the end: dead, or joined to nothing else at the station."""
    case, run = played(hub(layout), policy, place, *failed)
    plant, opened = case.program.plant, run.outcome.tripped
    _, dead = lost(case, run.final_mask)
    buses = {s.name for s in plant.sections if s.kind is SectionKind.BUS and s.station == "Dale"}
    out = (buses | FAR.keys()) & set(dead)
    for name in FAR:
        if not joined_at_dale(plant, opened, name) & (buses | FAR.keys()) - {name}:
            out.add(name)
    return frozenset(s.removeprefix("Dale.") for s in out)


def joined_at_dale(plant: Plant, opened: frozenset[str], start: str) -> set[str]:
    """Sections joined to one by closed devices of the station."""
    seen, todo = {start}, [start]
    while todo:
        here = todo.pop()
        for d in plant.at_section[here]:
            other = d.b if d.a == here else d.a
            if d.closed and d.station == "Dale" and d.name not in opened and other not in seen:
                seen.add(other)
                todo.append(other)
    return seen
