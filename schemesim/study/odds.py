"""Conditional probabilities of answers, and sums of masses, without rounding surprises."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from fractions import Fraction

from schemesim.engine.case import Case
from schemesim.engine.program import Program
from schemesim.errors import nearest, reject
from schemesim.scheme.model import Probability


def add(masses: Iterable[Probability]) -> Probability:
    """The sum of masses: exact for fractions, correctly rounded for floats."""
    items = list(masses)
    if any(isinstance(m, float) for m in items):
        return math.fsum(items)
    return sum(items, Fraction(0))


def question_index(program: Program, question: int | str) -> int:
    """The index of a question given by name or index.

    Raises
    ------
    InputError
        If there is no such question, with the nearest name.
    """
    names = [q.name for q in program.questions]
    if isinstance(question, str):
        if question in names:
            return names.index(question)
        raise reject("failure", question, "the name of a question of the scheme", tip=nearest(question, names))
    if not 0 <= question < len(names):
        raise reject("failure", question, f"the index of a question, from 0 to {len(names) - 1}")
    return question


def askable(case: Case) -> frozenset[int]:
    """Every question that some run of a case may ask; any other changes nothing there."""
    of_gates = (q for group in case.asks for q in group)
    of_breakers = (q for asks in case.breaker_asks for _, questions, _ in asks for q in questions)
    return frozenset((*of_gates, *of_breakers))


def conditions(program: Program, given: Mapping[int | str, bool]) -> dict[int, bool]:
    """Conditions by index; a yes refuses the other modes of its component.

    Raises
    ------
    InputError
        For unknown questions and for two modes of one component.
    """
    out = {question_index(program, q): bool(answer) for q, answer in given.items()}
    for q in [q for q, answer in out.items() if answer]:
        for other in program.siblings[q]:
            if out.get(other):
                both = (program.questions[q].name, program.questions[other].name)
                raise reject("conditions", both, "modes of one component exclude each other: one yes at most")
            out[other] = False
    return dict(sorted(out.items()))


class Odds:
    """Conditional probabilities of answers, each the exact value rounded once."""

    def __init__(self, program: Program, given: Mapping[int, bool]) -> None:
        self._program, self.given = program, given
        self._exact = all(not isinstance(q.probability, float) for q in program.questions)
        self._known: dict[tuple[int, tuple[int, ...]], tuple[Probability, Probability]] = {}

    @property
    def one(self) -> Probability:
        """Certainty, in the arithmetic of the scheme."""
        return Fraction(1) if self._exact else 1.0

    def of(self, question: int, refused: Iterable[int]) -> tuple[Probability, Probability]:
        """Probability of yes and of no once these modes of the component are refused."""
        key = question, tuple(sorted(refused))
        found = self._known.get(key)
        if found is None:
            questions = self._program.questions
            rest = 1 - sum((Fraction(questions[r].probability) for r in key[1]), Fraction(0))
            p = Fraction(questions[question].probability)
            p = min(p / rest, Fraction(1)) if rest > 0 else Fraction(1)
            found = self._known[key] = (p, 1 - p) if self._exact else (float(p), float(1 - p))
        return found

    def refused(self, question: int, answers: Mapping[int, bool]) -> list[int]:
        """Other modes of the component that are known not to be, by answers or by condition."""
        siblings = self._program.siblings[question]
        return [s for s in siblings if answers.get(s, self.given.get(s)) is False] if siblings else []
