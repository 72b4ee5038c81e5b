"""The delays behind what happened in a logged run: one chain back to the fault, or every way a timer is started."""

from __future__ import annotations

from schemesim.engine.outcome import Run
from schemesim.engine.program import Program
from schemesim.scheme.delays import Delay
from schemesim.scheme.model import Block, Breaker, Gate, Latch, Sense, Timer, inputs_of, signal_of
from schemesim.study.time_sums import Links, Span

Chain = list[tuple[str, Delay]]
"""Blocks and their delays, from the fault on."""

_RISES = ("picks up", "operates", "opens", "seals in")


def _delay(block: Block) -> Delay | None:
    match block:
        case Sense():
            return block.operate
        case Timer():
            return block.pick_up
        case Breaker():
            return block.interrupting
        case _:
            return None


def chain_of(run: Run, program: Program, row: int) -> Chain:
    """The delays that led to a row of the log, from the fault on.

    Behind a gate stands the input that came last; the log names the one that was looked at last.
    """
    rises: dict[str, list[int]] = {}
    for r in run.log:
        if r.what in _RISES:
            rises.setdefault(r.subject, []).append(r.index)

    def back(index: int) -> int:
        line = run.log[index]
        block = program.scheme.block.get(line.subject)
        if not isinstance(block, Gate) or line.what not in _RISES:
            return line.cause
        inputs = [x for x in block.inputs if isinstance(x, str)]
        before = [max((i for i in rises.get(x, ()) if i < index), default=-1) for x in inputs]
        return max((i for i in (line.cause, *before) if i >= 0), key=came, default=-1)

    def came(index: int) -> int:
        while index >= 0 and delay_of(index) is None and run.log[index].cause >= 0:
            index = back(index)
        return run.log[index].t_us

    def delay_of(index: int) -> Delay | None:
        line = run.log[index]
        block = program.scheme.block.get(line.subject)
        return _delay(block) if block is not None and line.what in ("picks up", "operates", "opens") else None

    found: Chain = []
    while row >= 0:
        delay = delay_of(row)
        if delay is not None:
            found.append((run.log[row].subject, delay))
        row = back(row)
    return found[::-1]


def starts_of(program: Program, run: Run, timer: str, initiate: str) -> list[Chain]:
    """Chains of delays of everything that would start the timer before it has run out.

    Any of the inputs of an OR may; of those that must come together the one that came last counts. An input
    that a run left undecided, since another had come at the same time, may come first at other times: it counts.

    Parameters
    ----------
    program : Program
    run : Run
        With its log; the timer ran out in it.
    timer, initiate : str
        The timer's block, and the gate that starts it where there are several trips.
    """
    block = program.scheme.block
    out = next((r.t_us for r in run.log if r.subject == timer and r.what == "operates"), 0)
    rose: dict[str, int] = {}
    for r in run.log:
        if r.what in _RISES and r.t_us < out:
            rose.setdefault(r.subject, r.t_us)
    failed = {program.questions[q].name for q, yes in run.asked if yes}

    def comes(name: str) -> int | None:
        """When a signal rises, or would if what stands in its way had been asked; None: it does not."""
        item = block[name]
        if name in rose or not isinstance(item, Gate) or item.given:
            return rose.get(name)
        if any(f"{a.component}: {a.mode}" in failed for a in item.unless):
            return None
        times = [comes(x) for x in item.inputs if isinstance(x, str)]
        there = sorted(t for t in times if t is not None)
        return there[item.k - 1] if len(there) >= item.k else None

    def behind(name: str, seen: frozenset[str]) -> list[Chain]:
        item = block[name]
        if name in seen:
            return []
        seen |= {name}
        match item:
            case Sense():
                return [[(name, item.operate)]]
            case Timer():
                return [[*chain, (name, item.pick_up)] for chain in behind(signal_of(item.input), seen)]
            case Latch():
                return behind(signal_of(item.set), seen)
            case Gate():
                came = {x: t for x in item.inputs if isinstance(x, str) and (t := comes(x)) is not None}
                inputs = sorted(came, key=lambda x: came[x])[-1:] if item.k > 1 else list(came)
                return [chain for x in inputs for chain in behind(x, seen)]
            case _:
                return []

    start = initiate if initiate in block else signal_of(inputs_of(block[timer])[0])
    first = block[start]
    if initiate not in block and isinstance(first, Gate):  # a single trip starts the timer, or its own seal does
        start = signal_of(first.inputs[0])
    found = {tuple(n for n, _ in chain): chain for chain in behind(start, frozenset())} if start in rose else {}
    return list(found.values())


def apart(chains: list[Chain]) -> tuple[list[Chain], Chain]:
    """What each chain has for itself, and what all have in common."""
    common = [x for x in chains[0] if all(x in c for c in chains)]
    return [[x for x in c if x not in common] for c in chains], common


def overlap(chains: list[Chain]) -> bool:
    """Whether a delay is in more than one of the chains."""
    names = [n for c in chains for n, _ in c]
    return len(set(names)) < len(names)


def earliest_of(chains: list[Chain]) -> tuple[tuple[Links, ...], bool]:
    """Ways of which the earliest counts, those that end alike taken together, and whether any still share a delay.

    Two elements that trip through one lockout relay are the earlier of both, and then the relay.
    """
    groups: dict[str, list[Chain]] = {}
    for chain in chains:
        groups.setdefault(chain[-1][0], []).append(chain)
    ways: list[Links] = []
    for group in groups.values():
        tail = group[0][-1][1]
        before = [chain[:-1] for chain in group]
        if not all(before):  # one of them begins here
            ways.append((tail,))
            continue
        inner, shared = earliest_of(before)
        ways.append((*inner[0], tail) if len(inner) == 1 else (Span(shortest=inner, shared=shared), tail))
    names = [name for group in groups.values() for name in {n for chain in group for n, _ in chain}]
    return tuple(ways), len(set(names)) < len(names)
