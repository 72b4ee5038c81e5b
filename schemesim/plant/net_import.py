"""A plant from a ``pandapower`` net: its buses, lines, transformers, grids, generators and loads.

Nothing of that library is imported here: a net is read as the tables it consists of, and its results are never used.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Any

from schemesim.errors import ErrorList
from schemesim.plant.bays import CORES, CtPlacement
from schemesim.plant.model import Plant
from schemesim.plant.net_tables import Rule, layout_by_voltage, plant_of_tables

C_MAX = 1.1
"""Voltage factor c for maximum currents of IEC 60909-0 table 1 (from memory; 1.05 or 1.1 below 1 kV)."""

_LEFT_OUT = ("trafo3w", "impedance", "xward", "ward", "motor", "dcline", "asymmetric_sgen")


def transformer_factor(x_pu: float, c: float = C_MAX) -> float:
    """Correction factor KT of a network transformer, 0.95 c / (1 + 0.6 x) (IEC 60909-0, 6.3.3; from memory).

    Examples
    --------
    >>> round(transformer_factor(0.15), 4)
    0.9587
    """
    return 0.95 * c / (1 + 0.6 * x_pu)


def generator_factor(un_kv: float, ur_kv: float, x_pu: float, cos_phi: float, c: float = C_MAX) -> float:
    """Correction factor KG of a generator, Un/Ur c / (1 + x sin phi) (IEC 60909-0, 6.6.1; from memory).

    Examples
    --------
    >>> round(generator_factor(10.0, 10.5, 0.16, 0.8), 4)
    0.9559
    """
    return un_kv / ur_kv * c / (1 + x_pu * math.sqrt(max(0.0, 1 - cos_phi**2)))


def plant_of_pandapower(
    net: Any,
    *,
    corrected: bool = True,
    zero_ratio: float | None = None,
    layout: Rule = layout_by_voltage,
    ct: CtPlacement = CtPlacement.BOTH,
    cores: tuple[str, ...] = CORES,
    loads: bool = True,
) -> Plant:
    """A plant with a station for each bus of a ``pandapower`` net.

    Parameters
    ----------
    net : pandapowerNet
        External grids need ``s_sc_max_mva`` and ``rx_max``, generators ``xdss_pu``, ``rdss_ohm``, ``vn_kv``,
        ``sn_mva`` and ``cos_phi``. Buses joined by a closed switch are one station; a line or transformer with an
        open switch, or out of service, is left out.
    corrected : bool
        With the factors of IEC 60909 for maximum currents (KT, KG): as that library computes.
    zero_ratio : float or None
        Zero-sequence over positive-sequence impedance of lines that state none.
    layout, ct, cores
        As for :func:`~schemesim.plant.net_tables.plant_of_tables`.
    loads : bool
        With a feeder for each load.

    Returns
    -------
    Plant
        Line 3 is called ``L3``, transformer 2 ``T2``, the station of bus 7 ``Bus7``. Charging, taps off their
        middle position, phase shifts that are no multiple of 30 degrees, magnetising and load are left out.

    Raises
    ------
    InputError
        For elements that feed or join and cannot be read (three-winding transformers, motors and the like), and
        for missing data.
    """
    import pandas as pd

    errors = ErrorList()
    for kind in _LEFT_OUT:
        if kind in net and len(net[kind]) and bool(net[kind].in_service.any()):
            errors.add(f"table {kind}", f"{len(net[kind])} rows", "none in service (it cannot be read)")
    _complete(errors, net.ext_grid, "ext_grid", ("s_sc_max_mva", "rx_max"))
    _complete(errors, net.gen, "gen", ("xdss_pu", "rdss_ohm", "vn_kv", "sn_mva", "cos_phi"))
    errors.raise_if_any()
    of = _joined(net)
    kv = net.bus.vn_kv.to_dict()
    kept = sorted({of[b] for b in net.bus.index[net.bus.in_service]})
    open_at = net.switch[~net.switch.closed.astype(bool)]
    tables = {
        "buses": [{"bus": int(b), "kv": float(kv[b])} for b in kept],
        "lines": _lines(net.line[net.line.in_service], set(open_at.element[open_at.et == "l"]), of),
        "transformers": _transformers(
            net.trafo[net.trafo.in_service], set(open_at.element[open_at.et == "t"]), of, corrected
        ),
        "sources": [*_grids(net, kv, of), *_machines(net, kv, of, corrected)],
        "loads": [{"bus": of[x.bus], "mw": float(x.p_mw)} for x in net.load.itertuples() if x.in_service and loads],
    }
    frame = {name: pd.DataFrame(rows) for name, rows in tables.items()}
    return plant_of_tables(
        frame["buses"],
        frame["lines"],
        frame["sources"],
        frame["transformers"] if len(frame["transformers"]) else None,
        frame["loads"] if len(frame["loads"]) else None,
        layout=layout,
        zero_ratio=zero_ratio,
        ct=ct,
        cores=cores,
    )


def _complete(errors: ErrorList, table: Any, name: str, columns: Iterable[str]) -> None:
    mine = table[table.in_service] if len(table) else table
    for column in columns if len(mine) else ():
        if column not in mine or bool(mine[column].isna().any()):
            errors.add(f"column {column} of {name}", "missing values", "a number in every row in service")


def _joined(net: Any) -> dict[int, int]:
    """The bus that stands for each: buses joined by closed bus-bus switches are one."""
    of = {int(b): int(b) for b in net.bus.index}

    def root(b: int) -> int:
        while of[b] != b:
            b = of[b]
        return b

    for x in net.switch.itertuples():
        if x.et == "b" and x.closed:
            a, b = sorted((root(int(x.bus)), root(int(x.element))))
            of[b] = a
    return {b: root(b) for b in of}


def _lines(lines: Any, out: set[int], of: dict[int, int]) -> list[dict[str, Any]]:
    found = []
    for x in lines.itertuples():
        if x.Index in out or of[x.from_bus] == of[x.to_bus]:
            continue
        scale = x.length_km / x.parallel
        row: dict[str, Any] = {
            "name": f"L{x.Index}",
            "from_bus": of[x.from_bus],
            "to_bus": of[x.to_bus],
            "length": float(x.length_km),
            "r_ohm": x.r_ohm_per_km * scale,
            "x_ohm": x.x_ohm_per_km * scale,
        }
        r0, x0 = getattr(x, "r0_ohm_per_km", math.nan), getattr(x, "x0_ohm_per_km", math.nan)
        if not math.isnan(x0):
            row |= {"r0_ohm": (0.0 if math.isnan(r0) else r0) * scale, "x0_ohm": x0 * scale}
        found.append(row)
    return found


def _transformers(trafos: Any, out: set[int], of: dict[int, int], corrected: bool) -> list[dict[str, Any]]:
    found = []
    for x in trafos.itertuples():
        if x.Index in out:
            continue
        r = x.vkr_percent / 100
        reactance = math.copysign(math.sqrt((x.vk_percent / 100) ** 2 - r**2), x.vk_percent)
        factor = transformer_factor(reactance) if corrected else 1.0
        clock = x.shift_degree / 30
        found.append(
            {
                "name": f"T{x.Index}",
                "from_bus": of[x.hv_bus],
                "to_bus": of[x.lv_bus],
                "mva": x.sn_mva * x.parallel,
                "from_kv": x.vn_hv_kv,
                "to_kv": x.vn_lv_kv,
                "r_pu": r * factor,
                "x_pu": reactance * factor,
                "group": _group(getattr(x, "vector_group", None), clock),
            }
        )
    return found


def _group(stated: object, clock: float) -> str:
    """Vector group with its clock number; YNyn where none is stated (YNd for an odd clock number)."""
    number = round(clock) % 12 if math.isclose(clock, round(clock), abs_tol=1e-9) else 0
    plain = "YNd" if number % 2 else "YNyn"
    return f"{stated if isinstance(stated, str) and stated else plain}{number}"


def _grids(net: Any, kv: dict[int, float], of: dict[int, int]) -> list[dict[str, Any]]:
    """External grids: Z = c Un²/S (IEC 60909-0, 6.2)."""
    found = []
    for x in net.ext_grid[net.ext_grid.in_service].itertuples():
        z = C_MAX * kv[x.bus] ** 2 / x.s_sc_max_mva
        reactance = z / math.sqrt(1 + x.rx_max**2)
        row: dict[str, Any] = {"bus": of[x.bus], "r_ohm": x.rx_max * reactance, "x_ohm": reactance, "trips": False}
        ratio, r0x0 = getattr(x, "x0x_max", math.nan), getattr(x, "r0x0_max", math.nan)
        if not (math.isnan(ratio) or math.isnan(r0x0)):
            row |= {"r0_ohm": r0x0 * ratio * reactance, "x0_ohm": ratio * reactance}
        found.append(row)
    return found


def _machines(net: Any, kv: dict[int, float], of: dict[int, int], corrected: bool) -> list[dict[str, Any]]:
    found = []
    for x in net.gen[net.gen.in_service].itertuples():
        factor = generator_factor(kv[x.bus], x.vn_kv, x.xdss_pu, x.cos_phi) if corrected else 1.0
        reactance = x.xdss_pu * x.vn_kv**2 / x.sn_mva
        row = {"bus": of[x.bus], "r_ohm": x.rdss_ohm * factor, "x_ohm": reactance * factor, "trips": True}
        found.append(row)
    return found
