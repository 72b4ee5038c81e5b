"""Which sensing a scenario is studied with."""

from __future__ import annotations

from enum import StrEnum
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from schemesim.engine.sensing import Sensing
    from schemesim.scenario.model import Scenario


class SensingKind(StrEnum):
    """How elements are taken to see a fault."""

    LOGICAL = "logical"
    """By the graph of the plant: zone, reach, direction."""
    ELECTRICAL = "electrical"
    """By computed currents and voltages, and settings chosen by rule."""


def sensing_of(scenario: Scenario, policy: str | None = None) -> Sensing:
    """A sensing for the scheme of a policy; settings are chosen for it by rule.

    Raises
    ------
    InputError
        If the plant lacks an impedance or a VT that electrical sensing needs.
    """
    s = scenario.study
    if s.sensing is SensingKind.LOGICAL:
        from schemesim.engine.sensing import LogicalSensing

        return LogicalSensing()
    from schemesim.engine.electrical import ElectricalSensing
    from schemesim.scheme.settings_rules import settings_for

    settings = settings_for(scenario.plant, scenario.scheme(policy))
    return ElectricalSensing(settings, fault=s.fault, resistance_ohm=s.fault_ohm)
