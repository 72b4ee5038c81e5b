"""Static logic put to the event tree: properties that hold for any; published values stand in the table."""

from __future__ import annotations

from fractions import Fraction
from math import prod

from hypothesis import given, settings
from hypothesis import strategies as st

from schemesim.study.brackets import exactly
from schemesim.study.importance import importance, p_component_failed
from schemesim.study.tree import explore
from schemesim.study.weak_points import minimal_sets
from tests.outside.fault_trees import Tree, fault_tree, opened, p_diagram, p_top
from tests.outside.values_static_logic import TANK, TANK_TOP, TRAINS, VALVES


def test_importance_is_ranked_and_agrees_with_itself() -> None:
    found = {i.failure.split(":")[0]: i for i in importance(fault_tree(VALVES, TRAINS), opened, epsilon=0)}
    assert list(found) == ["P1", "P2", "V1", "V2"]
    tree = explore(fault_tree(VALVES, TRAINS), epsilon=0)
    for name, item in found.items():
        top, one = Fraction("0.646"), item.p_event_given_failure.low
        assert item.p_event == exactly(top)
        assert item.risk_achievement_worth == exactly(one / top)
        assert item.risk_reduction_worth == exactly(top / item.p_event_given_none.low), name
        assert p_component_failed(tree, name, opened) == item.p_failure_given_event


def test_importance_of_an_unfinished_tree_is_a_bracket_that_holds() -> None:
    truth = {"P1": Fraction("0.51"), "P2": Fraction("0.38"), "V1": Fraction("0.34"), "V2": Fraction("0.228")}
    exact = {i.failure: i for i in importance(fault_tree(VALVES, TRAINS), opened, epsilon=0)}
    for budget in (1, 2, 3, 4):
        failures = [f"{n}: failure_to_operate" for n in truth]
        items = importance(fault_tree(VALVES, TRAINS), opened, failures, epsilon=0, max_runs=budget)
        for item in items:
            assert item.birnbaum.contains(truth[item.failure.split(":")[0]])
            assert item.criticality_ratio.contains(exact[item.failure].criticality_ratio.low)
            assert item.p_failure_given_event.contains(exact[item.failure].p_failure_given_event.low)
            assert item.risk_achievement_worth.contains(exact[item.failure].risk_achievement_worth.low)
        tree = explore(fault_tree(VALVES, TRAINS), epsilon=0, max_runs=budget)
        for name in truth:
            known = exact[f"{name}: failure_to_operate"].p_failure_given_event.low
            assert p_component_failed(tree, name, opened).contains(known)


def test_cut_sets_of_the_pressure_tank_are_ranked() -> None:
    sets = minimal_sets(explore(fault_tree(TANK, TANK_TOP), epsilon=0), opened)
    assert [frozenset(f.split(":")[0] for f in s.failures) for s in sets][:3] == [{"K2"}, {"T"}, {"S", "R"}]
    assert sets[2].probability == Fraction("1E-8")


@settings(max_examples=30, deadline=None)
@given(st.lists(st.fractions(0, 1, max_denominator=50), min_size=2, max_size=5), st.data())
def test_k_of_n(odds: list[Fraction], data: st.DataObject) -> None:
    """At least k of n events against the sum over all subsets (definition)."""
    k = data.draw(st.integers(1, len(odds)))
    names = {f"e{n}": p for n, p in enumerate(odds)}
    truth = sum(
        (
            prod((p if mask >> n & 1 else 1 - p for n, p in enumerate(odds)), start=Fraction(1))
            for mask in range(2 ** len(odds))
            if mask.bit_count() >= k
        ),
        Fraction(0),
    )
    assert p_top(names, ("atleast", k, *names)) == truth


EVENTS = st.sampled_from([f"e{n}" for n in range(6)])
ODDS = st.lists(st.fractions(0, 1, max_denominator=9), min_size=6, max_size=6)


def deeper(parts: st.SearchStrategy[Tree]) -> st.SearchStrategy[Tree]:
    some = st.lists(parts, min_size=2, max_size=3)
    gates = st.tuples(st.sampled_from(["and", "or"]), some).map(lambda g: (g[0], *g[1]))
    votes = some.filter(lambda p: len(p) == 3).map(lambda p: ("atleast", 2, *p))
    return gates | votes


@settings(max_examples=60, deadline=None)
@given(st.recursive(EVENTS, deeper, max_leaves=10), ODDS)
def test_any_fault_tree_is_its_decision_diagram(top: Tree, odds: list[Fraction]) -> None:
    of = {f"e{n}": p for n, p in enumerate(odds)}
    assert p_top(of, top) == p_diagram(of, top)
