"""Variants side by side: differences from trees and from trials agree, and what is shared cancels."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import product

import numpy as np
import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.event import run_event
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.layouts import Bay, CtPlacement, feeder, generator, line, single_bus
from schemesim.plant.model import Location, Plant, PlantBuilder
from schemesim.scheme.delays import Fixed
from schemesim.scheme.distributions import Uniform
from schemesim.scheme.dress import dress
from schemesim.scheme.failure_data import FailureData, Override
from schemesim.scheme.model import ComponentKind, FailureMode
from schemesim.scheme.policy import single_set
from schemesim.study.brackets import Bracket
from schemesim.study.comparison import compare
from schemesim.study.edits import ADDITIONS, Edit, Recipe, addition
from schemesim.study.locations import study_locations
from schemesim.study.measures import excess
from schemesim.study.money import Values
from schemesim.study.risk import MEASURES, Explorer, event_cost
from schemesim.study.variants import Paired, VariantStudy, paired, study_variants, verdict_of
from tests.benchmarks.common_numbers import differences

F = FailureMode
OFTEN = FailureData(
    modes={
        ComponentKind.RELAY: {F.FAILURE_TO_OPERATE: 0.04, F.UNWANTED_OPERATION: 0.01},
        ComponentKind.BREAKER: {F.DOES_NOT_OPEN: 0.03},
        ComponentKind.COIL: {F.FAILURE_TO_OPERATE: 0.02},
    },
    no_fault_per_yr={ComponentKind.RELAY: 0.05},
)
VALUES = Values(
    lost_load_per_mwh=100,
    restoration_h=2,
    damage_per_ms=3,
    damage_cap=2000,
    instability=10_000,
    p_unstable_if_late=0.1,
    needless_trip=50,
    no_fault_trip=20,
)
FAULTS = {Location("L1", 0.5): 0.4, Location("F1"): 0.5, Location("Alder.B1"): 0.02, Location("F2"): 0.3}


def plant() -> Plant:
    b = PlantBuilder(length_unit="km")
    line(b, "L1", length=40, kv=132)
    generator(b, "G1", station="Alder")
    generator(b, "G2", station="Birch")
    feeder(b, "F1", station="Alder", load_mw=10)
    feeder(b, "F2", station="Birch", load_mw=20)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1", at=0), Bay("F1", "F1")], kv=132)
    single_bus(b, "Birch", [Bay("L1", "L1", at=1), Bay("G2", "G2"), Bay("F2", "F2")], kv=132)
    return b.build()


PLANT = plant()
BASE = Recipe(PLANT, single_set(), OFTEN)
BETTER = Edit("better relay", overrides=(Override("Alder/F1/relay 1", {F.FAILURE_TO_OPERATE: 0.02}),))


def explorer(epsilon: float = 1e-3) -> Explorer:
    return Explorer(FAULTS, lambda _: 150_000, epsilon=epsilon)


@pytest.fixture(scope="module")
def study() -> VariantStudy:
    twice = BASE.edited(ADDITIONS["second relay"])
    programs = {"base": BASE.program(), "better": BASE.edited(BETTER).program(), "twice": twice.program()}
    return study_variants(explorer(), programs, VALUES, trials=20_000, seed=3)


def test_an_edit_of_one_component_needs_a_fifth_of_the_trials_at_most(study: VariantStudy) -> None:
    pair = study.of("risk_per_yr", "better").paired
    assert pair is not None
    assert pair.differing >= 100  # the edit does something
    assert pair.variance_factor >= 5
    assert f"variance cut by {pair.variance_factor:.3g}" in repr(study)


@pytest.mark.parametrize("variant", ["better", "twice"])
@pytest.mark.parametrize("measure", MEASURES)
def test_trials_and_trees_agree(study: VariantStudy, measure: str, variant: str) -> None:
    row = study.of(measure, variant)
    assert row.paired is not None
    # Within 4.5 standard errors: by chance in one of 10^5.
    half = (row.paired.high - row.paired.estimate) / 1.96 * 4.5
    if math.isfinite(half):
        assert row.difference.low - half <= row.paired.estimate <= row.difference.high + half


def test_only_what_the_edit_touches_differs(study: VariantStudy) -> None:
    base, better = study.ledgers["base"], study.ledgers["better"]
    shared = {id(p) for p, _ in base.places} & {id(p) for p, _ in better.places}
    mine = {str(p.event): id(p) in shared for p, _ in better.places}
    assert mine["F2"]
    assert not mine["F1"]
    whole = better.figure(event_cost, VALUES) - base.figure(event_cost, VALUES)
    assert study.of("risk_per_yr", "better").difference.width < whole.width
    assert whole.low <= study.of("risk_per_yr", "better").difference.low


def test_a_difference_by_hand(study: VariantStudy) -> None:
    # The relay of F1 matters for faults on F1 and the neighbourhood; with half its failures fewer are late.
    row = study.of("late_or_uncleared_per_yr", "better")
    assert row.verdict == "better"
    # Only faults on F1 are late for it: 0.5 a year, 0.02 less often; a failed coil or breaker makes some late anyhow.
    assert row.difference.low >= -0.5 * 0.02
    assert row.difference.high <= -0.5 * 0.02 * 0.97 * 0.98 * 0.9


def test_nothing_changed_is_the_same() -> None:
    found = study_variants(explorer(), {"a": BASE.program(), "b": BASE.program()}, VALUES, trials=200, seed=1)
    for measure in MEASURES:
        row = found.of(measure, "b")
        assert row.difference == Bracket(0.0, 0.0)
        assert row.verdict == "same"
        assert row.paired is not None
        assert row.paired.differing == 0


def test_risk_by_every_answer_set() -> None:
    # One location, three components that can fail: the sum over all their states, each run on its own.
    data = FailureData(
        modes={ComponentKind.RELAY: {F.FAILURE_TO_OPERATE: 0.1}, ComponentKind.BREAKER: {F.DOES_NOT_OPEN: 0.2}},
        no_fault_per_yr={},
    )
    recipe = Recipe(PLANT, single_set(breaker_failure=None), data)
    one = Explorer({Location("F1"): 0.5}, lambda _: 150_000, epsilon=1e-9)
    ledger = one.ledger(recipe.program())
    ((place, rate),) = ledger.places
    assert rate == 0.5
    names = sorted({place.tree.questions[q].name for leaf in place.tree.leaves for q, _ in leaf.asked})
    assert 2 <= len(names) <= 12
    chance = {q.name: float(q.probability) for q in place.tree.questions}
    total = 0.0
    for states in product((False, True), repeat=len(names)):
        yes = [n for n, s in zip(names, states, strict=True) if s]
        run = run_event(place.case, FixedAnswers(place.case.program, yes))
        o = run.outcome
        load = place.case.sensed.lost(place.case.opened(run.final_mask))[0]
        t = math.inf if o.t_clear_us is None else o.t_clear_us / 1000
        cost = load * 2 * 100 + min(3 * t, 2000) + (t > 150) * 0.1 * 10_000 + excess(place.case, o) * 50
        total += cost * math.prod(chance[n] if s else 1 - chance[n] for n, s in zip(names, states, strict=True))
    found = ledger.figure(event_cost, VALUES)
    assert found.low <= 0.5 * total * (1 + 1e-9)
    assert found.high >= 0.5 * total * (1 - 1e-9)
    assert found.width < 1e-3


def test_parts_sum_to_the_risk(study: VariantStudy) -> None:
    parts = [m for m in MEASURES if m.startswith("risk_") and m != "risk_per_yr"]
    total = sum(float(study.of(m, "base").value.low) for m in parts)
    assert total == pytest.approx(float(study.of("risk_per_yr", "base").value.low), rel=1e-9)


def test_a_bound_on_events_narrows_and_is_checked() -> None:
    ledger = explorer(1e-2).ledger(BASE.program())
    plain = ledger.figure(event_cost, VALUES)
    dearest = max(float(event_cost(p.columns, VALUES).max()) for p, _ in ledger.places)

    def bounded(most: float) -> Bracket:
        values = Values(**{**{f: getattr(VALUES, f) for f in Values.__dataclass_fields__}, "worst_event": most})
        return ledger.figure(event_cost, values)

    assert plain.low == bounded(dearest).low
    assert bounded(dearest).high <= plain.high
    with pytest.raises(InputError, match="worst_event"):
        bounded(dearest / 2)


def test_random_delays_share_their_numbers() -> None:
    times = BASE.policy.times
    shaky = single_set(
        times=type(times)(breaker=type(times.breaker)(interrupting=Uniform(40_000, 60_000), auxiliary=Fixed(5_000)))
    )
    recipe = Recipe(PLANT, shaky, OFTEN)
    one = Explorer({Location("F1"): 1.0}, lambda _: 150_000, epsilon=1e-2, no_fault=False)
    found = study_variants(
        one, {"a": recipe.program(), "b": recipe.edited(BETTER).program()}, VALUES, trials=300, seed=2
    )
    pair = found.of("risk_damage_per_yr", "b").paired
    assert pair is not None
    assert 0 < pair.differing < 30  # the times drawn are the same, or every trial would differ


def test_paired_by_hand() -> None:
    base = np.tile([0.0, 2.0, 4.0, 6.0], 10)
    change = np.tile([1.0, 1.0, 1.0, 2.0], 10)
    found = paired(base + change, base, 0.95)
    assert found.estimate == 1.25
    assert found.differing == 40
    spread = change.var(ddof=1)
    assert found.variance_factor == pytest.approx(((base + change).var(ddof=1) + base.var(ddof=1)) / spread)
    assert found.high - found.estimate == pytest.approx(1.959964 * math.sqrt(spread / 40), rel=1e-6)


def test_few_differences_give_no_interval() -> None:
    base = np.zeros(1000)
    variant = base.copy()
    variant[:9] = 1.0
    assert paired(variant, base).high == math.inf
    variant[9] = 1.0
    assert paired(variant, base).low > 0


def test_better_is_said_only_when_certain_or_at_a_stated_confidence() -> None:
    pair = Paired(-1.0, -2.0, -0.5, 0.9, 1000, 50, 8.0)
    wide = Paired(-1.0, -2.0, 0.5, 0.9, 1000, 50, 8.0)
    assert verdict_of(Bracket(-3.0, -1.0), wide) == "better"
    assert verdict_of(Bracket(1.0, 3.0)) == "worse"
    assert verdict_of(Bracket(-3.0, 1.0), pair) == "better at 90 %"
    assert verdict_of(Bracket(-3.0, 1.0), wide) == "not told apart"
    assert verdict_of(Bracket(-3.0, 0.0)) == "not told apart"


def test_additions_do_what_they_say() -> None:
    made = BASE
    names = ["second relay", "second CT core", "second VT winding", "second DC", "second coil", "second channel"]
    for name in names:
        after = made.edited(addition(name))
        assert after != made, name
        assert after.edited(addition(name)) == after  # there already
        made = after
    two = made.policy.sets[1]
    assert (two.label, two.core, two.winding, two.dc, two.coil, two.channel) == ("2",) * 6
    assert dict(made.policy.coil_dc) == {"1": "1", "2": "2"}
    assert BASE.edited(addition("second CT core")) == BASE  # nothing to stand on yet


def test_a_second_coil_made_first_is_used_by_the_second_relay() -> None:
    first = BASE.edited(addition("second coil")).edited(addition("second relay"))
    later = BASE.edited(addition("second relay")).edited(addition("second coil"))
    assert first == later


def test_back_up_additions() -> None:
    bare = Recipe(PLANT, single_set(breaker_failure=None, remote_backup=False))
    assert bare.edited(addition("retrip")) == bare
    made = bare
    for name in ("breaker failure", "retrip", "transfer trip", "local back-up", "remote back-up", "end-fault logic"):
        assert made.edited(addition(name)) != made, name
        made = made.edited(addition(name))
    bf = made.policy.breaker_failure
    assert bf is not None
    assert bf.transfer_trip
    assert bf.times.retrip is not None
    assert made.policy.local_backup is not None
    assert made.policy.remote_backup
    assert made.policy.end_fault


def test_bad_questions_are_refused() -> None:
    with pytest.raises(InputError, match="second relay"):
        addition("second rely")
    with pytest.raises(InputError, match="fault frequencies"):
        Explorer({Location("F1"): 0.0}, lambda _: 0)
    with pytest.raises(InputError, match="faults per year at F1"):
        Explorer({Location("F1"): -1.0}, lambda _: 0)
    with pytest.raises(InputError, match="variants"):
        study_variants(explorer(), {})
    with pytest.raises(InputError) as caught:
        study_variants(explorer(), {"a": BASE.program()}, trials=-1, seed=-1, confidence=1.0)
    assert len(caught.value.problems) == 3


def test_the_figures_of_the_demo_agree_and_need_a_fifth_of_the_trials_at_most() -> None:
    """One relay of a single set ten times better: trees and trials at once, as ``ratios.py`` prints them."""
    for measure, row in differences(20_000).items():
        pair = row.paired
        assert pair is not None, measure
        assert pair.differing > 0, measure
        assert pair.variance_factor >= 5, measure
        half = (pair.high - pair.estimate) / 1.96 * 4.5  # by chance in one of 10^5
        assert row.difference.low - half <= pair.estimate <= row.difference.high + half, measure
        assert row.difference.high < 0, measure  # better, for certain


NO_FAILURES = FailureData(modes={}, no_fault_per_yr={})
SHORT = 0.01
"""Faults per year on each short conductor at Birch's line breaker."""


