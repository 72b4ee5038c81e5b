"""Fault locations as a user gives them: locations, or text such as ``L1@0.25``."""

from __future__ import annotations

from collections.abc import Iterable
from typing import TypeAlias

from schemesim.errors import ErrorList, InputError, nearest
from schemesim.plant.model import Location, Plant
from schemesim.scenario.model import location

Places: TypeAlias = Iterable[Location | str] | Location | str
"""One location or several, each a Location or text: a section, or a line and a position, ``L1@0.25``."""


def chosen_of(plant: Plant, places: Places) -> list[Location]:
    """Locations, each once, in the order given.

    Raises
    ------
    InputError
        For what is no location, and for sections that are not there, each with the nearest name.
    """
    errors = ErrorList()
    found: dict[Location, None] = {}
    given: Iterable[object] = [places] if isinstance(places, (Location, str)) else places
    for item in given:
        if isinstance(item, str):
            try:
                found[location(plant, item)] = None
            except InputError as error:
                errors.extend(error.problems)
        elif not isinstance(item, Location):
            errors.add("location", item, "a Location, or text such as 'L1@0.25'")
        elif item.section not in plant.section:
            errors.add("section", item.section, "a section", tip=nearest(item.section, plant.section))
        else:
            found[item] = None
    errors.raise_if_any()
    return list(found)
