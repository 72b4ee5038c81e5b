"""Cutting a program down to a case: what may matter, what inputs are left, what questions bear on it."""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence, Set
from functools import lru_cache
from typing import NamedTuple

from schemesim.engine.program import Kind, Program
from schemesim.scheme.delays import Delay, Fixed
from schemesim.scheme.model import Ask, Breaker, Contact, FailureMode, Gate, Latch, Sense, Timer

NOTHING = Fixed(0)


class BreakerAsk(NamedTuple):
    """A mode of a breaker, the questions that bring it, and its verdict where it is certain."""

    mode: FailureMode
    questions: tuple[int, ...]
    certain: bool | None


@lru_cache(maxsize=4)
def shut_before(program: Program, dispatch: str | None) -> frozenset[int]:
    """Breaker blocks that are closed before the event, and sources with a trip that are in service; found once."""
    running = {s.name for s in program.plant.sources_in(dispatch)}
    running.update(d.name for d in program.plant.devices if d.closed)
    return frozenset(i for i, b in enumerate(program.blocks) if isinstance(b, Breaker) and b.name in running)


def backward(program: Program, possible: Set[int], goals: list[int]) -> set[int]:
    """Blocks that may become true and lead to a goal."""
    wanted, queue = set(goals), deque(goals)
    while queue:
        for j, _ in program.inputs[queue.popleft()]:
            if j in possible and j not in wanted and program.kind[j] is not Kind.BREAKER:
                wanted.add(j)
                queue.append(j)
    return wanted


def kept_inputs(
    program: Program, chosen: list[int], local: dict[int, int], shut: Set[int]
) -> tuple[tuple[tuple[tuple[int, bool], ...], ...], tuple[int, ...]]:
    """Inputs that can change, and what gates still need; what cannot change is folded in.

    A signal outside the case is false for good, but for the 52a of a breaker that stays closed.
    A latch keeps the places of its inputs: where one is true for good it reads the latch's
    own output inverted, which sets it whenever it is reset, or resets it for good; where one
    is false for good it reads its own output, which sets nothing (or there is no reset).
    """
    inputs: list[tuple[tuple[int, bool], ...]] = []
    ks: list[int] = []
    for g in chosen:
        block = program.blocks[g]
        kept = tuple((local[j], inv) for j, inv in program.inputs[g] if j in local)
        true = sum(1 for j, inv in program.inputs[g] if j not in local and inv != (j in shut))
        if isinstance(block, Latch):
            own = local[g]
            kept = tuple(
                (local[j], inv) if j in local else (own, inv != (j in shut))
                for n, (j, inv) in enumerate(program.inputs[g])
                if n == 0 or j in local or inv != (j in shut)
            )
        inputs.append(kept)
        ks.append(block.k - true if isinstance(block, Gate) else 1 - min(true, 1))
    return tuple(inputs), tuple(ks)


def numbered_asks(
    program: Program, blocks: list[Sense | Gate | Timer | Latch | Breaker]
) -> tuple[
    tuple[tuple[int, ...], ...],
    tuple[bool | None, ...],
    tuple[tuple[int, ...], ...],
    tuple[tuple[int, ...], ...],
]:
    """The questions of each ask and its certain verdict; ``unless`` and ``given`` of each block by number."""
    number: dict[Ask, int] = {}
    asks: list[tuple[int, ...]] = []
    certain: list[bool | None] = []

    def numbered(group: tuple[Ask, ...]) -> tuple[int, ...]:
        for ask in group:
            if ask not in number:
                number[ask] = len(asks)
                questions, verdict = resolve(program, ask)
                asks.append(questions)
                certain.append(verdict)
        return tuple(number[ask] for ask in sorted(group))

    unless = tuple(numbered(b.unless) if isinstance(b, Gate) else () for b in blocks)
    given = tuple(numbered(b.given) if isinstance(b, Gate) else () for b in blocks)
    return tuple(asks), tuple(certain), unless, given


def resolve(program: Program, ask: Ask) -> tuple[tuple[int, ...], bool | None]:
    """Questions that settle an ask, or its certain verdict."""
    if ask in program.constant:
        return (), program.constant[ask]
    questions = program.asks.get(ask, ())
    return questions, None if questions else False


def breaker_asks(program: Program, block: object) -> tuple[BreakerAsk, ...]:
    """The modes asked of a breaker when its coil is energised, in the order in which they are asked."""
    if not isinstance(block, Breaker) or not block.component:
        return ()
    late = (FailureMode.OPENS_LATE,) if block.late_by is not None else ()
    modes = (FailureMode.DOES_NOT_OPEN, *late, FailureMode.DOES_NOT_INTERRUPT)
    return tuple(BreakerAsk(m, *resolve(program, Ask(block.component, m))) for m in modes)


def rank_of(contact: Contact | None, section: str | None) -> int:
    """Role of a contact for a fault on a section (None: no fault)."""
    if contact is None:
        return 0
    if section is None or section in contact.protects:
        return int(contact.role)
    return int(max(contact.role, contact.beyond))


def on_delay(block: object) -> Delay:
    """What a block takes to become true; interruption for a breaker."""
    match block:
        case Sense():
            return block.operate
        case Timer():
            return block.pick_up
        case Breaker():
            return block.interrupting
        case _:
            return NOTHING


def off_delay(block: object) -> Delay:
    """What a block takes to become false; the auxiliary contact for a breaker."""
    match block:
        case Sense():
            return block.reset
        case Timer():
            return block.drop_out
        case Breaker():
            return block.auxiliary
        case _:
            return NOTHING


def reach_mask(
    inputs: tuple[tuple[tuple[int, bool], ...], ...],
    breakers: tuple[int, ...],
    observed: tuple[int, ...],
) -> tuple[int, ...]:
    """Which breakers and observed outputs each signal may influence (the way stops at a breaker)."""
    mask = [0] * len(inputs)
    bit = {b: 1 << n for n, b in enumerate(breakers)}
    ends = set(breakers)
    queue: deque[int] = deque()
    for n, g in enumerate(observed):
        mask[g] |= 1 << (len(breakers) + n)
        queue.append(g)
    queue.extend(breakers)
    while queue:
        i = queue.popleft()
        spreading = bit[i] if i in ends else mask[i]
        for j, _ in inputs[i]:
            if mask[j] | spreading != mask[j]:
                mask[j] |= spreading
                queue.append(j)
    return tuple(mask)


def fixed_us(delay: Delay) -> int | None:
    """Microseconds of a delay that is not random, else None."""
    return delay.nominal_us if delay.is_fixed else None


def readers(
    consumers: Sequence[Set[int]], kind: Sequence[Kind], wanted: tuple[Kind, ...]
) -> tuple[tuple[int, ...], ...]:
    """For each signal those of its consumers that are of the kinds wanted."""
    return tuple(tuple(sorted(c for c in group if kind[c] in wanted)) for group in consumers)
