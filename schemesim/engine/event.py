"""The event engine, on SimPy: the readable definition of the rules.

Pending things are SimPy timeouts. What is due at one instant is collected first; once
nothing else is due then, one pass runs (rule R2): expiries, topology, sensing, logic
with its questions, starts and cancellations. Zero-delay consequences are timeouts of
zero, hence a further pass of the same instant.
"""

from __future__ import annotations

from collections.abc import Callable, Generator, Iterable
from typing import Any

import simpy

from schemesim.engine.answers import Answers
from schemesim.engine.case import Case
from schemesim.engine.discs import Discs
from schemesim.engine.logic import Logic
from schemesim.engine.outcome import Opening, Outcome, Run, status_of
from schemesim.engine.program import Kind
from schemesim.engine.record import Recorder
from schemesim.engine.rules import FALSE, MAX_PASSES, TRUE
from schemesim.engine.sensing import NoFault
from schemesim.engine.times import DelayTimes
from schemesim.errors import RunError, nearest, reject
from schemesim.scheme.conditions import External
from schemesim.scheme.delays import Delay
from schemesim.scheme.model import Breaker, FailureMode, Role, Sense
from schemesim.ticks import from_ms

DEFAULT_HORIZON_US = from_ms(10_000)

Process = Callable[["EventRun"], Generator[simpy.Event, Any, Any]]


def run_event(
    case: Case,
    answers: Answers,
    *,
    times: DelayTimes | None = None,
    log: bool = False,
    horizon_us: int = DEFAULT_HORIZON_US,
    processes: Iterable[Process] = (),
) -> Run:
    """Run one case to its end with the event engine.

    Parameters
    ----------
    case : Case
    answers : Answers
        Who answers the questions.
    times : DelayTimes or None
        Draws random delays; nominal ones by default.
    log : bool
        Keep the log, with a cause for each row.
    horizon_us : int
        A run with something still pending then ends there and says so.
    processes : iterable of callables
        SimPy processes of the user's own: each is called with the run and returns a
        generator. See :meth:`EventRun.value` and :meth:`EventRun.force`.

    Returns
    -------
    Run

    Raises
    ------
    RunError
        If an instant does not settle; the blocks that keep it going are named.
    """
    return EventRun(case, answers, times, log, horizon_us, tuple(processes)).finish()


