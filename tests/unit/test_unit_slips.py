"""Slips of units and names at the face: seconds for ms, ms for microseconds, a name misspelt, each with a hint."""

from __future__ import annotations

from collections.abc import Callable

import pytest

import schemesim as ss


@pytest.fixture(scope="module")
def case() -> ss.Case:
    b = ss.PlantBuilder()
    ss.generator(b, "G1", station="Alder")
    ss.feeder(b, "F1", 10, station="Alder")
    ss.single_bus(b, "Alder", [ss.Bay("G1", "G1"), ss.Bay("F1", "F1")])
    plant = b.build()
    program = ss.compile_scheme(plant, ss.dress(plant, ss.single_set()))
    return ss.bind(program, ss.Location("F1"), ss.LogicalSensing())


SLIPS: dict[str, tuple[Callable[[ss.Case], object], str]] = {
    "an operate time in seconds": (lambda _: ss.fixed_ms(0.02), "is it in seconds? 0.02 s is 20 ms"),
    "a limit of a timeline in seconds": (
        lambda c: ss.timeline(c, ss.replay(c, ()), limit_ms=0.15),
        "is it in seconds? 0.15 s is 150 ms",
    ),
    "a limit of a study in ms": (
        lambda c: ss.study_locations(c.program, ss.LogicalSensing(), limit_us=150),
        "is it in ms? 150 ms is 150000",
    ),
    "a limit of a register in ms": (
        lambda c: ss.register(c.program, ss.LogicalSensing(), limit_us=150),
        "is it in ms? 150 ms is 150000",
    ),
    "a limit of a probability in ms": (
        lambda c: ss.p_within_limit(ss.explore(c, epsilon=1e-2), 150),
        "is it in ms? 150 ms is 150000",
    ),
    "a limit of single points in ms": (
        lambda c: ss.single_points(ss.explore(c, epsilon=1e-2), c, limit_us=150),
        "is it in ms? 150 ms is 150000",
    ),
    "a failure misspelt": (
        lambda c: ss.replay(c, ["Alder/F1/relay 1: failure_to_operat"]),
        "did you mean 'Alder/F1/relay 1: failure_to_operate'?",
    ),
    "a fault location misspelt": (
        lambda c: ss.study_locations(c.program, ss.LogicalSensing(), [ss.Location("F11")], limit_us=150_000),
        "did you mean 'F1'?",
    ),
}


@pytest.mark.parametrize("name", SLIPS)
def test_a_slip_is_refused_with_a_hint(case: ss.Case, name: str) -> None:
    act, hint = SLIPS[name]
    with pytest.raises(ss.InputError) as caught:
        act(case)
    assert hint in str(caught.value)


def test_what_is_meant_is_taken(case: ss.Case) -> None:
    assert ss.fixed_ms(1).us == 1000
    assert ss.fixed_ms(0).us == 0
    assert ss.Fixed(20).us == 20
    assert ss.timeline(case, ss.replay(case, ()), limit_ms=150).limit_us == 150_000
    tree = ss.explore(case, epsilon=1e-2)
    assert ss.p_within_limit(tree, 0).high < ss.p_within_limit(tree, 150_000).low


FIRST_MINUTES: dict[str, tuple[Callable[[ss.Case], object], str]] = {
    "a section of two letters": (
        lambda c: ss.bind(c.program, ss.Location("F2"), ss.LogicalSensing()),
        "got 'F2', expected a section (did you mean 'F1'?)",
    ),
    "a position in percent": (
        lambda c: ss.bind(c.program, ss.Location("F1", 20), ss.LogicalSensing()),
        "is it in percent? 20 % is 0.2",
    ),
    "a name where a location is meant": (
        lambda c: ss.bind(c.program, "F1", ss.LogicalSensing()),  # type: ignore[arg-type]  # the slip
        "Location('F1') is a fault there",
    ),
    "names where locations are meant": (
        lambda c: ss.study_locations(c.program, ss.LogicalSensing(), ["F1"], limit_us=150_000),  # type: ignore[list-item]  # the slip
        "Location('F1') is a fault there",
    ),
    "frequencies by name": (
        lambda c: ss.study_locations(
            c.program, ss.LogicalSensing(), [ss.Location("F1")], limit_us=150_000, frequencies={"F1": 0.1}  # type: ignore[dict-item]  # the slip
        ),
        "Location('F1') is a fault there",
    ),
    "a sensing without its brackets": (
        lambda c: ss.bind(c.program, ss.Location("F1"), ss.LogicalSensing),  # type: ignore[arg-type]  # the slip
        "the brackets are missing",
    ),
    "a timer as a number": (
        lambda _: ss.BreakerFailureTimes(timer=150),  # type: ignore[arg-type]  # the slip
        "timer of BreakerFailureTimes: got 150, expected a Delay (fixed_ms(150) is 150 ms)",
    ),
    "a part of a policy misspelt": (
        lambda _: ss.duplicate_chain(breaker_failur=None),
        "did you mean 'breaker_failure'?",
    ),
    "a policy before the plant": (
        lambda c: ss.dress(ss.single_set(), c.program.plant),  # type: ignore[arg-type]  # the slip
        "the policy comes second",
    ),
    "a scheme before the plant": (
        lambda c: ss.compile_scheme(c.program.scheme, c.program.plant),  # type: ignore[arg-type]  # the slip
        "a Plant and a Scheme, in this order",
    ),
    "a plant where a program is meant": (
        lambda c: ss.bind(c.program.plant, ss.Location("F1"), ss.LogicalSensing()),  # type: ignore[arg-type]  # the slip
        "a Program, as compile_scheme makes it",
    ),
    "a failure mode misspelt": (
        lambda _: ss.Override("Alder/DC *", {"los": 0.01}),  # type: ignore[dict-item]  # the slip
        "did you mean 'lost'?",
    ),
    "a section of the audit misspelt": (
        lambda c: ss.coverage_audit(c.program.plant)["Alder.F1.d"],
        "did you mean 'Alder.F1.",
    ),
    "a fault of a picture misspelt": (
        lambda c: ss.plot_one_line(c.program.plant, fault="F2"),
        "did you mean 'F1'?",
    ),
}


@pytest.mark.parametrize("name", FIRST_MINUTES)
def test_a_slip_of_the_first_minutes_is_refused_with_a_hint(case: ss.Case, name: str) -> None:
    act, hint = FIRST_MINUTES[name]
    with pytest.raises(ss.InputError) as caught:
        act(case)
    assert hint in str(caught.value)


def test_every_delay_that_is_none_is_named_at_once() -> None:
    with pytest.raises(ss.InputError) as caught:
        ss.BreakerFailureTimes(timer=150, dwell="long")  # type: ignore[arg-type]  # the slip
    assert [p.subject for p in caught.value.problems] == [f"{x} of BreakerFailureTimes" for x in ("timer", "dwell")]
    assert ss.BreakerFailureTimes(retrip=None).retrip is None


def test_a_public_name_misspelt_is_hinted_at() -> None:
    with pytest.raises(AttributeError, match="did you mean 'plot_one_line'"):
        ss.plot_oneline  # noqa: B018 - the slip
    assert not hasattr(ss, "__wrapped__")
