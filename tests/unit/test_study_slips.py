"""Facts at the edges of campaigns, variants, strata, timers and money, each worked out beside it."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction
from itertools import pairwise
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import networkx as nx
import pytest

from schemesim.engine.batch import run_batch
from schemesim.engine.case import bind
from schemesim.engine.outcome import Opening, Outcome, Status
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing, NoFault
from schemesim.errors import InputError
from schemesim.plant.grid import without_chains
from schemesim.plant.model import Location
from schemesim.scheme.delays import Fixed
from schemesim.scheme.dress import dress
from schemesim.scheme.model import Ask, Block, Component, ComponentKind, Contact, FailureMode, Gate, Role, Scheme
from schemesim.scheme.policy import duplicate_relay
from schemesim.study.brackets import Bracket, exactly
from schemesim.study.campaign import Campaign
from schemesim.study.campaign_export import ending_rows
from schemesim.study.campaign_run import run_campaign
from schemesim.study.delay_chains import starts_of
from schemesim.study.dependability import study_dependability
from schemesim.study.edits import ADDITIONS
from schemesim.study.frontier import Weigher
from schemesim.study.importance import given_by_leaves
from schemesim.study.importance_study import _middle
from schemesim.study.measures import cleared_by
from schemesim.study.misoperations import Misoperation, misoperation
from schemesim.study.money import Values
from schemesim.study.outages import _worse
from schemesim.study.precision import Precision
from schemesim.study.proof_intervals import AtInterval, IntervalStudy
from schemesim.study.risk import Explorer, meaning, place_of
from schemesim.study.sensitivity import tornado
from schemesim.study.spoiled import Effect, Spoiled, place_row
from schemesim.study.store import Store
from schemesim.study.stratified import simulate_stratified
from schemesim.study.timer_study import study_timers
from schemesim.study.tree import explore
from schemesim.study.variants import Difference, VariantStudy
from tests.rules.hand import breaker, case, fails, gate, openings, play, radial, sense, timer, trip
from tests.rules.small import chain
from tests.unit.small_schemes import as_float, case_of, feeder_scheme, program_of
from tests.unit.test_frontier import MONEY, NAMES, explorer, recipe
from tests.unit.test_timer_study import studied, timed

F1 = Location("F1")


def test_a_sum_of_a_fraction_and_a_float_is_rounded_outward() -> None:
    third = Fraction(1, 3)
    for found in (exactly(third) + exactly(0.5), exactly(0.5) + exactly(third)):
        assert isinstance(found.low, float)
        assert isinstance(found.high, float)
        assert found.low < Fraction(5, 6) < found.high
    assert exactly(third) + exactly(Fraction(1, 2)) == Bracket(Fraction(5, 6), Fraction(5, 6))


def test_brackets_are_sorted_by_their_middle_or_by_what_is_known() -> None:
    assert _middle(Bracket(1, 3)) == 2
    assert _middle(Bracket(3, math.inf)) == 3


def test_a_place_of_a_campaign_says_the_confidence_it_was_asked_for(tmp_path: Path) -> None:
    campaign = Campaign({"a": program_of(feeder_scheme())}, (F1,), trials=40, limit_us=200_000)
    result = run_campaign(campaign, str(tmp_path / "kept"))
    (place,) = result.places
    assert place.row() == place.row(0.95) != place.row(0.9)
    assert place.table().equals(place.table(0.95))
    legend = place.plot(0.9).get_legend()
    assert legend is not None
    assert [t.get_text() for t in legend.get_texts()] == ["below the 90 % interval", "90 % interval"]


def test_variants_print_a_difference_beside_every_variant_but_the_base() -> None:
    rows = (
        Difference("risk", "base", Bracket(2, 2), Bracket(0, 0), None, ""),
        Difference("risk", "twice", Bracket(0.5, 0.5), Bracket(-1.5, -1.5), None, "better"),
    )
    ledgers: Any = {"base": None, "twice": None}
    lines = repr(VariantStudy("base", ledgers, rows)).splitlines()
    assert [line.split() for line in lines[1:]] == [["risk"], ["base", "2"], ["twice", "0.5", "-1.5", "better"]]


def test_what_starts_a_timer_at_the_instant_it_runs_out_did_not_start_it() -> None:
    """The first element picks up at 20, the timer runs out at 120; the second picks up at 119 or at 120."""
    for second, wanted in ((119, {"a", "b"}), (120, {"a"})):
        blocks: list[Block] = [
            sense("a", "F1.CT", 20), sense("b", "F1.CT", second), gate("start", "a", "b"), timer("62", "start", 100),
            trip("t", "62"), gate("coil", "t"), breaker("F1.CB", "coil"),
        ]  # fmt: skip
        bound = case(radial(), blocks)
        found = starts_of(bound.program, play(bound), "62", "start")
        assert {name for chain in found for name, _ in chain} == wanted


def test_a_place_without_faults_is_not_looked_at() -> None:
    program = program_of(feeder_scheme())
    found = Explorer({F1: 0.0, Location("F2"): 1.0}, lambda _: 1, no_fault=False, epsilon=0.5).ledger(program)
    assert [p.event for p, _ in found.places] == [Location("F2")]


def test_the_size_of_the_money_changes_no_order() -> None:
    small = 1e-7
    rules = tuple(replace(r, bought=r.bought * small) for r in MONEY.costs.rules)
    v = MONEY.values
    values = replace(
        v, lost_load_per_mwh=v.lost_load_per_mwh * small, damage_per_ms=v.damage_per_ms * small,
        damage_cap=v.damage_cap * small, instability=v.instability * small,
    )  # fmt: skip
    little = replace(MONEY, costs=replace(MONEY.costs, rules=rules), values=values)
    weigher = Weigher(explorer(3e-3), recipe(), _additions())
    found, tiny = tornado(weigher, MONEY), tornado(weigher, little)
    assert found.order == tiny.order
    assert len(found.order) == 3


def _additions() -> Any:
    from schemesim.study.edits import ADDITIONS

    return tuple(ADDITIONS[n] for n in NAMES)


def test_breaker_failure_of_a_neighbour_in_time_is_an_unnecessary_trip() -> None:
    """F1 opens at 70 as it should; breaker failure opens the infeed all the same: not the feeder's own trip."""
    bound = case_of(feeder_scheme(), "F1")
    right = Opening(70_000, "F1.CB", 20_000, Role.MAIN, "M1.trip")
    needless = Opening(220_000, "IN.CB", 170_000, Role.BREAKER_FAILURE, "bf.trip")
    outcome = Outcome(Status.CLEARED, 70_000, (right, needless))
    assert misoperation(outcome, bound) == {Misoperation.UNNECESSARY_TRIP}
    assert misoperation(replace(outcome, openings=(right,)), bound) == frozenset()


