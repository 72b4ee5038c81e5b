"""Costs over a life, values of events, and the section ``money`` of a scenario file."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import pytest

from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.scenario import Scenario, scenario_from_text, scenario_text
from schemesim.scheme.model import Component, ComponentKind, Scheme
from schemesim.study.money import CostRule, Costs, Money, Values, annuity_factor

RELAY, DC = ComponentKind.RELAY, ComponentKind.DC

PLANT = """
schemesim: 1
plant:
  stations:
    - {name: Alder, layout: single_bus, kv: 132, bays: [G1, {to: L1, at: 0}]}
    - {name: Birch, layout: single_bus, kv: 132, bays: [{to: L1, at: 1}, G2, F1]}
  lines: [{name: L1, length: 40, kv: 132}]
  generators: [{name: G1, station: Alder}, {name: G2, station: Birch}]
  feeders: [{name: F1, station: Birch, load_mw: 20}]
policies:
  one: {base: single_set}
  two: {base: duplicate_chain}
policy: one
fault_frequencies: {per_length_per_yr: 0.01, by_kind: {feeder: 0.5, bus: 0.02}}
"""

KINDS = ["relay", "ct_core", "vt_winding", "dc", "channel", "coil", "breaker", "lockout"]

MONEY = """
money:
  unit: kEUR
  discount_rate: 0.04
  life_yr: 30
  costs:
{costs}
    - {{kind: relay, pattern: "*/F1/*", bought: 7, installed: 3, per_test: 1, test_interval_yr: 4, life_yr: 15}}
  values: {{lost_load_per_mwh: 10, restoration_h: 2, damage_per_ms: 0.5, damage_cap: 500}}
  start: one
  additions: [second relay, second coil]
  ranges: {{lost_load_per_mwh: [5, 20], failures of relay: [0.3, 3]}}
  error_factors: {{relay: 3, no_fault: 5}}
  locations: [L1@0.25, F1]
