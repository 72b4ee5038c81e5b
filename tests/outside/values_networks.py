"""Networks and rates: the Reliability Test System, what carries current, surveys of failures, reliability standards."""

from __future__ import annotations

import math
from collections.abc import Mapping
from functools import cache, partial
from pathlib import Path
from typing import Any

import networkx as nx

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import bind
from schemesim.engine.event import run_event
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.plant.current import Neighbourhood
from schemesim.plant.layouts import Bay, generator, line, ring, single_bus
from schemesim.plant.model import DeviceKind, Plant, PlantBuilder, SectionKind
from schemesim.plant.zones import duty, isolation_zones
from schemesim.scenario import Scenario, load_scenario
from schemesim.scheme import starting_values
from schemesim.scheme.dress import dress
from schemesim.scheme.model import MODES, Component, ComponentKind, FailureMode, Scheme
from schemesim.scheme.policy import LineScheme, ProtectionSet, duplicate_chain, single_set
from schemesim.scheme.unavailability import unavailability
from schemesim.study import footnote
from schemesim.study.misoperations import misoperation
from tests.outside.records import LIBRARY, MEMORY, PUBLISHED, Record
from tests.outside.rts96 import BRANCHES, LOAD_MW, TRANSFORMERS, UNITS
from tests.rules.small import at, chain

SUBJECT = "networks and rates"
FILE = Path(__file__).resolve().parents[2] / "scenarios" / "rts96_area_a.yaml"


@cache
def rts() -> Scenario:
    """The shipped scenario."""
    return load_scenario(FILE)


def branch_rates() -> dict[str, float]:
    """Faults a year of each branch in the scenario."""
    found = dict.fromkeys(BRANCHES, 0.0)
    for place, rate in rts().frequencies.items():
        if place.section in found:
            found[place.section] += rate
    return found


def counts() -> dict[str, float]:
    """What the scenario holds."""
    plant = rts().plant
    kinds = [s.kind for s in plant.sections]
    return {
        "lines": kinds.count(SectionKind.LINE),
        "transformers": kinds.count(SectionKind.TRANSFORMER),
        "buses with load": len({s.station for s in plant.sections if s.load_mw}),
        "load in MW": sum(s.load_mw for s in plant.sections),
        "units": sum(s.section.startswith("Bus") for s in plant.sources),
        "miles of line": sum(s.length for s in plant.sections if s.kind is SectionKind.LINE),
    }


IN_PRINT = {
    "lines": 33.0,
    "transformers": 5.0,
    "buses with load": float(len(LOAD_MW)),
    "load in MW": 2850.0,
    "units": float(sum(UNITS.values())),
    "miles of line": float(sum(v[2] for name, v in BRANCHES.items() if name not in TRANSFORMERS)),
}


def joined(plant: Plant) -> nx.MultiGraph[str]:
    """The plant as a graph of its own making: sections, with devices between, and one node behind the sources."""
    graph: nx.MultiGraph[str] = nx.MultiGraph()
    for d in plant.devices:
        if d.closed:
            graph.add_edge(d.a, d.name)
            graph.add_edge(d.name, d.b)
    for s in plant.sources:
        graph.add_edge("all sources", s.section, key=s.name)
    return graph


def needed_by_networkx() -> frozenset[str]:
    """Breakers that have to open for a fault on each branch: those at the edge of what hangs together without
    breakers, with a source in reach on their other side."""
    plant = rts().plant
    whole = joined(plant)
    breakers = {d.name for d in plant.devices if d.kind is DeviceKind.BREAKER}
    without = nx.Graph(whole.subgraph(set(whole) - breakers - {"all sources"}))
    found = set()
    for branch in BRANCHES:
        zone = nx.node_connected_component(without, branch)
        rest = whole.subgraph(set(whole) - zone)
        for b in breakers & set(rest):
            if any(n in zone for n in whole[b]) and nx.has_path(rest, b, "all sources"):
                found.add(f"{branch}: {b}")
    return frozenset(found)


