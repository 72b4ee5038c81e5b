"""What an event tree says about one case: cleared, in time, by what, with how many breakers.

Each function takes a tree and returns brackets. ``case.duty`` says which breakers are
needed and which are intended.

- *cleared* is the first clearing: no closed path joins the fault to a source.
- *within the limit* means cleared at or before it.
- *by main protection*: what cleared the fault (see :func:`cleared_by`) was committed by
  main functions only; timed zones of the same relay are a role of their own.
- *selective*: nothing opened outside the intended breakers. It does not ask whether the
  fault was cleared.
- *clearing time*: of a fault that is not cleared it is infinite.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

from schemesim.engine.case import Case
from schemesim.engine.outcome import Outcome, Status
from schemesim.errors import reject
from schemesim.scheme.model import Probability, Role
from schemesim.study.brackets import Bracket, Expectation, exactly
from schemesim.study.odds import add
from schemesim.study.tree import End, Tree
from schemesim.ticks import check_limit_us


def p_cleared(tree: Tree) -> Bracket:
    """Probability that the fault is cleared (at any time up to the horizon)."""
    return tree.bracket(lambda o: o.status is Status.CLEARED)


def p_within_limit(tree: Tree, limit_us: int) -> Bracket:
    """Probability that the fault is cleared at or before a limit in microseconds.

    Raises
    ------
    InputError
        For a limit that is none, or can only be meant in ms.
    """
    check_limit_us(limit_us)
    return tree.bracket(lambda o: cleared_by_time(o, limit_us))


def p_undetermined(tree: Tree) -> Bracket:
    """Probability that the horizon comes with the fault not cleared and something still pending."""
    return tree.bracket(lambda o: o.status is Status.UNDETERMINED)


def p_selective(tree: Tree, case: Case) -> Bracket:
    """Probability that no breaker opens outside the intended ones."""
    intended = case.duty.intended
    return tree.bracket(lambda o: o.tripped <= intended)


def p_by_main(tree: Tree, case: Case) -> Bracket:
    """Probability that the fault is cleared by main protection, timed zones not counted."""
    return p_by_role(tree, case)[Role.MAIN]


def p_by_role(tree: Tree, case: Case) -> Mapping[Role, Bracket]:
    """For every role the probability that the fault is cleared by it (see :func:`cleared_by`)."""
    groups: dict[Role, list[Probability]] = {role: [] for role in Role}
    for end, mass in zip(tree.ends, tree.masses, strict=True):
        role = cleared_by(case, end.outcome)
        if role is not None:
            groups[role].append(mass)
    return {role: tree.bracket_of(masses) for role, masses in groups.items()}


def cleared_by_time(outcome: Outcome, limit_us: int) -> bool:
    """Whether a fault is cleared at or before a time in microseconds."""
    return outcome.t_clear_us is not None and outcome.t_clear_us <= limit_us


def cleared_by(case: Case, outcome: Outcome) -> Role | None:
    """The role of what cleared the fault: the worst among the openings that did it; None if not cleared.

    Where every needed breaker has interrupted by the first clearing, these are the openings
    that did it. Otherwise others did it for them: of all openings up to then, those are left
    out, worst role and latest first, without which the fault would be cleared all the same.
    """
    if outcome.status is not Status.CLEARED or outcome.t_clear_us is None:
        return None
    done = [o for o in outcome.openings if o.interrupted and o.t_open_us <= outcome.t_clear_us]
    needed = [o for o in done if o.breaker in case.duty.needed]
    if len(needed) == len(case.duty.needed) and needed:
        return max(o.role for o in needed)
    bit = {case.names[b]: 1 << n for n, b in enumerate(case.breakers)}
    kept = list(done)
    for opening in sorted(done, key=lambda o: (-o.role, -o.t_open_us, o.breaker)):
        without = [o for o in kept if o is not opening]
        if not case.topology(sum(bit[o.breaker] for o in without)).fed:
            kept = without
    return max((o.role for o in kept), default=None)


def excess(case: Case, outcome: Outcome) -> int:
    """How many breakers opened outside the intended ones."""
    return len(outcome.tripped - case.duty.intended)


def distribution(tree: Tree, value: Callable[[Outcome], int]) -> Mapping[int, Bracket]:
    """Probability of each value of a whole-number quantity that was met, in ascending order."""
    groups: dict[int, list[Probability]] = {}
    for end, mass in zip(tree.ends, tree.masses, strict=True):
        groups.setdefault(value(end.outcome), []).append(mass)
    return {n: tree.bracket_of(groups[n]) for n in sorted(groups)}


def breakers_distribution(tree: Tree) -> Mapping[int, Bracket]:
    """Probability of each number of breakers tripped (trips of sources count as breakers)."""
    return distribution(tree, lambda o: len(o.tripped))


def p_open(tree: Tree) -> Mapping[str, Bracket]:
    """For each breaker (and source with a trip) that opens in some run, the probability that it does."""
    groups: dict[str, list[Probability]] = {}
    for end, mass in zip(tree.ends, tree.masses, strict=True):
        for name in end.outcome.tripped:
            groups.setdefault(name, []).append(mass)
    return {name: tree.bracket_of(groups[name]) for name in sorted(groups)}


def excess_distribution(tree: Tree, case: Case) -> Mapping[int, Bracket]:
    """Probability of each number of breakers tripped beyond the intended ones."""
    return distribution(tree, lambda o: excess(case, o))


def expectation(tree: Tree, value: Callable[[End], float], bound: float = math.inf) -> Expectation:
    """The mean of a quantity that is never negative, with the bound it has.

    Parameters
    ----------
    tree : Tree
    value : callable
        The quantity, zero or more, from an :class:`~schemesim.study.tree.End`.
    bound : float
        The most it can be; without one the bracket has no upper end.
    """
    values = [value(end) for end in tree.ends]
    explored = add(v * m for v, m in zip(values, tree.masses, strict=True))
    low, high = exactly(0), exactly(0)
    for v, mass in zip(values, tree.masses, strict=True):
        if v:
            low = low + exactly(v) * exactly(tree.floor(mass))
            high = high + exactly(v) * exactly(tree.ceiling(mass))
    left = tree.ceiling(tree.unexplored)
    rest = exactly(left) * exactly(bound) if left else exactly(0)
    return Expectation(explored, tree.unexplored, Bracket(low.low, (high + rest).high))


def breakers_mean(tree: Tree, case: Case) -> Expectation:
    """Mean number of breakers tripped; no more than those the case can open."""
    return expectation(tree, lambda e: len(e.outcome.tripped), len(case.breakers))


def breakers_excess(tree: Tree, case: Case) -> Expectation:
    """Mean number of breakers tripped beyond the intended ones."""
    beyond = {case.names[b] for b in case.breakers} - case.duty.intended
    return expectation(tree, lambda e: excess(case, e.outcome), len(beyond))


@dataclass(frozen=True, slots=True)
class Quantile:
    """A quantile of the clearing time: it lies between these (None: the fault may stay uncleared)."""

    low_us: int | None
    high_us: int | None

    def __repr__(self) -> str:
        low, high = ("not cleared" if t is None else f"{t / 1000:g} ms" for t in (self.low_us, self.high_us))
        return low if low == high else f"{low}…{high}"


@dataclass(frozen=True)
class ClearingTime:
    """The distribution of the clearing time, as far as it was explored.

    Attributes
    ----------
    cdf : tuple of (int, Bracket)
        For each time met (microseconds) the probability that the fault is cleared by then.
    worst_us : int or None
        Longest clearing time explored.
    worst_probability : Bracket
        Probability of just that time.
    """

    cdf: tuple[tuple[int, Bracket], ...]
    worst_us: int | None
    worst_probability: Bracket
    unexplored: Probability

    def quantile(self, share: float) -> Quantile:
        """The time by which this share of faults is cleared.

        Raises
        ------
        InputError
            If the share is not over 0 and at most 1.
        """
        if not 0 < share <= 1:
            raise reject("share of a quantile", share, "a number over 0, at most 1")
        if self.unexplored >= share:
            low: int | None = 0
        else:
            low = next((t for t, b in self.cdf if b.high >= share), None)
        return Quantile(low, next((t for t, b in self.cdf if b.low >= share), None))


def clearing_time(tree: Tree) -> ClearingTime:
    """The distribution of the clearing time."""
    groups: dict[int, list[Probability]] = {}
    for end, mass in zip(tree.ends, tree.masses, strict=True):
        if end.outcome.t_clear_us is not None:
            groups.setdefault(end.outcome.t_clear_us, []).append(mass)
    times = sorted(groups)
    cdf: list[tuple[int, Bracket]] = []
    so_far: list[Probability] = []
    for t in times:
        so_far.extend(groups[t])
        cdf.append((t, tree.bracket_of(so_far)))
    worst = times[-1] if times else None
    return ClearingTime(
        cdf=tuple(cdf),
        worst_us=worst,
        worst_probability=tree.bracket_of(groups[worst] if worst is not None else ()),
        unexplored=tree.ceiling(tree.unexplored),
    )


def nominal(tree: Tree) -> Outcome | None:
    """The outcome with no failure at all (None where the tree has not reached it)."""
    for leaf in tree.leaves:
        if not any(answer for _, answer in leaf.asked):
            return tree.ends[leaf.end].outcome
    return None
