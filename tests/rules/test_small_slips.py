"""What the rules say at their edges: where one more or less, or the other of two, would go unseen elsewhere."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import pytest

from schemesim.engine.answers import DrawnAnswers
from schemesim.engine.automaton import automaton_of
from schemesim.engine.batch import run_batch
from schemesim.engine.case import Case
from schemesim.engine.draws import uniform
from schemesim.engine.event import run_event
from schemesim.engine.inverse import AT_ONCE, FULL, Motion, speed_for
from schemesim.engine.many import ManyDrawn, ManyDrawnTimes
from schemesim.engine.outcome import Outcome
from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.scenario import load_scenario
from schemesim.scheme.distributions import Empirical
from schemesim.scheme.model import Block, Latch, Not, Role, Sense
from schemesim.study.tree import explore
from tests.rules.hand import FAILS, asked, breaker, case, fails, gate, openings, play, radial, relay, sense, timer, trip


@pytest.mark.parametrize(
    ("failed", "wanted", "opens"),
    [
        ((), ["R1", "R2"], {}),  # set, then whether it is reset: it is, and reset wins
        (("R1",), ["R1"], {}),  # never set: nobody asks for its reset
        (("R2",), ["R1", "R2"], {"F1.CB": (20, 70)}),
    ],
)
def test_r04_a_latch_at_rest_asks_for_its_set_input_first(
    failed: tuple[str, ...], wanted: list[str], opens: dict[str, tuple[float, float]]
) -> None:
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        gate("set", "oc", unless=fails("R1")),
        gate("reset", "oc", unless=fails("R2")),
        Latch(name="l", set="set", reset="reset"),
        trip("t", "l"),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay("R1"), relay("R2")])
    run = play(bound, *(f"{name}: {FAILS}" for name in failed))
    assert asked(bound, run) == [f"{name}: {FAILS}" for name in wanted]
    assert openings(run) == opens


def test_r10_an_element_without_overtravel_has_no_travel_left_the_instant_it_resets() -> None:
    moving = Motion().turn(0, speed_for(1000))
    assert moving.at(999) < FULL
    stopped = moving.turn(999, AT_ONCE)
    assert (stopped.at(999), stopped.at(1000), stopped.due()) == (0, 0, None)


def test_r10_a_disc_that_runs_on_gets_there_in_the_last_microsecond_of_its_overtravel() -> None:
    moving = Motion().turn(0, speed_for(1000))
    assert moving.turn(990, AT_ONCE, 10).due() == 1000
    assert moving.turn(990, AT_ONCE, 9).due() is None
    assert moving.turn(990, AT_ONCE, 9).at(999) == 999 * speed_for(1000)
    assert moving.turn(990, AT_ONCE, 9).at(1000) == 0


def test_at_rest_what_follows_from_what_follows_has_settled() -> None:
    """b holds by what is not sensed, a by b, and b by a: both have operated before the fault, and F1 trips at 20."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        sense("never", "IN.CT", 10_000),
        timer("a", "g", 100),
        timer("b", "h", 100),
        gate("g", "b"),
        gate("h", "a", Not("never")),
        trip("t", "oc", "a", k=2),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
    ]
    assert openings(play(case(radial(), blocks))) == {"F1.CB": (20, 70)}


def test_the_last_trial_there_may_be() -> None:
    assert 0 <= uniform(1, "x", 2**63 - 1) < 1
    with pytest.raises(InputError, match=f"at most {2**63 - 1}"):
        uniform(1, "x", 2**63)


def told(outcome: Outcome) -> tuple[tuple[object, ...], ...]:
    """Openings without the trip output, of which several may do."""
    return tuple((o.breaker, o.t_trip_us, o.t_open_us, o.role) for o in outcome.openings)


def both_engines(bound: Case) -> list[tuple[list[str], dict[str, tuple[float, float]]]]:
    """What each leaf of the tree asks and opens: the same by runs from the start, and among rows of a batch."""
    tree = explore(bound, epsilon=0)
    found = []
    for leaf in tree.leaves:
        yes = [bound.questions[q].name for q, answer in leaf.asked if answer]
        run = play(bound, *yes)
        assert run.asked == leaf.asked
        assert run.outcome.openings == tree.ends[leaf.end].outcome.openings
        found.append((asked(bound, run), openings(run)))
    for times in (None, ManyDrawnTimes(1, 0, 64)):
        rows = run_batch(bound, 64, ManyDrawn(bound.program, 1, 0, 64), times=times)
        ends = {told(rows.outcome(i)) for i in range(64)}
        assert ends == {told(tree.ends[leaf.end].outcome) for leaf in tree.leaves}
    return sorted(found, key=repr)


