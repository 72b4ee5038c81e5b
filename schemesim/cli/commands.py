"""The commands: check, show, inject; the study has a file of its own."""

from __future__ import annotations

import argparse
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from schemesim.cli.output import DONE, listing, put, table_text, whole_of
from schemesim.errors import reject
from schemesim.scenario import Scenario
from schemesim.scenario.model import location
from schemesim.scheme.model import ComponentKind, Gate, Scheme

if TYPE_CHECKING:
    from schemesim.engine.case import Case
    from schemesim.engine.outcome import Outcome


def check(scenario: Scenario, options: argparse.Namespace) -> int:
    """Say what is in a scenario that has been found good."""
    from schemesim.plant.coverage import coverage_audit

    plant = scenario.plant
    rows: list[dict[str, object]] = []
    domains: list[dict[str, object]] = []
    for name in scenario.policies:
        program = scenario.program(name)
        domains += _dc_domains(name, program.scheme)
        rows.append(
            {
                "policy": name,
                "in_use": name == scenario.policy,
                "components": len(program.scheme.components),
                "blocks": len(program.scheme.blocks),
                "questions": len(program.questions),
            }
        )
    gaps = [g.section for g in coverage_audit(plant).gaps]
    stations = sorted({s.station for s in plant.sections if s.station})
    counts = {
        "stations": len(stations),
        "sections": len(plant.sections),
        "breakers": len(plant.breakers),
        "sources": len(plant.sources),
        "locations": len(scenario.frequencies),
    }
    names = [r.name for r in scenario.runs]
    text = [
        f"{scenario.name or options.file}: good",
        ", ".join(f"{n} {what}" for what, n in counts.items()),
        "sections in no protected zone: " + (", ".join(gaps) if gaps else "none"),
        "runs: " + (", ".join(names) if names else "none listed"),
        "",
        table_text(rows, list(rows[0])),
        "",
        table_text(domains, ["policy", "dc_domain", "stations", "outputs"], 2),
        "outputs: of relays and trip circuits that hang on these DC supplies; a label met once only may be misspelt",
    ]
    content = {**counts, "policies": rows, "dc_domains": domains, "runs": names, "coverage_gaps": gaps}
    put(options, scenario.name, content, rows, text)
    return DONE


def _dc_domains(policy: str, scheme: Scheme) -> list[dict[str, object]]:
    """The DC domains of a policy by their label, where they are, and how much hangs on them."""
    found: dict[str, dict[str, int]] = {}
    for c in scheme.components:
        if c.kind is ComponentKind.DC:
            station, _, label = c.name.rpartition("/")
            found.setdefault(label, {})[station] = 0
    for block in scheme.blocks:
        if isinstance(block, Gate):
            for name in {ask.component for ask in block.unless}:
                station, _, label = name.rpartition("/")
                if station in found.get(label, {}):
                    found[label][station] += 1
    return [
        {"policy": policy, "dc_domain": label, "stations": ", ".join(at), "outputs": sum(at.values())}
        for label, at in sorted(found.items())
    ]


def show(scenario: Scenario, options: argparse.Namespace) -> int:
    """One clearing sequence."""
    from schemesim.engine.answers import FixedAnswers
    from schemesim.engine.event import run_event
    from schemesim.report.timeline import timeline

    expect = ""
    if (options.run is None) == (options.fault is None):
        names = [r.name for r in scenario.runs]
        raise reject("show", "both" if options.run else "neither", f"--run (one of {names}) or --fault SECTION[@POS]")
    if options.run is not None:
        if options.fail or options.dispatch:
            raise reject("--run", options.run, "no --fail and no --dispatch beside it; the run states them")
        listed = scenario.listed(options.run)
        policy = options.policy or listed.policy or scenario.policy
        scenario.scheme(policy)
        case = scenario.case_of(listed, policy)
        found = scenario.play(listed, options.policy)
        expect = listed.expect
    else:
        policy = options.policy or scenario.policy
        case = _case(scenario, options)
        answers = FixedAnswers(case.program, options.fail)
        found = run_event(case, answers, horizon_us=scenario.study.horizon_us, log=True)
    limit_us = scenario.limit_us(case.event)
    hz = scenario.frequency_hz or 50.0
    sequence = timeline(case, found, frequency_hz=hz, limit_ms=limit_us / 1000)
    rows = [
        {k: None if v is None or v != v else v for k, v in row.items()}
        for row in sequence.table(options.all).reset_index().astype(object).to_dict("records")
    ]
    failures = [case.questions[q].name for q, yes in found.asked if yes]
    out = sorted(case.program.scheme.out_of_service)
    content: dict[str, object] = {
        "run": options.run,
        "policy": policy,
        "dispatch": case.dispatch,
        "out_of_service": out,
        "event": str(case.event),
        "failures": failures,
        "limit_ms": limit_us / 1000,
        "frequency_hz": hz,
        "outcome": outcome_data(found.outcome),
        "expect": expect,
        "rows": rows,
    }
    text = [] if options.run is None else [f"run: {options.run}"]
    text += [*conditions(policy, case), sequence.to_text(options.all)]
    if expect:
        text += ["", f"expected: {expect}"]
    if scenario.frequency_hz is None:
        text += ["", "cycles of 50 Hz; the scenario states no frequency_hz"]
    put(options, scenario.name, content, [{str(k): v for k, v in row.items()} for row in rows], text)
    return DONE