def test_a_vertex_of_two_neighbours_becomes_an_edge() -> None:
    a, b, c, d, e = (("v", name) for name in "abcde")
    path = {(a, b), (b, c), (c, d), (d, e)}
    graph: nx.Graph[tuple[str, str]] = nx.Graph(path)
    assert edges(without_chains(graph, {a, e})) == edges(nx.Graph({(a, e)}))
    assert edges(without_chains(graph, {a, c, e})) == edges(nx.Graph({(a, c), (c, e)}))
    assert edges(graph) == edges(nx.Graph(path))  # as it was


def edges(graph: nx.Graph[tuple[str, str]]) -> set[frozenset[tuple[str, str]]]:
    return {frozenset(edge) for edge in graph.edges}


def test_no_more_trials_where_the_interval_is_just_narrow_enough() -> None:
    wanted = Precision(bool, absolute=0.125)
    assert wanted.more(100, _Interval(0.25, 0.5)) == 0
    assert wanted.more(100, _Interval(0.25, 0.55)) == 52  # (0.15 / 0.125)² × 1.05 × 100 = 151.2 in all


class _Interval:
    """What precision asks of an interval."""

    def __init__(self, low: float, high: float) -> None:
        self.low, self.high, self.estimate = low, high, (low + high) / 2


def test_a_trip_with_no_fault_has_no_clearing_time_and_nothing_needless() -> None:
    program = program_of(feeder_scheme())
    bound = bind(program, NoFault("M1"), LogicalSensing())
    rows = [meaning(bound, end, 200_000) for end in explore(bound, epsilon=0).ends]
    assert {(t, late, needless) for t, late, _, needless, _ in rows} == {(0, 0, 0)}
    assert {(load, trips) for _, _, load, _, trips in rows} >= {(10, 1)}  # F1 tripped: its load is lost


