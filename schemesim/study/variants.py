"""Variants side by side on one fault set: what each differs in from the first, and how sure that is.

From the trees a difference has a bracket that certainly holds (what two variants share
cancels). From trials both variants are run with the same random numbers, which belong
to a seed, a trial and the name of a component or block and so are shared by variants;
the difference has an interval at a stated confidence, and the factor by which its variance is less than
with independent trials of both.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from statistics import NormalDist
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from schemesim.engine.answers import DrawnAnswers, ForcedAnswers, drawn_answers
from schemesim.engine.case import Case
from schemesim.engine.event import DEFAULT_HORIZON_US, run_event
from schemesim.engine.program import Program
from schemesim.engine.times import DelayTimes
from schemesim.errors import ErrorList, nearest, reject
from schemesim.show.tables import to_html
from schemesim.study.brackets import Bracket, show
from schemesim.study.money import Values
from schemesim.study.risk import MEASURES, Explorer, Floats, Ledger, Measure, columns_of
from schemesim.study.tree import End

if TYPE_CHECKING:
    import pandas as pd

LEAST_DIFFERING = 10
"""Trials that must differ before a normal interval is given to their difference (a rule of thumb)."""

_ROUNDING = 1e-11  # sums over the same places in another order differ by less, relative


@dataclass(frozen=True, slots=True)
class Paired:
    """The mean of a difference over trials run under both variants with the same random numbers.

    Attributes
    ----------
    estimate, low, high : float
        Of variant less base, with a normal interval; without bounds where fewer than
        ``LEAST_DIFFERING`` trials differ.
    confidence : float
    trials, differing : int
        Trials, and those in which the two differ.
    variance_factor : float
        Variance with independent trials over that with common random numbers; infinite where no trial differs.
    """

    estimate: float
    low: float
    high: float
    confidence: float
    trials: int
    differing: int
    variance_factor: float

    def __repr__(self) -> str:
        return (
            f"{self.estimate:.6g} ({self.low:.6g} to {self.high:.6g} at {100 * self.confidence:g} %), "
            f"{self.differing} of {self.trials} trials differ, variance cut by {self.variance_factor:.3g}"
        )


@dataclass(frozen=True, slots=True)
class Difference:
    """One yearly figure of one variant beside that of the base.

    Attributes
    ----------
    measure, variant : str
    value, difference : Bracket
        The figure, and variant less base.
    paired : Paired or None
        The difference from trials, where these were run.
    verdict : str
        ``"better"`` or ``"worse"`` (certain, by the bracket), ``"better at 95 %"`` (by trials), ``"same"``
        (certain), ``"not told apart"``; empty for the base.
    """

    measure: str
    variant: str
    value: Bracket
    difference: Bracket
    paired: Paired | None
    verdict: str


@dataclass(frozen=True)
class VariantStudy:
    """Every yearly figure of every variant; the first is the base. Less is better in all figures."""

    base: str
    ledgers: Mapping[str, Ledger]
    rows: tuple[Difference, ...]

    def of(self, measure: str, variant: str) -> Difference:
        """One cell.

        Raises
        ------
        InputError
            If there is no such measure or variant.
        """
        for row in self.rows:
            if (row.measure, row.variant) == (measure, variant):
                return row
        known = [*MEASURES, *self.ledgers]
        tips = (nearest(x, known) for x in (measure, variant) if x not in known)
        raise reject("cell", (measure, variant), "a measure and a variant that were compared", tip="; ".join(tips))

    def table(self) -> pd.DataFrame:
        """One row for each measure and variant."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame([_row(r) for r in self.rows])

    def __repr__(self) -> str:
        lines = [f"VariantStudy against {self.base!r}"]
        for measure in dict.fromkeys(r.measure for r in self.rows):
            lines.append(measure)
            for name in self.ledgers:
                r = self.of(measure, name)
                change = "" if name == self.base else f"{show(r.difference.low, r.difference.high):28} {r.verdict}"
                lines.append(f"  {name:24} {r.value!r:28} {change}".rstrip())
                if r.paired is not None:
                    lines.append(f"  {'':24} by trials: {r.paired!r}")
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.table())


def _row(r: Difference) -> dict[str, object]:
    row: dict[str, object] = {
        "measure": r.measure,
        "variant": r.variant,
        "low": float(r.value.low),
        "high": float(r.value.high),
        "difference_low": float(r.difference.low),
        "difference_high": float(r.difference.high),
        "verdict": r.verdict,
    }
    if r.paired is not None:
        row["trials_difference"] = r.paired.estimate
        row["trials_low"], row["trials_high"] = r.paired.low, r.paired.high
        row["variance_factor"] = r.paired.variance_factor
    return row


