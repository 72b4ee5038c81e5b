"""The standard functions, each on its own: inputs set by hand, the output read where it opens a breaker.

``play`` wires the output to Alder.G1.CB of the chain and gives the instant at which it was tripped (in ms), or None.
"""

from __future__ import annotations

from collections.abc import Generator, Iterable
from itertools import product
from typing import Any

import pytest
import simpy

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import bind
from schemesim.engine.event import EventRun, run_event
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.terminals import Terminal
from schemesim.scheme import functions as fn
from schemesim.scheme.build import Host, SchemeBuilder
from schemesim.scheme.conditions import External
from schemesim.scheme.delays import Fixed, fixed_ms
from schemesim.scheme.failure_data import FailureData, Override
from schemesim.scheme.model import (
    Ask,
    ComponentKind,
    Contact,
    FailureMode,
    Gate,
    Not,
    Role,
    Sense,
    Timer,
)
from tests.rules.small import at, chain

MARK = Contact("50", Role.MAIN, beyond=Role.MAIN)
TARGET = "Alder.G1.CB"
NO_RATES = FailureData(no_fault_per_yr={})
NONE = FailureData(modes={}, no_fault_per_yr={})
TIMES = fn.ElementTimes()


class Bench:
    """A builder with a relay on a DC domain, and inputs set by hand."""

    def __init__(self, data: FailureData = NO_RATES) -> None:
        self.b = SchemeBuilder(chain(), data)
        self.host: Host = self.b.host("relay", "Alder", "1", "1")

    def input(self, name: str) -> str:
        return self.b.add(Sense(name=name, condition=External(), operate=Fixed(0), reset=Fixed(0)))

    def play(self, output: str, steps: Iterable[tuple[float, str, bool]], *yes: str) -> float | None:
        """When the output trips: ``steps`` are (ms, input, state)."""
        self.b.add(Gate(name="out", inputs=(output,), contact=MARK))
        self.b.trip("out", TARGET, "1", "1", initiates=False)
        program = compile_scheme(self.b.plant, self.b.build())
        case = bind(program, at("G3"), LogicalSensing())
        known = {name for name in case.names if name in self.b.blocks}

        def script(run: EventRun) -> Generator[simpy.Event, Any, Any]:
            for when_ms, name, state in sorted(steps):
                yield run.env.timeout(round(when_ms * 1000) - int(run.env.now))
                if name in known:
                    run.force(name, state)

        run = run_event(case, FixedAnswers(program, yes), processes=(script,))
        times = [o.t_trip_us / 1000 for o in run.outcome.openings if o.breaker == TARGET]
        return times[0] if times else None


def test_a_delay_of_nothing_is_no_block() -> None:
    bench = Bench()
    assert fn.delayed(bench.b, "t", bench.input("x"), Fixed(0)) == "x"
    assert "t" not in bench.b.blocks
    assert fn.delayed(bench.b, "t", Not("x"), fixed_ms(3)) == "t"
    assert bench.b.blocks["t"] == Timer(name="t", input=Not("x"), pick_up=fixed_ms(3), drop_out=Fixed(0))


def test_one_name_for_two_blocks_is_refused() -> None:
    bench = Bench()
    fn.delayed(bench.b, "t", bench.input("x"), fixed_ms(3))
    fn.delayed(bench.b, "t", bench.input("x"), fixed_ms(3))
    with pytest.raises(InputError, match="block name: got 't'"):
        fn.delayed(bench.b, "t", "x", fixed_ms(4))


@pytest.mark.parametrize(
    ("yes", "tripped_ms"),
    [
        ((), 10),
        (("relay: failure_to_operate",), None),
        (("Alder/DC 1: lost",), None),
        (("core: open",), None),
        (("relay: delayed_operation",), 210),
    ],
)
def test_a_trip_output(yes: tuple[str, ...], tripped_ms: float | None) -> None:
    bench = Bench()
    core = Ask(bench.b.component("core", ComponentKind.CT_CORE), FailureMode.OPEN)
    out = fn.trip_output(bench.b, "50", (bench.input("x"),), bench.host, MARK, TIMES, unless=(core,))
    assert bench.play(out, [(10, "x", True)], *yes) == tripped_ms


def test_a_delayed_operation_outlasted_by_nothing_is_none() -> None:
    bench = Bench()
    out = fn.trip_output(bench.b, "50", (bench.input("x"),), bench.host, MARK, TIMES)
    steps = [(10, "x", True), (209.999, "x", False)]
    assert bench.play(out, steps, "relay: delayed_operation") is None


@pytest.mark.parametrize(
    ("data", "names"),
    [
        (NONE, {"50"}),
        (NO_RATES, {"50", "50: in time", "50: late", "50: late by"}),
        (FailureData(modes={}), {"50", "50: in time", "relay: trips with no fault"}),
        (FailureData(), {"50", "50: in time", "50: late", "50: late by", "relay: trips with no fault"}),
    ],
)
def test_a_trip_output_has_no_block_it_can_do_without(data: FailureData, names: set[str]) -> None:
    bench = Bench(data)
    fn.trip_output(bench.b, "50", (bench.input("x"),), bench.host, MARK, TIMES)
    assert set(bench.b.blocks) - {"x"} == names


