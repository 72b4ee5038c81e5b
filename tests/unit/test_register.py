"""The register of single points of failure: by hand, against the trees, and in the groups of the footnote."""

from __future__ import annotations

import pickle
from concurrent.futures import ThreadPoolExecutor
from fractions import Fraction
from itertools import combinations
from pathlib import Path
from typing import Any

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.event import run_event
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.layouts import Bay, feeder, generator, line, single_bus
from schemesim.plant.model import Location, Plant, PlantBuilder
from schemesim.scenario import Scenario, load_scenario
from schemesim.scenario.weak import register_scenario
from schemesim.scheme.dress import dress
from schemesim.scheme.model import ComponentKind
from schemesim.scheme.policy import duplicate_relay
from schemesim.study.footnote import LOW_VOLTAGE, OPEN_CIRCUIT, Group, Monitored
from schemesim.study.locations import study_locations
from schemesim.study.register import Register, register
from schemesim.study.spoiled import Effect, RegisterOptions, register_at
from tests.unit.small_schemes import case_of, feeder_scheme, program_of

SMALL = Path(__file__).resolve().parents[1] / "data" / "small.yaml"
SENSING = LogicalSensing()
F1, F2 = Location("F1"), Location("F2")
LIMIT_US = 200_000
CAUSE = "common cause same settings"
STUCK, LATE_CB, DC = "CB1: does_not_open", "CB1: opens_late", "DC: lost"
M1, M2, BF, IN = (f"{name}: failure_to_operate" for name in ("M1", "M2", "BF", "IN"))


def of_feeders(**options: Any) -> Register:
    return register(program_of(feeder_scheme()), SENSING, [F1, F2], **{"limit_us": LIMIT_US, **options})


def fed_from_both_ends() -> Plant:
    b = PlantBuilder()
    line(b, "L1", length=40)
    generator(b, "G1", station="Alder")
    generator(b, "G2", station="Birch")
    feeder(b, "F1", station="Birch", load_mw=10)
    single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1", at=0)])
    single_bus(b, "Birch", [Bay("G2", "G2"), Bay("L1", "L1", at=1), Bay("F1", "F1")])
    return b.build()


@pytest.fixture(scope="module")
def small() -> Scenario:
    return load_scenario(SMALL)


def test_entries_by_hand() -> None:
    """F1: a stuck or slow breaker is backed up at 220 ms, a lost trip by the infeed at 470; F2 has the infeed only."""
    found = of_feeders()
    assert {e.name: e.worst for e in found.singles} == {
        STUCK: Effect.LATE,
        LATE_CB: Effect.LATE,
        DC: Effect.LATE,
        CAUSE: Effect.LATE,
        IN: Effect.NOT_CLEARED,
    }
    (stuck,) = found.entry(STUCK).spoiled
    assert (stuck.location, stuck.t_clear_us, stuck.t_clear_without_us) == (F1, 220_000, 70_000)
    assert (stuck.breakers, stuck.breakers_without, stuck.excess) == (1, 1, 1)
    assert (stuck.load_lost_mw, stuck.load_lost_without_mw) == (15, 10)
    assert stuck.cleared_by == "breaker failure"
    (lost,) = found.entry(DC).spoiled
    assert (lost.t_clear_us, lost.load_lost_mw) == (470_000, 15)
    (stays,) = found.entry(IN).spoiled
    assert (stays.location, stays.t_clear_us, stays.cleared_by) == (F2, None, "")
    assert found.singles[0].name == IN  # the worst first
    assert [(s.location, s.effect) for s in found.anyway] == [(F2, Effect.LATE)]
    assert found.entry(CAUSE).probability == Fraction(1, 200)
    assert found.locations == 2


def test_without_a_tight_limit_only_more_breakers_and_what_stays() -> None:
    found = of_feeders(limit_us=1_000_000)
    assert {e.name: e.worst for e in found.singles} == {
        STUCK: Effect.MORE_BREAKERS,
        LATE_CB: Effect.MORE_BREAKERS,
        DC: Effect.MORE_BREAKERS,
        CAUSE: Effect.MORE_BREAKERS,
        IN: Effect.NOT_CLEARED,
    }
    assert found.anyway == ()
    by_place = of_feeders(limit_us={F1: 1_000_000, F2: LIMIT_US})
    assert [s.location for s in by_place.anyway] == [F2]


