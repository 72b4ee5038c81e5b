"""The section ``maintenance`` of a scenario file: what is monitored, and hours out for work; to the model and back."""
# ruff: noqa: RUF012 - pydantic copies the default of a field for each object

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Annotated, Any

from pydantic import Field, PlainValidator

from schemesim.errors import nearest
from schemesim.plant.model import Plant
from schemesim.scenario.locate import Path
from schemesim.scenario.model import Maintenance, OutageHours
from schemesim.scenario.notes import Notes
from schemesim.scenario.parts import Part
from schemesim.scenario.scalars import Flag, Name, choice, number
from schemesim.scheme.model import ComponentKind, Scheme
from schemesim.study.footnote import WATCHED, Monitored
from schemesim.study.outage_results import KINDS, Outage
from schemesim.study.outages import HOURS_PER_YR, outages_of

TOP = "maintenance"

MAX_RULES = 1000


class MonitoredIn(Part):
    """Components that are monitored."""

    kind: Annotated[ComponentKind | None, PlainValidator(choice(ComponentKind))] = None
    pattern: Name = "*"
    watches: Annotated[list[Name], Field(max_length=20)] = sorted(WATCHED)
    reported: Flag = True


class OutageHoursIn(Part):
    """How long items are out for work in a year."""

    kind: Name = ""
    pattern: Name = "*"
    hours_per_yr: Annotated[float, PlainValidator(number(0, HOURS_PER_YR))]


class MaintenanceIn(Part):
    """The section."""

    monitored: Annotated[list[MonitoredIn], Field(max_length=MAX_RULES)] = []
    outage_hours: Annotated[list[OutageHoursIn], Field(max_length=MAX_RULES)] = []


def maintenance_of(notes: Notes, said: MaintenanceIn) -> Maintenance:
    """The model of the section, with every mistake noted."""
    for i, m in enumerate(said.monitored):
        for k, word in enumerate(m.watches):
            if word not in WATCHED:
                path: Path = (TOP, "monitored", i, "watches", k)
                notes.note(path, "watches", word, f"any of {', '.join(sorted(WATCHED))}", nearest(word, WATCHED))
    for i, h in enumerate(said.outage_hours):
        if h.kind and h.kind not in KINDS:
            notes.note((TOP, "outage_hours", i, "kind"), "kind", h.kind, f"one of {', '.join(KINDS)}",
                       nearest(h.kind, KINDS))  # fmt: skip
    return Maintenance(
        monitored=tuple(Monitored(m.pattern, m.kind, frozenset(m.watches), m.reported) for m in said.monitored),
        outage_hours=tuple(OutageHours(h.hours_per_yr, h.kind, h.pattern) for h in said.outage_hours),
    )


def check_maintenance(notes: Notes, said: Maintenance, schemes: Iterable[Scheme], plant: Plant) -> None:
    """Note every entry that fits nothing in any policy."""
    if said == Maintenance():
        return
    every = list(schemes)
    parts = {c.name: c.kind for scheme in every for c in scheme.components}
    for i, m in enumerate(said.monitored):
        if not any(m.of(name, kind) for name, kind in parts.items()):
            mine = [name for name, kind in parts.items() if m.kind in (None, kind)]
            _fits_none(notes, ("monitored", i), m.pattern, f"a {m.kind}" if m.kind else "a component", mine)
    if not said.outage_hours:
        return
    found: dict[Outage, None] = {}
    for scheme in every:
        found.update(dict.fromkeys(outages_of(scheme, plant)))
    for i, h in enumerate(said.outage_hours):
        if not any(h.of(o.kind, o.name) for o in found):
            mine = [o.name for o in found if h.kind in ("", o.kind)]
            what = f"an outage of kind {h.kind}" if h.kind else "an item that can be out for work"
            _fits_none(notes, ("outage_hours", i), h.pattern, what, mine)


def _fits_none(notes: Notes, path: Path, pattern: str, what: str, known: list[str]) -> None:
    notes.note((TOP, *path, "pattern"), "pattern", pattern, f"a pattern that fits {what}", nearest(pattern, known))


def hours_by_name(rules: Iterable[OutageHours], outages: Iterable[Outage]) -> Mapping[str, float] | None:
    """Hours a year of each outage: the last rule that fits; None where there is no rule at all."""
    said = list(rules)
    if not said:
        return None
    found = {}
    for o in outages:
        for rule in said:
            if rule.of(o.kind, o.name):
                found[o.name] = rule.hours_per_yr
    return found


def maintenance_data(said: Maintenance) -> dict[str, Any]:
    """The section as a file says it."""
    monitored = [
        {
            **({} if m.kind is None else {"kind": str(m.kind)}),
            "pattern": m.pattern,
            "watches": sorted(m.watches),
            "reported": m.reported,
        }
        for m in said.monitored
    ]
    hours = [
        {**({"kind": h.kind} if h.kind else {}), "pattern": h.pattern, "hours_per_yr": h.hours_per_yr}
        for h in said.outage_hours
    ]
    return {k: v for k, v in (("monitored", monitored), ("outage_hours", hours)) if v}

