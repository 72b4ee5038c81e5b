"""Exceptions for one bay or one breaker: a second DC supply where the rest of the station has one."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from schemesim.errors import InputError, nearest
from schemesim.plant.layouts import Bay, breaker_and_a_half, generator, line, single_bus
from schemesim.plant.model import Plant, PlantBuilder
from schemesim.scenario.files import load_scenario, save_scenario, scenario_from_text, scenario_text
from schemesim.scenario.model import Scenario
from schemesim.scenario.relay_schedule import relay_schedule
from schemesim.scheme.dress import dress
from schemesim.scheme.model import Scheme
from schemesim.scheme.policy import (
    BreakerFailurePolicy,
    LocalBackup,
    Policy,
    ProtectionSet,
    duplicate_chain,
    single_set,
)
from schemesim.study.edits import Recipe, addition
from tests.rules.small import chain, opened, play

SETS = duplicate_chain().sets
ONE = duplicate_chain(
    name="one battery",
    sets=(SETS[0], replace(SETS[1], dc="1")),
    coil_dc=(("1", "1"), ("2", "1")),
)
TWO = duplicate_chain(name="two batteries")
LOST = "Birch/DC 1: lost"


def asks(scheme: Scheme, block: str) -> set[str]:
    """What keeps a gate from leaving."""
    return {a.component for a in scheme.block[block].unless}  # type: ignore[union-attr]  # it is a gate


def test_a_second_battery_for_one_end_of_a_line() -> None:
    plant = chain()
    scheme = dress(plant, ONE, exceptions={"Birch/L1": TWO})
    assert {c for c in scheme.component if "/DC " in c} == {"Alder/DC 1", "Birch/DC 1", "Birch/DC 2", "Cedar/DC 1"}
    assert "Birch/DC 2" in asks(scheme, "Birch.L1.CB/coil 2 energised")
    assert "Birch/DC 1" in asks(scheme, "Birch.L1.CB/coil 1 energised")
    assert "Birch/DC 1" in asks(scheme, "Birch.L2.CB/coil 2 energised")
    assert "Alder/DC 1" in asks(scheme, "Alder.L1.CB/coil 2 energised")
    assert "Birch/DC 2" in asks(scheme, "Birch/L1/2 21-1 trip: in time")
    assert "Alder/DC 1" in asks(scheme, "Alder/L1/2 21-1 trip: in time")


def test_with_it_the_end_trips_though_the_first_is_lost() -> None:
    plant = chain()
    before = opened(play(plant, dress(plant, ONE), "L1", LOST))
    after = opened(play(plant, dress(plant, ONE, exceptions={"Birch/L1": TWO}), "L1", LOST))
    assert "Birch.L1.CB" not in before
    assert after["Birch.L1.CB"] < 100_000
    assert "Birch.L2.CB" not in after


def test_a_bay_of_a_unit_is_the_unit_with_its_breaker_and_its_own_trip() -> None:
    plant = chain()
    scheme = dress(plant, ONE, exceptions={"Alder/G1": TWO})
    for block in ("Alder.G1.CB/coil 2 energised", "G1.unit/coil 2 energised", "Alder/G1/2 87G trip: in time"):
        assert "Alder/DC 2" in asks(scheme, block), block
    assert "Alder/DC 1" in asks(scheme, "Alder.L1.CB/coil 2 energised")


def test_a_breaker_says_what_feeds_its_coils() -> None:
    plant = chain()
    scheme = dress(plant, ONE, exceptions={"Birch.L1.CB": TWO})
    assert "Birch/DC 2" in asks(scheme, "Birch.L1.CB/coil 2 energised")
    assert "Birch/DC 1" in asks(scheme, "Birch.L2.CB/coil 2 energised")
    assert "Birch/DC 1" in asks(scheme, "Birch/L1/2 21-1 trip: in time")


def test_a_breakers_exception_wins_over_its_bays() -> None:
    third = replace(TWO, name="third", coil_dc=(("1", "1"), ("2", "3")))
    scheme = dress(chain(), ONE, exceptions={"Birch/L1": TWO, "Birch.L1.CB": third})
    assert "Birch/DC 3" in asks(scheme, "Birch.L1.CB/coil 2 energised")
    assert "Birch/DC 2" in asks(scheme, "Birch/L1/2 21-1 trip: in time")


def test_breaker_failure_of_a_bay_follows_its_policy() -> None:
    plant = chain()
    without = replace(ONE, breaker_failure=None)
    scheme = dress(plant, ONE, exceptions={"Birch/L1": without})
    relays = {c for c in scheme.component if c.endswith("/BF relay")}
    every = {f"{name}/BF relay" for name in plant.breakers}
    assert relays == every - {"Birch.L1.CB/BF relay"}


def test_bays_are_as_one_exception_where_all_ends_have_it() -> None:
    plant = chain()
    other = replace(ONE, sets=(ONE.sets[0], replace(ONE.sets[1], core="1")))
    assert dress(plant, ONE, exceptions={"Alder/L1": other, "Birch/L1": other}) == dress(
        plant, ONE, exceptions={"L1": other}
    )


@pytest.mark.parametrize(
    ("name", "policy", "expected"),
    [
        ("Birch.L1", TWO, "did you mean 'Birch/L1'?"),
        ("Cedar/L1", TWO, "a bay (station/element)"),
        ("Birch/Birch.B1", TWO, "did you mean 'Birch.B1'?"),
        ("Birch/L1", replace(TWO, echo=True), "echo of policy 'two batteries'"),
        ("Birch/L1", single_set(), "label, line or channel of the sets of policy 'single set'"),
    ],
)
def test_what_a_bay_cannot_be_or_have(name: str, policy: Policy, expected: str) -> None:
    with pytest.raises(InputError) as caught:
        dress(chain(), ONE, exceptions={name: policy})
    assert len(caught.value.problems) == 1
    assert expected in str(caught.value)


def diameter() -> Plant:
    """Two lines on one diameter, whose middle breaker belongs to both."""
    b = PlantBuilder()
    for n, far in enumerate(("Elm", "Fir"), start=1):
        line(b, f"L{n}", 50)
        generator(b, f"G{n}", station=far)
        single_bus(b, far, [Bay(f"G{n}", f"G{n}"), Bay(f"L{n}", f"L{n}", at=0)])
    breaker_and_a_half(b, "Dale", [Bay("L1", "L1", at=1), Bay("L2", "L2", at=1)])
    return b.build()


def test_a_breaker_between_two_bays_needs_them_to_agree_or_an_exception_of_its_own() -> None:
    plant = diameter()
    third = replace(TWO, name="third", coil_dc=(("1", "1"), ("2", "3")))
    with pytest.raises(InputError) as caught:
        dress(plant, ONE, exceptions={"Dale/L1": TWO, "Dale/L2": third})
    first, second = (str(p) for p in caught.value.problems)
    assert "'Dale.D1.CB2'" in first
    assert "exception 'Dale/L1'" in first + second
    assert "'Dale/L2'" in first + second
    both = dress(plant, ONE, exceptions={"Dale/L1": TWO, "Dale/L2": third, "Dale.D1.CB2": third})
    assert "Dale/DC 3" in asks(both, "Dale.D1.CB2/coil 2 energised")


def test_a_clash_is_told_once_for_each_coil_with_who_says_what() -> None:
    with pytest.raises(InputError) as caught:
        dress(chain(), ONE, exceptions={"L1": TWO})
    assert sorted(p.subject for p in caught.value.problems) == ["coil 2 of 'Alder.L1.CB'", "coil 2 of 'Birch.L1.CB'"]
    for p in caught.value.problems:
        assert "DC '2' by 'L1'" in p.expectation
        assert ".B1' and" in p.expectation
        assert "exception for the breaker or for its bay" in p.tip


def test_an_addition_for_one_bay() -> None:
    more = Recipe(chain(), ONE).edited(replace(addition("second DC"), elements=("Birch/L1",)))
    assert more.exceptions["Birch/L1"].sets[1].dc == "2"
    assert "Birch/DC 2" in asks(more.scheme(), "Birch.L1.CB/coil 2 energised")
    other = replace(TWO, name="of the line", coil_dc=ONE.coil_dc, sets=ONE.sets)
    again = Recipe(chain(), ONE, exceptions={"L1": other}).edited(
        replace(addition("second DC"), elements=("Birch/L1",))
    )
    assert again.exceptions["Birch/L1"].name == "of the line"


def test_a_relay_schedule_has_no_bays() -> None:
    with pytest.raises(InputError, match="Birch/L1"):
        relay_schedule(chain(), ONE, {"Birch/L1": TWO})


TEXT = """
schemesim: 1
plant:
  stations: [{name: Alder, layout: single_bus, bays: [G1, F1]}]
  generators: [{name: G1, station: Alder}]
  feeders: [{name: F1, station: Alder, load_mw: 20}]
