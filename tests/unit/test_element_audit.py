"""What elements see against their settings, and margins of curves in series, on circuits worked out by hand."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from schemesim.engine.program import Program, compile_scheme
from schemesim.errors import InputError
from schemesim.plant.model import Location, Plant
from schemesim.plant.terminals import Terminal
from schemesim.scheme.conditions import Direction, Reach
from schemesim.scheme.curves import standard_curve
from schemesim.scheme.dress import dress
from schemesim.scheme.model import Ask, Block, Component, ComponentKind, FailureMode, Scheme, Sense
from schemesim.scheme.phasor_distance import Distance
from schemesim.scheme.phasor_elements import Element, Overcurrent
from schemesim.scheme.policy import duplicate_chain
from schemesim.scheme.settings import Setting, Settings
from schemesim.scheme.settings_grading import Seen, graded
from schemesim.scheme.settings_rules import settings_for
from schemesim.study.coordination import coordination
from schemesim.study.element_audit import ElementAudit, audit_elements
from tests.rules.hand import breaker, gate, sense, timer, trip
from tests.rules.small import chain
from tests.unit.electrical_plants import ladder, radial_units, with_impedances

FAR = Location("F", 1.0)


def over(ct: str, inner: str, pick_up_a: float) -> Overcurrent:
    return Overcurrent(terminals=(Terminal(ct, inner),), pick_up_a=pick_up_a)


def made(plant: Plant, blocks: list[Block], elements: dict[str, Element]) -> tuple[Program, Settings]:
    settings = Settings(tuple(Setting(name, element) for name, element in elements.items()))
    relay = Component("relay", ComponentKind.RELAY, ((FailureMode.UNWANTED_OPERATION, 0.01),))
    return compile_scheme(plant, Scheme((relay,), tuple(blocks))), settings


def out_of(end: str, *signals: str) -> list[Block]:
    return [trip(f"{end}.t", *signals), gate(f"{end}.coil", f"{end}.t"), breaker(f"{end}.CB", f"{end}.coil")]


@pytest.fixture(scope="module")
def weak() -> ElementAudit:
    """An element at F set to 4000 A. At the far end: 5000 A with two units, 3333 A with either or in state "low"."""
    blocks = [sense("50", Reach((Terminal("F.CT", "F"),), 10.0)), *out_of("F", "50")]
    program, settings = made(radial_units(), blocks, {"50": over("F.CT", "F", 4000.0)})
    return audit_elements(program, settings, faults=("lll",), locations=[FAR, Location("U1")])


def test_an_element_that_goes_blind_with_little_generation(weak: ElementAudit) -> None:
    """All, U1 out, U2 out, low (one unit is left: none is taken out). A fault in U1 draws nothing there."""
    (row,) = weak.rows
    assert (row.block, row.must, row.blind, row.must_not, row.over) == ("50", 4, 3, 0, 0)
    assert row.least is not None
    assert row.least.multiple == pytest.approx(1e5 / 30 / 4000, rel=1e-9)
    assert (row.least.fault, row.least.state) == ("F@1 lll", "all in service, U1.S out")
    assert weak.blind == (row,)
    assert weak.over_reaching == ()


def test_the_same_fault_between_two_phases_is_smaller() -> None:
    """√3/2 of 5000 A."""
    blocks = [sense("50", Reach((Terminal("F.CT", "F"),), 10.0)), *out_of("F", "50")]
    program, settings = made(radial_units(), blocks, {"50": over("F.CT", "F", 4000.0)})
    got = audit_elements(program, settings, faults=("ll",), locations=[FAR], dispatches=[None], infeeds=())
    (row,) = got.rows
    assert row.least is not None
    assert row.least.multiple == pytest.approx(1.25 * math.sqrt(3) / 2, rel=1e-9)
    assert (got.faults, got.states) == (1, 1)


def test_an_element_that_over_reaches_without_an_infeed() -> None:
    """Zone of j16 at A, meant for 30 km. On M at j5: j20 with the infeed, j15 without. On K at j5: j5."""
    zone = Distance(terminals=(Terminal("Ka.CT", "K"),), vt="A.VT", reach_ohm=16j)
    blocks = [sense("z", Reach((Terminal("Ka.CT", "K"),), 30.0)), *out_of("Ka", "z")]
    program, settings = made(ladder(), blocks, {"z": zone})
    places = [Location("K", 0.5), Location("M", 0.5)]
    got = audit_elements(program, settings, faults=("lll",), locations=places)
    (row,) = got.rows
    assert (row.must, row.blind, row.must_not, row.over) == (2, 0, 2, 1)  # with G out nothing feeds it
    assert row.least is not None
    assert row.least.multiple == pytest.approx(3.2, rel=1e-9)
    assert row.greatest is not None
    assert row.greatest.multiple == pytest.approx(16 / 15, rel=1e-9)
    assert (row.greatest.fault, row.greatest.state) == ("M lll", "all in service, GI out")
    assert got.over_reaching == (row,)


def test_what_acts_only_where_something_fails_is_left_out() -> None:
    zone = Distance(terminals=(Terminal("Ka.CT", "K"),), vt="A.VT", reach_ohm=8j)
    wide = replace(zone, reach_ohm=16j)
    over_reach = gate("over", "w.t", given=(Ask("relay", FailureMode.UNWANTED_OPERATION),))
    blocks = [
        sense("z", Reach((Terminal("Ka.CT", "K"),), 20.0)), sense("w", Reach((Terminal("Ka.CT", "K"),), 40.0)),
        timer("w.t", "w", 10), over_reach, *out_of("Ka", "z", "over"),
    ]  # fmt: skip
    program, settings = made(ladder(), blocks, {"z": zone, "w": wide})
    chosen = audit_elements(program, settings, locations=[Location("K")])
    assert [r.block for r in chosen.rows] == ["z"]
    named = audit_elements(program, settings, locations=[Location("K")], blocks=["w"])
    assert [r.block for r in named.rows] == ["w"]


def test_shares_of_a_differential_are_one_row_and_detectors_see_beside_them_only() -> None:
    plant = with_impedances(chain())
    scheme = dress(plant, duplicate_chain())
    program = compile_scheme(plant, scheme)
    settings = settings_for(plant, scheme)
    got = audit_elements(program, settings, faults=("lll",), locations=[Location("L1"), Location("Cedar.B1")])
    rows = {r.block: r for r in got.rows}
    assert "Birch/Birch.B1/1 87B" in rows
    assert not any(" sees " in name for name in rows)
    states = 3
    assert rows["Alder.L1.CB/50BF current"].must == states - 1  # with G1 out nothing feeds through it
    assert rows["Alder.L1.CB/50BF current"].must_not == 0
    line = rows["Alder/L1/1 87L"]
    assert (line.must, line.blind, line.over) == (states, 0, 0)
    assert rows["Alder/L1/1 21-1"].blind == 0
    assert got.blind == ()


def test_table_and_plot_of_an_audit(weak: ElementAudit) -> None:
    table = weak.table()
    assert list(table.columns[:4]) == ["block", "must", "blind", "least"]
    assert table.loc[0, "greatest_at"] == ""
    ax = weak.plot()
    assert [t.get_text() for t in ax.get_yticklabels()] == ["50"]
    assert "quantity ÷ setting" in ax.get_xlabel()
    assert "1 blind somewhere" in repr(weak)
    assert "<table" in weak._repr_html_()


def test_what_is_not_there_is_refused() -> None:
    blocks = [sense("50", Reach((Terminal("F.CT", "F"),), 10.0)), *out_of("F", "50")]
    program, settings = made(radial_units(), blocks, {"50": over("F.CT", "F", 4000.0)})
    with pytest.raises(InputError, match=r"U3\.S"):
        audit_elements(program, settings, infeeds=["U3.S"])
    with pytest.raises(InputError, match="51"):
        audit_elements(program, settings, blocks=["51"])
    with pytest.raises(InputError, match="51"):
        coordination(program, settings, [("50", "51")], [FAR])


# --- coordination ------------------------------------------------------------------------------


def curve_s(tms: float, multiple: float) -> float:
    """IEC A."""
    return tms * 0.14 / (math.pow(multiple, 0.02) - 1)


def series() -> tuple[Program, Settings]:
    """Curve A at Ma (TMS 0.1) in front of curve A at Ka (TMS 0.2), both set to 500 A; a definite one at I."""
    blocks = [
        replace(sense("front", Reach((Terminal("Ma.CT", "M"),), 25.0)), curve=standard_curve("IEC A", dial=0.1)),
        replace(sense("behind", Reach((Terminal("Ka.CT", "K"),), 50.0)), curve=standard_curve("IEC A", dial=0.2)),
        sense("definite", Reach((Terminal("I.CT", "I"),), 25.0, Direction.REVERSE), 20), timer("d.t", "definite", 400),
        *out_of("Ma", "front"), *out_of("Ka", "behind"), *out_of("I", "d.t"),
    ]  # fmt: skip
    elements: dict[str, Element] = {
        "front": over("Ma.CT", "M", 500.0), "behind": over("Ka.CT", "K", 500.0), "definite": over("I.CT", "I", 6000.0)
    }  # fmt: skip
    return made(ladder(), blocks, elements)


def test_margins_of_two_curves_and_a_definite_time() -> None:
    """At M's near end: 5000 A through K and from the infeed, 10,000 A into M. The definite one is set too high."""
    program, settings = series()
    pairs = [("front", "behind"), ("front", "definite")]
    got = coordination(program, settings, pairs, [Location("M", 0.0)], wanted_s=0.4)
    worst = got.worst("front", "behind")
    assert (worst.front_multiple, worst.behind_multiple) == pytest.approx((20.0, 10.0), rel=1e-9)
    assert (worst.front_s, worst.behind_s) == pytest.approx((curve_s(0.1, 20), curve_s(0.2, 10)), rel=1e-9)
    assert worst.margin_s == pytest.approx(0.3674, abs=5e-5)
    assert got.short == (worst,)
    assert got.worst("front", "definite").margin_s == math.inf
    lower = settings.changed("definite", pick_up_a=4000.0)
    definite = coordination(program, lower, pairs, [Location("M", 0.0)]).worst("front", "definite")
    assert definite.behind_s == pytest.approx(0.42)


