"""Every measure of a fault on a small feeder, against sums worked out by hand in fractions."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Outcome, Status
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.scheme.model import Gate, Role, Scheme
from schemesim.study.brackets import Bracket, exactly
from schemesim.study.dependability import outputs_of, study_dependability
from schemesim.study.importance import importance, importance_table, p_component_failed
from schemesim.study.losses import energy_lost_mwh, load_lost_mw, lost, sections_lost
from schemesim.study.measures import (
    Quantile,
    breakers_distribution,
    breakers_excess,
    breakers_mean,
    cleared_by,
    clearing_time,
    excess_distribution,
    nominal,
    p_by_main,
    p_by_role,
    p_cleared,
    p_selective,
    p_undetermined,
    p_within_limit,
)
from schemesim.study.no_fault import study_no_fault
from schemesim.study.races import limit_margin_us, narrowest_races, races, races_table
from schemesim.study.tree import Tree, explore
from schemesim.study.weak_points import minimal_sets, single_points
from tests.unit.small_schemes import case_of, feeder_scheme, program_of

F = Fraction
DC, M1, SLOW, M2, BF, IN, CAUSE = F(1, 100), F(1, 50), F(1, 20), F(1, 25), F(1, 10), F(1, 30), F(1, 200)
STUCK, LATE = F(1, 8), F(1, 16)
FINE = 1 - STUCK - LATE
NO_TRIP = DC + (1 - DC) * (CAUSE + (1 - CAUSE) * M1 * M2)
TRIP = 1 - NO_TRIP
SLOW_TRIP = (1 - DC) * (1 - CAUSE) * SLOW * M2  # the trip comes 100 ms later

# F1's breaker opens at 70 ms (slow: 170); a late one at 320 (420), overtaken by breaker failure at 220 (320);
# the infeed's own timer runs out at 420 and its breaker opens at 470.
MAIN = TRIP * (FINE + LATE * BF)
BREAKER_FAILURE = TRIP * (STUCK + LATE) * (1 - BF)
REMOTE = (NO_TRIP + TRIP * STUCK * BF) * (1 - IN)
NOT_CLEARED = (NO_TRIP + TRIP * STUCK * BF) * IN
RACE = SLOW_TRIP * LATE * BF * (1 - IN)  # both breakers: 420 ms is just when the timer runs out
BOTH_OPEN = TRIP * LATE * (1 - BF) + RACE
INFEED_ALONE = TRIP * STUCK * (1 - BF) + REMOTE

LIMIT_US = 200_000


@pytest.fixture(scope="module")
def case() -> Case:
    return case_of(feeder_scheme())


@pytest.fixture(scope="module")
def tree(case: Case) -> Tree:
    return explore(case, epsilon=0)


def not_cleared(outcome: Outcome) -> bool:
    return outcome.status is Status.NOT_CLEARED


def test_the_hand_worked_parts_are_everything() -> None:
    assert MAIN + BREAKER_FAILURE + REMOTE + NOT_CLEARED == 1


def test_cleared(tree: Tree) -> None:
    assert p_cleared(tree) == exactly(1 - NOT_CLEARED)
    assert p_undetermined(tree) == exactly(0)


def test_within_the_limit(tree: Tree) -> None:
    assert p_within_limit(tree, LIMIT_US) == exactly(TRIP * FINE)
    assert p_within_limit(tree, 169_999) == exactly((TRIP - SLOW_TRIP) * FINE)
    assert p_within_limit(tree, 170_000) == exactly(TRIP * FINE)


def test_by_what_it_is_cleared(case: Case, tree: Tree) -> None:
    assert p_by_main(tree, case) == exactly(MAIN)
    expected = {Role.MAIN: MAIN, Role.BREAKER_FAILURE: BREAKER_FAILURE, Role.REMOTE: REMOTE}
    assert p_by_role(tree, case) == {role: exactly(expected.get(role, F(0))) for role in Role}


def test_main_in_a_timed_zone_is_shown_apart() -> None:
    scheme = feeder_scheme()
    timed = replace(scheme.contacts["M2.trip"], role=Role.MAIN_TIMED)
    blocks = tuple(
        replace(b, contact=timed) if isinstance(b, Gate) and b.name == "M2.trip" else b for b in scheme.blocks
    )
    case = case_of(Scheme(scheme.components, blocks, scheme.common_causes))
    roles = p_by_role(explore(case, epsilon=0), case)
    # Both at 20 ms: the tie goes to the main zone. M2 alone clears where M1 fails (its cause takes both) or is slow.
    m2_alone = (1 - DC) * (1 - CAUSE) * (M1 + SLOW) * (1 - M2)
    assert roles[Role.MAIN_TIMED] == exactly(m2_alone * (FINE + LATE * BF))
    assert roles[Role.MAIN] == exactly((TRIP - m2_alone) * (FINE + LATE * BF))


def test_cleared_by_leaves_out_what_was_not_needed(case: Case) -> None:
    """The breaker is late, breaker failure clears at 220 ms; the opening at 320 does not count."""
    ran = run_event(case, FixedAnswers(case.program, ["CB1: opens_late"]))
    assert [(o.breaker, o.t_open_us) for o in ran.outcome.openings] == [("IN.CB", 220_000), ("F1.CB", 320_000)]
    assert cleared_by(case, ran.outcome) is Role.BREAKER_FAILURE
    assert cleared_by(case, run_event(case, FixedAnswers(case.program, ["DC: lost"])).outcome) is Role.REMOTE


def test_selective(case: Case, tree: Tree) -> None:
    assert p_selective(tree, case) == exactly(1 - BOTH_OPEN - INFEED_ALONE)


def test_breakers_tripped(case: Case, tree: Tree) -> None:
    assert breakers_distribution(tree) == {
        0: exactly(NOT_CLEARED),
        1: exactly(1 - NOT_CLEARED - BOTH_OPEN),
        2: exactly(BOTH_OPEN),
    }
    assert excess_distribution(tree, case) == {
        0: exactly(1 - BOTH_OPEN - INFEED_ALONE),
        1: exactly(BOTH_OPEN + INFEED_ALONE),
    }
    assert breakers_mean(tree, case).bracket == exactly(1 - NOT_CLEARED + BOTH_OPEN)
    assert breakers_excess(tree, case).bracket == exactly(BOTH_OPEN + INFEED_ALONE)


def test_means_of_an_unfinished_tree_hold(case: Case, tree: Tree) -> None:
    whole = breakers_mean(tree, case).bracket.low
    for budget in range(1, tree.runs, 5):
        part = explore(case, epsilon=0, max_runs=budget)
        mean = breakers_mean(part, case)
        assert mean.bracket.contains(whole)
        assert mean.bracket.width == 2 * part.unexplored  # at most the two breakers of the case
        assert mean.explored == mean.bracket.low
        assert load_lost_mw(part, case).bracket.contains(load_lost_mw(tree, case).bracket.low)


def test_clearing_time(tree: Tree) -> None:
    clearing = clearing_time(tree)
    at_170 = SLOW_TRIP * FINE
    expected = {
        70_000: (TRIP - SLOW_TRIP) * FINE,
        170_000: at_170,
        220_000: (TRIP - SLOW_TRIP) * (STUCK + LATE) * (1 - BF),
        320_000: SLOW_TRIP * (STUCK + LATE) * (1 - BF) + (TRIP - SLOW_TRIP) * LATE * BF,
        420_000: SLOW_TRIP * LATE * BF,
        470_000: REMOTE,
    }
    so_far = F(0)
    for t, bracket in clearing.cdf:
        so_far += expected.pop(t)
        assert bracket == exactly(so_far)
    assert not expected
    assert clearing.worst_us == 470_000
    assert clearing.worst_probability == exactly(REMOTE)
    assert clearing.quantile(0.5) == Quantile(70_000, 70_000)
    assert clearing.quantile(0.95) == Quantile(220_000, 220_000)  # 79.9 % by 70, 80.0 % by 170, 96.6 % by 220
    assert clearing.quantile(1) == Quantile(None, None)  # the rest is never cleared
    with pytest.raises(InputError, match="share"):
        clearing.quantile(0)


def test_quantile_of_an_unfinished_tree_is_open(case: Case) -> None:
    one = clearing_time(explore(case, epsilon=0, max_runs=1))
    assert one.quantile(0.5) == Quantile(70_000, 70_000)  # 73 % seen so far
    assert one.quantile(0.95) == Quantile(70_000, None)
    assert one.quantile(0.2) == Quantile(0, 70_000)  # what is unexplored might come at once


def test_load_and_sections_lost(case: Case, tree: Tree) -> None:
    """F1's breaker alone: 10 MW and two sections; with the infeed's: 15 MW, all but the infeed's two."""
    bit = {case.names[b]: 1 << n for n, b in enumerate(case.breakers)}
    assert lost(case, bit["F1.CB"]) == (10, ("F1", "F1.c"))
    assert lost(case, bit["IN.CB"]) == (15, ("B", "F1", "F1.c", "F2", "F2.c"))
    infeed = BOTH_OPEN + INFEED_ALONE
    only_f1 = 1 - infeed - NOT_CLEARED
    mw, mwh = load_lost_mw(tree, case).bracket, energy_lost_mwh(tree, case, 2).bracket
    assert mw.contains(10 * only_f1 + 15 * infeed)  # loads are floats: rounded outward
    assert mwh.contains(20 * only_f1 + 30 * infeed)
    assert mw.width < 1e-12
    assert mwh.width < 1e-12
    assert sections_lost(tree, case).bracket == exactly(2 * only_f1 + 5 * infeed)
    with pytest.raises(InputError, match="restoration"):
        energy_lost_mwh(tree, case, math.inf)


