"""One bus of the network seen from inside: its devices, and what it falls into when some of them open."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Bus:
    """Nodes joined by devices that are closed before the fault.

    Attributes
    ----------
    number : int
    nodes : mapping of node of the network to its number here
    devices : tuple of str
    ends : tuple of (int, int)
        The nodes (numbers here) each device joins.
    terminals, terminal_nodes : tuples of int
        Terminals of elements at this bus, and the node (number here) of each.
    sources : tuple of str
        The source a terminal belongs to, else empty.
    """

    number: int
    nodes: Mapping[int, int]
    devices: tuple[str, ...]
    ends: tuple[tuple[int, int], ...]
    terminals: tuple[int, ...]
    terminal_nodes: tuple[int, ...]
    sources: tuple[str, ...]

    @cached_property
    def place(self) -> Mapping[str, int]:
        """Place of each device here."""
        return {name: n for n, name in enumerate(self.devices)}


@dataclass(frozen=True)
class Split:
    """A bus with some devices and sources open.

    Attributes
    ----------
    pieces : int
        What it falls into; a source that is open is a piece of its own.
    piece_of : tuple of int
        Piece of each node.
    piece_at : tuple of int
        Piece of each terminal.
    shut : tuple of int
        Devices still closed.
    """

    bus: Bus
    pieces: int
    piece_of: tuple[int, ...]
    piece_at: tuple[int, ...]
    shut: tuple[int, ...]

    @cached_property
    def shares(self) -> NDArray[np.float64]:
        """Current through each device from its first end to its second, for one ampere leaving each node.

        What leaves the nodes of a piece must sum to zero. Kirchhoff's current law alone decides where devices form
        no loop; in a loop the current divides as between equal small impedances, taken to their limit of zero
        (the shares of least sum of squares).
        """
        n = len(self.piece_of)
        flow = np.zeros((n, len(self.bus.devices)))
        for d in self.shut:
            a, b = self.bus.ends[d]
            flow[a, d], flow[b, d] = 1.0, -1.0
        laplacian = flow @ flow.T
        for piece in range(self.pieces):
            mine = np.array([p == piece for p in self.piece_of], dtype=float)
            if mine.any():
                laplacian += np.outer(mine, mine) / mine.sum()
        shares: NDArray[np.float64] = -flow.T @ np.linalg.inv(laplacian)
        return shares


def split_of(bus: Bus, opened: frozenset[str]) -> Split:
    """What a bus falls into with some of its devices and sources open."""
    parent = list(range(len(bus.nodes)))

    def root(n: int) -> int:
        while parent[n] != n:
            parent[n] = parent[parent[n]]
            n = parent[n]
        return n

    shut = tuple(n for n, name in enumerate(bus.devices) if name not in opened)
    for d in shut:
        a, b = bus.ends[d]
        parent[root(a)] = root(b)
    number: dict[int, int] = {}
    piece_of = tuple(number.setdefault(root(n), len(number)) for n in range(len(parent)))
    pieces = len(number)
    at = []
    for node, source in zip(bus.terminal_nodes, bus.sources, strict=True):
        if source and source in opened:
            at.append(pieces)
            pieces += 1
        else:
            at.append(piece_of[node])
    return Split(bus, pieces, piece_of, tuple(at), shut)