def needed() -> frozenset[str]:
    """The same of ours."""
    plant = rts().plant
    zones = isolation_zones(plant)
    return frozenset(f"{branch}: {b}" for branch in BRANCHES for b in duty(plant, zones, branch).needed)


def meshed() -> Plant:
    """Three stations, a ring and two of one bus; two lines in parallel and one to each of the others; two units."""
    b = PlantBuilder()
    for name in ("P1", "P2", "Q", "R"):
        line(b, name, 50.0)
    generator(b, "G1", station="Ash")
    generator(b, "G2", station="Box")
    ring(b, "Ash", [Bay("P1", "P1"), Bay("Q", "Q"), Bay("P2", "P2"), Bay("G1", "G1")])
    single_bus(b, "Box", [Bay("P1", "P1", at=1.0), Bay("P2", "P2", at=1.0), Bay("R", "R"), Bay("G2", "G2")])
    single_bus(b, "Cob", [Bay("Q", "Q", at=1.0), Bay("R", "R", at=1.0)])
    return b.build()


PLACES = ("P1", "Q", "Box.B1", "Cob.B1", "G1")


def carrying_by_networkx() -> frozenset[str]:
    """Breakers on any simple path from the sources to a fault, all paths written out."""
    graph = nx.Graph(joined(meshed()))
    breakers = set(meshed().breakers)
    return frozenset(
        f"{place}: {b}"
        for place in PLACES
        for b in set().union(*nx.all_simple_paths(graph, "all sources", place)) & breakers
    )


def carrying() -> frozenset[str]:
    """The same of ours."""
    plant = meshed()
    return frozenset(
        f"{place}: {b}"
        for place in PLACES
        for b in Neighbourhood(plant, place, plant.breakers).supply(frozenset()).carrying
    )


def decades(kind: ComponentKind, mode: FailureMode, *, phases: int = 1) -> float:
    """Order of magnitude of a starting value's mean unavailability, what fails on demand included."""
    row = starting_values.load_starting_values().of(kind, mode)
    if row is None:
        raise LookupError(f"{kind} {mode}")
    return math.log10(unavailability(row.rule.data).mean / phases)


def breaker_rate() -> float:
    """Failures to open a breaker-year of the starting table."""
    row = starting_values.load_starting_values().of(ComponentKind.BREAKER, FailureMode.DOES_NOT_OPEN)
    return math.nan if row is None else row.rule.data.rate_per_yr


def relay_coverage() -> float:
    """Share of a relay's failures that self-monitoring finds."""
    row = starting_values.load_starting_values().of(ComponentKind.RELAY, FailureMode.FAILURE_TO_OPERATE)
    return math.nan if row is None else row.rule.data.coverage


def groups() -> frozenset[str]:
    """Kinds by the letter of the footnote."""
    found = set()
    for kind in ComponentKind:
        scheme = Scheme((Component("X", kind),), ())
        group = footnote.group_of(scheme, "X", MODES[kind][0]).group
        found.add(f"{kind}: {'' if group is footnote.Group.APART else str(group)[0]}")
    return frozenset(found)


def exempt() -> frozenset[str]:
    """Kinds that monitoring takes out of the footnote."""
    every = [footnote.Monitored("X")]
    return frozenset(
        str(kind)
        for kind in ComponentKind
        if footnote.group_of(Scheme((Component("X", kind),), ()), "X", MODES[kind][0], every).exempt
    )


def category(policy: Any, place: str, *failed: str) -> str:
    """The categories a run falls into."""
    plant = chain()
    case = bind(compile_scheme(plant, dress(plant, policy)), at(place), LogicalSensing())
    nominal = run_event(case, FixedAnswers(case.program, ())).outcome
    outcome = run_event(case, FixedAnswers(case.program, failed)).outcome
    return "; ".join(sorted(misoperation(outcome, case, failed, nominal=nominal))) or "none"


