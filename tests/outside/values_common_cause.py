"""Common cause: beta factor, alpha factor and multiple Greek letters, in groups and in whole schemes."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from fractions import Fraction
from functools import partial
from itertools import combinations
from math import comb

from schemesim.engine.case import bind
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.scheme import redundancy
from schemesim.scheme.dress import dress
from schemesim.scheme.model import Ask, CommonCause
from schemesim.scheme.unavailability import RateData
from schemesim.study.tree import explore
from tests.outside.fault_trees import FTO, Tree, p_diagram, p_top
from tests.outside.records import DERIVED, LIBRARY, MEMORY, PUBLISHED, Record, half
from tests.outside.whole_schemes import DATA, WholeScheme, two_relays

SUBJECT = "common cause"

TRAINS: Tree = ("and", *(("or", f"pump {n}", f"valve {n}") for n in (1, 2, 3)))
Q = Fraction(1, 10)


def groups(kinds: Sequence[str], share: Mapping[int, Fraction]) -> tuple[dict[str, Fraction], list[CommonCause]]:
    """Items of each kind in threes: what fails each alone, and a cause for every pair and for all three."""
    causes = [
        CommonCause(f"{kind} {group}", tuple(Ask(f"{kind} {n}", FTO) for n in group), share[len(group)])
        for kind in kinds
        for size in (2, 3)
        for group in combinations((1, 2, 3), size)
        if share[size]
    ]
    return {f"{kind} {n}": share[1] for kind in kinds for n in (1, 2, 3)}, causes


def alpha_shares(alpha: Sequence[Fraction], q: Fraction) -> dict[int, Fraction]:
    """Q_k = k / C(n−1, k−1) · α_k / Σ jα_j · Q, tests not staggered (NUREG/CR-5485, from memory)."""
    n = len(alpha)
    total = sum((k * a for k, a in enumerate(alpha, 1)), Fraction(0))
    return {k: Fraction(k, comb(n - 1, k - 1)) * a / total * q for k, a in enumerate(alpha, 1)}


def greek_shares(beta: Fraction, gamma: Fraction, q: Fraction) -> dict[int, Fraction]:
    """Three items: Q_1 = (1 − β)Q, Q_2 = β(1 − γ)Q/2, Q_3 = βγQ (NUREG/CR-4780, from memory)."""
    return {1: (1 - beta) * q, 2: beta * (1 - gamma) * q / 2, 3: beta * gamma * q}


def trains(share: Mapping[int, Fraction]) -> Fraction:
    """All three trains fail."""
    odds, causes = groups(("pump", "valve"), share)
    return p_top(odds, TRAINS, *causes)


VOTE: Tree = ("atleast", 2, "relay 1", "relay 2", "relay 3")


def vote(share: Mapping[int, Fraction]) -> Fraction:
    """Two of three relays fail, or all."""
    odds, causes = groups(("relay",), share)
    return p_top(odds, VOTE, *causes)


def vote_expanded(share: Mapping[int, Fraction]) -> Fraction:
    """The same with each cause a basic event of its own, by a decision diagram."""
    odds = {f"r{n}": share[1] for n in (1, 2, 3)}
    odds |= {f"c{a}{b}": share[2] for a, b in combinations((1, 2, 3), 2)} | {"call": share[3]}
    fails: dict[int, Tree] = {
        n: ("or", f"r{n}", *(f"c{a}{b}" for a, b in combinations((1, 2, 3), 2) if n in (a, b)), "call")
        for n in (1, 2, 3)
    }
    return p_diagram(odds, ("atleast", 2, *fails.values()))


def beta_closed(beta: float, count: int, q: float = 0.2) -> float:
    """βQ + ((1 − β)Q)^n less their product."""
    common, apart = beta * q, ((1 - beta) * q) ** count
    return common + apart - common * apart


BETA = Fraction(1, 5)


def beta_line() -> float:
    """The line under two relays, a fifth of whose failures is common to both at an end; late."""
    w = two_relays()
    data = replace(DATA, relay_beta=float(BETA))
    case = bind(compile_scheme(w.plant, dress(w.plant, w.policy, data)), w.at, LogicalSensing())
    tree = explore(case, epsilon=2e-9, max_runs=20_000)
    late = tree.bracket(lambda o: o.t_clear_us is None or o.t_clear_us > w.limit_us)
    return float(late.low + late.high) / 2


def beta_line_exact() -> Fraction:
    """From a decision diagram with the common cause as an event beside the relays."""
    w: WholeScheme = two_relays()
    odds = w.odds()
    q = odds["Alder/L1/relay 1"]
    ends = []
    for here in ("Alder", "Birch"):
        odds |= {f"{here}/L1/relay {n}": (1 - BETA) * q for n in (1, 2)} | {f"{here} common": BETA * q}
        chain = (f"{here}.L1.CB", f"{here}/DC 1", f"{here}.L1.CB/coil 1", f"{here}.L1.CTb/core 1")
        both = ("and", f"{here}/L1/relay 1", f"{here}/L1/relay 2")
        ends.append(("or", *chain, f"{here}.L1.VT/winding 1", f"{here} common", both))
    return p_diagram(odds, ("or", *ends))


BETA_FACTOR = "beta-factor model (K. N. Fleming 1975)"
EXAMPLES = "open fault-tree model-exchange examples: three trains, each pump or valve, Q = 0.1"
RARE = RateData(rate_per_yr=1e-6, test_interval_yr=1)

of = partial(Record, SUBJECT)

RECORDS = (
    of(EXAMPLES, PUBLISHED, "beta factor 0.2: all fail", 0.04308, half("0.04308"),
       lambda: trains({1: Q * 4 / 5, 2: Fraction(0), 3: Q / 5}), whole=True),
    of(EXAMPLES, PUBLISHED, "alpha factors 0.7, 0.2, 0.1, not staggered: all fail", 0.05298,
       half("0.05298"), lambda: trains(alpha_shares([Fraction(7, 10), Fraction(2, 10), Fraction(1, 10)], Q)),
       whole=True),
    *(
        of(BETA_FACTOR, MEMORY, f"1oo{n}, Q 0.2 on demand, β {b:g}", beta_closed(b, n), 1e-12,
           partial(lambda b, n: redundancy.redundant(RateData(on_demand=0.2), 1, n, beta=b).mean, b, n))
        for b, n in ((0.1, 2), (0.5, 3))
    ),
    of("common cause of items tested together, βλT/2", DERIVED, "λT 1E-6, β 0.1", 5e-8, 5e-13,
       lambda: redundancy.redundant(RARE, 1, 2, beta=0.1).common_cause_mean),
    of("common cause found at the test of either, βλT/4", DERIVED, "λT 1E-6, β 0.1, by turns",
       2.5e-8, 2.5e-13, lambda: redundancy.redundant(RARE, 1, 2, beta=0.1, staggered=True).common_cause_mean),
    of("multiple Greek letters (NUREG/CR-4780), causes expanded, by the library dd", LIBRARY,
       "two of three relays fail, Q 0.1, β 0.1, γ 0.5",
       lambda: vote_expanded(greek_shares(Q, Fraction(1, 2), Q)), 0,
       lambda: vote(greek_shares(Q, Fraction(1, 2), Q)), whole=True),
    of("alpha factors (NUREG/CR-5485), causes expanded, by the library dd", LIBRARY,
       "two of three relays fail, Q 0.1, α 0.95, 0.03, 0.02",
       lambda: vote_expanded(alpha_shares([Fraction(95, 100), Fraction(3, 100), Fraction(2, 100)], Q)), 0,
       lambda: vote(alpha_shares([Fraction(95, 100), Fraction(3, 100), Fraction(2, 100)], Q)), whole=True),
    of("exact decision diagram by the library dd, the common cause an event beside", LIBRARY,
       "line under two relays, β 0.2 at each end, not cleared in 150 ms", beta_line_exact, 1e-8, beta_line,
       whole=True),
)  # fmt: skip
