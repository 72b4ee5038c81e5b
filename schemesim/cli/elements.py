"""The commands ``settings`` and ``elements``: what elements are set to and why, and what they see of faults."""

from __future__ import annotations

import argparse
from collections.abc import Iterable
from fnmatch import fnmatchcase
from typing import TYPE_CHECKING, Any

from schemesim.cli.output import DONE, number_of, put, table_text
from schemesim.errors import nearest, reject

if TYPE_CHECKING:
    from schemesim.engine.electrical import ElectricalSensing
    from schemesim.scenario import Scenario
    from schemesim.study.element_audit import ElementAudit

MOST_ROWS = 60
"""Most rows of one table in a text."""


def add_elements(commands: Any, common: argparse.ArgumentParser) -> None:
    """Add the commands to the parser."""
    shared = argparse.ArgumentParser(add_help=False)
    shared.add_argument("--policy", metavar="NAME", help="a policy other than the one in use")
    shared.add_argument("--element", metavar="NAMES", action="append", help="only those, with * and ?; several times")
    commands.add_parser("settings", parents=[common, shared], help="settings chosen by rule, each with its reason")
    two = commands.add_parser("elements", parents=[common, shared], help="quantity ÷ setting: blind, over-reaching")
    two.add_argument("--location", metavar="SECTION[@POS]", action="append", help="faults only here; several times")
    two.add_argument("--dispatch", metavar="NAME", action="append", help="only this state of the sources")
    two.add_argument("--infeed", metavar="SOURCE", action="append", help="taken out by itself (each; 'none': no one)")
    two.add_argument("--type", metavar="lll|ll|lg|llg", action="append", help="of fault; several times (lll and ll)")
    two.add_argument("--fault-ohm", metavar="OHM", default="0", help="fault resistance (0)")


def settings(scenario: Scenario, options: argparse.Namespace) -> int:
    """Every value chosen and why."""
    chosen = _sensing(scenario).settings_of(scenario.program(options.policy))
    names = frozenset(_matching(chosen.of, options.element))
    rows: list[dict[str, object]] = [
        {
            "element": s.block,
            "kind": type(s.element).__name__,
            "what": c.what,
            "value": _value(c.value),
            "reason": c.reason,
        }
        for s in chosen.items
        if s.block in names
        for c in s.choices
    ]
    content: dict[str, object] = {"policy": options.policy or scenario.policy, "elements": len(names), "rows": rows}
    text = [
        f"policy {content['policy']}: {len(names)} elements; chosen by rule, a starting point for a study of settings",
        "",
        *_table(rows, ["element", "kind", "what", "value", "reason"], 1),
    ]
    put(options, scenario.name, content, rows, text)
    return DONE


def elements(scenario: Scenario, options: argparse.Namespace) -> int:
    """What each element sees of faults it is meant to see and of those it is not."""
    from schemesim.plant.net_case import FaultType
    from schemesim.scenario.model import location
    from schemesim.study.element_audit import acting, audit_elements

    kinds = [str(k) for k in FaultType]
    for kind in options.type or ():
        if kind not in kinds:
            raise reject("--type", kind, f"one of {kinds}", tip=nearest(kind, kinds))
    ohm = number_of(options.fault_ohm, "--fault-ohm", 0.0, 1e6)
    infeeds = options.infeed
    if infeeds is not None and "none" in infeeds and len(infeeds) > 1:
        raise reject("--infeed", "none", "nothing beside it")
    places = [location(scenario.plant, text) for text in options.location] if options.location else None
    program = scenario.program(options.policy)
    chosen = _sensing(scenario).settings_of(program)
    found = audit_elements(
        program,
        chosen,
        faults=options.type or ("lll", "ll"),
        resistance_ohm=ohm,
        locations=tuple(scenario.frequencies) if places is None else places,
        dispatches=options.dispatch,
        infeeds=() if infeeds == ["none"] else infeeds,
        blocks=_matching(acting(program, chosen), options.element),
    )
    rows = found.records()
    content: dict[str, object] = {
        "policy": options.policy or scenario.policy,
        "faults": found.faults,
        "states": found.states,
        "blind": [r.block for r in found.blind],
        "over_reaching": [r.block for r in found.over_reaching],
        "rows": rows,
    }
    put(options, scenario.name, content, rows, _text(found, rows, str(content["policy"])))
    return DONE


def _text(found: ElementAudit, rows: list[dict[str, object]], policy: str) -> list[str]:
    by_name = {r["block"]: r for r in rows}
    least = ["block", "must", "blind", "least", "least_at", "least_in"]
    greatest = ["block", "must_not", "over", "greatest", "greatest_at", "greatest_in"]
    return [
        f"policy {policy}: {len(rows)} elements, {found.faults} faults, {found.states} states of the sources: "
        f"{len(found.blind)} blind somewhere, {len(found.over_reaching)} over-reaching",
        "quantity ÷ setting; below 1 of what it is meant to see it is blind",
        "",
        *_table([r for r in rows if r["must"]], least, 1),
        *(["", "1 and more of what it is not meant to see: it over-reaches", ""] if found.over_reaching else []),
        *_table([by_name[r.block] for r in found.over_reaching], greatest, 1),
    ]


def _sensing(scenario: Scenario) -> ElectricalSensing:
    """That of the scenario where it measures, so that its settings are shown and not others."""
    from schemesim.engine.electrical import ElectricalSensing

    found = scenario.sensing()
    return found if isinstance(found, ElectricalSensing) else ElectricalSensing()


def _matching(names: Iterable[str], patterns: list[str] | None) -> list[str]:
    """Names of elements that match one of the patterns, all if there are none."""
    known = list(names)
    for pattern in patterns or ():
        if not any(fnmatchcase(name, pattern) for name in known):
            raise reject(
                "--element", pattern, "the name of an element, or a pattern of some", tip=nearest(pattern, known)
            )
    return [n for n in known if patterns is None or any(fnmatchcase(n, p) for p in patterns)]


def _value(value: object) -> object:
    """A number as it is, an impedance or anything else in words."""
    if isinstance(value, complex):
        return f"{value.real:.4g}{value.imag:+.4g}j"
    return value if value is None or isinstance(value, (bool, int, float)) else str(value)


def _table(rows: list[dict[str, Any]], columns: list[str], whole: int) -> list[str]:
    if not rows:
        return []
    more = [f"… and {len(rows) - MOST_ROWS} more; all of them with --json"] if len(rows) > MOST_ROWS else []
    return [table_text(rows[:MOST_ROWS], columns, whole), *more]
