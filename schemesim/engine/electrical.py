"""Electrical sensing: elements see what they would measure (rules R8 to R10 and R15).

Answers the same conditions as logical sensing, from computed currents and voltages and the
settings of each block. What it says depends on the topology only.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence, Set
from dataclasses import replace
from functools import lru_cache

from schemesim.engine.program import Program
from schemesim.engine.sensing import Event, LogicalSensing, NoFault, Sensed
from schemesim.errors import ErrorList, nearest, reject
from schemesim.plant.current import Neighbourhood
from schemesim.plant.model import Location
from schemesim.plant.net_case import FaultedNetwork, FaultType, Network, ShuntFault, Solution
from schemesim.plant.paths import within
from schemesim.scheme.conditions import (
    Always,
    Condition,
    Direction,
    External,
    InZone,
    NoFaultTrip,
    Reach,
    Undervoltage,
)
from schemesim.scheme.model import Sense
from schemesim.scheme.phasor_distance import Distance
from schemesim.scheme.phasor_elements import Element, Overcurrent
from schemesim.scheme.phasor_quantities import Quantities
from schemesim.scheme.settings import Setting, Settings
from schemesim.scheme.settings_data import NetworkOf
from schemesim.scheme.settings_rules import settings_for

_NEAR = 0.3
"""A block may pick up in some topology if, whatever its direction, it measures this share of its setting at first."""

_LONGER = 2.5
"""... or if the fault lies within this multiple of its reach along the lines."""

_KEPT = 8
"""Programs whose settings by rule are kept."""


class ElectricalSensing:
    """Sensing by computed currents and voltages.

    Parameters
    ----------
    settings : Settings or None
        An element for every sense block that measures; None chooses them by rule for each program it
        is asked about (:func:`schemesim.scheme.settings_rules.settings_for`), so that it serves every variant.
    fault : FaultType
        What kind of fault the locations of a study have.
    resistance_ohm : float
        Fault resistance.
    network : NetworkOf or None
        Makes the network equations of a plant and dispatch state; those of
        :mod:`schemesim.plant.net_faults` by default.
    everywhere : bool
        Take every block for one that may pick up. Else it is those that measure near their setting
        at first, or have the fault within two and a half times their reach: a superset of what picks
        up in practice, not by proof, which keeps a case to its neighbourhood.

    Notes
    -----
    Faults are computed without load, so an event without a fault (rule R18) is left to
    logical sensing, where load current counts for current detectors.

    Examples
    --------
    ``bind(program, Location("L1", 0.5), ElectricalSensing(settings_for(plant, scheme), fault="lg"))``
    """

    def __init__(
        self,
        settings: Settings | None = None,
        *,
        fault: FaultType | str = FaultType.LLL,
        resistance_ohm: float = 0.0,
        network: NetworkOf | None = None,
        everywhere: bool = False,
    ) -> None:
        known = [str(kind) for kind in FaultType]
        if fault not in known:
            raise reject("fault", fault, f"one of {known}", tip=nearest(str(fault), known))
        if network is None:
            from schemesim.plant.net_faults import network_of  # heavy: scipy, only where currents are wanted

            network = network_of
        self.settings, self.fault, self.resistance_ohm = settings, FaultType(fault), resistance_ohm
        self.everywhere = everywhere
        self._network_of = network
        self._networks: dict[tuple[int, str | None], tuple[object, Network]] = {}
        self._chosen: dict[int, tuple[Program, Settings]] = {}
        self._logical = LogicalSensing()

    def __repr__(self) -> str:
        kind = f"{self.fault}" + (f", {self.resistance_ohm:g} ohm" if self.resistance_ohm else "")
        elements = "settings by rule" if self.settings is None else f"{len(self.settings.items)} elements"
        return f"ElectricalSensing({elements}, {kind})"

    def __getstate__(self) -> dict[str, object]:
        """Without the equations and what was chosen by rule: they are made anew where it is unpickled."""
        return {**self.__dict__, "_networks": {}, "_chosen": {}}

    def settings_of(self, program: Program) -> Settings:
        """The settings a program is measured with; those chosen by rule are kept for the last few programs.

        Raises
        ------
        InputError
            If they are chosen by rule and the plant lacks an impedance or a VT.
        """
        if self.settings is not None:
            return self.settings
        found = self._chosen.get(id(program))
        if found is None:
            chosen = settings_for(program.plant, program.scheme, network=self._network_of)
            while len(self._chosen) >= _KEPT:
                del self._chosen[next(iter(self._chosen))]
            found = self._chosen[id(program)] = program, chosen
        return found[1]

    def network(self, program: Program, dispatch: str | None) -> Network:
        """The network equations of a program's plant, made once for each dispatch state."""
        key = (id(program.plant), dispatch)
        if key not in self._networks:
            self._networks[key] = program.plant, self._network_of(program.plant, dispatch)
        return self._networks[key][1]

    def candidates(self, program: Program, event: Event, dispatch: str | None) -> list[int]:
        """See :class:`schemesim.engine.sensing.Sensing`."""
        if isinstance(event, NoFault):
            return self._logical.candidates(program, event, dispatch)
        settings = self.settings_of(program)
        blocks, ways = _set_blocks(program, settings), _both_ways(program, settings)
        counted = [(i, b) for i, b, s in blocks if s.counts(event.section)]
        if self.everywhere:
            return [i for i, _ in counted]
        longest = max((_reach_of(b.condition) for _, b in counted), default=0.0) * _LONGER
        near = program.paths.distances(event, frozenset(), longest)
        faulted = self.network(program, dispatch).at(self._shunt(event))
        prepare(faulted, settings.cts)
        quantities = self._quantities(program, dispatch, faulted.solve(_idle(program, event)))
        found = []
        for i, b in counted:
            c = b.condition
            if isinstance(c, InZone) and event.section not in c.sections:
                continue
            within_reach = isinstance(c, Reach) and any(
                program.paths.point(t.ct, side) in near
                and within(near[program.paths.point(t.ct, side)], _LONGER * c.reach)
                for t in c.terminals
                for side in (program.plant.device[t.ct].a, program.plant.device[t.ct].b)
            )
            missing = settings.of[b.name].missing
            if within_reach or ways[i].multiple(quantities.without(missing)) >= _NEAR:
                found.append(i)
        return found

    def bind(
        self,
        program: Program,
        event: Event,
        dispatch: str | None,
        conditions: Sequence[Condition],
        openable: Iterable[str],
    ) -> Sensed:
        """See :class:`schemesim.engine.sensing.Sensing`; a condition stands for the first block that has it."""
        by_condition: dict[Condition, Sense] = {}
        for b in program.blocks:
            if isinstance(b, Sense):
                by_condition.setdefault(b.condition, b)
        missing = [c for c in conditions if c not in by_condition]
        if missing:
            raise reject("conditions", missing, "those of blocks of the program")
        return self.bind_senses(program, event, dispatch, [by_condition[c] for c in conditions], openable)

    def bind_senses(
        self,
        program: Program,
        event: Event,
        dispatch: str | None,
        senses: Sequence[Sense],
        openable: Iterable[str],
    ) -> Sensed:
        """As ``bind``, for sense blocks: each is measured by its own setting."""
        if isinstance(event, NoFault):
            return self._logical.bind(program, event, dispatch, [b.condition for b in senses], openable)
        of = self.settings_of(program).of
        _set_blocks(program, self.settings_of(program))
        errors = ErrorList()
        for b in senses:
            if b.name not in of and not isinstance(b.condition, Always | External | NoFaultTrip):
                tip = nearest(b.name, of)
                errors.add("settings", b.name, "an element for every block that measures", tip=tip)
        errors.raise_if_any()
        return _Computed(self, program, event, dispatch, tuple(senses), tuple(openable))

    def _shunt(self, event: Location) -> ShuntFault:
        return ShuntFault(event, self.fault, self.resistance_ohm)

    def _quantities(self, program: Program, dispatch: str | None, solution: Solution) -> Quantities:
        return Quantities(program.plant, solution, self.network(program, dispatch).prefault())


