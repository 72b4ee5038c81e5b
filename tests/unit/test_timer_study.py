"""The timer study: margins and totals by hand, sums of times by closed forms, probabilities by trials on the engine.

The station: G1 and a feeder F1 on one bus. Main protection of F1 trips at once after its operate time; if F1.CB
stays, breaker failure opens G1.CB through a lockout relay.
"""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case, bind
from schemesim.engine.event import run_event
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.engine.times import DelayTimes
from schemesim.errors import InputError
from schemesim.plant.layouts import Bay, feeder, generator, single_bus
from schemesim.plant.model import Location, Plant, PlantBuilder
from schemesim.scheme.build import BreakerTimes
from schemesim.scheme.delays import Delay, Fixed
from schemesim.scheme.distributions import Empirical, Normal, Triangular, Uniform
from schemesim.scheme.dress import dress
from schemesim.scheme.functions import BreakerFailureTimes, ElementTimes
from schemesim.scheme.model import Role
from schemesim.scheme.policy import BreakerFailurePolicy, Policy, PolicyTimes, duplicate_relay, single_set
from schemesim.study.brackets import Bracket, exactly
from schemesim.study.delay_chains import earliest_of
from schemesim.study.intervals import clopper_pearson
from schemesim.study.time_sums import Span
from schemesim.study.timer_races import timer_races
from schemesim.study.timer_study import TimerStudy, Weights, study_timers
from schemesim.study.tree import Happens
from tests.rules.small import NO_RATES, chain

F1 = Location("F1")
STUCK = "Alder.F1.CB: does_not_open"
BREAKER = Triangular(40_000, 48_000, 70_000)
RESET = Uniform(10_000, 26_000)
RELAY = Normal(20_000, 3_000, 12_000, 32_000)
TRIALS = 1500


def station() -> Plant:
    b = PlantBuilder()
    generator(b, "G1", station="Alder")
    feeder(b, "F1", station="Alder", load_mw=10)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1")])
    return b.build()


def timed(
    timer: Delay = Fixed(150_000),
    opening: Delay = Fixed(50_000),
    reset: Delay = Fixed(20_000),
    relay: Delay = Fixed(20_000),
    policy: Policy | None = None,
    **more: object,
) -> Policy:
    """A policy with these times; lockout 10 ms; end of the auxiliary contact 5 ms after the breaker."""
    return replace(
        policy or single_set(),
        times=PolicyTimes(breaker=BreakerTimes(interrupting=opening), overcurrent=ElementTimes(operate=relay)),
        breaker_failure=BreakerFailurePolicy(
            times=BreakerFailureTimes(timer=timer, detector_reset=reset, retrip=None),
            retrip_coil="1",
            **more,  # type: ignore[arg-type]
        ),
    )


def program_of(policy: Policy, plant: Plant | None = None) -> Program:
    where = plant or station()
    return compile_scheme(where, dress(where, policy, NO_RATES))


def studied(policy: Policy, limit_us: int = 250_000, **more: object) -> TimerStudy:
    program = program_of(policy)
    return study_timers(
        program, LogicalSensing(), [F1], limit_us=limit_us,
        **more,  # type: ignore[arg-type]
    )  # fmt: skip


def agrees(happened: int, found: Bracket) -> None:
    """The bracket meets the exact interval of the trials at 99.9 %, and is narrow enough to say something."""
    assert found.overlaps(Bracket(*clopper_pearson(happened, TRIALS, 0.999))), (happened, found)
    assert found.width < 0.02


def count(case: Case, yes: tuple[str, ...], happens: Happens) -> int:
    answers = FixedAnswers(case.program, yes)
    found = 0
    for trial in range(TRIALS):
        outcome = run_event(case, answers, times=DelayTimes(7, trial)).outcome
        found += happens(outcome)
    return found


# --- margins and totals ---------------------------------------------------------------------


def test_margin_and_total_by_hand() -> None:
    """Margin 150 - 50 - 20 = 80; total 20 + 150 + 10 lockout + 50 = 230. Both as in the runs."""
    race = studied(timed()).of("Alder.F1.CB").race
    assert (race.margin_us, race.margin_run_us) == (80_000, 80_000)
    assert (race.total_us, race.total_run_us) == (230_000, 230_000)


