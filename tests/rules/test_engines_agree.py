"""The batch engine gives what the event engine gives, whatever the program, its answers and its delays.

A few hundred programs are compared here; ``python tests/rules/agree.py 10000`` or
``pytest tests/rules/test_engines_agree.py --hypothesis-profile=search`` compare thousands.
"""

from __future__ import annotations

from collections.abc import Set
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from schemesim.engine import batch
from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case
from schemesim.engine.event import run_event
from schemesim.engine.many import ManyDrawn, ManyDrawnTimes, ManyTimes
from schemesim.engine.packed import Packed
from schemesim.engine.wiring import wiring_of
from schemesim.errors import RunError
from schemesim.scheme.delays import Delay, Fixed
from schemesim.scheme.distributions import Empirical
from schemesim.scheme.model import Block, Latch, Not
from schemesim.study.tree import explore
from tests.rules import agree, broken_in_batch, broken_in_event
from tests.rules.agree import TRIALS, Compared
from tests.rules.broken_rules import WITHIN, Broken
from tests.rules.hand import breaker, case, gate, radial, sense, timer, trip
from tests.rules.random_schemes import HORIZON_US

numbers = st.integers(0, 2**48)
many = settings(max_examples=100 if settings().max_examples <= 100 else settings().max_examples)


def none_differs(compared: Compared) -> bool:
    assert not compared.differences, "\n".join(map(str, compared.differences))
    return True


@many
@given(numbers)
def test_fixed_delays(number: int) -> None:
    compared = agree.nothing_yet()
    agree.compare_fixed(number, compared)
    assert none_differs(compared)


@many
@given(numbers)
def test_random_delays(number: int) -> None:
    compared = agree.nothing_yet()
    agree.compare_random(number, compared)
    assert none_differs(compared)


@many
@given(numbers)
def test_inverse_time(number: int) -> None:
    compared = agree.nothing_yet()
    agree.compare_inverse(number, compared)
    assert none_differs(compared)


