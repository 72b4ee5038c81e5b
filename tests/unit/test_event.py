"""The event engine as a user meets it: the log, processes of her own, answers, names."""

from __future__ import annotations

import pickle
from collections.abc import Generator
from typing import Any

import pytest
import simpy

from schemesim.engine.answers import DrawnAnswers, FixedAnswers
from schemesim.engine.case import bind
from schemesim.engine.event import EventRun, run_event
from schemesim.engine.outcome import Row
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError, reject
from schemesim.plant.model import Location
from schemesim.scheme.conditions import External
from schemesim.scheme.model import (
    Block,
    Component,
    ComponentKind,
    FailureMode,
    Not,
    Role,
)
from tests.rules.hand import (
    FAILS,
    at,
    breaker,
    case,
    fails,
    gate,
    ms,
    openings,
    play,
    radial,
    relay,
    sense,
    timer,
    times,
    trip,
)

Steps = Generator[simpy.Event, Any, Any]


def by_hand() -> list[Block]:
    """An operator's emergency push button trips IN.CB after 30 ms; F1 has no protection at all."""
    return [
        sense("button", External(), 30, 5),
        trip("t", "button", role=Role.LOCAL),
        gate("IN.coil", "t"),
        breaker("IN.CB", "IN.coil"),
    ]


def causes(log: tuple[Row, ...], index: int) -> list[tuple[str, str]]:
    """The chain of rows behind a row, latest first."""
    out = []
    while index >= 0:
        out.append((log[index].subject, log[index].what))
        index = log[index].cause
    return out


def test_a_process_forces_an_external_condition_and_reads_signals() -> None:
    """Pressed at 100, picks up at 130, opens at 180; the process sees 52a before and after."""
    seen: list[tuple[int, bool, bool]] = []

    def operator(run: EventRun) -> Steps:
        yield run.env.timeout(100_000)
        run.force("button", True)
        for wait in (10_000, 40_000, 60_000):
            seen.append((int(run.env.now), run.value("IN.CB"), run.value("t")))
            yield run.env.timeout(wait)
        seen.append((int(run.env.now), run.value("IN.CB"), run.value("t")))

    run = play(case(radial(), by_hand()), processes=[operator])
    assert openings(run) == {"IN.CB": (130, 180)}
    assert run.outcome.t_clear_us == 180_000
    assert seen == [
        (100_000, True, False),
        (110_000, True, False),
        (150_000, True, True),
        (210_000, False, True),
    ]


def test_what_a_process_forces_has_no_cause_in_the_log() -> None:
    """Neither the fault nor an opening led to it."""

    def operator(run: EventRun) -> Steps:
        yield run.env.timeout(100_000)
        run.force("button", True)

    run = play(case(radial(), by_hand()), processes=[operator])
    opened = next(r for r in run.log if (r.subject, r.what) == ("IN.CB", "opens"))
    assert causes(run.log, opened.index)[-1] == ("button", "starts")


def test_a_condition_let_go_before_its_time_stops_the_element() -> None:
    def hesitant(run: EventRun) -> Steps:
        run.force("button", True)
        yield run.env.timeout(29_999)
        run.force("button", False)

    run = play(case(radial(), by_hand()), processes=[hesitant])
    assert openings(run) == {}
    (stopped,) = [r for r in run.log if r.what == "stopped before operating"]
    assert (stopped.t_us, stopped.margin_us) == (29_999, 1)


def test_a_condition_let_go_at_the_instant_it_is_due_has_operated() -> None:
    """R3 holds for a user's process too: due at 30, let go at 30."""

    def late(run: EventRun) -> Steps:
        run.force("button", True)
        yield run.env.timeout(30_000)
        run.force("button", False)

    run = play(case(radial(), by_hand()), processes=[late])
    assert openings(run) == {"IN.CB": (30, 80)}
    assert at(run, "button", "drops out") == 35


def test_two_processes_at_one_instant_make_one_pass() -> None:
    blocks: list[Block] = [
        sense("one", External(), 0),
        sense("two", External(), 0),
        trip("t", "one", Not("two"), k=2),
        gate("IN.coil", "t"),
        breaker("IN.CB", "IN.coil"),
    ]

    def presses(name: str) -> Any:
        def process(run: EventRun) -> Steps:
            yield run.env.timeout(50_000)
            run.force(name, True)

        return process

    for order in (("one", "two"), ("two", "one")):
        run = play(case(radial(), blocks), processes=[presses(n) for n in order])
        assert times(run, "one", "picks up") == times(run, "two", "picks up") == [50]
        assert openings(run) == {}


def test_a_process_that_never_ends_ends_with_the_horizon() -> None:
    def watch(run: EventRun) -> Steps:
        while True:
            yield run.env.timeout(1000)

    run = play(case(radial(), by_hand()), processes=[watch], horizon_us=50_000)
    assert not run.outcome.at_horizon, "nothing of the scheme is pending"


@pytest.mark.parametrize("name", ["t", "F1.50", "nobody"])
def test_only_external_conditions_may_be_forced(name: str) -> None:
    def process(run: EventRun) -> Steps:
        run.force(name, True)
        yield run.env.timeout(1)

    with pytest.raises(InputError, match="External"):
        play(case(radial(), [*by_hand(), sense("F1.50", "F1.CT")]), processes=[process])


def test_mistakes_survive_pickling_to_and_from_other_workers() -> None:
    error = reject("delay", -3, "a time", tip="positive")
    again = pickle.loads(pickle.dumps(error))
    assert (str(again), again.problems) == (str(error), error.problems)
    assert str(again) == "delay: got -3, expected a time (positive)"


