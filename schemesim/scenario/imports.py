"""Lists of the plant taken from CSV files next to a scenario.

The first row names the columns, which are the keys of an item. An empty cell is a key
left out; several cores or windings in one cell are separated by blanks. What is read
becomes part of the scenario, so a saved file stands alone.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path as FilePath
from pathlib import PurePosixPath

from schemesim.errors import InputError, Problem, nearest
from schemesim.scenario.locate import Data, Path, Place, Tree
from schemesim.scenario.problems import known_keys, subject_of
from schemesim.scenario.reading import FORBIDDEN, MAX_NODES, file_error, plain_scalar, text_of
from schemesim.scenario.scalars import text_tip
from schemesim.scenario.schema import TABLES

KEY = "imports"
"""The key of the plant that names the files."""


@dataclass(frozen=True)
class Joined(Tree):
    """A tree some items of which stand in files of their own: ``origin`` gives their file and row."""

    origin: Mapping[Path, tuple[Tree, int]] = field(default_factory=dict, repr=False)

    def line(self, path: Path, *, of_key: bool = False) -> int | None:
        """See :class:`Tree`; the line in the file the value stands in."""
        if path[:3] in self.origin:
            rows, row = self.origin[path[:3]]
            return rows.line((row, *path[3:]), of_key=of_key)
        return super().line(path, of_key=of_key)

    def problem(
        self,
        path: Path,
        subject: str,
        value: object,
        expectation: str,
        *,
        tip: str = "",
        of_key: bool = False,
    ) -> Problem:
        """See :class:`Tree`."""
        if path[:3] in self.origin:
            rows, row = self.origin[path[:3]]
            return rows.problem((row, *path[3:]), subject, value, expectation, tip=tip, of_key=of_key)
        return super().problem(path, subject, value, expectation, tip=tip, of_key=of_key)


_TEXT = frozenset({"name", "section", "station", "kind", "a", "b"})
_LABELS = frozenset({"cores", "windings"})


def import_tables(tree: Tree, folder: FilePath | None, problems: list[Problem]) -> Tree:
    """The tree with the items of imported files added to its lists, and where each came from.

    Parameters
    ----------
    tree : Tree
    folder : path or None
        Where the scenario stands; None for a text that stands nowhere.
    problems : list
        Mistakes are added here.

    Returns
    -------
    Tree
        The joined tree.
    """
    plant = tree.data.get("plant") if isinstance(tree.data, dict) else None
    if not isinstance(tree.data, dict) or not isinstance(plant, dict) or KEY not in plant:
        return tree
    joined: dict[str, Data] = {k: v for k, v in plant.items() if k != KEY}
    origin: dict[Path, tuple[Tree, int]] = {}
    named = plant[KEY]
    if not isinstance(named, dict):
        problems.append(tree.problem(("plant", KEY), KEY, named, "a mapping of a list's name to a CSV file"))
        named = {}
    for table, file in named.items():
        path: Path = ("plant", KEY, table)
        if table not in TABLES:
            tip = nearest(table, TABLES)
            problems.append(
                tree.problem(path, KEY, table, f"one of {', '.join(TABLES)}", tip=tip, of_key=True)
            )
            continue
        where = _file(tree, path, file, folder, problems)
        if where is None:
            continue
        try:
            rows = read_rows(where, table)
        except InputError as error:
            problems.extend(error.problems)
            continue
        present = joined.get(table, [])
        if not isinstance(present, list) or not isinstance(rows.data, list):
            continue
        for i in range(len(rows.data)):
            origin[("plant", table, len(present) + i)] = (rows, i)
        joined[table] = [*present, *rows.data]
    data: Data = {**tree.data, "plant": joined}
    return Joined(data, tree.file, tree.places, origin)


def _file(
    tree: Tree, path: Path, file: Data, folder: FilePath | None, problems: list[Problem]
) -> FilePath | None:
    expected = "the name of a CSV file in the scenario's folder or below"
    if not isinstance(file, str):
        problems.append(tree.problem(path, subject_of(path), file, expected, tip=text_tip(file)))
        return None
    pure = PurePosixPath(file.replace("\\", "/"))
    if not file or pure.is_absolute() or ".." in pure.parts or ":" in file:
        problems.append(tree.problem(path, subject_of(path), file, expected))
        return None
    if folder is None:
        problems.append(tree.problem(path, subject_of(path), file, "no import in a text that stands in no folder"))
        return None
    return folder / pure


def read_rows(path: FilePath, table: str) -> Tree:
    """Items of a CSV file, with the line of each.

    Raises
    ------
    InputError
        For a file that cannot be read or is no text, a heading that is no key, rows longer than
        the heading.
    """
    file = str(path)
    text = text_of(path).removeprefix("\ufeff")
    bad = FORBIDDEN.search(text)
    if bad:
        raise file_error(file, bad[0], "printable text", text[: bad.start()].count("\n") + 1)
    known = sorted(known_keys(TABLES[table], ()))
    problems: list[Problem] = []
    items: list[Data] = []
    places: dict[Path, Place] = {(): Place(1, 1)}
    heading: list[str] = []
    nodes = 0
    for line, cells in _lines(text, file):
        if not heading:
            heading = [c.strip() for c in cells]
            for column in heading:
                if column not in known or heading.count(column) > 1:
                    what = f"columns that are keys of {table}, each once: {', '.join(known)}"
                    problems.append(Problem("column", column, what, "", file, line, nearest(column, known)))
            continue
        nodes += len(cells)
        if nodes > MAX_NODES:
            raise file_error(file, "more", f"at most {MAX_NODES} cells", line)
        if len(cells) > len(heading):
            problems.append(Problem("row", cells[len(heading)], f"{len(heading)} cells", "", file, line))
            continue
        item: dict[str, Data] = {}
        for key, cell in zip(heading, (c.strip() for c in cells), strict=False):
            if cell:
                item[key] = _cell(key, cell)
                places[(len(items), key)] = Place(line, line)
        places[(len(items),)] = Place(line, line)
        items.append(item)
    if not heading:
        problems.append(Problem("file", "nothing", "a first row that names the columns", "", file, 1))
    if problems:
        raise InputError(problems)
    return Tree(items, file, places)


def _lines(text: str, file: str) -> Iterator[tuple[int, list[str]]]:
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    start = 1
    while True:
        try:
            cells = next(reader)
        except StopIteration:
            return
        except csv.Error as error:
            raise file_error(file, str(error), "comma-separated values, quotes closed", start) from None
        if any(c.strip() for c in cells):
            yield start, cells
        start = reader.line_num + 1


def _cell(key: str, cell: str) -> Data:
    if key in _LABELS:
        return list(cell.split())
    if key in _TEXT:
        return cell
    value, wrong = plain_scalar(cell)
    return cell if wrong else value