policies:
  usual: {base: duplicate_chain, sets: [{label: "1"}, {label: "2", coil: "2"}], coil_dc: {"1": "1", "2": "1"}}
  second battery:
    base: usual
    sets: [{label: "1"}, {label: "2", coil: "2", dc: "2"}]
    coil_dc: {"1": "1", "2": "2"}
policy: usual
exceptions: {KEY: second battery}
"""


def test_a_bay_in_a_file() -> None:
    found = scenario_from_text(TEXT.replace("KEY", "Alder/F1"))
    assert "Alder/DC 2" in asks(found.scheme(), "Alder.F1.CB/coil 2 energised")
    assert scenario_from_text(scenario_text(found)) == found


@pytest.mark.parametrize("key", ["Birch/F1", "Alder/F2", "Alder/Alder.B1"])
def test_a_bay_that_is_not_there_in_a_file(key: str) -> None:
    with pytest.raises(InputError) as caught:
        scenario_from_text(TEXT.replace("KEY", key))
    (problem,) = caught.value.problems
    assert (problem.line, problem.value) == (14, key)


def test_a_clash_in_a_file_points_at_its_exceptions() -> None:
    with pytest.raises(InputError) as caught:
        scenario_from_text(TEXT.replace("KEY", "F1"))
    assert [(p.line, p.path) for p in caught.value.problems] == [(14, "exceptions")]


def clashing() -> Scenario:
    """Exceptions that go with one policy and not with the other."""
    found = scenario_from_text(TEXT.replace("KEY", "Alder/F1"))
    third = replace(found.policies["second battery"], name="third", coil_dc=(("1", "3"), ("2", "2")))
    return replace(found, policies={**found.policies, "third": third}, exceptions={"F1": "usual"}, document=None)


def test_what_is_saved_can_be_loaded(tmp_path: Path) -> None:
    scenario = clashing()
    with pytest.raises(InputError, match="coil"):
        scenario.scheme("third")
    save_scenario(scenario, tmp_path / "a.yaml")
    assert load_scenario(tmp_path / "a.yaml") == scenario


def test_what_could_not_be_loaded_is_not_saved(tmp_path: Path) -> None:
    scenario = replace(clashing(), policy="third")
    with pytest.raises(InputError, match="coil"):
        save_scenario(scenario, tmp_path / "a.yaml")
    assert not (tmp_path / "a.yaml").exists()


def test_a_policy_not_in_use_still_has_to_fit_the_plant() -> None:
    poor = TEXT.replace("bays: [G1, F1]", "bays: [G1, F1], cores: ['1', '3']").replace(
        "policy: usual", "  strong: {sets: [{core: '7'}]}\npolicy: usual"
    )
    with pytest.raises(InputError) as caught:
        scenario_from_text(poor.replace("KEY", "F1"))
    assert any("core '7'" in str(p) for p in caught.value.problems)


@pytest.mark.parametrize("item", ["label", "core", "winding", "dc", "coil", "channel", "lockout"])
@pytest.mark.parametrize("value", ["", " 1", 2])
def test_a_label_is_text(item: str, value: object) -> None:
    with pytest.raises(InputError, match=f"{item} of ProtectionSet: got .*, expected a label"):
        ProtectionSet(**{item: value})  # type: ignore[arg-type]  # as a user may


def test_labels_of_back_up_and_coils_are_text() -> None:
    with pytest.raises(InputError, match="dc of LocalBackup"):
        LocalBackup(dc="")
    with pytest.raises(InputError, match="retrip_coil of BreakerFailurePolicy"):
        BreakerFailurePolicy(retrip_coil="")
    with pytest.raises(InputError, match="DC in coil_dc of policy 'p': got ''"):
        Policy(name="p", coil_dc=(("1", ""),))


def test_coil_dc_may_be_a_mapping() -> None:
    assert single_set(coil_dc={"1": "1"}) == single_set(coil_dc=(("1", "1"),))


def test_line_side_is_told_by_its_other_name() -> None:
    b = PlantBuilder()
    line(b, "L1", 50)
    with pytest.raises(InputError, match="the line side is the circuit side"):
        single_bus(b, "Alder", [Bay("L1", "L1", ct="line_side")])  # type: ignore[arg-type]  # as a user may


def test_a_hint_names_a_neighbour_in_the_same_bay_first() -> None:
    names = [f"Dunmore.L{n}.{what}" for n in (5, 6, 7, 8) for what in ("b", "c", "CB", "CTb")] + ["Dunmore.L4.CB"]
    assert nearest("Dunmore.L4.c", names) == "did you mean 'Dunmore.L4.CB'?"
    assert nearest("Dunmor.L5.c", names) == "did you mean 'Dunmore.L5.c'?"
    assert nearest("Dunmore/L4/relay 3", ["Dunmore/L5/relay 3", "Dunmore/L4/relay 1"]) == (
        "did you mean 'Dunmore/L4/relay 1'?"
    )
