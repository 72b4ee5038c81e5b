"""Monte Carlo, the event tree and injection tell one story on the demo.

Failures are made frequent here, far beyond any real equipment, so that a few thousand trials
meet many of them, alone and together.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from pathlib import Path

import pytest

from schemesim.engine.case import Case, bind
from schemesim.engine.outcome import Outcome, Status
from schemesim.engine.sensing import LogicalSensing
from schemesim.scenario import Scenario, load_scenario
from schemesim.scenario.model import location
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import ComponentKind, FailureMode, Role
from schemesim.study.brackets import Bracket
from schemesim.study.dependability import outputs_of
from schemesim.study.injection import inject
from schemesim.study.location import measure
from schemesim.study.losses import lost
from schemesim.study.measures import cleared_by, excess
from schemesim.study.montecarlo import Counts, simulate
from schemesim.study.tree import End, Tree, explore

FILE = Path(__file__).resolve().parents[2] / "scenarios" / "demo.yaml"
SEED = 7
TRIALS = 2_000
MAX_RUNS = 2_000
LIMIT_US = 150_000
ALLOWED = 0.001
"""Chance that a right study fails anywhere in the family of comparisons: 99.9 %."""

FREQUENT = FailureData(
    modes={
        ComponentKind.RELAY: {
            FailureMode.FAILURE_TO_OPERATE: 0.05,
            FailureMode.DELAYED_OPERATION: 0.01,
            FailureMode.UNWANTED_OPERATION: 0.01,
        },
        ComponentKind.CT_CORE: {FailureMode.OPEN: 0.003},
        ComponentKind.VT_WINDING: {FailureMode.LOST: 0.003},
        ComponentKind.DC: {FailureMode.LOST: 0.01},
        ComponentKind.CHANNEL: {FailureMode.LOST: 0.05, FailureMode.LATE: 0.01, FailureMode.FALSE_RECEIPT: 0.01},
        ComponentKind.COIL: {FailureMode.FAILURE_TO_OPERATE: 0.005},
        ComponentKind.BREAKER: {
            FailureMode.DOES_NOT_OPEN: 0.03,
            FailureMode.OPENS_LATE: 0.01,
            FailureMode.DOES_NOT_INTERRUPT: 0.005,
            FailureMode.AUXILIARY_WRONG: 0.003,
        },
        ComponentKind.LOCKOUT: {FailureMode.FAILURE_TO_OPERATE: 0.005},
    },
    relay_beta=0.1,
)

PLACES = {"line": "L3@0.95", "bus": "Dunmore.B1", "dead zone": "Dunmore.L4.c", "feeder": "F1"}


@dataclass(frozen=True)
class Story:
    """One fault location, told twice."""

    case: Case
    tree: Tree
    counts: Counts


def with_data(data: FailureData) -> Scenario:
    return replace(load_scenario(FILE), data=data)


def bind_at(demo: Scenario, place: str) -> Case:
    """The case of a place; at the feeder the trip outputs of its own protection are observed too."""
    outputs = frozenset(outputs_of(demo.scheme(), element="F1")) if place == "F1" else frozenset()
    return bind(demo.program(), location(demo.plant, place), LogicalSensing(), observe=outputs)


@pytest.fixture(scope="module")
def stories() -> dict[str, Story]:
    demo = with_data(FREQUENT)
    found = {}
    with ProcessPoolExecutor(2) as executor:
        for what, place in PLACES.items():
            case = bind_at(demo, place)
            tree = explore(case, epsilon=1e-2, max_runs=MAX_RUNS, complete=1)
            found[what] = Story(case, tree, simulate(case, TRIALS, SEED, executor=executor, chunk=250))
    return found


Happens = Callable[[Outcome], bool]
Value = Callable[[End], float]


def events(case: Case, tree: Tree) -> Iterator[tuple[str, Bracket, Happens]]:
    """Every probability that the study of a location gives, with the same event counted on outcomes."""
    r = measure(case, location(case.program.plant, str(case.event)), tree, LIMIT_US)
    intended = case.duty.intended
    yield "cleared", r.p_cleared, lambda o: o.status is Status.CLEARED
    yield "not cleared", r.p_not_cleared, lambda o: o.t_clear_us is None
    yield "within limit", r.p_within_limit, lambda o: o.t_clear_us is not None and o.t_clear_us <= LIMIT_US
    yield "late", r.p_late_or_uncleared, lambda o: o.t_clear_us is None or o.t_clear_us > LIMIT_US
    yield "undetermined", r.p_undetermined, lambda o: o.status is Status.UNDETERMINED
    yield "selective", r.p_selective, lambda o: not o.tripped - intended
    for role, bracket in r.p_by_role.items():
        yield f"by {role.label}", bracket, lambda o, role=role: cleared_by(case, o) is role  # type: ignore[misc]
    for n, bracket in r.breakers.items():
        yield f"{n} breakers", bracket, lambda o, n=n: len(o.tripped) == n  # type: ignore[misc]
    for n, bracket in r.excess.items():
        yield f"{n} too many", bracket, lambda o, n=n: excess(case, o) == n  # type: ignore[misc]
    for t, bracket in r.clearing.cdf:
        yield f"by {t} us", bracket, lambda o, t=t: o.t_clear_us is not None and o.t_clear_us <= t  # type: ignore[misc]
    outputs = sorted({name for end in tree.ends for name, _ in end.outcome.operated})
    for name in outputs:  # what dependability and security are made of
        happens: Happens = lambda o, name=name: name in dict(o.operated)  # type: ignore[misc]  # noqa: E731
        yield f"{name!r} operates", tree.bracket(happens), happens


def means(case: Case, tree: Tree) -> Iterator[tuple[str, Bracket, Value]]:
    """Every mean that the study of a location gives."""
    r = measure(case, location(case.program.plant, str(case.event)), tree, LIMIT_US)
    yield "breakers", r.breakers_mean.bracket, lambda e: len(e.outcome.tripped)
    yield "breakers too many", r.breakers_excess.bracket, lambda e: excess(case, e.outcome)
    yield "load lost", r.load_lost_mw.bracket, lambda e: lost(case, e.final_mask)[0]
    yield "sections lost", r.sections_lost.bracket, lambda e: len(lost(case, e.final_mask)[1])


def apart(story: Story, family: int) -> list[str]:
    """Measures whose bracket and interval do not overlap, at 99.9 % over a family of comparisons."""
    found = []
    confidence = 1 - ALLOWED / family
    for name, bracket, happens in events(story.case, story.tree):
        share = story.counts.share(happens, confidence, "clopper_pearson")
        if share.low > bracket.high or bracket.low > share.high:
            found.append(f"{name}: {share} against {bracket}")
    for name, bracket, value in means(story.case, story.tree):
        mean = story.counts.mean(value, confidence)
        if mean.low > bracket.high or bracket.low > mean.high:
            found.append(f"{name}: {mean} against {bracket}")
    return found


def size(story: Story) -> int:
    """Number of comparisons at one location."""
    return sum(1 for _ in events(story.case, story.tree)) + sum(1 for _ in means(story.case, story.tree))


def test_tree_and_trials_tell_one_story(stories: dict[str, Story]) -> None:
    family = sum(size(s) for s in stories.values())
    for what, story in stories.items():
        assert story.counts.trials == TRIALS
        assert story.tree.unexplored < 0.1, what
        assert apart(story, family) == [], what


def test_the_trials_met_what_matters(stories: dict[str, Story]) -> None:
    """Each back-up had its say in the trials, or nothing would have been compared."""
    roles = {r for s in stories.values() for e, _ in s.counts.ends if (r := cleared_by(s.case, e.outcome)) is not None}
    assert roles >= {Role.MAIN, Role.MAIN_TIMED, Role.LOCAL, Role.BREAKER_FAILURE, Role.REMOTE}
    for what, story in stories.items():
        assert len(story.counts.ends) > 20, what


def test_endings_of_the_trials_are_in_the_tree(stories: dict[str, Story]) -> None:
    """What the trials met and the tree has not explored is no more frequent than what it left unexplored."""
    for what, story in stories.items():
        known = set(story.tree.ends)
        strange = sum(n for end, n in story.counts.ends if end not in known)
        share = strange / TRIALS
        assert share <= float(story.tree.unexplored) + 4 * (float(story.tree.unexplored) / TRIALS) ** 0.5, what


@pytest.mark.parametrize(
    ("kind", "mode", "p"),
    [
        (ComponentKind.RELAY, FailureMode.FAILURE_TO_OPERATE, 0.15),
        (ComponentKind.BREAKER, FailureMode.DOES_NOT_OPEN, 0.09),
    ],
)
def test_another_story_is_told_apart(
    stories: dict[str, Story], kind: ComponentKind, mode: FailureMode, p: float
) -> None:
    """The comparison would notice a probability that is some times too high in the trials."""
    modes = {**FREQUENT.modes, kind: {**FREQUENT.modes[kind], mode: p}}
    demo = with_data(replace(FREQUENT, modes=modes))
    told = stories["feeder"]
    case = bind_at(demo, PLACES["feeder"])
    other = replace(told, counts=simulate(case, TRIALS, SEED))
    assert apart(other, sum(size(s) for s in stories.values()))


@pytest.mark.parametrize(("what", "order"), [("line", 1), ("bus", 2), ("dead zone", 1), ("feeder", 2)])
def test_injected_failures_end_as_the_leaves_of_the_tree(stories: dict[str, Story], what: str, order: int) -> None:
    story = stories[what]
    leaves: dict[frozenset[int], End] = {}
    for leaf in story.tree.leaves:
        yes = frozenset(leaf.yes)
        assert yes not in leaves  # answers decide a run: there is one leaf for each set of them
        leaves[yes] = story.tree.ends[leaf.end]
    injection = inject(story.case, order)
    compared = {0: 0, 1: 0, 2: 0}
    for row in injection.rows:
        yes = frozenset(row.questions)
        if yes in leaves:
            compared[len(yes)] += 1
            assert leaves[yes] == End(row.outcome, row.final_mask), row.failures
        else:
            assert len(yes) == 2, row.failures  # the tree has every single failure
    singles = sum(1 for row in injection.rows if len(row.failures) == 1)
    assert compared[0] == 1
    assert compared[1] == singles > 10
    explored = [yes for yes in leaves if len(yes) == 2]
    if order == 2:
        assert compared[2] == len(explored) > 50  # and every pair of the tree was injected


@pytest.mark.parametrize("workers", [1, 2])
def test_the_same_counts_with_any_number_of_workers(stories: dict[str, Story], workers: int) -> None:
    case = stories["feeder"].case
    with ProcessPoolExecutor(workers) as executor:
        shared = simulate(case, 300, SEED, executor=executor, chunk=40)
    assert shared == simulate(case, 300, SEED, chunk=300)
