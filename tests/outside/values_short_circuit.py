"""Short circuit: textbook networks, sequence networks by hand, the bus impedance matrix, infeed."""

from __future__ import annotations

import math
from functools import partial

from schemesim.plant.model import Location, Plant, PlantBuilder, Section, SectionKind, Source
from schemesim.plant.net_case import FaultType, ShuntFault
from schemesim.plant.net_data import LineImpedance, SourceImpedance
from schemesim.plant.net_faults import network_of
from schemesim.scheme.policy import LineScheme, ProtectionSet, single_set
from tests.outside.records import DERIVED, LIBRARY, MEMORY, PUBLISHED, Record, half
from tests.outside.sequences import NOT_CLEARED, measured, star
from tests.unit.electrical_plants import bay, ladder, with_impedances

SUBJECT = "short circuit"

KV, MVA = 100.0, 100.0
OHM = KV**2 / MVA
AMPERE = MVA * 1e3 / (math.sqrt(3) * KV)
VOLT = KV * 1e3 / math.sqrt(3)

Branches = dict[tuple[str, str], float]

# Reactances in per unit: sources at buses, lines between them, and what the fault goes through beyond bus 3.
SAADAT_9 = ({"1": 0.2, "2": 0.4}, {("1", "2"): 0.8, ("1", "3"): 0.4, ("2", "3"): 0.4}, 0.16)
SAADAT_10 = ({"1": 0.25, "2": 0.25}, {("1", "2"): 0.125, ("1", "3"): 0.15, ("2", "3"): 0.25}, 0.1)


def network(sources: dict[str, float], lines: Branches, beyond: float) -> Plant:
    """Buses 1 to 3 and a line F of its reactance from bus 3 to the fault."""
    b = PlantBuilder()
    for name in "123":
        b.add(Section(name=name, kind=SectionKind.BUS, station=name, kv=KV))
    for bus, x in sources.items():
        b.add(Source(name=f"G{bus}", section=bus, impedance=SourceImpedance(r_ohm=0, x_ohm=x * OHM)))
    for (a, z), x in (lines | {("3", ""): beyond}).items():
        name = f"L{a}{z}" if z else "F"
        impedance = LineImpedance(r_ohm=0, x_ohm=x * OHM)
        b.add(Section(name=name, kind=SectionKind.LINE, kv=KV, length=1.0, impedance=impedance))
        bay(b, f"{name}.{a}", a, name, 0.0)
        if z:
            bay(b, f"{name}.{z}", z, name, 1.0)
    return b.build()


def example_9_1() -> dict[str, float]:
    """Currents into the fault and in the lines, and voltages at the buses, in per unit."""
    found = network_of(network(*SAADAT_9)).at(ShuntFault(Location("F", 1.0))).solve()
    return {
        "If": abs(found.fault[1]) / AMPERE,
        "I13": abs(found.current("L13.1.CT", "L13")[1]) / AMPERE,
        "I23": abs(found.current("L23.2.CT", "L23")[1]) / AMPERE,
        "I12": abs(found.current("L12.1.CT", "L12")[1]) / AMPERE,
        "V1": abs(found.voltage("1")[1]) / VOLT,
        "V2": abs(found.voltage("2")[1]) / VOLT,
        "V3": abs(found.voltage("3")[1]) / VOLT,
    }


def example_10(kind: FaultType) -> float:
    """Current in per unit; between lines the impedance of the fault stands half in either phase."""
    sources, lines, through = SAADAT_10
    plant = network(sources, lines, through if kind is FaultType.LLL else through / 2)
    fault = network_of(plant).at(ShuntFault(Location("F", 1.0), kind)).solve().fault
    return abs(fault[1]) / AMPERE * (1 if kind is FaultType.LLL else math.sqrt(3))


def thevenin_by_numpy() -> dict[str, float]:
    """Three-phase currents at the three buses from the diagonal of the inverted admittance matrix."""
    import numpy as np

    sources, lines, _ = SAADAT_10
    y = np.zeros((3, 3), dtype=complex)
    for bus, x in sources.items():
        y[int(bus) - 1, int(bus) - 1] += 1 / (1j * x)
    for (a, b), x in lines.items():
        i, j = int(a) - 1, int(b) - 1
        y[[i, j], [i, j]] += 1 / (1j * x)
        y[[i, j], [j, i]] -= 1 / (1j * x)
    z = np.linalg.inv(y)
    return {bus: float(1 / abs(z[int(bus) - 1, int(bus) - 1])) for bus in "123"}


def at_the_buses() -> dict[str, float]:
    """The same of ours."""
    found = network_of(network(*SAADAT_10))
    return {bus: abs(found.at(ShuntFault(Location(bus))).solve().fault[1]) / AMPERE for bus in "123"}


# A source of 10, 12 and 5 ohm (positive, negative, zero sequence) and a line of 20 and 60 ohm.
Z1, Z2, Z0 = 30.0, 32.0, 65.0


def at_the_end(kind: FaultType, resistance: float = 0.0) -> float:
    """Current in kA at the end of the line: in a phase, or to earth where two phases are joined to it."""
    b = PlantBuilder()
    b.add(Section(name="B", kind=SectionKind.BUS, station="B", kv=KV))
    source = SourceImpedance(r_ohm=0, x_ohm=10, r2_ohm=0, x2_ohm=12, r0_ohm=0, x0_ohm=5)
    b.add(Source(name="G", section="B", impedance=source))
    line = LineImpedance(r_ohm=0, x_ohm=20, r0_ohm=0, x0_ohm=60)
    b.add(Section(name="L", kind=SectionKind.LINE, kv=KV, length=1.0, impedance=line))
    bay(b, "L", "B", "L", 0.0)
    i0, i1, i2 = network_of(b.build()).at(ShuntFault(Location("L", 1.0), kind, resistance)).solve().fault
    a = complex(-0.5, math.sqrt(3) / 2)
    found = {
        FaultType.LG: i0 + i1 + i2,
        FaultType.LL: i0 + a * a * i1 + a * i2,
        FaultType.LLG: 3 * i0,
        FaultType.LLL: i1,
    }[kind]
    return abs(found) / 1e3


