"""Terminals of a protected object: the CTs that bound it, and the zone they enclose.

For each breaker on the border of an object the CT beyond it is taken where there is
one (so that neighbouring zones overlap across the breaker), else the CT before it. A
CT inside the isolation zone that stands at no breaker bounds the object too.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable
from dataclasses import dataclass

from schemesim.plant.model import Device, DeviceKind, Plant, SectionKind


@dataclass(frozen=True, slots=True, order=True)
class Terminal:
    """A CT and the section on its protected side; ``breaker`` is the one it stands at, if any."""

    ct: str
    inner: str
    breaker: str = ""


@dataclass(frozen=True)
class ProtectedObject:
    """An element, the CTs that bound it and what they enclose.

    Attributes
    ----------
    element : str
        The bus, line, transformer, generator or feeder.
    terminals : tuple of Terminal
    zone : frozenset of str
        Sections enclosed by the terminals' CTs: the protected zone.
    blind : tuple of str
        Border breakers at which there is no CT to bound the zone.
    """

    element: str
    terminals: tuple[Terminal, ...]
    zone: frozenset[str]
    blind: tuple[str, ...]


def other_end(device: Device, section: str) -> str:
    """The section at the other end of a device."""
    return device.b if device.a == section else device.a


def protected_object(plant: Plant, element: str) -> ProtectedObject:
    """Find the CTs that bound an element and the protected zone they enclose.

    Parameters
    ----------
    plant : Plant
    element : str
        Name of the section to protect (a bus, line, transformer, generator or feeder).

    Returns
    -------
    ProtectedObject
        Terminals in the order of their names. A bus with several sections joined by
        closed switches is one object, named by any of its sections; a breaker with both its
        sides inside bounds nothing, and its CTs are no terminals.
    """
    border: list[tuple[Device, str]] = []
    queue, seen = deque([element]), {element}
    while queue:
        here = queue.popleft()
        for d in plant.at_section[here]:
            if not d.closed:
                continue
            there = other_end(d, here)
            if d.kind is DeviceKind.BREAKER or (d.kind is DeviceKind.CT and not _stands_at_breaker(plant, d)):
                border.append((d, here))
            elif there not in seen:
                seen.add(there)
                queue.append(there)
    terminals: set[Terminal] = set()
    blind: list[str] = []
    for d, here in border:
        there = other_end(d, here)
        if there in seen:  # inside the object: a coupler between buses that a closed switch joins
            continue
        if d.kind is DeviceKind.CT:
            terminals.add(Terminal(d.name, here))
            continue
        found = _ct_at(plant, d, there) or _ct_at(plant, d, here)
        if found is None:
            blind.append(d.name)
        else:
            terminals.add(_oriented(found, d, here))
    ordered = tuple(sorted(terminals))
    stops = {t.ct for t in ordered}.union(blind)
    return ProtectedObject(element, ordered, enclosed(plant, element, stops), tuple(sorted(set(blind))))


def enclosed(plant: Plant, element: str, stops: Iterable[str]) -> frozenset[str]:
    """Sections reached from an element through closed devices without crossing those named in ``stops``."""
    stop = set(stops)
    queue, seen = deque([element]), {element}
    while queue:
        here = queue.popleft()
        for d in plant.at_section[here]:
            if d.closed and d.name not in stop:
                there = other_end(d, here)
                if there not in seen:
                    seen.add(there)
                    queue.append(there)
    return frozenset(seen)


def _ct_at(plant: Plant, breaker: Device, side: str) -> Device | None:
    """The CT next to a breaker on one side: across one short conductor and nothing else."""
    if plant.section[side].kind is not SectionKind.CONDUCTOR:
        return None
    beside = [d for d in plant.at_section[side] if d.name != breaker.name]
    cts = [d for d in beside if d.kind is DeviceKind.CT and d.closed]
    return cts[0] if len(beside) == 1 and cts else None


def _stands_at_breaker(plant: Plant, ct: Device) -> bool:
    for side in (ct.a, ct.b):
        if plant.section[side].kind is SectionKind.CONDUCTOR:
            for d in plant.at_section[side]:
                if d.kind is DeviceKind.BREAKER and _ct_at(plant, d, side) is not None:
                    return True
    return False


def _oriented(ct: Device, breaker: Device, near: str) -> Terminal:
    """The terminal of a CT beside a breaker, its inner side toward ``near``."""
    far = other_end(breaker, near)
    if far in (ct.a, ct.b):
        return Terminal(ct.name, far, breaker.name)
    return Terminal(ct.name, other_end(ct, near), breaker.name)
