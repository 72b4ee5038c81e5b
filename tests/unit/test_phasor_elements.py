"""Elements that measure, on circuits small enough to be worked out by hand."""

from __future__ import annotations

import cmath
import math
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import pytest

from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.plant.net_case import FaultType, Phasors, ShuntFault
from schemesim.plant.net_faults import network_of
from schemesim.plant.terminals import Terminal
from schemesim.scheme.conditions import Direction
from schemesim.scheme.phasor_distance import Distance, Shape, residual_compensation, selected
from schemesim.scheme.phasor_elements import (
    MOST,
    Biased,
    Either,
    Looking,
    Overcurrent,
    Part,
    Polarising,
    Voltage,
)
from schemesim.scheme.phasor_quantities import A, Quantities, phases_of
from tests.unit.electrical_plants import two_ends

PLANT = two_ends()
RADIAL = frozenset({"L2a.CB", "L2b.CB", "L1b.CB"})
"""With these open L1 hangs at S alone, behind j10 in every sequence."""
L1A = (Terminal("L1a.CT", "L1"),)
L2A = (Terminal("L2a.CT", "L2"),)
K0 = residual_compensation(40j, 120j)


def quantities(
    place: Location,
    kind: FaultType = FaultType.LLL,
    opened: frozenset[str] = RADIAL,
    ohm: float = 0.0,
    open_cts: frozenset[str] = frozenset(),
    lost_vts: frozenset[str] = frozenset(),
) -> Quantities:
    network = network_of(PLANT)
    solved = network.at(ShuntFault(place, kind, ohm)).solve(opened)
    return Quantities(PLANT, solved, network.prefault(), open_cts, lost_vts)


@dataclass(frozen=True)
class Given:
    """A solution that is stated."""

    currents: Mapping[str, Phasors] = field(default_factory=dict)
    fed: bool = True
    fault: Phasors = (0j, 0j, 0j)

    def current(self, device: str, into: str) -> Phasors:  # noqa: ARG002
        return self.currents[device]

    def voltage(self, section: str, at: str = "") -> Phasors:  # noqa: ARG002
        return (0j, 1e5 + 0j, 0j)


def given(**currents: Phasors) -> Quantities:
    solution = Given({name.replace("_", "."): i for name, i in currents.items()})
    return Quantities(PLANT, solution, solution)


def balanced(amperes: complex) -> Phasors:
    return (0j, amperes, 0j)


def of_phases(a: complex, b: complex, c: complex) -> Phasors:
    """Sequence components of phase quantities (Fortescue)."""
    return ((a + b + c) / 3, (a + A * b + A.conjugate() * c) / 3, (a + A.conjugate() * b + A * c) / 3)


def mho(reach: float, **more: object) -> Distance:
    base = Distance(terminals=L1A, vt="S.VT", reach_ohm=1j * reach, k0=K0)
    return replace(base, **more)  # type: ignore[arg-type]  # checked by replace itself


# --- quantities --------------------------------------------------------------------------------


def test_phases_and_sequences_are_each_others_inverse() -> None:
    a, b, c = phases_of((1 + 1j, 2 - 1j, 0.5j))
    assert of_phases(a, b, c) == pytest.approx((1 + 1j, 2 - 1j, 0.5j))


def test_overcurrent_of_each_part() -> None:
    """A fault of phase a to earth at j4: I = 3E/(j14 + j14 + j22) = 6000 A in phase a, nothing in b and c."""
    q = quantities(Location("L1", 0.1), FaultType.LG)
    by = {part: Overcurrent(terminals=L1A, pick_up_a=1000.0, part=part).multiple(q) for part in Part}
    assert by[Part.PHASE] == pytest.approx(6.0, rel=1e-9)
    assert by[Part.RESIDUAL] == pytest.approx(6.0, rel=1e-9)
    assert by[Part.NEGATIVE] == pytest.approx(2.0, rel=1e-9)


def test_a_core_that_is_open_gives_no_current() -> None:
    q = quantities(Location("L1", 0.1), open_cts=frozenset({"L1a.CT"}))
    assert Overcurrent(terminals=L1A, pick_up_a=1.0).multiple(q) == 0.0
    assert mho(80).multiple(q) == 0.0