def standing(ct: CtPlacement) -> tuple[Program, dict[Location, float]]:
    """Two stations with the CTs of Birch's line breaker as told, and the faults at this breaker."""
    b = PlantBuilder(length_unit="km")
    line(b, "L1", length=40, kv=132)
    generator(b, "G1", station="Alder")
    generator(b, "G2", station="Birch")
    feeder(b, "F2", station="Birch", load_mw=20)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1", at=0)], kv=132)
    single_bus(b, "Birch", [Bay("L1", "L1", at=1, ct=ct), Bay("G2", "G2"), Bay("F2", "F2")], kv=132)
    built = b.build()
    shorts = [Location(s.name) for s in built.sections if s.name in ("Birch.L1.b", "Birch.L1.c")]
    faults = {Location("L1", 0.5): 0.4, **dict.fromkeys(shorts, SHORT)}
    return compile_scheme(built, dress(built, single_set(), NO_FAILURES)), faults


def test_variants_may_be_plants_of_their_own_each_with_its_explorer() -> None:
    places = {"both": standing(CtPlacement.BOTH), "circuit": standing(CtPlacement.CIRCUIT_SIDE)}
    explorers = {n: Explorer(f, lambda _: 150_000, no_fault=False) for n, (_, f) in places.items()}
    programs = {n: p for n, (p, _) in places.items()}
    found = study_variants(explorers, programs, VALUES)
    late = found.of("late_or_uncleared_per_yr", "circuit")
    assert float(late.value.low) == pytest.approx(SHORT)  # every fault in the dead zone, nothing else
    assert late.verdict == "worse"
    assert found.of("late_or_uncleared_per_yr", "both").value.high == pytest.approx(0, abs=1e-9)
    drawn = study_variants(explorers, programs, VALUES, trials=20, seed=1).of("late_or_uncleared_per_yr", "circuit")
    assert drawn.paired is not None
    assert drawn.paired.estimate == pytest.approx(SHORT)


