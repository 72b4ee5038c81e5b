"""The independence audit: what a duplicate really shares, by hand, item by item, and against the engine."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import bind
from schemesim.engine.event import run_event
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.scenario import Scenario, load_scenario
from schemesim.scheme.dress import dress
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.independence import Audit, independence
from schemesim.scheme.model import MODES, Ask, CommonCause, FailureMode, Role
from schemesim.scheme.policy import Policy, duplicate_chain, duplicate_relay, single_set
from tests.unit.test_trip_matrix import two_stations

DEMO = Path(__file__).resolve().parents[2] / "scenarios" / "demo.yaml"


@pytest.fixture(scope="module")
def demo() -> Scenario:
    return load_scenario(DEMO)


def items(audit: Audit, element: str, *, primary: bool = True) -> set[tuple[str, str]]:
    return {(s.item.kind, s.item.name) for s in audit.of(element) if primary or not s.item.primary}


def test_a_duplicate_of_the_chain_shares_breaker_and_instrument_transformers_alone(demo: Scenario) -> None:
    """On the demo's four stations, without a common cause of relays."""
    audit = independence(dress(demo.plant, duplicate_chain()))
    assert len(audit.protects) == 19
    assert all(audit.fully_duplicated(e) for e in audit.protects)
    assert items(audit, "L1") == {
        ("breaker", "Alder.L1.CB"),
        ("breaker", "Birch.D1.CB1"),
        ("breaker", "Birch.D1.CB2"),
        ("ct", "Alder.L1.CTb"),
        ("ct", "Birch.D1.CTb1"),
        ("ct", "Birch.D1.CTc2"),
        ("vt", "Alder.L1.VT"),
        ("vt", "Birch.L1.VT"),
    }
    assert items(audit, "F5") == {("breaker", "Dunmore.F5.CB"), ("ct", "Dunmore.F5.CTc")}
    stopped = {s.item.name: s.stops for s in audit.of("L1")}
    assert stopped["Alder.L1.CB"] == {"Alder.L1.CB"}
    assert stopped["Alder.L1.VT"] == frozenset()  # line differential needs no voltage


def test_the_demo_shares_its_common_causes_besides(demo: Scenario) -> None:
    audit = independence(demo.scheme("full"))
    assert {s.item.kind for s in audit.shared} == {"breaker", "ct", "vt", "common_cause"}
    assert items(audit, "L1", primary=False) == {("common_cause", f"{s}/L1 relays") for s in ("Alder", "Birch")}
    cut = {s.item.name: s.stops for s in audit.of("L1") if s.item.kind == "common_cause"}
    assert cut == {
        "Alder/L1 relays": frozenset({"Alder.L1.CB"}),
        "Birch/L1 relays": frozenset({"Birch.D1.CB1", "Birch.D1.CB2"}),
    }
    assert not any(audit.fully_duplicated(e) for e in audit.protects)
    one_battery = independence(demo.scheme("one battery"))
    extra = items(one_battery, "L1", primary=False) - items(audit, "L1", primary=False)
    assert extra == {("dc", "Alder/DC 1"), ("dc", "Birch/DC 1")}


def test_a_duplicate_of_the_relay_shares_the_whole_chain_but_the_relay(demo: Scenario) -> None:
    audit = independence(dress(demo.plant, duplicate_relay()))
    assert items(audit, "L1", primary=False) == {
        ("channel", "L1/channel 1"),
        ("coil", "Alder.L1.CB/coil 1"),
        ("coil", "Birch.D1.CB1/coil 1"),
        ("coil", "Birch.D1.CB2/coil 1"),
        ("ct_core", "Alder.L1.CTb/core 1"),
        ("ct_core", "Birch.D1.CTb1/core 1"),
        ("ct_core", "Birch.D1.CTc2/core 1"),
        ("dc", "Alder/DC 1"),
        ("dc", "Birch/DC 1"),
        ("vt_winding", "Alder.L1.VT/winding 1"),
        ("vt_winding", "Birch.L1.VT/winding 1"),
    }
    assert ("lockout", "Alder/Alder.B1/86 1") in items(audit, "Alder.B1")
    assert not any(s.item.kind == "relay" for s in audit.shared)
    assert not any(audit.fully_duplicated(e) for e in audit.protects)


def second(**changes: Any) -> Policy:
    """A duplicate of the chain with one thing of the second set taken from the first."""
    policy = duplicate_chain()
    return replace(policy, sets=(policy.sets[0], replace(policy.sets[1], **changes)))


