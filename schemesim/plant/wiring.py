"""What is wired in a way that is most likely a slip, though it makes a plant."""

from __future__ import annotations

from schemesim.errors import Problem
from schemesim.plant.model import Plant, SectionKind


def doubtful_wiring(plant: Plant) -> tuple[Problem, ...]:
    """Elements joined to nothing, lines with both ends at one place, joints between different voltages.

    Returns
    -------
    tuple of Problem
        Empty for a plant that is wired as one would expect.

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, generator, line, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder")
    >>> line(b, "L1", 10)
    >>> single_bus(b, "Alder", [Bay("G1", "G1"), Bay("L1", "L1")])
    >>> single_bus(b, "Birch", [Bay("L1", "L1")])
    >>> print(doubtful_wiring(b.build())[0])
    line 'L1': got 'at 0 from Alder and Birch', expected bays at both its ends: one at 0, one at 1
    """
    found: list[Problem] = []
    for s in plant.sections:
        joined = plant.at_section[s.name]
        if not joined and s.kind not in (SectionKind.CONDUCTOR, SectionKind.BUS):
            found.append(Problem(f"{s.kind.value} {s.name!r}", "joined to nothing", "a bay that leads to it"))
        if s.kind is SectionKind.LINE and len(joined) > 1:
            places = {d.a_at if d.a == s.name else d.b_at for d in joined}
            stations = sorted({d.station for d in joined if d.station})
            if len(places) == 1 and len(stations) > 1:
                value = f"at {places.pop():g} from {' and '.join(stations)}"
                found.append(Problem(f"line {s.name!r}", value, "bays at both its ends: one at 0, one at 1"))
    for d in plant.devices:
        a, b = plant.section[d.a], plant.section[d.b]
        between = SectionKind.TRANSFORMER in (a.kind, b.kind)
        if a.kv and b.kv and a.kv != b.kv and not between:
            value = f"{a.kv:g} kV at {a.name}, {b.kv:g} kV at {b.name}"
            found.append(Problem(f"device {d.name!r}", value, "one voltage on both its sides"))
    return tuple(found)
