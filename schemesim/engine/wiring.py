"""A case as the batch engine reads it: plain tuples by block, questions numbered anew, delays in a list.

Only what the case says in another shape; nothing is decided here.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import NamedTuple

from schemesim.engine.case import Case
from schemesim.engine.program import Kind
from schemesim.scheme.delays import Delay
from schemesim.scheme.model import Breaker, FailureMode, Role

NO_ROLE = len(Role)
"""Behind every role."""

UNKNOWN = 2

MODES = (FailureMode.DOES_NOT_OPEN, FailureMode.OPENS_LATE, FailureMode.DOES_NOT_INTERRUPT)
"""Modes of a breaker by the number that the engine gives them."""


class Start(NamedTuple):
    """Something begins to run: a fixed part and up to two random ones (numbers of the wiring's delays)."""

    fixed_us: int
    first: int = -1
    second: int = -1


@dataclass(frozen=True, slots=True)
class Doomed:
    """What cannot matter while only these breakers and outputs are live; masks have a byte for each thing.

    Attributes
    ----------
    matters : bytes
        Which blocks may still influence something.
    gates : int
        Gates that matter, as a mask.
    signals, moves : int
        Blocks whose value, and whose pending time, is kept.
    asks : dict
        Asks whose verdict may still be consulted, by the gates suppressed and enabled: found once.
    kept : dict
        Questions that may still be rested on, by verdicts and breakers decided: found once.
    """

    matters: bytes
    gates: int
    signals: int
    moves: int
    asks: dict[tuple[int, int], tuple[int, ...]]
    kept: dict[tuple[bytes, int], int]


@dataclass(frozen=True, eq=False, repr=False)
class Wiring:
    """See the module. Blocks, asks and places of breakers are those of the case.

    Attributes
    ----------
    questions : tuple of int
        Questions of the program that bear on the case, or exclude one that does; the engine
        numbers them by their place here.
    unless_mask, given_mask : tuple of int
        For each ask the gates it suppresses, or enables, as a mask.
    ask_bytes, mode_bytes : tuple of int
        For each ask, and each breaker, its questions as a mask with a byte for each.
    delays : tuple of (str, Delay)
        Random times, by the name they are drawn with.
    place : tuple of int
        Place of a breaker's block in ``breakers``, else -1.
    on, off : tuple of Start
        What a block takes to become true and false; for a breaker to open, and its auxiliary contact.
    """

    case: Case
    names: tuple[str, ...]
    kind: tuple[Kind, ...]
    inputs: tuple[tuple[tuple[int, bool], ...], ...]
    gate_readers: tuple[tuple[int, ...], ...]
    sink_readers: tuple[tuple[int, ...], ...]
    coil_readers: tuple[tuple[int, ...], ...]
    order: tuple[int, ...]
    k: tuple[int, ...]
    rank: tuple[int, ...]
    unless: tuple[tuple[int, ...], ...]
    given: tuple[tuple[int, ...], ...]
    gates_asking: tuple[tuple[int, ...], ...]
    reach_mask: tuple[int, ...]
    is_contact: tuple[bool, ...]
    breakers: tuple[int, ...]
    observed: tuple[int, ...]
    closable: tuple[bool, ...]
    coils: tuple[int, ...]
    place: tuple[int, ...]
    watch_bit: tuple[int, ...]
    questions: tuple[int, ...]
    asks: tuple[tuple[int, ...], ...]
    certain: bytes
    settles: tuple[tuple[int, ...], ...]
    siblings: tuple[tuple[int, ...], ...]
    unless_mask: tuple[int, ...]
    given_mask: tuple[int, ...]
    ask_bytes: tuple[int, ...]
    mode_bytes: tuple[int, ...]
    breaker_modes: tuple[tuple[tuple[int, tuple[int, ...], bool | None], ...], ...]
    delays: tuple[tuple[str, Delay], ...]
    on: tuple[Start, ...]
    off: tuple[Start, ...]
    late: tuple[Start, ...]
    closing: tuple[Start, ...]

    def opening(self, place: int, late: bool) -> Start:
        """What a breaker takes from energised coil to interruption."""
        start = self.on[self.breakers[place]]
        if not late:
            return start
        more = self.late[place]
        random = [d for d in (*start[1:], *more[1:]) if d >= 0]
        return Start(start.fixed_us + more.fixed_us, *random)


def wiring_of(case: Case) -> Wiring:
    """The wiring of a case, made once."""
    known = case.shelf.get("wiring")
    if not isinstance(known, Wiring):
        known = case.shelf["wiring"] = _wiring(case)
    return known


def _wiring(case: Case) -> Wiring:
    of_asks = {q for group in case.asks for q in group}
    of_breakers = {q for modes in case.breaker_asks for _, questions, _ in modes for q in questions}
    direct = of_asks | of_breakers
    siblings = {j for q in direct for j in case.program.siblings[q]}
    questions = tuple(sorted(direct | siblings))
    local = {q: i for i, q in enumerate(questions)}
    siblings_of = tuple(tuple(local[j] for j in case.program.siblings[q] if j in local) for q in questions)
    delays: list[tuple[str, Delay]] = []

    def start(name: str, delay: Delay | None) -> Start:
        if delay is None:
            return Start(0)
        if delay.is_fixed:
            return Start(delay.nominal_us)
        delays.append((name, delay))
        return Start(0, len(delays) - 1)

    n = len(case.names)
    specs = [case.program.scheme.block[case.names[b]] for b in case.breakers]
    place, coils, watch = [-1] * n, [0] * n, [0] * n
    for i, b in enumerate(case.breakers):
        place[b], coils[b] = i, case.coils[b]
    for i, g in enumerate(case.observed):
        watch[g] = 1 << (len(case.breakers) + i)
    return Wiring(
        case=case,
        names=case.names,
        kind=case.kind,
        inputs=case.inputs,
        gate_readers=case.gate_readers,
        sink_readers=case.sink_readers,
        coil_readers=case.coil_readers,
        order=case.order,
        k=case.k,
        rank=case.rank,
        unless=case.unless,
        given=case.given,
        gates_asking=case.gates_asking,
        reach_mask=case.reach_mask,
        is_contact=tuple(c is not None for c in case.contacts),
        breakers=case.breakers,
        observed=case.observed,
        closable=case.closable,
        coils=tuple(coils),
        place=tuple(place),
        watch_bit=tuple(watch),
        questions=questions,
        asks=tuple(tuple(local[q] for q in group) for group in case.asks),
        certain=bytes(UNKNOWN if v is None else int(v) for v in case.certain),
        settles=tuple(case.settles.get(q, ()) for q in questions),
        siblings=siblings_of,
        unless_mask=_gates_by_ask(case.unless, len(case.asks)),
        given_mask=_gates_by_ask(case.given, len(case.asks)),
        ask_bytes=tuple(_bytes_at(local[q] for q in group) for group in case.asks),
        mode_bytes=tuple(_bytes_at(local[q] for _, group, _ in modes for q in group) for modes in case.breaker_asks),
        breaker_modes=tuple(
            tuple((MODES.index(m), tuple(local[q] for q in group), certain) for m, group, certain in modes)
            for modes in case.breaker_asks
        ),
        on=tuple(start(f"{name} on", d) for name, d in zip(case.names, case.on, strict=True)),
        off=tuple(start(f"{name} off", d) for name, d in zip(case.names, case.off, strict=True)),
        late=tuple(start(f"{b.name} late", b.late_by if isinstance(b, Breaker) else None) for b in specs),
        closing=tuple(start(f"{b.name} close", b.closing if isinstance(b, Breaker) else None) for b in specs),
        delays=tuple(delays),
    )


def _gates_by_ask(of_gate: Sequence[Sequence[int]], count: int) -> tuple[int, ...]:
    masks = [0] * count
    for g, group in enumerate(of_gate):
        for a in group:
            masks[a] |= 1 << g
    return tuple(masks)


def _bytes_at(places: Iterable[int]) -> int:
    """A mask with a byte of ones at each of these places."""
    mask = 0
    for i in places:
        mask |= 0xFF << 8 * i
    return mask


def doomed(w: Wiring, live: int) -> Doomed:
    """What cannot matter any more while only these breakers and outputs may still change."""
    matters = bytes(bool(live & mask) for mask in w.reach_mask)
    return Doomed(
        matters=matters,
        gates=sum(1 << g for g, m in enumerate(matters) if m),
        signals=_bytes_at(b for b, m in enumerate(matters) if m),
        moves=_bytes_at(b for b, m in enumerate(matters) if m or w.place[b] >= 0),
        asks={},
        kept={},
    )


def first_free(taken: Sequence[object], at: int) -> int:
    """The first empty place from a given one on, going round."""
    n = len(taken)
    return next((i for i in ((at + d) % n for d in range(n)) if not taken[i]), -1)
