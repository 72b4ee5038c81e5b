"""Importance over locations: held to sums over every state of a small scheme, and to closed forms."""

from __future__ import annotations

import math
from collections.abc import Callable
from fractions import Fraction

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Outcome
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.study.brackets import exactly
from schemesim.study.importance import modes_of
from schemesim.study.importance_study import ImportanceStudy, Spoils, study_importance
from schemesim.study.tree import explore
from tests.unit.small_schemes import case_of, feeder_scheme, program_of, states

LIMIT_US = 200_000
F1, F2, BUS, INFEED = (Location(x) for x in ("F1", "F2", "B", "IN"))
FAULTS = {F1: 3.0, F2: 1.0, BUS: 0.5}


def study(event: Spoils, **more: object) -> ImportanceStudy:
    options: dict[str, object] = {"epsilon": 0, "epsilon_given": 0, "frequencies": FAULTS, **more}
    return study_importance(
        program_of(feeder_scheme()), LogicalSensing(), list(FAULTS), limit_us=LIMIT_US, event=event,
        **options,  # type: ignore[arg-type]
    )  # fmt: skip


def by_all_states(event: Callable[[Outcome], bool], component: str) -> tuple[Fraction, Fraction]:
    """P(event | failed) and P(event | not failed), over the faults, one run for each state of the components."""
    program = program_of(feeder_scheme())
    modes = set(modes_of(program)[component])
    sums = {(failed, bad): Fraction(0) for failed in (True, False) for bad in (True, False)}
    for at, rate in FAULTS.items():
        case = case_of(feeder_scheme(), at.section)
        for yes, p in states(program):
            bad = event(run_event(case, FixedAnswers(program, yes)).outcome)
            sums[(bool(modes & yes), bad)] += p * Fraction(rate) / Fraction(sum(FAULTS.values()))
    return (
        sums[(True, True)] / (sums[(True, True)] + sums[(True, False)]),
        sums[(False, True)] / (sums[(False, True)] + sums[(False, False)]),
    )


def late(outcome: Outcome) -> bool:
    return outcome.t_clear_us is None or outcome.t_clear_us > LIMIT_US


@pytest.mark.parametrize("component", ["M1", "CB1", "common cause same settings"])
def test_every_figure_follows_from_all_states(component: str) -> None:
    """M1 and CB1 have two modes each: a component fails by any of them."""
    found = study(Spoils.LATE).of(component)
    one, none = by_all_states(late, component)
    p = found.probability
    event = p * one + (1 - p) * none
    assert (found.p_event_given_failure, found.p_event_given_none) == (exactly(one), exactly(none))
    assert found.birnbaum == exactly(one - none)
    assert found.criticality_ratio == exactly((one - none) * p / event)
    assert found.risk_achievement_worth == exactly(one / event)
    assert found.risk_reduction_worth == exactly(event / none)


@pytest.mark.parametrize("given", [0, 0.05, 1], ids=["trees on condition", "some", "leaves alone"])
def test_brackets_of_unfinished_trees_hold_the_exact_figures(given: float) -> None:
    exact, rough = study(Spoils.LATE), study(Spoils.LATE, epsilon=0.03, epsilon_given=given)
    assert 0 < len(rough.items) <= len(exact.items)
    for item in rough.items:
        truth = exact.of(item.failure)
        for figure in ("birnbaum", "criticality_ratio", "risk_achievement_worth", "risk_reduction_worth"):
            wide, narrow = getattr(item, figure), getattr(truth, figure)
            assert wide.low <= narrow.low, (item.failure, figure)
            assert narrow.high <= wide.high, (item.failure, figure)
    assert rough.p_event.width > 0


def test_a_wide_bracket_takes_more_trees_and_becomes_narrower() -> None:
    """P(event | failed) of every item from the leaves of a tree cut off early, and from trees on that condition."""
    leaves, more = (study(Spoils.LATE, epsilon=0.03, epsilon_given=given) for given in (1, 0))
    assert sum(a.runs for a in more.at) > sum(a.runs for a in leaves.at)
    widths = [(of.of(i.failure).p_event_given_failure.width, i.p_event_given_failure.width)
              for of, i in ((leaves, i) for i in more.items)]  # fmt: skip
    assert all(after <= before for before, after in widths)
    assert any(after < before for before, after in widths)


def test_what_no_run_of_a_case_asks_about_has_no_importance_there() -> None:
    """F1's relay is asked nothing of in a fault on F2: the difference is exactly nought there, in any tree."""
    program = program_of(feeder_scheme())
    asks = {a.location: a.asks for a in study(Spoils.LATE, max_runs=1).at}
    for at in FAULTS:
        case = case_of(feeder_scheme(), at.section)
        met = {program.questions[q] for leaf in explore(case, epsilon=0).leaves for q, _ in leaf.asked}
        assert {q.component or q.name for q in met} <= asks[at]
    assert "CB1" in asks[F1]
    assert "CB1" not in asks[F2]


def test_what_is_in_no_leaf_is_bounded_by_the_unexplored_mass() -> None:
    """One run only: no failure at all is explored, so everything unasked could matter as much as what is left."""
    few = study(Spoils.NOT_CLEARED, max_runs=1)
    exact = study(Spoils.NOT_CLEARED)
    seen = {i.failure for i in few.items}
    others = set(modes_of(program_of(feeder_scheme()))) - seen
    assert few.others == len(others) > 0
    for name in others:
        birnbaum = next((i.birnbaum for i in exact.items if i.failure == name), exactly(0))
        assert birnbaum.high <= few.others_at_most


def test_a_back_up_that_every_loss_needs_has_all_the_criticality() -> None:
    """Nothing but the infeed's relay stands between a feeder fault that is not tripped and one that stays."""
    only = study_importance(
        program_of(feeder_scheme()),
        LogicalSensing(),
        [F1],
        limit_us=LIMIT_US,
        event="not cleared",
        epsilon=0,
        epsilon_given=0,
    )
    infeed = only.of("IN")
    assert infeed.criticality_ratio == exactly(1)
    assert infeed.risk_reduction_worth.high == math.inf
    assert only.faults_per_yr is None
    assert only.avoided_per_yr(infeed) is None


def test_the_table_is_sorted_by_what_is_asked_for() -> None:
    found = study(Spoils.LATE)
    for by in ("criticality_ratio", "birnbaum", "risk_achievement_worth", "risk_reduction_worth"):
        lows = found.table(by)[f"{by}_low"].tolist()  # exact trees: low and high are one
        assert lows == sorted(lows, reverse=True)
        assert len(lows) == len(found.items)
    # What an item's perfection would avoid in a year is at most all the late faults.
    late_per_yr = found.p_event.low * Fraction(found.faults_per_yr or 0)
    assert found.faults_per_yr == pytest.approx(4.5)
    assert 0 < max(found.table()["avoided_per_yr_high"]) <= float(late_per_yr)


def test_mistakes() -> None:
    with pytest.raises(InputError, match="event: got 'lost', expected one of"):
        study("lost")  # type: ignore[arg-type]
    with pytest.raises(InputError, match="faults per year at F1"):
        study(Spoils.LATE, frequencies={F1: -1.0})
    with pytest.raises(InputError, match="with faults, at least"):
        study(Spoils.LATE, frequencies={F1: 0.0})
    with pytest.raises(InputError, match="M1"):
        study(Spoils.LATE).of("M11")
    with pytest.raises(InputError, match="figure to sort by"):
        study(Spoils.LATE).table("weight")
