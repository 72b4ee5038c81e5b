"""The figures of speed that are measured on the reference scheme, all of them in one process and on one core.

As elsewhere times are processor time, the least of several repeats, and what is measured is
checked to be the work meant.
"""

from __future__ import annotations

import resource
import time
from collections.abc import Callable, Iterator
from functools import cache
from statistics import median

from schemesim.engine.answers import DrawnAnswers
from schemesim.engine.case import Case
from schemesim.engine.draws import uniforms
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Outcome, Status
from schemesim.engine.times import DelayTimes
from schemesim.scheme.model import Breaker
from schemesim.study.montecarlo import Counts, simulate
from schemesim.study.tree import Narrow, Tree, explore
from schemesim.study.trial_columns import met
from tests.benchmarks import plain_simpy
from tests.benchmarks.figures import Figure, bare_timeouts, least_s, replay
from tests.benchmarks.reference import POSITIONS, reference_case

SEED = 1
TRIALS = 20_000
"""Trials of a batch on which its rate is measured."""

EVENT_TRIALS, PLAIN_TRIALS = 500, 2_000
FEW, MANY = 10_000, 1_000_000
"""Trials between which the time of one should not grow."""

MIB = 2**20


def not_cleared(o: Outcome) -> bool:
    """The event whose probability is rare on the reference scheme."""
    return o.status is Status.NOT_CLEARED


@cache
def drawn_case() -> Case:
    """The reference case with random times, what is learned on the way already known."""
    case = reference_case(random=True)
    simulate(case, 200, SEED + 1)
    return case


def batch(trials: int, first: int = 0) -> Counts:
    """Trials of plain Monte Carlo on the batch engine, draws and counting included."""
    counts = simulate(drawn_case(), trials, SEED, first)
    if counts.trials != trials or not 0.999 < counts.cleared().estimate <= 1:
        raise RuntimeError(f"not the trials meant: {counts}")
    return counts


def by_events(trials: int) -> int:
    """The same trials one by one on the event engine; how many were cleared."""
    case = drawn_case()
    runs = (
        run_event(case, DrawnAnswers(case.program, SEED, t), times=DelayTimes(SEED, t)) for t in range(trials)
    )
    return sum(r.outcome.status is Status.CLEARED for r in runs)


def draws(trials: int) -> int:
    """The random numbers of these trials alone: the state of each component met, and every random time."""
    case = drawn_case()
    questions = [case.questions[q] for q in met(case)]
    names = {f"state of {q.component}" if q.component else q.name for q in questions}
    for name in sorted(names):
        uniforms(SEED, name, 0, trials)
    count = len(names)
    for b, name in enumerate(case.names):
        for when, delay in (("on", case.on[b]), ("off", case.off[b])):
            if not delay.is_fixed:
                delay.at_array(uniforms(SEED, f"{name} {when}", 0, trials))
                count += 1
        block = case.program.scheme.block[name]
        if isinstance(block, Breaker) and block.late_by is not None and not block.late_by.is_fixed:
            block.late_by.at_array(uniforms(SEED, f"{name} late", 0, trials))
            count += 1
    return count * trials


@cache
def batch_s() -> float:
    """Seconds of one trial of a batch."""
    batch(FEW)
    return least_s(lambda: batch(TRIALS, first=FEW), repeats=3) / TRIALS


@cache
def event_s() -> float:
    """Seconds of one trial of the event engine."""
    by_events(100)
    return least_s(lambda: by_events(EVENT_TRIALS), repeats=3) / EVENT_TRIALS


@cache
def plain_s() -> float:
    """Seconds of one trial of the plain SimPy script."""
    list(plain_simpy.run(100, SEED + 1))
    return least_s(lambda: sum(1 for _ in plain_simpy.run(PLAIN_TRIALS, SEED)), repeats=3) / PLAIN_TRIALS


def batch_over_event() -> Iterator[Figure]:
    """Trials per second."""
    yield "batch_trials_per_s", 1 / batch_s()
    yield "event_trials_per_s", 1 / event_s()
    yield "batch_over_event", event_s() / batch_s()


def batch_over_plain() -> Iterator[Figure]:
    """Trials per second."""
    yield "plain_trials_per_s", 1 / plain_s()
    yield "batch_over_plain", plain_s() / batch_s()


