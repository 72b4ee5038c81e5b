"""The commands intervals and misoperations: what they print is what the library finds."""

from __future__ import annotations

import csv
import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from schemesim.cli import main
from schemesim.errors import InputError
from schemesim.scenario import Scenario, load_scenario
from schemesim.scenario.model import location
from schemesim.scenario.testing import intervals_scenario, misoperations_scenario, with_values
from schemesim.scheme.starting_values import load_starting_values
from schemesim.study.misoperations import Misoperation

ROOT = Path(__file__).resolve().parents[2]
SMALL = ROOT / "tests" / "data" / "small.yaml"
HERE = ("--location", "F1", "--epsilon", "1e-3")
CLASS = ("--kind", "breaker", "--pattern", "Cedar.*", "--every", "1", "--every", "4")


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


@pytest.mark.parametrize("arguments", [("intervals", *CLASS, *HERE), ("misoperations", *HERE)], ids=lambda a: a[0])
def test_text_is_legible_and_carries_the_safety_note(
    capsys: pytest.CaptureFixture[str], arguments: tuple[str, ...]
) -> None:
    text = said(capsys, *arguments)
    assert "never replace a qualified engineer's review" in text
    assert max(len(line) for line in text.splitlines()) <= 120
    assert not [line for line in text.splitlines() if line != line.rstrip()]


def test_intervals_are_those_of_the_library(
    capsys: pytest.CaptureFixture[str], small: Scenario, tmp_path: Path
) -> None:
    table = tmp_path / "intervals.csv"
    data = data_of(capsys, "intervals", *CLASS, *HERE, "--csv", str(table))
    found = intervals_scenario(
        small, "breaker", "Cedar.*", intervals_yr=(1, 4), locations=[location(small.plant, "F1")], epsilon=1e-3
    )
    assert data["rows"] == found.records()
    assert data["best_yr"] == found.best.interval_yr
    assert data["class"]["components"] == found.components > 0
    assert data["single_yr"] == dict(found.single_yr)
    with open(table, encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [float(r["interval_yr"]) for r in rows] == [1, 4]
    turns = data_of(capsys, "intervals", *CLASS, *HERE, "--by-turns")["rows"]
    together = data_of(capsys, "intervals", *CLASS, *HERE, "--together")["rows"]
    assert [r["tests_per_yr"] for r in turns] == [r["tests_per_yr"] for r in together]


def test_a_table_of_values_takes_the_place_of_the_scenarios(
    capsys: pytest.CaptureFixture[str], small: Scenario
) -> None:
    """No relay of the file has a rate; the starting values give them one, and the file's beta factor stays."""
    arguments = ("intervals", "--kind", "relay", "--every", "2", *HERE, "--values")
    data = data_of(capsys, *arguments, "shipped")
    other = with_values(small, load_starting_values())
    assert other.data.relay_beta == small.data.relay_beta == 0.05
    assert [c.name for c in other.data.common_causes] == ["flood"]
    found = intervals_scenario(
        other, "relay", intervals_yr=(2,), locations=[location(small.plant, "F1")], epsilon=1e-3
    )
    assert data["rows"] == found.records()
    assert data["single_yr"]["relay failure_to_operate"] == pytest.approx(1.3515, abs=1e-4)
    assert "a readable CSV file" in said(capsys, *arguments, "nowhere.csv", status=2)


def test_misoperations_are_those_of_the_library(capsys: pytest.CaptureFixture[str], small: Scenario) -> None:
    data = data_of(capsys, "misoperations", *HERE)
    found = misoperations_scenario(small, locations=[location(small.plant, "F1")], epsilon=1e-3)
    assert data["rows"] == [j.row for j in found.judged]
    assert set(data["per_yr"]) == {str(m) for m in Misoperation}
    for m in Misoperation:
        b = found.per_yr(m)
        assert b is not None
        assert data["per_yr"][str(m)] == {"low": b.low, "high": b.high}
    faults = data_of(capsys, "misoperations", *HERE, "--faults-only")["rows"]
    assert faults == data["rows"][:1]


@pytest.mark.parametrize(
    ("arguments", "expected"),
    [
        (("intervals", "--kind", "relais"), "did you mean 'relay'"),
        (("intervals", "--kind", "relay"), "whose failures are given by a rate"),
        (("intervals", *CLASS, "--every", "0"), "--every"),
        (("intervals", *CLASS, "--by-turns", "--together"), "one of them"),
        (("intervals", *CLASS, "--location", "Q9"), "the name of a section"),
        (("misoperations", "--epsilon", "2"), "--epsilon"),
    ],
)
def test_bad_arguments_are_refused(
    capsys: pytest.CaptureFixture[str], arguments: tuple[str, ...], expected: str
) -> None:
    assert expected in said(capsys, *arguments, status=2)


def test_a_test_without_a_cost_is_no_free_test() -> None:
    """The demo has money; of a class whose rule states no test the cost is asked for, not taken as zero."""
    demo = load_scenario(ROOT / "scenarios" / "demo.yaml")
    assert demo.money is not None
    rules = tuple(replace(r, per_test=0.0, test_interval_yr=None) for r in demo.money.costs.rules)
    money = replace(demo.money, costs=replace(demo.money.costs, rules=rules))
    demo = replace(demo, data=load_starting_values().failure_data(), money=money)
    with pytest.raises(InputError, match="if a test is free"):
        intervals_scenario(demo, "relay", locations=[location(demo.plant, "L1@0.5")], intervals_yr=(1,))
