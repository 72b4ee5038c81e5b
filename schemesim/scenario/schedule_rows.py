"""Rows of a relay schedule and the policies they come to: what each function is, and what each cell of it sets."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

from schemesim.errors import InputError, nearest
from schemesim.plant.coverage import default_objects
from schemesim.plant.model import Plant, SectionKind
from schemesim.scenario.tables import Row
from schemesim.scheme.delays import Delay, Fixed
from schemesim.scheme.functions import BreakerFailureTimes, ElementTimes
from schemesim.scheme.policy import BreakerFailurePolicy, LineScheme, LocalBackup, Policy, ProtectionSet, Start

LINE_FUNCTIONS = {
    "21": LineScheme.DISTANCE,
    "87L": LineScheme.DIFFERENTIAL,
    "85 permissive overreach": LineScheme.PERMISSIVE_OVERREACH,
    "85 permissive underreach": LineScheme.PERMISSIVE_UNDERREACH,
    "85 blocking": LineScheme.BLOCKING,
}
"""Main protection of a line; all but ``21`` have the stepped zones of ``21`` behind them in the same relay."""

UNIT_FUNCTIONS = {
    "87B": SectionKind.BUS,
    "87T": SectionKind.TRANSFORMER,
    "87G": SectionKind.GENERATOR,
    "50": SectionKind.FEEDER,
}
"""Main protection of anything else."""

MAIN = (*LINE_FUNCTIONS, *UNIT_FUNCTIONS)
FUNCTIONS = (*MAIN, "21-2", "21-3", "51", "67", "50BF", "50EF")

_CHAIN = ("core", "winding", "dc", "coil", "coil_dc", "channel", "lockout")
CELLS: Mapping[str, tuple[str, ...]] = {
    **dict.fromkeys(LINE_FUNCTIONS, ("set", *_CHAIN, "votes", "operate_ms", "reset_ms")),
    **dict.fromkeys(UNIT_FUNCTIONS, ("set", *_CHAIN, "votes", "operate_ms", "reset_ms")),
    "21-2": ("operate_ms", "reset_ms", "delay_ms"),
    "21-3": ("operate_ms", "reset_ms", "delay_ms"),
    "51": ("operate_ms", "reset_ms", "delay_ms"),
    "67": ("core", "winding", "dc", "coil", "coil_dc", "operate_ms", "reset_ms", "delay_ms", "reverse_delay_ms"),
    "50BF": ("core", "dc", "coil", "coil_dc", "channel", "lockout", "operate_ms", "reset_ms", "delay_ms",
             "retrip_coil", "retrip_ms", "start", "uses_52a"),
    "50EF": ("core", "dc", "coil", "coil_dc", "channel", "lockout", "operate_ms", "reset_ms", "delay_ms"),
}  # fmt: skip
"""The cells a row of each function may have, besides ``function``, ``protects`` and ``station``."""

COLUMNS = ("function", "protects", "station", *dict.fromkeys(cell for cells in CELLS.values() for cell in cells))

LEAST_DELAY_MS = 10.0
"""Shortest delay, besides none, that waits for another element: less is meant in seconds (an assumed bound)."""


def stations_of(plant: Plant, name: str) -> tuple[str, ...]:
    """Stations at which an element ends (a breaker: where it stands)."""
    if name in plant.device:
        return (plant.device[name].station,)
    around = {d.station for d in plant.at_section[name] if d.closed and d.station}
    if plant.section[name].kind is SectionKind.LINE:
        return tuple(sorted(around))
    own = plant.section[name].station
    return tuple(sorted({own} if own else around))


def objects_of(plant: Plant) -> tuple[str, ...]:
    """Elements that can be protected: those that some CT bounds."""
    return tuple(o.element for o in default_objects(plant) if o.terminals)


@dataclass
class Reading:
    """Policies in the making, from the rows of one table."""

    plant: Plant
    base: Policy
    rows: Sequence[Row]
    by_target: dict[str, list[Row]] = field(default_factory=dict)

    def policies(self) -> dict[str, Policy]:
        """The policy of each element and breaker that has a row without a mistake; mistakes are noted."""
        elements, breakers = objects_of(self.plant), self.plant.breakers
        for row in self.rows:
            self._sort(row, elements, breakers)
        found: dict[str, Policy] = {}
        for name, rows in self.by_target.items():
            if any(row.bad for row in rows):
                continue
            policy = self._breaker(rows) if name in self.plant.device else self._element(name, rows)
            if policy is not None and not any(row.bad for row in rows):
                found[name] = policy
        return found

    def _sort(self, row: Row, elements: Sequence[str], breakers: Sequence[str]) -> None:
        function, name = row.required("function"), row.required("protects")
        if name in elements or name in breakers:
            self.by_target.setdefault(name, []).append(row)
        if function and function not in FUNCTIONS:
            alike = [f for f in FUNCTIONS if f.lower() == function.lower()]
            tip = f"did you mean {alike[0]!r}?" if alike else nearest(function, FUNCTIONS)
            row.note("function", function, f"one of {', '.join(FUNCTIONS)}", tip)
            return
        if not function or not name:
            return
        of_breaker = function in ("50BF", "50EF")
        known = breakers if of_breaker else elements
        if name not in known:
            what = "the name of a breaker" if of_breaker else "a bus, line, transformer, generator or feeder with CTs"
            row.note("protects", name, what, nearest(name, known))
            return
        kind = None if of_breaker else self.plant.section[name].kind
        fits = _functions_of(kind)
        if function not in fits:
            row.note("function", function, f"for a {kind or 'breaker'} one of {', '.join(fits)}")
            return
        for column in row.cells:
            if column not in (*CELLS[function], "function", "protects", "station"):
                has = ", ".join(CELLS[function])
                row.note(column, row.cells[column], f"an empty cell: {function} has {has}")
        ends = stations_of(self.plant, name)
        station = row.text("station")
        if station and station not in ends:
            row.note("station", station, f"where it ends: {' or '.join(ends)}", nearest(station, ends))

    # --- elements ---------------------------------------------------------------------

    def _element(self, name: str, rows: Sequence[Row]) -> Policy | None:
        kind, base = self.plant.section[name].kind, self.base
        main: dict[str, Row] = {}
        for label in dict.fromkeys(row.text("set", "1") for row in rows if row.text("function") in MAIN):
            mine = [r for r in rows if r.text("function") in MAIN and r.text("set", "1") == label]
            main[label] = self._one(name, mine)
        one = {f: self._one(name, [r for r in rows if r.text("function") == f]) for f in ("21-2", "21-3", "51", "67")
               if any(r.text("function") == f for r in rows)}  # fmt: skip
        timed = one.get("21-3") or one.get("51")
        for f in ("21-2", "21-3", "51"):
            if f in one and not main:
                one[f].note("function", f, "a row of main protection too, whose relay hosts it")
        sets = tuple(self._set(label, row) for label, row in main.items())
        votes = self._same([*main.values()], "votes", lambda r: r.number_of("votes", 1.0))
        backup = self._local(one["67"], kind) if "67" in one else None
        locked = {bool(row.text("lockout")) for row in main.values()}
        through = kind not in (SectionKind.LINE, SectionKind.FEEDER)
        if through and len(locked) > 1:
            row = next(r for r in main.values() if not r.text("lockout"))
            row.note("lockout", "nothing", "a lockout relay as in its other sets")
        if any(row.bad for row in rows):
            return None
        reaches, times = base.reaches, base.times
        for f, key in (("21-2", "zone_2_delay"), ("21-3", "zone_3_delay"), ("51", "transformer_backup_delay")):
            if f in one:
                delay: Any = self._time(one[f], "delay_ms", getattr(reaches, key), LEAST_DELAY_MS)
                reaches = replace(reaches, **{key: delay})
        for part, functions in _MEASURED.items():
            mine = [r for r in (*main.values(), *one.values()) if r.text("function") in functions]
            changed: Any = self._measuring(mine, getattr(times, part))
            times = replace(times, **{part: changed})
        changes: dict[str, Any] = {
            "sets": sets,
            "votes": 1 if votes is None else int(votes),
            "local_backup": backup,
            "remote_backup": timed is not None if kind in _TIMED else base.remote_backup,
            "lockout": locked != {False} if through and locked else base.lockout,
            "coil_dc": self._coil_dc([*main.values(), *([one["67"]] if "67" in one else [])]),
            "reaches": reaches,
            "times": times,
            "breaker_failure": None,
            "end_fault": False,
        }
        return self._made([*main.values(), *one.values()], changes)

    def _one(self, name: str, rows: Sequence[Row]) -> Row:
        """The one row that a function at all its stations comes to; rows that do not agree are noted."""
        first, ends = rows[0], stations_of(self.plant, name)
        line = self.plant.section[name].kind is SectionKind.LINE
        seen: dict[str, Row] = {}
        for row in rows:
            at = row.text("station")
            if at in seen or ("" in seen and row is not first):
                what = f"{row.text('function')} of {name}"
                row.note("", what, f"a row not given twice (first in row {first.number})")
            seen.setdefault(at, row)
            for column in ("function", *CELLS[row.text("function")]):
                if row.text(column) != first.text(column):
                    said = f"{first.text(column) or 'an empty cell'} as in row {first.number}"
                    row.note(column, row.text(column) or "nothing", f"{said}: all ends are protected alike")
        missing = [s for s in ends if s not in seen]
        if line and "" not in seen and missing:
            first.note("station", first.text("station"), f"a row for each end of the line, {' and '.join(missing)} too")
        return first

    def _set(self, label: str, row: Row) -> ProtectionSet:
        function = row.text("function")
        if function in LINE_FUNCTIONS and function != "21" and not row.text("channel"):
            row.note("channel", "nothing", f"the channel that {function} needs")
        if function in LINE_FUNCTIONS and not row.text("winding"):
            row.note("winding", "nothing", "the VT winding that its distance zones need")
        return ProtectionSet(
            label=label,
            core=row.required("core") or "1",
            winding=row.text("winding", label),
            dc=row.required("dc") or "1",
            coil=row.required("coil") or "1",
            channel=row.text("channel", label),
            lockout=row.text("lockout", label),
            line=LINE_FUNCTIONS.get(function, LineScheme.DISTANCE),
        )

    def _local(self, row: Row, kind: SectionKind) -> LocalBackup | None:
        usual = self.base.local_backup or LocalBackup()
        if kind is SectionKind.LINE and not row.text("winding"):
            row.note("winding", "nothing", "the VT winding it needs on a line")
        own = "delay" if kind is SectionKind.LINE else "unit_delay"
        changes: dict[str, Any] = {
            own: self._time(row, "delay_ms", getattr(usual, own), LEAST_DELAY_MS),
            "bus_delay": self._time(row, "reverse_delay_ms", usual.bus_delay, LEAST_DELAY_MS),
        }
        core, dc, coil = (row.required(column) or "1" for column in ("core", "dc", "coil"))
        return replace(usual, core=core, winding=row.text("winding", "1"), dc=dc, coil=coil, **changes)

    # --- breakers ---------------------------------------------------------------------

    def _breaker(self, rows: Sequence[Row]) -> Policy | None:
        one: dict[str, Row] = {}
        for row in rows:
            f = row.text("function")
            if f in one:
                row.note("", f"{f} of {row.text('protects')}", f"a row not given twice (first in row {one[f].number})")
            one.setdefault(f, row)
        bf, ef = one.get("50BF"), one.get("50EF")
        failure = None if bf is None else self._failure(bf)
        sets: tuple[ProtectionSet, ...] = ()
        times = self.base.times
        if ef is not None:
            core, dc, coil = (ef.required(column) or "1" for column in ("core", "dc", "coil"))
            channel, lockout = ef.text("channel", "1"), ef.text("lockout", "1")
            sets = (ProtectionSet(core=core, dc=dc, coil=coil, channel=channel, lockout=lockout),)
            measured = self._measuring([ef], times.overcurrent)
            times = replace(times, end_fault=self._time(ef, "delay_ms", times.end_fault), overcurrent=measured)
        changes: dict[str, Any] = {
            "sets": sets,
            "votes": 1,
            "local_backup": None,
            "breaker_failure": failure,
            "end_fault": ef is not None,
            "lockout": self.base.lockout if bf is None else bool(bf.text("lockout")),
            "coil_dc": self._coil_dc(rows),
            "times": times,
        }
        return None if any(row.bad for row in rows) else self._made(rows, changes)

    def _failure(self, row: Row) -> BreakerFailurePolicy:
        usual = self.base.breaker_failure or BreakerFailurePolicy()
        t: BreakerFailureTimes = usual.times
        retrip: Delay | None = None
        if row.text("retrip_coil"):
            retrip = self._time(row, "retrip_ms", t.retrip or Fixed(0))
        elif "retrip_ms" in row.cells:
            row.note("retrip_coil", "nothing", "the coil that the retrip goes to")
        core, dc, coil = (row.required(column) or "1" for column in ("core", "dc", "coil"))
        start = row.word("start", map(str, Start), str(usual.start))
        return BreakerFailurePolicy(
            times=replace(
                t,
                timer=self._time(row, "delay_ms", t.timer, LEAST_DELAY_MS),
                retrip=retrip,
                detector_operate=self._time(row, "operate_ms", t.detector_operate),
                detector_reset=self._time(row, "reset_ms", t.detector_reset),
            ),
            start=Start(start) if start else usual.start,
            auxiliary=row.truth("uses_52a", usual.auxiliary),
            core=core,
            dc=dc,
            coil=coil,
            retrip_coil=row.text("retrip_coil") or coil,
            lockout=row.text("lockout", "1"),
            channel=row.text("channel", "1"),
            transfer_trip=bool(row.text("channel")),
        )

    # --- cells ------------------------------------------------------------------------

    def _time(self, row: Row, column: str, usual: Delay, least_ms: float = 1.0) -> Delay:
        found = row.time_us(column, least_ms)
        return usual if found is None else Fixed(found)

    def _same(self, rows: Sequence[Row], column: str, read: Any) -> Any:
        """The value of a cell that all rows that have it must agree on; None where none has it."""
        having = [r for r in rows if column in r.cells]
        values = [read(r) for r in having]
        for row, value in zip(having[1:], values[1:], strict=True):
            if value != values[0]:
                said = f"{having[0].text(column)} as in row {having[0].number}, which goes with it"
                row.note(column, row.text(column), said)
        return values[0] if values else None

    def _measuring(self, rows: Sequence[Row], usual: ElementTimes) -> ElementTimes:
        operate = self._same(rows, "operate_ms", lambda r: r.time_us("operate_ms"))
        reset = self._same(rows, "reset_ms", lambda r: r.time_us("reset_ms"))
        return replace(
            usual,
            operate=usual.operate if operate is None else Fixed(operate),
            reset=usual.reset if reset is None else Fixed(reset),
        )

    def _coil_dc(self, rows: Sequence[Row]) -> tuple[tuple[str, str], ...]:
        """Which DC feeds each coil: as stated here or alike all over the table, else as in the base, else the row's."""
        found: dict[str, tuple[str, Row]] = {}
        stated_for: dict[str, set[str]] = {}
        for r in self.rows:
            if r.text("coil") and r.text("coil_dc"):
                stated_for.setdefault(r.text("coil"), set()).add(r.text("coil_dc"))
        usual = dict(self.base.coil_dc)
        for row in rows:
            for column in ("coil", "retrip_coil"):
                coil = row.text(column)
                if not coil:
                    continue
                stated = row.text("coil_dc") if column == "coil" else ""
                elsewhere = "".join(stated_for.get(coil, ())) if len(stated_for.get(coil, ())) == 1 else ""
                before = found[coil][0] if coil in found else ""
                dc = stated or before or elsewhere or usual.get(coil) or row.text("dc") or "1"
                if coil in found and found[coil][0] != dc:
                    row.note("coil_dc", dc, f"DC {found[coil][0]} for coil {coil} as in row {found[coil][1].number}")
                found.setdefault(coil, (dc, row))
        return tuple(sorted({**usual, **{coil: dc for coil, (dc, _) in found.items()}}.items()))

    def _made(self, rows: Sequence[Row], changes: dict[str, Any]) -> Policy | None:
        try:
            return replace(self.base, **changes)
        except InputError as error:
            for p in error.problems:
                rows[0].note("", p.value, p.expectation, p.tip, p.subject)
            return None


_TIMED = (SectionKind.LINE, SectionKind.TRANSFORMER, SectionKind.GENERATOR)
_MEASURED = {
    "differential": ("87L", "87B", "87T", "87G"),
    "distance": ("21", "85 permissive overreach", "85 permissive underreach", "85 blocking", "21-2", "21-3"),
    "overcurrent": ("50", "51", "67"),
}
"""Functions that measure in each of the times of a policy."""


def _functions_of(kind: SectionKind | None) -> tuple[str, ...]:
    """Functions that a kind of element may have; None: a breaker."""
    if kind is None:
        return ("50BF", "50EF")
    if kind is SectionKind.LINE:
        return (*LINE_FUNCTIONS, "21-2", "21-3", "67")
    main = tuple(f for f, k in UNIT_FUNCTIONS.items() if k is kind)
    timed = ("51",) if kind in _TIMED else ()
    return (*main, *timed, *(() if kind is SectionKind.BUS else ("67",)))
