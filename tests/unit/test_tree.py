"""The event tree against brute force over every state of the components, and its brackets."""

from __future__ import annotations

import math
from fractions import Fraction
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from schemesim.engine.answers import Answers, FixedAnswers
from schemesim.engine.case import Case
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Outcome, Run, Status
from schemesim.errors import InputError, RunError
from schemesim.scheme.conditions import Current, InZone
from schemesim.scheme.model import (
    Ask,
    Block,
    Breaker,
    CommonCause,
    Component,
    ComponentKind,
    FailureMode,
    Gate,
    Not,
    Scheme,
    Sense,
    Timer,
)
from schemesim.study.brackets import Bracket, exactly, show
from schemesim.study.tree import Narrow, explore
from tests.unit.small_schemes import (
    FTO,
    LATE,
    STUCK,
    as_float,
    brute_force,
    case_of,
    feeder_case,
    feeder_scheme,
    ms,
    relay,
    states,
    voting_scheme,
)


def cleared(outcome: Outcome) -> bool:
    return outcome.status is Status.CLEARED


def stays(outcome: Outcome) -> bool:
    return outcome.t_clear_us is None


SMALL = [feeder_scheme(), voting_scheme()]


@pytest.mark.parametrize("scheme", SMALL, ids=["feeder", "voting"])
def test_the_whole_tree_is_brute_force(scheme: Scheme) -> None:
    case = case_of(scheme)
    truth = brute_force(case)
    tree = explore(case, epsilon=0)
    assert len(truth) >= 3  # the comparison says something
    assert dict(zip(tree.ends, tree.masses, strict=True)) == truth
    assert sum(truth.values()) == 1
    assert tree.unexplored == 0
    assert tree.runs < len(list(states(case.program)))  # and asks less


def test_feeder_by_hand() -> None:
    """P(not cleared): F1 does not trip, or is stuck and breaker failure does not act; and the back-up relay fails."""
    tree = explore(feeder_case(), epsilon=0)
    dc, m1, m2, cause = Fraction(1, 100), Fraction(1, 50), Fraction(1, 25), Fraction(1, 200)
    no_trip = dc + (1 - dc) * (cause + (1 - cause) * m1 * m2)
    both_fail_or_stuck = no_trip + (1 - no_trip) * Fraction(1, 8) * Fraction(1, 10)
    assert tree.bracket(stays) == exactly(both_fail_or_stuck * Fraction(1, 30))
    times = {o.outcome.t_clear_us for o in tree.ends}
    # 70 main; 170 main slow (20 + 100 + 50) ; 220 breaker failure; 470 remote; late breaker 320 is overtaken by 220,
    # and seen only where breaker failure does not act; a slow main moves both by 100 ms.
    assert times == {70_000, 170_000, 220_000, 320_000, 420_000, 470_000, None}


