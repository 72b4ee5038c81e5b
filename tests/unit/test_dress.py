"""Dressing a whole plant: every fault location of every layout under each standard policy, and what may go wrong."""

from __future__ import annotations

import random
from collections.abc import Callable
from dataclasses import replace

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import bind
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Status
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.coverage import coverage_audit, default_objects
from schemesim.plant.layouts import (
    Bay,
    CtPlacement,
    breaker_and_a_half,
    double_bus,
    feeder,
    generator,
    infeed,
    line,
    ring,
    sectionalised_bus,
    single_bus,
    transformer,
)
from schemesim.plant.model import Device, DeviceKind, Dispatch, Location, Plant, PlantBuilder
from schemesim.plant.zones import duty, isolation_zones
from schemesim.scheme.build import BreakerTimes
from schemesim.scheme.delays import Fixed
from schemesim.scheme.dress import dress
from schemesim.scheme.model import ComponentKind, Gate, Scheme
from schemesim.scheme.policy import (
    BreakerFailurePolicy,
    LineScheme,
    LocalBackup,
    Policy,
    PolicyTimes,
    ProtectionSet,
    duplicate_chain,
    duplicate_relay,
    single_set,
)
from tests.rules.small import chain, opened, play, play_program, roles, via

Layout = Callable[..., None]
STANDARD = (single_set, duplicate_relay, duplicate_chain)
LAYOUTS = (single_bus, sectionalised_bus, double_bus, ring, breaker_and_a_half)


def grid(layout: Layout, ct: CtPlacement = CtPlacement.BOTH) -> Plant:
    """Dale, of a layout: lines to Alder and Birch with a generator each, a generator, a transformer, a feeder."""
    b = PlantBuilder()
    for n, name in enumerate(("Alder", "Birch"), start=1):
        line(b, f"L{n}", 50.0)
        generator(b, f"G{n}", station=name)
        single_bus(b, name, [Bay(f"L{n}", f"L{n}", at=1.0), Bay(f"G{n}", f"G{n}")])
    generator(b, "G0", station="Dale")
    transformer(b, "T0", station="Dale", length=20.0)
    feeder(b, "F0", 20.0, station="Dale")
    bays = [Bay("L1", "L1"), Bay("L2", "L2"), Bay("G0", "G0"), Bay("T0", "T0"), Bay("F0", "F0")]
    layout(b, "Dale", bays, ct=ct)
    feeder(b, "FL", 15.0, station="Dell")
    single_bus(b, "Dell", [Bay("T0", "T0", at=1.0), Bay("FL", "FL")])
    return b.build()


def covering(plant: Plant, section: str) -> frozenset[str]:
    """Border breakers and units of its own zone and of each element whose protected zone holds the section."""
    zones = isolation_zones(plant)
    held = {zones.of[o.element] for o in default_objects(plant) if section in o.zone} | {zones.of[section]}
    units = {s.name for s in plant.sources if s.trips and zones.of[s.section] in held}
    return frozenset(units.union(*(zones.border[z] for z in held)))


CASES = [(layout, ct) for layout in LAYOUTS for ct in (CtPlacement.BOTH, CtPlacement.CIRCUIT_SIDE)]
CASES += [(single_bus, CtPlacement.BUS_SIDE), (breaker_and_a_half, CtPlacement.BUS_SIDE)]


