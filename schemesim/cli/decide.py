"""The command ``decide``: variants with their cost and risk, the frontier, and what to add next."""

from __future__ import annotations

import argparse
import sys
from typing import TYPE_CHECKING, Any

from schemesim.cli.output import DONE, number_of, put, table_text, whole_of

if TYPE_CHECKING:
    import pandas as pd

    from schemesim.scenario import Scenario
    from schemesim.scenario.deciding import Decision


def add_decide(commands: Any, common: argparse.ArgumentParser) -> None:
    """Add the command to the parser."""
    decide = commands.add_parser("decide", parents=[common], help="cost against risk, and what to add next")
    decide.add_argument("--policy", metavar="NAME", action="append", help="a variant; several times, first the base")
    decide.add_argument("--start", metavar="NAME", help="policy that additions are made to")
    decide.add_argument("--epsilon", metavar="MASS", default="1e-3", help="left unexplored at each location (1e-3)")
    decide.add_argument("--location", metavar="SECTION[@POS]", action="append", help="stands for others of its kind")
    decide.add_argument("--everywhere", action="store_true", help="every location, whatever the scenario says")
    decide.add_argument("--faults-only", action="store_true", help="without trips with no fault, which is quicker")
    decide.add_argument("--trials", metavar="N", default="0", help="trials with common random numbers besides")
    decide.add_argument("--samples", metavar="N", default="200", help="sets of uncertain failure data (200)")
    decide.add_argument("--steps", metavar="N", help="at most so many additions")
    decide.add_argument("--whole", action="store_true", help="tornado: the whole list of additions at each end")


def decide(scenario: Scenario, options: argparse.Namespace) -> int:
    """Decide a scenario that has a section money."""
    from schemesim.scenario.deciding import decide as decide_scenario  # heavy: not needed to tell of bad arguments
    from schemesim.scenario.model import location

    where = None
    if options.everywhere:
        where = list(scenario.frequencies)
    elif options.location:
        where = [location(scenario.plant, text) for text in options.location]
    if not options.quiet:
        print("decide: exploring variants", file=sys.stderr, flush=True)
    found = decide_scenario(
        scenario,
        options.policy,
        start=options.start,
        locations=where,
        epsilon=number_of(options.epsilon, "--epsilon", 1e-12, 0.5),
        no_fault=not options.faults_only,
        trials=whole_of(options.trials, "--trials", 0, 100_000_000),
        samples=whole_of(options.samples, "--samples", 2, 100_000),
        most_steps=None if options.steps is None else whole_of(options.steps, "--steps", 0, 1000),
        whole=options.whole,
    )
    variants = _records(found.variants.table())
    content: dict[str, object] = {
        "unit": found.money.unit,
        "locations": [{"location": str(at), "faults_per_yr": rate} for at, rate in found.rates.items()],
        "left_out_per_yr": found.left_out_per_yr,
        "variants": variants,
        "costs": {n: {str(k): v for k, v in c.by_kind.items()} for n, c in found.costs.items()},
        "frontier": _records(found.frontier.table()),
        "next_best": _records(found.next_best.table()),
        "order": found.next_best.order,
        "not_possible": dict(found.next_best.impossible),
        "tornado": _records(found.tornado.table()),
        "uncertainty": _records(found.uncertainty.table()),
    }
    put(options, scenario.name, content, variants, _text(found))
    return DONE


def _records(frame: pd.DataFrame) -> list[dict[str, object]]:
    return [{str(k): v for k, v in row.items()} for row in frame.astype(object).to_dict("records")]


def _text(found: Decision) -> list[str]:
    from schemesim.study.brackets import show

    unit = found.money.unit
    rows: list[dict[str, object]] = []
    for r in found.variants.rows:
        row: dict[str, object] = {"measure": r.measure, "variant": r.variant, "value": show(r.value.low, r.value.high)}
        row["difference"] = show(r.difference.low, r.difference.high) if r.verdict else None
        row["verdict"] = r.verdict
        if r.paired is not None:
            row["variance_cut_by"] = r.paired.variance_factor
        rows.append(row)
    columns = list(dict.fromkeys(key for row in rows for key in row))
    left = f"; {found.left_out_per_yr:.3g} a year of other kinds left out" if found.left_out_per_yr else ""
    text = [
        f"{sum(found.rates.values()):.4g} faults a year at {len(found.rates)} locations{left}; money in {unit} a year",
        "",
        table_text(rows, columns, 2),
        "",
        "cost against risk",
        "",
        table_text(
            [
                {
                    "variant": c.name,
                    "cost": c.cost_per_yr,
                    "risk": show(c.risk_per_yr.low, c.risk_per_yr.high),
                    "total": c.cost_per_yr + c.estimate,
                    "frontier": f"dominated by {c.dominated_by}" if c.dominated_by else "yes",
                    "certain": c.certain,
                }
                for c in found.frontier.choices
            ],
            ["variant", "cost", "risk", "total", "frontier", "certain"],
        ),
        f"least in total: {found.frontier.least_total}",
        "",
        f"what to add next: {', then '.join(found.next_best.order) or 'nothing pays'}",
        "",
    ]
    steps = [
        {
            "step": s.number,
            "addition": w.name,
            "cost": w.cost_per_yr,
            "risk removed": show(w.risk_removed.low, w.risk_removed.high),
            "per unit": w.ratio,
            "net": w.net_estimate,
            "verdict": w.verdict,
            "made": w.name == s.made,
        }
        for s in found.next_best.steps
        for w in s.weighed
    ]
    if steps:
        text += [table_text(steps, list(steps[0]), 2), ""]
    text += [f"not possible: {name}: {why}" for name, why in found.next_best.impossible]
    if found.tornado.bars:
        shown = ["assumption", "range_from", "range_to", "net_low", "net_base", "net_high", "order_changes"]
        text += ["net benefit of these additions against each assumption", ""]
        text += [table_text(_records(found.tornado.table()), shown), ""]
    text += ["over uncertain failure data", ""]
    spread = [
        {
            "variant": s.variant,
            **{f"risk p{100 * q:g}": show(low, max(low, high)) for q, low, high in s.quantiles},
            "p less risk": s.p_less_risk if s.p_less_risk == s.p_less_risk else None,
            "p less in total": s.p_less_total if s.p_less_total == s.p_less_total else None,
        }
        for s in found.uncertainty.spreads
    ]
    return [*text, table_text(spread, list(spread[0])), ""]