def random_scheme(data: st.DataObject) -> Scheme:
    """A few components of several modes, gates that depend on them at random, two breakers."""
    kinds = {
        ComponentKind.RELAY: (FTO, LATE, FailureMode.UNWANTED_OPERATION),
        ComponentKind.CHANNEL: (FailureMode.LOST, FailureMode.FALSE_RECEIPT),
        ComponentKind.BREAKER: (STUCK, FailureMode.OPENS_LATE, FailureMode.DOES_NOT_INTERRUPT),
    }
    draw = data.draw
    components: list[Component] = []
    asks: list[Ask] = []
    for n in range(draw(st.integers(2, 4))):
        kind = draw(st.sampled_from([ComponentKind.RELAY, ComponentKind.CHANNEL]))
        modes = draw(st.lists(st.sampled_from(kinds[kind]), min_size=1, unique=True))
        components.append(Component(f"c{n}", kind, tuple((m, Fraction(1, draw(st.integers(3, 9)))) for m in modes)))
        asks.extend(Ask(f"c{n}", m) for m in modes)
    components.append(
        Component("cb", ComponentKind.BREAKER, tuple((m, Fraction(1, 5)) for m in kinds[ComponentKind.BREAKER]))
    )
    causes: tuple[CommonCause, ...] = ()
    if draw(st.booleans()):
        members = tuple(draw(st.lists(st.sampled_from(asks), min_size=1, max_size=2, unique=True)))
        causes = (CommonCause("cause", members, Fraction(1, 11)),)
    signals = ["s0", "s1"]
    times = st.sampled_from([0, 10, 20, 40])
    blocks: list[Block] = [
        Sense(name="s0", condition=InZone(frozenset({"F1"}), ("F1.CT",)), operate=ms(10), reset=ms(10)),
        Sense(name="s1", condition=Current(("IN.CT",)), operate=ms(20), reset=ms(10)),
    ]
    some_asks = st.lists(st.sampled_from(asks), max_size=2, unique=True).map(tuple)
    for n in range(draw(st.integers(2, 5))):
        source = st.sampled_from(signals)
        if draw(st.integers(0, 3)) == 0:
            blocks.append(Timer(name=f"b{n}", input=draw(source), pick_up=ms(draw(times)), drop_out=ms(draw(times))))
        else:
            names = draw(st.lists(source, min_size=1, max_size=3, unique=True))
            inputs = tuple(Not(x) if draw(st.integers(0, 4)) == 0 else x for x in names)
            k = draw(st.integers(1, len(inputs)))
            blocks.append(Gate(name=f"b{n}", inputs=inputs, k=k, unless=draw(some_asks), given=draw(some_asks)))
        signals.append(f"b{n}")
    blocks.append(
        Breaker(
            name="F1.CB", coils=(signals[-1],), interrupting=ms(40), auxiliary=ms(5), component="cb", late_by=ms(30)
        )
    )
    other = draw(st.sampled_from(signals[2:]))
    blocks.append(Breaker(name="IN.CB", coils=(other,), interrupting=ms(60), auxiliary=ms(5)))
    return Scheme(tuple(components), tuple(blocks), causes)


@settings(max_examples=40, deadline=None)
@given(st.data())
def test_random_schemes_are_brute_force(data: st.DataObject) -> None:
    case = case_of(random_scheme(data))
    tree = explore(case, epsilon=0)
    assert dict(zip(tree.ends, tree.masses, strict=True)) == brute_force(case)


def test_masses_are_the_products_the_engine_reports() -> None:
    """P(leaf) is the product of the conditional probabilities of its answers."""
    case = feeder_case()
    reported: dict[tuple[tuple[int, bool], ...], Fraction] = {}

    def spying(case: Case, answers: Answers, *, horizon_us: int) -> Run:
        run = run_event(case, answers, horizon_us=horizon_us)
        p = Fraction(1)
        for (_, yes), odds in zip(run.asked, run.probabilities, strict=True):
            assert isinstance(odds, Fraction)
            p *= odds if yes else 1 - odds
        reported[run.asked] = p
        return run

    tree = explore(case, epsilon=0, run=spying)
    assert {leaf.asked: leaf.probability for leaf in tree.leaves} == reported


@pytest.mark.parametrize("scheme", SMALL, ids=["feeder", "voting"])
def test_a_tree_out_of_budget_reports_a_bracket_that_holds(scheme: Scheme) -> None:
    case = case_of(scheme)
    truth = sum(p for end, p in brute_force(case).items() if cleared(end.outcome))
    whole = explore(case, epsilon=0)
    widths = []
    for budget in range(1, whole.runs):
        tree = explore(case, epsilon=0, max_runs=budget)
        assert (tree.runs, tree.stopped) == (budget, "budget")
        bracket = tree.bracket(cleared)
        assert bracket.contains(truth)
        assert bracket.width == tree.unexplored > 0
        assert sum(tree.masses) + tree.unexplored == 1
        widths.append(bracket.width)
    assert widths == sorted(widths, reverse=True)


def test_most_probable_branch_first() -> None:
    tree = explore(feeder_case(), epsilon=0, max_runs=5)
    opened = [leaf.asked for leaf in tree.leaves]
    assert opened[0] == tuple((q, False) for q, _ in opened[0])
    assert tree.names(tree.leaves[1].yes) == ("CB1: does_not_open",)  # 1/8 is the greatest of all


