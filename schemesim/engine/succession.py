"""From a settled moment to the next state: what starts and stops, and what is left out (rules R2, R11, R13, R20)."""

from __future__ import annotations

from typing import NamedTuple

from schemesim.engine.asking import open_behind
from schemesim.engine.moment import Moment
from schemesim.engine.program import Kind
from schemesim.engine.values import (
    AUXILIARY,
    AWAY,
    CLOSED,
    CLOSING,
    FALSE,
    OPENING,
    TO_FALSE,
    TO_TRUE,
    TRUE,
    UNKNOWN,
    Commit,
    State,
)
from schemesim.engine.wiring import Doomed, Start, Wiring, first_free


class Asks(Exception):  # noqa: N818 - not an error: the state of rest cannot be had without an answer
    """The state of rest needs the answer to a question."""

    def __init__(self, question: int) -> None:
        super().__init__(question)
        self.question = question


class Step(NamedTuple):
    """What becomes of the times when a run takes one step.

    ``changes`` are (slot, start) in order of slot, the start None where the slot is emptied.
    """

    state: State
    changes: tuple[tuple[int, Start | None], ...]
    commits: tuple[Commit, ...]
    operated: tuple[int, ...]
    clears: bool


def follow(m: Moment) -> None:
    """Blocks whose input rose start; those whose input fell cancel or start their drop-out."""
    w, live = m.w, m.live
    for b, truth in m.sensed:
        if live & w.reach_mask[b]:
            _follow_input(m, b, truth, 0)
    m.sensed = ()
    for b in m.take_touched():
        kind = w.kind[b]
        if kind is Kind.BREAKER:
            _follow_close(m, b)
        elif not live & w.reach_mask[b]:
            continue
        elif kind is Kind.LATCH:
            _follow_latch(m, b)
        elif w.inputs[b]:
            state = m.reads(b, 0)
            if state is not None:
                source, inverted = w.inputs[b][0]
                _follow_input(m, b, state, 0 if inverted else m.role[source])


def _follow_input(m: Moment, b: int, state: bool, role: int) -> None:
    target = TO_TRUE if state else TO_FALSE
    if m.pending[b]:
        if m.pending[b] == target:
            return
        m.drop(b)
    if m.value[b] != state:
        if state:
            m.role[b] = role
        m.start(b, target, m.w.on[b] if state else m.w.off[b])


def _follow_latch(m: Moment, b: int) -> None:
    items = m.w.inputs[b]
    if len(items) > 1 and m.reads(b, 1):
        target, source = TO_FALSE, -1
    elif m.reads(b, 0):
        target, source = TO_TRUE, items[0][0] if items and not items[0][1] else -1
    else:
        return
    if m.pending[b]:
        if m.pending[b] == target:
            return
        m.drop(b)
    if m.value[b] != (target == TO_TRUE):
        if target == TO_TRUE:
            m.role[b] = m.role[source] if source >= 0 else 0
        m.start(b, target, Start(0))


def _follow_close(m: Moment, b: int) -> None:
    w, place = m.w, m.w.place[b]
    at = w.coils[b]
    if not w.closable[place] or at == len(w.inputs[b]) or m.stage[place] != AWAY:
        return
    if m.reads(b, at) and not m.tripping(b):
        m.stage[place] = CLOSING
        m.start(b, TO_TRUE, w.closing[place])


# --- the state of rest --------------------------------------------------------------------


def rest(w: Wiring, script: list[bool]) -> Moment:
    """The moment before the event: breakers closed, nothing sensed, and what reads true has operated.

    Raises
    ------
    Asks
        If an answer is needed beyond those of the script.
    """
    m = Moment(w, None)
    answers = iter(script)
    for group in w.case.resting:
        for _ in range(2 * len(group)):
            changed = [_rest_one(m, b, answers) for b in group]
            if not any(changed):
                break
    m.touch_all(b for b in range(len(w.kind)) if _unsettled(m, b))
    return m


def _rest_one(m: Moment, b: int, answers: object) -> bool:
    w, old = m.w, min(m.value[b], UNKNOWN)
    if w.kind[b] is Kind.GATE:
        m.evaluate(b)
        return min(m.value[b], UNKNOWN) != old
    while m.live & w.reach_mask[b]:
        unknown = [j for j in m.read_by(b) if m.value[j] >= UNKNOWN]
        if not unknown:
            break
        gate = min((g for j in unknown for g in open_behind(m, j)), key=w.order.__getitem__)
        q = m.question_of(gate)
        yes = next(answers, None)  # type: ignore[call-overload]  # an iterator of bool
        if yes is None:
            raise Asks(q)
        m.answer(q, yes)
        m.propagate()
    state = m.reads(b, 0)
    if w.kind[b] is Kind.LATCH:
        reset = len(w.inputs[b]) > 1 and m.reads(b, 1)
        state = not reset and (state or old == TRUE)
    role = m.role[w.inputs[b][0][0]] if w.inputs[b] and not w.inputs[b][0][1] else 0
    m.value[b], m.role[b] = (TRUE, role) if state else (FALSE, 0)
    return m.value[b] != old