def test_the_value_of_a_signal_beyond_the_case_is_its_state_of_rest() -> None:
    found: dict[str, bool] = {}

    def process(run: EventRun) -> Steps:
        yield run.env.timeout(1)
        found.update({n: run.value(n) for n in ("F2.CB", "far")})
        with pytest.raises(InputError, match=r"did you mean 'F2\.CB'"):
            run.value("F2.CBx")

    blocks: list[Block] = [*by_hand(), gate("never"), breaker("F2.CB", "never"), gate("far", "never")]
    play(case(radial(), blocks), processes=[process])
    assert found == {"F2.CB": True, "far": False}


def chain() -> list[Block]:
    return [
        sense("oc", "F1.CT"),
        timer("62", "oc", 100),
        trip("t", "62", unless=fails("R1")),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
    ]


def test_every_row_has_its_cause_back_to_the_fault() -> None:
    run = play(case(radial(), chain(), [relay("R1")]))
    (cleared,) = [r for r in run.log if r.what == "cleared"]
    assert causes(run.log, cleared.index) == [
        ("F1", "cleared"),
        ("F1.CB", "opens"),
        ("F1.CB", "committed to open"),
        ("coil", "operates"),
        ("t", "operates"),
        ("62", "operates"),
        ("62", "starts"),
        ("oc", "picks up"),
        ("oc", "starts"),
        ("F1", "begins"),
    ]
    (question,) = [r for r in run.log if r.kind == "question"]
    assert causes(run.log, question.index)[1] == ("62", "operates")


def test_a_trip_output_that_waits_for_an_answer_is_not_logged_as_reset() -> None:
    """a drops out at 40 with b standing: the gate stays true once R2 is known to be well, and says nothing."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        timer("over", "oc", 20),
        gate("a", "oc", Not("over"), k=2),
        gate("b", "oc", unless=fails("R2")),
        gate("either", "a", "b"),
        timer("62", "either", 100),
        trip("t", "62"),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
    ]
    run = play(case(radial(), blocks, [relay("R2")]))
    assert [r.t_us for r in run.log if r.kind == "question"] == [40_000]
    assert times(run, "either", "operates") == [20]
    assert times(run, "either", "resets") == [180]
    assert openings(run) == {"F1.CB": (120, 170)}


def test_no_log_is_kept_unless_asked_for() -> None:
    bound = case(radial(), chain(), [relay("R1")])
    run = run_event(bound, FixedAnswers(bound.program))
    assert run.log == ()
    assert run.outcome == play(bound).outcome
    assert run.events > 0


def test_the_best_role_names_the_trip_output_behind_a_coil() -> None:
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("z", "oc", role=Role.MAIN),
        trip("a", "oc", role=Role.LOCAL),
        gate("supervised", "a", "z"),
        gate("coil", "supervised"),
        breaker("F1.CB", "coil"),
    ]
    (opening,) = play(case(radial(), blocks)).outcome.openings
    assert (opening.role, opening.via) == (Role.MAIN, "z")


def test_failures_are_named_as_questions_and_mistakes_come_all_at_once() -> None:
    bound = case(radial(), chain(), [relay("R1")])
    with pytest.raises(InputError) as caught:
        FixedAnswers(bound.program, ["R1: failure_to_operat", "R7: lost"])
    assert [p.value for p in caught.value.problems] == ["R1: failure_to_operat", "R7: lost"]
    assert f"did you mean 'R1: {FAILS}'" in str(caught.value)
    with pytest.raises(InputError, match="the name of a question"):
        FixedAnswers(bound.program, [len(bound.program.questions)])


def test_drawn_answers_do_not_depend_on_when_they_are_asked_and_modes_exclude_each_other() -> None:
    """Over 4000 trials each mode of a breaker comes up as often as it should, and never two at once."""
    stuck, late = FailureMode.DOES_NOT_OPEN, FailureMode.OPENS_LATE
    cb = Component("CB1", ComponentKind.BREAKER, ((stuck, 0.3), (late, 0.2)))
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t", "oc"),
        gate("coil", "t"),
        breaker("F1.CB", "coil", component="CB1", late_by=ms(30)),
    ]
    bound = case(radial(), blocks, [cb])
    count = {stuck: 0, late: 0}
    for trial in range(4000):
        forward, backward = (DrawnAnswers(bound.program, 11, trial) for _ in range(2))
        first = [forward.answer(q, 0.5) for q in (0, 1)]
        assert first == [backward.answer(q, 0.5) for q in (1, 0)][::-1]
        assert first != [True, True]
        count[stuck] += first[0]
        count[late] += first[1]
    # five standard deviations of a binomial count: 5 * sqrt(4000 * 0.3 * 0.7) = 145
    assert abs(count[stuck] - 1200) < 145
    assert abs(count[late] - 800) < 145


def test_what_is_no_event_or_lies_outside_a_section_is_refused() -> None:
    bound = case(radial(), chain(), [relay("R1")])
    with pytest.raises(InputError, match="a Location or a NoFault"):
        bind(bound.program, "F1", LogicalSensing())  # type: ignore[arg-type]  # a slip of a user's
    for position in (-0.1, 1.9, float("nan")):
        with pytest.raises(InputError, match="a number from 0 to 1"):
            bind(bound.program, Location("F1", position), LogicalSensing())


def test_what_a_user_looks_at_shows_in_one_line() -> None:
    bound = case(radial(), chain(), [relay("R1")])
    run = run_event(bound, FixedAnswers(bound.program))
    assert repr(run).startswith("Run(cleared at ")
    assert "F1" in repr(bound)
    for thing in (run, bound, bound.program):
        assert len(repr(thing)) < 120
        assert "\n" not in repr(thing)
