"""R16: what the standard line schemes make of a channel that is in order, lost, late or false.

The chain (see :mod:`tests.rules.small`); the channel takes 15 ms, 115 when late; the coordinating delay of blocking
is 30. Faults: L1 at 90 km (Birch zone 1, Alder zone 2 only), and L2 at 5 km (105 km from Alder, within its zone
2; behind Birch's L1 relay).
"""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.engine.outcome import Status
from schemesim.plant.layouts import Bay, generator, line, single_bus
from schemesim.plant.model import Plant, PlantBuilder
from schemesim.scheme.delays import Fixed
from schemesim.scheme.dress import dress
from schemesim.scheme.functions import ElementTimes
from schemesim.scheme.model import Sense, Timer
from schemesim.scheme.policy import BreakerFailurePolicy, LineScheme, Policy, PolicyTimes, ProtectionSet, single_set
from tests.rules.small import chain, opened, play, roles

LOST, LATE, FALSE = (f"L1/channel 1: {mode}" for mode in ("lost", "late", "false_receipt"))
INSIDE, BEYOND = "L1@0.9", "L2@0.05"


def with_line(line: LineScheme, **changes: object) -> Policy:
    return single_set(sets=(ProtectionSet(line=line),), **changes)


def alder(policy: Policy, place: str, *failed: str, g3: bool = True) -> int | None:
    return opened(play(chain(g3=g3), policy, place, *failed)).get("Alder.L1.CB")


@pytest.mark.parametrize("line", [LineScheme.PERMISSIVE_OVERREACH, LineScheme.PERMISSIVE_UNDERREACH])
def test_r16_permissive(line: LineScheme) -> None:
    policy = with_line(line)
    assert alder(policy, INSIDE) == 85_000  # permitted at 20 + 15
    assert alder(policy, INSIDE, LOST) == 420_000  # zone 2: speed is lost, not the trip
    assert alder(policy, INSIDE, LATE) == 185_000  # 20 + 100 + 15 + 50
    assert alder(policy, BEYOND) is None  # Birch sees nothing ahead on L1
    assert alder(policy, BEYOND, FALSE) == 70_000  # a false permission while zone 2 is up: 20 + 50
    assert alder(policy, "L2@0.5", FALSE) is None  # nor is there one to be had where zone 2 sees nothing


def test_r16_the_lost_channel_shows_as_a_timed_zone() -> None:
    run = play(chain(), with_line(LineScheme.PERMISSIVE_OVERREACH), INSIDE, LOST)
    assert roles(run) == {"Alder.L1.CB": "main, timed zone", "Birch.L1.CB": "main"}


def test_r16_plain_distance_has_no_channel_to_lose() -> None:
    assert alder(with_line(LineScheme.DISTANCE), INSIDE) == 420_000


def test_r16_blocking() -> None:
    policy = with_line(LineScheme.BLOCKING)
    assert alder(policy, INSIDE) == 100_000  # 20 + 30 + 50: always waits
    assert alder(policy, INSIDE, LOST) == 100_000  # and loses nothing inside
    assert alder(policy, BEYOND) is None  # blocked at 20 + 15
    assert alder(policy, BEYOND, LOST) == 100_000  # security is lost
    assert alder(policy, BEYOND, LATE) == 100_000  # the block comes at 135, the trip was at 50
    assert alder(policy, INSIDE, FALSE) == 420_000  # a false block: zone 2
    assert alder(policy, "L1@0.5", FALSE) == 70_000  # zone 1 asks nobody


def test_r16_a_block_outlasts_the_fault_by_the_channels_delay() -> None:
    # A reverse element at Birch that resets in 10, not 15. Birch opens L2 at 70 and, with Cedar yet feeding it,
    # Alder and Birch see the fault no more: the reverse element is down at 80, Alder's zone 2 at 85. The
    # block ends at 95, for its end has to go the way of its beginning; a block that ended at once would leave
    # Alder 5 ms to trip: committed at 80, open at 130.
    policy = with_line(LineScheme.BLOCKING)
    scheme = dress(chain(), policy)
    quick = replace(
        scheme,
        blocks=tuple(
            replace(b, reset=Fixed(10_000)) if isinstance(b, Sense) and b.name == "Birch/L1/1 21 reverse" else b
            for b in scheme.blocks
        ),
    )
    assert "Alder.L1.CB" not in opened(play(chain(), quick, BEYOND))
    abrupt = replace(
        quick,
        blocks=tuple(
            replace(b, drop_out=Fixed(0)) if isinstance(b, Timer) and "under way" in b.name else b for b in quick.blocks
        ),
    )
    assert opened(play(chain(), abrupt, BEYOND))["Alder.L1.CB"] == 130_000