def test_a_lockout_ahead_of_the_timer_is_in_the_total() -> None:
    """A bus fault at Birch; a breaker that no source stands behind is waited for by nobody."""
    plant = chain()
    program = program_of(timed(), plant)
    found = {r.subject: r for r in timer_races(
        program, LogicalSensing(), [Location("Birch.B1")], limits={Location("Birch.B1"): 250_000}
    ) if r.timer.endswith("50BF timer")}  # fmt: skip
    # 87B 20, lockout 10, timer 150, lockout 10, channel 15 to the far end, breaker 50.
    assert found["Birch.L1.CB"].total_us == found["Birch.L1.CB"].total_run_us == 255_000
    assert found["Birch.F2.CB"].total_us is None  # nothing feeds the fault through a load


@pytest.mark.parametrize(("timer_ms", "needless"), [(70, 0), (69, 1)])
def test_a_tie_is_no_needless_trip(timer_ms: int, needless: int) -> None:
    """50 + 20 = 70: at that very instant the reason is gone. The engine and the study agree."""
    policy = timed(timer=Fixed(timer_ms * 1000))
    case = bind(program_of(policy), F1, LogicalSensing())
    outcome = run_event(case, FixedAnswers(case.program)).outcome
    assert ("Alder.G1.CB" in outcome.tripped) == bool(needless)
    assert studied(policy).of("Alder.F1.CB").now.p_needless == exactly(needless)


def test_the_auxiliary_contact_counts_where_it_is_used() -> None:
    policy = timed(auxiliary=True)
    times = replace(policy.times, breaker=BreakerTimes(auxiliary=Fixed(30_000)))
    race = studied(replace(policy, times=times)).of("Alder.F1.CB").race
    assert race.margin_us == race.margin_run_us == 70_000  # 150 - 50 - 30


def test_fixed_times_leave_a_band_of_certain_settings() -> None:
    """Without spread: from 70 (breaker and reset) to 250 - 80 = 170; in the middle both margins are 50."""
    found = studied(timed()).of("Alder.F1.CB")
    assert found.band_us == (70_000, 170_000)
    assert found.best_us == 120_000
    assert studied(timed(), limit_us=140_000).of("Alder.F1.CB").band_us is None


@pytest.mark.parametrize(
    ("timer_ms", "reset_ms", "contact_ms"),
    # Budgets of common practice for an interrupting time of 50 ms, each with a margin of 50: detector reset 25; an
    # element reset of 50 and 10 for the relay behind it; the breaker's auxiliary contact 10.
    [(125, 25, None), (160, 60, None), (110, 10, 10)],
)
def test_the_study_finds_the_margin_of_each_budget(timer_ms: int, reset_ms: int, contact_ms: int | None) -> None:
    policy = timed(Fixed(timer_ms * 1000), reset=Fixed(reset_ms * 1000), auxiliary=contact_ms is not None)
    breaker = BreakerTimes(auxiliary=Fixed((contact_ms or 5) * 1000))
    race = studied(replace(policy, times=replace(policy.times, breaker=breaker))).of("Alder.F1.CB").race
    assert (race.margin_us, race.margin_run_us) == (50_000, 50_000)


# --- sums of random times -------------------------------------------------------------------


def test_sum_of_two_uniform_times() -> None:
    """Triangular on 0..200 ms: P(sum > 150 ms) = 50² / (2 · 100²); P(> 200) = 0."""
    grid = Span((Uniform(0, 100_000), Uniform(0, 100_000), Fixed(7_000))).grid()
    found = grid.exceeds(157_000)
    assert found.contains(0.125)
    assert found.width < 2e-3
    assert grid.exceeds(207_000) == exactly(0)
    assert grid.exceeds(6_999) == exactly(1)


def test_steps_of_a_sample_are_exact() -> None:
    """Samples of whole microseconds on a grid of one: 3 of 9 pairs are over 4."""
    sample = Empirical((1, 2, 3))
    found = Span((sample, sample)).grid().exceeds(4)
    assert found.contains(3 / 9)
    assert found.width < 1e-11
    assert Span((sample,), less=(sample,)).grid().exceeds(0).contains(3 / 9)


def test_longest_and_shortest_of_chains() -> None:
    """Of two uniform times on 0..100 ms, rounded: each is over 90 ms with p = 1 - 0.900005."""
    u = Uniform(0, 100_000)
    two = ((u,), (u,))
    p = 1 - 0.900005
    assert Span(longest=two).grid().exceeds(90_000).contains(1 - (1 - p) ** 2)
    assert Span(shortest=two).grid().exceeds(90_000).contains(p**2)
    for chains in (Span(longest=two, shared=True), Span(shortest=two, shared=True)):
        assert chains.grid().exceeds(90_000).contains(p)  # one time, counted twice


# --- against trials on the engine -----------------------------------------------------------


