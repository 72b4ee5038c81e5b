"""Topologies that rows of the packed engine have met, numbered; what each means is looked up in the case."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from schemesim.engine.case import Case

if TYPE_CHECKING:
    from numpy.typing import NDArray


class Topologies:
    """Number 0 is the plant before any opening.

    Attributes
    ----------
    masks : list of int
        Breakers of the case that are open.
    holds : ndarray of bool, shape (room, sinks)
        Which conditions hold; rows beyond those numbered are room to grow.
    stays : ndarray of bool, shape (room, sinks)
        Conditions that stay as they were: the quantity lies between drop-out and pick-up.
    rates : ndarray of int64, shape (room, inverse-time blocks)
        Their speeds (rule R10).
    fed : ndarray of bool, shape (room,)
    """

    def __init__(self, case: Case, sinks: int) -> None:
        self.case = case
        self.masks: list[int] = []
        self._number: dict[int, int] = {}
        self._after: dict[tuple[int, int, bool], int] = {}
        self.holds = np.zeros((8, sinks), dtype=np.bool_)
        self.stays = np.zeros((8, sinks), dtype=np.bool_)
        self.inverse = {s: i for i, s in enumerate(case.inverse)}
        self.rates = np.zeros((8, len(self.inverse)), dtype=np.int64)
        self.fed = np.zeros(8, dtype=np.bool_)
        self.is_sense = np.zeros(sinks, dtype=np.bool_)
        self.is_sense[list(case.senses)] = True
        self.number(0)

    def number(self, mask: int) -> int:
        """The number of a topology."""
        known = self._number.get(mask)
        if known is None:
            known = self._number[mask] = len(self.masks)
            self.masks.append(mask)
            if known >= len(self.fed):
                for name in ("holds", "stays", "rates", "fed"):
                    old = getattr(self, name)
                    setattr(self, name, np.concatenate([old, np.zeros_like(old)]))
            found = self.case.topology(mask)
            self.stays[known, list(self.case.senses)] = True
            for s, truth in found.holds:
                self.holds[known, s], self.stays[known, s] = truth, False
            for s, rate in found.rates:
                self.rates[known, self.inverse[s]] = rate
            self.fed[known] = found.fed
        return known

    def differing(self, before: NDArray[np.int32], after: NDArray[np.int32]) -> list[int]:
        """Sinks whose condition is not the same in all of these topologies."""
        met = np.union1d(before, after)
        holds, stays = self.holds[met], self.stays[met]
        found = np.flatnonzero((holds != holds[0]).any(axis=0) | stays.any(axis=0))
        return [s for s in found.tolist() if self.is_sense[s]]

    def switched(self, before: NDArray[np.int32], place: int, opens: bool) -> NDArray[np.int32]:
        """The topologies after a breaker has opened or closed."""
        numbers, where = np.unique(before, return_inverse=True)
        after = [self._switched(n, place, opens) for n in numbers.tolist()]
        return np.array(after, dtype=np.int32)[where]

    def _switched(self, before: int, place: int, opens: bool) -> int:
        key = (before, place, opens)
        known = self._after.get(key)
        if known is None:
            mask, bit = self.masks[before], 1 << place
            known = self._after[key] = self.number(mask | bit if opens else mask & ~bit)
        return known