@pytest.mark.parametrize("policy", STANDARD, ids=lambda p: p.__name__)
@pytest.mark.parametrize(("layout", "ct"), CASES, ids=lambda x: getattr(x, "__name__", str(x)))
def test_nothing_failed_every_location_is_cleared(
    layout: Layout, ct: CtPlacement, policy: Callable[[], Policy]
) -> None:
    plant = grid(layout, ct)
    program = compile_scheme(plant, dress(plant, policy()))
    audit, zones = coverage_audit(plant), isolation_zones(plant)
    dead = 0
    for location in plant.locations():
        run = play_program(program, str(location), log=False)
        needed = duty(plant, zones, location.section).needed
        where = f"{location}: {opened(run)}"
        assert run.outcome.status is Status.CLEARED, where
        assert needed <= run.outcome.tripped, where
        assert not audit[location.section].gap
        if audit[location.section].dead_zone:
            dead += 1
            assert not set(roles(run).values()) <= {"main", "main, timed zone"}, where
            continue
        assert run.outcome.tripped <= covering(plant, location.section), where
        assert set(roles(run).values()) <= {"main", "main, timed zone"}, where
        assert run.outcome.t_clear_us is not None
        assert run.outcome.t_clear_us <= 100_000, where
    assert (dead > 0) == (ct is not CtPlacement.BOTH)


# --- what is decisive ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("ct", "place", "cleared_by_us", "with_bf_us", "far"),
    [
        # CT on the circuit side: the fault beside the breaker is the bus's: 87B 20, lockout 30, open 80, 52b 85, end
        # fault 125, transfer trip 140, Alder open 190. Breaker failure, by current in the CT: 30 + 150, 190, 205, 255.
        (CtPlacement.CIRCUIT_SIDE, "Birch.L1.c", 190_000, 255_000, "Alder.L1.CB"),
        # CT on the bus side: it is the line's: zone 1 at 20, open 70, 52b 75, end fault 115, the bus at Birch
        # open at 165. Breaker failure: 20 + 150, 180, 230.
        (CtPlacement.BUS_SIDE, "Birch.L1.b", 165_000, 230_000, "Birch.L2.CB"),
    ],
)
def test_end_fault_logic_is_decisive_in_the_dead_zone(
    ct: CtPlacement, place: str, cleared_by_us: int, with_bf_us: int, far: str
) -> None:
    plant = chain(ct=ct)
    run = play(plant, single_set(end_fault=True), place)
    assert run.outcome.t_clear_us == opened(run)[far] == cleared_by_us
    assert "end fault" in via(run, far)
    assert play(plant, single_set(), place).outcome.t_clear_us == with_bf_us
    # Without either, remote zones in 350: Alder's L1 on the circuit side; on the bus side Cedar's L2, at 100 km.
    neither = play(plant, single_set(breaker_failure=None), place)
    assert neither.outcome.t_clear_us == 420_000


def test_end_fault_logic_stays_out_of_a_line_fault_fed_from_the_far_end() -> None:
    # The line is open at Birch and still fed from Alder (90 km, no permission: zone 2): no current in Birch's CT.
    plant = chain(ct=CtPlacement.CIRCUIT_SIDE)
    run = play(plant, single_set(end_fault=True), "L1@0.9", "L1/channel 1: lost")
    assert opened(run) == {"Birch.L1.CB": 70_000, "Alder.L1.CB": 420_000}


def test_end_fault_logic_believes_the_auxiliary_contact() -> None:
    plant = chain(ct=CtPlacement.CIRCUIT_SIDE)
    policy = single_set(end_fault=True, breaker_failure=None)
    run = play(plant, policy, "Birch.L1.c", "Birch.L1.CB: auxiliary_wrong")
    assert run.outcome.t_clear_us == 420_000


def test_local_backup_of_a_line_is_decisive() -> None:
    # L1 at 50 km, Alder's relay dead: 67 of Alder at 20 + 400 + 50. Without it nothing else there sees L1.
    dead = "Alder/L1/relay 1: failure_to_operate"
    run = play(chain(), single_set(local_backup=LocalBackup()), "L1", dead)
    assert opened(run) == {"Birch.L1.CB": 70_000, "Alder.L1.CB": 470_000}
    assert roles(run)["Alder.L1.CB"] == "local back-up"
    assert play(chain(), single_set(), "L1", dead).outcome.status is Status.NOT_CLEARED


