"""A trip matrix held against the one a user gives as a table: what is missing, what is extra."""

from __future__ import annotations

import csv
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from fnmatch import fnmatchcase
from typing import TYPE_CHECKING

from schemesim.errors import ErrorList, nearest, reject
from schemesim.scheme.trip_matrix import KEYS, LOCKOUT, MARKS, TRANSFER, TRIP, TripMatrix
from schemesim.show.tables import to_html

if TYPE_CHECKING:
    import pandas as pd

LONG = ("breaker", "mark", "coil", "lockout", "channel", "vote")
"""Columns of a table with a row for each way."""


def _marks(text: str) -> frozenset[str] | None:
    """The marks of a cell of a user's table; None for a word that is none.

    Examples
    --------
    >>> sorted(_marks("86+TT BFI") or ""), sorted(_marks("x") or ""), _marks("-"), _marks("?")
    (['86', 'BFI', 'T', 'TT'], ['T'], frozenset(), None)
    """
    out: set[str] = set()
    for word in text.replace("+", " ").replace(",", " ").split():
        mark = _WORDS.get(word.upper())
        if mark is None:
            return None
        out |= {mark, TRIP} if mark in (LOCKOUT, TRANSFER) else {mark} if mark else set()
    return frozenset(out)


_WORDS = {
    **{m: m for m in MARKS}, "X": TRIP, "TRIP": TRIP, "1": TRIP, "YES": TRIP, "0": "", "-": "", "NO": "",
}  # fmt: skip


@dataclass(frozen=True, slots=True, order=True)
class Discrepancy:
    """One thing in which a scheme and a user's table differ.

    Attributes
    ----------
    kind : str
        ``"missing"``: in the table, not in the scheme; ``"extra"``: the other way round.
    output : str
        The trip output, or the row of the table that no output answers to.
    breaker, mark : str
        What is missing or extra; both empty for a row of the table that no output answers to.
    """

    kind: str
    output: str
    breaker: str = ""
    mark: str = ""


@dataclass(frozen=True)
class TripComparison:
    """A trip matrix held against a user's table.

    Attributes
    ----------
    differences : tuple of Discrepancy
    compared : tuple of str
        Marks compared: ``"T"``, and those of the others that the table uses at all.
    outputs, unlisted : int
        Trip outputs that a row of the table answers for, and those that none does.
    """

    differences: tuple[Discrepancy, ...]
    compared: tuple[str, ...]
    outputs: int
    unlisted: int

    @property
    def missing(self) -> tuple[Discrepancy, ...]:
        """In the table, not in the scheme."""
        return tuple(d for d in self.differences if d.kind == "missing")

    @property
    def extra(self) -> tuple[Discrepancy, ...]:
        """In the scheme, not in the table."""
        return tuple(d for d in self.differences if d.kind == "extra")

    def table(self) -> pd.DataFrame:
        """One row for each difference."""
        import pandas as pd  # heavy: only when a table is asked for

        rows = [{"kind": d.kind, "output": d.output, "breaker": d.breaker, "mark": d.mark} for d in self.differences]
        return pd.DataFrame(rows, columns=["kind", "output", "breaker", "mark"])

    def __repr__(self) -> str:
        return (
            f"TripComparison({len(self.missing)} missing, {len(self.extra)} extra; {self.outputs} trip outputs in the "
            f"table, {self.unlisted} in no row; compared: {', '.join(self.compared)})"
        )

    def _repr_html_(self) -> str:
        return to_html(self.table())