def _case(scenario: Scenario, options: argparse.Namespace) -> Case:
    where = location(scenario.plant, options.fault)
    return scenario.case(where, options.policy, dispatch=options.dispatch)


def conditions(policy: str, case: Case) -> list[str]:
    """Lines that say under what a case was run: policy, dispatch, what is out of service."""
    head = f"policy: {policy}; dispatch: {case.dispatch or 'all sources in service'}"
    return [head, *listing("out of service:", sorted(case.program.scheme.out_of_service) or ["nothing"])]


def outcome_data(outcome: Outcome) -> dict[str, Any]:
    """An outcome as data."""
    return {
        "status": str(outcome.status),
        "t_clear_ms": None if outcome.t_clear_us is None else outcome.t_clear_us / 1000,
        "at_horizon": outcome.at_horizon,
        "openings": [
            {
                "breaker": o.breaker,
                "t_trip_ms": o.t_trip_us / 1000,
                "t_open_ms": o.t_open_us / 1000,
                "role": o.role.label,
                "via": o.via,
                "interrupted": o.interrupted,
            }
            for o in outcome.openings
        ],
    }


def inject(scenario: Scenario, options: argparse.Namespace) -> int:
    """Every single failure, or every pair, at one location."""
    from schemesim.study.injection import inject as inject_into

    if options.fault is None:
        raise reject("inject", "no fault", "--fault SECTION[@POS]")
    order = whole_of(options.order, "--order", 1, 2)
    case = _case(scenario, options)
    found = inject_into(case, order, "all" if options.all else "met", horizon_us=scenario.study.horizon_us)
    rows: list[dict[str, object]] = [
        {
            "failures": ", ".join(r.failures) or "none",
            "order": len(r.failures),
            "p": float(r.probability),
            "status": str(r.outcome.status),
            "t_clear_ms": None if r.outcome.t_clear_us is None else r.outcome.t_clear_us / 1000,
            "cleared_by": r.cleared_by,
            "breakers": len(r.outcome.tripped),
            "breakers_excess": r.excess,
            "tripped": ", ".join(sorted(r.outcome.tripped)),
            "changed": r.changed,
        }
        for r in found.rows
    ]
    policy = options.policy or scenario.policy
    plain = _seen(rows[0])
    told = [r for r in rows[1:] if options.all or _seen(r) != plain]
    shown = [rows[0], *sorted(told, key=_worst_first)]
    limit_us = scenario.limit_us(case.event)
    columns = ["failures", "p", "status", "t_clear_ms", "cleared_by", "breakers", "excess"]
    differ = sum(_seen(r) != plain for r in rows)
    text = [
        *conditions(policy, case),
        f"fault on {case.event}, limit {limit_us / 1000:g} ms; {len(rows) - 1} combinations of up to {order}, "
        f"{sum(bool(r['changed']) for r in rows)} change the outcome",
        "change the outcome: anything observed differs from the run with no failure, be it only when or by what a",
        f"breaker was tripped; in {differ} the clearing time, status, role, breakers or excess differ",
        "",
        table_text([{**r, "excess": r["breakers_excess"]} for r in shown], columns),
    ]
    if len(shown) < len(rows):
        text += ["", f"{len(rows) - len(shown)} more leave all these as with no failure; listed with --all"]
    content = {"policy": policy, "event": str(case.event), "order": order, "limit_ms": limit_us / 1000, "rows": rows}
    put(options, scenario.name, content, rows, text)
    return DONE


def _seen(row: Mapping[str, object]) -> tuple[object, ...]:
    """What a reader of the table compares."""
    return tuple(row[k] for k in ("status", "t_clear_ms", "cleared_by", "tripped", "breakers_excess"))


def _worst_first(row: Mapping[str, object]) -> tuple[int, float, int, str]:
    """Order of the table: not cleared, then the longest, then most breakers, then by name.

    Examples
    --------
    >>> _worst_first({"status": "cleared", "t_clear_ms": 70.0, "breakers": 2, "failures": "a"})
    (2, -70.0, -2, 'a')
    """
    rank = {"not cleared": 0, "undetermined at the horizon": 1}.get(str(row["status"]), 2)
    t_ms = row["t_clear_ms"]
    return rank, -float(str(t_ms)) if t_ms is not None else 0.0, -int(str(row["breakers"])), str(row["failures"])
