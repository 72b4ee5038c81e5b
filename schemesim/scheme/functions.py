"""The library of standard functions, each composed of the five primitives, written once.

Every function takes the builder, a name for its signals, the host it stands on and
what it measures, and returns the signal of its trip output. Failures enter where the
design of real schemes lets them: a relay that fails, its DC, its CT core and VT winding
keep an output from leaving; over-reach, a lost voltage without supervision, an open CT
core of a differential and a false receipt make an output possible.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from schemesim.plant.terminals import Terminal
from schemesim.scheme.build import Host, SchemeBuilder
from schemesim.scheme.conditions import Condition, Current, Direction, InZone, NoFaultTrip, Reach
from schemesim.scheme.delays import Delay, Fixed, check_delays
from schemesim.scheme.model import Ask, Contact, FailureMode, Gate, Input, Latch, Not, Role, Sense, Timer

AT_ONCE = Fixed(0)


@dataclass(frozen=True, slots=True)
class ElementTimes:
    """Operate and reset time of a measuring element, and what a delayed operation adds."""

    operate: Delay = Fixed(20_000)
    reset: Delay = Fixed(15_000)
    delayed_by: Delay = Fixed(200_000)

    def __post_init__(self) -> None:
        check_delays(self)


def sense(b: SchemeBuilder, name: str, condition: Condition, times: ElementTimes) -> str:
    """A measuring element with its operate and reset time."""
    return b.add(Sense(name=name, condition=condition, operate=times.operate, reset=times.reset))


def delayed(b: SchemeBuilder, name: str, signal: Input, pick_up: Delay, drop_out: Delay = AT_ONCE) -> Input:
    """A time delay; a delay of nothing is no block."""
    if pick_up == AT_ONCE and drop_out == AT_ONCE:
        return signal
    return b.add(Timer(name=name, input=signal, pick_up=pick_up, drop_out=drop_out))


def trip_output(
    b: SchemeBuilder,
    name: str,
    inputs: Sequence[Input],
    host: Host,
    contact: Contact,
    times: ElementTimes,
    *,
    k: int = 1,
    unless: Sequence[Ask] = (),
) -> str:
    """A function's output where it leaves its relay: questions about the relay and its needs are asked here.

    A relay with the mode ``delayed_operation`` operates late by ``times.delayed_by``; one with
    a rate of tripping with no fault trips in the events of rule R18.
    """
    asks = (*host.asks, *unless)
    late = Ask(host.relay, FailureMode.DELAYED_OPERATION)
    sources: list[Input] = []
    spurious = b.components[host.relay].no_fault_per_yr > 0
    if b.has(host.relay, FailureMode.DELAYED_OPERATION):
        b.add(Gate(name=f"{name}: in time", inputs=tuple(inputs), k=k, unless=(*asks, late)))
        b.add(Gate(name=f"{name}: late", inputs=tuple(inputs), k=k, unless=asks, given=(late,)))
        sources = [
            f"{name}: in time",
            b.add(Timer(name=f"{name}: late by", input=f"{name}: late", pick_up=times.delayed_by, drop_out=AT_ONCE)),
        ]
    elif spurious:
        sources = [b.add(Gate(name=f"{name}: in time", inputs=tuple(inputs), k=k, unless=asks))]
    if spurious:
        sources.append(no_fault(b, host.relay))
    if not sources:
        return b.add(Gate(name=name, inputs=tuple(inputs), k=k, unless=asks, contact=contact))
    return b.add(Gate(name=name, inputs=tuple(sources), contact=contact))


def no_fault(b: SchemeBuilder, relay: str) -> str:
    """The signal of a relay that trips with no fault at all (rule R18)."""
    return b.add(
        Sense(name=f"{relay}: trips with no fault", condition=NoFaultTrip(relay), operate=AT_ONCE, reset=AT_ONCE)
    )


def differential(
    b: SchemeBuilder,
    name: str,
    zone: frozenset[str],
    cores: Sequence[tuple[Terminal, Ask]],
    nearby: frozenset[str],
    host: Host,
    times: ElementTimes,
) -> Input:
    """A differential element over a set of CTs: operates for a fault in its zone that any of them feeds.

    A CT whose core is open sees nothing of an internal fault, and unbalances the element for
    a fault nearby that draws current through it. ``nearby`` is also where an over-reach
    (maloperation on a through fault) is asked.
    """
    seen: list[Input] = []
    for terminal, core in cores:
        inside = sense(b, f"{name} sees {terminal.ct}", InZone(zone, (terminal.ct,)), times)
        if b.has(core.component, core.mode):
            inside = b.add(Gate(name=f"{name} measures {terminal.ct}", inputs=(inside,), unless=(core,)))
            through = sense(b, f"{name} through {terminal.ct}", InZone(nearby, (terminal.ct,)), times)
            seen.append(b.add(Gate(name=f"{name} unbalanced by {terminal.ct}", inputs=(through,), given=(core,))))
        seen.append(inside)
    if b.has(host.relay, FailureMode.UNWANTED_OPERATION):
        cts = tuple(t.ct for t, _ in cores)
        outside = sense(b, f"{name}, beyond its zone", InZone(nearby, cts), times)
        given = (Ask(host.relay, FailureMode.UNWANTED_OPERATION),)
        seen.append(b.add(Gate(name=f"{name}, over-reaching", inputs=(outside,), given=given)))
    return b.any_of(f"{name} operated", seen)


@dataclass(frozen=True, slots=True)
class DistanceNeeds:
    """What a distance or directional element stands on besides its relay.

    With ``supervised`` voltage a lost VT winding blocks it; without, it operates in any
    direction once current flows.
    """

    terminals: tuple[Terminal, ...]
    cores: tuple[Ask, ...]
    winding: Ask | None
    supervised: bool = True

    @property
    def unless(self) -> tuple[Ask, ...]:
        """Failures that blind it (rule R5)."""
        vt = (self.winding,) if self.winding is not None and self.supervised else ()
        return (*self.cores, *vt)


@dataclass(frozen=True, slots=True)
class DistanceZone:
    """The elements of one distance zone.

    Attributes
    ----------
    seen : str
        What the zone sees by its setting.
    beyond : str
        What it would also see if it over-reached ('' : not asked).
    anywhere : str
        What it would see without voltage, where that is not supervised ('' : not asked).
    """

    name: str
    seen: str
    beyond: str
    anywhere: str
    needs: DistanceNeeds
    host: Host


def distance_zone(
    b: SchemeBuilder,
    name: str,
    reach: float,
    needs: DistanceNeeds,
    host: Host,
    times: ElementTimes,
    *,
    direction: Direction = Direction.FORWARD,
    over_reach: float = 1.0,
) -> DistanceZone:
    """A distance zone (or a directional overcurrent element) by reach along the line graph.

    ``over_reach`` is the factor by which the reach grows if it over-reaches (rule R15).
    """
    seen = sense(b, name, Reach(needs.terminals, reach, direction), times)
    beyond = anywhere = ""
    if over_reach > 1 and b.has(host.relay, FailureMode.UNWANTED_OPERATION):
        wide = Reach(needs.terminals, reach * over_reach, direction)
        beyond = sense(b, f"{name}, beyond its reach", wide, times)
    lost = needs.winding
    if lost is not None and not needs.supervised and b.has(lost.component, lost.mode):
        both = Reach(needs.terminals, reach, Direction.BOTH)
        anywhere = sense(b, f"{name} on current", both, times)
    return DistanceZone(name, seen, beyond, anywhere, needs, host)


def zone_operated(b: SchemeBuilder, zone: DistanceZone, delay: Delay, what: str = "timer") -> list[Input]:
    """The ways in which a zone operates after its delay; failures are asked when the time has run out."""
    ways: list[Input] = [delayed(b, f"{zone.name} {what}", zone.seen, delay)]
    if zone.beyond:
        waited = delayed(b, f"{zone.name}, beyond its reach, {what}", zone.beyond, delay)
        given = (Ask(zone.host.relay, FailureMode.UNWANTED_OPERATION),)
        ways.append(b.add(Gate(name=f"{zone.name}, over-reaching, {what}", inputs=(waited,), given=given)))
    if zone.anywhere and zone.needs.winding is not None:
        waited = delayed(b, f"{zone.name} on current, {what}", zone.anywhere, delay)
        given = (zone.needs.winding,)
        ways.append(b.add(Gate(name=f"{zone.name} without voltage, {what}", inputs=(waited,), given=given)))
    return ways


def zone_picked_up(b: SchemeBuilder, zone: DistanceZone) -> Input:
    """The zone at once, as permissive schemes use it: over-reach is left to the far end's element to stop."""
    if not zone.anywhere or zone.needs.winding is None:
        return zone.seen
    lost = Gate(name=f"{zone.name} without voltage", inputs=(zone.anywhere,), given=(zone.needs.winding,))
    return b.add(Gate(name=f"{zone.name} or without voltage", inputs=(zone.seen, b.add(lost))))


