"""The plain SimPy script tells what the library tells of the reference case, run by run and in its odds."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from statistics import NormalDist

import pytest
from scipy import stats

from schemesim.engine.case import Case
from schemesim.engine.outcome import Outcome, Status
from schemesim.study.montecarlo import Counts, simulate
from schemesim.study.tree import explore
from tests.benchmarks import plain_simpy
from tests.benchmarks.plain_simpy import Trial, failure_data, run
from tests.benchmarks.reference import BREAKERS, reference_case

TRIALS = 2_000
CONFIDENCE = 0.999
"""Of all comparisons of odds together."""


def mode(case: Case, question: int) -> tuple[str, str]:
    component, _, what = case.questions[question].name.rpartition(": ")
    return component, what


def test_it_has_the_same_failures_with_the_same_probabilities() -> None:
    case = reference_case(random=True)
    mine = {(name, what): p for name, modes in failure_data().items() for what, p in modes.items()}
    theirs = {mode(case, q): question.probability for q, question in enumerate(case.questions)}
    assert {key: p for key, p in mine.items() if key in theirs} == theirs
    never_tripped = {"Alder.BC.CB", "Birch.D3.CB1", "Birch.D3.CB2"}
    assert {name.split("/")[0] for name, _ in set(mine) - set(theirs)} == never_tripped


def test_every_run_of_the_tree_goes_the_same_way() -> None:
    """Nominal times: status, clearing time, and every opening, under each set of failures down to 1e-7.

    What Alder opens after a second is compared by name only: of its two parallel lines the one whose zone 3 sees
    the fault first may be either.
    """
    case = reference_case(random=False)
    tree = explore(case, epsilon=1e-7)
    assert len(tree.leaves) > 500
    for leaf in tree.leaves:
        outcome = tree.ends[leaf.end].outcome
        trial = Trial(dict(mode(case, q) for q in leaf.yes), None)
        assert (trial.t_clear_ms is None) == (outcome.status is Status.NOT_CLEARED), tree.names(leaf.yes)
        if outcome.t_clear_us is not None:
            assert trial.t_clear_ms == pytest.approx(outcome.t_clear_us / 1000), tree.names(leaf.yes)
        theirs = soon({o.breaker: o.t_open_us / 1000 for o in outcome.openings})
        assert soon(trial.openings) == pytest.approx(theirs), tree.names(leaf.yes)


def soon(openings: dict[str, float]) -> dict[str, float]:
    return {name: t for name, t in openings.items() if t <= 1000 or not name.startswith("Alder")}


@pytest.fixture(scope="module")
def plain() -> list[Trial]:
    return list(run(TRIALS, seed=11))


@pytest.fixture(scope="module")
def ours() -> Counts:
    return simulate(reference_case(random=True), TRIALS, seed=12)


def test_clearing_times_are_of_one_distribution(plain: list[Trial], ours: Counts) -> None:
    """Kolmogorov and Smirnov's two-sample test, at 99.9 %."""
    mine = [t.t_clear_ms for t in plain if t.t_clear_ms is not None]
    theirs = [e.outcome.t_clear_us / 1000 for e, n in ours.ends for _ in range(n) if e.outcome.t_clear_us is not None]
    assert len(set(mine)) > TRIALS / 2
    assert stats.ks_2samp(mine, theirs).pvalue > 1e-3


EVENTS: dict[str, tuple[Callable[[Trial], bool], Callable[[Outcome], bool]]] = {
    "cleared within 75 ms": (
        lambda t: t.t_clear_ms is not None and t.t_clear_ms <= 75,
        lambda o: o.t_clear_us is not None and o.t_clear_us <= 75_000,
    ),
    "cleared after 100 ms": (
        lambda t: t.t_clear_ms is not None and t.t_clear_ms > 100,
        lambda o: o.t_clear_us is not None and o.t_clear_us > 100_000,
    ),
    "more than three breakers": (lambda t: len(t.openings) > 3, lambda o: len(o.openings) > 3),
    "Dunmore before Birch": (
        lambda t: max(t.openings.get(b, 1e9) for b in BREAKERS) != t.openings.get("Dunmore.L4.CB", 1e9),
        lambda o: last(o) != "Dunmore.L4.CB",
    ),
    "both breakers at Birch within 1 ms": (
        lambda t: abs(t.openings.get(BREAKERS[0], 1e9) - t.openings.get(BREAKERS[1], 0)) <= 1,
        lambda o: abs(opened(o).get(BREAKERS[0], 10**12) - opened(o).get(BREAKERS[1], 0)) <= 1000,
    ),
}


def opened(o: Outcome) -> dict[str, int]:
    return {x.breaker: x.t_open_us for x in o.openings}


def last(o: Outcome) -> str:
    times = opened(o)
    latest = max(times.get(b, 10**12) for b in BREAKERS)
    return "Dunmore.L4.CB" if times.get("Dunmore.L4.CB", 10**12) == latest else "another"


@pytest.mark.parametrize("name", EVENTS)
def test_odds_are_the_same(name: str, plain: list[Trial], ours: Counts) -> None:
    """The difference of two shares is within what chance does, at 99.9 % over all events together."""
    of_trial, of_outcome = EVENTS[name]
    mine, theirs = sum(map(of_trial, plain)), ours.count(of_outcome)
    z = NormalDist().inv_cdf(1 - (1 - CONFIDENCE) / len(EVENTS) / 2)
    p = (mine + theirs) / (2 * TRIALS)
    assert 5 <= mine + theirs <= 2 * TRIALS - 5
    assert abs(mine - theirs) / TRIALS <= z * (2 * p * (1 - p) / TRIALS) ** 0.5


def test_it_stands_alone() -> None:
    assert "schemesim" not in Path(plain_simpy.__file__).read_text(encoding="utf-8")
