"""Any trial of a campaign again, by its number, in the event engine and with its whole log."""

from __future__ import annotations

from dataclasses import dataclass

from schemesim.engine.answers import Answers, DrawnAnswers, FixedAnswers
from schemesim.engine.case import Case
from schemesim.engine.event import run_event
from schemesim.engine.many import NEVER_US
from schemesim.engine.outcome import Run
from schemesim.engine.sensing import Event
from schemesim.engine.times import DelayTimes
from schemesim.errors import ErrorList, RunError, reject
from schemesim.study.campaign import Campaign, whole
from schemesim.study.campaign_counts import Happened
from schemesim.study.campaign_tallies import BIN_US, CampaignEnding, rounded_up
from schemesim.study.campaign_work import batch_of, case_of, ending_of, endings
from schemesim.study.store import Store

_AT_ONCE = 10_000  # trials run before the next look at what was found


@dataclass(frozen=True, repr=False)
class Replayed:
    """One trial run again.

    Attributes
    ----------
    variant : str
    event : Event
    trial : int
    case : Case
    run : Run
        With its log; ``schemesim.timeline(replayed.case, replayed.run)`` shows it.
    ending : CampaignEnding
        As the campaign counts it.
    failures : tuple of str
        Questions that were asked and answered yes.
    counted : bool
        Whether the trial is in the store; then it was counted with just this ending and clearing time.
    """

    variant: str
    event: Event
    trial: int
    case: Case
    run: Run
    ending: CampaignEnding
    failures: tuple[str, ...]
    counted: bool

    def __repr__(self) -> str:
        t_us = self.run.outcome.t_clear_us
        when = "" if t_us is None else f" at {t_us / 1000:g} ms"
        failed = ", ".join(self.failures) or "nothing failed that was asked about"
        return f"Replayed(trial {self.trial} of {self.event}, {self.variant}: {self.ending.status}{when}; {failed})"


def replay_trial(
    campaign: Campaign, variant: str, event: Event | str, trial: int, *, store: str | None = None
) -> Replayed:
    """Run one trial of a campaign again in the event engine.

    Parameters
    ----------
    campaign : Campaign
    variant : str
    event : Event or str
        By itself or as printed.
    trial : int
        Its number, from 0; with given failure sets that of the set.
    store : str or None
        Path of the campaign's store; the outcome is then held against what was counted.

    Raises
    ------
    InputError
        For a variant, event or trial that is not part of the campaign.
    RunError
        If the store counted the trial with another outcome: the store was made by another version, or it is an
        error of this library.

    Examples
    --------
    >>> import schemesim as ss
    >>> b = ss.PlantBuilder()
    >>> ss.generator(b, "G1", station="Alder")
    >>> ss.feeder(b, "F1", station="Alder", load_mw=10)
    >>> ss.single_bus(b, "Alder", [ss.Bay("G1", "G1"), ss.Bay("F1", "F1")])
    >>> plant = b.build()
    >>> program = ss.compile_scheme(plant, ss.dress(plant, ss.single_set()))
    >>> replay_trial(Campaign({"single": program}, [ss.Location("F1")], trials=100, seed=1), "single", "F1", 17)
    Replayed(trial 17 of F1, single: cleared at 70 ms; nothing failed that was asked about)
    """
    place = campaign.number(variant, event)
    most = campaign.rounds
    with_store = None if store is None else Store(store)
    try:
        if with_store is not None and not campaign.failures:
            most = max(most, with_store.trials)
        number: object = trial
        if isinstance(number, bool) or not isinstance(number, int) or not 0 <= number < most:
            raise reject("trial", trial, f"a whole number from 0 to {most - 1}")
        at = campaign.places[place][1]
        program, sensing = campaign.variants[variant], campaign.sensing_of(variant)
        case = case_of(program, at, sensing, campaign.dispatch, campaign.observe)
        run = _run(campaign, case, trial)
        ending, t_us = ending_of(case, run.outcome, run.final_mask)
        failures = tuple(case.questions[q].name for q, yes in run.asked if yes)
        counted = with_store is not None and _counted(with_store, place, trial, ending, t_us)
    finally:
        if with_store is not None:
            with_store.close()
    return Replayed(variant, at, trial, case, run, ending, failures, counted)