def test_local_backup_of_a_bus_keeps_the_lines() -> None:
    # 87B at Birch dead: looking back, L1 and L2 open at Birch at 20 + 270 + 50, their far ends stay.
    dead = "Birch/Birch.B1/relay 1: failure_to_operate"
    run = play(chain(), single_set(local_backup=LocalBackup()), "Birch.B1", dead)
    assert opened(run) == {"Birch.L1.CB": 340_000, "Birch.L2.CB": 340_000}
    assert set(roles(run).values()) == {"local back-up"}
    remote = play(chain(), single_set(), "Birch.B1", dead)
    assert opened(remote) == {"Alder.L1.CB": 420_000, "Cedar.L2.CB": 420_000}


def test_local_backup_waits_for_breaker_failure() -> None:
    # Bus fault at Birch, Birch.L1.CB stuck: Alder's end of L1 by transfer trip at 255. Local back-up, due to trip at
    # 290, has let go by 270; with it or without it the same breakers open at the same times.
    stuck = "Birch.L1.CB: does_not_open"
    with_it = play(chain(), single_set(local_backup=LocalBackup()), "Birch.B1", stuck)
    assert opened(with_it) == opened(play(chain(), single_set(), "Birch.B1", stuck))


def test_local_backup_of_a_generator_keeps_the_unit() -> None:
    # Bus fault at Alder with 87B dead: looking back, Alder.G1.CB opens at 340; the unit runs on.
    dead = "Alder/Alder.B1/relay 1: failure_to_operate"
    run = play(chain(), single_set(local_backup=LocalBackup()), "Alder.B1", dead)
    assert opened(run)["Alder.G1.CB"] == 340_000
    assert "G1.unit" not in opened(run)
    # G1 itself with 87G dead: forward, 20 + 150 + 50, breaker and unit, before L1's looks back at 290.
    run = play(chain(), single_set(local_backup=LocalBackup()), "G1", "Alder/G1/relay 1: failure_to_operate")
    assert opened(run) == {"G1.unit": 220_000, "Alder.G1.CB": 220_000}


@pytest.mark.parametrize("policy", STANDARD, ids=lambda p: p.__name__)
def test_a_generator_fault_that_the_unit_alone_feeds(policy: Callable[[], Policy]) -> None:
    # Nothing else feeds: no current in the CTs at G1's breaker, but in the unit's own neutral: 20, 30, 80.
    run = play(chain(g3=False), policy(), "G1")
    assert opened(run) == {"Alder.G1.CB": 80_000, "G1.unit": 80_000}
    assert run.outcome.t_clear_us == 80_000


def test_local_backup_of_a_generator_sees_what_the_unit_feeds_alone() -> None:
    # Between the CTs beside Alder.G1.CB, on the unit's side: 87B opens the breaker at 80 and the unit feeds on; 87G
    # is dead. Local back-up by the neutral CT: 20 + 150 + 50.
    failed = "Alder/G1/relay 1: failure_to_operate"
    run = play(chain(), single_set(local_backup=LocalBackup()), "Alder.G1.c", failed)
    assert opened(run)["Alder.G1.CB"] == 80_000
    assert opened(run)["G1.unit"] == run.outcome.t_clear_us == 220_000
    assert play(chain(), single_set(), "Alder.G1.c", failed).outcome.status is Status.NOT_CLEARED


def test_local_backup_of_a_generator_at_rest_sees_what_the_grid_feeds() -> None:
    # G1 out of service behind a closed breaker, 87G dead: nothing in the neutral, current at the breaker: 220.
    plant = replace(chain(), dispatches=(Dispatch(name="G1 out", out=frozenset({"G1.unit"})),))
    program = compile_scheme(plant, dress(plant, single_set(local_backup=LocalBackup())))
    case = bind(program, Location("G1"), LogicalSensing(), dispatch="G1 out")
    run = run_event(case, FixedAnswers(program, ("Alder/G1/relay 1: failure_to_operate",)))
    assert opened(run) == {"Alder.G1.CB": 220_000}


# --- transformers, and zones without a breaker between ---------------------------------------------


