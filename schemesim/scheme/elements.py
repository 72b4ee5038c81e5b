"""Main protection of elements: differential units, lines, feeders, and what they trip."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass

from schemesim.plant.model import DeviceKind, SectionKind
from schemesim.plant.terminals import ProtectedObject, Terminal, other_end
from schemesim.scheme import functions as fn
from schemesim.scheme.build import Host, SchemeBuilder
from schemesim.scheme.conditions import Direction, InZone, Reach
from schemesim.scheme.delays import Delay
from schemesim.scheme.functions import AT_ONCE, ChannelPath, DistanceNeeds, DistanceZone
from schemesim.scheme.model import (
    Ask,
    ComponentKind,
    Contact,
    FailureMode,
    Input,
    Role,
)
from schemesim.scheme.policy import LineScheme, Policy, ProtectionSet
from schemesim.scheme.tripping import Path, in_station, locked_out, path_of, station_of, trip_all

FUNCTION = {
    SectionKind.BUS: "87B",
    SectionKind.TRANSFORMER: "87T",
    SectionKind.GENERATOR: "87G",
    SectionKind.FEEDER: "50",
}


@dataclass(frozen=True)
class Side:
    """One end of an element: its station, the place along it, the CTs there and the breakers to trip.

    ``policy`` is that of an exception for this end alone.
    """

    station: str
    at: float
    terminals: tuple[Terminal, ...]
    breakers: tuple[str, ...]
    policy: Policy | None = None


@dataclass(frozen=True)
class Element:
    """An element to protect, with its policy and what follows from the plant."""

    object: ProtectedObject
    policy: Policy
    kind: SectionKind
    sides: tuple[Side, ...]
    nearby: frozenset[str]
    targets: tuple[str, ...]

    @property
    def name(self) -> str:
        """Name of the element."""
        return self.object.element

    def contact(self, function: str, role: Role, host: Host, protects: frozenset[str] | None = None) -> Contact:
        """The mark of a trip output of this element."""
        beyond = Role.UNWANTED if role is Role.MAIN else Role.REMOTE
        return Contact(
            function, role, self.object.zone if protects is None else protects, beyond,
            relay=host.relay, chain=host.chain, element=self.name, station=host.station,
        )  # fmt: skip


def element_of(b: SchemeBuilder, o: ProtectedObject, policy: Policy) -> Element | None:
    """The element of a protected object; border breakers without a CT are mistakes."""
    zone = b.zones.of[o.element]
    border = b.zones.border[zone]
    kind = b.plant.section[o.element].kind
    if not border:
        return None
    for name in o.blind:
        if policy.sets:
            b.errors.add(f"protection of {o.element!r}", f"no CT at breaker {name!r}", "a CT beside the breaker")
    if not o.terminals:
        return None
    own = tuple(s.name for s in b.plant.sources if s.trips and s.section in b.zones.members[zone])
    nearby = frozenset().union(*(b.zones.members[z] for name in border for z in b.zones.sides[name]))
    return Element(
        object=o,
        policy=policy,
        kind=kind,
        sides=_sides(b, o, zone),
        nearby=nearby - b.zones.members[zone] - o.zone,
        targets=tuple(sorted(border)) + own,
    )


def _sides(b: SchemeBuilder, o: ProtectedObject, zone: str) -> tuple[Side, ...]:
    """Terminals grouped by the end of the element at which they stand.

    A line has an end for each place and station, a transformer one for each device it is joined by.
    """
    ends: dict[tuple[float, str], set[str]] = {}
    by = {SectionKind.LINE: "station", SectionKind.TRANSFORMER: "name"}.get(b.plant.section[o.element].kind)
    for d in b.plant.at_section[o.element]:
        if d.closed:
            at = d.a_at if d.a == o.element else d.b_at
            ends.setdefault((at, getattr(d, by) if by else ""), set()).add(d.name)
    sides: list[Side] = []
    for (at, _), devices in sorted(ends.items()):
        terminals, breakers = _behind(b, o, devices)
        if terminals:
            station = b.plant.device[terminals[0].ct].station
            mine = tuple(x for x in breakers if x in b.zones.border[zone])
            sides.append(Side(station, at, terminals, mine))
    return tuple(sides)


def _behind(b: SchemeBuilder, o: ProtectedObject, devices: set[str]) -> tuple[tuple[Terminal, ...], tuple[str, ...]]:
    """Terminals and breakers met when leaving an element through some of its devices."""
    by_ct = {t.ct: t for t in o.terminals}
    by_breaker = {t.breaker: t for t in o.terminals if t.breaker}
    found: set[Terminal] = set()
    breakers: set[str] = set()
    queue: deque[str] = deque([o.element])
    seen = {o.element}
    while queue:
        here = queue.popleft()
        for d in b.plant.at_section[here]:
            if not d.closed or (here == o.element and d.name not in devices):
                continue
            if d.kind is DeviceKind.BREAKER:
                breakers.add(d.name)
                if d.name in by_breaker:
                    found.add(by_breaker[d.name])
                continue
            if d.name in by_ct and not by_ct[d.name].breaker:
                found.add(by_ct[d.name])
            there = other_end(d, here)
            if there not in seen:
                seen.add(there)
                queue.append(there)
    return tuple(sorted(found)), tuple(sorted(breakers))


# --- units: bus, transformer, generator, feeder -------------------------------------------


def units_in(b: SchemeBuilder, e: Element) -> tuple[str, ...]:
    """Units inside the protected zone of an element: their neutral CTs bound it too, and see what they feed."""
    return tuple(s.name for s in b.plant.sources if s.trips and s.section in e.object.zone)


def dress_unit(b: SchemeBuilder, e: Element) -> None:
    """Main protection of a bus, transformer or generator (differential) or feeder (overcurrent)."""
    p, function = e.policy, FUNCTION[e.kind]
    station = e.sides[0].station if e.sides else ""
    outputs: list[tuple[ProtectionSet, str]] = []
    for s in p.sets:
        base = f"{station}/{e.name}/{s.label}"
        host = b.host(f"{station}/{e.name}/relay {s.label}", station, s.dc, s.label, f"{station}/{e.name}")
        cores = [(t, b.core(t.ct, s.core, f"{function} set {s.label} of {e.name!r}")) for t in e.object.terminals]
        cores += [(Terminal(u, b.plant.source[u].section), b.neutral(u, s.core)) for u in units_in(b, e)]
        if e.kind is SectionKind.FEEDER:
            times = p.times.overcurrent
            element = fn.sense(b, f"{base} 50", InZone(e.object.zone, tuple(t.ct for t, _ in cores)), times)
            unless = tuple(core for _, core in cores)
            signal: Input = element
        else:
            times, unless = p.times.differential, ()
            signal = fn.differential(b, f"{base} {function}", e.object.zone, cores, e.nearby, host, times)
        mark = e.contact(function, Role.MAIN, host)
        outputs.append((s, fn.trip_output(b, f"{base} {function} trip", (signal,), host, mark, times, unless=unless)))
    through_lockout = p.lockout and e.kind is not SectionKind.FEEDER
    base = f"{station}/{e.name}"
    wires = _voted(b, e, base, outputs)
    if through_lockout:
        wires = locked_out(b, base, station, wires, p.times.lockout)
    for out, path in wires:
        trip_all(b, out, station, e.targets, path, p, remote=p.intertrip, by=e.name)
    if p.remote_backup and e.kind in (SectionKind.TRANSFORMER, SectionKind.GENERATOR) and p.sets:
        _timed_backup(b, e)


def _voted(
    b: SchemeBuilder, e: Element, base: str, outputs: list[tuple[ProtectionSet, str]]
) -> list[tuple[str, Path]]:
    """Trips to wire and their paths; sets on one path share the wire."""
    if e.policy.votes > 1:
        voted = fn.vote(b, f"{base}/{e.policy.votes}oo{len(outputs)}", [o for _, o in outputs], e.policy.votes)
        return [(voted, path) for path in sorted({path_of(s) for s, _ in outputs})]
    wires: dict[Path, list[Input]] = {}
    for s, out in outputs:
        wires.setdefault(path_of(s), []).append(out)
    return [
        (str(b.any_of(f"{base}/trip coil {p.coil} lockout {p.lockout} dc {p.dc} channel {p.channel}", outs)), p)
        for p, outs in sorted(wires.items())
    ]


def _timed_backup(b: SchemeBuilder, e: Element) -> None:
    """Timed overcurrent of transformers (through them) and generators (out of them) for the buses beyond.

    Each side has it at its own station, so the breakers there need no channel.
    """
    p = e.policy
    s = p.sets[0]
    length = b.plant.section[e.name].length
    for n, side in enumerate(e.sides):
        station = side.station
        host = b.host(f"{station}/{e.name}/relay timed", station, s.dc, "timed")
        base = f"{station}/{e.name}/timed {n + 1} 51"
        unless = tuple(b.core(t.ct, s.core, f"51 of {e.name!r}") for t in side.terminals)
        direction = Direction.REVERSE if e.kind is SectionKind.GENERATOR else Direction.FORWARD
        element = fn.sense(b, base, Reach(side.terminals, length, direction), p.times.overcurrent)
        waited = fn.delayed(b, f"{base} timer", element, p.reaches.transformer_backup_delay)
        mark = e.contact("51", Role.LOCAL, host, e.object.zone | in_station(b, station))
        out = fn.trip_output(b, f"{base} trip", (waited,), host, mark, p.times.overcurrent, unless=unless)
        trip_all(b, out, station, e.targets, path_of(s), p, remote=p.intertrip, by=e.name)


# --- lines --------------------------------------------------------------------------------


@dataclass(frozen=True)
class _LineEnd:
    """One set at one end of a line, in the making."""

    side: Side
    host: Host
    needs: DistanceNeeds
    base: str
    core: str


def dress_line(b: SchemeBuilder, e: Element) -> None:
    """Main protection of a line: stepped distance at each end, and the scheme of each set across them."""
    p = e.policy
    outputs: dict[tuple[int, str], list[str]] = {}
    for s in p.sets:
        ends = [_line_end(b, e, s, side) for side in e.sides]
        zone_1: list[DistanceZone] = []
        zone_2: list[DistanceZone] = []
        for n, end in enumerate(ends):
            out = outputs.setdefault((n, s.label), [])
            one = _zone(b, e, end, "21-1", p.reaches.zone_1, p.reaches.over_reach)
            two = _zone(b, e, end, "21-2", p.reaches.zone_2, p.reaches.over_reach)
            zone_1.append(one)
            zone_2.append(two)
            out.append(_zone_trip(b, e, one, "21-1", AT_ONCE, Role.MAIN))
            out.append(_zone_trip(b, e, two, "21-2", p.reaches.zone_2_delay, Role.MAIN_TIMED))
            if p.remote_backup:
                three = _zone(b, e, end, "21-3", p.reaches.zone_3, 1.0)
                out.append(_zone_trip(b, e, three, "21-3", p.reaches.zone_3_delay, Role.MAIN_TIMED))
        for n, trip in enumerate(_line_scheme(b, e, s, ends, zone_1, zone_2)):
            if trip:
                outputs[(n, s.label)].append(trip)
    for n, side in enumerate(e.sides):
        _wire_end(b, e, side, n, outputs)


def _wire_end(
    b: SchemeBuilder, e: Element, side: Side, n: int, outputs: dict[tuple[int, str], list[str]]
) -> None:
    p = e.policy
    base = f"{side.station}/{e.name}"
    paths = {s.label: path_of(_at(s, side)) for s in p.sets}
    if p.votes > 1:
        merged = [str(b.any_of(f"{base}/{s.label} trip", list(outputs[(n, s.label)]))) for s in p.sets]
        voted = fn.vote(b, f"{base}/{p.votes}oo{len(merged)}", merged, p.votes)
        wires = [(voted, paths[s.label]) for s in p.sets]
    else:
        wires = [(out, paths[s.label]) for s in p.sets for out in outputs[(n, s.label)]]
    theirs = {t for other in e.sides for t in _own_targets(b, e, other)}
    mine = _own_targets(b, e, side)
    targets = [t for t in e.targets if t in mine or t not in theirs]
    elsewhere = {t: p for t in targets if t not in mine}
    own = side.policy or p
    for signal, path in wires:
        trip_all(b, signal, side.station, targets, path, own, remote=p.intertrip, by=e.name, of_target=elsewhere)


def _own_targets(b: SchemeBuilder, e: Element, side: Side) -> frozenset[str]:
    """What the relays of one end of a line trip at their station: its breakers, and sources inside the line's zone."""
    near = (t for t in e.targets if t not in b.plant.device and station_of(b, t) == side.station)
    return frozenset((*near, *side.breakers))


