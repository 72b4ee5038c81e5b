"""A case: one initiating event bound to a program, cut down to what it can reach.

Only blocks that may become true for this event and lead to a breaker that may open
(or to an output the study observes) are kept, so a case costs its neighbourhood and
not the size of the grid. Inputs that cannot change are folded into the gates.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping, Set
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, NamedTuple

import networkx as nx

from schemesim.engine.cut import (
    NOTHING,
    BreakerAsk,
    backward,
    breaker_asks,
    fixed_us,
    kept_inputs,
    numbered_asks,
    off_delay,
    on_delay,
    rank_of,
    reach_mask,
    readers,
    shut_before,
)
from schemesim.engine.inverse import rate_of
from schemesim.engine.program import Kind, Program, Question, spread
from schemesim.engine.sensing import Event, Measures, NoFault, Sensed, Sensing, bind_sensing
from schemesim.errors import nearest, reject
from schemesim.plant.model import Location
from schemesim.plant.zones import Duty, duty
from schemesim.scheme.curves import Curve
from schemesim.scheme.delays import Delay
from schemesim.scheme.model import Breaker, Contact, Gate, Sense
from schemesim.ticks import looks_like_percent


@dataclass(frozen=True, slots=True)
class Topology:
    """What a set of open breakers means for the case: conditions by sense block, fault fed or not.

    A sense block whose quantity lies between drop-out and pick-up is not in ``holds``: it stays as
    it was. ``rates`` has the speed of every inverse-time block (rule R10).
    """

    holds: tuple[tuple[int, bool], ...]
    fed: bool
    rates: tuple[tuple[int, int], ...] = ()


class AtRest(NamedTuple):
    """The state before the event, where it needs no answer: kept once for all runs of a case."""

    value: tuple[int, ...]
    rank: tuple[int, ...]
    shown: tuple[bool, ...]
    open: frozenset[int]
    touched: frozenset[int]


@dataclass(frozen=True, eq=False, repr=False)
class Case:
    """An event bound to a program. Indices are local to the case, in the program's order.

    Attributes
    ----------
    names, kind, inputs, consumers, order
        As in the program (``gate_readers``, ``sink_readers`` and ``coil_readers`` are the gates,
        the blocks that hold state, and the breakers among the consumers); ``inputs`` hold only signals that can change.
    k : tuple of int
        How many inputs a gate still needs.
    unless, given : tuple of tuple of int
        Ask numbers of each gate.
    asks : tuple of tuple of int
        For each ask number the questions that bring it (indices into the program's).
    certain : tuple of (bool or None)
        For each ask number its verdict where no question is needed.
    settles : mapping of question to the ask numbers it bears on
    gates_asking : tuple of tuple of int
        For each ask number the gates that depend on it.
    rank : tuple of int
        Role of each contact for this event (0 for other blocks).
    on, off : tuple of Delay
        Operate and reset, pick-up and drop-out, interrupting and auxiliary delays; ``fixed`` has
        the microseconds of those that are not random (off first, then on).
    breakers : tuple of int
        Blocks of breakers that may open.
    reach_mask : tuple of int
        For each block the breakers (bit = place in ``breakers``) and observed outputs (the
        bits above) that its output may still influence.
    shelf : dict
        What an engine keeps with the case to find it faster another time; never part of the case.
    inverse : mapping of int to Curve
        Sense blocks whose operate time is inverse; their ``on`` delay is nothing.
    """

    program: Program
    event: Event
    dispatch: str | None
    duty: Duty
    sensed: Sensed
    names: tuple[str, ...]
    kind: tuple[Kind, ...]
    inputs: tuple[tuple[tuple[int, bool], ...], ...]
    consumers: tuple[tuple[int, ...], ...]
    gate_readers: tuple[tuple[int, ...], ...]
    sink_readers: tuple[tuple[int, ...], ...]
    coil_readers: tuple[tuple[int, ...], ...]
    order: tuple[int, ...]
    k: tuple[int, ...]
    unless: tuple[tuple[int, ...], ...]
    given: tuple[tuple[int, ...], ...]
    asks: tuple[tuple[int, ...], ...]
    certain: tuple[bool | None, ...]
    settles: Mapping[int, tuple[int, ...]]
    gates_asking: tuple[tuple[int, ...], ...]
    rank: tuple[int, ...]
    contacts: tuple[Contact | None, ...]
    on: tuple[Delay, ...]
    off: tuple[Delay, ...]
    fixed: tuple[tuple[int | None, ...], tuple[int | None, ...]]
    senses: tuple[int, ...]
    breakers: tuple[int, ...]
    breaker_asks: tuple[tuple[BreakerAsk, ...], ...]
    closable: tuple[bool, ...]
    coils: Mapping[int, int]
    observed: tuple[int, ...]
    reach_mask: tuple[int, ...]
    index: Mapping[str, int]
    inverse: Mapping[int, Curve] = field(default_factory=dict)
    at_rest: list[AtRest] = field(default_factory=list)
    shelf: dict[str, Any] = field(default_factory=dict)
    _topologies: dict[int, Topology] = field(default_factory=dict)
    _changes: dict[tuple[int, int], tuple[tuple[int, bool], ...]] = field(default_factory=dict)

    def __repr__(self) -> str:
        return f"Case({self.event}: {len(self.names)} blocks, {len(self.breakers)} breakers that may open)"

    def __getstate__(self) -> dict[str, object]:
        """What goes to another process: not the states met so far, which are found again."""
        return {**self.__dict__, "shelf": {}}

    @property
    def questions(self) -> tuple[Question, ...]:
        """Questions of the program; answers use their indices."""
        return self.program.questions

    @cached_property
    def random(self) -> bool:
        """Whether any delay of the case is random."""
        blocks = (self.program.scheme.block[name] for name in self.names)
        more = [d for b in blocks if isinstance(b, Breaker) for d in (b.late_by, b.closing) if d is not None]
        return None in self.fixed[0] or None in self.fixed[1] or not all(d.is_fixed for d in more)

    def topology(self, open_mask: int) -> Topology:
        """Conditions and supply with some of the case's breakers open; computed once for each set."""
        known = self._topologies.get(open_mask)
        if known is None:
            opened = self.opened(open_mask)
            holds, fed = self.sensed.state(opened)
            pairs = tuple(zip(self.senses, holds, strict=True))
            rates: tuple[tuple[int, int], ...] = ()
            if isinstance(self.sensed, Measures):
                multiples, held = self.sensed.measured(opened)
                pairs = tuple(pair for pair, stays in zip(pairs, held, strict=True) if not stays)
                rates = tuple(
                    (b, rate_of(self.inverse[b], m, stays))
                    for b, m, stays in zip(self.senses, multiples, held, strict=True)
                    if b in self.inverse
                )
            known = Topology(pairs, fed, rates)
            self._topologies[open_mask] = known
        return known

    def changes(self, before: int, after: int) -> tuple[tuple[int, bool], ...]:
        """Sense blocks whose condition differs between two topologies, with the new truth.

        ``before`` is -1 for the time before the event, when nothing is sensed. One that stayed as
        it was in the topology before is told of whatever it is now.
        """
        known = self._changes.get((before, after))
        if known is None:
            old = dict.fromkeys(self.senses, False) if before < 0 else dict(self.topology(before).holds)
            known = tuple((b, t) for b, t in self.topology(after).holds if t != old.get(b))
            self._changes[(before, after)] = known
        return known

    def opened(self, open_mask: int) -> frozenset[str]:
        """Names of the breakers in a mask."""
        return frozenset(self.names[b] for bit, b in enumerate(self.breakers) if open_mask >> bit & 1)

    def shut(self, breaker: str) -> bool:
        """Whether a breaker block is closed before the event."""
        return self.program.index[breaker] in shut_before(self.program, self.dispatch)

    @cached_property
    def resting(self) -> tuple[tuple[int, ...], ...]:
        """Timers, latches and gates that may be true before the event, causes before effects.

        Blocks that form a loop stand together; all others are false at rest.
        """
        may = set(self.breakers)
        queue = deque(i for i, kind in enumerate(self.kind) if kind in (Kind.GATE, Kind.TIMER, Kind.LATCH))
        while queue:
            i = queue.popleft()
            items = self.inputs[i][:1] if self.kind[i] is Kind.LATCH else self.inputs[i]
            if i not in may and sum(1 for j, inv in items if inv or j in may) >= self.k[i]:
                may.add(i)
                queue.extend(c for c in self.consumers[i] if self.kind[c] is not Kind.BREAKER)
        graph: nx.DiGraph[int] = nx.DiGraph()
        graph.add_nodes_from(sorted(may.difference(self.breakers)))
        graph.add_edges_from((j, i) for i in graph for j, _ in self.inputs[i] if j in graph)
        groups: nx.DiGraph[int] = nx.condensation(graph)
        members = {n: tuple(sorted(groups.nodes[n]["members"])) for n in groups}
        return tuple(members[n] for n in nx.lexicographical_topological_sort(groups, key=lambda n: members[n]))

    @property
    def topologies_met(self) -> int:
        """How many topologies have been solved so far."""
        return len(self._topologies)


def bind(
    program: Program,
    event: Event,
    sensing: Sensing,
    *,
    dispatch: str | None = None,
    observe: Set[str] = frozenset(),
) -> Case:
    """Bind an initiating event to a program.

    Parameters
    ----------
    program : Program
    event : Location or NoFault
    sensing : Sensing
    dispatch : str or None
    observe : set of str
        Gates whose outputs the study observes besides breakers and times.

    Raises
    ------
    InputError
        If an observed name is no gate of the scheme, or the section or dispatch is not known.
    """
    for name in sorted(observe):
        if not isinstance(program.scheme.block.get(name), Gate):
            known = [b.name for b in program.scheme.blocks if isinstance(b, Gate)]
            raise reject("observed output", name, "the name of a gate", tip=nearest(name, known))
    if not isinstance(program, Program):
        raise reject("program", program, "a Program, as compile_scheme makes it")
    if not isinstance(event, Location | NoFault):
        tip = f"Location({event!r}) is a fault there" if isinstance(event, str) else ""
        raise reject("event", event, "a Location or a NoFault", tip=tip)
    if isinstance(event, Location) and not 0.0 <= event.position <= 1.0:
        tip = looks_like_percent(event.position)
        raise reject(f"position on {event.section!r}", event.position, "a number from 0 to 1", tip=tip)
    if isinstance(sensing, type):
        raise reject("sensing", sensing, "a sensing, such as LogicalSensing() makes", tip="the brackets are missing")
    if isinstance(event, Location) and event.section not in program.plant.section:
        raise reject("section", event.section, "a section", tip=nearest(event.section, program.plant.section))
    if isinstance(event, NoFault) and event.component not in program.scheme.component:
        tip = nearest(event.component, program.scheme.component)
        raise reject("component that trips with no fault", event.component, "a component", tip=tip)
    start = sensing.candidates(program, event, dispatch)
    on = spread(program.blocks, program.inputs, program.consumers, start, program.free)
    possible = on | program.free
    shut = shut_before(program, dispatch)
    openable = sorted(i for i in possible if i in shut)
    watched = sorted(program.index[name] for name in observe if program.index[name] in possible)
    wanted = backward(program, possible, openable + watched)
    chosen = sorted(wanted)
    local = {g: n for n, g in enumerate(chosen)}
    blocks = [program.blocks[g] for g in chosen]
    senses = tuple(n for n, b in enumerate(blocks) if isinstance(b, Sense))
    measuring = [b for b in blocks if isinstance(b, Sense)]
    names = [program.blocks[g].name for g in openable]
    sensed = bind_sensing(sensing, program, event, dispatch, measuring, names)
    inputs, ks = kept_inputs(program, chosen, local, shut)
    consumers: list[set[int]] = [set() for _ in chosen]
    for n, items in enumerate(inputs):
        for j, _ in items:
            consumers[j].add(n)
    asks, certain, unless, given = numbered_asks(program, blocks)
    asking: list[set[int]] = [set() for _ in asks]
    for n in range(len(blocks)):
        for a in (*unless[n], *given[n]):
            asking[a].add(n)
    settles: dict[int, list[int]] = {}
    for a, group in enumerate(asks):
        for q in group:
            settles.setdefault(q, []).append(a)
    breakers = tuple(local[g] for g in openable)
    devices = [b for b in blocks if isinstance(b, Breaker)]
    closable = tuple(bool(b.close) for b in devices)
    observed = tuple(local[g] for g in watched)
    contacts = tuple(b.contact if isinstance(b, Gate) else None for b in blocks)
    section = event.section if isinstance(event, Location) else None
    job = (
        Duty(frozenset(), frozenset())
        if section is None
        else duty(program.plant, program.zones, section, dispatch, program.scheme.intertripped(section))
    )
    kind = tuple(program.kind[g] for g in chosen)
    curves = {n: b.curve for n, b in enumerate(blocks) if isinstance(b, Sense) and b.curve is not None}
    inverse = curves if isinstance(sensed, Measures) else {}
    on_delays = [NOTHING if n in inverse else on_delay(b) for n, b in enumerate(blocks)]
    off_delays = [off_delay(b) for b in blocks]
    return Case(
        program=program,
        event=event,
        dispatch=dispatch,
        duty=job,
        sensed=sensed,
        names=tuple(b.name for b in blocks),
        kind=kind,
        inputs=inputs,
        consumers=tuple(tuple(sorted(c)) for c in consumers),
        gate_readers=readers(consumers, kind, (Kind.GATE,)),
        sink_readers=readers(consumers, kind, (Kind.TIMER, Kind.LATCH, Kind.BREAKER)),
        coil_readers=readers(consumers, kind, (Kind.BREAKER,)),
        order=tuple(program.order[g] for g in chosen),
        k=ks,
        unless=unless,
        given=given,
        asks=asks,
        certain=certain,
        settles={q: tuple(group) for q, group in settles.items()},
        gates_asking=tuple(tuple(sorted(s)) for s in asking),
        rank=tuple(rank_of(c, section) for c in contacts),
        contacts=contacts,
        on=tuple(on_delays),
        off=tuple(off_delays),
        fixed=(tuple(fixed_us(d) for d in off_delays), tuple(fixed_us(d) for d in on_delays)),
        senses=senses,
        breakers=breakers,
        breaker_asks=tuple(breaker_asks(program, blocks[b]) for b in breakers),
        closable=closable,
        coils={
            n: sum(program.index[name] in local for name in b.coils)
            for n, b in enumerate(blocks)
            if isinstance(b, Breaker)
        },
        observed=observed,
        reach_mask=reach_mask(inputs, breakers, observed),
        index={b.name: n for n, b in enumerate(blocks)},
        inverse=inverse,
    )
