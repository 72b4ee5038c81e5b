"""Which sensing a scenario is studied with."""

from __future__ import annotations

from enum import StrEnum
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from schemesim.engine.sensing import Sensing
    from schemesim.plant.net_case import FaultType


class SensingKind(StrEnum):
    """How elements are taken to see a fault."""

    LOGICAL = "logical"
    """By the graph of the plant: zone, reach, direction."""
    ELECTRICAL = "electrical"
    """By computed currents and voltages, and settings chosen by rule."""


def sensing_of(kind: SensingKind, fault: FaultType, resistance_ohm: float) -> Sensing:
    """A sensing for every scheme of a scenario; electrical settings are chosen for each by rule."""
    if kind is SensingKind.LOGICAL:
        from schemesim.engine.sensing import LogicalSensing

        return LogicalSensing()
    from schemesim.engine.electrical import ElectricalSensing

    return ElectricalSensing(fault=fault, resistance_ohm=resistance_ohm)
