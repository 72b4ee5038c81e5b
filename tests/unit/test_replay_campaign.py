"""Replay: any trial of a campaign again in the event engine, with the outcome that was counted."""

from __future__ import annotations

import sqlite3
from collections import Counter
from contextlib import closing
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from schemesim.errors import InputError, RunError
from schemesim.report.timeline import timeline
from schemesim.scenario import Scenario, load_scenario
from schemesim.scenario.campaigns import campaign_in, campaign_scenario, source_of
from schemesim.study.campaign import Campaign
from schemesim.study.campaign_replay import find_trials, replay_trial
from schemesim.study.campaign_run import load_campaign, run_campaign
from schemesim.study.campaign_tallies import CampaignEnding, rounded_up
from schemesim.study.dependability import outputs_of
from tests.unit.campaign_cases import F1, MAIN, OPENING, small, variants

SMALL = Path(__file__).resolve().parents[1] / "data" / "small.yaml"

Counted = Counter[tuple[CampaignEnding, int | None]]


def replayed(campaign: Campaign, variant: str, event: Any, trials: int, store: str, bin_us: int) -> Counted:
    """Every trial replayed, and counted as campaigns count."""
    found: Counted = Counter()
    for t in range(trials):
        done = replay_trial(campaign, variant, event, t, store=store)
        assert done.counted
        us = done.run.outcome.t_clear_us
        found[unnamed(done.ending), None if us is None else rounded_up(us, bin_us)] += 1
    return found


def counted(store: str, variant: str, event: Any) -> Counted:
    tallies = load_campaign(store).where(variant, event).tallies
    found: Counted = Counter()
    for t in tallies:
        for us, n in t.times:
            found[unnamed(t.ending), us] += n
    return found


def unnamed(ending: CampaignEnding) -> CampaignEnding:
    """Without the names of trip outputs: of several at one instant any may be told."""
    return replace(ending, tripped=tuple((breaker, role, "", done) for breaker, role, _, done in ending.tripped))


@pytest.mark.parametrize(("opening", "bin_us"), [(None, 1), (OPENING, 1000)], ids=["fixed", "random"])
def test_every_trial_replayed_is_just_what_was_counted(opening: Any, bin_us: int, tmp_path: Path) -> None:
    store = str(tmp_path / "s.db")
    campaign = small(opening, 100, observe=MAIN)
    run_campaign(campaign, store, chunk=30)
    for variant in campaign.variants:
        again = replayed(campaign, variant, F1, 100, store, bin_us)
        assert again == counted(store, variant, F1)
        assert len(again) > 4


@pytest.fixture(scope="module")
def scenario() -> Scenario:
    return load_scenario(SMALL)


def test_a_campaign_is_made_again_from_its_store(scenario: Scenario, tmp_path: Path) -> None:
    """Under both policies, with random delays, watched outputs and trips with no fault."""
    store = str(tmp_path / "s.db")
    at = [*scenario.frequencies][:2]
    watched = {name for p in scenario.policies for name in outputs_of(scenario.scheme(p), station="Birch")}
    campaign = campaign_scenario(
        scenario, scenario.policies, locations=at, no_fault=True, trials=12, seed=5, observe=watched
    )
    assert len(campaign.events) > 2
    run_campaign(campaign, store, source=source_of(scenario))
    _, again = campaign_in(store)
    assert again.about() == campaign.about()
    for variant in campaign.variants:
        for event in (at[0], campaign.events[-1]):
            rounded = load_campaign(store).where(variant, event).facts.random
            told = replayed(again, variant, str(event), 12, store, 1000 if rounded else 1)
            assert told == counted(store, variant, event)


def test_a_replay_is_a_whole_timeline(tmp_path: Path) -> None:
    campaign = small(OPENING, 200)
    failed = [done for t in range(200) if (done := replay_trial(campaign, "as it is", "F1", t)).failures]
    assert failed
    assert not failed[0].counted  # there is no store
    shown = timeline(failed[0].case, failed[0].run).to_text()
    assert failed[0].failures[0].partition(":")[0] in shown
    assert repr(failed[0]).startswith(f"Replayed(trial {failed[0].trial} of F1, as it is: ")
    store = str(tmp_path / "s.db")
    run_campaign(small(OPENING, 100), store)
    assert not replay_trial(campaign, "as it is", "F1", 150, store=store).counted
    assert replay_trial(campaign, "as it is", "F1", 50, store=store).counted


