"""Fault currents and voltages against published and hand-worked values."""

from __future__ import annotations

import cmath
import math
from typing import Any

import pytest

from schemesim.plant.layouts import Bay, feeder, generator, infeed, line, single_bus, transformer
from schemesim.plant.model import Device, DeviceKind, Location, Plant, PlantBuilder
from schemesim.plant.net_case import FaultType, ShuntFault
from schemesim.plant.net_data import Coupling, LineImpedance, SourceImpedance, TransformerImpedance
from schemesim.plant.net_faults import network_of
from schemesim.plant.net_import import C_MAX, generator_factor, transformer_factor

KV = 100.0  # with 100 MVA: 1 per unit is 100 ohm and 577.35 A
OHM = KV**2 / 100
AMPERE = 100e3 / (math.sqrt(3) * KV)
VOLT = KV * 1e3 / math.sqrt(3)


def grid(x1: float, x0: float | None = None, x2: float | None = None) -> SourceImpedance:
    """A source of reactances in per unit."""
    zero = {} if x0 is None else {"r0_ohm": 0.0, "x0_ohm": x0 * OHM}
    two = {} if x2 is None else {"r2_ohm": 0.0, "x2_ohm": x2 * OHM}
    return SourceImpedance(r_ohm=0.0, x_ohm=x1 * OHM, **zero, **two)


def wire(x1: float, x0: float | None = None) -> LineImpedance:
    """A line of reactances in per unit."""
    zero = {} if x0 is None else {"r0_ohm": 0.0, "x0_ohm": x0 * OHM}
    return LineImpedance(r_ohm=0.0, x_ohm=x1 * OHM, **zero)


def three_buses() -> Plant:
    """Saadat's three buses."""
    b = PlantBuilder()
    for name, x in (("L12", 0.8), ("L13", 0.4), ("L23", 0.4)):
        line(b, name, 1, kv=KV, impedance=wire(x))
    infeed(b, "N1", "One.B1", impedance=grid(0.2))
    infeed(b, "N2", "Two.B1", impedance=grid(0.4))
    single_bus(b, "One", [Bay("L12", "L12"), Bay("L13", "L13")], kv=KV)
    single_bus(b, "Two", [Bay("L12", "L12", 1.0), Bay("L23", "L23")], kv=KV)
    single_bus(b, "Three", [Bay("L13", "L13", 1.0), Bay("L23", "L23", 1.0)], kv=KV)
    return b.build()


def test_saadat_example_9_1() -> None:
    """Saadat, Power System Analysis, example 9.1: three-phase fault at bus 3 through j0.16.

    The reactance is a line of its own from bus 3 to the fault (a fault here has a resistance only).
    """
    b = PlantBuilder()
    old = three_buses()
    b.add(*(s for s in old.sections), *(s for s in old.sources), *(d for d in old.devices))
    line(b, "Lf", 1, kv=KV, impedance=wire(0.16))
    b.add(Device(name="CBf", kind=DeviceKind.BREAKER, a="Three.B1", b="Lf"))
    solution = network_of(b.build()).at(ShuntFault(Location("Lf", 1.0))).solve()
    assert solution.fault[1] / AMPERE == pytest.approx(-2.0j)
    volts = [solution.voltage(f"{name}.B1")[1] / VOLT for name in ("One", "Two", "Three")]
    assert volts == pytest.approx([0.76, 0.68, 0.32])
    assert solution.current("Three.L13.CTc", "Three.L13.c")[1] / AMPERE == pytest.approx(-1.1j)
    assert solution.current("Three.L23.CTc", "Three.L23.c")[1] / AMPERE == pytest.approx(-0.9j)


