"""Errors that say what is wrong, what was expected and where.

Every mistake a user can make is an :class:`InputError` with a subject, a value,
an expectation and, where known, a place (file, line, path). Checks collect all
mistakes in an :class:`ErrorList` and raise one :class:`InputErrors` with every
one of them; nothing is half-built.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from difflib import get_close_matches


class SchemesimError(Exception):
    """Base of all errors raised on purpose by this library."""


@dataclass(frozen=True)
class Problem:
    """One mistake.

    Parameters
    ----------
    subject
        What the mistake is about, e.g. ``"breaker 'A.CB1'"``.
    value
        The offending value as the user gave it.
    expectation
        What would have been accepted.
    path
        Dotted path inside the input, empty when not from a file.
    file, line
        Where it stands, when known.
    tip
        A hint, e.g. the nearest name.
    """

    subject: str
    value: object
    expectation: str
    path: str = ""
    file: str = ""
    line: int | None = None
    tip: str = ""

    def __str__(self) -> str:
        where = self.file
        if self.line is not None:
            where += f":{self.line}" if where else f"line {self.line}"
        if self.path:
            where = f"{where} at {self.path}" if where else f"at {self.path}"
        text = f"{self.subject}: got {_short(self.value)}, expected {self.expectation}"
        if self.tip:
            text += f" ({self.tip})"
        return f"{where}: {text}" if where else text


class InputError(SchemesimError, ValueError):
    """One or more mistakes in the input; ``problems`` lists them all.

    It can be made again from its ``args``, as pickling and SimPy's processes do.
    """

    def __init__(self, problems: Iterable[Problem]) -> None:
        self.problems = tuple(problems)
        super().__init__(self.problems)

    def __str__(self) -> str:
        return "\n".join(str(p) for p in self.problems)


class RunError(SchemesimError, RuntimeError):
    """A run that cannot go on, e.g. an instant that does not settle."""


class ErrorList:
    """Collects mistakes and raises them together.

    Examples
    --------
    >>> errors = ErrorList()
    >>> errors.add("delay", -3, "a time of zero or more, in ms")
    >>> len(errors)
    1
    >>> errors.raise_if_any()
    Traceback (most recent call last):
    ...
    schemesim.errors.InputError: delay: got -3, expected a time of zero or more, in ms
    """

    def __init__(self) -> None:
        self._problems: list[Problem] = []

    def add(
        self, subject: str, value: object, expectation: str, *, path: str = "", tip: str = ""
    ) -> None:
        """Note one mistake."""
        self._problems.append(Problem(subject, value, expectation, path=path, tip=tip))

    def extend(self, problems: Iterable[Problem]) -> None:
        """Note mistakes found elsewhere."""
        self._problems.extend(problems)

    def __len__(self) -> int:
        return len(self._problems)

    @property
    def problems(self) -> tuple[Problem, ...]:
        """All mistakes noted so far, in order."""
        return tuple(self._problems)

    def raise_if_any(self) -> None:
        """Raise :class:`InputError` with everything noted, or return."""
        if self._problems:
            raise InputError(self._problems)


def reject(
    subject: str, value: object, expectation: str, *, path: str = "", tip: str = ""
) -> InputError:
    """One mistake as an error ready to raise."""
    return InputError([Problem(subject, value, expectation, path=path, tip=tip)])


def nearest(name: str, known: Iterable[str]) -> str:
    """A hint with the nearest known name, or an empty string.

    Of names of two letters, one that begins alike is near; of names with dots or slashes, one in the same place first.

    Examples
    --------
    >>> nearest("Alder.L1.C", ["Alder.L1.CB", "Birch.L1.CB"]), nearest("F2", ["F1", "G2"]), nearest("F2", ["G1"])
    ("did you mean 'Alder.L1.CB'?", "did you mean 'F1'?", '')
    >>> nearest("Alder.L4.c", ["Alder.L5.c", "Alder.L4.b"])
    "did you mean 'Alder.L4.b'?"
    """
    items, text = list(known), str(name)
    close = get_close_matches(text, items, n=20, cutoff=0.6)
    place = text[: max(text.rfind("."), text.rfind("/")) + 1]
    if place and place.strip("./"):
        close.sort(key=lambda name: not name.startswith(place))
    if not close and len(text) == 2:
        close = sorted(k for k in items if len(k) == 2 and k[0] == text[0])
    return f"did you mean {close[0]!r}?" if close else ""


def _short(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 80 else text[:77] + "..."
