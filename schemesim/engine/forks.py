"""One run after another of a case, each from where it parts from one that ran before.

A run under "no to everything" stops at each question for a moment; the state it is in there may be kept. A run
that answers yes to that question goes on from it, or from the last state kept before it, so that what runs have
in common is run once. Random delays are taken at their nominal values.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import NamedTuple

from schemesim.engine.case import Case
from schemesim.engine.moment import Moment
from schemesim.engine.outcome import Opening, Outcome, status_of
from schemesim.engine.rules import MAX_PASSES
from schemesim.engine.sensing import NoFault
from schemesim.engine.succession import Asks, follow, rest
from schemesim.engine.values import AUXILIARY, CLOSED, CLOSING, OPENING
from schemesim.engine.wiring import Doomed, Start, doomed, wiring_of
from schemesim.errors import RunError
from schemesim.scheme.model import Role

Past = tuple["Past", Opening] | None
"""Openings so far, the last one first."""

Worth = Callable[[int], bool]
"""Whether a run that says yes to this question is likely to be wanted, so that the state there is kept."""


@dataclass(slots=True)
class Going:
    """A run on its way. ``moment`` is None while the state of rest is not found yet: then ``script`` answers it."""

    moment: Moment | None
    script: tuple[bool, ...] = ()
    t_us: int = 0
    due: dict[int, int] | None = None
    t_clear_us: int | None = None
    openings: Past = None
    operated: tuple[tuple[str, int], ...] = ()
    passes: int = 0
    live: int = -1

    def copy(self) -> Going:
        """The same, to go on with another answer."""
        moment = self.moment.copy() if self.moment else None
        return Going(
            moment,
            self.script,
            self.t_us,
            dict(self.due or {}),
            self.t_clear_us,
            self.openings,
            self.operated,
            self.passes,
            self.live,
        )


class Paused(NamedTuple):
    """A run stopped at a question: a state kept at or before it, and the answers given from there on."""

    going: Going
    answers: tuple[bool, ...]


class Ran(NamedTuple):
    """A run from a pause to its end: questions and answers, a pause at each, and how it ended."""

    asked: tuple[tuple[int, bool], ...]
    pauses: tuple[Paused, ...]
    outcome: Outcome
    final_mask: int


class Forks:
    """Runs of one case under conditions; see the module."""

    def __init__(self, case: Case, given: Mapping[int, bool], horizon_us: int) -> None:
        self.case, self.w = case, wiring_of(case)
        self.given, self.horizon_us = dict(given), horizon_us
        self._takes: dict[Start, int] = {}
        self._doomed: dict[int, Doomed] = {}

    def start(self) -> Paused:
        """Before the event."""
        return Paused(Going(None), ())

    def run(self, paused: Paused, yes: bool | None, worth: Worth) -> Ran:
        """Go on from a pause; the question there is answered as told, all others no or as given.

        The questions and pauses of the run begin with the one at the pause.
        """
        going, told = paused.going.copy(), list(paused.answers)
        skip = len(told)
        if yes is not None:
            told.append(yes)
        base, since = paused.going, told[:skip]
        asked: list[tuple[int, bool]] = []
        pauses: list[Paused] = []
        count = 0
        while (q := self._to_question(going)) is not None:
            question = self.w.questions[q]
            answer = told[count] if count < len(told) else self.given.get(question, False)
            if count >= skip:
                if count > skip and question not in self.given and worth(question):
                    base, since = going.copy(), []
                pauses.append(Paused(base, tuple(since)))
                asked.append((question, answer))
                since.append(answer)
            if going.moment is None:
                going.script = (*going.script, answer)
            else:
                going.moment.answer(q, answer)
            count += 1
        mask = going.moment.open_mask if going.moment else 0
        return Ran(tuple(asked), tuple(pauses), self._outcome(going), mask)

    def _to_question(self, going: Going) -> int | None:
        """Go on until a question is met; None at the end of the run (rule R20)."""
        if going.moment is None:
            try:
                going.moment = rest(self.w, list(going.script))
            except Asks as asks:
                return asks.question
            going.moment.begin()
            going.due = {}
        m = going.moment
        while True:
            q = m.settle()
            if q >= 0:
                return q
            follow(m)
            due = self._take(going, m)
            first = min(due.values(), default=None)
            if first is None or first > self.horizon_us:
                return None
            going.passes = going.passes + 1 if first == going.t_us else 0
            expired = [b for b, t in due.items() if t == first]
            if going.passes > MAX_PASSES:
                names = [self.w.names[b] for b in sorted(expired)]
                raise RunError(f"an instant does not settle; still going after {MAX_PASSES} passes: {names}")
            for b in expired:
                del due[b]
            going.t_us = first
            m.expire(expired)

    def _take(self, going: Going, m: Moment) -> dict[int, int]:
        """Take over what the pass has done: openings, clearing, what starts and what stops."""
        t, names = going.t_us, self.w.names
        for c in m.commits:
            name = names[self.w.breakers[c.place]]
            if not self.w.closable[c.place] or not _opened(going.openings, name):
                opening = Opening(t + self._us(c.start), name, t, Role(c.role), names[c.via], c.interrupts)
                going.openings = (going.openings, opening)
        if m.clears and going.t_clear_us is None:
            going.t_clear_us = t
        for i in m.operated:
            going.operated = (*going.operated, (names[self.w.observed[i]], t))
        if going.live != m.live:
            going.live = m.live
            self._leave_out(m)
        pending, started = m.pending, m.started
        due = {b: when for b, when in (going.due or {}).items() if pending[b] and b not in started}
        for b, start in started.items():
            due[b] = t + self._us(start)
        going.due = due
        m.commits, m.operated, m.started, m.clears = [], [], {}, False
        return due

    def _gone(self, live: int) -> Doomed:
        gone = self._doomed.get(live)
        if gone is None:
            gone = self._doomed[live] = doomed(self.w, live)
        return gone

    def _leave_out(self, m: Moment) -> None:
        """Pending blocks that cannot matter any more are dropped."""
        gone = self._gone(m.live)
        for b, moves in enumerate(m.pending):
            if moves and not gone.matters[b]:
                place = self.w.place[b]
                if place < 0:
                    m.drop(b)
                elif m.stage[place] == AUXILIARY and not self.w.closable[place]:
                    m.drop(b)
                    m.stage[place] = CLOSED

    def _us(self, start: Start) -> int:
        """What something takes, random parts at their nominal values."""
        known = self._takes.get(start)
        if known is None:
            more = (self.w.delays[d][1].nominal_us for d in start[1:] if d >= 0)
            known = self._takes[start] = start.fixed_us + sum(more)
        return known

    def _outcome(self, going: Going) -> Outcome:
        m = going.moment
        matters = self._gone(m.live).matters if m else b""
        at_horizon = any(
            matters[b] or (self.w.place[b] >= 0 and m is not None and m.stage[self.w.place[b]] in (OPENING, CLOSING))
            for b in going.due or {}
        )
        openings: list[Opening] = []
        past = going.openings
        while past is not None:
            past, opening = past
            openings.append(opening)
        fed = self.case.topology(0).fed
        status = status_of(isinstance(self.case.event, NoFault), fed, going.t_clear_us, at_horizon)
        operated = tuple(sorted(going.operated))
        return Outcome(status, going.t_clear_us, tuple(sorted(openings)), operated, at_horizon)


def _opened(past: Past, name: str) -> bool:
    """Whether a breaker was committed before."""
    while past is not None:
        past, opening = past
        if opening.breaker == name:
            return True
    return False