def find_trials(
    campaign: Campaign, variant: str, event: Event | str, happened: Happened, *, most: int = 10
) -> tuple[int, ...]:
    """The numbers of the first trials in which something happens, to be replayed.

    Parameters
    ----------
    campaign : Campaign
    variant : str
    event : Event or str
        By itself or as printed.
    happened : callable
        Told an ending and the clearing time in microseconds (None: not cleared), as
        :meth:`~schemesim.study.campaign_counts.PlaceCounts.count` is.
    most : int
        How many trials; the search ends there.

    Returns
    -------
    tuple of int
        Ascending; fewer than ``most`` where no more of the campaign's trials are such.

    Raises
    ------
    InputError
        For a variant or event that is not part of the campaign, or ``most`` below 1.

    Examples
    --------
    >>> import schemesim as ss
    >>> b = ss.PlantBuilder()
    >>> ss.generator(b, "G1", station="Alder")
    >>> ss.feeder(b, "F1", station="Alder", load_mw=10)
    >>> ss.single_bus(b, "Alder", [ss.Bay("G1", "G1"), ss.Bay("F1", "F1")])
    >>> plant = b.build()
    >>> program = ss.compile_scheme(plant, ss.dress(plant, ss.single_set()))
    >>> campaign = Campaign({"single": program}, [ss.Location("F1")], trials=1000, seed=1)
    >>> late = find_trials(campaign, "single", "F1", lambda _, t_us: t_us is None or t_us > 150_000)
    >>> replay_trial(campaign, "single", "F1", late[0]).run.outcome.t_clear_us > 150_000
    True
    """
    errors = ErrorList()
    whole(errors, "most", most, 1)
    errors.raise_if_any()
    place = campaign.number(variant, event)
    program, at = campaign.variants[variant], campaign.places[place][1]
    case = case_of(program, at, campaign.sensing_of(variant), campaign.dispatch, campaign.observe)
    bin_us = BIN_US if case.random and not campaign.failures else 1
    found: list[int] = []
    for first in range(0, campaign.rounds, _AT_ONCE):
        batch = batch_of(case, campaign.work(place, first, min(first + _AT_ONCE, campaign.rounds)))
        for ending, rows in endings(batch):
            for row, t_us in zip(rows.tolist(), batch.t_clear_us[rows].tolist(), strict=True):
                if happened(ending, None if t_us == NEVER_US else rounded_up(t_us, bin_us)):
                    found.append(first + row)
        if len(found) >= most:
            break
    return tuple(sorted(found)[:most])


def _run(campaign: Campaign, case: Case, trial: int) -> Run:
    if not campaign.failures:
        answers: Answers = DrawnAnswers(case.program, campaign.seed, trial)
        times = DelayTimes(campaign.seed, trial)
        return run_event(case, answers, times=times, log=True, horizon_us=campaign.horizon_us)
    known = {q.name for q in case.questions}
    given = FixedAnswers(case.program, [name for name in campaign.failures[trial] if name in known])
    return run_event(case, given, log=True, horizon_us=campaign.horizon_us)


def _counted(store: Store, place: int, trial: int, ending: CampaignEnding, t_us: int | None) -> bool:
    """Whether the store has the trial; refuses one it counted otherwise."""
    for chunk in store.chunks(place):
        if not chunk.first <= trial < chunk.end:
            continue
        when = rounded_up(t_us, BIN_US) if chunk.facts.random and t_us is not None else t_us
        if chunk.each is not None:
            tally, clear_us = chunk.each[trial - chunk.first]
            same = chunk.tallies[tally].ending.alike(ending) and clear_us == when
        else:
            same = any(t.ending.alike(ending) and when in dict(t.times) for t in chunk.tallies)
        if not same:
            told = f"trial {trial} comes out otherwise than it was counted in {store.path}"
            raise RunError(f"{told}; the store was made with {store.about['versions']}")
        return True
    return False
