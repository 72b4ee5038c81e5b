"""Statistics: intervals of a probability, quantiles of random delays, counts of Monte Carlo."""

from __future__ import annotations

import math
from fractions import Fraction
from functools import partial
from typing import Any, Literal

from schemesim.engine.outcome import Outcome
from schemesim.scheme.distributions import LogNormal, Normal, Triangular
from schemesim.study import intervals
from schemesim.study.montecarlo import simulate
from schemesim.study.stratified import simulate_stratified
from schemesim.study.tree import explore
from tests.outside.fault_trees import fault_tree, opened
from tests.outside.records import DERIVED, LIBRARY, MEMORY, Record
from tests.outside.whole_schemes import two_chains

SUBJECT = "statistics"

NEWCOMBE = "R. G. Newcombe, Statistics in Medicine 17 (1998) 857–872, table I"
SOLVED = "four-digit solution of the defining equations"
AGRESTI = "A. Agresti and B. A. Coull, The American Statistician 52 (1998) 119–126"

# successes, trials, Wilson (method 3), Clopper–Pearson (method 5)
TABLE = [
    (81, 263, (0.2553, 0.3662), (0.2527, 0.3676)),
    (15, 148, (0.0624, 0.1605), (0.0578, 0.1617)),
    (0, 20, (0.0000, 0.1611), (0.0000, 0.1684)),
    (1, 29, (0.0061, 0.1718), (0.0009, 0.1776)),
]


def ends(bounds: tuple[float, float]) -> dict[str, float]:
    """Both ends by name."""
    return {"low": bounds[0], "high": bounds[1]}


def by_scipy(method: Literal["exact", "wilson"], k: int, n: int, confidence: float) -> dict[str, float]:
    """The interval of scipy."""
    from scipy.stats import binomtest

    found = binomtest(k, n).proportion_ci(confidence, method=method)
    return {"low": float(found.low), "high": float(found.high)}


def by_statsmodels(method: str, k: int, n: int, confidence: float) -> dict[str, float]:
    """The interval of statsmodels."""
    from statsmodels.stats.proportion import proportion_confint

    low, high = proportion_confint(k, n, alpha=1 - confidence, method=method)
    return {"low": float(low), "high": float(high)}


def worst_coverage(n: int) -> float:
    """How seldom Wilson's interval of 95 % holds the true probability, at worst."""
    bounds = [intervals.wilson(k, n) for k in range(n + 1)]

    def coverage(p: float) -> float:
        held = (k for k, (low, high) in enumerate(bounds) if low <= p <= high)
        return sum(math.comb(n, k) * p**k * (1 - p) ** (n - k) for k in held)

    return min(coverage((i + 0.5) / 1000) for i in range(1000))


QUANTILES = (0.001, 0.1, 0.5, 0.9, 0.999)


def spread_of(what: str) -> dict[str, float]:
    """Quantiles in microseconds of ours."""
    delay = {
        "normal": Normal(50_000, 5_000.0, 42_000, 61_000),
        "log-normal": LogNormal(20_000, 0.5, 8_000, 90_000),
        "triangular": Triangular(30_000, 45_000, 70_000),
    }[what]
    return {f"{u:g}": float(delay.at(u)) for u in QUANTILES}


def spread_by_scipy(what: str) -> dict[str, float]:
    """The same of scipy."""
    from scipy import stats

    found: Any
    if what == "normal":
        found = stats.truncnorm((42 - 50) / 5, (61 - 50) / 5, loc=50_000, scale=5_000)
    elif what == "triangular":
        found = stats.triang(15 / 40, loc=30_000, scale=40_000)
    else:
        low, high = (math.log(x / 20) / 0.5 for x in (8, 90))
        cut = stats.truncnorm(low, high)
        return {f"{u:g}": 20_000 * math.exp(0.5 * float(cut.ppf(u))) for u in QUANTILES}
    return {f"{u:g}": float(found.ppf(u)) for u in QUANTILES}


TRIALS = 40_000


def counted() -> float:
    """Share of trials in which the line under two chains is cleared in time; seeded, so the same each time."""
    w = two_chains()
    counts = simulate(w.case(), TRIALS, seed=11)
    times = ((end.outcome.t_clear_us, n) for end, n in counts.ends)
    return sum(n for t, n in times if t is None or t > w.limit_us) / TRIALS


