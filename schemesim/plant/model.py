"""The plant: sections of primary conductor joined by devices.

Inert and frozen once built. Sections are the nodes of a multigraph, devices its
edges; everything else (zones, needed breakers, protected zones) is computed from
it and never declared. Items are kept in the order of their names, so the order of
declaration changes nothing.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from enum import StrEnum
from functools import cached_property
from typing import TYPE_CHECKING, TypeVar

import networkx as nx

from schemesim.errors import ErrorList, nearest, reject
from schemesim.plant.location import Location as Location  # a plant gives the places in it
from schemesim.plant.net_data import (
    Coupling,
    LineImpedance,
    SourceImpedance,
    TransformerImpedance,
    impedance_mistakes,
)

if TYPE_CHECKING:
    Graph = nx.MultiGraph[str]
else:
    Graph = nx.MultiGraph  # takes no parameter when run, and annotations are read by the API reference


class SectionKind(StrEnum):
    """What a section of primary conductor is."""

    BUS = "bus"
    LINE = "line"
    TRANSFORMER = "transformer"
    GENERATOR = "generator"
    FEEDER = "feeder"
    CONDUCTOR = "conductor"
    """The short conductor between a CT and a breaker, or a lead to a bushing."""


class DeviceKind(StrEnum):
    """What joins two sections."""

    BREAKER = "breaker"
    SWITCH = "switch"
    FUSE = "fuse"
    CT = "ct"
    JOINT = "joint"


@dataclass(frozen=True, slots=True, kw_only=True)
class Section:
    """One piece of primary conductor on which a fault can fall.

    Parameters
    ----------
    name : str
    kind : SectionKind
    station : str
        Station it stands in; empty for a line between stations.
    kv : float
        Nominal voltage in kV (0: not stated).
    length : float
        Length along the conductor, in the plant's ``length_unit``. A transformer may
        have the length of line its impedance corresponds to, so that reaches pass
        through it.
    load_mw : float
        Load supplied at this section in MW.
    impedance : LineImpedance, TransformerImpedance or None
        For currents and voltages only; a feeder may have that of a line.
    """

    name: str
    kind: SectionKind
    station: str = ""
    kv: float = 0.0
    length: float = 0.0
    load_mw: float = 0.0
    impedance: LineImpedance | TransformerImpedance | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Device:
    """What joins two sections.

    ``a_at`` and ``b_at`` tell where along a section with a length the device is
    attached, from 0 to 1. A CT carries named cores; ``closed`` is the state before
    the fault.
    """

    name: str
    kind: DeviceKind
    a: str
    b: str
    a_at: float = 0.0
    b_at: float = 0.0
    station: str = ""
    closed: bool = True
    cores: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Source:
    """A generating unit or an infeed from another grid.

    Parameters
    ----------
    name, section : str
    station : str
    trips : bool
        It has a trip of its own (field and prime mover): without it a fault inside
        its own zone goes on being fed.
    feeds_own_zone : bool
        False declares it an equivalent that feeds nothing into a fault in its own
        isolation zone.
    impedance_pu : float or None
        Reactance in per unit of 100 MVA, not earthed: for currents and voltages only, where
        ``impedance`` says no more.
    impedance : SourceImpedance or None
        For currents and voltages only.
    """

    name: str
    section: str
    station: str = ""
    trips: bool = False
    feeds_own_zone: bool = True
    impedance_pu: float | None = None
    impedance: SourceImpedance | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class VoltageTransformer:
    """A VT on a section, with named windings; ``station`` tells the ends of a line apart."""

    name: str
    section: str
    station: str = ""
    windings: tuple[str, ...] = ("1",)


@dataclass(frozen=True, slots=True, kw_only=True)
class Dispatch:
    """A state of the sources: those named in ``out`` are switched off."""

    name: str
    out: frozenset[str] = frozenset()


_Item = TypeVar("_Item", Section, Device, Source, VoltageTransformer, Dispatch)


@dataclass(frozen=True)
class Plant:
    """Sections and devices of a station, a few stations or a grid.

    Parameters
    ----------
    sections, devices, sources, vts, dispatches
        The items, in any order; names are unique over all of them (dispatches apart).
    length_unit : str
        Unit of section lengths and of distance reaches, for the face only.
    couplings : tuple of Coupling
        Mutual zero-sequence impedances of lines side by side.

    Raises
    ------
    InputError
        With every mistake: duplicate or empty names, devices joined to themselves or
        to sections that are not there, bad numbers, no source at all.

    Examples
    --------
    >>> plant = Plant(
    ...     sections=(Section(name="B", kind=SectionKind.BUS), Section(name="F", kind=SectionKind.FEEDER)),
    ...     devices=(Device(name="CB", kind=DeviceKind.BREAKER, a="B", b="F"),),
    ...     sources=(Source(name="S", section="B"),),
    ... )
    >>> plant.breakers
    ('CB',)
    """

    sections: tuple[Section, ...]
    devices: tuple[Device, ...]
    sources: tuple[Source, ...]
    vts: tuple[VoltageTransformer, ...] = ()
    dispatches: tuple[Dispatch, ...] = ()
    length_unit: str = "km"
    couplings: tuple[Coupling, ...] = ()

    def __post_init__(self) -> None:
        for name in ("sections", "devices", "sources", "vts", "dispatches"):
            object.__setattr__(self, name, _by_name(getattr(self, name)))
        object.__setattr__(self, "couplings", tuple(sorted(self.couplings, key=lambda c: (c.a, c.b))))
        check_plant(self).raise_if_any()

    def __repr__(self) -> str:
        stations = len({d.station for d in self.devices if d.station})
        counts = (
            f"{stations} station{'' if stations == 1 else 's'}, {len(self.breakers)} breakers, "
            f"{len(self.sections)} sections, {len(self.sources)} sources"
        )
        return f"Plant({counts})"

    @cached_property
    def section(self) -> Mapping[str, Section]:
        """Sections by name."""
        return {s.name: s for s in self.sections}

    @cached_property
    def device(self) -> Mapping[str, Device]:
        """Devices by name."""
        return {d.name: d for d in self.devices}

    @cached_property
    def source(self) -> Mapping[str, Source]:
        """Sources by name."""
        return {s.name: s for s in self.sources}

    @cached_property
    def at_section(self) -> Mapping[str, tuple[Device, ...]]:
        """Devices attached to each section."""
        found: dict[str, list[Device]] = {s.name: [] for s in self.sections}
        for d in self.devices:
            found[d.a].append(d)
            found[d.b].append(d)
        return {name: tuple(ds) for name, ds in found.items()}

    @cached_property
    def breakers(self) -> tuple[str, ...]:
        """Names of all circuit-breakers."""
        return tuple(d.name for d in self.devices if d.kind is DeviceKind.BREAKER)

    @cached_property
    def tripping_sources(self) -> tuple[str, ...]:
        """Names of the sources that have a trip of their own."""
        return tuple(s.name for s in self.sources if s.trips)

    @property
    def graph(self) -> Graph:
        """A fresh networkx multigraph: sections as nodes, devices as keyed edges."""
        graph: nx.MultiGraph[str] = nx.MultiGraph()
        for s in self.sections:
            graph.add_node(s.name, section=s)
        for d in self.devices:
            graph.add_edge(d.a, d.b, key=d.name, device=d)
        return graph

    def sources_in(self, dispatch: str | None = None) -> tuple[Source, ...]:
        """Sources in service in a dispatch state (all of them by default)."""
        if dispatch is None:
            return self.sources
        for state in self.dispatches:
            if state.name == dispatch:
                return tuple(s for s in self.sources if s.name not in state.out)
        known = [d.name for d in self.dispatches]
        raise reject("dispatch", dispatch, f"one of {known}", tip=nearest(dispatch, known))

    def locations(self, along_line: Iterable[float] = (0.1, 0.5, 0.9)) -> tuple[Location, ...]:
        """Every fault location: each section once, lines at the positions given."""
        at = sorted(set(along_line))
        bad = [x for x in at if not 0.0 <= x <= 1.0]
        if bad or not at:
            raise reject("positions along a line", bad or at, "numbers from 0 to 1")
        out: list[Location] = []
        for s in self.sections:
            if s.kind is SectionKind.LINE:
                out.extend(Location(s.name, x) for x in at)
            else:
                out.append(Location(s.name))
        return tuple(out)


def join(*parts: Plant, length_unit: str | None = None) -> Plant:
    """One plant out of several fragments is built by a :class:`PlantBuilder`; this joins whole ones."""
    return Plant(
        sections=tuple(x for p in parts for x in p.sections),
        devices=tuple(x for p in parts for x in p.devices),
        sources=tuple(x for p in parts for x in p.sources),
        vts=tuple(x for p in parts for x in p.vts),
        dispatches=tuple(x for p in parts for x in p.dispatches),
        length_unit=length_unit or (parts[0].length_unit if parts else "km"),
        couplings=tuple(x for p in parts for x in p.couplings),
    )


class PlantBuilder:
    """Collects sections and devices, then builds the frozen plant.

    Examples
    --------
    >>> b = PlantBuilder()
    >>> b.add(Section(name="B", kind=SectionKind.BUS), Source(name="S", section="B"))
    >>> b.build().sources[0].name
    'S'
    """

    def __init__(self, length_unit: str = "km") -> None:
        self.length_unit = length_unit
        self.sections: list[Section] = []
        self.devices: list[Device] = []
        self.sources: list[Source] = []
        self.vts: list[VoltageTransformer] = []
        self.dispatches: list[Dispatch] = []
        self.couplings: list[Coupling] = []

    def add(self, *items: Section | Device | Source | VoltageTransformer | Dispatch | Coupling) -> None:
        """Add items of any kind."""
        for item in items:
            match item:
                case Section():
                    self.sections.append(item)
                case Device():
                    self.devices.append(item)
                case Source():
                    self.sources.append(item)
                case VoltageTransformer():
                    self.vts.append(item)
                case Dispatch():
                    self.dispatches.append(item)
                case Coupling():
                    self.couplings.append(item)

    def __repr__(self) -> str:
        return f"PlantBuilder({len(self.sections)} sections, {len(self.devices)} devices, {len(self.sources)} sources)"

    def build(self) -> Plant:
        """The frozen plant, checked."""
        return Plant(
            sections=tuple(self.sections),
            devices=tuple(self.devices),
            sources=tuple(self.sources),
            vts=tuple(self.vts),
            dispatches=tuple(self.dispatches),
            length_unit=self.length_unit,
            couplings=tuple(self.couplings),
        )


def check_plant(plant: Plant) -> ErrorList:
    """Every mistake in a plant."""
    errors = ErrorList()
    seen: dict[str, str] = {}
    groups: tuple[tuple[str, Iterable[Section | Device | Source | VoltageTransformer]], ...] = (
        ("section", plant.sections),
        ("device", plant.devices),
        ("source", plant.sources),
        ("voltage transformer", plant.vts),
    )
    for kind, items in groups:
        for item in items:
            if not item.name or item.name != item.name.strip() or any(c in item.name for c in "\n\t\0@"):
                errors.add(f"{kind} name", item.name, "text without '@', tabs or outer blanks")
            if item.name in seen:
                errors.add(f"{kind} name", item.name, f"a name not used twice (a {seen[item.name]} has it)")
            seen[item.name] = kind
    names = [s.name for s in plant.sections]
    known = set(names)
    for s in plant.sections:
        for what, value in (("kv", s.kv), ("length", s.length), ("load_mw", s.load_mw)):
            if not math.isfinite(value) or value < 0:
                errors.add(f"{what} of section {s.name!r}", value, "a finite number of zero or more")
        if s.kind is SectionKind.LINE and not s.length > 0:
            errors.add(f"length of line {s.name!r}", s.length, "a length over zero")
    for d in plant.devices:
        for end in (d.a, d.b):
            if end not in known:
                errors.add(f"end of device {d.name!r}", end, "the name of a section", tip=nearest(end, names))
        if d.a == d.b:
            errors.add(f"device {d.name!r}", f"{d.a} to {d.b}", "two different sections")
        for at in (d.a_at, d.b_at):
            if not 0.0 <= at <= 1.0:
                errors.add(f"position of device {d.name!r}", at, "a number from 0 to 1")
        if d.cores and d.kind is not DeviceKind.CT:
            errors.add(f"cores of device {d.name!r}", d.cores, "cores on a CT only")
        if d.kind is DeviceKind.CT and not d.cores:
            errors.add(f"cores of CT {d.name!r}", d.cores, "at least one core")
    placed = [(s.name, s.section) for s in plant.sources] + [(v.name, v.section) for v in plant.vts]
    for name, at_section in placed:
        if at_section not in known:
            tip = nearest(at_section, names)
            errors.add(f"section of {name!r}", at_section, "the name of a section", tip=tip)
    if not plant.sources:
        errors.add("plant", "no source", "at least one source")
    source_names = {s.name for s in plant.sources}
    for state in plant.dispatches:
        for name in sorted(state.out - source_names):
            tip = nearest(name, source_names)
            errors.add(f"dispatch {state.name!r}", name, "the name of a source", tip=tip)
    for what, wrong, expectation in impedance_mistakes(plant.sections, plant.sources, plant.couplings):
        errors.add(what, wrong, expectation)
    return errors


def _by_name(items: Iterable[_Item]) -> tuple[_Item, ...]:
    return tuple(sorted(items, key=lambda item: item.name))
