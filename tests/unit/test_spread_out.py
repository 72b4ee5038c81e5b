"""Importance by pieces given to an executor, and what is kept whatever the mass; what an audit asks of detectors."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor

import pytest

from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.plant.model import Location
from schemesim.scheme.dress import dress
from schemesim.scheme.policy import duplicate_chain
from schemesim.scheme.settings_rules import settings_for
from schemesim.study.element_audit import audit_elements
from schemesim.study.importance_study import study_importance
from tests.rules.small import chain
from tests.unit.electrical_plants import with_impedances
from tests.unit.small_schemes import feeder_scheme, program_of

PLACES = [Location("F1"), Location("F2")]


def test_importance_by_an_executor_is_that_of_one_process() -> None:
    program = program_of(feeder_scheme())
    alone = study_importance(program, LogicalSensing(), PLACES, limit_us=200_000, epsilon=1e-3)
    with ThreadPoolExecutor(2) as executor:
        both = study_importance(
            program, LogicalSensing(), PLACES, limit_us=200_000, epsilon=1e-3, executor=executor
        )  # fmt: skip
    assert both.table().equals(alone.table())
    assert repr(both) == repr(alone)


def test_every_single_failure_is_looked_at_whatever_mass_may_be_left() -> None:
    """Each of the six components and the common cause stands in a leaf, though half of the mass may be left out."""
    found = study_importance(program_of(feeder_scheme()), LogicalSensing(), PLACES[:1], limit_us=200_000, epsilon=0.5)
    names = {"M1", "M2", "BF", "IN", "DC", "CB1", "common cause same settings"}
    assert set(found.table()["component"]) == names
    assert "0 more in no leaf" in repr(found)


@pytest.mark.parametrize(("place", "must"), [("L1", 2), ("Cedar.B1", 0)])
def test_a_detector_must_see_faults_beside_its_breaker_only(place: str, must: int) -> None:
    """Of three states of the sources one leaves it without current; a bus two stations away is none of its business."""
    plant = with_impedances(chain())
    scheme = dress(plant, duplicate_chain())
    got = audit_elements(
        compile_scheme(plant, scheme), settings_for(plant, scheme), faults=("lll",), locations=[Location(place)]
    )
    rows = {r.block: r for r in got.rows}
    detector = rows.get("Alder.L1.CB/50BF current")
    assert (0 if detector is None else detector.must) == must
