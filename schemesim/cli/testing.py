"""The commands ``intervals`` and ``misoperations``: how often to test, and what protection does wrong."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING, Any

from schemesim.cli.output import DONE, Progress, number_of, put, table_text
from schemesim.errors import reject

if TYPE_CHECKING:
    from schemesim.plant.model import Location
    from schemesim.scenario import Scenario


def add_testing(commands: Any, common: argparse.ArgumentParser) -> None:
    """Add the commands to the parser."""
    shared = argparse.ArgumentParser(add_help=False)
    shared.add_argument("--policy", metavar="NAME", help="a policy other than the one in use")
    shared.add_argument("--location", metavar="SECTION[@POS]", action="append", help="only here; several times")
    shared.add_argument("--epsilon", metavar="MASS", default="1e-4", help="left unexplored at each location (1e-4)")
    one = commands.add_parser("intervals", parents=[common, shared], help="risk against the test interval of a class")
    one.add_argument("--kind", metavar="KIND", default="relay", help="kind of component (relay)")
    one.add_argument("--pattern", metavar="NAMES", default="*", help="only those, with * and ?")
    one.add_argument("--every", metavar="YEARS", action="append", help="an interval; several times")
    one.add_argument("--values", metavar="CSV", help="failure data from this table; 'shipped': the starting values")
    one.add_argument("--by-turns", action="store_true", help="items that stand in for each other tested by turns")
    one.add_argument("--together", action="store_true", help="tested together; else as failure_data says")
    two = commands.add_parser("misoperations", parents=[common, shared], help="misoperations by PRC-004 category")
    two.add_argument("--faults-only", action="store_true", help="without trips with no fault, which is quicker")


def intervals(scenario: Scenario, options: argparse.Namespace) -> int:
    """Risk against the test interval."""
    from schemesim.scenario.testing import intervals_scenario, with_values
    from schemesim.scheme.starting_values import load_starting_values
    from schemesim.study.brackets import show
    from schemesim.study.proof_intervals import INTERVALS_YR

    if options.by_turns and options.together:
        raise reject("--together", "beside --by-turns", "one of them")
    if options.values is not None:
        path = None if options.values == "shipped" else options.values
        scenario = with_values(scenario, load_starting_values(path))
    every = options.every or [str(t) for t in INTERVALS_YR]
    found = intervals_scenario(
        scenario,
        options.kind,
        options.pattern,
        options.policy,
        intervals_yr=[number_of(t, "--every", 1e-3, 1000) for t in every],
        locations=_where(scenario, options),
        staggered=True if options.by_turns else False if options.together else None,
        epsilon=number_of(options.epsilon, "--epsilon", 1e-12, 0.5),
        progress=Progress("intervals", options.quiet),
    )
    rows = found.records()
    unit = "a year" if found.per_yr else "share"
    shown = [
        {
            "interval_yr": r.interval_yr,
            f"late {unit}": show(r.late.low, r.late.high),
            f"uncleared {unit}": show(r.uncleared.low, r.uncleared.high),
            "late before a test": show(r.late_worst.low, r.late_worst.high),
            "tests a year": r.tests_per_yr,
            **({} if r.cost is None else {"cost a year": show(r.cost.low, r.cost.high)}),
            "may be best": r.interval_yr in found.may_be_best,
        }
        for r in found.rows
    ]
    text = [
        f"{found.components} of kind {found.kind}, {found.pattern!r}; {found.locations} fault locations",
        table_text(shown, list(shown[0]), 1),
        f"least at {found.best.interval_yr:g} yr of those studied",
        *(f"one item by itself, {name}: {t:.3g} yr" for name, t in found.single_yr),
    ]
    content: dict[str, object] = {
        "policy": options.policy or scenario.policy,
        "class": {"kind": str(found.kind), "pattern": found.pattern, "components": found.components},
        "rows": rows,
        "best_yr": found.best.interval_yr,
        "single_yr": dict(found.single_yr),
    }
    put(options, scenario.name, content, rows, text)
    return DONE


def misoperations(scenario: Scenario, options: argparse.Namespace) -> int:
    """Misoperations by category."""
    from schemesim.scenario.testing import misoperations_scenario
    from schemesim.study.brackets import show
    from schemesim.study.misoperations import Misoperation

    found = misoperations_scenario(
        scenario,
        options.policy,
        locations=_where(scenario, options),
        no_fault=not options.faults_only,
        epsilon=number_of(options.epsilon, "--epsilon", 1e-12, 0.5),
    )
    rows = [j.row for j in found.judged]
    sums = {m: found.per_yr(m) for m in Misoperation}
    shown = [{"category": str(m), "a year": None if b is None else show(b.low, b.high)} for m, b in sums.items()]
    content: dict[str, object] = {
        "policy": options.policy or scenario.policy,
        "per_yr": {str(m): None if b is None else {"low": b.low, "high": b.high} for m, b in sums.items()},
        "rows": rows,
    }
    text = [f"{len(rows)} events", table_text(shown, ["category", "a year"], 1)]
    put(options, scenario.name, content, rows, text)
    return DONE


def _where(scenario: Scenario, options: argparse.Namespace) -> list[Location] | None:
    from schemesim.scenario.model import location

    return [location(scenario.plant, text) for text in options.location] if options.location else None
