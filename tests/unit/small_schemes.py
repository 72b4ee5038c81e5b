"""Small plants and schemes for the tests of the studies, and brute force over every state of their components."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from fractions import Fraction
from itertools import product

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case, bind
from schemesim.engine.event import run_event
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.plant.model import Device, DeviceKind, Location, Plant, Section, SectionKind, Source
from schemesim.plant.terminals import Terminal
from schemesim.scheme.conditions import Current, InZone, NoFaultTrip, Reach
from schemesim.scheme.delays import Delay, Fixed
from schemesim.scheme.model import (
    Ask,
    Block,
    Breaker,
    CommonCause,
    Component,
    ComponentKind,
    Contact,
    FailureMode,
    Gate,
    Not,
    Probability,
    Role,
    Scheme,
    Sense,
    Timer,
)
from schemesim.study.tree import End

Number = Callable[[str], Probability]

FTO, LATE, LOST = FailureMode.FAILURE_TO_OPERATE, FailureMode.DELAYED_OPERATION, FailureMode.LOST
STUCK, OPENS_LATE = FailureMode.DOES_NOT_OPEN, FailureMode.OPENS_LATE


def ms(time: float) -> Fixed:
    return Fixed(int(time * 1000))


def radial_plant() -> Plant:
    """A source, an infeed breaker, a busbar and two feeders: every breaker has its CT on the feeder side."""
    feeders = ("F1", "F2", "IN")
    return Plant(
        sections=(
            Section(name="B", kind=SectionKind.BUS),
            Section(name="F1", kind=SectionKind.FEEDER, load_mw=10),
            Section(name="F2", kind=SectionKind.FEEDER, load_mw=5),
            Section(name="IN", kind=SectionKind.FEEDER),
            *(Section(name=f"{x}.c", kind=SectionKind.CONDUCTOR) for x in feeders),
        ),
        devices=(
            *(Device(name=f"{x}.CB", kind=DeviceKind.BREAKER, a="B", b=f"{x}.c") for x in feeders),
            *(Device(name=f"{x}.CT", kind=DeviceKind.CT, a=f"{x}.c", b=x, cores=("1", "2")) for x in feeders),
        ),
        sources=(Source(name="G", section="IN"),),
    )


def relay(name: str, *modes: tuple[FailureMode, Probability], no_fault_per_yr: float = 0.0) -> Component:
    return Component(name, ComponentKind.RELAY, modes, no_fault_per_yr)


def feeder_scheme(number: Number = Fraction, opening: Delay | None = None) -> Scheme:
    """Feeder F1: two main relays (one may be slow) with a common cause, one DC, breaker failure, remote back-up.

    Worked out by hand for a fault on F1, nominal times: main 20 ms, breaker 50 ms. If F1's breaker
    stays, breaker failure (150 ms after the trip) opens the infeed at 20 + 150 + 50 = 220 ms; without a
    trip, or without its relay, the infeed's own timer at 20 + 400 + 50 = 470 ms.
    """
    opening = opening or ms(50)
    f1 = frozenset({"F1"})
    dc = Ask("DC", LOST)
    components = (
        relay("M1", (FTO, number("1/50")), (LATE, number("1/20")), no_fault_per_yr=0.25),
        relay("M2", (FTO, number("1/25"))),
        relay("BF", (FTO, number("1/10"))),
        relay("IN", (FTO, number("1/30"))),
        Component("DC", ComponentKind.DC, ((LOST, number("1/100")),)),
        Component("CB1", ComponentKind.BREAKER, ((STUCK, number("1/8")), (OPENS_LATE, number("1/16")))),
    )
    blocks: tuple[Block, ...] = (
        Sense(name="zone", condition=InZone(frozenset({"F1"}), ("F1.CT",)), operate=ms(20), reset=ms(10)),
        Sense(name="trips alone", condition=NoFaultTrip("M1"), operate=ms(0), reset=ms(0)),
        Gate(name="M1.on", inputs=("zone",), unless=(Ask("M1", FTO), Ask("M1", LATE))),
        Gate(name="M1.slow", inputs=("zone",), given=(Ask("M1", LATE),), unless=(Ask("M1", FTO),)),
        Timer(name="M1.extra", input="M1.slow", pick_up=ms(100), drop_out=ms(0)),
        Gate(
            name="M1.trip",
            inputs=("M1.on", "M1.extra", "trips alone"),
            unless=(dc,),
            contact=Contact("87", Role.MAIN, f1, relay="M1", chain="1", element="F1"),
        ),
        Gate(
            name="M2.trip",
            inputs=("zone",),
            unless=(Ask("M2", FTO), dc),
            contact=Contact("50", Role.MAIN, f1, relay="M2", chain="2", element="F1"),
        ),
        Gate(name="coil", inputs=("M1.trip", "M2.trip")),
        Breaker(
            name="F1.CB", coils=("coil",), interrupting=opening, auxiliary=ms(5), component="CB1", late_by=ms(250)
        ),
        Sense(name="current", condition=Current(("F1.CT",)), operate=ms(5), reset=ms(15)),
        Gate(name="starts", inputs=("coil", "current"), k=2),
        Timer(name="bf.timer", input="starts", pick_up=ms(150), drop_out=ms(0)),
        Gate(
            name="bf.trip",
            inputs=("bf.timer",),
            unless=(Ask("BF", FTO), dc),
            contact=Contact("50BF", Role.BREAKER_FAILURE, f1, beyond=Role.BREAKER_FAILURE, relay="BF"),
        ),
        Sense(name="reach", condition=Reach((Terminal("IN.CT", "IN.c"),), 10.0), operate=ms(20), reset=ms(10)),
        Timer(name="reach.t", input="reach", pick_up=ms(400), drop_out=ms(0)),
        Gate(
            name="IN.trip",
            inputs=("reach.t",),
            unless=(Ask("IN", FTO),),
            contact=Contact("51", Role.LOCAL, frozenset({"B"}), relay="IN"),
        ),
        Gate(name="IN.coil", inputs=("bf.trip", "IN.trip")),
        Breaker(name="IN.CB", coils=("IN.coil",), interrupting=opening, auxiliary=ms(5)),
    )
    both = CommonCause("same settings", (Ask("M1", FTO), Ask("M2", FTO)), number("1/200"))
    return Scheme(components, blocks, (both,))


def voting_scheme(number: Number = Fraction) -> Scheme:
    """Two out of three relays, one of which over-reaches, blocked by a receipt that may be false."""
    unwanted = FailureMode.UNWANTED_OPERATION
    components = (
        *(relay(f"R{n}", (FTO, number(f"1/{n + 2}"))) for n in (1, 2)),
        relay("R3", (unwanted, number("1/3")), (FTO, number("1/3")), (LATE, number("1/3"))),
        Component("CH", ComponentKind.CHANNEL, ((FailureMode.FALSE_RECEIPT, number("1/7")), (LOST, number("1/9")))),
        Component("CB", ComponentKind.BREAKER, ((FailureMode.DOES_NOT_INTERRUPT, number("1/6")),)),
    )
    blocks: tuple[Block, ...] = (
        Sense(name="see", condition=Current(("F1.CT",)), operate=ms(10), reset=ms(10)),
        Gate(name="block", inputs=("see",), given=(Ask("CH", FailureMode.FALSE_RECEIPT),)),
        *(Gate(name=f"v{n}", inputs=("see",), unless=(Ask(f"R{n}", FTO),)) for n in (1, 2)),
        Gate(name="v3", inputs=("see",), given=(Ask("R3", unwanted),)),
        Timer(name="v3.t", input="v3", pick_up=ms(30), drop_out=ms(5)),
        Gate(name="vote", inputs=("v1", "v2", "v3.t"), k=2),
        Gate(
            name="trip",
            inputs=("vote", Not("block")),
            k=2,
            unless=(Ask("CH", LOST),),
            contact=Contact("2oo3", Role.MAIN, frozenset({"F1"})),
        ),
        Breaker(name="F1.CB", coils=("trip",), interrupting=ms(40), auxiliary=ms(5), component="CB"),
    )
    return Scheme(components, blocks)


def program_of(scheme: Scheme) -> Program:
    return compile_scheme(radial_plant(), scheme)


def case_of(scheme: Scheme, section: str = "F1", observe: Iterable[str] = ()) -> Case:
    return bind(program_of(scheme), Location(section), LogicalSensing(), observe=frozenset(observe))


def feeder_case(number: Number = Fraction) -> Case:
    return case_of(feeder_scheme(number))


def states(program: Program) -> Iterator[tuple[frozenset[int], Fraction]]:
    """Every state of the components and common causes, as the questions that are yes, and its probability."""
    choices: list[list[tuple[int | None, Fraction]]] = []
    by_component: dict[str, list[int]] = {}
    for i, q in enumerate(program.questions):
        by_component.setdefault(q.component or q.name, []).append(i)
    for modes in by_component.values():
        odds = [(i, Fraction(program.questions[i].probability)) for i in modes]
        choices.append([*odds, (None, 1 - sum((p for _, p in odds), Fraction(0)))])
    for state in product(*choices):
        p = Fraction(1)
        for _, share in state:
            p *= share
        yield frozenset(i for i, _ in state if i is not None), p


def brute_force(case: Case) -> dict[End, Fraction]:
    """The exact probability of each ending, one run for every state of the components."""
    found: dict[End, Fraction] = {}
    for yes, p in states(case.program):
        if p:
            ran = run_event(case, FixedAnswers(case.program, yes))
            end = End(ran.outcome, ran.final_mask)
            found[end] = found.get(end, Fraction(0)) + p
    return found


def as_float(text: str) -> float:
    return float(Fraction(text))
