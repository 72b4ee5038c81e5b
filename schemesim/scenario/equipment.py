"""A plant from an equipment list, and the list of a plant: one row for each item.

The list is a user's own table: a pandas frame, a CSV or an Excel file. ``kind`` says what a row is and ``name`` what it
is called; which further cells it may have stands in ``CELLS``. A station laid out from its bays takes a row ``station``
with its layout and a row ``bay`` for each bay, in the order in which they stand; what it makes is named as
:mod:`schemesim.plant.layouts` says. Everything may also be listed piece by piece, as
:func:`~schemesim.scenario.equipment_list.equipment_list` writes it.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from schemesim.errors import InputError, Problem, nearest
from schemesim.plant import layouts
from schemesim.plant.bays import CORES, WINDINGS, Bay, CtPlacement
from schemesim.plant.model import (
    Device,
    DeviceKind,
    Dispatch,
    Plant,
    PlantBuilder,
    Section,
    SectionKind,
    Source,
    VoltageTransformer,
)
from schemesim.plant.wiring import doubtful_wiring
from schemesim.scenario.equipment_impedances import (
    COUPLING_CELLS,
    LINE_CELLS,
    SOURCE_CELLS,
    TRANSFORMER_CELLS,
    coupling,
    line_impedance,
    source_impedance,
    transformer_impedance,
)
from schemesim.scenario.tables import Row, in_order, read_table

if TYPE_CHECKING:
    import pandas as pd

LAYOUTS = ("single_bus", "sectionalised_bus", "double_bus", "ring", "breaker_and_a_half")

_SECTION = ("station", "kv", "length", "load_mw")
_UNIT = ("unit", "trips", "impedance_pu", *SOURCE_CELLS)
_DEVICE = ("station", "a", "b", "a_at", "b_at", "closed")
CELLS: Mapping[str, tuple[str, ...]] = {
    "station": ("kv", "layout", "ct", "cores", "windings", "closed"),
    "bay": ("station", "to", "at", "bus", "ct", "breaker"),
    **{str(kind): _SECTION for kind in SectionKind},
    "line": (*_SECTION, *LINE_CELLS),
    "feeder": (*_SECTION, *LINE_CELLS),
    "transformer": (*_SECTION, *TRANSFORMER_CELLS),
    "generator": (*_SECTION, *_UNIT),
    **{str(kind): _DEVICE for kind in DeviceKind},
    "ct": (*_DEVICE, "cores"),
    "source": ("station", "section", "trips", "feeds_own_zone", "impedance_pu", *SOURCE_CELLS),
    "vt": ("station", "section", "windings"),
    "coupling": COUPLING_CELLS,
    "dispatch": ("out",),
}
"""The cells a row of each kind may have, besides ``kind`` and ``name``; the trade's meaning of each:

