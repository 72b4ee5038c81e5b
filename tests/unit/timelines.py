"""A line from a station with a generator to one with a feeder, and situations on it, for the tests of timelines.

Times follow from the policy: elements operate in 20 ms, lockouts in 10 ms, breakers interrupt in
50 ms, and the breaker-failure timer runs for 150 ms.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import pytest
from matplotlib.axes import Axes
from matplotlib.patches import Rectangle

from schemesim.engine.case import Case, bind
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing, NoFault
from schemesim.plant.layouts import Bay, CtPlacement, feeder, generator, line, single_bus
from schemesim.plant.model import Location, PlantBuilder
from schemesim.report.lanes import Look
from schemesim.report.pictures import plot_timeline
from schemesim.report.timeline import Timeline, replay, timeline
from schemesim.scheme.build import BreakerTimes
from schemesim.scheme.delays import Fixed
from schemesim.scheme.dress import dress
from schemesim.scheme.functions import BreakerFailureTimes, ElementTimes
from schemesim.scheme.policy import BreakerFailurePolicy, LocalBackup, PolicyTimes, Reaches, duplicate_chain

ROOT = Path(__file__).resolve().parents[2]
NO_FAILURE: tuple[str, ...] = ()
STUCK = ("Elm.L1.CB: does_not_open",)
DC_LOST = ("Fir/DC 1: lost", "Fir/DC 2: lost")
SITUATIONS = {
    "main": ("L1", NO_FAILURE),
    "stuck": ("L1", STUCK),
    "late": ("L1", ("Elm.L1.CB: opens_late",)),
    "no interruption": ("L1", ("Elm.L1.CB: does_not_interrupt",)),
    "dead zone": ("Fir.L1.c", NO_FAILURE),
    "station without DC": ("Fir.B1", DC_LOST),
}


@cache
def case_of(section: str) -> Case:
    b = PlantBuilder()
    line(b, "L1", 40, kv=110)
    generator(b, "G1", station="Elm")
    feeder(b, "F1", station="Fir", load_mw=20)
    single_bus(b, "Elm", [Bay("G1", "G1"), Bay("L1", "L1", at=0)], kv=110)
    single_bus(b, "Fir", [Bay("L1", "L1", at=1), Bay("F1", "F1")], kv=110, ct=CtPlacement.CIRCUIT_SIDE)
    plant = b.build()
    element = ElementTimes(operate=Fixed(20_000), reset=Fixed(15_000))
    policy = duplicate_chain(
        local_backup=LocalBackup(delay=Fixed(400_000), bus_delay=Fixed(270_000)),
        end_fault=True,
        breaker_failure=BreakerFailurePolicy(times=BreakerFailureTimes(timer=Fixed(150_000))),
        reaches=Reaches(zone_2_delay=Fixed(350_000), zone_3_delay=Fixed(1_000_000)),
        times=PolicyTimes(
            lockout=Fixed(10_000),
            channel=Fixed(15_000),
            end_fault=Fixed(40_000),
            differential=element,
            distance=element,
            overcurrent=element,
            breaker=BreakerTimes(interrupting=Fixed(50_000), auxiliary=Fixed(5_000)),
        ),
    )
    program = compile_scheme(plant, dress(plant, policy))
    event = Location(section) if section in plant.section else NoFault(section)
    return bind(program, event, LogicalSensing())


@cache
def timeline_of(situation: str, limit_ms: float | None = 150) -> Timeline:
    section, yes = SITUATIONS[situation]
    case = case_of(section)
    return timeline(case, replay(case, yes), limit_ms=limit_ms)


@cache
def picture_of(situation: str) -> Axes:
    return plot_timeline(timeline_of(situation))


each = pytest.mark.parametrize("situation", SITUATIONS)


def bars(ax: Axes, look: Look, subject: str = "") -> list[Rectangle]:
    found = [p for p in ax.patches if (p.get_gid() or "").startswith(f"bar: {look}: {subject}")]
    return [p for p in found if isinstance(p, Rectangle)]


def text_of(ax: Axes) -> list[str]:
    return [t.get_text() for t in ax.texts if t.get_text()]
