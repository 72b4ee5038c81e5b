"""Elements with terminals: the small admittance matrices of lines, transformers and sources."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from schemesim.errors import ErrorList
from schemesim.plant.model import Plant, Source
from schemesim.plant.net_data import LineImpedance, SourceImpedance, TransformerImpedance

BASE_MVA = 100.0
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]
Ends = Mapping[str, tuple[tuple[float, int], ...]]
"""Positions and nodes of the ends of lines and transformers."""


@dataclass(frozen=True)
class Segment:
    """A piece of a line between two places where something is attached.

    Attributes
    ----------
    start, end : float
        Its ends as positions along the line.
    terminals : (int, int)
    z : (complex, complex, complex)
        Impedance of this piece in per unit: zero (0 where not known), positive, negative sequence.
    """

    start: float
    end: float
    terminals: tuple[int, int]
    z: tuple[complex, complex, complex]


@dataclass
class Collector:
    """Terminals and matrix entries while elements are added."""

    at: list[int] = field(default_factory=list)
    rows: list[int] = field(default_factory=list)
    cols: list[int] = field(default_factory=list)
    y: tuple[list[complex], list[complex], list[complex]] = field(default_factory=lambda: ([], [], []))
    links: tuple[list[tuple[int, int]], list[tuple[int, int]]] = field(default_factory=lambda: ([], []))
    grounded: tuple[list[bool], list[bool]] = field(default_factory=lambda: ([], []))

    def add(
        self,
        nodes: Iterable[int],
        y: tuple[Complexes, Complexes, Complexes],
        links: tuple[Iterable[tuple[int, int]], Iterable[tuple[int, int]]],
        grounded: tuple[Iterable[bool], Iterable[bool]],
    ) -> int:
        """An element; its first terminal is returned."""
        first = len(self.at)
        self.at += nodes
        for i in range(len(y[1])):
            for j in range(len(y[1])):
                self.rows.append(first + i)
                self.cols.append(first + j)
                for s in range(3):
                    self.y[s].append(complex(y[s][i, j]))
        for s in range(2):
            self.links[s].extend((first + i, first + j) for i, j in links[s])
            self.grounded[s].extend(grounded[s])
        return first


def components(count: int, pairs: Ints) -> Ints:
    """Number of the connected part each of ``count`` vertices is in."""
    from scipy.sparse import coo_matrix
    from scipy.sparse.csgraph import connected_components

    ones = np.ones(len(pairs), dtype=np.int8)
    joined = coo_matrix((ones, (pairs[:, 0], pairs[:, 1])), shape=(count, count))
    labels: Ints = connected_components(joined, directed=False)[1].astype(np.int64)
    return labels


def add_lines(
    plant: Plant,
    ends_of: Ends,
    bus_of: Ints,
    kv: NDArray[np.float64],
    found: Collector,
) -> tuple[dict[str, tuple[Segment, ...]], tuple[str, ...]]:
    segments: dict[str, tuple[Segment, ...]] = {}
    unknown: list[str] = []
    groups = _coupled_groups(plant)
    grouped = {name for group in groups for name in group}
    for name, ends in ends_of.items():
        z = plant.section[name].impedance
        if not isinstance(z, LineImpedance):
            continue
        base = float(kv[bus_of[ends[0][1]]]) ** 2 / BASE_MVA
        if z.z0 is None:
            unknown.append(name)
        if name in grouped:
            continue
        pieces = []
        for (x, n), (x2, n2) in pairwise(ends):
            part = tuple((x2 - x) * value / base for value in (z.z0 or 0j, z.z1, z.z1))
            y0, y1 = (_series(1 / value if value else 0j) for value in part[:2])
            pair = ((0, 1),)
            first = found.add((n, n2), (y0, y1, y1), (pair if z.z0 else (), pair), ((False,) * 2, (False,) * 2))
            pieces.append(Segment(x, x2, (first, first + 1), (part[0], part[1], part[2])))
        segments[name] = tuple(pieces)
    errors = ErrorList()
    for group in groups:
        _add_coupled(plant, group, ends_of, bus_of, kv, found, segments, errors)
    errors.raise_if_any()
    return segments, tuple(unknown)


def _coupled_groups(plant: Plant) -> list[tuple[str, ...]]:
    names = sorted({name for c in plant.couplings for name in (c.a, c.b)})
    place = {name: n for n, name in enumerate(names)}
    pairs = np.array([(place[c.a], place[c.b]) for c in plant.couplings], dtype=np.int64).reshape(-1, 2)
    label = components(len(names), pairs) if names else np.zeros(0, dtype=np.int64)
    return [tuple(n for n, g in zip(names, label, strict=True) if g == group) for group in sorted(set(label.tolist()))]


def _add_coupled(
    plant: Plant,
    group: tuple[str, ...],
    ends_of: Ends,
    bus_of: Ints,
    kv: NDArray[np.float64],
    found: Collector,
    segments: dict[str, tuple[Segment, ...]],
    errors: ErrorList,
) -> None:
    """Lines side by side as one element: current times the matrix of own and mutual impedances is the drop."""
    for name in group:
        z = plant.section[name].impedance
        if not isinstance(z, LineImpedance) or z.z0 is None:
            errors.add(f"zero-sequence impedance of coupled line {name!r}", None, "r0_ohm and x0_ohm")
        if len(ends_of[name]) > 2:
            errors.add(f"bays of coupled line {name!r}", [x for x, _ in ends_of[name]], "bays at its ends only")
    if len(errors):
        return
    m = len(group)
    level = np.array([kv[bus_of[ends_of[name][0][1]]] for name in group])
    z1, z0 = np.zeros((m, m), dtype=complex), np.zeros((m, m), dtype=complex)
    for n, name in enumerate(group):
        z = plant.section[name].impedance
        if isinstance(z, LineImpedance):  # checked above
            z1[n, n], z0[n, n] = z.z1, z.z0 or 0j
    for c in plant.couplings:
        if c.a in group:
            i, j = group.index(c.a), group.index(c.b)
            z0[i, j] = z0[j, i] = c.z0
    z1, z0 = (BASE_MVA * z / np.outer(level, level) for z in (z1, z0))
    if not np.isfinite(np.linalg.cond(z0)) or np.linalg.cond(z0) > 1e12:
        errors.add(f"couplings of {', '.join(group)}", "as strong as the lines' own", "mutual below own impedances")
        return
    drop = np.zeros((m, 2 * m), dtype=complex)
    drop[range(m), range(0, 2 * m, 2)], drop[range(m), range(1, 2 * m, 2)] = 1, -1
    y0, y1 = (drop.T @ np.linalg.inv(z) @ drop for z in (z0, z1))
    nodes = [n for name in group for _, n in ends_of[name]]
    pairs = tuple((2 * n, 2 * n + 1) for n in range(m))
    first = found.add(nodes, (y0, y1, y1), (pairs, pairs), ((False,) * (2 * m), (False,) * (2 * m)))
    for n, name in enumerate(group):
        own = (complex(z0[n, n]), complex(z1[n, n]), complex(z1[n, n]))
        segments[name] = (Segment(0.0, 1.0, (first + 2 * n, first + 2 * n + 1), own),)


def _series(y: complex) -> Complexes:
    return np.array([[y, -y], [-y, y]])


def add_transformers(
    plant: Plant,
    ends_of: Ends,
    bus_of: Ints,
    kv: NDArray[np.float64],
    found: Collector,
) -> dict[tuple[int, int], float]:
    """Add them all; the phase shift in degrees along each link that has one."""
    shifts: dict[tuple[int, int], float] = {}
    for name, ends in ends_of.items():
        t = plant.section[name].impedance
        if not isinstance(t, TransformerImpedance):
            continue
        n = len(t.kv)
        ratio = np.array([rated / kv[bus_of[at]] for rated, (_, at) in zip(t.kv, ends, strict=True)])
        sign = np.array([-1.0 if math.isclose(s % 360, 180) else 1.0 for s in t.shifts])
        scale = BASE_MVA / t.mva
        y1 = _between([z * scale for z in t.z1]) / np.outer(ratio, ratio)
        earth = [3 * z * BASE_MVA / u**2 for z, u in zip(t.earth_ohm, t.kv, strict=True)]
        y0, links, grounded = _zero([z * scale for z in t.z0], t.windings, earth)
        y0 = y0 / np.outer(ratio * sign, ratio * sign)
        pairs = tuple((0, i) for i in range(1, n))
        first = found.add((at for _, at in ends), (y0, y1, y1), (links, pairs), (grounded, (False,) * n))
        for i in range(1, n):
            if t.shifts[i]:
                shifts[(first, first + i)] = t.shifts[i]
    return shifts


def _between(z: list[complex]) -> Complexes:
    """Admittances between two or three windings from the impedances of their pairs."""
    if len(z) == 1:
        return _series(1 / z[0])
    mutual = (z[0] + z[1] - z[2]) / 2
    drop = np.array([[1, -1, 0], [1, 0, -1]])
    y: Complexes = drop.T @ np.linalg.inv(np.array([[z[0], mutual], [mutual, z[1]]])) @ drop
    return y


def _zero(
    z: list[complex], windings: tuple[str, ...], earth: list[complex]
) -> tuple[Complexes, tuple[tuple[int, int], ...], tuple[bool, ...]]:
    """Zero-sequence admittances, links and leads to earth of a transformer."""
    n = len(windings)
    star = [z[0], 0j] if n == 2 else [(z[0] + z[1] - z[2]) / 2, (z[0] + z[2] - z[1]) / 2, (z[1] + z[2] - z[0]) / 2]
    y = np.zeros((n, n), dtype=complex)
    through = [i for i in range(n) if windings[i] == "YN"]
    deltas = [i for i in range(n) if windings[i] == "D"]
    own = np.array([star[i] + earth[i] for i in through])
    if deltas and through:
        delta = [star[i] for i in deltas]
        common = 0j if 0 in delta else 1 / sum(1 / x for x in delta)
        y[np.ix_(through, through)] = np.linalg.inv(np.diag(own) + common)
    elif len(through) > 1:
        drop = np.array([[1] + [-(j == i) for j in range(1, len(through))] for i in range(1, len(through))])
        loop = drop @ np.diag(own) @ drop.T
        y[np.ix_(through, through)] = drop.T @ np.linalg.inv(loop) @ drop
    to_earth = bool(deltas)
    linked = tuple((through[0], i) for i in through[1:])
    return y, linked, tuple(to_earth and i in through for i in range(n))


def impedance_of(source: Source) -> SourceImpedance | None:
    if source.impedance is not None:
        return source.impedance
    return SourceImpedance(r_ohm=0.0, x_ohm=source.impedance_pu) if source.impedance_pu else None


def add_source(source: Source, at: int, kv: float, found: Collector) -> int:
    z = impedance_of(source)
    if z is None:  # refused before
        return -1
    base = 1.0 if source.impedance is None else kv**2 / BASE_MVA
    y0, y1, y2 = (np.array([[0j if x is None else base / x]]) for x in (z.z0, z.z1, z.z2))
    return found.add((at,), (y0, y1, y2), ((), ()), ((z.z0 is not None,), (True,)))
