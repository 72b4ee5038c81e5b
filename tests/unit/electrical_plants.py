"""Small plants with impedances in round figures, for elements that measure. Voltages are 100 kV to earth.

`two_ends`: sources GS behind j10 ohm at S and GR behind j10 at R; lines L1 and L2 of 100 km, j40 each
(zero sequence j120), ends a at S and b at R. `ladder`: G behind j10 at bus A - line K j10 - bus B - line M j10, with
an infeed at B behind j20. `radial_units`: units U1 and U2, each behind j20 at bus B, and a feeder F of j10.
"""

from __future__ import annotations

import math
from dataclasses import replace

from schemesim.plant.model import (
    Device,
    DeviceKind,
    Dispatch,
    Plant,
    PlantBuilder,
    Section,
    SectionKind,
    Source,
    VoltageTransformer,
)
from schemesim.plant.net_data import LineImpedance, SourceImpedance

KV = 100.0 * math.sqrt(3.0)


def ohms(x_ohm: float, zero: float = 3.0) -> LineImpedance:
    """A line without resistance."""
    return LineImpedance(r_ohm=0.0, x_ohm=x_ohm, r0_ohm=0.0, x0_ohm=zero * x_ohm)


def behind(x_ohm: float) -> SourceImpedance:
    """A source earthed through the same reactance."""
    return SourceImpedance(r_ohm=0.0, x_ohm=x_ohm, r0_ohm=0.0, x0_ohm=x_ohm)


def bay(b: PlantBuilder, name: str, bus: str, section: str, at: float = 0.0) -> None:
    """Bus - breaker - conductor - CT - section."""
    b.add(Section(name=f"{name}.c", kind=SectionKind.CONDUCTOR))
    b.add(Device(name=f"{name}.CB", kind=DeviceKind.BREAKER, a=bus, b=f"{name}.c", station=bus))
    b.add(
        Device(name=f"{name}.CT", kind=DeviceKind.CT, a=f"{name}.c", b=section, b_at=at, station=bus, cores=("1",))
    )


def buses(b: PlantBuilder, *names: str) -> None:
    """Buses, each with a VT."""
    for name in names:
        b.add(Section(name=name, kind=SectionKind.BUS, station=name, kv=KV))
        b.add(VoltageTransformer(name=f"{name}.VT", section=name, station=name))


def two_ends() -> Plant:
    """Two sources, two parallel lines."""
    b = PlantBuilder()
    buses(b, "S", "R")
    for end in ("S", "R"):
        b.add(Source(name=f"G{end}", section=end, impedance=behind(10.0)))
    for line in ("L1", "L2"):
        b.add(Section(name=line, kind=SectionKind.LINE, kv=KV, length=100.0, impedance=ohms(40.0)))
        bay(b, f"{line}a", "S", line, 0.0)
        bay(b, f"{line}b", "R", line, 1.0)
    return b.build()


def ladder() -> Plant:
    """A line, an infeed, and a line beyond."""
    b = PlantBuilder()
    buses(b, "A", "B")
    b.add(Source(name="G", section="A", impedance=behind(10.0)))
    b.add(Section(name="I", kind=SectionKind.GENERATOR, station="B", kv=KV))
    b.add(Source(name="GI", section="I", impedance=behind(20.0)))
    for line in ("K", "M"):
        b.add(Section(name=line, kind=SectionKind.LINE, kv=KV, length=25.0, impedance=ohms(10.0)))
    bay(b, "Ka", "A", "K", 0.0)
    bay(b, "Kb", "B", "K", 1.0)
    bay(b, "Ma", "B", "M", 0.0)
    bay(b, "I", "B", "I")
    return b.build()


def radial_units() -> Plant:
    """Two units, one of them off in the state "low", each on a breaker; a feeder with a line's impedance."""
    b = PlantBuilder()
    buses(b, "B")
    for unit in ("U1", "U2"):
        b.add(Section(name=unit, kind=SectionKind.GENERATOR, station="B", kv=KV))
        b.add(Source(name=f"{unit}.S", section=unit, impedance=behind(20.0)))
        bay(b, unit, "B", unit)
    b.add(Section(name="F", kind=SectionKind.LINE, kv=KV, length=10.0, impedance=ohms(10.0)))
    bay(b, "F", "B", "F")
    b.add(Dispatch(name="low", out=frozenset({"U2.S"})))
    return b.build()


def with_impedances(
    plant: Plant, *, kv: float = 132.0, z1: complex = 0.1 + 0.4j, z0: complex = 0.3 + 1.2j, source_ohm: float = 20.0
) -> Plant:
    """A plant made by layouts, its lines with impedances by length and its sources behind one reactance."""
    sections = []
    for s in plant.sections:
        if s.kind is SectionKind.LINE:
            a, b = z1 * s.length, z0 * s.length
            z = LineImpedance(r_ohm=a.real, x_ohm=a.imag, r0_ohm=b.real, x0_ohm=b.imag)
            sections.append(replace(s, kv=kv, impedance=z))
        else:
            sections.append(s if s.kind is SectionKind.CONDUCTOR else replace(s, kv=kv))
    sources = [replace(s, impedance=behind(source_ohm)) for s in plant.sources]
    return replace(plant, sections=tuple(sections), sources=tuple(sources))
