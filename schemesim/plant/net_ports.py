"""The network as seen from the terminals of a few buses and from a fault, in one sequence.

With Z the inverse of the bus matrix, Y the admittances of terminals and A their incidence with the buses, moving some
terminals from their bus to a piece of it at another voltage (e above the bus) changes the currents there by
R e with R = Y - (A'Y)' Z (A'Y), restricted to the terminals at hand. The pieces' voltages follow from their
currents having to sum to zero: a system of as many equations as pieces, whatever the size of the network (the
compensation method: Tinney, Compensation methods for network solutions by optimally ordered triangular
factorization, IEEE Trans. PAS 91, 1972; Woodbury's formula).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from schemesim.plant.net_equations import Equations
from schemesim.plant.net_matrices import Complexes
from schemesim.plant.net_station import Split

MOST_TERMINALS = 400
"""So many terminals are kept at hand; what is asked beyond them costs a solution of the whole network."""


@dataclass(frozen=True)
class FaultPort:
    """Where a fault draws its current: from a node, or from both ends of a piece of line.

    Attributes
    ----------
    bus, node : int
        The node (number within the bus) of a fault that is not along a line.
    terminals : tuple of (terminal, weight)
        Shares of the current drawn at the two ends of a piece of line.
    z : (complex, complex, complex)
        Impedance from those ends taken together to the fault, by sequence.
    """

    bus: int
    node: int
    terminals: tuple[tuple[int, float], ...] = ()
    z: tuple[complex, complex, complex] = (0j, 0j, 0j)


@dataclass(frozen=True)
class Response:
    """What one ampere (per unit) into the fault does in one topology and sequence.

    Attributes
    ----------
    moved : array
        Voltage of each known terminal above that of its bus.
    above : mapping of (bus, piece) to voltage
    z : complex
        Impedance seen from the fault.
    """

    moved: Complexes
    above: Mapping[tuple[int, int], complex]
    z: complex


class Ports:
    """Terminals of the buses known so far, with a fault, in one sequence; it grows.

    Parameters
    ----------
    equations : Equations
    sequence : int
    port : FaultPort
    """

    def __init__(self, equations: Equations, sequence: int, port: FaultPort) -> None:
        self.equations = equations
        self.matrix = equations.matrix(sequence)
        self.sequence = sequence
        self.port = port
        self.known: dict[int, slice] = {}
        self.terminals: dict[int, int] = {}
        self.place: dict[int, int] = {}
        self.z: Complexes = np.zeros((0, 0), dtype=complex)
        buses = [int(equations.bus_at[t]) for t, _ in port.terminals] or [port.bus]
        self._grow(list(dict.fromkeys(buses)))
        self._reduce()

    def extend(self, buses: Iterable[int]) -> None:
        """Make the terminals of more buses known."""
        new = [b for b in dict.fromkeys(buses) if b not in self.known]
        if not new:
            return
        starts, rows, _ = self.matrix.terminals
        bus_at = self.equations.bus_at
        reached: dict[int, None] = {}
        for b in new:
            mine = self.equations.bus(b).terminals
            first = len(self.terminals)
            self.terminals.update((t, first + n) for n, t in enumerate(mine))
            self.known[b] = slice(first, first + len(mine))
            reached[b] = None
            for t in mine:
                reached.update(dict.fromkeys(bus_at[rows[starts[t] : starts[t + 1]]].tolist()))
        self._grow([b for b in reached if b not in self.place])
        self._reduce()

    def at_hand(self, bus: int) -> bool:
        """Whether a bus is known; it is made so while there is room."""
        if bus not in self.known and len(self.terminals) < MOST_TERMINALS:
            self.extend((bus,))
        return bus in self.known

    def _reduce(self) -> None:
        """What of the network the terminals at hand see."""
        starts, rows, values = self.matrix.terminals
        bus_at = self.equations.bus_at
        count = len(self.terminals)
        at_buses = np.zeros((len(self.place), count), dtype=complex)
        own = np.zeros((count, count), dtype=complex)
        for t, n in self.terminals.items():
            mine_in_y = slice(starts[t], starts[t + 1])
            for row, value in zip(rows[mine_in_y].tolist(), values[mine_in_y], strict=True):
                at_buses[self.place[int(bus_at[row])], n] += value
                if row in self.terminals:
                    own[self.terminals[row], n] += value
        drawn = np.zeros(len(self.place), dtype=complex)
        self.offset = np.zeros(count, dtype=complex)
        if self.port.terminals:
            for t, weight in self.port.terminals:
                drawn[self.place[int(bus_at[t])]] += weight
                if t in self.terminals:
                    self.offset[self.terminals[t]] += weight
        else:
            drawn[self.place[self.port.bus]] = 1.0
        self.drawn, self.at_buses = drawn, at_buses
        self.by_moved = self.z @ at_buses
        self.by_drawn = self.z @ drawn
        self.reaction = own - at_buses.T @ self.by_moved
        self.pull = at_buses.T @ self.by_drawn
        self.z_whole = complex(drawn @ self.by_drawn) + self.port.z[self.sequence]

    def _grow(self, added: Sequence[int]) -> None:
        if not added:
            return
        old = len(self.place)
        self.place.update((b, old + n) for n, b in enumerate(added))
        columns = self.matrix.columns(added)[list(self.place)]
        grown = np.empty((len(self.place), len(self.place)), dtype=complex)
        grown[:old, :old] = self.z
        grown[:, old:] = columns
        grown[old:, :old] = columns[:old].T
        self.z = grown

    def respond(self, splits: Mapping[int, Split], parted: Sequence[tuple[int, int]]) -> Response:
        """The response in a topology, with the pieces that have a voltage of their own."""
        moved = np.zeros(len(self.terminals), dtype=complex)
        if not parted:
            return Response(moved, {}, self.z_whole)
        choose = np.zeros((len(self.terminals), len(parted)))
        drawn = np.zeros(len(parted))
        for n, (bus, piece) in enumerate(parted):
            first = self.known[bus].start
            for i, p in enumerate(splits[bus].piece_at):
                if p == piece:
                    choose[first + i, n] = 1.0
            if not self.port.terminals and bus == self.port.bus and splits[bus].piece_of[self.port.node] == piece:
                drawn[n] = 1.0
        if self.port.terminals:
            drawn = choose.T @ self.offset.real
        pushed = choose.T @ self.pull - drawn
        above = np.linalg.solve(choose.T @ self.reaction @ choose, pushed)
        moved = choose @ above
        return Response(moved, dict(zip(parted, above.tolist(), strict=True)), self.z_whole + complex(pushed @ above))

    def currents(self, bus: int, response: Response) -> Complexes:
        """Current out of a bus into each of its terminals, for one ampere into the fault."""
        mine = self.known[bus]
        old = len(response.moved)
        found: Complexes = self.offset[mine] - self.pull[mine] + self.reaction[mine, :old] @ response.moved
        return found

    def voltage(self, bus: int, response: Response) -> complex:
        """Voltage of a bus's main piece, for one ampere into the fault."""
        n = self.place[bus]
        return complex(-self.by_drawn[n] - self.by_moved[n, : len(response.moved)] @ response.moved)

    def everywhere(self, response: Response) -> Complexes:
        """Voltages of all buses' main pieces, for one ampere into the fault: one solution of the whole network."""
        pushed: Complexes = np.zeros(self.equations.buses, dtype=complex)
        old = len(response.moved)
        pushed[list(self.place)] = self.drawn + self.at_buses[:, :old] @ response.moved
        return -self.matrix.factors.solve(pushed)

    def currents_from(self, bus: int, response: Response, voltages: Complexes) -> Complexes:
        """As :meth:`currents`, from the voltages of all buses."""
        starts, rows, values = self.matrix.terminals
        offset, found = dict(self.port.terminals), []
        for t in self.equations.bus(bus).terminals:
            part = slice(starts[t], starts[t + 1])
            current = complex(values[part] @ voltages[self.equations.bus_at[rows[part]]]) + offset.get(t, 0.0)
            for row, y in zip(rows[part].tolist(), values[part].tolist(), strict=True):
                n = self.terminals.get(row, len(response.moved))
                if n < len(response.moved):
                    current += y * complex(response.moved[n])
            found.append(current)
        return np.array(found, dtype=complex)
