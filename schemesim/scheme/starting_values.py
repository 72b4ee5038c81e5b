"""The starting table of failure data: a CSV file, one row for each mode of each kind, with source and quality.

``starting_values.csv`` beside this file ships. It holds orders of magnitude; copy it, replace its values by your own
and load the copy. Columns: ``kind``, ``mode``; ``rate_per_yr`` and ``on_demand`` (one at least); ``coverage``,
``test_interval_yr``, ``test_duration_h``, ``repair_h`` (empty: none); ``detection`` (``latent`` or ``revealed``,
empty: latent); ``quality`` (``published``, ``from memory``, ``assumed``, ``measured``) and ``source``, which every row
must have.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from importlib import resources
from pathlib import Path
from typing import TYPE_CHECKING

from schemesim.errors import InputError, Problem, nearest
from schemesim.scheme.failure_data import NO_FAULT_PER_YR, FailureData
from schemesim.scheme.model import MODES, ComponentKind, FailureMode
from schemesim.scheme.unavailability import Over, Quality, RateData, RateRule, unavailability
from schemesim.show.tables import to_html

if TYPE_CHECKING:
    import pandas as pd

FILE = "starting_values.csv"
MAX_BYTES = 1_000_000
NUMBERS = ("rate_per_yr", "on_demand", "coverage", "test_interval_yr", "test_duration_h", "repair_h")
COLUMNS = ("kind", "mode", *NUMBERS, "detection", "quality", "source")


@dataclass(frozen=True, slots=True)
class StartingValue:
    """One row: the data of a mode, and where they come from."""

    rule: RateRule
    quality: Quality
    source: str


@dataclass(frozen=True)
class StartingValues:
    """A table of failure data with the source and quality of every row."""

    rows: tuple[StartingValue, ...]
    file: str

    def of(self, kind: ComponentKind, mode: FailureMode) -> StartingValue | None:
        """The row of a mode, or None."""
        return next((r for r in self.rows if (r.rule.kind, r.rule.mode) == (kind, mode)), None)

    def failure_data(self, over: Over = Over.MEAN, relay_beta: float = 0.0) -> FailureData:
        """Failure data of these values and no others; trips with no fault as they are by default.

        Parameters
        ----------
        over : Over
            The mean over the test interval, or the worst in it.
        relay_beta : float
        """
        return FailureData(
            modes={},
            no_fault_per_yr=dict(NO_FAULT_PER_YR),
            relay_beta=relay_beta,
            rates=tuple(r.rule for r in self.rows),
            over=Over(over),
        )

    def table(self) -> pd.DataFrame:
        """One row for each mode: the data, the mean and worst unavailability, quality and source."""
        import pandas as pd  # heavy: only when a table is asked for

        rows: list[dict[str, object]] = []
        for r in self.rows:
            d, u = r.rule.data, unavailability(r.rule.data)
            row: dict[str, object] = {"kind": str(r.rule.kind), "mode": str(r.rule.mode)}
            row |= {name: getattr(d, name) for name in NUMBERS}
            row["detection"] = "revealed" if d.revealed else "latent"
            row |= {"p_mean": u.mean, "p_worst": u.worst, "quality": str(r.quality), "source": r.source}
            rows.append(row)
        return pd.DataFrame(rows)

    def __repr__(self) -> str:
        counts = {q: sum(r.quality is q for r in self.rows) for q in Quality}
        said = ", ".join(f"{n} {q}" for q, n in counts.items() if n)
        return f"StartingValues({len(self.rows)} modes: {said})"

    def _repr_html_(self) -> str:
        return to_html(self.table())


def load_starting_values(path: str | Path | None = None) -> StartingValues:
    """Read a table of failure data.

    Parameters
    ----------
    path : str, Path or None
        A CSV file; by default the one that ships.

    Returns
    -------
    StartingValues

    Raises
    ------
    InputError
        With every mistake, its line and column: a column missing or unknown, a kind or mode that is none, what is
        no number, a negative rate, a coverage over 1, hidden failures and no test, no source, a mode given twice.

    Examples
    --------
    >>> values = load_starting_values()
    >>> values
    StartingValues(15 modes: 8 from memory, 7 assumed)
    >>> round(unavailability(values.of(ComponentKind.BREAKER, FailureMode.DOES_NOT_OPEN).rule.data).hidden_mean, 6)
    0.00036
    """
    name = FILE if path is None else str(path)
    return read_starting_values(_text(path, name), name)


def read_starting_values(text: str, file: str) -> StartingValues:
    """The table from its text; see :func:`load_starting_values`."""
    problems: list[Problem] = []
    rows: list[StartingValue] = []
    first: dict[tuple[ComponentKind, FailureMode], int] = {}
    for line, cells in _lines(text, file, problems):
        row = _Row(cells, file, line, problems)
        found = row.value()
        if found is None:
            continue
        key = found.rule.kind, found.rule.mode
        if key in first:
            row.note("mode", key[1].value, f"each mode of a {key[0]} once", f"first on line {first[key]}")
        first.setdefault(key, line)
        rows.append(found)
    if not rows and not problems:
        problems.append(Problem("file", "no rows", "one row at least", file=file))
    if problems:
        raise InputError(problems)
    return StartingValues(tuple(rows), file)


def _text(path: str | Path | None, name: str) -> str:
    if path is None:
        return resources.files("schemesim.scheme").joinpath(FILE).read_text(encoding="utf-8")
    try:
        if not Path(path).is_file():
            said = "no such file" if not Path(path).exists() else "no regular file"
            raise InputError([Problem("file", said, "a readable CSV file", file=name)])
        with open(path, "rb") as stream:
            raw = stream.read(MAX_BYTES + 1)
    except OSError as error:
        raise InputError([Problem("file", error.strerror, "a readable CSV file", file=name)]) from None
    if len(raw) > MAX_BYTES:
        raise InputError([Problem("file", "a larger file", f"at most {MAX_BYTES} bytes", file=name)])
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw[: error.start].count(b"\n") + 1
        raise InputError([Problem("file", raw[error.start : error.start + 1], "UTF-8 text", "", name, line)]) from None


def _lines(text: str, file: str, problems: list[Problem]) -> Iterator[tuple[int, dict[str, str]]]:
    """Rows with the line each begins on."""
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    head: list[str] | None = None
    end = 0
    try:
        for cells in reader:
            line, end = end + 1, reader.line_num
            if not any(c.strip() for c in cells):
                continue
            if head is None:
                head = [c.strip() for c in cells]
                if not _check_head(head, file, line, problems):
                    return
            elif len(cells) != len(head):
                problems.append(Problem("row", f"{len(cells)} cells", f"{len(head)} cells", "", file, line))
            else:
                yield line, {key: c.strip() for key, c in zip(head, cells, strict=True)}
    except csv.Error as error:
        problems.append(Problem("row", str(error), "CSV with quotes closed", "", file, end + 1))


def _check_head(head: list[str], file: str, line: int, problems: list[Problem]) -> bool:
    before = len(problems)
    for name in dict.fromkeys(head):
        if name not in COLUMNS:
            tip = nearest(name, COLUMNS)
            expected = f"one of {', '.join(COLUMNS)}"
            problems.append(Problem("column", name, expected, name, file, line, tip))
        elif head.count(name) > 1:
            problems.append(Problem("column", name, "each column once", name, file, line))
    missing = (name for name in COLUMNS if name not in head)
    problems.extend(Problem("column", "nothing", f"the column {name}", name, file, line) for name in missing)
    return len(problems) == before


class _Row:
    """One row, and the mistakes in it."""

    def __init__(self, cells: Mapping[str, str], file: str, line: int, problems: list[Problem]) -> None:
        self.cells, self.file, self.line, self.problems = cells, file, line, problems

    def note(self, column: str, value: object, expectation: str, tip: str = "") -> None:
        """Note a mistake in a cell."""
        self.problems.append(Problem(column, value, expectation, column, self.file, self.line, tip))

    def value(self) -> StartingValue | None:
        """What it says, or None where it has mistakes."""
        before = len(self.problems)
        kind = self._word("kind", [*ComponentKind])
        mode = self._word("mode", [*MODES[ComponentKind(kind)]] if kind else [*FailureMode])
        quality = self._word("quality", [*Quality])
        detection = self._word("detection", ["latent", "revealed"]) if self.cells["detection"] else "latent"
        if not self.cells["source"]:
            self.note("source", "nothing", "where the values come from")
        numbers = {name: self._number(name) for name in NUMBERS if self.cells[name]}
        if not numbers.keys() & {"rate_per_yr", "on_demand"}:
            self.note("rate_per_yr", "nothing", "a rate, or a probability on demand")
        if len(self.problems) > before or not kind or not mode or not quality:
            return None
        try:
            data = RateData(revealed=detection == "revealed", **numbers)
        except InputError as error:
            for p in error.problems:
                self.note(p.subject, p.value, p.expectation, p.tip)
            return None
        good, source = Quality(quality), self.cells["source"]
        rule = RateRule(kind=ComponentKind(kind), mode=FailureMode(mode), data=data, source=source, quality=good)
        return StartingValue(rule, good, source)

    def _word(self, column: str, words: list[str]) -> str:
        text = self.cells[column]
        if text in words:
            return text
        self.note(column, text or "nothing", f"one of {', '.join(map(str, words))}", nearest(text, map(str, words)))
        return ""

    def _number(self, column: str) -> float:
        text = self.cells[column]
        try:
            if "_" in text:
                raise ValueError
            return float(text)
        except ValueError:
            tip = "write a decimal point, not a comma" if "," in text else ""
            self.note(column, text, "a number", tip or ("write a share: 3 % is 0.03" if "%" in text else ""))
            return 0.0
