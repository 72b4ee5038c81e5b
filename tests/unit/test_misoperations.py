"""Misoperations by the categories of NERC PRC-004 (published; wording from memory), run by run and as a study."""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case, bind
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Opening, Outcome, Status
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import LogicalSensing, NoFault
from schemesim.errors import InputError
from schemesim.plant.layouts import Bay, feeder, generator, line, single_bus
from schemesim.plant.model import Location, Plant, PlantBuilder
from schemesim.scheme.dress import dress
from schemesim.scheme.model import Role
from schemesim.scheme.policy import duplicate_relay, single_set
from schemesim.study.misoperations import Misoperation, misoperation, study_misoperations
from tests.unit.small_schemes import feeder_scheme, radial_plant

M = Misoperation
L1 = Location("L1", 0.5)


@pytest.fixture(scope="module")
def plant() -> Plant:
    """Alder with a generator and a feeder, a line to Birch with a generator."""
    b = PlantBuilder()
    generator(b, "G1", station="Alder")
    generator(b, "G2", station="Birch")
    feeder(b, "F1", station="Alder", load_mw=10)
    line(b, "L1", length=40)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1"), Bay("L1", "L1", at=0)])
    single_bus(b, "Birch", [Bay("L1", "L1", at=1), Bay("G2", "G2")])
    return b.build()


@pytest.fixture(scope="module")
def program(plant: Plant) -> Program:
    return compile_scheme(plant, dress(plant, single_set()))


def found(case: Case, *failures: str) -> frozenset[Misoperation]:
    outcome = run_event(case, FixedAnswers(case.program, failures)).outcome
    return misoperation(outcome, case, failures)


@pytest.mark.parametrize(
    ("failures", "expected"),
    [
        ((), set()),
        (("Alder/L1/relay 1: failure_to_operate",), {M.FAILURE_TO_TRIP}),
        (("Alder.L1.CB/coil 1: failure_to_operate",), {M.FAILURE_TO_TRIP}),  # the control circuit is protection
        (("Alder.L1.CB: does_not_open",), set()),  # the breaker is not
        (("Alder.L1.CB: does_not_interrupt",), set()),
        (("Alder/Alder.B1/relay 1: unwanted_operation",), {M.UNNECESSARY_TRIP}),
    ],
)
def test_each_failure_alone_in_a_fault_on_the_line(
    program: Program, failures: tuple[str, ...], expected: set[Misoperation]
) -> None:
    assert found(bind(program, L1, LogicalSensing()), *failures) == expected


def test_a_second_relay_makes_the_first_ones_failure_none_of_the_whole(plant: Plant) -> None:
    """Failure of a component is no misoperation as long as the composite protection system performs."""
    case = bind(compile_scheme(plant, dress(plant, duplicate_relay())), L1, LogicalSensing())
    one, two = (f"Alder/L1/relay {n}: failure_to_operate" for n in (1, 2))
    assert found(case, one) == set()
    assert found(case, two) == set()
    assert found(case, one, two) == {M.FAILURE_TO_TRIP}


def test_a_trip_so_slow_that_others_operate_is_slow() -> None:
    """By hand: main 20 ms, late at 120 ms; the infeed's own timer trips at 420 ms only, so late alone is no slow trip.

    With both main relays of the feeder failed the infeed clears: failure to trip.
    """
    case = bind(compile_scheme(radial_plant(), feeder_scheme()), Location("F1"), LogicalSensing())
    assert found(case) == set()
    assert found(case, "M1: delayed_operation") == set()
    assert found(case, "M1: delayed_operation", "M2: failure_to_operate") == set()
    assert found(case, "common cause same settings") == {M.FAILURE_TO_TRIP}
    assert found(case, "DC: lost") == {M.FAILURE_TO_TRIP}
    assert found(case, "CB1: does_not_open") == set()  # cleared by breaker failure, as intended


def test_slow_is_told_apart_where_the_infeed_beats_the_late_trip() -> None:
    """A main relay later than the infeed's timer of 420 ms leaves time for another element's protection."""
    case = bind(compile_scheme(radial_plant(), feeder_scheme()), Location("F1"), LogicalSensing())
    infeed = Opening(470_000, "IN.CB", 420_000, Role.LOCAL, "IN.trip")
    late = Opening(650_000, "F1.CB", 600_000, Role.MAIN, "M1.trip")
    slow = Outcome(Status.CLEARED, 470_000, (infeed, late))
    assert misoperation(slow, case) == {M.SLOW_TRIP}
    in_time = replace(slow, openings=(Opening(70_000, "F1.CB", 20_000, Role.MAIN, "M1.trip"), infeed))
    assert misoperation(in_time, case) == {M.UNNECESSARY_TRIP}
    assert misoperation(replace(slow, openings=(infeed,)), case) == {M.FAILURE_TO_TRIP}


def test_a_trip_with_no_fault_is_unnecessary(program: Program) -> None:
    case = bind(program, NoFault("Alder/L1/relay 1"), LogicalSensing())
    assert found(case) == {M.UNNECESSARY_TRIP_OTHER}
    assert found(case, "Alder.L1.CB: does_not_open", "Birch.L1.CB: does_not_open") <= {M.UNNECESSARY_TRIP_OTHER}
    assert found(case, "Alder.L1.CB/coil 1: failure_to_operate") <= {M.UNNECESSARY_TRIP_OTHER}


def test_the_study_is_the_sum_of_its_runs(program: Program) -> None:
    study = study_misoperations(
        program, LogicalSensing(), [L1, Location("F1")], frequencies={L1: 2.0, Location("F1"): 0.5}, epsilon=1e-6
    )
    by_event = {j.event: j for j in study.judged}
    assert by_event[str(L1)].per_yr == 2.0
    line_fault = by_event[str(L1)].p
    q = program.questions
    relays = [x.probability for x in q if x.name.endswith("L1/relay 1: failure_to_operate")]
    assert len(relays) == 2
    assert float(line_fault[M.FAILURE_TO_TRIP].low) >= float(sum(relays)) * 0.99  # either end, and more besides
    for j in study.judged:
        fault = not j.event.startswith("no fault")
        for m in (M.FAILURE_TO_TRIP_OTHER, M.SLOW_TRIP_OTHER):
            assert (j.p[m].low, j.p[m].high) == (0, 0)
        assert j.p[M.UNNECESSARY_TRIP_OTHER].high == 0 if fault else j.p[M.UNNECESSARY_TRIP].high == 0
        assert max(b.low for b in j.p.values()) <= j.p_any.high
    a_year = study.per_yr(M.UNNECESSARY_TRIP_OTHER)
    rates = [c.no_fault_per_yr for c in program.scheme.components if c.no_fault_per_yr]
    assert a_year is not None
    assert 0.9 * sum(rates) < a_year.low <= a_year.high <= sum(rates) * (1 + 1e-9)
    assert list(study.summary()["category"]) == [str(m) for m in M]
    assert len(study.table()) == len(study.judged)


def test_without_frequencies_nothing_is_per_year(program: Program) -> None:
    study = study_misoperations(program, LogicalSensing(), [L1], no_fault=False, epsilon=1e-2)
    assert study.per_yr(M.FAILURE_TO_TRIP) is None
    assert "no frequencies" in repr(study)


def test_bad_questions_are_refused(program: Program) -> None:
    for locations, rates in (([Location("L9")], None), ([L1], {L1: -1.0})):
        with pytest.raises(InputError):
            study_misoperations(program, LogicalSensing(), locations, frequencies=rates)
