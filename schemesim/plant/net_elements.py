"""From a plant to elements with terminals: what has an impedance, and the nodes where it is attached.

A line, transformer or source is an element with one terminal for each of its ends; in each sequence it has a small
symmetric admittance matrix between its terminals (per unit of 100 MVA and of the nominal voltage there). Everything
else is nodes (one for a section, one for each end of a line or transformer) joined by devices without impedance.

Phase shifts of transformers are left out of the matrices and put back where quantities are told (positive
sequence by the angle, negative against it), so the matrices stay symmetric.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from schemesim.errors import ErrorList
from schemesim.plant.model import Plant, Section, SectionKind
from schemesim.plant.net_data import TransformerImpedance
from schemesim.plant.net_matrices import (
    Collector,
    Complexes,
    Ends,
    Flags,
    Ints,
    Segment,
    add_lines,
    add_source,
    add_transformers,
    components,
    impedance_of,
)


@dataclass(frozen=True)
class Elements:
    """A plant in one dispatch state as nodes, devices and elements.

    Attributes
    ----------
    plant : Plant
    node_of : mapping of section to node
        Sections with one node.
    ends_of : mapping of section to (position, node) pairs
        Lines, transformers and feeders with an impedance.
    device_ends : array (devices, 2)
        Nodes each device joins, in the order of the plant's devices.
    closed : array of bool
        State of each device before the fault.
    bus_of : array
        Bus of each node: nodes joined by closed devices are one bus.
    kv : array
        Nominal voltage of each bus.
    at : array
        Node of each terminal.
    rows, cols : arrays
        Terminals of each entry of the admittance matrix of terminals.
    y : three arrays
        The entries in zero, positive and negative sequence.
    links : pairs of terminals joined within an element, by sequence (zero, positive).
    grounded : two arrays
        Whether a terminal leads to earth within its element, by sequence (zero, positive).
    segments : mapping of line to its segments
    terminal_of : mapping of source to its terminal
    angle : array
        Angle in radians of the voltage of each bus before the fault.
    unknown_zero : tuple of str
        Lines whose zero sequence is not known.
    same_negative : bool
        Negative-sequence impedances are the positive ones.
    """

    plant: Plant
    node_of: Mapping[str, int]
    ends_of: Ends
    device_ends: Ints
    closed: Flags
    bus_of: Ints
    kv: NDArray[np.float64]
    at: Ints
    rows: Ints
    cols: Ints
    y: tuple[Complexes, Complexes, Complexes]
    links: tuple[Ints, Ints]
    grounded: tuple[Flags, Flags]
    segments: Mapping[str, tuple[Segment, ...]]
    terminal_of: Mapping[str, int]
    angle: NDArray[np.float64]
    unknown_zero: tuple[str, ...]
    same_negative: bool


def elements_of(plant: Plant, dispatch: str | None = None) -> Elements:
    """The elements of a plant in a dispatch state.

    Raises
    ------
    InputError
        With everything that has no impedance though it needs one, buses without or with two nominal voltages,
        phase shifts that do not agree around a loop.
    """
    errors = ErrorList()
    sources = plant.sources_in(dispatch)
    node_of, ends_of, node_kv = _nodes(plant, errors)
    index = {name: dict(ends) for name, ends in ends_of.items()}

    def node(section: str, position: float) -> int:
        return node_of[section] if section in node_of else index[section][place_of(plant.section[section], position)]

    ends = np.array([(node(d.a, d.a_at), node(d.b, d.b_at)) for d in plant.devices], dtype=np.int64).reshape(-1, 2)
    closed = np.array([d.closed for d in plant.devices], dtype=np.bool_)
    bus_of = components(len(node_kv), ends[closed])
    kv = _voltages(plant, node_of, ends_of, node_kv, bus_of, errors)
    for source in sources:
        if impedance_of(source) is None:
            errors.add(f"impedance of source {source.name!r}", None, "an impedance, or impedance_pu over zero")
    errors.raise_if_any()
    found = Collector()
    segments, unknown = add_lines(plant, ends_of, bus_of, kv, found)
    shifts = add_transformers(plant, ends_of, bus_of, kv, found)
    terminal_of, same = {}, True
    for source in sources:
        at = node_of[source.section] if source.section in node_of else ends_of[source.section][0][1]
        terminal_of[source.name] = add_source(source, at, float(kv[bus_of[at]]), found)
        same = same and found.y[1][-1] == found.y[2][-1]
    pairs = tuple(np.array(found.links[s], dtype=np.int64).reshape(-1, 2) for s in range(2))
    at_array = np.array(found.at, dtype=np.int64)
    return Elements(
        plant=plant,
        node_of=node_of,
        ends_of=ends_of,
        device_ends=ends,
        closed=closed,
        bus_of=bus_of,
        kv=kv,
        at=at_array,
        rows=np.array(found.rows, dtype=np.int64),
        cols=np.array(found.cols, dtype=np.int64),
        y=(np.array(found.y[0]), np.array(found.y[1]), np.array(found.y[2])),
        links=(pairs[0], pairs[1]),
        grounded=(np.array(found.grounded[0], dtype=np.bool_), np.array(found.grounded[1], dtype=np.bool_)),
        segments=segments,
        terminal_of=terminal_of,
        angle=_angles(bus_of, len(kv), at_array, pairs[1], shifts, [at_array[t] for t in terminal_of.values()]),
        unknown_zero=unknown,
        same_negative=same,
    )


def place_of(section: Section, position: float) -> float:
    """The end of a section that a position means: windings stand at 0, 0.5 and 1."""
    if isinstance(section.impedance, TransformerImpedance):
        return round(position * (len(section.impedance.kv) - 1)) / (len(section.impedance.kv) - 1)
    return position


def _nodes(
    plant: Plant, errors: ErrorList
) -> tuple[dict[str, int], dict[str, tuple[tuple[float, int], ...]], list[float]]:
    node_of: dict[str, int] = {}
    ends_of: dict[str, tuple[tuple[float, int], ...]] = {}
    node_kv: list[float] = []
    for s in plant.sections:
        places: list[float] = []
        if s.impedance is not None:
            attached = {d.a_at if d.a == s.name else d.b_at for d in plant.at_section[s.name]}
            places = sorted({place_of(s, x) for x in (*attached, 0.0, 1.0)})
            if isinstance(s.impedance, TransformerImpedance) and len(s.impedance.kv) == 3:
                places = [0.0, 0.5, 1.0]
        elif s.kind in (SectionKind.LINE, SectionKind.TRANSFORMER):
            errors.add(f"impedance of {s.kind} {s.name!r}", None, "an impedance, where currents are computed")
        first = len(node_kv)
        if places:
            ends_of[s.name] = tuple((place, first + n) for n, place in enumerate(places))
            node_kv += [0.0 if s.kind is SectionKind.TRANSFORMER else s.kv] * len(places)
        else:
            node_of[s.name] = first
            node_kv.append(s.kv)
    errors.raise_if_any()
    return node_of, ends_of, node_kv


def _voltages(
    plant: Plant,
    node_of: Mapping[str, int],
    ends_of: Ends,
    node_kv: list[float],
    bus_of: Ints,
    errors: ErrorList,
) -> NDArray[np.float64]:
    """Nominal voltage of each bus: that of its sections, else the rated one of a winding there."""
    stated = np.array(node_kv)
    kv = np.zeros(int(bus_of.max(initial=-1)) + 1)
    np.maximum.at(kv, bus_of, stated)
    names = list(node_of) + [name for name, ends in ends_of.items() for _ in ends]
    nodes = [*node_of.values(), *(n for ends in ends_of.values() for _, n in ends)]
    section_at: dict[int, str] = dict(zip(nodes, names, strict=True))
    for n in np.nonzero((stated > 0) & (stated != kv[bus_of]))[0].tolist():
        expectation = f"one nominal voltage (a section joined to it has {kv[bus_of[n]]:g})"
        errors.add(f"kv of section {section_at[n]!r}", float(stated[n]), expectation)
    for name, ends in ends_of.items():
        impedance = plant.section[name].impedance
        if isinstance(impedance, TransformerImpedance):
            for rated, (_, n) in zip(impedance.kv, ends, strict=True):
                kv[bus_of[n]] = kv[bus_of[n]] or rated
    for bus in np.nonzero(kv == 0)[0]:
        n = int(np.nonzero(bus_of == bus)[0][0])
        errors.add(f"kv of section {section_at[n]!r}", 0, "its nominal voltage, or that of a section joined to it")
    return kv


def _angles(
    bus_of: Ints, buses: int, at: Ints, links: Ints, shifts: Mapping[tuple[int, int], float], sources: list[int]
) -> NDArray[np.float64]:
    """Angle of each bus before the fault, from the phase shifts on the way; zero at the first source of an island."""
    angle = np.zeros(buses)
    if not shifts:
        return angle
    around: list[list[tuple[int, float]]] = [[] for _ in range(buses)]
    for i, j in links.tolist():
        a, b, shift = int(bus_of[at[i]]), int(bus_of[at[j]]), shifts.get((i, j), 0.0)
        around[a].append((b, shift))
        around[b].append((a, -shift))
    seen = np.zeros(buses, dtype=np.bool_)
    errors = ErrorList()
    for start in (*(int(bus_of[n]) for n in sources), *range(buses)):
        stack = [start] if not seen[start] else []
        seen[start] = True
        while stack:
            here = stack.pop()
            for there, shift in around[here]:
                if not seen[there]:
                    seen[there] = True
                    angle[there] = angle[here] + shift
                    stack.append(there)
                elif not math.isclose((angle[here] + shift - angle[there] + 180) % 360, 180, abs_tol=1e-6):
                    errors.add("phase shifts around a loop", f"{shift:g} degrees too much", "a sum of zero")
    errors.raise_if_any()
    return np.deg2rad(angle)