def test_nominal(tree: Tree) -> None:
    outcome = nominal(tree)
    assert outcome is not None
    assert (outcome.t_clear_us, outcome.tripped) == (70_000, frozenset({"F1.CB"}))


def test_single_points(case: Case, tree: Tree) -> None:
    """Limit 200 ms: a breaker that stays or is late, the common DC supply and the common cause cost time."""
    found = {s.failure: (s.kind, s.late, s.excess) for s in single_points(tree, case, LIMIT_US)}
    late = ("late", True, 1)
    assert found == {
        "CB1: does_not_open": late,
        "CB1: opens_late": late,
        "DC: lost": late,
        "common cause same settings": late,
    }
    quick = explore(case, epsilon=F(1, 2), complete=1)
    assert single_points(quick, case, LIMIT_US) == single_points(tree, case, LIMIT_US)
    assert {s.kind for s in single_points(tree, case)} == {"more breakers"}
    assert all(s.kind == "not cleared" for s in single_points(*_without_back_up()))


def _without_back_up() -> tuple[Tree, Case]:
    scheme = feeder_scheme()
    case = case_of(Scheme(scheme.components, scheme.blocks, scheme.common_causes, frozenset({"IN", "BF"})))
    return explore(case, epsilon=0), case


def test_single_points_without_back_up() -> None:
    tree, case = _without_back_up()
    names = [s.failure for s in single_points(tree, case)]
    assert names == ["CB1: does_not_open", "DC: lost", "common cause same settings"]  # by probability


