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
