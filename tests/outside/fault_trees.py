"""Fault trees and whole schemes put to the event tree, and exact binary decision diagrams of the same logic.

A fault tree becomes gates between a condition that always holds and the coil of one breaker:
basic events are failures without which a gate has no output (``given``), and the top event is "the breaker
opened". Success logic uses ``unless`` instead, and the event "the breaker did not open".
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from fractions import Fraction
from typing import Any

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
from schemesim.study.tree import explore

FTO = FailureMode.FAILURE_TO_OPERATE
PLANT = Plant(
    sections=(Section(name="B", kind=SectionKind.BUS), Section(name="F", kind=SectionKind.FEEDER)),
    devices=(Device(name="CB", kind=DeviceKind.BREAKER, a="B", b="F"),),
    sources=(Source(name="S", section="B"),),
)

Tree = str | tuple[object, ...]
"""A basic event by name, or ("and" | "or", parts) or ("atleast", k, parts)."""


def opened(outcome: Outcome) -> bool:
    """The breaker opened."""
    return bool(outcome.openings)


def stuck(outcome: Outcome) -> bool:
    """It did not."""
    return not outcome.openings


def relays(odds: Mapping[str, Fraction]) -> tuple[Component, ...]:
    """Components that may fail to operate."""
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
    bracket = explore(case, epsilon=0).bracket(event)
    if bracket.width:
        raise ArithmeticError(f"{bracket} is not exact")
    return Fraction(bracket.low)


def p_top(odds: Mapping[str, Fraction], top: Tree, *causes: CommonCause) -> Fraction:
    """The exact probability of the top event of a fault tree, from the event tree."""
    return probability(fault_tree(odds, top, *causes))


# --- binary decision diagrams -------------------------------------------------------------


def formula(top: Tree) -> str:
    """A fault tree as a formula; ``atleast`` written out is a disjunction of conjunctions."""
    from itertools import combinations

    if isinstance(top, str):
        return variable(top)
    word, *rest = top
    if word == "atleast":
        k: Any = rest[0]
        ways = (" & ".join(map(formula, c)) for c in combinations(rest[1:], k))
        return "(" + " | ".join(f"({way})" for way in ways) + ")"
    sign = " & " if word == "and" else " | "
    return "(" + sign.join(map(formula, rest)) + ")"  # type: ignore[arg-type]  # the parts of a tree are trees


def variable(name: str) -> str:
    """A name that the diagram's grammar accepts."""
    return "v_" + "".join(c if c.isalnum() else "_" for c in name)


def events(top: Tree) -> Iterable[str]:
    """Basic events in the order a walk in depth meets them."""
    if isinstance(top, str):
        yield top
        return
    for part in top[1:]:
        if not isinstance(part, int):
            yield from events(part)  # type: ignore[arg-type]  # the parts of a tree are trees


def p_diagram(odds: Mapping[str, Fraction], top: Tree) -> Fraction:
    """The exact probability of a fault tree from a reduced ordered binary decision diagram (the library ``dd``)."""
    from dd.autoref import BDD

    names = list(dict.fromkeys(events(top)))
    diagram = BDD()
    diagram.declare(*map(variable, names))
    diagram.configure(reordering=False)
    root = diagram.add_expr(formula(top))
    of = {variable(n): Fraction(odds[n]) for n in names}
    known: dict[int, Fraction] = {}

    def walk(node: Any) -> Fraction:  # of the diagram below, complemented or not
        if node.var is None:
            return Fraction(int(node == diagram.true))
        key = int(node)
        if key not in known:
            level, low, high = diagram.succ(node)
            p = of[diagram.var_at_level(level)]
            found = (1 - p) * walk(low) + p * walk(high)
            known[key] = 1 - found if node.negated else found
        return known[key]

    return walk(root)
