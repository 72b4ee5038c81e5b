"""The command ``campaign`` as a user meets it: in a process of its own, by its output and exit status."""

from __future__ import annotations

import csv
import io
import json
import os
import re
import signal
import subprocess
import sys
from collections import Counter
from contextlib import redirect_stderr, redirect_stdout
from pathlib import Path
from typing import Any

import pytest

from schemesim.cli import main
from schemesim.cli.campaign import TrialProgress
from schemesim.errors import InputError
from schemesim.scenario import load_scenario
from schemesim.scenario.campaigns import campaign_scenario, export_campaign
from schemesim.study.campaign_export import COLUMNS, csv_bytes, parquet_bytes
from schemesim.study.campaign_run import load_campaign, run_campaign
from schemesim.study.injection import inject

ROOT = Path(__file__).resolve().parents[2]
SMALL = ROOT / "tests" / "data" / "small.yaml"
NOTE = "never replace a qualified engineer's review, local codes and the equipment's own documentation"
ENV = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "utf-8", "PYTHONWARNINGS": "error"}
HERE = ("--location", "L1@0.2", "--location", "F1", "--compare")


def command(*arguments: str | Path) -> list[str]:
    return [sys.executable, "-m", "schemesim", "campaign", *map(str, arguments)]


def call(*arguments: str | Path) -> subprocess.CompletedProcess[str]:
    done = subprocess.run(
        command(*arguments), capture_output=True, text=True, encoding="utf-8", env=ENV, timeout=240, check=False
    )
    assert "Traceback" not in done.stderr
    return done


def here(*arguments: str | Path) -> tuple[int, str, str]:
    """The command in this process, which is quicker: its status and what it printed."""
    with redirect_stdout(io.StringIO()) as out, redirect_stderr(io.StringIO()) as err:
        status = main(["campaign", *map(str, arguments)])
    return status, out.getvalue(), err.getvalue()


def good(*arguments: str | Path) -> str:
    status, out, err = here(*arguments)
    assert status == 0, err
    return out


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """40 trials at two places under two policies, run by two processes."""
    path = tmp_path_factory.mktemp("campaign") / "s.db"
    done = call("run", SMALL, "--store", path, *HERE, "--trials", "40", "--seed", "3", "--workers", "2",
                "--chunk", "15", "--station", "Birch")  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert "160 of 160 trials at 4 places" in done.stdout
    assert NOTE in done.stdout
    told = done.stderr.splitlines()
    assert told[0] == "campaign: 0 of 160 trials"
    assert re.fullmatch(r"campaign: 160 of 160 trials, [\d.]+ a second, 0 s to go", told[-1])
    return path


def test_it_counts_what_the_library_counts(store: Path, tmp_path: Path) -> None:
    scenario = load_scenario(SMALL)
    result = load_campaign(str(store))
    campaign = campaign_scenario(
        scenario, scenario.policies, locations=[at for at in scenario.frequencies if str(at) in ("L1@0.2", "F1")],
        trials=40, seed=3,
    )  # fmt: skip
    own = run_campaign(campaign, str(tmp_path / "own.db"))
    assert {(p.variant, p.event) for p in result.places} == {(p.variant, p.event) for p in own.places}
    for p in own.places:  # outputs watched may ask more, but change no breaker and no time
        same = result.where(p.variant, p.event)
        assert same.p_cleared() == p.p_cleared()
        assert same.breakers() == p.breakers()
        assert same.t_clear_us_mean() == p.t_clear_us_mean()
        assert same.facts.needed == p.facts.needed
        assert same.limit_us == p.limit_us == (120_000 if p.event == "L1@0.2" else 150_000)


def test_run_again_does_nothing_and_is_silent_if_asked(store: Path) -> None:
    before = store.stat().st_size
    same = ("run", SMALL, "--store", store, *HERE, "--trials", "40", "--seed", "3", "--station", "Birch")
    status, out, err = here(*same)
    assert (status, err) == (0, "campaign: 160 of 160 trials, in the store already\n")
    assert here(*same, "--quiet") == (0, out, "")
    assert store.stat().st_size == before


def test_show(store: Path, tmp_path: Path) -> None:
    table = tmp_path / "t.csv"
    data = json.loads(good("show", store, "--json", "--csv", table, "--confidence", "0.9"))
    assert (data["kind"], data["action"], data["complete"], data["trials"]) == ("campaign", "show", True, 160)
    assert NOTE in data["note"]
    wide = json.loads(good("show", store, "--json", "--interval", "clopper_pearson", "--confidence", "0.9"))
    for row, other in zip(data["rows"], wide["rows"], strict=True):
        assert row["trials"] == 40
        assert other["p_cleared_low"] < row["p_cleared_low"] <= row["p_cleared_estimate"] <= row["p_cleared_high"]
        assert row["dependability_estimate"] is not None or row["security_estimate"] is not None
    with table.open(encoding="utf-8") as stream:
        assert [r["event"] for r in csv.DictReader(stream)] == [r["event"] for r in data["rows"]]
    one = json.loads(good("show", store, "--location", "L1@0.20", "--variant", "strong", "--json"))
    assert [(r["event"], r["variant"]) for r in one["rows"]] == [("L1@0.2", "strong")]
    assert sum(e["trials"] for e in one["endings"]) == 40
    assert "cleared" in good("show", store, "--location", "F1")


