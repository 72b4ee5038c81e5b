"""Random delays: every signal of 64 rows in one word, every row with its own clock.

Where delays are random no two runs go through the same states, so nothing can be looked up. What a pass does is
the same for all rows, though: gates are a few operations on words, and what starts and stops follows from words
too (rules R2, R3, R6, R7, R11). All answers are known from the start; that changes nothing (rule R4).

A step takes each row to its own next instant: its earliest time, whatever is due then, the topology, all gates,
the breakers newly committed, and what starts, stops, or cannot matter any more.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from schemesim.engine.disc_columns import NEVER_DUE
from schemesim.engine.many import NEVER_US
from schemesim.engine.packed_rows import PackedRows
from schemesim.engine.rules import MAX_PASSES
from schemesim.engine.words import any_of, bit_at, pack, places_of, rows_of, unpack
from schemesim.errors import RunError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from schemesim.engine.words import Rows, Words

TILE = 4096
"""Rows whose times are looked through together."""


class Packed(PackedRows):
    """Rows walking in lockstep."""

    def finish(self) -> None:
        """Walk every row to its end (rule R20)."""
        self._pass(None)
        alive = self.count
        while alive:
            expired = self._next()
            ended = self.running & (self.t < 0)
            if ended.any():
                self.end(ended)
                self.running &= ~ended
                alive = int(np.count_nonzero(self.running))
                if 4 * alive < 3 * self.running.size and self.running.size > 256:
                    expired = self.compress(expired)
            if self.passes.max(initial=0) > MAX_PASSES:
                raise RunError(f"an instant does not settle; still going after {MAX_PASSES} passes")
            if alive:
                self._pass(expired)

    def _next(self) -> Words:
        """Take each row to its next instant and take out what is due; rows with nothing due before the horizon end.

        Done in tiles, so that the times are read from memory once; lines with nothing pending are passed over.
        """
        pending = self.to_true | self.to_false
        pending[self.lay.breakers] = self.opening | self.auxiliary | self.closing
        lines = np.flatnonzero((pending & ~self.at_once).any(axis=1)).tolist()
        again = unpack(any_of(self.at_once))
        expired, self.at_once = self.at_once, np.zeros_like(self.at_once)
        for a in range(0, self.running.size, TILE):
            part = slice(a, a + TILE)
            due = self.due[:, part]
            first = np.full(due.shape[1], self.never, dtype=due.dtype)
            for s in lines:
                np.minimum(first, due[s], out=first)
            self.beyond[part] = first < self.never
            same = again[part] | (first == self.t[part])
            t = np.where(same, self.t[part], first)
            going = self.running[part] & (t <= self.horizon_us)
            self.passes[part] = (self.passes[part] + 1) * (same & going)
            t[~going] = -1
            self.t[part] = t
            now = np.empty((len(lines), t.size), dtype=np.bool_)
            for i, s in enumerate(lines):
                np.equal(due[s], t, out=now[i])
            line, rows = np.divmod(np.flatnonzero(now), t.size)
            due[np.array(lines, dtype=np.intp)[line], rows] = self.never
            expired[lines, a // 64 : (a + TILE) // 64] |= pack(now)
        return expired

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
        earlier = self.topology[rows]
        for words, opens in ((breaks, True), (closed, False)):
            for place in np.flatnonzero(words.any(axis=1)).tolist():
                here = rows_of(words[place])
                self.topology[here] = found.switched(self.topology[here], place, opens)
        now = self.topology[rows]
        for s in found.differing(earlier, now):
            stays = found.stays[now, s]
            self.holds[s, rows] = np.where(stays, self.holds[s, rows], found.holds[now, s]) if stays.any() else (
                found.holds[now, s]
            )
        self.turn(rows)
        self.held[self.lay.senses] = pack(self.holds[self.lay.senses])
        cleared = rows[found.fed[earlier] & ~found.fed[now]]
        new = cleared[self.t_clear[self.at[cleared]] == NEVER_US]
        self.t_clear[self.at[new]] = self.t[new]

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
                self._write(s, rows, due)
                self.due[s, rows[due == NEVER_DUE]] = self.never
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
        new = ~self.opened[place, at]
        some, at = rows[new], at[new]
        self.t_trip[place, at], self.t_open[place, at] = self.t[some], when[new]
        holds = unpack(self.modes[2, place])[some]
        self.opened[place, at], self.interrupted[place, at] = True, ~holds
        self.lay.ways[place].read_at(self.sig, some, self.keys[place], at)

    def _takes(self, start: tuple[int, int, int], rows: Rows) -> NDArray[np.int64]:
        fixed, first, second = start
        self.draw(np.array([first, second]))
        at = self.at[rows]
        taken: NDArray[np.int64] = self.delays[first, at] + self.delays[second, at] + fixed
        return taken

    def _write(self, s: NDArray[np.intp] | int, rows: Rows, when: NDArray[np.int64]) -> None:
        self.due[s, rows] = np.minimum(when, self.horizon_us + 1)

    def _start(self, words: Words, value: Words) -> None:
        """These sinks start, each toward what it is not."""
        if self.steps == 1:
            words = self._start_all(words, value)
        s, rows = places_of(words)
        rising = 1 - bit_at(value, s, rows)
        number = self.lay.number[rising, s]
        self.draw(number)
        self._write(s, rows, self.t[rows] + self.lay.fixed_us[rising, s] + self.delays[number, self.at[rows]])

    def _start_all(self, words: Words, value: Words) -> Words:
        """Sinks that start in every row start together; the words of the others."""
        whole = pack(self.running)
        for s in np.flatnonzero((words == whole).all(axis=1)).tolist():
            level = value[s] & whole
            if not level.any() or (level == whole).all():
                start = self.w.off[s] if level.any() else self.w.on[s]
                rows = np.arange(self.count)
                self._write(s, rows, self._takes(start, rows))
                words[s] = 0
        return words

    def _follow(self, on: Words) -> None:
        """What starts, what stops, and what cannot matter any more."""
        lay, sig = self.lay, self.sig
        value = sig[: lay.sinks]
        matters = self.matters() & on
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
        self.at_once = (self.at_once & ~stops) | (up & lay.up_at_once) | (down & lay.down_at_once)
        self._drop(stops & ~(up | down))
        self._start((up | down) & ~self.at_once, value)
        for s, r, plane in lay.remembered:
            row = lay.true_row if lay.inverted[s, 0] else lay.within(int(lay.source[s]), r)
            sig[plane] &= ~up[s]
            if row is not None:
                sig[plane] |= sig[row] & up[s]
        self._close(on)

    def _drop(self, stops: Words) -> None:
        """Times that are stopped, and auxiliary contacts that cannot matter any more."""
        s, rows = places_of(stops)
        self.due[s, rows] = self.never

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
