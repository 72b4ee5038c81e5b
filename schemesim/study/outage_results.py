"""What each item out for work does: the results of :mod:`schemesim.study.outages`.

A set is all relays of one chain at an element and station. A breaker out is open and
isolated in the plant; the scheme stays as it is. What becomes critical: locations that are no longer
cleared, are late or take more breakers with nothing else failing, and failures that are now
single points. With hours out per year each outage adds its share to the yearly figures.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

from schemesim.errors import nearest, reject
from schemesim.plant.model import Location
from schemesim.show.tables import to_html
from schemesim.study.brackets import Bracket, total
from schemesim.study.locations import LocationStudy
from schemesim.study.spoiled import Effect
from schemesim.study.weak_points import SinglePoint

if TYPE_CHECKING:
    import pandas as pd

SET, DC, CHANNEL, BREAKER = "set", "dc", "channel", "breaker"
KINDS = (SET, DC, CHANNEL, BREAKER)
"""What can be out for work."""

PER_YR = (
    "uncleared_per_yr",
    "late_or_uncleared_per_yr",
    "added_uncleared_per_yr",
    "added_late_or_uncleared_per_yr",
)
"""Yearly figures of an outage."""


@dataclass(frozen=True, slots=True)
class Outage:
    """One item out for work.

    Attributes
    ----------
    kind : str
        One of :data:`KINDS`.
    name : str
    components : frozenset of str
        Out of service with it; empty for a breaker.
    """

    kind: str
    name: str
    components: frozenset[str] = frozenset()


@dataclass(frozen=True, slots=True)
class Worse:
    """A location that an outage alone spoils, with nothing else failing.

    Attributes
    ----------
    location : Location
    effect : Effect
    t_clear_us, t_clear_before_us : int or None
        Clearing time with the item out and with all in service; None: not cleared.
    breakers, breakers_before : int
    """

    location: Location
    effect: Effect
    t_clear_us: int | None
    t_clear_before_us: int | None
    breakers: int
    breakers_before: int


@dataclass(frozen=True)
class OutageResult:
    """What one outage does.

    Attributes
    ----------
    outage : Outage
    study : LocationStudy
        Every location with the item out.
    affected : int
        Locations whose clearing the item bears on at all; the others are as before.
    worse : tuple of Worse
        Locations spoiled by the outage alone.
    new_points : tuple of (Location, SinglePoint)
        Single failures that spoil a location now, or spoil it worse than with all in service.
    hours_per_yr : float or None
    uncleared_per_yr, late_or_uncleared_per_yr : Bracket or None
        Faults per year that fall in the hours out and are not cleared, or late or not cleared; None without hours
        or fault frequencies.
    added_uncleared_per_yr, added_late_or_uncleared_per_yr : Bracket or None
        How many more these are than in the same hours with all in service.
    """

    outage: Outage
    study: LocationStudy
    affected: int
    worse: tuple[Worse, ...]
    new_points: tuple[tuple[Location, SinglePoint], ...]
    hours_per_yr: float | None
    uncleared_per_yr: Bracket | None
    late_or_uncleared_per_yr: Bracket | None
    added_uncleared_per_yr: Bracket | None
    added_late_or_uncleared_per_yr: Bracket | None

    @property
    def worst(self) -> Effect:
        """The worst that the outage alone does anywhere."""
        return max((w.effect for w in self.worse), default=Effect.NONE)

    @property
    def row(self) -> dict[str, object]:
        """One row of the table."""
        row: dict[str, object] = {
            "out": self.outage.name,
            "kind": self.outage.kind,
            "locations_affected": self.affected,
            "alone": self.worst.label,
            "locations_not_cleared": sum(w.effect is Effect.NOT_CLEARED for w in self.worse),
            "locations_late": sum(w.effect is Effect.LATE for w in self.worse),
            "locations_more_breakers": sum(w.effect is Effect.MORE_BREAKERS for w in self.worse),
            "new_single_points": len({p.failure for _, p in self.new_points}),
            "new_single_points_not_cleared": len({p.failure for _, p in self.new_points if p.not_cleared}),
            "hours_per_yr": self.hours_per_yr,
        }
        for name in PER_YR:
            b: Bracket | None = getattr(self, name)
            row[f"{name}_low"], row[f"{name}_high"] = (None, None) if b is None else (float(b.low), float(b.high))
        return row


@dataclass(frozen=True)
class OutageStudy:
    """Every outage, and the study with all in service.

    Attributes
    ----------
    base : LocationStudy
    results : tuple of OutageResult
        In the order asked for.
    complete : bool
        False if it was interrupted: the outages finished until then are here.
    """

    base: LocationStudy
    results: tuple[OutageResult, ...]
    complete: bool = True

    def of(self, name: str) -> OutageResult:
        """The result of one outage.

        Raises
        ------
        InputError
            If it was not studied.
        """
        for r in self.results:
            if r.outage.name == name:
                return r
        known = [r.outage.name for r in self.results]
        raise reject("outage", name, "an outage studied", tip=nearest(name, known))

    @property
    def uncleared_per_yr(self) -> Bracket | None:
        """Faults per year not cleared, in the hours out of all outages; None without hours or frequencies."""
        return _sum(r.uncleared_per_yr for r in self.results)

    @property
    def late_or_uncleared_per_yr(self) -> Bracket | None:
        """Faults per year late or not cleared, in the hours out of all outages."""
        return _sum(r.late_or_uncleared_per_yr for r in self.results)

    @property
    def added_uncleared_per_yr(self) -> Bracket | None:
        """What all outages together add to the faults per year not cleared; None without hours or frequencies."""
        return _sum(r.added_uncleared_per_yr for r in self.results)

    @property
    def added_late_or_uncleared_per_yr(self) -> Bracket | None:
        """What all outages together add to the faults per year late or not cleared."""
        return _sum(r.added_late_or_uncleared_per_yr for r in self.results)

    def table(self) -> pd.DataFrame:
        """One row for each outage."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame([r.row for r in self.results])

    def critical(self) -> pd.DataFrame:
        """One row for each outage and what becomes critical: a location by itself, or with one failure more."""
        import pandas as pd

        columns = ["out", "kind", "location", "failure", "effect", "t_clear_ms", "breakers"]
        return pd.DataFrame(list(self.critical_records()), columns=columns)

    def critical_records(self) -> Iterator[dict[str, object]]:
        """The rows of :meth:`critical`."""
        for r in self.results:
            head = {"out": r.outage.name, "kind": r.outage.kind}
            for w in r.worse:
                t = None if w.t_clear_us is None else w.t_clear_us / 1000
                what = {"failure": "", "effect": w.effect.label, "t_clear_ms": t, "breakers": w.breakers}
                yield {**head, "location": str(w.location), **what}
            for at, p in r.new_points:
                yield {**head, "location": str(at), "failure": p.failure, "effect": p.kind}

    def __repr__(self) -> str:
        bad = sum(r.worst is Effect.NOT_CLEARED for r in self.results)
        late = sum(r.worst is Effect.LATE for r in self.results)
        more = "" if self.complete else ", interrupted"
        return (
            f"OutageStudy({len(self.results)} outages at {len(self.base.results)} locations{more}; alone {bad} leave a "
            f"fault uncleared, {late} late; uncleared faults per year, in the hours out: {self.uncleared_per_yr})"
        )

    def _repr_html_(self) -> str:
        return to_html(self.table())


def _sum(items: Iterable[Bracket | None]) -> Bracket | None:
    found = list(items)
    return None if not found or None in found else total(b for b in found if b is not None)
