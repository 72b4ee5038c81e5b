"""R10 in both engines: the same openings to the microsecond, for every clearing sequence worked out by hand."""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.batch import run_batch
from schemesim.engine.case import Case, bind
from schemesim.engine.event import run_event
from schemesim.engine.many import ManyDrawn
from schemesim.engine.program import compile_scheme
from schemesim.plant.model import Location
from schemesim.scheme.curves import standard_curve
from schemesim.scheme.model import Scheme, Sense
from schemesim.scheme.phasor_elements import Element
from tests.rules.hand import radial, sense, timer, trip
from tests.rules.test_r09_electrical_redistribution import bound, over, tripped
from tests.rules.test_r10_inverse_time import CURVE, Stated, Steps
from tests.unit.electrical_plants import radial_units

RESET = replace(CURVE, reset_s=0.75)
RUNS_ON = replace(CURVE, overtravel_us=60_000)
BOTH = replace(CURVE, reset_s=0.75, overtravel_us=40_000)

STEPS = {
    "constant": Steps((5, 5, 5), first=900),
    "down": Steps((5, 2, 2), first=100),
    "up": Steps((2, 5, 5), first=400),
    "twice": Steps((2, 5, 3), first=300, second=400),
    "resets at once": Steps((5, 0.5, 5), first=200, second=300),
    "goes back": Steps((5, 0.5, 5), first=200, second=500, curve=RESET),
    "back at rest": Steps((5, 0.5, 5), first=200, second=1100, curve=RESET),
    "runs on and operates": Steps((5, 0, 0), first=200, curve=RUNS_ON),
    "runs on not long enough": Steps((5, 0, 0), first=200, curve=replace(CURVE, overtravel_us=49_999)),
    "runs on, then goes back": Steps((5, 0.5, 5), first=100, second=300, curve=BOTH),
    "returns while it runs on": Steps((5, 0, 3), first=100, second=120, curve=BOTH),
    "stands still": Steps((5, 0.97, 5), first=100, second=400, drop_out=0.95),
    "held before the event": Steps((0.97, 5, 5), first=100, drop_out=0.95),
    "at the instant its current falls": Steps((5, 0, 0), first=250),
}


def agree(case: Case) -> None:
    batch = run_batch(case, 2, ManyDrawn(case.program, 0, 0, 2))
    run = run_event(case, FixedAnswers(case.program, ()))
    assert batch.outcome(0) == batch.outcome(1) == run.outcome


@pytest.mark.parametrize("name", STEPS)
def test_r10_both_engines_agree(name: str) -> None:
    agree(STEPS[name].case())


@pytest.mark.parametrize("drop_out", [0.95, 0.98])
def test_r10_a_plain_element_between_drop_out_and_pick_up_stays(drop_out: float) -> None:
    """On at 77 ms; from 100 its current lies at 0.97 of the pick-up: held by a drop-out of 0.95, else off at 130."""
    steps = Steps((5, 0.97, 0.97), first=100, drop_out=drop_out)
    plain = [replace(b, curve=None) if isinstance(b, Sense) else b for b in steps.case().program.scheme.blocks]
    waiting = [b for b in plain if b.name != "51.t"]
    scheme = Scheme((), (*waiting, timer("51.w", "51", 400), trip("51.t", "51.w")))
    states: dict[frozenset[str], float] = {}
    for opened in (frozenset[str](), frozenset({"F1.CB"}), frozenset({"F2.CB"}), frozenset({"F1.CB", "F2.CB"})):
        states[opened] = 0.97 if "F1.CB" in opened else 5.0
        states[opened | {"IN.CB"}] = 0.0
    case = bind(compile_scheme(radial(), scheme), Location("F1"), Stated(states, drop_out))
    assert ("IN.CB" in run_event(case, FixedAnswers(case.program, ())).outcome.tripped) is (drop_out == 0.95)
    agree(case)


def test_r10_both_engines_agree_on_computed_currents() -> None:
    """A feeder of two units, of which one goes at 100 ms: 5000, then 3333 A, on curve C."""
    blocks = [
        replace(sense("51", "F.CT", 999), curve=standard_curve("IEC C", dial=0.1)), *tripped("F", "51"),
        sense("u", "U2.CT", 0), timer("u.t", "u", 50), *tripped("U2", "u.t"),
    ]  # fmt: skip
    elements: dict[str, Element] = {"51": over("F.CT", "F", 1000.0), "u": over("U2.CT", "U2", 1000.0)}
    case = bound(radial_units(), blocks, elements, Location("F", 1.0))
    agree(case)
    assert run_event(case, FixedAnswers(case.program, ())).outcome.tripped == {"F.CB", "U2.CB"}
