"""Reading of scenario files as plain data: YAML 1.2 scalars, no surprises.

The reader takes a narrow YAML on purpose. Tags, anchors, aliases and merge keys are
refused outright, so a file never holds more than it shows and can build no object.
A plain scalar is

- nothing: ``null``, ``Null``, ``NULL``, ``~`` or empty;
- a truth value: ``true`` or ``false`` (also ``True``, ``TRUE``, …), never ``yes``, ``no``, ``on``, ``off``;
- a whole number: decimal, without leading zero (``017``, ``0o17``, ``0x1F``, ``1_000`` are text);
- a number: decimal with point or exponent (``1e-3``), or ``.inf``, ``-.inf``, ``.nan``;
- otherwise text: ``no``, ``12:30``, ``2024-01-01``.

Keys are text exactly as written, so a bus may be called ``1`` or ``no``.
Every mistake of a file is reported at once, up to the first that makes the rest unreadable.
"""

from __future__ import annotations

import math
import os
import re
import stat
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path as FilePath

import yaml
from yaml import events as ev

from schemesim.errors import InputError, Problem
from schemesim.scenario.locate import Data, Path, Place, Tree, render_path

MAX_BYTES = 5_000_000
"""Largest file accepted."""
MAX_DEPTH = 40
"""Most collections inside one another."""
MAX_NODES = 500_000
"""Most keys, values and collections in one file."""
MAX_DIGITS = 18
"""Most digits of a whole number."""
MAX_PROBLEMS = 100
"""Mistakes listed before reading gives up."""

_MAX_NUMERAL = 100
_SHOWN = 200
_NULLS = frozenset({"", "~", "null", "Null", "NULL"})
_BOOLS = {"true": True, "True": True, "TRUE": True, "false": False, "False": False, "FALSE": False}
_SPECIAL = re.compile(r"(?P<sign>[-+]?)\.(?:inf|Inf|INF)|\.(?:nan|NaN|NAN)")
_INT = re.compile(r"[-+]?(?:0|[1-9][0-9]*)")
_FLOAT = re.compile(r"[-+]?(?:\.[0-9]+|(?:0|[1-9][0-9]*)(?:\.[0-9]*)?)(?:[eE][-+]?[0-9]+)?")
# Not allowed raw: control characters, and the breaks that YAML 1.1 and 1.2 read differently.
FORBIDDEN = re.compile(
    "[^\t\n\r\x20-\x7e\xa0-\u2027\u202a-\ud7ff\ue000-\ufefe\uff00-\ufffd\U00010000-\U0010ffff]"
)
_SURROGATE = re.compile("[\ud800-\udfff]")
_BREAK = re.compile(r"\r\n|\r|\n")
_TAB_INDENT = re.compile(r" *\t")

_SYNTAX = (
    ("mapping values are not allowed", "one 'key: value' a line, and quotes around a text that holds ': '"),
    ("cannot start any token", "quotes around a text that starts with a special character such as @, ` or %"),
    ("expected ',' or", "a comma between items, and a closing bracket"),
    ("unexpected end of stream", "a closing quote"),
    ("could not find expected ':'", "a colon and a space after the key, or a space after the '-' of a list"),
    ("node content", "a value, or a key before the colon"),
    ("expected key", "the lines of one mapping at the same indentation"),
    ("expected '-' indicator", "the items of one list at the same indentation"),
    ("expected <block end>", "the lines of one mapping or list at the same indentation"),
    ("document start", "one document, and nothing after its end"),
    ("nesting depth", f"at most {MAX_DEPTH} levels"),
    ("anchor", "no anchor, and quotes around a text that starts with &"),
    ("alias", "no alias, and quotes around a text that starts with *"),
    ("tag", "no tag, and quotes around a text that starts with !"),
    ("escape", "a valid escape, or single quotes around a text with backslashes"),
    ("directive", "no directive except %YAML 1.2"),
    ("incompatible YAML", "no directive except %YAML 1.2"),
)