def test_pairs_do_worse_than_each_alone() -> None:
    """Brute force: every pair of failures run on both feeders, judged against its singles."""
    found = of_feeders(pairs=True)
    assert {e.failures for e in found.singles} == {e.failures for e in of_feeders().singles}
    wanted: dict[tuple[frozenset[str], str], int] = {}
    for at in ("F1", "F2"):
        case = case_of(feeder_scheme(), at)
        names = [q.name for q in case.questions]

        def effect(*yes: str, case: Any = case) -> int:
            base, now = (run_event(case, FixedAnswers(case.program, y)).outcome for y in ((), yes))
            if now.t_clear_us is None:
                return 3
            if now.t_clear_us > LIMIT_US and (base.t_clear_us or 0) <= LIMIT_US:
                return 2
            return int(len(now.tripped - case.duty.intended) > len(base.tripped - case.duty.intended))

        for a, b in combinations(names, 2):
            if b.partition(":")[0] != a.partition(":")[0] and effect(a, b) > max(effect(a), effect(b)):
                wanted[(frozenset({a, b}), at)] = effect(a, b)
    got = {(frozenset(e.failures), str(s.location)): int(s.effect) for e in found.pairs for s in e.spoiled}
    assert got == wanted
    assert (frozenset({DC, IN}), "F1") in got
    assert (frozenset({M1, M2}), "F1") in got


def test_it_agrees_with_the_trees(small: Scenario) -> None:
    """The single points of every location's tree, kind for kind."""
    program = small.program("plain")
    options: dict[str, Any] = {"limit_us": LIMIT_US, "dispatch": small.study.dispatch}
    trees = study_locations(program, SENSING, small.frequencies, epsilon=1e-2, **options)
    kinds = {"not cleared": Effect.NOT_CLEARED, "late": Effect.LATE, "more breakers": Effect.MORE_BREAKERS}
    wanted = {(p.failure, str(r.location)): kinds[p.kind] for r in trees.results for p in r.single_points}
    found = register(program, SENSING, small.frequencies, **options)
    got = {(e.name, str(s.location)): s.effect for e in found.singles for s in e.spoiled}
    assert got == wanted
    assert len(got) > 50


def test_of_a_scenario_and_on_any_executor(small: Scenario) -> None:
    done: list[tuple[int, int]] = []
    at = list(small.frequencies)[-6:]
    alone = register_scenario(small, locations=at, progress=lambda n, of: done.append((n, of)))
    assert done == [(n, len(at)) for n in range(1, len(at) + 1)]
    with ThreadPoolExecutor(2) as pool:
        assert register_scenario(small, locations=at, executor=pool) == alone
    piece = register_at(small.program(), at[0], SENSING, LIMIT_US, RegisterOptions())
    assert pickle.loads(pickle.dumps(piece)) == piece


def test_tables_have_a_row_for_each_entry_and_place() -> None:
    found = of_feeders(pairs=True)
    table, places = found.table(), found.places()
    assert len(table) == len(found.singles) + len(found.pairs)
    assert next(iter(table["failures"])) == IN
    row = table.set_index("failures").loc[STUCK]
    assert (row["t_clear_ms_worst"], row["late"], row["where"], row["group"]) == (220.0, 1, "F1", "apart")
    assert len(places) == sum(len(e.spoiled) for e in (*found.singles, *found.pairs))
    assert "5 single points of failure" in repr(found)
    assert "<table" in found._repr_html_()


