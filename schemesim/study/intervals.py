"""Intervals for a probability estimated from a count of successes in independent trials.

Clopper–Pearson never covers less often than it says, and is wider for it; Wilson
covers about as often as it says on average, and is the one to plot.
"""

from __future__ import annotations

import math
import operator
from statistics import NormalDist
from typing import Any

from schemesim.errors import ErrorList


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
