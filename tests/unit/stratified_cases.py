"""A small case with random times whose odds are known exactly, and a table of all its runs to sample from."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from itertools import product
from typing import TYPE_CHECKING

import numpy as np

from schemesim.engine.batch import run_batch
from schemesim.engine.case import Case
from schemesim.engine.many import Batch, ManyAnswers, ManyTimes
from schemesim.engine.outcome import Outcome
from schemesim.scheme.delays import Delay
from schemesim.scheme.distributions import Empirical
from tests.unit.small_schemes import as_float, case_of, feeder_scheme, states

if TYPE_CHECKING:
    from numpy.typing import NDArray

OPENING_US = (40_000, 52_000, 60_000)
RANDOM = ("F1.CB on", "IN.CB on")
"""The times that are random: what the breakers of the feeder and of the infeed take to interrupt."""


def random_feeder() -> Case:
    """The feeder with breakers that take one of three times."""
    return case_of(feeder_scheme(as_float, Empirical(OPENING_US)))


class EveryRun:
    """Every run of the case: each state of its components with each pair of times, and its exact probability.

    Called as a batch engine it looks its rows up.
    """

    def __init__(self, case: Case) -> None:
        self.case = case
        every = [(yes, p, pair) for yes, p in states(case.program) for pair in product(OPENING_US, repeat=2)]
        self.yes = np.array([[q in yes for q in range(len(case.questions))] for yes, _, _ in every])
        self.times = np.array([pair for _, _, pair in every], dtype=np.int64)
        self.odds = [p / len(OPENING_US) ** 2 for _, p, _ in every]
        self.batch = run_batch(case, len(every), self, times=self)
        codes = self._code(self.yes, self.times)
        self.order = np.argsort(codes)
        self.codes = codes[self.order]

    def answers(self, question: int, rows: NDArray[np.intp]) -> NDArray[np.bool_]:
        return np.asarray(self.yes[rows, question], dtype=np.bool_)

    def of(self, name: str, delay: Delay, rows: NDArray[np.intp]) -> NDArray[np.int64]:
        if delay.is_fixed:
            return np.full(rows.size, delay.nominal_us, dtype=np.int64)
        return np.asarray(self.times[rows, RANDOM.index(name)], dtype=np.int64)

    def _code(self, yes: NDArray[np.bool_], times: NDArray[np.int64]) -> NDArray[np.int64]:
        bits = np.left_shift(1, np.arange(yes.shape[1], dtype=np.int64))
        place = np.searchsorted(OPENING_US, times) @ np.array([3, 1])
        return np.asarray((yes @ bits) * 9 + place, dtype=np.int64)

    def exact(self, event: Callable[[Outcome], bool]) -> Fraction:
        """The probability of an event."""
        return sum((p for row, p in enumerate(self.odds) if event(self.batch.outcome(row))), Fraction(0))

    def __call__(
        self, case: Case, rows: int, answers: ManyAnswers, *, times: ManyTimes | None, horizon_us: int  # noqa: ARG002
    ) -> Batch:
        assert case is self.case
        assert times is not None
        all_rows = np.arange(rows)
        yes = np.stack([answers.answers(q, all_rows) for q in range(len(case.questions))], axis=1)
        drawn = np.stack([times.of(name, Empirical(OPENING_US), all_rows) for name in RANDOM], axis=1)
        codes = self._code(yes, drawn)
        row = self.order[np.searchsorted(self.codes, codes)]
        b = self.batch
        return Batch(
            case, b.endings, b.ending[row], b.t_clear_us[row], b.t_open_us[row], b.t_trip_us[row], b.t_operated_us[row]
        )
