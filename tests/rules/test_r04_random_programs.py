"""R3, R4 and the rest on random programs: what holds for every scheme, whatever it is.

Search further with ``pytest tests/rules/test_r04_random_programs.py --hypothesis-profile=search``.
"""

from __future__ import annotations

from collections.abc import Iterator
from fractions import Fraction
from random import Random

from hypothesis import given, settings
from hypothesis import strategies as st

from schemesim.engine.answers import FixedAnswers, ForcedAnswers
from schemesim.engine.case import Case, bind
from schemesim.engine.event import EventRun, run_event
from schemesim.engine.outcome import Outcome, Run
from schemesim.engine.program import Kind, Program
from schemesim.engine.rules import UNKNOWN
from schemesim.engine.sensing import Event, LogicalSensing
from schemesim.errors import RunError
from schemesim.scheme.model import Probability, Sense
from tests.rules.naive import Naive, Seen, Unsettled
from tests.rules.random_schemes import HORIZON_US, Sample, random_state, sample, samples, shuffled, states

seeds = st.integers(0, 2**32)
few = settings(max_examples=60 if settings().max_examples <= 100 else settings().max_examples)


class Everywhere(LogicalSensing):
    """Takes every sense block as a candidate, so that a case is cut as little as can be."""

    def candidates(self, program: Program, event: Event, dispatch: str | None) -> list[int]:  # noqa: ARG002
        return [i for i, b in enumerate(program.blocks) if isinstance(b, Sense)]


def bound(s: Sample, program: Program, sensing: LogicalSensing | None = None) -> Case:
    return bind(program, s.event, sensing or LogicalSensing(), observe=s.observe)


def run(case: Case, yes: frozenset[str], log: bool = False) -> Run | None:
    """A run with the failures named, or None where an instant does not settle."""
    try:
        return run_event(case, FixedAnswers(case.program, yes), log=log, horizon_us=HORIZON_US)
    except RunError:
        return None


def seen(outcome: Outcome) -> Seen:
    return Seen(
        outcome.t_clear_us,
        frozenset((o.breaker, o.t_trip_us, o.t_open_us, int(o.role), o.interrupted) for o in outcome.openings),
        frozenset(outcome.operated),
    )


def cases(count: int, size: int) -> Iterator[tuple[Sample, Case, frozenset[str]]]:
    for seed in range(count):
        rng = Random(seed)
        s = sample(rng, size)
        program = s.program
        yield s, bound(s, program), random_state(program, rng)


@settings(max_examples=4 * few.max_examples)
@given(samples(), seeds)
def test_r04_agrees_with_a_naive_reading_that_knows_every_failure_from_the_start(s: Sample, seed: int) -> None:
    program = s.program
    case, rng = bound(s, program), Random(seed)
    for _ in range(3):
        yes = random_state(program, rng)
        try:
            expected = Naive(program, s.event, yes, s.observe, HORIZON_US).run()
        except Unsettled:
            continue
        found = run(case, yes)
        assert found is not None
        assert seen(found.outcome) == expected


@few
@given(samples(2), seeds)
def test_r04_flipping_any_question_not_asked_changes_nothing(s: Sample, seed: int) -> None:
    program = s.program
    case = bound(s, program)
    yes = random_state(program, Random(seed))
    first = run(case, yes)
    if first is None:
        return
    asked = {program.questions[q].name for q, _ in first.asked}
    for q in program.questions:
        if q.name not in asked:
            again = run(case, yes ^ {q.name})
            assert again is not None
            assert (again.outcome, again.asked, again.probabilities) == (
                first.outcome,
                first.asked,
                first.probabilities,
            )


@few
@given(samples(), seeds)
def test_r03_the_order_of_declaration_changes_nothing(s: Sample, seed: int) -> None:
    rng = Random(seed)
    program, other = s.program, shuffled(s, rng)
    yes = random_state(program, rng)
    again = other.program
    assert [q.name for q in again.questions] == [q.name for q in program.questions]
    first, second = run(bound(s, program), yes, log=True), run(bound(other, again), yes, log=True)
    if first is None or second is None:
        assert first is second
        return
    assert second.outcome == first.outcome
    assert second.asked == first.asked
    assert second.probabilities == first.probabilities
    assert second.log == first.log


def leaves(case: Case) -> Iterator[tuple[dict[int, bool], Fraction, Outcome]]:
    """Every run there is, by the answers that were asked, with its probability."""
    stack: list[dict[int, bool]] = [{}]
    while stack:
        forced = stack.pop()
        found = run_event(case, ForcedAnswers(forced), horizon_us=HORIZON_US)
        mass = Fraction(1)
        before: dict[int, bool] = {}
        for (q, yes), p in zip(found.asked, _fractions(found.probabilities), strict=True):
            if q not in forced and p > 0:
                stack.append({**before, q: True})
            before[q] = yes
            mass *= p if yes else 1 - p
        if mass > 0:
            yield dict(found.asked), mass, found.outcome


def _fractions(items: tuple[object, ...]) -> list[Fraction]:
    return [p if isinstance(p, Fraction) else Fraction(str(p)) for p in items]


