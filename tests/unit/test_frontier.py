"""Frontier, next best additions, tornado and uncertain failure data; one call and one command."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from schemesim.cli import main
from schemesim.errors import InputError
from schemesim.plant.layouts import Bay, feeder, generator, line, single_bus
from schemesim.plant.model import Location, PlantBuilder
from schemesim.scenario import scenario_from_text
from schemesim.scenario.deciding import decide, stand_in
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import Component, ComponentKind, FailureMode, Scheme
from schemesim.scheme.policy import single_set
from schemesim.show.tables import readable
from schemesim.study.brackets import Bracket
from schemesim.study.edits import ADDITIONS, Edit, Recipe
from schemesim.study.frontier import Weighed, Weigher, frontier
from schemesim.study.money import CostRule, Costs, Money, Values
from schemesim.study.risk import Explorer, event_cost
from schemesim.study.sensitivity import draw_factors, reweighted, tornado, uncertainty

F, K = FailureMode, ComponentKind
OFTEN = FailureData(
    modes={
        K.RELAY: {F.FAILURE_TO_OPERATE: 0.02, F.UNWANTED_OPERATION: 0.005},
        K.BREAKER: {F.DOES_NOT_OPEN: 0.01, F.OPENS_LATE: 0.01},
        K.COIL: {F.FAILURE_TO_OPERATE: 0.01},
    },
    no_fault_per_yr={K.RELAY: 0.01},
    relay_beta=0.1,
)
VALUES = Values(
    lost_load_per_mwh=1000, restoration_h=2, damage_per_ms=500, damage_cap=5e5, instability=1e6, p_unstable_if_late=0.5
)
COSTS = Costs(rules=tuple(CostRule(kind=k, bought=1000) for k in K))
MONEY = Money(unit="EUR", costs=COSTS, values=VALUES)
NAMES = ("second relay", "second coil", "local back-up", "second CT core")


def recipe(data: FailureData = OFTEN) -> Recipe:
    b = PlantBuilder(length_unit="km")
    line(b, "L1", length=40, kv=132)
    generator(b, "G1", station="Alder")
    generator(b, "G2", station="Birch")
    feeder(b, "F1", station="Birch", load_mw=20)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1", at=0)], kv=132)
    single_bus(b, "Birch", [Bay("L1", "L1", at=1), Bay("G2", "G2"), Bay("F1", "F1")], kv=132)
    return Recipe(b.build(), single_set(), data)


def explorer(epsilon: float = 1e-5) -> Explorer:
    return Explorer({Location("L1", 0.5): 0.4, Location("F1"): 0.5}, lambda _: 150_000, epsilon=epsilon)


@pytest.fixture(scope="module")
def weigher() -> Weigher:
    return Weigher(explorer(3e-3), recipe(), tuple(ADDITIONS[n] for n in NAMES))


class FakeLedger:
    """A variant of known cost and risk; brackets of both differ by half the width stated."""

    def __init__(self, cost: float, risk: float, width: float = 0.0) -> None:
        scheme = Scheme((Component(f"{cost}", K.RELAY),), ())
        self.program = SimpleNamespace(scheme=scheme)
        self.risk, self.width = risk, width

    def estimate(self, *_: Any) -> float:
        return self.risk

    def figure(self, *_: Any) -> Bracket:
        return Bracket(self.risk - self.width / 2, self.risk + self.width / 2)

    def less(self, other: FakeLedger, *_: Any) -> Bracket:
        return self.figure() - other.figure()


def fakes(**rows: tuple[float, ...]) -> Any:
    costs = Costs(
        rules=tuple(CostRule(kind=K.RELAY, pattern=f"{r[0]}", bought=r[0], life_yr=1) for r in rows.values()),
        discount_rate=0.0,
    )
    return frontier({n: FakeLedger(*r) for n, r in rows.items()}, replace(MONEY, costs=costs))  # type: ignore[misc]


def test_frontier_by_hand() -> None:
    found = fakes(a=(1.0, 10.0), b=(2.0, 5.0), c=(3.0, 6.0), d=(4.0, 5.0), e=(5.0, 1.0))
    assert found.names == ("a", "b", "e")
    assert {c.name: c.dominated_by for c in found.choices} == {"a": "", "b": "", "c": "b", "d": "b", "e": ""}
    assert all(c.certain for c in found.choices)
    assert found.least_total == "e"


def test_frontier_is_certain_only_where_brackets_decide() -> None:
    found = {c.name: c for c in fakes(a=(1.0, 5.0, 2.0), b=(2.0, 6.0, 2.0), c=(3.0, 4.0, 2.0)).choices}
    assert (found["b"].dominated_by, found["b"].certain) == ("a", False)
    assert (found["c"].dominated_by, found["c"].certain) == ("", False)
    assert (found["a"].dominated_by, found["a"].certain) == ("", True)


@pytest.mark.parametrize(
    ("low", "high", "estimate", "verdict"),
    [(11, 13, 12, "pays"), (9, 13, 12, "likely pays"), (8, 11, 9, "likely does not pay"), (7, 10, 9, "does not pay")],
)
def test_verdicts_on_an_addition(low: float, high: float, estimate: float, verdict: str) -> None:
    assert Weighed("x", 10.0, Bracket(float(low), float(high)), float(estimate)).verdict == verdict


def test_greedy_list_is_the_best_at_each_step(weigher: Weigher) -> None:
    found = weigher.next_best(MONEY)
    assert found.order  # something pays at these prices
    made: tuple[str, ...] = ()
    for step in found.steps:
        before = weigher.get(made)[1]
        ratios = {}
        for name in NAMES:
            if name in made or weigher.get(made)[0].edited(ADDITIONS[name]) == weigher.get(made)[0]:
                continue
            after = weigher.get((*made, name))[1]
            cost = COSTS.of(after.program.scheme).per_yr - COSTS.of(before.program.scheme).per_yr
            gain = before.estimate(event_cost, VALUES) - after.estimate(event_cost, VALUES)
            if gain > cost:
                ratios[name] = gain / cost
        assert {w.name for w in step.weighed} >= set(ratios)
        assert step.made == (max(ratios, key=lambda n: ratios[n]) if ratios else "")
        made = (*made, step.made) if step.made else made
    assert found.order == made
    assert found.plan is weigher.get(made)[1]


def test_nothing_pays_where_money_is_dear(weigher: Weigher) -> None:
    dear = replace(MONEY, costs=Costs(rules=tuple(CostRule(kind=k, bought=1e9) for k in K)))
    found = weigher.next_best(dear)
    assert found.order == ()
    assert found.plan is found.start
    assert {w.verdict for s in found.steps for w in s.weighed} == {"does not pay"}


def test_what_has_nothing_to_stand_on_waits(weigher: Weigher) -> None:
    found = weigher.next_best(MONEY)
    assert "second CT core" not in {w.name for w in found.steps[0].weighed}
    after = found.order.index("second relay") + 1
    assert "second CT core" in {w.name for w in found.steps[after].weighed}


def test_an_addition_the_plant_cannot_carry_is_told() -> None:
    def from_core_9(p: Any) -> Any:
        return replace(p, sets=tuple(replace(s, core="9") for s in p.sets))

    found = Weigher(explorer(1e-2), recipe(), (Edit("core 9", from_core_9),)).next_best(MONEY)
    assert [name for name, _ in found.impossible] == ["core 9"]
    assert "9" in found.impossible[0][1]


def test_a_missing_cost_stops_the_list(weigher: Weigher) -> None:
    poor = replace(MONEY, costs=Costs(rules=tuple(CostRule(kind=k) for k in K if k is not K.COIL)))
    with pytest.raises(InputError, match="cost of coil"):
        weigher.next_best(poor)


def test_reweighting_agrees_with_exploring_anew() -> None:
    modes = {k: {m: p * (3 if k is K.RELAY else 1) for m, p in of.items()} for k, of in OFTEN.modes.items()}
    old = explorer(1e-4).ledger(recipe().program())
    new = explorer(1e-4).ledger(recipe(replace(OFTEN, modes=modes)).program())
    found = reweighted(old, VALUES, {"relay": np.array([1.0, 3.0])}, 2)
    for i, ledger in enumerate((old, new)):
        truth = ledger.figure(event_cost, VALUES)
        assert found.low[i] <= truth.high
        assert truth.low <= found.high[i]
        assert found.estimate[i] == pytest.approx(ledger.estimate(event_cost, VALUES), rel=3e-3)
    assert found.estimate[1] > 1.05 * found.estimate[0]


def test_factors_have_the_percentiles_stated() -> None:
    drawn = draw_factors({"relay": 3.0, "dc": 1.0}, 4000, 7)
    assert np.quantile(drawn["relay"], 0.5) == pytest.approx(1.0, rel=0.06)
    assert np.quantile(drawn["relay"], 0.95) == pytest.approx(3.0, rel=0.08)
    assert (drawn["dc"] == 1.0).all()


def test_uncertainty_without_any_is_the_estimate(weigher: Weigher) -> None:
    base, twice = weigher.get(())[1], weigher.get(("second relay",))[1]
    found = uncertainty({"base": base, "twice": twice}, MONEY, samples=5, seed=1)
    for spread, ledger in zip(found.spreads, (base, twice), strict=True):
        truth = ledger.figure(event_cost, VALUES)
        for _, low, high in spread.quantiles:
            assert low == pytest.approx(truth.low)
            assert high == pytest.approx(truth.high)
    assert found.of("twice").p_less_risk == 1.0
    assert math.isnan(found.of("base").p_less_risk)


def test_uncertainty_spreads_and_pairs_its_samples(weigher: Weigher) -> None:
    unsure = replace(MONEY, error_factors=(("breaker", 3.0), ("no_fault", 3.0), ("relay", 5.0)))
    base, twice = weigher.get(())[1], weigher.get(("second relay",))[1]
    spread = uncertainty({"base": base, "twice": twice}, unsure, samples=100, seed=1).of("twice")
    lows = [low for _, low, _ in spread.quantiles]
    assert lows == sorted(lows)
    assert lows[-1] > 1.1 * lows[0]
    assert spread.p_less_risk > 0.95  # under the same failure data a second relay helps nearly always


def test_tornado_orders_by_swing_and_sees_the_order_change(weigher: Weigher) -> None:
    ranges = (
        ("cost of coil", 1.0, 1e6),
        ("failures of relay", 0.5, 2.0),
        ("instability", 1e6, 1e6),
        ("p_unstable_if_late", 0.1, 0.9),
    )
    found = tornado(weigher, replace(MONEY, ranges=ranges))
    bars = {b.assumption: b for b in found.bars}
    assert [b.swing for b in found.bars] == sorted((b.swing for b in found.bars), reverse=True)
    assert bars["instability"].swing == pytest.approx(0, abs=1e-6)
    assert not bars["instability"].order_changes
    assert bars["cost of coil"].order_changes
    assert "second coil" not in bars["cost of coil"].order_high
    unstable = bars["p_unstable_if_late"]
    assert unstable.net_low < unstable.net_base < unstable.net_high
    assert bars["failures of relay"].net_low < bars["failures of relay"].net_high
    shown = readable(found.table()).set_index("assumption").loc["p_unstable_if_late"]
    assert (shown["range_from"], shown["range_to"]) == ("0.1", "0.9")  # as given, not rounded outward as a bracket
    whole = tornado(weigher, replace(MONEY, ranges=ranges[:1]), whole=True)
    assert whole.order == weigher.next_best(MONEY).order


PLANT = """
schemesim: 1
name: Two stations
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
PRICES = """
money:
  unit: EUR
  costs:
""" + "\n".join(f"    - {{kind: {k}, bought: 1000}}" for k in K)
REST = """
  values: {lost_load_per_mwh: 1000, restoration_h: 2, instability: 1e8, p_unstable_if_late: 0.5}
  additions: [second relay, second coil]
  ranges: {instability: [1e6, 1e8]}
  error_factors: {relay: 3}
  locations: [L1@0.5, F1]
"""


