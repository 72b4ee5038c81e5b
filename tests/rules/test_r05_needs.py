"""R5: a block that needs a failed component behaves as that component's mode says.

The chain (see :mod:`tests.rules.small`), faults on L1 at 50 km unless stated. Unhurt, both ends of
L1 see it in zone 1 and clear it at 20 + 50 = 70 ms.
"""

from __future__ import annotations

import pytest

from schemesim.engine.outcome import Status
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.policy import LocalBackup, duplicate_chain, duplicate_relay, single_set
from tests.rules.small import chain, opened, play

LINE_CLEAR = {"Alder.L1.CB": 70_000, "Birch.L1.CB": 70_000}


def test_r05_nothing_failed() -> None:
    run = play(chain(), single_set(), "L1")
    assert (run.outcome.t_clear_us, opened(run)) == (70_000, LINE_CLEAR)


def test_r05_no_dc_no_output() -> None:
    # Alder has one DC domain: its relays, coils and its unit's trip are dead. Birch opens in zone 1,
    # Cedar no longer sees the fault, G1 feeds it for ever.
    run = play(chain(), single_set(), "L1", "Alder/DC 1: lost")
    assert opened(run) == {"Birch.L1.CB": 70_000}
    assert run.outcome.status is Status.NOT_CLEARED


def test_r05_the_second_domain_carries_the_second_chain() -> None:
    run = play(chain(), duplicate_chain(), "L1", "Alder/DC 1: lost")
    assert (run.outcome.t_clear_us, opened(run)) == (70_000, LINE_CLEAR)


def test_r05_a_unit_has_a_trip_on_each_domain() -> None:
    # G1 by 87G of set 2: 20, lockout 2 at 30, coil 2 of breaker and unit, open at 80.
    run = play(chain(), duplicate_chain(), "G1", "Alder/DC 1: lost")
    assert opened(run) == {"Alder.G1.CB": 80_000, "G1.unit": 80_000}
    assert run.outcome.t_clear_us == 80_000


def test_r05_open_ct_core_blinds_distance() -> None:
    # Both relays stand on core 1: nobody at Alder sees the fault, so no breaker failure starts either.
    failed = "Alder.L1.CTb/core 1: open"
    run = play(chain(), duplicate_relay(), "L1", failed)
    assert opened(run) == {"Birch.L1.CB": 70_000}
    assert run.outcome.status is Status.NOT_CLEARED
    assert opened(play(chain(), duplicate_chain(), "L1", failed)) == LINE_CLEAR


def test_r05_open_ct_core_blinds_the_breaker_failure_detector() -> None:
    # Alder.L1.CB stuck: initiated at 20, timer to 170, lockout to 180, Alder.G1.CB open at 230.
    stuck = "Alder.L1.CB: does_not_open"
    run = play(chain(), single_set(), "L1", stuck)
    assert opened(run)["Alder.G1.CB"] == 230_000
    assert run.outcome.t_clear_us == 230_000
    blind = play(chain(), single_set(), "L1", stuck, "Alder.L1.CTb/core 3: open")
    assert opened(blind) == {"Birch.L1.CB": 70_000}
    assert blind.outcome.status is Status.NOT_CLEARED


def test_r05_open_ct_core_unbalances_a_differential() -> None:
    # The bus at Birch is bounded at L1 by the CT beyond the breaker, Birch.L1.CTc. The fault on L1 draws
    # current through it: 87B at 20, lockout at 30, Birch's other breakers open at 80.
    run = play(chain(), single_set(), "L1", "Birch.L1.CTc/core 1: open")
    assert opened(run) == {**LINE_CLEAR, "Birch.L2.CB": 80_000, "Birch.F2.CB": 80_000}


def test_r05_an_internal_fault_fed_through_the_open_core_only_is_not_seen() -> None:
    # Nothing feeds from Cedar: the bus fault at Birch draws current through Birch.L1.CTc alone.
    # Alder clears it in zone 2 at 20 + 350 + 50 = 420.
    run = play(chain(g3=False), single_set(), "Birch.B1", "Birch.L1.CTc/core 1: open")
    assert opened(run) == {"Alder.L1.CB": 420_000}


def test_r05_core_out_of_service_is_open_even_if_it_never_fails() -> None:
    sound = FailureData(modes={}, no_fault_per_yr={})
    out = frozenset({"Birch.L1.CTc/core 1"})
    run = play(chain(g3=False), single_set(), "Birch.B1", data=sound, out=out)
    assert opened(run) == {"Alder.L1.CB": 420_000}


def test_r05_lost_voltage_supervised_blocks() -> None:
    # Alder's distance is blocked; Birch opens in zone 1 at 70.
    run = play(chain(), single_set(), "L1", "Alder.L1.VT/winding 1: lost")
    assert opened(run) == {"Birch.L1.CB": 70_000}
    # Behind Birch's L1 relay: a fault on L2 at 10 km is not its business, with or without voltage.
    run = play(chain(), single_set(), "L2@0.1", "Birch.L1.VT/winding 1: lost")
    assert set(opened(run)) == {"Birch.L2.CB", "Cedar.L2.CB"}


def test_r05_lost_voltage_unsupervised_trips_the_wrong_way() -> None:
    # L2 at 10 km, behind Birch's L1 relay. L2 itself: Birch in zone 1 at 70, Cedar (90 km) has permission
    # at 20 + 15 and opens at 85. Without voltage Birch's L1 zone 1 (80 km) goes by current alone: 70; and its
    # zone 2 permits Alder, whose zone 2 (120 km) sees the fault at 110 km: 20 + 15 + 50 = 85.
    policy = single_set(vt_supervision=False)
    run = play(chain(), policy, "L2@0.1", "Birch.L1.VT/winding 1: lost")
    own = {"Birch.L2.CB": 70_000, "Cedar.L2.CB": 85_000}
    assert opened(run) == {**own, "Birch.L1.CB": 70_000, "Alder.L1.CB": 85_000}
    assert opened(play(chain(), policy, "L2@0.1")) == own


@pytest.mark.parametrize(
    ("supervised", "openings"),
    [
        (True, {"Birch.L2.CB": 340_000, "Alder.L1.CB": 420_000}),
        (False, {"Birch.L2.CB": 340_000, "Birch.L1.CB": 340_000}),
    ],
)
def test_r05_lost_voltage_of_a_directional_local_backup(supervised: bool, openings: dict[str, int]) -> None:
    # A bus fault at Birch whose 87B fails. Local back-up of L1 and L2 looks back: 20 + 270 + 50 = 340, before
    # Alder's and Cedar's zone 2 (20 + 350 + 50). The one of L1 has lost its voltage: supervised it is
    # blind and Alder clears L1; unsupervised its current reaches (0 km, both ways) the bus all the same.
    policy = single_set(vt_supervision=supervised, local_backup=LocalBackup(winding="2"))
    failed = ("Birch/Birch.B1/relay 1: failure_to_operate", "Birch.L1.VT/winding 2: lost")
    assert opened(play(chain(), policy, "Birch.B1", *failed)) == openings
