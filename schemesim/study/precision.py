"""How precise an estimate should be, asked for instead of a number of trials."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

from schemesim.engine.outcome import Outcome
from schemesim.errors import ErrorList

FIRST_TRIALS = 2_000
"""Trials before the precision is judged for the first time."""

_GROWTH = 3.0  # most by which the trials grow before it is judged again


class Interval(Protocol):
    """An estimate between two bounds."""

    @property
    def estimate(self) -> float:
        """The estimate."""

    @property
    def low(self) -> float:
        """Its lower bound."""

    @property
    def high(self) -> float:
        """Its upper bound."""


@dataclass(frozen=True)
class Precision:
    """Trials are added until half the width of an event's interval is small enough.

    It is judged after each round, and rounds grow by a half or more: so seldom that stopping
    by what was seen costs hardly any coverage.

    Parameters
    ----------
    event : callable
        From an outcome to bool.
    absolute : float or None
        Half width wanted.
    relative : float or None
        Half width wanted as a share of the estimate. Either will do where both are given.
    confidence : float
        Of the interval judged.
    max_trials : int
        Stop at so many at the latest; the interval is then wider, and still one.

    Raises
    ------
    InputError
        If neither is given, one is not over zero, the confidence is not between 0 and 1, or
        ``max_trials`` is no whole number of 1 or more.

    Examples
    --------
    >>> from schemesim.engine.outcome import Status
    >>> Precision(lambda o: o.status is Status.CLEARED, absolute=1e-3).reached_by(0.9990, 0.9982, 0.9994)
    True
    """

    event: Callable[[Outcome], bool]
    absolute: float | None = None
    relative: float | None = None
    confidence: float = 0.95
    max_trials: int = 1_000_000

    def __post_init__(self) -> None:
        errors = ErrorList()
        wanted = [x for x in (self.absolute, self.relative) if x is not None]
        if not wanted or any(not 0 < x < math.inf for x in wanted):
            errors.add("precision", (self.absolute, self.relative), "an absolute or relative half width over 0")
        if not 0 < self.confidence < 1:
            errors.add("confidence", self.confidence, "a number between 0 and 1, e.g. 0.95")
        most: object = self.max_trials
        if isinstance(most, bool) or not isinstance(most, int) or most < 1:
            errors.add("max_trials", most, "a whole number of 1 or more")
        errors.raise_if_any()

    def wanted(self, estimate: float) -> float:
        """The half width that will do."""
        relative = 0.0 if self.relative is None else self.relative * estimate
        return max(self.absolute or 0.0, relative)

    def reached_by(self, estimate: float, low: float, high: float) -> bool:
        """Whether an interval is narrow enough."""
        return (high - low) / 2 <= self.wanted(estimate)

    def more(self, trials: int, found: Interval) -> int:
        """How many trials to add to these; 0 if their interval will do, or there may be no more."""
        half, wanted = (found.high - found.low) / 2, self.wanted(found.estimate)
        if half <= wanted:
            return 0
        factor = min((half / wanted) ** 2 * 1.05, _GROWTH) if wanted else _GROWTH
        return max(0, min(math.ceil(trials * max(factor, 1.5)), self.max_trials) - trials)