class _Computed:
    """One event bound: what its elements measure in each topology."""

    def __init__(
        self,
        sensing: ElectricalSensing,
        program: Program,
        event: Location,
        dispatch: str | None,
        senses: tuple[Sense, ...],
        openable: tuple[str, ...],
    ) -> None:
        self.sensing, self.program, self.event, self.dispatch = sensing, program, event, dispatch
        self.openable = openable
        self.idle = _idle(program, event)
        self.faulted = sensing.network(program, dispatch).at(sensing._shunt(event))
        of = sensing.settings_of(program).of
        self.elements: tuple[Element | bool, ...] = tuple(
            of[b.name].element
            if b.name in of and of[b.name].counts(event.section)
            else isinstance(b.condition, Always)
            for b in senses
        )
        self.missing = tuple(of[b.name].missing if b.name in of else frozenset[str]() for b in senses)
        self._last: tuple[frozenset[str], Solution, tuple[float, ...]] | None = None
        self._around: Neighbourhood | None = None

    def _solved(self, opened: Set[str]) -> tuple[Solution, tuple[float, ...]]:
        names = frozenset(opened)
        if self._last is None or self._last[0] != names:
            solution = self.faulted.solve(names | self.idle)
            q = self.sensing._quantities(self.program, self.dispatch, solution)
            seen = {names: q.without(names) for names in set(self.missing)}
            multiples = tuple(
                float(e) if isinstance(e, bool) else e.multiple(seen[missing])
                for e, missing in zip(self.elements, self.missing, strict=True)
            )
            self._last = names, solution, multiples
        return self._last[1], self._last[2]

    def state(self, opened: Set[str]) -> tuple[tuple[bool, ...], bool]:
        """See :class:`schemesim.engine.sensing.Sensed`."""
        solution, multiples = self._solved(opened)
        return tuple(m >= 1.0 for m in multiples), solution.fed

    def measured(self, opened: Set[str]) -> tuple[tuple[float, ...], tuple[bool, ...]]:
        """See :class:`schemesim.engine.sensing.Measures`."""
        multiples = self._solved(opened)[1]
        held = tuple(
            not isinstance(e, bool) and e.drop_out <= m < 1.0 for e, m in zip(self.elements, multiples, strict=True)
        )
        return multiples, held

    def lost(self, opened: Set[str]) -> tuple[float, tuple[str, ...]]:
        """See :class:`schemesim.engine.sensing.Sensed`; by the graph of the plant."""
        if self._around is None:
            idle = self.idle
            self._around = Neighbourhood(
                self.program.plant, self.event.section, self.openable, self.dispatch, idle
            )
        return self._around.lost(opened)


