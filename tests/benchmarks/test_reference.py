"""What the reference scheme is: the figures of speed mean something only while these hold."""

from __future__ import annotations

from collections import Counter
from itertools import chain
from statistics import median

import pytest

from schemesim.engine.answers import ForcedAnswers
from schemesim.engine.case import Case
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Status
from schemesim.scheme.distributions import Empirical, LogNormal, Normal, Triangular, Uniform
from schemesim.scheme.model import Role
from schemesim.study.tree import Tree, explore
from tests.benchmarks.reference import BREAKERS, LINE, OFTEN, POSITIONS, RARE, SELDOM, reference_case


@pytest.fixture(scope="module")
def case() -> Case:
    return reference_case(random=False)


@pytest.fixture(scope="module")
def tree(case: Case) -> Tree:
    return explore(case, epsilon=1e-6)


def met(case: Case) -> set[int]:
    """Questions that some run of the case may meet."""
    of_gates = chain.from_iterable(case.asks)
    return {*of_gates, *(q for asks in case.breaker_asks for ask in asks for q in ask.questions)}


def test_it_is_large_enough(case: Case) -> None:
    assert len(case.breakers) >= 12
    assert len(case.questions) >= 60
    assert len(met(case)) >= 60


def test_its_probabilities_are_as_told(case: Case) -> None:
    told = Counter(q.probability for q in case.questions)
    assert set(told) == {OFTEN, SELDOM, RARE} == {1e-2, 1e-3, 1e-4}
    assert told[OFTEN] >= 8
    assert told[SELDOM] >= 12
    meets = Counter(case.questions[q].probability for q in met(case))
    assert meets[OFTEN] == told[OFTEN]
    assert meets[SELDOM] >= 12


def test_a_run_with_a_few_failures_meets_thirty_questions(tree: Tree) -> None:
    few = [len(leaf.asked) for leaf in tree.leaves if len(leaf.yes) == 3]
    assert len(few) > 50
    assert median(few) >= 30


def test_it_has_duplicates_a_channel_scheme_and_breaker_failure(case: Case) -> None:
    marks = [c for c in case.contacts if c is not None and c.element in (LINE, *BREAKERS)]
    assert {(c.function, c.chain) for c in marks if c.role is Role.MAIN and c.chain} >= {("87L", "1"), ("85-21", "2")}
    assert {c.element for c in marks if c.function == "50BF"} == set(BREAKERS)
    assert {c.element for c in marks if c.function == "50BF retrip"} == set(BREAKERS)
    assert "transfer trip" in {c.function for c in case.contacts if c is not None}
    for end in ("Birch", "Dunmore"):  # either set alone opens the line's breakers
        for lost in ("1", "2"):
            index = {q.name: n for n, q in enumerate(case.questions)}
            down = {index[f"{end}/L4/relay {lost}: failure_to_operate"]: True, index[f"{end}/DC {lost}: lost"]: True}
            ran = run_event(case, ForcedAnswers(down))
            assert ran.outcome.tripped == set(BREAKERS)
            assert ran.outcome.status is Status.CLEARED


def test_its_times_are_random_in_several_ways_or_nominal(case: Case) -> None:
    assert not case.random
    drawn = reference_case(random=True)
    assert drawn.random
    assert drawn.names == case.names
    kinds = {type(d) for d in (*drawn.on, *drawn.off) if not d.is_fixed}
    assert kinds == {Normal, LogNormal, Uniform, Triangular, Empirical}
    assert [d.nominal_us for d in drawn.on] == [d.nominal_us for d in case.on]
    assert [d.nominal_us for d in drawn.off] == [d.nominal_us for d in case.off]


def test_not_cleared_is_rare_but_not_too_rare(tree: Tree) -> None:
    bracket = tree.bracket(lambda o: o.status is Status.NOT_CLEARED)
    assert bracket.low > 1e-7
    assert bracket.high < 1e-5


@pytest.mark.parametrize("position", POSITIONS)
def test_every_place_is_cleared_by_the_line_alone_where_nothing_fails(position: float) -> None:
    ran = run_event(reference_case(random=False, position=position), ForcedAnswers({}))
    assert ran.outcome.tripped == set(BREAKERS)
    assert ran.outcome.t_clear_us == 22_000 + 47_000  # differential, then breaker
