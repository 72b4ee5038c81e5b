"""Static logic and importance: fault trees of textbooks, handbooks and papers, and exact decision diagrams."""

from __future__ import annotations

from collections.abc import Mapping
from fractions import Fraction
from functools import cache, partial

from schemesim.scheme.model import Ask as Asked
from schemesim.scheme.model import Component, ComponentKind, FailureMode, Gate
from schemesim.study.importance import Importance, importance
from schemesim.study.tree import explore
from schemesim.study.weak_points import minimal_sets
from tests.outside import whole_schemes
from tests.outside.fault_trees import (
    FTO,
    Tree,
    case_of,
    fault_tree,
    opened,
    p_diagram,
    p_top,
    probability,
    relays,
    stuck,
)
from tests.outside.records import DERIVED, LIBRARY, MEMORY, Record, Value, half

SUBJECT = "static logic and importance"

STAND_BY = {"mains": Fraction("0.03"), "generator": Fraction("0.02"), "relay": Fraction("0.05")}
VALVES = {"P1": Fraction("0.6"), "P2": Fraction("0.7"), "V1": Fraction("0.4"), "V2": Fraction("0.5")}
TRAINS: Tree = ("and", ("or", "V1", "P1"), ("or", "V2", "P2"))
TANK = {
    n: Fraction(p) for n, p in {"T": "5E-6", "K2": "3E-5", "S": "1E-4", "K1": "3E-5", "R": "1E-4", "S1": "3E-5"}.items()
}
TANK_TOP: Tree = ("or", "T", "K2", ("and", "S", ("or", "K1", "R", "S1")))

# A bridge of five items between two nodes: paths 1-2, 3-4, 1-5-4, 3-5-2. It fails with its cut sets.
BRIDGE: Tree = ("or", ("and", "1", "3"), ("and", "2", "4"), ("and", "1", "5", "4"), ("and", "3", "5", "2"))

CHAIN = {"breaker": "300E-6", "relay": "100E-6", "dc": "50E-6", "ct a": "10E-6", "ct b": "10E-6", "ct c": "10E-6"}


@cache
def valves() -> Mapping[str, Importance]:
    """Importance of each basic event of the two trains."""
    return {i.failure.split(":")[0]: i for i in importance(fault_tree(VALVES, TRAINS), opened, epsilon=0)}


def of_valves(measure: str) -> Value:
    """One measure of each basic event; the brackets have no width."""
    return {name: Fraction(getattr(i, measure).low) for name, i in valves().items()}


def cut_sets() -> frozenset[str]:
    """The minimal sets of failures of the pressure tank."""
    sets = minimal_sets(explore(fault_tree(TANK, TANK_TOP), epsilon=0), opened)
    return frozenset(" & ".join(sorted(f.split(":")[0] for f in s.failures)) for s in sets)


def feeder(*duplicated: str) -> Fraction:
    """A radial feeder's chain in series; a duplicate of the relay alone shares the CTs and the DC supply."""
    components: list[Component] = []
    paths = []
    for chain in ("1", "2") if duplicated else ("1",):
        parts = [n if n not in duplicated else f"{n} {chain}" for n in CHAIN if n != "breaker"]
        paths.append(Gate(name=f"trip {chain}", inputs=("always",), unless=tuple(Asked(p, FTO) for p in parts)))
        components.extend(relays({p: Fraction(CHAIN[p.removesuffix(f" {chain}")]) for p in parts}))
    breaker = ((FailureMode.DOES_NOT_OPEN, Fraction(CHAIN["breaker"])),)
    components.append(Component("breaker", ComponentKind.BREAKER, breaker))
    coil = Gate(name="coil", inputs=tuple(p.name for p in paths))
    unique = tuple({c.name: c for c in components}.values())
    return probability(case_of(unique, [*paths, coil], breaker="breaker"), stuck)


def vote_by_scipy() -> float:
    """Two of three fail, or all three."""
    from scipy.stats import binom

    return float(binom.sf(1, 3, 0.1))


# Twelve items, some of them in several places, as in a substation with two supplies, three chains and a vote.
NET_ODDS = {f"e{n}": Fraction(n + 1, 40) for n in range(12)}
NET: Tree = (
    "or",
    ("atleast", 2, ("or", "e0", "e1"), ("or", "e2", "e3", "e0"), ("and", "e4", ("or", "e5", "e1"))),
    ("and", ("or", "e6", "e7"), ("or", "e8", "e0"), ("atleast", 3, "e9", "e10", "e11", "e5")),
)