# --- direction ---------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("by", "part", "kind"),
    [
        (Polarising.MEMORY, Part.PHASE, FaultType.LLL),
        (Polarising.MEMORY, Part.PHASE, FaultType.LG),
        (Polarising.NEGATIVE, Part.NEGATIVE, FaultType.LG),
        (Polarising.NEGATIVE, Part.NEGATIVE, FaultType.LL),
        (Polarising.ZERO, Part.RESIDUAL, FaultType.LG),
        (Polarising.ZERO, Part.RESIDUAL, FaultType.LLG),
    ],
)
def test_direction_of_the_two_lines_at_one_end(by: Polarising, part: Part, kind: FaultType) -> None:
    """A fault on L1, j4 from S: forward on L1, backward on L2, whose current flows into S; lines of angle 90."""
    q = quantities(Location("L1", 0.1), kind, opened=frozenset())
    for terminals, ahead in ((L1A, True), (L2A, False)):
        forward = Overcurrent(
            terminals=terminals, pick_up_a=10.0, part=part, looking=Looking("S.VT", by, forward=True, angle_deg=90.0)
        )
        assert (forward.multiple(q) > 1) is ahead
        backward = replace(forward, looking=Looking("S.VT", by, forward=False, angle_deg=90.0))
        assert (backward.multiple(q) > 1) is not ahead


@pytest.mark.parametrize("by", list(Polarising))
def test_without_a_voltage_there_is_no_direction(by: Polarising) -> None:
    q = quantities(Location("L1", 0.1), FaultType.LG, lost_vts=frozenset({"S.VT"}))
    element = Overcurrent(terminals=L1A, pick_up_a=1.0, looking=Looking("S.VT", by))
    assert element.multiple(q) == 0.0
    assert replace(element, looking=None).multiple(q) > 1000


def test_memory_tells_a_fault_at_the_bus_side_where_no_voltage_is_left() -> None:
    """At position 0 of L1 the voltage at S is nothing: memory says forward on L1, backward on L2."""
    q = quantities(Location("L1", 0.0), opened=frozenset())
    assert q.voltage("S.VT")[1] == pytest.approx(0.0, abs=1e-6)
    assert mho(30).multiple(q) == MOST
    assert mho(30, terminals=L2A).multiple(q) == 0.0
    assert mho(30, terminals=L2A, direction=Direction.REVERSE).multiple(q) == MOST


# --- distance ----------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", list(FaultType))
@pytest.mark.parametrize("position", [0.1, 0.5, 0.9])
def test_a_distance_element_measures_the_impedance_to_the_fault(kind: FaultType, position: float) -> None:
    """j40·position for every kind of fault, with k0 = (120 − 40)/(3·40)."""
    q = quantities(Location("L1", position), kind)
    assert mho(32).multiple(q) == pytest.approx(32 / (40 * position), rel=1e-9)
    quad = mho(32, shape=Shape.QUADRILATERAL, resistance_ohm=10.0)
    assert quad.multiple(q) == pytest.approx(32 / (40 * position), rel=1e-9)


def test_without_residual_compensation_an_earth_fault_looks_further() -> None:
    """Va/Ia = Z1·(1 + k0·3I0/Ia) = j20·5/3."""
    q = quantities(Location("L1", 0.5), FaultType.LG)
    assert mho(32, k0=0j).multiple(q) == pytest.approx(32 / (20 * 5 / 3), rel=1e-9)


def test_fault_resistance_is_covered_by_a_quadrilateral_and_not_by_a_circle() -> None:
    """The circle of diameter j32 holds R + jX where R² + X² ≤ 32·X: at X = 24 that is R ≤ 13.86 ohm.

    The quadrilateral of 25 ohm holds all of them.
    """
    for ohm, inside in ((13.8, True), (13.9, False), (20.0, False)):
        q = quantities(Location("L1", 0.6), ohm=ohm)
        assert (mho(32).multiple(q) >= 1) is inside
        quad = mho(32, shape=Shape.QUADRILATERAL, resistance_ohm=25.0)
        assert quad.multiple(q) == pytest.approx(min(32 / 24, 25 / ohm), rel=1e-9)