def test_minimal_sets(tree: Tree) -> None:
    sets = minimal_sets(tree, not_cleared)
    infeed = "IN: failure_to_operate"
    assert [(s.failures, s.probability) for s in sets] == [
        (("BF: failure_to_operate", "CB1: does_not_open", infeed), BF * STUCK * IN),
        (("DC: lost", infeed), DC * IN),
        (("common cause same settings", infeed), CAUSE * IN),
        ((infeed, "M1: failure_to_operate", "M2: failure_to_operate"), IN * M1 * M2),
    ]


def test_importance_by_hand(case: Case, tree: Tree) -> None:
    found = {i.failure: i for i in importance(case, not_cleared, epsilon=0)}
    infeed = found["IN: failure_to_operate"]
    assert infeed.birnbaum == exactly(NOT_CLEARED / IN)
    assert infeed.criticality_ratio == exactly(1)  # nothing stays without it
    assert infeed.risk_reduction_worth.high == math.inf
    assert found["M1: delayed_operation"].birnbaum.low < 0  # a slow relay has not failed: it excludes the worse mode
    assert p_component_failed(tree, "IN", not_cleared) == exactly(1)
    assert p_component_failed(tree, "BF", lambda _: True) == exactly(BF)  # asked or not
    assert p_component_failed(tree, "CB1", lambda _: True) == exactly(STUCK + LATE)
    dc = p_component_failed(tree, "DC", not_cleared)
    assert dc == exactly(DC * IN / NOT_CLEARED)
    assert dc == found["DC: lost"].p_failure_given_event
    assert found["DC: lost"].birnbaum == exactly(IN - (NOT_CLEARED - DC * IN) / (1 - DC))
    assert list(found)[:3] == ["DC: lost", "common cause same settings", "IN: failure_to_operate"]
    assert importance_table(found.values())["failure"].tolist() == list(found)


