"""The grids of ``scenarios/`` made larger: joined to copies of the test system over two stations between.

Grid, gate, hub and copies are joined by single lines, so long that nothing at the hub or beyond reaches the
location under study (zone 3 reaches 2.2 times its line, at most 160 in the test system):
what protects it is the same whether the hub joins one grid or five, and so should its cost be.
Gate and hub have a generator each.
"""

from __future__ import annotations

from functools import lru_cache
from pathlib import Path
from typing import Any

import yaml

from schemesim.plant.model import Location
from schemesim.scenario import Scenario, load_scenario, scenario_from_text

SCENARIOS = Path(__file__).resolve().parents[2] / "scenarios"

FILES = {"demo": "demo.yaml", "rts96": "rts96_area_a.yaml"}
JOINED_AT = {"demo": "Cedar", "rts96": "Bus06"}
"""Station from which a grid is joined to others."""

TO_GATE, TO_HUB, TO_COPY = 100, 50, 60
"""Lengths of the lines between."""

LOCATION = {"demo": Location("L1"), "rts96": Location("A27")}
"""The location under study: the middle of a line between two stations of breaker and a half (or double bus)."""

COPIES = {"demo": (0, 1, 2, 4), "rts96": (0, 1, 3)}
"""How many copies of the test system are joined to a grid: up to a hundred buses."""

_LISTS = ("stations", "lines", "transformers", "generators", "feeders")


@lru_cache
def scenario(grid: str) -> Scenario:
    """A scenario as it stands in its file."""
    return load_scenario(SCENARIOS / FILES[grid])


@lru_cache
def joined(grid: str, copies: int) -> Scenario:
    """A grid joined, over the hub, to so many copies of the test system (0: to the hub alone)."""
    text = (SCENARIOS / FILES[grid]).read_text(encoding="utf-8")
    start, end = text.index("\nplant:\n"), text.index("\npolicies:\n")
    plant = yaml.safe_load(text[start:end])["plant"]
    for name in _LISTS:
        plant.setdefault(name, [])
    between: dict[str, dict[str, Any]] = {}
    for name in ("Gate", "Hub"):
        between[name] = {"name": name, "layout": "single_bus", "bays": [f"{name}.G"]}
        plant["generators"].append({"name": f"{name}.G", "station": name})
    _join(plant["stations"], JOINED_AT[grid], between["Gate"], plant["lines"], "to gate", TO_GATE)
    _join([between["Gate"]], "Gate", between["Hub"], plant["lines"], "to hub", TO_HUB)
    source = (SCENARIOS / FILES["rts96"]).read_text(encoding="utf-8")
    for n in range(1, copies + 1):
        copy = yaml.safe_load(source[source.index("\nplant:\n") : source.index("\npolicies:\n")])["plant"]
        prefix = f"copy{n}."
        _rename(copy, prefix)
        for name in _LISTS:
            plant[name] += copy[name]
        at = prefix + JOINED_AT["rts96"]
        _join(copy["stations"], at, between["Hub"], plant["lines"], f"to copy {n}", TO_COPY)
    plant["stations"] += between.values()
    return scenario_from_text(text[:start] + "\n" + yaml.safe_dump({"plant": plant}) + text[end:])


def _join(
    stations: list[dict[str, Any]], at: str, other: dict[str, Any], lines: list[dict[str, Any]], name: str, length: int
) -> None:
    """A line from a station among some to another one."""
    next(s for s in stations if s["name"] == at)["bays"].append({"to": name, "at": 0})
    other["bays"].append({"to": name, "at": 1})
    lines.append({"name": name, "length": length})


def _rename(plant: dict[str, Any], prefix: str) -> None:
    """Put a prefix before the names of stations and elements; bays keep theirs."""
    for station in plant["stations"]:
        station["name"] = prefix + station["name"]
        station["bays"] = [{"name": bay["to"], **bay, "to": prefix + bay["to"]} for bay in station["bays"]]
    for kind in _LISTS[1:]:
        for item in plant[kind]:
            item["name"] = prefix + item["name"]
            if "station" in item:
                item["station"] = prefix + item["station"]
