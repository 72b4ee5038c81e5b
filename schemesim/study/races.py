"""Races between timers, and the margins they were won by, from the logs of runs."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case
from schemesim.engine.event import DEFAULT_HORIZON_US, run_event
from schemesim.engine.outcome import Run
from schemesim.study.tree import Leaf, Tree

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class Race:
    """A delay stopped before it ran out.

    Attributes
    ----------
    timer : str
        The block whose delay was running.
    t_us : int
        When it was stopped.
    margin_us : int
        What was left of it.
    stopped_by : str
        Subject of the log row that stopped it.
    failures : tuple of str
        Failures in the run.
    """

    timer: str
    t_us: int
    margin_us: int
    stopped_by: str
    failures: tuple[str, ...] = ()


def races(run: Run, failures: tuple[str, ...] = ()) -> tuple[Race, ...]:
    """Every delay of a logged run that was stopped before it operated, the narrowest margin first.

    Parameters
    ----------
    run : Run
        Run with ``log=True``.
    failures : tuple of str
        Carried along into the result.
    """
    found = [
        Race(row.subject, row.t_us, row.margin_us, run.log[row.cause].subject if row.cause >= 0 else "", failures)
        for row in run.log
        if row.margin_us is not None and row.what == "stopped before operating"
    ]
    return tuple(sorted(found, key=lambda r: (r.margin_us, r.timer, r.t_us)))


def narrowest_races(
    case: Case, tree: Tree, *, most_failures: int = 1, horizon_us: int = DEFAULT_HORIZON_US
) -> tuple[Race, ...]:
    """For each timer the narrowest margin over the explored leaves with up to so many failures.

    Each such leaf is run anew with its log.
    """
    best: dict[str, Race] = {}
    for leaf in tree.leaves:
        if len(leaf.yes) <= most_failures:
            for race in races(replay(case, leaf, horizon_us=horizon_us), tree.names(leaf.yes)):
                known = best.get(race.timer)
                if known is None or race.margin_us < known.margin_us:
                    best[race.timer] = race
    return tuple(sorted(best.values(), key=lambda r: (r.margin_us, r.timer)))


def replay(case: Case, leaf: Leaf, *, horizon_us: int = DEFAULT_HORIZON_US) -> Run:
    """The run of a leaf once more, with its log."""
    return run_event(case, FixedAnswers(case.program, leaf.yes), log=True, horizon_us=horizon_us)


def limit_margin_us(run: Run, limit_us: int) -> int | None:
    """What is left of a limit (negative: overrun) when the fault is cleared; None if it is not."""
    t = run.outcome.t_clear_us
    return None if t is None else limit_us - t


def races_table(items: Iterable[Race]) -> pd.DataFrame:
    """Races as a table, times in ms."""
    import pandas as pd  # heavy: only when a table is asked for

    return pd.DataFrame(
        [
            {
                "timer": r.timer,
                "t_ms": r.t_us / 1000,
                "margin_ms": r.margin_us / 1000,
                "stopped_by": r.stopped_by,
                "failures": ", ".join(r.failures) or "none",
            }
            for r in items
        ],
        columns=["timer", "t_ms", "margin_ms", "stopped_by", "failures"],
    )
