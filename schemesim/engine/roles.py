"""In which role a breaker is tripped: ties at one instant, and the trip output behind a coil (R4).

Values, roles and the gates that want an answer are those of a run, by block of the case.
"""

from __future__ import annotations

from collections.abc import Sequence, Set

from schemesim.engine.case import Case
from schemesim.engine.program import Kind
from schemesim.engine.rules import FALSE, TRUE, UNKNOWN
from schemesim.scheme.model import Role

NEVER = len(Role)
"""Worse than any role: a signal that cannot be true at this instant."""


def better(case: Case, value: Sequence[int], rank: Sequence[int], waiting: Set[int], block: int) -> int | None:
    """The next gate to ask that could still trip an energised breaker in a better role at this instant."""
    coils = [j for j, _ in case.inputs[block][: case.coils[block]]]
    best = min(rank[j] for j in coils if value[j] == TRUE)
    if best == 0 or not waiting:
        return None
    memo: dict[int, int] = {}
    seen: set[int] = set()
    stack = coils
    found: list[int] = []
    while stack:
        g = stack.pop()
        if g in seen or case.kind[g] is not Kind.GATE or could_be(case, value, rank, g, memo) >= best:
            continue
        seen.add(g)
        if g in waiting:
            found.append(g)
        for j, inverted in case.inputs[g]:
            if not inverted:
                stack.append(j)
            elif value[g] == UNKNOWN and value[j] == UNKNOWN:
                found.extend(open_behind(case, value, waiting, j))
    return min(found, key=case.order.__getitem__, default=None)


def could_be(case: Case, value: Sequence[int], rank: Sequence[int], g: int, memo: dict[int, int]) -> int:
    """Best role a signal has if everything unknown turns out true."""
    if g not in memo:
        if value[g] == FALSE:
            memo[g] = NEVER
        elif case.kind[g] is not Kind.GATE:
            memo[g] = rank[g]
        else:
            ranks = sorted(
                0 if inverted else could_be(case, value, rank, j, memo)
                for j, inverted in case.inputs[g]
                if value[j] == UNKNOWN or (value[j] == TRUE) != inverted
            )
            memo[g] = max(case.rank[g], ranks[case.k[g] - 1] if case.k[g] > 0 else 0)
    return memo[g]


def open_behind(case: Case, value: Sequence[int], waiting: Set[int], signal: int) -> list[int]:
    """Gates that want an answer behind this unknown signal."""
    found: list[int] = []
    seen: set[int] = set()
    stack = [signal]
    while stack:
        g = stack.pop()
        if g in seen:
            continue
        seen.add(g)
        if g in waiting:
            found.append(g)
        else:
            stack.extend(j for j, _ in case.inputs[g] if value[j] == UNKNOWN)
    return found


def via(case: Case, value: Sequence[int], rank: Sequence[int], signal: int) -> int:
    """The trip output behind an energised coil, of the best role."""
    while case.contacts[signal] is None:
        behind = [
            j
            for j, inverted in case.inputs[signal]
            if not inverted and value[j] == TRUE and case.kind[j] is not Kind.BREAKER
        ]
        if case.kind[signal] is not Kind.GATE or not behind:
            break
        signal = min(behind, key=lambda j: (rank[j], case.names[j]))
    return signal