def test_infeed_makes_a_fault_look_farther_away() -> None:
    """Apparent impedance Z1 + (1 + I_infeed/I_relay) Z2 (common practice, any textbook on distance protection)."""
    b = PlantBuilder()
    line(b, "L1", 1, kv=KV, impedance=wire(0.3))
    line(b, "L2", 1, kv=KV, impedance=wire(0.5))
    infeed(b, "N1", "One.B1", impedance=grid(0.2))
    infeed(b, "N2", "Two.B1", impedance=grid(0.1))
    single_bus(b, "One", [Bay("L1", "L1")], kv=KV)
    single_bus(b, "Two", [Bay("L1", "L1", 1.0), Bay("L2", "L2")], kv=KV)
    network = network_of(b.build())
    solution = network.at(ShuntFault(Location("L2", 0.4))).solve()
    relay = solution.current("One.L1.CTc", "L1")[1]
    added = solution.current("N2", "Two.B1")[1]
    seen = solution.voltage("One.B1")[1] / relay
    assert seen / OHM == pytest.approx(0.3j + (1 + added / relay) * 0.4 * 0.5j)
    # by hand: from the two sources 0.5 against 0.1, so five times the current comes from the second
    assert added / relay == pytest.approx(5.0)
    assert seen / OHM == pytest.approx(1.5j)
    alone = network.at(ShuntFault(Location("L2", 0.4))).solve(frozenset({"N2"}))
    assert alone.voltage("One.B1")[1] / alone.current("One.L1.CTc", "L1")[1] / OHM == pytest.approx(0.5j)


def unbalanced() -> Plant:
    """Generator X1 = X2 = 0.2, X0 = 0.05; line X1 = 0.3, X0 = 0.9 behind a delta-star transformer of 0.1."""
    b = PlantBuilder()
    unit = SourceImpedance(r_ohm=0, x_ohm=0.2 * 4, r0_ohm=0, x0_ohm=0.05 * 4)
    generator(b, "G1", station="One", kv=20, impedance=unit)
    leak = TransformerImpedance(mva=100, kv=(20, KV), r_pu=(0.0,), x_pu=(0.1,), group="Dyn11")
    transformer(b, "T1", station="One", impedance=leak)
    line(b, "L1", 1, kv=KV, impedance=wire(0.3, 0.9))
    feeder(b, "F", 10, station="Three", kv=KV)
    single_bus(b, "One", [Bay("G1", "G1"), Bay("T1", "T1")], kv=20)
    single_bus(b, "Two", [Bay("T1", "T1", 1.0), Bay("L1", "L1")], kv=KV)
    single_bus(b, "Three", [Bay("L1", "L1", 1.0), Bay("F", "F")], kv=KV)
    return b.build()


def test_unbalanced_faults_worked_by_hand() -> None:
    """Sequence networks in series and in parallel (Anderson, Analysis of Faulted Power Systems, chapter 2; the network
    and its values are worked here): Z1 = Z2 = j0.6, Z0 = j(0.1 + 0.9) = j1.0 at the end of the line."""
    network = network_of(unbalanced())

    def at(kind: FaultType) -> Any:
        return network.at(ShuntFault(Location("Three.B1"), kind)).solve()

    def size(kind: FaultType) -> list[float]:
        return [abs(i) / AMPERE for i in at(kind).fault]

    assert size(FaultType.LLL) == pytest.approx([0, 1 / 0.6, 0], abs=1e-12)
    assert size(FaultType.LL) == pytest.approx([0, 1 / 1.2, 1 / 1.2], abs=1e-12)
    assert size(FaultType.LG) == pytest.approx([1 / 2.2] * 3)
    i1 = 1 / (0.6 + 0.6 * 1.0 / 1.6)
    assert size(FaultType.LLG) == pytest.approx([i1 * 0.6 / 1.6, i1, i1 * 1.0 / 1.6])
    # Phase currents: 3 I0 to earth; sqrt(3) I1 between two phases.
    assert abs(sum(at(FaultType.LG).fault)) / AMPERE == pytest.approx(3 / 2.2)
    a = cmath.exp(2j * math.pi / 3)
    zero, one, two = at(FaultType.LL).fault
    assert abs(zero + a**2 * one + a * two) / AMPERE == pytest.approx(math.sqrt(3) / 1.2)
    # The generator's side of the delta carries no zero sequence, and its bus has none.
    solution = at(FaultType.LG)
    assert solution.current("One.T1.CTc", "T1")[0] == 0
    assert solution.voltage("One.B1")[0] == 0
    # 30 degrees between the two sides, forward in positive sequence, backward in negative.
    low, high = (solution.current("One.T1.CTc", "T1"), solution.current("Two.L1.CTc", "L1"))
    assert high[1] * KV / (low[1] * 20) == pytest.approx(cmath.exp(1j * math.pi / 6))
    assert high[2] * KV / (low[2] * 20) == pytest.approx(cmath.exp(-1j * math.pi / 6))
    # Sound phases of an earth fault: V0 = -Z0 I0, V1 = 1 - Z1 I1, V2 = -Z2 I2.
    assert [abs(v) / VOLT for v in solution.voltage("Three.B1")] == pytest.approx([1 / 2.2, 1.6 / 2.2, 0.6 / 2.2])