def test_races(case: Case) -> None:
    """F1's breaker opens at 70 ms. At 80 the zone drops out: breaker failure (due 170) has 90 ms left."""
    ran = run_event(case, FixedAnswers(case.program), log=True)
    assert [(r.timer, r.t_us, r.margin_us, r.stopped_by) for r in races(ran)] == [
        ("bf.timer", 80_000, 90_000, "starts"),
        ("reach.t", 80_000, 340_000, "reach"),
    ]
    assert limit_margin_us(ran, LIMIT_US) == 130_000
    assert limit_margin_us(run_event(case, FixedAnswers(case.program, ["DC: lost"])), LIMIT_US) == -270_000


def test_narrowest_races(case: Case, tree: Tree) -> None:
    """A late breaker: the infeed's timer (due 420) is stopped when the infeed opens at 220 and resets at 230."""
    single = {r.timer: r for r in narrowest_races(case, tree)}
    assert single["reach.t"].margin_us == 190_000
    assert single["reach.t"].failures in {("CB1: opens_late",), ("CB1: does_not_open",)}
    pair = {r.timer: r.margin_us for r in narrowest_races(case, tree, most_failures=2)}
    assert pair["reach.t"] == 90_000  # late, and no breaker failure: 320, reset 330
    assert list(races_table(single.values())["margin_ms"]) == [r.margin_us / 1000 for r in single.values()]


def test_dependability_of_each_set() -> None:
    """M2 trips unless it, the cause or the DC supply fails. A slow M1 operates only while the fault stays."""
    program, sensing = program_of(feeder_scheme()), LogicalSensing()
    at = [Location("F1"), Location("F2"), Location("B")]
    both = (1 - DC) * (1 - CAUSE)
    second = study_dependability(program, sensing, outputs_of(program.scheme, chain="2"), at, epsilon=0)
    assert second.dependability == exactly(both * (1 - M2))
    assert second.security == exactly(1)
    assert second.no_fault_per_yr == exactly(0)  # M1 tripping alone does not make M2 operate
    first = study_dependability(program, sensing, outputs_of(program.scheme, relay="M1"), at, epsilon=0)
    stays = M2 + (1 - M2) * (STUCK + LATE)
    assert first.dependability == exactly(both * (1 - M1 - SLOW + SLOW * stays))
    assert first.no_fault_per_yr.contains(F(1, 4) * (1 - DC))
    pair = study_dependability(program, sensing, outputs_of(program.scheme, element="F1"), at, epsilon=0)
    assert pair.dependability == exactly(TRIP)
    assert [str(j.location) for j in pair.judged if j.operates is not None] == ["F1"]
    with pytest.raises(InputError, match="did you mean 'M1'"):
        outputs_of(program.scheme, relay="M11")
    with pytest.raises(InputError, match="trip output"):
        study_dependability(program, sensing, ["coil"], at)


def test_no_fault_trips() -> None:
    """M1 trips alone 0.25 times a year: its breaker opens, or breaker failure opens the infeed on load current."""
    study = study_no_fault(program_of(feeder_scheme()), LogicalSensing(), epsilon=0)
    (trip,) = study.trips
    mean = (1 - DC) * (FINE + LATE * (1 + (1 - BF)) + STUCK * (1 - BF))
    assert (trip.component, trip.per_yr) == ("M1", 0.25)
    assert trip.breakers.bracket == exactly(mean)
    assert trip.p_any == exactly((1 - DC) * (1 - STUCK * BF))
    assert study.breakers_per_yr.contains(mean / 4)
    assert study.breakers_per_yr.width < 1e-12
    assert study.table()["freq_per_yr"].tolist() == [0.25]


def test_small_probabilities_keep_their_digits() -> None:
    """One less p_cleared would lose them; the bracket of the event itself does not."""
    scheme = feeder_scheme(lambda text: 1e-6 * float(F(text)))
    found = explore(case_of(scheme), epsilon=0).bracket(not_cleared)
    truth = explore(case_of(feeder_scheme(lambda text: F(1e-6 * float(F(text))))), epsilon=0).bracket(not_cleared).low
    assert 0 < truth < 1e-12
    assert isinstance(found, Bracket)
    assert found.contains(truth)
    assert found.width < 1e-13 * truth
