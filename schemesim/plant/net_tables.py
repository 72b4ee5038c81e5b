"""A plant from plain tables of buses, lines, transformers, sources and loads; station layouts are chosen by a rule.

Each table is a pandas ``DataFrame`` (or a path that pandas reads); a column left out has its default.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any

from schemesim.errors import ErrorList, nearest
from schemesim.plant import layouts
from schemesim.plant.bays import CORES, Bay, CtPlacement
from schemesim.plant.model import Plant, PlantBuilder
from schemesim.plant.net_data import LineImpedance, SourceImpedance, TransformerImpedance

if TYPE_CHECKING:
    import pandas as pd

COLUMNS: Mapping[str, Mapping[str, object]] = {
    "buses": {"bus": ..., "kv": ...},
    "lines": {"name": "", "from_bus": ..., "to_bus": ..., "length": 1.0, "r_ohm": ..., "x_ohm": ..., "r0_ohm": None,
              "x0_ohm": None},
    "transformers": {"name": "", "from_bus": ..., "to_bus": ..., "mva": ..., "from_kv": ..., "to_kv": ...,
                     "r_pu": ..., "x_pu": ..., "r0_pu": None, "x0_pu": None, "group": "YNyn0"},
    "sources": {"name": "", "bus": ..., "r_ohm": ..., "x_ohm": ..., "r2_ohm": None, "x2_ohm": None, "r0_ohm": None,
                "x0_ohm": None, "trips": True},
    "loads": {"name": "", "bus": ..., "mw": ...},
}  # fmt: skip
"""Columns of each table with what stands in for one left out (``...``: it must be there)."""

Rule = Callable[[float, int], str]
"""From the voltage of a station in kV and the number of its bays to a layout."""


def layout_by_voltage(kv: float, bays: int) -> str:
    """A layout as is common at a voltage (common practice, no standard).

    Breaker and a half from 300 kV; from 100 kV a ring for three to five bays, else a double bus; a single bus below,
    and where a single bay leaves no choice.

    Examples
    --------
    >>> layout_by_voltage(400, 6), layout_by_voltage(132, 4), layout_by_voltage(132, 8), layout_by_voltage(33, 4)
    ('breaker_and_a_half', 'ring', 'double_bus', 'single_bus')
    """
    if kv < 100 or bays < 2:
        return "single_bus"
    if kv >= 300:
        return "breaker_and_a_half"
    return "ring" if 3 <= bays <= 5 else "double_bus"


def plant_of_tables(
    buses: pd.DataFrame,
    lines: pd.DataFrame,
    sources: pd.DataFrame,
    transformers: pd.DataFrame | None = None,
    loads: pd.DataFrame | None = None,
    *,
    layout: Rule = layout_by_voltage,
    zero_ratio: float | None = None,
    ct: CtPlacement = CtPlacement.BOTH,
    cores: tuple[str, ...] = CORES,
    length_unit: str = "km",
) -> Plant:
    """A plant with a station for each bus.

    Parameters
    ----------
    buses : DataFrame
        ``bus``, ``kv``. The station of bus 7 is called ``Bus7``; a bus named by a text is called by it.
    lines : DataFrame
        ``from_bus``, ``to_bus``, ``r_ohm``, ``x_ohm`` (of the whole length), and where known ``name``,
        ``length``, ``r0_ohm``, ``x0_ohm``.
    sources : DataFrame
        ``bus``, ``r_ohm``, ``x_ohm``, and where known ``name``, ``r2_ohm``, ``x2_ohm``, ``r0_ohm``, ``x0_ohm``,
        ``trips``. Each is a generator with a bay of its own.
    transformers : DataFrame or None
        ``from_bus``, ``to_bus``, ``mva``, ``from_kv``, ``to_kv``, ``r_pu``, ``x_pu``, and where known ``name``,
        ``r0_pu``, ``x0_pu``, ``group`` (``YNyn0`` by default).
    loads : DataFrame or None
        ``bus``, ``mw``, ``name``.
    layout : function of (kV, number of bays) to a name of a layout
    zero_ratio : float or None
        Zero-sequence over positive-sequence impedance of lines that state none; None: left unknown.
    ct, cores, length_unit
        As for layouts and plants.

    Raises
    ------
    InputError
        With every missing column, unknown bus and bad number.

    Examples
    --------
    >>> import pandas as pd
    >>> plant = plant_of_tables(
    ...     pd.DataFrame({"bus": [1, 2], "kv": [132, 132]}),
    ...     pd.DataFrame({"from_bus": [1], "to_bus": [2], "r_ohm": [2.0], "x_ohm": [10.0]}),
    ...     pd.DataFrame({"bus": [1], "r_ohm": [0.0], "x_ohm": [9.0]}),
    ... )
    >>> plant.breakers
    ('Bus1.BC.CB', 'Bus1.G1.CB', 'Bus1.L1.CB', 'Bus2.L1.CB')
    """
    errors = ErrorList()
    rows = {
        name: _rows(errors, name, table)
        for name, table in (
            ("buses", buses),
            ("lines", lines),
            ("transformers", transformers),
            ("sources", sources),
            ("loads", loads),
        )
    }
    errors.raise_if_any()
    station = {row["bus"]: _station(row["bus"]) for row in rows["buses"]}
    for table, keys in (("lines", 2), ("transformers", 2), ("sources", 1), ("loads", 1)):
        for n, row in enumerate(rows[table]):
            for key in ("from_bus", "to_bus") if keys == 2 else ("bus",):
                if row[key] not in station:
                    tip = nearest(str(row[key]), map(str, station))
                    errors.add(f"{key} of row {n} of {table}", row[key], "a bus of the table of buses", tip=tip)
    errors.raise_if_any()
    b = PlantBuilder(length_unit)
    kv = {row["bus"]: float(row["kv"]) for row in rows["buses"]}
    bays: dict[object, list[Bay]] = {bus: [] for bus in station}
    for n, row in enumerate(rows["lines"], start=1):
        name = row["name"] or f"L{n}"
        r0, x0 = row["r0_ohm"], row["x0_ohm"]
        if r0 is None and x0 is None and zero_ratio is not None:
            r0, x0 = zero_ratio * row["r_ohm"], zero_ratio * row["x_ohm"]
        z = LineImpedance(r_ohm=row["r_ohm"], x_ohm=row["x_ohm"], r0_ohm=r0, x0_ohm=x0)
        layouts.line(b, name, row["length"], kv=kv[row["from_bus"]], impedance=z)
        bays[row["from_bus"]].append(Bay(name, name, 0.0))
        bays[row["to_bus"]].append(Bay(name, name, 1.0))
    for n, row in enumerate(rows["transformers"], start=1):
        name = row["name"] or f"T{n}"
        zero = ((), ()) if row["x0_pu"] is None else ((row["r0_pu"] or 0.0,), (row["x0_pu"],))
        leak = TransformerImpedance(
            mva=row["mva"],
            kv=(row["from_kv"], row["to_kv"]),
            r_pu=(row["r_pu"],),
            x_pu=(row["x_pu"],),
            r0_pu=zero[0],
            x0_pu=zero[1],
            group=row["group"],
        )
        home = station[row["from_bus"]]
        layouts.transformer(b, name, station=home, kv=kv[row["from_bus"]], impedance=leak)
        bays[row["from_bus"]].append(Bay(name, name, 0.0))
        bays[row["to_bus"]].append(Bay(name, name, 1.0))
    _units(b, rows, station, kv, bays)
    for bus, mine in bays.items():
        if mine:
            single = layout(kv[bus], len(mine))
            getattr(layouts, single)(b, station[bus], mine, kv=kv[bus], ct=ct, cores=cores)
    return b.build()


def _units(
    b: PlantBuilder,
    rows: Mapping[str, list[dict[str, Any]]],
    station: Mapping[object, str],
    kv: Mapping[object, float],
    bays: Mapping[object, list[Bay]],
) -> None:
    """Generators and feeders, each with a bay of its own."""
    count: dict[tuple[str, object], int] = {}
    for row in rows["sources"]:
        bus = row["bus"]
        count["G", bus] = count.get(("G", bus), 0) + 1
        name = row["name"] or f"{station[bus]}.G{count['G', bus]}"
        keys = ("r_ohm", "x_ohm", "r2_ohm", "x2_ohm", "r0_ohm", "x0_ohm")
        source = SourceImpedance(**{key: row[key] for key in keys})
        layouts.generator(b, name, station=station[bus], kv=kv[bus], trips=bool(row["trips"]), impedance=source)
        bays[bus].append(Bay(f"G{count['G', bus]}", name))
    for row in rows["loads"]:
        bus = row["bus"]
        count["D", bus] = count.get(("D", bus), 0) + 1
        name = row["name"] or f"{station[bus]}.D{count['D', bus]}"
        layouts.feeder(b, name, max(row["mw"], 0.0), station=station[bus], kv=kv[bus])
        bays[bus].append(Bay(f"D{count['D', bus]}", name))


def _station(bus: object) -> str:
    return bus if isinstance(bus, str) else f"Bus{bus}"


def _rows(errors: ErrorList, name: str, table: pd.DataFrame | None) -> list[dict[str, Any]]:
    """A table's rows with defaults put in; every mistake is noted."""
    if table is None:
        return []
    known = COLUMNS[name]
    for column in table.columns:
        if column not in known:
            errors.add(f"column of {name}", column, f"one of {', '.join(known)}", tip=nearest(str(column), known))
    missing = [key for key, default in known.items() if default is ... and key not in table.columns]
    for key in missing:
        errors.add(f"column of {name}", "none", key)
    if missing:
        return []
    found = []
    for n, raw in enumerate(table.to_dict("records")):
        row: dict[str, Any] = {}
        for key, default in known.items():
            value = raw.get(key)
            empty = value is None or (isinstance(value, float) and math.isnan(value))
            if empty and default is ...:
                errors.add(f"{key} of row {n} of {name}", value, "a value")
            value = default if empty else value
            if key not in ("bus", "from_bus", "to_bus", "name", "group", "trips") and value not in (None, ...):
                try:
                    value = float(value)  # type: ignore[arg-type]  # what is no number is refused
                except (TypeError, ValueError):
                    errors.add(f"{key} of row {n} of {name}", value, "a number")
            row[key] = value
        found.append(row)
    return found