def unit_of_line_and_transformer(*, ct: bool) -> Plant:
    """G1 - Alder - L1, 50 km - T1 at Birch with no breaker between - [Birch.B1] - G2 and F.

    With ``ct`` the transformer's bushing CT bounds line and transformer.
    """
    b = PlantBuilder()
    generator(b, "G1", station="Alder")
    generator(b, "G2", station="Birch")
    feeder(b, "F", 10.0, station="Birch")
    line(b, "L1", 50.0)
    transformer(b, "T1", station="Birch", length=30.0)
    single_bus(b, "Alder", [Bay("L1", "L1"), Bay("G1", "G1")])
    single_bus(b, "Birch", [Bay("T1", "T1", at=1.0), Bay("G2", "G2"), Bay("F", "F")])
    kind = DeviceKind.CT if ct else DeviceKind.JOINT
    cores = ("1", "2", "3", "4") if ct else ()
    b.add(Device(name="Birch.T1.HV", kind=kind, a="L1", a_at=1.0, b="T1", station="Birch", cores=cores))
    return b.build()


def test_a_transformer_without_a_breaker_to_its_line_intertrips() -> None:
    # Fault in T1, seen by 87T at Birch: 20, lockout 30, Birch.T1.CB open 80; Alder over a channel: 45, 95.
    # No voltage there but the bus's: the line's relay at Birch measures that.
    plant = unit_of_line_and_transformer(ct=True)
    stepped = single_set(sets=(ProtectionSet(line=LineScheme.DISTANCE),))
    run = play(plant, stepped, "T1")
    assert opened(run) == {"Alder.L1.CB": 95_000, "Birch.T1.CB": 80_000}
    assert via(run, "Alder.L1.CB") == "Birch/T1/86 1 to Alder over channel 1"
    # Without intertrips, or with the channel lost: the middle of T1 is at 50 + 15 km, past zone 2 (60) and within
    # zone 3 (110) of Alder: 20 + 1000 + 50.
    for left in (
        play(plant, replace(stepped, intertrip=False), "T1"),
        play(plant, stepped, "T1", "Alder-Birch/channel 1: lost"),
    ):
        assert opened(left) == {"Alder.L1.CB": 1_070_000, "Birch.T1.CB": 80_000}


def test_sets_on_two_dc_domains_may_share_lockout_and_channel_of_an_intertrip() -> None:
    # Either DC domain lost leaves the other set's trip to Birch; its own wire over the channel hangs on its domain.
    plant = unit_of_line_and_transformer(ct=True)
    sets = tuple(ProtectionSet(label=x, dc=x, coil=x, line=LineScheme.DISTANCE) for x in ("1", "2"))
    policy = single_set(sets=sets, coil_dc=(("1", "1"), ("2", "2")), votes=1, lockout=False)
    for failed in ((), ("Birch/DC 1: lost",), ("Birch/DC 2: lost",)):
        assert opened(play(plant, policy, "T1", *failed)) == {"Alder.L1.CB": 85_000, "Birch.T1.CB": 70_000}
    assert opened(play(plant, replace(policy, lockout=True), "T1"))["Alder.L1.CB"] == 95_000


def test_a_line_joined_to_its_transformer_is_one_element() -> None:
    plant = unit_of_line_and_transformer(ct=False)
    for place in ("L1", "T1"):
        run = play(plant, single_set(), place)
        assert run.outcome.status is Status.CLEARED
        assert set(opened(run)) == {"Alder.L1.CB", "Birch.T1.CB"}


def test_a_unit_on_a_line_with_no_relay_at_its_end_is_intertripped() -> None:
    # G2 on the end of L1 with neither breaker nor CT: Alder trips its breaker (70) and the unit (15 later).
    b = PlantBuilder()
    generator(b, "G1", station="Alder")
    generator(b, "G2", station="Birch")
    line(b, "L1", 50.0)
    single_bus(b, "Alder", [Bay("L1", "L1"), Bay("G1", "G1")])
    b.add(Device(name="Birch.joint", kind=DeviceKind.JOINT, a="L1", a_at=1.0, b="G2", station="Birch"))
    run = play(b.build(), single_set(), "L1")
    assert opened(run) == {"Alder.L1.CB": 70_000, "G2.unit": 85_000}


