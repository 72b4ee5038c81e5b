"""Monte Carlo: seeded counts that add up however the trials are split, and tell the tree's story."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor
from fractions import Fraction
from typing import Any

import pytest

from schemesim.engine.answers import DrawnAnswers, drawn_answers
from schemesim.engine.case import Case
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Outcome
from schemesim.engine.times import DelayTimes
from schemesim.errors import InputError
from schemesim.scheme.distributions import Uniform
from schemesim.scheme.model import Role
from schemesim.study.measures import breakers_mean, cleared_by
from schemesim.study.montecarlo import Counts, simulate
from schemesim.study.tree import End, explore
from tests.unit.small_schemes import as_float, brute_force, case_of, feeder_scheme, voting_scheme

SEED = 20_240
TRIALS = 6_000


def measures(case: Case) -> dict[str, Callable[[Outcome], bool]]:
    """What both the tree and the trials tell."""
    out: dict[str, Callable[[Outcome], bool]] = {
        "cleared": lambda o: o.t_clear_us is not None,
        "in 200 ms": lambda o: o.t_clear_us is not None and o.t_clear_us <= 200_000,
        "selective": lambda o: o.tripped <= case.duty.intended,
        "no breaker": lambda o: not o.tripped,
        "two breakers": lambda o: len(o.tripped) == 2,
    }
    for role in (Role.MAIN, Role.BREAKER_FAILURE, Role.REMOTE):
        out[role.label] = lambda o, role=role: cleared_by(case, o) is role  # type: ignore[misc]
    return out


@pytest.fixture(scope="module")
def case() -> Case:
    return case_of(feeder_scheme(as_float))


@pytest.fixture(scope="module")
def counts(case: Case) -> Counts:
    return simulate(case, TRIALS, SEED)


@pytest.mark.parametrize("scheme", [feeder_scheme, voting_scheme], ids=["feeder", "voting"])
def test_trials_and_tree_tell_one_story(scheme: Any) -> None:
    """99.9 % family-wise over every measure both give (Clopper–Pearson covers never less)."""
    case = case_of(scheme(as_float))
    tree, trials = explore(case, epsilon=1e-4), simulate(case, TRIALS, SEED)
    events = measures(case)
    assert trials.trials == TRIALS
    for name, event in events.items():
        share = trials.share(event, 1 - 0.001 / len(events), "clopper_pearson")
        bracket = tree.bracket(event)
        assert share.low <= bracket.high, name
        assert bracket.low <= share.high, name


def test_trials_against_brute_force(case: Case, counts: Counts) -> None:
    truth = brute_force(case)
    assert set(dict(counts.ends)) <= set(truth)  # nothing that cannot be
    for end, p in truth.items():
        share = counts.share(lambda o, end=end: o == end.outcome, 1 - 0.001 / len(truth), "clopper_pearson")  # type: ignore[misc]
        same = sum(q for e, q in truth.items() if e.outcome == end.outcome)
        assert share.low <= same <= share.high, p


def test_mean_of_the_trials(case: Case, counts: Counts) -> None:
    tree = explore(case, epsilon=0)
    mean = counts.mean(lambda e: len(e.outcome.tripped), 0.999)
    exact = breakers_mean(tree, case).bracket
    assert mean.low <= exact.high
    assert exact.low <= mean.high
    assert mean.low < mean.estimate < mean.high < mean.low + 0.1


@pytest.mark.parametrize("delay", [None, Uniform(40_000, 60_000)], ids=["fixed", "random"])
def test_chunks_add_up_to_one_run(delay: Uniform | None) -> None:
    case = case_of(feeder_scheme(as_float, delay))
    whole = simulate(case, 300, SEED)
    parts = [simulate(case, n, SEED, first, chunk=7) for first, n in ((0, 100), (100, 1), (101, 199))]
    assert parts[0] + parts[1] + parts[2] == whole
    assert (parts[2] + parts[0]) + parts[1] == whole
    assert whole.ranges == ((0, 300),)
    assert simulate(case, 300, SEED + 1).ends != whole.ends


@pytest.mark.parametrize("scheme", [feeder_scheme, voting_scheme], ids=["feeder", "voting"])
def test_trials_run_together_end_as_each_run_on_its_own(scheme: Any) -> None:
    case = case_of(scheme(as_float))
    assert not case.random
    each = Counter(
        End(r.outcome, r.final_mask)
        for r in (run_event(case, DrawnAnswers(case.program, SEED, t)) for t in range(5, 705))
    )
    assert dict(simulate(case, 700, SEED, first_trial=5, chunk=300).ends) == each
    assert len(each) > 2


def test_trials_with_random_times_end_as_each_run_on_its_own() -> None:
    case = case_of(feeder_scheme(as_float, Uniform(40_000, 60_000)), observe=("M1.trip",))
    each = [
        run_event(case, DrawnAnswers(case.program, SEED, t), times=DelayTimes(SEED, t)) for t in range(5, 405)
    ]
    counts = simulate(case, 400, SEED, first_trial=5, chunk=170)
    found: Counter[End] = Counter()
    for end, times in counts.ends:
        found[End(end.outcome.without_via(), end.final_mask)] += times
    assert found == Counter(End(r.outcome.without_via(), r.final_mask) for r in each)
    assert counts.t_clear_us().tolist() == sorted(
        r.outcome.t_clear_us for r in each if r.outcome.t_clear_us is not None
    )
    assert any(r.outcome.operated for r in each)


@pytest.mark.parametrize("delay", [None, Uniform(40_000, 60_000)], ids=["fixed", "random"])
def test_cleared_is_the_share_of_its_event(delay: Uniform | None) -> None:
    counts = simulate(case_of(feeder_scheme(as_float, delay)), 400, SEED)
    assert counts.cleared() == counts.share(lambda o: o.t_clear_us is not None)
    edge = int(counts.t_clear_us()[200])
    within = counts.cleared(edge, 0.9, "clopper_pearson")
    assert within == counts.share(lambda o: o.t_clear_us is not None and o.t_clear_us <= edge, 0.9, "clopper_pearson")
    assert counts.cleared(edge - 1).successes < within.successes <= counts.cleared().successes
    with pytest.raises(InputError, match="interval"):
        counts.cleared(method="normal")  # type: ignore[arg-type]  # that is the test


@pytest.mark.parametrize("delay", [None, Uniform(40_000, 60_000)], ids=["fixed", "random"])
def test_breakers_are_counted_as_the_outcomes_tell(delay: Uniform | None) -> None:
    counts = simulate(case_of(feeder_scheme(as_float, delay)), 300, SEED)
    told = Counter(len(end.outcome.tripped) for end, n in counts.ends for _ in range(n))
    assert {few: share.successes for few, share in counts.breakers().items()} == dict(told)


def test_answers_drawn_in_a_row_are_those_drawn_one_by_one(case: Case) -> None:
    program = case.program
    for q, question in enumerate(program.questions):
        row = drawn_answers(program, SEED, q, 3, 200)
        each = [DrawnAnswers(program, SEED, t).answer(q, question.probability) for t in range(3, 203)]
        assert row.tolist() == each


def test_random_delays_are_drawn() -> None:
    """Main trips at 20 ms, its breaker takes 40 to 60 ms; half of the trials or more are such."""
    counts = simulate(case_of(feeder_scheme(as_float, Uniform(40_000, 60_000))), 50, 1)
    times = [e.outcome.t_clear_us for e, _ in counts.ends if e.outcome.t_clear_us]
    early = [t for t in times if t <= 80_000]
    assert len(early) > 25
    assert len(set(early)) > 20
    assert min(early) >= 60_000


@pytest.mark.parametrize("pool", [ThreadPoolExecutor, ProcessPoolExecutor])
def test_any_executor_gives_the_same(pool: Any, case: Case) -> None:
    with pool(2) as executor:
        assert simulate(case, 120, SEED, executor=executor, chunk=50) == simulate(case, 120, SEED)


def test_no_trials(case: Case) -> None:
    none = simulate(case, 0, SEED)
    assert none.trials == 0
    share = none.share(lambda _: True)
    assert (share.low, share.high) == (0, 1)
    with pytest.raises(InputError, match="trials"):
        none.mean(lambda _: 1.0)


def test_counts_refuse_what_does_not_add(case: Case) -> None:
    one = simulate(case, 10, SEED)
    with pytest.raises(InputError, match="not counted before"):
        _ = one + simulate(case, 1, SEED, 9)
    with pytest.raises(InputError, match="seed"):
        _ = one + simulate(case, 1, SEED + 1, 10)
    with pytest.raises(InputError, match="counts of 'F1'"):
        _ = one + simulate(case_of(feeder_scheme(as_float), "F2"), 1, SEED, 10)
    with pytest.raises(InputError, match="interval"):
        one.share(lambda _: True, method="normal")  # type: ignore[arg-type]  # that is the test


@pytest.mark.parametrize("bad", [{"trials": -1}, {"seed": -1}, {"trials": 1.5}, {"first_trial": -1}, {"chunk": 0}])
def test_bad_numbers_are_refused(bad: dict[str, Any], case: Case) -> None:
    options = {"trials": 1, "seed": 0, **bad}
    with pytest.raises(InputError, match=next(iter(bad))):
        simulate(case, **options)


def test_fractions_are_drawn_too() -> None:
    counts = simulate(case_of(feeder_scheme(Fraction)), 50, SEED)
    assert counts == simulate(case_of(feeder_scheme(as_float)), 50, SEED)
