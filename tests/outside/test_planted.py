"""A wrong constant or formula of ours, planted one at a time, puts a value of its subject out of tolerance."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from statistics import NormalDist
from typing import Any

import pytest

from schemesim.plant.net_data import SourceImpedance
from schemesim.scheme import backup, curves, functions, redundancy, starting_values, unavailability
from schemesim.scheme.delays import Fixed
from schemesim.scheme.model import ComponentKind
from schemesim.scheme.policy import PolicyTimes, Reaches
from schemesim.scheme.unavailability import RateData
from schemesim.study import footnote, intervals
from schemesim.study.importance import Importance
from schemesim.study.odds import Odds
from tests.outside.suite import last_line, records

Patch = pytest.MonkeyPatch
RECORDS = records()


def curve_constant(patch: Patch) -> None:
    """19.61 becomes 19.16 in the very inverse curve."""
    wrong = tuple(replace(c, a=19.16) if c.a == 19.61 else c for c in curves.STANDARD)
    patch.setattr(curves, "STANDARD", wrong)


def hours_of_a_year(patch: Patch) -> None:
    """8670 hours in a year."""
    patch.setattr(unavailability, "HOURS_PER_YR", 8670.0)


def mean_of_what_is_hidden(patch: Patch) -> None:
    """The mean of a group is taken at the middle of the interval."""
    patch.setattr(redundancy, "mean_over", lambda value, length: value(length / 2))


def share_of_common_cause(patch: Patch) -> None:
    """A hundredth too much of the failures is common."""
    right = RateData.shared
    patch.setattr(RateData, "shared", lambda self, share: right(self, min(1.0, share * 1.01)))


def birnbaum(patch: Patch) -> None:
    """P(E | failure) − P(E)."""
    wrong = property(lambda self: self.p_event_given_failure - self.p_event)
    patch.setattr(Importance, "birnbaum", wrong)


def odds_of_an_answer(patch: Patch) -> None:
    """A yes is a hundredth less probable than it is."""
    right: Any = Odds.of

    def wrong(self: Odds, *rest: Any) -> Any:
        yes, no = right(self, *rest)
        return yes * 99 / 100, no + yes / 100

    patch.setattr(Odds, "of", wrong)


def default(patch: Patch, of: Any, name: str, value: object) -> None:
    """Another default of a dataclass whose fields are given by name."""
    patch.setitem(of.__init__.__kwdefaults__, name, value)


def zone_2(patch: Patch) -> None:
    """Zone 2 in 300 ms."""
    default(patch, Reaches, "zone_2_delay", Fixed(300_000))


def lockout(patch: Patch) -> None:
    """A lockout relay operates a millisecond late."""
    right = functions.lockout

    def wrong(b: Any, name: str, signal: Any, unit: str, dc: str, operate: Fixed) -> str:
        return right(b, name, signal, unit, dc, Fixed(operate.us + 1000))

    patch.setattr(functions, "lockout", wrong)


def one_side(patch: Patch) -> None:
    """Breaker failure trips what borders on one side of the breaker only."""
    patch.setattr(backup, "around", lambda zones, breaker: zones.border[zones.sides[breaker][0]] - {breaker})


def channel_time(patch: Patch) -> None:
    """What is received over a channel is there a millisecond late."""
    right = functions.received

    def wrong(b: Any, name: str, sent: Any, path: Any) -> str:
        return right(b, name, sent, replace(path, delay=Fixed(path.delay.us + 1000)))

    patch.setattr(functions, "received", wrong)


def coordinating(patch: Patch) -> None:
    """The coordinating delay of blocking is 10 ms, less than the channel takes."""
    default(patch, PolicyTimes, "coordinating", Fixed(10_000))


def rate_of_breakers(patch: Patch) -> None:
    """A decimal point slipped in the starting table."""
    right = starting_values._text
    patch.setattr(starting_values, "_text", lambda path, name: right(path, name).replace("0.00036", "0.0036"))


def negative_sequence(patch: Patch) -> None:
    """A source has its positive-sequence impedance in negative sequence, whatever it was given."""
    patch.setattr(SourceImpedance, "z2", property(lambda self: self.z1))


def exempt_relay(patch: Patch) -> None:
    """A relay stands in the group of channels."""
    patch.setitem(footnote.GROUPS, ComponentKind.RELAY, footnote.Group.COMMUNICATIONS)


def quantile(patch: Patch) -> None:
    """The normal quantile is a hundredth too large."""
    patch.setattr(intervals, "NormalDist", lambda: NormalDist(0.0, 1.01))


PLANTED: list[tuple[str, Callable[[Patch], None]]] = [
    ("curves", curve_constant),
    ("redundancy and proof tests", hours_of_a_year),
    ("redundancy and proof tests", mean_of_what_is_hidden),
    ("common cause", share_of_common_cause),
    ("common cause", odds_of_an_answer),
    ("static logic and importance", birnbaum),
    ("static logic and importance", odds_of_an_answer),
    ("timing", zone_2),
    ("timing", lockout),
    ("whole sequences", one_side),
    ("whole sequences", channel_time),
    ("teleprotection", coordinating),
    ("short circuit", negative_sequence),
    ("networks and rates", rate_of_breakers),
    ("networks and rates", exempt_relay),
    ("statistics", quantile),
]


@pytest.mark.parametrize(("subject", "plant"), PLANTED, ids=lambda x: x if isinstance(x, str) else x.__name__)
def test_a_wrong_constant_is_told(subject: str, plant: Callable[[Patch], None], monkeypatch: Patch) -> None:
    plant(monkeypatch)
    rows = []
    for record in (r for r in RECORDS if r.subject == subject):
        rows.append(record.compared())
        if not rows[-1].fits:
            break
    assert "1 out of tolerance" in last_line(rows)


def test_every_subject_has_one_planted() -> None:
    assert {subject for subject, _ in PLANTED} == {r.subject for r in RECORDS}
