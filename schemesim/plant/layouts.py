"""Station layouts: functions that add a whole station to a :class:`PlantBuilder`.

The circuits (lines, transformers, generators, feeders) are added by the caller, before
or after; a station adds its buses, breakers, CTs, VTs, disconnectors and the short
conductors between them, all under canonical names (see :mod:`schemesim.plant.bays`).
Each bay has a VT ``<station>.<bay>.VT`` on its circuit, each bus a VT ``<bus>.VT``.

All layouts take the same keywords: ``kv``, ``ct`` (where the CTs stand), ``cores`` of
each CT and ``windings`` of each VT.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import pairwise

from schemesim.errors import ErrorList, nearest
from schemesim.plant.bays import (
    CORES,
    WINDINGS,
    Bay,
    CtPlacement,
    Equipment,
    check_station,
    feeder,
    generator,
    infeed,
    line,
    transformer,
)
from schemesim.plant.model import DeviceKind, PlantBuilder

__all__ = [
    "Bay",
    "CtPlacement",
    "breaker_and_a_half",
    "double_bus",
    "feeder",
    "generator",
    "infeed",
    "line",
    "ring",
    "sectionalised_bus",
    "single_bus",
    "transformer",
]


def single_bus(
    builder: PlantBuilder,
    station: str,
    bays: Sequence[Bay],
    *,
    kv: float = 0.0,
    ct: CtPlacement = CtPlacement.BOTH,
    cores: tuple[str, ...] = CORES,
    windings: tuple[str, ...] = WINDINGS,
) -> None:
    """Add a station with one bus ``<station>.B1`` and a breaker for each bay.

    Parameters
    ----------
    builder : PlantBuilder
    station : str
    bays : sequence of Bay
    kv : float
        Nominal voltage in kV.
    ct : CtPlacement
        Where the CTs stand; a bay may have its own.
    cores, windings : tuple of str
        Cores of each CT, windings of each VT.

    Raises
    ------
    InputError
        With every mistake; nothing has been added then.

    Examples
    --------
    >>> from schemesim.plant.model import PlantBuilder
    >>> b = PlantBuilder()
    >>> generator(b, "G1")
    >>> line(b, "L1", 40.0)
    >>> single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1")], kv=230)
    >>> b.build().breakers
    ('Alder.G1.CB', 'Alder.L1.CB')
    """
    kit = Equipment(station, kv, ct, cores, windings)
    check_station(kit, bays).raise_if_any()
    bus = kit.bus(builder, f"{station}.B1")
    for bay in bays:
        kit.bay(builder, bay, bus)


def sectionalised_bus(
    builder: PlantBuilder,
    station: str,
    bays: Sequence[Bay],
    *,
    sections: int = 2,
    selection: Mapping[str, int] | None = None,
    kv: float = 0.0,
    ct: CtPlacement = CtPlacement.BOTH,
    cores: tuple[str, ...] = CORES,
    windings: tuple[str, ...] = WINDINGS,
) -> None:
    """Add a bus in sections ``<station>.B1``, ``B2`` ... joined by breakers ``<station>.S1.CB`` ...

    Parameters
    ----------
    sections : int
        How many, two or more.
    selection : mapping of bay name to section number
        A bay that is not named goes to the section whose turn it is: the first bay to 1,
        the next to 2, and so on, from 1 again.

    Other parameters and errors as for :func:`single_bus`. The bus side of section breaker
    ``S1`` is that of ``B1``, its other side that of ``B2``.
    """
    kit = Equipment(station, kv, ct, cores, windings)
    errors = check_station(kit, bays)
    if sections < 2:
        errors.add(f"sections of station {station!r}", sections, "two or more")
    chosen = _selected(errors, station, bays, selection, max(sections, 1))
    errors.raise_if_any()
    buses = [kit.bus(builder, f"{station}.B{i}") for i in range(1, sections + 1)]
    for i, (left, right) in enumerate(pairwise(buses), start=1):
        kit.breaker(builder, f"{station}.S{i}", left, right, ct=_between(ct))
    for bay in bays:
        kit.bay(builder, bay, buses[chosen[bay.name] - 1])


def double_bus(
    builder: PlantBuilder,
    station: str,
    bays: Sequence[Bay],
    *,
    selection: Mapping[str, int] | None = None,
    coupler_closed: bool = True,
    kv: float = 0.0,
    ct: CtPlacement = CtPlacement.BOTH,
    cores: tuple[str, ...] = CORES,
    windings: tuple[str, ...] = WINDINGS,
) -> None:
    """Add two buses ``<station>.B1`` and ``B2``, a coupler ``<station>.BC.CB``, two selectors for each bay.

    Parameters
    ----------
    selection : mapping of bay name to 1 or 2
        The bus a bay is connected to: its disconnector ``<station>.<bay>.DS1`` or ``DS2`` is
        closed. A bay that is not named takes turns: the first bay 1, the next 2, ...
    coupler_closed : bool

    Other parameters and errors as for :func:`single_bus`. The bus side of the coupler is
    that of ``B1``, its other side that of ``B2``.
    """
    kit = Equipment(station, kv, ct, cores, windings)
    errors = check_station(kit, bays)
    chosen = _selected(errors, station, bays, selection, 2)
    errors.raise_if_any()
    buses = [kit.bus(builder, f"{station}.B{i}") for i in (1, 2)]
    kit.breaker(builder, f"{station}.BC", buses[0], buses[1], ct=_between(ct), closed=coupler_closed)
    for bay in bays:
        node = kit.section(builder, f"{station}.{bay.name}.n")
        for i, bus in enumerate(buses, start=1):
            name = f"{station}.{bay.name}.DS{i}"
            kit.device(builder, name, DeviceKind.SWITCH, bus, node, 0.0, closed=chosen[bay.name] == i)
        kit.bay(builder, bay, node)


def ring(
    builder: PlantBuilder,
    station: str,
    bays: Sequence[Bay],
    *,
    kv: float = 0.0,
    ct: CtPlacement = CtPlacement.BOTH,
    cores: tuple[str, ...] = CORES,
    windings: tuple[str, ...] = WINDINGS,
) -> None:
    """Add a ring of breakers: ``<station>.CB1`` between the first bay and the second, and so on round.

    Each bay has a junction ``<station>.<bay>.J`` between its two breakers and a closed
    disconnector ``<station>.<bay>.DS`` to its circuit. The bus side of a breaker is that of
    the bay it is numbered after; such a bay's own ``ct`` governs this breaker.

    Parameters and errors as for :func:`single_bus`; two bays or more.
    """
    kit = Equipment(station, kv, ct, cores, windings)
    errors = check_station(kit, bays, meshed=True)
    if len(bays) == 1:
        errors.add(f"bays of station {station!r}", [bays[0].name], "two or more in a ring")
    errors.raise_if_any()
    junctions = [_junction(builder, kit, bay) for bay in bays]
    for i, bay in enumerate(bays):
        after = junctions[(i + 1) % len(bays)]
        kit.breaker(builder, station, junctions[i], after, number=str(i + 1), ct=bay.ct)


def breaker_and_a_half(
    builder: PlantBuilder,
    station: str,
    bays: Sequence[Bay],
    *,
    kv: float = 0.0,
    ct: CtPlacement = CtPlacement.BOTH,
    cores: tuple[str, ...] = CORES,
    windings: tuple[str, ...] = WINDINGS,
) -> None:
    """Add two buses and a diameter of three breakers for each pair of bays.

    Diameter ``D1`` holds the first two bays: ``<station>.D1.CB1`` between ``B1`` and the
    first, ``CB2`` between them, ``CB3`` between the second and ``B2``. A bay left over gets a
    diameter of two breakers, ``CB1`` to ``B1`` and ``CB2`` to ``B2``. The bus side of an outer
    breaker is that of its bus, that of a middle one is the first bay's. A bay's own ``ct``
    governs its outer breaker (both of them where it is alone).

    Parameters and errors as for :func:`single_bus`.
    """
    kit = Equipment(station, kv, ct, cores, windings)
    check_station(kit, bays, meshed=True).raise_if_any()
    b1, b2 = (kit.bus(builder, f"{station}.B{i}") for i in (1, 2))
    for i in range(0, len(bays), 2):
        stem = f"{station}.D{i // 2 + 1}"
        pair = bays[i : i + 2]
        first, last = pair[0], pair[-1]
        junctions = [_junction(builder, kit, bay) for bay in pair]
        kit.breaker(builder, stem, b1, junctions[0], number="1", ct=first.ct)
        if len(pair) == 2:
            kit.breaker(builder, stem, junctions[0], junctions[1], number="2")
        kit.breaker(builder, stem, b2, junctions[-1], number=str(len(pair) + 1), ct=last.ct)


def _junction(builder: PlantBuilder, kit: Equipment, bay: Bay) -> str:
    stem = f"{kit.station}.{bay.name}"
    junction = kit.section(builder, f"{stem}.J")
    kit.device(builder, f"{stem}.DS", DeviceKind.SWITCH, junction, bay.to, bay.at)
    kit.vt(builder, f"{stem}.VT", bay.to)
    return junction


def _between(ct: CtPlacement) -> CtPlacement:
    """CTs of a breaker between two buses: there is no element whose bushings could hold them."""
    return CtPlacement.BOTH if ct == CtPlacement.ELEMENT_BUSHINGS else ct


def _selected(
    errors: ErrorList, station: str, bays: Sequence[Bay], selection: Mapping[str, int] | None, buses: int
) -> dict[str, int]:
    chosen = {bay.name: i % buses + 1 for i, bay in enumerate(bays)}
    for name, bus in (selection or {}).items():
        if name not in chosen:
            tip = nearest(name, chosen)
            errors.add(f"selection of station {station!r}", name, "the name of a bay", tip=tip)
        elif type(bus) is not int or bus not in range(1, buses + 1):
            errors.add(f"bus of bay {name!r} of station {station!r}", bus, f"a number from 1 to {buses}")
        else:
            chosen[name] = bus
    return chosen