@pytest.mark.parametrize("at", [0.0, 1.0])
def test_a_transformer_has_a_side_for_each_winding(at: float) -> None:
    # Bus fault at Dell with 87B dead: the transformer's timed back-up looks through it from Dale, 20 + 1200 + 50,
    # wherever along it the bays say they join.
    b = PlantBuilder()
    generator(b, "G", station="Dale")
    feeder(b, "F", 10.0, station="Dell")
    transformer(b, "T", station="Dale")
    single_bus(b, "Dale", [Bay("G", "G"), Bay("T", "T")])
    single_bus(b, "Dell", [Bay("T", "T", at=at), Bay("F", "F")])
    run = play(b.build(), single_set(), "Dell.B1", "Dell/Dell.B1/relay 1: failure_to_operate")
    assert opened(run)["Dale.T.CB"] == run.outcome.t_clear_us == 1_270_000


def test_three_ends_of_a_line() -> None:
    b = PlantBuilder()
    line(b, "T", 90.0)
    for name, at in (("Alder", 0.0), ("Birch", 0.5), ("Cedar", 1.0)):
        generator(b, f"G{name[0]}", station=name)
        single_bus(b, name, [Bay("T", "T", at=at), Bay("G", f"G{name[0]}")])
    plant = b.build()
    for policy in STANDARD:
        program = compile_scheme(plant, dress(plant, policy()))
        for location in plant.locations():
            run = play_program(program, str(location), log=False)
            assert run.outcome.status is Status.CLEARED
            assert run.outcome.tripped <= covering(plant, location.section)
            assert set(roles(run).values()) <= {"main", "main, timed zone"}


def test_two_ends_at_one_place_are_told_apart_by_station() -> None:
    # Both bays say that they join at 0: two relays all the same, each of its station.
    b = PlantBuilder()
    line(b, "L", 90.0)
    for name in ("Alder", "Birch"):
        generator(b, f"G{name[0]}", station=name)
        single_bus(b, name, [Bay("L", "L"), Bay("G", f"G{name[0]}")])
    run = play(b.build(), single_set(), "L")
    assert opened(run) == {"Alder.L.CB": 70_000, "Birch.L.CB": 70_000}


# --- what is shared -------------------------------------------------------------------------------


def components(scheme: Scheme, kind: ComponentKind) -> set[str]:
    return {c.name for c in scheme.components if c.kind is kind}


def test_channels_belong_to_pairs_of_stations_and_to_lines() -> None:
    plant = grid(breaker_and_a_half)
    scheme = dress(plant, duplicate_chain())
    assert components(scheme, ComponentKind.CHANNEL) == {
        "L1/channel 1", "L1/channel 2", "L2/channel 1", "L2/channel 2",  # line schemes
        "Alder-Dale/channel 1", "Birch-Dale/channel 1",  # transfer trips of breaker failure
        "Dale-Dell/channel 1", "Dale-Dell/channel 2",  # intertrips of the transformer, and breaker failure
    }  # fmt: skip


def test_what_the_duplicates_share() -> None:
    plant = chain()
    relay, whole = dress(plant, duplicate_relay()), dress(plant, duplicate_chain())
    for kind, one, two in (
        (ComponentKind.DC, 1, 2),
        (ComponentKind.LOCKOUT, None, None),
        (ComponentKind.RELAY, None, None),
    ):
        if one is not None and two is not None:
            assert len(components(relay, kind)) == one * 3
            assert len(components(whole, kind)) == two * 3
    assert len(components(relay, ComponentKind.RELAY)) == len(components(whole, ComponentKind.RELAY))
    alder = {c for c in components(whole, ComponentKind.CT_CORE) if c.startswith("Alder.L1.CTb")}
    assert alder == {f"Alder.L1.CTb/core {n}" for n in (1, 2, 3)}
    assert {c for c in components(relay, ComponentKind.CT_CORE) if c.startswith("Alder.L1.CTb")} == {
        "Alder.L1.CTb/core 1",
        "Alder.L1.CTb/core 3",
    }
    coil = whole.block["Alder.L1.CB/coil 2 energised"]
    assert isinstance(coil, Gate)
    assert {a.component for a in coil.unless} == {"Alder.L1.CB/coil 2", "Alder/DC 2"}