def test_a_distance_element_needs_current_and_looks_one_way() -> None:
    q = quantities(Location("L1", 0.1))
    assert mho(32, least_a=7000.0).multiple(q) == pytest.approx(8.0)
    assert mho(32, least_a=7200.0).multiple(q) == 0.0  # it carries 100 kV / 14 ohm = 7143 A
    assert mho(32, direction=Direction.REVERSE).multiple(q) == 0.0
    assert mho(32, direction=Direction.BOTH).multiple(q) == pytest.approx(8.0)


def test_without_voltage_a_distance_element_that_looks_both_ways_operates_on_current() -> None:
    q = quantities(Location("L1", 0.9), lost_vts=frozenset({"S.VT"}))
    assert mho(8).multiple(q) == 0.0
    assert mho(8, direction=Direction.BOTH).multiple(q) == MOST


def test_an_infeed_at_the_far_bus_changes_nothing_up_to_it() -> None:
    """All closed, a fault at the end of L1 at R: L1a measures j40, whatever comes in at R."""
    q = quantities(Location("L1", 1.0), opened=frozenset())
    (z,) = mho(32).impedances(q).values()
    assert z == pytest.approx(40j, rel=1e-9)


PURE = {
    "an": (1, 0, 0), "bn": (0, 1, 0), "cn": (0, 0, 1), "ab": (1, -1, 0), "bc": (0, 1, -1), "ca": (-1, 0, 1),
}  # fmt: skip


@pytest.mark.parametrize("loop", PURE)
def test_loop_selection(loop: str) -> None:
    assert loop in selected(of_phases(*map(complex, PURE[loop])))
    expected = 2 if loop.endswith("n") else 1
    assert len(selected(of_phases(*map(complex, PURE[loop])))) == expected


@pytest.mark.parametrize(("healthy", "loop"), [("a", "bc"), ("b", "ca"), ("c", "ab")])
def test_loop_selection_of_two_phases_to_earth(healthy: str, loop: str) -> None:
    """I1 = 1, I2 = I0 = −1/2, as seen from the healthy phase."""
    turn = {"a": 1, "b": A, "c": A.conjugate()}[healthy]
    sequence = (-0.5 + 0j, turn * 1, -0.5 * (1 / turn))
    a, b, c = phases_of(sequence)
    assert min({"a": abs(a), "b": abs(b), "c": abs(c)}.items(), key=lambda item: item[1])[0] == healthy
    assert selected(sequence) == (f"{healthy}n", loop)


def test_three_phases_take_any_one_loop() -> None:
    assert selected(balanced(5 + 2j)) == ("bc",)


# --- differential ------------------------------------------------------------------------------

ZONE = (Terminal("L1a.CT", "L1"), Terminal("L1b.CT", "L1"))


def test_a_differential_is_restrained_by_what_flows_through() -> None:
    """1000 A in, 900 A out: 100 A against 0.3 · 950 = 285 A. In at both ends: 1900 A against 285 A."""
    element = Biased(terminals=ZONE, pick_up_a=120.0, slope=0.3)
    assert element.multiple(given(L1a_CT=balanced(1000), L1b_CT=balanced(-900))) == pytest.approx(100 / 285)
    assert element.multiple(given(L1a_CT=balanced(1000), L1b_CT=balanced(900))) == pytest.approx(1900 / 285)
    assert element.multiple(given(L1a_CT=balanced(60), L1b_CT=balanced(0))) == pytest.approx(0.5)


def test_a_differential_sees_its_zone_and_nothing_else() -> None:
    element = Biased(terminals=ZONE, pick_up_a=100.0)
    inside = quantities(Location("L1", 0.3), FaultType.LG, opened=frozenset())
    outside = quantities(Location("L2", 0.3), FaultType.LG, opened=frozenset())
    assert element.multiple(inside) > 1
    assert element.multiple(outside) == pytest.approx(0.0, abs=1e-9)
    unbalanced = replace(outside, open_cts=frozenset({"L1a.CT"}), _currents={})
    sensitive = replace(element, pick_up_a=10.0)  # what is left of the sum, I, against 0.3 · I/2
    assert sensitive.multiple(unbalanced) == pytest.approx(2 / 0.3, rel=1e-9)


