"""Rows of the packed engine: what is kept of each, from the state of rest to the columns of results."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from schemesim.engine.columns import Columns
from schemesim.engine.disc_columns import DiscColumns
from schemesim.engine.layout import layout_of
from schemesim.engine.many import NEVER_US, ManyAnswers, ManyTimes
from schemesim.engine.succession import Asks, rest
from schemesim.engine.verdicts import Verdicts
from schemesim.engine.wiring import Wiring
from schemesim.engine.words import ONES, WORD, any_of, pack, picked, unpack

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from schemesim.engine.words import Rows, Words


class PackedRows:
    """Rows in words of 64; results are columns with one entry for each row.

    The rows are numbered ``0`` to ``count - 1`` in ``rows``; a tail fills the last word and never starts.
    """

    def __init__(self, w: Wiring, rows: Rows, answers: ManyAnswers, times: ManyTimes, horizon_us: int) -> None:
        self.w, self.lay, self.rows = w, layout_of(w), rows
        self.times, self.horizon_us = times, horizon_us
        self.count = rows.size
        self.n = -(-rows.size // 64) * 64
        lay, n = self.lay, self.n
        self.drawn = np.zeros(len(w.delays) + 1, dtype=np.bool_)
        self.drawn[-1] = True
        self.at = np.arange(n)
        self.sig = np.zeros((lay.signals, n // 64), dtype=WORD)
        self.to_true = np.zeros((lay.sinks, n // 64), dtype=WORD)
        self.to_false = np.zeros_like(self.to_true)
        time: Any = np.int32 if horizon_us < 2**30 else np.int64
        self.never = int(np.iinfo(time).max)
        self.due = np.full((lay.sinks, n), self.never, dtype=time)
        self.at_once = np.zeros_like(self.to_true)
        self.delays = np.zeros((len(w.delays) + 1, rows.size), dtype=np.int64)
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
        self.opened = np.zeros((len(w.breakers), self.count), dtype=np.bool_)
        self.interrupted = np.zeros_like(self.opened)
        self.keys = [np.zeros((ways.width, self.count), dtype=np.int64) for ways in lay.ways]
        self.t_operated = np.full((len(w.observed), self.count), NEVER_US, dtype=np.int64)
        self.last_topology = np.zeros(self.count, dtype=np.int32)
        self.at_horizon = np.zeros(self.count, dtype=np.bool_)
        self.steps = 0
        verdicts = Verdicts(w, rows, answers)
        self.allowed, self.modes = verdicts.allowed, verdicts.modes
        self._rest(verdicts)

    def draw(self, numbers: NDArray[np.int64]) -> None:
        """Have these delays at hand."""
        if not self.drawn[numbers].all():
            for number in np.unique(numbers[~self.drawn[numbers]]).tolist():
                name, delay = self.w.delays[number]
                self.delays[number] = self.times.of(name, delay, self.rows)
                self.drawn[number] = True

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
        self.turn(np.arange(self.count))

    def end(self, ended: NDArray[np.bool_]) -> None:
        """Rows with nothing due before the horizon are done."""
        at = self.at[ended]
        self.last_topology[at] = self.topology[ended]
        moving = any_of(self.opening | self.closing)
        waiting = self.to_true | self.to_false
        waiting[self.lay.breakers] = self.auxiliary
        busy = unpack(moving | any_of(waiting & self.matters()))
        self.at_horizon[at] = (busy & self.beyond)[ended]

    def compress(self, expired: Words) -> Words:
        """Leave out the rows that are done."""
        keep = np.flatnonzero(self.running)
        n = -(-keep.size // 64) * 64
        pad = np.flatnonzero(~self.running)[: n - keep.size]
        pick = np.concatenate([keep, pad])
        for name in ("sig", "to_true", "to_false", "decided", "opening", "auxiliary", "away", "closing"):
            setattr(self, name, picked(getattr(self, name), pick))
        for name in ("interrupts", "live", "held", "allowed", "at_once"):
            setattr(self, name, picked(getattr(self, name), pick))
        self.modes = picked(self.modes, pick)
        self.due, self.holds = np.take(self.due, pick, axis=-1), np.take(self.holds, pick, axis=-1)
        for name in ("at", "topology", "t", "passes", "running", "beyond"):
            setattr(self, name, getattr(self, name)[pick])
        self.discs.pick(pick)
        return picked(expired, pick)

    def matters(self) -> Words:
        """Which sinks may still influence a breaker or an output watched, in words."""
        found = [np.bitwise_or.reduce(self.live[list(group)], axis=0) for group in self.lay.reaches]
        return np.stack(found)[self.lay.reach_of] if found else np.zeros_like(self.to_true)

    def columns(self) -> Columns:
        """What the rows left behind."""
        code = np.zeros((len(self.w.breakers), self.count), dtype=np.int32)
        for place, ways in enumerate(self.lay.ways):
            rows = np.flatnonzero(self.opened[place])
            if rows.size:
                code[place, rows] = 2 * ways.codes(self.keys[place][:, rows]) + self.interrupted[place, rows]
        return Columns(
            t_clear=self.t_clear,
            t_open=self.t_open,
            t_trip=self.t_trip,
            t_operated=self.t_operated,
            code=code,
            ways=tuple(
                {2 * i + done: (*way, bool(done)) for i, way in enumerate(ways.found) for done in (0, 1)}
                for ways in self.lay.ways
            ),
            mask=self.last_topology,
            masks=tuple(self.lay.topologies.masks),
            at_horizon=self.at_horizon,
        )

    def turn(self, rows: Rows) -> None:
        """Inverse-time blocks take the speeds that go with the topology (R10)."""
        for i in range(len(self.w.case.inverse)):
            rate = self.lay.topologies.rates[self.topology[rows], i]
            turned = np.flatnonzero(rate != self.discs.rate[i, rows])
            if turned.size:
                some = rows[turned]
                self.discs.turn(i, some, self.t[some].astype(np.int64), rate[turned], overtravel=True)
