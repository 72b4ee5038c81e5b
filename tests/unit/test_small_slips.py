"""Facts at the edges of studies: where one more or less, or the other of two, would go unseen elsewhere."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction
from typing import Any

import pytest

from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.scheme.model import ComponentKind
from schemesim.study.brackets import Bracket
from schemesim.study.edits import ADDITIONS, Edit
from schemesim.study.footnote import Group, Grouped
from schemesim.study.frontier import Weigher
from schemesim.study.importance import Importance
from schemesim.study.locations import study_locations
from schemesim.study.money import CostRule, Costs, Money
from schemesim.study.register import Entry
from schemesim.study.sensitivity import tornado, uncertainty
from schemesim.study.spoiled import Effect, Spoiled
from tests.unit.small_schemes import feeder_scheme, program_of
from tests.unit.test_frontier import MONEY, explorer, recipe


def test_importance_to_an_event_that_may_be_impossible() -> None:
    """P(E) of zero, or not known to be above it: P(failure | E) may be anything, the ratios have no upper bound."""
    never = Importance("x", Fraction(1, 4), Bracket(0, 0), Bracket(0, 0))
    assert (never.p_event, never.birnbaum) == (Bracket(0, 0), Bracket(0, 0))
    assert never.p_failure_given_event == Bracket(0, 1)
    assert never.risk_achievement_worth == never.risk_reduction_worth == Bracket(0, math.inf)
    perhaps = Importance("x", Fraction(1, 4), Bracket(0, Fraction(1, 2)), Bracket(0, Fraction(1, 10)))
    assert perhaps.p_event == Bracket(0, Fraction(1, 5))  # 1/4 · 1/2 + 3/4 · 1/10
    assert perhaps.p_failure_given_event == Bracket(0, 1)
    assert perhaps.risk_reduction_worth.high == math.inf


def test_importance_by_hand() -> None:
    """p = 1/4, P(E | failure) = 1/2, P(E | none) = 1/10: P(E) = 1/5."""
    found = Importance("x", Fraction(1, 4), *(Bracket(v, v) for v in (Fraction(1, 2), Fraction(1, 10))))
    wanted = {
        "p_event": Fraction(1, 5), "birnbaum": Fraction(2, 5), "criticality_ratio": Fraction(1, 2),
        "p_failure_given_event": Fraction(5, 8), "risk_achievement_worth": Fraction(5, 2),
        "risk_reduction_worth": Fraction(2),
    }  # fmt: skip
    assert {name: getattr(found, name) for name in wanted} == {name: Bracket(v, v) for name, v in wanted.items()}


def test_a_row_of_the_register_tells_the_worst_of_every_location() -> None:
    """Two locations, neither the worse in everything."""
    late = Spoiled(Location("F1"), Effect.LATE, 470_000, 70_000, 1, 1, 3, 15.0, 10.0, "remote back-up")
    more = Spoiled(Location("F2"), Effect.MORE_BREAKERS, 90_000, 70_000, 4, 1, 2, 20.0, 10.0, "main")
    stays = Spoiled(Location("B"), Effect.NOT_CLEARED, None, 70_000, 0, 2, 0, 0.0, 15.0, "")
    grouped = (Grouped(Group.RELAY),)
    row = Entry(("M1",), Fraction(1, 8), grouped, (late, more, stays)).row
    assert (row["worst"], row["locations"]) == ("not cleared", 3)
    assert (row["not_cleared"], row["late"], row["more_breakers"]) == (1, 1, 1)
    assert (row["t_clear_ms_worst"], row["breakers_worst"], row["excess_worst"]) == (470, 4, 3)
    assert (row["load_lost_mw_worst"], row["p"]) == (20, 0.125)
    assert row["where"] == "F1, F2, B"


def test_unknown_sections_and_a_bad_limit_are_told_together() -> None:
    with pytest.raises(InputError) as caught:
        study_locations(program_of(feeder_scheme()), LogicalSensing(), [Location("F3"), Location("F9")], limit_us=-1)
    assert [p.subject for p in caught.value.problems] == ["section", "section", "limit_us"]
    assert {p.value for p in caught.value.problems[:2]} == {"F3", "F9"}


@pytest.mark.parametrize("samples", [1, 0, -2, 2.0, True, "5"])
def test_samples_are_a_whole_number_of_two_or_more(samples: Any) -> None:
    with pytest.raises(InputError) as caught:
        uncertainty({}, MONEY, samples=samples)
    assert [p.subject for p in caught.value.problems] == ["samples", "variants"]


@pytest.mark.parametrize("seed", [-1, 1.0, True, None])
def test_a_seed_is_a_whole_number_of_zero_or_more(seed: Any) -> None:
    with pytest.raises(InputError) as caught:
        uncertainty({}, MONEY, samples=2, seed=seed)
    assert [p.subject for p in caught.value.problems] == ["seed", "variants"]


def test_two_samples_are_enough() -> None:
    ledger = Weigher(explorer(1e-2), recipe(), ()).get(())[1]
    found = uncertainty({"base": ledger}, MONEY, samples=2)
    assert (found.samples, found.seed, found.spreads[0].variant) == (2, 0, "base")


def test_only_the_whole_list_sees_that_a_second_addition_of_a_kind_adds_nothing() -> None:
    """Two names for one addition: ranked alone both pay; made whole, one of them is left out."""
    edits = tuple(Edit(name, ADDITIONS["second coil"].change) for name in ("coil", "same coil"))
    costs = Costs(rules=tuple(CostRule(kind=k, bought=1000) for k in ComponentKind))
    money: Money = replace(MONEY, costs=costs, ranges=(("failures of relay", 0.9, 1.1), ("instability", 9e5, 1e6)))
    weigher = Weigher(explorer(3e-3), recipe(), edits)
    first, whole = tornado(weigher, money), tornado(weigher, money, whole=True)
    assert first.order == ("coil", "same coil")
    assert whole.order == ("coil",)
    bars = {b.assumption: b for b in whole.bars}
    assert bars["instability"].order_low == ("coil",)  # the list made anew
    assert bars["failures of relay"].order_low == ("coil", "same coil")  # failure data move the first additions only
    assert not any(b.order_changes for b in (*first.bars, *whole.bars))
