"""Sensing: which conditions hold for a fault, with some breakers open.

The seam between the engines and what elements measure. Logical sensing decides on
the graph of the plant (rules R8, R9, R15); another sensing may compute currents and
voltages, so long as its answers depend on the topology and never on the history.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence, Set
from dataclasses import dataclass
from functools import lru_cache
from typing import Protocol, runtime_checkable

from schemesim.engine.program import Program
from schemesim.plant.current import Neighbourhood
from schemesim.plant.grid import Grid, grid_of
from schemesim.plant.model import Location
from schemesim.plant.paths import lengths, within
from schemesim.scheme.conditions import (
    Always,
    Condition,
    Current,
    Direction,
    External,
    InZone,
    NoFaultTrip,
    OutOfZone,
    Reach,
    Undervoltage,
)
from schemesim.scheme.model import Sense


@dataclass(frozen=True, slots=True, order=True)
class NoFault:
    """An initiating event without a fault: this component trips (rule R18)."""

    component: str

    def __str__(self) -> str:
        return f"no fault, {self.component} trips"


Event = Location | NoFault


class Sensed(Protocol):
    """What a sensing knows about one event; answers depend on the topology only."""

    def state(self, opened: Set[str]) -> tuple[tuple[bool, ...], bool]:
        """Truth of each condition in the order bound, and whether a closed path feeds the fault."""

    def lost(self, opened: Set[str]) -> tuple[float, tuple[str, ...]]:
        """Load (MW) and sections cut off from every source."""


@runtime_checkable
class Measures(Protocol):
    """What a sensing that knows currents and voltages tells besides :class:`Sensed`."""

    def measured(self, opened: Set[str]) -> tuple[tuple[float, ...], tuple[bool, ...]]:
        """Quantity ÷ pick-up of each condition in the order bound, and whether it is held.

        A condition between drop-out and pick-up is held: it stays as it was (false before
        the event), and an inverse-time element stands still. The multiple is 0 where a
        condition measures nothing.
        """


class Sensing(Protocol):
    """Decides conditions; one object serves every event of a program."""

    def candidates(self, program: Program, event: Event, dispatch: str | None) -> list[int]:
        """Sense blocks that may pick up for this event in some topology (a superset will do).

        Blocks whose condition may hold anywhere (the program's ``free``) are left out.
        """

    def bind(
        self,
        program: Program,
        event: Event,
        dispatch: str | None,
        conditions: Sequence[Condition],
        openable: Iterable[str],
    ) -> Sensed:
        """Prepare to answer these conditions for this event while these devices may open."""


@runtime_checkable
class BindsSenses(Protocol):
    """A sensing with settings of its own for each sense block; it is asked to bind blocks, not conditions."""

    def bind_senses(
        self,
        program: Program,
        event: Event,
        dispatch: str | None,
        senses: Sequence[Sense],
        openable: Iterable[str],
    ) -> Sensed:
        """As :meth:`Sensing.bind`, for the conditions of these blocks."""


def bind_sensing(
    sensing: Sensing,
    program: Program,
    event: Event,
    dispatch: str | None,
    senses: Sequence[Sense],
    openable: Iterable[str],
) -> Sensed:
    """Bind a sensing of either sort to sense blocks."""
    if isinstance(sensing, BindsSenses):
        return sensing.bind_senses(program, event, dispatch, senses, openable)
    return sensing.bind(program, event, dispatch, [b.condition for b in senses], openable)


class LogicalSensing:
    """Sensing by connectivity, reach and direction on the graph of the plant."""

    def __repr__(self) -> str:
        return "LogicalSensing()"

    def candidates(self, program: Program, event: Event, dispatch: str | None) -> list[int]:  # noqa: ARG002
        """See :class:`Sensing`; openings only lengthen paths, so what is out of reach stays so."""
        senses = _senses(program)
        if isinstance(event, NoFault):
            return senses.no_fault.get(event.component, [])
        found = set(senses.by_section.get(event.section, ()))
        if senses.by_point:
            near = program.paths.distances(event, frozenset(), senses.longest)
            for point, distance in near.items():
                for i, reach in senses.by_point.get(point, ()):
                    if within(distance, reach):
                        found.add(i)
        return sorted(found)

    def bind(
        self,
        program: Program,
        event: Event,
        dispatch: str | None,
        conditions: Sequence[Condition],
        openable: Iterable[str],
    ) -> Sensed:
        """See :class:`Sensing`."""
        return _LogicallySensed(program, event, dispatch, tuple(conditions), tuple(openable))


@dataclass(frozen=True)
class _Senses:
    by_section: Mapping[str, list[int]]
    by_point: Mapping[tuple[str, float], list[tuple[int, float]]]
    no_fault: Mapping[str, list[int]]
    longest: float


@lru_cache(maxsize=4)
def _senses(program: Program) -> _Senses:
    """Index of the sense blocks by where they look, made once for a program."""
    by_section: dict[str, list[int]] = {}
    by_point: dict[tuple[str, float], list[tuple[int, float]]] = {}
    no_fault: dict[str, list[int]] = {}
    longest = 0.0
    for i, b in enumerate(program.blocks):
        if not isinstance(b, Sense):
            continue
        match b.condition:
            case InZone(sections=sections):
                for s in sections:
                    by_section.setdefault(s, []).append(i)
            case Reach(terminals=terminals, reach=reach):
                longest = max(longest, reach)
                for t in terminals:
                    by_point.setdefault(program.paths.point(t.ct, t.inner), []).append((i, reach))
            case Undervoltage(section=section, reach=reach):
                longest = max(longest, reach)
                for point in program.paths.points_of(section):
                    by_point.setdefault(point, []).append((i, reach))
            case NoFaultTrip(component=component):
                no_fault.setdefault(component, []).append(i)
    return _Senses(by_section, by_point, no_fault, longest)


@lru_cache(maxsize=4)
def _grid(program: Program, dispatch: str | None, loads: bool) -> Grid:
    """The plant divided into parts, made once for a program and dispatch state."""
    return grid_of(program.plant, dispatch, loads=loads)


class _LogicallySensed:
    def __init__(
        self,
        program: Program,
        event: Event,
        dispatch: str | None,
        conditions: tuple[Condition, ...],
        openable: tuple[str, ...],
    ) -> None:
        self.program, self.event, self.wanted = program, event, conditions
        plant = program.plant
        measured = {name for c in conditions for name in _devices_of(c)}
        fault = event.section if isinstance(event, Location) else None
        idle: set[str] = set()
        if fault is not None:
            own = program.zones.members[program.zones.of[fault]]
            idle = {s.name for s in plant.sources if s.section in own and not s.feeds_own_zone}
        grid = _grid(program, dispatch, fault is None)
        self.around = Neighbourhood(plant, fault, measured.union(openable), dispatch, idle, grid)
        reaches = [c.reach for c in conditions if isinstance(c, Reach | Undervoltage)]
        self.cutoff = max(reaches, default=0.0)
        self.needs_paths = bool(reaches) and fault is not None

    def state(self, opened: Set[str]) -> tuple[tuple[bool, ...], bool]:
        supply = self.around.supply(opened)
        paths: dict[tuple[str, float], int] = {}
        if self.needs_paths and isinstance(self.event, Location):
            paths = self.program.paths.distances(self.event, opened, self.cutoff)
        return tuple(self._holds(c, supply.carrying, paths) for c in self.wanted), supply.fed

    def lost(self, opened: Set[str]) -> tuple[float, tuple[str, ...]]:
        return self.around.lost(opened)

    def _holds(
        self, condition: Condition, carrying: Set[str], paths: Mapping[tuple[str, float], int]
    ) -> bool:
        event = self.event
        match condition:
            case Current(devices=devices):
                return any(d in carrying for d in devices)
            case InZone(sections=sections, cts=cts):
                inside = isinstance(event, Location) and event.section in sections
                return inside and any(ct in carrying for ct in cts)
            case OutOfZone(sections=sections, ct=ct):
                inside = isinstance(event, Location) and event.section in sections
                return not inside and ct in carrying
            case Reach():
                return isinstance(event, Location) and _reaches(self.program, condition, carrying, paths)
            case Undervoltage(section=section, reach=reach):
                points = self.program.paths.points_of(section)
                return any(p in paths and within(paths[p], reach) for p in points)
            case NoFaultTrip(component=component):
                return isinstance(event, NoFault) and event.component == component
            case Always():
                return True
            case External():
                return False


def _reaches(
    program: Program, condition: Reach, carrying: Set[str], paths: Mapping[tuple[str, float], int]
) -> bool:
    """Within reach and in direction: the nearer side of the CTs tells where the fault lies.

    A fault as near by the way ahead as by the way behind (over a parallel line) counts as ahead:
    the current that flows says so, and only the number of devices passed says otherwise.
    """
    if not any(t.ct in carrying for t in condition.terminals):
        return False
    far = 1 << 62
    inner = outer = far
    for t in condition.terminals:
        d = program.plant.device[t.ct]
        other = d.b if d.a == t.inner else d.a
        inner = min(inner, paths.get(program.paths.point(t.ct, t.inner), far))
        outer = min(outer, paths.get(program.paths.point(t.ct, other), far))
    near = min(inner, outer)
    if condition.direction is Direction.BOTH or not within(near, condition.reach):
        return within(near, condition.reach)
    ahead = inner < outer
    if outer <= inner:
        ways = (paths[p] + w for p, w in program.paths.ahead(condition.terminals) if p in paths)
        ahead = any(lengths(way) == lengths(outer) for way in ways)
    return ahead if condition.direction is Direction.FORWARD else not ahead and outer < inner


def _devices_of(condition: Condition) -> tuple[str, ...]:
    match condition:
        case Current(devices=devices):
            return devices
        case InZone(cts=cts):
            return cts
        case OutOfZone(ct=ct):
            return (ct,)
        case Reach(terminals=terminals):
            return tuple(t.ct for t in terminals)
        case _:
            return ()
