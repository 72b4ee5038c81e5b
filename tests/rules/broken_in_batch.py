"""One rule after the other broken in the batch engine: in the automaton, in forks, in words."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np

from schemesim.engine import asking, automaton, forks, moment, succession, topologies, verdicts
from schemesim.engine.asking import Signals
from schemesim.engine.disc_columns import DiscColumns
from schemesim.engine.layout import Layout
from schemesim.engine.many import ManyDrawnTimes
from schemesim.engine.moment import Moment
from schemesim.engine.packed import Packed
from schemesim.engine.program import Kind
from schemesim.engine.rules import FALSE
from schemesim.engine.values import TO_FALSE, TO_TRUE, State
from schemesim.engine.verdicts import Verdicts
from schemesim.engine.wiring import Doomed, Start, Wiring
from schemesim.engine.words import NONE
from schemesim.scheme.delays import Delay
from tests.rules.agree import compare_inverse, compare_random, compare_trees
from tests.rules.broken_rules import Broken, Patch, by_name

# --- the batch engine: the automaton ----------------------------------------------------------


def _set_wins_there(patch: Patch) -> None:
    """R11, R13."""
    follow = succession._follow_latch

    def broken(m: Moment, b: int) -> None:
        if m.reads(b, 0) and m.value[b] == FALSE and not m.pending[b]:
            m.start(b, TO_TRUE, Start(0))
        elif not m.reads(b, 0):
            follow(m, b)

    patch.setattr(succession, "_follow_latch", broken)


def _never_cancelled_there(patch: Patch) -> None:
    """R2."""

    def broken(m: Moment, b: int, state: bool, role: int) -> None:
        if not m.pending[b] and m.value[b] != state:
            m.role[b] = role if state else m.role[b]
            m.start(b, TO_TRUE if state else TO_FALSE, m.w.on[b] if state else m.w.off[b])

    patch.setattr(succession, "_follow_input", broken)


def _ties_the_other_way_there(patch: Patch) -> None:
    """R3."""
    expire = Moment.expire

    def broken(m: Moment, blocks: list[int]) -> None:
        timers = [b for b in blocks if m.w.kind[b] is Kind.TIMER and m.pending[b] == TO_TRUE]
        if len(timers) < len(blocks):
            blocks = [b for b in blocks if b not in timers]
            for b in timers:  # one pass behind what is due with them
                m.start(b, TO_TRUE, Start(0))
        expire(m, blocks)

    patch.setattr(Moment, "expire", broken)


def _no_auxiliary_time_there(patch: Patch) -> None:
    """R11."""
    start = Moment.start

    def broken(m: Moment, b: int, target: int, takes: Start) -> None:
        auxiliary = m.w.place[b] >= 0 and takes == m.w.off[b]
        start(m, b, target, Start(0) if auxiliary else takes)

    patch.setattr(Moment, "start", broken)


def _forgets_too_much(patch: Patch) -> None:
    """R4: an answer holds for the whole run."""

    def broken(m: Moment, gone: Doomed) -> None:  # noqa: ARG001
        m.known = bytearray(len(m.known))

    patch.setattr(succession, "_forget", broken)


def _asked_by_name_there(patch: Patch) -> None:
    """R4."""

    next_gate = asking.next_gate

    def broken(m: Signals) -> int:
        kept = m.w
        m.w = replace(kept, order=by_name(kept.names))
        try:
            return next_gate(m)
        finally:
            m.w = kept

    patch.setattr(moment, "next_gate", broken)


def _states_mixed_up(patch: Patch) -> None:
    """Two states that differ in a role are not the same."""
    number = automaton.Automaton._number_of

    def broken(auto: automaton.Automaton, state: State) -> int:
        return number(auto, state._replace(role=bytes(len(state.role))))

    patch.setattr(automaton.Automaton, "_number_of", broken)


def _cleared_at_the_end(patch: Patch) -> None:
    """R8: cleared is the first clearing."""
    expire = Moment.expire

    def broken(m: Moment, blocks: list[int]) -> None:
        m.cleared = False
        expire(m, blocks)

    patch.setattr(Moment, "expire", broken)


def _forks_forget_an_answer(patch: Patch) -> None:
    """A fork goes on with the answers that led to it."""
    run = forks.Forks.run

    def broken(self: forks.Forks, paused: forks.Paused, yes: bool | None, *worth: Any) -> forks.Ran:
        return run(self, paused, None if yes is None else False, *worth)

    patch.setattr(forks.Forks, "run", broken)


# --- the batch engine: words -------------------------------------------------------------------


def _with_layout(patch: Patch, change: Callable[[Layout], Layout]) -> None:
    make = Packed.__init__

    def broken(self: Packed, *args: Any) -> None:
        make(self, *args)
        self.lay = change(self.lay)

    patch.setattr(Packed, "__init__", broken)


def _never_reset_in_words(patch: Patch) -> None:
    """R11: a latch that is reset falls."""
    _with_layout(patch, lambda lay: replace(lay, has_reset=np.zeros_like(lay.has_reset)))


def _no_drop_out_in_words(patch: Patch) -> None:
    """R2."""

    def change(lay: Layout) -> Layout:
        fixed = lay.fixed_us.copy()
        fixed[0] = 0
        return replace(lay, fixed_us=fixed)

    _with_layout(patch, change)


def _sensed_once_in_words(patch: Patch) -> None:
    """R9."""

    def change(found: topologies.Topologies, mask: int) -> int:
        known = number(found, mask)
        found.holds[known] = found.holds[0]
        return known

    number = topologies.Topologies.number
    patch.setattr(topologies.Topologies, "number", change)


def _coil_falls_away_in_words(patch: Patch) -> None:
    """R6."""
    gates = Packed._gates

    def broken(run: Packed) -> None:
        gates(run)
        for place, coils in enumerate(run.lay.coils):
            run.opening[place] &= np.bitwise_or.reduce(run.sig[list(coils)], axis=0, initial=NONE)

    patch.setattr(Packed, "_gates", broken)


def _late_in_time_in_words(patch: Patch) -> None:
    """R5."""
    make = Verdicts.__init__

    def broken(self: Verdicts, *args: Any) -> None:
        make(self, *args)
        self.modes[1] = 0

    patch.setattr(verdicts.Verdicts, "__init__", broken)


def _failures_ignored_in_words(patch: Patch) -> None:
    """R5: what a failure keeps from leaving does not leave."""
    make = Verdicts.__init__

    def broken(self: Verdicts, *args: Any) -> None:
        make(self, *args)
        self.allowed |= ~NONE

    patch.setattr(verdicts.Verdicts, "__init__", broken)


def _closes_on_a_trip_in_words(patch: Patch) -> None:
    """R13."""
    close = Packed._close

    def broken(run: Packed, on: Any) -> None:
        lay = run.lay
        run.lay = replace(lay, coils=tuple(() for _ in lay.coils))
        close(run, on)
        run.lay = lay

    patch.setattr(Packed, "_close", broken)


def _travels_anew_in_words(patch: Patch) -> None:
    """R10: an element whose current changes goes on from where it has got to."""
    turn = DiscColumns.turn

    def broken(self: DiscColumns, i: int, rows: Any, now: Any, rate: Any, *, overtravel: bool) -> None:
        turn(self, i, rows, now, rate, overtravel=overtravel)
        if overtravel:  # the current changed; else the element has operated or dropped out
            self.progress[i, rows] = 0

    patch.setattr(DiscColumns, "turn", broken)


def _a_horizon_short_of_itself(patch: Patch) -> None:
    """R20: what is due at the horizon still happens."""
    make = Packed.__init__

    def broken(self: Packed, w: Wiring, rows: Any, answers: Any, times: Any, horizon_us: int) -> None:
        make(self, w, rows, answers, times, horizon_us - 1)

    patch.setattr(Packed, "__init__", broken)


def _delays_of_another_row(patch: Patch) -> None:
    """R19: each trial has times of its own."""
    of = ManyDrawnTimes.of

    def broken(self: ManyDrawnTimes, name: str, delay: Delay, rows: Any) -> Any:
        return of(self, name, delay, np.flip(rows))

    patch.setattr(ManyDrawnTimes, "of", broken)


ALL = (
    Broken("automaton: set wins", _set_wins_there, 0),
    Broken("automaton: never cancelled", _never_cancelled_there, 24),
    Broken("automaton: ties the other way", _ties_the_other_way_there, 56),
    Broken("automaton: no auxiliary time", _no_auxiliary_time_there, 41),
    Broken("automaton: forgets answers", _forgets_too_much, 7),
    Broken("automaton: asked by name", _asked_by_name_there, 13),
    Broken("automaton: states mixed up", _states_mixed_up, 85),
    Broken("automaton: the last clearing", _cleared_at_the_end, 41),
    Broken("forks: an answer forgotten", _forks_forget_an_answer, 0, compare_trees),
    Broken("words: never reset", _never_reset_in_words, 0),
    Broken("words: no drop-out time", _no_drop_out_in_words, 41),
    Broken("words: sensed once", _sensed_once_in_words, 7),
    Broken("words: coil falls away", _coil_falls_away_in_words, 19),
    Broken("words: late in time", _late_in_time_in_words, 13),
    Broken("words: failures ignored", _failures_ignored_in_words, 0),
    Broken("words: closes on a trip", _closes_on_a_trip_in_words, 2),
    Broken("words: a horizon short of itself", _a_horizon_short_of_itself, 0),
    Broken("words: travels anew", _travels_anew_in_words, 20, compare_inverse),
    Broken("delays of another row", _delays_of_another_row, 0, compare_random),
)
