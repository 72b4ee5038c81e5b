"""Back-up: local back-up, end-fault logic, and breaker failure around every breaker."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from schemesim.plant.model import SectionKind
from schemesim.plant.terminals import Terminal
from schemesim.plant.zones import around
from schemesim.scheme import functions as fn
from schemesim.scheme.build import SchemeBuilder
from schemesim.scheme.conditions import Direction, InZone, Reach
from schemesim.scheme.elements import Element, Side, coil_of, station_of, transfer_trip
from schemesim.scheme.model import ComponentKind, Role
from schemesim.scheme.policy import Policy, Start


def dress_local_backup(b: SchemeBuilder, e: Element) -> None:
    """Local back-up of a line end, transformer side, generator or feeder, on a relay of its own.

    A directional overcurrent element into the element, timed; and one that looks back
    at the zone behind its breakers, so that a bus is backed up by its own circuits.
    """
    lb = e.policy.local_backup
    if lb is None or e.kind is SectionKind.BUS:
        return
    times = e.policy.times.overcurrent
    for n, side in enumerate(e.sides):
        group = f"{side.station}/{e.name}"
        host = b.host(f"{group}/relay local {n + 1}", side.station, lb.dc, "local")
        unless = [b.core(t.ct, lb.core, f"local back-up of {e.name!r}") for t in side.terminals]
        cts = tuple(t.ct for t in side.terminals)
        base = f"{group}/local {n + 1}"
        if e.kind is SectionKind.LINE:
            winding = b.winding(side.station, e.name, lb.winding, f"local back-up of {e.name!r}")
            if winding is not None:
                unless.append(winding)
            reach = 1.1 * b.plant.section[e.name].length
            element = fn.sense(b, f"{base} 67", Reach(side.terminals, reach, Direction.FORWARD), times)
        else:
            element = fn.sense(b, f"{base} 67", InZone(e.object.zone, cts), times)
        waited = fn.delayed(b, f"{base} 67 timer", element, lb.delay)
        mark = e.contact("67", Role.LOCAL, host)
        forward = fn.trip_output(b, f"{base} 67 trip", (waited,), host, mark, times, unless=unless)
        back = fn.sense(b, f"{base} 67 reverse", Reach(side.terminals, 0.0, Direction.REVERSE), times)
        waited = fn.delayed(b, f"{base} 67 reverse timer", back, lb.bus_delay)
        mark = e.contact("67 reverse", Role.LOCAL, host, _behind(b, side))
        reverse = fn.trip_output(b, f"{base} 67 reverse trip", (waited,), host, mark, times, unless=unless)
        for signal in (forward, reverse):
            _local(b, e, side, signal, lb.coil)


def _local(b: SchemeBuilder, e: Element, side: Side, signal: str, coil: str) -> None:
    for target in e.targets:
        mine = target in side.breakers or (target not in b.plant.device and station_of(b, target) == side.station)
        if mine:
            b.trip(signal, target, coil_of(b, target, coil), e.policy.dc_of_coil(coil))


def _behind(b: SchemeBuilder, side: Side) -> frozenset[str]:
    """Sections of the zones on both sides of the breakers of a side."""
    zones = {z for name in side.breakers for z in b.zones.sides[name]}
    return frozenset().union(*(b.zones.members[z] for z in zones))


def dress_end_faults(b: SchemeBuilder, elements: Sequence[Element], policies: Mapping[str, Policy]) -> None:
    """End-fault logic for each breaker with a CT on one side only: cut out what the open breaker did not."""
    seen: dict[str, set[Terminal]] = {}
    for e in elements:
        for t in e.object.terminals:
            if t.breaker:
                seen.setdefault(t.breaker, set()).add(t)
    for breaker, terminals in sorted(seen.items()):
        policy = policies[breaker]
        cts = {t.ct for t in terminals}
        if not policy.end_fault or len(cts) != 1 or not policy.sets:
            continue
        (ct,) = cts
        device = b.plant.device[breaker]
        ct_zone = b.zones.of[b.plant.device[ct].a]
        s = policy.sets[0]
        host = b.host(f"{breaker}/end-fault relay", device.station, s.dc, "end fault")
        core = b.core(ct, s.core, f"end-fault logic of {breaker!r}")
        out = fn.end_fault(b, breaker, ct, core, host, policy.times.end_fault, policy.times.overcurrent)
        own = [x.name for x in b.plant.sources if x.trips and b.zones.of[x.section] == ct_zone]
        others = sorted(b.zones.border[ct_zone] - {breaker})
        _trip_all(b, out, [*others, *own], device.station, s.coil, s.channel, policy)


def dress_breaker_failure(
    b: SchemeBuilder, cts: Mapping[str, Terminal], policies: Mapping[str, Policy]
) -> None:
    """Breaker failure of every breaker that anything trips (rules R11, R12)."""
    initiated = {breaker: tuple(sorted(signals)) for breaker, signals in b.initiates.items()}
    for breaker, signals in sorted(initiated.items()):
        if breaker not in b.plant.device:
            continue
        policy = policies[breaker]
        bf = policy.breaker_failure
        if bf is None:
            continue
        if breaker not in cts:
            b.errors.add(f"breaker failure of {breaker!r}", "no CT beside it", "a CT beside the breaker")
            continue
        station = b.plant.device[breaker].station
        host = b.host(f"{breaker}/BF relay", station, bf.dc, "breaker failure")
        core = b.core(cts[breaker].ct, bf.core, f"breaker failure of {breaker!r}")
        b.component(breaker, ComponentKind.BREAKER, station)
        out, retrip = fn.breaker_failure(
            b,
            breaker,
            signals,
            core,
            host,
            bf.times,
            start_with_current=bf.start is Start.INITIATE_AND_CURRENT,
            auxiliary=bf.auxiliary,
        )
        if retrip is not None:
            b.trip(retrip, breaker, bf.retrip_coil, policy.dc_of_coil(bf.retrip_coil), initiates=False)
        if policy.lockout:
            unit = b.component(f"{breaker}/86BF {bf.lockout}", ComponentKind.LOCKOUT, station)
            name = f"{breaker}/86BF {bf.lockout}"
            out = fn.lockout(b, name, out, unit, b.dc(station, bf.dc), policy.times.lockout)
        zones = b.zones.sides.get(breaker, ())
        own = [s.name for s in b.plant.sources if s.trips and b.zones.of[s.section] in zones]
        targets = [*sorted(around(b.zones, breaker)), *own]
        _trip_all(
            b, out, targets, station, bf.coil, bf.channel, policy, remote=bf.transfer_trip, initiates=False
        )


def _trip_all(
    b: SchemeBuilder,
    signal: str,
    targets: Sequence[str],
    station: str,
    coil: str,
    channel: str,
    policy: Policy,
    *,
    remote: bool = True,
    initiates: bool = True,
) -> None:
    """Trip breakers here directly and those elsewhere by transfer trip, one for each station."""
    for target in targets:
        where = station_of(b, target)
        if where != station and not remote:
            continue
        wire = signal if where == station else transfer_trip(b, signal, station, where, channel, policy)
        dc = policy.dc_of_coil(coil)
        b.trip(wire, target, coil_of(b, target, coil), dc, initiates=initiates)
