"""The runs of a case as an automaton: states are met, numbered and looked up, never enumerated beforehand.

A run is a walk: in each state some times are pending; the earliest runs out (or several at once), questions may
be asked, and the next state follows. What happens depends on the state, on which times ran out and on the
answers, never on the times themselves; so it is worked out once (by :mod:`moment` and
:mod:`succession`) and kept as rows of plain tables, which any number of runs walk through.

A *node* is a question or the end of a step. Tables grow as nodes are met.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np

from schemesim.engine.case import Case
from schemesim.engine.moment import Moment
from schemesim.engine.rules import MAX_PASSES
from schemesim.engine.succession import Asks, Step, follow, freeze, rest
from schemesim.engine.values import CLOSING, OPENING, State
from schemesim.engine.wiring import Doomed, Start, doomed, wiring_of
from schemesim.errors import RunError

if TYPE_CHECKING:
    from numpy.typing import NDArray

NOT_YET = -1
"""A node that nobody has come to."""

SLOT_BITS = 8
"""A pending time is kept as its microseconds and the number of its slot, in one integer."""

MAX_SLOTS = 1 << SLOT_BITS

GONE_US = 1 << 53
"""Later than every time."""


class Question(NamedTuple):
    """Which question of the wiring a node asks, and the moment that waits for the answer."""

    question: int
    moment: Moment


class Automaton:
    """See the module.

    Attributes
    ----------
    question : ndarray of int32, shape (nodes,)
        Question a node asks, -1 at the end of a step.
    asks, state_of : lists of int
        ``question`` and ``state`` once more, for one run at a time.
    child : ndarray of int32, shape (nodes, 2)
        Where a no and a yes lead.
    state : ndarray of int32, shape (nodes,)
        State at the end of a step.
    follows : ndarray of int32, shape (states, slots)
        The node to which each slot leads when it runs out alone.
    changes : Table
        The slots that a step fills or empties, and what starts in them.
    commits : Table
        The breakers that a step commits (by place), how, and what they take to open.
    clears : ndarray of bool, shape (nodes,)
    operated : ndarray of int64, shape (nodes,)
        Outputs observed that operate in a step, as a mask.
    """

    def __init__(self, case: Case) -> None:
        self.case = case
        self.w = wiring_of(case)
        self.capacity = 16
        self.steps: dict[int, Step] = {}
        self.asks: list[int] = []
        self.state_of: list[int] = []
        self.states: list[State] = []
        self._number: dict[State, int] = {}
        self._waiting: dict[int, Question] = {}
        self._doomed: dict[int, Doomed] = {}
        self._together: dict[tuple[int, tuple[int, ...]], int] = {}
        self.codes: dict[tuple[int, int, bool], int] = {}
        self.nodes = 0
        size = 256
        self.question = np.full(size, -1, dtype=np.int32)
        self.child = np.full((size, 2), NOT_YET, dtype=np.int32)
        self.state = np.zeros(size, dtype=np.int32)
        self.clears = np.zeros(size, dtype=np.bool_)
        self.operated = np.zeros(size, dtype=np.int64)
        self.changes, self.commits = Table(size, 8), Table(size, 2)
        self.follows = np.full((256, self.capacity), NOT_YET, dtype=np.int32)
        self.may_be_zero = tuple(delay.at(0.0) == 0 for _, delay in self.w.delays)
        starting = sorted(b for b in range(len(self.w.kind)) if self.w.on[b] != Start(0) or self.w.off[b] != Start(0))
        place = {b: i for i, b in enumerate(starting)}
        self.home = tuple(place.get(b, b) for b in range(len(self.w.kind)))
        self.root = self._from_rest([])

    def __repr__(self) -> str:
        return f"Automaton({self.case.event}: {len(self.states)} states, {self.nodes} nodes)"

    # --- looked up, or worked out ---------------------------------------------------------

    def after(self, state: int, slots: tuple[int, ...]) -> int:
        """The node to which a state leads when these slots run out together."""
        alone = len(slots) == 1
        known = int(self.follows[state, slots[0]]) if alone else self._together.get((state, slots), NOT_YET)
        if known != NOT_YET:
            return known
        m = Moment(self.w, self.states[state])
        due = [b for i in slots for b in m.slots[i]]
        for i in slots:
            m.slots[i] = ()
        m.expire(due)
        node = self._grow(m)
        if alone:
            self.follows[state, slots[0]] = node
        else:
            self._together[state, slots] = node
        return node

    def answered(self, node: int, yes: bool) -> int:
        """The node to which an answer leads."""
        known = int(self.child[node, int(yes)])
        if known == NOT_YET:
            q, moment = self._waiting[node]
            m = moment.copy()
            m.answer(q, yes)
            known = self._grow(m)
            self.child[node, int(yes)] = known
            if NOT_YET not in self.child[node].tolist():
                del self._waiting[node]
        return known

    def _from_rest(self, script: list[bool]) -> int:
        """The first node: the state of rest, its questions, and the event."""
        try:
            m = rest(self.w, script)
        except Asks as asks:
            node = self._new_node(asks.question)
            for yes in (False, True):
                self.child[node, int(yes)] = self._from_rest([*script, yes])
            return node
        m.begin()
        return self._grow(m)

    def _grow(self, m: Moment) -> int:
        """Settle; a node for a question, or for the step once nothing more happens at this instant."""
        while True:
            q = m.settle()
            if q >= 0:
                node = self._new_node(q)
                self._waiting[node] = Question(q, m)
                return node
            follow(m)
            at_once = [b for b, s in m.started.items() if s == Start(0)]
            if not at_once or any(self._may_be_at_once(s) for s in m.started.values()):
                return self._end(m)
            m.passes += 1
            if m.passes > MAX_PASSES:
                names = [self.w.names[b] for b in sorted(at_once)]
                raise RunError(f"an instant does not settle; still going after {MAX_PASSES} passes: {names}")
            for b in at_once:
                del m.started[b]
            m.expire(at_once)

    def _may_be_at_once(self, start: Start) -> bool:
        """Whether a random time may happen to be zero, and so belongs to the next pass."""
        return start.first >= 0 and start.fixed_us == 0 and self.may_be_zero[start.first]

    def _end(self, m: Moment) -> int:
        gone = self._doomed.get(m.live)
        if gone is None:
            gone = self._doomed[m.live] = doomed(self.w, m.live)
        step = freeze(m, gone, self.home, self.capacity)
        while step is None:
            self._widen()
            step = freeze(m, gone, self.home, self.capacity)
        node = self._new_node(-1)
        self.steps[node] = step
        self.state[node] = self.state_of[node] = self._number_of(step.state)
        self.clears[node] = step.clears
        self.operated[node] = sum(1 << i for i in step.operated)
        gone_for_good = Start(GONE_US)
        self.changes.put(node, [(slot, 0, start or gone_for_good) for slot, start in step.changes])
        self.commits.put(node, [(c.place, self._code(c.role, c.via, c.interrupts), c.start) for c in step.commits])
        return node

    def _code(self, role: int, via: int, interrupts: bool) -> int:
        """A number from 1 on for how a breaker came to be committed."""
        return self.codes.setdefault((role, via, interrupts), len(self.codes) + 1)

    def _number_of(self, state: State) -> int:
        number = self._number.get(state)
        if number is None:
            number = self._number[state] = len(self.states)
            self.states.append(state)
            if number >= len(self.follows):
                self.follows = _taller(self.follows, NOT_YET)
        return number

    def moving(self, number: int) -> bool:
        """Whether something pending in a state matters at the horizon: a breaker moves, or a signal may trip one."""
        state = self.states[number]
        matters = self._doomed[state.live].matters
        blocks = [b for bundle in state.slots for b in bundle]
        moves = [state.stage[self.w.place[b]] in (OPENING, CLOSING) for b in blocks if self.w.place[b] >= 0]
        return any(moves) or any(matters[b] for b in blocks)

    def _new_node(self, question: int) -> int:
        node = self.nodes
        if node >= len(self.question):
            self.question, self.child = _taller(self.question, -1), _taller(self.child, NOT_YET)
            self.state, self.clears = _taller(self.state, 0), _taller(self.clears, 0)
            self.operated = _taller(self.operated, 0)
            self.changes.grow()
            self.commits.grow()
        self.question[node] = question
        self.asks.append(question)
        self.state_of.append(-1)
        self.nodes += 1
        return node

    def _widen(self) -> None:
        """More slots; states already met keep theirs."""
        if self.capacity >= MAX_SLOTS:
            raise RunError(f"more than {MAX_SLOTS} times pending at once")
        self.follows = np.hstack([self.follows, np.full_like(self.follows, NOT_YET)])
        self.capacity *= 2


def automaton_of(case: Case) -> Automaton:
    """The automaton of a case, with the states met so far."""
    known = case.shelf.get("automaton")
    if not isinstance(known, Automaton):
        known = case.shelf["automaton"] = Automaton(case)
    return known


class Table:
    """A few entries for each node: (what, code, start), as columns of which the first ``count`` are in use.

    All arrays but ``count`` have the shape (most entries, nodes).
    """

    def __init__(self, nodes: int, width: int) -> None:
        self.count = np.zeros(nodes, dtype=np.int32)
        self.what = np.zeros((width, nodes), dtype=np.int64)
        self.code = np.zeros((width, nodes), dtype=np.int16)
        self.fixed_us = np.zeros((width, nodes), dtype=np.int64)
        self.first = np.full((width, nodes), -1, dtype=np.int32)
        self.second = np.full((width, nodes), -1, dtype=np.int32)

    def put(self, node: int, entries: list[tuple[int, int, Start]]) -> None:
        """The entries of a node."""
        self.count[node] = len(entries)
        while len(entries) > len(self.what):
            for name, fill in _COLUMNS:
                old = getattr(self, name)
                setattr(self, name, np.vstack([old, np.full_like(old, fill)]))
        for i, (what, code, start) in enumerate(entries):
            self.what[i, node], self.code[i, node], self.fixed_us[i, node] = what, code, start.fixed_us
            self.first[i, node], self.second[i, node] = start.first, start.second

    def grow(self) -> None:
        """Room for twice as many nodes."""
        self.count = _taller(self.count, 0)
        for name, fill in _COLUMNS:
            old = getattr(self, name)
            setattr(self, name, np.hstack([old, np.full_like(old, fill)]))


_COLUMNS = (("what", 0), ("code", 0), ("fixed_us", 0), ("first", -1), ("second", -1))


def _taller(table: NDArray[Any], fill: int) -> NDArray[Any]:
    """A table with room for twice as many rows."""
    return np.concatenate([table, np.full_like(table, fill)])
