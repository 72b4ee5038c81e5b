"""Monte Carlo stratified on the leaves of a tree: unbiased, its interval covers, and it agrees with everything else."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from fractions import Fraction
from typing import Any

import numpy as np
import pytest

from schemesim.engine.case import Case
from schemesim.engine.outcome import Outcome
from schemesim.errors import InputError
from schemesim.study.cylinders import Drawn, Table, leaves_of, unopened
from schemesim.study.intervals import clopper_pearson, stratified
from schemesim.study.montecarlo import simulate
from schemesim.study.precision import Precision
from schemesim.study.stratified import Estimate, simulate_stratified
from schemesim.study.tree import Tree, explore
from tests.unit.small_schemes import as_float, brute_force, case_of, feeder_scheme, states, voting_scheme
from tests.unit.stratified_cases import EveryRun, random_feeder

REPETITIONS = 1_000
Happens = Callable[[Outcome], bool]


def within(us: int) -> Happens:
    return lambda o: o.t_clear_us is not None and o.t_clear_us <= us


EVENTS: dict[str, Happens] = {
    "in 75 ms": within(75_000),  # more often than not
    "in 65 ms": within(65_000),
    "by breaker failure": lambda o: o.t_clear_us is not None and 150_000 < o.t_clear_us <= 225_000,
    "never": lambda o: o.t_clear_us is None,  # about one in a thousand
    "two breakers": lambda o: len(o.openings) == 2,  # failures decide it, not times
}
IN_DOUBT = ("in 75 ms", "in 65 ms")


@pytest.fixture(scope="module")
def case() -> Case:
    return random_feeder()


@pytest.fixture(scope="module")
def every(case: Case) -> EveryRun:
    return EveryRun(case)


@pytest.fixture(scope="module")
def tree(case: Case) -> Tree:
    """A small part explored: a seventh of what can fail is left."""
    return explore(case, epsilon=0, max_runs=4)


def covers(exact: float, found: list[Estimate], at_most: bool) -> None:
    """Covered as often as 95 % says, within what chance does to so many repetitions at 99.9 %; and unbiased.

    The mean of the estimates is the exact value, within its own error at 99.9 %.
    """
    n = len(found)
    covered = sum(e.low <= exact <= e.high for e in found)
    low, high = (n * (0.95 + s * 3.29 * (0.95 * 0.05 / n) ** 0.5) for s in (-1, 1))
    assert low <= covered
    if at_most:
        assert covered <= high
    estimates = np.array([e.estimate for e in found])
    assert abs(estimates.mean() - exact) <= 3.29 * estimates.std() / n**0.5


def test_the_interval_covers(case: Case, every: EveryRun, tree: Tree) -> None:
    """1,000 repetitions of 200 rows against the exact probability of each event.

    No less often than 95 % says for any event, and no more often either where the strata are in doubt.
    """
    found: dict[str, list[Estimate]] = {"in 65 ms": [], "in 75 ms": [], "by breaker failure": [], "never": []}
    for seed in range(REPETITIONS):
        counts = simulate_stratified(case, 200, seed, tree=tree, run=every)
        for name in ("in 65 ms", "in 75 ms"):
            found[name].append(counts.cleared(int(name[3:5]) * 1000))
        for name in ("by breaker failure", "never"):
            found[name].append(counts.share(EVENTS[name]))
    for name, estimates in found.items():
        assert len(estimates) == REPETITIONS == 1_000
        covers(float(every.exact(EVENTS[name])), estimates, name in IN_DOUBT)


@pytest.mark.parametrize("name", ["in 75 ms", "never"])
def test_the_interval_covers_where_rows_are_aimed_at_an_event(
    name: str, case: Case, every: EveryRun, tree: Tree
) -> None:
    """1,000 repetitions of the whole procedure, a pilot of its own in each."""
    event = EVENTS[name]
    found = [
        simulate_stratified(case, 200, seed, tree=tree, event=event, run=every).share(event)
        for seed in range(REPETITIONS)
    ]
    covers(float(every.exact(event)), found, at_most=False)


def test_strata_make_the_estimate_better(case: Case, every: EveryRun, tree: Tree) -> None:
    """Over 200 repetitions of 400 rows the variance is under that of plain Monte Carlo, p(1 − p)/n."""
    event = EVENTS["by breaker failure"]
    p = float(every.exact(event))
    found = [
        simulate_stratified(case, 400, seed, tree=tree, event=event, run=every).share(event) for seed in range(200)
    ]
    assert np.var([e.estimate for e in found]) < 0.7 * p * (1 - p) / 400


@pytest.mark.parametrize("scheme", [feeder_scheme, voting_scheme], ids=["feeder", "voting"])
def test_all_four_agree(scheme: Any) -> None:
    """Brute force, event tree, plain and stratified Monte Carlo, at 99.9 % over all outcomes together."""
    case = case_of(scheme(as_float))
    truth: dict[Outcome, Fraction] = {}
    for end, p in brute_force(case).items():
        truth[end.outcome] = truth.get(end.outcome, Fraction(0)) + p
    level = 1 - 0.001 / len(truth)
    tree = explore(case, epsilon=1e-3)
    plain = simulate(case, 4_000, 31)
    counts = simulate_stratified(case, 4_000, 32, tree=explore(case, epsilon=0, max_runs=3))
    assert len(truth) > 4
    for outcome, p in truth.items():
        is_it = outcome.__eq__
        bracket, estimate = tree.bracket(is_it), counts.share(is_it, level)
        share = plain.share(is_it, level, "clopper_pearson")
        assert bracket.low <= p <= bracket.high
        assert share.low <= p <= share.high
        assert estimate.low <= p <= estimate.high


def test_random_times_agree_with_every_run(case: Case, every: EveryRun, tree: Tree) -> None:
    """On the engine itself: plain and stratified against every state with every pair of times."""
    plain, counts = simulate(case, 2_000, 5), simulate_stratified(case, 2_000, 6, tree=tree)
    assert {e for e, _ in plain.ends}  # the outcomes exist one by one too
    for name, event in EVENTS.items():
        exact, level = every.exact(event), 1 - 0.001 / len(EVENTS)
        share, estimate = plain.share(event, level, "clopper_pearson"), counts.share(event, level)
        assert share.low <= exact <= share.high, name
        assert estimate.low <= exact <= estimate.high, name


@pytest.mark.parametrize("runs", [1, 2, 5, 20, 10_000])
@pytest.mark.parametrize("scheme", [feeder_scheme, voting_scheme], ids=["feeder", "voting"])
def test_leaves_and_what_is_unopened_are_everything_once(scheme: Any, runs: int) -> None:
    case = case_of(scheme(as_float))
    tree = explore(case, epsilon=0, max_runs=runs)
    parts = [*leaves_of(tree), *unopened(case.program, tree)]
    assert sum(c.mass for c in parts[len(tree.leaves) :]) == pytest.approx(float(tree.unexplored), abs=1e-15)
    for yes, p in states(case.program):
        if p:
            inside = [c for c in parts if all((q in yes) is answer for q, answer in c.answers.items())]
            assert len(inside) == 1
    for c in parts:
        mass = sum(p for yes, p in states(case.program) if all((q in yes) is a for q, a in c.answers.items()))
        assert c.mass == pytest.approx(float(mass), rel=1e-12)


def test_what_a_cylinder_leaves_open_is_drawn_given_what_it_fixes(case: Case) -> None:
    """A breaker that is known to open late, or known not to be stuck: the other mode never, or p/(1 − refused)."""
    index = {q.name: n for n, q in enumerate(case.questions)}
    stuck, late, bf = (index[f"{x}"] for x in ("CB1: does_not_open", "CB1: opens_late", "BF: failure_to_operate"))
    tree = explore(case, epsilon=0, max_runs=1)
    free = leaves_of(tree)[0]
    rows, n = np.arange(60_000), 20_000
    fixed: tuple[dict[int, bool], ...] = ({late: True}, {stuck: False}, {})
    table = Table([type(free)(answers, 1.0) for answers in fixed])
    drawn = Drawn(case.program, table, np.repeat(np.arange(3), n), 9, 0)
    of_stuck, of_late, of_bf = (drawn.answers(q, rows).reshape(3, n) for q in (stuck, late, bf))
    assert of_late[0].all()
    assert not of_stuck[:2].any()
    for seen, p in (
        (of_late[1], 1 / 16 / (1 - 1 / 8)),
        (of_stuck[2], 1 / 8),
        (of_late[2], 1 / 16),
        (of_bf[0], 1 / 10),
    ):
        low, high = clopper_pearson(int(seen.sum()), n, 0.9999)
        assert low <= p <= high
    assert not (of_stuck & of_late).any()


def test_a_light_tail_of_leaves_is_put_together(case: Case) -> None:
    whole = explore(case, epsilon=0)
    counts = simulate_stratified(case, 120, 3, tree=whole)
    assert len(whole.leaves) > 30
    assert len(counts.strata) <= 15
    assert sum(len(s.cylinders) for s in counts.strata) == len(whole.leaves)
    assert sum(s.weight for s in counts.strata) == pytest.approx(1)
    table = counts.table(lambda o: o.t_clear_us is None)
    assert list(table.columns) == ["stratum", "weight", "rows", "happened"]
    assert table["rows"].sum() == sum(counts.rows)
    assert table["weight"].is_monotonic_decreasing


def test_cleared_is_the_share_of_its_event_and_pieces_do_not_matter(case: Case, tree: Tree) -> None:
    whole = simulate_stratified(case, 300, 8, tree=tree)
    for us in (60_000, 75_000, 300_000):
        assert whole.cleared(us) == whole.share(within(us))
    assert whole.cleared() == whole.share(lambda o: o.t_clear_us is not None)
    with ThreadPoolExecutor(2) as pool:
        pieces = simulate_stratified(case, 300, 8, tree=tree, chunk=37, executor=pool)
    for event in EVENTS.values():
        assert pieces.hits(event) == whole.hits(event)
    assert simulate_stratified(case, 300, 9, tree=tree).hits(within(75_000)) != whole.hits(within(75_000))


@pytest.mark.parametrize(("absolute", "relative"), [(0.015, None), (None, 0.1)])
def test_a_precision_is_reached(
    absolute: float | None, relative: float | None, case: Case, every: EveryRun, tree: Tree
) -> None:
    event = EVENTS["by breaker failure"]
    exact = float(every.exact(event))
    target = Precision(event, absolute=absolute, relative=relative, confidence=0.9)
    covered = 0
    for seed in range(15):
        found = simulate_stratified(case, target, seed, tree=tree, run=every).share(event, 0.9)
        assert (found.high - found.low) / 2 <= (absolute or 0.1 * found.estimate)
        covered += found.low <= exact <= found.high
    assert clopper_pearson(covered, 15, 0.999)[1] >= 0.9
    plain = simulate(case, target, 2)
    share = plain.share(event, 0.9)
    assert (share.high - share.low) / 2 <= (absolute or 0.1 * share.estimate)
    few = simulate(case, Precision(event, absolute=1e-9, max_trials=2_500), 2)
    assert few.trials == 2_500


def test_precision_and_numbers_are_checked(case: Case, tree: Tree) -> None:
    never: Happens = lambda _: False  # noqa: E731 - shorter so
    with pytest.raises(InputError, match="half width over 0"):
        Precision(never)
    with pytest.raises(InputError) as caught:
        Precision(never, relative=-1, confidence=2, max_trials=0)
    assert len(caught.value.problems) == 3
    for bad in ({"trials": 0}, {"seed": -1}, {"chunk": 0}):
        with pytest.raises(InputError, match=next(iter(bad))):
            simulate_stratified(case, **{"trials": 10, "seed": 0, "tree": tree, **bad})  # type: ignore[arg-type]
    other = explore(case_of(voting_scheme(as_float)), epsilon=0.5)
    with pytest.raises(InputError, match="tree of this case"):
        simulate_stratified(case, 10, 0, tree=other)


def test_the_interval_of_one_stratum_is_its_own() -> None:
    """Jeffreys' limits as published (n = 10, 95 %): x = 1 gives 0.011 to 0.381, x = 4 0.153 to 0.696."""
    # L. D. Brown, T. T. Cai, A. DasGupta, Statistical Science 16 (2001), the table of Jeffreys' interval; from memory
    for x, low, high in ((1, 0.011, 0.381), (4, 0.153, 0.696)):
        assert stratified([1.0], [x], [10]) == pytest.approx((low, high), abs=6e-4)
    assert stratified([1.0], [0], [10]) == pytest.approx(clopper_pearson(0, 10))
    assert stratified([1.0], [10], [10]) == pytest.approx(clopper_pearson(10, 10))


def test_an_interval_of_strata_refuses_what_does_not_fit() -> None:
    for weights, x, n, word in (
        ([0.5], [1, 2], [3, 4], "strata"),
        ([0.5, 0.4], [1, 1], [2, 2], "weights"),
        ([1.0], [0], [0], "trials of a stratum"),
        ([1.0], [3], [2], "successes"),
    ):
        with pytest.raises(InputError, match=word):
            stratified(weights, x, n)