def prepare(faulted: FaultedNetwork, devices: frozenset[str]) -> None:
    """Have a network make known at once what some devices will be asked for, where it can: a saving of time only."""
    known = getattr(faulted, "prepare", None)
    if known is not None:
        known(devices)


def _idle(program: Program, event: Location) -> frozenset[str]:
    """Sources that feed nothing into a fault in their own isolation zone."""
    own = program.zones.members[program.zones.of[event.section]]
    return frozenset(s.name for s in program.plant.sources if s.section in own and not s.feeds_own_zone)


@lru_cache(maxsize=4)
def _set_blocks(program: Program, settings: Settings) -> tuple[tuple[int, Sense, Setting], ...]:
    """Sense blocks of a program that have a setting; settings that fit nothing are refused."""
    settings.check(program.plant, program.scheme)
    of = settings.of
    return tuple(
        (i, b, of[b.name]) for i, b in enumerate(program.blocks) if isinstance(b, Sense) and b.name in of
    )


@lru_cache(maxsize=4)
def _both_ways(program: Program, settings: Settings) -> dict[int, Element]:
    """The element of each block, looking both ways."""
    return {i: _either_way(s.element) for i, _, s in _set_blocks(program, settings)}


def _reach_of(condition: Condition) -> float:
    return condition.reach if isinstance(condition, Reach | Undervoltage) else 0.0


def _either_way(element: Element) -> Element:
    """The same element, looking both ways."""
    if isinstance(element, Distance):
        return replace(element, direction=Direction.BOTH)
    if isinstance(element, Overcurrent) and element.looking is not None:
        return replace(element, looking=None)
    return element
