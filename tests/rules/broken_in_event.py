"""One rule after the other broken in the event engine."""

from __future__ import annotations

from collections.abc import Iterable

import pytest

from schemesim.engine.discs import Discs
from schemesim.engine.event import EventRun
from schemesim.engine.inverse import Motion
from schemesim.engine.logic import Commitment, Logic
from schemesim.engine.program import Kind
from schemesim.engine.rules import FALSE, TRUE
from schemesim.scheme.model import FailureMode, Role
from tests.rules.agree import compare_inverse
from tests.rules.broken_rules import Broken, Patch, by_name


def _ties_the_other_way(patch: Patch) -> None:
    """R3: a timer that runs out when its input falls has not operated."""
    instant = EventRun._instant

    def broken(run: EventRun) -> None:
        timers = [b for b in run._expired if run.case.kind[b] is Kind.TIMER and run._target[b] == TRUE]
        if len(timers) < len(run._expired):
            run._expired = [b for b in run._expired if b not in timers]
            for b in timers:  # one pass behind what is due with them
                run._start(b, 0, TRUE)
        instant(run)

    patch.setattr(EventRun, "_instant", broken)


def _set_wins(patch: Patch) -> None:
    """R11, R13: a latch that is set and reset at once is reset."""
    follow = EventRun._follow_latch

    def broken(run: EventRun, block: int) -> None:
        if run.logic.input_state(block, 0) and run.logic.value[block] == FALSE and not run._token[block]:
            run._start(block, 0, TRUE)
        elif not run.logic.input_state(block, 0):
            follow(run, block)

    patch.setattr(EventRun, "_follow_latch", broken)


def _never_cancelled(patch: Patch) -> None:
    """R2: a timer whose input falls before it has run out stops."""

    def broken(run: EventRun, block: int, state: bool, row: int, rank: int) -> None:  # noqa: ARG001
        target = TRUE if state else FALSE
        if not run._token[block] and run.logic.value[block] != target:
            run.logic.rank[block] = rank if state else run.logic.rank[block]
            run._start(block, run._delay(block, rising=state), target)

    patch.setattr(EventRun, "_follow_input", broken)


def _no_drop_out(patch: Patch) -> None:
    """R2: what drops out takes its time."""
    delay = EventRun._delay

    def broken(run: EventRun, block: int, rising: bool) -> int:
        return delay(run, block, rising) if rising or run.case.kind[block] is Kind.BREAKER else 0

    patch.setattr(EventRun, "_delay", broken)


def _no_auxiliary_time(patch: Patch) -> None:
    """R11: the auxiliary contact follows the main one after its own time."""
    delay = EventRun._delay

    def broken(run: EventRun, block: int, rising: bool) -> int:
        return 0 if not rising and run.case.kind[block] is Kind.BREAKER else delay(run, block, rising)

    patch.setattr(EventRun, "_delay", broken)


def _coil_falls_away(patch: Patch) -> None:
    """R6: a breaker once committed opens, even if the trip falls away."""
    follow = EventRun._follow

    def broken(run: EventRun, sensed: tuple[int, ...]) -> None:
        follow(run, sensed)
        for b, stage in list(run._stage.items()):
            if stage == "opening" and run._token[b] and not run.logic.tripping(b):
                run._cancel(b)
                del run._openings[run.case.names[b]], run._stage[b]

    patch.setattr(EventRun, "_follow", broken)


def _sensed_once(patch: Patch) -> None:
    """R9: sensing is evaluated anew after every opening."""
    sense = EventRun._sense

    def broken(run: EventRun, now: int) -> tuple[int, ...]:
        changed = sense(run, now)
        return () if run._open_mask else changed

    patch.setattr(EventRun, "_sense", broken)


def _always_interrupts(patch: Patch) -> None:
    """R7: a breaker that opens but does not interrupt still carries."""
    expire = EventRun._expire

    def broken(run: EventRun, block: int) -> bool:
        run._interrupts[block] = True
        return expire(run, block)

    patch.setattr(EventRun, "_expire", broken)


