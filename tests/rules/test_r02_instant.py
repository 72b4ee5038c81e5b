"""R2: an instant is a sequence of passes; gates form no loop; an instant that does not settle is named."""

from __future__ import annotations

import pytest

from schemesim.engine.program import compile_scheme
from schemesim.engine.rules import MAX_PASSES
from schemesim.errors import InputError, RunError
from schemesim.scheme.model import Block, Gate, Latch, Not, Scheme
from tests.rules.hand import at, breaker, case, gate, openings, play, radial, sense, timer, times, trip


def test_r02_a_chain_of_zero_delays_takes_one_pass_for_each_block() -> None:
    """All at t = 0, in passes.

    pass 0: the fault begins; the condition of oc holds.
    pass 1: oc picks up; a starts.      pass 2: a operates; b starts.
    pass 3: b operates; the latch is set going.
    pass 4: the latch seals in; t and the coil follow at once; F1.CB is committed.
    """
    bound = case(
        radial(),
        [
            sense("oc", "F1.CT", 0),
            timer("a", "oc"),
            timer("b", "a"),
            Latch(name="l", set="b"),
            trip("t", "l"),
            gate("coil", "t"),
            breaker("F1.CB", "coil"),
        ],
    )
    run = play(bound)
    passes = {r.subject: (r.t_us, r.pass_no) for r in run.log if r.t_us == 0}
    assert passes == {
        "F1": (0, 0),
        "oc": (0, 1),
        "a": (0, 2),
        "b": (0, 3),
        "l": (0, 4),
        "t": (0, 4),
        "coil": (0, 4),
        "F1.CB": (0, 4),
    }
    assert openings(run) == {"F1.CB": (0, 50)}


def test_r02_expiry_topology_sensing_logic_starts_in_one_pass() -> None:
    """F1.CB opens at 70; in that same pass the fault is cleared and oc starts to reset (10): 80."""
    bound = case(radial(), [sense("oc", "F1.CT"), trip("t", "oc"), gate("coil", "t"), breaker("F1.CB", "coil")])
    run = play(bound)
    at_70 = [(r.pass_no, r.subject, r.what) for r in run.log if r.t_us == 70_000]
    assert at_70 == [(0, "F1.CB", "opens"), (0, "F1", "cleared"), (0, "oc", "starts to reset")]
    assert at(run, "oc", "drops out") == 80


def test_r02_an_instant_may_hold_many_passes_short_of_the_bound() -> None:
    count = MAX_PASSES - 10
    chain = [timer(f"t{n}", f"t{n - 1}" if n else "oc") for n in range(count)]
    blocks: list[Block] = [sense("oc", "F1.CT", 0), *chain, gate("coil", f"t{count - 1}"), breaker("F1.CB", "coil")]
    run = play(case(radial(), blocks))
    assert openings(run) == {"F1.CB": (0, 50)}


def test_r02_a_loop_of_gates_is_refused_and_named() -> None:
    blocks = (
        sense("oc", "F1.CT"),
        Gate(name="alpha", inputs=("oc", "gamma")),
        Gate(name="beta", inputs=("alpha",)),
        Gate(name="gamma", inputs=(Not("beta"),)),
        gate("coil", "alpha"),
        breaker("F1.CB", "coil"),
    )
    with pytest.raises(InputError) as caught:
        compile_scheme(radial(), Scheme((), blocks))
    (problem,) = caught.value.problems
    text = str(problem.value)
    assert all(name in text for name in ("alpha", "beta", "gamma"))
    assert "coil" not in text


def test_r02_a_gate_that_reads_itself_is_refused() -> None:
    with pytest.raises(InputError, match="selfish"):
        compile_scheme(radial(), Scheme((), (Gate(name="selfish", inputs=(Not("selfish"),)),)))


def test_r02_a_loop_through_a_latch_that_never_settles_is_an_error_that_names_it() -> None:
    """Set by oc and reset by its own output: in pass 1 set, 2 reset, 3 set ... at 20 ms."""
    bound = case(
        radial(),
        [
            sense("oc", "F1.CT"),
            Latch(name="flutter", set="oc", reset="flutter"),
            trip("t", "flutter", Not("oc"), k=2),
            gate("coil", "t"),
            breaker("F1.CB", "coil"),
        ],
    )
    with pytest.raises(RunError, match=r"20000 us.*flutter"):
        play(bound)


def test_r02_a_timer_loop_of_zero_delay_is_an_error_that_names_it() -> None:
    bound = case(
        radial(),
        [
            sense("oc", "F1.CT"),
            gate("start", "oc", Not("buzzer"), k=2),
            timer("buzzer", "start"),
            trip("t", "buzzer", Not("oc"), k=2),
            gate("coil", "t"),
            breaker("F1.CB", "coil"),
        ],
    )
    with pytest.raises(RunError, match=r"buzzer"):
        play(bound)


def test_r02_a_loop_with_a_delay_is_no_error() -> None:
    """A flasher of 5 ms on and off from 20 ms: on at 25, off at 30, ... and F1.CB opens at 25 + 50."""
    bound = case(
        radial(),
        [
            sense("oc", "F1.CT"),
            gate("start", "oc", Not("flasher"), k=2),
            timer("flasher", "start", 5, 5),
            trip("t", "flasher"),
            gate("coil", "t"),
            breaker("F1.CB", "coil"),
        ],
    )
    run = play(bound)
    assert openings(run) == {"F1.CB": (25, 75)}
    assert times(run, "flasher", "operates")[:3] == [25, 35, 45]
    assert times(run, "flasher", "resets")[:3] == [30, 40, 50]
    assert at(run, "oc", "drops out") == 85
