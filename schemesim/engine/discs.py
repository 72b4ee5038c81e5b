"""The inverse-time blocks of one run of the event engine: where each has got to (rule R10)."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from schemesim.engine.case import Case
from schemesim.engine.inverse import Motion


class Discs:
    """Keeps the motion of each inverse-time block; the run asks when each is due."""

    def __init__(self, case: Case) -> None:
        self._curves = case.inverse
        self._motion = dict.fromkeys(case.inverse, Motion())
        self._touched: set[int] = set()

    def turn(self, rates: Iterable[tuple[int, int]], now: int) -> None:
        """The topology has changed: take the speeds that go with it."""
        for block, rate in rates:
            motion = self._motion[block]
            if rate != motion.rate:
                self._motion[block] = motion.turn(now, rate, self._curves[block].overtravel_us)
                self._touched.add(block)

    def touch(self, blocks: Iterable[int], now: int) -> None:
        """The outputs of these blocks have just changed: an inverse-time one that operated is at its end."""
        for block in blocks:
            if block in self._curves:
                motion = self._motion[block]
                self._motion[block] = motion.turn(now, motion.rate)
                self._touched.add(block)

    def with_moved(self, sensed: tuple[int, ...]) -> Sequence[int]:
        """Blocks whose condition changed and those that turned or changed in this pass, in order."""
        if not self._touched:
            return sensed
        taken = sorted(self._touched.union(sensed))
        self._touched.clear()
        return taken

    def due(self, block: int) -> int | None:
        """When a block operates if nothing changes; None for never."""
        return self._motion[block].due()
