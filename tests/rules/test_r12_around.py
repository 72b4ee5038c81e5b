"""R12: breaker failure trips every breaker around the failed one, retrip to the other coil first.

Times as in :mod:`tests.rules.small`: a line trip initiates at 20, 50BF at 170, its lockout at 180, breakers
there open at 230; a transfer trip takes 15 more: 245. A bus trip goes through a lockout and initiates
at 30: 180, 190, 240 and 255.
"""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.engine.outcome import Status
from schemesim.plant.layouts import Bay, breaker_and_a_half, double_bus, feeder, generator, line, ring, single_bus
from schemesim.plant.model import Plant, PlantBuilder
from schemesim.scheme.delays import Fixed
from schemesim.scheme.functions import BreakerFailureTimes
from schemesim.scheme.policy import BreakerFailurePolicy, Policy, duplicate_chain, single_set
from tests.rules.small import chain, opened, play, roles, via

TWO_COILS = single_set(breaker_failure=BreakerFailurePolicy(retrip_coil="2"), coil_dc=(("1", "1"), ("2", "2")))


def test_r12_a_line_fault_trips_the_bus_behind_the_failed_breaker() -> None:
    # Birch.L1.CB stuck: L2 and F2 at Birch at 230. Alder.L1.CB, beyond the line, is open already.
    run = play(chain(), single_set(), "L1", "Birch.L1.CB: does_not_open")
    assert opened(run) == {"Alder.L1.CB": 70_000, "Birch.L2.CB": 230_000, "Birch.F2.CB": 230_000}
    assert run.outcome.t_clear_us == 230_000


def test_r12_a_bus_fault_trips_the_far_end_over_a_channel() -> None:
    run = play(chain(), single_set(), "Birch.B1", "Birch.L1.CB: does_not_open")
    assert opened(run) == {"Birch.L2.CB": 80_000, "Birch.F2.CB": 80_000, "Alder.L1.CB": 255_000}
    assert roles(run)["Alder.L1.CB"] == "breaker failure"
    assert via(run, "Alder.L1.CB") == "Birch.L1.CB/86BF 1 to Alder over channel 1"
    assert run.outcome.t_clear_us == 255_000


@pytest.mark.parametrize("lost", ["Alder-Birch/channel 1: lost", None])
def test_r12_without_the_channel_the_far_end_waits_for_zone_2(lost: str | None) -> None:
    # Alder sees the bus at 100 km in zone 2: 20 + 350 + 50.
    no_channel = single_set(breaker_failure=BreakerFailurePolicy(retrip_coil="1", transfer_trip=False))
    failed = ("Birch.L1.CB: does_not_open", *((lost,) if lost else ()))
    run = play(chain(), single_set() if lost else no_channel, "Birch.B1", *failed)
    assert opened(run)["Alder.L1.CB"] == run.outcome.t_clear_us == 420_000
    assert roles(run)["Alder.L1.CB"] == "remote back-up"


def test_r12_a_failed_generator_breaker_trips_the_unit() -> None:
    # Bus fault at Alder, Alder.G1.CB stuck: the unit is tripped at 190 and is off at 240.
    run = play(chain(), single_set(), "Alder.B1", "Alder.G1.CB: does_not_open")
    assert opened(run)["G1.unit"] == run.outcome.t_clear_us == 240_000


def test_r12_a_generator_fault_trips_the_bus_behind_its_failed_breaker() -> None:
    # 87G 20, lockout 30: the unit is off at 80, the grid is cut off at 240.
    run = play(chain(), single_set(), "G1", "Alder.G1.CB: does_not_open")
    assert opened(run) == {"G1.unit": 80_000, "Alder.L1.CB": 240_000}


# --- retrip -----------------------------------------------------------------------------------


def test_r12_retrip_first() -> None:
    # Coil 1 of Alder.L1.CB is open. The trip at 20 starts 50BF, which retrips through coil 2 at once: open at
    # 70, current gone at 90, timer (due at 170) stopped. Nothing else trips.
    run = play(chain(), TWO_COILS, "L1", "Alder.L1.CB/coil 1: failure_to_operate")
    assert opened(run) == {"Alder.L1.CB": 70_000, "Birch.L1.CB": 70_000}
    assert via(run, "Alder.L1.CB") == "Alder.L1.CB/50BF retrip"
    assert roles(run) == {"Alder.L1.CB": "breaker failure", "Birch.L1.CB": "main"}


def test_r12_a_delayed_retrip() -> None:
    # 30 after initiation: 20 + 30 + 50 = 100; the detector is reset at 120.
    bf = BreakerFailurePolicy(times=BreakerFailureTimes(retrip=Fixed(30_000)))
    run = play(chain(), replace(TWO_COILS, breaker_failure=bf), "L1", "Alder.L1.CB/coil 1: failure_to_operate")
    assert opened(run) == {"Alder.L1.CB": 100_000, "Birch.L1.CB": 70_000}


@pytest.mark.parametrize(
    ("policy", "failed"),
    [
        (single_set(), "Alder.L1.CB/coil 1: failure_to_operate"),  # retrip on the same coil is none
        (replace(TWO_COILS, breaker_failure=BreakerFailurePolicy(times=BreakerFailureTimes(retrip=None))),
         "Alder.L1.CB/coil 1: failure_to_operate"),
        (TWO_COILS, "Alder.L1.CB: does_not_open"),  # two coils, one mechanism
    ],
    ids=["one coil", "no retrip", "mechanism"],
)  # fmt: skip
def test_r12_without_a_retrip_that_helps_breaker_failure_trips_around(policy: Policy, failed: str) -> None:
    run = play(chain(), policy, "L1", failed)
    assert opened(run) == {"Birch.L1.CB": 70_000, "Alder.G1.CB": 230_000}


