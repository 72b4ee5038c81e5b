"""Scenario files: a plant, its protection, failure data and what to study, as YAML text.

``load_scenario`` reads and checks a file, ``save_scenario`` writes one; both keep what
they say equal. ``scenarios/FORMAT.md`` describes the format.
"""

from schemesim.scenario.files import load_scenario, save_scenario, scenario_from_text, scenario_text
from schemesim.scenario.model import Limits, ListedRun, Scenario, StudySettings

__all__ = [
    "Limits",
    "ListedRun",
    "Scenario",
    "StudySettings",
    "load_scenario",
    "save_scenario",
    "scenario_from_text",
    "scenario_text",
]
