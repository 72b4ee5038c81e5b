"""A user's own tables: a plant from an equipment list, a scheme from a relay schedule, and both written back."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pandas as pd
import pytest

from schemesim.errors import InputError
from schemesim.plant.layouts import Bay, feeder, generator, line, single_bus
from schemesim.plant.model import Plant, PlantBuilder
from schemesim.plant.net_data import Coupling, LineImpedance, SourceImpedance, TransformerImpedance
from schemesim.scenario import Scenario, load_scenario
from schemesim.scenario.equipment import load_equipment
from schemesim.scenario.equipment_list import equipment_list
from schemesim.scenario.relay_schedule import RelaySchedule, load_relay_schedule, relay_schedule
from schemesim.scheme.delays import Fixed
from schemesim.scheme.distributions import Uniform
from schemesim.scheme.dress import dress
from schemesim.scheme.model import ComponentKind, Scheme, Timer
from schemesim.scheme.policy import (
    BreakerFailurePolicy,
    LocalBackup,
    Policy,
    duplicate_chain,
    duplicate_relay,
    single_set,
)

ROOT = Path(__file__).resolve().parents[2]
NAMES = ("scenarios/demo.yaml", "scenarios/rts96_area_a.yaml", "tests/data/small.yaml")
SCENARIOS = {name: ROOT / name for name in NAMES}
WAYS: dict[str, Callable[[pd.DataFrame, Path], object]] = {
    "frame": lambda frame, _: frame,
    "csv": lambda frame, folder: (frame.to_csv(folder / "t.csv", index=False), folder / "t.csv")[1],
    "semicolons": lambda frame, folder: (frame.to_csv(folder / "t.csv", index=False, sep=";"), folder / "t.csv")[1],
    "excel": lambda frame, folder: (frame.to_excel(folder / "t.xlsx", index=False), str(folder / "t.xlsx"))[1],
}


@pytest.fixture(scope="module")
def demo() -> Scenario:
    return load_scenario(SCENARIOS["scenarios/demo.yaml"])


@pytest.fixture(scope="module")
def two() -> Plant:
    """Two stations, a line between them, a generator, a feeder."""
    b = PlantBuilder()
    line(b, "L1", 40, kv=132)
    generator(b, "G1", station="Alder")
    feeder(b, "F1", 10, station="Birch")
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1", at=0)], kv=132)
    single_bus(b, "Birch", [Bay("L1", "L1", at=1), Bay("F1", "F1")], kv=132)
    return b.build()


def mistakes(load: Callable[[], object]) -> list[str]:
    with pytest.raises(InputError) as caught:
        load()
    return [str(p) for p in caught.value.problems]


def frame(rows: list[dict[str, object]]) -> pd.DataFrame:
    return pd.DataFrame(rows, dtype=object)


# --- equipment ------------------------------------------------------------------------


@pytest.mark.parametrize("name", SCENARIOS)
def test_an_equipment_list_written_and_read_is_the_same_plant(name: str) -> None:
    plant = load_scenario(SCENARIOS[name]).plant
    listed = equipment_list(plant)
    count = len(plant.sections) + len(plant.devices) + len(plant.vts) + len(plant.dispatches) + len(plant.couplings)
    loose = [s for s in plant.sources if not s.name.endswith(".unit")]
    assert len(listed) == count + len(loose)
    assert load_equipment(listed, length_unit=plant.length_unit) == plant


@pytest.mark.parametrize("way", WAYS)
def test_an_equipment_list_may_stand_in_a_file(demo: Scenario, tmp_path: Path, way: str) -> None:
    source = WAYS[way](equipment_list(demo.plant), tmp_path)
    assert load_equipment(source) == demo.plant


def test_stations_are_laid_out_from_their_bays(two: Plant) -> None:
    rows: list[dict[str, object]] = [
        {"kind": "line", "name": "L1", "length": 40, "kv": 132},
        {"kind": "generator", "name": "G1", "station": "Alder"},
        {"kind": "feeder", "name": "F1", "station": "Birch", "load_mw": 10},
        {"kind": "station", "name": "Alder", "layout": "single_bus", "kv": 132},
        {"kind": "station", "name": "Birch", "layout": "single_bus", "kv": 132},
        {"kind": "bay", "name": "G1", "station": "Alder"},
        {"kind": "bay", "name": "L1", "station": "Alder", "at": 0},
        {"kind": "bay", "name": "L1", "station": "Birch", "at": 1},
        {"kind": "bay", "name": "F1", "station": "Birch"},
    ]
    assert load_equipment(frame(rows)) == two


def test_a_double_bus_takes_its_selection_and_its_coupler() -> None:
    rows: list[dict[str, object]] = [
        {"kind": "generator", "name": "G1", "station": "Alder"},
        {"kind": "feeder", "name": "F1", "station": "Alder", "load_mw": 5},
        {"kind": "station", "name": "Alder", "layout": "double_bus", "closed": "no", "ct": "bus_side", "cores": "1 2"},
        {"kind": "bay", "name": "G1", "station": "Alder", "bus": 2},
        {"kind": "bay", "name": "F1", "station": "Alder", "bus": 2},
    ]
    plant = load_equipment(frame(rows))
    assert not plant.device["Alder.BC.CB"].closed
    assert plant.device["Alder.G1.DS2"].closed
    assert plant.device["Alder.F1.DS2"].closed
    assert plant.device["Alder.G1.CTb"].cores == ("1", "2")


def test_every_row_of_a_list_that_cannot_be_used_is_named_at_once(tmp_path: Path) -> None:
    text = "\n".join(
        [
            "kind,name,station,layout,to,a,b,length,kv,closed,cores,remark",
            "bus,B,,,,,,,132,,,",
            "braeker,CB1,,,,B,F,,,,,",
            "breaker,CB2,,,,B,Fx,,,,,",
            "feeder,F,,,,,,,-3,,,",
            "line,L,,,,,,,,,,",
            "ct,T,,,,B,B,,,,,",
            "feeder,F,,,,,,,x,,,",
            "breaker,CB3,,,,B,F,,,perhaps,,",
            "bus,B2,,,,,,12,,,1 2,",
            "bay,L,Elder,,L,,,,,,,",
            "station,Alder,,single_bs,,,,,,,,",
            ",,,,,,,,,,,",
            "dispatch,night,,,,,,,,,,",
            ",nameless,,,,,,,,,,",
        ]
    )
    path = tmp_path / "list.csv"
    path.write_text(text, encoding="utf-8")
    found = mistakes(lambda: load_equipment(path, columns={"remark": None}))
    by_line = {line: [f for f in found if f.startswith(f"{path}:{line}: ")] for line in range(2, 16)}
    told = {line: " | ".join(f.removeprefix(f"{path}:{line}: ") for f in texts) for line, texts in by_line.items()}
    assert "kind: got 'braeker'" in told[3]
    assert "did you mean 'breaker'?" in told[3]
    assert "b: got 'Fx', expected the name of a section (did you mean 'F'?)" in told[4]
    assert "kv: got '-3', expected a finite number of zero or more" in told[5]
    assert "length: got 'nothing', expected a length over zero" in told[6]
    assert "at least one core" in told[7]
    assert "another section than a" in told[7]
    assert "name: got 'F', expected a name not used twice (first in row 5)" in told[8]
    assert "kv: got 'x', expected a number" in told[8]
    assert "closed: got 'perhaps', expected yes or no" in told[9]
    assert "cores: got '1 2', expected an empty cell: a bus has station, kv, length, load_mw" in told[10]
    assert "station: got 'Elder', expected a station with a row of its own (did you mean 'Alder'?)" in told[11]
    assert "layout: got 'single_bs'" in told[12]
    assert told[13] == ""
    assert "kind: got 'nothing'" in told[15]
    assert len(found) == sum(map(len, by_line.values()))
    assert [told[2], told[14]] == ["", ""]


def test_what_the_plant_itself_finds_is_named_by_its_row() -> None:
    rows: list[dict[str, object]] = [
        {"kind": "bus", "name": "B", "kv": 132},
        {"kind": "bus", "name": "C", "kv": 33},
        {"kind": "breaker", "name": "CB", "a": "B", "b": "C"},
        {"kind": "source", "name": "S", "section": "B"},
    ]
    (only,) = mistakes(lambda: load_equipment(frame(rows)))
    assert only.startswith("at row 2: device 'CB': got '132 kV at B, 33 kV at C'")


def test_a_layout_that_cannot_be_is_named_by_its_row() -> None:
    rows: list[dict[str, object]] = [
        {"kind": "generator", "name": "G1", "station": "Alder"},
        {"kind": "station", "name": "Alder", "layout": "ring"},
        {"kind": "bay", "name": "G1", "station": "Alder", "bus": 1},
    ]
    (only,) = mistakes(lambda: load_equipment(frame(rows)))
    assert only == "at row 2: bus: got 1, expected an empty cell: bays of a ring choose no bus"
    del rows[2]["bus"]
    (only,) = mistakes(lambda: load_equipment(frame(rows)))
    assert only.startswith("at row 1: bays of station 'Alder'")


def test_columns_are_renamed_left_out_or_refused(two: Plant) -> None:
    listed = equipment_list(two).rename(columns={"kind": "Art"}).assign(make="any")
    assert load_equipment(listed, columns={"Art": "kind", "make": None}) == two
    found = mistakes(lambda: load_equipment(listed))
    assert any("column: got 'Art'" in f for f in found)
    assert any("got 'make'" in f for f in found)
    assert any("the column kind" in f for f in found)


def impedances(**changes: object) -> list[dict[str, object]]:
    """Two lines side by side, a transformer, a generator and an infeed, all with impedances."""
    ohms = {"r_ohm": 2, "x_ohm": 10.5, "r0_ohm": 6, "x0_ohm": 30}
    rows: list[dict[str, object]] = [
        {"kind": "bus", "name": "B1", "kv": 132},
        {"kind": "bus", "name": "B2", "kv": 132},
        {"kind": "line", "name": "L1", "kv": 132, "length": 40, **ohms},
        {"kind": "line", "name": "L2", "kv": 132, "length": 40, **ohms},
        {"kind": "transformer", "name": "T1", "mva": 60, "winding_kv": "132 11", "r_pu": 0.003, "x_pu": "0.12",
         "group": "YNd1", "earth_r_ohm": "5 0"},
        {"kind": "generator", "name": "G1", "kv": 11, "x_ohm": 0.4, "r_ohm": 0, "r0_ohm": 0.0, "x0_ohm": 0.2},
        {"kind": "source", "name": "N", "section": "B2", "r_ohm": 1, "x_ohm": 8, "r2_ohm": 1, "x2_ohm": 7},
        {"kind": "coupling", "name": "L1 beside L2", "a": "L1", "b": "L2", "r0_ohm": 1, "x0_ohm": 12},
        {"kind": "breaker", "name": "CB1", "a": "B1", "b": "L1", "b_at": 0},
        {"kind": "breaker", "name": "CB2", "a": "B2", "b": "L1", "b_at": 1},
        {"kind": "breaker", "name": "CB3", "a": "B1", "b": "L2", "b_at": 0},
        {"kind": "breaker", "name": "CB4", "a": "B2", "b": "L2", "b_at": 1},
        {"kind": "breaker", "name": "CBT", "a": "B1", "b": "T1", "b_at": 0},
        {"kind": "breaker", "name": "CBG", "a": "G1", "b": "T1", "b_at": 1},
    ]  # fmt: skip
    for key, value in changes.items():
        name, _, column = key.partition("_")
        next(row for row in rows if row["name"] == name)[column] = value
    return rows


@pytest.mark.parametrize("way", WAYS)
def test_impedances_go_there_and_back(tmp_path: Path, way: str) -> None:
    plant = load_equipment(frame(impedances()))
    assert plant.section["L1"].impedance == LineImpedance(r_ohm=2, x_ohm=10.5, r0_ohm=6, x0_ohm=30)
    assert plant.section["T1"].impedance == TransformerImpedance(
        mva=60, kv=(132, 11), r_pu=(0.003,), x_pu=(0.12,), group="YNd1", earth_r_ohm=(5, 0)
    )
    assert plant.source["G1.unit"].impedance == SourceImpedance(r_ohm=0, x_ohm=0.4, r0_ohm=0, x0_ohm=0.2)
    assert plant.source["N"].impedance == SourceImpedance(r_ohm=1, x_ohm=8, r2_ohm=1, x2_ohm=7)
    assert plant.couplings == (Coupling(a="L1", b="L2", r0_ohm=1, x0_ohm=12),)
    assert load_equipment(WAYS[way](equipment_list(plant), tmp_path)) == plant


@pytest.mark.parametrize(
    ("cell", "value", "phrase"),
    [
        ("L1_x_ohm", None, "at row 2: x_ohm: got 'nothing', expected a value beside r_ohm, r0_ohm, x0_ohm"),
        ("L1_r0_ohm", None, "at row 2: zero-sequence impedance: got 'one of two'"),
        ("T1_x_pu", "0.1 0.2", "at row 4: x_pu: got (0.1, 0.2), expected 1 number"),
        ("T1_group", "YNq1", "at row 4: group: got 'YNq1'"),
        ("T1_winding_kv", "132 eleven", "at row 4: winding_kv: got 'eleven', expected a number"),
        ("N_x_ohm", "inf", "at row 6: x_ohm: got 'inf', expected a finite number"),
        ("L1 beside L2_b", "L3", "at row 7: b: got 'L3', expected the name of a section"),
        ("B1_x_ohm", 5, "at row 0: x_ohm: got 5, expected an empty cell"),
    ],
)
def test_an_impedance_that_cannot_be_is_named_by_its_row(cell: str, value: object, phrase: str) -> None:
    found = mistakes(lambda: load_equipment(frame(impedances(**{cell: value}))))
    assert any(f.startswith(phrase) for f in found), found


def test_labels_that_a_cell_cannot_hold_are_not_written() -> None:
    b = PlantBuilder()
    generator(b, "G1", station="Alder")
    single_bus(b, "Alder", [Bay("G1", "G1")], cores=("core 1",))
    assert "label of 'Alder.G1.CTb'" in mistakes(lambda: equipment_list(b.build()))[0]


@pytest.mark.parametrize(
    ("name", "content", "phrase"),
    [
        ("none.csv", None, "no such file"),
        ("empty.csv", b"", "a first row"),
        ("latin.csv", b"kind,name\nbus,\xe9\n", "UTF-8"),
        ("quote.csv", b'kind,name\nbus,"B\n', "quotes closed"),
        ("broken.xlsx", b"no archive", "readable Excel file"),
    ],
)
def test_files_that_cannot_be_read_say_why(tmp_path: Path, name: str, content: bytes | None, phrase: str) -> None:
    if content is not None:
        (tmp_path / name).write_bytes(content)
    assert phrase in mistakes(lambda: load_equipment(tmp_path / name))[0]


# --- relay schedule -------------------------------------------------------------------

POLICIES: dict[str, Policy] = {
    "single set": single_set(),
    "duplicate relay": duplicate_relay(),
    "duplicate chain": duplicate_chain(),
    "everything": replace(
        duplicate_chain(),
        local_backup=LocalBackup(dc="2", coil="2", delay=Fixed(450_000)),
        end_fault=True,
        breaker_failure=BreakerFailurePolicy(auxiliary=True, transfer_trip=False),
    ),
    "no back-up": replace(duplicate_chain(), remote_backup=False, breaker_failure=None),
}


@pytest.mark.parametrize("name", POLICIES)
def test_a_schedule_written_and_read_is_the_same_scheme(demo: Scenario, name: str) -> None:
    policy = POLICIES[name]
    scheme = dress(demo.plant, policy)
    schedule = relay_schedule(demo.plant, policy)
    assert schedule.scheme() == scheme
    table = schedule.table()
    assert load_relay_schedule(table, demo.plant).scheme() == scheme
    assert load_relay_schedule(table, demo.plant).table().equals(table)


@pytest.mark.parametrize("way", WAYS)
def test_a_schedule_may_stand_in_a_file(two: Plant, tmp_path: Path, way: str) -> None:
    policy = duplicate_chain()
    source = WAYS[way](relay_schedule(two, policy).table(), tmp_path)
    assert load_relay_schedule(source, two).scheme() == dress(two, policy)


def test_exceptions_are_scheduled_each_as_it_is(demo: Scenario) -> None:
    special = {"L1": duplicate_chain(), "Alder.B1": replace(single_set(), breaker_failure=None)}
    scheme = dress(demo.plant, single_set(), exceptions=special)
    table = relay_schedule(demo.plant, single_set(), special).table()
    assert load_relay_schedule(table, demo.plant, single_set()).scheme() == scheme


def own(rows: str) -> pd.DataFrame:
    """A small schedule from lines of words; ``-`` is an empty cell."""
    heading, *lines = [text.split() for text in rows.strip().splitlines()]
    cells = [[None if word == "-" else word.replace("_", " ") for word in words] for words in lines]
    return pd.DataFrame(cells, columns=heading, dtype=object)


SMALL = """
function        protects     station set core winding dc coil channel lockout operate_ms delay_ms retrip_coil
87L             L1           Alder   1   1    1       1  1    1       -       20         -        -
87L             L1           Birch   1   1    1       1  1    1       -       20         -        -
21-2            L1           -       -   -    -       -  -    -       -       -          350      -
50              F1           Birch   1   1    -       1  1    -       -       25         -        -
87B             Alder.B1     Alder   1   2    -       1  1    -       1       -          -        -
50BF            Birch.F1.CB  Birch   -   3    -       1  1    -       -       -          160      2
"""


def test_a_schedule_says_what_is_there_and_nothing_else(two: Plant) -> None:
    schedule = load_relay_schedule(own(SMALL), two)
    scheme = schedule.scheme()
    relays = {c.name for c in scheme.components if c.kind is ComponentKind.RELAY}
    assert relays == {"Alder/L1/relay 1", "Birch/L1/relay 1", "Birch/F1/relay 1", "Alder/Alder.B1/relay 1",
                      "Birch.F1.CB/BF relay"}  # fmt: skip
    functions = {c.function for c in scheme.contacts.values()}
    assert functions >= {"87L", "21-1", "21-2", "50", "87B", "50BF"}
    assert not functions & {"21-3", "67", "87G", "51"}
    waits = scheme.block["Birch.F1.CB/50BF timer"]
    assert isinstance(waits, Timer)
    assert waits.pick_up == Fixed(160_000)
    assert getattr(scheme.block["Birch/F1/1 50"], "operate", None) == Fixed(25_000)
    assert {c for c in scheme.component if c.endswith("/core 2")} == {"Alder.G1.CTc/core 2", "Alder.L1.CTc/core 2"}
    assert repr(schedule) == "RelaySchedule(3 elements, 1 breakers)"
    shown = schedule._repr_html_()
    assert "<td>87L</td>" in shown
    assert "None" not in shown


def test_a_second_dc_supply_in_one_row_changes_that_bay_only(two: Plant) -> None:
    def dcs(scheme: Scheme) -> set[str]:
        return {c.name for c in scheme.components if c.kind is ComponentKind.DC}

    table = own(SMALL)
    before = dcs(load_relay_schedule(table, two).scheme())
    table.loc[3, "dc"] = "3"
    assert dcs(load_relay_schedule(table, two).scheme()) - before == {"Birch/DC 3"}


@pytest.mark.parametrize(
    ("row", "column", "value", "phrase"),
    [
        (0, "function", "87l", "did you mean '87L'?"),
        (0, "function", "87B", "function: got '87B', expected for a line one of 21, 87L"),
        (1, "station", "Brich", "did you mean 'Birch'?"),
        (1, "dc", "2", "1 as in row 0: all ends are protected alike"),
        (1, "station", "Alder", "a row not given twice (first in row 0)"),
        (0, "channel", None, "the channel that 87L needs"),
        (0, "winding", None, "the VT winding"),
        (3, "core", "9", "50 set 1 of 'F1' at CT 'Birch.F1.CTb': got \"core '9'\""),
        (3, "core", None, "core: got 'nothing'"),
        (3, "protects", "F2", "protects: got 'F2'"),
        (3, "operate_ms", 0.02, "is it in seconds? 0.02 s is 20 ms"),
        (2, "delay_ms", 1, "is it in seconds? 1 s is 1000 ms"),
        (3, "operate_ms", -1, "a time from 0 to"),
        (3, "operate_ms", "20,5", "a decimal point"),
        (3, "delay_ms", 100, "an empty cell: 50 has set, core"),
        (5, "protects", "Birch.F1.BC", "the name of a breaker (did you mean 'Birch.F1.CB'?)"),
        (5, "core", "7", "breaker failure of 'Birch.F1.CB' at CT"),
    ],
)
def test_a_row_that_cannot_be_used_is_named_with_its_reason(
    two: Plant, row: int, column: str, value: str | float | None, phrase: str
) -> None:
    table = own(SMALL)
    table.loc[row, column] = value
    found = mistakes(lambda: load_relay_schedule(table, two))
    assert any(phrase in f for f in found), found
    assert all(f.startswith("at row ") for f in found)
    assert any(f.startswith(f"at row {row}: ") for f in found)


def test_mistakes_of_every_kind_come_together_in_the_order_of_the_rows(two: Plant) -> None:
    table = own(SMALL)
    table.loc[0, "function"] = "87l"
    table.loc[3, "core"] = "9"
    table.loc[4, "operate_ms"] = 0.02
    table.loc[5, "core"] = "7"
    found = mistakes(lambda: load_relay_schedule(table, two))
    numbers = [int(f.split()[2].rstrip(":")) for f in found]
    assert numbers == sorted(numbers)
    assert set(numbers) >= {0, 3, 4, 5}


def test_a_coil_on_two_supplies_is_named_by_its_row(two: Plant) -> None:
    table = own(SMALL).assign(coil_dc=None)
    table.loc[5, "coil_dc"] = "2"
    table.loc[3, "coil_dc"] = "1"
    found = mistakes(lambda: load_relay_schedule(table, two))
    assert [f[:9] for f in found] == ["at row 5:"]
    assert "coil 1 of 'Birch." in found[0]


def test_what_a_schedule_has_no_cell_for_is_not_written_silently(two: Plant) -> None:
    loose = replace(single_set(), times=replace(single_set().times, lockout=Fixed(1)))
    assert any("times.lockout" in f for f in mistakes(lambda: RelaySchedule(two, single_set(), {"F1": loose}).table()))
    times = replace(single_set().times.overcurrent, operate=Uniform(10_000, 30_000))
    random = replace(single_set(), times=replace(single_set().times, overcurrent=times))
    assert mistakes(lambda: RelaySchedule(two, single_set(), {"F1": random}).table())
    assert load_relay_schedule(relay_schedule(two, random).table(), two, random).scheme() == dress(two, random)


def test_an_exception_to_nothing_is_refused(two: Plant) -> None:
    (only,) = mistakes(lambda: relay_schedule(two, single_set(), {"L11": single_set()}))
    assert "did you mean 'L1'?" in only