def vote(b: SchemeBuilder, name: str, outputs: Sequence[str], votes: int) -> str:
    """At least ``votes`` of the outputs (2-out-of-3 and the like)."""
    return b.add(Gate(name=name, inputs=tuple(outputs), k=votes))


def lockout(b: SchemeBuilder, name: str, signal: Input, unit: str, dc: str, operate: Delay) -> str:
    """A lockout relay (86): adds its own time, latches, and is one component for all its contacts (R13)."""
    asks = (Ask(unit, FailureMode.FAILURE_TO_OPERATE), Ask(dc, FailureMode.LOST))
    moving = b.add(Timer(name=f"{name} moving", input=signal, pick_up=operate, drop_out=AT_ONCE))
    return b.add(Latch(name=name, set=b.add(Gate(name=f"{name} operated", inputs=(moving,), unless=asks))))


@dataclass(frozen=True, slots=True)
class ChannelPath:
    """One direction of a channel between two stations (rule R16).

    ``false_when`` is a signal during which a false receipt may occur (a fault near by);
    empty: never.
    """

    unit: str
    sending_dc: str
    receiving_dc: str
    delay: Delay
    late_by: Delay
    false_when: str = ""


Sent = tuple[Input, tuple[Ask, ...]]
"""What is sent over a channel, and the failures at the sending end that keep it from leaving."""