@pytest.mark.parametrize("on", list(product((False, True), repeat=3)))
def test_two_out_of_three(on: tuple[bool, ...]) -> None:
    bench = Bench()
    out = fn.vote(bench.b, "2oo3", [bench.input(name) for name in "abc"], 2)
    steps = [(5.0 * n, name, True) for n, (name, state) in enumerate(zip("abc", on, strict=True), 1) if state]
    expected = sorted(when for when, _, _ in steps)[1] if sum(on) >= 2 else None
    assert bench.play(out, steps) == expected


def test_a_lockout_needs_its_time_and_keeps() -> None:
    for long_ms, tripped_ms in ((10, 15), (9.999, None)):
        bench = Bench()
        unit = bench.b.component("86", ComponentKind.LOCKOUT)
        out = fn.lockout(bench.b, "86", bench.input("x"), unit, bench.b.dc("Alder", "1"), fixed_ms(10))
        assert bench.play(out, [(5, "x", True), (5 + long_ms, "x", False)]) == tripped_ms


# --- channels -------------------------------------------------------------------------------


def channel(bench: Bench, false_when: str = "") -> fn.ChannelPath:
    unit = bench.b.component("channel", ComponentKind.CHANNEL)
    dcs = (bench.b.dc("Alder", "1"), bench.b.dc("Birch", "1"))
    return fn.ChannelPath(unit, *dcs, fixed_ms(15), fixed_ms(100), false_when)


@pytest.mark.parametrize(
    ("yes", "tripped_ms"),
    [
        ((), 25),
        (("channel: lost",), None),
        (("channel: late",), 125),
        (("Birch/DC 1: lost",), None),
        (("sender: failure_to_operate",), None),
        (("channel: false_receipt",), 4),
    ],
)
def test_a_channel(yes: tuple[str, ...], tripped_ms: float | None) -> None:
    # Sent from 10 to 40; something that may be taken for it is there from 4 on. What is late arrives whole.
    bench = Bench()
    bench.b.relay("sender", "Birch")
    path = channel(bench, bench.input("noise"))
    asks = (Ask("sender", FailureMode.FAILURE_TO_OPERATE),)
    out = fn.received(bench.b, "got", [(bench.input("x"), asks)], path)
    steps = [(4, "noise", True), (10, "x", True), (40, "x", False)]
    assert bench.play(out, steps, *yes) == tripped_ms


def test_a_channel_that_two_things_are_sent_over() -> None:
    bench = Bench()
    bench.b.relay("sender", "Birch")
    asks = (Ask("sender", FailureMode.FAILURE_TO_OPERATE),)
    out = fn.received(bench.b, "got", [(bench.input("x"), asks), (bench.input("y"), ())], channel(bench))
    steps = [(10, "x", True), (40, "y", True)]
    assert bench.play(out, steps, "sender: failure_to_operate") == 55


@pytest.mark.parametrize("on", list(product((False, True), repeat=3)))
def test_permissive_needs_the_element_and_every_receipt(on: tuple[bool, ...]) -> None:
    bench = Bench()
    element, *receipts = (bench.input(name) for name in "abc")
    out = fn.permissive(bench.b, "85", element, receipts)
    steps = [(10, name, True) for name, state in zip("abc", on, strict=True) if state]
    assert bench.play(out, steps) == (10 if all(on) else None)


@pytest.mark.parametrize(("block_ms", "tripped_ms"), [(None, 50), (49.999, None), (50, 50)])
def test_blocking_by_a_block_in_time(block_ms: float | None, tripped_ms: float | None) -> None:
    # The element from 20, coordinating delay 30: due at 50. A block that is there by then stops it; one
    # that comes at that very instant is too late (R3).
    bench = Bench()
    waited = fn.delayed(bench.b, "waited", bench.input("x"), fixed_ms(30))
    out = fn.blocking(bench.b, "85", [waited], bench.input("block"))
    steps = [(20, "x", True), *([] if block_ms is None else [(block_ms, "block", True)])]
    assert bench.play(out, steps) == tripped_ms


@pytest.mark.parametrize(
    ("forward", "reverse", "tripped_ms"), [(False, False, 10), (True, False, None), (False, True, None)]
)
def test_echo_of_what_is_seen_in_no_direction(forward: bool, reverse: bool, tripped_ms: float | None) -> None:
    bench = Bench()
    got, ahead, behind = (bench.input(name) for name in ("got", "ahead", "behind"))
    out = fn.echo(bench.b, "echo", got, ahead, behind, fixed_ms(150))
    steps = [(5, "ahead", forward), (5, "behind", reverse), (10, "got", True)]
    assert bench.play(out, steps) == tripped_ms


