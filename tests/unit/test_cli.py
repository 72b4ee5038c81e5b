"""The command line as a user meets it: in a process of its own, by its output and exit status."""

from __future__ import annotations

import csv
import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest

from schemesim.cli.output import WIDTH, listing, table_text
from schemesim.scenario import Scenario, load_scenario
from schemesim.scenario.studying import study_scenario

ROOT = Path(__file__).resolve().parents[2]
SMALL = ROOT / "tests" / "data" / "small.yaml"
DEMO = ROOT / "scenarios" / "demo.yaml"
BAD = ROOT / "tests" / "data" / "bad"
NOTE = "never replace a qualified engineer's review, local codes and the equipment's own documentation"
ENV = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "utf-8", "PYTHONWARNINGS": "error"}


def call(*arguments: str | Path, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "schemesim", *map(str, arguments)]
    return subprocess.run(
        command, capture_output=True, text=True, encoding="utf-8", env=ENV, cwd=cwd, timeout=240, check=False
    )


def good(*arguments: str | Path) -> str:
    done = call(*arguments)
    assert done.returncode == 0, done.stderr
    assert "Traceback" not in done.stderr
    return done.stdout


def data_of(*arguments: str | Path) -> Any:
    def refuse(text: str) -> None:
        raise AssertionError(f"{text} is no JSON")

    data = json.loads(good(*arguments, "--json", "--quiet"), parse_constant=refuse)
    assert data["schemesim"] == 1
    assert data["kind"] == arguments[0]
    assert data["scenario"] == {"file": str(SMALL), "name": "Small"}
    assert NOTE in data["note"]
    return data


@pytest.fixture(scope="module")
def small() -> Scenario:
    return load_scenario(SMALL)


@pytest.mark.parametrize(
    "arguments",
    [("check",), ("show", "--run", "relay fails"), ("inject", "--fault", "L1"), ("study", "--location", "L1@0.2")],
    ids=lambda a: a[0],
)
def test_text_is_legible_and_carries_the_safety_note(arguments: tuple[str, ...]) -> None:
    text = good(arguments[0], SMALL, *arguments[1:])
    assert NOTE in text
    assert max(len(line) for line in text.splitlines()) <= 120
    assert not [line for line in text.splitlines() if line != line.rstrip()]


def test_check_says_what_is_there(small: Scenario) -> None:
    data = data_of("check", SMALL)
    assert data["breakers"] == len(small.plant.breakers) == 6
    assert data["stations"] == 2
    assert [p["policy"] for p in data["policies"]] == ["plain", "strong"]
    assert [p["in_use"] for p in data["policies"]] == [False, True]
    assert data["runs"] == ["flooded", "nothing wrong", "relay fails"]


def test_show_tells_the_run(small: Scenario) -> None:
    data = data_of("show", SMALL, "--run", "relay fails")
    outcome = small.play("relay fails").outcome
    assert outcome.t_clear_us is not None
    assert data["outcome"]["t_clear_ms"] == outcome.t_clear_us / 1000
    assert [o["breaker"] for o in data["outcome"]["openings"]] == [o.breaker for o in outcome.openings]
    assert data["expect"] == "cleared by the second set"
    assert data["failures"] == ["Birch/L1/relay 1: failure_to_operate"]
    assert data["limit_ms"] == 120
    assert data["rows"][0]["t_ms"] == 0


def test_show_says_under_what_it_ran() -> None:
    flooded = data_of("show", SMALL, "--run", "flooded")
    assert flooded["run"] == "flooded"
    assert flooded["out_of_service"] == ["Cedar/DC 1", "L1/channel 2"]
    assert flooded["dispatch"] == "no north"
    text = good("show", SMALL, "--run", "flooded")
    head = text[: text.index("row ")]
    for words in ("run: flooded", "dispatch: no north", "out of service: Cedar/DC 1, L1/channel 2"):
        assert words in head
    given = data_of("show", SMALL, "--fault", "L1")
    assert given["run"] is None
    assert given["out_of_service"] == ["L1/channel 2"]


def test_show_of_the_demo_tells_the_outage_of_the_run() -> None:
    text = good("show", DEMO, "--run", "retrip")
    assert "out of service: Dunmore/F5/relay 2\n" in text
    assert "dispatch: all sources in service" in text


def test_a_list_of_names_is_broken_between_names_only() -> None:
    names = [f"Alder station {n}/relay {n}" for n in range(20)]
    lines = listing("out of service:", names)
    assert len(lines) > 2
    assert max(map(len, lines)) <= WIDTH
    assert " ".join(line.strip() for line in lines) == "out of service: " + ", ".join(names)
    assert all(any(line.rstrip(",").endswith(name) for name in names) for line in lines)


