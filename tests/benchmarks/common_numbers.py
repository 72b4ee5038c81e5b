"""By how much common random numbers cut the variance of a difference: an edit of one component of the demo."""

from __future__ import annotations

from schemesim.plant.model import Location
from schemesim.scenario.deciding import explorer_of, recipe_of
from schemesim.scheme.failure_data import Override
from schemesim.scheme.model import FailureMode
from schemesim.study.edits import Edit
from schemesim.study.variants import Difference, study_variants
from tests.benchmarks.grids import scenario

EDIT = Edit("better relay", overrides=(Override("Alder/L1/relay 1", {FailureMode.FAILURE_TO_OPERATE: 1e-4}),))
"""One relay of a single set ten times better."""

MEASURES = ("risk_per_yr", "late_or_uncleared_per_yr")


def differences(trials: int = 50_000) -> dict[str, Difference]:
    """The difference that the edit makes, by measure: its bracket from trees, and from paired trials."""
    demo = scenario("demo")
    assert demo.money is not None  # the file states it
    base = recipe_of(demo, "single")
    explorer, _ = explorer_of(demo, [Location("L1"), Location("F1"), Location("Alder.B1")], no_fault=False)
    programs = {"single": base.program(), EDIT.name: base.edited(EDIT).program()}
    study = study_variants(explorer, programs, demo.money.values, trials=trials, seed=1)
    return {name: study.of(name, EDIT.name) for name in MEASURES}
