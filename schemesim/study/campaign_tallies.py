"""What a campaign keeps of its trials: distinct endings with how often, and when, each came.

Kept of each trial is its ending (status, what cleared the fault, each breaker with role and trip
output, observed outputs, what stayed open, load lost) and its clearing time: to the microsecond where no delay
of the case is random, else rounded up to the next whole millisecond, so that a comparison with a limit in
whole milliseconds stays exact. The sums of times and of their squares are exact in either case. Not kept are
the opening times of single breakers; a replay has them.
"""

from __future__ import annotations

import json
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from typing import Any

from schemesim.engine.outcome import Status
from schemesim.errors import reject
from schemesim.scheme.model import Role

BIN_US = 1000
"""Clearing times are rounded up to a multiple of this where delays are random."""


@dataclass(frozen=True, slots=True)
class CampaignEnding:
    """How a trial ended, without its times.

    Attributes
    ----------
    status : Status
    cleared_by : Role or None
        Role of what cleared the fault, as :func:`schemesim.study.measures.cleared_by` has it.
    tripped : tuple of (str, Role, str, bool)
        Each breaker committed, the role and the trip output that did it, whether it interrupted; by name. Of
        several outputs of one role at one instant any may stand there.
    operated : tuple of str
        Observed outputs that operated, by name.
    open : tuple of str
        Breakers that no longer conduct at the end, by name.
    load_lost_mw : float
    sections_lost : int
    at_horizon : bool
    """

    status: Status
    cleared_by: Role | None
    tripped: tuple[tuple[str, Role, str, bool], ...]
    operated: tuple[str, ...]
    open: tuple[str, ...]
    load_lost_mw: float
    sections_lost: int
    at_horizon: bool

    @property
    def breakers(self) -> frozenset[str]:
        """Names of everything that was committed to open."""
        return frozenset(name for name, *_ in self.tripped)

    def alike(self, other: CampaignEnding) -> bool:
        """Whether two endings are the same but for which of several outputs is named at a breaker."""
        return _unnamed(self) == _unnamed(other)

    def to_text(self) -> str:
        """As compact JSON; equal endings give equal text."""
        by = None if self.cleared_by is None else self.cleared_by.name
        trips = [[name, role.name, via, int(done)] for name, role, via, done in self.tripped]
        rest = [self.operated, self.open, self.load_lost_mw, self.sections_lost, int(self.at_horizon)]
        return json.dumps([str(self.status), by, trips, *rest], ensure_ascii=False, separators=(",", ":"))

    @classmethod
    def from_text(cls, text: str) -> CampaignEnding:
        """The ending of :meth:`to_text`."""
        status, by, trips, operated, left, mw, sections, at_horizon = json.loads(text)
        return cls(
            status=Status(status),
            cleared_by=None if by is None else Role[by],
            tripped=tuple((name, Role[role], via, bool(done)) for name, role, via, done in trips),
            operated=tuple(operated),
            open=tuple(left),
            load_lost_mw=mw,
            sections_lost=sections,
            at_horizon=bool(at_horizon),
        )


def _unnamed(ending: CampaignEnding) -> CampaignEnding:
    return replace(ending, tripped=tuple((name, role, "", done) for name, role, _, done in ending.tripped))


@dataclass(frozen=True, slots=True)
class Tally:
    """How often one ending came.

    Attributes
    ----------
    ending : CampaignEnding
    times : tuple of (int or None, int)
        Clearing times in microseconds (see the module for their rounding) in ascending order, then None for
        not cleared; and how often each came.
    sum_us, sum_us2 : int
        Exact sums of the clearing times and of their squares.
    """

    ending: CampaignEnding
    times: tuple[tuple[int | None, int], ...]
    sum_us: int
    sum_us2: int

    @property
    def trials(self) -> int:
        """How many trials."""
        return sum(n for _, n in self.times)


@dataclass(frozen=True, slots=True)
class PlaceFacts:
    """What measures need to know of an event under a variant.

    Attributes
    ----------
    fed : bool
        False if no source feeds the fault: there is nothing to clear.
    random : bool
        Whether a delay of the case is random.
    needed, intended : frozenset of str
    right, wrong : frozenset of str
        Observed outputs that protect the faulted section, and observed main outputs that do not.
    """

    fed: bool
    random: bool
    needed: frozenset[str]
    intended: frozenset[str]
    right: frozenset[str]
    wrong: frozenset[str]

    def to_data(self) -> list[Any]:
        """As plain data."""
        names = (self.needed, self.intended, self.right, self.wrong)
        return [int(self.fed), int(self.random), *(sorted(x) for x in names)]

    @classmethod
    def from_data(cls, data: Iterable[Any]) -> PlaceFacts:
        """The facts of :meth:`to_data`."""
        fed, random, *names = data
        needed, intended, right, wrong = map(frozenset, names)
        return cls(bool(fed), bool(random), needed, intended, right, wrong)


def joined_ranges(ranges: Iterable[tuple[int, int]]) -> tuple[tuple[int, int], ...]:
    """Ranges of trials in order, neighbours as one.

    Raises
    ------
    InputError
        If a trial is in two of them.

    Examples
    --------
    >>> joined_ranges([(10, 20), (30, 40), (0, 10)])
    ((0, 20), (30, 40))
    """
    found: list[tuple[int, int]] = []
    for first, end in sorted(ranges):
        if found and first < found[-1][1]:
            raise reject("counts", f"trials {first} to {found[-1][1] - 1} twice", "trials not counted before")
        if found and first == found[-1][1]:
            found[-1] = (found[-1][0], end)
        else:
            found.append((first, end))
    return tuple(found)


def missing_ranges(ranges: Iterable[tuple[int, int]], trials: int, chunk: int) -> Iterator[tuple[int, int]]:
    """What of trials 0 to ``trials - 1`` is in none of the ranges, cut at multiples of ``chunk``.

    Examples
    --------
    >>> list(missing_ranges([(4, 8)], 11, 3))
    [(0, 3), (3, 4), (8, 9), (9, 11)]
    """
    at = 0
    for first, end in (*sorted(ranges), (trials, trials)):
        while at < min(first, trials):
            stop = min((at // chunk + 1) * chunk, first, trials)
            yield at, stop
            at = stop
        at = max(at, end)


def merged(tallies: Iterable[Tally]) -> tuple[Tally, ...]:
    """Each ending once, in an order that does not depend on who counted what."""
    times: dict[CampaignEnding, dict[int | None, int]] = {}
    sums: dict[CampaignEnding, tuple[int, int]] = {}
    for t in tallies:
        mine = times.setdefault(t.ending, {})
        for us, n in t.times:
            mine[us] = mine.get(us, 0) + n
        first, second = sums.get(t.ending, (0, 0))
        sums[t.ending] = first + t.sum_us, second + t.sum_us2
    return tuple(
        Tally(end, tuple(sorted(times[end].items(), key=_when)), *sums[end])
        for end in sorted(times, key=CampaignEnding.to_text)
    )


def _when(item: tuple[int | None, int]) -> tuple[bool, int]:
    return item[0] is None, item[0] or 0


def rounded_up(us: int, bin_us: int) -> int:
    """A time rounded up to a multiple.

    Examples
    --------
    >>> rounded_up(70_001, 1000), rounded_up(70_000, 1000), rounded_up(70_001, 1)
    (71000, 70000, 70001)
    """
    return -(-us // bin_us) * bin_us
