"""Back-up: local back-up, end-fault logic, and breaker failure around every breaker."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from schemesim.plant.model import SectionKind
from schemesim.plant.terminals import Terminal
from schemesim.plant.zones import around
from schemesim.scheme import functions as fn
from schemesim.scheme.build import SchemeBuilder
from schemesim.scheme.conditions import Direction, InZone
from schemesim.scheme.elements import Element, Side, to_far_end, units_in
from schemesim.scheme.functions import DistanceNeeds
from schemesim.scheme.model import ComponentKind, Gate, Input, Role
from schemesim.scheme.policy import LocalBackup, Policy, Start
from schemesim.scheme.tripping import Path, in_station, path_of, station_of, trip_all


def dress_local_backup(b: SchemeBuilder, e: Element) -> None:
    """Local back-up of a line end, transformer side, generator or feeder, on a relay of its own.

    A directional overcurrent element into the element, timed; and one that looks back
    at the zone behind its breakers, so that a bus is backed up by its own circuits.
    """
    if e.kind is SectionKind.BUS:
        return
    times = e.policy.times.overcurrent
    for n, side in enumerate(e.sides):
        p = side.policy or e.policy
        lb = p.local_backup
        if lb is None:
            continue
        group = f"{side.station}/{e.name}"
        host = b.host(f"{group}/relay local {n + 1}", side.station, lb.dc, "local")
        what = f"local back-up of {e.name!r}"
        line = e.kind is SectionKind.LINE
        needs = DistanceNeeds(
            side.terminals,
            tuple(b.core(t.ct, lb.core, what) for t in side.terminals),
            b.winding(side.station, e.name, lb.winding, what) if line else None,
            e.policy.vt_supervision,
        )
        base = f"{group}/local {n + 1}"
        ways: list[Input]
        if line:
            reach = 1.1 * to_far_end(b, e, side)
            ways = fn.zone_operated(b, fn.distance_zone(b, f"{base} 67", reach, needs, host, times), lb.delay)
        else:
            ways = _unit_operated(b, e, side, base, lb)
        mark = e.contact("67", Role.LOCAL, host)
        forward = fn.trip_output(b, f"{base} 67 trip", ways, host, mark, times, unless=needs.unless if line else ())
        back = fn.distance_zone(b, f"{base} 67 reverse", 0.0, needs, host, times, direction=Direction.REVERSE)
        ways = fn.zone_operated(b, back, lb.bus_delay)
        mark = e.contact("67 reverse", Role.LOCAL, host, e.object.zone | in_station(b, side.station))
        reverse = fn.trip_output(b, f"{base} 67 reverse trip", ways, host, mark, times, unless=needs.unless)
        for signal in (forward, reverse):
            for breaker in side.breakers:
                b.trip(signal, breaker, lb.coil, p.dc_of_coil(lb.coil), by=e.name)
        units = [t for t in e.targets if t not in b.plant.device and station_of(b, t) == side.station]
        for unit in units:  # a fault behind its breaker is no reason to trip a unit
            b.trip(forward, unit, lb.coil, p.dc_of_coil(lb.coil), by=e.name)


def _unit_operated(b: SchemeBuilder, e: Element, side: Side, base: str, lb: LocalBackup) -> list[Input]:
    """Local back-up of anything but a line: by the CTs of this side, and by the neutral CTs of units inside.

    The latter see what a unit feeds when its breaker is open.
    """
    ways: list[Input] = []
    here = tuple(t.ct for t in side.terminals)
    what, units = f"local back-up of {e.name!r}", units_in(b, e)
    for name, cts, cores in (
        (f"{base} 67", here, tuple(b.core(ct, lb.core, what) for ct in here)),
        (f"{base} 67 neutral", units, tuple(b.neutral(u, lb.core) for u in units)),
    ):
        if cts:
            element = fn.sense(b, name, InZone(e.object.zone, cts), e.policy.times.overcurrent)
            waited = fn.delayed(b, f"{name} timer", element, lb.unit_delay)
            ways.append(b.add(Gate(name=f"{name} measured", inputs=(waited,), unless=cores)))
    return ways


def dress_end_faults(
    b: SchemeBuilder, elements: Sequence[Element], policies: Mapping[str, Policy], of_target: Mapping[str, Policy]
) -> None:
    """End-fault logic for each breaker with a CT on one side only: cut out what the open breaker did not.

    ``of_target``: policies that say which DC domain feeds the coils of what is tripped, by its name.
    """
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
        by = f"end-fault logic of {breaker}"
        trip_all(b, out, device.station, [*others, *own], path_of(s), policy, by=by, of_target=of_target)


def dress_breaker_failure(
    b: SchemeBuilder, elements: Sequence[Element], policies: Mapping[str, Policy], of_target: Mapping[str, Policy]
) -> None:
    """Breaker failure of every breaker that anything trips (rules R11, R12).

    Its detector measures a CT beside the breaker (the first by name where there are two): where
    that CT stands on one side only, current in the dead zone between counts as the breaker's.
    """
    cts: dict[str, str] = {}
    for t in sorted(t for e in elements for t in e.object.terminals):
        cts.setdefault(t.breaker, t.ct)
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
        core = b.core(cts[breaker], bf.core, f"breaker failure of {breaker!r}")
        b.component(breaker, ComponentKind.BREAKER, station)
        out, retrip = fn.breaker_failure(
            b,
            breaker,
            cts[breaker],
            signals,
            core,
            host,
            bf.times,
            start_with_current=bf.start is Start.INITIATE_AND_CURRENT,
            auxiliary=bf.auxiliary,
        )
        if retrip is not None:
            fed = policy.dc_of_coil(bf.retrip_coil)
            b.trip(retrip, breaker, bf.retrip_coil, fed, by=f"retrip of {breaker}", initiates=False)
        if policy.lockout:
            unit = b.component(f"{breaker}/86BF {bf.lockout}", ComponentKind.LOCKOUT, station)
            name = f"{breaker}/86BF {bf.lockout}"
            out = fn.lockout(b, name, out, unit, b.dc(station, bf.dc), policy.times.lockout)
        zones = b.zones.sides.get(breaker, ())
        own = [s.name for s in b.plant.sources if s.trips and b.zones.of[s.section] in zones]
        targets = [*sorted(around(b.zones, breaker)), *own]
        path = Path(bf.coil, bf.dc, bf.lockout, bf.channel)
        trip_all(
            b, out, station, targets, path, policy, remote=bf.transfer_trip, initiates=False,
            by=f"breaker failure of {breaker}", of_target=of_target,
        )  # fmt: skip