def _line_end(b: SchemeBuilder, e: Element, s: ProtectionSet, side: Side) -> _LineEnd:
    group, s = f"{side.station}/{e.name}", _at(s, side)
    host = b.host(f"{group}/relay {s.label}", side.station, s.dc, s.label, group)
    what = f"distance set {s.label} of {e.name!r}"
    cores = tuple(b.core(t.ct, s.core, what) for t in side.terminals)
    winding = b.winding(side.station, e.name, s.winding, what)
    needs = DistanceNeeds(side.terminals, cores, winding, e.policy.vt_supervision)
    return _LineEnd(side, host, needs, f"{group}/{s.label}", s.core)


def _at(s: ProtectionSet, side: Side) -> ProtectionSet:
    """A set as it is at one end of a line: the same relays and channel, on what the end's own policy says."""
    return next((own for own in side.policy.sets if own.label == s.label), s) if side.policy else s


def to_far_end(b: SchemeBuilder, e: Element, side: Side, *, nearest: bool = False) -> float:
    """Length from one end of a line to the farthest other end (or the nearest: zone 1 stops short of it)."""
    shares = [abs(other.at - side.at) for other in e.sides if other.at != side.at] or [1.0]
    return (min(shares) if nearest else max(shares)) * b.plant.section[e.name].length