# --- variations and mistakes -------------------------------------------------------------------------


def test_breaker_times_are_the_policys() -> None:
    slow = single_set(times=PolicyTimes(breaker=BreakerTimes(interrupting=Fixed(83_333))))
    assert opened(play(chain(), slow, "L1"))["Alder.L1.CB"] == 103_333
    assert opened(play(chain(), slow, "G1"))["G1.unit"] == 113_333
    plant = chain()
    one = dress(plant, single_set(), exceptions={"Alder.L1.CB": slow})
    assert opened(play(plant, one, "L1")) == {"Alder.L1.CB": 103_333, "Birch.L1.CB": 70_000}


def test_an_exception_for_one_element() -> None:
    plant = chain()
    scheme = dress(plant, single_set(), exceptions={"L1": duplicate_chain(), "Birch.B1": Policy(sets=())})
    relays = components(scheme, ComponentKind.RELAY)
    assert {"Alder/L1/relay 2", "Birch/L1/relay 2"} <= relays
    assert "Alder/Alder.B1/relay 2" not in relays
    assert "Birch/Birch.B1/relay 1" not in relays
    run = play(plant, scheme, "L1", "Alder/L1/relay 1: failure_to_operate")
    assert opened(run)["Alder.L1.CB"] == 70_000
    assert opened(play(plant, scheme, "Birch.B1")) == {"Alder.L1.CB": 420_000, "Cedar.L2.CB": 420_000}


def test_an_exception_for_breaker_failure() -> None:
    plant = chain()
    scheme = dress(plant, single_set(), exceptions={"Alder.L1.CB": single_set(breaker_failure=None)})
    assert opened(play(plant, scheme, "L1", "Alder.L1.CB: does_not_open")) == {"Birch.L1.CB": 70_000}
    assert "Birch.L2.CB" in opened(play(plant, scheme, "L1", "Birch.L1.CB: does_not_open"))


def test_out_of_service() -> None:
    run = play(chain(), duplicate_chain(), "L1", out=frozenset({"Alder/L1/relay 1", "Birch/DC 2"}))
    assert opened(run) == {"Alder.L1.CB": 70_000, "Birch.L1.CB": 70_000}
    run = play(chain(), single_set(), "L1", out=frozenset({"Alder/L1/relay 1"}))
    assert opened(run) == {"Birch.L1.CB": 70_000}
    with pytest.raises(InputError, match=r"Alder/L1/relay 7.*relay 1"):
        dress(chain(), single_set(), out_of_service=frozenset({"Alder/L1/relay 7"}))


def test_every_mistake_at_once() -> None:
    b = PlantBuilder()
    generator(b, "G", station="Dale")
    feeder(b, "F", 10.0, station="Dale")
    line(b, "L", 40.0)
    feeder(b, "FL", 10.0, station="Dell")
    single_bus(b, "Dale", [Bay("G", "G"), Bay("F", "F"), Bay("L", "L")], cores=("1",), windings=("1",))
    single_bus(b, "Dell", [Bay("L", "L", at=1.0), Bay("FL", "FL")], windings=())
    infeed(b, "Grid", "Dell.B1", station="Dell")
    b.add(Device(name="Dell.tie", kind=DeviceKind.BREAKER, a="Dell.B1", b="FX", station="Dell"))
    feeder(b, "FX", 1.0, station="Dell")
    with pytest.raises(InputError) as caught:
        dress(b.build(), duplicate_chain(), exceptions={"Dal.B1": single_set(), "Dale.L.CB": single_set()})
    text = str(caught.value)
    for part in (
        "exception to the policy: got 'Dal.B1'", "did you mean 'Dale.B1'?",
        "87B set 2 of 'Dale.B1' at CT 'Dale.F.CTc': got \"core '2'\"",
        "breaker failure of 'Dale.L.CB' at CT 'Dale.L.CTb': got \"core '3'\"",
        "distance set 2 of 'L' at VT 'Dale.L.VT': got \"winding '2'\"",
        "distance set 1 of 'L' at 'Dell': got 'no voltage transformer'",
        "protection of 'Dell.B1': got \"no CT at breaker 'Dell.tie'\"",
    ):  # fmt: skip
        assert part in text, part