def read_tree(path: FilePath | str) -> Tree:
    """Plain data of a YAML file, with the line of everything in it.

    Parameters
    ----------
    path
        A regular file, UTF-8 text of at most ``MAX_BYTES``.

    Returns
    -------
    Tree
        The data and the places of all its parts.

    Raises
    ------
    InputError
        With every mistake: a file that cannot be read or is no text, bad syntax, or
        anything of YAML that is refused here (see the head of this module).
    """
    return read_text(text_of(path), str(path))


def text_of(path: FilePath | str) -> str:
    """The text of a regular file: UTF-8, at most ``MAX_BYTES``.

    Raises
    ------
    InputError
        For a file that cannot be read, is too large or is no text.
    """
    file = str(path)
    expected = "a readable text file"
    try:
        # Looked at before it is opened, so that a pipe is refused instead of waited for.
        mode = os.stat(path).st_mode
        raw = b""
        if stat.S_ISREG(mode):
            with open(path, "rb") as stream:
                raw = stream.read(MAX_BYTES + 1)
    except FileNotFoundError:
        raise file_error(file, "no such file", expected) from None
    except OSError as error:
        raise file_error(file, error.strerror or str(error), expected) from None
    except ValueError:  # a NUL or a lone surrogate in the name
        raise file_error(file, "no valid file name", expected) from None
    if not stat.S_ISREG(mode):
        kind = "a directory" if stat.S_ISDIR(mode) else "a pipe or device"
        raise file_error(file, kind, "a regular file")
    if len(raw) > MAX_BYTES:
        raise file_error(file, "a larger file", f"at most {MAX_BYTES} bytes")
    if raw.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise file_error(file, "UTF-16", "UTF-8 text", line=1)
    try:
        return raw.decode("utf-8")
    except UnicodeDecodeError as error:
        line = len(re.findall(rb"\r\n|\r|\n", raw[: error.start])) + 1
        raise file_error(file, raw[error.start : error.start + 1], "UTF-8 text", line=line) from None


def read_text(text: str, file: str) -> Tree:
    """Plain data of YAML text, with the line of everything in it.

    Parameters
    ----------
    text
        One YAML document.
    file
        Name used in messages.

    Returns
    -------
    Tree
        The data and the places of all its parts.

    Raises
    ------
    InputError
        With every mistake, each with file, line and path.

    Examples
    --------
    >>> tree = read_text("buses:\\n  1: {kv: 138, in_service: no}\\n", "x.yaml")
    >>> tree.data
    {'buses': {'1': {'kv': 138, 'in_service': 'no'}}}
    >>> tree.line(("buses", "1", "kv"))
    2
    >>> read_text("a: 1\\na: 2\\n", "x.yaml")
    Traceback (most recent call last):
    ...
    schemesim.errors.InputError: x.yaml:2 at a: key: got 'a', expected each key once (first on line 1)
    """
    if len(text) > MAX_BYTES or len(text.encode("utf-8", "surrogatepass")) > MAX_BYTES:
        raise file_error(file, "a larger text", f"at most {MAX_BYTES} bytes")
    text = text.removeprefix("\ufeff")
    reader = _Reader(text, file)
    with suppress(_StopReading):
        reader.read()
    if reader.problems:
        raise InputError(reader.problems)
    return Tree(reader.root, file, reader.places)


def file_error(file: str, value: object, expectation: str, line: int | None = None) -> InputError:
    return InputError([Problem("file", value, expectation, file=file, line=line)])


def _loader() -> type[yaml.SafeLoader] | type[yaml.CSafeLoader]:
    """The fast parser where PyYAML was built with it; only its events are used, never its constructors."""
    return yaml.CSafeLoader if yaml.__with_libyaml__ else yaml.SafeLoader


class _StopReading(Exception):  # noqa: N818 - not an error, the errors are in the list
    """The rest cannot be read; what was found so far is reported."""


@dataclass
class _Frame:
    """One open collection while reading."""

    path: Path
    container: list[Data] | dict[str, Data]
    is_key: bool
    key: str | None = None
    key_line: int = 0