def test_strata_sampled_again_get_random_numbers_of_their_own() -> None:
    """Every row of every round has a number of its own: the ranges handed to the engine follow each other."""
    spans: list[tuple[int, int]] = []

    def run(case: Any, rows: int, answers: Any, *, times: Any, horizon_us: int) -> Any:
        spans.append((times.first, times.first + rows))
        return run_batch(case, rows, answers, times=times, horizon_us=horizon_us)

    bound = case_of(feeder_scheme(as_float), "F1")
    narrow = Precision(lambda o: o.status is Status.CLEARED, absolute=1e-3, max_trials=3000)
    coarse = explore(bound, epsilon=0.5, max_runs=2)
    counts = simulate_stratified(bound, narrow, 7, tree=coarse, chunk=150, run=run)
    assert len(spans) > 2
    assert spans[0][0] == 0
    assert all(a[1] == b[0] for a, b in pairwise(spans))
    assert spans[-1][1] == counts.pilot + sum(counts.rows)


@pytest.mark.parametrize("pick_up", [5_000, 30_000, 150_000])
def test_settings_studied_stand_on_the_grid_from_zero(pick_up: int) -> None:
    found = studied(timed(timer=Fixed(pick_up)), 300_000, step_us=20_000)
    (result,) = found.results
    settings = [p.setting_us for p in result.points]
    assert not any(t % 20_000 for t in settings)
    assert settings[0] <= pick_up <= settings[-1]
    assert settings == sorted(settings)
    row: dict[str, Any] = result.row
    if result.band_us is not None:
        assert (row["band_ms_from"], row["band_ms_to"]) == tuple(t / 1000 for t in result.band_us)
    assert result.best_within_us[0] <= result.best_us <= result.best_within_us[1]


def test_a_band_of_settings_has_two_ends() -> None:
    found = studied(timed(), 300_000, step_us=10_000).results[0]
    row: dict[str, Any] = found.row
    assert found.band_us is not None
    assert row["band_ms_from"] < row["band_ms_to"]
    assert (row["band_ms_from"], row["band_ms_to"]) == (found.band_us[0] / 1000, found.band_us[1] / 1000)


def test_the_role_of_a_trip_is_the_best_there_is_when_it_gets_through() -> None:
    """Back-up trips at 20 and main protection joins at 40, both let through at 70: the trip is main protection's."""
    blocks: list[Block] = [
        sense("slow", "F1.CT", 40), sense("fast", "F1.CT", 20),
        trip("back-up", "fast", role=Role.LOCAL), trip("main", "slow"),
        gate("either", "back-up", "main"), gate("again", "either"),
        timer("wait", "fast", 50), gate("coil", "again", "wait", k=2), breaker("F1.CB", "coil"),
    ]  # fmt: skip
    run = play(case(radial(), blocks))
    assert openings(run) == {"F1.CB": (70, 120)}
    assert [o.role for o in run.outcome.openings] == [Role.MAIN]


def test_what_cleared_a_fault_leaves_out_openings_it_did_not_need() -> None:
    """F1 stays; a needless remote trip of F2 comes first, breaker failure of the infeed clears: it did."""
    blocks: list[Block] = [
        sense("oc", "F1.CT"), trip("t", "oc"), gate("coil", "t"),
        *(breaker(f"{x}.CB", "coil") for x in ("F1", "F2", "IN")),
    ]  # fmt: skip
    bound = case(radial(), blocks)
    needless = Opening(60_000, "F2.CB", 10_000, Role.REMOTE, "t")
    clears = Opening(220_000, "IN.CB", 170_000, Role.BREAKER_FAILURE, "t")
    outcome = Outcome(Status.CLEARED, 220_000, (needless, clears))
    assert cleared_by(bound, outcome) is Role.BREAKER_FAILURE
    assert cleared_by(bound, replace(outcome, openings=(clears,))) is Role.BREAKER_FAILURE
    assert cleared_by(bound, Outcome(Status.NOT_CLEARED, None, (needless,))) is None


def test_given_an_item_failed_in_a_mode_that_was_not_asked() -> None:
    """R fails to operate, or operates unwantedly (which does nothing here), 1/4 each: P(cleared | R failed) = 1/2."""
    unwanted = FailureMode.UNWANTED_OPERATION
    blocks: list[Block] = [
        sense("oc", "F1.CT"), trip("t", "oc", unless=fails("R")), gate("coil", "t"), breaker("F1.CB", "coil"),
        gate("elsewhere", "oc", given=[Ask("R", unwanted)]),
    ]  # fmt: skip
    quarter = Fraction(1, 4)
    item = Component("R", ComponentKind.RELAY, ((FailureMode.FAILURE_TO_OPERATE, quarter), (unwanted, quarter)))
    bound = case(radial(), blocks, [item])
    tree = explore(bound, epsilon=Fraction(0))
    found = given_by_leaves(tree, {"R": (0, 1)}, lambda o: o.status is Status.CLEARED)["R"]
    assert (found.failed, found.works) == (exactly(Fraction(1, 2)), exactly(Fraction(1)))


