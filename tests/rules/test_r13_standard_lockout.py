"""R13: the lockout of the standard functions: its own time, one component for all its contacts, latched.

Bus fault at Birch on the chain (see :mod:`tests.rules.small`): 87B 20, lockout to 30, breakers open at 80.
"""

from __future__ import annotations

from dataclasses import replace

from schemesim.scheme.delays import Fixed
from schemesim.scheme.policy import PolicyTimes, ProtectionSet, duplicate_chain, duplicate_relay, single_set
from tests.rules.small import chain, opened, play

UNIT = "Birch/Birch.B1/86 1"
BIRCH = ("Birch.F2.CB", "Birch.L1.CB", "Birch.L2.CB")
ZONE_2 = {"Alder.L1.CB": 420_000, "Cedar.L2.CB": 420_000}


def test_r13_it_adds_its_own_time() -> None:
    assert opened(play(chain(), single_set(), "Birch.B1")) == dict.fromkeys(BIRCH, 80_000)
    slow = single_set(times=PolicyTimes(lockout=Fixed(16_667)))
    assert opened(play(chain(), slow, "Birch.B1")) == dict.fromkeys(BIRCH, 86_667)
    none = single_set(lockout=False)
    assert opened(play(chain(), none, "Birch.B1")) == dict.fromkeys(BIRCH, 70_000)


def test_r13_one_component_for_all_its_contacts() -> None:
    # It fails: no breaker at Birch is tripped and no breaker failure started; the remote ends' zone 2 clears.
    for policy in (single_set(), duplicate_relay()):
        assert opened(play(chain(), policy, "Birch.B1", f"{UNIT}: failure_to_operate")) == ZONE_2


def test_r13_a_second_chain_has_a_second_lockout() -> None:
    run = play(chain(), duplicate_chain(), "Birch.B1", f"{UNIT}: failure_to_operate")
    assert opened(run) == dict.fromkeys(BIRCH, 80_000)


def test_r13_two_chains_on_one_lockout() -> None:
    # Either relay operates it, whatever coil, core and DC they stand on; nothing trips without it.
    one, two = duplicate_chain().sets
    shared = replace(duplicate_chain(), sets=(one, replace(two, lockout="1")))
    for failed in ("Birch/Birch.B1/relay 1: failure_to_operate", "Birch/Birch.B1/relay 2: failure_to_operate"):
        assert opened(play(chain(), shared, "Birch.B1", failed)) == dict.fromkeys(BIRCH, 80_000)
    assert opened(play(chain(), shared, "Birch.B1", f"{UNIT}: failure_to_operate")) == ZONE_2


def test_r13_two_sets_that_differ_in_the_coil_only() -> None:
    two = ProtectionSet(label="2", coil="2")
    policy = single_set(sets=(ProtectionSet(), two), coil_dc=(("1", "1"), ("2", "1")))
    for n in (1, 2):
        failed = f"Birch/Birch.B1/relay {n}: failure_to_operate"
        assert opened(play(chain(), policy, "Birch.B1", failed)) == dict.fromkeys(BIRCH, 80_000)


def test_r13_it_stays_when_the_relay_has_reset() -> None:
    # Sealed in at 30; cleared at 80, 87B resets at 95; the coils stay energised: the lockout never falls.
    run = play(chain(), single_set(), "Birch.B1")
    rows = [(r.t_us, r.what) for r in run.log if r.subject == UNIT]
    assert rows == [(30_000, "seals in")]
    sees = "Birch/Birch.B1/1 87B sees Birch.L1.CTc"
    fallen = [r.t_us for r in run.log if r.subject == sees and r.what == "drops out"]
    assert fallen == [95_000]


def test_r13_breaker_failures_lockout_fails() -> None:
    # Alder.L1.CB stuck and its 86BF dead: nothing around it trips. Birch opened L1 at 70.
    failed = ("Alder.L1.CB: does_not_open", "Alder.L1.CB/86BF 1: failure_to_operate")
    assert opened(play(chain(), single_set(), "L1", *failed)) == {"Birch.L1.CB": 70_000}