def test_locations_stand_for_their_kind() -> None:
    scenario = scenario_from_text(PLANT)
    rates, left = stand_in(scenario.plant, scenario.frequencies, [Location("L1", 0.5), Location("F1")])
    assert rates[Location("L1", 0.5)] == pytest.approx(0.4)
    assert rates[Location("F1")] == 0.5
    assert left == pytest.approx(0.04)


def test_one_call() -> None:
    found = decide(scenario_from_text(PLANT + PRICES + REST), samples=10, trials=50)
    assert list(found.costs) == ["one", "two"]
    assert set(found.frontier.names) <= {c.name for c in found.frontier.choices}
    assert found.variants.base == "one"
    assert found.next_best.order[0] in ("second relay", "second coil")
    assert found.tornado.bars[0].assumption == "instability"
    assert found.uncertainty.spreads[-1].variant == "one + plan"
    for part in (found.variants, found.frontier, found.next_best, found.tornado, found.uncertainty):
        assert len(part.table()) > 0
        assert part._repr_html_().startswith("<table")
    assert "0.9 faults a year at 2 locations" in repr(found)


def test_the_command(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "two.yaml"
    file.write_text(PLANT + PRICES + REST, encoding="utf-8")
    csv = tmp_path / "rows.csv"
    assert main(["decide", str(file), "--quiet", "--json", "--samples", "5", "--csv", str(csv), "--faults-only"]) == 0
    data = json.loads(capsys.readouterr().out)
    assert (data["kind"], data["unit"]) == ("decide", "EUR")
    assert {r["variant"] for r in data["frontier"]} >= {"one", "two"}
    needless = [r for r in data["variants"] if r["measure"] == "no_fault_trips_per_yr"]
    assert [(r["low"], r["high"]) for r in needless] == [(0, 0), (0, 0)]
    assert len(csv.read_text(encoding="utf-8").splitlines()) == len(data["variants"]) + 1
    assert main(["decide", str(file), "--samples", "5", "--steps", "0", "--trials", "20", "--policy", "two"]) == 0
    text = capsys.readouterr()
    assert "what to add next: nothing" in text.out
    assert "cost against risk" in text.out
    assert "decide: exploring" in text.err


def test_mistakes_on_the_command_line(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "two.yaml"
    file.write_text(PLANT, encoding="utf-8")
    assert main(["decide", str(file), "--quiet"]) == 2
    assert "money" in capsys.readouterr().err
    file.write_text(PLANT + PRICES + REST, encoding="utf-8")
    assert main(["decide", str(file), "--quiet", "--policy", "thre"]) == 2
    assert "'thre'" in capsys.readouterr().err
    dear = PRICES.replace("{kind: coil, bought", "{kind: coil, pattern: '*coil 1', bought")
    file.write_text(PLANT.replace("  two: {base: duplicate_chain}\n", "") + dear + REST, encoding="utf-8")
    assert main(["decide", str(file), "--quiet"]) == 2
    told = capsys.readouterr().err
    assert "money.costs: cost of coil 'Alder.L1.CB/coil 2'" in told
