"""The lazy event tree: which failures matter to a case, and how probable each ending is.

A run under answers A meets further questions q1 … qn in order and answers them no. It
is a leaf of probability P(A)·Π(1−p_i) and opens the children A ∪ {q1 … q_{i−1} = no,
q_i = yes}. The most probable unopened child comes next, so what is left unexplored
shrinks as fast as it can. Every probability is a bracket: the explored leaves in
which the event happens are its low bound, and the mass of all unopened children is
added for its high bound.

Rounding
--------
Where every probability of the scheme is a ``Fraction``, so is every result. With floats
each conditional probability, and its complement, is the exact value rounded once;
a mass is a product of at most D of them, hence within (1 ± u)^(2D) of the exact value
(u = 2^-53). Sums are correctly rounded (``math.fsum``), once for each ending and once over
them. Brackets are widened by (2D + 4)·u, relative, which covers all of it.
"""

from __future__ import annotations

import heapq
import math
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from typing import TYPE_CHECKING, Protocol

from schemesim.engine.answers import Answers, ForcedAnswers
from schemesim.engine.case import Case
from schemesim.engine.event import DEFAULT_HORIZON_US, run_event
from schemesim.engine.outcome import Outcome, Run
from schemesim.engine.program import Program, Question
from schemesim.errors import ErrorList, RunError, reject
from schemesim.scheme.model import Probability
from schemesim.study.brackets import Bracket, round_down, round_up
from schemesim.study.odds import Odds, add, conditions

if TYPE_CHECKING:
    from schemesim.engine.forks import Forks, Paused

EPSILON = 1e-6
"""Mass left unexplored by default."""

MAX_RUNS = 100_000
"""Runs a tree may take by default."""

Happens = Callable[[Outcome], bool]
"""Something that happens, or not, in an outcome."""

Asked = tuple[tuple[int, bool], ...]

_UNIT = Fraction(1, 2**53)
_TINY = 1e-290  # products below may lose digits to underflow; each is then off by less than this


class Engine(Protocol):
    """Whatever runs a case under an answer source; :func:`run_event` is one."""

    def __call__(self, case: Case, answers: Answers, *, horizon_us: int) -> Run:
        """Run the case to its end."""


@dataclass(frozen=True, slots=True)
class End:
    """How a run ended: what was observed, and the breakers of the case that no longer conduct."""

    outcome: Outcome
    final_mask: int


@dataclass(frozen=True, slots=True)
class Leaf:
    """One explored combination of answers.

    Attributes
    ----------
    asked : tuple of (int, bool)
        Questions in the order asked, and their answers.
    probability : float or Fraction
    end : int
        Index into the ends of the tree.
    """

    asked: Asked
    probability: Probability
    end: int

    @property
    def yes(self) -> tuple[int, ...]:
        """Questions answered yes, in ascending order."""
        return tuple(sorted(q for q, answer in self.asked if answer))


@dataclass(frozen=True)
class Tree:
    """An explored event tree.

    Attributes
    ----------
    questions : tuple of Question
        Those of the program; answers use their indices.
    leaves : tuple of Leaf
        In the order explored.
    ends : tuple of End
        Distinct endings.
    masses : tuple of Probability
        Explored mass of each ending.
    unexplored : Probability
        Mass of everything not opened; no more than this.
    runs : int
    stopped : str
        ``"epsilon"`` (unexplored mass small enough), ``"bracket"`` (the measure wanted is
        narrow enough) or ``"budget"`` (out of runs).
    given : mapping of question to answer
        What the tree is conditioned on.
    depth : int
        Most factors in one probability (for the rounding bound).
    """

    questions: tuple[Question, ...]
    leaves: tuple[Leaf, ...]
    ends: tuple[End, ...]
    masses: tuple[Probability, ...]
    unexplored: Probability
    runs: int
    stopped: str
    given: Mapping[int, bool]
    depth: int
    slack: float = 0.0

    def bracket(self, event: Happens) -> Bracket:
        """The probability of an event on outcomes.

        Examples
        --------
        ``tree.bracket(lambda o: o.status is Status.CLEARED)``
        """
        return self.bracket_of([m for e, m in zip(self.ends, self.masses, strict=True) if event(e.outcome)])

    def bracket_of(self, masses: Iterable[Probability]) -> Bracket:
        """The bracket of an event whose explored part has these masses (of leaves or ends of this tree)."""
        explored = add(masses)
        return Bracket(self.floor(explored), min(self.ceiling(add((explored, self.unexplored))), 1))

    def floor(self, mass: Probability) -> Probability:
        """A certain lower bound of an explored mass."""
        if isinstance(mass, float):
            return max(0.0, round_down(Fraction(mass) * (1 - self._relative) - Fraction(self.slack)))
        return mass

    def ceiling(self, mass: Probability) -> Probability:
        """A certain upper bound of an explored mass."""
        if isinstance(mass, float) and mass > 0:
            return round_up(Fraction(mass) * (1 + self._relative) + Fraction(self.slack))
        return mass

    @property
    def _relative(self) -> Fraction:
        return (2 * self.depth + 4) * _UNIT if self.depth else Fraction(0)

    def names(self, questions: Iterable[int]) -> tuple[str, ...]:
        """Names of questions."""
        return tuple(self.questions[q].name for q in questions)

    def __repr__(self) -> str:
        return (
            f"Tree({self.runs} runs, {len(self.ends)} distinct outcomes, "
            f"unexplored {float(self.unexplored):.3g}, stopped by {self.stopped})"
        )