def test_one_coil_on_two_supplies_is_a_mistake() -> None:
    crossed = single_set(coil_dc=(("1", "2"),))
    with pytest.raises(InputError, match=r"coil 1 of 'Alder.L1.CB'"):
        dress(chain(), single_set(), exceptions={"L1": crossed})


@pytest.mark.parametrize(
    ("changes", "expected"),
    [
        ({"sets": (ProtectionSet(), ProtectionSet())}, "labels not used twice"),
        ({"votes": 2}, "from 1 to 1"),
        ({"sets": (ProtectionSet(coil="3"),)}, "a DC domain for each coil used"),
        ({"breaker_failure": BreakerFailurePolicy(retrip_coil="2"), "coil_dc": (("1", "1"),)}, "DC domain for each"),
    ],
)
def test_policies_that_make_no_sense(changes: dict[str, object], expected: str) -> None:
    with pytest.raises(InputError, match=expected):
        single_set(**changes)


def shuffled(plant: Plant, seed: int) -> Plant:
    rng = random.Random(seed)
    turned = [
        replace(d, a=d.b, b=d.a, a_at=d.b_at, b_at=d.a_at) if rng.random() < 0.5 else d for d in plant.devices
    ]
    parts = [list(plant.sections), turned, list(plant.sources), list(plant.vts)]
    for part in parts:
        rng.shuffle(part)  # type: ignore[arg-type]  # lists of different items
    return Plant(*map(tuple, parts))  # type: ignore[arg-type]  # in the order of the fields


@pytest.mark.parametrize("seed", range(4))
def test_the_order_of_declaration_changes_nothing(seed: int) -> None:
    plant = grid(ring, CtPlacement.CIRCUIT_SIDE)
    policy = duplicate_chain(local_backup=LocalBackup(), end_fault=True)
    scheme, other = dress(plant, policy), dress(shuffled(plant, seed), policy)
    assert other == scheme


def program_of(policy: Policy) -> Program:
    return compile_scheme(chain(), dress(chain(), policy))


@pytest.mark.parametrize("failed", [("1",), ("2",), ("3",), ("1", "2"), ("2", "3")])
def test_two_out_of_three(failed: tuple[str, ...]) -> None:
    # Any one relay may fail; two may not: then Alder does not trip L1.
    one, two = duplicate_chain().sets
    policy = duplicate_chain(sets=(one, two, replace(two, label="3", core="4", line=LineScheme.DISTANCE)), votes=2)
    names = [f"Alder/L1/relay {n}: failure_to_operate" for n in failed]
    run = play_program(program_of(policy), "L1", *names)
    expected = {"Birch.L1.CB": 70_000} if len(failed) > 1 else {"Alder.L1.CB": 70_000, "Birch.L1.CB": 70_000}
    assert opened(run) == expected


def test_a_name_is_no_policy() -> None:
    plant = unit_of_line_and_transformer(ct=True)
    with pytest.raises(InputError, match="a Policy, such as"):
        dress(plant, "duplicate_chain")  # type: ignore[arg-type]  # a slip of a user's
    with pytest.raises(InputError, match="policy for 'T1'"):
        dress(plant, single_set(), exceptions={"T1": "single_set"})  # type: ignore[dict-item]  # likewise
