"""Fixed delays: rows walk through the automaton of the case, in lockstep.

Every row stands in a state and holds its pending times, one to a slot. A step takes each row to its own next
instant: the earliest time is found, the node that follows is looked up (or worked out, once), questions are
answered, and the times that start or stop are written. Rows never wait for each other and share nothing but
the tables.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from schemesim.engine.automaton import GONE_US, NOT_YET, SLOT_BITS, Table, automaton_of
from schemesim.engine.case import Case
from schemesim.engine.columns import Columns
from schemesim.engine.many import NEVER_US, ManyAnswers, ManyTimes
from schemesim.engine.rules import MAX_PASSES
from schemesim.errors import RunError

if TYPE_CHECKING:
    from numpy.typing import NDArray

_MASK = (1 << SLOT_BITS) - 1
_EMPTY = GONE_US << SLOT_BITS


class Walk:
    """Some rows on their way; arrays of results have one entry for each row, whatever is still walking."""

    def __init__(self, case: Case, rows: NDArray[np.intp], answers: ManyAnswers, times: ManyTimes) -> None:
        self.automaton = automaton_of(case)
        self.rows, self._answers, self._times = rows, answers, times
        n, w = rows.size, self.automaton.w
        self.delays = np.zeros((len(w.delays) + 1, n), dtype=np.int64)
        self._have_delay = np.zeros(len(w.delays) + 1, dtype=np.bool_)
        self._have_delay[-1] = True
        self.yes = np.zeros((len(w.questions), n), dtype=np.int8)
        self._have_answer = np.zeros(len(w.questions), dtype=np.bool_)
        self.t_clear = np.full(n, NEVER_US, dtype=np.int64)
        self.t_open = np.full((len(w.breakers), n), NEVER_US, dtype=np.int64)
        self.t_trip = np.full((len(w.breakers), n), NEVER_US, dtype=np.int64)
        self.code = np.zeros((len(w.breakers), n), dtype=np.int16)
        self.t_operated = np.full((len(w.observed), n), NEVER_US, dtype=np.int64)
        self.last_state = np.zeros(n, dtype=np.int32)
        self.at_horizon = np.zeros(n, dtype=np.bool_)
        self.asked: list[tuple[NDArray[np.intp], NDArray[np.int32]]] | None = None
        self.steps = 0

    def finish(self, horizon_us: int) -> None:
        """Walk every row to its end (rule R20)."""
        auto, n = self.automaton, self.rows.size
        at = np.arange(n)
        t = np.zeros(n, dtype=np.int64)
        node = np.full(n, auto.root, dtype=np.int32)
        due = np.full((auto.capacity, n), _EMPTY, dtype=np.int64)
        passes = np.zeros(n, dtype=np.int16)
        while at.size:
            self.steps += 1
            node = self._answer(node, at)
            due = self._roomy(due)
            self._record(node, at, t)
            self._change(node, at, t, due)
            state = auto.state[node]
            first = due.min(axis=0)
            t, before = first >> SLOT_BITS, t
            passes = np.where(t == before, passes + 1, 0)  # random times that happen to be zero
            if passes.max() > MAX_PASSES:
                raise RunError(f"an instant does not settle; still going after {MAX_PASSES} passes")
            ended = t > horizon_us
            if ended.any():
                gone = np.flatnonzero(ended)
                self.last_state[at[gone]] = state[gone]
                waiting = gone[t[gone] < GONE_US]
                self.at_horizon[at[waiting]] = [auto.moving(s) for s in state[waiting].tolist()]
                stay = np.flatnonzero(~ended)
                at, t, state, first, due = at[stay], t[stay], state[stay], first[stay], due[:, stay]
                passes = passes[stay]
                if not at.size:
                    break
            node = self._due(state, first, t, due)

    def _due(
        self, state: NDArray[np.int32], first: NDArray[np.int64], t: NDArray[np.int64], due: NDArray[np.int64]
    ) -> NDArray[np.int32]:
        """Take what is due out of the slots; the node that each row comes to."""
        auto = self.automaton
        slot = first & _MASK
        due[slot, np.arange(slot.size)] = _EMPTY
        node: NDArray[np.int32] = auto.follows[state, slot]
        tied = np.flatnonzero(due.min(axis=0) >> SLOT_BITS == t)
        node[tied] = 0
        missing = np.flatnonzero(node == NOT_YET)
        if missing.size:
            key = state[missing].astype(np.int64) << SLOT_BITS | slot[missing]
            keys, place = np.unique(key, return_inverse=True)
            found = [auto.after(k >> SLOT_BITS, (k & _MASK,)) for k in keys.tolist()]
            node[missing] = np.array(found, dtype=np.int32)[place]
        for i in tied.tolist():
            also = np.flatnonzero(due[:, i] >> SLOT_BITS == t[i])
            due[also, i] = _EMPTY
            node[i] = auto.after(int(state[i]), tuple(sorted([int(slot[i]), *also.tolist()])))
        return node

    def _answer(self, node: NDArray[np.int32], at: NDArray[np.intp]) -> NDArray[np.int32]:
        """Answer questions until every row is at the end of a step."""
        auto = self.automaton
        wait = np.flatnonzero(auto.question[node] >= 0)
        while wait.size:
            here = node[wait]
            q = auto.question[here]
            if self.asked is not None:
                self.asked.append((self.rows[at[wait]], here))
            if not self._have_answer[q].all():
                for one in np.unique(q[~self._have_answer[q]]).tolist():
                    self.yes[one] = self._answers.answers(auto.w.questions[one], self.rows)
                    self._have_answer[one] = True
            yes = self.yes[q, at[wait]]
            new = auto.child[here, yes]
            missing = np.flatnonzero(new == NOT_YET)
            if missing.size:
                keys, place = np.unique(here[missing].astype(np.int64) * 2 + yes[missing], return_inverse=True)
                found = [auto.answered(k >> 1, bool(k & 1)) for k in keys.tolist()]
                new[missing] = np.array(found, dtype=np.int32)[place]
            node[wait] = new
            wait = wait[auto.question[new] >= 0]
        return node

    def _roomy(self, due: NDArray[np.int64]) -> NDArray[np.int64]:
        missing = self.automaton.capacity - len(due)
        if missing:
            due = np.vstack([due, np.full((missing, due.shape[1]), _EMPTY, dtype=np.int64)])
        return due

    def _start_times(
        self, table: Table, i: int, here: NDArray[np.int32], at: NDArray[np.intp], t: NDArray[np.int64]
    ) -> NDArray[np.int64]:
        """When what starts now will be due."""
        first, second = table.first[i, here], table.second[i, here]
        for part in (first, second):
            if not self._have_delay[part].all():
                for one in np.unique(part[~self._have_delay[part]]).tolist():
                    name, delay = self.automaton.w.delays[one]
                    self.delays[one] = self._times.of(name, delay, self.rows)
                    self._have_delay[one] = True
        when: NDArray[np.int64] = t + table.fixed_us[i, here] + self.delays[first, at]
        if (second >= 0).any():
            when += self.delays[second, at]
        return when

    def _change(
        self, node: NDArray[np.int32], at: NDArray[np.intp], t: NDArray[np.int64], due: NDArray[np.int64]
    ) -> None:
        """Fill and empty slots."""
        table = self.automaton.changes
        count = table.count[node]
        for i in range(int(count.max())):
            some = np.flatnonzero(count > i)
            here = node[some]
            slot = table.what[i, here]
            when = self._start_times(table, i, here, at[some], t[some])
            due[slot, some] = when << SLOT_BITS | slot

    def _record(self, node: NDArray[np.int32], at: NDArray[np.intp], t: NDArray[np.int64]) -> None:
        """Breakers committed, the fault cleared, outputs observed."""
        auto, table = self.automaton, self.automaton.commits
        count = table.count[node]
        for i in range(int(count.max())):
            some = np.flatnonzero(count > i)
            here, row = node[some], at[some]
            place = table.what[i, here]
            when = self._start_times(table, i, here, row, t[some])
            new = np.flatnonzero(self.code[place, row] == 0)
            place, row, here = place[new], row[new], here[new]
            self.t_trip[place, row], self.t_open[place, row] = t[some][new], when[new]
            self.code[place, row] = table.code[i, here]
        clears = np.flatnonzero(auto.clears[node])
        self.t_clear[at[clears]] = t[clears]
        if len(self.t_operated):
            operated = auto.operated[node]
            for i, column in enumerate(self.t_operated):
                some = np.flatnonzero(operated >> i & 1)
                column[at[some]] = t[some]

    def columns(self) -> Columns:
        """What the rows left behind."""
        auto = self.automaton
        codes = {number: way for way, number in auto.codes.items()}
        masks: dict[int, int] = {}
        of_state = np.array([masks.setdefault(s.open_mask, len(masks)) for s in auto.states], dtype=np.int32)
        return Columns(
            t_clear=self.t_clear,
            t_open=self.t_open,
            t_trip=self.t_trip,
            t_operated=self.t_operated,
            code=self.code.astype(np.int32),
            ways=tuple(codes for _ in auto.w.breakers),
            mask=of_state[self.last_state],
            masks=tuple(masks),
            at_horizon=self.at_horizon,
        )
