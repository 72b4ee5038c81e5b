"""The trip matrix: cells by hand, against what the engine opens, and against tables of a user's."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import bind
from schemesim.engine.event import run_event
from schemesim.engine.sensing import LogicalSensing, NoFault
from schemesim.errors import InputError
from schemesim.plant.layouts import Bay, feeder, generator, line, single_bus
from schemesim.plant.model import Plant, PlantBuilder
from schemesim.scenario import Scenario, load_scenario
from schemesim.scheme.dress import dress
from schemesim.scheme.model import Gate, Scheme
from schemesim.scheme.policy import Policy, ProtectionSet, duplicate_chain, single_set
from schemesim.scheme.trip_comparison import Discrepancy, compare_trip_matrix
from schemesim.scheme.trip_matrix import TripMatrix, trip_matrix
from tests.unit.small_schemes import feeder_scheme, voting_scheme

DEMO = Path(__file__).resolve().parents[2] / "scenarios" / "demo.yaml"


@pytest.fixture(scope="module")
def demo() -> Scenario:
    return load_scenario(DEMO)


def one_station() -> Plant:
    b = PlantBuilder()
    generator(b, "G1", station="Alder")
    feeder(b, "F1", station="Alder", load_mw=10)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1")])
    return b.build()


def two_stations() -> Plant:
    b = PlantBuilder()
    line(b, "L1", length=40)
    generator(b, "G1", station="Alder")
    feeder(b, "F1", station="Birch", load_mw=10)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1", at=0)])
    single_bus(b, "Birch", [Bay("L1", "L1", at=1), Bay("F1", "F1")])
    return b.build()


def cells(matrix: TripMatrix) -> dict[str, dict[str, str]]:
    return {r.output: {b: r.cell(b) for b in r.ways} for r in matrix.rows}


def test_a_station_by_hand() -> None:
    """A bus with a generator and a feeder: bus and generator trips through 86; BF trips what is around."""
    bf_g1, bf_f1 = "Alder.G1.CB/50BF", "Alder.F1.CB/50BF"
    assert cells(trip_matrix(dress(one_station(), single_set()))) == {
        "Alder/Alder.B1/1 87B trip": {"Alder.F1.CB": "86 BFI", "Alder.G1.CB": "86 BFI"},
        "Alder/F1/1 50 trip": {"Alder.F1.CB": "T BFI"},
        "Alder/G1/1 87G trip": {"Alder.G1.CB": "86 BFI", "G1.unit": "86"},
        "Alder/G1/timed 1 51 trip": {"Alder.G1.CB": "T BFI", "G1.unit": "T"},
        bf_g1: {"Alder.F1.CB": "86", "G1.unit": "86"},
        f"{bf_g1} retrip": {"Alder.G1.CB": "T"},
        bf_f1: {"Alder.G1.CB": "86"},
        f"{bf_f1} retrip": {"Alder.F1.CB": "T"},
    }


def test_ways_name_coil_lockout_and_channel() -> None:
    matrix = trip_matrix(dress(two_stations(), duplicate_chain()))
    (far,) = matrix.row["Birch.L1.CB/50BF"].ways["Alder.L1.CB"]
    assert (far.mark, far.coil, far.channel) == ("86+TT", "Alder.L1.CB/coil 1", "Alder-Birch/channel 1")
    assert far.lockout == "Birch.L1.CB/86BF 1"
    assert far.marks == {"T", "86", "TT"}
    second = matrix.row["Birch/Birch.B1/2 87B trip"].ways["Birch.F1.CB"]
    assert [(w.mark, w.coil, w.lockout) for w in second] == [
        ("86", "Birch.F1.CB/coil 2", "Birch/Birch.B1/86 2"),
        ("BFI", "", ""),
    ]


def test_a_scheme_of_ones_own_and_a_vote() -> None:
    own = cells(trip_matrix(feeder_scheme()))
    main = {"F1.CB": "T", "bf.trip": "BFI"}  # the breaker failure there names no element: its output stands for it
    assert own == {"M1.trip": main, "M2.trip": main, "bf.trip": {"IN.CB": "T"}, "IN.trip": {"IN.CB": "T"}}
    assert cells(trip_matrix(voting_scheme())) == {"trip": {"F1.CB": "T"}}
    sets = tuple(ProtectionSet(label=n) for n in "123")
    voted = trip_matrix(dress(one_station(), Policy(sets=sets, votes=2, lockout=False)))
    ways = voted.row["Alder/F1/2 50 trip"].ways["Alder.F1.CB"]
    assert {w.vote for w in ways} == {"2oo3"}


@pytest.mark.parametrize("policy", ["full", "relay twice", "single"])
def test_cells_are_what_the_engine_opens(demo: Scenario, policy: str) -> None:
    """A relay that trips with no fault, all else working, opens what its outputs trip in the matrix, no more."""
    program = demo.program(policy)
    wired: dict[str, set[str]] = {}
    for r in trip_matrix(program.scheme).rows:
        if r.contact.function != "50BF retrip":  # the relay's spurious trip is not wired to the retrip
            wired.setdefault(r.contact.relay, set()).update(b for b in r.ways if "T" in r.marks(b))
    relays = sorted(wired)[::4]
    assert len(relays) > 10
    for relay in relays:
        case = bind(program, NoFault(relay), LogicalSensing())
        assert run_event(case, FixedAnswers(program)).outcome.tripped == wired[relay], relay


def without_wire(scheme: Scheme, gate: str, signal: str) -> Scheme:
    blocks = tuple(
        replace(b, inputs=tuple(i for i in b.inputs if i != signal)) if isinstance(b, Gate) and b.name == gate else b
        for b in scheme.blocks
    )
    return replace(scheme, blocks=blocks)


def test_a_wire_left_out_and_a_wire_too_many_are_found() -> None:
    right = dress(one_station(), single_set())
    wrong = without_wire(right, "Alder.G1.CB/coil 1 energised", "Alder.F1.CB/86BF 1")
    asked, built = trip_matrix(right), trip_matrix(wrong)
    lost = {Discrepancy("missing", "Alder.F1.CB/50BF", "Alder.G1.CB", m) for m in ("T", "86")}
    assert set(compare_trip_matrix(built, asked.table()).differences) == lost
    more = {replace(d, kind="extra") for d in lost}
    assert set(compare_trip_matrix(asked, built.table()).differences) == more
    assert not compare_trip_matrix(asked, asked.table()).differences
    initiate = without_wire(right, "Alder.F1.CB/50BF initiate", "Alder/F1/1 50 trip")
    found = compare_trip_matrix(trip_matrix(initiate), asked.table())
    assert found.differences == (Discrepancy("missing", "Alder/F1/1 50 trip", "Alder.F1.CB", "BFI"),)


def test_the_demo_agrees_with_its_own_table_and_with_a_file_of_it(demo: Scenario, tmp_path: Path) -> None:
    matrix = trip_matrix(demo.scheme())
    path = tmp_path / "matrix.csv"
    matrix.table().to_csv(path, index=False)
    for found in (
        compare_trip_matrix(matrix, matrix.table()),
        compare_trip_matrix(matrix, str(path)),
        compare_trip_matrix(matrix, matrix.ways_table()),
    ):
        assert (found.differences, found.compared) == ((), ("T", "86", "TT", "BFI"))
    assert found.unlisted == sum(not r.ways for r in matrix.rows)  # in the table of ways nothing is no row


def test_rows_for_many_outputs_and_marks_not_spoken_of() -> None:
    """Blank keys fit all; a table of X alone says nothing of 86, TT and BFI."""
    matrix = trip_matrix(dress(one_station(), single_set()))
    rows: list[dict[str, object]] = [
        {"function": "87B", "Alder.F1.CB": "X", "Alder.G1.CB": "x"},
        {"element": "F1", "Alder.F1.CB": "trip"},
        {"element": "G1", "Alder.G1.CB": "1", "G1.unit": "1"},
        {"output": "*/50BF retrip", "element": "Alder.F1.CB", "Alder.F1.CB": "X"},
        {"output": "Alder.G1.CB/50BF*", "Alder.G1.CB": "X", "Alder.F1.CB": "-", "G1.unit": None},
    ]
    found = compare_trip_matrix(matrix, rows)
    assert found.compared == ("T",)
    assert set(found.missing) == {Discrepancy("missing", "Alder.G1.CB/50BF", "Alder.G1.CB", "T")}
    assert set(found.extra) == {
        Discrepancy("extra", "Alder.G1.CB/50BF", "Alder.F1.CB", "T"),
        Discrepancy("extra", "Alder.G1.CB/50BF", "G1.unit", "T"),
        Discrepancy("extra", "Alder.F1.CB/50BF", "Alder.G1.CB", "T"),  # in no row
    }
    assert (found.outputs, found.unlisted) == (7, 1)
    assert len(found.table()) == 4
    none = compare_trip_matrix(matrix, [{"function": "21-1", "Alder.F1.CB": "X"}])
    assert none.missing == (Discrepancy("missing", "function 21-1"),)


@pytest.mark.parametrize(
    ("rows", "said"),
    [
        ([{"Alder.F1.CB": "X"}], "at least one of the columns"),
        ([], "at least one of the columns"),
        ([{"element": "F1", "Alder.F1.CP": "X"}], "did you mean 'Alder.F1.CB'"),
        ([{"element": "F1", "Alder.F1.CB": "perhaps"}], "perhaps"),
        ([{"element": "F1", "breaker": "Alder.F9.CB", "mark": "T"}], "Alder.F9.CB"),
        ([{"element": "", "Alder.F1.CB": "X"}], "row 1"),
        ("no such file.csv", "can be read"),
    ],
)
def test_bad_tables_are_refused(rows: list[dict[str, object]] | str, said: str) -> None:
    with pytest.raises(InputError, match=said):
        compare_trip_matrix(trip_matrix(dress(one_station(), single_set())), rows)


def test_every_mistake_of_a_table_is_told() -> None:
    matrix = trip_matrix(dress(one_station(), single_set()))
    rows = [{"element": "F1", "Alder.F1.CB": "maybe"}, {"element": "", "Alder.F1.CB": "?"}]
    with pytest.raises(InputError) as caught:
        compare_trip_matrix(matrix, rows)
    assert len(caught.value.problems) == 3
