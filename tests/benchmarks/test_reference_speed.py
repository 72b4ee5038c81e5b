"""The work behind the figures of the reference scheme, and that it is the work meant; no time is judged here.

In the ordinary test run each is done once; ``pytest tests/benchmarks --benchmark-enable`` measures.
"""

from __future__ import annotations

import pytest

from schemesim.engine.outcome import Status
from schemesim.study.montecarlo import simulate
from schemesim.study.stratified import simulate_stratified
from schemesim.study.tree import Narrow, explore
from tests.benchmarks import plain_simpy
from tests.benchmarks.figures_reference import FIGURES, SEED, by_events, drawn_case, draws, not_cleared, rare
from tests.benchmarks.figures_start import FIRST_RUN, IMPORT, NUMPY, spent_s
from tests.benchmarks.reference import reference_case
from tests.benchmarks.test_speed import Benchmark

TRIALS = 200


def test_trials_of_a_batch(benchmark: Benchmark) -> None:
    case = drawn_case()
    counts = benchmark(simulate, case, TRIALS, SEED)
    assert counts.trials == TRIALS
    assert counts.ranges == ((0, TRIALS),)
    assert len(set(counts.t_clear_us().tolist())) > TRIALS / 2  # times are random
    assert counts.cleared().successes == by_events(TRIALS)


def test_trials_of_the_event_engine(benchmark: Benchmark) -> None:
    assert 50 <= benchmark(by_events, 60) <= 60


def test_trials_of_the_plain_script(benchmark: Benchmark) -> None:
    trials = benchmark(lambda: list(plain_simpy.run(TRIALS, SEED)))
    assert len(trials) == TRIALS
    assert len({t.t_clear_ms for t in trials}) > TRIALS / 2
    assert any(t.failed for t in trials)
    assert all(len(t.openings) >= 1 for t in trials)


def test_draws_alone(benchmark: Benchmark) -> None:
    """Some two hundred numbers a trial: the state of each component it may ask about, and each random time."""
    assert 100 * TRIALS < benchmark(draws, TRIALS) < 300 * TRIALS


@pytest.mark.parametrize("epsilon", [1e-4, 1e-5])
def test_a_tree_certified(benchmark: Benchmark, epsilon: float) -> None:
    tree = benchmark(explore, reference_case(random=False), epsilon=epsilon)
    assert tree.stopped == "epsilon"
    assert 0 < tree.unexplored <= epsilon
    assert sum(tree.masses) + tree.unexplored == pytest.approx(1, abs=1e-12)


def test_a_tree_until_not_cleared_is_known(benchmark: Benchmark) -> None:
    tree = benchmark(explore, reference_case(random=False), stop=Narrow(not_cleared, relative=0.2))
    assert 1e-7 < rare(tree) < 1e-5


def test_stratified_trials(benchmark: Benchmark) -> None:
    case = drawn_case()
    tree = explore(reference_case(random=False), epsilon=1e-4)
    counts = benchmark(simulate_stratified, case, TRIALS, SEED, tree=tree)
    assert sum(counts.rows) >= TRIALS
    assert sum(s.weight for s in counts.strata) == pytest.approx(1, abs=1e-12)
    assert counts.share(lambda o: o.status is Status.CLEARED).estimate > 0.99


@pytest.mark.parametrize("work", [NUMPY, IMPORT, FIRST_RUN], ids=["numpy", "import", "first run"])
def test_a_start(benchmark: Benchmark, work: str) -> None:
    """Each in a fresh interpreter; the first run asserts how it went."""
    assert benchmark(spent_s, work) > 0


def test_every_figure_is_there() -> None:
    assert set(FIGURES) == {
        "batch_over_event", "batch_over_plain", "event_over_kernel", "tree_in_event_runs",
        "tree_tight_in_event_runs", "plain_over_tree", "over_draws", "growth",
    }  # fmt: skip
    for name in ("event_over_kernel",):
        assert name in dict(FIGURES[name]())