def test_epsilon_is_reached_and_not_overdone() -> None:
    case = feeder_case()
    for epsilon in (Fraction(1, 10), Fraction(1, 1000)):
        tree = explore(case, epsilon=epsilon)
        assert tree.stopped == "epsilon"
        assert 0 < tree.unexplored <= epsilon
        assert explore(case, epsilon=0, max_runs=tree.runs - 1).unexplored > epsilon


@pytest.mark.parametrize("scheme", [feeder_scheme, voting_scheme], ids=["feeder", "voting"])
def test_float_brackets_hold_the_exact_value(scheme: Any) -> None:
    """The exact tree of the very floats given lies in the brackets of the float tree."""
    floating = explore(case_of(scheme(as_float)), epsilon=0)
    truth = explore(case_of(scheme(lambda text: Fraction(float(Fraction(text))))), epsilon=0)
    exact = dict(zip(truth.ends, truth.masses, strict=True))
    assert set(floating.ends) >= set(exact)
    for end in floating.ends:
        bracket = floating.bracket(lambda o, end=end: o == end.outcome)  # type: ignore[misc]
        value = sum(p for e, p in exact.items() if e.outcome == end.outcome)
        assert isinstance(bracket.low, float)
        assert Fraction(bracket.low) <= value <= Fraction(bracket.high)
        assert bracket.width <= 1e-13 * bracket.high


@settings(max_examples=25, deadline=None)
@given(st.lists(st.floats(1e-12, 0.3), min_size=3, max_size=3), st.integers(1, 6))
def test_float_brackets_hold_for_any_probabilities(p: list[float], budget: int) -> None:
    def scheme(*odds: float | Fraction) -> Scheme:
        parts = (relay("R", (FTO, odds[0]), (LATE, odds[1])), relay("S", (FTO, odds[2])))
        blocks: tuple[Block, ...] = (
            Sense(name="s", condition=Current(("F1.CT",)), operate=ms(10), reset=ms(10)),
            Gate(name="r", inputs=("s",), unless=(Ask("R", FTO), Ask("R", LATE))),
            Gate(name="t", inputs=("s",), unless=(Ask("S", FTO),)),
            Breaker(name="F1.CB", coils=("r", "t"), interrupting=ms(40), auxiliary=ms(5)),
        )
        return Scheme(parts, blocks)

    truth = sum(q for e, q in brute_force(case_of(scheme(*map(Fraction, p)))).items() if stays(e.outcome))
    assert truth == (Fraction(p[0]) + Fraction(p[1])) * Fraction(p[2])
    bracket = explore(case_of(scheme(*p)), epsilon=0, max_runs=budget).bracket(stays)
    assert Fraction(bracket.low) <= truth <= Fraction(bracket.high)


def test_narrow_goes_on_below_epsilon() -> None:
    case = feeder_case()
    tree = explore(case, stop=Narrow(stays, relative=0.05))
    b = tree.bracket(stays)
    assert tree.stopped == "bracket"
    assert b.low > 0
    assert b.width <= Fraction(5, 100) * b.low
    wide = explore(case, stop=Narrow(stays, absolute=0.05))
    assert wide.runs < tree.runs
    assert wide.bracket(stays).width <= 0.05


def test_conditioned_trees_obey_total_probability() -> None:
    case = feeder_case()
    p_whole = explore(case, epsilon=0).bracket(stays).low
    for q, question in enumerate(case.questions):
        one, none = (explore(case, epsilon=0, given={q: yes}).bracket(stays).low for yes in (True, False))
        p = question.probability
        assert p * one + (1 - p) * none == p_whole, question.name


def test_a_mode_given_refuses_the_others() -> None:
    case = case_of(voting_scheme())
    tree = explore(case, epsilon=0, given={"R3: unwanted_operation": True})
    truth: dict[object, Fraction] = {}
    wanted = next(i for i, q in enumerate(case.questions) if q.name == "R3: unwanted_operation")
    for yes, p in states(case.program):
        if wanted in yes and p:
            run = run_event(case, FixedAnswers(case.program, yes))
            truth[run.outcome] = truth.get(run.outcome, Fraction(0)) + 3 * p
    found: dict[object, Fraction] = {}
    for end, mass in zip(tree.ends, tree.masses, strict=True):
        found[end.outcome] = found.get(end.outcome, Fraction(0)) + Fraction(mass)
    assert found == truth
    with pytest.raises(InputError, match="exclude each other"):
        explore(case, given={"R3: unwanted_operation": True, "R3: failure_to_operate": True})


