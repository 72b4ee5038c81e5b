"""Cylinders: sets of failures that share some answers, and answers drawn at random within them.

The leaves of an event tree and the prefixes it has not opened are disjoint, and together they are
everything: each fixes some answers, and its mass is known exactly. What it leaves open is drawn
conditional on what it fixes: of a component whose modes exclude each other, one mode that holds refuses the
others, and modes refused leave more room to the rest, p / (1 − Σ refused).
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from schemesim.engine.draws import uniforms
from schemesim.engine.program import Program
from schemesim.study.odds import Odds
from schemesim.study.tree import Tree

if TYPE_CHECKING:
    from numpy.typing import NDArray

Answered = Mapping[int, bool]

_OPEN, _NO, _YES = np.int8(-1), np.int8(0), np.int8(1)


@dataclass(frozen=True, slots=True)
class Cylinder:
    """Some answers, and the probability that these hold."""

    answers: Answered
    mass: float


def leaves_of(tree: Tree) -> list[Cylinder]:
    """The leaves of a tree, in its order."""
    return [Cylinder({**tree.given, **dict(leaf.asked)}, float(leaf.probability)) for leaf in tree.leaves]


def unopened(program: Program, tree: Tree) -> list[Cylinder]:
    """The prefixes that a tree has not opened: disjoint, and all that its leaves leave over.

    At each question that a leaf answered no, the yes is another branch: either another
    leaf went there, or nobody did.
    """
    root = _Node()
    for leaf in tree.leaves:
        node = root
        for q, answer in leaf.asked:
            node.question = q
            node = node.step.setdefault(answer, _Node())
    odds = Odds(program, tree.given)
    return list(_left(root, dict(tree.given), float(odds.one), odds, tree.given))


class _Node:
    __slots__ = ("question", "step")

    def __init__(self) -> None:
        self.question = -1
        self.step: dict[bool, _Node] = {}


def _left(
    root: _Node, start: dict[int, bool], mass: float, odds: Odds, given: Mapping[int, bool]
) -> Iterator[Cylinder]:
    waiting: list[tuple[_Node, dict[int, bool], float]] = [(root, start, mass)]
    while waiting:
        node, known, mass = waiting.pop()
        while node.step:
            q = node.question
            if q in given:
                node = node.step[given[q]]
                continue
            of = dict(zip((True, False), odds.of(q, odds.refused(q, known)), strict=True))
            for answer in (True, False):
                there = node.step.get(answer)
                share = mass * float(of[answer])
                if there is None and share > 0:
                    yield Cylinder({**known, q: answer}, share)
                elif answer and there is not None:
                    waiting.append((there, {**known, q: True}, share))
            if False not in node.step:
                break
            mass *= float(of[False])
            known[q] = False
            node = node.step[False]


class Drawn:
    """Answers of rows, each within its cylinder; row i has the random numbers of trial ``first + i``.

    Parameters
    ----------
    program : Program
    table : Table
    cylinder : ndarray of int
        The cylinder of each row.
    seed, first : int
    """

    def __init__(self, program: Program, table: Table, cylinder: NDArray[np.intp], seed: int, first: int) -> None:
        self.program, self.table, self.cylinder = program, table, cylinder
        self.seed, self.first = seed, first
        self._uniforms: dict[str, NDArray[np.float64]] = {}
        self._known: dict[int, NDArray[np.bool_]] = {}

    def answers(self, question: int, rows: NDArray[np.intp]) -> NDArray[np.bool_]:
        """See :class:`schemesim.engine.many.ManyAnswers`."""
        known = self._known.get(question)
        if known is None:
            known = self._known[question] = self._of_all(question)
        return known[rows]

    def _of_all(self, question: int) -> NDArray[np.bool_]:
        q = self.program.questions[question]
        fixed = self.table.column(question)[self.cylinder]
        key = f"state of {q.component}" if q.component else q.name
        u = self._uniforms.get(key)
        if u is None:
            u = self._uniforms[key] = uniforms(self.seed, key, self.first, self.cylinder.size)
        rest, below = np.ones(u.size), np.zeros(u.size)
        possible = fixed == _OPEN
        for sibling in self.program.siblings[question]:
            of_sibling = self.table.column(sibling)[self.cylinder]
            p = float(self.program.questions[sibling].probability)
            rest -= np.where(of_sibling == _NO, p, 0.0)
            possible &= of_sibling != _YES
            if sibling < question:
                below += np.where(of_sibling == _OPEN, p, 0.0)
        v = u * np.maximum(rest, 0.0)
        drawn = (fixed == _YES) | (possible & (below <= v) & (v < below + float(q.probability)))
        return np.asarray(drawn, dtype=np.bool_)


class Table:
    """The answers that cylinders fix, a column for each question."""

    def __init__(self, cylinders: Sequence[Cylinder]) -> None:
        self.masses = np.array([c.mass for c in cylinders])
        self._columns: dict[int, NDArray[np.int8]] = {}
        self._free = np.full(len(cylinders), _OPEN)
        for place, c in enumerate(cylinders):
            for q, answer in c.answers.items():
                column = self._columns.get(q)
                if column is None:
                    column = self._columns[q] = self._free.copy()
                column[place] = _YES if answer else _NO

    def column(self, question: int) -> NDArray[np.int8]:
        """What each cylinder says of a question: 1 yes, 0 no, −1 nothing."""
        return self._columns.get(question, self._free)

