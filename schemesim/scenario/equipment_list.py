"""The equipment list of a plant: the inverse of :mod:`schemesim.scenario.equipment`."""

from __future__ import annotations

from typing import TYPE_CHECKING

from schemesim.errors import InputError, Problem
from schemesim.plant.model import Plant, SectionKind, Source
from schemesim.scenario.equipment import COLUMNS
from schemesim.scenario.equipment_impedances import cells_of

if TYPE_CHECKING:
    import pandas as pd


def equipment_list(plant: Plant) -> pd.DataFrame:
    """The equipment list of a plant, piece by piece; ``load_equipment`` makes an equal plant of it.

    Parameters
    ----------
    plant : Plant

    Returns
    -------
    pandas.DataFrame
        One row for each section, device, source, voltage transformer and dispatch; cells that say nothing are
        empty. ``.to_csv(path, index=False)`` and ``.to_excel(path, index=False)`` write it.

    Raises
    ------
    InputError
        For a plant with labels that a cell cannot hold (blanks, commas or semicolons in them).

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, generator, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> from schemesim.scenario.equipment import load_equipment
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder")
    >>> single_bus(b, "Alder", [Bay("G1", "G1")])
    >>> plant = b.build()
    >>> load_equipment(equipment_list(plant)) == plant
    True
    """
    import pandas as pd  # heavy: only when a table is asked for

    _check_cells(plant)
    units = {s.section: s for s in plant.sources if _is_unit(s, plant)}
    rows: list[dict[str, object]] = []
    for s in plant.sections:
        row: dict[str, object] = {"kind": str(s.kind), "name": s.name, "station": s.station, "kv": s.kv or None,
                                  "length": s.length or None, "load_mw": s.load_mw or None,
                                  **cells_of(s.impedance)}  # fmt: skip
        if s.kind is SectionKind.GENERATOR:
            unit = units.get(s.name)
            row["unit"] = "none" if unit is None else ""
            if unit is not None:
                row |= {"trips": _word(unit.trips), "impedance_pu": unit.impedance_pu, **cells_of(unit.impedance)}
        rows.append(row)
    rows += [
        {"kind": str(d.kind), "name": d.name, "station": d.station, "a": d.a, "b": d.b, "a_at": d.a_at or None,
         "b_at": d.b_at or None, "closed": _word(d.closed), "cores": " ".join(d.cores)}
        for d in plant.devices
    ]  # fmt: skip
    rows += [
        {"kind": "source", "name": x.name, "station": x.station, "section": x.section, "trips": _word(x.trips),
         "feeds_own_zone": _word(x.feeds_own_zone), "impedance_pu": x.impedance_pu, **cells_of(x.impedance)}
        for x in plant.sources
        if units.get(x.section) is not x
    ]  # fmt: skip
    rows += [
        {"kind": "vt", "name": v.name, "station": v.station, "section": v.section, "windings": " ".join(v.windings)}
        for v in plant.vts
    ]
    rows += [{"kind": "coupling", "name": f"{c.a} beside {c.b}", **cells_of(c)} for c in plant.couplings]
    rows += [
        {"kind": "dispatch", "name": state.name, "out": "; ".join(sorted(state.out))} for state in plant.dispatches
    ]
    listed = [{k: v for k, v in row.items() if v not in (None, "")} for row in rows]
    used = [c for c in COLUMNS if any(c in row for row in listed)]
    return pd.DataFrame([[row.get(c) for c in used] for row in listed], columns=used, dtype=object)


def _is_unit(s: Source, plant: Plant) -> bool:
    section = plant.section[s.section]
    usual = s.name == f"{s.section}.unit" and s.station == section.station and s.feeds_own_zone
    return section.kind is SectionKind.GENERATOR and usual


def _word(value: bool) -> str:
    return "yes" if value else "no"


def _check_cells(plant: Plant) -> None:
    labels = [(d.name, d.cores) for d in plant.devices] + [(v.name, v.windings) for v in plant.vts]
    wrong = [
        Problem(f"label of {name!r}", label, "a label without blanks, commas and semicolons")
        for name, many in labels
        for label in many
        if not label or any(c in label for c in " ,;\t\n")
    ]
    wrong += [
        Problem(f"dispatch {state.name!r}", name, "a source without a semicolon in its name")
        for state in plant.dispatches
        for name in sorted(state.out)
        if ";" in name
    ]
    if wrong:
        raise InputError(wrong)
