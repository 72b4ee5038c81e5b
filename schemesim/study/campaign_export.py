"""A campaign's store as flat rows, as CSV and as Parquet."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from schemesim.errors import reject
from schemesim.study.campaign_tallies import CampaignEnding, PlaceFacts
from schemesim.study.store import Place, Store

COLUMNS: Mapping[str, str] = {
    "variant": "text",
    "event": "text",
    "trial": "whole",
    "failures": "text",
    "trials": "whole",
    "status": "text",
    "t_clear_ms": "number",
    "cleared_by": "text",
    "breakers": "whole",
    "breakers_excess": "whole",
    "tripped": "text",
    "not_interrupting": "text",
    "operated": "text",
    "open_at_end": "text",
    "load_lost_mw": "number",
    "sections_lost": "whole",
    "at_horizon": "truth",
}
"""Columns of the endings, with the kind of what stands in them; names are joined by ``, ``."""


def ending_rows(store: Store) -> Iterator[dict[str, object]]:
    """One row for each place, ending and clearing time, with the number of trials.

    Where failure sets were given, one for each place and set. Columns are those of ``COLUMNS``; ``trial`` and
    ``failures`` are empty for drawn trials. Times are in ms, rounded up to the whole millisecond where delays
    are random.
    """
    sets = store.about["failures"]
    for number, place in enumerate(store.places()):
        if sets:
            for chunk in store.chunks(number):
                for offset, (tally, us) in enumerate(chunk.each or ()):
                    trial = chunk.first + offset
                    failed = ", ".join(sets[trial]) or "none"
                    yield _row(place, chunk.facts, chunk.tallies[tally].ending, us, 1, trial, failed)
            continue
        if (counts := store.counts(number)) is not None:
            for t in counts.tallies:
                yield from (_row(place, counts.facts, t.ending, us, n) for us, n in t.times)


def _row(
    place: Place,
    facts: PlaceFacts,
    end: CampaignEnding,
    t_us: int | None,
    trials: int,
    trial: int | None = None,
    failed: str | None = None,
) -> dict[str, object]:
    return {
        "variant": place.variant,
        "event": place.event,
        "trial": trial,
        "failures": failed,
        "trials": trials,
        "status": str(end.status),
        "t_clear_ms": None if t_us is None else t_us / 1000,
        "cleared_by": None if end.cleared_by is None else end.cleared_by.label,
        "breakers": len(end.breakers),
        "breakers_excess": len(end.breakers - facts.intended),
        "tripped": ", ".join(sorted(end.breakers)),
        "not_interrupting": ", ".join(name for name, _, _, done in end.tripped if not done),
        "operated": ", ".join(end.operated),
        "open_at_end": ", ".join(end.open),
        "load_lost_mw": end.load_lost_mw,
        "sections_lost": end.sections_lost,
        "at_horizon": end.at_horizon,
    }


def csv_bytes(rows: Sequence[Mapping[str, object]]) -> bytes:
    """Rows as CSV in UTF-8; the first line names the columns.

    Examples
    --------
    >>> csv_bytes([{"event": "L1@0.1", "trials": 3, "cleared_by": None}])
    b'event,trials,cleared_by\\nL1@0.1,3,\\n'
    """
    columns = list(dict.fromkeys(key for row in rows for key in row)) or list(COLUMNS)
    stream = io.StringIO()
    writer = csv.DictWriter(stream, columns, lineterminator="\n")
    writer.writeheader()
    writer.writerows(rows)
    return stream.getvalue().encode()


def parquet_bytes(rows: Sequence[Mapping[str, object]]) -> bytes:
    """Rows as a Parquet file, each column of one type whatever stands in it.

    Raises
    ------
    InputError
        If pyarrow is not installed (the extra ``parquet``).
    """
    try:
        import pyarrow as pa  # type: ignore[import-untyped]  # heavy, an extra, and carries no types
        import pyarrow.parquet as pq  # type: ignore[import-untyped]  # the same
    except ImportError:
        raise reject("Parquet", "no pyarrow", "pyarrow installed: pip install 'schemesim[parquet]'") from None
    types: dict[str, Any] = {"text": pa.string(), "whole": pa.int64(), "number": pa.float64(), "truth": pa.bool_()}
    columns = list(dict.fromkeys(key for row in rows for key in row)) or list(COLUMNS)
    kinds = {c: COLUMNS.get(c) or _kind([row.get(c) for row in rows]) for c in columns}
    schema = pa.schema([(c, types[kinds[c]]) for c in columns])
    sink = io.BytesIO()
    pq.write_table(pa.Table.from_pylist([dict(row) for row in rows], schema=schema), sink)
    return sink.getvalue()


def _kind(values: Sequence[object]) -> str:
    """The kind of a column of measures: they are numbers unless they are text or truth values."""
    if any(isinstance(v, str) for v in values):
        return "text"
    return "truth" if any(isinstance(v, bool) for v in values) else "number"
