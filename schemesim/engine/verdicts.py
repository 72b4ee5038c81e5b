"""What failures mean to the packed engine: all answers known from the start, in words."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from schemesim.engine.layout import layout_of
from schemesim.engine.many import ManyAnswers
from schemesim.engine.wiring import Wiring
from schemesim.engine.words import ONES, WORD, pack

if TYPE_CHECKING:
    from schemesim.engine.words import Bits, Rows, Words


class Verdicts:
    """Answers of some rows; a tail that fills the last word says no.

    Attributes
    ----------
    allowed : words, one line for each guarded gate of the layout
        Where no failure keeps the gate from being true.
    modes : words, shape (3, breakers, words)
        Where a breaker does not open, opens late, does not interrupt.
    """

    def __init__(self, w: Wiring, rows: Rows, answers: ManyAnswers) -> None:
        self.w, self._rows, self._answers = w, rows, answers
        self.words = -(-rows.size // 64)
        self._columns: dict[int, Bits] = {}
        verdict = np.zeros((len(w.asks), self.words), dtype=WORD)
        for a, group in enumerate(w.asks):
            verdict[a] = self._any_yes(group) if w.certain[a] > 1 else (ONES if w.certain[a] else 0)
        self.allowed = np.full((len(layout_of(w).guarded), self.words), ONES, dtype=WORD)
        for i, g in enumerate(layout_of(w).guarded):
            for a in w.unless[g]:
                self.allowed[i] &= ~verdict[a]
            if w.given[g]:
                self.allowed[i] &= np.bitwise_or.reduce(verdict[list(w.given[g])], axis=0)
        self.modes = np.zeros((3, len(w.breakers), self.words), dtype=WORD)
        for place, modes in enumerate(w.breaker_modes):
            free = np.full(self.words, ONES, dtype=WORD)
            for mode, group, certain in modes:
                here = np.full(self.words, ONES, dtype=WORD) if certain else self._any_yes(group)
                self.modes[mode, place] = here & free
                free &= ~here

    def yes(self, q: int) -> Bits:
        """The answers of all rows to a question of the wiring."""
        column = self._columns.get(q)
        if column is None:
            column = np.zeros(64 * self.words, dtype=np.bool_)
            column[: self._rows.size] = self._answers.answers(self.w.questions[q], self._rows)
            self._columns[q] = column
        return column

    def _any_yes(self, questions: tuple[int, ...]) -> Words:
        bits = np.zeros(64 * self.words, dtype=np.bool_)
        for q in questions:
            bits |= self.yes(q)
        return pack(bits)