def test_resistance_counts_three_times_to_earth() -> None:
    """Z1 + Z2 + Z0 + 3 R (same source): with R = 0.4, |j2.2 + 1.2|."""
    fault = ShuntFault(Location("Three.B1"), FaultType.LG, 0.4 * OHM)
    solution = network_of(unbalanced()).at(fault).solve()
    assert abs(solution.fault[0]) / AMPERE == pytest.approx(1 / abs(1.2 + 2.2j))


def test_mutual_coupling_of_a_parallel_line() -> None:
    """Two parallel lines, X0 = 0.9 each and mutual 0.5: earth fault at the far bus sees (0.9 + 0.5)/2 of both; with one
    of them earthed nowhere (open at one end) 0.9 alone."""
    b = PlantBuilder()
    for name in ("L1", "L2"):
        line(b, name, 1, kv=KV, impedance=wire(0.3, 0.9))
    b.add(Coupling(a="L1", b="L2", r0_ohm=0.0, x0_ohm=0.5 * OHM))
    infeed(b, "N", "One.B1", impedance=grid(0.1, 0.1))
    single_bus(b, "One", [Bay("L1", "L1"), Bay("L2", "L2")], kv=KV)
    single_bus(b, "Two", [Bay("L1", "L1", 1.0), Bay("L2", "L2", 1.0)], kv=KV)
    faulted = network_of(b.build()).at(ShuntFault(Location("Two.B1"), FaultType.LG))
    assert abs(faulted.solve().fault[0]) / AMPERE == pytest.approx(1 / (2 * 0.25 + 0.1 + 0.7))
    alone = faulted.solve(frozenset({"Two.L2.CB"}))
    assert abs(alone.fault[0]) / AMPERE == pytest.approx(1 / (2 * 0.4 + 0.1 + 0.9))
    # What the other line induces in the open one: jXm I0 between its ends.
    far, near = alone.voltage("L2", "Two.L2.CTc")[0], alone.voltage("L2", "One.L2.CTc")[0]
    assert abs(far - near) / VOLT == pytest.approx(0.5 * abs(alone.fault[0]) / AMPERE)