DIAGRAM = "exact decision diagram by the library dd (BDD), the logic written out beside it"
EXAMPLE = "textbook example of two trains, each a pump or a valve (from memory)"
SERIES = "fault trees of transmission protection in papers of the 1990s: component values from memory, sum derived"

of = partial(Record, SUBJECT)

RECORDS = (
    of("textbook example of a stand-by generator", MEMORY,
       "mains fail and generator or changeover relay", Fraction("0.00207"), 0,
       lambda: p_top(STAND_BY, ("and", "mains", ("or", "generator", "relay")))),
    of(EXAMPLE, MEMORY, "top event", Fraction("0.646"), 0, lambda: p_top(VALVES, TRAINS)),
    of(EXAMPLE, MEMORY, "Birnbaum importance of each",
       {"P1": Fraction("0.51"), "P2": Fraction("0.38"), "V1": Fraction("0.34"), "V2": Fraction("0.228")}, 0,
       lambda: of_valves("birnbaum")),
    of(EXAMPLE, MEMORY, "criticality ratio of each",
       {"P1": 0.4737, "P2": 0.4118, "V1": 0.2105, "V2": 0.1765}, half("0.4737"),
       lambda: of_valves("criticality_ratio")),
    of(EXAMPLE, MEMORY, "P(failure | top) of each",
       {"P1": 0.7895, "P2": 0.8235, "V1": 0.5263, "V2": 0.5882}, half("0.7895"),
       lambda: of_valves("p_failure_given_event")),
    of("NUREG-0492, pressure tank", MEMORY, "top event", 3.5016e-5, half("3.5016E-5"),
       lambda: p_top(TANK, TANK_TOP), whole=True),
    of("NUREG-0492, pressure tank", MEMORY, "minimal cut sets",
       frozenset({"T", "K2", "K1 & S", "R & S", "S & S1"}), 0, cut_sets, whole=True),
    of("Billinton and Allan, Reliability Evaluation of Engineering Systems, bridge of five",
       MEMORY, "works, each item 0.99", 0.99979805, half("0.99979805"),
       lambda: 1 - p_top(dict.fromkeys("12345", Fraction(1, 100)), BRIDGE)),
    of("triple modular redundancy (Lyons and Vanderkulk 1962)", MEMORY,
       "3R² − 2R³ at R = 0.9", Fraction("0.972"), 0,
       lambda: 1 - p_top(dict.fromkeys("abc", Fraction(1, 10)), ("atleast", 2, "a", "b", "c"))),
    of("scipy.stats.binom", LIBRARY, "two of three fail, Q = 0.1", vote_by_scipy, 1e-15,
       lambda: p_top(dict.fromkeys("abc", Fraction(1, 10)), ("atleast", 2, "a", "b", "c"))),
    of(SERIES, DERIVED, "radial feeder, one of each", 4.799362e-4, half("4.799362E-4"),
       lambda: feeder(), whole=True),
    of(SERIES, DERIVED, "radial feeder, relay twice", 3.799842e-4, half("3.799842E-4"),
       lambda: feeder("relay"), whole=True),
    of(SERIES, DERIVED, "radial feeder, relay, CTs and DC twice", 3.000324e-4,
       half("3.000324E-4"), lambda: feeder("relay", "dc", "ct a", "ct b", "ct c"), whole=True),
    of(DIAGRAM, LIBRARY, "twelve items, two votes, shared supplies",
       lambda: p_diagram(NET_ODDS, NET), 0, lambda: p_top(NET_ODDS, NET), whole=True),
    of(DIAGRAM, LIBRARY, "line under two whole chains, not cleared in 150 ms",
       lambda: whole_schemes.two_chains().exact(), 1e-8, lambda: whole_schemes.two_chains().ours(), whole=True),
    of(DIAGRAM, LIBRARY, "line under two relays on one chain, not cleared in 150 ms",
       lambda: whole_schemes.two_relays().exact(), 1e-8, lambda: whole_schemes.two_relays().ours(), whole=True),
    of(DIAGRAM, LIBRARY, "feeder with breaker failure, not cleared in 300 ms",
       lambda: whole_schemes.with_breaker_failure().exact(), 1e-8,
       lambda: whole_schemes.with_breaker_failure().ours(), whole=True),
)  # fmt: skip
