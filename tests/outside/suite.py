"""All values from outside, by subject."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from importlib import import_module

from tests.outside.records import Compared, Quality, Record

MODULES = (
    "curves", "redundancy", "common_cause", "static_logic", "timing", "sequences", "teleprotection", "short_circuit",
    "networks", "statistics",
)  # fmt: skip
COUNTED = 10
"""No subject counts for more values than this."""


def records(modules: Iterable[str] = MODULES) -> tuple[Record, ...]:
    """Every record, in the order of the modules."""
    return tuple(r for name in modules for r in import_module(f"tests.outside.values_{name}").RECORDS)


def counted(found: Iterable[Record]) -> int:
    """Values, at most ``COUNTED`` of each subject."""
    by_subject: dict[str, int] = {}
    for r in found:
        by_subject[r.subject] = by_subject.get(r.subject, 0) + 1
    return sum(min(n, COUNTED) for n in by_subject.values())


def last_line(rows: Sequence[Compared]) -> str:
    """How many values, from how many sources, and the largest difference."""
    of = [c.record for c in rows]
    whole, sources = sum(r.whole for r in of), {r.source for r in of}
    apart = {r.source for r in of if r.quality not in (Quality.DERIVED, Quality.PRACTICE)}
    worst = max(rows, key=lambda c: c.units)
    out = sum(not c.fits for c in rows)
    said = f"{out} out of tolerance" if out else "none out of tolerance"
    return (
        f"{len(rows)} values ({counted(of)} counting at most {COUNTED} a subject; {whole} are whole sequences or "
        f"whole odds) from {len(sources)} sources ({len(apart)} publications and libraries), {said}; "
        f"largest difference {worst.units:.2f} of its tolerance ({worst.record.subject}: {worst.record.what})"
    )
