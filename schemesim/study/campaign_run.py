"""Running a campaign: in chunks that any executor runs, kept in a store as they finish.

A campaign is cut into ranges of trials; since a trial's random numbers are looked up by (seed, name, trial), the
counts are the same whatever runs the ranges, in whatever order. An interrupted or killed campaign is run
again with the same call: what is in the store is not repeated.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from concurrent.futures import Executor
from dataclasses import dataclass
from typing import TYPE_CHECKING

from schemesim.engine.sensing import Event
from schemesim.errors import ErrorList, SchemesimError, nearest, reject
from schemesim.show.tables import to_html
from schemesim.study.campaign import Campaign, whole
from schemesim.study.campaign_counts import PlaceCounts
from schemesim.study.campaign_crew import Crew
from schemesim.study.campaign_tallies import missing_ranges
from schemesim.study.campaign_work import Work
from schemesim.study.montecarlo import Method
from schemesim.study.store import Place, Store

if TYPE_CHECKING:
    import pandas as pd

CHUNK = 20_000
"""Trials in one piece of work by default."""

Progress = Callable[[int, int], None]


@dataclass(frozen=True, repr=False)
class CampaignResult:
    """What is in a store.

    Attributes
    ----------
    places : tuple of PlaceCounts
        Those at which anything was counted, in the order of the campaign.
    wanted : int
        Trials asked for, over all places.
    complete : bool
        Whether all of them are in.
    """

    places: tuple[PlaceCounts, ...]
    wanted: int
    complete: bool

    @property
    def trials(self) -> int:
        """Trials counted, over all places."""
        return sum(p.trials for p in self.places)

    def where(self, variant: str, event: Event | str) -> PlaceCounts:
        """The counts of one place.

        Raises
        ------
        InputError
            If nothing was counted there.
        """
        for p in self.places:
            if (p.variant, p.event) == (variant, str(event)):
                return p
        known = [f"{p.event}, {p.variant}" for p in self.places]
        tip = nearest(f"{event}, {variant}", known)
        raise reject("place", f"{event}, {variant}", "an event and a variant that were counted", tip=tip)

    def rows(self, confidence: float = 0.95, method: Method = "wilson") -> list[dict[str, object]]:
        """The measures of every place: p_cleared, p_within_limit, dependability, security … with intervals.

        Each interval is for its place alone. Trials of one number share their random numbers over
        places and variants, so estimates of two places are not independent.
        """
        return [p.row(confidence, method) for p in self.places]

    def table(self, confidence: float = 0.95, method: Method = "wilson") -> pd.DataFrame:
        """One row for each place; see :meth:`rows`."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame(self.rows(confidence, method))

    def breakers_table(self, confidence: float = 0.95, method: Method = "wilson") -> pd.DataFrame:
        """One row for each place and number of breakers tripped."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame(
            [
                {"variant": p.variant, "event": p.event, "breakers": k, "trials": s.successes, "p_estimate": s.estimate,
                 "p_low": s.low, "p_high": s.high}
                for p in self.places
                for k, s in p.breakers(confidence, method).items()
            ]
        )  # fmt: skip

    def __repr__(self) -> str:
        state = "" if self.complete else " (not complete)"
        of = max(self.trials, self.wanted)
        lines = [f"CampaignResult: {self.trials} of {of} trials at {len(self.places)} places{state}"]
        lines += [f"  {p.event}, {p.variant}: {p.trials} trials, cleared {p.p_cleared()!r}" for p in self.places[:12]]
        return "\n".join([*lines, f"  … and {len(self.places) - 12} more"] if len(self.places) > 12 else lines)

    def _repr_html_(self) -> str:
        told = f"{self.trials} trials at {len(self.places)} places; 95 % intervals of each place alone"
        return to_html(self.table(), caption=told)


def run_campaign(
    campaign: Campaign,
    store: str,
    *,
    executor: Executor | None = None,
    workers: int = 1,
    chunk: int = CHUNK,
    progress: Progress | None = None,
    source: str = "",
) -> CampaignResult:
    """Run what of a campaign is not in its store yet.

    Parameters
    ----------
    campaign : Campaign
    store : str
        Path of the store; made if it is not there. One of the same campaign is gone on with: with more
        trials, or another size of chunk or executor, as it may be.
    executor : concurrent.futures.Executor or None
        Runs the chunks: threads, processes, joblib's, distributed's ``Client.get_executor()``, mpi4py's.
    workers : int
        Without an executor, the number of processes; with 1 the work is done here. Processes that die are
        replaced, and their chunks run again. (They are started afresh, so a script needs the usual
        ``if __name__ == "__main__":``.)
    chunk : int
        Trials in one piece of work.
    progress : callable or None
        Called with the number of trials that are in and of all, at first before any is run.
    source : str
        Kept in a new store: text to make the campaign from again.

    Returns
    -------
    CampaignResult
        All that is in the store. A keyboard interrupt ends the campaign early; then ``complete`` is False.

    Raises
    ------
    InputError
        For bad numbers, and for a store that is of another campaign.
    RunError
        If a trial cannot go on, or the executor gave up; every chunk that was finished is kept.
    """
    errors = ErrorList()
    for name, value in (("workers", workers), ("chunk", chunk)):
        whole(errors, name, value, 1)
    if executor is not None and workers != 1:
        errors.add("workers", workers, "1 beside an executor")
    errors.raise_if_any()
    places = [Place(v, str(e), campaign.limit_at(e)) for v, e in campaign.places]
    with Store(store, write=True) as kept:
        kept.take_on(campaign.about(), places, campaign.rounds, source)
        done = kept.done()
        left = [
            (n, first, end)
            for n in range(len(places))
            for first, end in missing_ranges(done.get(n, ()), campaign.rounds, chunk)
        ]
        wanted = campaign.rounds * len(places)
        finished = wanted - sum(end - first for _, first, end in left)
        tell = progress or _silent
        tell(finished, wanted)
        work: Iterator[Work] = (campaign.work(*item) for item in left)
        with Crew(work, campaign.packed, executor, workers, len(left)) as crew:
            try:
                for part in crew:
                    kept.add(part)
                    finished += part.end - part.first
                    tell(finished, wanted)
            except (KeyboardInterrupt, SchemesimError) as error:
                for part in crew.finished():
                    kept.add(part)
                if isinstance(error, SchemesimError):
                    raise
        return _result(kept, campaign.rounds)


def load_campaign(store: str) -> CampaignResult:
    """What is in a store, which may be in use by a campaign under way.

    Raises
    ------
    InputError
        For a file that is no store.
    """
    with Store(store) as kept:
        return _result(kept, kept.trials)


def _result(kept: Store, trials: int) -> CampaignResult:
    listed = kept.places()
    found = [kept.counts(n) for n in range(len(listed))]
    complete = all(c is not None and not list(missing_ranges(c.ranges, trials, trials)) for c in found)
    return CampaignResult(tuple(c for c in found if c is not None), trials * len(listed), complete)


def _silent(done: int, of: int) -> None:
    pass
