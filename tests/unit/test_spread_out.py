"""Importance by pieces given to an executor, and what is kept whatever the mass; what an audit asks of detectors."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from typing import Any

import pytest

from schemesim.engine.case import bind
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing, NoFault
from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.scheme.dress import dress
from schemesim.scheme.policy import duplicate_chain, duplicate_relay
from schemesim.scheme.settings_rules import settings_for
from schemesim.study.brackets import Bracket
from schemesim.study.edits import ADDITIONS
from schemesim.study.element_audit import audit_elements
from schemesim.study.importance_study import study_importance
from schemesim.study.misoperations import Judged, Misoperation, MisoperationStudy
from schemesim.study.money import Costs, Values
from schemesim.study.outage_results import Outage, OutageResult, OutageStudy, Worse
from schemesim.study.risk import place_of
from schemesim.study.spoiled import Effect
from schemesim.study.timer_study import Weights
from schemesim.study.tree import explore
from tests.rules.small import chain
from tests.unit.electrical_plants import with_impedances
from tests.unit.small_schemes import as_float, case_of, feeder_scheme, program_of

F1, F2 = Location("F1"), Location("F2")
PLACES = [F1, F2]


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


def test_what_an_outage_makes_critical_in_rows() -> None:
    nothing: Any = None
    places = (Worse(F1, Effect.LATE, 470_000, 70_000, 1, 1), Worse(F2, Effect.NOT_CLEARED, None, 70_000, 0, 1))
    out = OutageResult(Outage("dc", "DC", frozenset({"DC"})), nothing, 2, places, (), *[None] * 5)
    rows = list(OutageStudy(nothing, (out,)).critical_records())
    assert [(r["out"], r["location"], r["effect"], r["t_clear_ms"], r["breakers"]) for r in rows] == [
        ("DC", "F1", "late", 470.0, 1),
        ("DC", "F2", "not cleared", None, 0),
    ]


def test_weights_of_a_timer_unless_stated() -> None:
    """A needless trip weighs as much as a late clearing; one in a thousand is the target of both."""
    assert Weights() == Weights(needless=1.0, late=1.0, needless_target=1e-3, late_target=1e-3)


def test_a_tree_of_plain_numbers_has_nothing_lost_to_the_smallest_of_them() -> None:
    assert explore(case_of(feeder_scheme(as_float), "F1"), epsilon=0).slack == 0


def test_a_second_dc_takes_the_second_coil_with_it() -> None:
    policy = duplicate_relay()
    coil = replace(policy.sets[1], coil="2", dc="1")
    two = replace(policy, sets=(replace(policy.sets[0], coil="1", dc="1"), coil), coil_dc=(("1", "1"), ("2", "1")))
    added = ADDITIONS["second DC"].change(two)
    assert [s.dc for s in added.sets] == ["1", "2"]
    assert added.coil_dc == (("1", "1"), ("2", "2"))
    one = replace(two, sets=two.sets[:1])
    assert ADDITIONS["second DC"].change(one) == one


def test_misoperations_a_year_have_a_low_and_a_high_end() -> None:
    p = {m: Bracket(0.25, 0.5) for m in Misoperation}
    table = MisoperationStudy((Judged("F1", 2.0, p, Bracket(0.25, 0.5)),)).summary()
    assert set(table["per_yr_low"]) == {0.5}
    assert set(table["per_yr_high"]) == {1.0}


def test_the_worst_of_a_trip_with_no_fault_is_that_it_trips() -> None:
    bound = bind(program_of(feeder_scheme()), NoFault("M1"), LogicalSensing())
    worst = place_of(bound, explore(bound, epsilon=0.5), 0).worst
    assert [list(column) for column in (worst.t_ms, worst.late, worst.needless, worst.spurious)] == [[0], [0], [0], [1]]


@pytest.mark.parametrize("value", ["5", True, None])
def test_what_money_is_counted_in_is_a_number(value: Any) -> None:
    with pytest.raises(InputError, match="a finite number of 0 or more"):
        Values(damage_per_ms=value, damage_cap=-1)
    with pytest.raises(InputError, match="discount rate"):
        Costs(discount_rate=value)
