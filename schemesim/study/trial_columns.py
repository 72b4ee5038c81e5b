"""How many trials ended, kept in columns: what a million trials with random times need stays small.

Rows with the same ending but for its times share it; of the times only those that exist are kept.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from schemesim.engine.case import Case
from schemesim.engine.draws import uniforms
from schemesim.engine.many import NEVER_US, Batch, Ending
from schemesim.engine.outcome import Opening, Outcome
from schemesim.study.tree import End

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, eq=False, repr=False)
class Alike:
    """Trials that ended alike but for their times.

    Attributes
    ----------
    ending : Ending
    breakers : tuple of str
        Names of the breakers committed, in the order of ``ending.tripped``.
    operated : tuple of str
        Names of the outputs that operated, in the order of ``ending.operated``.
    rows : ndarray of int32
        Places of the trials within their piece of work, ascending.
    times_us : ndarray of int64, shape (rows, 1 + 2 breakers + outputs)
        Clearing time (``NEVER_US`` for none), opening times, trip times, times of the outputs.
    """

    ending: Ending
    breakers: tuple[str, ...]
    operated: tuple[str, ...]
    rows: NDArray[np.int32]
    times_us: NDArray[np.int64]

    def ends(self) -> Iterator[End]:
        """The ending of each trial, made one by one."""
        end, n = self.ending, len(self.breakers)
        for clear, *times in self.times_us.tolist():
            openings = sorted(
                Opening(t_open, name, t_trip, role, via, interrupted)
                for (_, role, via, interrupted), name, t_open, t_trip in zip(
                    end.tripped, self.breakers, times[:n], times[n : 2 * n], strict=True
                )
            )
            outcome = Outcome(
                status=end.status,
                t_clear_us=None if clear == NEVER_US else clear,
                openings=tuple(openings),
                operated=tuple(sorted(zip(self.operated, times[2 * n :], strict=True))),
                at_horizon=end.at_horizon,
            )
            yield End(outcome, end.final_mask)


def columns(batch: Batch) -> tuple[Alike, ...]:
    """The rows of a batch by how they ended."""
    case = batch.case
    order = np.argsort(batch.ending, kind="stable")
    sizes = np.bincount(batch.ending, minlength=len(batch.endings))
    found: list[Alike] = []
    for end, rows in zip(batch.endings, np.split(order, np.cumsum(sizes)[:-1]), strict=True):
        if not rows.size:
            continue
        places = np.array([place for place, *_ in end.tripped], dtype=np.intp)
        outputs = np.array(end.operated, dtype=np.intp)
        times = np.concatenate(
            (
                batch.t_clear_us[rows, None],
                batch.t_open_us[np.ix_(rows, places)],
                batch.t_trip_us[np.ix_(rows, places)],
                batch.t_operated_us[np.ix_(rows, outputs)],
            ),
            axis=1,
        )
        names = tuple(case.names[case.breakers[place]] for place, *_ in end.tripped)
        watched = tuple(case.names[case.observed[i]] for i in end.operated)
        found.append(Alike(end, names, watched, rows.astype(np.int32), times))
    return tuple(found)


class Distinct:
    """The distinct answers of a range of trials, one row each; exactly what ``DrawnAnswers`` says of every trial.

    Attributes
    ----------
    times : ndarray of int64
        In how many trials each row's answers came.
    """

    def __init__(self, case: Case, seed: int, first: int, count: int) -> None:
        questions = met(case)
        yes = _yes(case, questions, seed, first, count)
        failing = np.unique(np.concatenate([rows for _, rows in yes])) if yes else np.zeros(0, dtype=np.intp)
        table = np.zeros((failing.size, len(yes)), dtype=bool)
        for column, (_, rows) in enumerate(yes):
            table[np.searchsorted(failing, rows), column] = True
        packed, which = np.unique(np.packbits(table, axis=1), axis=0, return_inverse=True)
        times = np.bincount(which.ravel(), minlength=len(packed))
        unpacked = np.unpackbits(packed, axis=1, count=len(yes)).astype(bool) if yes else np.zeros((0, 0), dtype=bool)
        if failing.size < count:
            unpacked = np.concatenate((unpacked, np.zeros((1, len(yes)), dtype=bool)))
            times = np.append(times, count - failing.size)
        self.times: NDArray[np.int64] = times.astype(np.int64)
        self._columns = {q: unpacked[:, column] for column, (q, _) in enumerate(yes)}

    def answers(self, question: int, rows: NDArray[np.intp]) -> NDArray[np.bool_]:
        """See :class:`schemesim.engine.many.ManyAnswers`."""
        column = self._columns.get(question)
        return np.zeros(rows.size, dtype=bool) if column is None else column[rows]


def met(case: Case) -> tuple[int, ...]:
    """Questions that some run of the case may ask."""
    found = {q for group in case.asks for q in group}
    found.update(q for asks in case.breaker_asks for ask in asks for q in ask.questions)
    return tuple(sorted(found))


def _yes(
    case: Case, questions: tuple[int, ...], seed: int, first: int, count: int
) -> list[tuple[int, NDArray[np.intp]]]:
    """For each question answered yes in some trial, the trials (from 0) in which it is."""
    program = case.program
    drawn: dict[str, NDArray[np.float64]] = {}
    out: list[tuple[int, NDArray[np.intp]]] = []
    for q in questions:
        question = program.questions[q]
        key = f"state of {question.component}" if question.component else question.name
        if key not in drawn:
            drawn.clear()  # questions of one component stand together
            drawn[key] = uniforms(seed, key, first, count)
        u = drawn[key]
        below = float(sum(program.questions[j].probability for j in program.siblings[q] if j < q))
        (rows,) = np.nonzero((below <= u) & (u < below + float(question.probability)))
        if rows.size:
            out.append((q, rows))
    return out