def test_r12_coil_2_hangs_on_its_own_dc() -> None:
    # DC 2 and coil 1 lost: the retrip finds coil 2 without supply. DC 1 lost in a duplicated chain: set 2 trips
    # through coil 2 as if nothing were wrong.
    failed = ("Alder.L1.CB/coil 1: failure_to_operate", "Alder/DC 2: lost")
    assert opened(play(chain(), TWO_COILS, "L1", *failed)) == {"Birch.L1.CB": 70_000, "Alder.G1.CB": 230_000}
    run = play(chain(), duplicate_chain(), "L1", "Alder/DC 1: lost")
    assert opened(run) == {"Alder.L1.CB": 70_000, "Birch.L1.CB": 70_000}


# --- bus selection, ring, breaker-and-a-half --------------------------------------------------


def star(layout: str, **keywords: object) -> Plant:
    """Dale, of a layout, with lines L1 to L4 of 60 km to four stations of their own with a generator each."""
    b = PlantBuilder()
    names = ("East", "North", "South", "West")
    for n, name in enumerate(names, start=1):
        line(b, f"L{n}", 60.0)
        generator(b, f"G{n}", station=name)
        single_bus(b, name, [Bay(f"L{n}", f"L{n}", at=1.0), Bay(f"G{n}", f"G{n}")])
    bays = [Bay(f"L{n}", f"L{n}") for n in range(1, 5)]
    feeder(b, "F", 10.0, station="Dale")
    if layout == "double":
        double_bus(b, "Dale", [*bays, Bay("F", "F")], **keywords)  # type: ignore[arg-type]  # the selection
    elif layout == "ring":
        ring(b, "Dale", [*bays, Bay("F", "F")])
    else:
        breaker_and_a_half(b, "Dale", [*bays, Bay("F", "F")])
    return b.build()


@pytest.mark.parametrize(
    ("selection", "around"),
    [
        ({"L1": 1, "L2": 1, "L3": 2, "L4": 2, "F": 2}, {"Dale.BC.CB", "Dale.L2.CB"}),
        ({"L1": 2, "L2": 1, "L3": 2, "L4": 2, "F": 2}, {"Dale.BC.CB", "Dale.L3.CB", "Dale.L4.CB", "Dale.F.CB"}),
    ],
)
def test_r12_follows_the_bus_selection(selection: dict[str, int], around: set[str]) -> None:
    run = play(star("double", selection=selection), single_set(), "L1", "Dale.L1.CB: does_not_open")
    assert opened(run) == {"East.L1.CB": 70_000, **dict.fromkeys(around, 230_000)}


def test_r12_a_failed_coupler_trips_both_buses() -> None:
    # B1 holds L1, L3, F; B2 holds L2, L4. Fault on B1: its bays at 80; the coupler stuck: B2's at 240.
    run = play(star("double"), single_set(), "Dale.B1", "Dale.BC.CB: does_not_open")
    first = {"Dale.L1.CB": 80_000, "Dale.L3.CB": 80_000, "Dale.F.CB": 80_000}
    assert opened(run) == {**first, "Dale.L2.CB": 240_000, "Dale.L4.CB": 240_000}
    assert run.outcome.t_clear_us == 240_000


@pytest.mark.parametrize(
    ("layout", "failed", "tripped"),
    [
        # Ring CB1 between L1 and L2, CB5 between F and L1. CB1 stuck: CB2, on the other side of L2, and L2's
        # far end over a channel.
        ("ring", "Dale.CB1", {"Dale.CB5": 70_000, "Dale.CB2": 230_000, "North.L2.CB": 245_000}),
        # Middle breaker D1.CB2 between L1 and L2: D1.CB3 and L2's far end.
        ("half", "Dale.D1.CB2", {"Dale.D1.CB1": 70_000, "Dale.D1.CB3": 230_000, "North.L2.CB": 245_000}),
        # Outer breaker D1.CB1 between B1 and L1: all of bus B1; no line is lost.
        (
            "half",
            "Dale.D1.CB1",
            {"Dale.D1.CB2": 70_000, "Dale.D2.CB1": 230_000, "Dale.D3.CB1": 230_000},
        ),
    ],
)
def test_r12_both_sides_of_a_breaker_between_circuits(layout: str, failed: str, tripped: dict[str, int]) -> None:
    run = play(star(layout), single_set(), "L1", f"{failed}: does_not_open")
    assert opened(run) == {"East.L1.CB": 70_000, **tripped}
    assert run.outcome.t_clear_us == max(tripped.values())


@pytest.mark.parametrize(("layout", "failed"), [("ring", "Dale.CB1"), ("half", "Dale.D1.CB2"), ("half", "Dale.D1.CB1")])
def test_r12_a_blind_detector_leaves_it_to_remote_backup(layout: str, failed: str) -> None:
    # The bus-side CT comes first by name; core 3 open: no 50BF. L2's far end sees L1 at 30 km beyond 60 km: zone
    # 2 (72 km) does not reach it, zone 3 (132 km) does: 20 + 1000 + 50.
    ct = {"Dale.CB1": "Dale.CTb1", "Dale.D1.CB2": "Dale.D1.CTb2", "Dale.D1.CB1": "Dale.D1.CTb1"}[failed]
    run = play(star(layout), single_set(), "L1", f"{failed}: does_not_open", f"{ct}/core 3: open")
    assert run.outcome.t_clear_us == 1_070_000
    assert roles(run)["North.L2.CB"] == "remote back-up"
    assert run.outcome.status is Status.CLEARED