def stratified() -> float:
    """The same within the leaves of an event tree, a tenth of the trials."""
    w = two_chains()

    def late(o: Outcome) -> bool:
        return o.t_clear_us is None or o.t_clear_us > w.limit_us

    return simulate_stratified(w.case(), TRIALS // 10, seed=11, event=late).share(late).estimate


def four_sigma() -> float:
    """Four standard errors of the count at the exact probability, one in 16,000 to be missed by chance."""
    p = 0.0075368
    return 4 * math.sqrt(p * (1 - p) / TRIALS)


def expected_squared(odds: Fraction) -> Fraction:
    """The mean of the squared weight of a draw: both of two units of 1E-3 fail, each drawn with odds instead."""
    p = Fraction(1, 1000)
    tree = explore(fault_tree({"a": odds, "b": odds}, ("and", "a", "b")), epsilon=0)
    return Fraction(tree.bracket(opened).low) * (p / odds) ** 4


of = partial(Record, SUBJECT)

RECORDS = (
    *(
        of(NEWCOMBE, MEMORY, f"Wilson {k}/{n}", ends(w), 0.5e-4,
           partial(lambda k, n: ends(intervals.wilson(k, n)), k, n))
        for k, n, w, _ in TABLE
    ),
    *(
        of(NEWCOMBE, MEMORY, f"Clopper–Pearson {k}/{n}", ends(c), 0.5e-4,
           partial(lambda k, n: ends(intervals.clopper_pearson(k, n)), k, n))
        for k, n, _, c in TABLE
    ),
    *(
        of(SOLVED, DERIVED, f"Clopper–Pearson {k}/{n}", ends(c), 0.5e-4,
           partial(lambda k, n: ends(intervals.clopper_pearson(k, n)), k, n))
        for k, n, c in ((3, 20, (0.0321, 0.3789)), (42, 100, (0.3220, 0.5229)))
    ),
    of("closed form 1 − 0.025^(1/n)", DERIVED, "Clopper–Pearson 0/1000, upper end", 0.0036821, 5e-8,
       lambda: intervals.clopper_pearson(0, 1000)[1]),
    of("rule of three (Hanley and Lippman-Hand, JAMA 249, 1983)", MEMORY,
       "one-sided 95 % bound of 0/1000 is about 3/n", 0.003, 2e-5,
       lambda: intervals.clopper_pearson(0, 1000, 0.90)[1]),
    of(AGRESTI, MEMORY, "least coverage of Wilson 95 %, n = 10", 0.835, 0.005,
       lambda: worst_coverage(10)),
    *(
        of("scipy.stats.binomtest", LIBRARY, f"Wilson {k}/{n} at {c:g}",
           partial(by_scipy, "wilson", k, n, c), 1e-9,
           partial(lambda k, n, c: ends(intervals.wilson(k, n, c)), k, n, c))
        for k, n, c in ((7, 30, 0.9), (399, 400, 0.999))
    ),
    *(
        of("statsmodels, proportion_confint (beta)", LIBRARY, f"Clopper–Pearson {k}/{n} at {c:g}",
           partial(by_statsmodels, "beta", k, n, c), 1e-9,
           partial(lambda k, n, c: ends(intervals.clopper_pearson(k, n, c)), k, n, c))
        for k, n, c in ((7, 30, 0.9), (2, 100_000, 0.99))
    ),
    *(
        of("scipy.stats, quantiles of a cut distribution", LIBRARY, f"{what} delay, five quantiles, µs",
           partial(spread_by_scipy, what), 0.51, partial(spread_of, what))
        for what in ("normal", "log-normal", "triangular")
    ),
    of("exact decision diagram by the library dd, four standard errors", LIBRARY,
       f"line under two whole chains, share of {TRIALS} trials late", lambda: two_chains().exact(), four_sigma(),
       counted, whole=True),
    # No delay is random, so a leaf is all late or not at all: only what the tree has left open is sampled.
    of("exact decision diagram by the library dd", LIBRARY,
       f"line under two whole chains, late: stratified, {TRIALS // 10} trials", lambda: two_chains().exact(), 5e-6,
       stratified, whole=True),
    of("importance sampling, textbook: two units of 1E-3 drawn at 0.1", DERIVED,
       "variance of the weighted estimate of both failing", 9.9e-11, 5e-13,
       lambda: expected_squared(Fraction(1, 10)) - Fraction(1, 10**12)),
)  # fmt: skip