@settings(max_examples=many.max_examples // 2)
@given(numbers)
def test_random_delays_at_their_nominal_times(number: int) -> None:
    compared = agree.nothing_yet()
    agree.compare_nominal(number, compared)
    assert none_differs(compared)


@many
@given(numbers)
def test_a_tree_of_forks_is_the_tree_of_whole_runs_leaf_for_leaf(number: int) -> None:
    compared = agree.nothing_yet()
    agree.compare_trees(number, compared)
    assert none_differs(compared)


def test_the_programs_reach_what_they_are_meant_to_reach() -> None:
    """Or else nothing is compared."""
    compared = agree.nothing_yet()
    for number in range(15, 40):
        for compare in agree.EVERY:
            compare(number, compared)
    assert none_differs(compared)
    counts = compared.counts
    for name in ("words", "words, random delays", "words, inverse time", "automaton", "automaton, random delays"):
        assert counts[f"runs {name}"] + counts["runs that do not settle"] >= 25 * TRIALS
    assert counts["openings"] > 600
    assert counts["questions"] > 600
    assert counts["trees"] == 25
    assert min(counts[name] for name in ("cleared", "outputs observed", "cut at the horizon", "leaves")) > 30
    assert counts["trees on condition"] > 3
    assert counts["inverse-time elements"] > 10


# --- rows together and apart --------------------------------------------------------------


@settings(max_examples=10)
@given(numbers, st.booleans())
def test_rows_that_end_are_left_out_and_the_others_go_on(number: int, random: bool) -> None:
    """From 256 rows on; pieces of 64 rows are never made smaller."""
    assert agree.pieces_agree(agree.settings_of(number, random), 450)


def test_more_rows_than_a_tile_of_words() -> None:
    assert agree.pieces_agree(agree.settings_of(7, random=True), 2_200)


@settings(max_examples=20)
@given(numbers, st.booleans())
def test_a_batch_in_pieces_is_the_batch(number: int, random: bool) -> None:
    setting = agree.settings_of(number, random)
    expected = [setting.event(t) for t in range(TRIALS)]
    if None in expected:
        return
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(batch, "ROWS", 3)
        found = batch.run_batch(
            setting.case, TRIALS, setting.answers, times=setting.times, horizon_us=setting.horizon_us
        )
    assert [found.outcome(i).without_via() for i in range(TRIALS)] == [e.plain().outcome for e in expected if e]


# --- an instant that does not settle --------------------------------------------------------


def _restless(delay: Delay, observe: Set[str] = frozenset()) -> Case:
    """A latch that a timer resets and that is set again at once, for ever."""
    blocks: list[Block] = [
        sense("oc", "F1.CT", 0),
        Latch(name="l", set="oc", reset="w"),
        replace(timer("w", "l"), pick_up=delay, drop_out=delay),
        replace(trip("never", "w"), inputs=("w", Not("w")), k=2),
        trip("t", "oc"),
        gate("coil", "t", "never"),
        breaker("F1.CB", "coil"),
    ]
    return case(radial(), blocks, observe=observe)


@pytest.mark.parametrize("delay", [Fixed(0), Empirical((0, 0, 10))], ids=["fixed", "random"])
def test_an_instant_that_does_not_settle_is_refused_by_every_engine(delay: Delay) -> None:
    """An output observed waits for it. Random times that happen to be zero go on for ever as fixed ones do."""
    bound = _restless(delay, {"never"})
    answers = ManyDrawn(bound.program, 1, 0, 8)
    with pytest.raises(RunError, match="does not settle"):
        run_event(bound, FixedAnswers(bound.program, ()))
    drawn: list[ManyTimes | None] = [None, ManyDrawnTimes(1, 0, 8)]
    for times in drawn:
        with pytest.raises(RunError, match="does not settle"):
            batch.run_batch(bound, 8, answers, times=times)
    with pytest.raises(RunError, match="does not settle"):
        explore(bound)
    packed = Packed(wiring_of(bound), np.arange(8), answers, ManyDrawnTimes(1, 0, 8), HORIZON_US)
    with pytest.raises(RunError, match="does not settle"):
        packed.finish()


@pytest.mark.parametrize("delay", [Fixed(0), Empirical((0, 0, 10))], ids=["fixed", "random"])
def test_what_never_settles_and_can_influence_nothing_is_left_out_by_every_engine(delay: Delay) -> None:
    """F1.CB is committed at once by oc and opens 50 later; nothing else is left to trip."""
    bound = _restless(delay)
    expected = run_event(bound, FixedAnswers(bound.program, ()))
    assert [(o.t_trip_us, o.t_open_us) for o in expected.outcome.openings] == [(0, 50_000)]
    drawn: list[ManyTimes | None] = [None, ManyDrawnTimes(1, 0, 8)]
    for times in drawn:
        found = batch.run_batch(bound, 8, ManyDrawn(bound.program, 1, 0, 8), times=times)
        assert {found.outcome(i) for i in range(8)} == {expected.outcome}
    assert [end.outcome for end in explore(bound).ends] == [expected.outcome]


# --- a rule broken on purpose -----------------------------------------------------------------


@pytest.mark.parametrize("broken", [*broken_in_event.ALL, *broken_in_batch.ALL], ids=lambda b: b.name)
def test_a_broken_rule_is_caught(broken: Broken) -> None:
    """The same comparison, with one rule of one engine changed, finds a difference within a few programs."""
    compared = agree.nothing_yet()
    with pytest.MonkeyPatch.context() as patch:
        broken.plant(patch)
        for number in range(broken.first, broken.first + WITHIN):
            broken.compare(number, compared)
            if compared.differences:
                break
    assert compared.differences, f"{broken.name}: not noticed in {WITHIN} programs"
    if ":" in broken.name:  # "words: …" is noticed in words, and so on
        engine = {"automaton": "automaton", "words": "words", "forks": "tree"}[broken.name.split(":")[0]]
        assert all(d.what.startswith(engine) for d in compared.differences)
    again = agree.nothing_yet()
    broken.compare(number, again)
    assert none_differs(again), "and without it there is none"


def test_ten_rules_and_more_are_broken_in_either_engine() -> None:
    assert min(len(broken_in_event.ALL), len(broken_in_batch.ALL)) >= 10
