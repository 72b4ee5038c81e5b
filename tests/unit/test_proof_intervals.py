"""The scheme's risk against a test interval: trees weighed anew agree with closed forms and with new trees."""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.engine.case import Case, bind
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.scheme.conditions import InZone
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import (
    Ask,
    Breaker,
    CommonCause,
    ComponentKind,
    Contact,
    FailureMode,
    Gate,
    Role,
    Scheme,
    Sense,
)
from schemesim.scheme.redundancy import redundant
from schemesim.scheme.unavailability import RateData, RateRule, optimal_interval_yr, unavailability
from schemesim.study.ages import at_time, class_of, questions_at, weighed
from schemesim.study.proof_intervals import IntervalStudy, TestCosts, study_test_intervals
from schemesim.study.tree import explore
from tests.unit.small_schemes import ms, radial_plant

RELAY, FTO = ComponentKind.RELAY, FailureMode.FAILURE_TO_OPERATE
AT = Location("F1")
LIMIT_US = 150_000


def data_of(item: RateData, *, staggered: bool = False, beta: float = 0.0) -> FailureData:
    rule = RateRule(kind=RELAY, mode=FTO, data=item, staggered=staggered)
    return FailureData(modes={}, no_fault_per_yr={}, rates=(rule,), relay_beta=beta)


def program_of(data: FailureData, count: int, needed: int) -> Program:
    """A feeder whose breaker is tripped where so many of its relays see the fault."""
    names = [f"R {n + 1}" for n in range(count)]
    relays = [data.component(name, RELAY) for name in names]
    changed, causes = data.share({"R": relays})
    mark = Contact("50", Role.MAIN, frozenset({"F1"}))
    scheme = Scheme(
        tuple(changed.get(c.name, c) for c in relays),
        (
            Sense(name="zone", condition=InZone(frozenset({"F1"}), ("F1.CT",)), operate=ms(20), reset=ms(10)),
            *(Gate(name=f"{n} sees", inputs=("zone",), unless=(Ask(n, FTO),)) for n in names),
            Gate(name="trip", inputs=tuple(f"{n} sees" for n in names), k=needed, contact=mark),
            Breaker(name="F1.CB", coils=("trip",), interrupting=ms(50), auxiliary=ms(5)),
        ),
        causes,
    )
    return compile_scheme(radial_plant(), scheme)


def study(data: FailureData, count: int, needed: int, *intervals: float, **more: object) -> IntervalStudy:
    options: dict[str, object] = {"kind": RELAY, "limit_us": LIMIT_US, "epsilon": 0.0} | more
    program = program_of(data, count, needed)
    return study_test_intervals(program, data, LogicalSensing(), [AT], intervals_yr=intervals, **options)  # type: ignore[arg-type]  # by name


@pytest.mark.parametrize("staggered", [False, True])
@pytest.mark.parametrize(("needed", "count"), [(1, 1), (1, 2), (2, 2), (2, 3), (1, 3)])
@pytest.mark.parametrize("beta", [0.0, 0.2])
def test_a_vote_of_relays_is_the_redundant_group(needed: int, count: int, staggered: bool, beta: float) -> None:
    """Another way to the same: the group's own quadrature of the closed form.

    The beta factor splits the probability here and the rate there: alike in the first order, so small rates.
    """
    item = RateData(rate_per_yr=1e-4 if beta else 0.05, test_interval_yr=2)
    found = study(data_of(item, staggered=staggered, beta=beta), count, needed, 0.5, 2, 5)
    for row in found.rows:
        same = redundant(
            item.with_interval(row.interval_yr), needed, count, staggered=staggered, beta=beta if count > 1 else 0.0
        )
        for bracket, value in ((row.uncleared, same.mean), (row.late, same.mean), (row.late_worst, same.worst)):
            assert float(bracket.high - bracket.low) < 1e-12
            assert float(bracket.low) == pytest.approx(value, rel=1e-3 if beta else 1e-7)


def test_the_question_of_tests_by_turns_may_be_asked_against_the_rule() -> None:
    item = RateData(rate_per_yr=1e-4, test_interval_yr=2)
    turns = study(data_of(item), 2, 1, 2.0, staggered=True).rows[0].late
    together = study(data_of(item, staggered=True), 2, 1, 2.0, staggered=False).rows[0].late
    assert float(turns.low / together.low) == pytest.approx(5 / 8, rel=1e-3)