class EventRun:
    """One run in progress; ``env`` is its SimPy environment, in microseconds."""

    def __init__(
        self,
        case: Case,
        answers: Answers,
        times: DelayTimes | None,
        log: bool,
        horizon_us: int,
        processes: tuple[Process, ...],
    ) -> None:
        self.case = case
        self.env = simpy.Environment()
        self.horizon_us = horizon_us
        self._times = times
        self.record = Recorder(case, log)
        self.logic = Logic(case, answers, self.record)
        n = len(case.kind)
        self._token = [0] * n
        self._target = [FALSE] * n
        self._due_time = [0] * n
        self._start_row = [-1] * n
        self._serial = 0
        self._waiting: dict[int, list[tuple[int, int]]] = {}
        self._pending = 0
        self._expired: list[int] = []
        self._called = False
        self._pass = 0
        self._pass_time = -1
        self._holds = [False] * n
        self._forced: dict[int, bool] = {}
        self._discs = Discs(case)
        self._open_mask = 0
        self._sensed_mask = -1
        self._breaker_bit = {b: 1 << i for i, b in enumerate(case.breakers)}
        self._stage: dict[int, str] = {}
        self._interrupts: dict[int, bool] = {}
        self._openings: dict[str, Opening] = {}
        self._t_clear: int | None = None
        self._fed = False
        self._events = 0
        self._own = bool(processes)
        self._called = True
        for process in processes:
            self.env.process(process(self))

    # --- what a process of the user's own may use -----------------------------------

    def value(self, name: str) -> bool:
        """Whether a signal is true now.

        A block that this event cannot reach is false, but for the 52a of a closed breaker.

        Raises
        ------
        InputError
            If there is no block of that name.
        """
        i = self.case.index.get(name)
        if i is not None:
            return self.logic.value[i] == TRUE
        block = self.case.program.scheme.block.get(name)
        if block is None:
            raise reject("signal", name, "the name of a block", tip=nearest(name, self.case.program.index))
        return isinstance(block, Breaker) and self.case.shut(name)

    def force(self, name: str, state: bool) -> None:
        """Set the condition of a sense block that is declared ``External``.

        Raises
        ------
        InputError
            If the block is no external sense of this case.
        """
        i = self.case.index.get(name)
        block = self.case.program.scheme.block.get(name)
        if i is None or not isinstance(block, Sense) or not isinstance(block.condition, External):
            raise reject("signal", name, "a sense block declared External that leads to a breaker")
        self._forced[i] = state
        self._called = True

    def finish(self) -> Run:
        """Step until nothing is pending or the horizon is reached (rule R20)."""
        env, at_horizon = self.env, False
        while True:
            when = env.peek()
            if self._called and when > env.now:
                self._instant()
                if self._pending == 0 and not self._own:
                    break
                continue
            if when == float("inf"):
                break
            if when > self.horizon_us:
                at_horizon = any(map(self._is_pending, range(len(self._token))))
                break
            env.step()
        return Run(
            outcome=self._outcome(at_horizon),
            asked=tuple(self.logic.asked),
            probabilities=tuple(self.logic.probabilities),
            final_mask=self._open_mask,
            events=self._events,
            log=self.record.finish(at_horizon, self.horizon_us),
        )

    def _is_pending(self, block: int) -> bool:
        """Something is due that still matters: a breaker that moves, or an output that may trip one."""
        moving = self._stage.get(block) in ("opening", "closing")
        return self._token[block] != 0 and (moving or self.logic.matters(block))

    def _outcome(self, at_horizon: bool) -> Outcome:
        fed = self.case.topology(0).fed
        return Outcome(
            status=status_of(isinstance(self.case.event, NoFault), fed, self._t_clear, at_horizon),
            t_clear_us=self._t_clear,
            openings=tuple(sorted(self._openings.values())),
            operated=tuple(sorted(self.logic.operated.items())),
            at_horizon=at_horizon,
        )

    def _start(self, block: int, delay_us: int, target: int) -> None:
        """Have a block take a value after a delay; what is due at one time shares one timeout."""
        self._serial += 1
        self._token[block] = self._serial
        self._target[block] = target
        due = int(self.env.now) + delay_us
        self._due_time[block] = due
        self._pending += 1
        waiting = self._waiting.get(due)
        if waiting is None:
            waiting = self._waiting[due] = []
            timeout = self.env.timeout(delay_us, due)
            timeout.callbacks.append(self._due)
        waiting.append((block, self._serial))

    def _cancel(self, block: int) -> None:
        self._token[block] = 0
        self._pending -= 1

    def _due(self, event: simpy.Event) -> None:
        for block, serial in self._waiting.pop(event._value):
            if self._token[block] == serial:
                self._token[block] = 0
                self._pending -= 1
                self._expired.append(block)
        if self._expired:
            self._called = True

    def _delay(self, block: int, rising: bool) -> int:
        fixed = self.case.fixed[rising][block]
        if fixed is not None:
            return fixed
        delay = (self.case.on if rising else self.case.off)[block]
        return self._time_of(f"{self.case.names[block]} {'on' if rising else 'off'}", delay)

    def _time_of(self, name: str, delay: Delay) -> int:
        return delay.nominal_us if self._times is None else self._times.of(name, delay)

    def _instant(self) -> None:
        """One pass (rule R2)."""
        self._called, now = False, int(self.env.now)
        self._pass = self._pass + 1 if now == self._pass_time else 0
        self._pass_time = now
        expired = sorted(self._expired)
        self._expired.clear()
        self._events += len(expired)
        if self._pass > MAX_PASSES:
            expired = [b for b in expired if b in self._stage or self.logic.matters(b)]  # the others stand still
            if who := [self.case.names[b] for b in expired]:
                raise RunError(f"the instant at {now} us does not settle; still going after {MAX_PASSES} passes: {who}")
        self.record.at(now, self._pass)
        changed = self._pass == 0 and now == 0
        if changed:
            self.record.begin()
            self.logic.rest()
        for block in expired:
            changed |= self._expire(block)
        self._discs.touch(expired, now)
        sensed = self._sense(now) if changed or self._forced else ()
        committed = self.logic.settle(now)
        for b, role, via, row in committed:
            self._commit(b, role, via, row, now)
        self._follow(sensed)

    def _expire(self, block: int) -> bool:
        """Something due takes effect; True if the topology changed."""
        if self.case.kind[block] is not Kind.BREAKER:
            self.logic.change(block, self._target[block], self._start_row[block])
            return False
        stage, bit, name = self._stage[block], self._breaker_bit[block], self.case.names[block]
        if stage == "opening":
            if self._interrupts[block]:
                self._open_mask |= bit
                row = self.record.row(name, "breaker", "opens", self._start_row[block])
            else:
                row = self.record.row(name, "breaker", "opens but does not interrupt", self._start_row[block])
            self.record.topology_row = row
            self._start_row[block] = row
            self._stage[block] = "auxiliary"
            self._start(block, self._delay(block, rising=False), FALSE)
            return self._interrupts[block]
        if stage == "auxiliary":
            self._stage[block] = "open"
            self.logic.change(block, FALSE, self._start_row[block])
            self.logic.touch(block)
            return False
        self._stage[block] = "closed"
        self._open_mask &= ~bit
        self.record.topology_row = self.record.row(name, "breaker", "closes", self._start_row[block])
        self.logic.change(block, TRUE, self.record.topology_row)
        self.logic.unresolve(block)
        return True

    def _sense(self, now: int) -> tuple[int, ...]:
        """Evaluate sensing on the present topology (rules R8, R9); returns senses whose condition changed."""
        state = self.case.topology(self._open_mask)
        changed = []
        for block, truth in (*self.case.changes(self._sensed_mask, self._open_mask), *self._forced.items()):
            if truth != self._holds[block]:
                self._holds[block] = truth
                changed.append(block)
        self._discs.turn(state.rates, now)
        self._sensed_mask = self._open_mask
        if now == 0 and self._pass == 0:
            self._fed = state.fed
        elif self._fed and not state.fed:
            self._fed = False
            if self._t_clear is None:
                self._t_clear = now
            self.record.row(str(self.case.event), "fault", "cleared", self.record.topology_row)
        elif state.fed and not self._fed:
            self._fed = True
            self.record.row(str(self.case.event), "fault", "fed again", self.record.topology_row)
        return tuple(sorted(changed))

    def _commit(self, block: int, role: Role, via: str, row: int, now: int) -> None:
        """A coil is energised: the breaker opens even if the trip falls away (rule R6)."""
        name = self.case.names[block]
        found = self.logic.mode_of[block]
        if found is FailureMode.DOES_NOT_OPEN:
            self.record.row(name, "breaker", "does not open", row)
            return
        delay = self._delay(block, rising=True)
        spec = self.case.program.scheme.block[name]
        if found is FailureMode.OPENS_LATE and isinstance(spec, Breaker) and spec.late_by is not None:
            delay += self._time_of(f"{name} late", spec.late_by)
        if self._token[block]:
            self._cancel(block)
        self._interrupts[block] = found is not FailureMode.DOES_NOT_INTERRUPT
        self._stage[block] = "opening"
        self._start_row[block] = self.record.row(name, "breaker", "committed to open", row)
        self._openings.setdefault(
            name, Opening(now + delay, name, now, role, via, self._interrupts[block])
        )
        self._start(block, delay, FALSE)

    def _follow(self, sensed: tuple[int, ...]) -> None:
        """Blocks whose input rose start; those whose input fell cancel or start their drop-out."""
        case, logic = self.case, self.logic
        for block in self._discs.with_moved(sensed):
            row = -1 if block in self._forced else self.record.topology_row  # a process has no row
            self._follow_input(block, self._holds[block], row, 0)
        for block in logic.touched_sinks():
            kind = case.kind[block]
            if kind is Kind.TIMER:
                state = logic.input_state(block, 0)
                if state is not None and case.inputs[block]:
                    source, inverted = case.inputs[block][0]
                    self._follow_input(block, state, logic.row[source], 0 if inverted else logic.rank[source])
            elif kind is Kind.LATCH:
                self._follow_latch(block)
            elif kind is Kind.BREAKER:
                self._follow_close(block)

    def _follow_input(self, block: int, state: bool, row: int, rank: int) -> None:
        if block in self.case.inverse and self.logic.value[block] == FALSE:
            return self._follow_disc(block, row)
        target = TRUE if state else FALSE
        if self._token[block]:
            if self._target[block] == target:
                return None
            left = self._due_time[block] - int(self.env.now)
            self.record.stopped(block, self._target[block] == TRUE, left, row)
            self._cancel(block)
        if self.logic.value[block] != target:
            if state:
                self.logic.rank[block] = rank
            delay = self._delay(block, rising=state)
            self._start_row[block] = self.record.started(block, state, delay, row)
            self._start(block, delay, target)
        return None

    def _follow_disc(self, block: int, row: int) -> None:
        """An inverse-time block that has not operated goes on at its present speed (rule R10)."""
        due, pending = self._discs.due(block), bool(self._token[block])
        if pending and self._due_time[block] != due:
            self.record.turned(block, self._due_time[block], due, row)
            self._cancel(block)
        if due is not None and not self._token[block]:
            delay = due - int(self.env.now)
            if not pending:
                self._start_row[block] = self.record.started(block, True, delay, row)
            self._start(block, delay, TRUE)

    def _follow_latch(self, block: int) -> None:
        logic = self.logic
        reset = logic.input_state(block, 1) if len(self.case.inputs[block]) > 1 else False
        if reset:
            target, (source, inverted) = FALSE, self.case.inputs[block][1]
        elif logic.input_state(block, 0):
            target, (source, inverted) = TRUE, self.case.inputs[block][0]
        else:
            return
        if self._token[block]:
            if self._target[block] == target:
                return
            self._cancel(block)
        if logic.value[block] != target:
            if target == TRUE:
                logic.rank[block] = 0 if inverted else logic.rank[source]
            self._start_row[block] = logic.row[source]
            self._start(block, 0, target)

    def _follow_close(self, block: int) -> None:
        spec = self.case.program.scheme.block[self.case.names[block]]
        if not isinstance(spec, Breaker) or not spec.close or spec.closing is None:
            return
        place = self.case.coils[block]
        if place == len(self.case.inputs[block]):
            return
        if self._stage.get(block) == "open" and self.logic.input_state(block, place):
            if self.logic.tripping(block):
                return  # trip-free: an energised trip coil keeps it open
            source = self.case.inputs[block][place][0]
            self._stage[block] = "closing"
            self._start_row[block] = self.record.row(spec.name, "breaker", "closing", self.logic.row[source])
            self._start(block, self._time_of(f"{spec.name} close", spec.closing), TRUE)
