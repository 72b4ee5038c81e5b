"""Speed of the network equations: faults solved in many topologies, against a fresh factorisation of each.

A case is one fault in one topology with the currents of every breaker of the stations around it. Low-rank updates pay
for a location (its columns, what hangs together) once and for a topology little; the fresh factorisation is a good
one: the buses fall into pieces as known, only the sparse bus matrix is put together, factorised (ordered for its
symmetric pattern) and solved for the fault alone.
"""

from __future__ import annotations

import math
import random
import resource
import time
import warnings
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import numpy as np
from scipy.sparse import coo_matrix

from schemesim.plant.model import Location, Plant
from schemesim.plant.net_case import FaultType, ShuntFault
from schemesim.plant.net_equations import POSITIVE, Equations, factorised
from schemesim.plant.net_faults import FaultedPlant, PlantNetwork, network_of
from schemesim.plant.net_station import Split

Figure = tuple[str, float]
Topologies = tuple[frozenset[str], ...]

NETWORK = (
    "topologies_area_a",
    "solved_cases_per_s_area_a",
    "solved_cases_per_s_area_a_lg",
    "solved_cases_per_s_9241",
    "time_per_case_exponent",
    "update_over_refactorise_20",
    "update_over_refactorise_100",
    "memory_gib_9241",
)
"""Names of the figures, in their order."""


def network_figures() -> Iterator[Figure]:
    """Cases per second on area A and on 9,241 buses, updates over fresh factorisations, growth, memory."""
    from schemesim.study.tree import explore
    from tests.benchmarks.figures import case_of
    from tests.benchmarks.grids import LOCATION, scenario

    case = case_of(scenario("rts96"), "rts96")
    explore(case, epsilon=1e-4)
    met: Topologies = tuple(sorted({frozenset(case.opened(mask)) for mask in case._topologies}, key=sorted))
    network = network_of(scenario("rts96").plant)
    where = LOCATION["rts96"]
    yield "topologies_area_a", len(met)
    yield "solved_cases_per_s_area_a", len(met) / location_s(network, ShuntFault(where, FaultType.LLL), met)
    yield "solved_cases_per_s_area_a_lg", len(met) / location_s(network, ShuntFault(where, FaultType.LG), met)
    spent: list[tuple[int, float]] = []
    for name in ("case24_ieee_rts", "case118", "case1354pegase", "case2869pegase", "case9241pegase"):
        plant = published(name)
        network = network_of(plant)
        chosen = [(at, openings(plant, at.section, 100)) for at in lines_of(plant, 8)]
        seconds = sum(location_s(network, ShuntFault(at), tops) for at, tops in chosen)
        spent.append((network.equations.buses, seconds / sum(len(tops) for _, tops in chosen)))
    yield "solved_cases_per_s_9241", 1 / spent[-1][1]
    xs, ys = zip(*((math.log(n), math.log(t)) for n, t in spent), strict=True)
    yield "time_per_case_exponent", float(np.polyfit(xs, ys, 1)[0])
    for count in (20, 100):
        yield f"update_over_refactorise_{count}", update_over_refactorise(network, chosen, count)
    yield "memory_gib_9241", resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20


def published(name: str) -> Plant:
    """A network that ``pandapower`` carries, with a strong source in place of every unit, and stations by rule."""
    import pandapower
    import pandapower.networks

    from schemesim.plant.net_import import plant_of_pandapower

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # that library's own, in plenty
        net = getattr(pandapower.networks, name)()
        pandapower.toolbox.replace_gen_by_ext_grid(net)
    net.ext_grid["s_sc_max_mva"] = np.random.default_rng(1).uniform(500, 5000, len(net.ext_grid))
    net.ext_grid["rx_max"] = 0.1
    return plant_of_pandapower(net, zero_ratio=3.0, loads=False)