def test_the_best_interval_of_one_relay_is_the_closed_form() -> None:
    item = RateData(rate_per_yr=0.01, coverage=0.8, test_interval_yr=4, test_duration_h=4)
    best = optimal_interval_yr(0.01, 4, 0.8)
    found = study(data_of(item), 1, 1, 0.25 * best, 0.9 * best, best, 1.1 * best, 4 * best)
    assert found.best.interval_yr == best
    assert found.may_be_best == (best,)
    assert dict(found.single_yr)["relay failure_to_operate"] == pytest.approx(best)
    assert float(found.best.late.low) == pytest.approx(unavailability(item.with_interval(best)).mean)


def test_what_tests_cost_makes_the_best_interval_longer() -> None:
    """λT/2 × 10 faults a year × 1000 against 5/T: least at T = √(2 × 5/(0.01 × 10 × 1000)) = 0.316; with 20, 0.632."""
    item = RateData(rate_per_yr=0.01, test_interval_yr=4)
    steps = [0.1, 0.2, 0.316, 0.632, 1.3]
    for per_test, best in ((5.0, 0.316), (20.0, 0.632)):
        costs = TestCosts(per_test=per_test, late=1000.0)
        found = study(data_of(item), 1, 1, *steps, frequencies={AT: 10.0}, costs=costs)
        assert found.best.interval_yr == best
        row = found.best
        assert row.tests_per_yr == pytest.approx(1 / best)
        assert row.cost is not None
        assert float(row.cost.low) == pytest.approx(per_test / best + 1000 * float(row.late.low), rel=1e-9)
    assert list(found.table()["interval_yr"]) == steps
    assert "cost_per_yr_low" in found.table()
    assert "0.632" in repr(found)


def test_a_tree_weighed_anew_is_the_tree_explored_anew() -> None:
    """Every leaf, with a common cause and at any age; and what was left out stays in the bracket."""
    data = data_of(RateData(rate_per_yr=0.1, test_interval_yr=2, on_demand=0.01), beta=0.3)
    program = program_of(data, 3, 2)
    tested = class_of(program.scheme, data, RELAY, "R *")
    other = compile_scheme(program.plant, at_time(program.scheme, data, tested, 1.0, 0.7, True))
    questions = questions_at(program, other.scheme)
    assert [q.probability for q in questions] == [q.probability for q in other.questions]

    def case(of: Program) -> Case:
        return bind(of, AT, LogicalSensing())

    whole = explore(case(other), epsilon=0.0)
    again = weighed(explore(case(program), epsilon=0.0), program, questions)
    assert {leaf.asked: leaf.probability for leaf in again.leaves} == pytest.approx(
        {leaf.asked: leaf.probability for leaf in whole.leaves}
    )
    assert float(again.unexplored) < 1e-12
    part = weighed(explore(case(program), epsilon=0.05), program, questions)
    assert part.unexplored > 0
    wide, exact = (tree.bracket(lambda o: o.t_clear_us is None) for tree in (part, whole))
    assert wide.low <= exact.low
    assert wide.high >= exact.high


def test_probabilities_given_as_such_and_causes_given_by_name_stay() -> None:
    data = data_of(RateData(rate_per_yr=0.1, test_interval_yr=2))
    program = program_of(data, 2, 1)
    flood = CommonCause("flood", (Ask("R 1", FTO), Ask("R 2", FTO)), 0.125)
    data = replace(data, common_causes=(flood,))
    scheme = replace(program.scheme, common_causes=(flood,))
    found = at_time(scheme, data, class_of(scheme, data, RELAY, "R 1"), 1.0, 1.0)
    assert found.common_causes == (flood,)
    assert float(found.component["R 1"].probability(FTO)) == pytest.approx(0.1, rel=0.06)
    assert found.component["R 2"] == scheme.component["R 2"]


def test_what_cannot_be_studied_is_refused() -> None:
    item = RateData(rate_per_yr=0.1, test_interval_yr=2, test_duration_h=40)
    data = data_of(item)
    for options, expected in (
        ({"kind": ComponentKind.DC}, "whose failures are given by a rate"),
        ({"pattern": "Q*"}, "whose failures are given by a rate"),
        ({"frequencies": {AT: -1.0}}, "zero or more"),
        ({"frequencies": {AT: 0.0}}, "one that is fed"),
        ({"costs": TestCosts(per_test=1)}, "fault frequencies beside them"),
    ):
        with pytest.raises(InputError, match=expected):
            study(data, 2, 1, 1.0, **options)
    for steps in ((), (0.0,), (-1.0,), (0.001,)):
        with pytest.raises(InputError):
            study(data, 2, 1, *steps)
    with pytest.raises(InputError):
        TestCosts(per_test=-1)
    given = FailureData(modes={RELAY: {FTO: 0.1}}, no_fault_per_yr={})
    with pytest.raises(InputError, match="whose failures are given by a rate"):
        study(given, 2, 1, 1.0)