@pytest.mark.parametrize("timer_ms", [74, 80])
def test_needless_trips_agree_with_trials(timer_ms: int) -> None:
    policy = timed(Uniform((timer_ms - 2) * 1000, (timer_ms + 2) * 1000), BREAKER, RESET, RELAY)
    now = studied(policy).of("Alder.F1.CB").now
    case = bind(program_of(policy), F1, LogicalSensing())
    failed = Role.BREAKER_FAILURE
    happened = count(case, (), lambda o: any(x.role is failed for x in o.openings))
    assert 0.02 * TRIALS < happened < 0.6 * TRIALS
    agrees(happened, now.p_needless)


def test_late_clearing_agrees_with_trials_for_one_and_two_sets() -> None:
    """With two sets the timer starts with the quicker; with spread in the relays that shortens the total."""
    limit = 236_000
    shares = []
    for base in (single_set(), duplicate_relay()):
        policy = timed(Fixed(150_000), BREAKER, RESET, RELAY, policy=base)
        now = studied(policy, limit).of("Alder.F1.CB").now
        case = bind(program_of(policy), F1, LogicalSensing())
        happened = count(case, (STUCK,), lambda o: o.t_clear_us is None or o.t_clear_us > limit)
        agrees(happened, now.p_late)
        shares.append(now.p_late)
    assert shares[1].high < shares[0].low


def test_zone_2_against_breaker_failure_agrees_with_trials() -> None:
    """A bus fault at Birch, its breaker of L1 stuck: zone 2 of Alder waits for breaker failure and its own reset."""
    base = timed(Fixed(150_000), Uniform(40_000, 80_000))
    policy = replace(base, reaches=replace(base.reaches, zone_2_delay=Uniform(260_000, 270_000)))
    plant, at, name = chain(), Location("Birch.B1"), "Alder/L1/1 21-2 timer"
    program = program_of(policy, plant)
    found = study_timers(
        program, LogicalSensing(), [at], limit_us=250_000, zone_2_limit_us=345_000, settings_us=[265_000]
    ).of(name)
    output = "Alder/L1/1 21-2 trip"
    case = bind(program, at, LogicalSensing(), observe=frozenset({output}))
    happened = count(case, ("Birch.L1.CB: does_not_open",), lambda o: bool(o.operated))
    agrees(happened, found.now.p_needless)
    assert 0 < happened < TRIALS
    # Zone 2 clears 20 + 260..270 + 40..80 after the fault: late where 0..10 and 0..40
    # sum to over 25, half the time.
    assert found.now.p_late.contains(0.5)
    assert found.now.p_late.width < 0.01


# --- the setting ----------------------------------------------------------------------------


def test_both_probabilities_are_monotone_and_the_best_setting_weighs_them() -> None:
    policy = timed(Fixed(150_000), BREAKER, RESET, RELAY)
    even = studied(policy, 180_000, weights=Weights(1, 1)).of("Alder.F1.CB")
    needless = [p.p_needless.high for p in even.points]
    late = [p.p_late.high for p in even.points]
    assert needless == sorted(needless, reverse=True)
    assert late == sorted(late)
    assert even.points[0].p_needless.high == 1
    assert even.points[-1].p_late.low == 1
    # A late clearing that costs more asks for a shorter timer.
    dear = studied(policy, 180_000, weights=Weights(1, 1e6)).of("Alder.F1.CB")
    assert dear.best_us < even.best_us
    low, high = even.best_within_us
    assert low <= even.best_us <= high
    at_best = next(p for p in even.points if p.setting_us == even.best_us)
    assert all(at_best.risk_per_yr.low <= p.risk_per_yr.high for p in even.points)


def test_the_band_keeps_to_the_targets() -> None:
    policy = timed(Fixed(150_000), BREAKER, RESET, RELAY)
    found = studied(policy, 240_000, weights=Weights(needless_target=0.01, late_target=0.01)).of("Alder.F1.CB")
    assert found.band_us is not None
    for p in found.points:
        inside = found.band_us[0] <= p.setting_us <= found.band_us[1]
        assert inside == (p.p_needless.high <= 0.01 and p.p_late.high <= 0.01)
    tighter = studied(policy, 240_000, weights=Weights(needless_target=1e-4, late_target=1e-4)).of("Alder.F1.CB")
    assert tighter.band_us is not None
    assert found.band_us[0] < tighter.band_us[0] <= tighter.band_us[1] < found.band_us[1]


