"""The figures of speed, each measured in one process and the least of several repeats.

Times are processor time of this process: other work on the machine disturbs them less. What a
figure was measured on is checked to be the work meant: the runs of the tree replayed end as
they did there, and a location costs the same runs and ends alike on every size of grid.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import simpy

from schemesim.engine.answers import ForcedAnswers
from schemesim.engine.case import Case, bind
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Run
from schemesim.engine.sensing import LogicalSensing
from schemesim.scenario import Scenario
from schemesim.study.tree import Tree, explore
from tests.benchmarks.grids import COPIES, FILES, LOCATION, joined, scenario

Figure = tuple[str, float]


@dataclass(frozen=True)
class Cost:
    """What one location costs on a grid of some size; times in seconds."""

    buses: int
    breakers: int
    blocks: int
    runs: int
    bind_s: float
    run_s: float
    tree_s: float

    @property
    def location_s(self) -> float:
        """The whole study of the location."""
        return self.bind_s + self.tree_s


def case_of(grid: Scenario, name: str) -> Case:
    """The location under study, bound anew to the program of the policy in use."""
    return bind(grid.program(), LOCATION[name], LogicalSensing(), dispatch=grid.study.dispatch)


def replay(case: Case, tree: Tree) -> list[Run]:
    """Every run of a tree once more, each under the answers of its leaf."""
    return [run_event(case, ForcedAnswers(dict(leaf.asked))) for leaf in tree.leaves]


def bare_timeouts(counts: Sequence[int]) -> float:
    """As many bare SimPy timeouts as each run handles; the sum of the times at which they ended."""
    total = 0.0
    for count in counts:
        env = simpy.Environment()
        for delay in range(count):
            env.timeout(delay)
        env.run()
        total += env.now
    return total


def least_s(work: Callable[[], object], repeats: int = 5) -> float:
    """The least processor time of some repeats, in seconds."""
    return min(_once_s(work) for _ in range(repeats))


def _once_s(work: Callable[[], object]) -> float:
    start = time.process_time()
    work()
    return time.process_time() - start


def buses(grid: Scenario) -> int:
    """How many stations a grid has."""
    return len({s.station for s in grid.plant.sections if s.station})


def engine_figures(name: str, repeats: int = 5) -> Iterator[Figure]:
    """Runs per second, and a run over as many bare timeouts, on the runs of the tree at 1e-4."""
    case = case_of(scenario(name), name)
    tree = explore(case, epsilon=1e-4)
    runs = replay(case, tree)
    if [(r.outcome, r.final_mask) for r in runs] != [
        (tree.ends[leaf.end].outcome, tree.ends[leaf.end].final_mask) for leaf in tree.leaves
    ]:
        raise RuntimeError("a run replayed ended otherwise than in the tree")
    run_s = least_s(lambda: replay(case, tree), repeats)
    counts = [r.events for r in runs]
    yield f"runs_per_s_{name}", len(runs) / run_s
    yield f"events_per_run_{name}", sum(counts) / len(counts)
    yield f"event_over_kernel_{name}", run_s / least_s(lambda: bare_timeouts(counts), repeats)


def tree_figures(name: str, epsilons: Sequence[str] = ("1e-4", "1e-6")) -> Iterator[Figure]:
    """Runs and seconds of a tree, from a case bound anew."""
    for epsilon in epsilons:
        case = case_of(scenario(name), name)
        start = time.process_time()
        tree = explore(case, epsilon=float(epsilon))
        spent = time.process_time() - start
        if tree.stopped != "epsilon":
            raise RuntimeError(f"the tree at {epsilon} stopped by {tree.stopped}")
        yield f"tree_runs_{epsilon}_{name}", tree.runs
        yield f"tree_s_{epsilon}_{name}", spent


def costs(
    name: str, epsilon: float = 1e-4, repeats: int = 5, copies: Sequence[int] | None = None
) -> list[Cost]:
    """What the same location costs on grids of growing size, sizes taken in turn.

    Raises
    ------
    RuntimeError
        If it is not the same location: another case, other runs, other ends.
    """
    grids = [joined(name, n) for n in copies or COPIES[name]]
    first = case_of(grids[0], name)
    same = explore(first, epsilon=epsilon)
    spent: list[tuple[list[float], list[float], list[float]]] = [([], [], []) for _ in grids]
    blocks: list[int] = []
    for grid in grids:  # what is made once for all locations is made here
        case = case_of(grid, name)
        blocks.append(len(grid.program().blocks))
        tree = explore(case, epsilon=epsilon)
        alike = (tree.runs, tree.masses, tree.ends) == (same.runs, same.masses, same.ends)
        if case.names != first.names or not alike:
            raise RuntimeError(f"{LOCATION[name]} is not the same on {buses(grid)} buses as on {buses(grids[0])}")
    for _ in range(repeats):
        for grid, (bind_s, run_s, tree_s) in zip(grids, spent, strict=True):
            start = time.process_time()
            case = case_of(grid, name)
            bound = time.process_time()
            explore(case, epsilon=epsilon)
            explored = time.process_time()
            replay(case, same_leaves(same, case))
            bind_s.append(bound - start)
            tree_s.append(explored - bound)
            run_s.append((time.process_time() - explored) / len(same.leaves))
    return [
        Cost(buses(grid), len(grid.plant.breakers), n, same.runs, min(b), min(r), min(t))
        for grid, n, (b, r, t) in zip(grids, blocks, spent, strict=True)
    ]


def same_leaves(tree: Tree, case: Case) -> Tree:
    """The tree with its leaves' answers told by the questions of another program, by name."""
    from dataclasses import replace

    index = {q.name: i for i, q in enumerate(case.questions)}
    return replace(
        tree,
        questions=case.questions,
        leaves=tuple(
            replace(leaf, asked=tuple((index[tree.questions[q].name], yes) for q, yes in leaf.asked))
            for leaf in tree.leaves
        ),
    )


def growth_figures(name: str, found: Sequence[Cost]) -> Iterator[Figure]:
    """Times of the location on the largest grid over those on the smallest."""
    small, large = found[0], found[-1]
    yield f"growth_buses_{name}", large.buses / small.buses
    yield f"growth_bind_{name}", large.bind_s / small.bind_s
    yield f"growth_run_{name}", large.run_s / small.run_s
    yield f"growth_tree_{name}", large.tree_s / small.tree_s
    yield f"growth_location_{name}", large.location_s / small.location_s


def table(name: str, found: Sequence[Cost]) -> str:
    """What the location costs against the size of the grid, as text."""
    lines = [f"{LOCATION[name]} of {FILES[name]}, tree of {found[0].runs} runs"]
    lines.append("  buses  breakers  blocks  bind_ms  run_ms  tree_ms  location_ms")
    lines += [
        f"  {c.buses:5d}  {c.breakers:8d}  {c.blocks:6d}  {c.bind_s * 1e3:7.1f}  {c.run_s * 1e3:6.2f}"
        f"  {c.tree_s * 1e3:7.1f}  {c.location_s * 1e3:11.1f}"
        for c in found
    ]
    return "\n".join(lines)


def grid_figures(repeats: int = 3) -> Iterator[Figure]:
    """Time per location of a station of the test system: in a grid of 242 buses over that in one of 26."""
    small, large = costs("rts96", repeats=repeats, copies=(0, 9))
    if (small.buses, large.buses) != (26, 242):
        raise RuntimeError(f"grids of {small.buses} and {large.buses} buses, expected 26 and 242")
    yield "grid", large.location_s / small.location_s