def test_failure_sets_are_replayed_by_number(tmp_path: Path) -> None:
    store = str(tmp_path / "s.db")
    sets = ((), ("M1: failure_to_operate", "M2: failure_to_operate"), ("common cause same settings",))
    campaign = Campaign(variants(OPENING), (F1,), failures=sets)
    run_campaign(campaign, store)
    asked = [replay_trial(campaign, "as it is", F1, n, store=store) for n in range(3)]
    assert all(r.counted for r in asked)
    assert [r.run.outcome.t_clear_us for r in asked] == [70_000, 470_000, 470_000]  # as worked out by hand
    assert replay_trial(campaign, "apart", F1, 2, store=store).run.outcome.t_clear_us == 70_000
    with pytest.raises(InputError, match="from 0 to 2"):
        replay_trial(campaign, "apart", F1, 3, store=store)


def test_a_store_that_counted_otherwise_is_told(tmp_path: Path) -> None:
    """One whose endings were tampered with, as another version might have made them."""
    store = str(tmp_path / "s.db")
    campaign = small(trials=20)
    run_campaign(campaign, store)
    with closing(sqlite3.connect(store)) as db, db:
        db.execute("UPDATE ending SET text = replace(text, '\"F1.CB\"', '\"F9.CB\"')")
    with pytest.raises(RunError, match=r"trial 7 comes out otherwise than it was counted in .*numpy"):
        replay_trial(campaign, "as it is", F1, 7, store=store)


def test_bad_trials_are_refused(tmp_path: Path) -> None:
    campaign = small(trials=10)
    for trial in (-1, 10, 1.0, True):
        with pytest.raises(InputError, match="trial"):
            replay_trial(campaign, "as it is", F1, trial)  # type: ignore[arg-type]  # that is the test
    with pytest.raises(InputError, match="did you mean 'as it is'"):
        replay_trial(campaign, "as it was", F1, 1)
    store = str(tmp_path / "s.db")
    run_campaign(campaign, store)
    with pytest.raises(InputError, match="made from a scenario"):
        campaign_in(store)


@pytest.mark.parametrize("opening", [None, OPENING], ids=["fixed", "random"])
def test_trials_are_found_by_what_happens_in_them(opening: Any, tmp_path: Path) -> None:
    store = str(tmp_path / "s.db")
    campaign = small(opening, 200, observe=MAIN)
    run_campaign(campaign, store)
    for variant in campaign.variants:

        def late(_: CampaignEnding, t_us: int | None) -> bool:
            return t_us is None or t_us > 100_000

        found = find_trials(campaign, variant, F1, late, most=200)
        assert len(found) == load_campaign(store).where(variant, F1).count(late)
        slow = [replay_trial(campaign, variant, F1, t, store=store).run.outcome.t_clear_us for t in range(200)]
        assert found == tuple(t for t, us in enumerate(slow) if us is None or us > 100_000)
        assert find_trials(campaign, variant, F1, late, most=2) == found[:2]


def test_trials_are_found_among_given_failure_sets() -> None:
    campaign = small(None, 1)
    name = next(iter(campaign.variants))
    given = replace(campaign, trials=0, failures=((), *((q.name,) for q in campaign.variants[name].questions)))
    slow = [replay_trial(given, name, F1, n).run.outcome.t_clear_us for n in range(given.rounds)]
    assert len(set(slow)) > 1
    assert find_trials(given, name, F1, lambda _, us: us != slow[0], most=99) == tuple(
        n for n, us in enumerate(slow) if us != slow[0]
    )
    with pytest.raises(InputError, match="most: got 0"):
        find_trials(given, name, F1, lambda *_: True, most=0)
    with pytest.raises(InputError, match="a variant of the campaign"):
        find_trials(given, "none", F1, lambda *_: True)
