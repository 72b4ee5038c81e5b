"""What one run leaves behind: openings, clearing, and the log."""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import StrEnum

from schemesim.scheme.model import Role


class Status(StrEnum):
    """How a run ended."""

    CLEARED = "cleared"
    NOT_CLEARED = "not cleared"
    UNDETERMINED = "undetermined at the horizon"
    NOT_FED = "not fed before any opening"
    NO_FAULT = "no fault"


def status_of(no_fault: bool, fed: bool, t_clear_us: int | None, at_horizon: bool) -> Status:
    """How a run ended: ``fed`` tells whether the fault was fed before any opening."""
    if no_fault:
        return Status.NO_FAULT
    if not fed:
        return Status.NOT_FED
    if t_clear_us is not None:
        return Status.CLEARED
    return Status.UNDETERMINED if at_horizon else Status.NOT_CLEARED


@dataclass(frozen=True, slots=True, order=True)
class Opening:
    """A breaker (or a generator's own trip) that was committed to open.

    Attributes
    ----------
    t_open_us : int
        When its contacts have interrupted (or should have).
    breaker : str
    t_trip_us : int
        When its coil was energised.
    role : Role
        Best role among what energised it.
    via : str
        The trip output that energised it.
    interrupted : bool
        False for a breaker that opens but does not interrupt.
    """

    t_open_us: int
    breaker: str
    t_trip_us: int
    role: Role
    via: str
    interrupted: bool = True


@dataclass(frozen=True, slots=True)
class Outcome:
    """Everything observed of a run; equal outcomes are the same to every study.

    Attributes
    ----------
    status : Status
    t_clear_us : int or None
        First instant at which no closed path joined the fault to a source.
    openings : tuple of Opening
        In order of time.
    operated : tuple of (str, int)
        Observed trip outputs and the first time of each.
    at_horizon : bool
        Something was still pending at the horizon.
    """

    status: Status
    t_clear_us: int | None
    openings: tuple[Opening, ...]
    operated: tuple[tuple[str, int], ...] = ()
    at_horizon: bool = False

    def without_via(self) -> Outcome:
        """The same without the names of the trip outputs.

        Of several that energise a coil at one instant in one role the event engine names one it
        asked, and trials with random delays the first by name; nothing else tells them apart.
        """
        return replace(self, openings=tuple(replace(o, via="") for o in self.openings))

    @property
    def t_clear_ms(self) -> float | None:
        """The clearing time in ms; None if it was not cleared."""
        return None if self.t_clear_us is None else self.t_clear_us / 1000

    @property
    def tripped(self) -> frozenset[str]:
        """Names of everything that opened."""
        return frozenset(o.breaker for o in self.openings)


@dataclass(frozen=True, slots=True)
class Row:
    """One line of the log.

    ``cause`` is the index of the row that led to this one (-1 for the first).
    ``margin_us`` is set where a timer was stopped before it ran out: what was left.
    """

    index: int
    t_us: int
    pass_no: int
    subject: str
    kind: str
    what: str
    cause: int
    margin_us: int | None = None


@dataclass(frozen=True, repr=False)
class Run:
    """A finished run: its outcome, the questions it asked, and its log if one was kept.

    Attributes
    ----------
    asked : tuple of (int, bool)
        Question index and answer in the order asked.
    probabilities : tuple
        Probability of a yes to each, given the answers before.
    final_mask : int
        Breakers of the case that no longer conduct, as a mask.
    """

    outcome: Outcome
    asked: tuple[tuple[int, bool], ...]
    probabilities: tuple[object, ...]
    final_mask: int
    events: int
    log: tuple[Row, ...] = ()

    def __repr__(self) -> str:
        o = self.outcome
        when = "" if o.t_clear_us is None else f" at {o.t_clear_us / 1000:g} ms"
        counts = f"{len(o.openings)} openings, {len(self.asked)} questions, {len(self.log)} log rows"
        return f"Run({o.status}{when}, {counts})"
