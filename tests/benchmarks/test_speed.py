"""The speed of what the studies do, and that it is the work meant; no time is judged here.

In the ordinary test run each is done once; ``pytest tests/benchmarks --benchmark-enable`` measures.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol, TypeVar

import pytest

from schemesim.engine.case import Case
from schemesim.engine.outcome import Status
from schemesim.study.tree import explore
from tests.benchmarks.figures import bare_timeouts, buses, case_of, replay, same_leaves
from tests.benchmarks.grids import COPIES, LOCATION, joined, scenario

T = TypeVar("T")


class Benchmark(Protocol):
    """What pytest-benchmark hands out: calls the work as often as it likes, gives its result."""

    def __call__(self, work: Callable[..., T], *args: object, **named: object) -> T:
        """Call the work."""


@pytest.mark.parametrize("name", ["demo", "rts96"])
def test_runs_of_the_event_engine(benchmark: Benchmark, name: str) -> None:
    """Every run of the tree at 1e-3, replayed."""
    case = case_of(scenario(name), name)
    tree = explore(case, epsilon=1e-3)
    runs = benchmark(replay, case, tree)
    assert [r.asked for r in runs] == [leaf.asked for leaf in tree.leaves]
    assert [r.outcome for r in runs] == [tree.ends[leaf.end].outcome for leaf in tree.leaves]
    assert runs[0].outcome.status is Status.CLEARED
    assert runs[0].outcome.tripped == case.duty.needed
    assert all(r.events > 0 for r in runs)


def test_bare_timeouts(benchmark: Benchmark) -> None:
    """What a run is compared with: so many timeouts at 0, 1, 2 ... in an environment of their own."""
    assert benchmark(bare_timeouts, [1, 3, 10]) == 0 + 2 + 9


@pytest.mark.parametrize("name", ["demo", "rts96"])
def test_a_tree(benchmark: Benchmark, name: str) -> None:
    """At 1e-4; what was explored and what was not make one."""
    case = case_of(scenario(name), name)
    tree = benchmark(explore, case, epsilon=1e-4)
    assert tree.stopped == "epsilon"
    assert 0 < tree.unexplored <= 1e-4
    assert sum(tree.masses) + tree.unexplored == pytest.approx(1, abs=1e-12)
    assert len(tree.leaves) == tree.runs


@pytest.mark.parametrize("copies", COPIES["demo"][:2])
def test_a_location_on_a_larger_grid(benchmark: Benchmark, copies: int) -> None:
    """Six buses or thirty: the location is the same case, with the same tree."""
    grid, alone = joined("demo", copies), joined("demo", 0)
    assert buses(grid) == 6 + 24 * copies
    grid.program()  # once for all locations, so not in the time
    case: Case = benchmark(case_of, grid, "demo")
    first = case_of(alone, "demo")
    assert case.names == first.names
    assert case.event == LOCATION["demo"]
    tree, same = explore(case, epsilon=1e-3), explore(first, epsilon=1e-3)
    assert same_leaves(same, case).leaves == tree.leaves
    assert tree.ends == same.ends
