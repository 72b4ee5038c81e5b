"""Clearing sequences as tables.

The plant is a line from a station with a generator to one with a feeder; times below are worked
out from the policy: elements operate in 20 ms, lockouts in 10 ms, breakers interrupt in
50 ms, and the breaker-failure timer runs for 150 ms.
"""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.engine.answers import DrawnAnswers, FixedAnswers
from schemesim.engine.case import Case
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Row, Run, Status
from schemesim.engine.times import DelayTimes
from schemesim.errors import InputError
from schemesim.report.lanes import Look
from schemesim.report.pictures import plot_timeline, short_names
from schemesim.report.sequence import shorten
from schemesim.report.timeline import replay, replay_trial, timeline
from schemesim.scheme.model import Role
from schemesim.study.injection import inject
from schemesim.study.tree import explore
from tests.unit.timelines import STUCK, bars, case_of, each, text_of, timeline_of


def test_the_situations_are_what_they_are_called() -> None:
    def opened(situation: str) -> dict[str, tuple[Role, float]]:
        return {o.breaker: (o.role, o.t_open_us / 1000) for o in timeline_of(situation).run.outcome.openings}

    assert opened("main") == {"Elm.L1.CB": (Role.MAIN, 70), "Fir.L1.CB": (Role.MAIN, 70)}
    assert opened("stuck") == {"Fir.L1.CB": (Role.MAIN, 70), "Elm.G1.CB": (Role.BREAKER_FAILURE, 230)}
    assert opened("late").keys() == opened("no interruption").keys() == {"Elm.L1.CB", "Fir.L1.CB", "Elm.G1.CB"}
    # bus protection with its lockout, 52a, end-fault timer, channel, breaker
    assert opened("dead zone")["Elm.L1.CB"] == (Role.BREAKER_FAILURE, 20 + 10 + 50 + 5 + 40 + 15 + 50)
    assert opened("station without DC") == {"Elm.L1.CB": (Role.REMOTE, 20 + 350 + 50)}


# --- the table ----------------------------------------------------------------------------


@each
def test_openings_and_clearing_are_in_the_table_at_their_times(situation: str) -> None:
    found = timeline_of(situation)
    table = found.table()
    opens = table[table.what.isin(["opens", "opens but does not interrupt"])]
    listed = sorted(zip(opens.subject, opens.t_ms, strict=True))
    assert listed == sorted((o.breaker, o.t_open_us / 1000) for o in found.run.outcome.openings)
    assert listed
    clear = found.run.outcome.t_clear_us
    assert clear is not None
    assert table[table.what == "cleared"].t_ms.tolist() == [clear / 1000]


@each
@pytest.mark.parametrize("everything", [False, True])
def test_every_cause_leads_to_the_beginning_through_earlier_rows(situation: str, everything: bool) -> None:
    found = timeline_of(situation)
    shown = {r.index for r in found.rows(everything)}
    for row in found.rows(everything):
        at: Row = row
        while at.index != 0:
            cause = found.cause_of(at, everything)
            assert cause is not None, row
            assert cause.index < at.index
            assert cause.t_us <= at.t_us
            assert cause.index in shown
            at = cause


@each
def test_all_that_led_to_an_opening_is_kept(situation: str) -> None:
    found = timeline_of(situation)
    log = found.run.log
    for row in log:
        if row.kind == "breaker" and row.what == "opens":
            i = row.index
            while i >= 0:
                assert i in found.kept
                i = log[i].cause


def test_the_full_table_is_the_log() -> None:
    found = timeline_of("stuck")
    table = found.table(all=True)
    assert table.index.tolist() == list(range(len(found.run.log)))
    assert table.subject.tolist() == [r.subject for r in found.run.log]
    assert 0 < len(found.table()) < len(table) / 2


def test_times_in_cycles_follow_the_power_frequency() -> None:
    case = case_of("L1")
    for hz in (50.0, 60.0, 16.7):
        table = timeline(case, replay(case, ()), frequency_hz=hz).table()
        assert table.t_cycles.tolist() == pytest.approx([ms * hz / 1000 for ms in table.t_ms])


def test_a_stopped_timer_shows_what_was_left() -> None:
    # zone 2: started at 20 ms for 350 ms; the ends open at 70 ms, the element drops out 15 ms later
    table = timeline_of("main").table()
    row = table[(table.subject == "Elm/L1/2 21-2 timer") & table.margin_ms.notna()]
    assert row.t_ms.tolist() == [85.0]
    assert row.margin_ms.tolist() == [20 + 350 - 85.0]


