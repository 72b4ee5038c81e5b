"""What a trip goes through on its way to a coil: lockout relays, and channels to other stations."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from schemesim.scheme import functions as fn
from schemesim.scheme.build import SchemeBuilder
from schemesim.scheme.delays import Delay
from schemesim.scheme.functions import ChannelPath
from schemesim.scheme.model import Ask, ComponentKind, Contact, FailureMode, Gate, Input, Role
from schemesim.scheme.policy import Policy, ProtectionSet


@dataclass(frozen=True, slots=True, order=True)
class Path:
    """What a trip goes through: a coil, the DC it is sent on, a lockout relay and a channel, by their labels."""

    coil: str
    dc: str
    lockout: str
    channel: str


def path_of(s: ProtectionSet) -> Path:
    """The trip path of a set."""
    return Path(s.coil, s.dc, s.lockout, s.channel)


def station_of(b: SchemeBuilder, target: str) -> str:
    """Station of a breaker or of a source."""
    device = b.plant.device.get(target)
    return device.station if device is not None else b.plant.source[target].station


def in_station(b: SchemeBuilder, station: str) -> frozenset[str]:
    """The sections of a station: what clears a fault there from there is local back-up."""
    return frozenset(s.name for s in b.plant.sections if s.station == station)


def trip_all(
    b: SchemeBuilder,
    signal: str,
    station: str,
    targets: Iterable[str],
    path: Path,
    policy: Policy,
    *,
    remote: bool = True,
    initiates: bool = True,
    by: str = "",
    of_target: Mapping[str, Policy] | None = None,
) -> None:
    """Trip targets at a station directly, and those at others by transfer trip, one for each station.

    Without ``remote`` the others are left alone; ``initiates``: the trip starts breaker failure. ``by``: who trips.
    The DC domain of a coil is that of its target's policy in ``of_target``, else that of ``policy``.
    """
    for target in targets:
        where = station_of(b, target)
        wire = signal
        if where != station:
            if not remote:
                continue
            wire = transfer_trip(b, signal, station, where, path, policy)
        fed = dict((of_target or {}).get(target, policy).coil_dc).get(path.coil) or policy.dc_of_coil(path.coil)
        b.trip(wire, target, path.coil, fed, by=by, initiates=initiates)


def transfer_trip(b: SchemeBuilder, signal: str, station: str, where: str, path: Path, policy: Policy) -> str:
    """Direct transfer trip: a trip sent over a channel to another station; returns the trip output there.

    The channel's terminals hang on the DC domain of the trip's path at both stations (rule R14).
    """
    first, second = sorted((station, where))
    unit = b.component(f"{first}-{second}/channel {path.channel}", ComponentKind.CHANNEL, first)
    here, there = b.dc(station, path.dc), b.dc(where, path.dc)
    way = ChannelPath(unit, here, there, policy.times.channel, policy.times.channel_late_by)
    on_dc = "" if path.dc == path.channel else f" on DC {path.dc}"
    name = f"{signal} to {where} over channel {path.channel}{on_dc}"
    receipt = fn.received(b, f"{name} received", [(signal, ())], way)
    mark = Contact("transfer trip", Role.MAIN, beyond=Role.MAIN, station=where, element=where)
    return b.add(Gate(name=name, inputs=(receipt,), unless=(Ask(there, FailureMode.LOST),), contact=mark))


def locked_out(
    b: SchemeBuilder, base: str, station: str, wires: Sequence[tuple[str, Path]], operate: Delay
) -> list[tuple[str, Path]]:
    """The same trips through lockout relays: any wire of a lockout operates it, and it trips on all their paths.

    A lockout relay that sets of two DC domains share hangs on the first of them.
    """
    out: list[tuple[str, Path]] = []
    for label in sorted({path.lockout for _, path in wires}):
        name = f"{base}/86 {label}"
        mine = [(signal, path) for signal, path in wires if path.lockout == label]
        signals: list[Input] = list(dict.fromkeys(signal for signal, _ in mine))
        unit = b.component(name, ComponentKind.LOCKOUT, station)
        dc = b.dc(station, mine[0][1].dc)
        contact = fn.lockout(b, name, b.any_of(f"{name} operated by", signals), unit, dc, operate)
        out += [(contact, path) for _, path in mine]
    return out
