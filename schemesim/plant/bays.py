"""The pieces stations are laid out from: elements, bays, and a breaker with its CTs.

Names are canonical. In a station ``Alder`` the bay ``L1`` has ``Alder.L1.CB``, the CTs
``Alder.L1.CTb`` and ``Alder.L1.CTc`` on its bus and on its circuit side, and between
breaker and CT the short conductors ``Alder.L1.b`` and ``Alder.L1.c`` (``tank_b`` and
``tank_c`` inside a dead tank, ``lead`` from the breaker to an element's bushings).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum

from schemesim.errors import ErrorList
from schemesim.plant.model import (
    Device,
    DeviceKind,
    PlantBuilder,
    Section,
    SectionKind,
    Source,
    VoltageTransformer,
)
from schemesim.plant.net_data import LineImpedance, SourceImpedance, TransformerImpedance

CORES = ("1", "2", "3", "4")
WINDINGS = ("1", "2")


class CtPlacement(StrEnum):
    """Where the CTs of a breaker stand."""

    BOTH = "both"
    """Free-standing on both sides: bus, CT, conductor, breaker, conductor, CT, circuit."""
    BUS_SIDE = "bus_side"
    """One, free-standing, between bus and breaker."""
    CIRCUIT_SIDE = "circuit_side"
    """One, free-standing, between breaker and circuit."""
    DEAD_TANK = "dead_tank"
    """In both bushings of a dead-tank breaker; the short conductors are inside the tank."""
    ELEMENT_BUSHINGS = "element_bushings"
    """In the bushings of the element: the lead lies between breaker and CT."""


@dataclass(frozen=True, slots=True)
class Bay:
    """Where a circuit joins a station.

    Parameters
    ----------
    name : str
        Name within the station.
    to : str
        The line, transformer, generator or feeder section that joins here.
    at : float
        Position along that section, from 0 to 1 (a line's ends are 0 and 1).
    ct : CtPlacement or None
        Where its CTs stand; as in the rest of the station by default.
    breaker : bool
        False: a switch in place of the breaker, so that the zones on both its sides
        fall together. Then there is a CT only if ``ct`` puts one on one side.
    """

    name: str
    to: str
    at: float = 0.0
    ct: CtPlacement | None = None
    breaker: bool = True


@dataclass(frozen=True, slots=True)
class Equipment:
    """What all bays of a station have in common.

    Parameters
    ----------
    station : str
    kv : float
        Nominal voltage of the station in kV (0: not stated).
    ct : CtPlacement
    cores : tuple of str
        Cores of each CT.
    windings : tuple of str
        Windings of each VT; none of them: the station has no VT.
    """

    station: str
    kv: float
    ct: CtPlacement
    cores: tuple[str, ...]
    windings: tuple[str, ...]

    def section(self, builder: PlantBuilder, name: str, kind: SectionKind = SectionKind.CONDUCTOR) -> str:
        """Add a section of this station; its name is returned."""
        builder.add(Section(name=name, kind=kind, station=self.station, kv=self.kv))
        return name

    def device(
        self,
        builder: PlantBuilder,
        name: str,
        kind: DeviceKind,
        a: str,
        b: str,
        at: float,
        closed: bool = True,
    ) -> None:
        """Add a device of this station from ``a`` to position ``at`` of ``b``."""
        cores = self.cores if kind is DeviceKind.CT else ()
        builder.add(
            Device(name=name, kind=kind, a=a, b=b, b_at=at, station=self.station, closed=closed, cores=cores)
        )

    def vt(self, builder: PlantBuilder, name: str, section: str) -> None:
        """Add a VT with this station's windings, if it has VTs."""
        if self.windings:
            builder.add(VoltageTransformer(name=name, section=section, station=self.station, windings=self.windings))

    def bus(self, builder: PlantBuilder, name: str) -> str:
        """Add a busbar and its VT; its name is returned."""
        self.section(builder, name, SectionKind.BUS)
        self.vt(builder, f"{name}.VT", name)
        return name

    def breaker(
        self,
        builder: PlantBuilder,
        stem: str,
        first: str,
        second: str,
        *,
        number: str = "",
        at: float = 0.0,
        ct: CtPlacement | None = None,
        closed: bool = True,
    ) -> None:
        """Add a breaker with its CTs between two sections.

        The bus side is that of ``first``, the circuit side that of ``second``, whatever
        they are; ``at`` is the position along ``second``.
        """
        placement = CtPlacement(self.ct if ct is None else ct)
        inside = "tank_" if placement is CtPlacement.DEAD_TANK else ""
        a, b, b_at = first, second, at
        if placement in (CtPlacement.BOTH, CtPlacement.DEAD_TANK, CtPlacement.BUS_SIDE):
            a = self.section(builder, f"{stem}.{inside}b{number}")
            self.device(builder, f"{stem}.CTb{number}", DeviceKind.CT, first, a, 0.0)
        if placement is not CtPlacement.BUS_SIDE:
            short = "lead" if placement is CtPlacement.ELEMENT_BUSHINGS else f"{inside}c"
            b, b_at = self.section(builder, f"{stem}.{short}{number}"), 0.0
            self.device(builder, f"{stem}.CTc{number}", DeviceKind.CT, b, second, at)
        self.device(builder, f"{stem}.CB{number}", DeviceKind.BREAKER, a, b, b_at, closed)

    def bay(self, builder: PlantBuilder, bay: Bay, start: str) -> None:
        """Add a whole bay between a bus (or the node behind its selectors) and its circuit."""
        stem = f"{self.station}.{bay.name}"
        if bay.breaker:
            self.breaker(builder, stem, start, bay.to, at=bay.at, ct=bay.ct)
        else:
            self._switch(builder, stem, start, bay)
        self.vt(builder, f"{stem}.VT", bay.to)

    def _switch(self, builder: PlantBuilder, stem: str, start: str, bay: Bay) -> None:
        a, b, at = start, bay.to, bay.at
        placement = None if bay.ct is None else CtPlacement(bay.ct)
        if placement is CtPlacement.BUS_SIDE:
            a = self.section(builder, f"{stem}.b")
            self.device(builder, f"{stem}.CTb", DeviceKind.CT, start, a, 0.0)
        elif placement is not None:
            short = "lead" if placement is CtPlacement.ELEMENT_BUSHINGS else "c"
            b, at = self.section(builder, f"{stem}.{short}"), 0.0
            self.device(builder, f"{stem}.CTc", DeviceKind.CT, b, bay.to, bay.at)
        self.device(builder, f"{stem}.SW", DeviceKind.SWITCH, a, b, at)


def check_station(equipment: Equipment, bays: Sequence[Bay], *, meshed: bool = False) -> ErrorList:
    """Every mistake in what a station is asked to have.

    ``meshed``: the breakers stand between circuits, so a bay cannot do without one and
    its CTs stand at breakers.
    """
    errors = ErrorList()
    station = equipment.station
    what = f"station {station!r}"
    if not _good_name(station):
        errors.add("name of a station", station, "text without '@', tabs or outer blanks")
    if not math.isfinite(equipment.kv) or equipment.kv < 0:
        errors.add(f"kv of {what}", equipment.kv, "a finite number of zero or more, in kV")
    if not equipment.cores or len(set(equipment.cores)) < len(equipment.cores):
        errors.add(f"CT cores of {what}", equipment.cores, "at least one core, none named twice")
    if len(set(equipment.windings)) < len(equipment.windings):
        errors.add(f"VT windings of {what}", equipment.windings, "no winding named twice")
    if not bays:
        errors.add(f"bays of {what}", list(bays), "at least one bay")
    placements = [(f"CT placement of {what}", equipment.ct, True)]
    seen: set[str] = set()
    for bay in bays:
        subject = f"bay {bay.name!r} of {what}"
        if not _good_name(bay.name):
            errors.add(f"name of a bay of {what}", bay.name, "text without '@', tabs or outer blanks")
        if bay.name in seen:
            errors.add(f"name of a bay of {what}", bay.name, "a name not used twice")
        seen.add(bay.name)
        if not _good_name(bay.to):
            errors.add(f"circuit of {subject}", bay.to, "the name of a section")
        if not 0.0 <= bay.at <= 1.0:
            errors.add(f"position of {subject}", bay.at, "a number from 0 to 1")
        if bay.ct is not None:
            placements.append((f"CT placement of {subject}", bay.ct, bay.breaker))
        if meshed and not bay.breaker:
            errors.add(subject, "no breaker", "a breaker (here breakers stand between the circuits)")
    for subject, placement, at_breaker in placements:
        allowed = set(CtPlacement)
        if meshed:
            allowed.discard(CtPlacement.ELEMENT_BUSHINGS)
        elif not at_breaker:
            allowed -= {CtPlacement.BOTH, CtPlacement.DEAD_TANK}
        if placement not in allowed:
            tip = "the line side is the circuit side" if str(placement) == "line_side" else ""
            errors.add(subject, str(placement), f"one of {sorted(map(str, allowed))}", tip=tip)
    return errors


def _good_name(name: str) -> bool:
    return bool(name) and name == name.strip() and not any(c in name for c in "\n\t\0@")


def line(
    builder: PlantBuilder,
    name: str,
    length: float,
    *,
    kv: float = 0.0,
    load_mw: float = 0.0,
    impedance: LineImpedance | None = None,
) -> None:
    """Add a line of a length in the plant's length unit, between stations.

    Examples
    --------
    >>> b = PlantBuilder()
    >>> line(b, "L1", 40.0, kv=230)
    >>> b.sections[0].kind.value, b.sections[0].length
    ('line', 40.0)
    """
    kind = SectionKind.LINE
    builder.add(Section(name=name, kind=kind, kv=kv, length=length, load_mw=load_mw, impedance=impedance))


def transformer(
    builder: PlantBuilder,
    name: str,
    *,
    station: str = "",
    kv: float = 0.0,
    length: float = 0.0,
    impedance: TransformerImpedance | None = None,
) -> None:
    """Add a transformer; ``length`` is that of the line its impedance corresponds to, so reaches pass through."""
    kind = SectionKind.TRANSFORMER
    builder.add(Section(name=name, kind=kind, station=station, kv=kv, length=length, impedance=impedance))


def generator(
    builder: PlantBuilder,
    name: str,
    *,
    station: str = "",
    kv: float = 0.0,
    trips: bool = True,
    impedance_pu: float | None = None,
    impedance: SourceImpedance | None = None,
) -> None:
    """Add a generator and its source ``<name>.unit``, with a trip of its own (field, prime mover) by default.

    Examples
    --------
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder")
    >>> b.sources[0].name, b.sources[0].section, b.sources[0].trips
    ('G1.unit', 'G1', True)
    """
    builder.add(
        Section(name=name, kind=SectionKind.GENERATOR, station=station, kv=kv),
        Source(
            name=f"{name}.unit",
            section=name,
            station=station,
            trips=trips,
            impedance_pu=impedance_pu,
            impedance=impedance,
        ),
    )


def infeed(
    builder: PlantBuilder,
    name: str,
    section: str,
    *,
    station: str = "",
    feeds_own_zone: bool = False,
    impedance_pu: float | None = None,
    impedance: SourceImpedance | None = None,
) -> None:
    """Add the infeed of a grid that is not modelled, at a section of the plant.

    It stands for circuits with breakers of their own outside the plant, so by default it is
    an equivalent that feeds nothing into a fault in its own isolation zone; with
    ``feeds_own_zone`` nothing clears such a fault, and the coverage audit says so.
    """
    builder.add(
        Source(
            name=name,
            section=section,
            station=station,
            feeds_own_zone=feeds_own_zone,
            impedance_pu=impedance_pu,
            impedance=impedance,
        )
    )


def feeder(
    builder: PlantBuilder,
    name: str,
    load_mw: float,
    *,
    station: str = "",
    kv: float = 0.0,
    length: float = 0.0,
) -> None:
    """Add a feeder section that supplies a load in MW."""
    builder.add(
        Section(
            name=name, kind=SectionKind.FEEDER, station=station, kv=kv, length=length, load_mw=load_mw
        )
    )