def test_export(store: Path, tmp_path: Path) -> None:
    """CSV and Parquet hold the same rows, and these the counts."""
    import pyarrow.parquet as pq  # type: ignore[import-untyped]  # carries no types

    flat, columns = tmp_path / "e.csv", tmp_path / "e.parquet"
    assert f"rows in {flat}" in good("export", store, flat)
    good("export", store, columns)
    table = pq.read_table(columns)
    rows: list[dict[str, Any]] = table.to_pylist()
    assert table.schema.names == list(COLUMNS)
    with flat.open(encoding="utf-8") as stream:
        assert list(csv.DictReader(stream)) == [
            {k: "" if v is None else str(v) for k, v in row.items()} for row in rows
        ]
    counted: Counter[tuple[str, str, str, float | None, int]] = Counter()
    for r in rows:
        counted[r["variant"], r["event"], r["status"], r["t_clear_ms"], r["breakers"]] += r["trials"]
    for p in load_campaign(str(store)).places:
        for t in p.tallies:
            for us, n in t.times:
                ms = None if us is None else us / 1000
                counted[p.variant, p.event, str(t.ending.status), ms, len(t.ending.breakers)] -= n
    assert sum(r["trials"] for r in rows) == 160
    assert not any(counted.values())
    assert export_campaign(str(store), str(columns), measures=True) == 4
    assert pq.read_table(columns).column("trials").to_pylist() == [40] * 4
    for bad in ("e.txt", "none/e.csv"):
        assert here("export", store, tmp_path / bad)[0] == 2
    assert sorted(p.name for p in tmp_path.iterdir()) == ["e.csv", "e.parquet"]
    assert here("export", store, store)[0] == 2


def test_nothing_counted_exports_as_nothing() -> None:
    import pyarrow.parquet as pq

    assert csv_bytes([]).decode().strip().split(",") == list(COLUMNS)
    assert pq.read_table(io.BytesIO(parquet_bytes([]))).schema.names == list(COLUMNS)


