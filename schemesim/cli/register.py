"""The commands ``register`` (single points of failure) and ``outages`` (one item out for work)."""

from __future__ import annotations

import argparse
import sys
from typing import TYPE_CHECKING, Any

from schemesim.cli.output import DONE, INTERRUPTED, Progress, number_of, put, table_text, whole_of
from schemesim.errors import reject

if TYPE_CHECKING:
    from schemesim.plant.model import Location
    from schemesim.scenario import Scenario
    from schemesim.study.footnote import Monitored
    from schemesim.study.outage_results import OutageStudy
    from schemesim.study.register import Register

MOST_ROWS = 60
"""Most rows of one table in a text."""

COLUMNS = {
    "failures": "failure", "p": "p", "worst": "worst", "not_cleared": "stays", "late": "late", "more_breakers": "more",
    "t_clear_ms_worst": "t_ms", "breakers_worst": "opened", "load_lost_mw_worst": "mw",
}  # fmt: skip
"""Columns of an entry in a text, and what they are called there."""


def add_register(commands: Any, common: argparse.ArgumentParser) -> None:
    """Add both commands to the parser."""
    shared = argparse.ArgumentParser(add_help=False)
    shared.add_argument("--policy", metavar="NAME", help="a policy other than the one in use")
    shared.add_argument("--location", metavar="SECTION[@POS]", action="append", help="only here; several times")
    shared.add_argument("--workers", metavar="N", default="1", help="processes (1 by default; results are the same)")
    one = commands.add_parser("register", parents=[common, shared], help="single points of failure, and where")
    one.add_argument("--pairs", action="store_true", help="pairs of failures too")
    one.add_argument(
        "--monitored",
        metavar="WHAT[=WATCHED]",
        action="append",
        default=[],
        help='a kind or a pattern of names that is monitored and reported, e.g. channel or "*/DC *=low_voltage"; '
        "of a DC supply low_voltage,open_circuit by default; several times; else as the scenario says",
    )
    out = commands.add_parser("outages", parents=[common, shared], help="what becomes critical with one item out")
    out.add_argument("--kind", metavar="KIND", action="append", help="set, dc, channel or breaker; several times")
    out.add_argument("--out", metavar="NAME", action="append", help="only this item; several times")
    out.add_argument(
        "--hours",
        metavar="WHAT=HOURS",
        action="append",
        default=[],
        help="hours out per year of a kind or of a name, e.g. breaker=40; several times; else as the scenario says",
    )
    out.add_argument("--epsilon", metavar="MASS", default="1e-3", help="left unexplored at each location (1e-3)")


def register(scenario: Scenario, options: argparse.Namespace) -> int:
    """The register of single points of failure."""
    from schemesim.cli.study import MAX_WORKERS, _executor
    from schemesim.scenario.weak import register_scenario
    from schemesim.study.spoiled import place_row

    monitored = [monitored_of(text) for text in options.monitored]
    with _executor(whole_of(options.workers, "--workers", 1, MAX_WORKERS)) as executor:
        found = register_scenario(
            scenario,
            options.policy,
            locations=_locations(scenario, options),
            monitored=monitored or None,
            pairs=options.pairs,
            executor=executor,
            progress=Progress("register", options.quiet),
        )
    entries = [
        {**e.row, "where": [place_row(s) for s in e.spoiled]} for e in (*found.singles, *found.pairs)
    ]
    content: dict[str, object] = {
        "policy": options.policy or scenario.policy,
        "complete": found.complete,
        "locations": found.locations,
        "entries": entries,
        "anyway": [place_row(s) for s in found.anyway],
    }
    put(options, scenario.name, content, list(found.records()), _register_text(found, content["policy"]))
    return _status(found.complete)


def monitored_of(text: str) -> Monitored:
    """What is monitored, from the command line.

    Examples
    --------
    >>> monitored_of("channel").kind
    <ComponentKind.CHANNEL: 'channel'>
    >>> m = monitored_of("Alder/DC *=low_voltage")
    >>> m.pattern, sorted(m.watches)
    ('Alder/DC *', ['low_voltage'])
    """
    from schemesim.scheme.model import ComponentKind
    from schemesim.study.footnote import WATCHED, Monitored

    what, given, words = text.partition("=")
    watches = frozenset(w.strip() for w in words.split(",") if w.strip()) if given else WATCHED
    if not what or (given and not watches):
        raise reject("--monitored", text, f"a kind or a pattern, and after = any of {sorted(WATCHED)}")
    if what in set(ComponentKind):
        return Monitored("*", ComponentKind(what), watches)
    return Monitored(what, watches=watches)


def _register_text(found: Register, policy: object) -> list[str]:
    from schemesim.study.footnote import Group

    text = [] if found.complete else ["interrupted: what follows was finished until then", ""]
    text += [
        f"policy {policy}: {len(found.singles)} single points of failure at {found.locations} locations, "
        f"{found.runs} runs",
        "groups as in NERC TPL-001-5.1, footnote 13 (wording from memory)",
        "",
    ]
    columns = list(COLUMNS.values())
    for group in Group:
        for exempt in (False, True):
            entries = found.group(group, exempt=exempt)
            if not entries and exempt:
                continue
            kind = ", exempt" if exempt else ""
            text.append(f"{group.value}{kind}: {len(entries) or 'none'}")
            shown = [*columns, "why"] if exempt or group is Group.APART else columns
            text += _table([_short(e.row) for e in entries], shown)
    if found.pairs:
        text.append(f"pairs that do worse than each alone: {len(found.pairs)}")
        text += _table([_short(e.row) for e in found.pairs], columns)
    if found.anyway:
        where = ", ".join(f"{s.location} ({s.effect.label})" for s in found.anyway)
        text += [f"with no failure at all: {where}", ""]
    text += [
        "stays, late, more: at how many locations the fault is not cleared, is cleared after the limit, takes more",
        "breakers; t_ms: longest clearing time of those that clear; opened, mw: most breakers opened, most load lost",
    ]
    return text