def test_r04_a_latch_that_is_set_asks_for_its_reset_in_both_engines() -> None:
    """Set at 20; reset at 50 unless R fails; what waits for 100 ms of it runs out only if it was not reset."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        timer("later", "oc", 30),
        gate("reset", "later", unless=fails("R")),
        Latch(name="l", set="oc", reset="reset"),
        timer("wait", "l", 100),
        trip("t", "wait"),
        gate("coil", "t"),
        breaker("F1.CB", "coil"),
    ]
    question = [f"R: {FAILS}"]
    bound = case(radial(), blocks, [relay("R", Fraction(1, 2))])
    assert both_engines(bound) == [(question, {"F1.CB": (120, 170)}), (question, {})]


def test_r04_a_breaker_tripped_in_the_best_role_by_one_coil_asks_nothing_for_the_other() -> None:
    """Coil 1 by main protection; coil 2 by remote back-up, and by local back-up if R does not fail: not asked."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("main", "oc"),
        trip("remote", "oc", role=Role.REMOTE),
        trip("local", "oc", role=Role.LOCAL, unless=fails("R")),
        gate("c1", "main"),
        gate("c2", "remote", "local"),
        breaker("F1.CB", "c1", "c2"),
    ]
    bound = case(radial(), blocks, [relay("R", Fraction(1, 2))])
    assert both_engines(bound) == [([], {"F1.CB": (20, 70)})]


def test_r04_a_breaker_tripped_in_a_worse_role_asks_what_may_better_it() -> None:
    """As before, without main protection: local back-up is asked for, and its role is what counts."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("remote", "oc", role=Role.REMOTE),
        trip("local", "oc", role=Role.LOCAL, unless=fails("R")),
        gate("c1", "remote"),
        gate("c2", "remote", "local"),
        breaker("F1.CB", "c1", "c2"),
    ]
    bound = case(radial(), blocks, [relay("R", Fraction(1, 2))])
    assert both_engines(bound) == [([f"R: {FAILS}"], {"F1.CB": (20, 70)})] * 2


def test_an_automaton_that_grows_over_its_first_size_gives_what_the_engine_gives() -> None:
    """Over 256 states, met in small batches, of which the first row is run from the start too."""
    scenario = load_scenario(Path(__file__).resolve().parents[2] / "scenarios" / "demo.yaml")
    bound = scenario.case(Location("Dunmore.L4.c"))
    for first in range(0, 2_000, 16):
        rows = run_batch(bound, 16, ManyDrawn(bound.program, 1, first, 16))
        assert told(rows.outcome(0)) == told(run_event(bound, DrawnAnswers(bound.program, 1, first)).outcome)
    assert len(automaton_of(bound).states) > 256


@pytest.mark.parametrize("role", list(Role))
def test_every_role_is_kept_until_its_signal_gets_through_in_both_engines(role: Role) -> None:
    """Tripped at 20, let through at 70 unless R fails: the role is that of the trip."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"),
        trip("t", "oc", role=role),
        Latch(name="seal", set="t"),
        timer("wait", "oc", 50),
        gate("coil", "seal", "wait", k=2, unless=fails("R")),
        breaker("F1.CB", "coil"),
    ]
    bound = case(radial(), blocks, [relay("R", Fraction(1, 2))])
    both = both_engines(bound)
    assert [opened for _, opened in both] == [{"F1.CB": (70, 120)}, {}]
    assert {o.role for end in explore(bound, epsilon=0).ends for o in end.outcome.openings} == {role}


def test_more_trip_outputs_behind_one_coil_than_bits_in_a_word() -> None:
    """Seventy, each by its own relay; the last two are fast and may fail, the others come later in a better role."""
    count = 70
    blocks: list[Block] = [sense(f"oc{n:02}", "F1.CT", 20 if n > 67 else 22 + n) for n in range(count)]
    roles = [*[Role.MAIN] * (count - 2), Role.REMOTE, Role.LOCAL]
    blocks += [trip(f"t{n:02}", f"oc{n:02}", role=roles[n], unless=fails(f"R{n:02}")) for n in range(count)]
    blocks += [gate("coil", *(f"t{n:02}" for n in range(count))), breaker("F1.CB", "coil")]
    relays = [relay(f"R{n:02}", 0.5 if n > 67 else 1e-9) for n in range(count)]
    bound = case(radial(), blocks, relays)
    answers = ManyDrawn(bound.program, 3, 0, 64)
    # Delays that are random by kind alone: rows stand in words, and every run takes the same times.
    sensed = [b for b in blocks if isinstance(b, Sense)]
    scattered: list[Block] = [replace(b, operate=Empirical((b.operate.nominal_us,) * 2)) for b in sensed]
    scattered += [b for b in blocks if not isinstance(b, Sense)]
    in_words = case(radial(), scattered, relays)
    every = [run_batch(bound, 64, answers), run_batch(in_words, 64, answers, times=ManyDrawnTimes(3, 0, 64))]
    kept = {Role.LOCAL: 20.0, Role.REMOTE: 20.0, Role.MAIN: 22.0}
    seen = set()
    for trial in range(64):
        outcome = run_event(bound, DrawnAnswers(bound.program, 3, trial)).outcome
        (opening,) = outcome.openings
        assert opening.t_trip_us / 1000 == kept[opening.role]
        seen.add(opening.role)
        assert {told(rows.outcome(trial)) for rows in every} == {told(outcome)}
    assert seen == set(kept)