def study_variants(
    explorer: Explorer | Mapping[str, Explorer],
    programs: Mapping[str, Program],
    values: Values | None = None,
    *,
    trials: int = 0,
    seed: int = 0,
    confidence: float = 0.95,
) -> VariantStudy:
    """Study several variants on the same faults.

    Parameters
    ----------
    explorer : Explorer or mapping of variant name to Explorer
        The fault set, and how far trees go. One for each variant where the plants differ (other positions of
        CTs, another layout), so that each has faults at its own sections.
    programs : mapping of variant name to Program
        The first is the base.
    values : Values or None
        What events cost; without them figures in money are zero.
    trials : int
        Trials of every event with common random numbers; 0: trees only.
    seed : int
    confidence : float
        Of the intervals from trials.

    Raises
    ------
    InputError
        Without a variant or its explorer, with one explorer for plants that differ, or for numbers that are not as
        stated.
    """
    errors = ErrorList()
    if not programs:
        errors.add("variants", "none", "at least one")
    for name, number in (("trials", trials), ("seed", seed)):
        value: object = number
        if isinstance(value, bool) or not isinstance(value, int) or value < 0:
            errors.add(name, value, "a whole number of zero or more")
    if trials == 1:
        errors.add("trials", trials, "0, or two or more for an interval")
    if not 0 < confidence < 1:
        errors.add("confidence", confidence, "a number between 0 and 1, e.g. 0.95")
    explorers = explorer if isinstance(explorer, Mapping) else dict.fromkeys(programs, explorer)
    for name in programs:
        if name not in explorers:
            errors.add("explorer", "none", f"one for each variant; {name!r} has none", tip=nearest(name, explorers))
    plants = {name: program.plant for name, program in programs.items()}
    for name, plant in plants.items():
        other = next((n for n in plants if explorers.get(n) is explorers.get(name) and plants[n] != plant), None)
        if name in explorers and other is not None:
            errors.add("explorer", f"one for {other!r} and {name!r}", "an explorer for each, as their plants differ")
            break
    errors.raise_if_any()
    priced = Values() if values is None else values
    ledgers = {name: explorers[name].ledger(program) for name, program in programs.items()}
    base_name, base = next(iter(ledgers.items()))
    drawn: dict[str, Mapping[str, Floats]] = {}
    if trials:
        drawn = {
            n: trial_figures(x, MEASURES, priced, trials, seed, horizon_us=explorers[n].horizon_us)
            for n, x in ledgers.items()
        }
    rows: list[Difference] = []
    for measure, f in MEASURES.items():
        for name, ledger in ledgers.items():
            less = ledger.less(base, f, priced)
            pair = None
            if trials and name != base_name:
                pair = paired(drawn[name][measure], drawn[base_name][measure], confidence)
            verdict = "" if name == base_name else verdict_of(less, pair)
            rows.append(Difference(measure, name, ledger.figure(f, priced), less, pair, verdict))
    return VariantStudy(base_name, ledgers, tuple(rows))


def verdict_of(difference: Bracket, pair: Paired | None = None) -> str:
    """Better, worse or not told apart, for a figure of which less is better.

    Examples
    --------
    >>> verdict_of(Bracket(-2.0, -1.0)), verdict_of(Bracket(-2.0, 1.0))
    ('better', 'not told apart')
    """
    if difference.high < 0 or difference.low > 0:
        return "better" if difference.high < 0 else "worse"
    if difference.low == difference.high == 0:
        return "same"
    if pair is not None and (pair.high < 0 or pair.low > 0):
        return f"{'better' if pair.high < 0 else 'worse'} at {100 * pair.confidence:g} %"
    return "not told apart"


def paired(variant: Floats, base: Floats, confidence: float = 0.95) -> Paired:
    """The mean difference of two arrays of trials, entry by entry.

    The variance with independent trials is the sum of both variances.
    """
    change = variant - base
    change[np.abs(change) <= _ROUNDING * np.maximum(np.abs(variant), np.abs(base))] = 0.0
    n = len(change)
    mean = float(change.mean())
    spread = float(change.var(ddof=1)) if np.ptp(change) > _ROUNDING * float(np.abs(change).max()) else 0.0
    apart = float(variant.var(ddof=1)) + float(base.var(ddof=1))
    half = NormalDist().inv_cdf(0.5 + confidence / 2) * math.sqrt(spread / n)
    factor = apart / spread if spread > 0 else math.inf
    differing = int(np.count_nonzero(change))
    if differing < LEAST_DIFFERING:  # too few to know their spread
        half = math.inf
    return Paired(mean, mean - half, mean + half, confidence, n, differing, factor)


def trial_figures(
    ledger: Ledger,
    measures: Mapping[str, Measure],
    values: Values,
    trials: int,
    seed: int,
    *,
    horizon_us: int = DEFAULT_HORIZON_US,
) -> Mapping[str, Floats]:
    """Yearly figures of each trial: a trial is one state of all components, met by every event.

    The mean over trials estimates the yearly figure.
    """
    found = {name: np.zeros(trials) for name in measures}
    for place, rate in ledger.places:
        ends: list[End] = []
        which = np.zeros(trials, dtype=np.intp)
        for end, met in histories(place.case, trials, seed, horizon_us=horizon_us):
            which[met] = len(ends)
            ends.append(end)
        columns = columns_of(place.case, ends, place.limit_us)
        for name, measure in measures.items():
            found[name] += rate * measure(columns, values)[which]
    return found


def histories(
    case: Case, trials: int, seed: int, *, horizon_us: int = DEFAULT_HORIZON_US
) -> Iterator[tuple[End, NDArray[np.intp]]]:
    """How trials end: an ending, and the trials that came to it (an ending may come up again).

    Where no delay is random each distinct history is run once.
    """
    if case.random:
        for t in range(trials):
            answers = DrawnAnswers(case.program, seed, t)
            ran = run_event(case, answers, times=DelayTimes(seed, t), horizon_us=horizon_us)
            yield End(ran.outcome, ran.final_mask), np.array([t])
        return
    drawn: dict[int, NDArray[np.bool_]] = {}
    waiting: list[tuple[dict[int, bool], NDArray[np.intp]]] = [({}, np.arange(trials))]
    while waiting:
        known, left = waiting.pop()
        ran = run_event(case, ForcedAnswers(known), horizon_us=horizon_us)
        met = dict(known)
        for q, _ in ran.asked:
            if q in known:
                continue
            if q not in drawn:
                drawn[q] = drawn_answers(case.program, seed, q, 0, trials)
            yes = drawn[q][left]
            if yes.any():
                waiting.append(({**met, q: True}, left[yes]))
                left = left[~yes]
            met[q] = False
        if left.size:
            yield End(ran.outcome, ran.final_mask), left
