"""Redundancy and proof tests: cells of IEC 61508-6, leading terms, renewal theory, and Markov processes with tests."""

from __future__ import annotations

from functools import partial

from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.plant.model import Location
from schemesim.scheme import redundancy, unavailability
from schemesim.scheme.dress import dress
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import ComponentKind, FailureMode
from schemesim.scheme.policy import duplicate_relay, single_set
from schemesim.scheme.unavailability import HOURS_PER_YR, RateData, RateRule
from schemesim.study.proof_intervals import study_test_intervals
from tests.outside.records import DERIVED, LIBRARY, MEMORY, Record, half
from tests.outside.repaired import Item, both_fail, mean_over, two_of_three_fail
from tests.outside.whole_schemes import radial

SUBJECT = "redundancy and proof tests"

# λD 2.5E-6 per hour, T1 a year, MTTR 8 h, βD = β/2: coverage, architecture, β, PFD with two digits.
CELLS = [
    (0.0, "1oo1", 0.0, "1.1E-02"),
    (0.0, "2oo2", 0.0, "2.2E-02"),
    (0.0, "1oo2", 0.02, "3.7E-04"),
    (0.0, "1oo2", 0.10, "1.2E-03"),
    (0.0, "1oo2", 0.20, "2.3E-03"),
    (0.0, "2oo3", 0.02, "6.8E-04"),
    (0.0, "2oo3", 0.10, "1.5E-03"),
    (0.0, "2oo3", 0.20, "2.5E-03"),
    (0.6, "1oo1", 0.0, "4.4E-03"),
    (0.6, "2oo2", 0.0, "8.8E-03"),
    (0.6, "1oo2", 0.02, "1.1E-04"),
    (0.6, "1oo2", 0.10, "4.6E-04"),
    (0.6, "1oo2", 0.20, "9.0E-04"),
    (0.6, "2oo3", 0.02, "1.6E-04"),
    (0.6, "2oo3", 0.10, "5.1E-04"),
    (0.6, "2oo3", 0.20, "9.4E-04"),
]

X = 1e-4
"""λT at which leading terms are compared: the rest is of this order, relative."""


def cell(coverage: float, architecture: str, beta: float) -> float:
    """Average probability of failure on demand."""
    return redundancy.iec_61508_pfd(architecture, 2.5e-6, coverage, beta=beta)


def leading(needed: int, count: int, staggered: bool) -> float:
    """Mean unavailability at λT = X, over the power of X it goes with."""
    item = RateData(rate_per_yr=X / 2, test_interval_yr=2)
    power = count - needed + 1
    return redundancy.redundant(item, needed, count, staggered=staggered).mean / X**power


RELAY = Item(rate_per_yr=0.05, coverage=0.6, interval_yr=2, repair_h=48)


def data(item: Item) -> RateData:
    """The same item in our terms."""
    return RateData(
        rate_per_yr=item.rate_per_yr, coverage=item.coverage, test_interval_yr=item.interval_yr, repair_h=item.repair_h
    )


def dressed(relays: int, *, by_turns: bool = False) -> float:
    """Share of faults on a feeder that a dressed plant leaves uncleared, its relays alone being able to fail."""
    rule = RateRule(
        kind=ComponentKind.RELAY, mode=FailureMode.FAILURE_TO_OPERATE, data=data(RELAY), pattern="*/F/*",
        staggered=by_turns,
    )  # fmt: skip
    found = FailureData(modes={}, no_fault_per_yr={}, rates=(rule,))
    policy = (duplicate_relay if relays == 2 else single_set)(remote_backup=False)
    program = compile_scheme(radial(), dress(radial(), policy, found))
    study = study_test_intervals(
        program, found, LogicalSensing(), [Location("F")], kind=ComponentKind.RELAY, pattern="*/F/*",
        intervals_yr=[RELAY.interval_yr], limit_us=150_000, epsilon=0.0,
    )  # fmt: skip
    return float(study.rows[0].late.low)


