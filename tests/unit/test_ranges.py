"""Ranges of what is given: the values at the edge that are taken, and those just beyond it that are refused."""

from __future__ import annotations

import math
from collections.abc import Callable
from fractions import Fraction
from typing import Any

import pytest

from schemesim.engine.outcome import Status
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.scheme.model import ComponentKind
from schemesim.study.campaign import Campaign
from schemesim.study.intervals import stratified, wilson
from schemesim.study.locations import study_locations
from schemesim.study.misoperations import study_misoperations
from schemesim.study.money import CostRule, Costs, Money, Values
from schemesim.study.montecarlo import simulate
from schemesim.study.precision import Precision
from schemesim.study.risk import Explorer
from schemesim.study.stratified import simulate_stratified
from schemesim.study.timer_study import Weights, study_timers
from schemesim.study.tree import Narrow, explore
from tests.unit.small_schemes import case_of, feeder_scheme, program_of

F1 = Location("F1")
NAN, INF = math.nan, math.inf
ABOVE, BELOW = math.nextafter(1, 2), math.nextafter(0, -1)
RATE = [0.0, 5e-324, 1e300], [-5e-324, -1, INF, NAN]  # finite, zero or more
SHARE = [0, 0.0, 0.5, 1, 1.0], [BELOW, ABOVE, -1, 2, NAN]  # 0 to 1
OPEN = [1e-9, 0.5, 1 - 1e-9], [0, 1, 0.0, 1.0, -0.5, 1.5, NAN]  # between 0 and 1
WHOLE_1 = [1, 2], [0, -1, True, 1.0, "1", None]


def cleared(outcome: Any) -> bool:
    return outcome.status is Status.CLEARED


def of_feeders(**options: Any) -> object:
    program = program_of(feeder_scheme())
    return study_locations(program, LogicalSensing(), [F1], **{"limit_us": 200_000, "epsilon": 0.5, **options})


def misoperations(rate: float) -> object:
    return study_misoperations(program_of(feeder_scheme()), LogicalSensing(), [F1], frequencies={F1: rate}, epsilon=0.5)


def timers(**options: Any) -> object:
    program = program_of(feeder_scheme())
    return study_timers(program, LogicalSensing(), [F1], **{"limit_us": 300_000, "settings_us": [150_000], **options})


def campaign(event: Location) -> object:
    return Campaign({"a": program_of(feeder_scheme())}, (event,), trials=1)


def tree(**options: Any) -> object:
    return explore(case_of(feeder_scheme(), "F1"), **{"epsilon": 0.5, **options})


TAKEN: dict[str, tuple[Callable[[Any], object], tuple[list[Any], list[Any]]]] = {
    "frequency of locations": (lambda x: of_feeders(frequencies={F1: x}), RATE),
    "frequency of misoperations": (misoperations, RATE),
    "frequency of a risk": (lambda x: Explorer({F1: x, Location("F2"): 1.0}, lambda _: 1), RATE),
    "frequency of timers": (lambda x: timers(frequencies={F1: x}), RATE),
    "epsilon of a risk": (lambda x: Explorer({F1: 1.0}, lambda _: 1, epsilon=x), OPEN),
    "epsilon of a tree": (lambda x: tree(epsilon=x), ([0.3, 1, 1.0, Fraction(1, 2)], [BELOW, ABOVE, True, "0.1", NAN])),
    "max_runs of a tree": (lambda x: tree(max_runs=x), WHOLE_1),
    "complete of a tree": (lambda x: tree(complete=x), ([0, 1], [-1, True, 1.0, "1", None])),
    "width of a bracket": (lambda x: Narrow(bool, x), ([5e-324, 1.0], [0, -1, INF, NAN, None])),
    "half width": (lambda x: Precision(cleared, x), ([5e-324, 1.0], [0, -1, INF, NAN, None])),
    "confidence of a precision": (lambda x: Precision(cleared, 0.1, confidence=x), OPEN),
    "max_trials": (lambda x: Precision(cleared, 0.1, max_trials=x), WHOLE_1),
    "confidence of an interval": (lambda x: wilson(1, 2, x), (OPEN[0], [*OPEN[1], True, "0.9"])),
    "confidence of a mean": (lambda x: simulate(case_of(feeder_scheme()), 4, seed=1).mean(lambda _: 1.0, x), OPEN),
    "stratified trials": (lambda x: simulate_stratified(case_of(feeder_scheme()), x, seed=1), ([1], WHOLE_1[1])),
    "chunk": (lambda x: simulate_stratified(case_of(feeder_scheme()), 4, seed=1, chunk=x), ([1, 4], WHOLE_1[1])),
    "weights of strata": (
        lambda x: stratified([x, 0.5], [1, 1], [2, 2]),
        ([0.5, 0.5 + 9e-7, 0.5 - 9e-7], [0.5 + 2e-6, 0.5 - 2e-6, -0.5, 1.5, 0.0, 1.0]),
    ),
    "weight of a needless trip": (lambda x: Weights(needless=x), RATE),
    "weight of a late one": (lambda x: Weights(late=x), RATE),
    "needless_target": (lambda x: Weights(needless_target=x), SHARE),
    "late_target": (lambda x: Weights(late_target=x), SHARE),
    "step of timers": (lambda x: timers(step_us=x), ([1, 1000], [0, -1, True, 1.0])),
    "a setting of timers": (lambda x: timers(settings_us=[x]), ([0, 1], [-1, True, 1.0])),
    "discount rate": (lambda x: Costs(discount_rate=x), (SHARE[0], [*SHARE[1], INF, True, "0"])),
    "life": (lambda x: Costs(life_yr=x), ([1, 1000], [0.99, 1000.01, 0, NAN])),
    "price": (lambda x: Costs(rules=(CostRule(kind=ComponentKind.RELAY, bought=x),)), ([0, 1e9], [-1, INF, NAN, True])),
    "chance of instability": (lambda x: Values(p_unstable_if_late=x), (SHARE[0], [*SHARE[1], True])),
    "cap of damage": (lambda x: Values(damage_cap=x), ([0, 1e9], [BELOW, INF, NAN, True])),
    "end of a range": (lambda x: Money(unit="EUR", ranges=(("damage_cap", 0, x),)), ([0, 1e9], [-1, INF, NAN])),
    "end of a range of shares": (lambda x: Money(unit="EUR", ranges=(("discount_rate", 0, x),)), ([0, 1], [ABOVE, 2])),
    "error factor": (lambda x: Money(unit="EUR", error_factors=(("relay", x),)), ([1, 1000], [0.99, 1000.1, NAN])),
    "position": (lambda x: campaign(Location("F1", x)), ([0.0, 1.0], [BELOW, ABOVE, NAN])),
}


@pytest.mark.parametrize("name", TAKEN)
def test_values_at_the_edge_are_taken(name: str) -> None:
    make, (good, _) = TAKEN[name]
    for value in good:
        assert make(value) is not None, value


@pytest.mark.parametrize("name", TAKEN)
def test_values_beyond_it_are_refused(name: str) -> None:
    make, (_, bad) = TAKEN[name]
    for value in bad:
        with pytest.raises(InputError, match=r"."):
            make(value)
