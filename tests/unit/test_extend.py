"""Functions of one's own in a scheme: what they trip, that breaker failure follows, and what is refused."""

from __future__ import annotations

from dataclasses import replace

import pytest

import schemesim as ss
from schemesim.scheme.model import Block

STUCK = "Alder.F1.CB: does_not_open"


@pytest.fixture(scope="module")
def plant() -> ss.Plant:
    b = ss.PlantBuilder()
    ss.generator(b, "G1", station="Alder")
    ss.feeder(b, "F1", station="Alder", load_mw=10)
    ss.single_bus(b, "Alder", [ss.Bay("G1", "G1"), ss.Bay("F1", "F1")])
    return b.build()


def own(breaker: str = "Alder.F1.CB") -> dict[str, object]:
    """A relay of one's own that sees the feeder after 3 ms."""
    relay = ss.Component("own relay", ss.ComponentKind.RELAY, ((ss.FailureMode.FAILURE_TO_OPERATE, 0.01),))
    seen = ss.Sense(
        name="own seen", condition=ss.InZone(frozenset({"F1"}), ("Alder.F1.CTc",)), operate=ss.fixed_ms(3),
        reset=ss.fixed_ms(5),
    )  # fmt: skip
    asks = (ss.Ask("own relay", ss.FailureMode.FAILURE_TO_OPERATE),)
    mark = ss.Contact("own", ss.Role.MAIN, frozenset({"F1"}), relay="own relay")
    trip = ss.Gate(name="own trip", inputs=("own seen",), unless=asks, contact=mark)
    return {"components": [relay], "blocks": [seen, trip], "trips": {"own trip": [breaker]}}


def clearing_ms(plant: ss.Plant, scheme: ss.Scheme, *failures: str) -> float | None:
    case = ss.bind(ss.compile_scheme(plant, scheme), ss.Location("F1"), ss.LogicalSensing())
    found = ss.replay(case, failures).outcome.t_clear_us
    return None if found is None else found / 1000


def test_it_trips_its_breaker_unless_it_fails(plant: ss.Plant) -> None:
    before = ss.dress(plant, ss.single_set())
    after = ss.extend(before, **own())  # type: ignore[arg-type]  # keywords of one call
    assert clearing_ms(plant, before) == 70  # 20 ms and 50 ms of the breaker
    assert clearing_ms(plant, after) == 53
    assert clearing_ms(plant, after, "own relay: failure_to_operate") == 70
    assert "own trip" not in before.block


def test_breaker_failure_starts_at_its_trip(plant: ss.Plant) -> None:
    before = ss.dress(plant, ss.single_set(lockout=False))
    after = ss.extend(before, **own())  # type: ignore[arg-type]  # keywords of one call
    left_out = ss.extend(before, **own(), initiates=False)  # type: ignore[arg-type]  # keywords of one call
    slow = clearing_ms(plant, before, STUCK)
    assert slow is not None
    assert clearing_ms(plant, left_out, STUCK) == slow
    assert clearing_ms(plant, after, STUCK) == slow - 17  # as much sooner as its trip


def test_breaker_failure_that_one_trip_alone_has_started_until_now(plant: ss.Plant) -> None:
    """The feeder's breaker in a scheme without bus protection's trip: a gate is made."""
    before = ss.dress(plant, ss.single_set())
    name = "Alder.F1.CB/50BF"
    gate = before.block[f"{name} initiate"]
    assert isinstance(gate, ss.Gate)
    alone = "Alder/F1/1 50 trip"
    assert alone in gate.inputs
    seal, started = before.block[f"{name} sealed in"], before.block[f"{name} started"]
    assert isinstance(seal, ss.Latch)
    assert isinstance(started, ss.Gate)
    inputs = tuple(alone if i == gate.name else i for i in started.inputs)
    changed: dict[str, Block] = {seal.name: replace(seal, set=alone), started.name: replace(started, inputs=inputs)}
    kept = tuple(changed.get(b.name, b) for b in before.blocks if b.name != gate.name)
    single = replace(before, blocks=kept)
    after = ss.extend(single, **own())  # type: ignore[arg-type]  # keywords of one call
    slow = clearing_ms(plant, single, STUCK)
    assert slow is not None
    assert clearing_ms(plant, after, STUCK) == slow - 17


def test_a_coil_by_name_and_a_block_in_the_place_of_another(plant: ss.Plant) -> None:
    before = ss.dress(plant, ss.duplicate_chain())
    after = ss.extend(before, **own("Alder.F1.CB/coil 2"))  # type: ignore[arg-type]  # keywords of one call
    fed = [b.name for b in after.blocks if isinstance(b, ss.Gate) and "own trip" in b.inputs]
    assert fed == ["Alder.F1.CB/50BF initiate", "Alder.F1.CB/coil 2 energised"]
    sense = after.block["own seen"]
    assert isinstance(sense, ss.Sense)
    slower = ss.extend(after, blocks=[replace(sense, operate=ss.fixed_ms(8))])
    assert clearing_ms(plant, slower) == 58


def test_every_mistake_is_named(plant: ss.Plant) -> None:
    scheme = ss.extend(ss.dress(plant, ss.single_set()), **own())  # type: ignore[arg-type]  # keywords of one call
    with pytest.raises(ss.InputError) as caught:
        ss.extend(scheme, components=own()["components"], trips={"own tripp": ["x"], "own trip": ["Alder.F1.C"]})  # type: ignore[arg-type]  # of own
    told = str(caught.value)
    assert len(caught.value.problems) == 3
    assert "did you mean 'own trip'?" in told
    assert "did you mean 'Alder.F1.CB'?" in told
    assert "a name that no component of the scheme has" in told
