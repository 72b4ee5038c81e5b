"""What a campaign rests on, as digests: models of equal content have equal digests, on any machine.

A pickle would not do: the order of a set in it differs from process to process.
"""

from __future__ import annotations

import dataclasses
import platform
from collections.abc import Iterable, Mapping, Sequence, Set
from enum import Enum
from fractions import Fraction
from functools import lru_cache
from hashlib import blake2b
from importlib import metadata
from pathlib import Path

import numpy as np

from schemesim.errors import reject

DIGEST_BYTES = 16

_DECIDES = ("ticks.py", "plant", "scheme", "engine", "study/campaign_work.py", "study/losses.py", "study/measures.py")
"""What of the library decides how a trial ends and is counted."""


def digest(item: object) -> str:
    """A digest of inert data: dataclasses, mappings, sets, sequences, numbers and text, nested at will.

    Parameters
    ----------
    item : object
        Fields of dataclasses that equality leaves out (caches) are left out here too; a function counts by its
        name, another object by what is pickled of it.

    Returns
    -------
    str
        Hexadecimal; equal for equal data, whatever the order within mappings and sets.

    Raises
    ------
    InputError
        For an object that is no such data.

    Examples
    --------
    >>> digest({"a": frozenset({"x", "y"}), "b": 1}) == digest({"b": 1, "a": frozenset({"y", "x"})})
    True
    >>> digest((1, 23)) == digest((12, 3))
    False
    """
    return _digest(item).hex()


def _digest(item: object) -> bytes:
    if isinstance(item, np.generic):
        item = item.item()
    kind = f"{type(item).__module__}.{type(item).__qualname__}"
    if isinstance(item, Enum):
        return _hash(kind, [item.name.encode()])
    if item is None or isinstance(item, (bool, int, float, complex, str, bytes, Fraction)):
        return _hash(kind, [repr(item).encode("utf-8", "surrogatepass")])
    if dataclasses.is_dataclass(item) and not isinstance(item, type):
        fields = [f.name for f in dataclasses.fields(item) if f.compare]
        return _hash(kind, (part for n in fields for part in (n.encode(), _digest(getattr(item, n)))))
    if isinstance(item, np.ndarray):
        return _hash("array", [_digest(item.tolist())])
    if isinstance(item, Mapping):
        pairs = sorted((_digest(k), _digest(v)) for k, v in item.items())
        return _hash("mapping", (part for pair in pairs for part in pair))
    if isinstance(item, Set):
        return _hash("set", sorted(_digest(x) for x in item))
    if isinstance(item, Sequence):
        return _hash("sequence", (_digest(x) for x in item))
    if callable(item) and hasattr(item, "__qualname__"):
        return _hash("function", [f"{item.__module__}.{item.__qualname__}".encode()])
    if hasattr(item, "__dict__"):
        return _hash(kind, [_digest(item.__getstate__())])
    raise reject("input of a campaign", kind, "data: dataclasses, mappings, sets, sequences, numbers, text")


def _hash(kind: str, parts: Iterable[bytes]) -> bytes:
    found = blake2b(kind.encode(), digest_size=DIGEST_BYTES, person=b"campaign1")
    for part in parts:
        found.update(len(part).to_bytes(8, "little") + part)
    return found.digest()


@lru_cache(maxsize=1)
def versions() -> tuple[tuple[str, str], ...]:
    """Versions on which the counts may depend, by name, with a digest of the engine's own source.

    Examples
    --------
    >>> [name for name, _ in versions()]
    ['engine source', 'numpy', 'python']
    """
    root = Path(__file__).resolve().parents[1]
    found = blake2b(digest_size=DIGEST_BYTES)
    for part in _DECIDES:
        place = root / part
        for path in sorted(place.rglob("*.py")) if place.is_dir() else [place]:
            text = path.read_bytes().replace(b"\r\n", b"\n")
            found.update(path.relative_to(root).as_posix().encode() + b"\0" + len(text).to_bytes(8, "little") + text)
    python = ".".join(platform.python_version_tuple()[:2])
    return (("engine source", found.hexdigest()), ("numpy", metadata.version("numpy")), ("python", python))
