"""The batch engine: many runs of one case at once, in columns.

For now each row is a run of the event engine; the columns are those of the engine in the making.
"""

from __future__ import annotations

import numpy as np

from schemesim.engine.case import Case
from schemesim.engine.event import DEFAULT_HORIZON_US, run_event
from schemesim.engine.many import NEVER_US, Batch, Ending, ManyAnswers, ManyNominalTimes, ManyTimes
from schemesim.engine.times import DelayTimes
from schemesim.scheme.delays import Delay
from schemesim.scheme.model import Probability


def run_batch(
    case: Case,
    rows: int,
    answers: ManyAnswers,
    *,
    times: ManyTimes | None = None,
    horizon_us: int = DEFAULT_HORIZON_US,
) -> Batch:
    """Run many rows of one case to their ends.

    Parameters
    ----------
    case : Case
    rows : int
        How many.
    answers : ManyAnswers
    times : ManyTimes or None
        Gives random delays; nominal ones by default.
    horizon_us : int

    Returns
    -------
    Batch
        Row i equals the run of the event engine with the answers and times of row i.
    """
    many = times or ManyNominalTimes()
    place = {case.names[b]: i for i, b in enumerate(case.breakers)}
    watched = {case.names[g]: i for i, g in enumerate(case.observed)}
    known: dict[Ending, int] = {}
    ending = np.zeros(rows, dtype=np.int32)
    t_clear = np.full(rows, NEVER_US, dtype=np.int64)
    t_open = np.full((rows, len(place)), NEVER_US, dtype=np.int64)
    t_trip = np.full((rows, len(place)), NEVER_US, dtype=np.int64)
    t_operated = np.full((rows, len(watched)), NEVER_US, dtype=np.int64)
    for row in range(rows):
        one = np.array([row])
        ran = run_event(case, _OneRow(answers, one), times=_OneRowTimes(many, one), horizon_us=horizon_us)
        o = ran.outcome
        for op in o.openings:
            t_open[row, place[op.breaker]], t_trip[row, place[op.breaker]] = op.t_open_us, op.t_trip_us
        for name, t in o.operated:
            t_operated[row, watched[name]] = t
        if o.t_clear_us is not None:
            t_clear[row] = o.t_clear_us
        tripped = sorted((place[op.breaker], op.role, op.via, op.interrupted) for op in o.openings)
        operated = sorted(watched[name] for name, _ in o.operated)
        end = Ending(o.status, tuple(tripped), tuple(operated), o.at_horizon, ran.final_mask)
        ending[row] = known.setdefault(end, len(known))
    return Batch(case, tuple(known), ending, t_clear, t_open, t_trip, t_operated)


class _OneRow:
    def __init__(self, many: ManyAnswers, row: np.ndarray[tuple[int], np.dtype[np.intp]]) -> None:
        self.many, self.row = many, row

    def answer(self, question: int, probability: Probability) -> bool:  # noqa: ARG002
        return bool(self.many.answers(question, self.row)[0])


class _OneRowTimes(DelayTimes):
    def __init__(self, many: ManyTimes, row: np.ndarray[tuple[int], np.dtype[np.intp]]) -> None:
        self.many, self.row = many, row

    def of(self, name: str, delay: Delay) -> int:
        return int(self.many.of(name, delay, self.row)[0])
