"""Random delays: every signal of 64 rows in one word, every row with its own clock.

Where delays are random no two runs go through the same states, so nothing can be looked up. What a pass does is
the same for all rows, though: gates are a few operations on words, and what starts and stops follows from words
too (rules R2, R3, R6, R7, R11). All answers are known from the start; that changes nothing (rule R4).

A step takes each row to its own next instant: its earliest time, whatever is due then, the topology, all gates,
the breakers newly committed, and what starts, stops, or cannot matter any more.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from schemesim.engine.columns import Columns
from schemesim.engine.disc_columns import NEVER_DUE, DiscColumns
from schemesim.engine.layout import layout_of
from schemesim.engine.many import NEVER_US, ManyAnswers, ManyTimes
from schemesim.engine.rules import MAX_PASSES
from schemesim.engine.succession import Asks, rest
from schemesim.engine.verdicts import Verdicts
from schemesim.engine.wiring import Wiring
from schemesim.engine.words import ONES, WORD, any_of, bit_at, pack, picked, places_of, rows_of, unpack
from schemesim.errors import RunError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from schemesim.engine.words import Rows, Words

TILE = 2048
"""Rows whose times are looked through together."""


class Packed:
    """Rows walking in lockstep; results are columns with one entry for each row.

    The rows are numbered ``0`` to ``count - 1`` in ``rows``; a tail fills the last word and never starts.
    """

    def __init__(self, w: Wiring, rows: Rows, answers: ManyAnswers, times: ManyTimes, horizon_us: int) -> None:
        self.w, self.lay, self.rows = w, layout_of(w), rows
        self._times, self.horizon_us = times, horizon_us
        self.count = rows.size
        self.n = -(-rows.size // 64) * 64
        lay, n = self.lay, self.n
        time: Any = np.int32 if horizon_us < 2**30 else np.int64
        self._never = int(np.iinfo(time).max)
        self._delays = np.zeros((len(w.delays) + 1, rows.size), dtype=np.int64)
        self._drawn = np.zeros(len(w.delays) + 1, dtype=np.bool_)
        self._drawn[-1] = True
        self.at = np.arange(n)
        self.sig = np.zeros((lay.signals, n // 64), dtype=WORD)
        self.to_true = np.zeros((lay.sinks, n // 64), dtype=WORD)
        self.to_false = np.zeros_like(self.to_true)
        self.due = np.full((lay.sinks, n), self._never, dtype=time)
        breakers = (len(w.breakers), n // 64)
        self.decided, self.opening, self.auxiliary = (np.zeros(breakers, dtype=WORD) for _ in range(3))
        self.away, self.closing, self.interrupts = (np.zeros(breakers, dtype=WORD) for _ in range(3))
        self.live = np.full((len(w.breakers) + len(w.observed), n // 64), ONES, dtype=WORD)
        self.holds = np.zeros((lay.sinks, n), dtype=np.bool_)
        self.topology = np.zeros(n, dtype=np.int32)
        self.t = np.zeros(n, dtype=time)
        self.passes = np.zeros(n, dtype=np.int16)
        self.beyond = np.zeros(n, dtype=np.bool_)
        self.discs = DiscColumns([curve.overtravel_us for curve in w.case.inverse.values()], n)
        self.t_clear = np.full(self.count, NEVER_US, dtype=np.int64)
        self.t_open = np.full((len(w.breakers), self.count), NEVER_US, dtype=np.int64)
        self.t_trip = np.full((len(w.breakers), self.count), NEVER_US, dtype=np.int64)
        self.code = np.zeros((len(w.breakers), self.count), dtype=np.int32)
        self.t_operated = np.full((len(w.observed), self.count), NEVER_US, dtype=np.int64)
        self.last_topology = np.zeros(self.count, dtype=np.int32)
        self.at_horizon = np.zeros(self.count, dtype=np.bool_)
        self.steps = 0
        verdicts = Verdicts(w, rows, answers)
        self.allowed, self.modes = verdicts.allowed, verdicts.modes
        self._rest(verdicts)

    def _draw(self, numbers: NDArray[np.int64]) -> None:
        """Have these delays at hand."""
        if not self._drawn[numbers].all():
            for number in np.unique(numbers[~self._drawn[numbers]]).tolist():
                name, delay = self.w.delays[number]
                self._delays[number] = self._times.of(name, delay, self.rows)
                self._drawn[number] = True

    # --- the run -------------------------------------------------------------------------

    def _rest(self, verdicts: Verdicts) -> None:
        """The state before the event; rows that differ in an answer it needs are taken apart."""
        waiting: list[tuple[list[bool], NDArray[np.bool_]]] = [([], np.ones(self.n, dtype=np.bool_))]
        bits = np.zeros((self.lay.signals, self.n), dtype=np.bool_)
        while waiting:
            script, some = waiting.pop()
            if not some.any():
                continue
            try:
                m = rest(self.w, script)
            except Asks as asks:
                yes = verdicts.yes(asks.question)
                waiting += [([*script, True], some & yes), ([*script, False], some & ~yes)]
                continue
            for s in range(self.lay.sinks):
                if m.value[s]:
                    bits[s, some] = True
                    for r, plane in self.lay.planes.get(s, {}).items():
                        bits[plane, some] = m.role[s] <= r
        bits[self.lay.true_row] = True
        self.sig[:] = pack(bits)
        self.holds[:, : self.count] = self.lay.topologies.holds[0][:, np.newaxis]
        self.held = pack(self.holds)
        self.running = np.zeros(self.n, dtype=np.bool_)
        self.running[: self.count] = True
        self._turn(np.arange(self.count))

    def finish(self) -> None:
        """Walk every row to its end (rule R20)."""
        self._pass(None)
        alive = self.count
        while alive:
            expired = self._next()
            ended = self.running & (self.t < 0)
            if ended.any():
                self._end(ended)
                self.running &= ~ended
                alive = int(np.count_nonzero(self.running))
                if 4 * alive < 3 * self.running.size and self.running.size > 256:
                    expired = self._compress(expired)
            if self.passes.max(initial=0) > MAX_PASSES:
                raise RunError(f"an instant does not settle; still going after {MAX_PASSES} passes")
            if alive:
                self._pass(expired)

    def _next(self) -> Words:
        """Take each row to its next instant and take out what is due; rows with nothing due before the horizon end.

        Done in tiles, so that the times are read from memory once.
        """
        expired = np.empty_like(self.to_true)
        for a in range(0, self.running.size, TILE):
            due, part = self.due[:, a : a + TILE], slice(a, a + TILE)
            first = due.min(axis=0, initial=self._never)
            self.beyond[part] = first < self._never
            t = np.where(self.running[part] & (first <= self.horizon_us), first, -1)
            self.passes[part] = np.where(t == self.t[part], self.passes[part] + 1, 0) * (t >= 0)
            self.t[part] = t
            now = due == t
            np.copyto(due, self._never, where=now)
            expired[:, a // 64 : (a + TILE) // 64] = pack(now)
        return expired

    def _end(self, ended: NDArray[np.bool_]) -> None:
        """Rows with nothing due before the horizon are done."""
        at = self.at[ended]
        self.last_topology[at] = self.topology[ended]
        moving = any_of(self.opening | self.closing)
        waiting = self.to_true | self.to_false
        waiting[self.lay.breakers] = self.auxiliary
        busy = unpack(moving | any_of(waiting & self._matters()))
        self.at_horizon[at] = (busy & self.beyond)[ended]

    def _compress(self, expired: Words) -> Words:
        """Leave out the rows that are done."""
        keep = np.flatnonzero(self.running)
        n = -(-keep.size // 64) * 64
        pad = np.flatnonzero(~self.running)[: n - keep.size]
        pick = np.concatenate([keep, pad])
        for name in ("sig", "to_true", "to_false", "decided", "opening", "auxiliary", "away", "closing"):
            setattr(self, name, picked(getattr(self, name), pick))
        for name in ("interrupts", "live", "held", "allowed"):
            setattr(self, name, picked(getattr(self, name), pick))
        self.modes = picked(self.modes, pick)
        self.due, self.holds = np.take(self.due, pick, axis=-1), np.take(self.holds, pick, axis=-1)
        for name in ("at", "topology", "t", "passes", "running", "beyond"):
            setattr(self, name, getattr(self, name)[pick])
        self.discs.pick(pick)
        return picked(expired, pick)

    def _matters(self) -> Words:
        """Which sinks may still influence a breaker or an output watched, in words."""
        found = [np.bitwise_or.reduce(self.live[list(group)], axis=0) for group in self.lay.reaches]
        return np.stack(found)[self.lay.reach_of] if found else np.zeros_like(self.to_true)

    def _pass(self, expired: Words | None) -> None:
        """One pass of each row at its own instant (rule R2)."""
        self.steps += 1
        if expired is not None:
            self._expire(expired)
        self._gates()
        on = pack(self.running)
        self._commit(on)
        for i, g in enumerate(self.w.observed):
            watch = self.live[len(self.w.breakers) + i]
            hit = self.sig[g] & watch & on
            if hit.any():
                rows = rows_of(hit)
                self.t_operated[i, self.at[rows]] = self.t[rows]
                watch &= ~hit
        self._follow(on)

    def _expire(self, x: Words) -> None:
        """What is due takes effect, and sensing follows the topology."""
        lay = self.lay
        value = self.sig[: lay.sinks]
        value |= x & self.to_true
        value &= ~(x & self.to_false)
        self.to_true &= ~x
        self.to_false &= ~x
        for i, s in enumerate(self.w.case.inverse):
            rows = rows_of(x[s])
            if rows.size:
                self.discs.turn(i, rows, self.t[rows].astype(np.int64), self.discs.rate[i, rows], overtravel=False)
        due = x[lay.breakers]
        if not due.any():
            return
        opened = due & self.opening
        breaks, away, closed = opened & self.interrupts, due & self.auxiliary, due & self.closing
        self.opening &= ~opened
        self.auxiliary = (self.auxiliary | opened) & ~away
        self.away = (self.away | away) & ~closed
        self.closing &= ~closed
        self.decided &= ~closed
        contact = (value[lay.breakers] & ~away) | closed
        value[lay.breakers] = contact
        for place in np.flatnonzero(opened.any(axis=1)).tolist():
            rows, s = rows_of(opened[place]), self.w.breakers[place]
            self._write(s, rows, self.t[rows] + self._takes(self.w.off[s], rows))
        moved = breaks | closed
        if moved.any():
            self._switch(breaks, closed)

    def _switch(self, breaks: Words, closed: Words) -> None:
        """The topology of some rows changes; sensing is evaluated anew (R8, R9)."""
        found = self.lay.topologies
        rows = rows_of(any_of(breaks | closed))
        before = found.fed[self.topology[rows]]
        for words, opens in ((breaks, True), (closed, False)):
            for place in np.flatnonzero(words.any(axis=1)).tolist():
                here = rows_of(words[place])
                self.topology[here] = found.switched(self.topology[here], place, opens)
        now = self.topology[rows]
        for s in self.lay.senses.tolist():
            stays = found.stays[now, s]
            self.holds[s, rows] = np.where(stays, self.holds[s, rows], found.holds[now, s]) if stays.any() else (
                found.holds[now, s]
            )
        self._turn(rows)
        self.held[self.lay.senses] = pack(self.holds[self.lay.senses])
        cleared = rows[before & ~found.fed[now]]
        new = cleared[self.t_clear[self.at[cleared]] == NEVER_US]
        self.t_clear[self.at[new]] = self.t[new]

    def _turn(self, rows: Rows) -> None:
        """Inverse-time blocks take the speeds that go with the topology (R10)."""
        for i in range(len(self.w.case.inverse)):
            rate = self.lay.topologies.rates[self.topology[rows], i]
            turned = np.flatnonzero(rate != self.discs.rate[i, rows])
            if turned.size:
                some = rows[turned]
                self.discs.turn(i, some, self.t[some].astype(np.int64), rate[turned], overtravel=True)

    def _follow_discs(self, value: Words, want: Words) -> None:
        """Inverse-time blocks that have not operated are due as their travel says."""
        for i, s in enumerate(self.w.case.inverse):
            rows = np.flatnonzero(self.discs.touched[i] & ~unpack(value[s]) & self.running)
            self.discs.touched[i] = False
            if rows.size:
                due = self.discs.due(i, rows)
                going = unpack(self.to_true[s]).copy()
                going[rows] = due < NEVER_DUE
                self.to_true[s] = pack(going)
                self.due[s, rows] = np.where(due < NEVER_DUE, np.minimum(due, self.horizon_us + 1), self._never)
            want[s] = (value[s] & want[s]) | (~value[s] & self.to_true[s])

    def _gates(self) -> None:
        """Settle the gates, in order; then the planes that tell in which role they are true."""
        sig, allowed = self.sig, self.allowed
        for gate in self.lay.gates:
            gate.settle(sig, allowed)

    def _commit(self, on: Words) -> None:
        """Breakers with a coil newly energised: which, and when they will open (R6)."""
        lay, w = self.lay, self.w
        committed = np.zeros_like(self.decided)
        for place, coils in enumerate(lay.coils):
            trip = any_of(self.sig[list(coils)])
            committed[place] = trip & ~self.decided[place] & on
        if not committed.any():
            return
        self.decided |= committed
        opens = committed & ~self.modes[0]
        for place in np.flatnonzero(committed.any(axis=1)).tolist():
            if not w.closable[place]:
                self.live[place] &= ~committed[place]
            self._open(place, opens[place])
        self.interrupts = (self.interrupts & ~opens) | (opens & ~self.modes[2])
        self.opening |= opens
        self.auxiliary &= ~opens
        self.closing &= ~opens

    def _open(self, place: int, opens: Words) -> None:
        rows = rows_of(opens)
        if not rows.size:
            return
        w, s = self.w, self.w.breakers[place]
        late = unpack(self.modes[1, place])[rows]
        when = self.t[rows].astype(np.int64) + self._takes(w.on[s], rows)
        if late.any():
            some = rows[late]
            when[late] += self._takes(w.late[place], some)
        self._write(s, rows, when)
        at = self.at[rows]
        new = self.code[place, at] == 0
        some, at = rows[new], at[new]
        self.t_trip[place, at], self.t_open[place, at] = self.t[some], when[new]
        holds = unpack(self.modes[2, place])[some]
        self.code[place, at] = self.lay.ways[place].codes(self.sig, some) * 2 + (~holds).astype(np.int32)

    def _takes(self, start: tuple[int, int, int], rows: Rows) -> NDArray[np.int64]:
        fixed, first, second = start
        self._draw(np.array([first, second]))
        at = self.at[rows]
        taken: NDArray[np.int64] = self._delays[first, at] + self._delays[second, at] + fixed
        return taken

    def _write(self, s: NDArray[np.intp] | int, rows: Rows, when: NDArray[np.int64]) -> None:
        self.due[s, rows] = np.minimum(when, self.horizon_us + 1)

    def _start(self, words: Words, value: Words) -> None:
        """These sinks start, each toward what it is not."""
        s, rows = places_of(words)
        rising = 1 - bit_at(value, s, rows)
        number = self.lay.number[rising, s]
        self._draw(number)
        self._write(s, rows, self.t[rows] + self.lay.fixed_us[rising, s] + self._delays[number, self.at[rows]])

    def _follow(self, on: Words) -> None:
        """What starts, what stops, and what cannot matter any more."""
        lay, sig = self.lay, self.sig
        value = sig[: lay.sinks]
        matters = self._matters() & on
        want: Words = sig[lay.source] ^ lay.inverted
        want[lay.senses] = self.held[lay.senses]
        want[lay.idle] = value[lay.idle]
        self._follow_discs(value, want)
        if lay.latches.size:
            now = (value[lay.latches] & ~self.to_false[lay.latches]) | self.to_true[lay.latches]
            reset = (sig[lay.reset] ^ lay.reset_inverted) & lay.has_reset
            want[lay.latches] = (want[lay.latches] | now) & ~reset
        stops = (self.to_true & (~want | ~matters)) | (self.to_false & (want | ~matters))
        self.to_true &= want & matters
        self.to_false &= ~want & matters
        up: Words = want & ~value & ~self.to_true & matters
        down: Words = ~want & value & ~self.to_false & matters
        self.to_true |= up
        self.to_false |= down
        gone = self.auxiliary & ~matters[lay.breakers] & ~lay.closable
        self.auxiliary &= ~gone
        stops[lay.breakers] = gone
        self._drop(stops & ~up & ~down)
        self._start(up | down, value)
        for s, r, plane in lay.remembered:
            row = lay.true_row if lay.inverted[s, 0] else lay.within(int(lay.source[s]), r)
            sig[plane] &= ~up[s]
            if row is not None:
                sig[plane] |= sig[row] & up[s]
        self._close(on)

    def _drop(self, stops: Words) -> None:
        """Times that are stopped, and auxiliary contacts that cannot matter any more."""
        s, rows = places_of(stops)
        self.due[s, rows] = self._never

    def _close(self, on: Words) -> None:
        """Breakers that are away and told to close, with no trip coil energised."""
        for place, source, inverted in self.lay.closes:
            told = self.away[place] & (~self.sig[source] if inverted else self.sig[source]) & on
            if told.any():
                trip = any_of(self.sig[list(self.lay.coils[place])])
                told &= ~trip
                self.away[place] &= ~told
                self.closing[place] |= told
                rows = rows_of(told)
                s = self.w.breakers[place]
                self._write(s, rows, self.t[rows] + self._takes(self.w.closing[place], rows))

    def columns(self) -> Columns:
        """What the rows left behind."""
        return Columns(
            t_clear=self.t_clear,
            t_open=self.t_open,
            t_trip=self.t_trip,
            t_operated=self.t_operated,
            code=self.code,
            ways=tuple(
                {2 * i + done: (*way, bool(done)) for i, way in enumerate(ways.found) for done in (0, 1)}
                for ways in self.lay.ways
            ),
            mask=self.last_topology,
            masks=tuple(self.lay.topologies.masks),
            at_horizon=self.at_horizon,
        )