def _unsettled(m: Moment, b: int) -> bool:
    """Whether a sink at rest has to look at its inputs when the event begins."""
    w = m.w
    kind, items = w.kind[b], w.inputs[b]
    if kind in (Kind.GATE, Kind.SENSE):
        return False
    if kind is Kind.TIMER and items:
        return m.reads(b, 0) != (m.value[b] == TRUE)
    return not items or any(m.value[j] != FALSE or inverted for j, inverted in items)


# --- freezing -----------------------------------------------------------------------------


def freeze(m: Moment, gone: Doomed, home: tuple[int, ...], capacity: int) -> Step | None:
    """The next state, without what cannot matter any more, and the changes of its pending times.

    None if the pending times do not fit well into so many slots. What starts together and takes the
    same fixed time shares a slot; a slot is taken near the block's home, so that the order in
    which things started makes no different state.
    """
    _leave_out(m, gone)
    old = m.slots
    slots: list[tuple[int, ...]] = [tuple(b for b in bundle if m.pending[b] and b not in m.started) for bundle in old]
    slots += [()] * (capacity - len(slots))
    together: dict[Start, list[int]] = {}
    apart: list[tuple[int, Start]] = []
    for b, start in sorted(m.started.items()):
        if start.first >= 0 or start not in together:
            apart.append((b, start))
        if start.first < 0:
            together.setdefault(start, []).append(b)
    if sum(1 for s in slots if s) + len(apart) > (3 * capacity) // 4:
        return None
    changes: dict[int, Start | None] = {i: None for i, bundle in enumerate(old) if bundle and not slots[i]}
    for b, start in apart:
        i = first_free(slots, home[b] % capacity)
        slots[i] = (b,) if start.first >= 0 else tuple(together[start])
        changes[i] = start
    while slots and not slots[-1]:
        slots.pop()
    state = State(
        value=bytes(m.value),
        role=bytes(m.role),
        verdict=bytes(m.verdict),
        suppressed=m.suppressed,
        enabled=m.enabled,
        known=bytes(m.known),
        pending=bytes(m.pending),
        decided=m.decided,
        stage=bytes(m.stage),
        interrupting=m.interrupting,
        open_mask=m.open_mask,
        live=m.live,
        cleared=m.cleared,
        slots=tuple(slots),
    )
    return Step(state, tuple(sorted(changes.items())), tuple(m.commits), tuple(m.operated), m.clears)


def _leave_out(m: Moment, gone: Doomed) -> None:
    """Forget what cannot matter: signals, pending blocks, answers, and how a breaker came to be where it is."""
    w = m.w
    for b in [b for b in m.started if not gone.matters[b] and w.place[b] < 0]:
        del m.started[b]
    for place, stage in enumerate(m.stage):
        if stage != OPENING:
            m.interrupting &= ~(1 << place)
        if stage in (AUXILIARY, AWAY) and not w.closable[place]:
            b = w.breakers[place]
            if not gone.matters[b]:
                m.drop(b)
                stage = AWAY
            if stage == AWAY:
                m.stage[place] = CLOSED
    n = len(m.value)
    value = int.from_bytes(m.value, "little") & gone.signals
    m.value = bytearray(value.to_bytes(n, "little"))
    m.pending = bytearray((int.from_bytes(m.pending, "little") & gone.moves).to_bytes(n, "little"))
    if any(m.role):
        in_use = int.from_bytes(m.value.translate(_IF_TRUE), "little")
        in_use |= int.from_bytes(m.pending.translate(_IF_ANY), "little")
        m.role = bytearray((int.from_bytes(m.role, "little") & gone.signals & in_use).to_bytes(n, "little"))
    m.suppressed &= gone.gates
    m.enabled &= gone.gates
    _forget(m, gone)


def _forget(m: Moment, gone: Doomed) -> None:
    """Keep only answers that some question still to come may rest on.

    What a failure does to gates is kept with the gates, not with the failure: so it is the same
    whichever of several failures did it, and what else could have done it matters no more.
    """
    w = m.w
    key = m.suppressed, m.enabled
    asks = gone.asks.get(key)
    if asks is None:
        free = gone.gates & ~m.suppressed
        waiting = free & ~m.enabled
        asks = gone.asks[key] = tuple(
            a for a in range(len(w.asks)) if w.unless_mask[a] & free or w.given_mask[a] & waiting
        )
    verdict = bytearray(len(w.asks))
    for a in asks:
        if m.verdict[a] == UNKNOWN:
            verdict[a] = UNKNOWN
    m.verdict = verdict
    found = bytes(verdict), m.decided
    mask = gone.kept.get(found)
    if mask is None:
        mask = 0
        for a in asks:
            if verdict[a] == UNKNOWN:
                mask |= w.ask_bytes[a]
        for place, group in enumerate(w.mode_bytes):
            if w.closable[place] or not m.decided >> place & 1:
                mask |= group
        gone.kept[found] = mask
    m.known = bytearray((int.from_bytes(m.known, "little") & mask).to_bytes(len(m.known), "little"))


_IF_TRUE = bytes(0xFF if v == TRUE else 0 for v in range(256))
_IF_ANY = bytes(0xFF if v else 0 for v in range(256))
