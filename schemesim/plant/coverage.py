"""The coverage audit: which protected zones see a fault on each section, and what they trip.

A protected zone trips the breakers around the isolation zone of its element. Where a
section lies in a protected zone of another isolation zone only (a CT on one side of
the breaker), those breakers do not isolate it: a dead zone, with the breakers that must
be cross-tripped and those tripped needlessly in return.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from schemesim.errors import ErrorList, nearest, reject
from schemesim.plant.model import Plant, SectionKind
from schemesim.plant.terminals import ProtectedObject, protected_object
from schemesim.plant.zones import Duty, duty, isolation_zones, merged_elements
from schemesim.show.tables import to_html

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class Coverage:
    """How a fault on one section is covered.

    Attributes
    ----------
    section, station : str
    kind : SectionKind
    isolation_zone : str
    protected_zones : tuple of str
        Elements whose protected zones hold the section.
    needed : frozenset of str
        Breakers (and sources with a trip) that must open.
    tripped : frozenset of str
        What the covering protected zones trip.
    cross_trips : frozenset of str
        Needed and tripped by none of them; empty in a gap, where nothing could send the trip.
    needless : frozenset of str
        Tripped and not on the border of the faulted isolation zone.
    """

    section: str
    station: str
    kind: SectionKind
    isolation_zone: str
    protected_zones: tuple[str, ...]
    needed: frozenset[str]
    tripped: frozenset[str]
    cross_trips: frozenset[str]
    needless: frozenset[str]

    @property
    def gap(self) -> bool:
        """In no protected zone."""
        return not self.protected_zones

    @property
    def overlap(self) -> bool:
        """In two protected zones or more: all of them trip (rule R17)."""
        return len(self.protected_zones) > 1

    @property
    def dead_zone(self) -> bool:
        """Seen, and the breakers tripped do not isolate it."""
        return bool(self.cross_trips)


@dataclass(frozen=True, repr=False)
class CoverageAudit:
    """What :func:`coverage_audit` found.

    Attributes
    ----------
    rows : tuple of Coverage
        One for each section, in the order of their names.
    merged : mapping of zone name to tuple of str
        Elements that fall together for want of a breaker between them.
    blind : tuple of str
        Breakers on the border of a protected object at which no CT bounds its zone.
    untripped : tuple of str
        Sources that feed a fault in their own isolation zone and have no trip.
    """

    rows: tuple[Coverage, ...]
    merged: Mapping[str, tuple[str, ...]]
    blind: tuple[str, ...]
    untripped: tuple[str, ...]

    @property
    def gaps(self) -> tuple[Coverage, ...]:
        """Sections in no protected zone."""
        return tuple(r for r in self.rows if r.gap)

    @property
    def overlaps(self) -> tuple[Coverage, ...]:
        """Sections in two protected zones or more."""
        return tuple(r for r in self.rows if r.overlap)

    @property
    def dead_zones(self) -> tuple[Coverage, ...]:
        """Sections that are seen but not isolated without a cross-trip."""
        return tuple(r for r in self.rows if r.dead_zone)

    def __getitem__(self, section: str) -> Coverage:
        """The row of a section.

        Raises
        ------
        InputError
            If there is no such section.
        """
        for row in self.rows:
            if row.section == section:
                return row
        raise reject("section", section, "the name of a section", tip=nearest(section, [r.section for r in self.rows]))

    def table(self) -> pd.DataFrame:
        """One row per section; names that are several stand in one cell, separated by commas."""
        import pandas as pd

        columns = {
            "section": [r.section for r in self.rows],
            "station": [r.station for r in self.rows],
            "kind": [str(r.kind) for r in self.rows],
            "isolation_zone": [r.isolation_zone for r in self.rows],
            "protected_zones": [", ".join(r.protected_zones) for r in self.rows],
            "gap": [r.gap for r in self.rows],
            "overlap": [r.overlap for r in self.rows],
            "dead_zone": [r.dead_zone for r in self.rows],
            "needed": [_listed(r.needed) for r in self.rows],
            "tripped": [_listed(r.tripped) for r in self.rows],
            "cross_trips": [_listed(r.cross_trips) for r in self.rows],
            "needless": [_listed(r.needless) for r in self.rows],
        }
        return pd.DataFrame(columns)

    def __repr__(self) -> str:
        lines = [
            f"Coverage audit of {len(self.rows)} sections: {len(self.gaps)} in a gap, "
            f"{len(self.overlaps)} in an overlap, {len(self.dead_zones)} in a dead zone"
        ]
        lines += [f"  gap        {r.section}" for r in self.gaps]
        for r in self.dead_zones:
            lines.append(f"  dead zone  {r.section}: seen by {', '.join(r.protected_zones)}")
            lines.append(f"             cross-trip {_listed(r.cross_trips)}")
            if r.needless:
                lines.append(f"             tripped needlessly {_listed(r.needless)}")
        lines += [f"  merged     {zone}: {', '.join(elements)}" for zone, elements in self.merged.items()]
        lines += [f"  blind      {name}: no CT at this breaker" for name in self.blind]
        lines += [f"  untripped  {name}: feeds its own zone and has no trip" for name in self.untripped]
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.table())


def coverage_audit(
    plant: Plant, objects: Sequence[ProtectedObject] | None = None, *, dispatch: str | None = None
) -> CoverageAudit:
    """Is every section covered, and do the zones that cover it isolate it?

    Parameters
    ----------
    plant : Plant
    objects : sequence of ProtectedObject or None
        The protected objects; by default those of every bus, line, transformer, generator
        and feeder, where elements that share one protected zone are one object.
    dispatch : str or None
        Dispatch state; all sources by default.

    Returns
    -------
    CoverageAudit

    Raises
    ------
    InputError
        If an object's element is not in the plant, or the dispatch is not known.

    Notes
    -----
    Each object trips the border of the isolation zone of its element and the sources with a
    trip in it; no designed intertrip is counted. What is needed does not depend on what else
    is tripped: a cross-trip stays listed where needless tripping would black out its source.

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, CtPlacement, generator, line, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> b = PlantBuilder()
    >>> generator(b, "G1")
    >>> generator(b, "G2")
    >>> line(b, "L1", 40.0)
    >>> single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1")])
    >>> single_bus(b, "Birch", [Bay("G2", "G2"), Bay("L1", "L1", at=1.0, ct=CtPlacement.CIRCUIT_SIDE)])
    >>> audit = coverage_audit(b.build())
    >>> [(r.section, sorted(r.cross_trips)) for r in audit.dead_zones]
    [('Birch.L1.c', ['Alder.L1.CB'])]
    """
    zones = isolation_zones(plant)
    objects = default_objects(plant) if objects is None else tuple(objects)
    _check(plant, objects)
    duties: dict[str, Duty] = {}
    for zone in zones.members:
        duties[zone] = duty(plant, zones, zone, dispatch)
    covering: dict[str, list[ProtectedObject]] = {s.name: [] for s in plant.sections}
    for item in objects:
        for name in item.zone:
            covering[name].append(item)
    rows = []
    for s in plant.sections:
        own = duties[zones.of[s.name]]
        seen = covering[s.name]
        tripped = frozenset(n for item in seen for n in duties[zones.of[item.element]].intended)
        rows.append(
            Coverage(
                section=s.name,
                station=s.station,
                kind=s.kind,
                isolation_zone=zones.of[s.name],
                protected_zones=tuple(sorted(item.element for item in seen)),
                needed=own.needed,
                tripped=tripped,
                cross_trips=own.needed - tripped if seen else frozenset(),
                needless=tripped - own.intended,
            )
        )
    return CoverageAudit(
        rows=tuple(rows),
        merged=merged_elements(plant),
        blind=tuple(sorted({name for item in objects for name in item.blind})),
        untripped=tuple(sorted({name for d in duties.values() for name in d.untripped})),
    )


def default_objects(plant: Plant) -> tuple[ProtectedObject, ...]:
    """The protected objects of every element; those that share terminals and zone are one.

    A shared object has the name of its isolation zone where it can (a bus before a line), else the
    first name.
    """
    of = isolation_zones(plant).of
    found: dict[tuple[object, ...], ProtectedObject] = {}
    elements = [s for s in plant.sections if s.kind is not SectionKind.CONDUCTOR]
    for s in sorted(elements, key=lambda s: (of[s.name] != s.name, s.name)):
        item = protected_object(plant, s.name)
        found.setdefault((item.terminals, item.zone, item.blind), item)
    return tuple(sorted(found.values(), key=lambda item: item.element))


def _check(plant: Plant, objects: Iterable[ProtectedObject]) -> None:
    errors = ErrorList()
    for item in objects:
        for name in sorted({item.element, *item.zone} - set(plant.section)):
            subject = f"protected object {item.element!r}"
            errors.add(subject, name, "the name of a section", tip=nearest(name, plant.section))
    errors.raise_if_any()


def _listed(names: Iterable[str]) -> str:
    return ", ".join(sorted(names))
