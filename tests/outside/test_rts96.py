"""IEEE Reliability Test System 1996, area A: the shipped scenario against the published system.

Source: The IEEE Reliability Test System - 1996, IEEE Trans. Power Systems 14(3), 1999,
pp. 1010-1020: branch table (ends, lengths, permanent and transient outage rates), bus loads,
generating units. Station layouts, protection and failure data of the scenario are its own.
"""

from __future__ import annotations

import os
import re
from collections import Counter
from pathlib import Path
from typing import Any

import pytest
import yaml

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.event import run_event
from schemesim.plant.coverage import coverage_audit
from schemesim.plant.model import SectionKind
from schemesim.scenario import Scenario, load_scenario
from schemesim.scenario.model import location
from schemesim.scheme.model import Role
from schemesim.study.measures import cleared_by
from tests.outside.rts96 import BRANCHES, CABLES, LOAD_MW, SIZES, TRANSFORMERS, UNITS

FILE = Path(__file__).resolve().parents[2] / "scenarios" / "rts96_area_a.yaml"

@pytest.fixture(scope="module")
def rts() -> Scenario:
    return load_scenario(FILE)


@pytest.fixture(scope="module")
def text() -> str:
    return FILE.read_text(encoding="utf-8")


def ends_in(document: Any) -> dict[str, set[int]]:
    """Buses at which each branch has a bay."""
    found: dict[str, set[int]] = {}
    for station in document["plant"]["stations"]:
        bus = int(station["name"].removeprefix("Bus"))
        for bay in station["bays"]:
            if bay["to"] in BRANCHES:
                found.setdefault(bay["to"], set()).add(bus)
    return found


def rates_in(text: str) -> dict[str, tuple[float, float, float]]:
    """Fault frequency of each branch, and the permanent and transient part stated beside it."""
    line = re.compile(r"^    (A[\d-]+): ([\d.]+)  # permanent ([\d.]+), transient ([\d.]+)$", re.MULTILINE)
    return {name: (float(a), float(b), float(c)) for name, a, b, c in line.findall(text)}


def test_the_table_here_has_the_published_sums() -> None:
    lines = [v for name, v in BRANCHES.items() if name not in TRANSFORMERS]
    assert len(BRANCHES) == 38
    assert len(lines) == 33
    assert sum(v[3] for v in lines) == pytest.approx(12.82, abs=1e-9)
    assert sum(v[4] for v in lines) == pytest.approx(33.9, abs=1e-9)
    assert sum(LOAD_MW.values()) == 2850
    assert sum(UNITS.values()) == sum(SIZES.values()) == 32
    assert sum(mw * n for mw, n in SIZES.items()) == 3405


def test_rates_follow_length() -> None:
    """Transient rates are proportional to length, permanent ones linear in it, at each voltage.

    5.28 and 2.46 transient outages a year and 100 miles at 138 and 230 kV (*from memory* of the
    publication of 1979); the lines of the permanent rates are fitted here. A length or a rate
    mistyped in the table would leave its line.
    """
    for name, (start, _, miles, permanent, transient) in BRANCHES.items():
        if name in TRANSFORMERS | CABLES:
            continue
        fixed, per_mile, passing = (0.22, 0.0052, 0.0528) if start <= 10 else (0.29, 0.0034, 0.0246)
        assert permanent == pytest.approx(fixed + per_mile * miles, abs=0.0051), name
        assert transient == pytest.approx(passing * miles, abs=0.0501), name


def test_branches_are_those_published(rts: Scenario, text: str) -> None:
    found = ends_in(yaml.safe_load(text))
    assert found == {name: {v[0], v[1]} for name, v in BRANCHES.items()}
    kinds = Counter(s.kind for s in rts.plant.sections)
    assert kinds[SectionKind.LINE] == 33
    assert kinds[SectionKind.TRANSFORMER] == 5
    for name, (start, end, miles, _, _) in BRANCHES.items():
        section = rts.plant.section[name]
        if name in TRANSFORMERS:
            assert section.kind is SectionKind.TRANSFORMER
            assert start <= 10 < end  # from 138 kV to 230 kV
        else:
            assert section.kind is SectionKind.LINE
            assert section.length == miles
            assert section.kv == (138 if start <= 10 else 230), name


