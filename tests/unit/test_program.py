"""Compiling a scheme, and cutting it down to a case."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import pytest

from schemesim.engine.case import bind
from schemesim.engine.program import Kind, compile_scheme
from schemesim.engine.sensing import LogicalSensing, NoFault
from schemesim.errors import InputError
from schemesim.plant.model import Dispatch, Location, Plant, Source
from schemesim.plant.terminals import Terminal
from schemesim.scheme.conditions import InZone, NoFaultTrip, OutOfZone, Reach, Undervoltage
from schemesim.scheme.model import (
    Ask,
    Block,
    CommonCause,
    Component,
    ComponentKind,
    FailureMode,
    Latch,
    Not,
    Role,
    Scheme,
)
from tests.rules.hand import (
    FAILS,
    LOST,
    at,
    breaker,
    case,
    fails,
    gate,
    openings,
    parallel,
    play,
    radial,
    relay,
    sense,
    timer,
    times,
    trip,
)


def simple(*more: Block) -> list[Block]:
    """F1 tripped by its current."""
    return [sense("oc", "F1.CT"), trip("t", "oc"), gate("coil", "t"), breaker("F1.CB", "coil"), *more]


# --- the program ---------------------------------------------------------------------------


def test_state_blocks_come_first_by_name_then_gates_by_level() -> None:
    blocks = (gate("a", "z"), gate("b", "a"), gate("z", "oc"), sense("oc", "F1.CT"))
    program = compile_scheme(radial(), Scheme((), blocks))
    assert [b.name for b in program.blocks] == ["oc", "z", "a", "b"]
    assert program.kind == (Kind.SENSE, Kind.GATE, Kind.GATE, Kind.GATE)
    assert program.inputs == ((), ((0, False),), ((1, False),), ((2, False),))
    assert program.consumers == ((1,), (2,), (3,), ())


def test_questions_stand_common_causes_first_then_components_and_modes_by_name() -> None:
    over = FailureMode.UNWANTED_OPERATION
    scheme = Scheme(
        (
            Component("R2", ComponentKind.RELAY, ((over, 0.1), (FAILS, 0.2))),
            relay("R1"),
            Component("DC", ComponentKind.DC, ((LOST, 0.0),)),
            relay("R9", 1),
        ),
        tuple(simple()),
        (
            CommonCause("y", (Ask("R1", FAILS),), 0.0),
            CommonCause("x", (Ask("R1", FAILS), Ask("R2", over)), Fraction(1, 9)),
        ),
    )
    program = compile_scheme(radial(), scheme)
    names = ["common cause x", f"R1: {FAILS}", f"R2: {FAILS}", f"R2: {over}"]
    assert [q.name for q in program.questions] == names
    assert program.siblings == ((), (), (3,), (2,))
    assert program.asks == {
        Ask("R1", FAILS): (0, 1),
        Ask("R2", over): (0, 3),
        Ask("R2", FAILS): (2,),
    }
    assert program.constant == {Ask("R9", FAILS): True}


def test_an_item_out_of_service_is_certain_in_every_mode_and_leaves_common_causes() -> None:
    scheme = Scheme(
        (relay("R1"), relay("R2")),
        tuple(simple()),
        (CommonCause("x", (Ask("R1", FAILS), Ask("R2", FAILS)), 0.1),),
        frozenset({"R1"}),
    )
    program = compile_scheme(radial(), scheme)
    assert program.constant == {Ask("R1", m): m is FAILS for m in FailureMode}
    assert program.asks == {Ask("R2", FAILS): (0, 1)}


def test_asking_order_is_nearest_the_breaker_then_role_then_name() -> None:
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        gate("deep", "oc"),
        trip("b", "deep", role=Role.MAIN),
        trip("a", "oc", role=Role.LOCAL),
        gate("coil", "a", "b"),
        breaker("F1.CB", "coil"),
    ]
    program = compile_scheme(radial(), Scheme((), tuple(blocks)))
    assert sorted(program.index, key=lambda n: program.order[program.index[n]]) == [
        "F1.CB",
        "coil",
        "b",
        "a",
        "deep",
        "oc",
    ]


def test_every_mistake_about_breakers_is_told_at_once() -> None:
    blocks = (
        breaker("F1.CB", "F2.CB"),
        breaker("F2.CB", "go", close="F1.CB"),
        breaker("nowhere", "go"),
        breaker("G", "go"),
        gate("go", "F1.CB"),
    )
    with pytest.raises(InputError) as caught:
        compile_scheme(radial(), Scheme((), blocks))
    found = {(p.subject, p.value) for p in caught.value.problems}
    assert found == {
        ("coil of breaker 'F1.CB'", "F2.CB"),
        ("coil of breaker 'F2.CB'", "F1.CB"),
        ("breaker block 'nowhere'", "nowhere"),
        ("breaker block 'G'", "G"),  # a source that has no trip of its own
    }


def test_an_element_that_looks_at_nothing_there_is_refused() -> None:
    blocks = (
        sense("a", "F1.CTx"),
        sense("b", InZone(frozenset({"B", "Q"}), ("F1.CT",))),
        sense("c", Reach((Terminal("F1.CT", "F2"), Terminal("Z.CT", "F2")), 1.0)),
        sense("d", Undervoltage("Q", 1.0)),
        sense("e", OutOfZone(frozenset({"B"}), "Z.CT")),
    )
    with pytest.raises(InputError) as caught:
        compile_scheme(radial(), Scheme((), blocks))
    assert [(p.subject, p.value) for p in caught.value.problems] == [
        ("device in block 'a'", "F1.CTx"),
        ("section in block 'b'", "Q"),
        ("inner side of 'F1.CT' in block 'c'", "F2"),
        ("device in block 'c'", "Z.CT"),
        ("section in block 'd'", "Q"),
        ("device in block 'e'", "Z.CT"),
    ]


def test_what_may_be_true_anywhere_or_at_rest_is_free_of_the_event() -> None:
    near = sense("z", Reach((Terminal("F1.CT", "F1"),), 1.0))
    blocks = simple(
        near,
        gate("needs z", "z"),
        gate("not z", Not("z")),
        gate("both", "z", "not z", k=2),
        timer("closed", "F2.CB"),
        Latch(name="unset", set="z", reset="not z"),
        gate("never"),
        breaker("F2.CB", "never"),
    )
    program = compile_scheme(radial(), Scheme((), tuple(blocks)))
    assert {program.blocks[i].name for i in program.free} == {"oc", "t", "coil", "F1.CB", "not z", "closed"}


# --- the case ------------------------------------------------------------------------------


def test_a_case_keeps_its_neighbourhood_only() -> None:
    """Two line ends with zones of 80 km each; a fault at 10 km of L1 concerns the a end of L1 alone."""
    blocks: list[Block] = []
    for x in ("L1a", "L1b", "L2a", "L2b"):
        blocks += [
            sense(f"{x}.z", Reach((Terminal(f"{x}.CT", x[:2]),), 80.0)),
            trip(f"{x}.t", f"{x}.z"),
            gate(f"{x}.coil", f"{x}.t"),
            breaker(f"{x}.CB", f"{x}.coil"),
        ]
    bound = case(parallel(), blocks, at=Location("L1", 0.1))
    assert {n for n in bound.names if n.endswith("CB")} == {"L1a.CB", "L2a.CB"}  # L2a: 10 km by S, though behind it
    assert openings(play(bound)) == {"L1a.CB": (20, 70)}


def test_a_signal_that_cannot_change_is_folded_into_the_gate() -> None:
    """2 of: oc, 52a of F2.CB (stays closed), not z (stays true), z: two are true for good, so k is 0."""
    near = sense("z", InZone(frozenset({"F2"}), ("F2.CT",)))
    bound = case(
        radial(),
        [
            sense("oc", "F1.CT"),
            near,
            gate("never"),
            breaker("F2.CB", "never"),
            gate("g", "oc", "F2.CB", Not("z"), k=3),
            gate("coil", "g"),
            breaker("F1.CB", "coil"),
        ],
        at="F1",
    )
    g = bound.index["g"]
    assert (bound.inputs[g], bound.k[g]) == (((bound.index["oc"], False),), 1)
    assert openings(play(bound)) == {"F1.CB": (20, 70)}


def test_a_gate_true_for_good_stays_a_signal_of_the_case() -> None:
    """not z is true at rest; and z for this fault cannot change that: the trip needs oc alone."""
    near = sense("z", InZone(frozenset({"F2"}), ("F2.CT",)))
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        near,
        gate("healthy", Not("z")),
        gate("healthy2", "healthy", "F2.CB", k=2),
        timer("long", "healthy2", 500),
        trip("t", "oc", "long", k=2),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
        gate("never"),
        breaker("F2.CB", "never"),
    ]
    assert openings(play(case(radial(), blocks))) == {"F1.CB": (20, 70)}


@pytest.mark.parametrize(
    ("set_", "reset", "expected"),
    [
        (Not("z"), "oc", {"IN.CB": (30, 80)}),  # set for good, reset by oc from 20: off from 20
        ("oc", "z", {"F1.CB": (20, 70)}),  # reset that cannot come
        ("oc", Not("z"), {"IN.CB": (30, 80)}),  # reset for good
        ("z", "oc", {"IN.CB": (30, 80)}),  # set that cannot come
        (Not("F2.CB"), "oc", {"IN.CB": (30, 80)}),  # nor this one: nothing trips F2.CB
        ("oc", Not("F2.CB"), {"F1.CB": (20, 70)}),
        ("oc", "F2.CB", {"IN.CB": (30, 80)}),
        (Not("z"), Not("z"), {"IN.CB": (30, 80)}),  # both for good: reset wins
    ],
)
def test_a_latch_keeps_its_places_where_an_input_cannot_change(
    set_: str | Not, reset: str | Not, expected: dict[str, tuple[float, float]]
) -> None:
    """F1.CB is tripped at 20 or later by the latch with oc, IN.CB at 30 by oc without it."""
    near = sense("z", InZone(frozenset({"F2"}), ("F2.CT",)))
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        near,
        gate("never"),
        breaker("F2.CB", "never"),
        timer("later", "oc", 10),
        Latch(name="l", set=set_, reset=reset),
        timer("steady", "l", 0, 0),
        trip("t", "steady", "oc", k=2),
        trip("t9", "later", Not("steady"), k=2),
        gate("coil", "t"),
        gate("IN.coil", "t9"),
        breaker("F1.CB", "coil"),
        breaker("IN.CB", "IN.coil"),
    ]
    run = play(case(radial(), blocks))
    if set_ == Not("z") and reset == "oc":  # the latch is still on in the pass in which oc picks up
        assert times(run, "l", "is reset") == [20]
        assert openings(run) == {"F1.CB": (20, 70), "IN.CB": (30, 80)}
    else:
        assert openings(run) == expected


def test_an_observed_output_counts_though_only_current_detectors_feed_it() -> None:
    bound = case(radial(), [sense("oc", "F1.CT"), gate("seen", "oc")], observe={"seen"})
    assert play(bound).outcome.operated == (("seen", 20_000),)


def test_a_source_that_is_switched_off_has_nothing_to_trip() -> None:
    plant = radial()
    sources = (*plant.sources, Source(name="G1", section="F2", trips=True))
    plant = Plant(plant.sections, plant.devices, sources, dispatches=(Dispatch(name="night", out=frozenset({"G1"})),))
    blocks = simple(gate("G1.coil", "t"), breaker("G1", "G1.coil"))
    program = compile_scheme(plant, Scheme((), tuple(blocks)))
    day = bind(program, Location("F1"), LogicalSensing())
    night = bind(program, Location("F1"), LogicalSensing(), dispatch="night")
    assert openings(play(day)) == {"F1.CB": (20, 70), "G1": (20, 70)}
    assert openings(play(night)) == {"F1.CB": (20, 70)}


def test_a_reach_of_zero_still_sees_its_own_place() -> None:
    here = sense("z", Reach((Terminal("F1.CT", "F1"),), 0.0))
    bound = case(radial(), [here, trip("t", "z"), gate("coil", "t"), breaker("F1.CB", "coil")])
    assert openings(play(bound)) == {"F1.CB": (20, 70)}


def test_binding_refuses_names_that_are_not_there() -> None:
    program = compile_scheme(radial(), Scheme((), tuple(simple())))
    with pytest.raises(InputError, match="did you mean 'F1'"):
        bind(program, Location("F1x"), LogicalSensing())
    with pytest.raises(InputError, match="observed output"):
        bind(program, Location("F1"), LogicalSensing(), observe={"oc"})
    with pytest.raises(InputError, match="component that trips"):
        bind(program, NoFault("R1"), LogicalSensing())
    with pytest.raises(InputError, match="dispatch"):
        bind(program, Location("F1"), LogicalSensing(), dispatch="night")


def test_no_fault_at_all_load_current_counts_and_nothing_is_needed() -> None:
    """R1 trips by itself: F1 (10 MW of load) opens, and the load current was there to see."""
    blocks: list[Block] = [
        sense("self", NoFaultTrip("R1"), 0),
        sense("load", "F1.CT", 0),
        trip("t", "self", "load", k=2),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay("R1")], at=NoFault("R1"))
    run = play(bound)
    assert openings(run) == {"F1.CB": (0, 50)}
    assert str(run.outcome.status) == "no fault"
    assert bound.duty.needed == bound.duty.intended == frozenset()
    assert at(run, "load", "drops out") == 60


# --- before the event ----------------------------------------------------------------------


def test_what_reads_true_for_long_has_operated_before_the_event() -> None:
    """Two timers in a row, each on an inverted input: at rest the first is on, the second off, whatever the names."""
    for first, second in (("a", "b"), ("b", "a")):
        blocks = simple(
            timer(first, Not("oc"), 300, 0),
            timer(second, Not(first), 5, 0),
            trip("t9", second),
            gate("IN.coil", "t9"),
            breaker("IN.CB", "IN.coil"),
        )
        run = play(case(radial(), blocks))
        assert times(run, first, "operates") == [380], "off at 20 with oc, on 300 after oc drops out at 80"
        assert at(run, second, "operates") == 25
        assert openings(run) == {"F1.CB": (20, 70), "IN.CB": (25, 75)}


def test_a_trip_at_rest_counts_in_its_role() -> None:
    """A mistake in a scheme that trips with nothing wrong: it shows at once, as what it is."""
    blocks: list[Block] = [trip("t", "F1.CB", role=Role.LOCAL), gate("coil", "t"), breaker("F1.CB", "coil")]
    run = play(case(radial(), blocks))
    assert openings(run) == {"F1.CB": (0, 50)}
    assert run.outcome.openings[0].role is Role.LOCAL


def test_a_latch_set_at_rest_is_sealed_in_and_reset_wins() -> None:
    blocks = simple(
        Latch(name="on", set=Not("oc")),
        Latch(name="off", set=Not("oc"), reset="F1.CB"),
        trip("t9", "oc", "on", Not("off"), k=3),
        gate("IN.coil", "t9"),
        breaker("IN.CB", "IN.coil"),
    )
    assert openings(play(case(radial(), blocks))) == {"F1.CB": (20, 70), "IN.CB": (20, 70)}


def test_a_guard_with_a_failure_asks_before_the_event_only_where_it_matters() -> None:
    """The guard drives IN.CB; in a case in which it can do no more it is not asked."""
    guard = timer("guard", "healthy", 300, 100)
    healthy = replace(gate("healthy", Not("oc")), unless=fails("R1"))
    blocks = simple(healthy, guard)
    assert play(case(radial(), blocks, [relay("R1")])).asked == ()
    blocks += [trip("t9", "oc", Not("guard"), k=2), gate("IN.coil", "t9"), breaker("IN.CB", "IN.coil")]
    bound = case(radial(), blocks, [relay("R1")])
    well, failed = play(bound), play(bound, f"R1: {FAILS}")
    assert [r.t_us for r in well.log if r.kind == "question"] == [0]
    assert openings(well) == {"F1.CB": (20, 70)}
    assert openings(failed) == {"F1.CB": (20, 70), "IN.CB": (20, 70)}
