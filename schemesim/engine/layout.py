"""Where the packed engine keeps what: one row of words for each signal, and what is done to which rows.

Blocks that hold state come first, then gates in the order in which they settle, both as in the case;
then the planes of signals that may be true in more than one role (a plane says "true in this role or a better one"),
and one row each that is always true and always false.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from schemesim.engine.program import Kind
from schemesim.engine.topologies import Topologies
from schemesim.engine.wiring import Start, Wiring
from schemesim.engine.words import ONES, unpack

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Words = NDArray[np.uint64]
    Numbers = NDArray[np.intp]

_BITS = 62
"""Signals kept in one number."""

_POWERS = 2 ** np.arange(_BITS, dtype=np.int64)


def at_least(sig: Words, inputs: Sequence[tuple[int, bool]], k: int, out: Words) -> None:
    """Where at least k of the inputs are true."""
    if k <= 0:
        out[:] = ONES
    elif k > len(inputs):
        out[:] = 0
    elif k == 1 or k == len(inputs):
        join = np.bitwise_or if k == 1 else np.bitwise_and
        (j, inverted), *more = inputs
        if inverted:
            np.invert(sig[j], out=out)
        else:
            out[:] = sig[j]
        for j, inverted in more:
            join(out, ~sig[j] if inverted else sig[j], out=out)
    else:
        reached = [np.zeros_like(out) for _ in range(k)]
        for j, inverted in inputs:
            x = ~sig[j] if inverted else sig[j]
            for i in range(k - 1, 0, -1):
                reached[i] |= reached[i - 1] & x
            reached[0] |= x
        out[:] = reached[-1]


@dataclass(frozen=True, slots=True)
class GateRow:
    """A gate: its row, its inputs, how many it needs, where failures allow it, and its planes."""

    out: int
    inputs: tuple[tuple[int, bool], ...]
    k: int
    guard: int
    planes: tuple[tuple[int, tuple[tuple[int, bool], ...]], ...]

    def settle(self, sig: Words, allowed: Words) -> None:
        """Evaluate the gate in all rows."""
        out = sig[self.out]
        at_least(sig, self.inputs, self.k, out)
        if self.guard >= 0:
            out &= allowed[self.guard]
        for plane, inputs in self.planes:
            better = sig[plane]
            at_least(sig, inputs, self.k, better)
            better &= out


class Ways:
    """How a breaker came to be tripped: the signals behind its coils, and what they say."""

    def __init__(self, lay: Layout, place: int) -> None:
        self.lay = lay
        seen: set[int] = set()
        stack = list(lay.coils[place])
        while stack:
            s = stack.pop()
            if s not in seen:
                seen.add(s)
                if lay.w.kind[s] is Kind.GATE and not lay.w.is_contact[s]:
                    stack.extend(j for j, _ in lay.w.inputs[s])
        self.signals = tuple(sorted(seen))
        self.place = place
        self.read = tuple(r for s in self.signals for r in (s, *lay.planes.get(s, {}).values()))
        self._known: dict[tuple[int, ...], int] = {}
        self.found: list[tuple[int, int]] = [(0, 0)]

    @property
    def width(self) -> int:
        """Numbers needed to keep the signals read."""
        return -(-len(self.read) // _BITS)

    def read_at(self, sig: Words, rows: Numbers, keys: NDArray[np.int64], at: Numbers) -> None:
        """Keep the signals behind the coils in these rows, in the columns ``at`` of the keys."""
        for k in range(self.width):
            lines = list(self.read[k * _BITS : (k + 1) * _BITS])
            keys[k, at] = _POWERS[: len(lines)] @ unpack(sig[lines])[:, rows]

    def codes(self, keys: NDArray[np.int64]) -> NDArray[np.int32]:
        """A number from 1 on for each column of keys; see ``found``."""
        table, place = np.unique(keys, axis=1, return_inverse=True) if self.width > 1 else _unique(keys)
        return np.array([self._number(tuple(v)) for v in table.T.tolist()], dtype=np.int32)[place.ravel()]

    def _number(self, key: tuple[int, ...]) -> int:
        number = self._known.get(key)
        if number is None:
            bits = {r: bool(key[i // _BITS] >> (i % _BITS) & 1) for i, r in enumerate(self.read)}
            way = self._way(bits)
            if way not in self.found[1:]:
                self.found.append(way)
            number = self._known[key] = self.found.index(way, 1)
        return number

    def _way(self, bits: dict[int, bool]) -> tuple[int, int]:
        """Role and trip output, from the signals behind the coils."""
        lay, w = self.lay, self.lay.w
        memo: dict[int, int] = {}

        def role(s: int) -> int:
            if s not in memo:
                if w.kind[s] is Kind.GATE and not w.is_contact[s]:
                    roles = sorted(0 if inv else role(j) for j, inv in w.inputs[s] if bits[j] != inv)
                    memo[s] = max(w.rank[s], roles[w.k[s] - 1] if w.k[s] > 0 else 0)
                else:
                    planes = lay.planes.get(s, {})
                    memo[s] = min((r for r, plane in planes.items() if bits[plane]), default=lay.worst[s])
            return memo[s]

        def key(s: int) -> tuple[int, str]:
            return role(s), w.names[s]

        coil = min((s for s in lay.coils[self.place] if bits[s]), key=key)
        via = coil
        while not w.is_contact[via] and w.kind[via] is Kind.GATE:
            behind = [j for j, inv in w.inputs[via] if not inv and bits[j] and w.kind[j] is not Kind.BREAKER]
            if not behind:
                break
            via = min(behind, key=key)
        return role(coil), via


def _unique(keys: NDArray[np.int64]) -> tuple[NDArray[np.int64], NDArray[np.intp]]:
    values, place = np.unique(keys[0], return_inverse=True)
    return values[np.newaxis], place


@dataclass(frozen=True, eq=False, repr=False)
class Layout:
    """See the module."""

    w: Wiring
    sinks: int
    signals: int
    gates: tuple[GateRow, ...]
    guarded: tuple[int, ...]
    planes: dict[int, dict[int, int]]
    worst: tuple[int, ...]
    breakers: Numbers
    coils: tuple[tuple[int, ...], ...]
    closable: Words
    closes: tuple[tuple[int, int, bool], ...]
    senses: Numbers
    idle: Numbers
    latches: Numbers
    source: Numbers
    inverted: Words
    reset: Numbers
    reset_inverted: Words
    has_reset: Words
    remembered: tuple[tuple[int, int, int], ...]
    reaches: tuple[tuple[int, ...], ...]
    reach_of: Numbers
    true_row: int
    up_at_once: Words
    down_at_once: Words
    fixed_us: NDArray[np.int64]
    number: Numbers

    @cached_property
    def topologies(self) -> Topologies:
        """Topologies met so far."""
        return Topologies(self.w.case, self.sinks)

    @cached_property
    def ways(self) -> tuple[Ways, ...]:
        """How each breaker may come to be tripped."""
        return tuple(Ways(self, place) for place in range(len(self.w.breakers)))

    def within(self, signal: int, role: int) -> int | None:
        """The row that says where a signal is true in this role or a better one; None: nowhere."""
        return row_within(self.planes, self.worst, signal, role)


def row_within(planes: dict[int, dict[int, int]], worst: Sequence[int], signal: int, role: int) -> int | None:
    """See :meth:`Layout.within`."""
    if role >= worst[signal]:
        return signal
    best = max((r for r in planes.get(signal, {}) if r <= role), default=None)
    return None if best is None else planes[signal][best]


def layout_of(w: Wiring) -> Layout:
    """The layout of a wiring, made once for its case."""
    known = w.case.shelf.get("layout")
    if not isinstance(known, Layout):
        known = w.case.shelf["layout"] = _layout(w)
    return known


def _layout(w: Wiring) -> Layout:
    n = len(w.kind)
    sinks = sum(1 for kind in w.kind if kind is not Kind.GATE)
    roles = _roles(w)
    planes: dict[int, dict[int, int]] = {}
    row = n
    for s in _told_apart(w, roles):
        for r in sorted(roles[s])[:-1]:
            planes.setdefault(s, {})[r] = row
            row += 1
    worst = tuple(max(possible, default=0) for possible in roles)
    guarded = tuple(g for g in range(sinks, n) if w.unless[g] or w.given[g])
    guard = {g: i for i, g in enumerate(guarded)}
    true_row, false_row = row, row + 1
    source, inverted = np.full(sinks, false_row), np.zeros((sinks, 1), dtype=np.uint64)
    idle: list[int] = []
    latches = [s for s in range(sinks) if w.kind[s] is Kind.LATCH]
    for s in range(sinks):
        items, kind = w.inputs[s], w.kind[s]
        if kind is Kind.LATCH and not items:
            source[s] = true_row if w.k[s] <= 0 else false_row
        elif kind is Kind.BREAKER or (kind is Kind.TIMER and not items):
            idle.append(s)
        elif kind is not Kind.SENSE:
            source[s], inverted[s] = items[0][0], ONES if items[0][1] else 0
    resets = [w.inputs[s][1] if len(w.inputs[s]) > 1 else None for s in latches]
    masks = sorted({w.reach_mask[s] for s in range(sinks)})
    bits = len(w.breakers) + len(w.observed)
    return Layout(
        w=w,
        sinks=sinks,
        signals=row + 2,
        gates=tuple(_gate_row(w, g, guard.get(g, -1), planes, worst) for g in range(sinks, n)),
        guarded=guarded,
        planes=planes,
        worst=worst,
        breakers=np.array(w.breakers, dtype=np.intp),
        coils=tuple(tuple(j for j, _ in w.inputs[b][: w.coils[b]]) for b in w.breakers),
        closable=np.array([[ONES if c else 0] for c in w.closable], dtype=np.uint64).reshape(-1, 1),
        closes=tuple(
            (place, *w.inputs[b][w.coils[b]])
            for place, b in enumerate(w.breakers)
            if w.closable[place] and w.coils[b] < len(w.inputs[b])
        ),
        senses=np.array([s for s in range(sinks) if w.kind[s] is Kind.SENSE], dtype=np.intp),
        idle=np.array(idle, dtype=np.intp),
        latches=np.array(latches, dtype=np.intp),
        source=source,
        inverted=inverted,
        reset=np.array([r[0] if r else false_row for r in resets], dtype=np.intp),
        reset_inverted=np.array([[ONES if r and r[1] else 0] for r in resets], dtype=np.uint64).reshape(-1, 1),
        has_reset=np.array([[ONES if r else 0] for r in resets], dtype=np.uint64).reshape(-1, 1),
        remembered=tuple((s, r, plane) for s in range(sinks) for r, plane in planes.get(s, {}).items()),
        reaches=tuple(tuple(i for i in range(bits) if mask >> i & 1) for mask in masks),
        reach_of=np.array([masks.index(w.reach_mask[s]) for s in range(sinks)], dtype=np.intp),
        true_row=true_row,
        up_at_once=_lines([w.on[s] == Start(0) for s in range(sinks)]),
        down_at_once=_lines([w.off[s] == Start(0) for s in range(sinks)]),
        fixed_us=np.array([[starts[s].fixed_us for s in range(sinks)] for starts in (w.off, w.on)], dtype=np.int64),
        number=np.array([[starts[s].first for s in range(sinks)] for starts in (w.off, w.on)], dtype=np.intp),
    )


def _lines(which: Sequence[bool]) -> Words:
    """Ones for the lines that are true; one column that goes with any number of words."""
    return np.array([[ONES if yes else 0] for yes in which], dtype=np.uint64).reshape(-1, 1)


def _gate_row(w: Wiring, g: int, guard: int, planes: dict[int, dict[int, int]], worst: Sequence[int]) -> GateRow:
    found = []
    for r, plane in planes.get(g, {}).items():
        inputs: list[tuple[int, bool]] = []
        for j, inverted in w.inputs[g] if w.rank[g] <= r else ():
            row = j if inverted else row_within(planes, worst, j, r)
            if row is not None:
                inputs.append((row, inverted))
        found.append((plane, tuple(inputs)))
    return GateRow(g, w.inputs[g], w.k[g], guard, tuple(found))


def _told_apart(w: Wiring, roles: list[set[int]]) -> list[int]:
    """Signals whose role has to be known: those behind a coil, and what their role comes from."""
    stack = [j for b in w.breakers for j, _ in w.inputs[b][: w.coils[b]]]
    seen: set[int] = set()
    while stack:
        s = stack.pop()
        if s in seen or len(roles[s]) < 2:
            continue
        seen.add(s)
        stack.extend(j for j, _ in (w.inputs[s] if w.kind[s] is Kind.GATE else w.inputs[s][:1]))
    return sorted(seen)


def _roles(w: Wiring) -> list[set[int]]:
    """The roles in which each signal may be true (more than it may, never fewer)."""
    roles: list[set[int]] = [set() for _ in w.kind]
    changed = True
    while changed:
        changed = False
        for s, kind in enumerate(w.kind):
            new = _roles_of(w, s, kind, roles)
            if new - roles[s]:
                roles[s] |= new
                changed = True
    return roles


def _roles_of(w: Wiring, s: int, kind: Kind, roles: list[set[int]]) -> set[int]:
    if kind in (Kind.SENSE, Kind.BREAKER):
        return {0}
    items = w.inputs[s] if kind is Kind.GATE else w.inputs[s][:1]
    found = {0} if not items or w.k[s] <= 0 or any(inverted for _, inverted in items) else set()
    for j, inverted in items:
        found |= set() if inverted else roles[j]
    return {max(w.rank[s], r) for r in found} if kind is Kind.GATE else found