def test_a_fault_that_only_the_one_behind_sees_has_no_margin() -> None:
    program, settings = series()
    blind = settings.changed("front", pick_up_a=20_000.0)
    got = coordination(program, blind, [("front", "behind")], [Location("M", 0.0)])
    assert got.worst("front", "behind").margin_s == -math.inf
    assert len(got.short) == 1


def test_plot_and_table_of_margins() -> None:
    program, settings = series()
    got = coordination(program, settings, [("front", "behind")], [Location("M", 0.0), Location("M", 1.0)])
    assert len(got.table()) == 2
    ax = got.plot()
    labels = [line.get_label() for line in ax.get_lines()]
    assert labels[:2] == ["behind", "front"]
    assert [t.get_text() for t in ax.texts] == [f"{got.margins[0].margin_s:.2f} s"]


def test_a_dial_graded_behind_another() -> None:
    """0.4 s behind the front curve at 10,000 A: dial (t_front + 0.4)/(0.14/(10^0.02 − 1))."""
    curve, choice = graded(standard_curve("IEC A"), 500.0, [Seen("M@0", 5000.0, curve_s(0.1, 20))], 0.4)
    assert curve.dial == pytest.approx((curve_s(0.1, 20) + 0.4) / curve_s(1.0, 10))
    assert choice.value == curve.dial
    program, settings = series()
    behind = program.scheme.block["behind"]
    assert isinstance(behind, Sense)
    behind = replace(behind, curve=curve)
    blocks = [b for b in program.scheme.blocks if b.name != "behind"]
    again = compile_scheme(program.plant, Scheme(program.scheme.components, (*blocks, behind)))
    got = coordination(again, settings, [("front", "behind")], [Location("M", 0.0)], wanted_s=0.4)
    assert got.margins[0].margin_s == pytest.approx(0.4, rel=1e-9)


def test_grading_refuses_what_it_cannot_do() -> None:
    with pytest.raises(InputError, match="above the pick-up"):
        graded(standard_curve("IEC A"), 500.0, [Seen("far", 400.0, 0.2)])
    with pytest.raises(InputError) as caught:
        graded(standard_curve("IEC A"), -1.0, [Seen("far", math.nan, 0.2)], math.inf)
    assert len(caught.value.problems) == 3
