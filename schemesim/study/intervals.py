"""Intervals for a probability estimated from counts of successes in independent trials.

Clopper–Pearson never covers less often than it says, and is wider for it; Wilson
covers about as often as it says on average, and is the one to plot. Where the trials were divided
among strata of known weight, ``stratified`` joins intervals of the strata.
"""

from __future__ import annotations

import math
import operator
from collections.abc import Sequence
from statistics import NormalDist
from typing import Any

from schemesim.errors import ErrorList, reject


def wilson(successes: int, trials: int, confidence: float = 0.95) -> tuple[float, float]:
    """Wilson's score interval for a probability.

    Which true probabilities lie within z standard errors, taken at that true probability, of
    the share observed? Its coverage is near the nominal one on average, at times below it.

    Parameters
    ----------
    successes : int
        How often it happened.
    trials : int
        How many independent trials; with none the answer is (0, 1).
    confidence : float
        Nominal two-sided coverage, between 0 and 1.

    Returns
    -------
    tuple of float
        Lower and upper bound.

    Raises
    ------
    InputError
        If the counts are not whole numbers with 0 <= successes <= trials, or the confidence is
        not between 0 and 1; all mistakes at once.

    References
    ----------
    E. B. Wilson, J. Amer. Statist. Assoc. 22 (1927) 209–212, without continuity correction.

    Examples
    --------
    >>> low, high = wilson(81, 263)
    >>> round(low, 4), round(high, 4)
    (0.2553, 0.3662)
    """
    successes, trials = _checked(successes, trials, confidence)
    if trials == 0:
        return 0.0, 1.0
    z = -NormalDist().inv_cdf((1.0 - confidence) / 2.0)
    failures = trials - successes
    root = z * math.sqrt(z * z + 4.0 * successes * failures / trials)
    above = 2.0 * successes + z * z + root
    # The lower root of the quadratic is the product of the roots over the upper one: no digits cancel.
    low = 2.0 * successes * (successes / trials) / above if successes else 0.0
    high = min(above / (2.0 * (trials + z * z)), 1.0) if failures else 1.0
    return low, high


def clopper_pearson(successes: int, trials: int, confidence: float = 0.95) -> tuple[float, float]:
    """The exact interval of Clopper and Pearson for a probability.

    Which true probabilities would not give so many, or so few, successes with less than half the
    allowed error on each side? Its coverage is never under the nominal one.

    Parameters
    ----------
    successes : int
        How often it happened.
    trials : int
        How many independent trials; with none the answer is (0, 1).
    confidence : float
        Least two-sided coverage, between 0 and 1.

    Returns
    -------
    tuple of float
        Lower and upper bound.

    Raises
    ------
    InputError
        If the counts are not whole numbers with 0 <= successes <= trials, or the confidence is
        not between 0 and 1; all mistakes at once.

    References
    ----------
    C. J. Clopper and E. S. Pearson, Biometrika 26 (1934) 404–413; as quantiles of the beta
    distribution.

    Examples
    --------
    >>> low, high = clopper_pearson(3, 20)
    >>> round(low, 4), round(high, 4)
    (0.0321, 0.3789)
    """
    successes, trials = _checked(successes, trials, confidence)
    from scipy.special import betainccinv, betaincinv  # heavy: only when an interval is asked for

    tail = (1.0 - confidence) / 2.0
    failures = trials - successes
    low = float(betaincinv(successes, failures + 1, tail)) if successes else 0.0
    high = float(betainccinv(successes + 1, failures, tail)) if failures else 1.0
    return low, high