def test_a_fault_along_a_line_by_hand() -> None:
    """Two sources 0.2 and 0.3 joined by a line of 0.5; at 0.4 of it: 0.2 + 0.2 beside 0.3 + 0.3."""
    b = PlantBuilder()
    line(b, "L1", 1, kv=KV, impedance=wire(0.5))
    infeed(b, "N1", "One.B1", impedance=grid(0.2))
    infeed(b, "N2", "Two.B1", impedance=grid(0.3))
    single_bus(b, "One", [Bay("L1", "L1")], kv=KV)
    single_bus(b, "Two", [Bay("L1", "L1", 1.0)], kv=KV)
    faulted = network_of(b.build()).at(ShuntFault(Location("L1", 0.4)))
    both = faulted.solve()
    assert abs(both.current("One.L1.CTc", "L1")[1]) / AMPERE == pytest.approx(1 / 0.4)
    assert abs(both.current("Two.L1.CTc", "L1")[1]) / AMPERE == pytest.approx(1 / 0.6)
    one = faulted.solve(frozenset({"Two.L1.CB"}))  # the other end stays as it was: no sequential change here
    assert abs(one.current("One.L1.CTc", "L1")[1]) / AMPERE == pytest.approx(1 / 0.4)
    assert one.current("Two.L1.CTc", "L1")[1] == 0


def test_iec_tr_60909_4_network() -> None:
    """IEC TR 60909-4, the 380/110/30/10 kV test network: initial three-phase currents of faults at buses 1 to 8.

    Network data from memory of the report; its factors c = 1.1, KT, KG, KS and KSO are that standard's own and are
    worked out here. That all eight published currents come out to their last figure is the check of the data too.
    """
    b = PlantBuilder()
    bays: dict[int, list[Bay]] = {n: [] for n in range(1, 9)}
    kv = {1: 380.0, 2: 110.0, 3: 110.0, 4: 110.0, 5: 110.0, 6: 10.0, 7: 10.0, 8: 30.0}
    for name, start, end, km, r, reactance in (
        ("L1", 2, 3, 20, 0.12, 0.39), ("L2", 3, 4, 10, 0.12, 0.39), ("L3a", 2, 5, 5, 0.12, 0.39),
        ("L3b", 2, 5, 5, 0.12, 0.39), ("L4", 5, 3, 10, 0.096, 0.388), ("L5", 5, 4, 15, 0.12, 0.386),
        ("L6", 6, 7, 1, 0.082, 0.086),
    ):  # fmt: skip
        line(b, name, km, kv=kv[start], impedance=LineImpedance(r_ohm=r * km, x_ohm=reactance * km))
        bays[start].append(Bay(name, name))
        bays[end].append(Bay(name, name, 1.0))

    def leak(percent: float, resistive: float) -> complex:
        z = complex(resistive, math.sqrt(percent**2 - resistive**2)) / 100
        return z * transformer_factor(z.imag)

    for name, high, low, tertiary in (("T3", 1, 2, 0), ("T4", 1, 2, 8)):
        pairs = (leak(21, 0.26), leak(10, 0.16) * 7, leak(7, 0.16) * 7) if tertiary else (leak(21, 0.26),)
        t = TransformerImpedance(
            mva=350,
            kv=(400, 120, 30) if tertiary else (400, 120),
            r_pu=tuple(z.real for z in pairs),
            x_pu=tuple(z.imag for z in pairs),
            group="YNyn0d5" if tertiary else "YNyn0",
        )
        transformer(b, name, impedance=t)
        bays[high].append(Bay(name, name))
        bays[low].append(Bay(name, name, 0.5 if tertiary else 1.0))
        if tertiary:
            bays[tertiary].append(Bay(name, name, 1.0))
    for name in ("T5", "T6"):
        z = leak(12, 0.5)
        t = TransformerImpedance(mva=31.5, kv=(115, 10.5), r_pu=(z.real,), x_pu=(z.imag,), group="YNyn0")
        transformer(b, name, impedance=t)
        bays[5].append(Bay(name, name))
        bays[6].append(Bay(name, name, 1.0))

    def feed(name: str, bus: int, z: complex) -> None:
        generator(b, name, station=f"Bus{bus}", kv=kv[bus], impedance=SourceImpedance(r_ohm=z.real, x_ohm=z.imag))
        bays[bus].append(Bay(name, name))

    for name, bus, ka in (("Q1", 1, 38.0), ("Q2", 5, 16.0)):
        x = C_MAX * kv[bus] / (math.sqrt(3) * ka * math.sqrt(1.01))
        feed(name, bus, complex(0.1 * x, x))
    sine = math.sqrt(1 - 0.85**2)
    machine, unit = complex(0.002, 0.14 * 21**2 / 150), complex(0.005, math.sqrt(0.16**2 - 0.005**2)) * 115**2 / 150
    ratio = 115 / 21
    x_unit = unit.imag * 150 / 115**2
    ks = (110 / 21 / ratio) ** 2 * C_MAX / (1 + abs(0.14 - x_unit) * sine)
    feed("S1", 4, ks * (ratio**2 * machine + unit))
    sine = math.sqrt(1 - 0.9**2)
    machine, unit = complex(0.005, 0.16 * 10.5**2 / 100), complex(0.005, math.sqrt(0.12**2 - 0.005**2)) * 120**2 / 100
    ratio = 120 / 10.5
    kso = 110 / (10.5 * 1.075) / ratio * C_MAX / (1 + 0.16 * sine)
    feed("S2", 3, kso * (ratio**2 * machine + unit))
    kg = generator_factor(10.0, 10.5, 0.1, 0.8)
    feed("G3", 6, kg * complex(0.018, 0.1 * 10.5**2 / 10))
    for name, mw, cosine, efficiency, times, count in (("M1", 5, 0.88, 0.975, 5, 1), ("M2", 2, 0.89, 0.968, 5.2, 2)):
        z = 10**2 * cosine * efficiency / mw / times / count
        x = z / math.sqrt(1.01)
        feed(name, 7, complex(0.1 * x, x))
    for bus, mine in bays.items():
        single_bus(b, f"Bus{bus}", mine, kv=kv[bus])
    network = network_of(b.build(), voltage_factor=C_MAX)
    found = [abs(network.at(ShuntFault(Location(f"Bus{n}.B1"))).solve().fault[1]) / 1e3 for n in range(1, 9)]
    published = [40.6447, 31.7831, 19.6730, 16.2277, 33.1894, 37.5629, 25.5895, 13.5778]
    assert found == pytest.approx(published, abs=6e-5)


