"""Static logic whose probability is known from outside, put to the event tree through one breaker.

A published fault tree becomes gates between a condition that always holds and the coil of
one breaker: basic events are failures without which a gate has no output (``given``),
and the top event is "the breaker opened". Success logic uses ``unless`` instead, and the
event "the breaker did not open".
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from fractions import Fraction
from math import prod

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from schemesim.engine.case import Case, bind
from schemesim.engine.outcome import Outcome
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.plant.model import Device, DeviceKind, Location, Plant, Section, SectionKind, Source
from schemesim.scheme.conditions import Always
from schemesim.scheme.delays import Fixed
from schemesim.scheme.model import (
    Ask,
    Block,
    Breaker,
    CommonCause,
    Component,
    ComponentKind,
    FailureMode,
    Gate,
    Scheme,
    Sense,
)
from schemesim.study.brackets import Bracket, exactly
from schemesim.study.importance import importance, p_component_failed
from schemesim.study.tree import explore
from schemesim.study.weak_points import minimal_sets

FTO = FailureMode.FAILURE_TO_OPERATE
PLANT = Plant(
    sections=(Section(name="B", kind=SectionKind.BUS), Section(name="F", kind=SectionKind.FEEDER)),
    devices=(Device(name="CB", kind=DeviceKind.BREAKER, a="B", b="F"),),
    sources=(Source(name="S", section="B"),),
)

Tree = str | tuple[object, ...]
"""A basic event by name, or ("and" | "or", parts) or ("atleast", k, parts)."""


def opened(outcome: Outcome) -> bool:
    return bool(outcome.openings)


def stuck(outcome: Outcome) -> bool:
    return not outcome.openings


def relays(odds: Mapping[str, Fraction]) -> tuple[Component, ...]:
    return tuple(Component(name, ComponentKind.RELAY, ((FTO, p),)) for name, p in odds.items())


def case_of(components: tuple[Component, ...], blocks: list[Block], *causes: CommonCause, breaker: str = "") -> Case:
    """A fault on F; the last block energises the coil of the one breaker."""
    always = Sense(name="always", condition=Always(), operate=Fixed(0), reset=Fixed(0))
    cb = Breaker(
        name="CB", coils=(blocks[-1].name,), interrupting=Fixed(50_000), auxiliary=Fixed(0), component=breaker
    )
    scheme = Scheme(components, (always, *blocks, cb), tuple(causes))
    return bind(compile_scheme(PLANT, scheme), Location("F"), LogicalSensing())


def fault_tree(odds: Mapping[str, Fraction], top: Tree, *causes: CommonCause) -> Case:
    """The breaker opens just where the top event happens."""
    blocks: list[Block] = []

    def build(part: Tree) -> str:
        name = f"g{len(blocks):03}"
        if isinstance(part, str):
            blocks.append(Gate(name=name, inputs=("always",), given=(Ask(part, FTO),)))
            return name
        word, *rest = part
        k, parts = (rest[0], rest[1:]) if word == "atleast" else (len(rest) if word == "and" else 1, rest)
        inputs = tuple(build(p) for p in parts)  # type: ignore[arg-type]  # the parts of a tree are trees
        name = f"g{len(blocks):03}"
        blocks.append(Gate(name=name, inputs=inputs, k=k))  # type: ignore[arg-type]  # k of "atleast" is a number
        return name

    build(top)
    return case_of(relays(odds), blocks, *causes)


def probability(case: Case, event: Callable[[Outcome], bool] = opened) -> Fraction:
    """The exact probability, from a tree explored to its end in fractions."""
    tree = explore(case, epsilon=0)
    bracket = tree.bracket(event)
    assert bracket.width == 0
    return Fraction(bracket.low)


def test_stand_by_generator() -> None:
    """Mains fail AND (generator OR changeover relay): 0.03·(1 − 0.98·0.95) = 0.00207 exactly."""
    odds = {"mains": Fraction("0.03"), "generator": Fraction("0.02"), "relay": Fraction("0.05")}
    case = fault_tree(odds, ("and", "mains", ("or", "generator", "relay")))
    assert probability(case) == Fraction("0.00207")


VALVES = {"P1": Fraction("0.6"), "P2": Fraction("0.7"), "V1": Fraction("0.4"), "V2": Fraction("0.5")}


def valves() -> Case:
    return fault_tree(VALVES, ("and", ("or", "V1", "P1"), ("or", "V2", "P2")))


def test_two_trains_of_valve_and_pump() -> None:
    """(V1 or P1) and (V2 or P2) → 0.646."""
    assert probability(valves()) == Fraction("0.646")


def test_importance_of_valves_and_pumps() -> None:
    """Birnbaum exactly; criticality ratio and P(event | top) to the four digits given."""
    found = {i.failure.split(":")[0]: i for i in importance(valves(), opened, epsilon=0)}
    birnbaum = {"P1": "0.51", "P2": "0.38", "V1": "0.34", "V2": "0.228"}
    assert {name: i.birnbaum for name, i in found.items()} == {n: exactly(Fraction(b)) for n, b in birnbaum.items()}
    assert list(found) == ["P1", "P2", "V1", "V2"]  # ranked

    def four(bracket: Bracket) -> float:
        assert bracket.width == 0
        return round(float(bracket.low), 4)

    ratio = {"P1": 0.4737, "P2": 0.4118, "V1": 0.2105, "V2": 0.1765}
    given_top = {"P1": 0.7895, "P2": 0.8235, "V1": 0.5263, "V2": 0.5882}
    assert {n: four(i.criticality_ratio) for n, i in found.items()} == ratio
    assert {n: four(i.p_failure_given_event) for n, i in found.items()} == given_top
    tree = explore(valves(), epsilon=0)
    assert {n: four(p_component_failed(tree, n, opened)) for n in VALVES} == given_top
    for name, item in found.items():
        top, one = Fraction("0.646"), item.p_event_given_failure.low
        assert item.p_event == exactly(top)
        assert item.risk_achievement_worth == exactly(one / top)
        assert item.risk_reduction_worth == exactly(top / item.p_event_given_none.low), name


def test_importance_of_an_unfinished_tree_is_a_bracket_that_holds() -> None:
    truth = {"P1": Fraction("0.51"), "P2": Fraction("0.38"), "V1": Fraction("0.34"), "V2": Fraction("0.228")}
    exact = {i.failure: i for i in importance(valves(), opened, epsilon=0)}
    for budget in (1, 2, 3, 4):
        items = importance(valves(), opened, [f"{n}: failure_to_operate" for n in truth], epsilon=0, max_runs=budget)
        for item in items:
            assert item.birnbaum.contains(truth[item.failure.split(":")[0]])
            assert item.criticality_ratio.contains(exact[item.failure].criticality_ratio.low)
            assert item.p_failure_given_event.contains(exact[item.failure].p_failure_given_event.low)
            assert item.risk_achievement_worth.contains(exact[item.failure].risk_achievement_worth.low)
        tree = explore(valves(), epsilon=0, max_runs=budget)
        for name in truth:
            known = exact[f"{name}: failure_to_operate"].p_failure_given_event.low
            assert p_component_failed(tree, name, opened).contains(known)


TANK = {"T": "5E-6", "K2": "3E-5", "S": "1E-4", "K1": "3E-5", "R": "1E-4", "S1": "3E-5"}


def test_pressure_tank() -> None:
    """NUREG-0492, pressure tank (values from memory): cut sets {T},{K2},{S,K1},{S,R},{S,S1}; 3.5016E-5."""
    odds = {name: Fraction(p) for name, p in TANK.items()}
    case = fault_tree(odds, ("or", "T", "K2", ("and", "S", ("or", "K1", "R", "S1"))))
    assert f"{float(probability(case)):.4e}" == "3.5016e-05"
    sets = minimal_sets(explore(case, epsilon=0), opened)
    names = [frozenset(f.split(":")[0] for f in s.failures) for s in sets]
    assert set(names) == {frozenset(c) for c in (("T",), ("K2",), ("S", "K1"), ("S", "R"), ("S", "S1"))}
    assert names[:3] == [{"K2"}, {"T"}, {"S", "R"}]  # 3E-5, 5E-6, 1E-8
    assert sets[2].probability == Fraction("1E-8")


CHAIN = {"breaker": "300E-6", "relay": "100E-6", "dc": "50E-6", "ct a": "10E-6", "ct b": "10E-6", "ct c": "10E-6"}


@pytest.mark.parametrize(
    ("duplicated", "expected"),
    [((), "4.799362e-04"), (("relay",), "3.799842e-04"), (("relay", "dc", "ct a", "ct b", "ct c"), "3.000324e-04")],
)
def test_series_chain_of_a_radial_feeder(duplicated: tuple[str, ...], expected: str) -> None:
    """Breaker, relay, DC, three CTs in series; derived, the component values from memory of papers of the 1990s.

    A duplicate of the relay alone shares the CTs and the DC supply; a duplicate of all is a second chain.
    """
    components: list[Component] = []
    paths = []
    for chain in ("1", "2") if duplicated else ("1",):
        parts = [n if n not in duplicated else f"{n} {chain}" for n in CHAIN if n != "breaker"]
        paths.append(Gate(name=f"trip {chain}", inputs=("always",), unless=tuple(Ask(p, FTO) for p in parts)))
        odds = {p: Fraction(CHAIN[p.removesuffix(f" {chain}")]) for p in parts}
        components.extend(relays(odds))
    components.append(
        Component("breaker", ComponentKind.BREAKER, ((FailureMode.DOES_NOT_OPEN, Fraction(CHAIN["breaker"])),))
    )
    coil = Gate(name="coil", inputs=tuple(p.name for p in paths))
    unique = tuple({c.name: c for c in components}.values())
    case = case_of(unique, [*paths, coil], breaker="breaker")
    assert f"{float(probability(case, stuck)):.6e}" == expected


TRAINS = ("and", *(("or", f"pump {n}", f"valve {n}") for n in (1, 2, 3)))


def test_three_trains_beta_factor() -> None:
    """Pump OR valve in each of three trains, Q = 0.1, all fail; published model-exchange example: β = 0.2 → 0.04308."""
    q, beta = Fraction(1, 10), Fraction(1, 5)
    names = [f"{kind} {n}" for kind in ("pump", "valve") for n in (1, 2, 3)]
    causes = [
        CommonCause(kind, tuple(Ask(f"{kind} {n}", FTO) for n in (1, 2, 3)), beta * q) for kind in ("pump", "valve")
    ]
    found = probability(fault_tree(dict.fromkeys(names, (1 - beta) * q), TRAINS, *causes))
    assert round(float(found), 5) == 0.04308


def test_three_trains_alpha_factor() -> None:
    """The same with alpha factors (0.7, 0.2, 0.1), non-staggered: 0.05298.

    Q_k = k / C(2, k−1) · α_k / Σ jα_j · Q, each group of k a cause of its own.
    """
    q, alpha = Fraction(1, 10), {1: Fraction(7, 10), 2: Fraction(2, 10), 3: Fraction(1, 10)}
    alpha_t = sum(k * a for k, a in alpha.items())
    share = {k: Fraction(k, {1: 1, 2: 2, 3: 1}[k]) * alpha[k] / alpha_t * q for k in alpha}
    assert share[1] + 2 * share[2] + share[3] == q  # each component fails with Q in all
    causes: list[CommonCause] = []
    names: list[str] = []
    for kind in ("pump", "valve"):
        names.extend(f"{kind} {n}" for n in (1, 2, 3))
        for group in ((1, 2), (1, 3), (2, 3), (1, 2, 3)):
            members = tuple(Ask(f"{kind} {n}", FTO) for n in group)
            causes.append(CommonCause(f"{kind} {group}", members, share[len(group)]))
    found = probability(fault_tree(dict.fromkeys(names, share[1]), TRAINS, *causes))
    assert round(float(found), 5) == 0.05298


@settings(max_examples=30, deadline=None)
@given(st.lists(st.fractions(0, 1, max_denominator=50), min_size=2, max_size=5), st.data())
def test_k_of_n(odds: list[Fraction], data: st.DataObject) -> None:
    """At least k of n events against the sum over all subsets (definition)."""
    k = data.draw(st.integers(1, len(odds)))
    names = {f"e{n}": p for n, p in enumerate(odds)}
    truth = sum(
        (
            prod((p if mask >> n & 1 else 1 - p for n, p in enumerate(odds)), start=Fraction(1))
            for mask in range(2 ** len(odds))
            if mask.bit_count() >= k
        ),
        Fraction(0),
    )
    assert probability(fault_tree(names, ("atleast", k, *names))) == truth
