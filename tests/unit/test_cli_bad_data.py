"""Bad failure data and money through the command line: exit status 2, with file, line and path, before any study."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from schemesim.cli import main
from schemesim.errors import InputError
from schemesim.scenario import Scenario, scenario_from_text, scenario_text
from schemesim.scenario.weak import outages_scenario
from schemesim.scheme.model import ComponentKind
from schemesim.study.footnote import Monitored
from tests.unit.test_money import text as with_money

ADDED = """
failure_data:
  rates:
    - {kind: relay, mode: failure_to_operate, rate_per_yr: 0.01, coverage: 0.95, test_interval_yr: 4, repair_h: 24}
limits: {limit_ms: 150, backup_ms: 250}
maintenance:
  monitored:
    - {kind: dc, pattern: "Alder/*", watches: [low_voltage]}
  outage_hours:
    - {kind: dc, hours_per_yr: 8}
    - {kind: dc, pattern: "Birch/*", hours_per_yr: 16}
"""
GOOD = with_money() + ADDED


def line_of(source: str, needle: str) -> int:
    return next(n for n, line in enumerate(source.splitlines(), 1) if needle in line)


@pytest.mark.parametrize("command", ["check", "decide"])
@pytest.mark.parametrize(
    ("right", "wrong", "path", "told"),
    [
        ("rate_per_yr: 0.01", "rate_per_yr: -0.01", "failure_data.rates[0].rate_per_yr", "from 0 to"),
        ("coverage: 0.95", "coverage: 1.2", "failure_data.rates[0].coverage", "from 0 to 1"),
        ("unit: kEUR", "unit: kEURO", "money.unit", "currency code"),
        ("bought: 7", "bought: -7", "money.costs[8].bought", "0 or more"),
        ("hours_per_yr: 16", "hours_per_yr: 9000", "maintenance.outage_hours[1].hours_per_yr", "8760"),
        ("hours_per_yr: 16", "hours_per_yr: -1", "maintenance.outage_hours[1].hours_per_yr", "0"),
        ("[low_voltage]", "[low_votlage]", "maintenance.monitored[0].watches[0]", "low_voltage"),
        ('pattern: "Birch/*"', 'pattern: "Brich/*"', "maintenance.outage_hours[1].pattern", "fits"),
        ('pattern: "Alder/*"', 'pattern: "Adler/*"', "maintenance.monitored[0].pattern", "fits"),
        ("{kind: dc, hours", "{kind: dcs, hours", "maintenance.outage_hours[0].kind", "set"),
        ("backup_ms: 250", "backup_ms: -250", "limits.backup_ms", "0"),
    ],
)
def test_told_with_file_line_and_path(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], command: str, right: str, wrong: str, path: str, told: str
) -> None:
    assert GOOD.count(right) == 1
    source = GOOD.replace(right, wrong)
    file = tmp_path / "bad.yaml"
    file.write_text(source, encoding="utf-8")
    assert main([command, str(file), "--quiet"]) == 2
    caught = capsys.readouterr()
    assert caught.out == ""
    line = re.escape(f"{file}:{line_of(source, wrong)}")
    assert re.search(line + r"\b.*" + re.escape(path), caught.err), caught.err
    assert told in caught.err


def test_a_component_in_use_without_a_cost_is_never_free(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Every coil lacks a cost: each is told once, with the policies that use it, where costs are listed."""
    kinds = [str(k) for k in ComponentKind if k is not ComponentKind.COIL]
    source = with_money(kinds)
    file = tmp_path / "bad.yaml"
    file.write_text(source, encoding="utf-8")
    assert main(["decide", str(file), "--quiet"]) == 2
    said = capsys.readouterr().err
    assert "cost of coil 'Alder.G1.CB/coil 1': got 'nothing', expected a cost (0 if it is free)" in said
    assert "used by 'one' and 'two'" in said
    assert f"{file}:{line_of(source, '  costs:') + 1}" in said
    assert "money.costs" in said


def good() -> Scenario:
    return scenario_from_text(GOOD, "good.yaml")


def test_what_is_monitored_and_hours_out_are_read_and_kept() -> None:
    scenario = good()
    assert scenario.maintenance.monitored == (Monitored("Alder/*", ComponentKind.DC, frozenset({"low_voltage"})),)
    assert scenario_from_text(scenario_text(scenario)) == scenario
    at = next(iter(scenario.frequencies))
    found = outages_scenario(scenario, locations=[at], kinds=["dc"], epsilon=0.1)
    assert {r.outage.name: r.hours_per_yr for r in found.results} == {"Alder/DC 1": 8, "Birch/DC 1": 16}
    given = outages_scenario(scenario, locations=[at], names=["Alder/DC 1"], hours_per_yr={"dc": 2}, epsilon=0.1)
    assert [r.hours_per_yr for r in given.results] == [2]


def test_hours_that_are_missing_are_asked_for() -> None:
    """Hours are stated for DC supplies alone: a channel out is not taken as never out."""
    scenario = good()
    with pytest.raises(InputError, match="hours per year of it, or of kind 'channel'"):
        outages_scenario(scenario, "two", locations=[next(iter(scenario.frequencies))], kinds=["channel"])


def test_check_lists_dc_domains(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A label misspelt in one place makes a domain of its own, and shows."""
    file = tmp_path / "typo.yaml"
    file.write_text(
        GOOD.replace(
            "two: {base: duplicate_chain}",
            'two: {base: duplicate_chain, local_backup: {core: "3", dc: "11"}}',
        ),
        encoding="utf-8",
    )
    status = main(["check", str(file)])
    said = capsys.readouterr().out
    assert status == 0
    rows = [line.split() for line in said.splitlines() if line.startswith(("one ", "two ")) and " DC " in line]
    assert [(r[0], r[2]) for r in rows] == [("one", "1"), ("two", "1"), ("two", "11"), ("two", "2")]
    outputs = {(r[0], r[2]): int(r[-1]) for r in rows}
    assert 0 < outputs[("two", "11")] < outputs[("two", "2")]
