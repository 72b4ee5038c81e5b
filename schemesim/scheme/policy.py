"""Protection policies: what a whole plant is dressed with in one call.

A policy says which sets of protection every element gets and what each set stands on
(CT core, VT winding, DC supply, trip coil, channel), which local and remote back-up
stands behind them, and how breaker failure is done. It is inert; ``dress`` applies it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields, replace
from enum import StrEnum

from schemesim.errors import ErrorList, nearest
from schemesim.scheme.build import BreakerTimes
from schemesim.scheme.delays import Delay, Fixed, check_delays
from schemesim.scheme.functions import BreakerFailureTimes, ElementTimes

_LABEL = "a label: text that is not empty, without outer blanks"


def _is_label(value: object) -> bool:
    return isinstance(value, str) and bool(value) and value == value.strip()


def _check_labels(owner: object, *names: str) -> None:
    errors = ErrorList()
    for name in names:
        value = getattr(owner, name)
        if not _is_label(value):
            errors.add(f"{name} of {type(owner).__name__}", value, _LABEL)
    errors.raise_if_any()


class LineScheme(StrEnum):
    """How a set of protection clears the whole of a line.

    All but ``differential`` keep stepped distance zones behind the scheme; a
    differential set has them as fall-back in the same relay too.
    """

    DISTANCE = "distance"
    DIFFERENTIAL = "differential"
    PERMISSIVE_OVERREACH = "permissive_overreach"
    PERMISSIVE_UNDERREACH = "permissive_underreach"
    BLOCKING = "blocking"


class Start(StrEnum):
    """What starts a breaker-failure timer."""

    INITIATE = "initiate"
    INITIATE_AND_CURRENT = "initiate_and_current"


@dataclass(frozen=True, slots=True, kw_only=True)
class ProtectionSet:
    """One set of main protection and the chain it stands on.

    Parameters
    ----------
    label : str
        ``"1"``, ``"2"`` …
    core, winding, dc, coil, channel : str
        Labels of the CT core, VT winding, DC domain, trip coil and channel it uses. Two
        sets with equal labels share the item: a duplicate of the relay only. Two sets
        with different labels throughout are a duplicate of the whole chain.
    lockout : str
        Label of the lockout relay that bus and transformer trips go through.
    line : LineScheme
    """

    label: str = "1"
    core: str = "1"
    winding: str = "1"
    dc: str = "1"
    coil: str = "1"
    channel: str = "1"
    lockout: str = "1"
    line: LineScheme = LineScheme.DISTANCE

    def __post_init__(self) -> None:
        _check_labels(self, "label", "core", "winding", "dc", "coil", "channel", "lockout")


@dataclass(frozen=True, slots=True, kw_only=True)
class LocalBackup:
    """Local back-up on a relay of its own: directional, timed, reverse-looking for its bus.

    ``bus_delay`` of the reverse-looking element has to outlast breaker failure around the bus
    and to end, breaker and reset included, before zone 2 of the remote ends runs out, or these
    clear the bus instead. ``delay`` of a line's forward element, which sees past the remote bus, has to
    outlast the local back-up there; ``unit_delay`` of transformers, generators and feeders, which see
    their own zone only, has to come before ``bus_delay`` of the circuits beside them.
    """

    core: str = "3"
    winding: str = "1"
    dc: str = "1"
    coil: str = "1"
    delay: Delay = Fixed(400_000)
    bus_delay: Delay = Fixed(270_000)
    unit_delay: Delay = Fixed(150_000)

    def __post_init__(self) -> None:
        check_delays(self)
        _check_labels(self, "core", "winding", "dc", "coil")


@dataclass(frozen=True, slots=True, kw_only=True)
class BreakerFailurePolicy:
    """Breaker-failure protection of every breaker (rules R11, R12).

    ``transfer_trip``: remote breakers around a failed one are tripped over a channel;
    without it they are left to remote back-up.
    """

    times: BreakerFailureTimes = field(default_factory=BreakerFailureTimes)
    start: Start = Start.INITIATE
    auxiliary: bool = False
    core: str = "3"
    dc: str = "1"
    coil: str = "1"
    retrip_coil: str = "2"
    lockout: str = "1"
    channel: str = "1"
    transfer_trip: bool = True

    def __post_init__(self) -> None:
        _check_labels(self, "core", "dc", "coil", "retrip_coil", "lockout", "channel")


@dataclass(frozen=True, slots=True, kw_only=True)
class Reaches:
    """Reaches of stepped distance as shares of the line's length, and their times.

    Zone 1 80 %, zone 2 120 % or to the end of the line and a little more, 0.3–0.5 s, zone 3
    about 1 s are common practice.
    """

    zone_1: float = 0.8
    zone_2: float = 1.2
    zone_2_delay: Delay = Fixed(350_000)
    zone_3: float = 2.2
    zone_3_delay: Delay = Fixed(1_000_000)
    reverse: float = 0.5
    transformer_backup_delay: Delay = Fixed(1_200_000)
    over_reach: float = 1.3

    def __post_init__(self) -> None:
        check_delays(self)


@dataclass(frozen=True, slots=True, kw_only=True)
class PolicyTimes:
    """Times of relays, channels, lockouts and breakers."""

    differential: ElementTimes = field(default_factory=ElementTimes)
    distance: ElementTimes = field(default_factory=ElementTimes)
    overcurrent: ElementTimes = field(default_factory=ElementTimes)
    breaker: BreakerTimes = field(default_factory=BreakerTimes)
    lockout: Delay = Fixed(10_000)
    channel: Delay = Fixed(15_000)
    channel_late_by: Delay = Fixed(100_000)
    coordinating: Delay = Fixed(30_000)
    echo_pulse: Delay = Fixed(150_000)
    end_fault: Delay = Fixed(40_000)

    def __post_init__(self) -> None:
        check_delays(self)


@dataclass(frozen=True, slots=True, kw_only=True)
class Policy:
    """What a plant (or one element, as an exception) is protected with.

    Parameters
    ----------
    name : str
    sets : tuple of ProtectionSet
        Sets of main protection; empty: none.
    votes : int
        How many sets must agree to trip (2 with three sets: 2-out-of-3).
    local_backup : LocalBackup or None
    breaker_failure : BreakerFailurePolicy or None
    remote_backup : bool
        Zone 3 of lines and the timed back-up of transformers and generators.
    lockout : bool
        Bus, transformer and generator trips go through a lockout relay (86).
    intertrip : bool
        An element cut out by breakers at another station trips them over a channel.
    end_fault : bool
        End-fault logic where a breaker has a CT on one side only.
    echo : bool
        Echo of a permissive signal at a weak or open end.
    vt_supervision : bool
        A lost VT winding blocks distance elements rather than letting them trip.
    coil_dc : tuple of (coil label, DC label), or a mapping
        Which DC domain feeds each trip coil.
    """

    name: str = "single set"
    sets: tuple[ProtectionSet, ...] = (ProtectionSet(),)
    votes: int = 1
    local_backup: LocalBackup | None = None
    breaker_failure: BreakerFailurePolicy | None = None
    remote_backup: bool = True
    lockout: bool = True
    intertrip: bool = True
    end_fault: bool = False
    echo: bool = False
    vt_supervision: bool = True
    coil_dc: tuple[tuple[str, str], ...] = (("1", "1"), ("2", "2"))
    reaches: Reaches = field(default_factory=Reaches)
    times: PolicyTimes = field(default_factory=PolicyTimes)

    def __post_init__(self) -> None:
        errors = ErrorList()
        if isinstance(self.coil_dc, Mapping):
            object.__setattr__(self, "coil_dc", tuple(self.coil_dc.items()))
        for coil, dc in self.coil_dc:
            for what, value in (("coil", coil), ("DC", dc)):
                if not _is_label(value):
                    errors.add(f"{what} in coil_dc of policy {self.name!r}", value, _LABEL)
        labels = [s.label for s in self.sets]
        if len(set(labels)) < len(labels):
            errors.add(f"sets of policy {self.name!r}", labels, "labels not used twice")
        if not 1 <= self.votes <= max(len(self.sets), 1):
            errors.add(f"votes of policy {self.name!r}", self.votes, f"a whole number from 1 to {len(self.sets)}")
        r = self.reaches
        if not 0 < r.zone_1 <= r.zone_2 <= r.zone_3:
            errors.add(
                f"reaches of policy {self.name!r}",
                [r.zone_1, r.zone_2, r.zone_3],
                "zone 1, 2 and 3 over zero and none shorter than the one before",
            )
        if not r.over_reach >= 1 or not r.reverse >= 0:
            errors.add(
                f"reaches of policy {self.name!r}", [r.over_reach, r.reverse], "over_reach ≥ 1 and reverse ≥ 0"
            )
        fed = dict(self.coil_dc)
        coils = {s.coil for s in self.sets}
        if self.local_backup:
            coils.add(self.local_backup.coil)
        if self.breaker_failure:
            coils |= {self.breaker_failure.coil, self.breaker_failure.retrip_coil}
        for coil in sorted(coils - set(fed)):
            errors.add(f"coil_dc of policy {self.name!r}", coil, f"a DC domain for each coil used; has {sorted(fed)}")
        errors.raise_if_any()

    def dc_of_coil(self, coil: str) -> str:
        """The DC domain that feeds a trip coil."""
        return dict(self.coil_dc)[coil]


def single_set(**changes: object) -> Policy:
    """One set of main protection, breaker failure and remote back-up."""
    return _with(
        Policy(
            name="single set",
            sets=(ProtectionSet(line=LineScheme.PERMISSIVE_OVERREACH),),
            breaker_failure=BreakerFailurePolicy(retrip_coil="1"),
            coil_dc=(("1", "1"),),
        ),
        changes,
    )


def duplicate_relay(**changes: object) -> Policy:
    """Two relays on the same CT core, VT winding, DC, coil and channel."""
    one = ProtectionSet(line=LineScheme.PERMISSIVE_OVERREACH)
    return _with(
        Policy(
            name="duplicate relay",
            sets=(one, ProtectionSet(label="2", line=LineScheme.PERMISSIVE_OVERREACH)),
            breaker_failure=BreakerFailurePolicy(retrip_coil="1"),
            coil_dc=(("1", "1"),),
        ),
        changes,
    )


def duplicate_chain(**changes: object) -> Policy:
    """Two sets with a CT core, VT winding, DC, coil, channel and lockout each of their own."""
    one = ProtectionSet(line=LineScheme.DIFFERENTIAL)
    two = ProtectionSet(
        label="2",
        core="2",
        winding="2",
        dc="2",
        coil="2",
        channel="2",
        lockout="2",
        line=LineScheme.PERMISSIVE_OVERREACH,
    )
    return _with(
        Policy(name="duplicate chain", sets=(one, two), breaker_failure=BreakerFailurePolicy(retrip_coil="2")),
        changes,
    )


def _with(policy: Policy, changes: dict[str, object]) -> Policy:
    errors, known = ErrorList(), [f.name for f in fields(policy)]
    for name in changes:
        if name not in known:
            errors.add("part of a policy", name, "the name of one", tip=nearest(name, known))
    errors.raise_if_any()
    return replace(policy, **changes) if changes else policy  # type: ignore[arg-type]  # values are the caller's
