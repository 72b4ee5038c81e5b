"""The impedances of an equipment list: cells of a line, feeder, transformer, generator or source, and couplings."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields
from typing import Any, TypeVar

from schemesim.plant.net_data import Coupling, LineImpedance, SourceImpedance, TransformerImpedance
from schemesim.scenario.tables import Row

_Kind = TypeVar("_Kind", LineImpedance, SourceImpedance, TransformerImpedance, Coupling)

LINE_CELLS = ("r_ohm", "x_ohm", "r0_ohm", "x0_ohm")
SOURCE_CELLS = ("r_ohm", "x_ohm", "r2_ohm", "x2_ohm", "r0_ohm", "x0_ohm")
TRANSFORMER_CELLS = (
    "mva", "winding_kv", "r_pu", "x_pu", "group", "r0_pu", "x0_pu", "earth_r_ohm", "earth_x_ohm",
)  # fmt: skip
"""As in the impedances of :mod:`schemesim.plant.net_data`; ``winding_kv`` is ``kv`` there. Numbers of several windings
or pairs stand in one cell, separated by blanks."""
COUPLING_CELLS = ("a", "b", "r0_ohm", "x0_ohm")


def line_impedance(row: Row) -> LineImpedance | None:
    """The impedance of a line or feeder, None where the row has none."""
    return _checked(row, LineImpedance, {c: row.real(c) for c in LINE_CELLS}, ("r_ohm", "x_ohm"))


def source_impedance(row: Row) -> SourceImpedance | None:
    """The impedance of a source or a generator's unit, None where the row has none."""
    return _checked(row, SourceImpedance, {c: row.real(c) for c in SOURCE_CELLS}, ("r_ohm", "x_ohm"))


def transformer_impedance(row: Row) -> TransformerImpedance | None:
    """The impedances of a transformer, None where the row has none."""
    cells: dict[str, Any] = {"mva": row.real("mva"), "group": row.text("group"), "kv": row.reals("winding_kv")}
    many = ("r_pu", "x_pu", "r0_pu", "x0_pu", "earth_r_ohm", "earth_x_ohm")
    cells |= {c: row.reals(c) for c in many}
    return _checked(row, TransformerImpedance, cells, ("mva", "kv", "r_pu", "x_pu", "group"))


def coupling(row: Row) -> Coupling | None:
    """A row ``coupling``, None where it has mistakes."""
    cells: dict[str, Any] = {"a": row.required("a"), "b": row.required("b")}
    cells |= {c: row.real(c) for c in ("r0_ohm", "x0_ohm")}
    return _checked(row, Coupling, cells, ("r0_ohm", "x0_ohm"))


def _checked(row: Row, kind: type[_Kind], cells: Mapping[str, Any], needed: tuple[str, ...]) -> _Kind | None:
    """What the cells say, its mistakes noted; None where there are none at all."""
    given = {key: value for key, value in cells.items() if value not in (None, "", ())}
    if not given:
        return None
    lacking = [key for key in needed if key not in given]
    for key in lacking:
        row.note("winding_kv" if key == "kv" else key, "nothing", f"a value beside {', '.join(given)}")
    if lacking or row.bad:
        return None
    made = kind(**given)
    wrong = list(made.mistakes())
    for what, value, expectation in wrong:
        row.note("", value, expectation, subject=what)
    return None if wrong else made


def cells_of(item: LineImpedance | SourceImpedance | TransformerImpedance | Coupling | None) -> dict[str, object]:
    """The cells that say an impedance.

    Examples
    --------
    >>> cells_of(LineImpedance(r_ohm=2, x_ohm=10))
    {'r_ohm': 2, 'x_ohm': 10}
    """
    if item is None:
        return {}
    found: dict[str, object] = {}
    for f in fields(item):
        value = getattr(item, f.name)
        name = "winding_kv" if f.name == "kv" else f.name
        if isinstance(value, tuple):
            value = " ".join(f"{x!r}" for x in value)
        if value not in (None, ""):
            found[name] = value
    return found
