"""The settled logic of one pass: three-valued gates, and questions asked as late as they matter (R4).

A gate is unknown while its inputs make it true and a failure that bears on it is not
answered. Unknowns travel; when a timer, a latch, a coil or an observed output that
can still influence something would read one, the gates behind it are found and one
question is asked. Then everything settles again.
"""

from __future__ import annotations

import heapq

from schemesim.engine.answers import Answers
from schemesim.engine.case import AtRest, Case
from schemesim.engine.program import Kind
from schemesim.engine.record import Recorder
from schemesim.engine.roles import better, open_behind, via
from schemesim.engine.rules import FALSE, TRUE, UNKNOWN
from schemesim.scheme.model import FailureMode, Probability, Role

_NONE = len(Role)
"""Behind every role."""

WANTS_ANSWER = -1
"""Stands for the role of a gate that is unknown for want of an answer only."""

Commitment = tuple[int, Role, str, int]
"""Breaker block, best role, the trip output that did it, and the log row of its coil."""


class Logic:
    """Signals, answers and the questions still open, of one run."""

    def __init__(self, case: Case, answers: Answers, record: Recorder) -> None:
        n = len(case.kind)
        self.case, self.record = case, record
        self._answers = answers
        self.value = [FALSE] * n
        self.rank = [0] * n
        self.row = [-1] * n
        self.asked: list[tuple[int, bool]] = []
        self.probabilities: list[Probability] = []
        self.operated: dict[str, int] = {}
        self.mode_of: dict[int, FailureMode | None] = {}
        self._known: dict[int, bool] = {}
        self._verdict = [UNKNOWN if v is None else int(v) for v in case.certain]
        self._live = (1 << (len(case.breakers) + len(case.observed))) - 1
        self._bit = {b: 1 << i for i, b in enumerate(case.breakers)}
        self._watch = {g: 1 << (len(case.breakers) + i) for i, g in enumerate(case.observed)}
        self._touched: set[int] = set()
        self._hot: set[int] = set()
        self._dirty: list[int] = []
        self._queued = [False] * n
        self._open: set[int] = set()
        self._shown = [False] * n
        for b in case.breakers:
            self.value[b] = TRUE

    # --- signals ------------------------------------------------------------------------

    def change(self, block: int, value: int, cause: int) -> None:
        """A block that holds state changes its output."""
        if self.value[block] != value:
            self.value[block] = value
            self.row[block] = self.record.changed(block, value, cause)
            self._spread(block)

    def input_state(self, block: int, place: int) -> bool | None:
        """What an input reads: true, false, or None while unknown (nothing depends on it then)."""
        items = self.case.inputs[block]
        if not items:
            return self.case.k[block] <= 0
        source, inverted = items[place]
        value = self.value[source]
        return None if value == UNKNOWN else (value == TRUE) != inverted

    def touched_sinks(self) -> list[int]:
        """Timers, latches and breakers an input of which changed in this pass, in order."""
        touched = sorted(self._touched)
        self._touched.clear()
        return touched

    def tripping(self, block: int) -> bool:
        """Whether a coil of the breaker is energised."""
        return any(self.value[j] == TRUE for j, _ in self._coils(block))

    def touch(self, block: int) -> None:
        """The block has to look at its inputs again in this pass."""
        self._touched.add(block)
        self._hot.add(block)

    def unresolve(self, block: int) -> None:
        """The breaker has closed again: its trips matter once more."""
        self.mode_of.pop(block, None)
        self.touch(block)

    def matters(self, block: int) -> bool:
        """Whether the output of a block may still influence an opening or an observed output."""
        return bool(self._live & self.case.reach_mask[block])

    # --- settling -----------------------------------------------------------------------

    def settle(self, now: int) -> list[Commitment]:
        """Settle the gates, asking what must be asked; returns breakers newly committed."""
        commitments: list[Commitment] = []
        while True:
            self._propagate()
            ready = self._ready_breaker()
            if ready is not None:
                gate = better(self.case, self.value, self.rank, self._open, ready)
                if gate is None:
                    commitments.append(self._energise(ready))
                    continue
            else:
                gate = self._next_gate()
            if gate is None:
                break
            self._ask_gate(gate)
        for g, bit in self._watch.items():
            if self._live & bit and self.value[g] == TRUE:
                self.operated[self.case.names[g]] = now
                self._live &= ~bit
        return commitments

    def rest(self) -> None:
        """Take the state before the event: breakers closed, nothing sensed, and what reads true has operated.

        Timers and latches that would read an unknown ask as they do in a run. A case whose
        state of rest needs no answer keeps it: it is the same for every run.
        """
        if self.case.at_rest:
            kept = self.case.at_rest[0]
            self.value, self.rank, self._shown = list(kept.value), list(kept.rank), list(kept.shown)
            self._open, self._touched = set(kept.open), set(kept.touched)
            self._hot = self._touched.intersection(self.case.breakers)
            return
        for group in self.case.resting:
            for _ in range(2 * len(group)):
                changed = [self._rest(i) for i in group]
                if not any(changed):
                    break
        self._touched.update(i for i in range(len(self.value)) if self._unsettled(i))
        self._hot = self._touched.intersection(self.case.breakers)
        if not self.asked:
            self.case.at_rest.append(
                AtRest(
                    value=tuple(self.value),
                    rank=tuple(self.rank),
                    shown=tuple(self._shown),
                    open=frozenset(self._open),
                    touched=frozenset(self._touched),
                )
            )

    def _unsettled(self, i: int) -> bool:
        """Whether a sink at rest has to look at its inputs when the event begins."""
        kind = self.case.kind[i]
        if kind in (Kind.GATE, Kind.SENSE):
            return False
        inputs = self.case.inputs[i]
        if kind is Kind.TIMER and inputs:
            return self.input_state(i, 0) != (self.value[i] == TRUE)
        return not inputs or any(self.value[j] != FALSE or inverted for j, inverted in inputs)

    def _rest(self, i: int) -> bool:
        """Bring one block to its state of rest; True if it changed."""
        old, rank = self.value[i], 0
        if self.case.kind[i] is Kind.GATE:
            self._take(i)
            self._shown[i] = self.value[i] == TRUE
            return self.value[i] != old
        while self.matters(i):
            unknown = [j for j in self._read_by(i) if self.value[j] == UNKNOWN]
            if not unknown:
                break
            behind = [g for j in unknown for g in open_behind(self.case, self.value, self._open, j)]
            self._ask_gate(min(behind, key=self.case.order.__getitem__))
            self._propagate(at_rest=True)
        state = self.input_state(i, 0)
        if self.case.kind[i] is Kind.LATCH:
            reset = len(self.case.inputs[i]) > 1 and self.input_state(i, 1)
            state = not reset and (state or old == TRUE)
        if self.case.inputs[i]:
            source, inverted = self.case.inputs[i][0]
            rank = 0 if inverted else self.rank[source]
        self.value[i], self.rank[i] = (TRUE, rank) if state else (FALSE, 0)
        return self.value[i] != old

    def _spread(self, block: int) -> None:
        """Tell those who read a signal that it has changed."""
        case, queued = self.case, self._queued
        for c in case.gate_readers[block]:
            if not queued[c]:
                queued[c] = True
                heapq.heappush(self._dirty, c)
        if case.sink_readers[block]:
            self._touched.update(case.sink_readers[block])
            self._hot.update(case.coil_readers[block])

    def _propagate(self, at_rest: bool = False) -> None:
        """Evaluate gates in order until nothing changes; keeps ``row`` and ``open`` up to date."""
        dirty, queued, value = self._dirty, self._queued, self.value
        told = self.record.keep and not at_rest
        while dirty:
            g = heapq.heappop(dirty)
            queued[g] = False
            changed = self._take(g)
            if told and self.case.unless[g]:
                self.record.prevented(g, value, self._verdict)
            if changed:
                new = value[g]
                if new != UNKNOWN and self._shown[g] != (new == TRUE):
                    self._shown[g] = new == TRUE
                    if told:
                        self.row[g] = self.record.gate(g, new, value, self.row)
                self._spread(g)

    def _take(self, g: int) -> bool:
        """Evaluate a gate from its inputs and the answers known.

        True if its value changed, or the role in which it is true. A gate that is unknown for
        want of an answer only is open; its role is ``WANTS_ANSWER``.
        """
        case, value, verdict, ranks = self.case, self.value, self._verdict, self.rank
        new, rank = FALSE, 0
        failed = False
        for a in case.unless[g]:
            if verdict[a] == TRUE:
                failed = True
                break
        if not failed:
            k = case.k[g]
            true = unknown = 0
            best = _NONE
            for j, inverted in case.inputs[g]:
                v = value[j]
                if v == UNKNOWN:
                    unknown += 1
                elif v != inverted:  # the values are FALSE = 0 and TRUE = 1
                    true += 1
                    r = 0 if inverted else ranks[j]
                    if r < best:
                        best = r
            if true >= k:
                new, rank = self._with_answers(g)
                if new == TRUE:
                    rank = max(rank, best if k == 1 else self._kth_rank(g, k))
            elif true + unknown >= k and self._possible(g):
                new = UNKNOWN
        old, before = value[g], self.rank[g]
        if rank == WANTS_ANSWER:
            self._open.add(g)
        elif before == WANTS_ANSWER:
            self._open.discard(g)
        value[g], self.rank[g] = new, rank
        return new != old or (new == TRUE and rank != before)

    def _with_answers(self, g: int) -> tuple[int, int]:
        """Value and own role of a gate that its inputs make true and no known failure suppresses."""
        verdict = self._verdict
        given = [verdict[a] for a in self.case.given[g]]
        if given and TRUE not in given and UNKNOWN not in given:
            return FALSE, 0
        for a in self.case.unless[g]:
            if verdict[a] == UNKNOWN:
                return UNKNOWN, WANTS_ANSWER
        if given and TRUE not in given:
            return UNKNOWN, WANTS_ANSWER
        return TRUE, self.case.rank[g]

    def _possible(self, g: int) -> bool:
        """Whether what a gate requires of failures has not been refused."""
        given = self.case.given[g]
        return not given or any(self._verdict[a] != FALSE for a in given)

    def _kth_rank(self, g: int, k: int) -> int:
        """The best role in which ``k`` of the true inputs are true."""
        ranks = sorted(
            0 if inverted else self.rank[j]
            for j, inverted in self.case.inputs[g]
            if self.value[j] != UNKNOWN and (self.value[j] == TRUE) is not inverted
        )
        return ranks[k - 1] if k > 0 else 0

    # --- questions ----------------------------------------------------------------------

    def _coils(self, block: int) -> tuple[tuple[int, bool], ...]:
        return self.case.inputs[block][: self.case.coils[block]]

    def _ready_breaker(self) -> int | None:
        """The first breaker with a coil newly energised and not yet dealt with."""
        for b in sorted(self._hot):
            if b not in self.mode_of and self.tripping(b):
                return b
            self._hot.discard(b)
        return None

    def _next_gate(self) -> int | None:
        """The gate whose question comes next: the first in order that a live sink, or an output observed, waits for."""
        if not self._open:
            return None
        case, value, live, waiting = self.case, self.value, self._live, self._open
        stack = [g for g, bit in self._watch.items() if live & bit and value[g] == UNKNOWN] if self._watch else []
        for c in self._touched:
            if self._is_live(c):
                stack += [j for j in self._read_by(c) if value[j] == UNKNOWN]
        best, first, seen = None, len(case.program.order), set[int]()
        while stack:
            g = stack.pop()
            if g in seen:
                continue
            seen.add(g)
            if g not in waiting:
                stack += [j for j, _ in case.inputs[g] if value[j] == UNKNOWN]
            elif case.order[g] < first and live & case.reach_mask[g]:
                best, first = g, case.order[g]
        return best

    def _read_by(self, block: int) -> list[int]:
        """The inputs a sink depends on now: a latch at rest reads no reset until it is being set."""
        inputs = self.case.inputs[block]
        if self.case.kind[block] is Kind.LATCH:
            if self.value[block] == TRUE:
                return [inputs[1][0]] if len(inputs) > 1 else []
            if len(inputs) == 1:
                return [inputs[0][0]]
            if self.input_state(block, 1):
                return []
            return [inputs[0][0]] if self.input_state(block, 0) is not True else [inputs[1][0]]
        return [j for j, _ in inputs]

    def _is_live(self, block: int) -> bool:
        if self.case.kind[block] is Kind.BREAKER:
            return bool(self._live & self._bit[block])
        return bool(self._live & self.case.reach_mask[block])

    def _ask_gate(self, g: int) -> None:
        for a in (*self.case.unless[g], *self.case.given[g]):
            if self._verdict[a] == UNKNOWN:
                self._ask(next(q for q in self.case.asks[a] if q not in self._known), self.row_behind(g))
                return
        raise AssertionError("an unknown gate has an open question")  # a defect of ours, not of the input

    def row_behind(self, g: int) -> int:
        """The latest row among the inputs of a block."""
        return max((self.row[j] for j, _ in self.case.inputs[g]), default=-1)

    def _ask(self, q: int, cause: int) -> bool:
        """Ask one question, conditional on the modes of its component already refused."""
        question = self.case.questions[q]
        siblings = self.case.program.siblings[q]
        refused = [self.case.questions[j].probability for j in siblings if self._known.get(j) is False]
        probability = question.probability
        if refused:
            probability = probability / (1 - sum(refused))
        yes = self._answers.answer(q, probability)
        self.asked.append((q, yes))
        self.probabilities.append(probability)
        self.record.answer(q, yes, cause)
        self._know(q, yes)
        if yes:
            for j in siblings:
                if j not in self._known:
                    self._know(j, False)
        return yes

    def _know(self, q: int, yes: bool) -> None:
        self._known[q] = yes
        for a in self.case.settles.get(q, ()):
            if self._verdict[a] != UNKNOWN:
                continue
            if yes:
                self._verdict[a] = TRUE
            elif all(self._known.get(j) is False for j in self.case.asks[a]):
                self._verdict[a] = FALSE
            else:
                continue
            for g in self.case.gates_asking[a]:
                if not self._queued[g]:
                    self._queued[g] = True
                    heapq.heappush(self._dirty, g)

    def _energise(self, block: int) -> Commitment:
        """A coil is energised: the breaker's own modes are asked, and its trips matter no more."""
        energised = [j for j, _ in self._coils(block) if self.value[j] == TRUE]
        coil = min(energised, key=lambda j: (self.rank[j], self.case.names[j]))
        self.mode_of[block] = self._breaker_mode(block, self.row[coil])
        place = self.case.breakers.index(block)
        if not self.case.closable[place]:
            self._live &= ~self._bit[block]
        name = self.case.names[via(self.case, self.value, self.rank, coil)]
        return block, Role(self.rank[coil]), name, self.row[coil]

    def _breaker_mode(self, block: int, cause: int) -> FailureMode | None:
        for mode, questions, certain in self.case.breaker_asks[self.case.breakers.index(block)]:
            if certain:
                return mode
            for q in questions:
                yes = self._known[q] if q in self._known else self._ask(q, cause)
                if yes:
                    return mode
        return None
