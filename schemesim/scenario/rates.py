"""Failure data given as rates in a scenario file: their schema, and the way to the model and back."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import fields
from fnmatch import fnmatchcase
from typing import Annotated, Any

from pydantic import PlainValidator

from schemesim.errors import InputError, nearest
from schemesim.scenario.locate import Path
from schemesim.scenario.notes import Notes
from schemesim.scenario.parts import Part
from schemesim.scenario.scalars import Flag, Name, Rate, Share, Text, choice, number
from schemesim.scheme.model import MODES, Component, ComponentKind, FailureMode
from schemesim.scheme.unavailability import MAX_H, MAX_YR, Over, Quality, RateData, RateRule

TOP: Path = ("failure_data", "rates")

_Hours = Annotated[float, PlainValidator(number(0, MAX_H))]

OverIn = Annotated[Over, PlainValidator(choice(Over))]


class RateIn(Part):
    """The rate of a mode, and what finds and mends its failures."""

    kind: Annotated[ComponentKind, PlainValidator(choice(ComponentKind))]
    mode: Name
    pattern: Name = "*"
    rate_per_yr: Rate = 0.0
    on_demand: Share = 0.0
    coverage: Share = 0.0
    test_interval_yr: Annotated[float | None, PlainValidator(number(0, MAX_YR, over=True))] = None
    test_duration_h: _Hours = 0.0
    repair_h: _Hours = 0.0
    revealed: Flag = False
    staggered: Flag = False
    source: Text = ""
    quality: Annotated[Quality | None, PlainValidator(choice(Quality))] = None


def rates_of(notes: Notes, said: Iterable[RateIn]) -> tuple[RateRule, ...]:
    """The rules, with every mistake noted; those that have one are left out."""
    found: list[RateRule] = []
    for i, item in enumerate(said):
        path: Path = (*TOP, i)
        words = [str(m) for m in MODES[item.kind]]
        if item.mode not in words:
            expected = f"a failure mode of a {item.kind}: {', '.join(words)}"
            notes.note((*path, "mode"), "failure mode", item.mode, expected, nearest(item.mode, words))
        if not item.model_fields_set & {"rate_per_yr", "on_demand"}:
            notes.note(path, "rate_per_yr", "nothing", "a rate_per_yr, or a probability on_demand")
        try:
            data = RateData(**{f.name: getattr(item, f.name) for f in fields(RateData)})
        except InputError as error:
            for p in error.problems:
                notes.take(InputError([p]), (*path, p.subject) if p.subject in item.model_fields_set else path)
            continue
        if item.mode in words:
            rest = {name: getattr(item, name) for name in ("pattern", "staggered", "source", "quality")}
            found.append(RateRule(kind=item.kind, mode=FailureMode(item.mode), data=data, **rest))
    return tuple(found)


def rates_data(rules: Iterable[RateRule]) -> list[dict[str, Any]]:
    """The rules as a file says them."""
    out: list[dict[str, Any]] = []
    for r in rules:
        item: dict[str, Any] = {"kind": str(r.kind), "mode": str(r.mode), "pattern": r.pattern}
        item |= {f.name: getattr(r.data, f.name) for f in fields(RateData)}
        item |= {"staggered": r.staggered, "quality": None if r.quality is None else str(r.quality)}
        item["source"] = r.source or None
        out.append({k: v for k, v in item.items() if v is not None})
    return out


def check_patterns(notes: Notes, rules: Iterable[RateRule], components: Iterable[Component]) -> None:
    """Note every pattern, other than ``*``, that fits no component of its kind."""
    known = list(components)
    for i, r in enumerate(rules):
        names = [c.name for c in known if c.kind is r.kind]
        if r.pattern != "*" and not any(fnmatchcase(name, r.pattern) for name in names):
            expected = f"a pattern that fits a {r.kind}"
            notes.note((*TOP, i, "pattern"), "pattern", r.pattern, expected, nearest(r.pattern, names))
