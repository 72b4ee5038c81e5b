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

from collections.abc import Iterable, Mapping
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
    difference, whole : Bracket or None
        P(E | failure) − P(E | no failure) and P(E), where they are known better than from the two probabilities.
    """

    failure: str
    probability: Probability
    p_event_given_failure: Bracket
    p_event_given_none: Bracket
    difference: Bracket | None = None
    whole: Bracket | None = None

    @property
    def p_event(self) -> Bracket:
        """Probability of the event."""
        p = exactly(self.probability)
        rest = exactly(Fraction(1)) - p
        mixed = p * self.p_event_given_failure + rest * self.p_event_given_none
        return _both(Bracket(max(mixed.low, 0), min(mixed.high, 1)), self.whole)

    @property
    def birnbaum(self) -> Bracket:
        """P(E | failure) − P(E | no failure)."""
        return _both(self.p_event_given_failure - self.p_event_given_none, self.difference)

    @property
    def criticality_ratio(self) -> Bracket:
        """Birnbaum importance × p / P(E) = 1 − P(E | no failure) / P(E)."""
        if self.p_event.low > 0:
            found = self._both_ways(lambda one, none, p: (one - none) * p / (p * one + (1 - p) * none))
            return _both(found, self._of_event(exactly(self.probability)))
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
            found = self._both_ways(lambda one, none, p: one / (p * one + (1 - p) * none))
            rest = self._of_event(exactly(Fraction(1)) - exactly(self.probability))
            return _both(found, None if rest is None else exactly(Fraction(1)) + rest)
        return self.p_event_given_failure / self.p_event

    @property
    def risk_reduction_worth(self) -> Bracket:
        """P(E) / P(E | no failure)."""
        if self.p_event_given_none.low > 0:
            found = self._both_ways(lambda one, none, p: (p * one + (1 - p) * none) / none)
            if self.difference is None:
                return found
            more = exactly(self.probability) * self.birnbaum
            none = self.p_event_given_none
            ends = [exactly(more.low) / none, exactly(more.high) / none]
            return _both(found, exactly(Fraction(1)) + Bracket(ends[0].low, ends[1].high))
        return self.p_event / self.p_event_given_none

    def _of_event(self, factor: Bracket) -> Bracket | None:
        """The difference, times a factor, as a share of P(E); None where it is not known by itself."""
        return None if self.difference is None else factor * self.birnbaum / self.p_event

    def _both_ways(self, ratio: Any) -> Bracket:
        """A figure that rises with P(E | failure) and falls with P(E | no failure), bounds rounded outward."""
        p = Fraction(self.probability)
        one, none = self.p_event_given_failure, self.p_event_given_none
        low = ratio(Fraction(one.low), Fraction(none.high), p)
        high = ratio(Fraction(one.high), Fraction(none.low), p)
        floats = any(isinstance(x, float) for x in (one.low, one.high, none.low, none.high))
        exact = Bracket(low, high)
        return exact + Bracket(0.0, 0.0) if floats else exact


def _both(one: Bracket, other: Bracket | None) -> Bracket:
    """What lies in both brackets of one value."""
    return one if other is None else Bracket(max(one.low, other.low), min(one.high, other.high))


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


@dataclass(frozen=True)
class Given:
    """P(event | failed) and P(event | not failed) of one item."""

    failed: Bracket
    works: Bracket


def given_by_leaves(tree: Tree, items: Mapping[str, tuple[int, ...]], event: Happens) -> dict[str, Given]:
    """P(event | failed) and P(event | not failed) of items, all from the leaves of one tree.

    In a leaf in which a mode of an item happened the item has failed. In one that asked about none of its modes, or was
    told no, it has failed with the probability left to the modes not asked, given those refused:
    nothing in the leaf depends on these. What no leaf holds of a failure's own probability is unexplored, and no
    more than the tree's unexplored mass. A bracket narrows with the tree to the exact value.

    Parameters
    ----------
    tree : Tree
        Not conditioned.
    items : mapping of name to questions
        Modes that exclude each other.
    event : callable
        From an outcome to bool.
    """
    bad = [event(end.outcome) for end in tree.ends]
    every: dict[bool, list[Probability]] = {True: [], False: []}
    asked: dict[int, list[int]] = {}
    for n, leaf in enumerate(tree.leaves):
        every[bad[leaf.end]].append(leaf.probability)
        for q, _ in leaf.asked:
            asked.setdefault(q, []).append(n)
    found = {}
    for name, modes in items.items():
        odds = {q: Fraction(tree.questions[q].probability) for q in modes}
        whole = min(sum(odds.values(), Fraction(0)), Fraction(1))
        groups: dict[tuple[bool, Fraction], list[Probability]] = {}
        touched = sorted({n for q in modes for n in asked.get(q, ())})
        for n in touched:
            leaf = tree.leaves[n]
            answers = {q: answer for q, answer in leaf.asked if q in odds}
            left = 1 - sum((odds[q] for q in answers), Fraction(0))
            rest = sum((odds[q] for q in modes if q not in answers), Fraction(0))
            share = Fraction(1) if any(answers.values()) or left <= 0 else min(rest / left, Fraction(1))
            groups.setdefault((bad[leaf.end], share), []).append(leaf.probability)
        of = set(touched)
        if len(of) < len(tree.leaves):
            for happens, masses in every.items():
                mine = masses if not of else [
                    leaf.probability for n, leaf in enumerate(tree.leaves) if n not in of and bad[leaf.end] is happens
                ]
                groups.setdefault((happens, whole), []).extend(mine)
        found[name] = _given(tree, groups, whole)
    return found


def _given(tree: Tree, groups: Mapping[tuple[bool, Fraction], list[Probability]], whole: Fraction) -> Given:
    """Both brackets, from masses by whether the event happens and by the share in which the item has failed."""
    sums = [Fraction(0)] * 6  # event low, event high, seen; each where failed, then where not
    inexact = isinstance(tree.unexplored, float)
    for (happens, share), masses in groups.items():
        mass = add(masses)
        inexact = inexact or isinstance(mass, float)
        low, high = Fraction(tree.floor(mass)), Fraction(tree.ceiling(mass))
        for at, part in ((0, share), (3, 1 - share)):
            sums[at + 2] += part * low
            if happens:
                sums[at] += part * low
                sums[at + 1] += part * high
    most = Fraction(tree.ceiling(tree.unexplored))
    ends = []
    for at, mass in ((0, whole), (3, 1 - whole)):
        if mass <= 0:
            ends.append(Bracket(Fraction(0), Fraction(1)))
            continue
        unseen = max(min(mass - sums[at + 2], most), Fraction(0))
        found = Bracket(min(sums[at] / mass, Fraction(1)), min((sums[at + 1] + unseen) / mass, Fraction(1)))
        ends.append(found + Bracket(0.0, 0.0) if inexact else found)
    return Given(*ends)
