"""What a clearing sequence takes out of service: load and sections cut off from every source."""

from __future__ import annotations

import math

from schemesim.engine.case import Case
from schemesim.errors import reject
from schemesim.study.brackets import Expectation
from schemesim.study.measures import expectation
from schemesim.study.tree import End, Tree


def lost(case: Case, final_mask: int) -> tuple[float, tuple[str, ...]]:
    """Load (MW) and sections cut off once these breakers of the case are open.

    Parameters
    ----------
    case : Case
    final_mask : int
        As in :class:`~schemesim.engine.outcome.Run`.
    """
    return case.sensed.lost(case.opened(final_mask))


def load_lost_mw(tree: Tree, case: Case) -> Expectation:
    """Mean load lost in MW; no more than with every breaker of the case open."""
    most, _ = lost(case, _every(case))
    return expectation(tree, lambda e: lost(case, e.final_mask)[0], most)


def energy_lost_mwh(tree: Tree, case: Case, restoration_h: float) -> Expectation:
    """Mean energy not supplied in MWh, every load coming back after the time stated.

    Parameters
    ----------
    tree : Tree
    case : Case
    restoration_h : float
        Hours until the load is back.

    Raises
    ------
    InputError
        If the time is negative or not finite.
    """
    if not 0 <= restoration_h < math.inf:
        raise reject("restoration time", restoration_h, "a finite number of hours, zero or more")
    most, _ = lost(case, _every(case))
    return expectation(tree, lambda e: lost(case, e.final_mask)[0] * restoration_h, most * restoration_h)


def sections_lost(tree: Tree, case: Case) -> Expectation:
    """Mean number of sections cut off, the faulted zone among them."""
    _, all_of_them = lost(case, _every(case))

    def count(end: End) -> float:
        return len(lost(case, end.final_mask)[1])

    return expectation(tree, count, len(all_of_them))


def _every(case: Case) -> int:
    return (1 << len(case.breakers)) - 1
