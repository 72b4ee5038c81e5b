"""Small plants with impedances for tests of the network equations: random ones, and each fault on them."""

from __future__ import annotations

import random
from dataclasses import replace

from schemesim.plant.layouts import (
    Bay,
    CtPlacement,
    breaker_and_a_half,
    double_bus,
    feeder,
    generator,
    infeed,
    line,
    ring,
    sectionalised_bus,
    single_bus,
    transformer,
)
from schemesim.plant.model import Dispatch, Location, Plant, PlantBuilder
from schemesim.plant.net_case import FaultType, ShuntFault
from schemesim.plant.net_data import Coupling, LineImpedance, SourceImpedance, TransformerImpedance

LAYOUTS = (single_bus, sectionalised_bus, double_bus, ring, breaker_and_a_half)
GROUPS = ("YNyn0", "YNd1", "Dyn11", "Yd5", "YNyn6", "YNd11")


def machine(rng: random.Random, kv: float) -> SourceImpedance:
    """A source of some strength, its negative sequence not always as the positive, earthed or not."""
    x = kv**2 / rng.uniform(300, 3000)
    z2 = (None, None) if rng.random() < 0.5 else (0.02 * x, 0.8 * x)
    z0 = (None, None) if rng.random() < 0.4 else (0.1 * x, 0.5 * x)
    return SourceImpedance(r_ohm=0.05 * x, x_ohm=x, r2_ohm=z2[0], x2_ohm=z2[1], r0_ohm=z0[0], x0_ohm=z0[1])


def wire(rng: random.Random) -> tuple[float, LineImpedance]:
    """Length and impedance of a line."""
    km = rng.uniform(1, 80)
    return km, LineImpedance(r_ohm=0.08 * km, x_ohm=0.4 * km, r0_ohm=0.25 * km, x0_ohm=1.2 * km)


def random_plant(rng: random.Random) -> Plant:
    """Three or four stations at 110 kV in a ring of lines, two of them parallel and coupled; one or two at 33 kV."""
    b = PlantBuilder()
    high = [f"S{n}" for n in range(rng.randint(3, 4))]
    bays: dict[str, list[Bay]] = {name: [] for name in high}
    pairs = [(high[n], high[(n + 1) % len(high)]) for n in range(len(high))]
    for n, (x, y) in enumerate([*pairs, pairs[0]]):
        km, z = wire(rng)
        line(b, f"L{n}", km, kv=110, impedance=z)
        bays[x].append(Bay(f"L{n}", f"L{n}", 0.0))
        bays[y].append(Bay(f"L{n}", f"L{n}", 1.0))
    last = f"L{len(pairs)}"
    b.add(Coupling(a="L0", b=last, r0_ohm=0.5, x0_ohm=rng.uniform(0.1, 0.5)))
    for n in range(rng.randint(1, 2)):
        x = rng.choice(high)
        group = rng.choice(GROUPS)
        leak = TransformerImpedance(
            mva=40, kv=(110, 33), r_pu=(0.01,), x_pu=(0.12,), group=group, earth_r_ohm=(0.0, 2.0), earth_x_ohm=(3, 5)
        )
        transformer(b, f"T{n}", station=x, kv=110, impedance=leak)
        bays[x].append(Bay(f"T{n}", f"T{n}", 0.0))
        low = f"M{n}"
        feeder(b, f"{low}.F", 10, station=low, kv=33)
        bays[low] = [Bay(f"T{n}", f"T{n}", 1.0), Bay("F", f"{low}.F")]
        if rng.random() < 0.6:
            generator(b, f"{low}.G", station=low, kv=33, impedance=machine(rng, 33))
            bays[low].append(Bay("G", f"{low}.G"))
    for name in high:
        if rng.random() < 0.6 or name == high[0]:
            generator(b, f"{name}.G", station=name, kv=110, impedance=machine(rng, 110))
            bays[name].append(Bay("G", f"{name}.G"))
        if rng.random() < 0.3:
            feeder(b, f"{name}.F", 10, station=name, kv=110)
            bays[name].append(Bay("F", f"{name}.F"))
    for name, mine in bays.items():
        ct = rng.choice((CtPlacement.BUS_SIDE, CtPlacement.CIRCUIT_SIDE, CtPlacement.BOTH))
        rng.choice(LAYOUTS)(b, name, mine, kv=110 if name in high else 33, ct=ct)
    if rng.random() < 0.3:
        names = {s.name for s in b.sections}
        infeed(b, "N", next(n for n in (f"{high[0]}.B1", f"{high[0]}.L0.J") if n in names), impedance=machine(rng, 110))
    return b.build()


def random_fault(rng: random.Random, plant: Plant) -> ShuntFault:
    """A fault of any type anywhere, with resistance or without."""
    at = Location(rng.choice(plant.sections).name, rng.choice((0.0, 0.2, 0.5, rng.random(), 1.0)))
    return ShuntFault(at, rng.choice(tuple(FaultType)), rng.choice((0.0, 0.0, 1.0, 25.0)))


def random_openings(rng: random.Random, plant: Plant) -> frozenset[str]:
    """Some breakers and sources."""
    names = [*plant.breakers, *plant.source]
    return frozenset(rng.sample(names, min(len(names), rng.choice((0, 1, 2, 3, 5, 8)))))


def opened(plant: Plant, names: frozenset[str]) -> Plant:
    """The plant with these devices open from the start; its dispatch ``out`` is without these sources."""
    devices = tuple(replace(d, closed=d.closed and d.name not in names) for d in plant.devices)
    out = Dispatch(name="out", out=names & set(plant.source))
    return replace(plant, devices=devices, dispatches=(*plant.dispatches, out))
