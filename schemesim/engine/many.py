"""Many trials at once: who answers, who gives the times, and what comes back, in columns.

A *row* is one trial of a batch, numbered from 0. Answers and times are asked for the rows
that need them and may not depend on when, or in what company, a row is asked.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

import numpy as np

from schemesim.engine.answers import drawn_answers
from schemesim.engine.case import Case
from schemesim.engine.draws import uniforms
from schemesim.engine.outcome import Opening, Outcome, Status
from schemesim.engine.program import Program
from schemesim.scheme.delays import Delay
from schemesim.scheme.model import Role

if TYPE_CHECKING:
    from numpy.typing import NDArray

NEVER_US = -1
"""Stands in a column of times for what did not happen."""


class ManyAnswers(Protocol):
    """Answers one question for many rows; see :class:`schemesim.engine.answers.Answers` for one run."""

    def answers(self, question: int, rows: NDArray[np.intp]) -> NDArray[np.bool_]:
        """The answer of each of these rows, given all that the row was asked before."""


class ManyTimes(Protocol):
    """Gives the random delays of many rows; see :class:`schemesim.engine.times.DelayTimes` for one run."""

    def of(self, name: str, delay: Delay, rows: NDArray[np.intp]) -> NDArray[np.int64]:
        """The time of a named delay in each of these rows, in microseconds."""


class ManyDrawn:
    """Answers of trials ``first`` to ``first + count - 1``: row i is exactly what ``DrawnAnswers`` says there."""

    def __init__(self, program: Program, seed: int, first: int, count: int) -> None:
        self.program, self.seed, self.first, self.count = program, seed, first, count
        self._columns: dict[int, NDArray[np.bool_]] = {}

    def answers(self, question: int, rows: NDArray[np.intp]) -> NDArray[np.bool_]:
        """See :class:`ManyAnswers`."""
        column = self._columns.get(question)
        if column is None:
            column = drawn_answers(self.program, self.seed, question, self.first, self.count)
            self._columns[question] = column
        return column[rows]


class ManyForced:
    """The same answers for every row: those given, and no elsewhere."""

    def __init__(self, forced: Mapping[int, bool]) -> None:
        self.forced = dict(forced)

    def answers(self, question: int, rows: NDArray[np.intp]) -> NDArray[np.bool_]:
        """See :class:`ManyAnswers`."""
        return np.full(rows.size, self.forced.get(question, False))


class ManyDrawnTimes:
    """Random delays of trials ``first`` to ``first + count - 1``: row i is exactly what ``DelayTimes`` says there."""

    def __init__(self, seed: int, first: int, count: int) -> None:
        self.seed, self.first, self.count = seed, first, count
        self._columns: dict[str, NDArray[np.int64]] = {}

    def of(self, name: str, delay: Delay, rows: NDArray[np.intp]) -> NDArray[np.int64]:
        """See :class:`ManyTimes`."""
        column = self._columns.get(name)
        if column is None:
            column = delay.at_array(uniforms(self.seed, name, self.first, self.count))
            self._columns[name] = column
        return column[rows]


class ManyNominalTimes:
    """Every delay at its nominal value."""

    def of(self, name: str, delay: Delay, rows: NDArray[np.intp]) -> NDArray[np.int64]:  # noqa: ARG002
        """See :class:`ManyTimes`."""
        return np.full(rows.size, delay.nominal_us, dtype=np.int64)


@dataclass(frozen=True, slots=True)
class Ending:
    """How a run ended, without its times: what many rows of a batch may share.

    Attributes
    ----------
    status : Status
    tripped : tuple of (int, Role, str, bool)
        For each breaker committed its place in the case's ``breakers``, the role and the trip
        output that did it, and whether it interrupted; in order of place.
    operated : tuple of int
        Places of the observed outputs that operated.
    at_horizon : bool
    final_mask : int
        Breakers of the case that no longer conduct, as a mask.
    """

    status: Status
    tripped: tuple[tuple[int, Role, str, bool], ...]
    operated: tuple[int, ...]
    at_horizon: bool
    final_mask: int


@dataclass(frozen=True, repr=False, eq=False)
class Batch:
    """How the rows of a batch ended, in columns; times are microseconds, ``NEVER_US`` where a thing did not happen.

    Attributes
    ----------
    case : Case
    endings : tuple of Ending
        Distinct endings without their times.
    ending : ndarray of int32, shape (rows,)
        Index into ``endings``.
    t_clear_us : ndarray of int64, shape (rows,)
    t_open_us, t_trip_us : ndarray of int64, shape (rows, breakers of the case)
    t_operated_us : ndarray of int64, shape (rows, outputs observed)
    """

    case: Case
    endings: tuple[Ending, ...]
    ending: NDArray[np.int32]
    t_clear_us: NDArray[np.int64]
    t_open_us: NDArray[np.int64]
    t_trip_us: NDArray[np.int64]
    t_operated_us: NDArray[np.int64]

    def __len__(self) -> int:
        return int(self.ending.size)

    def __repr__(self) -> str:
        return f"Batch({self.case.event}: {len(self)} rows, {len(self.endings)} kinds of ending)"

    def outcome(self, row: int) -> Outcome:
        """The outcome of one row, as the event engine gives it."""
        case, end = self.case, self.endings[int(self.ending[row])]
        names, t_clear = case.names, int(self.t_clear_us[row])
        openings = [
            Opening(
                t_open_us=int(self.t_open_us[row, place]),
                breaker=names[case.breakers[place]],
                t_trip_us=int(self.t_trip_us[row, place]),
                role=role,
                via=via,
                interrupted=interrupted,
            )
            for place, role, via, interrupted in end.tripped
        ]
        operated = [(names[case.observed[i]], int(self.t_operated_us[row, i])) for i in end.operated]
        return Outcome(
            status=end.status,
            t_clear_us=None if t_clear == NEVER_US else t_clear,
            openings=tuple(sorted(openings)),
            operated=tuple(sorted(operated)),
            at_horizon=end.at_horizon,
        )
