"""The store of a campaign: whole chunks or nothing, no trial twice, and no other campaign's."""

from __future__ import annotations

import os
import sqlite3
import subprocess
import sys
from collections.abc import Iterator
from contextlib import closing
from dataclasses import replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from schemesim.engine.outcome import Status
from schemesim.errors import InputError, RunError
from schemesim.scheme.distributions import Uniform
from schemesim.scheme.model import Role
from schemesim.study.campaign_key import digest, versions
from schemesim.study.campaign_run import load_campaign, run_campaign
from schemesim.study.campaign_tallies import CampaignEnding, PlaceFacts, Tally
from schemesim.study.campaign_work import Chunk
from schemesim.study.store import Place, Store
from tests.unit.campaign_cases import F1, F2, MAIN, OPENING, electrical, program, small, variants

ROOT = Path(__file__).resolve().parents[2]
ABOUT: dict[str, object] = {"seed": 1, "versions": {"numpy": "2.0"}}
PLACES = [Place("v", "F1", 150_000), Place("v", "F2", 150_000)]


@pytest.fixture
def path(tmp_path: Path) -> str:
    return str(tmp_path / "campaign.db")


@pytest.fixture
def store(path: str) -> Iterator[Store]:
    with Store(path, write=True) as kept:
        kept.take_on(ABOUT, PLACES, 100)
        yield kept


FACTS = PlaceFacts(True, True, frozenset({"CB"}), frozenset({"CB", "CB2"}), frozenset(), frozenset({"out"}))
ENDING = CampaignEnding(
    Status.CLEARED, Role.MAIN, (("CB", Role.MAIN, "M1.trip", True),), ("out",), ("CB",), 12.5, 3, False
)
STAYS = CampaignEnding(Status.NOT_CLEARED, None, (), (), (), 0.0, 0, True)


def chunk(place: int, first: int, end: int) -> Chunk:
    n = end - first
    tallies = (Tally(ENDING, ((70_000, n - 1),), 69_900 * (n - 1), 2**70 * (n - 1)), Tally(STAYS, ((None, 1),), 0, 0))
    return Chunk(place, first, end, FACTS, tallies, None, 0.25)


def test_what_is_added_comes_back(store: Store, path: str) -> None:
    """Sums over 64 bits too."""
    added = [chunk(0, 0, 10), chunk(0, 20, 25), chunk(1, 5, 9)]
    assert all(store.add(c) for c in added)
    with Store(path) as reader:
        assert [*reader.chunks(0), *reader.chunks(1)] == added
        assert reader.done() == {0: [(0, 10), (20, 25)], 1: [(5, 9)]}
        counts = reader.counts(0)
        assert counts is not None
        assert counts.ranges == ((0, 10), (20, 25))
        assert {t.ending: (t.times, t.sum_us2) for t in counts.tallies} == {
            ENDING: (((70_000, 13),), 13 * 2**70),
            STAYS: (((None, 2),), 0),
        }
        assert counts.t_clear_us_mean().estimate == 69_900
        assert (reader.trials, reader.about, reader.source) == (100, ABOUT, "")


def test_no_trial_twice(store: Store) -> None:
    assert store.add(chunk(0, 10, 20))
    for first, end in ((10, 20), (5, 11), (19, 30), (12, 15), (0, 100)):
        assert not store.add(chunk(0, first, end))
    assert store.add(chunk(0, 0, 10))
    assert store.add(chunk(0, 20, 30))
    assert store.add(chunk(1, 10, 20))
    assert store.done() == {0: [(0, 10), (10, 20), (20, 30)], 1: [(10, 20)]}


def test_a_chunk_is_in_whole_or_not_at_all(store: Store) -> None:
    class Interrupts:
        def to_text(self) -> str:
            raise KeyboardInterrupt

    bad: Any = Interrupts()
    good = chunk(0, 0, 10)
    with pytest.raises(KeyboardInterrupt):
        store.add(replace(good, tallies=(*good.tallies, replace(good.tallies[0], ending=bad))))
    assert store.done() == {}
    assert store.counts(0) is None
    assert store.add(good)


def test_two_processes_may_work_on_one_store(store: Store, path: str) -> None:
    with Store(path, write=True) as other:
        other.take_on(ABOUT, PLACES, 200)
        assert store.add(chunk(0, 0, 10))
        assert not other.add(chunk(0, 0, 10))
        assert other.add(chunk(0, 10, 20))
        assert store.done() == other.done() == {0: [(0, 10), (10, 20)]}
    assert store.trials == 200


def test_it_keeps_a_write_ahead_log(store: Store, path: str) -> None:
    store.add(chunk(0, 0, 10))
    assert Path(f"{path}-wal").exists()
    with closing(sqlite3.connect(path)) as db:
        assert db.execute("PRAGMA journal_mode").fetchone() == ("wal",)
        assert db.execute("PRAGMA integrity_check").fetchone() == ("ok",)