def test_plants_that_differ_need_an_explorer_each() -> None:
    places = {"both": standing(CtPlacement.BOTH), "circuit": standing(CtPlacement.CIRCUIT_SIDE)}
    programs = {n: p for n, (p, _) in places.items()}
    one = Explorer({Location("L1", 0.5): 0.4}, lambda _: 150_000)
    with pytest.raises(InputError, match="an explorer for each, as their plants differ"):
        study_variants(one, programs)
    with pytest.raises(InputError, match="did you mean 'circuits'"):
        study_variants({"both": one, "circuits": one}, programs)


def test_studies_of_plants_that_differ_are_compared_on_their_own_places() -> None:
    studies = {}
    for name, ct in (("both", CtPlacement.BOTH), ("circuit", CtPlacement.CIRCUIT_SIDE)):
        program, faults = standing(ct)
        studies[name] = study_locations(program, LogicalSensing(), list(faults), limit_us=150_000, frequencies=faults)
    with pytest.raises(InputError, match="own_places=True"):
        compare(studies)
    found = compare(studies, own_places=True)
    assert found.of("faults_per_yr", "both").value.low == pytest.approx(0.4 + 2 * SHORT)
    assert found.of("faults_per_yr", "circuit").value.low == pytest.approx(0.4 + SHORT)
    row = found.of("late_or_uncleared_per_yr", "circuit")
    assert row.verdict == "worse"
    assert float(row.difference.low) == pytest.approx(SHORT)
    assert found.of("p_within_limit", "circuit").value.low == pytest.approx(0.4 / 0.41)
    bare = replace(studies["circuit"], frequencies=None)
    with pytest.raises(InputError, match="faults per year"):
        compare({"both": studies["both"], "circuit": bare}, own_places=True)
    early = replace(studies["circuit"], options=replace(studies["circuit"].options, limit_us=100_000))
    with pytest.raises(InputError, match="expected the limit of 'both'"):
        compare({"both": studies["both"], "circuit": early}, own_places=True)