def test_what_is_left_of_a_differential_without_one_core() -> None:
    """2000 A and 50 A; pick-up 100 A: the sum of 2050 A counts for the first CT, not for the second alone."""
    q = given(L1a_CT=balanced(2000), L1b_CT=balanced(50))
    first = Biased(terminals=ZONE, pick_up_a=100.0, share_of="L1a.CT")
    assert first.multiple(q) > 1
    assert replace(first, share_of="L1b.CT").multiple(q) == 0.0
    weak = given(L1a_CT=balanced(70), L1b_CT=balanced(60))
    assert replace(first, slope=0.3).multiple(weak) == pytest.approx(1.3)  # each below, together above: the greater


def test_sides_of_different_voltage_and_the_zero_sequence() -> None:
    """132/33 kV: 1000 A out at 33 kV are 250 A in at 132 kV; the zero sequence of an earthed side is taken out."""
    element = Biased(terminals=ZONE, pick_up_a=50.0, ratios=(1.0, 0.25), zero_sequence=False)
    through = given(L1a_CT=(40 + 0j, 250 + 0j, 0j), L1b_CT=balanced(-1000))
    assert element.multiple(through) == pytest.approx(0.0, abs=1e-9)
    assert replace(element, zero_sequence=True).multiple(through) > 0.5


# --- voltage, either, refusals -----------------------------------------------------------------


def test_under_and_overvoltage() -> None:
    """A three-phase fault at j4: 4/14 of 100 kV to earth, √3 of that between phases; without a VT nothing is left."""
    q = quantities(Location("L1", 0.1))
    between = 1e5 * math.sqrt(3) * 4 / 14
    assert Voltage(vt="S.VT", setting_v=70e3).multiple(q) == pytest.approx(70e3 / between)
    assert Voltage(vt="S.VT", setting_v=70e3, under=False).multiple(q) == pytest.approx(between / 70e3)
    assert Voltage(vt="S.VT", setting_v=1e5, part=Part.PHASE).multiple(q) == pytest.approx(14 / 4)
    lost = quantities(Location("L1", 0.1), lost_vts=frozenset({"S.VT"}))
    assert Voltage(vt="S.VT", setting_v=70e3).multiple(lost) == MOST


def test_residual_overvoltage_of_an_earth_fault() -> None:
    """3V0 at S = 3·I0·j10 with I0 = E/(j14 + j14 + j22) = 2000 A: 60 kV."""
    q = quantities(Location("L1", 0.1), FaultType.LG)
    element = Voltage(vt="S.VT", setting_v=20e3, under=False, part=Part.RESIDUAL)
    assert element.multiple(q) == pytest.approx(3.0, rel=1e-9)


def test_either_takes_the_more_sensitive() -> None:
    q = quantities(Location("L1", 0.1), FaultType.LG)
    phase = Overcurrent(terminals=L1A, pick_up_a=4000.0)
    residual = Overcurrent(terminals=L1A, pick_up_a=500.0, part=Part.RESIDUAL, drop_out=0.9)
    both = Either((phase, residual))
    assert both.multiple(q) == pytest.approx(12.0)
    assert (both.drop_out, both.looks_at) == (0.9, (("L1a.CT",), ()))


def test_settings_that_cannot_be_are_refused() -> None:
    with pytest.raises(InputError, match="pick_up_a of overcurrent element"):
        Overcurrent(terminals=L1A, pick_up_a=0.0)
    with pytest.raises(InputError) as caught:
        Biased(terminals=ZONE, pick_up_a=-1.0, slope=math.nan, drop_out=1.5)
    assert len(caught.value.problems) == 3
    with pytest.raises(InputError, match="quadrilateral"):
        mho(32, shape=Shape.QUADRILATERAL)
    with pytest.raises(InputError, match="setting_v"):
        Voltage(vt="S.VT", setting_v=math.inf)


def test_k0_turns_with_the_impedances() -> None:
    z1, z0 = cmath.rect(40.0, math.radians(80)), cmath.rect(120.0, math.radians(70))
    assert residual_compensation(z1, z0) == pytest.approx((z0 - z1) / (3 * z1))
    assert residual_compensation(z1, None) == 0
