"""What the rows of one piece of a batch left behind, and the batch made of such pieces."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from schemesim.engine.case import Case
from schemesim.engine.many import NEVER_US, Batch, Ending
from schemesim.engine.outcome import status_of
from schemesim.engine.sensing import NoFault
from schemesim.scheme.model import Role

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, eq=False, repr=False)
class Columns:
    """Results of some rows, one entry for each along the last axis; breakers and outputs along the first.

    Attributes
    ----------
    t_clear, t_open, t_trip, t_operated
        Microseconds, ``NEVER_US`` where a thing did not happen.
    code
        How each breaker came to be tripped: a key of its ``ways``, 0 for not at all.
    ways
        For each breaker (role, trip output, whether it interrupted) by code.
    mask, masks
        Breakers that no longer conduct: an index into ``masks``.
    """

    t_clear: NDArray[np.int64]
    t_open: NDArray[np.int64]
    t_trip: NDArray[np.int64]
    t_operated: NDArray[np.int64]
    code: NDArray[np.int32]
    ways: tuple[Mapping[int, tuple[int, int, bool]], ...]
    mask: NDArray[np.int32]
    masks: tuple[int, ...]
    at_horizon: NDArray[np.bool_]


def gather(case: Case, pieces: Sequence[Columns]) -> Batch:
    """The rows of all pieces, one after the other."""
    endings: dict[Ending, int] = {}
    numbers = [_numbers(case, piece, endings) for piece in pieces]
    none = np.zeros(0, dtype=np.int64)
    return Batch(
        case=case,
        endings=tuple(endings),
        ending=np.concatenate(numbers) if numbers else none.astype(np.int32),
        t_clear_us=np.concatenate([p.t_clear for p in pieces]) if pieces else none,
        t_open_us=_rows([p.t_open for p in pieces], len(case.breakers)),
        t_trip_us=_rows([p.t_trip for p in pieces], len(case.breakers)),
        t_operated_us=_rows([p.t_operated for p in pieces], len(case.observed)),
    )


def _rows(parts: list[NDArray[np.int64]], width: int) -> NDArray[np.int64]:
    """One row for each run."""
    return np.hstack(parts).T if parts else np.zeros((0, width), dtype=np.int64)


def _numbers(case: Case, piece: Columns, endings: dict[Ending, int]) -> NDArray[np.int32]:
    """The number of each row's ending, new ones added."""
    kind = np.ascontiguousarray(
        np.vstack(
            [
                piece.mask,
                piece.at_horizon,
                piece.t_clear != NEVER_US,
                *piece.code,
                *(piece.t_operated != NEVER_US),
            ]
        ).T.astype(np.int32)
    )
    whole = kind.view(np.dtype((np.void, kind.dtype.itemsize * kind.shape[1]))).ravel()
    _, where, place = np.unique(whole, return_index=True, return_inverse=True)
    fed = case.topology(0).fed
    found = []
    for row in where.tolist():
        end = _ending(case, piece, kind[row].tolist(), fed)
        found.append(endings.setdefault(end, len(endings)))
    return np.array(found, dtype=np.int32)[place]


def _ending(case: Case, piece: Columns, key: list[int], fed: bool) -> Ending:
    mask, at_horizon, cleared = piece.masks[key[0]], bool(key[1]), bool(key[2])
    breakers = len(case.breakers)
    status = status_of(isinstance(case.event, NoFault), fed, 0 if cleared else None, at_horizon)
    tripped = []
    for place, code in enumerate(key[3 : 3 + breakers]):
        if code:
            role, via, interrupts = piece.ways[place][code]
            tripped.append((place, Role(role), case.names[via], bool(interrupts)))
    operated = tuple(i for i, hit in enumerate(key[3 + breakers :]) if hit)
    return Ending(status, tuple(tripped), operated, at_horizon, mask)