def test_a_table_keeps_what_names_its_rows_whatever_the_width(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("COLUMNS", "80")
    rows = [
        {"at": f"{'Alder station ' * 6}relay {n} of its set", "by": f"{'x' * 70}{n}{'y' * 70}", "p": "0.1234…0.1235"}
        for n in range(3)
    ]
    one = table_text(rows, ["at", "by", "p"]).splitlines()
    assert [line[: len(r["at"])] for line, r in zip(one[1:], rows, strict=True)] == [r["at"] for r in rows]
    assert all("xx…yy" in line and line.endswith("0.1234…0.1235") for line in one[1:])
    two = table_text(rows, ["at", "by", "p"], whole=2).splitlines()
    assert all(r["by"] in line for line, r in zip(two[1:], rows, strict=True))


def test_a_table_takes_the_width_of_a_wider_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    rows = [{"at": "L1", "by": "long " * 30 + "end"}]
    for columns, widest in (("60", WIDTH), ("140", 140), ("300", len("L1  ") + len(rows[0]["by"]))):
        monkeypatch.setenv("COLUMNS", columns)
        assert max(map(len, table_text(rows, ["at", "by"]).splitlines())) == widest


def test_a_cell_of_the_first_column_may_have_lines() -> None:
    text = table_text([{"at": "L1,\n  L2", "n": 2}, {"at": "", "n": 3}], ["at", "n"])
    assert text.splitlines() == ["at    n", "L1,   2", "  L2", "      3"]


def test_rows_of_the_tables_can_be_told_apart() -> None:
    text = good("study", SMALL, "--location", "L1@0.2", "--no-fault", "--quiet")
    table = text[text.index("trips with no fault") :].splitlines()
    data = data_of("study", SMALL, "--location", "L1@0.2", "--no-fault")
    names = [r["component"] for r in data["policies"][0]["no_fault"]]
    assert len(names) > 10
    for name in names:
        assert len([line for line in table if line.startswith(f"{name}  ")]) == 1
    pairs = good("inject", SMALL, "--fault", "L1@0.5", "--order", "2", "--all")
    rows = data_of("inject", SMALL, "--fault", "L1@0.5", "--order", "2", "--all")["rows"]
    body = pairs[pairs.index("failures  ") :].split("\n\n")[0].splitlines()
    found = set()
    for i, line in enumerate(body):
        first = line.split("  ")[0]
        found.add(f"{first} {body[i + 1].strip()}" if first.endswith(",") else first)
    assert {r["failures"] for r in rows} <= found


def test_a_fault_may_be_given_in_place_of_a_run() -> None:
    listed = data_of("show", SMALL, "--run", "relay fails")
    given = data_of("show", SMALL, "--fault", "L1@0.5", "--fail", "Birch/L1/relay 1: failure_to_operate")
    assert given["outcome"] == listed["outcome"]
    other = data_of("show", SMALL, "--fault", "L1", "--policy", "plain")
    assert other["policy"] == "plain"


def test_a_run_with_no_fault_is_shown() -> None:
    assert data_of("show", SMALL, "--run", "nothing wrong")["outcome"]["status"] == "no fault"


def test_inject_gives_every_failure(tmp_path: Path) -> None:
    table = tmp_path / "inject.csv"
    data = data_of("inject", SMALL, "--fault", "L1@0.8", "--csv", table)
    names = [r["failures"] for r in data["rows"]]
    assert names[0] == "none"
    assert "Birch/DC 1: lost" in names
    with open(table, encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [r["failures"] for r in rows] == names
    assert [float(r["p"]) for r in rows] == [r["p"] for r in data["rows"]]


def test_inject_lists_what_differs_worst_first_and_counts_the_rest() -> None:
    options = ["--fault", "L1@0.8", "--order", "2"]
    rows = data_of("inject", SMALL, *options)["rows"]
    seen = ("status", "t_clear_ms", "cleared_by", "tripped", "breakers_excess")
    differ = [r for r in rows if any(r[k] != rows[0][k] for k in seen)]
    immaterial = len(rows) - 1 - len(differ)
    assert differ
    assert immaterial > 0
    assert sum(r["changed"] for r in rows) > len(differ)
    text = good("inject", SMALL, *options)
    assert f"{immaterial} more leave all these as with no failure" in text
    assert f"in {len(differ)} the clearing time, status, role, breakers or excess differ" in text
    assert "change the outcome: anything observed differs from the run with no failure" in text
    body = text[text.index("failures  ") :].split("\n\n")[0].splitlines()[1:]
    table = [line for line in body if not line.startswith("  ")]
    assert table[0].startswith("none ")
    assert len(table) == 1 + len(differ)
    cleared = [" not cleared " not in line for line in table[1:]]
    assert cleared == sorted(cleared)
    assert set(cleared) == {True, False}
    shown = [line.split(" cleared ")[1].split() for line in table[1:] if " not cleared " not in line]
    times = [float(cells[0]) for cells in shown]
    assert times == sorted(times, reverse=True)
    opened = [(-t, -int(cells[-2])) for t, cells in zip(times, shown, strict=True)]
    assert opened == sorted(opened)
    whole = good("inject", SMALL, *options, "--all")
    assert "more leave all these" not in whole


def test_study_gives_the_brackets_of_the_library(small: Scenario, tmp_path: Path) -> None:
    table = tmp_path / "study.csv"
    places = ("L1@0.2", "F1", "Cedar.B1")
    options = [x for place in places for x in ("--location", place)]
    data = data_of("study", SMALL, "--compare", "--epsilon", "1e-3", "--csv", table, *options)
    assert data["complete"] is True
    assert [p["policy"] for p in data["policies"]] == ["plain", "strong"]
    chosen = [where for where in small.frequencies if str(where) in places]
    study = study_scenario(small, "strong", locations=chosen, epsilon=1e-3)
    strong = data["policies"][1]
    assert {r["location"] for r in strong["locations"]} == set(places)
    for row in strong["locations"]:
        found = study.where(row["location"])
        assert (row["p_cleared_low"], row["p_cleared_high"]) == (
            float(found.p_cleared.low),
            float(found.p_cleared.high),
        )
        assert len(row["points"]) == len(found.single_points)
        assert sum(b["low"] for b in row["breakers"]) <= 1 + 1e-9 <= sum(b["high"] for b in row["breakers"]) + 2e-9
    limits = {row["location"]: row["limit_ms"] for row in strong["locations"]}
    assert limits == {"L1@0.2": 120, "F1": 150, "Cedar.B1": 120}
    verdicts = {c["verdict"] for c in data["comparison"] if c["policy"] == "strong"}
    assert verdicts <= {"better", "worse", "higher", "lower", "same", "not told apart"}
    with open(table, encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [(r["policy"], r["location"]) for r in rows] == [(p, at) for p in ("plain", "strong") for at in places]


def test_the_study_says_that_its_worst_is_the_worst_explored() -> None:
    text = " ".join(good("study", SMALL, "--location", "F1", "--epsilon", "1e-2", "--quiet").split())
    assert "t_worst_ms: the longest among the runs explored that cleared (what is not explored may take longer)" in text


def test_workers_change_nothing() -> None:
    options = ["--location", "L1@0.2", "--location", "F1", "--epsilon", "1e-3"]
    one, two = (data_of("study", SMALL, *options, "--workers", n) for n in ("1", "2"))
    assert one == two


def test_progress_goes_to_the_error_output_and_can_be_silenced() -> None:
    options = ["--location", "F1", "--epsilon", "1e-2"]
    told, quiet = call("study", SMALL, *options), call("study", SMALL, *options, "--quiet")
    assert "1 of 1 locations" in told.stderr
    assert quiet.stderr == ""
    assert told.stdout == quiet.stdout


@pytest.mark.parametrize("name", ["unknown_key_top", "several_at_once", "no_core", "empty", "import_binary"])
def test_a_bad_scenario_exits_2_with_every_mistake(name: str) -> None:
    file = BAD / f"{name}.yaml"
    for command in (["check"], ["study"], ["show", "--fault", "L1"], ["inject", "--fault", "L1"]):
        done = call(command[0], file, *command[1:])
        assert done.returncode == 2
        assert done.stdout == ""
        assert "Traceback" not in done.stderr
        assert str(BAD) in done.stderr


def test_mistakes_of_a_later_kind_are_announced(tmp_path: Path) -> None:
    word = "once these are mended, mistakes of a later kind may appear"
    text = SMALL.read_text(encoding="utf-8")
    assert text.count("out_of_service: [L1/channel 2]") == 1
    text = text.replace("out_of_service: [L1/channel 2]", "out_of_service: [L1/chanel 2]")
    assert text.count("trials: 200") == 1
    file = tmp_path / "two.yaml"
    file.write_text(text.replace("trials: 200", "trails: 200"), encoding="utf-8")
    first = call("check", file).stderr
    assert "trails" in first
    assert "chanel" not in first
    assert first.splitlines()[-1] == word
    file.write_text(text, encoding="utf-8")
    assert "did you mean 'L1/channel 2'?" in call("check", file).stderr
    assert word not in call("show", SMALL, "--fault", "L2").stderr


@pytest.mark.parametrize(
    ("arguments", "phrase"),
    [
        (["show", SMALL], "--run (one of"),
        (["show", SMALL, "--run", "flooded", "--fault", "L1"], "--run (one of"),
        (["show", SMALL, "--run", "floded"], "did you mean 'flooded'?"),
        (["show", SMALL, "--run", "flooded", "--fail", "x"], "the run states them"),
        (["show", SMALL, "--fault", "L2"], "the name of a section"),
        (["show", SMALL, "--fault", "L1@2"], "a position from 0 to 1"),
        (["show", SMALL, "--fault", "F1@0.2"], "is no line"),
        (["show", SMALL, "--fault", "L1", "--fail", "Birch/DC 1: lst"], "did you mean 'Birch/DC 1: lost'?"),
        (["show", SMALL, "--fault", "L1", "--policy", "string"], "did you mean 'strong'?"),
        (["show", SMALL, "--fault", "L1", "--dispatch", "night"], "dispatch"),
        (["inject", SMALL], "--fault SECTION[@POS]"),
        (["inject", SMALL, "--fault", "L1", "--order", "3"], "a whole number from 1 to 2"),
        (["study", SMALL, "--policy", "string"], "did you mean 'strong'?"),
        (["study", SMALL, "--policy", "plain", "--compare"], "--policy or --compare"),
        (["study", SMALL, "--epsilon", "0"], "a number from 1e-12 to 0.5"),
        (["study", SMALL, "--epsilon", "small"], "a number from 1e-12 to 0.5"),
        (["study", SMALL, "--workers", "0"], "a whole number from 1 to 256"),
        (["study", SMALL, "--location", "L9"], "the name of a section"),
        (["check", ROOT / "nothing.yaml"], "no such file"),
        (["check", ROOT], "a directory"),
        (["check", SMALL, "--csv", ROOT / "nowhere" / "x.csv"], "a folder that is there"),
        (["check", SMALL, "--csv", SMALL], "another file than the scenario"),
        (["check"], "FILE"),
        (["chekc", SMALL], "invalid choice"),
        (["check", SMALL, "--jsn"], "unrecognized arguments"),
    ],
)
def test_bad_arguments_exit_2(arguments: list[str | Path], phrase: str) -> None:
    done = call(*arguments)
    assert done.returncode == 2, done.stdout
    assert phrase in done.stderr
    assert "Traceback" not in done.stderr
    assert done.stdout == ""


def test_a_csv_that_cannot_be_written_leaves_nothing(tmp_path: Path) -> None:
    folder = tmp_path / "closed"
    folder.mkdir()
    target = folder / "taken"
    target.mkdir()
    done = call("check", SMALL, "--csv", target)
    assert done.returncode == 2
    assert list(folder.iterdir()) == [target]


@pytest.mark.parametrize("workers", ["1", "2"])
def test_an_interrupt_prints_what_was_finished_and_exits_130(tmp_path: Path, workers: str) -> None:
    table = tmp_path / "study.csv"
    # Enough locations, and an epsilon so small, that it could not end by itself in the time given.
    arguments = ["study", SMALL, "--epsilon", "1e-9", "--workers", workers, "--csv", table, "--json"]
    with subprocess.Popen(
        [sys.executable, "-m", "schemesim", *map(str, arguments)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        encoding="utf-8",
        env=ENV,
    ) as process:
        assert process.stderr is not None
        first = process.stderr.readline()
        assert "1 of" in first, first + process.stderr.read()
        started = time.monotonic()
        process.send_signal(signal.SIGINT)
        out, err = process.communicate(timeout=60)
        assert time.monotonic() - started < 30
    assert process.returncode == 130, err
    assert "Traceback" not in err
    data = json.loads(out)
    assert data["complete"] is False
    found = data["policies"][0]["locations"]
    assert 1 <= len(found) < 20
    with open(table, encoding="utf-8", newline="") as stream:
        assert len(list(csv.DictReader(stream))) == len(found)


def test_output_that_nobody_reads_is_no_error() -> None:
    command = f"{sys.executable} -m schemesim check {SMALL} | true; exit ${{PIPESTATUS[0]}}"
    done = subprocess.run(["bash", "-c", command], capture_output=True, text=True, env=ENV, timeout=60, check=False)
    assert done.returncode == 0
    assert done.stderr == ""


def test_help_tells_the_commands_and_the_exit_status() -> None:
    text = good("--help")
    for word in ("check", "show", "study", "inject", "130 interrupted", "exit status", NOTE):
        assert word in text
    assert "--epsilon" in good("study", "--help")
