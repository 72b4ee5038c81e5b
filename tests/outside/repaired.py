"""Items with hidden failures, tests and repair as a Markov process between tests, solved with scipy.

States of an item: works, failed and hidden, found and in repair. Between tests it moves at constant rates; a test
finds what is hidden. The periodic solution is the state that a whole interval leads back to itself.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

HOURS_PER_YR = 8760.0


@dataclass(frozen=True)
class Item:
    """Failures a year, the share found at once, years between tests, hours of repair."""

    rate_per_yr: float
    coverage: float
    interval_yr: float
    repair_h: float

    @cached_property
    def generator(self) -> NDArray[np.float64]:
        """Rates a year between works, hidden, in repair."""
        hidden, found = self.rate_per_yr * (1 - self.coverage), self.rate_per_yr * self.coverage
        back = HOURS_PER_YR / self.repair_h
        return np.array([[-hidden - found, hidden, found], [0.0, 0.0, 0.0], [back, 0.0, -back]])

    def step(self, age_yr: float) -> NDArray[np.float64]:
        """Transition probabilities over a time without a test."""
        from scipy.linalg import expm

        out: Any = expm(self.generator * age_yr)
        return np.asarray(out, dtype=float)

    @cached_property
    def after_test(self) -> NDArray[np.float64]:
        """The periodic state just after a test."""
        test = np.array([[1.0, 0, 0], [0, 0, 1], [0, 0, 1]])
        whole = self.step(self.interval_yr) @ test
        system = np.vstack([(whole - np.eye(3)).T, np.ones(3)])
        out, *_ = np.linalg.lstsq(system, np.array([0.0, 0, 0, 1]), rcond=None)
        return np.asarray(out, dtype=float)

    def unavailable(self, age_yr: float) -> float:
        """Probability that it does not work, so long after a test (in turns: after the last of its own)."""
        return 1.0 - float((self.after_test @ self.step(age_yr % self.interval_yr))[0])


def mean_over(value: Callable[[float], float], interval_yr: float, pieces: int = 1) -> float:
    """The mean over an interval, taken between tests that fall evenly into it."""
    from scipy.integrate import quad

    step = interval_yr / pieces
    return sum(quad(value, n * step, (n + 1 - 1e-12) * step, epsrel=1e-10)[0] for n in range(pieces)) / interval_yr


def both_fail(item: Item, *, by_turns: bool = False) -> float:
    """Mean probability that neither of two like items works, tested together or by turns."""
    later = item.interval_yr / 2 if by_turns else 0.0
    return mean_over(
        lambda t: item.unavailable(t) * item.unavailable(t + later), item.interval_yr, 2 if by_turns else 1
    )


def two_of_three_fail(item: Item) -> float:
    """Mean probability that two or more of three like items tested together do not work."""

    def at(t: float) -> float:
        q = item.unavailable(t)
        return 3 * q * q * (1 - q) + q**3

    return mean_over(at, item.interval_yr)