def compare_trip_matrix(
    matrix: TripMatrix, table: pd.DataFrame | str | Iterable[Mapping[str, object]]
) -> TripComparison:
    """What a scheme's trip matrix lacks, and has too much, against a table of the user's.

    The table has columns that name trip outputs (any of ``station``, ``element``,
    ``function``, ``set``, ``output``; a blank cell fits all, ``*`` and ``?`` stand for any
    text) and either one column for each breaker with the marks of :data:`MARKS` (``X`` is a
    trip by any way), or the columns ``breaker`` and ``mark``. A breaker without a column is not
    tripped. All rows that fit a trip output count together. How a trip goes (86, TT) and what is
    initiated (BFI) is compared only if the table uses that mark anywhere.

    Parameters
    ----------
    matrix : TripMatrix
    table : DataFrame, path of a CSV file, or iterable of mappings

    Returns
    -------
    TripComparison
        Trip outputs that no row fits are extra with all they trip.

    Raises
    ------
    InputError
        With every mistake: a column that is neither a key nor a breaker, no key column, a mark not known.
    """
    wanted = _wanted(matrix, _records_of(table))
    used = {m for _, cells in wanted for marks in cells.values() for m in marks}
    compared = tuple(m for m in MARKS if m == TRIP or m in used)
    out: set[Discrepancy] = set()
    answered: set[int] = set()
    listed = 0
    for r in matrix.rows:
        fits = [n for n, (key, _) in enumerate(wanted) if all(_fits(r.key[k], v) for k, v in key.items())]
        answered.update(fits)
        listed += bool(fits)
        for breaker in {*r.ways, *(b for n in fits for b in wanted[n][1])}:
            want = frozenset(m for n in fits for m in wanted[n][1].get(breaker, ()))
            have = r.marks(breaker)
            for mark in compared:
                if (mark in want) != (mark in have):
                    out.add(Discrepancy("missing" if mark in want else "extra", r.output, breaker, mark))
    for n, (key, _) in enumerate(wanted):
        if n not in answered:
            out.add(Discrepancy("missing", ", ".join(f"{k} {v}" for k, v in key.items())))
    order = sorted(out, key=lambda d: (d.kind != "missing", d.output, d.breaker, d.mark))
    return TripComparison(tuple(order), compared, listed, len(matrix.rows) - listed)


def _records_of(table: pd.DataFrame | str | Iterable[Mapping[str, object]]) -> list[dict[str, str]]:
    """Rows of a table as text; nothing is an empty text."""
    if isinstance(table, str):
        try:
            with open(table, encoding="utf-8-sig", newline="") as stream:
                rows: list[Mapping[str, object]] = list(csv.DictReader(stream, restkey="cells past the last column"))
        except (OSError, UnicodeDecodeError, csv.Error) as error:
            raise reject("trip matrix", table, f"a CSV file that can be read ({error})") from error
    else:
        rows = table.to_dict("records") if hasattr(table, "to_dict") else list(table)  # type: ignore[assignment]
    return [{str(k).strip(): _text(v) for k, v in row.items()} for row in rows]


def _fits(name: str, pattern: str) -> bool:
    return name == pattern or fnmatchcase(name, pattern)


def _text(value: object) -> str:
    if value is None or value is False or value != value:  # the last: no number
        return ""
    if isinstance(value, float) and value.is_integer():
        value = int(value)
    return "X" if value is True else str(value).strip()


_Wanted = tuple[dict[str, str], dict[str, frozenset[str]]]


def _wanted(matrix: TripMatrix, rows: list[dict[str, str]]) -> list[_Wanted]:
    errors = ErrorList()
    columns = list(dict.fromkeys(c for row in rows for c in row))
    known = {*KEYS, *matrix.breakers} if "breaker" not in columns else {*KEYS, *LONG}
    if not rows or not set(columns) & set(KEYS):
        errors.add("trip matrix", columns or "no rows", f"rows with at least one of the columns {[*KEYS]}")
    for name in columns:
        if name not in known:
            expected = "a breaker of the scheme, or a column that names trip outputs"
            errors.add("column of the trip matrix", name, expected, tip=nearest(name, known))
    errors.raise_if_any()
    out: list[_Wanted] = []
    for n, row in enumerate(rows, 1):
        key = {k: row[k] for k in KEYS if row.get(k)}
        cells = {row["breaker"]: row.get("mark") or "X"} if "breaker" in row else {
            b: row[b] for b in matrix.breakers if b in row
        }  # fmt: skip
        found: dict[str, frozenset[str]] = {}
        if not key:
            errors.add(f"row {n} of the trip matrix", "blank", f"at least one of {[*KEYS]}")
        for breaker, text in cells.items():
            if breaker not in matrix.breakers:
                tip = nearest(breaker, matrix.breakers)
                errors.add(f"row {n} of the trip matrix", breaker, "a breaker of the scheme", tip=tip)
                continue
            marks = _marks(text)
            if marks is None:
                errors.add(f"row {n} of the trip matrix, {breaker}", text, f"any of {[*MARKS]}, X, or nothing")
            elif marks:
                found[breaker] = marks
        out.append((key, found))
    errors.raise_if_any()
    return out