def test_breaker_failure_row_by_row() -> None:
    found = timeline_of("stuck")
    table = found.table()

    def at(subject: str, what: str) -> list[float]:
        chosen = table[(table.subject == subject) & table.what.str.startswith(what)]
        return [float(t) for t in chosen.t_ms]

    assert at("Elm.L1.CB: does_not_open", "fails") == [20.0]
    assert at("Elm.L1.CB", "does not open") == [20.0]
    assert at("Elm.L1.CB/50BF timer", "starts") == [20.0]
    assert at("Elm.L1.CB/50BF timer", "runs out") == [170.0]
    assert not at("Elm.L1.CB/50BF timer", "operates")  # no output yet: what stands behind it may ask for more
    every = found.table(all=True)
    measuring = every[every.what == "begins to measure"]
    assert len(measuring) > 0
    assert not any("timer" in name for name in measuring.subject)
    assert at("Elm.L1.CB/86BF 1", "seals in") == [180.0]
    assert at("Elm.G1.CB", "opens") == [230.0]
    trip = next(r for r in found.rows() if r.subject == "Elm.L1.CB/50BF" and r.what == "operates")
    chain = []
    at_row = found.cause_of(trip)
    while at_row is not None:
        chain.append(at_row.subject)
        at_row = found.cause_of(at_row)
    assert "Elm.L1.CB/50BF timer" in chain  # it came after the current detector picked up


def test_an_output_asked_about_late_says_since_when_it_is_on() -> None:
    found = timeline_of("stuck")
    row = next(r for r in found.run.log if r.subject == "Elm.L1.CB/50BF retrip" and r.what == "operates")
    assert row.t_us > found.since_us(row) == 20_000
    assert found.says(row) == "operates (on since 20 ms)"


def test_what_held_before_the_event_is_said_to_and_takes_no_credit() -> None:
    # the log of a detector that had picked up before the event: the gate behind it has no cause
    run = timeline_of("stuck").run
    current = next(r for r in run.log if r.subject == "Elm.L1.CB/50BF current" and r.what == "picks up")
    gate = next(r for r in run.log if r.kind == "gate" and r.what == "operates" and r.cause == current.index)
    log = tuple(replace(r, cause=-1) if r is gate else r for r in run.log)
    found = timeline(case_of("L1"), replace(run, log=log))
    contact = log[gate.index]
    assert (found.since_us(contact), found.cause_of(contact)) == (0, None)
    assert found.because(contact) == "as before the event"
    assert found.because(found.run.log[0]) == ""
    trip = next(r for r in found.rows() if r.subject == "Elm.L1.CB/50BF" and r.what == "operates")
    behind = [trip.subject]
    at = found.cause_of(trip)
    while at is not None:
        behind.append(at.subject)
        at = found.cause_of(at)
    assert "Elm.L1.CB/50BF timer" in behind
    assert behind[-1] == "L1"


@each
@pytest.mark.parametrize("width", [80, 110, 200])
def test_plain_text_keeps_to_its_width(situation: str, width: int) -> None:
    text = timeline_of(situation).to_text(width=width)
    assert max(map(len, text.splitlines())) <= width
    assert len(text.splitlines()) == len(timeline_of(situation).kept) + 4


@each
def test_repr_is_legible_and_says_how_it_ended(situation: str) -> None:
    found = timeline_of(situation)
    clear = found.run.outcome.t_clear_us
    assert clear is not None
    assert max(map(len, repr(found).splitlines())) <= 110
    assert f"cleared at {clear / 1000:g} ms ({clear / 20_000:.2f} cycles)" in repr(found).splitlines()[1]


def test_html_escapes_and_holds_every_row() -> None:
    html = timeline_of("stuck")._repr_html_()
    assert html.count("<tr") == len(timeline_of("stuck").kept) + 2
    assert "Elm.L1.CB: does_not_open" in html
    assert "NaN" not in html
    assert "&lt;NA&gt;" not in html


@pytest.mark.parametrize(("limit", "words"), [(100, "30 ms inside"), (70, "0 ms inside"), (60.5, "9.5 ms beyond")])
def test_the_limit_is_held_against_the_clearing(limit: float, words: str) -> None:
    ending = timeline_of("main", limit).ending
    if limit == 100:
        assert f"{words} the limit of 100 ms" in ending
    else:
        assert words in ending


# --- any run ------------------------------------------------------------------------------


def test_a_run_without_a_log_is_run_again() -> None:
    case = case_of("L1")
    bare = run_event(case, FixedAnswers(case.program, STUCK))
    assert bare.log == ()
    assert timeline(case, bare).table().equals(timeline(case, replay(case, STUCK)).table())


def test_leaves_injected_cases_and_answers_all_replay() -> None:
    case = case_of("L1")
    question = next(q for q, _ in run_event(case, FixedAnswers(case.program, STUCK)).asked)
    tree = explore(case, epsilon=1e-2)
    leaf = next(leaf for leaf in tree.leaves if leaf.yes)
    assert timeline(case, replay(case, leaf)).run.outcome == tree.ends[leaf.end].outcome
    injected = inject(case).where(STUCK)
    assert replay(case, injected).outcome == injected.outcome == timeline_of("stuck").run.outcome
    by_name = replay(case, STUCK[0])
    assert by_name.outcome == injected.outcome
    assert replay(case, dict(by_name.asked)) == by_name == replay(case, by_name)
    assert replay(case, FixedAnswers(case.program, STUCK)) == by_name
    assert dict(replay(case, {question: True}).asked)[question]