@pytest.mark.parametrize(
    ("policy", "element", "shared"),
    [
        (second(core="1"), "L1", {"ct_core"}),
        (second(winding="1"), "L1", {"vt_winding"}),
        (second(channel="1"), "L1", {"channel"}),
        (second(coil="1"), "L1", {"coil", "dc"}),  # the coil brings its supply
        (second(lockout="1"), "Alder.B1", {"lockout", "dc", "coil"}),  # it hangs on one supply, and trips both coils
        (replace(duplicate_chain(), coil_dc=(("1", "1"), ("2", "1"))), "L1", {"dc"}),  # two coils on one supply
        (second(), "L1", set()),
    ],
    ids=["core", "winding", "channel", "coil", "lockout", "coil supply", "nothing"],
)
def test_one_thing_shared_is_the_one_found(policy: Policy, element: str, shared: set[str]) -> None:
    audit = independence(dress(two_stations(), policy))
    assert {kind for kind, _ in items(audit, element, primary=False)} == shared
    assert audit.fully_duplicated(element) == (not shared)
    if "lockout" in shared:  # of two coils behind one lockout relay neither stops both sets
        stops = {s.item.name for s in audit.of(element) if s.stops and not s.item.primary}
        assert stops == {"Alder/Alder.B1/86 1", "Alder/DC 1"}


def test_a_common_cause_across_both_chains_is_found_and_one_within_a_chain_is_not() -> None:
    lost, open_ = FailureMode.LOST, FailureMode.OPEN
    both = CommonCause("flood", (Ask("Alder/DC 1", lost), Ask("Alder/DC 2", lost)), 1e-5)
    mixed = CommonCause("fire", (Ask("Alder/DC 1", lost), Ask("Alder.L1.CTb/core 2", open_)), 1e-5)
    within = CommonCause("mud", (Ask("Alder/DC 1", lost), Ask("Alder.L1.CTb/core 1", open_)), 1e-5)
    data = FailureData(common_causes=(both, mixed, within))
    audit = independence(dress(two_stations(), duplicate_chain(), data))
    assert items(audit, "L1", primary=False) == {("common_cause", "flood"), ("common_cause", "fire")}
    assert {s.item.name: s.stops for s in audit.of("L1") if not s.item.primary} == {
        "flood": frozenset({"Alder.L1.CB"}),
        "fire": frozenset({"Alder.L1.CB"}),
    }


def test_what_is_said_to_stop_both_sets_stops_them_in_the_engine() -> None:
    """Each shared component failed in its first mode: main protection opens none of the breakers it stops."""
    plant = two_stations()
    scheme = dress(plant, duplicate_relay())
    program = compile_scheme(plant, scheme)
    known = {q.name for q in program.questions}
    tried = 0
    for element in ("L1", "Alder.B1", "F1", "G1"):
        case = bind(program, Location(element), LogicalSensing())
        main = {o.breaker for o in run_event(case, FixedAnswers(program)).outcome.openings if o.role <= Role.MAIN_TIMED}
        for s in independence(scheme, [element]).shared:
            if s.item.name not in scheme.component:
                continue
            question = f"{s.item.name}: {MODES[scheme.component[s.item.name].kind][0]}"
            if question in known and s.stops & main:
                run = run_event(case, FixedAnswers(program, [question]))
                opened = {o.breaker for o in run.outcome.openings if o.role <= Role.MAIN_TIMED}
                assert not opened & s.stops, (element, s.item)
                tried += 1
    assert tried > 15


def test_one_set_is_nothing_to_compare_and_sections_find_their_elements() -> None:
    plant = two_stations()
    alone = independence(dress(plant, single_set()))
    assert (alone.shared, alone.pairs) == ((), ())
    assert set(alone.alone) == set(alone.protects)
    assert not alone.fully_duplicated("L1")
    twice = independence(dress(plant, duplicate_relay()))
    conductor = next(s for s in sorted(twice.protects["L1"]) if s.startswith("Alder.L1"))
    assert {s.element for s in twice.at(conductor)} >= {"L1"}
    assert len(twice.table()) == len(twice.shared)
    with pytest.raises(InputError, match="did you mean 'L1'"):
        twice.of("L11")
    with pytest.raises(InputError, match="main protection"):
        independence(dress(plant, single_set()), ["nowhere"])
