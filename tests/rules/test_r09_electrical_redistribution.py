"""R9 and R10 with computed currents: each opening changes what every other element measures.

The plants are those of `tests.unit.electrical_plants`; every current is worked out from their
reactances, E = 100 kV to earth, three-phase faults.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case, bind
from schemesim.engine.electrical import ElectricalSensing
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Run, Status
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import Measures
from schemesim.plant.model import Location, Plant
from schemesim.plant.terminals import Terminal
from schemesim.scheme.conditions import Direction, Reach
from schemesim.scheme.curves import standard_curve
from schemesim.scheme.model import Block, Latch, Role, Scheme
from schemesim.scheme.phasor_distance import Distance
from schemesim.scheme.phasor_elements import Element, Overcurrent
from schemesim.scheme.settings import Setting, Settings
from tests.rules.hand import at, breaker, gate, openings, sense, timer, times, trip
from tests.unit.electrical_plants import ladder, radial_units, two_ends


def over(ct: str, inner: str, pick_up_a: float) -> Overcurrent:
    return Overcurrent(terminals=(Terminal(ct, inner),), pick_up_a=pick_up_a)


def tripped(end: str, by: str, opens: float = 50) -> list[Block]:
    """The breaker of a bay, tripped by one signal."""
    return [trip(f"{end}.t", by), gate(f"{end}.coil", f"{end}.t"), breaker(f"{end}.CB", f"{end}.coil", opens=opens)]


def bound(
    plant: Plant, blocks: Iterable[Block], elements: dict[str, Element], place: Location, dispatch: str | None = None
) -> Case:
    settings = Settings(tuple(Setting(name, element) for name, element in elements.items()))
    program = compile_scheme(plant, Scheme((), tuple(blocks)))
    return bind(program, place, ElectricalSensing(settings), dispatch=dispatch)


def multiples(case: Case, *opened: str) -> tuple[float, ...]:
    """What the senses of a case measure, by their settings."""
    assert isinstance(case.sensed, Measures)
    return case.sensed.measured(frozenset(opened))[0]


def play(case: Case) -> Run:
    return run_event(case, FixedAnswers(case.program, ()), log=True)


def test_r09_one_end_sees_the_fault_only_when_the_other_has_opened() -> None:
    """Sequential clearing. A fault on L1, j4 ohm from S and j36 from R, L2 beside it.

    Node equations at S and R: 0.375·Vs − 0.025·Vr = 0.1·E and −0.025·Vs + (0.125 + 1/36)·Vr = 0.1·E, so
    Vs = 16/51·E and Vr = 12/17·E: the end at S carries Vs/4 = 7843 A, that at R Vr/36 = 1961 A.
    With the end at S open the fault hangs at R alone, behind j10 beside j50, that is j25/3: the end at R carries
    E/(25/3 + 36) = 2256 A. Its element is set to 2100 A.

    0 a starts; 20 a trips; 70 L1a opens, b starts; 90 b trips; 140 L1b opens: cleared.
    """
    blocks = [
        sense("a", "L1a.CT"), *tripped("L1a", "a"), sense("b", "L1b.CT"), *tripped("L1b", "b"),
    ]  # fmt: skip
    elements: dict[str, Element] = {"a": over("L1a.CT", "L1", 4000.0), "b": over("L1b.CT", "L1", 2100.0)}
    case = bound(two_ends(), blocks, elements, Location("L1", 0.1))
    run = play(case)
    assert openings(run) == {"L1a.CB": (20, 70), "L1b.CB": (90, 140)}
    assert (run.outcome.status, run.outcome.t_clear_us) == (Status.CLEARED, 140_000)
    assert times(run, "b", "starts") == [70]
    assert [case.names[s] for s in case.senses] == ["a", "b"]
    assert multiples(case) == pytest.approx((1e5 * 16 / 51 / 4 / 4000, 1e5 * 12 / 17 / 36 / 2100), rel=1e-9)
    assert multiples(case, "L1a.CB") == pytest.approx((0.0, 1e5 * 3 / 133 / 2100), rel=1e-9)


def test_r09_a_breaker_failure_detector_below_its_pick_up_until_the_other_end_opens() -> None:
    """The same fault; L1b does not open (its trip is no coil here), its detector is set to 2100 A (operate 5 ms).

    The timer of 100 ms starts with the trip at 20, sealed in, and runs out at 120; current is seen from 75 on, five
    after L1a opened at 70: 50BF trips L2b at 120, open at 170. Had L1a opened at 120 only, the detector
    would see current from 125 on.
    """
    for opens, tripped_at in ((50, 120), (100, 125)):
        blocks = [
            sense("a", "L1a.CT"), *tripped("L1a", "a", opens),
            sense("i", "L1b.CT", 5, 10), Latch(name="seal", set="a"), timer("bf", "seal", 100),
            trip("bf.t", "bf", "i", k=2, role=Role.BREAKER_FAILURE),
            gate("L2b.coil", "bf.t"), breaker("L2b.CB", "L2b.coil"),
        ]  # fmt: skip
        elements: dict[str, Element] = {"a": over("L1a.CT", "L1", 4000.0), "i": over("L1b.CT", "L1", 2100.0)}
        run = play(bound(two_ends(), blocks, elements, Location("L1", 0.1)))
        assert openings(run)["L2b.CB"] == (tripped_at, tripped_at + 50)
        assert at(run, "i", "picks up") == opens + 25


def mho(ct: str, line: str, vt: str, ohm: float) -> Distance:
    return Distance(terminals=(Terminal(ct, line),), vt=vt, reach_ohm=1j * ohm, least_a=100.0)


def test_r09_an_infeed_hides_a_fault_from_a_distance_element_until_it_is_gone() -> None:
    """Apparent impedance Z1 + (1 + I_infeed/I_relay)·Z2. A fault on M, j5 ohm beyond B, where an infeed joins.

    Relay current and infeed both come from E behind j20 to bus B: equal, so the relay at A measures
    j10 + 2·j5 = j20. Its zone of j16 would hold the fault without the infeed (j15). The infeed is tripped
    by its own overcurrent after 200 ms: 20 + 200 = 220, open at 270. From then on the relay measures j15: it
    picks up at 290, its zone time of 300 ms runs out at 590, Ka opens at 640.
    """
    blocks = [
        sense("z2", Reach((Terminal("Ka.CT", "K"),), 40.0)), timer("z2.t", "z2", 300), *tripped("Ka", "z2.t"),
        sense("51", "I.CT"), timer("51.t", "51", 200), *tripped("I", "51.t"),
    ]  # fmt: skip
    elements: dict[str, Element] = {"z2": mho("Ka.CT", "K", "A.VT", 16.0), "51": over("I.CT", "I", 1000.0)}
    case = bound(ladder(), blocks, elements, Location("M", 0.5))
    assert [case.names[s] for s in case.senses] == ["51", "z2"]
    assert 16.0 / multiples(case)[1] == pytest.approx(20.0, rel=1e-9)
    assert 16.0 / multiples(case, "I.CB")[1] == pytest.approx(15.0, rel=1e-9)
    run = play(case)
    assert openings(run) == {"I.CB": (220, 270), "Ka.CB": (590, 640)}
    assert at(run, "z2", "picks up") == 290
    assert run.outcome.t_clear_us == 640_000


def test_r09_with_little_generation_an_element_is_blind() -> None:
    """A fault at the far end of F. Two units: E/(10 + 10) = 5000 A; one: E/(20 + 10) = 3333 A. Set to 4000 A.

    With both, F trips at 20 and opens at 70. With one it is blind; the unit's own underimpedance element, set to
    j40 and looking out of the unit, measures j10 and trips after 500 ms: 520, open at 570.
    """
    blocks = [
        sense("50", "F.CT"), *tripped("F", "50"),
        sense("21", Reach((Terminal("U1.CT", "U1"),), 40.0)), timer("21.t", "21", 500), *tripped("U1", "21.t"),
    ]  # fmt: skip
    backup = replace(mho("U1.CT", "U1", "B.VT", 40.0), direction=Direction.REVERSE)
    elements: dict[str, Element] = {"50": over("F.CT", "F", 4000.0), "21": backup}
    full = play(bound(radial_units(), blocks, elements, Location("F", 1.0)))
    assert openings(full) == {"F.CB": (20, 70)}
    low = bound(radial_units(), blocks, elements, Location("F", 1.0), "low")
    run = play(low)
    assert openings(run) == {"U1.CB": (520, 570)}
    assert (run.outcome.status, run.outcome.t_clear_us) == (Status.CLEARED, 570_000)
    assert dict(low.topology(0).holds)[low.index["50"]] is False
    assert multiples(low)[[low.names[s] for s in low.senses].index("50")] == pytest.approx(1e5 / 30 / 4000, rel=1e-9)


def test_r10_the_current_steps_while_a_curve_element_runs() -> None:
    """A fault at the far end of F on curve C, TMS 0.1, set to 1000 A: t = 8/(M² − 1) s.

    At 5000 A 8/24 = 333.333 ms; at 3333 A 8/(100/9 − 1) = 791.209 ms. Unit U2 is opened at 100 ms
    (0.3 of the way): the rest takes 0.7 · 791.209 = 553.846: it trips at 653.846 ms.
    """
    blocks = [
        replace(sense("51", "F.CT", 999), curve=standard_curve("IEC C", dial=0.1)), *tripped("F", "51"),
        sense("u", "U2.CT", 0), timer("u.t", "u", 50), *tripped("U2", "u.t"),
    ]  # fmt: skip
    elements: dict[str, Element] = {"51": over("F.CT", "F", 1000.0), "u": over("U2.CT", "U2", 1000.0)}
    run = play(bound(radial_units(), blocks, elements, Location("F", 1.0)))
    assert at(run, "51", "slowed down") == 100
    (opening,) = [o for o in run.outcome.openings if o.breaker == "F.CB"]
    assert opening.t_trip_us == pytest.approx(653_846, abs=2)


def test_r09_a_directional_element_turns_round_with_the_current() -> None:
    """L2b looks into L2, a zone of j300. Fault on L1 j4 from R: at first current flows out of L2 into R: nothing.

    L1b opens at 70. Then R feeds L2 from E behind j10, so the fault lies ahead of L2b, over S, where GS feeds in
    from E behind j10 too: relay current comes from E behind j50 to S, the infeed is five times that, and it measures
    j40 + (1 + 5)·j36 = j256. It picks up at 90.
    """
    blocks = [
        sense("b", "L1b.CT"), *tripped("L1b", "b"),
        sense("z", Reach((Terminal("L2b.CT", "L2"),), 750.0)), *tripped("L2b", "z"),
    ]  # fmt: skip
    elements: dict[str, Element] = {"b": over("L1b.CT", "L1", 4000.0), "z": mho("L2b.CT", "L2", "R.VT", 300.0)}
    case = bound(two_ends(), blocks, elements, Location("L1", 0.9))
    z = [case.names[s] for s in case.senses].index("z")
    assert multiples(case)[z] == 0.0
    assert 300.0 / multiples(case, "L1b.CB")[z] == pytest.approx(256.0, rel=1e-9)
    run = play(case)
    assert at(run, "z", "picks up") == 90
    assert openings(run) == {"L1b.CB": (20, 70), "L2b.CB": (90, 140)}
