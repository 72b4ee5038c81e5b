"""The equations of the whole network: one bus matrix for each sequence, factorised once.

Nodes joined by closed devices are one bus, so a device without impedance is exact. What an opened device changes is
not put into the matrix: see :mod:`schemesim.plant.net_faults`.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from schemesim.plant.net_elements import Elements
from schemesim.plant.net_matrices import Complexes, Flags, Ints, components
from schemesim.plant.net_station import Bus, Split, split_of

if TYPE_CHECKING:
    from scipy.sparse.linalg import SuperLU

ZERO, POSITIVE, NEGATIVE = 0, 1, 2


@dataclass(frozen=True)
class SequenceMatrix:
    """Bus matrix of one sequence.

    Attributes
    ----------
    terminals : arrays (starts, rows, values)
        The admittance matrix of terminals, column by column.
    earthed : array of bool
        Whether each bus is joined to earth in this sequence before the fault.
    anchors : set of int
        Buses given a shunt of their own because their island has no earth: nothing can flow there, and nothing does.
    factors : SuperLU
    """

    terminals: tuple[Ints, Ints, Complexes]
    earthed: Flags
    anchors: frozenset[int]
    factors: SuperLU

    def columns(self, buses: Sequence[int]) -> Complexes:
        """Columns of the inverse of the bus matrix."""
        n = self.factors.shape[0]
        unit: Complexes = np.zeros((n, len(buses)), dtype=complex)
        unit[buses, range(len(buses))] = 1.0
        return self.factors.solve(unit)


class Equations:
    """A plant's elements, its buses, and the factors of each sequence, made when first needed.

    Parameters
    ----------
    elements : Elements
    """

    def __init__(self, elements: Elements) -> None:
        self.elements = elements
        self.buses = len(elements.kv)
        self.bus_at: Ints = elements.bus_of[elements.at]
        self._matrices: dict[int, SequenceMatrix] = {}
        self._buses: dict[int, Bus] = {}
        self._splits: dict[tuple[int, frozenset[str]], Split] = {}
        self._whole: dict[int, tuple[Ints, Flags]] = {}

    def matrix(self, sequence: int) -> SequenceMatrix:
        """The matrix of a sequence; the negative is the positive where all impedances are the same."""
        if sequence == NEGATIVE and self.elements.same_negative:
            sequence = POSITIVE
        if sequence not in self._matrices:
            self._matrices[sequence] = self._factorised(sequence)
        return self._matrices[sequence]

    def bus(self, number: int) -> Bus:
        """What a bus is made of; kept."""
        if number not in self._buses:
            self._buses[number] = self._bus(number)
        return self._buses[number]

    def split(self, number: int, opened: frozenset[str]) -> Split:
        """A bus with some of its devices and sources open; kept."""
        key = (number, opened)
        if key not in self._splits:
            if len(self._splits) > 20_000:
                self._splits.clear()
            self._splits[key] = split_of(self.bus(number), opened)
        return self._splits[key]

    @cached_property
    def bus_of_device(self) -> Mapping[str, int]:
        """The bus each closed device is inside of, and that of each source in service."""
        e = self.elements
        names = [d.name for d in e.plant.devices]
        inside = {n: int(b) for n, b, c in zip(names, e.bus_of[e.device_ends[:, 0]], e.closed, strict=True) if c}
        return inside | {name: int(self.bus_at[t]) for name, t in e.terminal_of.items()}

    @cached_property
    def station_of_vt(self) -> Mapping[tuple[str, str], str]:
        """Station of each VT, by its name and section."""
        return {(v.name, v.section): v.station for v in self.elements.plant.vts}

    @cached_property
    def links(self) -> tuple[Ints, Ints]:
        """Buses joined by elements, in zero and in positive sequence."""
        return (self.bus_at[self.elements.links[0]], self.bus_at[self.elements.links[1]])

    @cached_property
    def partners(self) -> tuple[Mapping[int, tuple[int, ...]], Mapping[int, tuple[int, ...]]]:
        """Terminals joined to each terminal within its element, in zero and in positive sequence."""
        found: tuple[dict[int, tuple[int, ...]], dict[int, tuple[int, ...]]] = ({}, {})
        for s in (0, 1):
            for i, j in self.elements.links[s].tolist():
                found[s][i] = (*found[s].get(i, ()), j)
                found[s][j] = (*found[s].get(j, ()), i)
        return found

    def without(self, sequence: int, cut: Iterable[int]) -> tuple[Ints, Flags]:
        """Parts of the network once some buses are taken away: part of each bus, and whether each part is earthed."""
        s, gone = min(sequence, 1), list(cut)
        if gone:
            return self._parts(s, gone)
        if s not in self._whole:
            self._whole[s] = self._parts(s, gone)
        return self._whole[s]

    def _parts(self, s: int, cut: list[int]) -> tuple[Ints, Flags]:
        gone = np.zeros(self.buses, dtype=np.bool_)
        gone[cut] = True
        pairs = self.links[s]
        label = components(self.buses, pairs[~gone[pairs].any(axis=1)])
        earthed = np.zeros(int(label.max(initial=-1)) + 1, dtype=np.bool_)
        leads = self.bus_at[self.elements.grounded[s]]
        earthed[label[leads[~gone[leads]]]] = True
        return label, earthed

    def _factorised(self, sequence: int) -> SequenceMatrix:
        from scipy.sparse import coo_matrix, csc_matrix

        e = self.elements
        label, earthed = self.without(sequence, ())
        bare = np.nonzero(~earthed)[0]
        anchors = np.array([int(np.argmax(label == part)) for part in bare], dtype=np.int64)
        if len(bare) > 50:  # one pass where there are many
            first = np.full(len(earthed), -1, dtype=np.int64)
            first[label[::-1]] = np.arange(self.buses)[::-1]
            anchors = first[bare]
        y = e.y[sequence]
        rows = np.concatenate([self.bus_at[e.rows], anchors])
        cols = np.concatenate([self.bus_at[e.cols], anchors])
        values = np.concatenate([y, np.ones(len(anchors), dtype=complex)])
        bus_matrix = coo_matrix((values, (rows, cols)), shape=(self.buses, self.buses)).tocsc()
        kept = np.nonzero(y)[0]
        shape = (len(e.at), len(e.at))
        terminals = csc_matrix((y[kept], (e.rows[kept], e.cols[kept])), shape=shape)
        columns = (terminals.indptr.astype(np.int64), terminals.indices.astype(np.int64), terminals.data)
        return SequenceMatrix(columns, earthed[label], frozenset(anchors.tolist()), factorised(bus_matrix))

    @cached_property
    def _members(self) -> tuple[Ints, Ints, Ints, Ints]:
        """Terminals and closed devices in the order of their buses, and where each bus begins."""
        e = self.elements
        closed = np.nonzero(e.closed)[0]
        device_bus = e.bus_of[e.device_ends[closed, 0]]
        order = np.argsort(device_bus, kind="stable")
        terminals = np.argsort(self.bus_at, kind="stable")
        wanted = np.arange(self.buses + 1)
        starts = np.searchsorted(device_bus[order], wanted)
        return terminals, np.searchsorted(self.bus_at[terminals], wanted), closed[order], starts

    @cached_property
    def _nodes(self) -> tuple[Ints, Ints]:
        order = np.argsort(self.elements.bus_of, kind="stable")
        return order, np.searchsorted(self.elements.bus_of[order], np.arange(self.buses + 1))

    @cached_property
    def _source_at(self) -> Mapping[int, str]:
        return {t: name for name, t in self.elements.terminal_of.items()}

    def _bus(self, number: int) -> Bus:
        e = self.elements
        terminals, t0, devices, d0 = self._members
        nodes, n0 = self._nodes
        mine = devices[d0[number] : d0[number + 1]].tolist()
        local = {n: i for i, n in enumerate(nodes[n0[number] : n0[number + 1]].tolist())}
        at = terminals[t0[number] : t0[number + 1]].tolist()
        return Bus(
            number=number,
            nodes=local,
            devices=tuple(e.plant.devices[d].name for d in mine),
            ends=tuple((local[int(e.device_ends[d, 0])], local[int(e.device_ends[d, 1])]) for d in mine),
            terminals=tuple(at),
            terminal_nodes=tuple(local[int(e.at[t])] for t in at),
            sources=tuple(self._source_at.get(t, "") for t in at),
        )


def factorised(matrix: Any) -> SuperLU:
    """Sparse factors of a complex matrix, ordered for a symmetric pattern."""
    from scipy.sparse.linalg import splu

    return splu(matrix, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.01, options={"SymmetricMode": True})