def test_an_outage_makes_a_fault_late_only_beyond_the_limit() -> None:
    def result(t_us: int | None) -> Any:
        nominal = SimpleNamespace(t_clear_us=t_us, tripped=frozenset({"CB"}))
        return SimpleNamespace(nominal=nominal, intended=frozenset({"CB"}), location=F1)

    assert _worse(result(100_000), result(70_000), 100_000) is None
    late = _worse(result(100_001), result(70_000), 100_000)
    assert late is not None
    assert late.effect is Effect.LATE
    assert _worse(result(100_001), result(100_001), 100_000) is None  # late before
    stays = _worse(result(None), result(70_000), 100_000)
    assert stays is not None
    assert stays.effect is Effect.NOT_CLEARED


@pytest.mark.parametrize(("without", "said"), [(None, None), (70_000, 70.0)])
def test_a_place_spoiled_says_both_times_or_none(without: int | None, said: float | None) -> None:
    for t, shown in ((None, None), (470_000, 470.0)):
        row = place_row(Spoiled(F1, Effect.LATE, t, without, 1, 1, 0, 15.0, 10.0, ""))
        assert (row["t_clear_ms"], row["t_clear_ms_without"]) == (shown, said)


def test_the_worst_of_what_is_not_explored_loses_all_load() -> None:
    bound = case_of(feeder_scheme(), "F1")
    place = place_of(bound, explore(bound, epsilon=0.5), 200_000)
    assert list(place.worst.load_mw) == [15]
    assert place.unexplored > 0


def test_every_interval_is_printed_with_its_figures() -> None:
    def at(years: float, late: float, cost: float | None) -> AtInterval:
        return AtInterval(
            years, exactly(late), exactly(0.0), exactly(late), 1 / years, None if cost is None else exactly(cost)
        )

    study = IntervalStudy(ComponentKind.RELAY, "*", (at(2.0, 0.25, 9.0), at(4.0, 0.5, 7.0)), 3, (), True, 5)
    first, *rows = repr(study).splitlines()
    assert first == "IntervalStudy(3 of kind relay, '*', 5 locations: least at 4 yr)"
    assert [row.split() for row in rows] == [
        ["2", "yr", "0.25", "late", "or", "uncleared", "a", "year,", "cost", "9"],
        ["4", "yr", "0.5", "late", "or", "uncleared", "a", "year,", "cost", "7"],
    ]
    share = replace(study, rows=(at(2.0, 0.25, None),), per_yr=False)
    assert repr(share).splitlines()[1].split() == ["2", "yr", "0.25", "of", "faults", "late", "or", "uncleared"]


def test_zone_2_is_needed_where_breaker_failure_fails_too() -> None:
    """Exposed: the neighbour's breaker stays. Needed: its breaker-failure relay fails besides."""
    plant = chain()
    program = compile_scheme(plant, dress(plant, timed()))
    found = study_timers(
        program, LogicalSensing(), [Location("Birch.B1")], limit_us=250_000, zone_2_limit_us=345_000,
        settings_us=[265_000],
    )  # fmt: skip
    race = found.of("Alder/L1/1 21-2 timer").race
    stuck = program.scheme.component["Birch.L1.CB"].probability(FailureMode.DOES_NOT_OPEN)
    relay_fails = program.scheme.component["Birch.L1.CB/BF relay"].probability(FailureMode.FAILURE_TO_OPERATE)
    assert relay_fails > 0
    assert race.needed_per_yr == pytest.approx(race.exposed_per_yr * float(relay_fails), rel=1e-12)
    failing = found.of("Birch.L1.CB").race
    assert failing.needed_per_yr > 0
    assert failing.exposed_per_yr == pytest.approx(1 - failing.needed_per_yr, rel=1e-12)
    assert float(stuck) <= failing.needed_per_yr


