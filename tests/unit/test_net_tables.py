"""A plant from plain tables, and impedances in scenario files."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest

from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.plant.net_case import FaultType, ShuntFault
from schemesim.plant.net_data import LineImpedance, TransformerImpedance
from schemesim.plant.net_faults import network_of
from schemesim.plant.net_tables import plant_of_tables
from schemesim.scenario import load_scenario, scenario_from_text
from schemesim.scenario.document import document_of
from schemesim.scenario.writing import write_text

BUSES = pd.DataFrame({"bus": [1, 2, 3], "kv": [132.0, 132.0, 33.0]})
LINES = pd.DataFrame({"from_bus": [1, 1], "to_bus": [2, 2], "r_ohm": [1.0, 1.0], "x_ohm": [10.0, 10.0]})
SOURCES = pd.DataFrame({"bus": [1], "r_ohm": [0.0], "x_ohm": [8.0], "r0_ohm": [0.0], "x0_ohm": [8.0]})
TRANSFORMERS = pd.DataFrame(
    {"from_bus": [2], "to_bus": [3], "mva": [40.0], "from_kv": [132.0], "to_kv": [33.0], "r_pu": [0.0], "x_pu": [0.1]}
)
AREA_A = Path(__file__).resolve().parents[2] / "scenarios" / "rts96_area_a.yaml"


def test_tables_make_a_plant_that_can_be_solved() -> None:
    loads = pd.DataFrame({"bus": [3], "mw": [20.0]})
    plant = plant_of_tables(BUSES, LINES, SOURCES, TRANSFORMERS, loads, zero_ratio=3.0)
    assert {s.name for s in plant.sections if s.kind == "line"} == {"L1", "L2"}
    assert plant.section["L1"].impedance == LineImpedance(r_ohm=1, x_ohm=10, r0_ohm=3, x0_ohm=30)
    network = network_of(plant)
    found = network.at(ShuntFault(Location("Bus2.L1.J"), FaultType.LG)).solve().fault
    z = 2 * complex(0.5, 5 + 8) + complex(1.5, 15 + 8)  # both lines in parallel behind the source, by hand
    assert abs(found[0]) == pytest.approx(132e3 / 3**0.5 / abs(z))


def test_every_mistake_of_tables_is_told_at_once() -> None:
    wrong = LINES.rename(columns={"x_ohm": "x_ohms"})
    with pytest.raises(InputError) as error:
        plant_of_tables(BUSES, wrong, SOURCES.drop(columns="bus"))
    assert [str(p.value) for p in error.value.problems] == ["x_ohms", "none", "none"]
    with pytest.raises(InputError, match="a bus of the table of buses"):
        plant_of_tables(BUSES, LINES.assign(to_bus=7), SOURCES)
    with pytest.raises(InputError, match="a number"):
        plant_of_tables(BUSES, LINES.assign(r_ohm="much"), SOURCES)


def test_area_a_carries_the_published_impedances() -> None:
    """IEEE RTS-96 branch table, per unit of 100 MVA: A2 0.055 + j0.211 at 138 kV, A30 0.014 + j0.105 at 230 kV, A7
    0.002 + j0.084; zero sequence assumed, three times the positive."""
    plant = load_scenario(AREA_A).plant
    for name, kv, r, x in (("A2", 138, 0.055, 0.211), ("A30", 230, 0.014, 0.105)):
        z = plant.section[name].impedance
        assert isinstance(z, LineImpedance)
        assert (z.r_ohm, z.x_ohm) == pytest.approx((r * kv**2 / 100, x * kv**2 / 100), rel=1e-6)
        assert z.z0 == pytest.approx(3 * z.z1, rel=1e-6)
    t = plant.section["A7"].impedance
    assert isinstance(t, TransformerImpedance)
    assert (t.r_pu, t.x_pu, t.kv) == ((0.002,), (0.084,), (138.0, 230.0))


def test_impedances_survive_saving_in_full() -> None:
    scenario = load_scenario(AREA_A)
    again = scenario_from_text(write_text(document_of(scenario)))
    assert again.plant == scenario.plant
    assert any(s.impedance is not None for s in again.plant.sections)


@pytest.mark.parametrize(
    ("text", "path", "said"),
    [
        ("lines: [{name: L11, r_ohm: 1, x_ohm: 2}]", "plant.impedances.lines[0].name", "did you mean 'L1'"),
        ("lines: [{name: L1, r_ohm: 0, x_ohm: 0}]", "", "an impedance that is not zero"),
        ("lines: [{name: L1, r_ohm: 1 ohm, x_ohm: 2}]", "plant.impedances.lines[0].r_ohm", "a number"),
        ("sources: [{name: N, x_ohm: 2}]", "plant.impedances.sources[0]", "r_ohm"),
    ],
)
def test_a_mistake_in_impedances_is_told_with_its_place(text: str, path: str, said: str) -> None:
    whole = f"""
schemesim: 1
policies: {{}}
policy: single_set
plant:
  lines: [{{name: L1, length: 10, kv: 132}}]
  infeeds: [{{name: N, section: A.B1}}]
  stations: [{{name: A, layout: single_bus, kv: 132, bays: [L1]}}]
  impedances:
    {text}
"""
    with pytest.raises(InputError) as error:
        scenario_from_text(whole)
    found = [p for p in error.value.problems if said in str(p)]
    assert found
    assert path in found[0].path
