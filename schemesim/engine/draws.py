"""Uniform numbers that belong to a name, not to a moment (rule R19).

One uniform per (seed, name, trial). The numbers are looked up rather than drawn in
turn, so they are the same for every engine, for any number of workers and any
split of the trials among them, and for any order in which blocks are declared or
met; variants of a scheme share those of the blocks they share.

Promise
-------
The numbers below stay the same over releases of this library, of Python and of
NumPy, and over machines; a change would be announced as one that breaks results:

1. key = the 16 bytes of BLAKE2b (digest of 16 bytes, personal string
   ``schemesim/draws1``) over the seed in lower-case hexadecimal, one zero byte, and
   the name in UTF-8, read as a little-endian integer;
2. word number `trial` of the stream of NumPy's Philox (4x64, 10 rounds) with that
   key and the counter at zero; NumPy counts up before it computes, so word 0
   comes from counter 1, and each counter gives four words;
3. uniform = (word >> 11) / 2**53, from 0 (included) to 1 (excluded).

NumPy promises the stream of a bit generator but not that of ``Generator``, so the
step from word to uniform is taken here.

Philox: J. K. Salmon et al., "Parallel random numbers: as easy as 1, 2, 3", 2011.
"""

from __future__ import annotations

import operator
from hashlib import blake2b
from typing import TYPE_CHECKING, Any

import numpy as np

from schemesim.errors import ErrorList

if TYPE_CHECKING:
    from numpy.typing import NDArray

MAX_TRIAL = 2**63 - 1
"""Largest number of a trial."""

_WORDS_PER_STEP = 4
_LOW = (1 << 64) - 1
_PERSON = b"schemesim/draws1"


def uniform(seed: int, name: str, trial: int) -> float:
    """The uniform number of one name in one trial.

    Parameters
    ----------
    seed : int
        Zero or more, of any size.
    name : str
        Canonical name of the block or question it belongs to.
    trial : int
        Number of the trial, from 0.

    Returns
    -------
    float
        From 0 (included) to 1 (excluded); a whole multiple of 2**-53.

    Raises
    ------
    InputError
        If the seed or the trial is not a whole number of zero or more, or the name is not text.

    Examples
    --------
    >>> uniform(7, "north.CB1", 3) == uniforms(7, "north.CB1", 0, 10).tolist()[3]
    True
    """
    seed, trial = _checked(seed, name, trial, 1)[:2]
    return Numbers().at(_key(seed, name), trial)


class Numbers:
    """Looks up single numbers with one bit generator; the same as :func:`uniform`, sooner."""

    def __init__(self) -> None:
        self._source = np.random.Philox(key=0)
        self._state: dict[str, Any] = dict(self._source.state)
        self._inner: dict[str, Any] = {"counter": np.zeros(4, np.uint64), "key": np.zeros(2, np.uint64)}
        self._state |= {"state": self._inner, "buffer_pos": _WORDS_PER_STEP}

    def of(self, seed: int, name: str, trial: int) -> float:
        """The uniform number of a name in a trial; the arguments are taken as they are."""
        return self.at(_key(seed, name), trial)

    def at(self, key: int, trial: int) -> float:
        """The uniform number of a key in a trial."""
        steps, skip = divmod(trial, _WORDS_PER_STEP)
        inner = self._inner
        inner["counter"][0] = steps
        inner["key"][0], inner["key"][1] = key & _LOW, key >> 64
        self._source.state = self._state  # type: ignore[assignment]  # NumPy types it a closed dictionary
        word = int(self._source.random_raw(skip + 1)[skip]) if skip else int(self._source.random_raw())
        return (word >> 11) * 2.0**-53


def uniforms(seed: int, name: str, start: int, count: int) -> NDArray[np.float64]:
    """The uniform numbers of one name in trials `start` to `start` + `count` - 1.

    Element i is exactly ``uniform(seed, name, start + i)``, however the trials are split.

    Parameters
    ----------
    seed : int
        Zero or more, of any size.
    name : str
        Canonical name of the block or question they belong to.
    start : int
        Number of the first trial, from 0.
    count : int
        How many trials.

    Returns
    -------
    numpy.ndarray
        `count` numbers from 0 (included) to 1 (excluded).

    Raises
    ------
    InputError
        If a number is not whole and zero or more, or the name is not text; all mistakes at once.

    Examples
    --------
    >>> whole = uniforms(7, "north.CB1", 0, 10)
    >>> bool((whole[6:] == uniforms(7, "north.CB1", 6, 4)).all())
    True
    """
    seed, start, count = _checked(seed, name, start, count)
    steps, skip = divmod(start, _WORDS_PER_STEP)
    source = np.random.Philox(key=_key(seed, name))
    source.advance(steps)
    words = source.random_raw(skip + count)[skip:]
    return (words >> np.uint64(11)).astype(np.float64) * np.float64(2.0**-53)


def _checked(seed: int, name: str, start: int, count: int) -> tuple[int, int, int]:
    errors = ErrorList()
    seed = _natural(errors, "seed", seed, None)
    start = _natural(errors, "trial", start, MAX_TRIAL)
    count = _natural(errors, "count of trials", count, MAX_TRIAL)
    if not isinstance(name, str):
        errors.add("name of a draw", name, "text")
    errors.raise_if_any()
    return seed, start, count


def _key(seed: int, name: str) -> int:
    """The 128-bit key of a seed and a name (hexadecimal holds no zero byte, so no two pairs run together)."""
    text = f"{seed:x}".encode() + b"\0" + name.encode("utf-8", "surrogatepass")
    return int.from_bytes(blake2b(text, digest_size=16, person=_PERSON).digest(), "little")


def _natural(errors: ErrorList, subject: str, value: object, most: int | None) -> int:
    """The value as a plain whole number of zero or more; notes the mistake and gives 0 otherwise."""
    bound = "" if most is None else f", at most {most}"
    number: Any = value
    try:
        whole = -1 if isinstance(value, (bool, np.bool_)) else operator.index(number)
    except TypeError:
        whole = -1
    if whole < 0 or (most is not None and whole > most):
        errors.add(subject, value, f"a whole number of zero or more{bound}")
        return 0
    return whole