def _short(row: dict[str, object]) -> dict[str, object]:
    words = {"not cleared": "stays", "more breakers": "more"}
    worst = {"worst": words.get(str(row["worst"]), row["worst"]), "why": row["why"]}
    return {short: row[name] for name, short in COLUMNS.items()} | worst


def _table(rows: list[dict[str, object]], columns: list[str]) -> list[str]:
    if not rows:
        return [""]
    more = [f"… and {len(rows) - MOST_ROWS} more; all of them with --json"] if len(rows) > MOST_ROWS else []
    return [table_text(rows[:MOST_ROWS], columns), *more, ""]


def outages(scenario: Scenario, options: argparse.Namespace) -> int:
    """Every item out for work."""
    from schemesim.cli.study import MAX_WORKERS, _executor
    from schemesim.scenario.weak import outages_scenario
    from schemesim.study.outage_results import KINDS, PER_YR

    hours = dict(_hours(text) for text in options.hours)
    with _executor(whole_of(options.workers, "--workers", 1, MAX_WORKERS)) as executor:
        found = outages_scenario(
            scenario,
            options.policy,
            locations=_locations(scenario, options),
            kinds=options.kind or KINDS,
            names=options.out,
            hours_per_yr=hours or None,
            epsilon=number_of(options.epsilon, "--epsilon", 1e-12, 0.5),
            executor=executor,
            progress=Progress("outages", options.quiet),
        )
    rows = [r.row for r in found.results]
    critical = list(found.critical_records())
    content: dict[str, object] = {
        "policy": options.policy or scenario.policy,
        "complete": found.complete,
        "locations": len(found.base.results),
        "outages": rows,
        "critical": critical,
    }
    for name in PER_YR:
        total = getattr(found, name)
        content[name] = None if total is None else {"low": float(total.low), "high": float(total.high)}
    put(options, scenario.name, content, rows, _outages_text(found, content["policy"]))
    return _status(found.complete)


def _hours(text: str) -> tuple[str, float]:
    from schemesim.study.outages import HOURS_PER_YR

    what, _, number = text.rpartition("=")
    if not what:
        raise reject("--hours", text, "WHAT=HOURS, e.g. breaker=40")
    return what, number_of(number, f"--hours {what}", 0, HOURS_PER_YR)


def _outages_text(found: OutageStudy, policy: object) -> list[str]:
    text = [] if found.complete else ["interrupted: what follows was finished until then", ""]
    text += [f"policy {policy}: {len(found.results)} items out one by one, {len(found.base.results)} locations", ""]
    rows: list[dict[str, object]] = []
    for r in found.results:
        row: dict[str, object] = {
            "out": r.outage.name,
            "kind": r.outage.kind,
            "affected": r.affected,
            "alone": r.worst.label,
            "new_spof": r.row["new_single_points"],
            "stays": r.row["new_single_points_not_cleared"],
        }
        if r.uncleared_per_yr is not None:
            row["uncleared_per_yr"] = str(r.uncleared_per_yr)
            row["late_or_uncleared_per_yr"] = str(r.late_or_uncleared_per_yr)
        rows.append(row)
    order = sorted(rows, key=lambda r: (-int(str(r["stays"])), -int(str(r["new_spof"])), str(r["out"])))
    text += _table(order, list(dict.fromkeys(k for row in rows for k in row)))
    alone: list[dict[str, object]] = [
        {"out": r.outage.name, "location": str(w.location), "effect": w.effect.label,
         "t_ms": None if w.t_clear_us is None else w.t_clear_us / 1000, "breakers": w.breakers}
        for r in found.results for w in r.worse
    ]  # fmt: skip
    if alone:
        text += ["spoiled by the outage alone, nothing failing", *_table(alone, list(alone[0]))]
    if found.uncleared_per_yr is not None:
        text += [
            f"per year, in the hours out: {found.uncleared_per_yr} faults not cleared, "
            f"{found.late_or_uncleared_per_yr} late or not cleared;",
            f"more than in the same hours with all in service: {found.added_uncleared_per_yr} and "
            f"{found.added_late_or_uncleared_per_yr}",
            "",
        ]
    text += [
        "affected: locations the item bears on; alone: the worst with nothing else failing; new_spof: failures that",
        "are single points now, or worse ones than before; stays: those of them that leave a fault uncleared",
    ]
    return text


def _locations(scenario: Scenario, options: argparse.Namespace) -> list[Location] | None:
    from schemesim.scenario.model import location

    return [location(scenario.plant, text) for text in options.location] if options.location else None


def _status(complete: bool) -> int:
    if not complete:
        print("interrupted", file=sys.stderr)
    return DONE if complete else INTERRUPTED
