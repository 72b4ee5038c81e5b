"""Who answers the questions of a run: one protocol, several sources.

An answer source is asked at most once for each question of a run and given the
probability of a yes, conditional on what was answered before.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING, Protocol

import numpy as np

from schemesim.engine.draws import Numbers, uniform, uniforms
from schemesim.engine.program import Program
from schemesim.errors import ErrorList, nearest
from schemesim.scheme.model import Probability

if TYPE_CHECKING:
    from numpy.typing import NDArray


class Answers(Protocol):
    """Answers questions by their index in the program."""

    def answer(self, question: int, probability: Probability) -> bool:
        """Yes or no; ``probability`` is that of a yes given all answers before."""


class FixedAnswers:
    """Yes to the questions named, no to all others (failure injection).

    Parameters
    ----------
    program : Program
    yes : iterable of str or int
        Question names as in ``program.questions``, or their indices.

    Raises
    ------
    InputError
        For a name or index that is no question of the program, with the nearest name.

    Notes
    -----
    Modes of one component exclude each other: of two that are named, the one asked first holds.
    """

    def __init__(self, program: Program, yes: Iterable[str | int] = ()) -> None:
        known = {q.name: i for i, q in enumerate(program.questions)}
        errors = ErrorList()
        chosen: set[int] = set()
        for item in yes:
            if isinstance(item, int) and 0 <= item < len(program.questions):
                chosen.add(item)
            elif isinstance(item, str) and item in known:
                chosen.add(known[item])
            else:
                tip = nearest(str(item), known)
                errors.add("failure", item, "the name of a question of the scheme", tip=tip)
        errors.raise_if_any()
        self.yes = frozenset(chosen)

    def answer(self, question: int, probability: Probability) -> bool:  # noqa: ARG002
        """See :class:`Answers`."""
        return question in self.yes


class ForcedAnswers:
    """Answers given where they are given, no elsewhere: a prefix of the event tree."""

    def __init__(self, forced: Mapping[int, bool]) -> None:
        self.forced = forced

    def answer(self, question: int, probability: Probability) -> bool:  # noqa: ARG002
        """See :class:`Answers`."""
        return self.forced.get(question, False)


class DrawnAnswers:
    """Answers of one Monte Carlo trial (rule R19): one uniform for each component and common cause.

    The state of a component follows from its uniform and the probabilities of its
    modes in the order of their names, so exclusive modes never meet and the answer
    does not depend on when, or whether, it is asked.
    """

    def __init__(self, program: Program, seed: int, trial: int) -> None:
        self.program, self.seed, self.trial = program, seed, trial
        uniform(seed, "", trial)  # refuses what is no seed or trial
        self._numbers = Numbers()
        self._drawn: dict[str, float] = {}

    def answer(self, question: int, probability: Probability) -> bool:  # noqa: ARG002
        """See :class:`Answers`."""
        q = self.program.questions[question]
        key = f"state of {q.component}" if q.component else q.name
        u = self._drawn.get(key)
        if u is None:
            u = self._drawn[key] = self._numbers.of(self.seed, key, self.trial)
        siblings = self.program.siblings[question]
        below = float(sum(self.program.questions[j].probability for j in siblings if j < question))
        return below <= u < below + float(q.probability)


def drawn_answers(program: Program, seed: int, question: int, first: int, count: int) -> NDArray[np.bool_]:
    """The answers of :class:`DrawnAnswers` to one question in a range of trials.

    Returns
    -------
    ndarray of bool, shape (count,)
        Entry ``i`` is the answer in trial ``first + i``.
    """
    q = program.questions[question]
    key = f"state of {q.component}" if q.component else q.name
    u = uniforms(seed, key, first, count)
    below = float(sum(program.questions[j].probability for j in program.siblings[question] if j < question))
    return (below <= u) & (u < below + float(q.probability))