def stratified(
    weights: Sequence[float], successes: Sequence[int], trials: Sequence[int], confidence: float = 0.95
) -> tuple[float, float]:
    """An interval for a probability estimated stratum by stratum.

    The estimate is Σ Wᵢ·xᵢ/nᵢ. Its distance to either bound is that of each stratum's own interval
    (lᵢ, uᵢ), weighted, squared and added: √ Σ Wᵢ²(p̂ᵢ − lᵢ)² below, √ Σ Wᵢ²(uᵢ − p̂ᵢ)² above. A stratum's interval is
    Jeffreys', and Clopper and Pearson's where its trials all agree: a stratum without a success is not taken
    for one that has none, but adds about Wᵢ·3.7/nᵢ (at 95 %). The coverage is near the nominal one where
    some strata are in doubt, and above it where hardly any is.

    Parameters
    ----------
    weights : sequence of float
        Known probability of each stratum; they add up to 1.
    successes, trials : sequence of int
        How often it happened in each stratum, and of how many independent trials, 1 at least.
    confidence : float
        Nominal two-sided coverage, between 0 and 1.

    Returns
    -------
    tuple of float
        Lower and upper bound.

    Raises
    ------
    InputError
        For counts that do not fit each other, weights that are no probabilities or do not add up to 1,
        or a confidence not between 0 and 1.

    References
    ----------
    G. Y. Zou and A. Donner, Statistics in Medicine 27 (2008) 1693–1702 (variances recovered from the
    limits of each part); L. D. Brown, T. T. Cai and A. DasGupta, Statistical Science 16 (2001) 101–133
    (Jeffreys' interval); both from memory.

    Examples
    --------
    >>> low, high = stratified([0.9, 0.1], [0, 30], [1000, 50])
    >>> round(low, 4), round(high, 4)
    (0.0462, 0.0731)
    """
    errors = ErrorList()
    if not weights or not len(weights) == len(successes) == len(trials):
        sizes = (len(weights), len(successes), len(trials))
        raise reject("strata", sizes, "as many weights as counts of successes and of trials, one at least")
    if not all(0 <= w <= 1 for w in weights) or abs(math.fsum(weights) - 1) > 1e-6:
        errors.add("weights of strata", math.fsum(weights), "probabilities that add up to 1")
    for n in trials:
        if n == 0:
            errors.add("trials of a stratum", n, "one or more")
    errors.raise_if_any()
    for x, n in zip(successes, trials, strict=True):
        _checked(x, n, confidence)
    import numpy as np
    from scipy.special import betainccinv, betaincinv  # heavy: only when an interval is asked for

    w, yes, tried = np.array(weights, dtype=float), np.array(successes), np.array(trials)
    no, tail = tried - yes, (1.0 - confidence) / 2.0
    certain = tail ** (1.0 / tried)  # so likely must all be for all to agree no more seldom than the tail
    low = np.where(no == 0, certain, np.where(yes == 0, 0.0, betaincinv(yes + 0.5, no + 0.5, tail)))
    high = np.where(yes == 0, 1.0 - certain, np.where(no == 0, 1.0, betainccinv(yes + 0.5, no + 0.5, tail)))
    share = yes / tried
    middle = float(w @ share)
    below, above = (math.sqrt(float(np.sum((w * d) ** 2))) for d in (share - low, high - share))
    return max(middle - below, 0.0), min(middle + above, 1.0)


def _checked(successes: int, trials: int, confidence: float) -> tuple[int, int]:
    errors = ErrorList()
    happened, tried = _count(errors, "successes", successes), _count(errors, "trials", trials)
    if happened is not None and tried is not None and happened > tried:
        errors.add("successes", happened, f"at most the number of trials, {tried}")
    level: object = confidence
    is_number = isinstance(level, (int, float)) and not isinstance(level, bool)
    if not is_number or not 0.0 < confidence < 1.0:
        errors.add("confidence", confidence, "a number between 0 and 1, e.g. 0.95")
    errors.raise_if_any()
    return happened or 0, tried or 0


def _count(errors: ErrorList, subject: str, value: object) -> int | None:
    number: Any = value
    try:
        whole = -1 if isinstance(value, bool) else operator.index(number)
    except TypeError:
        whole = -1
    if whole >= 0:
        return whole
    errors.add(subject, value, "a whole number of zero or more")
    return None