def test_r16_line_differential() -> None:
    policy = with_line(LineScheme.DIFFERENTIAL)
    assert alder(policy, INSIDE) == 70_000
    assert alder(policy, INSIDE, LOST) == 420_000  # it stops; zone 2 of the same relay
    assert alder(policy, INSIDE, LATE) == 420_000
    assert alder(policy, "L1@0.5", LOST) == 70_000  # zone 1
    assert alder(policy, BEYOND) is None
    assert alder(policy, INSIDE, "Birch/L1/relay 1: failure_to_operate") == 420_000


def test_r16_a_weak_end_needs_echo() -> None:
    # Nothing feeds from Cedar: Birch sees nothing ahead and permits nothing: zone 2, 420. With echo: sent at 20, at
    # Birch 35, back at Alder 50, open at 100. Not for a fault behind Birch's relay.
    plain = with_line(LineScheme.PERMISSIVE_OVERREACH)
    echo = with_line(LineScheme.PERMISSIVE_OVERREACH, echo=True)
    assert alder(plain, INSIDE, g3=False) == 420_000
    assert alder(echo, INSIDE, g3=False) == 100_000
    assert alder(echo, INSIDE) == 85_000
    assert alder(echo, BEYOND) is None
    assert alder(echo, BEYOND, g3=False) is None
    assert alder(echo, INSIDE, LOST, g3=False) == 420_000


# --- three terminals -------------------------------------------------------------------------


def tee() -> Plant:
    """T, 100 km, with Alder at 0, Birch at 40 km and Cedar at 100 km, a generator at each."""
    b = PlantBuilder()
    line(b, "T", 100.0)
    for name, at in (("Alder", 0.0), ("Birch", 0.4), ("Cedar", 1.0)):
        generator(b, f"G{name[0]}", station=name)
        single_bus(b, name, [Bay("T", "T", at=at), Bay("G", f"G{name[0]}")])
    return b.build()


@pytest.mark.parametrize(
    ("scheme", "times"),
    [
        # Zone 1 stops short of the nearest end, 80 % of 40, 40 and 60 km; zone 2 sees past the farthest, 120 % of
        # 100, 60 and 100. At 90 km: Cedar, at 10 km, has it in zone 1, Birch at 50 and Alder at 90 in zone 2.
        (LineScheme.DISTANCE, {"Alder": 420_000, "Birch": 420_000, "Cedar": 70_000}),
        # Permitted as soon as one end has it in zone 1.
        (LineScheme.PERMISSIVE_UNDERREACH, {"Alder": 85_000, "Birch": 85_000, "Cedar": 70_000}),
        # Permitted by both others.
        (LineScheme.PERMISSIVE_OVERREACH, {"Alder": 85_000, "Birch": 85_000, "Cedar": 70_000}),
        (LineScheme.BLOCKING, {"Alder": 100_000, "Birch": 100_000, "Cedar": 70_000}),
        (LineScheme.DIFFERENTIAL, {"Alder": 70_000, "Birch": 70_000, "Cedar": 70_000}),
    ],
)
def test_r16_a_line_of_three_ends(scheme: LineScheme, times: dict[str, int]) -> None:
    run = play(tee(), with_line(scheme), "T@0.9")
    assert opened(run) == {f"{station}.T.CB": t for station, t in times.items()}


def test_r16_one_zone_1_of_three_ends_is_permission_enough() -> None:
    # At 95 km with Birch's relay dead: Cedar alone has it in zone 1 (Alder, 95 km, in zone 2). Underreaching:
    # Cedar's permission suffices; overreaching: Birch's is missing.
    dead = "Birch/T/relay 1: failure_to_operate"
    for scheme, t_us in ((LineScheme.PERMISSIVE_UNDERREACH, 85_000), (LineScheme.PERMISSIVE_OVERREACH, 420_000)):
        assert opened(play(tee(), with_line(scheme), "T@0.95", dead))["Alder.T.CB"] == t_us


def test_r16_faster_elements_do_not_beat_the_channel() -> None:
    # Elements that operate in 10: permitted at 25, open at 75.
    quick = PolicyTimes(distance=ElementTimes(operate=Fixed(10_000)))
    assert alder(with_line(LineScheme.PERMISSIVE_OVERREACH, times=quick), INSIDE) == 75_000


@pytest.mark.parametrize("place", [INSIDE, BEYOND, "Birch.B1"])
def test_r16_two_ends_never_echo_each_others_echo_for_ever(place: str) -> None:
    """Once the fault is cleared both ends see nothing and receive what was under way: one pulse each."""
    changes = {"echo": True, "vt_supervision": False, "breaker_failure": BreakerFailurePolicy(auxiliary=True)}
    run = play(chain(), with_line(LineScheme.PERMISSIVE_OVERREACH, **changes, coil_dc=(("1", "1"), ("2", "1"))), place)
    assert run.outcome.status is Status.CLEARED
    assert not run.outcome.at_horizon
