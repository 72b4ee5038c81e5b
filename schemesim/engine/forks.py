"""One run after another through the automaton of a case, each from where it parts from one that ran before.

A run under "no to everything" stops at each question for a moment; the state it is in there is kept. A run
that answers yes to that question goes on from it, so that what they have in common is run once. Random delays
are taken at their nominal values.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

from schemesim.engine.automaton import GONE_US, SLOT_BITS, automaton_of
from schemesim.engine.case import Case
from schemesim.engine.outcome import Opening, Outcome, Status
from schemesim.engine.rules import MAX_PASSES
from schemesim.engine.sensing import NoFault
from schemesim.engine.wiring import Start, wiring_of
from schemesim.errors import RunError
from schemesim.scheme.model import Role

_MASK = (1 << SLOT_BITS) - 1

Past = tuple["Past", Opening] | None
"""Openings so far, the last one first."""


class Paused(NamedTuple):
    """A run at a node: the time, what is due (time and slot in one number), and what has happened so far."""

    node: int
    t_us: int
    due: tuple[int, ...]
    t_clear_us: int | None
    openings: Past
    operated: tuple[tuple[str, int], ...]


class Ran(NamedTuple):
    """A run from a pause to its end: questions and answers with the pause at each, and how it ended."""

    asked: tuple[tuple[int, bool], ...]
    pauses: tuple[Paused, ...]
    outcome: Outcome
    final_mask: int


class Forks:
    """Runs of one case under conditions; see the module."""

    def __init__(self, case: Case, given: Mapping[int, bool], horizon_us: int) -> None:
        self.case, self.automaton, self.w = case, automaton_of(case), wiring_of(case)
        self.given, self.horizon_us = dict(given), horizon_us
        self._takes: dict[Start, int] = {}

    def start(self) -> Paused:
        """Before the event."""
        return Paused(self.automaton.root, 0, (), None, None, ())

    def run(self, paused: Paused, yes: bool | None) -> Ran:
        """Go on from a pause; the question there is answered as told, all others no or as given."""
        auto, questions, given = self.automaton, self.w.questions, self.given
        node, t, due, t_clear, openings, operated = paused
        asked: list[tuple[int, bool]] = []
        pauses: list[Paused] = []
        told, passes = yes, 0
        while True:
            while (q := auto.asks[node]) >= 0:
                question = questions[q]
                answer = given.get(question, False) if told is None else told
                asked.append((question, answer))
                pauses.append(Paused(node, t, due, t_clear, openings, operated))
                told = None
                node = auto.answered(node, answer)
            told = None
            step = auto.steps[node]
            for c in step.commits:
                name = self.case.names[self.w.breakers[c.place]]
                if not self.w.closable[c.place] or not _opened(openings, name):
                    via = self.case.names[c.via]
                    opening = Opening(t + self._us(c.start), name, t, Role(c.role), via, c.interrupts)
                    openings = (openings, opening)
            if step.clears and t_clear is None:
                t_clear = t
            for i in step.operated:
                operated = (*operated, (self.case.names[self.case.observed[i]], t))
            if step.changes:
                changed = {slot for slot, _ in step.changes}
                due = (
                    *[d for d in due if d & _MASK not in changed],
                    *[(t + self._us(s)) << SLOT_BITS | slot for slot, s in step.changes if s is not None],
                )
            first = min(due, default=GONE_US << SLOT_BITS) >> SLOT_BITS
            state = auto.state_of[node]
            if first > self.horizon_us:
                at_horizon = bool(due) and bool(auto.moving(state))
                mask = auto.states[state].open_mask
                return Ran(
                    tuple(asked), tuple(pauses), self._outcome(t_clear, openings, operated, at_horizon), mask
                )
            slots = [d & _MASK for d in due if d >> SLOT_BITS == first]
            due = tuple([d for d in due if d >> SLOT_BITS != first])
            passes = passes + 1 if first == t else 0  # random times that are zero at their nominal value
            if passes > MAX_PASSES:
                raise RunError(f"an instant does not settle; still going after {MAX_PASSES} passes")
            t = first
            node = auto.after(state, tuple(sorted(slots)))

    def _us(self, start: Start) -> int:
        """What something takes, random parts at their nominal values."""
        known = self._takes.get(start)
        if known is None:
            more = (self.w.delays[d][1].nominal_us for d in start[1:] if d >= 0)
            known = self._takes[start] = start.fixed_us + sum(more)
        return known

    def _outcome(
        self, t_clear: int | None, past: Past, operated: tuple[tuple[str, int], ...], at_horizon: bool
    ) -> Outcome:
        openings: list[Opening] = []
        while past is not None:
            past, opening = past
            openings.append(opening)
        if isinstance(self.case.event, NoFault):
            status = Status.NO_FAULT
        elif not self.case.topology(0).fed:
            status = Status.NOT_FED
        elif t_clear is not None:
            status = Status.CLEARED
        else:
            status = Status.UNDETERMINED if at_horizon else Status.NOT_CLEARED
        return Outcome(status, t_clear, tuple(sorted(openings)), tuple(sorted(operated)), at_horizon)


def _opened(past: Past, name: str) -> bool:
    """Whether a breaker was committed before."""
    while past is not None:
        past, opening = past
        if opening.breaker == name:
            return True
    return False