def test_a_delta_tertiary_earths_the_star_windings() -> None:
    """YNyn0d1 with 0.1, 0.2, 0.2 between its windings: star 0.05, 0.05, 0.15 (textbook star equivalent), so the first
    winding's zero sequence is 0.05 + 0.15, with the second open. The source of 0.3 is not earthed. With the second at
    a source earthed through 0.1, that is in parallel with the delta: 0.05 + 0.15 beside 0.15."""
    for second, z1, z0 in ((False, 0.3, 0.2), (True, 1 / (1 / 0.3 + 1 / 0.3), 0.05 + 1 / (1 / 0.15 + 1 / 0.15))):
        b = PlantBuilder()
        t = TransformerImpedance(
            mva=100, kv=(KV, 33, 10), r_pu=(0.0,) * 3, x_pu=(0.1, 0.2, 0.2), group="YNyn0d1"
        )
        transformer(b, "T", impedance=t)
        infeed(b, "N", "One.B1", impedance=grid(0.3))
        single_bus(b, "One", [Bay("T", "T")], kv=KV)
        single_bus(b, "Two", [Bay("T", "T", 0.5)], kv=33)
        single_bus(b, "Six", [Bay("T", "T", 1.0)], kv=10)
        if second:
            ohm = 33**2 / 100
            z = SourceImpedance(r_ohm=0, x_ohm=0.2 * ohm, r0_ohm=0, x0_ohm=0.1 * ohm)
            infeed(b, "M", "Two.B1", impedance=z)
        solution = network_of(b.build()).at(ShuntFault(Location("One.B1"), FaultType.LG)).solve()
        assert abs(solution.fault[0]) / AMPERE == pytest.approx(1 / (2 * z1 + z0))
        assert solution.voltage("Six.B1")[0] == pytest.approx(0, abs=1e-6)