def test_stations_and_voltages(rts: Scenario) -> None:
    buses = {s.station: s.kv for s in rts.plant.sections if s.kind is SectionKind.BUS}
    stations = {f"Bus{n:02}": 138 if n <= 10 else 230 for n in range(1, 25)}
    assert {s.station for s in rts.plant.sections if s.station} >= set(stations)
    for station, kv in buses.items():
        assert kv == stations[station]
    for d in rts.plant.devices:
        assert d.station in stations


def test_outage_rates_are_those_published(rts: Scenario, text: str) -> None:
    rates = rates_in(text)
    assert {name: v[1:] for name, v in rates.items()} == {name: v[3:] for name, v in BRANCHES.items()}
    of_section: dict[str, float] = {}
    for at, rate in rts.frequencies.items():
        of_section[at.section] = of_section.get(at.section, 0.0) + rate
    for name, (_, _, _, permanent, transient) in BRANCHES.items():
        assert of_section[name] == pytest.approx(permanent + transient, rel=1e-12), name
    assert sum(of_section[name] for name in BRANCHES) == pytest.approx(12.82 + 33.9 + 5 * 0.02, rel=1e-12)


def test_loads_and_units_are_those_published(rts: Scenario, text: str) -> None:
    loads: dict[int, float] = {}
    for s in rts.plant.sections:
        if s.load_mw:
            bus = int(s.station.removeprefix("Bus"))
            loads[bus] = loads.get(bus, 0.0) + s.load_mw
    assert loads == LOAD_MW
    units = Counter(int(s.section.removeprefix("Bus").partition(".")[0]) for s in rts.plant.sources)
    assert units == UNITS
    sizes = Counter(int(mw) for mw in re.findall(r"name: Bus\d\d\.G\d, .*# (\d+) MW", text))
    assert sizes == SIZES


def test_every_section_is_covered(rts: Scenario) -> None:
    audit = coverage_audit(rts.plant)
    assert len(audit.rows) == len(rts.plant.sections)
    assert audit.gaps == ()
    assert audit.blind == ()
    assert audit.untripped == ()
    assert audit.dead_zones == ()  # CTs on both sides of every breaker


EVERY = 1 if os.environ.get("SCHEMESIM_EVERY_LOCATION") else 5
"""A fifth of the locations, another fifth for each policy; all of them with SCHEMESIM_EVERY_LOCATION=1."""


@pytest.mark.parametrize("first", range(3))
def test_with_no_failure_every_fault_is_cleared_in_time(rts: Scenario, first: int) -> None:
    """By main protection, within the limit, with every breaker that has to open."""
    policy = ("single set", "duplicate relay", "duplicate chain")[first]
    places = list(rts.frequencies)
    assert len(places) == len(rts.plant.sections) + 2 * 33  # three positions on each line
    chosen = places[first % EVERY :: EVERY]
    assert len(chosen) >= len(places) // EVERY
    for at in chosen:
        case = rts.case(at, policy)
        outcome = run_event(case, FixedAnswers(case.program, ())).outcome
        assert outcome.t_clear_us is not None, at
        assert outcome.t_clear_us <= 150_000 == rts.limit_us(at), at
        assert cleared_by(case, outcome) is Role.MAIN, at
        assert case.duty.needed, at
        assert case.duty.needed <= outcome.tripped, at
        assert not outcome.at_horizon, at


def test_each_side_of_a_transformer_backs_itself_up(rts: Scenario) -> None:
    """Fault in A14 between the yards of buses 9 and 11, their channel lost: nobody intertrips bus 11.

    The differential clears the side of bus 9; on that of bus 11 the timed overcurrent trips on its own,
    20 + 1200 + 50 ms, unless zone 3 of the lines around (1000 ms) has cut off the feeding before.
    """
    case = rts.case(location(rts.plant, "A14"), "single set")
    outcome = run_event(case, FixedAnswers(case.program, ["Bus09-Bus11/channel 1: lost"])).outcome
    assert outcome.t_clear_us == 1_270_000
    assert {"Bus11.D1.CB1", "Bus11.D1.CB2"} <= outcome.tripped
    via = {o.via for o in outcome.openings if o.breaker == "Bus11.D1.CB1"}
    assert via == {"Bus11/A14/timed 2 51 trip"}