def _late_in_time(patch: Patch) -> None:
    """R5: a breaker that opens late takes longer."""
    mode = Logic._breaker_mode

    def broken(logic: Logic, block: int, cause: int) -> FailureMode | None:
        found = mode(logic, block, cause)
        return None if found is FailureMode.OPENS_LATE else found

    patch.setattr(Logic, "_breaker_mode", broken)


def _worst_role(patch: Patch) -> None:
    """A breaker counts as tripped in the best role among its coils."""
    energise = Logic._energise

    def broken(logic: Logic, block: int) -> Commitment:
        worst = max(logic.rank[j] for j, _ in logic._coils(block) if logic.value[j] == TRUE)
        b, _, name, row = energise(logic, block)
        return b, Role(worst), name, row

    patch.setattr(Logic, "_energise", broken)


def _asked_by_name(patch: Patch) -> None:
    """R4: questions are asked nearest the breaker first."""

    next_gate = Logic._next_gate

    def broken(logic: Logic) -> int | None:
        case = logic.case
        kept = case.order
        object.__setattr__(case, "order", by_name(case.names))
        try:
            return next_gate(logic)
        finally:
            object.__setattr__(case, "order", kept)

    patch.setattr(Logic, "_next_gate", broken)


def _exclusive_modes_asked(patch: Patch) -> None:
    """R4: of modes that exclude each other none is asked after a yes."""

    ask = Logic._ask

    def broken(logic: Logic, q: int, cause: int) -> bool:
        yes = ask(logic, q, cause)
        if yes:
            asked = {j for j, _ in logic.asked}
            for j in logic.case.program.siblings[q]:
                if j not in asked:
                    del logic._known[j]
        return yes

    patch.setattr(Logic, "_ask", broken)


def _closes_on_a_trip(patch: Patch) -> None:
    """R13: an energised trip coil keeps a breaker open."""
    close = EventRun._follow_close

    def broken(run: EventRun, block: int) -> None:
        with pytest.MonkeyPatch.context() as inner:
            inner.setattr(Logic, "tripping", lambda *_: False)
            close(run, block)

    patch.setattr(EventRun, "_follow_close", broken)


def _asks_what_is_of_no_use(patch: Patch) -> None:
    """R4: a trip that can add nothing asks nothing."""
    patch.setattr(Logic, "_is_live", lambda *_: True)
    patch.setattr(Logic, "matters", lambda *_: True)


def _all_inputs_needed(patch: Patch) -> None:
    """A gate needs k of its inputs and no more."""
    take = Logic._take

    def broken(logic: Logic, g: int) -> bool:
        case, kept = logic.case, logic.case.k
        every = tuple(max(k, len(items)) if k > 1 else k for k, items in zip(kept, case.inputs, strict=True))
        object.__setattr__(case, "k", every)
        try:
            return take(logic, g)
        finally:
            object.__setattr__(case, "k", kept)

    patch.setattr(Logic, "_take", broken)


def _travels_anew(patch: Patch) -> None:
    """R10: an element whose current changes goes on from where it has got to."""

    def broken(discs: Discs, rates: Iterable[tuple[int, int]], now: int) -> None:
        for block, rate in rates:
            if rate != discs._motion[block].rate:
                discs._motion[block] = Motion(0, now, rate)
                discs._touched.add(block)

    patch.setattr(Discs, "turn", broken)


ALL = (
    Broken("ties the other way", _ties_the_other_way, 56),
    Broken("set wins", _set_wins, 0),
    Broken("never cancelled", _never_cancelled, 24),
    Broken("no drop-out time", _no_drop_out, 41),
    Broken("no auxiliary time", _no_auxiliary_time, 41),
    Broken("coil falls away", _coil_falls_away, 13),
    Broken("sensed once", _sensed_once, 7),
    Broken("always interrupts", _always_interrupts, 2),
    Broken("late in time", _late_in_time, 13),
    Broken("worst role", _worst_role, 3),
    Broken("asked by name", _asked_by_name, 13),
    Broken("exclusive modes asked", _exclusive_modes_asked, 24),
    Broken("closes on a trip", _closes_on_a_trip, 2),
    Broken("asks what is of no use", _asks_what_is_of_no_use, 6),
    Broken("travels anew", _travels_anew, 20, compare_inverse),
    Broken("all inputs needed", _all_inputs_needed, 21),
)
