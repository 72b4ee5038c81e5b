"""Redundant items: tests together or by turns, a common cause, k out of n; and the formulas of IEC 61508-6 Annex B.

The unavailability of a redundant group is the mean of a product, which is not the product of the means: items
tested together are old together. With items of the hidden rate λ tested every T, and leading terms only:
1oo1 λT/2, 1oo2 (λT)²/3, 2oo2 λT, 2oo3 (λT)² tested together, and 1oo2 5(λT)²/24 tested by turns
(IEC 61508-6 Annex B and NUREG-0492, from memory; each follows by integration).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import lru_cache

from schemesim.errors import ErrorList, nearest, reject
from schemesim.scheme.unavailability import HOURS_PER_YR, MAX_H, RateData, need, unavailability

_NODES = 24
MAX_ITEMS = 20


@dataclass(frozen=True, slots=True)
class Redundant:
    """The unavailability of a group of like items.

    Attributes
    ----------
    needed, count : int
        The group works while so many of its items do: 1 of 2, 2 of 3.
    staggered : bool
    beta : float
    mean : float
        Over the test interval.
    worst : float
        At the worst time of the interval.
    common_cause_mean : float
        What the common cause alone is worth, in the mean.
    """

    needed: int
    count: int
    staggered: bool
    beta: float
    mean: float
    worst: float
    common_cause_mean: float

    def __repr__(self) -> str:
        how = "by turns" if self.staggered else "together"
        return f"Redundant({self.needed}oo{self.count} tested {how}: mean {self.mean:.3g}, worst {self.worst:.3g})"


def redundant(
    data: RateData, needed: int, count: int, *, staggered: bool = False, beta: float = 0.0
) -> Redundant:
    """The unavailability of a group of like items of which some are needed.

    Parameters
    ----------
    data : RateData
        Of each item.
    needed, count : int
        How many must work, of how many: 1 and 2 for a duplicate, 2 and 3 for a vote.
    staggered : bool
        Tested by turns, T/n apart; else together. A common cause is then found at the next test of
        any item (assumed: who finds one failed looks at its fellows).
    beta : float
        Share of the failures of each that fails all of them (beta factor).

    Returns
    -------
    Redundant
        The mean is taken by quadrature between tests, exact but for rounding.

    Raises
    ------
    InputError
        For numbers of items or a beta factor that are not as stated.

    Examples
    --------
    >>> item = RateData(rate_per_yr=0.02, test_interval_yr=1)
    >>> redundant(item, 1, 2)
    Redundant(1oo2 tested together: mean 0.000131, worst 0.000392)
    >>> redundant(item, 1, 2, staggered=True)
    Redundant(1oo2 tested by turns: mean 8.23e-05, worst 0.000197)
    """
    errors = ErrorList()
    for name, value, least in (("count", count, 1), ("needed", needed, 1)):
        whole: object = value
        most = MAX_ITEMS if name == "count" else count
        if isinstance(whole, bool) or not isinstance(whole, int) or not least <= whole <= most:
            errors.add(name, value, f"a whole number from {least} to {most}")
    need(errors, "beta", beta, 0, 1, "a share from 0 to 1")
    errors.raise_if_any()
    own = replace(data.shared(1 - beta), test_duration_h=data.test_duration_h)
    common = data.shared(beta)
    own_parts, common_parts = unavailability(own), unavailability(common)
    interval = data.test_interval_yr or 0.0
    pieces = count if staggered and interval else 1

    def at(age: float) -> tuple[float, float]:
        """Of the group and of its common cause, so long after the test of the item tested last."""
        ages = [(age + i * interval / pieces) if staggered else age for i in range(count)]
        apart = _too_few([min(1.0, own.hidden_at(a) + own_parts.steady) for a in ages], needed)
        together = min(1.0, common.hidden_at(age) + common_parts.steady)
        return apart + together - apart * together, together

    step = interval / pieces  # every piece between two tests is the same, the items changing places
    return Redundant(
        needed=needed,
        count=count,
        staggered=staggered,
        beta=beta,
        mean=mean_over(lambda age: at(age)[0], step),
        worst=at(step)[0],
        common_cause_mean=mean_over(lambda age: at(age)[1], step),
    )


def _too_few(unavailable: list[float], needed: int) -> float:
    """Probability that fewer than ``needed`` of independent items work."""
    spread = [1.0]  # probability of each number of failed items
    for q in unavailable:
        more = [*spread, 0.0]
        spread = [more[k] * (1 - q) + (spread[k - 1] * q if k else 0.0) for k in range(len(more))]
    return math.fsum(spread[len(unavailable) - needed + 1 :])


def mean_over(value: Callable[[float], float], length: float) -> float:
    """The mean of a smooth function from 0 to a length (its value at 0 where the length is 0)."""
    if not length:
        return value(0.0)
    return math.fsum(w * value(x * length) for x, w in quadrature(_NODES))


@lru_cache(maxsize=16)
def quadrature(nodes: int) -> tuple[tuple[float, float], ...]:
    """Places from 0 to 1 and weights that sum to 1 (Gauss–Legendre), exact for polynomials of degree 2n − 1."""
    from numpy.polynomial.legendre import leggauss  # heavy: only where a mean is taken

    places, weights = leggauss(nodes)
    return tuple((float(x + 1) / 2, float(w) / 2) for x, w in zip(places, weights, strict=True))


ARCHITECTURES = ("1oo1", "1oo2", "2oo2", "2oo3")


def iec_61508_pfd(
    architecture: str,
    rate_per_h: float,
    coverage: float,
    *,
    interval_h: float = HOURS_PER_YR,
    beta: float = 0.0,
    beta_d: float | None = None,
    mttr_h: float = 8.0,
    mrt_h: float | None = None,
) -> float:
    """Average probability of failure on demand after the formulas of IEC 61508-6 Annex B (from memory).

    tCE = (λDU/λD)(T1/2 + MRT) + (λDD/λD)MTTR, tGE the same with T1/3;
    1oo1 λD·tCE; 2oo2 2λD·tCE; 1oo2 2[(1−βD)λDD + (1−β)λDU]²·tCE·tGE + βD·λDD·MTTR + β·λDU(T1/2 + MRT);
    2oo3 the same with the factor 6.

    Parameters
    ----------
    architecture : str
        ``"1oo1"``, ``"1oo2"``, ``"2oo2"`` or ``"2oo3"``.
    rate_per_h : float
        Dangerous failures an hour, λD.
    coverage : float
        Diagnostic coverage, λDD/λD.
    interval_h : float
        Proof test interval T1; a year by default.
    beta, beta_d : float
        Share of common cause of undetected and of detected failures; βD is β/2 by default.
    mttr_h, mrt_h : float
        Mean time to restoration, and mean repair time (the same by default), in hours.

    Raises
    ------
    InputError
        For an architecture or a number that is not as stated.

    Examples
    --------
    >>> f"{iec_61508_pfd('1oo2', 2.5e-6, 0.6, beta=0.1):.1E}"
    '4.6E-04'
    """
    if architecture not in ARCHITECTURES:
        expected = f"one of {', '.join(ARCHITECTURES)}"
        raise reject("architecture", architecture, expected, tip=nearest(str(architecture), ARCHITECTURES))
    errors = ErrorList()
    need(errors, "rate_per_h", rate_per_h, 0, 1)
    need(errors, "coverage", coverage, 0, 1, "a share from 0 to 1")
    need(errors, "beta", beta, 0, 1, "a share from 0 to 1")
    shared_d = beta / 2 if beta_d is None else beta_d
    need(errors, "beta_d", shared_d, 0, 1, "a share from 0 to 1")
    repair_h = mttr_h if mrt_h is None else mrt_h
    for name, value in (("interval_h", interval_h), ("mttr_h", mttr_h), ("mrt_h", repair_h)):
        need(errors, name, value, 0, MAX_H)
    errors.raise_if_any()
    found, hidden = rate_per_h * coverage, rate_per_h * (1 - coverage)
    t_ce = (1 - coverage) * (interval_h / 2 + repair_h) + coverage * mttr_h
    t_ge = (1 - coverage) * (interval_h / 3 + repair_h) + coverage * mttr_h
    if architecture in ("1oo1", "2oo2"):
        return (1 if architecture == "1oo1" else 2) * rate_per_h * t_ce
    apart = (1 - shared_d) * found + (1 - beta) * hidden
    common = shared_d * found * mttr_h + beta * hidden * (interval_h / 2 + repair_h)
    return (2 if architecture == "1oo2" else 6) * apart**2 * t_ce * t_ge + common