@dataclass(frozen=True)
class Narrow:
    """Stops a tree once the bracket of one event is narrow enough.

    Parameters
    ----------
    event : callable
    absolute : float or None
        Width wanted.
    relative : float or None
        Width wanted as a share of the low bound. Either will do where both are given.

    Raises
    ------
    InputError
        If neither is given, or one is not over zero.
    """

    event: Happens
    absolute: float | None = None
    relative: float | None = None

    def __post_init__(self) -> None:
        wanted = [x for x in (self.absolute, self.relative) if x is not None]
        if not wanted or any(not 0 < x < math.inf for x in wanted):
            raise reject("target of a bracket", (self.absolute, self.relative), "an absolute or relative width over 0")

    def __call__(self, tree: Tree) -> bool:
        """Whether the tree may stop."""
        b = tree.bracket(self.event)
        near = self.absolute is not None and b.width <= self.absolute
        return near or (self.relative is not None and b.width <= self.relative * b.low and b.low > 0)


def explore(
    case: Case,
    *,
    epsilon: Probability | None = None,
    max_runs: int = MAX_RUNS,
    horizon_us: int = DEFAULT_HORIZON_US,
    stop: Callable[[Tree], bool] | None = None,
    given: Mapping[int | str, bool] | None = None,
    complete: int = 0,
    run: Engine | None = None,
) -> Tree:
    """Explore the event tree of a case, most probable branch first.

    Random delays are taken at their nominal values.

    Parameters
    ----------
    case : Case
    epsilon : float or Fraction or None
        Stop when the mass not explored is at or under this; by default ``EPSILON``, or 0 where
        ``stop`` is given. With 0 the whole tree is explored.
    max_runs : int
        Stop after so many runs; the brackets reached are then wide and still hold.
    horizon_us : int
        Horizon of each run in microseconds.
    stop : callable or None
        Called with the tree so far (not after every run); True stops. See :class:`Narrow`.
    given : mapping of question (index or name) to bool
        Condition on these answers.
    complete : int
        Explore every combination of up to so many failures, however improbable.
    run : Engine or None
        What runs a case, each time from the start. By default a run goes on from where it parts from
        one that ran before, where that can be had (no inverse time), and the event engine runs it where not.

    Returns
    -------
    Tree

    Raises
    ------
    InputError
        For bad numbers and for conditions that are unknown or exclude each other.
    """
    from schemesim.engine.forks import Forks  # only who grows a tree pays for it

    bound = _checked(epsilon, max_runs, complete, stop is not None)
    known = conditions(case.program, given or {})
    forks = Forks(case, known, horizon_us) if run is None and not case.inverse else None
    growing = _Growing(case.program, known, complete, forks, bound)
    check_at = 8
    stopped = "budget"
    while growing.runs < max_runs:
        growing.open_next(case, run or run_event, horizon_us)
        if growing.done(bound):
            stopped = "epsilon"
            break
        if stop is not None and growing.runs >= check_at and not growing.must_go_on:
            check_at += max(1, check_at // 8)
            if stop(growing.tree("bracket")):
                stopped = "bracket"
                break
    return growing.tree(stopped)


def _checked(epsilon: Probability | None, max_runs: int, complete: int, targeted: bool) -> Probability:
    errors = ErrorList()
    bound: Probability = (0.0 if targeted else EPSILON) if epsilon is None else epsilon
    if not _is_number(bound, (int, float, Fraction)) or not 0 <= bound <= 1:
        errors.add("epsilon", epsilon, "a mass from 0 to 1")
    if not _is_number(max_runs, (int,)) or max_runs < 1:
        errors.add("max_runs", max_runs, "a whole number of 1 or more")
    if not _is_number(complete, (int,)) or complete < 0:
        errors.add("complete", complete, "a whole number of failures, 0 or more")
    errors.raise_if_any()
    return bound


def _is_number(value: object, kinds: tuple[type, ...]) -> bool:
    return isinstance(value, kinds) and not isinstance(value, bool)


@dataclass
class _Growing:
    """A tree in the making: a heap of unopened prefixes (−mass, prefix, factors)."""

    program: Program
    given: dict[int, bool]
    complete: int
    forks: Forks | None = None
    bound: Probability = 0.0
    runs: int = 0
    depth: int = 0
    tiny: int = 0
    leaves: list[Leaf] = field(default_factory=list)
    ends: dict[End, int] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.odds = Odds(self.program, self.given)
        root = self.forks.start() if self.forks else None
        self.heap: list[tuple[Probability, Asked, int, Paused | None]] = []
        self.first: list[tuple[Probability, Asked, int, Paused | None]] = [(-self.odds.one, (), 0, root)]
        self.left: Probability = self.odds.one

    @property
    def must_go_on(self) -> bool:
        """Whether combinations that must be explored are left."""
        return bool(self.first)

    def open_next(self, case: Case, run: Engine, horizon_us: int) -> None:
        """Run the next prefix: it becomes a leaf and opens children."""
        negative, prefix, factors, paused = heapq.heappop(self.first or self.heap)
        pauses: tuple[Paused, ...] = ()
        if self.forks and paused:
            told = self.given.get(prefix[-1][0], prefix[-1][1]) if prefix else None
            forked = self.forks.run(paused, told, self._worth(-negative))
            outcome, final_mask, pauses = forked.outcome, forked.final_mask, forked.pauses
            asked = (*prefix[:-1], *forked.asked)
        else:
            ran = run(case, ForcedAnswers({**self.given, **dict(prefix)}), horizon_us=horizon_us)
            outcome, final_mask, asked = ran.outcome, ran.final_mask, ran.asked
            if asked[: len(prefix)] != prefix:
                raise RunError(f"the run under {prefix} asked {asked}: its questions depend on more than its answers")
        self.runs += 1
        skipped = len(asked) - len(pauses)
        rest, opened, possible = -negative, [negative], True
        known = dict(prefix)
        for place in range(len(prefix), len(asked)):
            q, _ = asked[place]
            if q in self.given:
                known[q] = self.given[q]
                continue
            yes, no = self.odds.of(q, self.odds.refused(q, known))
            known[q] = False
            factors += 1
            if yes:
                child = rest * yes
                self._push(child, (*asked[:place], (q, True)), factors, pauses[place - skipped] if pauses else None)
                opened.append(child)
            rest = rest * no
            if not no:  # one of its modes is certain: no such leaf, and nothing beyond it
                possible = False
                break
        self.depth = max(self.depth, factors)
        if possible:
            self._note(rest)
            end = self.ends.setdefault(End(outcome, final_mask), len(self.ends))
            self.leaves.append(Leaf(asked, rest, end))
        self.left = self.left + add(opened)

    def _worth(self, mass: Probability) -> Callable[[int], bool]:
        """Whether a run that says yes will be opened, as far as can be told before: by its mass."""
        least = self.bound / 100 if self.bound else mass / 1000
        questions = self.program.questions
        return lambda q: mass * questions[q].probability >= least

    def _note(self, mass: Probability) -> None:
        if isinstance(mass, float) and mass < _TINY:
            self.tiny += 1

    def _push(self, mass: Probability, prefix: Asked, factors: int, paused: Paused | None) -> None:
        self._note(mass)
        failures = sum(1 for q, answer in prefix if answer and q not in self.given)
        heapq.heappush(self.first if failures <= self.complete else self.heap, (-mass, prefix, factors, paused))

    def done(self, epsilon: Probability) -> bool:
        """Whether so little is unexplored that the tree may stop."""
        if self.first:
            return False
        if not self.heap:
            return True
        if self.left > epsilon or epsilon == 0:
            return False
        self.left = self._unexplored()  # the running figure drifts by rounding
        return self.left <= epsilon

    def _unexplored(self) -> Probability:
        return add(-item[0] for part in (self.first, self.heap) for item in part)

    def tree(self, stopped: str) -> Tree:
        """The tree as it stands."""
        groups: list[list[Probability]] = [[] for _ in self.ends]
        for leaf in self.leaves:
            groups[leaf.end].append(leaf.probability)
        return Tree(
            questions=self.program.questions,
            leaves=tuple(self.leaves),
            ends=tuple(self.ends),
            masses=tuple(add(g) for g in groups),
            unexplored=self._unexplored(),
            runs=self.runs,
            stopped=stopped,
            given=self.given,
            depth=self.depth,
            slack=self.tiny * _TINY,
        )
