"""R18: trips without a fault, through the standard functions: load current counts for current detectors.

The chain (see :mod:`tests.rules.small`) supplies F2 at Birch from both ends; the relay named trips at 0.
"""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.engine.outcome import Status
from schemesim.errors import InputError
from schemesim.scheme.failure_data import FailureData, Override
from schemesim.scheme.policy import duplicate_chain, single_set
from tests.rules.small import NO_RATES, chain, opened, play, roles

LINE_RELAY = "!Alder/L1/relay 1"


def test_r18_a_line_relay_opens_its_end() -> None:
    run = play(chain(), single_set(), LINE_RELAY)
    assert run.outcome.status is Status.NO_FAULT
    assert run.outcome.t_clear_us is None
    assert opened(run) == {"Alder.L1.CB": 50_000}


def test_r18_the_breaker_is_stuck() -> None:
    # Load current flows on: 50BF at 150, lockout 160, Alder.G1.CB at 210; the far end by transfer trip at 225.
    run = play(chain(), single_set(), LINE_RELAY, "Alder.L1.CB: does_not_open")
    assert opened(run) == {"Alder.G1.CB": 210_000, "Birch.L1.CB": 225_000}
    assert set(roles(run).values()) == {"breaker failure"}


def test_r18_no_load_current_no_breaker_failure() -> None:
    # Nothing is connected at Cedar but the line: Birch.L2.CB, stuck, carries no load.
    stuck = "Birch.L2.CB: does_not_open"
    assert opened(play(chain(g3=False), single_set(), "!Birch/L2/relay 1", stuck)) == {}
    assert opened(play(chain(), single_set(), "!Birch/L2/relay 1", stuck)) != {}


def test_r18_coil_1_open_is_retripped() -> None:
    # The retrip waits for the detector: picked up at 5, open at 55.
    run = play(chain(), duplicate_chain(), LINE_RELAY, "Alder.L1.CB/coil 1: failure_to_operate")
    assert opened(run) == {"Alder.L1.CB": 55_000}


def test_r18_a_bus_relay_trips_through_its_lockout() -> None:
    run = play(chain(), single_set(), "!Birch/Birch.B1/relay 1")
    assert opened(run) == dict.fromkeys(("Birch.F2.CB", "Birch.L1.CB", "Birch.L2.CB"), 60_000)


def test_r18_a_breaker_failure_relay_trips_around_its_breaker() -> None:
    # 86BF at 10: Alder.G1.CB at 60, Birch.L1.CB over the channel at 75; its own breaker has had no trip.
    run = play(chain(), single_set(), "!Alder.L1.CB/BF relay")
    assert opened(run) == {"Alder.G1.CB": 60_000, "Birch.L1.CB": 75_000}


def test_r18_two_out_of_three_do_not_follow_one() -> None:
    one, two = duplicate_chain().sets
    three = replace(two, label="3", core="4")
    policy = duplicate_chain(sets=(one, two, three), votes=2)
    for relay in ("Alder/L1/relay 1", "Alder/L1/relay 3", "Birch/Birch.B1/relay 2"):
        assert opened(play(chain(), policy, f"!{relay}")) == {}


def test_r18_without_a_rate_a_relay_has_no_such_trip() -> None:
    data = FailureData(no_fault_per_yr={}, overrides=(Override("Alder/L1/relay 1", no_fault_per_yr=0.01),))
    assert opened(play(chain(), single_set(), LINE_RELAY, data=data)) == {"Alder.L1.CB": 50_000}
    assert opened(play(chain(), single_set(), "!Birch/L1/relay 1", data=data)) == {}
    assert opened(play(chain(), single_set(), LINE_RELAY, data=NO_RATES)) == {}
    with pytest.raises(InputError, match="Alder/L1/relay 9"):
        play(chain(), single_set(), "!Alder/L1/relay 9")
