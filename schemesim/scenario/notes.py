"""Mistakes noted while a file is turned into a model, each where it stands in the file."""

from __future__ import annotations

import re

from schemesim.errors import InputError, Problem
from schemesim.scenario.locate import Path, Tree
from schemesim.scenario.names import Names

_QUOTED = re.compile(r"'([^']*)'")


class Notes:
    """Collects mistakes.

    Parameters
    ----------
    tree : Tree
    names : Names
        Names the file defines, to find the place of a mistake the model reports.
    """

    def __init__(self, tree: Tree, names: Names) -> None:
        self.tree, self.names = tree, names
        self.problems: list[Problem] = []

    def note(
        self, path: Path, subject: str, value: object, expectation: str, tip: str = "", *, of_key: bool = False
    ) -> None:
        """Note a mistake."""
        self.problems.append(self.tree.problem(path, subject, value, expectation, tip=tip, of_key=of_key))

    def take(self, error: InputError, path: Path | None = None, tip: str = "") -> None:
        """Note the mistakes of the model, where what they name stands."""
        for p in error.problems:
            where = path if path is not None else self.place(p)
            self.note(where, p.subject, p.value, p.expectation, "; ".join(t for t in (p.tip, tip) if t))

    def place(self, problem: Problem) -> Path:
        """Where the thing a mistake names stands: the last name that is known wins."""
        for text in (str(problem.value), problem.subject):
            for name in reversed(_QUOTED.findall(text)):
                for known in (name, name.partition("/")[0]):
                    found = self.names.place(known)
                    if found is not None:
                        return found
        return ("plant",)
