"""One pass of an instant without its clock: the discrete half of the batch engine (rules R2 to R7, R11, R20).

A *moment* is everything about a run but its times. It is thawed from a :class:`State`, told what
is due, settles, stops where a question has to be answered, and is frozen into the next state
together with what has to be done to the times. Nothing here depends on when things happen,
so a moment found for one run serves every run that comes through the same state.

What can no longer matter (it leads to no breaker that may still be tripped and to no output still
watched) is left out of a state, so that runs which differ in such things only share it.
"""

from __future__ import annotations

from collections.abc import Iterable
from heapq import heappop, heappush

from schemesim.engine.asking import better, next_gate, via
from schemesim.engine.program import Kind
from schemesim.engine.values import (
    AUXILIARY,
    AWAY,
    CLOSED,
    FALSE,
    NO,
    NOT_KNOWN,
    OPEN,
    OPENING,
    TO_FALSE,
    TO_TRUE,
    TRUE,
    UNKNOWN,
    YES,
    Commit,
    State,
)
from schemesim.engine.wiring import NO_ROLE, Start, Wiring


class Moment:
    """A run at one instant; see the module."""

    __slots__ = (
        "_dirty",
        "_energising",
        "_hot",
        "_queued",
        "cleared",
        "clears",
        "commits",
        "decided",
        "enabled",
        "interrupting",
        "known",
        "live",
        "open_mask",
        "opens",
        "operated",
        "passes",
        "pending",
        "role",
        "sensed",
        "slots",
        "stage",
        "started",
        "suppressed",
        "touched",
        "value",
        "verdict",
        "w",
    )

    def __init__(self, w: Wiring, state: State | None) -> None:
        self.w = w
        n = len(w.kind)
        if state is None:
            self.value, self.role, self.pending = bytearray(n), bytearray(n), bytearray(n)
            self.verdict = bytearray(w.certain)
            self.suppressed = self.enabled = 0
            for a, verdict in enumerate(w.certain):
                if verdict == TRUE:
                    self.suppressed |= w.unless_mask[a]
                    self.enabled |= w.given_mask[a]
            self.known = bytearray(len(w.questions))
            self.stage = bytearray(len(w.breakers))
            self.decided = self.interrupting = self.open_mask = 0
            self.live = (1 << (len(w.breakers) + len(w.observed))) - 1
            self.cleared = False
            self.slots: list[tuple[int, ...]] = []
            for b in w.breakers:
                self.value[b] = TRUE
        else:
            self.value, self.role = bytearray(state.value), bytearray(state.role)
            self.verdict, self.known = bytearray(state.verdict), bytearray(state.known)
            self.suppressed, self.enabled = state.suppressed, state.enabled
            self.pending, self.stage = bytearray(state.pending), bytearray(state.stage)
            self.decided, self.interrupting = state.decided, state.interrupting
            self.open_mask, self.live, self.cleared = state.open_mask, state.live, state.cleared
            self.slots = list(state.slots)
        self.opens: set[int] = set()
        g = self.value.find(OPEN)
        while g >= 0:
            self.opens.add(g)
            g = self.value.find(OPEN, g + 1)
        self._dirty: list[int] = []
        self._queued = bytearray(n)
        self.touched: set[int] = set()
        self._hot: set[int] = set()
        self._energising = -1
        self.sensed: tuple[tuple[int, bool], ...] = ()
        self.started: dict[int, Start] = {}
        self.commits: list[Commit] = []
        self.operated: list[int] = []
        self.clears = False
        self.passes = 0

    def copy(self) -> Moment:
        """A moment of its own, to go on with another answer."""
        m = object.__new__(Moment)
        m.w = self.w
        m.value, m.role, m.pending = self.value[:], self.role[:], self.pending[:]
        m.verdict, m.known, m.stage = self.verdict[:], self.known[:], self.stage[:]
        m.suppressed, m.enabled = self.suppressed, self.enabled
        m.decided, m.interrupting, m.open_mask = self.decided, self.interrupting, self.open_mask
        m.live, m.cleared, m.clears = self.live, self.cleared, self.clears
        m._energising, m.sensed, m.passes = self._energising, self.sensed, self.passes
        m.slots, m._dirty, m._queued = self.slots[:], self._dirty[:], self._queued[:]
        m.opens, m.touched, m._hot = set(self.opens), set(self.touched), set(self._hot)
        m.started, m.commits, m.operated = dict(self.started), self.commits[:], self.operated[:]
        return m

    # --- what is due ---------------------------------------------------------------------

    def begin(self) -> None:
        """The event happens: sensing sees the plant as it is."""
        self.sensed = self.w.case.changes(-1, 0)

    def expire(self, blocks: list[int]) -> None:
        """What is due takes effect, and sensing follows the topology (R2, R9)."""
        before = self.open_mask
        for b in sorted(blocks):
            target, self.pending[b] = self.pending[b], 0
            place = self.w.place[b]
            if place < 0:
                self._change(b, TRUE if target == TO_TRUE else FALSE)
            else:
                self._move(b, place)
        self.sensed = ()
        if self.open_mask != before:
            case = self.w.case
            self.sensed = case.changes(before, self.open_mask)
            if not self.cleared and case.topology(before).fed and not case.topology(self.open_mask).fed:
                self.cleared = self.clears = True

    def _move(self, b: int, place: int) -> None:
        """A breaker comes to the end of a stage (R7)."""
        bit, stage = 1 << place, self.stage[place]
        if stage == OPENING:
            if self.interrupting & bit:
                self.open_mask |= bit
            self.stage[place] = AUXILIARY
            self.start(b, TO_FALSE, self.w.off[b])
        elif stage == AUXILIARY:
            self.stage[place] = AWAY
            self._change(b, FALSE)
            self._touch(b)
        else:
            self.stage[place] = CLOSED
            self.open_mask &= ~bit
            self._change(b, TRUE)
            self.decided &= ~bit
            self._touch(b)

    def start(self, b: int, target: int, start: Start) -> None:
        self.pending[b] = target
        self.started[b] = start

    def drop(self, b: int) -> None:
        """A pending block that cannot matter any more."""
        self.pending[b] = 0
        self.started.pop(b, None)

    def take_touched(self) -> list[int]:
        """Sinks an input of which changed in this pass, in order; they are forgotten."""
        touched = sorted(self.touched)
        self.touched.clear()
        return touched

    def touch_all(self, blocks: Iterable[int]) -> None:
        """These sinks have to look at their inputs in the pass to come."""
        self.touched.update(blocks)
        self._hot = {b for b in self.touched if self.w.place[b] >= 0}

    # --- settling ------------------------------------------------------------------------

    def settle(self) -> int:
        """Settle the gates; the number of the question that comes next, or -1 once settled."""
        w = self.w
        while True:
            if self._energising >= 0:
                q = self._energise(self._energising)
                if q >= 0:
                    return q
                continue
            self.propagate()
            b = self._ready()
            if b >= 0:
                gate = better(self, b)
                if gate < 0:
                    self._energising = b
                    continue
            else:
                gate = next_gate(self)
                if gate < 0:
                    break
            return self.question_of(gate)
        for i, g in enumerate(w.observed):
            bit = 1 << (len(w.breakers) + i)
            if self.live & bit and self.value[g] == TRUE:
                self.operated.append(i)
                self.live &= ~bit
        return -1

    def answer(self, q: int, yes: bool) -> None:
        """The answer to the question that :meth:`settle` gave."""
        self._know(q, yes)
        if yes:
            for j in self.w.siblings[q]:
                if self.known[j] == NOT_KNOWN:
                    self._know(j, False)

    def _know(self, q: int, yes: bool) -> None:
        w, verdict = self.w, self.verdict
        self.known[q] = YES if yes else NO
        for a in w.settles[q]:
            if verdict[a] != UNKNOWN:
                continue
            if yes:
                verdict[a] = TRUE
                self.suppressed |= w.unless_mask[a]
                self.enabled |= w.given_mask[a]
            elif all(self.known[j] == NO for j in w.asks[a]):
                verdict[a] = FALSE
            else:
                continue
            for g in w.gates_asking[a]:
                if not self._queued[g]:
                    self._queued[g] = 1
                    heappush(self._dirty, g)

    def _change(self, b: int, value: int) -> None:
        if self.value[b] != value:
            self.value[b] = value
            self._spread(b)

    def _touch(self, b: int) -> None:
        self.touched.add(b)
        self._hot.add(b)

    def _spread(self, b: int) -> None:
        w, queued = self.w, self._queued
        for g in w.gate_readers[b]:
            if not queued[g]:
                queued[g] = 1
                heappush(self._dirty, g)
        if w.sink_readers[b]:
            self.touched.update(w.sink_readers[b])
            self._hot.update(w.coil_readers[b])

    def propagate(self) -> None:
        dirty, queued = self._dirty, self._queued
        while dirty:
            g = heappop(dirty)
            queued[g] = 0
            if self.evaluate(g):
                self._spread(g)

    def evaluate(self, g: int) -> bool:
        """Evaluate a gate; whether what others read of it changed."""
        w, value, role = self.w, self.value, self.role
        new = own = 0
        if not self.suppressed >> g & 1:
            k, true, maybe, best = w.k[g], 0, 0, NO_ROLE
            for j, inverted in w.inputs[g]:
                v = value[j]
                if v >= UNKNOWN:
                    maybe += 1
                elif v != inverted:
                    true += 1
                    r = 0 if inverted else role[j]
                    best = min(best, r)
            if true >= k:
                new = self._own_answer(g)
                if new == TRUE:
                    own = max(w.rank[g], best if k == 1 else self._kth_role(g, k))
            elif true + maybe >= k and self._possible(g):
                new = UNKNOWN
        old, before = value[g], role[g]
        value[g], role[g] = new, own
        if new == OPEN:
            self.opens.add(g)
        elif old == OPEN:
            self.opens.discard(g)
        return min(new, UNKNOWN) != min(old, UNKNOWN) or (new == TRUE and own != before)

    def _own_answer(self, g: int) -> int:
        """What failures make of a gate whose inputs make it true."""
        w, verdict = self.w, self.verdict
        given = w.given[g]
        enabled = not given or self.enabled >> g & 1
        if not enabled and not any(verdict[a] == UNKNOWN for a in given):
            return FALSE
        for a in w.unless[g]:
            if verdict[a] == UNKNOWN:
                return OPEN
        return TRUE if enabled else OPEN

    def _possible(self, g: int) -> bool:
        given = self.w.given[g]
        return not given or bool(self.enabled >> g & 1) or any(self.verdict[a] == UNKNOWN for a in given)

    def _kth_role(self, g: int, k: int) -> int:
        if k <= 0:
            return 0
        value, role = self.value, self.role
        return sorted(0 if i else role[j] for j, i in self.w.inputs[g] if value[j] < UNKNOWN and value[j] != i)[k - 1]

    def reads(self, b: int, place: int) -> bool | None:
        """What an input of a block reads; None while it is unknown."""
        items = self.w.inputs[b]
        if not items:
            return self.w.k[b] <= 0
        j, inverted = items[place]
        v = self.value[j]
        return None if v >= UNKNOWN else v != inverted

    # --- questions -----------------------------------------------------------------------

    def coils(self, b: int) -> list[int]:
        return [j for j, _ in self.w.inputs[b][: self.w.coils[b]]]

    def tripping(self, b: int) -> bool:
        return any(self.value[j] == TRUE for j in self.coils(b))

    def _ready(self) -> int:
        """The first breaker with a coil newly energised, or -1."""
        for b in sorted(self._hot):
            if not self.decided >> self.w.place[b] & 1 and self.tripping(b):
                return b
            self._hot.discard(b)
        return -1

    def is_live(self, b: int) -> bool:
        place = self.w.place[b]
        return bool(self.live & (self.w.reach_mask[b] if place < 0 else 1 << place))

    def read_by(self, b: int) -> list[int]:
        """The inputs a sink depends on now: a latch at rest reads no reset until it is being set."""
        items = self.w.inputs[b]
        if self.w.kind[b] is not Kind.LATCH:
            return [j for j, _ in items]
        if self.value[b] == TRUE:
            return [items[1][0]] if len(items) > 1 else []
        if len(items) == 1:
            return [items[0][0]]
        if self.reads(b, 1):
            return []
        return [items[0][0]] if self.reads(b, 0) is not True else [items[1][0]]

    def question_of(self, g: int) -> int:
        w = self.w
        for a in (*w.unless[g], *w.given[g]):
            if self.verdict[a] == UNKNOWN:
                return next(q for q in w.asks[a] if self.known[q] == NOT_KNOWN)
        raise AssertionError("an open gate has an open question")  # a defect of ours, not of the input

    def _energise(self, b: int) -> int:
        """Ask the breaker's own modes and commit it (R6); a question, or -1 once done."""
        w, place = self.w, self.w.place[b]
        late, opens, interrupts = False, True, True
        for mode, questions, certain in w.breaker_modes[place]:
            hit = bool(certain)
            for q in () if certain else questions:
                if self.known[q] == NOT_KNOWN:
                    return q
                if self.known[q] == YES:
                    hit = True
                    break
            if hit:
                opens, late, interrupts = mode != 0, mode == 1, mode != 2
                break
        self._energising = -1
        bit = 1 << place
        self.decided |= bit
        if not w.closable[place]:
            self.live &= ~bit
        if opens:
            self._commit(b, place, late=late, interrupts=interrupts)
        return -1

    def _commit(self, b: int, place: int, *, late: bool, interrupts: bool) -> None:
        w = self.w
        energised = [j for j in self.coils(b) if self.value[j] == TRUE]
        coil = min(energised, key=lambda j: (self.role[j], w.names[j]))
        start = w.opening(place, late)
        if self.pending[b]:
            self.drop(b)
        bit = 1 << place
        self.interrupting = self.interrupting | bit if interrupts else self.interrupting & ~bit
        self.stage[place] = OPENING
        self.commits.append(Commit(place, self.role[coil], via(self, coil), interrupts, start))
        self.start(b, TO_FALSE, start)