def test_groups_and_exemptions_over_a_plant() -> None:
    """A duplicate of the relay alone: channel, DC and coil stand single; monitoring exempts them by the footnote."""
    plant = fed_from_both_ends()
    program = compile_scheme(plant, dress(plant, duplicate_relay()))
    at = [Location("L1", 0.9), Location("Alder.B1"), Location("F1")]
    watched = [
        Monitored(kind=ComponentKind.CHANNEL),
        Monitored("Alder/DC *", watches=frozenset({LOW_VOLTAGE})),
        Monitored("Alder/DC 1", watches=frozenset({OPEN_CIRCUIT})),
        Monitored("Birch/DC *", watches=frozenset({LOW_VOLTAGE})),
        Monitored("Alder.*/coil *"),
        Monitored("Birch.*/coil *", reported=False),
    ]
    found = register(program, SENSING, at, limit_us=LIMIT_US, monitored=watched)
    component = program.scheme.component
    kinds = {g: {component[e.name.rpartition(":")[0]].kind.value for e in found.group(g)} for g in list(Group)[:4]}
    assert kinds[Group.CONTROL] == {"coil", "lockout"}
    assert {e.name for e in found.group(Group.DC)} == {"Birch/DC 1: lost"}
    assert {e.name for e in found.group(Group.DC, exempt=True)} == {"Alder/DC 1: lost"}
    assert {e.name for e in found.group(Group.COMMUNICATIONS)} == set()
    assert {e.name for e in found.group(Group.COMMUNICATIONS, exempt=True)} >= {"L1/channel 1: lost"}
    coils = {e.name for e in found.group(Group.CONTROL) if "/coil " in e.name}
    assert coils
    assert all(name.startswith("Birch.") for name in coils)
    assert all(e.name.startswith("Alder.") for e in found.group(Group.CONTROL, exempt=True))
    apart = {e.grouped[0].why for e in found.group(Group.APART)}
    assert {"breaker", "ct_core"} <= apart
    assert sum(len(found.group(g, exempt=x)) for g in Group for x in (False, True)) == len(found.singles)


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ({"limit_us": -1}, "limit_us"),
        ({"limit_us": {F1: 100}}, "F2"),
        ({"limit_us": True}, "limit_us"),
        ({"monitored": [Monitored("DX*")]}, "a pattern that fits one"),
        ({"monitored": [Monitored("M1", ComponentKind.DC)]}, "of kind dc"),
        ({"monitored": [Monitored("DC", watches=frozenset({"low_volts"}))]}, "low_voltage"),
    ],
)
def test_bad_input_is_refused(options: dict[str, Any], said: str) -> None:
    with pytest.raises(InputError, match=said):
        of_feeders(**options)


def test_bad_places_and_names_are_refused(small: Scenario) -> None:
    with pytest.raises(InputError, match="did you mean"):
        register_scenario(small, locations=[Location("L11")])
    with pytest.raises(InputError, match="a section"):
        register(program_of(feeder_scheme()), SENSING, [Location("F9")], limit_us=1)
    with pytest.raises(InputError, match="did you mean"):
        of_feeders().entry("CB1: does_not_opne")


def test_an_interrupt_keeps_what_is_finished() -> None:
    def stop(*_: int) -> None:
        raise KeyboardInterrupt

    found = of_feeders(progress=stop)
    assert (found.complete, found.locations) == (False, 1)
    assert IN not in {e.name for e in found.singles}  # of F2, which was not reached


@pytest.mark.parametrize(
    ("policy", "filled"),
    [("single", "abcd"), ("relay twice", "bcd"), ("one battery", "c"), ("full", "")],
)
def test_what_is_said_of_the_demo(policy: str, filled: str) -> None:
    """Each duplicate empties groups of the footnote; what is left stands apart."""
    demo = load_scenario(SMALL.parents[2] / "scenarios" / "demo.yaml")
    at = [Location("L1"), Location("L3", 0.05), Location("Alder.B1"), Location("Birch.B1")]
    found = register_scenario(demo, policy, locations=at, monitored=())
    groups = [g for g in Group if g is not Group.APART]
    assert "".join(g.value[0] for g in groups if found.group(g)) == filled
    assert {"breaker", "unwanted operation"} <= {e.grouped[0].why for e in found.group(Group.APART)}
    if policy == "one battery":
        assert {e.worst for e in found.singles if e.name in ("Birch/DC 1: lost", "Alder/DC 1: lost")} == {
            Effect.NOT_CLEARED
        }
        assert found.singles[0].name == "Birch/DC 1: lost"


def test_what_the_demo_watches_is_exempt() -> None:
    """Channels and coils; of the DC supplies Alder's alone, which is watched for both."""
    demo = load_scenario(SMALL.parents[2] / "scenarios" / "demo.yaml")
    at = [Location("L1"), Location("L3", 0.05), Location("Alder.B1")]
    found = register_scenario(demo, "relay twice", locations=at)

    def names(group: Group, exempt: bool) -> set[str]:
        return {e.failures[0].partition(":")[0] for e in found.group(group, exempt=exempt)}

    assert names(Group.COMMUNICATIONS, exempt=True) == {"L3/channel 1"}
    assert names(Group.COMMUNICATIONS, exempt=False) == set()
    assert names(Group.DC, exempt=True) == {"Alder/DC 1"}
    assert "Birch/DC 1" in names(Group.DC, exempt=False)
    control = names(Group.CONTROL, exempt=True)
    assert "Alder.L1.CB/coil 1" in control
    assert all("/coil " in name for name in control)
    assert names(Group.CONTROL, exempt=False) == {"Alder/Alder.B1/86 1"}
