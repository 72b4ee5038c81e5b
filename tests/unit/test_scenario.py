"""Scenario files: what a file says is what the model holds, and saving and loading lose nothing."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Callable
from dataclasses import fields, is_dataclass, replace
from pathlib import Path

import pytest

from schemesim.engine.outcome import Status
from schemesim.engine.sensing import NoFault
from schemesim.errors import InputError
from schemesim.plant.model import Location, SectionKind
from schemesim.scenario import Scenario, load_scenario, save_scenario, scenario_from_text, scenario_text
from schemesim.scenario.names import BUILT_IN
from schemesim.scenario.parts import PolicyIn, part_model
from schemesim.scenario.reading import read_text
from schemesim.scenario.schema import ScenarioIn
from schemesim.scheme.build import BreakerTimes
from schemesim.scheme.delays import Fixed
from schemesim.scheme.distributions import Empirical, LogNormal, Normal, Triangular, Uniform
from schemesim.scheme.failure_data import ORDERS_OF_MAGNITUDE
from schemesim.scheme.model import Ask, CommonCause, ComponentKind, FailureMode
from schemesim.scheme.policy import LocalBackup, Policy, PolicyTimes, Reaches, Start, single_set

DATA = Path(__file__).resolve().parents[1] / "data"

ONE_BUS = """
schemesim: 1
plant:
  stations: [{name: Ash, layout: single_bus, bays: [G, F]}]
  generators: [{name: G, station: Ash}]
  feeders: [{name: F, station: Ash, load_mw: 5}]
