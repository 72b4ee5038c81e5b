"""Writing of plain data as YAML that reads back as the same data, and atomically into a file."""

from __future__ import annotations

import os
import re
import stat
import uuid
from contextlib import suppress
from pathlib import Path as FilePath

from schemesim.errors import InputError, reject
from schemesim.scenario.locate import Data, Path, render_path
from schemesim.scenario.reading import (
    FORBIDDEN,
    MAX_BYTES,
    MAX_DEPTH,
    MAX_DIGITS,
    MAX_NODES,
    file_error,
    plain_scalar,
)

_PLAIN = re.compile(r"[A-Za-z_](?:[\w./+-]| (?=[\w./+(-])|[()])*", re.ASCII)
_LEGACY_BOOLS = frozenset({"y", "n", "yes", "no", "on", "off"})
_ESCAPES = {'"': '\\"', "\\": "\\\\", "\n": "\\n", "\t": "\\t", "\r": "\\r", "\0": "\\0"}
_LONG_KEY = 400  # a longer key needs the explicit "? key" form
_WIDTH = 100


def write_text(data: Data) -> str:
    """YAML text that reads back as the same data.

    Parameters
    ----------
    data
        Nested dicts with text keys, lists and scalars; order is kept.

    Returns
    -------
    str
        One document. Text is quoted wherever unquoted it could be read as something
        else, here or by a reader of YAML 1.1.

    Raises
    ------
    InputError
        For anything that could not be read back: other types, keys that are no text,
        whole numbers too long, nesting too deep, too much of it.

    Examples
    --------
    >>> print(write_text({"bus": "no", "clear_ms": [1e-3, 50], "bays": [{"ct": None}]}), end="")
    bus: "no"
    clear_ms: [0.001, 50]
    bays:
      - ct: null
    """
    text = "\n".join(_Writer().document(data)) + "\n"
    if len(text.encode()) > MAX_BYTES:
        raise reject("data", "more", f"at most {MAX_BYTES} bytes when written")
    return text


def write_file(path: FilePath | str, data: Data) -> None:
    """Write data as YAML, whole or not at all.

    The text goes to a temporary file in the same folder, which then takes the place of
    the old file. A link is followed; an existing file keeps its permissions.

    Raises
    ------
    InputError
        For data that :func:`write_text` refuses, or a place that cannot be written.
    """
    write_whole(path, write_text(data).encode())


def write_whole(path: FilePath | str, content: bytes) -> None:
    """Write a file whole or not at all; see :func:`write_file`.

    Raises
    ------
    InputError
        For a place that cannot be written.
    """
    expected = "a file that can be written"
    try:
        target = FilePath(os.path.realpath(path))
        mode = stat.S_IMODE(target.stat().st_mode) if target.exists() else None
        if mode is not None and not target.is_file():
            raise file_error(str(path), "a directory, pipe or device", "a regular file")
        draft = target.with_name(f".{uuid.uuid4().hex}.tmp")
        try:
            with open(draft, "xb") as stream:
                stream.write(content)
                stream.flush()
                os.fsync(stream.fileno())
            if mode is not None:
                draft.chmod(mode)
            os.replace(draft, target)
        finally:
            with suppress(OSError):
                draft.unlink()
    except OSError as error:
        raise file_error(str(path), error.strerror or str(error), expected) from None
    except InputError:
        raise
    except ValueError:
        raise file_error(str(path), "no valid file name", expected) from None


class _Writer:
    """Renders plain data as lines of block YAML, counting what it writes."""

    def __init__(self) -> None:
        self._nodes = 0

    def document(self, data: Data) -> list[str]:
        head, body = self._node(data, ())
        return [*([head] if head else []), *(_indent(body) if head else body)]

    def _node(self, value: object, path: Path) -> tuple[str, list[str]]:
        """What stands on the line of the key, and the lines below it."""
        self._nodes += 1
        if self._nodes > MAX_NODES:
            raise reject("data", "more", f"at most {MAX_NODES} keys and values", path=render_path(path))
        if not isinstance(value, (dict, list)):
            literal = _literal(value) if isinstance(value, str) else None
            return literal or (_scalar_text(value, path), [])
        if len(path) >= MAX_DEPTH:
            raise reject("nesting", "deeper", f"at most {MAX_DEPTH} levels", path=render_path(path))
        if not value:
            return ("{}" if isinstance(value, dict) else "[]"), []
        if isinstance(value, dict):
            return "", self._mapping(value, path)
        return self._list(value, path)

    def _mapping(self, value: dict[object, object], path: Path) -> list[str]:
        lines: list[str] = []
        for key, item in value.items():
            if not isinstance(key, str):
                raise reject("key", key, "a text as key", path=render_path(path))
            self._nodes += 1
            text = _scalar_text(key, path)
            if len(text) > _LONG_KEY:
                lines.append(f"? {text}")
                text = ""
            head, body = self._node(item, (*path, str.__str__(key)))
            lines.append(f"{text}: {head}" if head else f"{text}:")
            lines += _indent(body)
        return lines

    def _list(self, value: list[object], path: Path) -> tuple[str, list[str]]:
        nodes = [self._node(item, (*path, index)) for index, item in enumerate(value)]
        flow = f"[{', '.join(head for head, _ in nodes)}]"
        nested = any(isinstance(item, (dict, list)) for item in value) or any(body for _, body in nodes)
        if len(flow) <= _WIDTH and not nested:
            return flow, []
        lines: list[str] = []
        for head, body in nodes:
            below = _indent(body)
            lines.append(f"- {head}" if head else f"- {below.pop(0)[2:]}")
            lines += below
        return "", lines


def _indent(lines: list[str]) -> list[str]:
    return [f"  {line}" if line else line for line in lines]


def _literal(text: str) -> tuple[str, list[str]] | None:
    """A text of several ordinary lines as a literal block, or None where quotes are safer."""
    body = text.removesuffix("\n").split("\n")
    if "\n" not in text or not body[0] or not body[-1] or body[0][0] == " ":
        return None
    if any(line != line.rstrip() or not line.isprintable() or FORBIDDEN.search(line) for line in body):
        return None
    return ("|" if text.endswith("\n") else "|-"), body


def _scalar_text(value: object, path: Path) -> str:
    """One scalar on one line."""
    if value is None:
        return "null"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int):
        if abs(value) >= 10**MAX_DIGITS:
            expected = f"a whole number of at most {MAX_DIGITS} digits"
            raise reject("number", "a longer one", expected, path=render_path(path))
        return int.__repr__(value)
    if isinstance(value, float):
        text = float.__repr__(value)
        return {"inf": ".inf", "-inf": "-.inf", "nan": ".nan"}.get(text, text)
    if not isinstance(value, str):
        raise reject("data", value, "text, number, truth value, null, list or dict", path=render_path(path))
    text = str.__str__(value)
    ordinary = _PLAIN.fullmatch(text) and text.lower() not in _LEGACY_BOOLS
    if ordinary and plain_scalar(text) == (text, ""):
        return text
    return '"' + "".join(map(_escaped, text)) + '"'


def _escaped(char: str) -> str:
    if char in _ESCAPES:
        return _ESCAPES[char]
    if char.isprintable() and not FORBIDDEN.match(char):
        return char
    code = ord(char)
    if 0xD800 <= code <= 0xDFFF:
        raise reject("text", char, "no half of a surrogate pair")
    return f"\\x{code:02x}" if code < 0x100 else f"\\u{code:04x}" if code < 0x10000 else f"\\U{code:08x}"