def test_a_trial_is_replayed_with_its_answers_and_delays() -> None:
    case = case_of("L1")
    for trial in range(20):
        bare = run_event(case, DrawnAnswers(case.program, 5, trial), times=DelayTimes(5, trial))
        assert replay_trial(case, 5, trial).outcome == bare.outcome
        assert timeline(case, bare, times=DelayTimes(5, trial)).run.outcome == bare.outcome


def test_a_run_that_does_not_come_out_again_is_refused() -> None:
    case = case_of("L1")
    bare = run_event(case, FixedAnswers(case.program, STUCK), horizon_us=100_000)
    with pytest.raises(InputError, match="run without a log"):
        timeline(case, bare)


@pytest.mark.parametrize("bad", [{"frequency_hz": 0}, {"frequency_hz": float("nan")}, {"limit_ms": -1}])
def test_bad_numbers_are_refused(bad: dict[str, float]) -> None:
    case = case_of("L1")
    run = replay(case, ())
    with pytest.raises(InputError):
        timeline(case, run, **bad)  # type: ignore[arg-type]  # the keys are the parameters' names
    with pytest.raises(InputError):
        replay(case, ["Elm.L1.CB: does not exist"])
    with pytest.raises(InputError):
        timeline(case, run).to_text(width=40)


def at_horizon() -> tuple[Case, Run]:
    case = case_of("L1")
    return case, replay(case, STUCK, horizon_us=200_000)


def test_a_run_cut_off_at_its_horizon_says_so() -> None:
    found = timeline(*at_horizon())
    assert found.run.outcome.status is Status.UNDETERMINED
    assert "horizon" in found.ending
    assert found.table().what.iloc[-1].startswith("ends at the horizon")
    ax = plot_timeline(found)
    (fault,) = bars(ax, Look.FAULT)
    assert fault.get_x() + fault.get_width() == ax.get_xlim()[1]
    assert not any("cleared" in text for text in text_of(ax))


def test_a_trip_with_no_fault_has_no_bar_of_a_fault() -> None:
    case = case_of("Elm.L1.CB/BF relay")
    found = timeline(case, replay(case, ()))
    assert found.run.outcome.status is Status.NO_FAULT
    assert found.run.outcome.openings
    ax = plot_timeline(found)
    assert bars(ax, Look.FAULT) == []
    assert len(bars(ax, Look.OPENING)) == len(found.run.outcome.openings)
    assert "fault on" not in found.title


# --- names --------------------------------------------------------------------------------


def test_names_lose_their_middle_only() -> None:
    assert shorten("short", 5) == "short"
    long = "Elm.L1.CB/end fault to Fir over channel 1 received under way"
    for width in (20, 36, 59):
        text = shorten(long, width)
        head, tail = text.split("…")
        assert len(text) == width
        assert long.startswith(head)
        assert long.endswith(tail)


def test_names_that_would_look_alike_stay_apart() -> None:
    names = [f"Elm.L1.CB/end fault to Fir over channel {n} received under way" for n in range(1, 5)]
    found = short_names(names, 36)
    assert len(set(found)) == 4
    assert max(map(len, found)) <= 36
    assert short_names(["same", "same"], 36) == ["same", "same"]


def test_a_lost_supply_is_told_on_the_outputs_it_keeps_from_operating() -> None:
    case = case_of("Fir.B1")
    found = timeline(case, replay(case, ["Fir/DC 1: lost"]))
    supply = next(r for r in found.rows() if r.subject == "Fir/DC 1: lost")
    assert found.says(supply) == "had failed; first felt here"
    silent = [r for r in found.rows() if r.what == "prevented"]
    assert next((r.subject, r.t_us) for r in silent) == ("Fir/Fir.B1/1 87B trip: in time", 20_000)
    assert {found.says(r) for r in silent if r.kind == "trip output" or "trip" in r.subject} == {
        "no trip: Fir/DC 1 lost"
    }
    operated = {r.subject for r in found.run.log if r.what == "operates"}
    assert not operated & {r.subject for r in silent}  # what did not operate is said of nothing that did
    assert "answered" not in repr(found)
    picture = found.plot(short=True)
    crosses = {
        str(item.get_gid()): float(item.get_xdata()[0])  # type: ignore[index, arg-type]
        for item in picture.lines
        if str(item.get_gid()).startswith(("failure", "prevented"))
    }
    assert crosses["failure: Fir/DC 1"] == 0  # it was lost before the fault
    assert crosses["prevented: Fir/Fir.B1/1 87B trip"] == 20
    texts = [text.get_text() for text in picture.texts]
    assert "lost, before the fault" in texts
    assert "no trip: Fir/DC 1 lost" in texts


def test_without_a_failure_nothing_is_kept_from_operating() -> None:
    case = case_of("Fir.B1")
    assert not [r for r in replay(case, ()).log if r.what == "prevented"]