def _zone(b: SchemeBuilder, e: Element, end: _LineEnd, label: str, share: float, over: float) -> DistanceZone:
    length = to_far_end(b, e, end.side, nearest=label == "21-1")
    times = e.policy.times.distance
    return fn.distance_zone(
        b, f"{end.base} {label}", share * length, end.needs, end.host, times, over_reach=over
    )


def _zone_trip(b: SchemeBuilder, e: Element, zone: DistanceZone, label: str, delay: Delay, role: Role) -> str:
    ways = fn.zone_operated(b, zone, delay)
    mark = e.contact(label, role, zone.host)
    times = e.policy.times.distance
    return fn.trip_output(b, f"{zone.name} trip", ways, zone.host, mark, times, unless=zone.needs.unless)


def _line_scheme(
    b: SchemeBuilder,
    e: Element,
    s: ProtectionSet,
    ends: list[_LineEnd],
    zone_1: list[DistanceZone],
    zone_2: list[DistanceZone],
) -> list[str]:
    """The trip output of a set's scheme at each end ('' for none)."""
    if s.line is LineScheme.DISTANCE or len(ends) < 2:
        return ["" for _ in ends]
    if s.line is LineScheme.DIFFERENTIAL:
        return _line_differential(b, e, s, ends)
    echoing = e.policy.echo and s.line is LineScheme.PERMISSIVE_OVERREACH
    reverse = [_reverse(b, e, end) for end in ends] if echoing or s.line is LineScheme.BLOCKING else []
    sending = {LineScheme.PERMISSIVE_UNDERREACH: zone_1, LineScheme.BLOCKING: reverse}.get(s.line, zone_2)
    receipts = [_receipts(b, e, s, ends, n, sending, zone_2, echoing) for n in range(len(ends))]
    trips: list[str] = []
    for n, end in enumerate(ends):
        name = f"{end.base} 85"
        element = fn.zone_picked_up(b, zone_2[n])
        if echoing:
            receipt = str(b.any_of(f"{name} receipt", list(receipts[n])))
            fn.echo(b, f"{name} echo", receipt, element, reverse[n].seen, e.policy.times.echo_pulse)
        if s.line is LineScheme.BLOCKING:
            block = str(b.any_of(f"{name} block", list(receipts[n])))
            waited = fn.zone_operated(b, zone_2[n], e.policy.times.coordinating, "coordinating")
            signal = fn.blocking(b, name, waited, block)
        else:
            received = list(receipts[n])
            if s.line is LineScheme.PERMISSIVE_UNDERREACH:  # one end that sees it in zone 1 is proof enough
                received = [str(b.any_of(f"{name} permitted", list(receipts[n])))]
            signal = fn.permissive(b, name, element, received)
        mark = e.contact("85-21", Role.MAIN, end.host)
        times = e.policy.times.distance
        trips.append(
            fn.trip_output(b, f"{name} trip", (signal,), end.host, mark, times, unless=end.needs.unless)
        )
    return trips


