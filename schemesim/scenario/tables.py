"""Rows of a user's own table: a pandas frame, a CSV or an Excel file, each cell with the place it stands in.

An empty cell is one left out. Labels that a spreadsheet made numbers of are text again (``1.0`` is ``"1"``).
Mistakes name the row as its reader sees it: the line of a CSV file, the row of an Excel sheet, the index of a frame.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from schemesim.errors import InputError, Problem, nearest
from schemesim.ticks import MAX_MS, looks_like_seconds

MAX_ROWS = 100_000
"""Most rows of a table."""

TRUE, FALSE = frozenset({"true", "yes", "y", "1", "x"}), frozenset({"false", "no", "n", "0"})


@dataclass
class Row:
    """One row, its mistakes noted as they are met.

    Attributes
    ----------
    cells : mapping of column to value
        Cells left out are not there.
    number : int or str
        The row as its reader counts it.
    file : str
        The file; empty for a frame.
    problems : list
        Shared by all rows of the table.
    """

    cells: Mapping[str, object]
    number: int | str
    file: str
    problems: list[Problem] = field(repr=False)
    bad: bool = False

    def problem(self, column: str, value: object, expectation: str, tip: str = "", subject: str = "") -> Problem:
        """A mistake at a cell, or in the whole row where no column is named."""
        what = subject or column or "row"
        if self.file and isinstance(self.number, int):
            return Problem(what, value, expectation, "", self.file, self.number, tip)
        return Problem(what, value, expectation, f"row {self.number}", tip=tip)

    def note(self, column: str, value: object, expectation: str, tip: str = "", subject: str = "") -> None:
        """Note a mistake; the row is bad then."""
        self.bad = True
        self.problems.append(self.problem(column, value, expectation, tip, subject))

    def text(self, column: str, default: str = "") -> str:
        """A name or label."""
        value = self.cells.get(column)
        if value is None:
            return default
        if isinstance(value, float) and value.is_integer():
            value = int(value)
        return str(value)

    def required(self, column: str) -> str:
        """A name or label that must be there."""
        found = self.text(column)
        if not found:
            self.note(column, "nothing", "a value in this cell")
        return found

    def labels(self, column: str, default: tuple[str, ...] = ()) -> tuple[str, ...]:
        """Labels, separated by blanks, commas or semicolons."""
        return tuple(self.text(column).replace(",", " ").replace(";", " ").split()) or default

    def names(self, column: str) -> tuple[str, ...]:
        """Names, separated by semicolons."""
        return tuple(part.strip() for part in self.text(column).split(";") if part.strip())

    def word(self, column: str, words: Iterable[str], default: str = "") -> str:
        """One of some words."""
        known, found = list(words), self.text(column, default)
        if found and found not in known:
            self.note(column, found, f"one of {', '.join(known)}", nearest(found, known))
            return ""
        return found

    def number_of(self, column: str, default: float = 0.0, most: float = math.inf) -> float:
        """A finite number, zero or more."""
        value = self._number(column)
        if value is None:
            return default
        if not math.isfinite(value) or not 0 <= value <= most:
            bound = "a finite number of zero or more" if most == math.inf else f"a number from 0 to {most:g}"
            self.note(column, self.cells[column], bound)
            return default
        return value

    def real(self, column: str) -> float | None:
        """A finite number of any sign, None where there is none."""
        value = self._number(column)
        if value is not None and not math.isfinite(value):
            self.note(column, self.cells[column], "a finite number")
            return None
        return value

    def reals(self, column: str) -> tuple[float, ...]:
        """Finite numbers, separated by blanks or semicolons."""
        found: list[float] = []
        for part in self.text(column).replace(";", " ").split():
            alone = Row({column: part}, self.number, self.file, self.problems)
            value = alone.real(column)
            self.bad = self.bad or alone.bad
            if value is not None:
                found.append(value)
        return tuple(found)

    def time_us(self, column: str, least_ms: float = 1.0) -> int | None:
        """A time given in ms, in microseconds; one over zero and under ``least_ms`` can only be meant in seconds."""
        value = self._number(column)
        if value is None:
            return None
        if not math.isfinite(value) or not 0 <= value <= MAX_MS:
            self.note(column, self.cells[column], f"a time from 0 to {MAX_MS:g} ms")
            return None
        tip = looks_like_seconds(value, least_ms)
        if tip:
            self.note(column, self.cells[column], f"0, or a time of {least_ms:g} ms or more", tip)
            return None
        return round(value * 1000)

    def truth(self, column: str, default: bool) -> bool:
        """Yes or no."""
        value = self.cells.get(column)
        if value is None:
            return default
        said = self.text(column).lower()
        if said in TRUE | FALSE:
            return said in TRUE
        self.note(column, value, "yes or no")
        return default

    def _number(self, column: str) -> float | None:
        value = self.cells.get(column)
        if value is None:
            return None
        if isinstance(value, (int, float)) and not isinstance(value, bool):
            return float(value)
        text = str(value)
        try:
            if "_" in text:
                raise ValueError
            return float(text)
        except ValueError:
            self.note(column, value, "a number", "write a decimal point, not a comma" if "," in text else "")
            return None


def read_table(
    source: Any,
    known: Sequence[str],
    required: Sequence[str],
    *,
    columns: Mapping[str, str | None] | None = None,
    sheet: int | str = 0,
) -> list[Row]:
    """The rows of a table that are not empty.

    Parameters
    ----------
    source : pandas.DataFrame, str or Path
        A frame, or a ``.csv``, ``.xlsx`` or ``.xls`` file whose first row names the columns.
    known : sequence of str
        Columns there may be.
    required : sequence of str
        Columns there must be.
    columns : mapping of str to str or None
        What a column of the table is called here; None: it is left out.
    sheet : int or str
        Of an Excel file.

    Raises
    ------
    InputError
        For a file that cannot be read, columns unknown, missing or given twice.
    """
    problems: list[Problem] = []
    file, heading, lines = _lines(source, sheet)
    names = {her: ours for her, ours in (columns or {}).items() if her in heading}
    problems += [
        Problem("column renamed", her, "a column of the table", file=file, tip=nearest(her, heading))
        for her in sorted(set(columns or {}) - set(heading))
    ]
    ours = [names.get(h, h) for h in heading]
    for her, name in zip(heading, ours, strict=True):
        if name is not None and name not in known:
            tip = nearest(name, known) or "columns={...: None} leaves one out"
            problems.append(Problem("column", her, f"one of {', '.join(known)}", file=file, tip=tip))
        elif name is not None and ours.count(name) > 1:
            problems.append(Problem("column", her, "each column once", file=file))
    lacking = (name for name in required if name not in ours)
    problems += [Problem("column", "nothing", f"the column {name}", file=file) for name in lacking]
    if problems:
        raise InputError(problems)
    noted: list[Problem] = []
    rows: list[Row] = []
    for number, values in lines:
        if len(rows) >= MAX_ROWS:
            raise InputError([Problem("table", "more", f"at most {MAX_ROWS} rows", file=file)])
        if len(values) > len(ours) and any(_plain(v) is not None for v in values[len(ours) :]):
            raise InputError([Row({}, number, file, []).problem("", f"{len(values)} cells", f"{len(ours)} cells")])
        cells = {n: v for n, v in zip(ours, map(_plain, values), strict=False) if n is not None and v is not None}
        if cells:
            rows.append(Row(cells, number, file, noted))
    return rows


def in_order(problems: Iterable[Problem], rows: Sequence[Row]) -> list[Problem]:
    """Mistakes in the order of their rows; those of no row last."""
    places: dict[object, int] = {}
    for i, row in enumerate(rows):
        places.setdefault(row.number if row.file else f"row {row.number}", i)
    return sorted(problems, key=lambda p: places.get(p.path if p.line is None else p.line, len(rows)))


def _lines(source: Any, sheet: int | str) -> tuple[str, list[str], list[tuple[int | str, list[object]]]]:
    """File name, heading, and the rows with their numbers."""
    import pandas as pd  # heavy: only when a table is read

    if isinstance(source, pd.DataFrame):
        heading = [str(c).strip() for c in source.columns]
        values = source.astype(object).to_numpy().tolist()
        return "", heading, [(str(i), row) for i, row in zip(source.index, values, strict=True)]
    if not isinstance(source, (str, Path)):
        expected = "a pandas frame, or the name of a CSV or Excel file"
        raise InputError([Problem("table", type(source).__name__, expected)])
    path = Path(source)
    if not path.is_file():
        raise InputError([Problem("table", "no such file", "a readable CSV or Excel file", file=str(source))])
    if path.suffix.lower() in (".xlsx", ".xls", ".xlsm"):
        return str(source), *_excel(path, sheet)
    return str(source), *_csv(path)


def _excel(path: Path, sheet: int | str) -> tuple[list[str], list[tuple[int | str, list[object]]]]:
    import pandas as pd

    try:
        frame = pd.read_excel(path, sheet_name=sheet, header=None, dtype=object)
    except (ValueError, OSError, KeyError) as error:
        raise InputError([Problem("table", str(error), "a readable Excel file and sheet", file=str(path))]) from None
    except Exception as error:  # a damaged archive: openpyxl passes on whatever its parts raise
        raise InputError([Problem("table", str(error), "a readable Excel file", file=str(path))]) from None
    values = frame.to_numpy().tolist()
    if not values:
        raise InputError([Problem("table", "nothing", "a first row that names the columns", file=str(path))])
    width = max((i + 1 for i, cell in enumerate(values[0]) if _plain(cell) is not None), default=0)
    heading = [str(cell).strip() for cell in values[0][:width]]
    return heading, [(n, row) for n, row in enumerate(values[1:], start=2)]


def _csv(path: Path) -> tuple[list[str], list[tuple[int | str, list[object]]]]:
    try:
        text = path.read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as error:
        raise InputError([Problem("table", str(error), "UTF-8 text", file=str(path))]) from None
    except OSError as error:
        raise InputError([Problem("table", error.strerror, "a readable file", file=str(path))]) from None
    found = list(_cells(text, path))
    if not found:
        raise InputError([Problem("table", "nothing", "a first row that names the columns", file=str(path))])
    return [cell.strip() for cell in found[0][1]], [(n, list(cells)) for n, cells in found[1:]]


def _cells(text: str, path: Path) -> Iterator[tuple[int, list[str]]]:
    first = text.partition("\n")[0]
    mark = ";" if first.count(";") > first.count(",") else ","
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=mark, strict=True)
    end = 0
    try:
        for cells in reader:
            line, end = end + 1, reader.line_num
            if any(c.strip() for c in cells):
                yield line, cells
    except csv.Error as error:
        raise InputError([Problem("row", str(error), "CSV with quotes closed", "", str(path), end + 1)]) from None


def _plain(value: Any) -> object:
    """A cell as text, number or truth value; None where there is nothing in it."""
    if value is None or isinstance(value, bool):
        return value
    if isinstance(value, str):
        return value.strip() or None
    if hasattr(value, "item"):  # a scalar of numpy
        return _plain(value.item())
    if isinstance(value, (int, float)):
        return None if isinstance(value, float) and math.isnan(value) else value
    try:
        return None if value != value or str(value) in ("NaT", "<NA>") else str(value)
    except TypeError:  # pandas' NA has no truth value
        return None
