"""What a campaign counted at one place: every measure with its interval.

A *place* is one event under one variant; :mod:`schemesim.study.campaign_tallies` says what is kept of a trial.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from statistics import NormalDist
from typing import TYPE_CHECKING

from schemesim.engine.outcome import Status
from schemesim.errors import reject
from schemesim.scheme.model import Role
from schemesim.show.tables import to_html
from schemesim.study.campaign_tallies import BIN_US, CampaignEnding, PlaceFacts, Tally, joined_ranges, merged
from schemesim.study.intervals import clopper_pearson, wilson
from schemesim.study.montecarlo import Mean, Method, Share

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

Happened = Callable[[CampaignEnding, int | None], bool]
"""Something that happens, or not, in an ending with its clearing time in microseconds (None: not cleared)."""


@dataclass(frozen=True, repr=False)
class PlaceCounts:
    """What was counted for one event under one variant; counts of other trials can be added.

    Attributes
    ----------
    variant, event : str
    limit_us : int
        Longest clearing time that is in time.
    facts : PlaceFacts
    ranges : tuple of (int, int)
        First trial and the one after the last, of each unbroken range counted.
    tallies : tuple of Tally
        Each ending once, in an order of their own.
    """

    variant: str
    event: str
    limit_us: int
    facts: PlaceFacts
    ranges: tuple[tuple[int, int], ...]
    tallies: tuple[Tally, ...]

    @property
    def trials(self) -> int:
        """Trials counted."""
        return sum(end - first for first, end in self.ranges)

    def __add__(self, other: PlaceCounts) -> PlaceCounts:
        """Counts of both.

        Raises
        ------
        InputError
            If they are of another place, or share trials.
        """
        if (self.variant, self.event, self.facts) != (other.variant, other.event, other.facts):
            raise reject("counts", (other.variant, other.event), f"counts of {(self.variant, self.event)}")
        ranges = joined_ranges((*self.ranges, *other.ranges))
        tallies = merged((*self.tallies, *other.tallies))
        return PlaceCounts(self.variant, self.event, self.limit_us, self.facts, ranges, tallies)

    def count(self, event: Happened) -> int:
        """In how many trials something happened."""
        return sum(n for t in self.tallies for us, n in t.times if event(t.ending, us))

    def share(self, event: Happened, confidence: float = 0.95, method: Method = "wilson") -> Share:
        """The probability of something with an interval, "wilson" or "clopper_pearson".

        Raises
        ------
        InputError
            For a confidence outside 0..1 or another method.
        """
        if method not in ("wilson", "clopper_pearson"):
            raise reject("interval", method, "'wilson' or 'clopper_pearson'")
        happened = self.count(event)
        low, high = (wilson if method == "wilson" else clopper_pearson)(happened, self.trials, confidence)
        return Share(happened, self.trials, low, high, confidence)

    def p_cleared(self, confidence: float = 0.95, method: Method = "wilson") -> Share:
        """Probability that the fault is cleared."""
        return self.share(lambda e, _: e.status is Status.CLEARED, confidence, method)

    def p_within_limit(self, confidence: float = 0.95, method: Method = "wilson", limit_us: int | None = None) -> Share:
        """Probability that the fault is cleared within a limit, by default that of the place.

        Raises
        ------
        InputError
            For a limit that is no whole number of ms where the times kept are rounded.
        """
        limit = self.limit_us if limit_us is None else limit_us
        if self.facts.random and limit % BIN_US:
            expected = f"a multiple of {BIN_US}, as clearing times are kept where delays are random"
            raise reject("limit_us", limit, expected)
        return self.share(lambda _, us: us is not None and us <= limit, confidence, method)

    def p_by_role(self, role: Role, confidence: float = 0.95, method: Method = "wilson") -> Share:
        """Probability that the fault is cleared by a role."""
        return self.share(lambda e, _: e.cleared_by is role, confidence, method)

    def p_selective(self, confidence: float = 0.95, method: Method = "wilson") -> Share:
        """Probability that no breaker opens outside the intended ones."""
        return self.share(lambda e, _: e.breakers <= self.facts.intended, confidence, method)

    def dependability(self, confidence: float = 0.95, method: Method = "wilson") -> Share | None:
        """Probability that an observed output that protects the faulted section operates (IEC 60050-448).

        None where no observed output protects it; the breakers are no part of it.
        """
        if not self.facts.right:
            return None
        return self.share(lambda e, _: not self.facts.right.isdisjoint(e.operated), confidence, method)

    def security(self, confidence: float = 0.95, method: Method = "wilson") -> Share | None:
        """Probability that no observed main output operates that does not protect the faulted section (IEC 60050-448).

        None where every observed main output protects it.
        """
        if not self.facts.wrong:
            return None
        return self.share(lambda e, _: self.facts.wrong.isdisjoint(e.operated), confidence, method)

    def breakers(self, confidence: float = 0.95, method: Method = "wilson") -> dict[int, Share]:
        """Probability of each number of breakers tripped that was met, in ascending order."""
        met = sorted({len(t.ending.breakers) for t in self.tallies})
        return {k: self.share(lambda e, _, k=k: len(e.breakers) == k, confidence, method) for k in met}  # type: ignore[misc]

    def breakers_mean(self, confidence: float = 0.95) -> Mean:
        """Mean number of breakers tripped, with a normal interval."""
        return self.mean(lambda e: len(e.breakers), confidence)

    def breakers_excess(self, confidence: float = 0.95) -> Mean:
        """Mean number of breakers tripped beyond the intended ones, with a normal interval."""
        return self.mean(lambda e: len(e.breakers - self.facts.intended), confidence)

    def mean(self, value: Callable[[CampaignEnding], float], confidence: float = 0.95) -> Mean:
        """The mean of a quantity of an ending, with a normal interval (unbounded below two trials)."""
        pairs = [(value(t.ending), t.trials) for t in self.tallies]
        n = sum(k for _, k in pairs)
        mean = math.fsum(v * k for v, k in pairs) / n if n else math.nan
        square = math.fsum(k * (v - mean) ** 2 for v, k in pairs)
        return _normal(mean, square, n, confidence)

    def t_clear_us_mean(self, confidence: float = 0.95) -> Mean:
        """Mean clearing time in microseconds of the trials that were cleared, from exact sums."""
        n = self.count(lambda _, us: us is not None)
        first, second = sum(t.sum_us for t in self.tallies), sum(t.sum_us2 for t in self.tallies)
        return _normal(first / n if n else math.nan, (n * second - first * first) / n if n else 0.0, n, confidence)

    def quantile_us(self, share: float) -> int | None:
        """The time by which this share of the trials was cleared; None: never, as trials stay uncleared.

        Raises
        ------
        InputError
            If the share is not over 0 and at most 1.
        """
        if not 0 < share <= 1:
            raise reject("share of a quantile", share, "a number over 0, at most 1")
        so_far, n = 0, self.trials
        for us, k in sorted((us, k) for t in self.tallies for us, k in t.times if us is not None):
            so_far += k
            if so_far >= share * n:
                return us
        return None

    def row(self, confidence: float = 0.95, method: Method = "wilson") -> dict[str, object]:
        """The measures as one row of a table; units in the names."""
        row: dict[str, object] = {
            "variant": self.variant, "event": self.event, "fed": self.facts.fed, "trials": self.trials,
            "limit_ms": self.limit_us / 1000,
        }  # fmt: skip
        shares = {
            "p_cleared": self.p_cleared(confidence, method),
            "p_within_limit": self._in_time(confidence, method),
            "p_by_main": self.p_by_role(Role.MAIN, confidence, method),
            "p_selective": self.p_selective(confidence, method),
            "dependability": self.dependability(confidence, method),
            "security": self.security(confidence, method),
        }
        means = {
            "breakers_mean": self.breakers_mean(confidence),
            "breakers_excess": self.breakers_excess(confidence),
            "load_lost_mw_mean": self.mean(lambda e: e.load_lost_mw, confidence),
        }
        for name, found in (*shares.items(), *means.items()):
            ends = (None, None, None) if found is None else (found.estimate, found.low, found.high)
            row[f"{name}_estimate"], row[f"{name}_low"], row[f"{name}_high"] = ends
        for name, share in (("t_clear_ms_median", 0.5), ("t_clear_ms_p95", 0.95)):
            us = self.quantile_us(share)
            row[name] = None if us is None else us / 1000
        row["breakers_distribution"] = "; ".join(f"{k}: {s.successes}" for k, s in self.breakers().items())
        return row

    def _in_time(self, confidence: float, method: Method) -> Share | None:
        rounded = self.facts.random and self.limit_us % BIN_US
        return None if rounded else self.p_within_limit(confidence, method)

    def table(self, confidence: float = 0.95, method: Method = "wilson") -> pd.DataFrame:
        """How often the fault was cleared, in time, selectively, and each number of breakers tripped."""
        import pandas as pd  # heavy: only when a table is asked for

        shares: dict[str, Share | None] = {
            "cleared": self.p_cleared(confidence, method),
            "cleared within the limit": self._in_time(confidence, method),
            "only intended breakers tripped": self.p_selective(confidence, method),
            "a watched output that should operate did": self.dependability(confidence, method),
            "no watched output operated that should not": self.security(confidence, method),
        }
        shares |= {f"{n} breakers tripped": s for n, s in self.breakers(confidence, method).items()}
        return pd.DataFrame(
            [
                {"outcome": name, "trials": s.successes, "p_estimate": s.estimate, "p_low": s.low, "p_high": s.high}
                for name, s in shares.items()
                if s is not None
            ]
        )

    def plot(self, confidence: float = 0.95, ax: Axes | None = None) -> Axes:
        """The number of breakers tripped: the interval of each share as a hatched bar."""
        from schemesim.show.bars import plot_counts  # heavy: only when a picture is asked for

        counts = {n: (s.low, s.high) for n, s in self.breakers(confidence).items()}
        words = f"below the {100 * confidence:g} % interval", f"{100 * confidence:g} % interval"
        title = f"{self.event}, {self.variant}: breakers tripped in {self.trials} trials"
        return plot_counts(counts, title=title, x="breakers tripped", words=words, ax=ax)

    def _repr_html_(self) -> str:
        told = f"{self.event}, {self.variant}: {self.trials} trials; 95 % intervals"
        return to_html(self.table(), caption=told)

    def __repr__(self) -> str:
        return f"PlaceCounts({self.event}, {self.variant}: {self.trials} trials, {len(self.tallies)} kinds of ending)"


def _normal(mean: float, square: float, n: int, confidence: float) -> Mean:
    if not 0 < confidence < 1:
        raise reject("confidence", confidence, "a number between 0 and 1, e.g. 0.95")
    half = NormalDist().inv_cdf(0.5 + confidence / 2) * math.sqrt(square / (n - 1) / n) if n > 1 else math.inf
    return Mean(mean, mean - half, mean + half, confidence)