def received(b: SchemeBuilder, name: str, sent: Sequence[Sent], path: ChannelPath) -> str:
    """The receipt at the far end of a channel of what is sent at this one: its rise and its fall take the same way.

    Failures are asked when the receipt would arrive: what keeps it from leaving or from
    arriving holds for the whole run, so it may as well act at the end of the way.
    """
    lost = (
        Ask(path.unit, FailureMode.LOST),
        Ask(path.sending_dc, FailureMode.LOST),
        Ask(path.receiving_dc, FailureMode.LOST),
    )
    late = Ask(path.unit, FailureMode.LATE)
    false = Ask(path.unit, FailureMode.FALSE_RECEIPT)
    ways: list[Input] = []
    for n, (signal, asks) in enumerate(sent):
        way = f"{name} way {n + 1}" if len(sent) > 1 else name
        arrives = b.add(Timer(name=f"{way} under way", input=signal, pick_up=path.delay, drop_out=path.delay))
        kept = (*dict.fromkeys((*asks, *lost)),)
        if b.has(path.unit, FailureMode.LATE):
            held = b.add(Timer(name=f"{way} held", input=arrives, pick_up=AT_ONCE, drop_out=path.late_by))
            let_go = b.add(Timer(name=f"{way} let go", input=held, pick_up=path.late_by, drop_out=AT_ONCE))
            ways.append(b.add(Gate(name=f"{way} late", inputs=(let_go,), unless=kept, given=(late,))))
            kept = (*kept, late)
        ways.append(b.add(Gate(name=f"{way} in time", inputs=(arrives,), unless=kept)))
    if path.false_when and b.has(path.unit, FailureMode.FALSE_RECEIPT):
        blind = (Ask(path.receiving_dc, FailureMode.LOST),)
        ways.append(b.add(Gate(name=f"{name} false", inputs=(path.false_when,), unless=blind, given=(false,))))
    return b.add(Gate(name=name, inputs=tuple(ways)))


def permissive(b: SchemeBuilder, name: str, element: Input, receipts: Sequence[str]) -> str:
    """Permissive trip: the local element AND every receipt (over- or underreaching by what is sent)."""
    inputs = (element, *receipts)
    return b.add(Gate(name=name, inputs=inputs, k=len(inputs)))


def echo(b: SchemeBuilder, name: str, receipt: str, forward: Input, reverse: Input, pulse: Delay) -> str:
    """Echo for a weak or open end: one pulse sent back if nothing is seen here in either direction.

    It is sent once in a run, so two ends never echo each other's echo for ever.
    """
    inputs: tuple[Input, ...] = (receipt, _not(forward), _not(reverse))
    b.add(Gate(name=f"{name} wanted", inputs=inputs, k=3))
    begun = b.add(Latch(name=f"{name} begun", set=f"{name} wanted"))
    over = b.add(Timer(name=f"{name} pulse", input=begun, pick_up=pulse, drop_out=AT_ONCE))
    return b.add(Gate(name=name, inputs=(begun, Not(over)), k=2))


def blocking(b: SchemeBuilder, name: str, waited: Sequence[Input], block: str) -> str:
    """Blocking scheme: the overreaching element, after a coordinating delay, AND NOT a block received."""
    element = b.any_of(f"{name} waited", list(waited))
    return b.add(Gate(name=name, inputs=(element, Not(block)), k=2))


@dataclass(frozen=True, slots=True)
class BreakerFailureTimes:
    """Times of breaker-failure protection; ``retrip`` None: no retrip.

    A trip once given lasts ``dwell`` at least, long enough for a lockout relay to operate.
    """

    timer: Delay = Fixed(150_000)
    retrip: Delay | None = AT_ONCE
    detector_operate: Delay = Fixed(5_000)
    detector_reset: Delay = Fixed(20_000)
    dwell: Delay = Fixed(100_000)

    def __post_init__(self) -> None:
        check_delays(self)