``kv``; ``length`` in the plant's length unit; ``load_mw``; ``a`` and ``b``, the sections a device joins, and ``a_at``,
``b_at`` where along them (0 to 1); ``to`` and ``at``, the circuit a bay leads to and where it joins it; ``bus``, the
number of the bus a bay is on; ``closed`` yes or no (of a double bus: the coupler); ``cores`` and ``windings`` labels
separated by blanks; ``unit`` the name of a generator's source (``<name>.unit`` where it is empty, ``none`` for none);
``out`` sources separated by semicolons. Impedances: :mod:`schemesim.scenario.equipment_impedances`.
"""

COLUMNS = ("kind", "name", *dict.fromkeys(cell for cells in CELLS.values() for cell in cells))
_SECTIONS, _DEVICES = frozenset(map(str, SectionKind)), frozenset(map(str, DeviceKind))
_QUOTED = re.compile(r"'([^']+)'")


def load_equipment(
    source: pd.DataFrame | str | Any,
    *,
    length_unit: str = "km",
    columns: Mapping[str, str | None] | None = None,
    sheet: int | str = 0,
) -> Plant:
    """A plant from an equipment list.

    Parameters
    ----------
    source : pandas.DataFrame, str or Path
        A frame, or a CSV or Excel file whose first row names the columns.
    length_unit : str
        Unit of the lengths.
    columns : mapping of str to str or None
        What a column of the list is called here; None: it is left out (a remark, a serial number).
    sheet : int or str
        Of an Excel file.

    Returns
    -------
    Plant

    Raises
    ------
    InputError
        With every row that cannot be used, its number and the reason.

    Examples
    --------
    >>> import pandas as pd
    >>> rows = [("station", "Alder", None, "single_bus", None), ("bay", "G1", "Alder", None, "G1"),
    ...         ("bay", "F1", "Alder", None, "F1"), ("generator", "G1", "Alder", None, None),
    ...         ("feeder", "F1", "Alder", None, None)]
    >>> plant = load_equipment(pd.DataFrame(rows, columns=["kind", "name", "station", "layout", "to"]))
    >>> plant.breakers
    ('Alder.F1.CB', 'Alder.G1.CB')
    >>> load_equipment(pd.DataFrame([("braeker", "CB1")], columns=["kind", "name"]))  # doctest: +ELLIPSIS
    Traceback (most recent call last):
    ...
    schemesim.errors.InputError: at row 0: kind: got 'braeker', expected one of ... (did you mean 'breaker'?)
    """
    rows = read_table(source, COLUMNS, ("kind", "name"), columns=columns, sheet=sheet)
    if not rows:
        raise InputError([Problem("equipment list", "no rows", "one row at least")])
    reading = _Reading(PlantBuilder(length_unit), rows, rows[0].problems)
    for row in rows:
        reading.take(row)
    return reading.plant()


@dataclass
class _Reading:
    """The plant in the making."""

    builder: PlantBuilder
    rows: Sequence[Row]
    problems: list[Problem]
    by_name: dict[str, Row] = field(default_factory=dict)
    stations: dict[str, Row] = field(default_factory=dict)
    bays: dict[str, list[Row]] = field(default_factory=dict)
    joined: list[tuple[Row, str, str]] = field(default_factory=list)
    outs: list[Row] = field(default_factory=list)

    def take(self, row: Row) -> None:
        """Read one row."""
        kind, name = row.word("kind", CELLS), row.required("name")
        if "kind" not in row.cells:
            row.note("kind", "nothing", f"one of {', '.join(CELLS)}")
        if not kind:
            return
        for column in row.cells:
            if column not in (*CELLS[kind], "kind", "name"):
                row.note(column, row.cells[column], f"an empty cell: a {kind} has {', '.join(CELLS[kind])}")
        if kind == "bay":
            self.bays.setdefault(row.required("station"), []).append(row)
            return
        seen = self.stations if kind == "station" else self.by_name
        if kind not in ("dispatch", "coupling") and name:
            if name in seen:
                row.note("name", name, "a name not used twice", f"first in row {seen[name].number}")
            seen.setdefault(name, row)
        if kind in _SECTIONS:
            self._section(row, SectionKind(kind), name)
        elif kind in _DEVICES:
            self._device(row, DeviceKind(kind), name)
        elif kind == "source":
            self._source(row, name)
        elif kind == "vt":
            windings = row.labels("windings", ("1",))
            section = row.required("section")
            self.joined.append((row, "section", section))
            if not row.bad:
                self.builder.add(
                    VoltageTransformer(name=name, section=section, station=row.text("station"), windings=windings)
                )
        elif kind == "coupling":
            self.joined += [(row, "a", row.text("a")), (row, "b", row.text("b"))]
            between = coupling(row)
            if between is not None:
                self.builder.add(between)
        elif kind == "dispatch":
            self.outs.append(row)

    def _section(self, row: Row, kind: SectionKind, name: str) -> None:
        length = row.number_of("length")
        if kind is SectionKind.LINE and not length > 0 and not row.bad:
            row.note("length", row.text("length") or "nothing", "a length over zero")
        impedance_of = {SectionKind.LINE: line_impedance, SectionKind.FEEDER: line_impedance,
                        SectionKind.TRANSFORMER: transformer_impedance}.get(kind)  # fmt: skip
        made = Section(name=name, kind=kind, station=row.text("station"), kv=row.number_of("kv"), length=length,
                       load_mw=row.number_of("load_mw"),
                       impedance=None if impedance_of is None else impedance_of(row))  # fmt: skip
        unit = row.text("unit", f"{name}.unit") if kind is SectionKind.GENERATOR else "none"
        trips, impedance = row.truth("trips", True), self._impedance(row)
        behind = source_impedance(row) if kind is SectionKind.GENERATOR else None
        if row.bad:
            return
        self.builder.add(made)
        if unit != "none":
            self.by_name.setdefault(unit, row)
            self.builder.add(Source(name=unit, section=name, station=made.station, trips=trips,
                                    impedance_pu=impedance, impedance=behind))  # fmt: skip

    def _device(self, row: Row, kind: DeviceKind, name: str) -> None:
        a, b = row.required("a"), row.required("b")
        a_at, b_at = row.number_of("a_at", most=1), row.number_of("b_at", most=1)
        cores, closed = row.labels("cores"), row.truth("closed", True)
        if kind is DeviceKind.CT and not cores:
            row.note("cores", "nothing", "at least one core")
        if a and a == b:
            row.note("b", b, "another section than a")
        self.joined += [(row, "a", a), (row, "b", b)]
        if not row.bad:
            self.builder.add(Device(name=name, kind=kind, a=a, b=b, a_at=a_at, b_at=b_at, station=row.text("station"),
                                    closed=closed, cores=cores))  # fmt: skip

    def _source(self, row: Row, name: str) -> None:
        section = row.required("section")
        trips, own = row.truth("trips", False), row.truth("feeds_own_zone", True)
        impedance, behind = self._impedance(row), source_impedance(row)
        self.joined.append((row, "section", section))
        if not row.bad:
            self.builder.add(Source(name=name, section=section, station=row.text("station"), trips=trips,
                                    feeds_own_zone=own, impedance_pu=impedance, impedance=behind))  # fmt: skip

    def _impedance(self, row: Row) -> float | None:
        return row.number_of("impedance_pu") if "impedance_pu" in row.cells else None

    # --- stations, references, the whole ----------------------------------------------

    def plant(self) -> Plant:
        """The plant, or every mistake at once."""
        every = [*self.stations, *(s for s in self.bays if s and s not in self.stations)]
        lost = [station for station in every if not self._lay_out(station, self.bays.get(station, []))]
        self._references(lost)
        if self.problems:
            raise InputError(in_order(self.problems, self.rows))
        try:
            plant = self.builder.build()
        except InputError as error:
            raise InputError(in_order(map(self._placed, error.problems), self.rows)) from None
        slips = doubtful_wiring(plant)
        if slips:
            raise InputError(in_order(map(self._placed, slips), self.rows))
        return plant

    def _lay_out(self, station: str, rows: Sequence[Row]) -> bool:
        """Lay out a station; False where it cannot be."""
        head = self.stations.get(station)
        if head is None:
            tip = nearest(station, self.stations)
            for row in rows:
                row.note("station", station, "a station with a row of its own", tip)
            return False
        if "layout" not in head.cells:
            head.note("layout", "nothing", f"one of {', '.join(LAYOUTS)}")
        layout = head.word("layout", LAYOUTS)
        placement = head.word("ct", map(str, CtPlacement), str(CtPlacement.BOTH))
        common: dict[str, Any] = {
            "kv": head.number_of("kv"),
            "cores": head.labels("cores", CORES),
            "windings": () if head.text("windings") == "none" else head.labels("windings", WINDINGS),
        }
        bays: list[Bay] = []
        selection: dict[str, int] = {}
        for row in rows:
            name, to = row.text("name"), row.text("to") or row.text("name")
            ct = row.word("ct", map(str, CtPlacement))
            at, breaker = row.number_of("at", most=1), row.truth("breaker", True)
            self.joined.append((row, "to", to))
            bus = row.number_of("bus")
            if "bus" in row.cells and layout not in ("double_bus", "sectionalised_bus"):
                row.note("bus", row.cells["bus"], f"an empty cell: bays of a {layout or 'station'} choose no bus")
            elif "bus" in row.cells and (not bus.is_integer() or bus < 1):
                row.note("bus", row.cells["bus"], "a whole number from 1")
            elif bus:
                selection[name] = int(bus)
            bays.append(Bay(name, to, at, CtPlacement(ct) if ct else None, breaker))
        if head.bad or not layout or any(row.bad for row in rows):
            return False
        common["ct"] = CtPlacement(placement)
        if layout in ("double_bus", "sectionalised_bus"):
            common["selection"] = selection
        if layout == "double_bus":
            common["coupler_closed"] = head.truth("closed", True)
        elif "closed" in head.cells:
            head.note("closed", head.cells["closed"], "an empty cell: a double_bus alone has a coupler")
        if layout == "sectionalised_bus":
            common["sections"] = max(2, *selection.values()) if selection else 2
        try:
            getattr(layouts, layout)(self.builder, station, bays, **common)
        except InputError as error:
            self.problems += [self._placed(p, station) for p in error.problems]
            return False
        return not head.bad

    def _references(self, lost: Sequence[str]) -> None:
        """Note sections and sources named that are not there."""
        sections = {name for name, row in self.by_name.items() if row.text("kind") in _SECTIONS}
        sections |= {s.name for s in self.builder.sections}
        for row, column, name in self.joined:
            if name and name not in sections and not any(name.startswith(f"{station}.") for station in lost):
                row.note(column, name, "the name of a section", nearest(name, sections))
        sources = {s.name for s in self.builder.sources}
        sources |= {name for name, row in self.by_name.items() if row.text("kind") in ("source", "generator")}
        for row in self.outs:
            out = row.names("out")
            for name in out:
                if name not in sources:
                    row.note("out", name, "the name of a source", nearest(name, sources))
            if not row.bad:
                self.builder.add(Dispatch(name=row.text("name"), out=frozenset(out)))
        if not self.builder.sources and not self.problems:
            self.problems.append(Problem("equipment list", "no source", "at least one generator or source"))

    def _placed(self, problem: Problem, station: str = "") -> Problem:
        """A mistake of the plant or a layout at the row it comes from."""
        quoted = _QUOTED.findall(problem.subject)
        bays = {row.text("name"): row for row in self.bays.get(station, [])}
        said = [*quoted, problem.value] if isinstance(problem.value, str) else quoted
        named = [rows[name] for name in said for rows in (bays, self.by_name, self.stations) if name in rows]
        found = named[0] if named else self.stations.get(station)
        if found is None:
            return problem
        return found.problem("", problem.value, problem.expectation, problem.tip, problem.subject)
