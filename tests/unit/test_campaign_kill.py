"""Campaigns whose workers and parent are killed at random moments end with the totals of an undisturbed run."""

from __future__ import annotations

import multiprocessing
import os
import random
import signal
import sqlite3
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor
from contextlib import closing, contextmanager, suppress
from pathlib import Path
from typing import Any

import pytest

from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import RunError
from schemesim.study.campaign import Campaign
from schemesim.study.campaign_counts import PlaceCounts
from schemesim.study.campaign_run import load_campaign, run_campaign
from tests.unit.campaign_cases import F1, OPENING, small, variants

ROOT = Path(__file__).resolve().parents[2]
TRIALS, CHUNK = 320, 8

DRIVER = f"""
import multiprocessing, sys
from schemesim.study.campaign_run import run_campaign
from tests.unit.campaign_cases import OPENING, small

def tell(done, of):
    print(done, *(p.pid for p in multiprocessing.active_children()), flush=True)
    sys.stdin.readline()

if __name__ == "__main__":
    run_campaign(small(OPENING, {TRIALS}), sys.argv[1], workers=2, chunk={CHUNK}, progress=tell)
"""

Rows = dict[tuple[int, int, int], tuple[float, bytes]]


def rows_of(path: str) -> Rows:
    """What is in the store; how long a chunk took tells whether it was run again."""
    with closing(sqlite3.connect(path)) as db:
        assert db.execute("PRAGMA integrity_check").fetchone() == ("ok",)
        if not db.execute("SELECT 1 FROM sqlite_master").fetchone():
            return {}
        found = db.execute('SELECT place, first, "end", seconds, counts FROM chunk').fetchall()
    return {(place, first, end): (seconds, counts) for place, first, end, seconds, counts in found}


@contextmanager
def started(path: str) -> Iterator[subprocess.Popen[str]]:
    env = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONWARNINGS": "error"}
    command = [sys.executable, "-c", DRIVER, path]
    pipe = subprocess.PIPE
    with subprocess.Popen(command, stdin=pipe, stdout=pipe, stderr=pipe, text=True, env=env) as process:
        guard = threading.Timer(150, process.kill)  # a campaign that hangs is a failed test and no hung one
        guard.start()
        try:
            yield process
        finally:
            guard.cancel()
            process.kill()


def kill(pid: int) -> None:
    with suppress(ProcessLookupError):
        os.kill(pid, signal.SIGKILL)


def gone(pid: int) -> bool:
    """Whether a process is no more, or waits only to be buried."""
    try:
        os.kill(pid, 0)
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] == "Z"
    except (ProcessLookupError, FileNotFoundError):
        return True


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory: pytest.TempPathFactory) -> tuple[PlaceCounts, ...]:
    return run_campaign(small(OPENING, TRIALS), str(tmp_path_factory.mktemp("calm") / "s.db")).places


@pytest.mark.skipif(sys.platform == "win32", reason="SIGKILL")
def test_killed_workers_and_parents_lose_nothing_and_repeat_nothing(tmp_path: Path, undisturbed: Any) -> None:
    rng = random.Random(71)
    path, before, lives, killed = str(tmp_path / "s.db"), Rows(), 0, 0
    while True:
        last_life = lives == 2
        worker_at = rng.randrange(3, 12)
        parent_at = 10**9 if last_life else worker_at + rng.randrange(4, 16)
        done, workers = 0, set[int]()
        with started(path) as process:
            assert process.stdin is not None
            assert process.stdout is not None
            for n, line in enumerate(process.stdout):
                done, *pids = map(int, line.split())
                workers.update(pids)
                print(file=process.stdin, flush=True)  # it goes on only now, however slow this reader is
                if n == worker_at:
                    time.sleep(rng.random() / 50)
                    kill(rng.choice(pids))
                    killed += 1
                if n == parent_at:
                    time.sleep(rng.random() / 50)
                    process.kill()
                    break
            assert process.wait() == (0 if last_life else -signal.SIGKILL), process.communicate()
        lives += 1
        now = rows_of(path)
        assert before.items() <= now.items()  # nothing lost, nothing run again
        assert sum(end - first for _, first, end in now) >= done  # what was told of is in
        assert len(now) > len(before)
        before = now
        deadline = time.monotonic() + 30
        while not all(map(gone, workers)):  # a parent that was killed leaves nobody behind
            assert time.monotonic() < deadline, workers
            time.sleep(0.05)
        if last_life:
            break
        assert not load_campaign(path).complete
    assert killed == 3
    assert len(before) == 4 * TRIALS // CHUNK
    result = load_campaign(path)
    assert result.complete
    assert result.places == undisturbed


class OneDies(ProcessPoolExecutor):
    """The worker that meets the tenth piece of work dies."""

    given = 0

    def submit(self, fn: Any, /, *args: Any, **more: Any) -> Any:
        self.given += 1
        return super().submit(os._exit, 9) if self.given == 10 else super().submit(fn, *args, **more)


def test_an_executor_whose_worker_dies_keeps_what_was_finished(tmp_path: Path, undisturbed: Any) -> None:
    path = str(tmp_path / "s.db")
    told: list[int] = []
    with (
        OneDies(1, multiprocessing.get_context("spawn")) as crew,
        pytest.raises(RunError, match=r"lost a worker and is broken .* the same call goes on from there"),
    ):
        run_campaign(small(OPENING, TRIALS), path, executor=crew, chunk=20, progress=lambda n, _: told.append(n))
    kept = rows_of(path)
    assert set(kept) == {(0, first, first + 20) for first in range(0, 180, 20)}
    assert sum(end - first for _, first, end in kept) >= told[-1]
    assert run_campaign(small(OPENING, TRIALS), path, chunk=20).places == undisturbed
    assert kept.items() <= rows_of(path).items()


class Deadly(LogicalSensing):
    """Ends any worker process that binds a case with it."""

    def candidates(self, *arguments: Any) -> list[int]:
        if multiprocessing.parent_process() is not None:
            os._exit(9)
        return super().candidates(*arguments)


def test_work_that_kills_every_worker_is_given_up(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("schemesim.study.campaign_crew.MAX_DEATHS", 1)
    campaign = Campaign(variants(), (F1,), trials=20, sensing=Deadly())
    with pytest.raises(RunError, match=r"worker processes died 2 times in a row, at work on: trials 0 to 9 of F1"):
        run_campaign(campaign, str(tmp_path / "s.db"), workers=2, chunk=10)
    assert load_campaign(str(tmp_path / "s.db")).trials == 0
    assert run_campaign(campaign, str(tmp_path / "s.db"), chunk=10).complete