class _Reader:
    """Builds data and places from parser events, without recursion, and notes mistakes."""

    def __init__(self, text: str, file: str) -> None:
        self.text = text
        self.file = file
        self.problems: list[Problem] = []
        self.places: dict[Path, Place] = {}
        self.root: Data = None
        self._stack: list[_Frame] = []
        self._key_lines: list[dict[str, int]] = []
        self._documents = 0
        self._nodes = 0
        self._line = 1

    def read(self) -> None:
        for line, source in enumerate(_BREAK.split(self.text), start=1):
            match = FORBIDDEN.search(source)
            if match:
                self._note("character", match[0], "printable text, or an escape in double quotes", line)
        if self.problems:
            return
        try:
            for event in yaml.parse(self.text, Loader=_loader()):
                self._take(event)
        except yaml.MarkedYAMLError as error:
            self._syntax(error)
        except (yaml.YAMLError, ValueError, OverflowError) as error:  # an escape beyond the last character
            self._note("syntax", str(error), "valid YAML, with valid escapes", self._line)
        if not self._documents and not self.problems:
            self._note("file", "nothing", "a scenario", 1)

    def _note(
        self,
        subject: str,
        value: object,
        expectation: str,
        line: int | None = None,
        path: Path = (),
        tip: str = "",
    ) -> None:
        shown = value[:_SHOWN] if isinstance(value, str) else value
        self.problems.append(Problem(subject, shown, expectation, render_path(path), self.file, line, tip))
        if len(self.problems) >= MAX_PROBLEMS:
            text = f"fewer than {MAX_PROBLEMS} mistakes; reading stopped here"
            self.problems.append(Problem("file", "too many mistakes", text, "", self.file, line))
            raise _StopReading

    def _take(self, event: ev.Event) -> None:
        self._line = line = event.start_mark.line + 1 if event.start_mark is not None else self._line
        if isinstance(event, ev.DocumentStartEvent):
            self._documents += 1
            if self._documents > 1:
                self._note("file", "a second document", "one document in a file", line)
                raise _StopReading
            version = getattr(event, "version", None)
            if version is not None and tuple(version) != (1, 2):
                text = ".".join(map(str, version))
                self._note("directive", f"%YAML {text}", "no directive except %YAML 1.2", line)
        elif isinstance(event, ev.CollectionEndEvent):
            self._key_lines.pop()
            if self._stack.pop().is_key:
                self._stack[-1].key = "?"
        elif isinstance(event, ev.NodeEvent):
            self._node(event, line)

    def _node(self, event: ev.NodeEvent, line: int) -> None:
        top = self._stack[-1] if self._stack else None
        is_key = top is not None and isinstance(top.container, dict) and top.key is None
        path: Path = ()
        if top is not None:
            path = top.path
            if isinstance(top.container, list):
                path = (*path, len(top.container))
            elif top.key is not None:
                path = (*path, top.key)
        self._nodes += 1
        if self._nodes > MAX_NODES:
            self._note("file", "more", f"at most {MAX_NODES} keys and values", line, path)
            raise _StopReading
        self._refuse_references(event, line, path)
        if isinstance(event, ev.CollectionStartEvent):
            if is_key:
                self._note("key", "a list or mapping", "a text as key", line, path)
            if len(self._stack) >= MAX_DEPTH:
                self._note("nesting", "deeper", f"at most {MAX_DEPTH} levels", line, path)
                raise _StopReading
            container: list[Data] | dict[str, Data] = [] if isinstance(event, ev.SequenceStartEvent) else {}
            if not is_key:
                self._place(container, line, path)
            self._stack.append(_Frame(path, container, is_key))
            self._key_lines.append({})
        elif is_key and top is not None:
            top.key = self._key(event, line, path)
            top.key_line = line
        else:
            self._place(self._value(event, line, path), line, path)

    def _place(self, value: Data, line: int, path: Path) -> None:
        key_line = line
        if not self._stack:
            self.root = value
        else:
            top = self._stack[-1]
            if isinstance(top.container, list):
                top.container.append(value)
            elif top.key is not None:
                top.container[top.key] = value
                key_line = top.key_line
                top.key = None
        self.places[path] = Place(key_line, line)

    def _refuse_references(self, event: ev.NodeEvent, line: int, path: Path) -> None:
        if isinstance(event, ev.AliasEvent):
            self._note("alias", f"*{event.anchor}", "the value itself, written out", line, path)
            return
        if event.anchor is not None:
            self._note("anchor", f"&{event.anchor}", "no anchor; write values out", line, path)
        tag = getattr(event, "tag", None)
        if tag is not None:
            shown = tag.replace("tag:yaml.org,2002:", "!!")
            self._note("tag", shown, "no tag; quotes make a text", line, path)

    def _key(self, event: ev.NodeEvent, line: int, path: Path) -> str:
        if not isinstance(event, ev.ScalarEvent):
            return "?"
        key = event.value
        if not event.style:
            if key in _NULLS:
                self._note("key", key, "a text as key (in quotes if it is meant)", line, path)
                return key
            if key == "<<":
                self._note("key", key, "no merge key; write values out", line, path)
                return key
        self._check_unicode(key, line, path)
        seen = self._key_lines[-1]
        if key in seen:
            tip = f"first on line {seen[key]}"
            self._note("key", key, "each key once", line, (*path, key), tip)
        seen.setdefault(key, line)
        return key

    def _value(self, event: ev.NodeEvent, line: int, path: Path) -> Data:
        if not isinstance(event, ev.ScalarEvent):
            return None
        if event.style:
            self._check_unicode(event.value, line, path)
            return event.value
        if not event.value and not self._stack and event.tag is None and event.anchor is None:
            self._note("file", "nothing", "a scenario", line)
        value, expectation = plain_scalar(event.value)
        if expectation:
            self._note("number", event.value, expectation, line, path)
        return value

    def _check_unicode(self, text: str, line: int, path: Path) -> None:
        if _SURROGATE.search(text):
            self._note("text", text, "no half of a surrogate pair", line, path)

    def _syntax(self, error: yaml.MarkedYAMLError) -> None:
        problem = error.problem or "unreadable"
        said = problem if not error.context else f"{problem}, {error.context}"
        mark = error.problem_mark or error.context_mark
        if error.context_mark is not None:
            said += f" from line {error.context_mark.line + 1}"
            if "end of stream" in problem or "expected ':'" in problem:
                mark = error.context_mark
        source = _BREAK.split(self.text)
        line = min(mark.line + 1, len(source)) if mark is not None else 1
        shown = source[line - 1].strip() or "end of text"
        path = self._stack[-1].path if self._stack else ()
        tabbed = next((n for n in (line, line - 1) if n > 0 and _TAB_INDENT.match(source[n - 1])), None)
        if tabbed is not None:
            self._note("syntax", source[tabbed - 1], "spaces for indentation, no tab", tabbed, path, said)
            return
        expectation = next((text for part, text in _SYNTAX if part in said), "valid YAML")
        if shown.startswith(":"):
            expectation = "a key before the colon"
        if "cannot start" in problem and mark is not None and source[line - 1][mark.column :][:1] == "\t":
            expectation = "spaces, no tab"
        self._note("syntax", shown, expectation, line, path, said)


def plain_scalar(text: str) -> tuple[Data, str]:
    """Value of an unquoted scalar, and what was expected where it is no acceptable number."""
    if text in _NULLS:
        return None, ""
    if text in _BOOLS:
        return _BOOLS[text], ""
    special = _SPECIAL.fullmatch(text)
    if special:
        return (math.nan if special["sign"] is None else float(special["sign"] + "inf")), ""
    if _INT.fullmatch(text):
        if len(text.lstrip("+-")) > MAX_DIGITS:
            return None, f"a whole number of at most {MAX_DIGITS} digits"
        return int(text), ""
    if not _FLOAT.fullmatch(text):
        return text, ""
    if len(text) > _MAX_NUMERAL:
        return None, f"a number of at most {_MAX_NUMERAL} characters"
    value = float(text)
    vanished = value == 0 and re.search("[1-9]", re.split("[eE]", text)[0])
    if math.isinf(value) or vanished:
        return None, "a number of a size between 5e-324 and 1.79e308"
    return value, ""
