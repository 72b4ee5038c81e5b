"""The commands ``timer``, ``dial`` and ``importance``: how long to wait, which way to lean, what matters most."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING, Any

from schemesim.cli.output import DONE, INTERRUPTED, Progress, number_of, put, table_text, whole_of

if TYPE_CHECKING:
    from schemesim.plant.model import Location
    from schemesim.scenario import Scenario
    from schemesim.study.importance_study import ImportanceStudy
    from schemesim.study.timer_study import TimerResult, TimerStudy

MOST_ROWS = 60
"""Most rows of one table in a text."""


def add_timer(commands: Any, common: argparse.ArgumentParser) -> None:
    """Add the three commands to the parser."""
    shared = argparse.ArgumentParser(add_help=False)
    shared.add_argument("--policy", metavar="NAME", help="a policy other than the one in use")
    shared.add_argument("--location", metavar="SECTION[@POS]", action="append", help="only here; several times")
    one = commands.add_parser("timer", parents=[common, shared], help="how long breaker failure and zone 2 may wait")
    one.add_argument("--limit", metavar="MS", help="total clearing with a breaker stuck (as the scenario says)")
    one.add_argument("--zone-2-limit", metavar="MS", help="clearing by a remote zone 2 (as the scenario says)")
    one.add_argument("--needless", metavar="COST", default="1", help="cost of a needless trip, in any unit (1)")
    one.add_argument("--late", metavar="COST", default="1", help="cost of a late clearing, in the same unit (1)")
    one.add_argument("--needless-target", metavar="P", default="1e-3", help="target of the band (1e-3)")
    one.add_argument("--late-target", metavar="P", default="1e-3", help="target of the band (1e-3)")
    one.add_argument("--step", metavar="MS", default="1", help="step of the settings (1)")
    one.add_argument("--timer", metavar="NAME", action="append", help="only this timer or breaker, with its curve")
    two = commands.add_parser("dial", parents=[common, shared], help="dependability against security along one dial")
    two.add_argument("--dial", metavar="NAME", default="votes", help="votes, line, or a reach: zone_1, over_reach …")
    two.add_argument("--at", metavar="POSITION", action="append", help="a position, e.g. 2oo3 or 0.85; several times")
    two.add_argument("--station", metavar="NAME", action="append", help="only this station; several times")
    two.add_argument("--element", metavar="NAME", action="append", help="only this element; several times")
    two.add_argument("--timed", action="store_true", help="timed zones of main protection count too")
    two.add_argument("--epsilon", metavar="MASS", default="1e-3", help="left unexplored at each location (1e-3)")
    three = commands.add_parser("importance", parents=[common, shared], help="which component matters most")
    three.add_argument("--event", metavar="EVENT", default="late or not cleared", help="or: not cleared")
    three.add_argument("--by", metavar="FIGURE", default="criticality_ratio", help="figure to sort by")
    three.add_argument("--epsilon", metavar="MASS", default="1e-3", help="left unexplored at each location (1e-3)")
    three.add_argument("--workers", metavar="N", default="1", help="processes (1 by default; results are the same)")


def timer(scenario: Scenario, options: argparse.Namespace) -> int:
    """Breaker-failure and zone-2 timers."""
    from schemesim.scenario.timers import timer_scenario
    from schemesim.study.timer_study import Weights

    def cost(text: str, what: str) -> float:
        return number_of(text, what, 0, 1e15)

    weights = Weights(
        cost(options.needless, "--needless"),
        cost(options.late, "--late"),
        number_of(options.needless_target, "--needless-target", 0, 1),
        number_of(options.late_target, "--late-target", 0, 1),
    )
    found = timer_scenario(
        scenario,
        options.policy,
        locations=_locations(scenario, options),
        limit_us=_us(options.limit, "--limit"),
        zone_2_limit_us=_us(options.zone_2_limit, "--zone-2-limit"),
        weights=weights,
        step_us=round(1000 * number_of(options.step, "--step", 0.001, 1000)),
    )
    shown = found.results if options.timer is None else tuple(found.of(name) for name in options.timer)
    rows = [r.row for r in shown]
    curves = {r.race.timer: r.curve().to_dict("records") for r in shown} if options.timer is not None else {}
    policy = options.policy or scenario.policy
    content: dict[str, object] = {
        "policy": policy,
        "per_yr": found.per_yr,
        "weights": {"needless": weights.needless, "late": weights.late,
                    "needless_target": weights.needless_target, "late_target": weights.late_target},
        "timers": rows,
        "curves": curves,
    }  # fmt: skip
    put(options, scenario.name, content, rows, _timer_text(found, shown, curves, policy))
    return DONE


def _timer_text(
    found: TimerStudy, shown: Iterable[TimerResult], curves: Mapping[str, list[Any]], policy: object
) -> list[str]:
    w = found.weights
    text = [
        f"policy {policy}: a needless trip weighs {w.needless:g}, a late clearing {w.late:g}; targets of the band "
        f"{w.needless_target:g} and {w.late_target:g}",
        "",
    ]
    rows: list[dict[str, object]] = []
    for r in shown:
        race, band = r.race, r.band_us
        rows.append(
            {
                "timer": race.timer,
                "set": race.delay.nominal_us / 1000,
                "margin": race.margin_us / 1000,
                "in_runs": None if race.margin_run_us is None else race.margin_run_us / 1000,
                "total": None if race.total_us is None else race.total_us / 1000,
                "needless": str(r.now.p_needless),
                "late": str(r.now.p_late),
                "best": r.best_us / 1000,
                "band": "none" if band is None else f"{band[0] / 1000:g}…{band[1] / 1000:g}",
                "worst at": str(race.location),
            }
        )
    text += _table(rows)
    for name, points in curves.items():
        step = max(1, len(points) // 25)
        curve = [
            {
                "setting": p["setting_ms"],
                "needless": _bracket(p, "p_needless"),
                "late": _bracket(p, "p_late"),
                "risk_per_yr" if found.per_yr else "risk_per_fault": _bracket(p, "risk_per_yr"),
            }
            for p in points[::step]
        ]
        text += [name, *_table(curve)]
    return [
        *text,
        "times in ms; margin: timer less breaker less detector reset (of a zone 2: less breaker failure); in_runs: the",
        "least in runs; total: clearing with the breaker stuck (of a zone 2: its own); needless, late: probabilities",
        "as set now; best: setting of least risk; band: settings that keep to both targets",
    ]


def dial(scenario: Scenario, options: argparse.Namespace) -> int:
    """One dial turned."""
    from schemesim.scenario.timers import dial_scenario
    from schemesim.study.dials import REACHES

    at: list[object] | None = options.at
    if at is not None and options.dial in REACHES:
        at = [number_of(str(text), f"--at {options.dial}", 0, 100) for text in at]
    found = dial_scenario(
        scenario,
        options.dial,
        at,
        options.policy,
        stations=options.station,
        elements=options.element,
        locations=_locations(scenario, options),
        timed=options.timed,
        epsilon=number_of(options.epsilon, "--epsilon", 1e-12, 0.5),
    )
    rows = found.records()
    policy = options.policy or scenario.policy
    content: dict[str, object] = {
        "policy": policy, "dial": found.dial, "positions": found.positions, "figures": rows
    }  # fmt: skip
    text = [f"policy {policy}, dial {found.dial}: {', '.join(found.positions)}", ""]
    for kind in ("station", "element", "set", "relay"):
        short = [
            {
                "group": f["group"],
                found.dial: f[found.dial],
                "dependability": _bracket(f, "dependability"),
                "security": _bracket(f, "security"),
                "no_fault_per_yr": _bracket(f, "no_fault_per_yr"),
            }
            for f in found.records(kind)
        ]
        text += [f"by {kind}", *_table(short)]
    text += [
        "dependability: P(operates) over the faults inside; security: P(no unwanted operation) over the faults",
        "outside; no_fault_per_yr: unwanted operations with no fault",
    ]
    put(options, scenario.name, content, rows, text)
    return DONE


def importance(scenario: Scenario, options: argparse.Namespace) -> int:
    """What matters most."""
    from schemesim.cli.study import MAX_WORKERS, _executor
    from schemesim.scenario.timers import importance_scenario
    from schemesim.study.importance_study import check_figure

    check_figure(options.by)
    with _executor(whole_of(options.workers, "--workers", 1, MAX_WORKERS)) as executor:
        found = importance_scenario(
            scenario,
            options.policy,
            event=options.event,
            locations=_locations(scenario, options),
            epsilon=number_of(options.epsilon, "--epsilon", 1e-12, 0.5),
            executor=executor,
            progress=Progress("importance", options.quiet),
        )
    rows = [{str(k): v for k, v in row.items()} for row in found.table(options.by).to_dict("records")]
    policy = options.policy or scenario.policy
    content: dict[str, object] = {
        "policy": policy,
        "event": str(found.event),
        "complete": found.complete,
        "locations": len(found.at),
        "p_event": {"low": float(found.p_event.low), "high": float(found.p_event.high)},
        "faults_per_yr": found.faults_per_yr,
        "components": rows,
        "others": found.others,
        "others_at_most": found.others_at_most,
    }
    put(options, scenario.name, content, rows, _importance_text(found, rows, policy))
    if not found.complete:
        print("interrupted", file=sys.stderr)
    return DONE if found.complete else INTERRUPTED


def _importance_text(found: ImportanceStudy, rows: list[dict[str, Any]], policy: object) -> list[str]:
    text = [] if found.complete else ["interrupted: what follows was finished until then", ""]
    text += [f"policy {policy}: {found.event} with {found.p_event} of a fault, {len(found.at)} locations", ""]
    names = {
        "birnbaum": "birnbaum",
        "criticality_ratio": "criticality",
        "risk_achievement_worth": "achievement",
        "risk_reduction_worth": "reduction",
    }
    text += _table(
        [{"component": r["component"], "p": r["p"], **{s: _bracket(r, n) for n, s in names.items()}} for r in rows]
    )
    return [
        *text,
        f"{found.others} more components are in no explored sequence; none has a Birnbaum importance over "
        f"{found.others_at_most:.2g}",
        "birnbaum: P(event | failed) less P(event | not failed); criticality: share of the events that goes with it;",
        "achievement, reduction: how many times more if it has failed, how many times fewer if it never does",
    ]


def _bracket(row: Mapping[str, Any], name: str) -> str | None:
    from schemesim.study.brackets import show

    low, high = row[f"{name}_low"], row[f"{name}_high"]
    return None if low is None else show(low, high)


def _us(text: str | None, what: str) -> int | None:
    return None if text is None else round(1000 * number_of(text, what, 0, 1e6))


def _table(rows: list[dict[str, Any]]) -> list[str]:
    if not rows:
        return ["none", ""]
    more = [f"… and {len(rows) - MOST_ROWS} more; all of them with --json"] if len(rows) > MOST_ROWS else []
    return [table_text(rows[:MOST_ROWS], list(rows[0])), *more, ""]


def _locations(scenario: Scenario, options: argparse.Namespace) -> list[Location] | None:
    from schemesim.scenario.model import location

    return [location(scenario.plant, text) for text in options.location] if options.location else None
