"""R14: DC is a domain: all that hangs on it fails together, channel terminals too.

The chain (see :mod:`tests.rules.small`). Birch, in the middle, loses its DC.
"""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.engine.outcome import Status
from schemesim.scheme.policy import BreakerFailurePolicy, LineScheme, Policy, ProtectionSet, duplicate_chain, single_set
from tests.rules.small import chain, opened, play, roles

DARK = ("Birch/DC 1: lost", "Birch/DC 2: lost")


def with_line(line: LineScheme) -> Policy:
    return single_set(sets=(ProtectionSet(line=line),))


def test_r14_a_bus_of_a_dark_station_is_cleared_from_remote_ends_only() -> None:
    # Set 1 (87L) has no partner, set 2 no permission; Alder and Cedar see the bus at 100 km in zone 2:
    # 20 + 350 + 50.
    run = play(chain(), duplicate_chain(), "Birch.B1", *DARK)
    assert opened(run) == {"Alder.L1.CB": 420_000, "Cedar.L2.CB": 420_000}
    assert set(roles(run).values()) == {"remote back-up"}


def test_r14_a_line_of_a_dark_station() -> None:
    # L1 at 50 km. Alder: zone 1, 70. Cedar sees it at 150 km: zone 3, 20 + 1000 + 50.
    run = play(chain(), duplicate_chain(), "L1", *DARK)
    assert opened(run) == {"Alder.L1.CB": 70_000, "Cedar.L2.CB": 1_070_000}
    assert roles(run) == {"Alder.L1.CB": "main", "Cedar.L2.CB": "remote back-up"}


def test_r14_one_domain_of_two_costs_nothing_here() -> None:
    # Without DC 1, 87L is gone at both ends; set 2 is permissive: L1 at 90 km, Birch zone 1 at 70,
    # Alder by permission: 20 + 15 + 50.
    run = play(chain(), duplicate_chain(), "L1@0.9", DARK[0])
    assert opened(run) == {"Alder.L1.CB": 85_000, "Birch.L1.CB": 70_000}


def test_r14_no_permission_is_sent() -> None:
    # L1 at 90 km: Alder is permitted by Birch at 35, open at 85. A dark Birch sends nothing: zone 2, 420.
    policy = with_line(LineScheme.PERMISSIVE_OVERREACH)
    assert opened(play(chain(), policy, "L1@0.9"))["Alder.L1.CB"] == 85_000
    dark = play(chain(), policy, "L1@0.9", DARK[0])
    assert opened(dark)["Alder.L1.CB"] == 420_000


def test_r14_no_block_is_sent() -> None:
    # L2 at 5 km, 105 km from Alder and within its zone 2. Birch sees it behind L1 and blocks: 20 + 15 = 35,
    # before Alder's 20 + 30. A dark Birch blocks nobody: Alder trips at 50, open at 100.
    policy = with_line(LineScheme.BLOCKING)
    assert "Alder.L1.CB" not in opened(play(chain(), policy, "L2@0.05"))
    assert opened(play(chain(), policy, "L2@0.05", DARK[0]))["Alder.L1.CB"] == 100_000


def test_r14_a_line_differential_has_no_partner() -> None:
    # L1 at 90 km under 87L: both at 70. A dark Birch: Alder falls back on zone 2, 420.
    policy = with_line(LineScheme.DIFFERENTIAL)
    assert opened(play(chain(), policy, "L1@0.9")) == {"Alder.L1.CB": 70_000, "Birch.L1.CB": 70_000}
    assert opened(play(chain(), policy, "L1@0.9", DARK[0]))["Alder.L1.CB"] == 420_000


@pytest.mark.parametrize(("dc", "t_open_us"), [("1", 420_000), ("2", 255_000)])
def test_r14_a_transfer_trip_hangs_on_the_dc_of_what_sends_it(dc: str, t_open_us: int) -> None:
    # Breaker failure of Birch.L1.CB for a bus fault, on DC 1 or on DC 2, with DC 1 lost at Alder. On DC 2: set 2
    # at Birch 20, lockout 30, 50BF 180, 86BF 190, received 205, coil 2 of Alder.L1.CB, open at 255. On
    # DC 1 nothing is received: zone 2 of set 2, 420.
    bf = BreakerFailurePolicy(dc=dc, coil=dc, channel=dc, lockout=dc, retrip_coil="2")
    policy = replace(duplicate_chain(), breaker_failure=bf)
    run = play(chain(), policy, "Birch.B1", "Birch.L1.CB: does_not_open", "Alder/DC 1: lost")
    assert opened(run)["Alder.L1.CB"] == run.outcome.t_clear_us == t_open_us


def test_r14_breaker_failure_on_the_lost_domain() -> None:
    # DC 1 lost at Birch: set 2 opens all it can; for the stuck breaker 50BF is dead too. Zone 2 clears.
    run = play(chain(), duplicate_chain(), "Birch.B1", "Birch.L1.CB: does_not_open", DARK[0])
    assert opened(run)["Alder.L1.CB"] == run.outcome.t_clear_us == 420_000


def test_r14_a_dark_station_with_generation_feeds_on() -> None:
    # L1 at 50 km with Alder dark: Birch opens at 70, G1 goes on feeding.
    run = play(chain(), duplicate_chain(), "L1", "Alder/DC 1: lost", "Alder/DC 2: lost")
    assert opened(run) == {"Birch.L1.CB": 70_000}
    assert run.outcome.status is Status.NOT_CLEARED