def test_parquet_without_its_extra_says_so(store: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    with pytest.raises(InputError, match=r"pip install 'schemesim\[parquet\]'"):
        export_campaign(str(store), str(tmp_path / "e.parquet"))
    assert not list(tmp_path.iterdir())


def test_replay(store: Path) -> None:
    text = good("replay", store, "--location", "L1@0.2", "--variant", "strong", "--trial", "17")
    assert text.startswith("seed 3, trial 17: just so counted in the store\npolicy: strong; dispatch: no north\n")
    assert NOTE in text
    data = json.loads(good("replay", store, "--location", "F1", "--variant", "plain", "--trial", "39", "--json"))
    assert (data["trial"], data["counted"], data["event"]) == (39, True, "F1")
    cleared = [r for r in data["rows"] if r["what"] == "cleared"]
    assert [r["t_ms"] for r in cleared] == [data["outcome"]["t_clear_ms"]]


def test_failure_sets_from_a_file(tmp_path: Path) -> None:
    """Against injection of the same failures."""
    scenario = load_scenario(SMALL)
    at = next(a for a in scenario.frequencies if str(a) == "L1@0.2")
    singles = inject(scenario.case(at, "strong"), horizon_us=scenario.study.horizon_us).rows
    assert len(singles) > 5
    sets, store, flat = tmp_path / "sets.txt", tmp_path / "s.db", tmp_path / "e.csv"
    lines = ["# every single failure", "", *("; ".join(r.failures) or "none" for r in singles)]
    sets.write_text("\n".join(lines), encoding="utf-8")
    good("run", SMALL, "--store", store, "--failures", sets, "--location", "L1@0.2", "--policy", "strong", "--quiet")
    good("export", store, flat)
    with flat.open(encoding="utf-8") as stream:
        rows = list(csv.DictReader(stream))
    assert len(rows) == len(singles)
    for row, single in zip(rows, singles, strict=True):
        t_us = single.outcome.t_clear_us
        assert row["failures"] == (", ".join(single.failures) or "none")
        assert row["t_clear_ms"] == ("" if t_us is None else str(t_us / 1000))
        assert row["tripped"] == ", ".join(sorted(single.outcome.tripped))
        assert row["breakers_excess"] == str(single.excess)
    text = good("replay", store, "--location", "L1@0.2", "--trial", "1")
    assert text.startswith("failure set 1: just so counted in the store")
    assert singles[1].failures[0].partition(":")[0] in text


@pytest.mark.skipif(os.name != "posix", reason="SIGINT")
def test_an_interrupt_keeps_what_was_finished(tmp_path: Path) -> None:
    store = tmp_path / "s.db"
    arguments = ("run", SMALL, "--store", store, "--location", "L1@0.2", "--trials", "20000", "--chunk", "10",
                 "--seed", "3", "--workers", "2")  # fmt: skip
    pipe = subprocess.PIPE
    with subprocess.Popen(command(*arguments), stdout=pipe, stderr=pipe, text=True, encoding="utf-8", env=ENV) as run:
        assert run.stderr is not None
        assert run.stderr.readline() == "campaign: 0 of 20000 trials\n"
        while not (store.exists() and _some_are_in(store)):
            assert run.poll() is None
        run.send_signal(signal.SIGINT)
        out, err = run.communicate(timeout=100)
    assert run.returncode == 130, err
    assert "Traceback" not in err
    assert err.endswith("interrupted; what was finished is in the store, and the same call goes on from there\n")
    kept = load_campaign(str(store))
    assert 0 < kept.trials < 20_000
    assert f"{kept.trials} of 20000 trials at 1 places; not complete" in out
    good(*arguments[:7], "40", *arguments[8:10], "--seed", "3", "--quiet")
    (place,) = load_campaign(str(store)).places
    assert place.ranges[0][0] == 0
    assert place.ranges[0][1] >= 40


def _some_are_in(store: Path) -> bool:
    try:
        return load_campaign(str(store)).trials > 0
    except InputError:  # in the making
        return False


RUN = ("run", SMALL, "--store", "{store}")


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        (("run", "absent.yaml", "--store", "{store}"), "absent.yaml"),
        (("run", SMALL, "--store", SMALL), "another file than the scenario"),
        (("run", SMALL, "--store", "{none}/s.db"), "a file in a folder that is there"),
        ((*RUN, "--trials", "0"), "--trials: got '0'"),
        ((*RUN, "--seed", "-1"), "--seed: got '-1'"),
        ((*RUN, "--workers", "none"), "--workers: got 'none'"),
        ((*RUN, "--chunk", "0"), "--chunk: got '0'"),
        ((*RUN, "--confidence", "1.5"), "--confidence: got '1.5'"),
        ((*RUN, "--policy", "plane"), "did you mean 'plain'"),
        ((*RUN, "--policy", "plain", "--compare"), "--policy or --compare"),
        ((*RUN, "--location", "L9"), "the name of a section"),
        ((*RUN, "--station", "Beech"), "trip output"),
        ((*RUN, "--failures", "absent.txt"), "a text file that can be read"),
        ((*RUN, "--failures", SMALL, "--trials", "5"), "no --trials beside it"),
        ((*RUN, "--failures", "{sets}"), "did you mean 'Birch/L1/relay 1: failure_to_operate'"),
        (("show", SMALL), "not a database"),
        (("show", "absent.db"), "a store that is there"),
        (("show", "{store}", "--variant", "plane"), "a store that is there"),
        (("export", "absent.db", "{none}.csv"), "a store that is there"),
        (("replay", "absent.db", "--location", "F1", "--trial", "x"), "--trial: got 'x'"),
    ],
)
def test_bad_input_is_told_and_leaves_nothing(arguments: tuple[Any, ...], told: str, tmp_path: Path) -> None:
    sets = tmp_path / "sets.txt"
    sets.write_text("Birch/L1/relay 1: failure_to_operat\n")
    names = {"store": tmp_path / "s.db", "none": tmp_path / "none", "sets": sets}
    status, _, text = here(*(str(a).format(**names) for a in arguments))
    assert status == 2
    assert told in text
    assert [p.name for p in tmp_path.iterdir()] == ["sets.txt"]


def test_bad_requests_of_a_good_store(store: Path) -> None:
    for arguments, told in (
        (("show", store, "--variant", "plane"), "did you mean 'plain'"),
        (("show", store, "--location", "L1@0.3"), "location: got 'L1@0.3'"),
        (("replay", store, "--location", "F1", "--trial", "3"), "--variant, one of ['plain', 'strong']"),
        (("replay", store, "--location", "F1", "--variant", "plain", "--trial", "40"), "from 0 to 39"),
        (("run", SMALL, "--store", store, "--seed", "4"), "campaign, seed: got 4, expected 3 as in the store"),
    ):
        status, _, text = here(*arguments)
        assert (status, told in text) == (2, True), text


def test_progress_tells_a_rate_of_its_own(capsys: pytest.CaptureFixture[str]) -> None:
    """What was in the store before is no part of the rate."""
    now = [100.0]
    tell = TrialProgress(False, lambda: now[0])
    for t, done in ((100.0, 1000), (101.0, 1500), (110.0, 3000), (111.0, 3100), (120.0, 5000)):
        now[0] = t
        tell(done, 5000)
    assert capsys.readouterr().err.splitlines() == [
        "campaign: 1000 of 5000 trials, in the store already",
        "campaign: 3000 of 5000 trials, 200 a second, 10 s to go",
        "campaign: 5000 of 5000 trials, 200 a second, 0 s to go",
    ]
    TrialProgress(True)(5, 10)
    assert capsys.readouterr().err == ""
