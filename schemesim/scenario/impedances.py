"""The key ``impedances`` of a scenario's plant: its schema, and the way to the model and back."""
# ruff: noqa: RUF012 - pydantic copies the default of a field for each object

from __future__ import annotations

from dataclasses import fields, replace
from typing import Annotated, Any

from pydantic import Field, PlainValidator

from schemesim.errors import nearest
from schemesim.plant.model import Plant, PlantBuilder
from schemesim.plant.net_data import Coupling, LineImpedance, SourceImpedance, TransformerImpedance
from schemesim.scenario.locate import Path
from schemesim.scenario.notes import Notes
from schemesim.scenario.parts import Part
from schemesim.scenario.scalars import Name, OverZero, number

PATH: Path = ("plant", "impedances")

Real = Annotated[float, PlainValidator(number(what="a number"))]
Maybe = Annotated[float | None, PlainValidator(number(what="a number"))]
Reals = Annotated[list[Real], Field(max_length=3)]
MANY = Field(max_length=20_000)


class LineZ(Part):
    name: Name
    r_ohm: Real
    x_ohm: Real
    r0_ohm: Maybe = None
    x0_ohm: Maybe = None


class TransformerZ(Part):
    name: Name
    mva: OverZero
    kv: Reals
    r_pu: Reals
    x_pu: Reals
    group: Name
    r0_pu: Reals = []
    x0_pu: Reals = []
    earth_r_ohm: Reals = []
    earth_x_ohm: Reals = []


class SourceZ(Part):
    name: Name
    r_ohm: Real
    x_ohm: Real
    r2_ohm: Maybe = None
    x2_ohm: Maybe = None
    r0_ohm: Maybe = None
    x0_ohm: Maybe = None


class CouplingZ(Part):
    a: Name
    b: Name
    r0_ohm: Real
    x0_ohm: Real


class ImpedancesIn(Part):
    """The key: what each line, transformer and source named in it has."""

    lines: Annotated[list[LineZ], MANY] = []
    transformers: Annotated[list[TransformerZ], MANY] = []
    sources: Annotated[list[SourceZ], MANY] = []
    couplings: Annotated[list[CouplingZ], MANY] = []


def put_impedances(notes: Notes, builder: PlantBuilder, said: ImpedancesIn) -> None:
    """Give the sections and sources of a plant that is being built their impedances."""
    section = {s.name: n for n, s in enumerate(builder.sections)}
    source = {s.name: n for n, s in enumerate(builder.sources)}
    for n, line in enumerate(said.lines):
        if _known(notes, ("lines", n), "line", line.name, section):
            at = section[line.name]
            builder.sections[at] = replace(builder.sections[at], impedance=LineImpedance(**_values(line)))
    for n, t in enumerate(said.transformers):
        if _known(notes, ("transformers", n), "transformer", t.name, section):
            at = section[t.name]
            leak: dict[str, Any] = {key: tuple(v) if isinstance(v, list) else v for key, v in _values(t).items()}
            builder.sections[at] = replace(builder.sections[at], impedance=TransformerImpedance(**leak))
    for n, s in enumerate(said.sources):
        if _known(notes, ("sources", n), "source", s.name, source):
            at = source[s.name]
            builder.sources[at] = replace(builder.sources[at], impedance=SourceImpedance(**_values(s)))
    builder.add(*(Coupling(**dict(c)) for c in said.couplings))


def impedances_data(plant: Plant) -> dict[str, Any]:
    """Plain data that reads back as the impedances of a plant; empty where it has none."""
    lines = [(s.name, s.impedance) for s in plant.sections if isinstance(s.impedance, LineImpedance)]
    transformers = [(s.name, s.impedance) for s in plant.sections if isinstance(s.impedance, TransformerImpedance)]
    found: dict[str, Any] = {
        "lines": [{"name": name} | _plain(z) for name, z in lines],
        "transformers": [{"name": name} | _plain(z) for name, z in transformers],
        "sources": [{"name": s.name} | _plain(s.impedance) for s in plant.sources if s.impedance is not None],
        "couplings": [_plain(c) for c in plant.couplings],
    }
    return {key: rows for key, rows in found.items() if rows}


def _known(notes: Notes, path: Path, what: str, name: str, names: dict[str, int]) -> bool:
    if name in names:
        return True
    notes.note((*PATH, *path, "name"), f"impedance of {what}", name, f"the name of a {what}", nearest(name, names))
    return False


def _values(part: Part) -> dict[str, Any]:
    return {key: value for key, value in dict(part).items() if key != "name"}


def _plain(item: Any) -> dict[str, Any]:
    values = ((f.name, getattr(item, f.name)) for f in fields(item))
    return {key: list(v) if isinstance(v, tuple) else v for key, v in values if v not in (None, ())}
