"""Where a value stands in a file: paths, line numbers, and the tree that carries both."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TypeAlias

from schemesim.errors import Problem

Data: TypeAlias = "bool | int | float | str | list[Data] | dict[str, Data] | None"
"""Plain data: what a file can say."""

Path: TypeAlias = tuple[str | int, ...]
"""Keys and indices from the top of the file down to a value."""

_BARE_KEY = re.compile(r"[\w/+-]+")


@dataclass(frozen=True)
class Place:
    """Lines (from 1) of a value and of its key; in a list both are the value's."""

    key_line: int
    value_line: int


@dataclass(frozen=True)
class Tree:
    """Plain data together with the place of everything in it.

    Parameters
    ----------
    data
        Nested dicts (text keys), lists and scalars.
    file
        Name used in messages.
    places
        The place of every value by its path; the whole document has the path ``()``.

    Examples
    --------
    >>> tree = Tree({"a": [1]}, "x.yaml", {(): Place(1, 1), ("a",): Place(1, 2), ("a", 0): Place(2, 2)})
    >>> tree.line(("a", 0))
    2
    >>> print(tree.problem(("a", 0), "count", 1, "two or more"))
    x.yaml:2 at a[0]: count: got 1, expected two or more
    """

    data: Data
    file: str
    places: Mapping[Path, Place] = field(repr=False)

    def known(self, path: Path) -> Path:
        """The longest beginning of ``path`` that stands in the file."""
        while path and path not in self.places:
            path = path[:-1]
        return path

    def line(self, path: Path, *, of_key: bool = False) -> int | None:
        """Line of the value (or of its key) at ``path``.

        Something that is missing is placed where its nearest existing parent begins.
        """
        found = self.known(path)
        place = self.places.get(found)
        if place is None:
            return None
        return place.key_line if of_key and found == path else place.value_line

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
        """A mistake at ``path``, with file and line filled in."""
        line = self.line(path, of_key=of_key)
        return Problem(subject, value, expectation, render_path(path), self.file, line, tip)


def render_path(path: Path) -> str:
    """A path as a reader would write it; keys that would be ambiguous are quoted.

    Examples
    --------
    >>> render_path(("stations", 0, "bays", 2, "ct"))
    'stations[0].bays[2].ct'
    >>> render_path(("buses", "North 1.a", "kv"))
    'buses["North 1.a"].kv'
    """
    text = ""
    for part in path:
        if isinstance(part, int):
            text += f"[{part}]"
        elif _BARE_KEY.fullmatch(part):
            text += f".{part}" if text else part
        else:
            text += f"[{json.dumps(part, ensure_ascii=False)}]"
    return text