"""


def text(kinds: list[str] = KINDS) -> str:
    return PLANT + MONEY.format(costs="\n".join(f"    - {{kind: {k}, bought: 10}}" for k in kinds))


def problems(source: str) -> dict[str, str]:
    with pytest.raises(InputError) as caught:
        scenario_from_text(source, "x.yaml")
    assert all(p.file == "x.yaml" and p.line for p in caught.value.problems)
    return {p.path: str(p) for p in caught.value.problems}


def component(name: str, kind: ComponentKind = RELAY) -> Component:
    return Component(name, kind)


def test_annuity_of_published_tables() -> None:
    # Capital recovery factors of any table of engineering economics: 10 % over 5 and 10 years, 8 % over 20 years.
    assert annuity_factor(5, 0.10) == pytest.approx(0.2638, abs=5e-5)
    assert annuity_factor(10, 0.10) == pytest.approx(0.16275, abs=5e-6)
    assert annuity_factor(20, 0.08) == pytest.approx(0.10185, abs=5e-6)


def test_annuity_without_a_rate_is_the_limit() -> None:
    assert annuity_factor(25, 0) == 0.04
    assert annuity_factor(25, 1e-9) == pytest.approx(0.04, rel=1e-6)


def test_present_value_by_hand() -> None:
    # 100 + 20 now; 30 after 5 and after 10 years of 12 at 10 %: 120 + 30/1.61051 + 30/2.59374.
    rule = CostRule(kind=RELAY, bought=100, installed=20, per_test=30, test_interval_yr=5)
    assert rule.present_value(12, 0.10) == pytest.approx(120 + 30 / 1.61051 + 30 / 2.5937424601)


def test_no_test_at_the_end_of_life() -> None:
    rule = CostRule(kind=RELAY, per_test=1, test_interval_yr=5)
    assert rule.present_value(15, 0.0) == 2
    assert rule.present_value(15.5, 0.0) == 3


def test_the_last_rule_that_fits_counts() -> None:
    costs = Costs(
        rules=(CostRule(kind=RELAY, bought=1), CostRule(kind=RELAY, pattern="A/*", bought=2), CostRule(kind=DC)),
        discount_rate=0.0,
        life_yr=10,
    )
    found = costs.of(Scheme((component("A/1"), component("B/1"), component("A/dc", DC)), ()))
    assert {c.component: c.present_value for c in found.components} == {"A/1": 2, "B/1": 1, "A/dc": 0}
    assert found.per_yr == pytest.approx(0.3)
    assert found.by_kind == {DC: 0, RELAY: pytest.approx(0.3)}


def test_every_missing_cost_is_told_and_none_is_zero() -> None:
    costs = Costs(rules=(CostRule(kind=RELAY, pattern="A/*", bought=1),))
    with pytest.raises(InputError) as caught:
        costs.of(Scheme((component("A/1"), component("B/1"), component("A/dc", DC)), ()))
    assert [p.subject for p in caught.value.problems] == ["cost of dc 'A/dc'", "cost of relay 'B/1'"]


@pytest.mark.parametrize("wrong", [-1.0, math.nan, math.inf])
def test_numbers_that_are_no_money(wrong: float) -> None:
    with pytest.raises(InputError, match="bought of relay"):
        Costs(rules=(CostRule(kind=RELAY, bought=wrong),))
    with pytest.raises(InputError, match="damage_cap"):
        Values(damage_cap=wrong)
    with pytest.raises(InputError, match="discount rate"):
        Costs(discount_rate=wrong)


@pytest.mark.parametrize("unit", ["euro", "XXZ", "", "mEUR", "EUR "])
def test_unknown_unit(unit: str) -> None:
    with pytest.raises(InputError, match="currency unit"):
        Money(unit=unit)


def test_a_file_with_money_says_it_and_loses_nothing() -> None:
    scenario = scenario_from_text(text())
    money = scenario.money
    assert money is not None
    assert (money.unit, money.costs.discount_rate, money.costs.life_yr, money.start) == ("kEUR", 0.04, 30, "one")
    assert money.locations == (Location("L1", 0.25), Location("F1"))
    assert money.ranges == (("failures of relay", 0.3, 3), ("lost_load_per_mwh", 5, 20))
    rule = money.costs.rule_of(component("Birch/F1/relay 1"))
    assert rule is not None
    assert (rule.bought, rule.test_interval_yr, rule.life_yr) == (7, 4, 15)
    assert scenario_from_text(scenario_text(scenario)) == scenario
    full = replace(scenario, document=None)
    again: Scenario = scenario_from_text(scenario_text(full))
    assert again.money == money


def test_a_file_without_money_has_none() -> None:
    assert scenario_from_text(PLANT).money is None


def test_missing_costs_in_a_file() -> None:
    found = problems(text(["relay", "ct_core", "vt_winding", "dc", "channel", "coil", "breaker"]))
    assert set(found) == {"money.costs"}
    with pytest.raises(InputError) as caught:
        scenario_from_text(text(["relay", "ct_core", "vt_winding", "dc", "channel", "coil", "breaker"]))
    missing = {p.subject for p in caught.value.problems}
    used = scenario_from_text(PLANT).scheme("two").components
    assert {f"cost of lockout {c.name!r}" for c in used if c.kind is ComponentKind.LOCKOUT} <= missing


@pytest.mark.parametrize(
    ("old", "new", "path", "says"),
    [
        ("unit: kEUR", "unit: kEURO", "money.unit", "currency code"),
        ("unit: kEUR", "unit: 5", "money.unit", "text"),
        ("  unit: kEUR\n", "", "money", "currency code"),
        ("bought: 7", "bought: -7", "money.costs[8].bought", "0 or more"),
        ("bought: 7", "bougth: 7", "money.costs[8].bougth", "bought"),
        ("kind: relay, pattern", "kind: relai, pattern", "money.costs[8].kind", "relay"),
        ("test_interval_yr: 4, ", "", "money.costs[8]", "test_interval_yr"),
        ("discount_rate: 0.04", "discount_rate: 4", "money.discount_rate", "0 to 1"),
        ("start: one", "start: on", "money.start", "one"),
        ("[second relay,", "[second rely,", "money.additions[0]", "second relay"),
        ("lost_load_per_mwh: [5, 20]", "lost_load: [5, 20]", "money.ranges.lost_load", "lost_load_per_mwh"),
        ("lost_load_per_mwh: [5, 20]", "lost_load_per_mwh: [5]", "money.ranges.lost_load_per_mwh", "at least 2"),
        ("lost_load_per_mwh: [5, 20]", "lost_load_per_mwh: [20, 5]", "money.ranges", "low end"),
        ("{relay: 3,", "{relais: 3,", "money.error_factors.relais", "relay"),
        ("{relay: 3,", "{relay: 0.5,", "money.error_factors.relay", "1"),
        ("[L1@0.25, F1]", "[L9@0.25, F1]", "money.locations[0]", "section"),
        ("damage_cap: 500", "damage_cap: -1", "money.values.damage_cap", "0 or more"),
        ("damage_cap: 500", "p_unstable_if_late: 2", "money.values", "0 to 1"),
    ],
)
def test_mistakes_in_a_file(old: str, new: str, path: str, says: str) -> None:
    source = text()
    assert source.count(old) == 1
    found = problems(source.replace(old, new))
    assert says in found[path]


def test_the_demo_states_its_money() -> None:
    root = Path(__file__).resolve().parents[2]
    source = (root / "scenarios" / "demo.yaml").read_text(encoding="utf-8")
    scenario = scenario_from_text(source)
    assert scenario.money is not None
    for policy in scenario.policies:
        assert scenario.money.costs.of(scenario.scheme(policy)).per_yr > 0