def test_complete_explores_every_single_failure() -> None:
    case = feeder_case()
    whole = explore(case, epsilon=0)
    singles = {leaf.yes for leaf in whole.leaves if len(leaf.yes) <= 1}
    pairs = {leaf.yes for leaf in whole.leaves if len(leaf.yes) <= 2}
    for complete, wanted in ((1, singles), (2, pairs)):
        tree = explore(case, epsilon=Fraction(1, 2), complete=complete)
        assert {leaf.yes for leaf in tree.leaves} == wanted
    assert len(explore(case, epsilon=Fraction(1, 2)).leaves) < len(singles)


def test_order_of_declaration_changes_nothing() -> None:
    scheme = feeder_scheme()
    turned = Scheme(scheme.components[::-1], scheme.blocks[::-1], scheme.common_causes)
    assert explore(case_of(scheme), epsilon=0) == explore(case_of(turned), epsilon=0)


def test_an_engine_that_changes_its_mind_is_found_out() -> None:
    case, calls = feeder_case(), []

    def fickle(case: Case, answers: Answers, *, horizon_us: int) -> Run:
        run = run_event(case, answers, horizon_us=horizon_us)
        calls.append(run)
        return run if len(calls) == 1 else Run(run.outcome, run.asked[::-1], run.probabilities, 0, 0)

    with pytest.raises(RunError, match="depend on more than its answers"):
        explore(case, run=fickle)


@pytest.mark.parametrize(
    ("options", "subject"),
    [
        ({"epsilon": -1}, "epsilon"),
        ({"epsilon": math.nan}, "epsilon"),
        ({"epsilon": "x"}, "epsilon"),
        ({"max_runs": 0}, "max_runs"),
        ({"max_runs": 1.5}, "max_runs"),
        ({"complete": -1}, "complete"),
        ({"given": {"M22: failure_to_operate": True}}, "did you mean 'M2: failure_to_operate'"),
        ({"given": {99: True}}, "index of a question"),
    ],
)
def test_bad_options_are_refused(options: dict[str, Any], subject: str) -> None:
    with pytest.raises(InputError, match=subject):
        explore(feeder_case(), **options)
    with pytest.raises(InputError, match="absolute or relative"):
        Narrow(stays)


finite = st.floats(-1e6, 1e6, allow_subnormal=False)
intervals = st.tuples(finite, finite).map(lambda ab: Bracket(min(ab), max(ab)))


@given(intervals, intervals, st.fractions(0, 1), st.fractions(0, 1))
def test_bracket_arithmetic_holds(a: Bracket, b: Bracket, s: Fraction, t: Fraction) -> None:
    x = Fraction(a.low) + s * (Fraction(a.high) - Fraction(a.low))
    y = Fraction(b.low) + t * (Fraction(b.high) - Fraction(b.low))
    for bracket, value in ((a + b, x + y), (a - b, x - y), (a * b, x * y)):
        assert Fraction(bracket.low) <= value <= Fraction(bracket.high)
    if b.low > 0:
        assert (a / b).contains(x / y)


@given(st.floats(0, 1), st.floats(0, 1))
def test_a_printed_bracket_still_holds(x: float, y: float) -> None:
    low, high = min(x, y), max(x, y)
    parts = show(low, high).split("…")
    if len(parts) == 2:
        assert float(parts[0]) <= low
        assert high <= float(parts[1])
    else:
        assert high - low <= 1e-11 * high
        assert float(parts[0]) == pytest.approx(low, rel=1e-9)


def test_brackets_of_fractions_stay_exact() -> None:
    third = exactly(Fraction(1, 3))
    assert (third + third * third / third) == exactly(Fraction(2, 3))
    assert exactly(Fraction(1)) / Bracket(Fraction(0), Fraction(1)) == Bracket(1, math.inf)
    with pytest.raises(InputError, match="bracket"):
        Bracket(1, 0)
