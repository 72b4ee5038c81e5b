"""Two registers side by side: at which place which single failure matters no longer, or matters now.

A failure that spoils thirty places and then twenty-nine is still a single point of
failure; what a change has bought is seen place by place.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING

from schemesim.errors import reject
from schemesim.plant.model import Location
from schemesim.show.tables import to_html
from schemesim.study.register import Entry, Register
from schemesim.study.spoiled import Effect, Spoiled

if TYPE_CHECKING:
    import pandas as pd

GONE, NEW, CHANGED = "gone", "new", "changed"


@dataclass(frozen=True, slots=True)
class RegisterChange:
    """A failure (or a pair) at one place, before and after.

    Attributes
    ----------
    failures : tuple of str
    location : Location
    before, after : Spoiled or None
        What it did to the clearing there; None: nothing.
    """

    failures: tuple[str, ...]
    location: Location
    before: Spoiled | None
    after: Spoiled | None

    @property
    def change(self) -> str:
        """``"gone"``, ``"new"``, or ``"changed"``: another effect, clearing time or number of breakers beyond."""
        return GONE if self.after is None else NEW if self.before is None else CHANGED

    @property
    def row(self) -> dict[str, object]:
        """A flat row, times in ms."""
        found: dict[str, object] = {
            "location": str(self.location),
            "failures": ", ".join(self.failures),
            "change": self.change,
        }
        for when, s in (("before", self.before), ("after", self.after)):
            found[when] = (Effect.NONE if s is None else s.effect).label
            found[f"t_clear_ms_{when}"] = None if s is None or s.t_clear_us is None else s.t_clear_us / 1000
            found[f"breakers_excess_{when}"] = None if s is None else s.excess
        return found


@dataclass(frozen=True)
class RegisterChanges:
    """What differs between two registers, by place and failure.

    Attributes
    ----------
    rows : tuple of RegisterChange
        What is gone, then what is new, then what changed; within each by place and failure.
    same : int
        Failures at places that are as they were.
    """

    rows: tuple[RegisterChange, ...]
    same: int

    @property
    def gone(self) -> tuple[RegisterChange, ...]:
        """What spoils its place no longer."""
        return self._of(GONE)

    @property
    def new(self) -> tuple[RegisterChange, ...]:
        """What did not spoil its place before."""
        return self._of(NEW)

    @property
    def changed(self) -> tuple[RegisterChange, ...]:
        """What spoils its place still, in another way."""
        return self._of(CHANGED)

    def _of(self, change: str) -> tuple[RegisterChange, ...]:
        return tuple(r for r in self.rows if r.change == change)

    def table(self) -> pd.DataFrame:
        """One row for each failure and place that differs: the effect, clearing time and breakers before and after."""
        import pandas as pd  # heavy: only when a table is asked for

        columns = ["location", "failures", "change"]
        columns += [f"{x}{w}" for w in ("before", "after") for x in ("", "t_clear_ms_", "breakers_excess_")]
        return pd.DataFrame([r.row for r in self.rows], columns=columns)

    def __repr__(self) -> str:
        counts = f"{len(self.gone)} gone, {len(self.new)} new, {len(self.changed)} changed, {self.same} the same"
        return f"RegisterChanges({counts}; a failure at a place counts once)"

    def _repr_html_(self) -> str:
        return to_html(self.table())


def compare_registers(before: Register, after: Register) -> RegisterChanges:
    """Which failures no longer spoil the clearing at which place, and which do so now.

    Parameters
    ----------
    before, after : Register
        Of the same locations, complete.

    Returns
    -------
    RegisterChanges

    Raises
    ------
    InputError
        If one was interrupted, or they are of different numbers of locations.

    Examples
    --------
    >>> import schemesim as ss
    >>> b = ss.PlantBuilder()
    >>> ss.generator(b, "G1", station="Alder")
    >>> ss.feeder(b, "F1", station="Alder", load_mw=10)
    >>> ss.single_bus(b, "Alder", [ss.Bay("G1", "G1"), ss.Bay("F1", "F1")])
    >>> plant, at = b.build(), [ss.Location("F1")]
    >>> def found(policy):
    ...     program = ss.compile_scheme(plant, ss.dress(plant, policy))
    ...     return ss.register(program, ss.LogicalSensing(), at, limit_us=150_000)
    >>> changes = compare_registers(found(ss.single_set()), found(ss.duplicate_relay()))
    >>> "Alder/F1/relay 1: failure_to_operate" in {r.failures[0] for r in changes.gone}
    True
    """
    for name, register in (("before", before), ("after", after)):
        if not register.complete:
            raise reject(f"register {name}", "an interrupted one", "a complete register")
    if before.locations != after.locations:
        raise reject("registers", (before.locations, after.locations), "two of the same locations")
    old, new = _by_place((*before.singles, *before.pairs)), _by_place((*after.singles, *after.pairs))
    rows = []
    for failures, location in {**old, **new}:
        was, now = old.get((failures, location)), new.get((failures, location))
        if _seen(was) != _seen(now):
            rows.append(RegisterChange(failures, location, was, now))
    rows.sort(key=lambda r: ((GONE, NEW, CHANGED).index(r.change), r.location, r.failures))
    return RegisterChanges(tuple(rows), len({**old, **new}) - len(rows))


def _by_place(entries: Iterable[Entry]) -> dict[tuple[tuple[str, ...], Location], Spoiled]:
    return {(e.failures, s.location): s for e in entries for s in e.spoiled}


def _seen(s: Spoiled | None) -> tuple[object, ...] | None:
    return None if s is None else (s.effect, s.t_clear_us, s.excess)
