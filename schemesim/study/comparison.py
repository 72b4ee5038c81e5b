"""Variants side by side: what each protection policy buys over the first.

A variant is called better or worse in a measure only where the brackets of the two do
not overlap; otherwise the study does not tell them apart.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

from schemesim.errors import reject
from schemesim.plant.model import Location
from schemesim.show.tables import to_html
from schemesim.study.brackets import Bracket, exactly
from schemesim.study.locations import LocationStudy

if TYPE_CHECKING:
    import pandas as pd

_MORE_IS_BETTER = frozenset({"p_cleared", "p_within_limit", "p_by_main", "p_selective"})
_LESS_IS_BETTER = frozenset(
    {
        "breakers_mean",
        "breakers_excess",
        "load_lost_mw_mean",
        "uncleared_per_yr",
        "late_or_uncleared_per_yr",
        "fault_needless_trips_per_yr",
        "no_fault_trips_per_yr",
        "needless_trips_per_yr",
        "single_points",
        "single_points_not_cleared",
        "single_points_late",
        "single_points_at_places",
    }
)


@dataclass(frozen=True, slots=True)
class Compared:
    """One measure of one variant beside that of the base.

    Attributes
    ----------
    measure, variant : str
    value : Bracket
    difference : Bracket
        Variant less base.
    verdict : str
        ``"better"``, ``"worse"``, ``"higher"``, ``"lower"`` (where neither is better),
        ``"same"`` (one and the same value), ``"same number"`` (of single points of failure: as many, but
        others, or at other locations) or ``"not told apart"``; empty for the base.
    """

    measure: str
    variant: str
    value: Bracket
    difference: Bracket
    verdict: str


@dataclass(frozen=True)
class Comparison:
    """Every measure of every variant; the first variant is the base.

    ``single_points`` and those not cleared or late count a failure once, however many locations it
    spoils; ``single_points_at_places`` counts it at each. Which are gone and which are new:
    :func:`~schemesim.study.register_changes.compare_registers`.
    """

    base: str
    variants: tuple[str, ...]
    rows: tuple[Compared, ...]

    def of(self, measure: str, variant: str) -> Compared:
        """One cell.

        Raises
        ------
        InputError
            If there is no such measure or variant.
        """
        for row in self.rows:
            if (row.measure, row.variant) == (measure, variant):
                return row
        raise reject("comparison", (measure, variant), "a measure and a variant that were compared")

    def table(self) -> pd.DataFrame:
        """One row for each measure, low, high and verdict of each variant side by side."""
        import pandas as pd  # heavy: only when a table is asked for

        lines: dict[str, dict[str, object]] = {}
        for row in self.rows:
            line = lines.setdefault(row.measure, {"measure": row.measure})
            line[f"{row.variant} low"] = float(row.value.low)
            line[f"{row.variant} high"] = float(row.value.high)
            if row.variant != self.base:
                line[f"{row.variant} vs {self.base}"] = row.verdict
        return pd.DataFrame(list(lines.values()))

    def __repr__(self) -> str:
        lines = []
        for measure in dict.fromkeys(row.measure for row in self.rows):
            lines.append(measure)
            for variant in self.variants:
                row = self.of(measure, variant)
                lines.append(f"  {variant:24} {row.value!r:32} {row.verdict}".rstrip())
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.table())


def compare(studies: Mapping[str, LocationStudy], *, own_places: bool = False) -> Comparison:
    """Put the studies of several variants side by side; the first is the base.

    Parameters
    ----------
    studies : mapping of variant name to LocationStudy
        Of the same locations, with the same limit and frequencies.
    own_places : bool
        The variants are plants of their own (other positions of CTs, another layout), so that their
        sections differ: each study has its own locations, weighted by its own frequencies.

    Raises
    ------
    InputError
        With fewer than one study; studies of different limits; with ``own_places``, a study without frequencies;
        without, studies of different locations or frequencies.
    """
    if not studies:
        raise reject("studies", "none", "at least one")
    base_name, base = next(iter(studies.items()))
    for name, study in studies.items():
        if own_places and study.frequencies is None:
            raise reject(f"study {name!r}", "no frequencies", "faults per year, as locations differ in number")
        same_places = [r.location for r in study.results] == [r.location for r in base.results]
        same = own_places or (same_places and study.frequencies == base.frequencies)
        if not same or study.options.limit_us != base.options.limit_us:
            expected = f"the {'' if own_places else 'locations, frequencies and '}limit of {base_name!r}"
            tip = "" if own_places else "own_places=True compares plants that differ"
            raise reject(f"study {name!r}", "another", expected, tip=tip)
    figures = {name: _figures(study) for name, study in studies.items()}
    points = {name: _points(study) for name, study in studies.items()}
    rows = []
    for measure, before in figures[base_name].items():
        for name in studies:
            value = figures[name].get(measure)
            if value is not None:
                verdict = "" if name == base_name else _verdict(measure, before, value)
                if verdict == "same" and points[name].get(measure) != points[base_name].get(measure):
                    verdict = "same number"
                rows.append(Compared(measure, name, value, value - before, verdict))
    return Comparison(base_name, tuple(studies), tuple(rows))


def _figures(study: LocationStudy) -> dict[str, Bracket]:
    figures = study.measures()
    points = _points(study)
    for name, pairs in points.items():
        figures[name] = exactly(len({failure for failure, _ in pairs}))
    if points:
        figures["single_points_at_places"] = exactly(len(points["single_points"]))
    return figures


def _points(study: LocationStudy) -> dict[str, frozenset[tuple[str, Location]]]:
    """Single points of failure and the locations they spoil, all and of each kind; none if they were not all found."""
    if any(r.stopped == "budget" for r in study.results):
        return {}
    found = [(p, r.location) for r in study.results for p in r.single_points]
    return {
        "single_points": frozenset((p.failure, at) for p, at in found),
        "single_points_not_cleared": frozenset((p.failure, at) for p, at in found if p.not_cleared),
        "single_points_late": frozenset((p.failure, at) for p, at in found if p.late),
    }


def _verdict(measure: str, before: Bracket, after: Bracket) -> str:
    if before.overlaps(after):
        return "same" if before == after and before.width == 0 else "not told apart"
    higher = after.low > before.high
    if measure in _MORE_IS_BETTER:
        return "better" if higher else "worse"
    if measure in _LESS_IS_BETTER:
        return "worse" if higher else "better"
    return "higher" if higher else "lower"