@settings(max_examples=few.max_examples // 2)
@given(samples(1))
def test_r04_the_tree_of_asked_answers_sums_to_brute_force_over_all_states(s: Sample) -> None:
    program = s.program
    every = states(program)
    if len(every) > 800:
        return
    case = bound(s, program)
    tree: dict[Outcome, Fraction] = {}
    try:
        for _, mass, outcome in leaves(case):
            tree[outcome] = tree.get(outcome, Fraction(0)) + mass
    except RunError:
        return
    brute: dict[Outcome, Fraction] = {}
    for yes, mass in every:
        found = run(case, yes)
        assert found is not None
        brute[found.outcome] = brute.get(found.outcome, Fraction(0)) + mass
    assert sum(tree.values()) == 1
    assert tree == brute


@few
@given(samples(), seeds)
def test_r04_the_outcome_is_a_function_of_the_asked_answers(s: Sample, seed: int) -> None:
    program = s.program
    case = bound(s, program)
    first = run(case, random_state(program, Random(seed)))
    if first is None:
        return
    again = run_event(case, ForcedAnswers(dict(first.asked)), horizon_us=HORIZON_US)
    assert (again.outcome, again.asked, again.probabilities) == (first.outcome, first.asked, first.probabilities)
    assert len({q for q, _ in first.asked}) == len(first.asked), "a question is asked once"


@few
@given(samples(), seeds)
def test_r04_keeping_a_log_and_cutting_to_a_case_lose_nothing(s: Sample, seed: int) -> None:
    program = s.program
    yes = random_state(program, Random(seed))
    case, wide = bound(s, program), bound(s, program, Everywhere())
    plain, logged, uncut = run(case, yes), run(case, yes, log=True), run(wide, yes)
    if plain is None or logged is None or uncut is None:
        return
    assert set(case.names) <= set(wide.names)
    assert logged.outcome == plain.outcome
    assert logged.asked == plain.asked
    assert not plain.log
    assert uncut.outcome == plain.outcome
    assert set(plain.asked) <= set(uncut.asked)  # what leads nowhere for this event is asked only uncut


@few
@given(samples(), seeds)
def test_r01_r02_times_are_whole_and_nothing_live_is_left_unknown(s: Sample, seed: int) -> None:
    program = s.program
    case = bound(s, program)
    going = Watched(case, random_state(program, Random(seed)))
    try:
        found = going.finish()
    except RunError:
        return
    times = [t for o in found.outcome.openings for t in (o.t_trip_us, o.t_open_us)]
    times += [row.t_us for row in found.log]
    assert all(type(t) is int for t in times)
    assert [row.t_us for row in found.log] == sorted(row.t_us for row in found.log)
    assert all(row.cause < row.index for row in found.log)
    assert all(r.margin_us is None or r.margin_us >= 0 for r in found.log)


class Watched(EventRun):
    """Looks at the inputs of every live timer, latch and breaker after each pass."""

    def __init__(self, case: Case, yes: frozenset[str]) -> None:
        super().__init__(case, FixedAnswers(case.program, yes), None, True, HORIZON_US, ())

    def _follow(self, sensed: tuple[int, ...]) -> None:
        super()._follow(sensed)
        for i, kind in enumerate(self.case.kind):
            if kind is Kind.TIMER and self.logic.matters(i):
                assert all(self.logic.value[j] != UNKNOWN for j, _ in self.case.inputs[i])
            if kind is Kind.BREAKER and i not in self.logic.mode_of:
                coils = self.case.inputs[i][: self.case.coils[i]]
                assert all(self.logic.value[j] != UNKNOWN for j, _ in coils)


def test_the_random_programs_reach_what_they_are_meant_to_reach() -> None:
    met = {"cleared": 0, "not cleared": 0, "later trip": 0, "reclosed": 0, "asked over 3": 0, "back-up": 0}
    met |= {"tie": 0, "quiet": 0, "reset": 0, "late": 0, "stuck": 0}
    for _, case, yes in cases(150, 4):
        found = run(case, yes, log=True)
        if found is None:
            continue
        o = found.outcome
        met["cleared"] += o.t_clear_us is not None
        met["not cleared"] += o.status == "not cleared"
        met["later trip"] += any(x.t_trip_us > 60_000 for x in o.openings)
        met["reclosed"] += any(r.what == "closes" for r in found.log)
        met["stuck"] += any(r.what == "does not open" for r in found.log)
        met["reset"] += any(r.what == "is reset" for r in found.log)
        met["asked over 3"] += len(found.asked) > 3
        met["back-up"] += any(x.role > 2 for x in o.openings)
        met["late"] += any(not x.interrupted for x in o.openings)
        met["tie"] += any(r.pass_no > 1 for r in found.log)
        met["quiet"] += not o.openings
    assert min(met.values()) >= 3, met


def test_r04_conditional_probabilities_of_exclusive_modes_stay_probabilities() -> None:
    for _, case, yes in cases(150, 3):
        found = run(case, yes)
        for p in found.probabilities if found else ():
            number: Probability = p  # type: ignore[assignment]  # typed as object by the run
            assert 0 < number <= 1