def test_an_echo_is_given_once() -> None:
    # The first lasts its 150 ms from 10; a receipt that comes again at 200 is not echoed, so nothing outlasts
    # the timer of 160 ms behind it.
    bench = Bench()
    got, ahead, behind = (bench.input(name) for name in ("got", "ahead", "behind"))
    out = fn.echo(bench.b, "echo", got, ahead, behind, fixed_ms(150))
    again = fn.delayed(bench.b, "long", out, fixed_ms(150.001))
    assert isinstance(again, str)
    assert bench.play(again, [(10, "got", True)]) is None


# --- measuring elements ------------------------------------------------------------------------


def test_a_differential_of_sound_parts_is_one_sense_for_each_ct() -> None:
    bench = Bench(NONE)
    cores = [(Terminal(ct, "Birch.B1"), bench.b.core(ct, "1", "87B")) for ct in ("Birch.L1.CTc", "Birch.L2.CTc")]
    fn.differential(bench.b, "87B", frozenset({"Birch.B1"}), cores, frozenset({"L1"}), bench.host, TIMES)
    assert set(bench.b.blocks) == {"87B sees Birch.L1.CTc", "87B sees Birch.L2.CTc", "87B operated"}


def test_a_distance_zone_measures_what_may_fail_only() -> None:
    terminals = (Terminal("Alder.L1.CTb", "Alder.L1.b"),)
    for data, over_reach, extra in (
        (NONE, 1.3, set()),
        (NO_RATES, 1.0, set()),
        (NO_RATES, 1.3, {"21, beyond its reach"}),
    ):
        bench = Bench(data)
        winding = bench.b.winding("Alder", "L1", "1", "21")
        needs = fn.DistanceNeeds(terminals, (bench.b.core("Alder.L1.CTb", "1", "21"),), winding)
        zone = fn.distance_zone(bench.b, "21", 80.0, needs, bench.host, TIMES, over_reach=over_reach)
        assert set(bench.b.blocks) == {"21", *extra}
        assert winding in needs.unless
        fn.zone_operated(bench.b, zone, fixed_ms(350))
        assert "21 timer" in bench.b.blocks


# --- failure data ----------------------------------------------------------------------------------


def test_overrides_by_name_and_pattern_the_later_wins() -> None:
    mode = FailureMode.FAILURE_TO_OPERATE
    data = FailureData(
        overrides=(
            Override("Alder/*", {mode: 0.1, FailureMode.LOST: 0.2}, no_fault_per_yr=3.0),
            Override("Alder/L?/relay 1", {mode: 0.3}),
            Override("Alder/L2/relay 1", {FailureMode.UNWANTED_OPERATION: 0}),
        )
    )
    one = data.component("Alder/L1/relay 1", ComponentKind.RELAY)
    assert (one.probability(mode), one.no_fault_per_yr) == (0.3, 3.0)
    assert one.probability(FailureMode.UNWANTED_OPERATION) == 1e-2
    assert FailureMode.LOST not in dict(one.modes)
    two = data.component("Alder/L2/relay 1", ComponentKind.RELAY)
    assert FailureMode.UNWANTED_OPERATION not in dict(two.modes)
    assert data.component("Alder/L12/relay 1", ComponentKind.RELAY).probability(mode) == 0.1
    assert data.component("Alder/DC 1", ComponentKind.DC).probability(FailureMode.LOST) == 0.2
    assert data.component("Birch/DC 1", ComponentKind.DC).probability(FailureMode.LOST) == 5e-5


def test_a_beta_factor_splits_what_a_relay_has() -> None:
    mode = FailureMode.FAILURE_TO_OPERATE
    data = FailureData(relay_beta=0.1, overrides=(Override("b", {mode: 4e-3}),))
    members = [data.component(name, ComponentKind.RELAY) for name in ("a", "b")]
    changed, (cause,) = data.share({"g": members, "alone": [data.component("c", ComponentKind.RELAY)]})
    assert cause.probability == pytest.approx(0.1 * 1e-3, rel=1e-15)
    assert set(cause.members) == {Ask("a", mode), Ask("b", mode)}
    assert set(changed) == {"a", "b"}
    for c in members:  # own and shared part make up the whole, and other modes are as they were
        assert changed[c.name].probability(mode) + cause.probability == pytest.approx(c.probability(mode), rel=1e-15)
        late = FailureMode.DELAYED_OPERATION
        assert changed[c.name].probability(late) == c.probability(late)


@pytest.mark.parametrize("beta", [-0.1, 1.1, float("nan")])
def test_a_beta_factor_is_a_share(beta: float) -> None:
    with pytest.raises(InputError, match="relay_beta"):
        FailureData(relay_beta=beta)


def test_probabilities_out_of_bounds_are_refused_when_built() -> None:
    data = FailureData(overrides=(Override("relay", {FailureMode.FAILURE_TO_OPERATE: 1.5}),))
    bench = Bench(data)
    with pytest.raises(InputError, match="a number from 0 to 1"):
        bench.b.build()
