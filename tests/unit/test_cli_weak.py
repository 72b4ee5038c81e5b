"""The commands register, outages and audit: what they print is what the library finds."""

from __future__ import annotations

import csv
import json
from pathlib import Path
from typing import Any

import pytest

from schemesim.cli import main
from schemesim.scenario import Scenario, load_scenario
from schemesim.scenario.weak import outages_scenario, register_scenario
from schemesim.scheme.independence import independence
from schemesim.scheme.trip_matrix import trip_matrix

SMALL = Path(__file__).resolve().parents[1] / "data" / "small.yaml"
NOTE = "never replace a qualified engineer's review"
PLACES = ("L1@0.2", "F1", "Cedar.B1")
HERE = [x for place in PLACES for x in ("--location", place)]


@pytest.fixture(scope="module")
def small() -> Scenario:
    return load_scenario(SMALL)


def said(capsys: pytest.CaptureFixture[str], *arguments: str, status: int = 0) -> str:
    assert main([arguments[0], str(SMALL), "--quiet", *arguments[1:]]) == status
    caught = capsys.readouterr()
    return caught.out if status == 0 else caught.err


def data_of(capsys: pytest.CaptureFixture[str], *arguments: str) -> Any:
    data = json.loads(said(capsys, *arguments, "--json"))
    assert (data["schemesim"], data["kind"]) == (1, arguments[0])
    return data


@pytest.mark.parametrize(
    "arguments",
    [
        ("register", "--policy", "plain", "--pairs", *HERE),
        ("outages", "--kind", "dc", "--hours", "dc=4", "--epsilon", "1e-2", *HERE),
        ("audit", "--policy", "strong"),
    ],
    ids=lambda a: a[0],
)
def test_text_is_legible_and_carries_the_safety_note(
    capsys: pytest.CaptureFixture[str], arguments: tuple[str, ...]
) -> None:
    text = said(capsys, *arguments)
    assert NOTE in text
    assert max(len(line) for line in text.splitlines()) <= 120
    assert not [line for line in text.splitlines() if line != line.rstrip()]


def test_register_is_that_of_the_library(capsys: pytest.CaptureFixture[str], small: Scenario, tmp_path: Path) -> None:
    table = tmp_path / "register.csv"
    monitored = ["--monitored", "channel", "--monitored", "Birch/DC *=low_voltage", "--monitored", "Cedar/DC *"]
    data = data_of(capsys, "register", "--policy", "plain", "--csv", str(table), *monitored, *HERE)
    at = [where for where in small.frequencies if str(where) in PLACES]
    found = register_scenario(small, "plain", locations=at)
    assert [e["failures"] for e in data["entries"]] != []
    assert {e["failures"]: e["worst"] for e in data["entries"]} == {e.name: e.worst.label for e in found.singles}
    exempt = {e["failures"]: e["exempt"] for e in data["entries"] if "/DC " in e["failures"]}
    assert exempt == {"Birch/DC 1: lost": False, "Cedar/DC 1: lost": True}
    with open(table, encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert len(rows) == sum(len(e.spoiled) for e in found.singles) == sum(len(e["where"]) for e in data["entries"])


def test_outages_are_those_of_the_library(capsys: pytest.CaptureFixture[str], small: Scenario) -> None:
    arguments = ("--kind", "dc", "--hours", "dc=4", "--epsilon", "1e-2", "--location", "F1")
    data = data_of(capsys, "outages", *arguments)
    at = [where for where in small.frequencies if str(where) == "F1"]
    found = outages_scenario(small, locations=at, kinds=["dc"], hours_per_yr={"dc": 4}, epsilon=1e-2)
    assert [r["out"] for r in data["outages"]] == [r.outage.name for r in found.results]
    total = found.late_or_uncleared_per_yr
    assert total is not None
    assert data["late_or_uncleared_per_yr"] == {"low": float(total.low), "high": float(total.high)}
    assert len(data["critical"]) == len(list(found.critical_records()))
    assert "Cedar/DC 1" in said(capsys, "outages", *arguments, "--out", "Cedar/DC 1")


def test_audit_writes_a_matrix_that_it_agrees_with(
    capsys: pytest.CaptureFixture[str], small: Scenario, tmp_path: Path
) -> None:
    matrix = tmp_path / "matrix.csv"
    data = data_of(capsys, "audit", "--policy", "strong", "--matrix", str(matrix))
    assert data["differences"] is None
    audit = independence(small.scheme("strong"))
    assert data["shared"] == json.loads(json.dumps(audit.records()))
    assert {e["element"]: e["fully_duplicated"] for e in data["elements"]} == dict.fromkeys(audit.protects, False)
    same = data_of(capsys, "audit", "--policy", "strong", "--expect", str(matrix))
    assert (same["differences"], same["compared"]) == ([], ["T", "86", "TT", "BFI"])
    other = data_of(capsys, "audit", "--policy", "plain", "--expect", str(matrix))
    outputs = {r.output for r in trip_matrix(small.scheme("strong")).rows}
    gone = outputs - {r.output for r in trip_matrix(small.scheme("plain")).rows}
    missing = {d["output"] for d in other["differences"] if d["kind"] == "missing"}
    assert all(any(name in text for text in missing) for name in gone)


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("register", "--monitored", "=x"), "--monitored"),
        (("register", "--monitored", "*/DC *=volts"), "low_voltage"),
        (("register", "--location", "L9"), "the name of a section"),
        (("register", "--policy", "plian"), "did you mean 'plain'"),
        (("outages", "--hours", "dc"), "WHAT=HOURS"),
        (("outages", "--hours", "dc=9000", "--kind", "dc"), "8760"),
        (("outages", "--kind", "cable"), "kind of outage"),
        (("outages", "--out", "Birch/DC 9"), "did you mean"),
        (("audit", "--element", "L9"), "an element with main protection"),
        (("audit", "--expect", "nowhere.csv"), "nowhere.csv"),
        (("audit", "--matrix", "/nowhere/at/all.csv"), "--matrix"),
    ],
)
def test_bad_input_is_told(capsys: pytest.CaptureFixture[str], arguments: tuple[str, ...], words: str) -> None:
    text = said(capsys, *arguments, status=2)
    assert words in text
    assert "Traceback" not in text