E = VOLT / 1e3
BY_HAND = {
    (FaultType.LLL, 0.0): E / Z1,
    (FaultType.LG, 0.0): 3 * E / (Z1 + Z2 + Z0),
    (FaultType.LG, 40.0): 3 * E / math.hypot(Z1 + Z2 + Z0, 3 * 40.0),
    (FaultType.LL, 0.0): math.sqrt(3) * E / (Z1 + Z2),
    (FaultType.LLG, 0.0): 3 * E * Z2 / (Z1 * Z2 + Z1 * Z0 + Z2 * Z0),
}


def apparent_ohm(*, infeed: bool, beyond: float) -> float:
    """What a relay at bus A measures for a fault on line M, with the infeed at bus B or its breaker open."""
    opened = frozenset() if infeed else frozenset({"I.CB"})
    found = network_of(ladder()).at(ShuntFault(Location("M", beyond))).solve(opened)
    return abs(found.voltage("A")[1] / found.current("Ka.CT", "K")[1])


def growth() -> float:
    """How much the line beyond grows, from the currents: 1 + I of the infeed ÷ I of the relay."""
    found = network_of(ladder()).at(ShuntFault(Location("M", 0.5))).solve()
    relay, whole = (abs(found.current(ct, into)[1]) for ct, into in (("Ka.CT", "K"), ("Ma.CT", "M")))
    return whole / relay


PLAIN = single_set(sets=(ProtectionSet(line=LineScheme.DISTANCE),), breaker_failure=None)
INDUCTIVE = with_impedances(star(), z1=0.4j, z0=1.2j, source_ohm=20.0)
SILENT = "Birch/L2/relay 1: failure_to_operate"

SAADAT = "Saadat, Power System Analysis"
SEQUENCES = "symmetrical components, sequence networks by hand (Anderson, Analysis of Faulted Power Systems)"
INFEED = "apparent impedance with infeed, Z1 + (1 + I_infeed/I_relay)·Z2 (line protection guides)"

of = partial(Record, SUBJECT)

RECORDS = (
    of(f"{SAADAT}, example 9.1", PUBLISHED, "three-phase fault at bus 3 through j0.16, per unit",
       {"If": 2.0, "I13": 1.1, "I23": 0.9, "I12": 0.1, "V1": 0.76, "V2": 0.68, "V3": 0.32}, 1e-9, example_9_1),
    *(
        of(f"{SAADAT}, unbalanced fault examples of chapter 10", MEMORY, f"{kind} at bus 3 through j0.1, per unit",
           float(text), half(text), partial(example_10, kind))
        for kind, text in ((FaultType.LLL, "3.125"), (FaultType.LL, "3.2075"))
    ),
    of("bus impedance matrix (numpy.linalg.inv)", LIBRARY, "three-phase current at each of three buses, per unit",
       thevenin_by_numpy, 1e-9, at_the_buses),
    *(
        of(SEQUENCES, DERIVED, f"{kind}{f' through {r:g} ohm' if r else ''}: kA", value, 1e-9,
           partial(at_the_end, kind, r))
        for (kind, r), value in BY_HAND.items()
    ),
    # Source j10 and line j10 against an infeed behind j20: as much current as the relay's, so the line beyond counts
    # twice.
    of(INFEED, DERIVED, "with the infeed: 10 + 2·10 at the end of the line beyond, ohm", 30.0, 1e-9,
       lambda: apparent_ohm(infeed=True, beyond=1.0)),
    of(INFEED, DERIVED, "without: 10 + 10, as far as a reach along the line goes, ohm", 20.0, 1e-9,
       lambda: apparent_ohm(infeed=False, beyond=1.0)),
    # Lines of 0.4 ohm a km, sources of 20 ohm: Alder 20 + 40 and Dale 20 + 24 ohm from Birch, so the line beyond counts
    # 1 + 60/44 times for Alder and 1 + 44/60 times for Dale. Zone 3 is 88 and 52.8 ohm. At 50 km Alder measures 87.3
    # and trips; then Dale measures 24 + 20 and begins its own second. At 60 km they measure 96.7 and 65.6: nobody.
    of(INFEED, DERIVED, "relay silent at Birch, L2 at 50 km: zone 3 of Alder, then of Dale",
       {"Cedar.L2.CB": 70.0, "Alder.L1.CB": 1070.0, "Dale.L3.CB": 2140.0, "cleared": 2140.0}, 0.0005,
       lambda: measured(INDUCTIVE, PLAIN, "L2", SILENT), whole=True),
    of(INFEED, DERIVED, "the same at 60 km, within zone 3 by length: neither sees it",
       {"Cedar.L2.CB": 70.0, "cleared": NOT_CLEARED}, 0.0005,
       lambda: measured(INDUCTIVE, PLAIN, "L2@0.6", SILENT), whole=True),
    of(INFEED, DERIVED, "factor of the line beyond at its middle", 2.0, 1e-9, growth),
)  # fmt: skip