RTS = "IEEE Reliability Test System 1996, area A (IEEE Trans. Power Systems 14(3), 1999)"
CIGRE = "CIGRE surveys of circuit-breakers: 0.30 major failures per 100 breaker-years"
TPL = "NERC TPL-001-5.1, table 1, footnote 13"
PRC = "NERC PRC-004, categories of misoperation"
ORDERS = "starting unavailabilities of fault-tree studies of transmission protection"
GRAPHS = "networkx"
ONE = single_set()
DISTANCE = single_set(sets=(ProtectionSet(line=LineScheme.DISTANCE),))
BLOCK = single_set(sets=(ProtectionSet(line=LineScheme.BLOCKING),))
FTO = "failure_to_operate"

RATES: Mapping[str, float] = {name: v[3] + v[4] for name, v in BRANCHES.items()}
LETTERS = {"relay": "a", "channel": "b", "dc": "c", "coil": "d", "lockout": "d"}

of = partial(Record, SUBJECT)

RECORDS = (
    of(RTS, PUBLISHED, "lines, transformers, loads, units", IN_PRINT, 1e-9, counts),
    of(RTS, PUBLISHED, "outages a year, permanent and transient, of each of 38 branches", RATES, 1e-9,
       branch_rates),
    of(RTS, PUBLISHED, "outages a year of all lines: 12.82 permanent and 33.9 transient", 12.82 + 33.9,
       1e-9, lambda: sum(r for name, r in branch_rates().items() if name not in TRANSFORMERS)),
    of(f"{GRAPHS}: connected components and reachability", LIBRARY,
       "breakers needed for a fault on each branch of the test system", needed_by_networkx, 0, needed),
    of(f"{GRAPHS}: all simple paths", LIBRARY, "breakers that carry, five faults in a meshed plant",
       carrying_by_networkx, 0, carrying),
    # 8 to 16 % of the major failures: 2.4E-4 to 4.8E-4 a breaker-year.
    of(CIGRE, MEMORY, "does not open on command, 8–16 % of them: a breaker-year", 3.6e-4, 1.2e-4,
       breaker_rate),
    *(
        of(ORDERS, MEMORY, f"{what}: log10, half a decade either way", math.log10(value), 0.5,
           partial(decades, kind, mode, phases=phases))
        for what, value, kind, mode, phases in (
            ("relay 1E-4, settings or logic 1E-3", 1.1e-3, ComponentKind.RELAY, FailureMode.FAILURE_TO_OPERATE, 1),
            ("CT 1E-5 a phase", 1e-5, ComponentKind.CT_CORE, FailureMode.OPEN, 3),
            ("VT 1E-5 a phase", 1e-5, ComponentKind.VT_WINDING, FailureMode.LOST, 3),
            ("DC supply 5E-5", 5e-5, ComponentKind.DC, FailureMode.LOST, 1),
            ("breaker 3E-4", 3e-4, ComponentKind.BREAKER, FailureMode.DOES_NOT_OPEN, 1),
            ("channel, fibre 1E-4 to leased 1E-3", 10**-3.5, ComponentKind.CHANNEL, FailureMode.LOST, 1),
        )
    ),
    of("self-monitoring of numerical relays 0.8–0.98", MEMORY, "coverage", 0.89, 0.09,
       relay_coverage),
    of(TPL, PUBLISHED, "letter of each kind",
       frozenset(f"{k}: {LETTERS.get(k, '')}" for k in ComponentKind), 0, groups),
    of(TPL, PUBLISHED, "exempt where monitored", frozenset({"channel", "dc", "coil"}), 0, exempt),
    *(
        of(PRC, PUBLISHED, what, found, 0, partial(category, policy, place, *failed))
        for what, found, policy, place, failed in (
            ("relay silent, remote back-up clears", "failure to trip, during fault", ONE, "L1",
             (f"Alder/L1/relay 1: {FTO}",)),
            ("one of two sets silent", "none", duplicate_chain(), "L1", (f"Alder/L1/relay 2: {FTO}",)),
            ("stuck breaker: protection did its part", "none", ONE, "L1", ("Alder.L1.CB: does_not_open",)),
            ("block lost, fault beyond", "unnecessary trip, during fault", BLOCK, "L2@0.05", ("L1/channel 1: lost",)),
            ("relay trips with no fault", "unnecessary trip, other than fault", ONE, "!Alder/L1/relay 1", ()),
        )
    ),
)  # fmt: skip
