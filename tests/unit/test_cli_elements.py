"""The commands settings and elements: what they print is what the library finds."""

from __future__ import annotations

import csv
import json
from pathlib import Path
from typing import Any

import pytest

from schemesim.cli import main
from schemesim.engine.electrical import ElectricalSensing
from schemesim.plant.model import Location
from schemesim.scenario import load_scenario
from schemesim.study.element_audit import audit_elements

TEXT = """
schemesim: 1
policy: single_set
plant:
  stations: [{name: Ash, layout: single_bus, kv: 20, bays: [G, F]}]
  generators: [{name: G, station: Ash, kv: 20, impedance_pu: 0.2}]
  feeders: [{name: F, station: Ash, kv: 20, load_mw: 5}]
study: {epsilon: 0.001}
"""


@pytest.fixture
def file(tmp_path: Path) -> str:
    path = tmp_path / "ash.yaml"
    path.write_text(TEXT, encoding="utf-8")
    return str(path)


def said(capsys: pytest.CaptureFixture[str], *arguments: str, status: int = 0) -> str:
    assert main(arguments) == status
    caught = capsys.readouterr()
    return caught.out if status == 0 else caught.err


def data_of(capsys: pytest.CaptureFixture[str], *arguments: str) -> Any:
    data = json.loads(said(capsys, *arguments, "--json"))
    assert (data["schemesim"], data["kind"]) == (1, arguments[0])
    return data


@pytest.mark.parametrize("command", ["settings", "elements"])
def test_text_is_legible_and_carries_the_safety_note(
    capsys: pytest.CaptureFixture[str], file: str, command: str
) -> None:
    text = said(capsys, command, file)
    assert "never replace a qualified engineer's review" in text
    assert max(len(line) for line in text.splitlines()) <= 120
    assert not [line for line in text.splitlines() if line != line.rstrip()]


def test_settings_are_those_by_rule_each_with_its_reason(
    capsys: pytest.CaptureFixture[str], file: str, tmp_path: Path
) -> None:
    table = tmp_path / "settings.csv"
    data = data_of(capsys, "settings", file, "--csv", str(table))
    scenario = load_scenario(file)
    chosen = ElectricalSensing().settings_of(scenario.program())
    assert data["elements"] == len(chosen.items)
    assert [(r["element"], r["what"], r["reason"]) for r in data["rows"]] == [
        (s.block, c.what, c.reason) for s in chosen.items for c in s.choices
    ]
    one = {(r["element"], r["what"]): r for r in data["rows"]}
    fifty = one["Ash/F/1 50", "pick_up_a"]
    assert fifty["value"] == pytest.approx(1.3 * 5e3 / (3**0.5 * 20))  # 1.3 times the load of 5 MW at 20 kV
    assert fifty["reason"].startswith("1.3 times the greatest load of F: 5 MW = 144 A")
    assert one["Ash/G/timed 1 51", "reach_ohm"]["value"] == "0+0.04j"
    with open(table, encoding="utf-8", newline="") as stream:
        assert len(list(csv.DictReader(stream))) == len(data["rows"])
    some = data_of(capsys, "settings", file, "--element", "Ash/F/*")
    assert {r["element"] for r in some["rows"]} == {b for b in chosen.of if b.startswith("Ash/F/")}


def test_elements_are_audited_as_by_the_library(capsys: pytest.CaptureFixture[str], file: str) -> None:
    """G of 100 MVA, 20 % at 20 kV (j0.8 ohm) feeds a fault on F between two phases with half of 20 kV / 0.8 ohm."""
    data = data_of(capsys, "elements", file)
    scenario = load_scenario(file)
    program = scenario.program()
    chosen = ElectricalSensing().settings_of(program)
    found = audit_elements(program, chosen, locations=tuple(scenario.frequencies))
    assert data["rows"] == found.records()
    assert data["blind"] == [r.block for r in found.blind]
    assert (data["faults"], data["states"]) == (found.faults, found.states)
    one = data_of(
        capsys, "elements", file, "--element", "Ash/F/1 50", "--location", "F", "--type", "ll", "--infeed", "none"
    )
    (row,) = one["rows"]
    assert (row["must"], row["blind"], row["must_not"], row["greatest"]) == (1, 0, 0, None)
    assert row["least"] == pytest.approx(20e3 / 2 / 0.8 / (1.3 * 5e6 / (3**0.5 * 20e3)), rel=1e-9)
    assert row["least_at"] == f"{Location('F')} ll"
    text = said(capsys, "elements", file, "--fault-ohm", "100", "--location", "F")
    assert "blind somewhere" in text


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("settings", "--element", "Ash/F/1 5O"), "did you mean 'Ash/F/1 50'"),
        (("settings", "--policy", "singel_set"), "single_set"),
        (("elements", "--element", "nothing*"), "the name of an element"),
        (("elements", "--location", "G1"), "G1"),
        (("elements", "--location", "F@2"), "2"),
        (("elements", "--type", "lln"), "--type"),
        (("elements", "--fault-ohm", "-1"), "--fault-ohm"),
        (("elements", "--infeed", "GG"), "the name of a source"),
        (("elements", "--infeed", "none", "--infeed", "G"), "--infeed"),
        (("elements", "--dispatch", "night"), "night"),
        (("elements", "--csv", "/no such folder/x.csv"), "--csv"),
    ],
)
def test_mistakes_are_told_and_end_with_two(
    capsys: pytest.CaptureFixture[str], file: str, arguments: tuple[str, ...], words: str
) -> None:
    assert words in said(capsys, arguments[0], file, *arguments[1:], status=2)


def test_a_plant_without_impedances_is_refused(capsys: pytest.CaptureFixture[str], file: str) -> None:
    Path(file).write_text(TEXT.replace(", impedance_pu: 0.2", ""), encoding="utf-8")
    for command in ("settings", "elements"):
        assert "impedance" in said(capsys, command, file, status=2)