def test_only_the_same_campaign_goes_on(path: str) -> None:
    run_campaign(small(trials=5), path)
    base = small(trials=5)
    for name, other in {
        "seed": replace(base, seed=1),
        "variants": replace(base, variants=variants(OPENING)),
        "events": replace(base, events=(F1,)),
        "horizon_us": replace(base, horizon_us=9_000_000),
        "observe": replace(base, observe=MAIN),
        "failures": replace(base, trials=0, failures=((),)),
    }.items():
        with pytest.raises(InputError, match=rf"campaign, {name}: got .* as in the store {path}, or another store"):
            run_campaign(other, path)
    run_campaign(replace(base, limit_us=70_000), path)  # counts do not depend on it
    assert load_campaign(path).places[0].limit_us == 70_000


def test_another_version_does_not_go_on(path: str, monkeypatch: pytest.MonkeyPatch) -> None:
    run_campaign(small(trials=5), path)
    other = tuple((name, "9.9.9" if name == "numpy" else v) for name, v in versions())
    monkeypatch.setattr("schemesim.study.campaign.versions", lambda: other)
    with pytest.raises(InputError, match=r"campaign, versions: numpy: got '9\.9\.9', expected .* as in the store"):
        run_campaign(small(trials=5), path)


def test_what_is_no_store_is_refused_and_left_alone(tmp_path: Path) -> None:
    text, other = tmp_path / "text.db", tmp_path / "other.db"
    text.write_text("no database\n" * 100)
    with closing(sqlite3.connect(other)) as db:
        db.execute("CREATE TABLE mine (x)")
    before = text.read_bytes(), other.read_bytes()
    for place, why in (
        (text, "not a database"),
        (other, "another database"),
        (tmp_path, "a file in a folder"),
        (tmp_path / "none" / "s.db", "a file in a folder"),
    ):
        with pytest.raises(InputError, match=why):
            run_campaign(small(trials=5), str(place))
    assert (text.read_bytes(), other.read_bytes()) == before
    assert sorted(p.name for p in tmp_path.iterdir()) == ["other.db", "text.db"]
    for place, why in ((tmp_path / "absent.db", "that is there"), (text, "not a database")):
        with pytest.raises(InputError, match=why):
            load_campaign(str(place))
    empty = tmp_path / "empty.db"
    empty.touch()
    with pytest.raises(InputError, match="this one is empty"):
        load_campaign(str(empty))
    assert run_campaign(small(trials=5), str(empty)).complete  # one whose making was cut short is made anew


def test_another_form_is_refused(store: Store, path: str) -> None:
    store.close()
    with closing(sqlite3.connect(path)) as db, db:
        db.execute("UPDATE meta SET value = '99' WHERE key = 'form'")
    with pytest.raises(InputError, match="this one has form 99"):
        Store(path)


@pytest.mark.usefixtures("store")
def test_a_store_in_use_elsewhere_is_waited_for_and_told(path: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("schemesim.study.store.WAIT_S", 0.05)
    with Store(path, write=True) as other, closing(sqlite3.connect(path, isolation_level=None)) as holds:
        holds.execute("BEGIN IMMEDIATE")
        with pytest.raises(RunError, match="locked; what was added before is kept"):
            other.add(chunk(0, 0, 10))
        holds.execute("ROLLBACK")
        assert other.add(chunk(0, 0, 10))


# --- what a campaign rests on --------------------------------------------------------------

_DIGEST = "from tests.unit.campaign_cases import *; print([dict(c.keys) for c in (small(OPENING), electrical())])"


def test_digests_are_the_same_in_every_process() -> None:
    told = set()
    for seed in ("1", "2"):
        env = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONHASHSEED": seed}
        done = subprocess.run([sys.executable, "-c", _DIGEST], capture_output=True, text=True, env=env, check=True)
        told.add(done.stdout.strip())
    assert told == {str([dict(c.keys) for c in (small(OPENING), electrical())])}


def test_digests_tell_apart() -> None:
    items: list[object] = [
        None, True, 1, 1.0, 1j, digest, "1", b"1", Fraction(1), (), (1,), ((1,),), (1, 2), (2, 1), frozenset(),
        frozenset({1}), {}, {1: 2}, {2: 1},
        Role.MAIN, Role.LOCAL, Status.CLEARED, np.array([1.0]), F1, F2, Uniform(1, 2), Uniform(1, 3),
        program().scheme, program(common_causes=()).scheme, program(OPENING).scheme, program().plant,
    ]  # fmt: skip
    assert len({digest(item) for item in items}) == len(items)
    assert digest([1, 2]) == digest((1, 2))
    assert digest(np.float64(1.5)) == digest(1.5)
    assert digest(program().scheme) == digest(program().scheme)
    with pytest.raises(InputError, match="data: dataclasses"):
        digest(object())