"""


@pytest.fixture(scope="module")
def small() -> Scenario:
    return load_scenario(DATA / "small.yaml")


def test_plant_of_layouts(small: Scenario) -> None:
    plant = small.plant
    assert plant.breakers == (
        "Birch.G1.CB", "Birch.L1.CB", "Cedar.BC.CB", "Cedar.F1.CB", "Cedar.L.CB", "Cedar.N1.CB",
    )  # fmt: skip
    assert plant.section["L1"].length == 30
    assert plant.section["L1"].kind is SectionKind.LINE
    assert {d.name for d in plant.devices if d.kind == "ct" and d.name.startswith("Cedar.L.")} == {
        "Cedar.L.CTb",
        "Cedar.L.CTc",
    }
    assert plant.device["Cedar.F1.DS2"].closed
    assert not plant.device["Cedar.F1.DS1"].closed
    assert plant.device["Cedar.F1.CTc"].cores == ("1", "2", "3")
    assert plant.source["North"].section == "N1"
    assert plant.dispatches[0].out == frozenset({"North"})


def test_policies_start_from_their_base(small: Scenario) -> None:
    plain, strong = small.policies["plain"], small.policies["strong"]
    assert plain.name == "plain"
    assert plain.sets == single_set().sets
    assert plain.times.breaker.interrupting == Fixed(60_000)  # 3 cycles of 50 Hz
    assert plain.times.breaker.auxiliary == Fixed(4_000)
    assert plain.times.breaker.late_by == single_set().times.breaker.late_by
    assert plain.times.distance.operate == Triangular(15_000, 20_000, 35_000)
    assert plain.times.distance.reset == Uniform(10_000, 20_000)
    assert len(strong.sets) == 2
    assert strong.local_backup is not None
    assert strong.local_backup.delay == Fixed(250_000)
    assert strong.local_backup.bus_delay == LocalBackup().bus_delay
    bf = strong.breaker_failure
    assert bf is not None
    assert bf.start is Start.INITIATE_AND_CURRENT
    assert bf.times.timer == Fixed(140_000)
    assert bf.times.retrip is None
    assert bf.times.detector_reset == Empirical((15_000, 18_000, 25_000))
    assert strong.reaches.zone_2_delay == Normal(350_000, 5_000, 330_000, 370_000)
    assert strong.reaches.zone_3_delay == Policy().reaches.zone_3_delay
    assert small.policy == "strong"
    assert small.exceptions == {"F1": "plain"}


def test_failure_data_stands_on_the_defaults(small: Scenario) -> None:
    data = small.data
    relay = data.modes[ComponentKind.RELAY]
    assert relay[FailureMode.FAILURE_TO_OPERATE] == 0.002
    assert relay[FailureMode.UNWANTED_OPERATION] == ORDERS_OF_MAGNITUDE[ComponentKind.RELAY][
        FailureMode.UNWANTED_OPERATION
    ]
    assert data.modes[ComponentKind.DC] == ORDERS_OF_MAGNITUDE[ComponentKind.DC]
    assert data.no_fault_per_yr == {ComponentKind.RELAY: 0.002}
    assert data.component("Birch/DC 1", ComponentKind.DC).probability(FailureMode.LOST) == 0.0001
    assert data.component("Cedar/DC 1", ComponentKind.DC).probability(FailureMode.LOST) == 5e-5
    assert data.component("Cedar/L1/relay 1", ComponentKind.RELAY).no_fault_per_yr == 0.01
    assert data.relay_beta == 0.05
    lost = FailureMode.LOST
    assert data.common_causes == (CommonCause("flood", (Ask("Birch/DC 1", lost), Ask("Birch/DC 2", lost)), 1e-5),)
    scheme = small.scheme()
    assert scheme.out_of_service == frozenset({"L1/channel 2"})
    assert scheme.component["Birch/L1/relay 1"].probability(FailureMode.FAILURE_TO_OPERATE) == pytest.approx(
        0.002 * 0.95
    )


def test_frequencies_are_spread_over_positions(small: Scenario) -> None:
    rates = small.frequencies
    assert rates[Location("L1", 0.2)] == rates[Location("L1", 0.8)] == pytest.approx(0.01 * 30 / 2)
    assert rates[Location("Birch.B1")] == 0.02
    assert rates[Location("F1")] == rates[Location("N1")] == 0.5
    assert rates[Location("G1")] == 0.1
    assert rates[Location("Cedar.F1.c")] == 0
    assert set(rates) == set(small.plant.locations((0.2, 0.8)))


def test_positions_of_their_own_replace_the_line(small: Scenario) -> None:
    text = scenario_text(small).replace("  G1: 0.1\n", "  G1: 0.1\n    L1@0.35: 0.4\n").replace(
        "{G1: 0.1}", "{G1: 0.1, L1@0.35: 0.4}"
    )
    rates = scenario_from_text(text).frequencies
    assert rates[Location("L1", 0.35)] == 0.4
    assert rates[Location("L1", 0.2)] == rates[Location("L1", 0.8)] == 0


def test_limits_and_settings(small: Scenario) -> None:
    assert small.limit_us(Location("L1")) == 120_000
    assert small.limit_us(Location("F1")) == 150_000  # its kV is not stated
    s = small.study
    assert (s.epsilon, s.horizon_us, s.positions, s.dispatch) == (1e-4, 5_000_000, (0.2, 0.8), "no north")
    assert (s.seed, s.trials, s.restore_h) == (7, 200, 1.5)


def test_listed_runs(small: Scenario) -> None:
    first, second, third = (small.listed(n) for n in ("relay fails", "flooded", "nothing wrong"))
    assert first.event == Location("L1", 0.5)
    assert first.questions == ("Birch/L1/relay 1: failure_to_operate",)
    assert second.questions == ("common cause flood",)
    assert second.out_of_service == frozenset({"Cedar/DC 1"})
    assert third.event == NoFault("Cedar/L1/relay 1")
    assert third.policy == "plain"
    assert small.play(first).outcome.status is Status.CLEARED
    with pytest.raises(InputError, match="did you mean 'flooded'"):
        small.listed("floded")


def test_a_built_in_policy_needs_no_definition() -> None:
    for name, policy in BUILT_IN.items():
        scenario = scenario_from_text(f"{ONE_BUS}policy: {name}\n")
        assert scenario.policies == {name: replace(policy, name=name)}


def test_the_only_policy_is_in_use() -> None:
    assert scenario_from_text(ONE_BUS + "policies: {a: {base: single_set}}\n").policy == "a"
    with pytest.raises(InputError, match="the policy in use"):
        scenario_from_text(ONE_BUS)


def test_a_policy_may_start_from_another_of_the_file() -> None:
    text = "policies: {b: {base: a, votes: 2}, a: {sets: [{}, {label: '2'}], echo: true}}\npolicy: b\n"
    policy = scenario_from_text(ONE_BUS + text).policies["b"]
    assert (policy.votes, len(policy.sets), policy.echo, policy.name) == (2, 2, True, "b")


@pytest.mark.parametrize(
    ("said", "expected"),
    [
        ("12.5", Fixed(12_500)),
        ("1.25e1", Fixed(12_500)),
        ("{uniform: [10, 20.5]}", Uniform(10_000, 20_500)),
        ("{uniform: {low: 10, high: 20}}", Uniform(10_000, 20_000)),
        ("{triangular: [1, 2, 3]}", Triangular(1_000, 2_000, 3_000)),
        ("{lognormal: {median: 20, sigma: 0.5, low: 5, high: 80}}", LogNormal(20_000, 0.5, 5_000, 80_000)),
        ("{normal: {mean: 20, sd: 1.1, low: 15, high: 25}}", Normal(20_000, 1_100, 15_000, 25_000)),
        ("{sample: [3, 1, 2]}", Empirical((1_000, 2_000, 3_000))),
    ],
)
def test_times(said: str, expected: object) -> None:
    text = f"{ONE_BUS}policies: {{a: {{base: single_set, times: {{lockout_ms: {said}}}}}}}\n"
    scenario = scenario_from_text(text)
    assert scenario.policies["a"].times.lockout == expected
    in_full = replace(scenario, document=None)
    assert scenario_from_text(scenario_text(in_full)) == scenario


def test_cycles_of_random_times() -> None:
    text = f"frequency_hz: 50{ONE_BUS}policies: {{a: {{times: {{lockout_cycles: {{uniform: [0.5, 1]}}}}}}}}\n"
    assert scenario_from_text(text).policies["a"].times.lockout == Uniform(10_000, 20_000)


def test_loading_what_was_saved_gives_the_same(small: Scenario, tmp_path: Path) -> None:
    file = tmp_path / "saved.yaml"
    save_scenario(small, file)
    again = load_scenario(file)
    assert again == small
    first = file.read_bytes()
    save_scenario(again, file)
    assert file.read_bytes() == first
    assert "layout: double_bus" in first.decode()


def test_a_scenario_in_full_gives_the_same(small: Scenario) -> None:
    in_full = replace(small, document=None)
    text = scenario_text(in_full)
    again = scenario_from_text(text)
    assert again == small
    assert scenario_text(replace(again, document=None)) == text
    assert "layout" not in text


@pytest.mark.parametrize(
    "change",
    [
        lambda s: replace(s, policy="plain"),
        lambda s: replace(s, data=replace(s.data, relay_beta=0.1)),
        lambda s: replace(s, study=replace(s.study, seed=8)),
        lambda s: replace(s, runs=s.runs[:1]),
        lambda s: replace(s, frequencies={where: 2 * rate for where, rate in s.frequencies.items()}),
    ],
)
def test_a_changed_scenario_is_saved_as_changed(small: Scenario, change: Callable[[Scenario], Scenario]) -> None:
    changed = change(small)
    assert changed != small
    assert scenario_from_text(scenario_text(changed)) == changed


def test_nothing_is_written_when_saving_fails(small: Scenario, tmp_path: Path) -> None:
    from fractions import Fraction

    data = replace(small.data, common_causes=(CommonCause("x", (), Fraction(1, 3)),))
    file = tmp_path / "kept.yaml"
    file.write_text("kept", encoding="utf-8")
    with pytest.raises(InputError, match="fraction"):
        save_scenario(replace(small, data=data), file)
    assert file.read_text(encoding="utf-8") == "kept"
    assert list(tmp_path.iterdir()) == [file]


def test_imported_lists_become_part_of_the_scenario(tmp_path: Path) -> None:
    (tmp_path / "data").mkdir()
    (tmp_path / "data" / "feeders.csv").write_text(
        "\ufeffname, station,load_mw\r\nF,Ash,5\r\n\r\n1,Ash,2.5\r\n", encoding="utf-8"
    )
    text = """
