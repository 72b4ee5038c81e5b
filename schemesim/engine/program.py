"""The compiled program: names become indices once for a whole scheme.

Order is canonical and never that of declaration: blocks that hold state come first by
name, then gates by level (so that one sweep in index order settles the logic) and
name. Questions stand in the order of their names, common causes before members.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping, Set
from dataclasses import dataclass
from enum import IntEnum

import networkx as nx

from schemesim.errors import ErrorList, nearest, reject
from schemesim.plant.model import Plant
from schemesim.plant.paths import PathGraph
from schemesim.plant.zones import Zones, isolation_zones
from schemesim.scheme.conditions import Always, Current, External, InZone, OutOfZone, Reach, Undervoltage
from schemesim.scheme.model import (
    MODES,
    Ask,
    Block,
    Breaker,
    FailureMode,
    Gate,
    Latch,
    Not,
    Probability,
    Scheme,
    Sense,
    Timer,
    inputs_of,
    signal_of,
)


class Kind(IntEnum):
    """Kind of a block in the compiled program."""

    SENSE = 0
    TIMER = 1
    LATCH = 2
    BREAKER = 3
    GATE = 4


_KINDS: Mapping[type, Kind] = {
    Sense: Kind.SENSE,
    Timer: Kind.TIMER,
    Latch: Kind.LATCH,
    Breaker: Kind.BREAKER,
    Gate: Kind.GATE,
}


@dataclass(frozen=True, slots=True)
class Question:
    """One failure mode of one component, or one common cause, answered yes or no in a run.

    ``component`` is empty for a common cause. ``probability`` is that of the mode before
    anything is known; the engine conditions it on the modes already refused.
    """

    name: str
    component: str
    mode: str
    probability: Probability


@dataclass(frozen=True, eq=False, repr=False)
class Program:
    """A scheme on a plant, compiled.

    Attributes
    ----------
    plant, scheme, zones, paths
        What it was compiled from.
    blocks : tuple of Block
        In canonical order; the position is the index of the block and of its signal.
    inputs : tuple of tuples of (index, inverted)
    consumers : tuple of tuples of int
    order : tuple of int
        Order in which a gate's questions are asked: nearest the breaker first, then by
        role, then by name.
    questions : tuple of Question
    siblings : tuple of tuple of int
        For each question those of the other modes of its component, which exclude it.
    asks : mapping of Ask to the questions whose yes brings it (common causes first)
    constant : mapping of Ask to its certain verdict (no question needed)
    free : frozenset of int
        Blocks that may become true wherever the fault is (current detectors and the like).
    """

    plant: Plant
    scheme: Scheme
    zones: Zones
    paths: PathGraph
    blocks: tuple[Block, ...]
    index: Mapping[str, int]
    kind: tuple[Kind, ...]
    inputs: tuple[tuple[tuple[int, bool], ...], ...]
    consumers: tuple[tuple[int, ...], ...]
    order: tuple[int, ...]
    questions: tuple[Question, ...]
    siblings: tuple[tuple[int, ...], ...]
    asks: Mapping[Ask, tuple[int, ...]]
    constant: Mapping[Ask, bool]
    free: frozenset[int]

    def __repr__(self) -> str:
        return f"Program({len(self.blocks)} blocks, {len(self.questions)} questions)"


def compile_scheme(plant: Plant, scheme: Scheme) -> Program:
    """Compile a scheme on a plant.

    Raises
    ------
    InputError
        If gates form a loop (it is named), a breaker block is neither a breaker nor a
        source with a trip, a coil is fed by an auxiliary contact with no gate between, or an
        element looks at a device or section that is not in the plant.
    """
    given: tuple[object, object] = (plant, scheme)
    if not isinstance(given[0], Plant) or not isinstance(given[1], Scheme):
        raise reject("compile_scheme", given, "a Plant and a Scheme, in this order")
    errors = ErrorList()
    _check_breakers(errors, plant, scheme)
    _check_conditions(errors, plant, scheme)
    errors.raise_if_any()
    level = _gate_levels(scheme)
    blocks = tuple(
        sorted(scheme.blocks, key=lambda b: (isinstance(b, Gate), level.get(b.name, 0), b.name))
    )
    index = {b.name: i for i, b in enumerate(blocks)}
    inputs = tuple(
        tuple((index[signal_of(item)], isinstance(item, Not)) for item in inputs_of(b)) for b in blocks
    )
    consumers: list[set[int]] = [set() for _ in blocks]
    for i, items in enumerate(inputs):
        for j, _ in items:
            consumers[j].add(i)
    questions, asks, constant = _questions(scheme)
    kind = tuple(_KINDS[type(b)] for b in blocks)
    return Program(
        plant=plant,
        scheme=scheme,
        zones=isolation_zones(plant),
        paths=PathGraph(plant),
        blocks=blocks,
        index=index,
        kind=kind,
        inputs=inputs,
        consumers=tuple(tuple(sorted(c)) for c in consumers),
        order=_asking_order(blocks, kind, inputs),
        questions=questions,
        siblings=_siblings(questions),
        asks=asks,
        constant=constant,
        free=_free(blocks, inputs, consumers),
    )


def _check_breakers(errors: ErrorList, plant: Plant, scheme: Scheme) -> None:
    operable = set(plant.breakers) | set(plant.tripping_sources)
    for b in scheme.blocks:
        if isinstance(b, Breaker):
            if b.name not in operable:
                errors.add(f"breaker block {b.name!r}", b.name, "a breaker, or a source with a trip, of the plant")
            for name in inputs_of(b):
                if isinstance(scheme.block[signal_of(name)], Breaker):
                    errors.add(f"coil of breaker {b.name!r}", signal_of(name), "a gate, timer or latch between")


def _check_conditions(errors: ErrorList, plant: Plant, scheme: Scheme) -> None:
    """Devices and sections that elements look at have to be there: else they would never pick up."""
    devices = {*plant.device, *plant.source}
    for b in scheme.blocks:
        if not isinstance(b, Sense):
            continue
        looks_at: tuple[str, ...] = ()
        sections: frozenset[str] = frozenset()
        match b.condition:
            case Current(devices=looks_at):
                pass
            case InZone(sections=sections, cts=looks_at):
                pass
            case OutOfZone(sections=sections, ct=ct):
                looks_at = (ct,)
            case Reach(terminals=terminals):
                looks_at = tuple(t.ct for t in terminals)
                for t in terminals:
                    d = plant.device.get(t.ct)
                    if d is not None and t.inner not in (d.a, d.b):
                        errors.add(f"inner side of {t.ct!r} in block {b.name!r}", t.inner, f"{d.a!r} or {d.b!r}")
            case Undervoltage(section=section):
                sections = frozenset({section})
        for what, names, known in (("device", looks_at, devices), ("section", sections, plant.section)):
            for name in sorted(set(names).difference(known)):
                tip = nearest(name, known)
                errors.add(f"{what} in block {b.name!r}", name, f"the name of a {what} of the plant", tip=tip)


def _gate_levels(scheme: Scheme) -> dict[str, int]:
    graph: nx.DiGraph[str] = nx.DiGraph()
    for b in scheme.blocks:
        if isinstance(b, Gate):
            graph.add_node(b.name)
            for item in b.inputs:
                if isinstance(scheme.block[signal_of(item)], Gate):
                    graph.add_edge(signal_of(item), b.name)
    if not nx.is_directed_acyclic_graph(graph):
        loop = " -> ".join(str(edge[0]) for edge in nx.find_cycle(graph))
        raise reject("gates", f"the loop {loop}", "no loop of gates alone: every loop holds a timer, latch or breaker")
    level: dict[str, int] = {}
    for name in nx.topological_sort(graph):
        level[name] = 1 + max((level[p] for p in graph.predecessors(name)), default=0)
    return level


def _questions(
    scheme: Scheme,
) -> tuple[tuple[Question, ...], dict[Ask, tuple[int, ...]], dict[Ask, bool]]:
    """Questions, the asks they settle, and the asks that are certain either way."""
    questions: list[Question] = []
    asks: dict[Ask, list[int]] = {}
    constant: dict[Ask, bool] = {}
    for cause in scheme.common_causes:
        if cause.probability > 0:
            for ask in cause.members:
                asks.setdefault(ask, []).append(len(questions))
            questions.append(Question(f"common cause {cause.name}", "", cause.name, cause.probability))
    for c in scheme.components:
        if c.name in scheme.out_of_service:
            for mode in FailureMode:
                ask = Ask(c.name, mode)
                asks.pop(ask, None)
                constant[ask] = mode is MODES[c.kind][0]
            continue
        for mode, p in sorted(c.modes):
            ask = Ask(c.name, mode)
            if p >= 1:
                constant[ask] = True
            elif p > 0:
                asks.setdefault(ask, []).append(len(questions))
                questions.append(Question(f"{c.name}: {mode}", c.name, str(mode), p))
    return tuple(questions), {a: tuple(q) for a, q in asks.items()}, constant


def _siblings(questions: tuple[Question, ...]) -> tuple[tuple[int, ...], ...]:
    of: dict[str, list[int]] = {}
    for i, q in enumerate(questions):
        if q.component:
            of.setdefault(q.component, []).append(i)
    return tuple(tuple(j for j in of.get(q.component, ()) if j != i) for i, q in enumerate(questions))


def _asking_order(
    blocks: tuple[Block, ...], kind: tuple[Kind, ...], inputs: tuple[tuple[tuple[int, bool], ...], ...]
) -> tuple[int, ...]:
    """Rank of each block among those that may ask at the same time."""
    far = len(blocks)
    distance = [far] * far
    queue = deque(i for i in range(far) if kind[i] is Kind.BREAKER)
    for i in queue:
        distance[i] = 0
    while queue:
        i = queue.popleft()
        for j, _ in inputs[i]:
            if distance[j] == far:
                distance[j] = distance[i] + 1
                queue.append(j)

    def key(i: int) -> tuple[int, int, str]:
        b = blocks[i]
        role = int(b.contact.role) if isinstance(b, Gate) and b.contact else 0
        return (distance[i], role, b.name)

    order = [0] * far
    for rank, i in enumerate(sorted(range(far), key=key)):
        order[i] = rank
    return tuple(order)


def _free(
    blocks: tuple[Block, ...],
    inputs: tuple[tuple[tuple[int, bool], ...], ...],
    consumers: list[set[int]],
) -> frozenset[int]:
    """Blocks that may become true through conditions that hold anywhere, or are true at rest."""
    anywhere = (Current, OutOfZone, Always, External)
    start = [
        i
        for i, b in enumerate(blocks)
        if (isinstance(b.condition, anywhere) if isinstance(b, Sense) else _may(blocks, inputs, i, frozenset()))
    ]
    return frozenset(spread(blocks, inputs, consumers, start, frozenset()))


def spread(
    blocks: tuple[Block, ...],
    inputs: tuple[tuple[tuple[int, bool], ...], ...],
    consumers: list[set[int]] | tuple[tuple[int, ...], ...],
    start: list[int],
    free: frozenset[int],
) -> set[int]:
    """Blocks that may become true once those in ``start`` may, those in ``free`` standing by."""
    on = set(start)
    queue = deque(start)
    while queue:
        for c in consumers[queue.popleft()]:
            if c not in on and _may(blocks, inputs, c, on, free):
                on.add(c)
                queue.append(c)
    return on


def _may(
    blocks: tuple[Block, ...],
    inputs: tuple[tuple[tuple[int, bool], ...], ...],
    i: int,
    on: Set[int],
    free: Set[int] = frozenset(),
) -> bool:
    """Whether a block may become true (a breaker: be tripped) if those in ``on`` and ``free`` may.

    An inverted input and the 52a contact of a breaker may always be true.
    """
    block, items = blocks[i], inputs[i]
    if isinstance(block, Latch):
        items = items[:1]
    elif isinstance(block, Breaker):
        items = items[: len(block.coils)]
    possible = sum(1 for j, inv in items if inv or j in on or j in free or isinstance(blocks[j], Breaker))
    return possible >= (block.k if isinstance(block, Gate) else 1)
