"""Which question a moment asks next, and what a breaker was tripped by (rule R4)."""

from __future__ import annotations

from typing import Protocol

from schemesim.engine.program import Kind
from schemesim.engine.values import FALSE, OPEN, TRUE, UNKNOWN
from schemesim.engine.wiring import NO_ROLE, Wiring


class Signals(Protocol):
    """What the questions are asked of: a moment."""

    w: Wiring
    value: bytearray
    role: bytearray
    live: int
    opens: set[int]
    touched: set[int]

    def coils(self, b: int) -> list[int]:
        """Signals that energise a coil of a breaker."""

    def read_by(self, b: int) -> list[int]:
        """The inputs a sink depends on now."""

    def is_live(self, b: int) -> bool:
        """Whether a sink may still influence something."""


def next_gate(m: Signals) -> int:
    """The gate whose question comes next: the first in order that a live sink waits for, or -1."""
    if not m.opens:
        return -1
    w, value = m.w, m.value
    waited = [g for i, g in enumerate(w.observed) if m.live >> (len(w.breakers) + i) & 1]
    for c in m.touched:
        if m.is_live(c):
            waited += m.read_by(c)
    best, first = -1, -1
    seen: set[int] = set()
    stack = [j for j in waited if value[j] >= UNKNOWN]
    while stack:
        g = stack.pop()
        if g in seen:
            continue
        seen.add(g)
        if value[g] == OPEN:
            order = w.order[g]
            if (best < 0 or order < first) and m.live & w.reach_mask[g]:
                best, first = g, order
        else:
            stack += [j for j, _ in w.inputs[g] if value[j] >= UNKNOWN]
    return best


def open_behind(m: Signals, signal: int) -> list[int]:
    """Gates that want an answer behind an unknown signal."""
    found, seen, stack = [], set(), [signal]
    while stack:
        g = stack.pop()
        if g in seen:
            continue
        seen.add(g)
        if m.value[g] == OPEN:
            found.append(g)
        else:
            stack.extend(j for j, _ in m.w.inputs[g] if m.value[j] >= UNKNOWN)
    return found


def better(m: Signals, b: int) -> int:
    """The next gate to ask that could still trip an energised breaker in a better role now, or -1."""
    w, value = m.w, m.value
    coils = m.coils(b)
    best = min(m.role[j] for j in coils if value[j] == TRUE)
    if best == 0 or not m.opens:
        return -1
    memo: dict[int, int] = {}
    found: list[int] = []
    seen: set[int] = set()
    stack = coils
    while stack:
        g = stack.pop()
        if g in seen or w.kind[g] is not Kind.GATE or best_role(m, g, memo) >= best:
            continue
        seen.add(g)
        if value[g] == OPEN:
            found.append(g)
        for j, inverted in w.inputs[g]:
            if not inverted:
                stack.append(j)
            elif value[g] >= UNKNOWN and value[j] >= UNKNOWN:
                found.extend(open_behind(m, j))
    return min(found, key=w.order.__getitem__, default=-1)


def best_role(m: Signals, g: int, memo: dict[int, int]) -> int:
    """Best role a signal has if everything unknown turns out true."""
    if g in memo:
        return memo[g]
    w, value = m.w, m.value
    if value[g] == FALSE:
        found = NO_ROLE
    elif w.kind[g] is not Kind.GATE:
        found = m.role[g]
    else:
        roles = sorted(
            0 if inverted else best_role(m, j, memo)
            for j, inverted in w.inputs[g]
            if value[j] >= UNKNOWN or value[j] != inverted
        )
        found = max(w.rank[g], roles[w.k[g] - 1] if w.k[g] > 0 else 0)
    memo[g] = found
    return found


def via(m: Signals, signal: int) -> int:
    """The trip output behind an energised coil, of the best role."""
    w, value = m.w, m.value
    while not w.is_contact[signal] and w.kind[signal] is Kind.GATE:
        behind = [
            j
            for j, inverted in w.inputs[signal]
            if not inverted and value[j] == TRUE and w.kind[j] is not Kind.BREAKER
        ]
        if not behind:
            break
        signal = min(behind, key=lambda j: (m.role[j], w.names[j]))
    return signal
