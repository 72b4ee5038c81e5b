"""The batch engine: many runs of one case in lockstep, each with its own clock.

Two ways of doing the same. Where delays are fixed, rows walk through an automaton of states that were met
before (:mod:`walk`). Where they are random, no two runs meet the same states, and every signal of 64 rows stands in
one word (:mod:`packed`).
"""

from __future__ import annotations

import numpy as np

from schemesim.engine.case import Case
from schemesim.engine.columns import Columns, gather
from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.many import Batch, ManyAnswers, ManyNominalTimes, ManyTimes
from schemesim.engine.packed import Packed
from schemesim.engine.walk import Walk
from schemesim.engine.wiring import wiring_of

ROWS = 32_768
"""Rows taken together: enough that a step costs its arithmetic, few enough to stay near the processor."""


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
        Row i equals the run of the event engine with the answers and times of row i: every
        opening, its role and all times to the microsecond. Where delays are random and several trip
        outputs energise a coil at one instant in one role, the one named is the first by name; and
        where several trips of different roles set one timer or latch in one pass, the role it keeps is
        the best of all (the event engine keeps the best of those whose failures it had to ask about).

    Raises
    ------
    RunError
        If an instant does not settle.
    """
    many = times or ManyNominalTimes()
    packed = case.inverse or (case.random and not isinstance(many, ManyNominalTimes))
    pieces: list[Columns] = []
    for first in range(0, rows, ROWS):
        part = np.arange(first, min(first + ROWS, rows))
        if packed:
            run = Packed(wiring_of(case), part, answers, many, horizon_us)
            run.finish()
            pieces.append(run.columns())
        else:
            walk = Walk(case, part, answers, many)
            walk.finish(horizon_us)
            pieces.append(walk.columns())
    return gather(case, pieces)