@cache
def _run() -> tuple[float, float]:
    """Seconds of one run of the event engine at nominal times (those of the tree at 1e-4), and of its bare timeouts."""
    case = reference_case(random=False)
    tree = explore(case, epsilon=1e-4)
    runs = replay(case, tree)
    if [r.outcome for r in runs] != [tree.ends[leaf.end].outcome for leaf in tree.leaves]:
        raise RuntimeError("a run replayed ended otherwise than in the tree")
    counts = [r.events for r in runs]
    run_s = least_s(lambda: replay(case, tree)) / len(runs)
    return run_s, least_s(lambda: bare_timeouts(counts)) / len(runs)


def event_over_kernel() -> Iterator[Figure]:
    """One run of the event engine over as many bare SimPy timeouts as it handles events."""
    run_s, bare_s = _run()
    yield "event_over_kernel", run_s / bare_s


def _certified(epsilon: float) -> float:
    """Median over the places of the time of a tree, from a case bound anew, in runs of the event engine."""
    spent: list[float] = []
    for position in POSITIONS:
        case = reference_case(random=False, position=position)
        start = time.process_time()
        tree = explore(case, epsilon=epsilon, max_runs=1_000_000)
        spent.append(time.process_time() - start)
        if tree.stopped != "epsilon" or tree.unexplored > epsilon:
            raise RuntimeError(f"not certified: {tree}")
    return median(spent) / _run()[0]


def tree_in_event_runs() -> Iterator[Figure]:
    """Time to certify 1e-6."""
    yield "tree_in_event_runs", _certified(1e-6)


def tree_tight_in_event_runs() -> Iterator[Figure]:
    """Time to certify 1e-9."""
    yield "tree_tight_in_event_runs", _certified(1e-9)


def plain_over_tree() -> Iterator[Figure]:
    """Time of the plain script until "not cleared" is known to 10 % (one standard error), over that of the tree.

    A share p of n trials has the relative standard error √((1 − p)/(p·n)), so 10 % takes (1 − p)/(0.01·p) trials.
    The tree stops when its bracket is within ±10 % of its middle.
    """
    case = reference_case(random=False)
    start = time.process_time()
    tree = explore(case, stop=Narrow(not_cleared, relative=0.2), max_runs=1_000_000)
    tree_s = time.process_time() - start
    p = rare(tree)
    yield "p_not_cleared", p
    yield "plain_over_tree", (1 - p) / (0.01 * p) * plain_s() / tree_s


def rare(tree: Tree) -> float:
    """The middle of the bracket of "not cleared", which is within ±10 % of it."""
    bracket = tree.bracket(not_cleared)
    middle = float(bracket.low + bracket.high) / 2
    if tree.stopped != "bracket" or not 1e-7 < middle < 1e-5 or bracket.width > 0.2 * middle:
        raise RuntimeError(f"not cleared: {bracket}, expected between 1e-7 and 1e-5, known to 10 %")
    return middle


def over_draws() -> Iterator[Figure]:
    """Time per trial over the time to draw its random numbers alone."""
    draws_s = least_s(lambda: draws(TRIALS), repeats=3) / TRIALS
    yield "over_draws", batch_s() / draws_s


def growth() -> Iterator[Figure]:
    """Time per trial of many trials over that of few, and the peak memory of this process until then."""
    batch(FEW)
    few_s = least_s(lambda: batch(FEW, first=MANY), repeats=3) / FEW
    start = time.process_time()
    batch(MANY)
    yield "growth", (time.process_time() - start) / MANY / few_s
    yield "peak_mib", resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024 / MIB


FIGURES: dict[str, Callable[[], Iterator[Figure]]] = {
    "growth": growth,  # first, so that the peak is its own
    "batch_over_event": batch_over_event,
    "batch_over_plain": batch_over_plain,
    "over_draws": over_draws,
    "event_over_kernel": event_over_kernel,
    "tree_in_event_runs": tree_in_event_runs,
    "tree_tight_in_event_runs": tree_tight_in_event_runs,
    "plain_over_tree": plain_over_tree,
}
"""What measures each figure; some yield what it was made of besides."""
