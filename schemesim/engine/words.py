"""Truth values of many rows in words of 64."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Words = NDArray[np.uint64]
    Bits = NDArray[np.bool_]
    Rows = NDArray[np.intp]

WORD = np.dtype("<u8")
ONES = np.uint64(0xFFFF_FFFF_FFFF_FFFF)
NONE = np.uint64(0)


def pack(bits: Bits) -> Words:
    """Bits, the rows along the last axis (a multiple of 64 of them), as words."""
    return np.packbits(np.ascontiguousarray(bits), axis=-1, bitorder="little").view(WORD)


def unpack(words: Words) -> Bits:
    """The rows of words, one truth value each."""
    return np.unpackbits(words.view(np.uint8), axis=-1, bitorder="little").view(np.bool_)


def picked(words: Words, rows: Rows) -> Words:
    """The words of some rows (a multiple of 64 of them)."""
    return pack(np.take(unpack(words), rows, axis=-1))


def rows_of(words: Words) -> Rows:
    """The rows of one line of words that are true."""
    return np.flatnonzero(unpack(words))


def places_of(words: Words) -> tuple[Rows, Rows]:
    """Line and row of every truth in lines of words."""
    width = words.shape[1]
    some = np.flatnonzero(words)
    place = np.flatnonzero(unpack(words.ravel()[some]))
    line, word = np.divmod(some[place >> 6], width)
    return line, word << 6 | place & 63


def bit_at(words: Words, line: Rows | int, row: Rows) -> NDArray[np.int64]:
    """Zero or one for each (line, row)."""
    shift = (row & 63).astype(np.uint64)
    found: NDArray[np.int64] = (words[line, row >> 6] >> shift & np.uint64(1)).astype(np.int64)
    return found


def any_of(words: Words) -> Words:
    """Where any line is true."""
    found: Words = np.bitwise_or.reduce(words, axis=0, initial=NONE)
    return found