STANDARD = "IEC 61508-6 Annex B, tables for a yearly test (recomputed)"
MARKOV = "Markov process between tests, periodic solution (scipy.linalg.expm, scipy.integrate.quad)"
HANDBOOK = "NUREG-0492 and IEC 61508-6 Annex B, leading terms"

of = partial(Record, SUBJECT)

RECORDS = (
    *(
        of(STANDARD, MEMORY, f"{a}, DC {c:.0%}, β {b:.0%}: PFD", float(text), half(text),
           partial(cell, c, a, b))
        for c, a, b, text in CELLS
    ),
    *(
        of(HANDBOOK, MEMORY, f"{k}oo{n} {how}, over {power}", share, 2 * share * X,
           partial(leading, k, n, how == "by turns"))
        for k, n, how, power, share in (
            (1, 1, "alone", "λT", 1 / 2),
            (1, 2, "together", "(λT)²", 1 / 3),
            (2, 2, "together", "λT", 1.0),
            (2, 3, "together", "(λT)²", 1.0),
            (1, 2, "by turns", "(λT)²", 5 / 24),
        )
    ),
    of("alternating renewal process, μ/(λ + μ) (textbook)", DERIVED,
       "0.5 failures a year, 876 h of repair: out of service", 0.5 / 10.5, 1e-12,
       lambda: unavailability.unavailability(RateData(rate_per_yr=0.5, repair_h=876, revealed=True)).mean),
    *(
        of("least of λ(1−C)T/2 + τ/T", DERIVED,
           f"best interval in years, λ 0.01 a year, τ 4 h, C {c:g}", years, 0.005,
           partial(lambda c: unavailability.optimal_interval_yr(0.01, 4, c), c))
        for c, years in ((0.0, 0.30), (0.8, 0.68), (0.95, 1.35))
    ),
    # The Markov process repairs while the other tests go on and never counts an item twice; ours adds the parts
    # of an unavailability, so it is over by products of small numbers: 2 % is room for those.
    of(MARKOV, LIBRARY, "one item: mean unavailability",
       lambda: mean_over(RELAY.unavailable, RELAY.interval_yr), 2e-4,
       lambda: unavailability.unavailability(data(RELAY)).mean),
    of(MARKOV, LIBRARY, "1oo2 together: mean", lambda: both_fail(RELAY), 1e-5,
       lambda: redundancy.redundant(data(RELAY), 1, 2).mean),
    of(MARKOV, LIBRARY, "2oo3 together: mean", lambda: two_of_three_fail(RELAY), 4e-5,
       lambda: redundancy.redundant(data(RELAY), 2, 3).mean),
    of(MARKOV, LIBRARY, "dressed feeder, one set: share of faults late",
       lambda: mean_over(RELAY.unavailable, RELAY.interval_yr), 2e-4, lambda: dressed(1), whole=True),
    of(MARKOV, LIBRARY, "dressed feeder, two sets tested together: share of faults late",
       lambda: both_fail(RELAY), 1e-5, lambda: dressed(2), whole=True),
    of(MARKOV, LIBRARY, "dressed feeder, two sets tested by turns: share of faults late",
       lambda: both_fail(RELAY, by_turns=True), 1e-5, lambda: dressed(2, by_turns=True), whole=True),
    of("renewal theory: 1oo2 of items whose failures show, (λ/(λ+μ))²", DERIVED,
       "0.5 failures a year, 876 h of repair: both out", (0.5 / 10.5) ** 2, 1e-12,
       lambda: redundancy.redundant(RateData(rate_per_yr=0.5, repair_h=876, revealed=True), 1, 2).mean),
    of("IEC 61508-6 Annex B: PFD of an item found by its test in MRT", DERIVED,
       "λD 2.5E-6 per hour, MRT 8 h, hours a year 8760: λ(T1/2 + MRT)", 2.5e-6 * (4380 + 8), 1e-4,
       lambda: unavailability.unavailability(
           RateData(rate_per_yr=2.5e-6 * HOURS_PER_YR, test_interval_yr=1, repair_h=8)).mean),
)  # fmt: skip
