"""The commands timer, dial and importance: what they print is what the library finds."""

from __future__ import annotations

import csv
import json
from pathlib import Path
from typing import Any

import pytest

from schemesim.cli import main
from schemesim.plant.model import Location
from schemesim.scenario import Scenario, load_scenario
from schemesim.scenario.timers import dial_scenario, importance_scenario, timer_scenario

SMALL = Path(__file__).resolve().parents[1] / "data" / "small.yaml"
NOTE = "never replace a qualified engineer's review"
AT = [Location("L1", 0.2), Location("F1")]
HERE = ("--location", "L1@0.2", "--location", "F1")

TIMER = ("timer", "--timer", "Birch.L1.CB", "--limit", "230", "--late", "50")
DIAL = ("dial", "--at", "1oo2", "--at", "2oo2", "--element", "L1", "--epsilon", "1e-3", *HERE)
IMPORTANCE = ("importance", "--event", "not cleared", "--epsilon", "1e-2", "--by", "birnbaum", "--location", "F1")


@pytest.fixture(scope="module")
def small() -> Scenario:
    return load_scenario(SMALL)


def said(capsys: pytest.CaptureFixture[str], *arguments: str, status: int = 0) -> str:
    assert main([arguments[0], str(SMALL), "--quiet", *arguments[1:]]) == status
    caught = capsys.readouterr()
    return caught.out if status == 0 else caught.err


def rows_of(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


def data_of(capsys: pytest.CaptureFixture[str], table: Path, arguments: tuple[str, ...]) -> tuple[Any, Any]:
    """The JSON, and the CSV written beside it."""
    data = json.loads(said(capsys, *arguments, "--json", "--csv", str(table)))
    assert (data["schemesim"], data["kind"]) == (1, arguments[0])
    return data, rows_of(table)


@pytest.mark.parametrize("arguments", [TIMER, DIAL, IMPORTANCE], ids=lambda a: a[0])
def test_text_is_legible_and_carries_the_safety_note(
    capsys: pytest.CaptureFixture[str], arguments: tuple[str, ...]
) -> None:
    text = said(capsys, *arguments)
    assert NOTE in text
    assert max(len(line) for line in text.splitlines()) <= 120
    assert not [line for line in text.splitlines() if line != line.rstrip()]


def test_timers_are_those_of_the_library(capsys: pytest.CaptureFixture[str], small: Scenario, tmp_path: Path) -> None:
    data, rows = data_of(capsys, tmp_path / "t.csv", TIMER)
    found = timer_scenario(small, limit_us=230_000).of("Birch.L1.CB")
    (timer,) = data["timers"]
    assert timer["timer"] == rows[0]["timer"] == "Birch.L1.CB/50BF timer"
    assert timer["margin_ms"] == found.race.margin_us / 1000
    assert timer["total_ms"] == timer["total_ms_runs"] == (found.race.total_run_us or 0) / 1000
    assert timer["limit_ms"] == 230
    curve = data["curves"]["Birch.L1.CB/50BF timer"]
    assert [p["setting_ms"] for p in curve] == [p.setting_us / 1000 for p in found.points]
    assert data["weights"]["late"] == 50


def test_dial_is_that_of_the_library(capsys: pytest.CaptureFixture[str], small: Scenario, tmp_path: Path) -> None:
    data, rows = data_of(capsys, tmp_path / "d.csv", DIAL)
    found = dial_scenario(small, "votes", ["1oo2", "2oo2"], elements=["L1"], locations=AT, epsilon=1e-3)
    assert data["positions"] == ["1oo2", "2oo2"]
    assert len(data["figures"]) == len(rows) == len(found.figures)
    for row, expected in zip(data["figures"], found.records(), strict=True):
        assert row == expected
    ends = {f.position: f.dependability for f in found.curve("Birch/L1")}
    assert ends["2oo2"] is not None
    assert ends["1oo2"] is not None
    assert ends["2oo2"].high < ends["1oo2"].low  # a second opinion costs dependability


def test_a_dial_of_numbers(capsys: pytest.CaptureFixture[str]) -> None:
    text = said(capsys, "dial", "--dial", "zone_1", "--at", "0.7", "--at", "0.8", "--element", "L1", *HERE,
                "--epsilon", "1e-2")  # fmt: skip
    assert "dial zone_1: 0.7, 0.8" in text


def test_importance_is_that_of_the_library(capsys: pytest.CaptureFixture[str], small: Scenario, tmp_path: Path) -> None:
    data, rows = data_of(capsys, tmp_path / "i.csv", IMPORTANCE)
    found = importance_scenario(small, event="not cleared", locations=[Location("F1")], epsilon=1e-2)
    order = found.table("birnbaum")["component"].tolist()
    assert [c["component"] for c in data["components"]] == order == [r["component"] for r in rows]
    assert data["p_event"] == {"low": float(found.p_event.low), "high": float(found.p_event.high)}
    assert (data["others"], data["others_at_most"]) == (found.others, found.others_at_most)


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        (("timer", "--limit", "soon"), "--limit: got 'soon', expected a number"),
        (("timer", "--late", "-1"), "--late: got '-1', expected a number"),
        (("timer", "--timer", "Birch.L2.CB"), "timer: got 'Birch.L2.CB', expected a timer studied"),
        (("dial", "--dial", "votes", "--at", "3oo1"), "votes: got '3oo1', expected k out of n"),
        (("dial", "--dial", "zone_1"), "positions of zone_1: got 'none', expected a position at least"),
        (("dial", "--dial", "reach", "--at", "1"), "dial: got 'reach', expected one of"),
        (("dial", "--station", "Birhc"), "station: got 'Birhc', expected the name of a station"),
        (("importance", "--event", "lost"), "event: got 'lost', expected one of"),
        (("importance", "--by", "weight"), "figure to sort by: got 'weight', expected one of"),
    ],
)
def test_bad_input_is_told(capsys: pytest.CaptureFixture[str], arguments: tuple[str, ...], told: str) -> None:
    assert told in said(capsys, *arguments, status=2)
