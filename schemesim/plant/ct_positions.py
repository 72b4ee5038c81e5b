"""The CTs of a breaker in another place, on a plant that is built already.

Source of the names: the layouts (``plant/bays.py``), which put a CT across exactly one short
conductor from its breaker.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

from schemesim.errors import nearest, reject
from schemesim.plant.bays import CtPlacement
from schemesim.plant.model import Device, DeviceKind, Location, Plant, Section, SectionKind

_SIDES = {
    CtPlacement.BOTH: (True, True),
    CtPlacement.BUS_SIDE: (True, False),
    CtPlacement.CIRCUIT_SIDE: (False, True),
}


@dataclass(frozen=True)
class _Side:
    """One side of a breaker: what lies there, and the conductor and CT between, if there are."""

    outer: str
    outer_at: float
    conductor: str = ""
    ct: str = ""


def with_ct(plant: Plant, breaker: str, ct: CtPlacement | str) -> Plant:
    """A plant with the CTs of one breaker moved: to its bus side, to its circuit side, or one on each.

    A CT stands at the end of a short conductor beside the breaker, so with the CT goes the conductor:
    each position has fault places of its own. :func:`ct_frequencies` shares faults out alike.

    Parameters
    ----------
    plant : Plant
    breaker : str
        A breaker with free-standing CTs of the usual names, ``Alder.L1.CB``; the bay ``Alder.L1`` will do.
    ct : CtPlacement or str
        ``both``, ``bus_side`` or ``circuit_side``.

    Returns
    -------
    Plant
        The same but for this breaker's conductors and CTs, as the layout would have made it.

    Raises
    ------
    InputError
        For a breaker that is not there or has no CT of its own in that form, and for another placement.

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, feeder, generator, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder")
    >>> feeder(b, "F1", station="Alder", load_mw=10)
    >>> single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1")])
    >>> moved = with_ct(b.build(), "Alder.F1.CB", "bus_side")
    >>> [d.name for d in moved.devices if d.name.startswith("Alder.F1")]
    ['Alder.F1.CB', 'Alder.F1.CTb']
    """
    known = [str(c) for c in _SIDES]
    if str(ct) not in known:
        tip = "the line side is the circuit side" if str(ct) == "line_side" else nearest(str(ct), known)
        raise reject("CT placement", str(ct), f"one of {', '.join(known)}", tip=tip)
    name = breaker if breaker in plant.breakers else f"{breaker}.CB"
    if name not in plant.breakers:
        raise reject("breaker", breaker, "the name of a breaker", tip=nearest(breaker, plant.breakers))
    cb = plant.device[name]
    stem, number = _names(cb)
    bus = _side(plant, cb, cb.a, cb.a_at, f"{stem}.b{number}", f"{stem}.CTb{number}")
    circuit = _side(plant, cb, cb.b, cb.b_at, f"{stem}.c{number}", f"{stem}.CTc{number}")
    model = next((plant.device[s.ct] for s in (bus, circuit) if s.ct), None)
    if model is None:
        raise reject(f"CTs of {name!r}", "none", f"free-standing ones: {stem}.CTb{number} or {stem}.CTc{number}")
    section = plant.section[bus.conductor or circuit.conductor]
    at_bus, at_circuit = _SIDES[CtPlacement(ct)]
    gone = {s.conductor for s in (bus, circuit)} | {s.ct for s in (bus, circuit)} | {name}
    sections: list[Section] = [s for s in plant.sections if s.name not in gone]
    devices: list[Device] = [d for d in plant.devices if d.name not in gone]
    a, a_at, b, b_at = bus.outer, bus.outer_at, circuit.outer, circuit.outer_at
    if at_bus:
        inner, ct_name = f"{stem}.b{number}", f"{stem}.CTb{number}"
        sections.append(replace(section, name=inner))
        devices.append(replace(model, name=ct_name, a=a, a_at=a_at, b=inner, b_at=0.0))
        a, a_at = inner, 0.0
    if at_circuit:
        inner, ct_name = f"{stem}.c{number}", f"{stem}.CTc{number}"
        sections.append(replace(section, name=inner))
        devices.append(replace(model, name=ct_name, a=inner, a_at=0.0, b=b, b_at=b_at))
        b, b_at = inner, 0.0
    devices.append(replace(cb, a=a, a_at=a_at, b=b, b_at=b_at))
    return replace(plant, sections=tuple(sections), devices=tuple(devices))


def ct_frequencies(frequencies: Mapping[Location, float], plant: Plant, moved: Plant) -> dict[Location, float]:
    """Fault frequencies of a plant for one with CTs moved, so that the total stays the same.

    What falls on the conductors beside a breaker whose CTs were moved is shared out evenly over those it has then:
    two pieces have half each of what one had.

    Parameters
    ----------
    frequencies : mapping of Location to faults per year
        Of ``plant``.
    plant, moved : Plant
        Before and after :func:`with_ct`.

    Returns
    -------
    dict of Location to faults per year
        Of ``moved``.

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, feeder, generator, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder")
    >>> feeder(b, "F1", station="Alder", load_mw=10)
    >>> single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1", ct=CtPlacement.BUS_SIDE)])
    >>> plant = b.build()
    >>> found = ct_frequencies({Location("Alder.F1.b"): 0.002}, plant, with_ct(plant, "Alder.F1", "both"))
    >>> {str(place): per_yr for place, per_yr in found.items()}
    {'Alder.F1.b': 0.001, 'Alder.F1.c': 0.001}
    """
    found = dict(frequencies)
    for name in plant.breakers:
        before, after = _beside(plant, name), _beside(moved, name)
        if before == after:
            continue
        on_them = [place for place in found if place.section in before]
        total = sum(found.pop(place) for place in on_them)
        if on_them:
            found |= {Location(section): total / len(after) for section in after}
    return found


def _beside(plant: Plant, breaker: str) -> tuple[str, ...]:
    """The conductors beside a breaker that end at a CT."""
    cb = plant.device.get(breaker)
    if cb is None:
        return ()
    here = (s for s in (cb.a, cb.b) if plant.section[s].kind is SectionKind.CONDUCTOR)
    return tuple(s for s in here if any(d.kind is DeviceKind.CT for d in plant.at_section[s]))


def _names(cb: Device) -> tuple[str, str]:
    """Stem and number of a breaker's names: ``Alder.D1`` and ``2`` of ``Alder.D1.CB2``."""
    stem, _, last = cb.name.rpartition(".")
    return stem, last.removeprefix("CB")


def _side(plant: Plant, cb: Device, inner: str, inner_at: float, conductor: str, ct: str) -> _Side:
    """What lies on one side of a breaker, past its own conductor and CT if it has them there."""
    device = plant.device.get(ct)
    if inner != conductor or device is None or conductor not in (device.a, device.b):
        return _Side(inner, inner_at)
    if set(plant.at_section[conductor]) != {cb, device}:
        raise reject(f"conductor {conductor!r}", [d.name for d in plant.at_section[conductor]],
                     f"nothing there but {cb.name!r} and {ct!r}")  # fmt: skip
    outer, at = (device.a, device.a_at) if device.b == conductor else (device.b, device.b_at)
    return _Side(outer, at, conductor, ct)