def breaker_failure(
    b: SchemeBuilder,
    breaker: str,
    ct: str,
    initiate: Sequence[str],
    core: Ask,
    host: Host,
    times: BreakerFailureTimes,
    *,
    start_with_current: bool = False,
    auxiliary: bool = False,
) -> tuple[str, str | None]:
    """Breaker failure (50BF, rule R11) of one breaker, by the current in a CT beside it.

    Sealed in by any trip until the current detector resets; operates when the timer has
    expired AND current persists. ``start_with_current``: the timer is started by initiate AND
    current, not by initiate alone. ``auxiliary``: the breaker's 52a contact counts as well as
    current, for trips at low current; a wrong one does not follow the breaker when it opens.

    Returns
    -------
    tuple of str
        The trip output, and the retrip output or None.
    """
    name = f"{breaker}/50BF"
    b.add(
        Sense(
            name=f"{name} current",
            condition=Current((ct,)),
            operate=times.detector_operate,
            reset=times.detector_reset,
        )
    )
    seen: list[Input] = [f"{name} current"]
    measured: list[Input] = [b.add(Gate(name=f"{name} current measured", inputs=(f"{name} current",), unless=(core,)))]
    if auxiliary:
        wrong = (Ask(breaker, FailureMode.AUXILIARY_WRONG),)
        shown: list[Input] = [
            b.add(Gate(name=f"{name} 52a", inputs=(breaker,))),
            b.add(Gate(name=f"{name} 52a wrong", inputs=(Not(breaker),), given=wrong)),
        ]
        seen += shown
        measured += shown
    sealing = b.any_of(f"{name} seal holds", seen)
    persists = b.any_of(f"{name} persists", measured)
    init = b.any_of(f"{name} initiate", list(initiate))
    seal = b.add(Latch(name=f"{name} sealed in", set=init, reset=_not(sealing)))
    started: Input = b.add(Gate(name=f"{name} started", inputs=(init, seal)))
    if start_with_current:
        started = b.add(Gate(name=f"{name} started with current", inputs=(started, sealing), k=2))
    retrip: str | None = None
    element = ElementTimes()
    if times.retrip is not None:
        waited = delayed(b, f"{name} retrip timer", started, times.retrip)
        b.add(Gate(name=f"{name} retrip wanted", inputs=(waited, sealing), k=2))
        mark = Contact("50BF retrip", Role.BREAKER_FAILURE, beyond=Role.BREAKER_FAILURE, relay=host.relay,
                       chain=host.chain, element=breaker, station=host.station)  # fmt: skip
        retrip = b.add(Gate(name=f"{name} retrip", inputs=(f"{name} retrip wanted",), unless=host.asks, contact=mark))
    b.add(Timer(name=f"{name} timer", input=started, pick_up=times.timer, drop_out=AT_ONCE))
    b.add(Gate(name=f"{name} wanted", inputs=(f"{name} timer", persists), k=2))
    mark = Contact("50BF", Role.BREAKER_FAILURE, beyond=Role.BREAKER_FAILURE, relay=host.relay,
                   chain=host.chain, element=breaker, station=host.station)  # fmt: skip
    held = delayed(b, f"{name} held", f"{name} wanted", AT_ONCE, times.dwell)
    return trip_output(b, name, (held,), host, mark, element), retrip


def end_fault(
    b: SchemeBuilder, breaker: str, ct: str, core: Ask, host: Host, delay: Delay, times: ElementTimes
) -> str:
    """End-fault logic for the dead zone between an open breaker and its CT: 52b AND current in the CT.

    A wrong auxiliary contact, one that does not follow the breaker when it opens, blinds it.
    """
    name = f"{breaker}/end fault"
    current = sense(b, f"{name} current", Current((ct,)), times)
    is_open = b.add(
        Gate(name=f"{name} 52b", inputs=(Not(breaker),), unless=(Ask(breaker, FailureMode.AUXILIARY_WRONG),))
    )
    b.add(Gate(name=f"{name} seen", inputs=(current, is_open), k=2))
    waited = delayed(b, f"{name} timer", f"{name} seen", delay)
    mark = Contact("50EF", Role.BREAKER_FAILURE, beyond=Role.BREAKER_FAILURE, relay=host.relay, chain=host.chain,
                   element=breaker, station=host.station)  # fmt: skip
    return trip_output(b, name, (waited,), host, mark, times, unless=(core,))


def _not(item: Input) -> Input:
    return item.signal if isinstance(item, Not) else Not(item)
