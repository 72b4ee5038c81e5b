"""Single points of failure and minimal sets of failures, from an explored tree."""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction

from schemesim.engine.case import Case
from schemesim.scheme.model import Probability
from schemesim.study.measures import cleared_by_time, excess, nominal
from schemesim.study.tree import Happens, Tree
from schemesim.ticks import check_limit_us


@dataclass(frozen=True, slots=True)
class SinglePoint:
    """One failure that on its own spoils the clearing of a fault.

    Attributes
    ----------
    failure : str
        Name of the question.
    probability : Probability
        Its probability on demand.
    not_cleared : bool
        The fault stays.
    late : bool
        The fault is cleared after the limit.
    excess : int
        Breakers opened beyond the intended ones.
    """

    failure: str
    probability: Probability
    not_cleared: bool
    late: bool
    excess: int

    @property
    def kind(self) -> str:
        """Plain words, the worst first."""
        return "not cleared" if self.not_cleared else "late" if self.late else "more breakers"


def single_points(tree: Tree, case: Case, limit_us: int | None = None) -> tuple[SinglePoint, ...]:
    """Every failure that alone leaves the fault uncleared, late, or with more breakers opened beyond the intended.

    Each is judged against the run without a failure: what is late, or opens too much, with
    no failure at all is a fault of the design and no single point of failure.

    A tree explored with ``complete=1`` holds all of them; another only those as probable
    as its unexplored mass lets one see.

    Parameters
    ----------
    tree : Tree
    case : Case
    limit_us : int or None
        Longest clearing time that is in time; without one nothing is late.

    Returns
    -------
    tuple of SinglePoint
        Not cleared first, then late, then more breakers; the more probable first.
    """
    if limit_us is not None:
        check_limit_us(limit_us)
    found = []
    base = nominal(tree)
    late_anyway = base is not None and limit_us is not None and not cleared_by_time(base, limit_us)
    more_anyway = 0 if base is None else excess(case, base)
    stays_anyway = base is not None and base.t_clear_us is None
    for leaf in tree.leaves:
        failures = [q for q in leaf.yes if q not in tree.given]
        if len(failures) != 1:
            continue
        outcome = tree.ends[leaf.end].outcome
        stays = outcome.t_clear_us is None and not stays_anyway
        in_time = outcome.t_clear_us is None or limit_us is None or outcome.t_clear_us <= limit_us
        late = not in_time and not late_anyway
        more = excess(case, outcome)
        if stays or late or more > more_anyway:
            question = tree.questions[failures[0]]
            found.append(SinglePoint(question.name, question.probability, stays, late, more))
    return tuple(sorted(found, key=lambda s: (not s.not_cleared, not s.late, -s.probability, s.failure)))


@dataclass(frozen=True, slots=True)
class MinimalSet:
    """Failures that together bring an event, none of which can be left out.

    Attributes
    ----------
    failures : tuple of str
    probability : Probability
        That all of them happen (the product of their probabilities on demand).
    """

    failures: tuple[str, ...]
    probability: Probability


def minimal_sets(tree: Tree, event: Happens) -> tuple[MinimalSet, ...]:
    """The smallest sets of failures met that bring an event, ranked by probability.

    A set is that of the yes answers of an explored leaf in which the event happens; it is
    minimal if no smaller one among those explored is part of it. (Where a further failure
    can prevent the event, a set says what happens if nothing else fails.)

    Parameters
    ----------
    tree : Tree
    event : callable
        From an outcome to bool, e.g. ``lambda o: o.status is Status.NOT_CLEARED``.
    """
    sets = {frozenset(leaf.yes) for leaf in tree.leaves if event(tree.ends[leaf.end].outcome)}
    minimal: list[frozenset[int]] = []
    for chosen in sorted(sets, key=lambda s: (len(s), sorted(s))):
        if not any(known <= chosen for known in minimal):
            minimal.append(chosen)
    out = []
    for chosen in minimal:
        order = sorted(chosen)
        p = math.prod((tree.questions[q].probability for q in order), start=Fraction(1))
        out.append(MinimalSet(tree.names(order), p))
    return tuple(sorted(out, key=lambda s: (-s.probability, s.failures)))