schemesim: 1
plant:
  imports: {feeders: data/feeders.csv}
  stations: [{name: Ash, layout: single_bus, bays: [G, F, "1"]}]
  generators: [{name: G, station: Ash}]
policy: single_set
"""
    (tmp_path / "s.yaml").write_text(text, encoding="utf-8")
    scenario = load_scenario(tmp_path / "s.yaml")
    assert scenario.plant.section["F"].load_mw == 5
    assert scenario.plant.section["1"].load_mw == 2.5
    saved = scenario_text(scenario)
    assert "imports" not in saved
    assert scenario_from_text(saved) == scenario
    with pytest.raises(InputError, match="stands in no folder"):
        scenario_from_text(text)


def test_out_of_service_and_failures_follow_the_policy(small: Scenario) -> None:
    strong = small.scheme("strong", frozenset({"Birch/L1/relay 2"}))
    assert strong.out_of_service == frozenset({"L1/channel 2", "Birch/L1/relay 2"})
    assert small.scheme("plain", frozenset({"Birch/L1/relay 2"})).out_of_service == frozenset()
    assert small.scheme("plain") is small.scheme("plain")


def test_every_field_of_a_policy_is_a_key() -> None:
    """A new field of a policy is read and saved without a further line here, or this fails."""

    def names(cls: type) -> set[str]:
        return {f.name for f in fields(cls) if is_dataclass(cls)}

    keys = {k.removesuffix("_ms").removesuffix("_cycles") for k in PolicyIn.model_fields}
    assert keys == names(Policy) - {"name"} | {"base"}
    parts: tuple[type, ...] = (Reaches, PolicyTimes, BreakerTimes)
    for cls in parts:
        model = part_model(cls)
        assert {k.removesuffix("_ms").removesuffix("_cycles") for k in model.model_fields} == names(cls)


def test_comments_and_order_of_keys_change_nothing(small: Scenario) -> None:
    lines = (DATA / "small.yaml").read_text(encoding="utf-8").splitlines()
    commented = "\n".join(f"{line}  # a comment" for line in lines)
    assert scenario_from_text(commented) == small


def test_the_description_of_the_format_holds() -> None:
    """Every block of the description that begins with a key of the file fits the schema."""
    text = (DATA.parents[1] / "scenarios" / "FORMAT.md").read_text(encoding="utf-8")
    found = re.findall(r"\n\n((?:    \S.*\n(?:    .*\n)*))", text)
    blocks = [textwrap.dedent(block) for block in found if re.match(r"    [a-z_]+:", block)]
    keys: set[str] = set()
    for block in blocks:
        data = read_text(block, "FORMAT.md").data
        assert isinstance(data, dict)
        keys |= set(data)
        plant = data.get("plant", {})
        assert isinstance(plant, dict)
        plant = {k: v for k, v in plant.items() if k != "imports"}
        ScenarioIn.model_validate({"schemesim": 1, **data, "plant": plant})
    assert keys == {
        "plant", "policies", "policy", "exceptions", "failure_data", "out_of_service", "fault_frequencies", "limits",
        "study", "runs", "money", "maintenance",
    }  # fmt: skip
