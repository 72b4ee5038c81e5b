"""Inverse-time blocks of many rows at once: the arithmetic of :mod:`inverse` in columns (rule R10).

Progress and speeds are the same whole numbers; a product is only formed where it stays below full travel.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from schemesim.engine.inverse import AT_ONCE, FULL

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from schemesim.engine.words import Rows

    Whole = NDArray[np.int64]

NEVER_DUE = np.int64(2**62)
"""Later than everything."""


def _ceil_div(a: Whole, b: Whole) -> Whole:
    found: Whole = -(-a // b)
    return found


def _moved(progress: Whole, elapsed: Whole, rate: Whole) -> Whole:
    """Travel after some time at a speed, from 0 to ``FULL``."""
    up, down = rate > 0, rate < 0
    speed = np.where(rate == 0, 1, np.abs(rate))
    room = np.where(up, FULL - progress, progress)
    arrives = elapsed >= _ceil_div(room, speed)
    step = np.where(arrives, 0, elapsed) * speed
    there: Whole = np.where(up, np.where(arrives, FULL, progress + step), np.where(arrives, 0, progress - step))
    return np.where(up | down, there, progress)


class DiscColumns:
    """The motion of each inverse-time block in each row; ``touched`` are those that turned in this pass."""

    def __init__(self, overtravel_us: list[int], rows: int) -> None:
        shape = (len(overtravel_us), rows)
        self._overtravel = overtravel_us
        self.progress, self.since = np.zeros(shape, dtype=np.int64), np.zeros(shape, dtype=np.int64)
        self.rate = np.full(shape, AT_ONCE, dtype=np.int64)
        self.last, self.until = np.zeros(shape, dtype=np.int64), np.zeros(shape, dtype=np.int64)
        self.touched = np.zeros(shape, dtype=np.bool_)

    def pick(self, rows: Rows) -> None:
        """Keep these rows."""
        for name in ("progress", "since", "rate", "last", "until", "touched"):
            setattr(self, name, np.take(getattr(self, name), rows, axis=-1))

    def _at(self, i: int, rows: Rows, now: Whole) -> Whole:
        """Travel of a block in these rows now; see :meth:`schemesim.engine.inverse.Motion.at`."""
        progress, since, until = self.progress[i, rows], self.since[i, rows], self.until[i, rows]
        rate = self.rate[i, rows]
        on = until > since
        end = np.where(on, np.minimum(now, until), since)
        progress = np.where(on, _moved(progress, end - since, self.last[i, rows]), progress)
        running = on & (now <= until)
        rest = np.where(running, 0, now - end)
        later = np.where(rate == AT_ONCE, 0, _moved(progress, rest, np.where(rate == AT_ONCE, 0, rate)))
        found: Whole = np.where(running, progress, later)
        return found

    def turn(self, i: int, rows: Rows, now: Whole, rate: Whole, *, overtravel: bool) -> None:
        """The speed of a block changed in these rows; see :meth:`schemesim.engine.inverse.Motion.turn`."""
        progress, before = self._at(i, rows, now), self.rate[i, rows]
        until, last = self.until[i, rows], self.last[i, rows]
        goes = (rate > 0) | (progress >= FULL)
        falls, runs_on = ~goes & (before > 0), ~goes & (before <= 0) & (until > now)
        extra = self._overtravel[i] if overtravel else 0
        self.until[i, rows] = np.where(falls, now + extra, np.where(runs_on, until, 0))
        self.last[i, rows] = np.where(falls, before, np.where(runs_on, last, 0))
        self.progress[i, rows], self.since[i, rows], self.rate[i, rows] = progress, now, rate
        self.touched[i, rows] = True

    def due(self, i: int, rows: Rows) -> Whole:
        """When a block operates in these rows if nothing changes; ``NEVER_DUE`` for never."""
        progress, since, until = self.progress[i, rows], self.since[i, rows], self.until[i, rows]
        rate, last = self.rate[i, rows], self.last[i, rows]
        ahead = since + _ceil_div(FULL - progress, np.where(rate > 0, rate, 1))
        runs_on = since + _ceil_div(FULL - progress, np.where(last > 0, last, 1))
        overrun = (until > since) & (last > 0) & (runs_on <= until)
        found: Whole = np.where(rate > 0, ahead, np.where(overrun, runs_on, NEVER_DUE))
        return found