def lines_of(plant: Plant, count: int) -> list[Location]:
    """Some lines, spread over the plant, a place along each."""
    lines = [s.name for s in plant.sections if s.kind == "line"]
    return [Location(name, 0.37) for name in lines[:: max(1, len(lines) // count)][:count]]


def around(plant: Plant, section: str) -> list[str]:
    """Breakers of the stations at both ends of a line."""
    stations = {d.station for d in plant.at_section[section]}
    return [d.name for d in plant.devices if d.kind == "breaker" and d.station in stations]


def openings(plant: Plant, section: str, count: int) -> Topologies:
    """So many different topologies: up to four breakers open of those around a line."""
    rng = random.Random(section)
    names = around(plant, section)
    found: dict[frozenset[str], None] = {}
    for _ in range(20 * count):
        found[frozenset(rng.sample(names, min(len(names), rng.randint(1, 4))))] = None
        if len(found) == count:
            break
    return tuple(found)


def location_s(network: PlantNetwork, fault: ShuntFault, topologies: Topologies, repeats: int = 3) -> float:
    """Processor time of one location in all its topologies, everything about it made anew; the least of repeats."""
    plant = network.equations.elements.plant
    wanted = [(name, plant.device[name].b) for name in around(plant, fault.location.section)]
    names = frozenset().union(*topologies)
    least = math.inf
    network.equations.matrix(POSITIVE)
    network.equations.matrix(0)
    for _ in range(repeats):
        network.equations._splits.clear()
        start = time.process_time()
        faulted = FaultedPlant(network.equations, fault, network.voltage_factor)
        faulted.prepare(names)
        for opened in topologies:
            solution = faulted.solve(opened)
            for name, into in wanted:
                solution.current(name, into)
        least = min(least, time.process_time() - start)
    return least


def update_over_refactorise(network: PlantNetwork, chosen: Sequence[tuple[Location, Topologies]], count: int) -> float:
    """Cases per second by updates over those by fresh factorisations, of three-phase faults.

    Raises
    ------
    RuntimeError
        If the two do not agree to 1e-6, or too few topologies leave the fault fed.
    """
    updated = fresh = 0.0
    cases = sample = 0
    for where, topologies in chosen:
        fault, mine = ShuntFault(where), topologies[:count]
        near = around(network.equations.elements.plant, where.section)
        updated += location_s(network, fault, mine)
        cases += len(mine)
        faulted = FaultedPlant(network.equations, fault, network.voltage_factor)
        for opened in mine[:5]:
            solution = faulted.solve(opened)
            if not solution.fed:
                continue
            splits = solution._splits
            start = time.process_time()
            again = refactorised(network.equations, faulted, splits, near)
            fresh += time.process_time() - start
            sample += 1
            for name, there in again.items():
                device = solution.equations.elements.plant.device[name]
                here = abs(solution.current(name, device.b)[1]) if name not in opened else 0.0
                if abs(here - abs(there)) > 1e-6 * abs(solution.fault[1]):
                    raise RuntimeError(f"{name} has {here} A by updates and {abs(there)} A afresh")
    if sample < 10:
        raise RuntimeError("too few topologies that leave the fault fed")
    return (fresh / sample) / (updated / cases)


def refactorised(
    equations: Equations, faulted: FaultedPlant, splits: Mapping[int, Split], wanted: Sequence[str]
) -> dict[str, complex]:
    """Positive-sequence currents (A) of breakers for a fault along a line, by a fresh factorisation."""
    e, port = equations.elements, faulted.port
    bus_at = equations.bus_at.copy()
    count = equations.buses
    for bus, split in splits.items():
        extra = [bus, *range(count, count + split.pieces - 1)]
        count += split.pieces - 1
        for t, piece in zip(split.bus.terminals, split.piece_at, strict=True):
            bus_at[t] = extra[piece]
    loose = np.array([*splits, *range(equations.buses, count)])  # a hair of a shunt: a piece may have nothing else
    rows = np.concatenate([bus_at[e.rows], loose])
    cols = np.concatenate([bus_at[e.cols], loose])
    values = np.concatenate([e.y[POSITIVE], np.full(len(loose), 1e-9 + 0j)])
    factors = factorised(coo_matrix((values, (rows, cols)), shape=(count, count)).tocsc())
    drawn: Any = np.zeros(count, dtype=complex)
    for t, weight in port.terminals:
        drawn[bus_at[t]] += weight
    volts = -factors.solve(drawn)
    z = port.z[POSITIVE] - drawn @ volts
    i = faulted.voltage_factor / z
    starts, others, y = equations.matrix(POSITIVE).terminals
    found: dict[str, complex] = {}
    offset = dict(port.terminals)
    for bus in sorted({equations.bus_of_device[name] for name in wanted if name in equations.bus_of_device}):
        split = splits.get(bus) or equations.split(bus, frozenset())
        leaving: Any = np.zeros(len(split.piece_of), dtype=complex)
        for t, node in zip(split.bus.terminals, split.bus.terminal_nodes, strict=True):
            part = slice(starts[t], starts[t + 1])
            leaving[node] += y[part] @ volts[bus_at[others[part]]] + offset.get(t, 0.0)
        flows = split.shares @ leaving * (i * 100e3 / (math.sqrt(3) * e.kv[bus]))
        found |= {name: complex(flows[split.bus.place[name]]) for name in wanted if name in split.bus.place}
    return found
