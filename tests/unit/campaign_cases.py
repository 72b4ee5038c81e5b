"""What the tests of campaigns share: two small variants, and a count of trials made in the plainest way."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace
from typing import Any

from schemesim.engine.answers import DrawnAnswers
from schemesim.engine.case import bind
from schemesim.engine.electrical import ElectricalSensing
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Outcome
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import LogicalSensing, Sensing
from schemesim.engine.times import DelayTimes
from schemesim.plant.model import Location
from schemesim.scheme.delays import Delay
from schemesim.scheme.distributions import Uniform
from schemesim.scheme.dress import dress
from schemesim.scheme.policy import duplicate_chain
from schemesim.scheme.settings_rules import settings_for
from schemesim.study.campaign import Campaign
from schemesim.study.campaign_counts import PlaceCounts
from schemesim.study.measures import cleared_by
from tests.rules.small import chain
from tests.unit.electrical_plants import with_impedances
from tests.unit.small_schemes import as_float, feeder_scheme, program_of

SEED = 20_241
F1, F2 = Location("F1"), Location("F2")
MAIN = frozenset({"M1.trip", "M2.trip"})
OPENING = Uniform(40_000, 60_000)


def program(opening: Delay | None = None, **changes: Any) -> Program:
    return program_of(replace(feeder_scheme(as_float, opening), **changes))


def variants(opening: Delay | None = None) -> dict[str, Program]:
    """The feeder as it is, and without the common cause."""
    return {"as it is": program(opening), "apart": program(opening, common_causes=())}


def small(opening: Delay | None = None, trials: int = 120, **more: Any) -> Campaign:
    return Campaign(variants(opening), (F1, F2), trials=trials, seed=SEED, **more)


def electrical(trials: int = 20) -> Campaign:
    """Under computed currents and under logical sensing, each a variant."""
    plant = with_impedances(chain())
    scheme = dress(plant, duplicate_chain())
    of = compile_scheme(plant, scheme)
    currents = ElectricalSensing(settings_for(plant, scheme), fault="lg")
    both: dict[str, Sensing] = {"currents": currents, "graph": LogicalSensing()}
    return Campaign(dict.fromkeys(both, of), (Location("L1", 0.05),), trials=trials, seed=SEED, sensing=both)


def outcomes(of: Program, at: Location, trials: int, seed: int = SEED) -> list[Outcome]:
    """Each trial by itself in the event engine."""
    case = bind(of, at, LogicalSensing())
    return [run_event(case, DrawnAnswers(of, seed, t), times=DelayTimes(seed, t)).outcome for t in range(trials)]


def roles(of: Program, at: Location, found: list[Outcome]) -> Counter[str]:
    case = bind(of, at, LogicalSensing())
    return Counter("nothing" if (r := cleared_by(case, o)) is None else r.name for o in found)


def as_counts(counts: PlaceCounts) -> Counter[tuple[str, int | None, frozenset[str]]]:
    """Trials by status, clearing time and breakers."""
    told: Counter[tuple[str, int | None, frozenset[str]]] = Counter()
    for t in counts.tallies:
        for us, n in t.times:
            told[str(t.ending.status), us, t.ending.breakers] += n
    return told
