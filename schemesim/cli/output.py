"""Tables as text, JSON and CSV; progress."""

from __future__ import annotations

import argparse
import csv
import io
import json
import math
import os
import shutil
import sys
import time
from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import Any

from schemesim.errors import reject
from schemesim.scenario.writing import write_whole

DONE, CANNOT_GO_ON, BAD_INPUT, INTERRUPTED = 0, 1, 2, 130
"""Exit status."""

NOTE = (
    "Results support and never replace a qualified engineer's review, local codes and the equipment's own "
    "documentation."
)
"""The safety note on every output."""

VERSION = 1
"""Version of the JSON and CSV forms."""

WIDTH = 118
"""Columns a text has at least; a wider terminal has more."""


def text_width() -> int:
    """Columns a text may take: those of the terminal where it is wider than ``WIDTH``."""
    return max(WIDTH, shutil.get_terminal_size((WIDTH, 24)).columns)


def table_text(rows: Sequence[Mapping[str, object]], columns: Sequence[str], whole: int = 1) -> str:
    """Rows as a text table: numbers to the right, texts to the left, long ones lose their middle.

    Parameters
    ----------
    rows : sequence of mapping
    columns : sequence of str
        In order; the others are left out.
    whole : int
        How many of the first columns name what a row is about: they are never shortened, and neither are
        the names of columns, numbers and brackets. Where these have no room the table is wider than the text.
        Several names in the very first column stand on lines of their own where they are too long for one.

    Examples
    --------
    >>> print(table_text([{"at": "L1", "n": 2}, {"at": "Bus", "n": None}], ["at", "n"]))
    at   n
    L1   2
    Bus  -
    """
    from schemesim.report.sequence import shorten

    cells = [[_cell(row.get(c)) for c in columns] for row in rows]
    room = text_width() - 2 * (len(columns) - 1)
    least = _least(cells, columns, whole)
    if whole and columns and sum(least) > room:
        most = room - sum(least[1:])
        cells = [[_split(line[0]) if len(line[0]) > most else line[0], *line[1:]] for line in cells]
        least = _least(cells, columns, whole)
        if sum(least) > room:
            least = _least(cells, columns, whole, words=11)
    widths = _widths(cells, columns)
    right = [bool(rows) and all(_is_number(row.get(c)) for row in rows) for c in columns]
    while sum(widths) > room and widths != least:
        widest = max(range(len(widths)), key=lambda i: (widths[i] > least[i], widths[i]))
        widths[widest] -= 1

    def line(texts: Sequence[str]) -> str:
        first, *more = (texts[0].splitlines() or [""]) if texts else [""]
        parts = [shorten(t, w) for t, w in zip([first, *texts[1:]], widths, strict=True)]
        sides = zip(parts, widths, right, strict=True)
        top = "  ".join(f"{p:>{w}}" if r else f"{p:<{w}}" for p, w, r in sides).rstrip()
        return "\n".join([top, *more])

    return "\n".join(line(texts) for texts in [list(columns), *cells]) if columns else ""


def _widths(cells: Sequence[Sequence[str]], columns: Sequence[str]) -> list[int]:
    """Width of each column with nothing shortened."""
    longest = [[max(map(len, text.splitlines()), default=0) for text in line] for line in cells]
    return [max([len(c), *(line[i] for line in longest)]) for i, c in enumerate(columns)]


def _least(cells: Sequence[Sequence[str]], columns: Sequence[str], whole: int, words: int = 18) -> list[int]:
    """Width that each column must have; one of ``words`` may be shortened to so many characters."""
    return [
        w if i < whole or not any(_has_words(line[i]) for line in cells) else min(w, max(len(c), words))
        for i, (w, c) in enumerate(zip(_widths(cells, columns), columns, strict=True))
    ]


def _split(text: str) -> str:
    """Several names, each on a line of its own.

    Examples
    --------
    >>> print(_split("Alder/DC 1: lost, L1/channel 1: lost"))
    Alder/DC 1: lost,
      L1/channel 1: lost
    """
    return text.replace(", ", ",\n  ")


def _has_words(text: str) -> bool:
    """Whether a cell may be shortened: it holds words, so is no number and no bracket of two."""
    return any(c.isalpha() for c in text.replace("e", ""))