def test_products_and_quotients_of_brackets_at_their_edges() -> None:
    for n in (-2, -1, 1, 2):
        assert exactly(n) * exactly(3) == exactly(3) * exactly(n) == exactly(3 * n)
        assert exactly(n) * exactly(0) == exactly(0) * exactly(n) == exactly(0)
    assert exactly(0) * Bracket(1, math.inf) == exactly(0)
    half = Fraction(1, 2)
    for divisor in (Bracket(-half, 1), Bracket(-2, -1)):  # taken as unknown: only what is zero or more is divided
        assert exactly(1) / divisor == Bracket(-math.inf, math.inf)
    assert exactly(-half) / Bracket(0, 1) == Bracket(-math.inf, math.inf)
    assert exactly(half) / exactly(2) == exactly(Fraction(1, 4))


def test_a_long_campaign_says_how_many_places_it_does_not_print(tmp_path: Path) -> None:
    program = program_of(feeder_scheme())
    for places in (12, 13, 15):
        variants = {f"v{n:02}": program for n in range(places)}
        lines = repr(run_campaign(Campaign(variants, (F1,), trials=1), str(tmp_path / f"{places}"))).splitlines()
        assert len([line for line in lines if line.startswith("  F1, v")]) == 12
        assert lines[13:] == ([f"  … and {places - 12} more"] if places > 12 else [])


def test_what_a_value_of_money_may_be_is_said_in_words() -> None:
    with pytest.raises(InputError, match="a finite number of 0 or more"):
        Values(damage_cap=-1)
    with pytest.raises(InputError, match=r"a finite number of 0 to 1$"):
        Values(p_unstable_if_late=2)


def test_nothing_explored_has_no_probability() -> None:
    tree = explore(case_of(feeder_scheme(as_float), "F1"), epsilon=0)
    assert (tree.floor(0.0), tree.ceiling(0.0)) == (0, 0)
    assert tree.floor(0.5) < 0.5 < tree.ceiling(0.5)
    assert tree.floor(Fraction(1, 2)) == tree.ceiling(Fraction(1, 2)) == Fraction(1, 2)


def test_each_failure_set_of_a_campaign_is_one_trial(tmp_path: Path) -> None:
    sets = ((), ("DC: lost",), ("CB1: does_not_open",))
    campaign = Campaign({"a": program_of(feeder_scheme())}, (F1,), failures=sets)
    run_campaign(campaign, str(tmp_path / "kept"))
    with Store(str(tmp_path / "kept")) as store:
        rows = list(ending_rows(store))
    assert [(r["trial"], r["trials"], r["failures"]) for r in rows] == [
        (0, 1, "none"),
        (1, 1, "DC: lost"),
        (2, 1, "CB1: does_not_open"),
    ]
    assert [r["t_clear_ms"] for r in rows] == [70, 470, 220]


def test_security_is_the_chance_that_nothing_trips_for_faults_outside() -> None:
    """A relay for F1 operates for a fault on F2 too, in one of four, and fails in one of eight."""
    unwanted = FailureMode.UNWANTED_OPERATION
    for_f1 = Contact("50", Role.MAIN, frozenset({"F1"}), relay="R")
    blocks: list[Block] = [
        sense("oc1", "F1.CT"), sense("oc2", "F2.CT"), gate("over", "oc2", given=[Ask("R", unwanted)]),
        Gate(name="t", inputs=("oc1", "over"), unless=fails("R"), contact=for_f1),
        gate("coil", "t"), breaker("F1.CB", "coil"),
    ]  # fmt: skip
    modes = ((FailureMode.FAILURE_TO_OPERATE, Fraction(1, 8)), (unwanted, Fraction(1, 4)))
    scheme = Scheme((Component("R", ComponentKind.RELAY, modes),), tuple(blocks))
    program = compile_scheme(radial(), scheme)
    found = study_dependability(program, LogicalSensing(), ["t"], [F1, Location("F2")], epsilon=0)
    assert found.dependability is not None
    assert found.security is not None
    assert found.dependability.contains(Fraction(7, 8))
    assert found.security.contains(Fraction(3, 4))
    assert max(float(found.dependability.width), float(found.security.width)) < 1e-12


@pytest.mark.parametrize(("second", "wanted"), [("1", "1"), ("2", "2")])
def test_back_up_added_takes_the_second_dc_where_there_is_one(second: str, wanted: str) -> None:
    policy = duplicate_relay()
    sets = (policy.sets[0], replace(policy.sets[1], dc=second))
    added = ADDITIONS["local back-up"].change(replace(policy, sets=sets, local_backup=None))
    assert added.local_backup is not None
    assert added.local_backup.dc == wanted
    assert added.local_backup.coil == ("2" if "2" in dict(policy.coil_dc) else "1")
