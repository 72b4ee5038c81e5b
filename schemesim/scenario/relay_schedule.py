"""A scheme from a relay schedule, and the schedule of a scheme: one row for each function of each set.

The schedule is a user's own table: a pandas frame, a CSV or an Excel file. ``function`` is a device number of IEEE
C37.2, ``protects`` the element or breaker, ``set`` the set of protection, and what each row stands on is told by the
labels of its CT ``core``, VT ``winding``, ``dc`` supply, trip ``coil``, ``channel`` and ``lockout`` relay. Times are in
ms. What a table does not say (zone reaches, breaker and channel times) is as in a base policy.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field, fields, is_dataclass, replace
from typing import TYPE_CHECKING, Any

from schemesim.errors import InputError, Problem, nearest
from schemesim.plant.model import Plant, SectionKind
from schemesim.plant.zones import isolation_zones
from schemesim.scenario.schedule_rows import (
    CELLS,
    COLUMNS,
    LINE_FUNCTIONS,
    UNIT_FUNCTIONS,
    Reading,
    objects_of,
    stations_of,
)
from schemesim.scenario.tables import Row, in_order, read_table
from schemesim.scheme.delays import Delay
from schemesim.scheme.dress import dress
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.functions import BreakerFailureTimes
from schemesim.scheme.model import Scheme
from schemesim.scheme.policy import Policy, ProtectionSet

if TYPE_CHECKING:
    import pandas as pd

_QUOTED = re.compile(r"'([^']+)'")


@dataclass(frozen=True, repr=False)
class RelaySchedule:
    """What each element and breaker of a plant is protected with.

    Attributes
    ----------
    plant : Plant
    base : Policy
        What the table does not say.
    policies : mapping of str to Policy
        By element or breaker; what has none is not protected.
    """

    plant: Plant
    base: Policy
    policies: Mapping[str, Policy] = field(default_factory=dict)

    def scheme(self, data: FailureData | None = None) -> Scheme:
        """The scheme: the plant dressed as scheduled.

        Parameters
        ----------
        data : FailureData or None
            Failure data; orders of magnitude by default.
        """
        bare = replace(
            self.base, sets=(), votes=1, local_backup=None, breaker_failure=None, end_fault=False, remote_backup=False
        )
        return dress(self.plant, bare, data, exceptions=self.policies, breakers_say=False)

    def table(self) -> pd.DataFrame:
        """The schedule as a table that :func:`load_relay_schedule` reads back."""
        import pandas as pd  # heavy: only when a table is asked for

        rows = [{k: v for k, v in row.items() if v not in (None, "")} for row in _rows(self)]
        used = [c for c in COLUMNS if c in ("function", "protects") or any(c in row for row in rows)]
        return pd.DataFrame([[row.get(c) for c in used] for row in rows], columns=used, dtype=object)

    def __repr__(self) -> str:
        breakers = sum(name in self.plant.device for name in self.policies)
        return f"RelaySchedule({len(self.policies) - breakers} elements, {breakers} breakers)"

    def _repr_html_(self) -> str:
        table = self.table()
        return str(table.where(table.notna(), "").to_html(index=False, max_rows=60))


def load_relay_schedule(
    source: pd.DataFrame | str | Any,
    plant: Plant,
    base: Policy | None = None,
    *,
    columns: Mapping[str, str | None] | None = None,
    sheet: int | str = 0,
) -> RelaySchedule:
    """Read a relay schedule for a plant.

    Parameters
    ----------
    source : pandas.DataFrame, str or Path
        A frame, or a CSV or Excel file whose first row names the columns: ``function`` and ``protects``, and any of
        ``station``, ``set``, ``core``, ``winding``, ``dc``, ``coil``, ``coil_dc``, ``channel``, ``lockout``, ``votes``,
        ``operate_ms``, ``reset_ms``, ``delay_ms``, ``reverse_delay_ms``, ``retrip_coil``, ``retrip_ms``, ``start``,
        ``uses_52a``. Functions: ``87B``, ``87T``, ``87G``, ``50``; of a line ``21``, ``87L``,
        ``85 permissive overreach``, ``85 permissive underreach``, ``85 blocking``; its timed zones ``21-2``, ``21-3``;
        ``51`` (timed back-up of a transformer or generator), ``67`` (local back-up); of a breaker ``50BF`` and ``50EF``
        (end fault). A line may have a row for each end, or one without a station for all of them.
    plant : Plant
    base : Policy or None
        What the table does not say, and the times of empty cells; the defaults of ``Policy()`` otherwise.
    columns : mapping of str to str or None
        What a column of the table is called here; None: it is left out.
    sheet : int or str
        Of an Excel file.

    Returns
    -------
    RelaySchedule
        ``.scheme()`` is the scheme, ``.table()`` the schedule written back.

    Raises
    ------
    InputError
        With every row that cannot be used, its number and the reason.

    Examples
    --------
    >>> import pandas as pd
    >>> from schemesim.plant.layouts import Bay, feeder, generator, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder")
    >>> feeder(b, "F1", station="Alder", load_mw=10)
    >>> single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1")])
    >>> plant = b.build()
    >>> rows = [("50", "F1", "1", "1", "1", "1"), ("87B", "Alder.B1", "1", "2", "1", "1")]
    >>> table = pd.DataFrame(rows, columns=["function", "protects", "set", "core", "dc", "coil"])
    >>> load_relay_schedule(table, plant)
    RelaySchedule(2 elements, 0 breakers)
    >>> load_relay_schedule(table.replace("50", "51"), plant)
    Traceback (most recent call last):
    ...
    schemesim.errors.InputError: at row 0: function: got '51', expected for a feeder one of 50, 67
    """
    rows = read_table(source, COLUMNS, ("function", "protects"), columns=columns, sheet=sheet)
    if not rows:
        raise InputError([Problem("relay schedule", "no rows", "one row at least")])
    reading = Reading(plant, base or Policy(), rows)
    schedule = RelaySchedule(plant, reading.base, reading.policies())
    problems = list(rows[0].problems)
    try:
        schedule.scheme()
    except InputError as error:
        problems += [_placed(p, reading) for p in error.problems]
    if problems:
        raise InputError(in_order(problems, rows))
    return schedule


def _placed(problem: Problem, reading: Reading) -> Problem:
    """A mistake of the scheme at the row it comes from."""
    quoted = _QUOTED.findall(problem.subject)
    rows = [row for name in quoted for row in reading.by_target.get(name, [])]
    label = re.search(r"\bset (\S+) of", problem.subject)
    coil = re.match(r"coil (\S+) of '", problem.subject)
    word = next((f for start, f in _SUBJECTS.items() if problem.subject.startswith(start)), "")
    if label is not None:
        rows = [r for r in rows if r.text("set", "1") == label[1] and "set" in _cells(r)] or rows
    elif word:
        rows = [r for r in rows if r.text("function") == word] or rows
    elif coil is not None and quoted:
        rows = _on_coil(reading, quoted[0], coil[1], str(problem.value)) or rows
    if not rows:
        return problem
    return rows[0].problem("", problem.value, problem.expectation, problem.tip, problem.subject)


_SUBJECTS = {"local back-up": "67", "breaker failure": "50BF", "end-fault logic": "50EF", "51 of": "51"}


def _cells(row: Row) -> tuple[str, ...]:
    return CELLS[row.text("function")]


def _on_coil(reading: Reading, breaker: str, coil: str, said: str) -> list[Row]:
    """Rows that trip a breaker by a coil on the DC that is said of it."""
    zones = isolation_zones(reading.plant)
    beside = zones.sides.get(breaker, ())
    near = sorted(n for n in reading.by_target if {*zones.sides.get(n, (zones.of.get(n, ""),))} & {*beside})
    dc = (_QUOTED.findall(said) or [""])[0]
    rows = [row for name in near for row in reading.by_target[name]]
    found = [r for r in rows if coil in (r.text("coil"), r.text("retrip_coil"))]
    return [r for r in found if r.text("coil_dc", r.text("dc")) == dc] or found


def relay_schedule(plant: Plant, policy: Policy, exceptions: Mapping[str, Policy] | None = None) -> RelaySchedule:
    """The relay schedule of a plant under a policy, for writing it as a table.

    Parameters
    ----------
    plant : Plant
    policy : Policy
    exceptions : mapping of name to Policy, or None
        Another policy for an element, or for a breaker's breaker-failure protection.

    Returns
    -------
    RelaySchedule
        Its scheme is the one that :func:`~schemesim.scheme.dress.dress` makes of the same.

    Raises
    ------
    InputError
        For an exception to something that is not in the plant.

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, generator, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> from schemesim.scheme.policy import single_set
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder")
    >>> single_bus(b, "Alder", [Bay("G1", "G1")])
    >>> plant = b.build()
    >>> found = relay_schedule(plant, single_set())
    >>> [str(f) for f in found.table()["function"]]
    ['87B', '87G', '51', '50BF']
    >>> found.scheme() == dress(plant, single_set())
    True
    """
    special = dict(exceptions or {})
    names = (*objects_of(plant), *plant.breakers)
    wrong = [
        Problem("exception to the policy", name, "the name of an element or a breaker", tip=nearest(name, names))
        for name in special
        if name not in names
    ]
    if wrong:
        raise InputError(wrong)
    return RelaySchedule(plant, policy, {name: special.get(name, policy) for name in names})


# --- writing --------------------------------------------------------------------------


def _rows(schedule: RelaySchedule) -> list[dict[str, object]]:
    found: list[dict[str, object]] = []
    wrong: list[Problem] = []
    for name, policy in schedule.policies.items():
        rows = _Writing(schedule, name, policy, wrong)
        found += rows.of_breaker() if name in schedule.plant.device else rows.of_element()
    if wrong:
        raise InputError(wrong)
    return found


@dataclass
class _Writing:
    """The rows of one element or breaker."""

    schedule: RelaySchedule
    name: str
    policy: Policy
    wrong: list[Problem]

    def of_element(self) -> list[dict[str, object]]:
        """Main sets, timed zones and local back-up."""
        plant, p = self.schedule.plant, self.policy
        kind = plant.section[self.name].kind
        line = kind is SectionKind.LINE
        self._check_rest()
        rows: list[dict[str, object]] = []
        for s in p.sets:
            function = _function(kind, s)
            times = p.times.distance if line and function != "87L" else p.times.differential
            times = p.times.overcurrent if kind is SectionKind.FEEDER else times
            rows.append({"function": function, "set": s.label, "core": s.core, "winding": s.winding if line else "",
                         **self._path(s.dc, s.coil), "channel": s.channel,
                         "lockout": s.lockout if p.lockout or line or kind is SectionKind.FEEDER else "",
                         "votes": p.votes if p.votes > 1 else "", **self._measuring(times)})  # fmt: skip
        if line and p.sets:
            zones = [("21-2", p.reaches.zone_2_delay)]
            zones += [("21-3", p.reaches.zone_3_delay)] if p.remote_backup else []
            rows += [{"function": f, **self._measuring(p.times.distance), "delay_ms": self._ms(d)} for f, d in zones]
        if kind in (SectionKind.TRANSFORMER, SectionKind.GENERATOR) and p.sets and p.remote_backup:
            rows.append({"function": "51", **self._measuring(p.times.overcurrent),
                         "delay_ms": self._ms(p.reaches.transformer_backup_delay)})  # fmt: skip
        lb = p.local_backup
        if lb is not None and kind is not SectionKind.BUS:
            rows.append({"function": "67", "core": lb.core, "winding": lb.winding if line else "",
                         **self._path(lb.dc, lb.coil), **self._measuring(p.times.overcurrent),
                         "delay_ms": self._ms(lb.delay if line else lb.unit_delay),
                         "reverse_delay_ms": self._ms(lb.bus_delay)})  # fmt: skip
        ends = stations_of(plant, self.name)
        at = ends if line else ends[:1]
        return [{"protects": self.name, "station": s, **row} for row in rows for s in (at or ("",))]

    def of_breaker(self) -> list[dict[str, object]]:
        """Breaker failure and end-fault logic."""
        p = self.policy
        self._check_rest()
        rows: list[dict[str, object]] = []
        bf = p.breaker_failure
        if bf is not None:
            t = bf.times
            retrip = {} if t.retrip is None else {"retrip_coil": bf.retrip_coil, "retrip_ms": self._ms(t.retrip)}
            rows.append({"function": "50BF", "core": bf.core, **self._path(bf.dc, bf.coil),
                         "channel": bf.channel if bf.transfer_trip else "", "lockout": bf.lockout if p.lockout else "",
                         "operate_ms": self._ms(t.detector_operate), "reset_ms": self._ms(t.detector_reset),
                         "delay_ms": self._ms(t.timer), **retrip, "start": str(bf.start),
                         "uses_52a": "yes" if bf.auxiliary else "no"})  # fmt: skip
        if p.end_fault and p.sets:
            s = p.sets[0]
            rows.append({"function": "50EF", "core": s.core, **self._path(s.dc, s.coil), "channel": s.channel,
                         "lockout": s.lockout, **self._measuring(p.times.overcurrent),
                         "delay_ms": self._ms(p.times.end_fault)})  # fmt: skip
        station = self.schedule.plant.device[self.name].station
        return [{"protects": self.name, "station": station, **row} for row in rows]

    def _path(self, dc: str, coil: str) -> dict[str, object]:
        return {"dc": dc, "coil": coil, "coil_dc": self.policy.dc_of_coil(coil)}

    def _measuring(self, times: Any) -> dict[str, object]:
        return {"operate_ms": self._ms(times.operate), "reset_ms": self._ms(times.reset)}

    def _ms(self, delay: Delay) -> object:
        """A fixed time; a random one is left to the base."""
        if delay.is_fixed:
            ms = delay.nominal_us / 1000
            return int(ms) if ms.is_integer() else ms
        return ""

    def _check_rest(self) -> None:
        """Refuse what a table has no cell for and the base says otherwise."""
        base, p = self.schedule.base, self.policy
        lost = [f for f in ("intertrip", "echo", "vt_supervision") if getattr(p, f) != getattr(base, f)]
        for part, written in _WRITTEN.items():
            mine, usual = getattr(p, part), getattr(base, part)
            if mine is None or usual is None:
                continue
            for f in fields(mine):
                a, b = getattr(mine, f.name), getattr(usual, f.name)
                if a != b and f.name not in written:
                    lost.append(f"{part}.{f.name}")
        usual_times = _delays(base)
        for path, delay in _delays(p).items():
            no_cell = not delay.is_fixed or path.rpartition(".")[2] in ("delayed_by", "dwell")
            if no_cell and delay != usual_times.get(path, _DEFAULT.get(path)):
                lost.append(path)
        for name in lost:
            text = f"as in the base policy, {base.name!r}: a schedule has no cell for it"
            self.wrong.append(Problem(f"policy of {self.name!r}", name, text))


_DEFAULT = {"breaker_failure.times.dwell": BreakerFailureTimes().dwell}
"""Times without a cell that are so where the base has no breaker failure."""

_WRITTEN = {
    "reaches": ("zone_2_delay", "zone_3_delay", "transformer_backup_delay"),
    "times": ("differential", "distance", "overcurrent", "end_fault"),
}
"""Parts of a policy, and what of them a schedule has cells for."""


def _delays(part: Any, path: str = "") -> dict[str, Delay]:
    """Every time of a policy, by its path."""
    found: dict[str, Delay] = {}
    for f in fields(part):
        value, here = getattr(part, f.name), f"{path}.{f.name}".strip(".")
        if isinstance(value, Delay):
            found[here] = value
        elif is_dataclass(value):
            found |= _delays(value, here)
    return found


def _function(kind: SectionKind, s: ProtectionSet) -> str:
    if kind is SectionKind.LINE:
        return next(f for f, scheme in LINE_FUNCTIONS.items() if scheme is s.line)
    return next(f for f, k in UNIT_FUNCTIONS.items() if k is kind)