def listing(label: str, names: Sequence[str]) -> list[str]:
    """Names after a label, on as many lines as they need; no name is broken.

    Examples
    --------
    >>> listing("out of service:", ["Alder/DC 1", "L1/channel 2"])
    ['out of service: Alder/DC 1, L1/channel 2']
    """
    lines = [label]
    for i, name in enumerate(names):
        word = name if i == len(names) - 1 else f"{name},"
        if len(lines[-1]) + 1 + len(word) > text_width() and lines[-1].strip():
            lines.append(" ")
        lines[-1] += f" {word}"
    return lines


def _is_number(value: object) -> bool:
    return value is None or (isinstance(value, (int, float)) and not isinstance(value, bool))


def _cell(value: object) -> str:
    if value is None:
        return "-"
    if isinstance(value, bool):
        return "yes" if value else "no"
    return f"{value:.6g}" if isinstance(value, float) else str(value)


def plain(value: Any) -> Any:
    """Data that JSON can say: no NaN, no infinity, keys that are text."""
    if isinstance(value, Mapping):
        return {str(k): plain(v) for k, v in value.items()}
    if isinstance(value, (list, tuple, set, frozenset)):
        return [plain(v) for v in (sorted(value) if isinstance(value, (set, frozenset)) else value)]
    if value is None or isinstance(value, (bool, str)):
        return value
    if isinstance(value, int):
        return int(value)
    number = float(value)
    return number if math.isfinite(number) else None


def json_text(kind: str, content: Mapping[str, object]) -> str:
    """One JSON object with its version and kind."""
    data = plain({"schemesim": VERSION, "kind": kind, **content})
    return json.dumps(data, ensure_ascii=False, allow_nan=False, indent=1)


def write_csv(path: str, rows: Iterable[Mapping[str, object]]) -> None:
    """Write rows as CSV, whole or not at all."""
    rows = [plain(row) for row in rows]
    columns = list(dict.fromkeys(key for row in rows for key in row))
    stream = io.StringIO()
    writer = csv.DictWriter(stream, columns, lineterminator="\n")
    writer.writeheader()
    writer.writerows(rows)
    write_whole(path, stream.getvalue().encode())


class Progress:
    """How far a long piece of work has come, on the error output; on one line where it is a terminal."""

    def __init__(
        self, what: str, quiet: bool, clock: Callable[[], float] = time.monotonic, unit: str = "locations"
    ) -> None:
        self.what, self.quiet, self.clock, self.unit = what, quiet, clock, unit
        self.started = clock()
        self._shown = -math.inf
        self._line = sys.stderr.isatty()

    def __call__(self, done: int, of: int) -> None:
        """So many done of so many."""
        now = self.clock()
        every = 0.2 if self._line else 5.0
        if self.quiet or (now - self._shown < every and done < of):
            return
        self._shown = now
        text = f"{self.what}: {done} of {of} {self.unit}, {now - self.started:.0f} s"
        end = "\n" if done == of or not self._line else ""
        print(f"\r{text}" if self._line else text, end=end, file=sys.stderr, flush=True)


def number_of(text: str, what: str, low: float, high: float) -> float:
    """A number given on the command line.

    Raises
    ------
    InputError
        If it is none, or out of bounds.
    """
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not low <= value <= high:
        raise reject(what, text, f"a number from {low:g} to {high:g}")
    return value


def whole_of(text: str, what: str, low: int, high: int) -> int:
    """A whole number given on the command line.

    Raises
    ------
    InputError
        If it is none, or out of bounds.
    """
    try:
        value = int(text)
    except ValueError:
        value = low - 1
    if not low <= value <= high:
        raise reject(what, text, f"a whole number from {low} to {high}")
    return value


def check_place(path: str, scenario: str) -> None:
    """Refuse a CSV file that could not be written, or would replace the scenario, before any work is done."""
    if os.path.realpath(path) == os.path.realpath(scenario):
        raise reject("--csv", path, "another file than the scenario")
    if os.path.isdir(path) or not os.path.isdir(os.path.dirname(os.path.abspath(path))):
        raise reject("--csv", path, "a file in a folder that is there")


def put(
    options: argparse.Namespace,
    name: str,
    content: Mapping[str, object],
    rows: Sequence[Mapping[str, object]],
    text: Sequence[str],
) -> None:
    """Print text or JSON, and write the CSV first, so that a place that cannot be written stops nothing halfway."""
    if options.csv is not None:
        write_csv(options.csv, rows)
    if options.json:
        head = {"scenario": {"file": options.file, "name": name}, "note": NOTE}
        print(json_text(options.command, {**head, **content}))
    else:
        print("\n".join([*text, "", NOTE]))
