"""How much each failure matters to an event, from trees conditioned on it and on its absence.

With p the probability of a failure, E the event, P1 = P(E | failure), P0 = P(E | no failure):

- Birnbaum importance: P1 − P0;
- criticality ratio: (P1 − P0)·p / P(E), the share of P(E) that goes with the failure;
- P(failure | E): p·P1 / P(E), how probable the failure is once the event has happened;
- risk achievement worth P1 / P(E); risk reduction worth P(E) / P0.

The criticality ratio and P(failure | E) are both called Fussell–Vesely in the literature;
here each has its own name. P(E) = p·P1 + (1 − p)·P0 is taken from the same two trees.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING, Any

from schemesim.engine.case import Case
from schemesim.engine.program import Program
from schemesim.scheme.model import Probability
from schemesim.study.brackets import Bracket, exactly
from schemesim.study.odds import add, question_index
from schemesim.study.tree import Happens, Tree, explore

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class Importance:
    """Importance of one failure to one event, each figure a bracket.

    Attributes
    ----------
    failure : str
    probability : Probability
    p_event, p_event_given_failure, p_event_given_none : Bracket
    """

    failure: str
    probability: Probability
    p_event_given_failure: Bracket
    p_event_given_none: Bracket

    @property
    def p_event(self) -> Bracket:
        """Probability of the event."""
        p = exactly(self.probability)
        rest = exactly(Fraction(1)) - p
        mixed = p * self.p_event_given_failure + rest * self.p_event_given_none
        return Bracket(max(mixed.low, 0), min(mixed.high, 1))

    @property
    def birnbaum(self) -> Bracket:
        """P(E | failure) − P(E | no failure)."""
        return self.p_event_given_failure - self.p_event_given_none

    @property
    def criticality_ratio(self) -> Bracket:
        """Birnbaum importance × p / P(E) = 1 − P(E | no failure) / P(E)."""
        if self.p_event.low > 0:
            return self._both_ways(lambda one, none, p: (one - none) * p / (p * one + (1 - p) * none))
        return exactly(Fraction(1)) - self.p_event_given_none / self.p_event

    @property
    def p_failure_given_event(self) -> Bracket:
        """P(failure | E) = p·P(E | failure) / P(E)."""
        if self.p_event.low > 0:
            return self._both_ways(lambda one, none, p: p * one / (p * one + (1 - p) * none))
        return Bracket(0, 1)

    @property
    def risk_achievement_worth(self) -> Bracket:
        """P(E | failure) / P(E)."""
        if self.p_event.low > 0:
            return self._both_ways(lambda one, none, p: one / (p * one + (1 - p) * none))
        return self.p_event_given_failure / self.p_event

    @property
    def risk_reduction_worth(self) -> Bracket:
        """P(E) / P(E | no failure)."""
        if self.p_event_given_none.low > 0:
            return self._both_ways(lambda one, none, p: (p * one + (1 - p) * none) / none)
        return self.p_event / self.p_event_given_none

    def _both_ways(self, ratio: Any) -> Bracket:
        """A figure that rises with P(E | failure) and falls with P(E | no failure), bounds rounded outward."""
        p = Fraction(self.probability)
        one, none = self.p_event_given_failure, self.p_event_given_none
        low = ratio(Fraction(one.low), Fraction(none.high), p)
        high = ratio(Fraction(one.high), Fraction(none.low), p)
        floats = any(isinstance(x, float) for x in (one.low, one.high, none.low, none.high))
        exact = Bracket(low, high)
        return exact + Bracket(0.0, 0.0) if floats else exact


def importance(
    case: Case, event: Happens, failures: Iterable[int | str] | None = None, **options: Any
) -> tuple[Importance, ...]:
    """Importance of failures to an event, by Birnbaum's measure the greatest first.

    Parameters
    ----------
    case : Case
    event : callable
        From an outcome to bool.
    failures : iterable of str or int, or None
        Questions by name or index; by default every one asked in a tree of the case.
    **options
        As for :func:`~schemesim.study.tree.explore`; they hold for each conditioned tree.

    Raises
    ------
    InputError
        For a name that is no question of the scheme.
    """
    if failures is None:
        chosen = sorted({q for leaf in explore(case, **options).leaves for q, _ in leaf.asked})
    else:
        chosen = sorted({question_index(case.program, q) for q in failures})
    found = []
    for q in chosen:
        one, none = (explore(case, given={q: answer}, **options).bracket(event) for answer in (True, False))
        question = case.questions[q]
        found.append(Importance(question.name, question.probability, one, none))
    return tuple(sorted(found, key=lambda i: (-i.birnbaum.low, i.failure)))


def importance_table(items: Iterable[Importance]) -> pd.DataFrame:
    """The figures side by side, each with its low and high bound."""
    import pandas as pd  # heavy: only when a table is asked for

    rows = []
    for item in items:
        row: dict[str, object] = {"failure": item.failure, "p": float(item.probability)}
        for name in (
            "birnbaum",
            "criticality_ratio",
            "p_failure_given_event",
            "risk_achievement_worth",
            "risk_reduction_worth",
        ):
            b: Bracket = getattr(item, name)
            row[f"{name}_low"], row[f"{name}_high"] = float(b.low), float(b.high)
        rows.append(row)
    return pd.DataFrame(rows)


def p_component_failed(tree: Tree, component: str, event: Happens) -> Bracket:
    """P(component failed | event): how probable any failure of a component is once the event has happened.

    A component not asked about in a leaf has failed there with the probability it has
    once the modes refused are excluded: the outcome does not depend on it. Only the
    component's own modes count; a common cause is a question of its own.

    Parameters
    ----------
    tree : Tree
    component : str
    event : callable
        From an outcome to bool.
    """
    modes = [i for i, q in enumerate(tree.questions) if q.component == component]
    with_low = with_high = without_low = without_high = exactly(Fraction(0))
    for leaf in tree.leaves:
        if not event(tree.ends[leaf.end].outcome):
            continue
        answers = {**tree.given, **dict(leaf.asked)}
        failed = _failed_share(tree, modes, answers)
        low, high = exactly(tree.floor(leaf.probability)), exactly(tree.ceiling(leaf.probability))
        with_low, with_high = with_low + low * exactly(failed), with_high + high * exactly(failed)
        without_low, without_high = without_low + low * exactly(1 - failed), without_high + high * exactly(1 - failed)
    rest = exactly(tree.ceiling(tree.unexplored))
    with_high, without_high = with_high + rest, without_high + rest
    low_end = with_low / (with_low + without_high)
    high_end = with_high / (with_high + without_low)
    return Bracket(max(low_end.low, 0), min(high_end.high, 1))


def _failed_share(tree: Tree, modes: list[int], answers: dict[int, bool]) -> Fraction:
    """Probability that the component has failed, given the answers of a leaf."""
    if any(answers.get(q) for q in modes):
        return Fraction(1)
    refused = sum((Fraction(tree.questions[q].probability) for q in modes if q in answers), Fraction(0))
    left = sum((Fraction(tree.questions[q].probability) for q in modes if q not in answers), Fraction(0))
    return min(left / (1 - refused), Fraction(1)) if refused < 1 else Fraction(1)


def modes_of(program: Program) -> dict[str, tuple[int, ...]]:
    """Questions that are possible by component, each common cause for itself."""
    found: dict[str, list[int]] = {}
    for i, q in enumerate(program.questions):
        if q.probability > 0:
            found.setdefault(q.component or q.name, []).append(i)
    return {name: tuple(modes) for name, modes in found.items()}


def p_of(program: Program, modes: Iterable[int]) -> Probability:
    """Probability that any of the modes happens."""
    items = [program.questions[q].probability for q in modes]
    exact = sum((Fraction(p) for p in items), Fraction(0))
    exact = min(exact, Fraction(1))
    return float(exact) if any(isinstance(p, float) for p in items) else exact


def without(tree: Tree, modes: tuple[int, ...], happened: int | None, event: Happens) -> Bracket:
    """P(event | this mode, asked in no leaf) or, with None, P(event | no mode), from a tree not conditioned on it.

    A leaf in which none of the modes happened has, under the condition, its own probability over
    that of not having the modes it refused.
    """
    odds = {q: Fraction(tree.questions[q].probability) for q in modes}
    condition = 1 - sum(odds.values(), Fraction(0)) if happened is None else odds[happened]
    if condition <= 0:
        return Bracket(Fraction(0), Fraction(1))
    bad = [event(end.outcome) for end in tree.ends]
    groups: dict[tuple[bool, Fraction], list[Probability]] = {}
    for leaf in tree.leaves:
        answers = dict(leaf.asked)
        if not any(answers.get(q) for q in modes):
            left = 1 - sum((odds[q] for q in modes if q in answers), Fraction(0))
            groups.setdefault((bad[leaf.end], left), []).append(leaf.probability)
    low = high = seen = Fraction(0)
    inexact = isinstance(tree.unexplored, float)
    for (happens, left), masses in groups.items():
        mass = add(masses)
        inexact = inexact or isinstance(mass, float)
        seen += Fraction(tree.floor(mass)) / left
        if happens:
            low += Fraction(tree.floor(mass)) / left
            high += Fraction(tree.ceiling(mass)) / left
    unseen = max(1 - seen, Fraction(0))
    found = Bracket(min(low, Fraction(1)), min(high + unseen, Fraction(1)))
    return found + Bracket(0.0, 0.0) if inexact else found
