"""The plant of a scenario file, from layouts and from lists."""

from __future__ import annotations

from schemesim.errors import InputError, Problem
from schemesim.plant import layouts
from schemesim.plant.model import Device, Dispatch, Plant, PlantBuilder, Section, Source, VoltageTransformer
from schemesim.plant.wiring import doubtful_wiring
from schemesim.scenario.impedances import put_impedances
from schemesim.scenario.locate import Path
from schemesim.scenario.notes import Notes
from schemesim.scenario.schema import Layout, PlantIn, StationIn


def plant_of(notes: Notes, said: PlantIn) -> Plant | None:
    """The plant, or None where mistakes were noted."""
    b = PlantBuilder(said.length_unit)
    for x in said.lines:
        layouts.line(b, x.name, x.length, kv=x.kv, load_mw=x.load_mw)
    for t in said.transformers:
        layouts.transformer(b, t.name, station=t.station, kv=t.kv, length=t.length)
    for g in said.generators:
        layouts.generator(
            b, g.name, station=g.station, kv=g.kv, trips=g.trips, impedance_pu=g.impedance_pu
        )
    for f in said.feeders:
        layouts.feeder(b, f.name, f.load_mw, station=f.station, kv=f.kv, length=f.length)
    for i in said.infeeds:
        layouts.infeed(
            b,
            i.name,
            i.section,
            station=i.station,
            feeds_own_zone=i.feeds_own_zone,
            impedance_pu=i.impedance_pu,
        )
    for s in said.sections:
        b.add(Section(**dict(s)))
    for d in said.devices:
        b.add(Device(**{**dict(d), "cores": tuple(d.cores)}))
    for source in said.sources:
        b.add(Source(**dict(source)))
    for v in said.voltage_transformers:
        b.add(VoltageTransformer(**{**dict(v), "windings": tuple(v.windings)}))
    for state in said.dispatches:
        b.add(Dispatch(name=state.name, out=frozenset(state.out)))
    before = len(notes.problems)
    for n, station in enumerate(said.stations):
        station_of(notes, b, station, ("plant", "stations", n))
    put_impedances(notes, b, said.impedances)
    if len(notes.problems) > before:
        return None
    try:
        plant = b.build()
    except InputError as error:
        notes.take(error)
        return None
    slips = doubtful_wiring(plant)
    if slips:
        notes.take(InputError(slips))
        return None
    return plant


def station_of(notes: Notes, b: PlantBuilder, said: StationIn, path: Path) -> None:
    """Lay out a station."""
    bays = [layouts.Bay(x.name or x.to, x.to, x.at, x.ct, x.breaker) for x in said.bays]
    common = {
        "kv": said.kv,
        "ct": said.ct,
        "cores": tuple(said.cores),
        "windings": tuple(said.windings),
    }
    mine = {
        Layout.SECTIONALISED_BUS: ("sections", "selection"),
        Layout.DOUBLE_BUS: ("selection", "coupler_closed"),
    }.get(said.layout, ())
    for key in ("sections", "selection", "coupler_closed"):
        if key in said.model_fields_set and key not in mine:
            notes.note((*path, key), key, getattr(said, key), f"no such key for the layout {said.layout}")
            return
    special = {key: getattr(said, key) for key in mine}
    try:
        getattr(layouts, str(said.layout))(b, said.name, bays, **common, **special)
    except InputError as error:
        for p in error.problems:
            notes.note(in_station(p, said, path), p.subject, p.value, p.expectation, p.tip)


def in_station(problem: Problem, said: StationIn, path: Path) -> Path:
    """Where in a station a mistake of its layout stands."""
    for i, bay in enumerate(said.bays):
        if problem.subject.startswith(f"bus of bay {(bay.name or bay.to)!r} "):
            return (*path, "selection", bay.name or bay.to)
        if f"bay {(bay.name or bay.to)!r} " in f"{problem.subject} ":
            return (*path, "bays", i)
    keys = {"CT placement": "ct", "CT cores": "cores", "VT windings": "windings", "bays": "bays"}
    return next(((*path, key) for word, key in keys.items() if problem.subject.startswith(word)), path)