def _reverse(b: SchemeBuilder, e: Element, end: _LineEnd) -> DistanceZone:
    reach = e.policy.reaches.reverse * to_far_end(b, e, end.side)
    times = e.policy.times.distance
    return fn.distance_zone(
        b, f"{end.base} 21 reverse", reach, end.needs, end.host, times, direction=Direction.REVERSE
    )


def _receipts(
    b: SchemeBuilder,
    e: Element,
    s: ProtectionSet,
    ends: list[_LineEnd],
    n: int,
    sending: list[DistanceZone],
    zone_2: list[DistanceZone],
    echoing: bool,
) -> list[str]:
    """What end ``n`` receives from each other end."""
    unit = b.component(f"{e.name}/channel {s.channel}", ComponentKind.CHANNEL)
    here, times, out = ends[n], e.policy.times, []
    for m, there in enumerate(ends):
        if m == n:
            continue
        dcs = (there.host.dc, here.host.dc)
        path = ChannelPath(unit, *dcs, times.channel, times.channel_late_by, zone_2[n].seen)
        asks = (*there.host.asks, *there.needs.unless)
        sent: list[fn.Sent] = [(fn.zone_picked_up(b, sending[m]), asks)]
        if echoing:
            sent.append((f"{there.base} 85 echo", there.host.asks))
        out.append(fn.received(b, f"{here.base} 85 from {there.side.station}", sent, path))
    return out


def _line_differential(b: SchemeBuilder, e: Element, s: ProtectionSet, ends: list[_LineEnd]) -> list[str]:
    """Line differential over a channel: it stops on loss of the channel or of any end's relay (R16)."""
    unit = b.component(f"{e.name}/channel {s.channel}", ComponentKind.CHANNEL)
    trips: list[str] = []
    for end in ends:
        what = f"87L set {s.label} of {e.name!r}"
        cores = [(t, b.core(t.ct, other.core, what)) for other in ends for t in other.side.terminals]
        name = f"{end.base} 87L"
        times = e.policy.times.differential
        element = fn.differential(b, name, e.object.zone, cores, e.nearby, end.host, times)
        unless = [Ask(unit, FailureMode.LOST), Ask(unit, FailureMode.LATE)]
        for other in ends:
            if other is not end:
                unless += other.host.asks
        mark = e.contact("87L", Role.MAIN, end.host)
        trips.append(fn.trip_output(b, f"{name} trip", (element,), end.host, mark, times, unless=unless))
    return trips

