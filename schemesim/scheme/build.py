"""The wiring of a scheme in the making: components, blocks, and what trips which breaker."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

from schemesim.errors import ErrorList, reject
from schemesim.plant.model import Plant
from schemesim.plant.zones import Zones, isolation_zones
from schemesim.scheme.delays import Delay, Fixed, check_delays
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import (
    MODES,
    Ask,
    Block,
    Breaker,
    CommonCause,
    Component,
    ComponentKind,
    FailureMode,
    Gate,
    Input,
    Scheme,
)


@dataclass(frozen=True, slots=True)
class Host:
    """What a function stands on: its relay, that relay's DC supply, its set and station."""

    relay: str
    dc: str
    chain: str
    station: str

    @property
    def asks(self) -> tuple[Ask, ...]:
        """Failures that keep any output from leaving (rule R5)."""
        return (Ask(self.relay, FailureMode.FAILURE_TO_OPERATE), Ask(self.dc, FailureMode.LOST))


@dataclass(frozen=True, slots=True)
class BreakerTimes:
    """Times of a breaker."""

    interrupting: Delay = Fixed(50_000)
    auxiliary: Delay = Fixed(5_000)
    late_by: Delay = Fixed(100_000)

    def __post_init__(self) -> None:
        check_delays(self)


class SchemeBuilder:
    """Collects a scheme; the same component asked for twice is one component.

    ``trip`` wires a signal to a breaker's coil; ``build`` makes the coil gates
    (contact AND DC AND coil, rule R6) and the breaker blocks.
    """

    def __init__(
        self, plant: Plant, data: FailureData | None = None, out_of_service: frozenset[str] = frozenset()
    ) -> None:
        self.plant = plant
        self.out_of_service = out_of_service
        self.zones: Zones = isolation_zones(plant)
        self.data = data or FailureData()
        self.errors = ErrorList()
        self.components: dict[str, Component] = {}
        self.blocks: dict[str, Block] = {}
        self.trips: dict[str, dict[str, dict[str, None]]] = {}
        self.initiates: dict[str, dict[str, None]] = {}
        self.coil_dc: dict[tuple[str, str], str] = {}
        self.coil_dc_by: dict[tuple[str, str], str] = {}
        self.coil_claims: dict[tuple[str, str], dict[str, dict[str, None]]] = {}
        self.breaker_times: dict[str, BreakerTimes] = {}
        self.relay_groups: dict[str, list[str]] = {}
        self.intertrips: dict[str, set[str]] = {}

    # --- components -------------------------------------------------------------------

    def component(self, name: str, kind: ComponentKind, station: str = "") -> str:
        """Have a component with its failure data; returns its name."""
        if name not in self.components:
            self.components[name] = self.data.component(name, kind, station)
        return name

    def has(self, component: str, mode: FailureMode) -> bool:
        """Whether a component can fail in a mode at all, or is out of service in it."""
        c = self.components[component]
        return c.probability(mode) > 0 or (component in self.out_of_service and mode is MODES[c.kind][0])

    def relay(self, name: str, station: str, group: str = "") -> str:
        """Have a relay; relays of one group share common causes."""
        if name not in self.components and group:
            self.relay_groups.setdefault(group, []).append(name)
        return self.component(name, ComponentKind.RELAY, station)

    def dc(self, station: str, label: str) -> str:
        """Have a DC domain of a station (rule R14)."""
        return self.component(f"{station}/DC {label}", ComponentKind.DC, station)

    def host(self, relay: str, station: str, dc: str, chain: str, group: str = "") -> Host:
        """Have a relay on a DC domain."""
        return Host(self.relay(relay, station, group), self.dc(station, dc), chain, station)

    def core(self, ct: str, label: str, need: str) -> Ask:
        """Have a CT core; a core that is not there is noted as a mistake."""
        device = self.plant.device[ct]
        if label not in device.cores:
            self.errors.add(f"{need} at CT {ct!r}", f"core {label!r}", f"one of its cores {list(device.cores)}")
        name = self.component(f"{ct}/core {label}", ComponentKind.CT_CORE, device.station)
        return Ask(name, FailureMode.OPEN)

    def neutral(self, source: str, label: str) -> Ask:
        """Have a core of the CT in a unit's own neutral, which measures what the unit feeds in."""
        station = self.plant.source[source].station
        name = self.component(f"{source}/neutral CT core {label}", ComponentKind.CT_CORE, station)
        return Ask(name, FailureMode.OPEN)

    def winding(self, station: str, element: str, label: str, need: str) -> Ask | None:
        """Have a VT winding for an element at a station: on the element, else on a bus of the station."""
        here = [v for v in self.plant.vts if v.station == station]
        mine = [v for v in here if v.section == element] or here
        if not mine:
            self.errors.add(f"{need} at {station!r}", "no voltage transformer", f"a VT on {element!r} or a bus there")
            return None
        vt = mine[0]
        if label not in vt.windings:
            self.errors.add(f"{need} at VT {vt.name!r}", f"winding {label!r}", f"one of {list(vt.windings)}")
        return Ask(
            self.component(f"{vt.name}/winding {label}", ComponentKind.VT_WINDING, station), FailureMode.LOST
        )

    # --- blocks -----------------------------------------------------------------------

    def add(self, block: Block) -> str:
        """Add a block; returns its name, which is its signal. The same block may be added twice.

        Raises
        ------
        InputError
            If another block has the name already.
        """
        if self.blocks.setdefault(block.name, block) != block:
            raise reject("block name", block.name, "a name that stands for one thing only")
        return block.name

    def any_of(self, name: str, signals: list[Input] | tuple[Input, ...]) -> Input:
        """One signal that is true when any of these is; a single one is taken as it is."""
        if len(signals) == 1:
            return signals[0]
        return self.add(Gate(name=name, inputs=tuple(signals)))

    def feed(self, breaker: str, coil: str, dc: str, by: str) -> None:
        """Say which DC domain feeds a coil, whatever the policies of those who trip it say.

        ``by`` is the exception that says so; two of them have to agree.
        """
        fed, first = self.coil_dc.setdefault((breaker, coil), dc), self.coil_dc_by.setdefault((breaker, coil), by)
        if fed != dc:
            self.errors.add(f"coil {coil} of {breaker!r}", f"DC {dc!r} by exception {by!r}",
                            f"DC {fed!r} as by exception {first!r}")  # fmt: skip

    def trip(
        self, signal: str, breaker: str, coil: str, coil_dc: str, *, by: str = "", initiates: bool = True
    ) -> None:
        """Wire a trip to a coil of a breaker; by default it initiates breaker failure too.

        All who trip a coil have to agree on its DC domain, unless :meth:`feed` said it; ``by`` tells who says so.
        """
        self.trips.setdefault(breaker, {}).setdefault(coil, {})[signal] = None
        self.coil_dc.setdefault((breaker, coil), coil_dc)
        if (breaker, coil) not in self.coil_dc_by:
            self.coil_claims.setdefault((breaker, coil), {}).setdefault(coil_dc, {})[by or signal] = None
        if initiates:
            self.initiates.setdefault(breaker, {})[signal] = None

    def build(self) -> Scheme:
        """The frozen scheme.

        Raises
        ------
        InputError
            With every mistake noted while the scheme was put together.
        """
        for (breaker, coil), claims in sorted(self.coil_claims.items()):
            if len(claims) > 1:
                said = ", ".join(f"DC {dc!r} by {_some(list(who))}" for dc, who in claims.items())
                self.errors.add(
                    f"coil {coil} of {breaker!r}",
                    f"DC {list(claims)[1]!r}",
                    f"one supply for it; said are {said}",
                    tip="an exception for the breaker or for its bay says it for all",
                )
        self.errors.raise_if_any()
        for breaker, coils in sorted(self.trips.items()):
            self._breaker(breaker, coils)
        groups = {g: [self.components[n] for n in names] for g, names in self.relay_groups.items()}
        changed, causes = self.data.share(groups)
        components = {**self.components, **changed}
        extra: list[CommonCause] = []
        for cause in self.data.common_causes:
            members = tuple(a for a in cause.members if a.component in components)
            extra.append(replace(cause, members=members))
        return Scheme(
            components=tuple(components.values()),
            blocks=tuple(self.blocks.values()),
            common_causes=(*causes, *extra),
            out_of_service=self.out_of_service,
            intertrips=tuple((s, frozenset(names)) for s, names in self.intertrips.items()),
        )

    def _breaker(self, breaker: str, coils: dict[str, dict[str, None]]) -> None:
        device = self.plant.device.get(breaker)
        source = self.plant.source.get(breaker)
        station = device.station if device else source.station if source else ""
        signals: list[str] = []
        for coil, trips in sorted(coils.items()):
            unit = self.component(f"{breaker}/coil {coil}", ComponentKind.COIL, station)
            supply = self.dc(station, self.coil_dc[(breaker, coil)])
            signals.append(
                self.add(
                    Gate(
                        name=f"{breaker}/coil {coil} energised",
                        inputs=tuple(trips),
                        unless=(
                            Ask(unit, FailureMode.FAILURE_TO_OPERATE),
                            Ask(supply, FailureMode.LOST),
                        ),
                    )
                )
            )
        times = self.breaker_times.get(breaker, BreakerTimes())
        self.add(
            Breaker(
                name=breaker,
                coils=tuple(signals),
                interrupting=times.interrupting,
                auxiliary=times.auxiliary,
                component=self.component(breaker, ComponentKind.BREAKER, station),
                late_by=times.late_by,
            )
        )


def _some(who: Sequence[str]) -> str:
    """The first of some names, and how many more there are."""
    return repr(who[0]) + (f" and {len(who) - 1} more" if len(who) > 1 else "")