def test_risk_is_probability_times_frequency_times_cost() -> None:
    """2 faults a year on F1; the breaker stays with 3.3e-4 (3e-4 and 3e-5)."""
    policy = timed(Fixed(60_000))  # trips needlessly, and is never late
    study = studied(policy, frequencies={F1: 2.0}, weights=Weights(needless=5, late=100))
    program = program_of(policy)
    modes = {m.value: p for m, p in program.scheme.component["Alder.F1.CB"].modes}
    stays = modes["does_not_open"] + modes["does_not_interrupt"]
    now = study.of("Alder.F1.CB").now
    assert float(now.risk_per_yr.low) == pytest.approx(5 * 2 * (1 - stays))
    assert study.per_yr
    late = studied(timed(Fixed(400_000)), frequencies={F1: 2.0}, weights=Weights(needless=5, late=100))
    assert float(late.of("Alder.F1.CB").now.risk_per_yr.low) == pytest.approx(100 * 2 * stays)


def test_table_and_mistakes() -> None:
    study = studied(timed())
    table = study.table()
    assert table["timer"].tolist() == [r.race.timer for r in study.results]
    assert table.set_index("subject").loc["Alder.F1.CB", "margin_ms"] == 80
    assert list(study.of("Alder.F1.CB").curve()["setting_ms"]) == sorted(study.of("Alder.F1.CB").curve()["setting_ms"])
    with pytest.raises(InputError, match="expected a timer studied"):
        study.of("F9.CB")
    with pytest.raises(InputError, match="settings_us"):
        studied(timed(), settings_us=[])
    with pytest.raises(InputError, match="step_us"):
        studied(timed(), step_us=0)
    with pytest.raises(InputError, match="weight late"):
        Weights(late=-1)
    with pytest.raises(InputError, match="late_target"):
        Weights(late_target=2)


def test_a_start_that_a_run_left_undecided_may_come_first_at_other_times() -> None:
    """A bus differential sees the fault by the CTs of both generators; one is enough, so no run asks about both."""
    b = PlantBuilder()
    generator(b, "G1", station="Alder")
    generator(b, "G2", station="Alder")
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("G2", "G2")])
    policy = timed()
    policy = replace(policy, times=replace(policy.times, differential=ElementTimes(operate=Uniform(10_000, 50_000))))
    plant, bus, stuck = b.build(), Location("Alder.B1"), "Alder.G1.CB: does_not_open"
    program = compile_scheme(plant, dress(plant, policy))
    # Sensing, lockout 10, timer 150, lockout 10, the unit's 50: late where both elements take more than 30 ms, 1/4.
    found = study_timers(program, LogicalSensing(), [bus], limit_us=250_000, settings_us=[150_000]).of("Alder.G1.CB")
    late = found.now.p_late
    assert found.race.rest is not None
    assert len(found.race.rest.shortest) == 2
    assert float(late.low) == pytest.approx(0.25, abs=1e-3)
    assert float(late.high) == pytest.approx(0.25, abs=1e-3)
    case = bind(program, bus, LogicalSensing())
    runs = [run_event(case, FixedAnswers(program, [stuck]), times=DelayTimes(3, t)).outcome for t in range(200)]
    low, high = clopper_pearson(sum((o.t_clear_us or 0) > 250_000 for o in runs), 200, 0.999)
    assert low <= 0.25 <= high


def test_ways_that_end_alike_are_taken_together() -> None:
    """Three elements of 0 to 100 ms, two of them through one lockout relay of 10 ms: all over 50 ms in one of eight."""
    ms = Uniform(0, 100_000)
    chains: list[list[tuple[str, Delay]]] = [
        [("a", ms), ("86 1", Fixed(10_000))],
        [("b", ms), ("86 1", Fixed(10_000))],
        [("c", ms), ("86 2", Fixed(10_000))],
    ]
    ways, shared = earliest_of(chains)
    assert (len(ways), shared) == (2, False)
    late = Span(shortest=ways).grid().exceeds(60_000)
    assert float(late.low) == pytest.approx(1 / 8, abs=5e-3)
    assert float(late.high) == pytest.approx(1 / 8, abs=5e-3)
    # A relay that takes its time for both at once is drawn once: 0 to 100 ms and no other delay.
    same: list[list[tuple[str, Delay]]] = [[("a", Fixed(0)), ("86 1", ms)], [("b", Fixed(0)), ("86 1", ms)]]
    one = Span(shortest=earliest_of(same)[0]).grid().exceeds(50_000)
    assert float(one.low) == pytest.approx(1 / 2, abs=5e-3)
    assert float(one.high) == pytest.approx(1 / 2, abs=5e-3)
    # An element that starts by two ways is in both of them: told, so that only bounds are given.
    assert earliest_of([[("a", ms), ("x", ms)], [("a", ms), ("y", ms)]])[1]
