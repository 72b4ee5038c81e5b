"""The study of every fault location, under one policy or several side by side."""

from __future__ import annotations

import argparse
import math
import multiprocessing
import os
import signal
import sys
from collections.abc import Iterator, Mapping
from concurrent.futures import Executor, ProcessPoolExecutor
from contextlib import contextmanager
from typing import Any

from schemesim.cli.output import DONE, INTERRUPTED, Progress, number_of, put, table_text, whole_of
from schemesim.errors import nearest, reject
from schemesim.scenario import Scenario
from schemesim.scenario.model import location
from schemesim.scenario.studying import study_scenario
from schemesim.study.brackets import Bracket, show
from schemesim.study.comparison import compare
from schemesim.study.location import LocationResult
from schemesim.study.locations import LocationStudy

MAX_WORKERS = 256
MARKS = {"better": "+", "worse": "-", "higher": ">", "lower": "<", "same": "=", "not told apart": "~"}
"""A verdict of a comparison as one sign beside its bracket."""
_GIVEN = frozenset({"faults_per_yr"})
MAX_POINTS = 40
"""Most single points of failure in a text."""


def study(scenario: Scenario, options: argparse.Namespace) -> int:
    """Study every location; an interrupt prints what was finished."""
    names = _policies(scenario, options)
    epsilon = None if options.epsilon is None else number_of(options.epsilon, "--epsilon", 1e-12, 0.5)
    workers = whole_of(options.workers, "--workers", 1, MAX_WORKERS)
    at = None if options.location is None else [location(scenario.plant, text) for text in options.location]
    studies: dict[str, LocationStudy] = {}
    with _executor(workers) as executor:
        for name in names:
            progress = Progress(name, options.quiet)
            studies[name] = study_scenario(
                scenario,
                name,
                locations=at,
                epsilon=epsilon,
                no_fault=options.no_fault,
                executor=executor,
                progress=progress,
            )
            if not studies[name].complete:
                break
    complete = len(studies) == len(names) and all(s.complete for s in studies.values())
    finished = {name: s for name, s in studies.items() if s.results}
    rows = [
        {"policy": name, "limit_ms": scenario.limit_us(r.location) / 1000, **_row(s, r)}
        for name, s in finished.items()
        for r in s.results
    ]
    side_by_side = compare(finished) if len(finished) > 1 and complete else None
    used = epsilon if epsilon is not None else scenario.study.epsilon
    content: dict[str, object] = {
        "complete": complete,
        "epsilon": used,
        "policies": [_data(scenario, name, s) for name, s in finished.items()],
    }
    text: list[str] = [] if complete else ["interrupted: what follows was finished until then", ""]
    for name, s in finished.items():
        text += _text(scenario, name, s, used)
    if side_by_side is not None:
        content["comparison"] = [
            {
                "measure": c.measure,
                "policy": c.variant,
                "low": c.value.low,
                "high": c.value.high,
                "verdict": c.verdict,
            }
            for c in side_by_side.rows
        ]
        text += ["policies side by side", "", table_text(*_side_by_side(finished)), ""]
        text.append(f"against {side_by_side.base!r}: " + ", ".join(f"{m} {v}" for v, m in MARKS.items()))
        text.append("a verdict stands only where the brackets do not overlap")
    put(options, scenario.name, content, rows, text)
    if not complete:
        print("interrupted", file=sys.stderr)
    return DONE if complete else INTERRUPTED


def _policies(scenario: Scenario, options: argparse.Namespace) -> list[str]:
    if options.policy and options.compare:
        raise reject("study", "both", "--policy or --compare")
    names = list(scenario.policies) if options.compare else list(dict.fromkeys(options.policy or [scenario.policy]))
    for name in names:
        if name not in scenario.policies:
            known = list(scenario.policies)
            raise reject("--policy", name, f"one of {known}", tip=nearest(name, known))
    if options.compare:  # the order of the file, since a table compares with the first
        document = scenario.document if isinstance(scenario.document, dict) else {}
        said = document.get("policies")
        order = list(said) if isinstance(said, dict) else []
        names.sort(key=lambda n: (order.index(n) if n in order else len(order), n))
    return names


@contextmanager
def _executor(workers: int) -> Iterator[Executor | None]:
    """Processes to share the work with; an interrupt reaches this process alone, which ends them."""
    if workers == 1:
        yield None
        return
    pool = ProcessPoolExecutor(workers, multiprocessing.get_context("spawn"), initializer=_deaf)
    try:
        yield pool
    finally:
        busy = multiprocessing.active_children()
        pool.shutdown(wait=False, cancel_futures=True)
        for child in busy:
            child.terminate()


def _deaf() -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    sys.stderr = open(os.devnull, "w")  # noqa: SIM115 - lives as long as the process


def _row(s: LocationStudy, r: LocationResult) -> dict[str, object]:
    row = dict(r.row)
    if s.frequencies is not None:
        row["freq_per_yr"] = s.frequencies.get(r.location, 0.0)
    for name in ("p_not_cleared", "p_late_or_uncleared"):
        bracket: Bracket = getattr(r, name)
        row[f"{name}_low"], row[f"{name}_high"] = float(bracket.low), float(bracket.high)
    row["breakers_distribution"] = _distribution(r.breakers)
    row["excess_distribution"] = _distribution(r.excess)
    return row


def _distribution(found: Mapping[int, Bracket]) -> str:
    """How many breakers, with the probability of each.

    Examples
    --------
    >>> _distribution({2: Bracket(0.9, 0.9), 3: Bracket(0.1, 0.1)})
    '2: 0.9, 3: 0.1'
    """
    return ", ".join(f"{count}: {bracket}" for count, bracket in sorted(found.items()))


def _data(scenario: Scenario, name: str, s: LocationStudy) -> dict[str, object]:
    places: list[dict[str, object]] = []
    for r in s.results:
        row = {"limit_ms": scenario.limit_us(r.location) / 1000, **_row(s, r)}
        for key in ("breakers", "excess"):
            del row[f"{key}_distribution"]
            found: Mapping[int, Bracket] = getattr(r, key)
            row[key] = [{"count": n, "low": float(b.low), "high": float(b.high)} for n, b in sorted(found.items())]
        row["points"] = [
            {"failure": p.failure, "probability": float(p.probability), "kind": p.kind, "excess": p.excess}
            for p in r.single_points
        ]
        places.append(row)
    data: dict[str, object] = {
        "policy": name,
        "complete": s.complete,
        "measures": {m: {"low": float(b.low), "high": float(b.high)} for m, b in s.measures().items()},
        "locations": places,
    }
    if s.no_fault is not None:
        data["no_fault"] = s.no_fault.table().to_dict("records")
    return data


def _text(scenario: Scenario, name: str, s: LocationStudy, epsilon: float) -> list[str]:
    runs = sum(r.runs for r in s.results)
    most = max((r.unexplored for r in s.results), default=0.0)
    weights = "weighted by faults per year" if s.frequencies is not None else "each location alike"
    head = [
        f"policy {name}: {len(s.results)} locations, {runs} runs, at most {most:.2g} of a location unexplored "
        f"(asked for {epsilon:g})",
        "",
        table_text([{"measure": m, "bracket": str(b)} for m, b in s.measures().items()], ["measure", "bracket"]),
        "",
        f"all locations together, {weights}; a bracket low…high certainly holds",
        "",
    ]
    odds = [
        {
            "location": str(r.location),
            "limit_ms": scenario.limit_us(r.location) / 1000,
            "faults_per_yr": None if s.frequencies is None else s.frequencies.get(r.location, 0.0),
            "p_cleared": str(r.p_cleared),
            "p_within_limit": str(r.p_within_limit),
            "p_by_main": str(r.p_by_main),
            "p_selective": str(r.p_selective),
        }
        for r in s.results
    ]
    times = []
    for r in s.results:
        p95 = r.clearing.quantile(0.95)
        nominal = None if r.nominal is None or r.nominal.t_clear_us is None else r.nominal.t_clear_us / 1000
        times.append(
            {
                "location": str(r.location),
                "t_ms": nominal,
                "t_p95_ms": _time(p95.low_us, p95.high_us),
                "t_worst_ms": None if r.clearing.worst_us is None else r.clearing.worst_us / 1000,
                "breakers_mean": str(r.breakers_mean.bracket),
                "excess_mean": str(r.breakers_excess.bracket),
                "breakers": _short_distribution(r.breakers),
                "spof": len(r.single_points),
                "not_cleared": sum(p.not_cleared for p in r.single_points),
            }
        )
    columns = [c for c in odds[0] if not (c == "faults_per_yr" and s.frequencies is None)] if odds else []
    text = [*head, table_text(odds, columns), ""]
    text += [table_text(times, list(times[0]) if times else []), ""]
    text += [
        "t_ms: clearing time with no failure; t_p95_ms: its 95th percentile; t_worst_ms: the longest among the runs",
        "explored that cleared (what is not explored may take longer);",
        "breakers: how many open, with the probability each has at least;",
        "spof: single points of failure, not_cleared: those of them that leave the fault uncleared",
        "",
    ]
    points = _points(s)
    if points:
        text += [table_text(points[:MAX_POINTS], list(points[0]))]
        if len(points) > MAX_POINTS:
            text.append(f"… and {len(points) - MAX_POINTS} more; all of them with --json")
        text.append("")
    if s.no_fault is not None and s.no_fault.trips:
        records = [_bracketed(row) for row in s.no_fault.table().to_dict("records")]
        text += ["trips with no fault", "", table_text(records, list(records[0])), ""]
    return text


def _bracketed(row: Mapping[Any, Any]) -> dict[str, object]:
    """A row with each pair of a low and a high end as one bracket.

    Examples
    --------
    >>> _bracketed({"component": "Alder/L1/relay 1", "p_any_low": 0.5, "p_any_high": 0.75})
    {'component': 'Alder/L1/relay 1', 'p_any': '0.5…0.75'}
    """
    found: dict[str, object] = {}
    for key, value in row.items():
        name = str(key)
        if name.endswith("_low"):
            found[name.removesuffix("_low")] = show(value, row[name.removesuffix("_low") + "_high"])
        elif not name.endswith("_high"):
            found[name] = value
    return found


def _time(low_us: int | None, high_us: int | None) -> str:
    def word(t: int | None) -> str:
        return "never" if t is None else f"{t / 1000:g}"

    return word(low_us) if low_us == high_us else f"{word(low_us)}…{word(high_us)}"


def _short_distribution(found: Mapping[int, Bracket]) -> str:
    """The likeliest counts, each with the probability it has at least.

    Examples
    --------
    >>> _short_distribution({1: Bracket(0.0004, 0.0005), 2: Bracket(0.9794, 0.98), 3: Bracket(0.02, 0.0201)})
    '2: 0.979, 3: 0.02'
    """
    likely = sorted(found.items(), key=lambda item: (-float(item[1].low), item[0]))[:3]
    told = [(n, math.floor(1000 * float(b.low)) / 1000) for n, b in sorted(likely)]
    return ", ".join(f"{count}: {p:g}" for count, p in told if p > 0)


def _points(s: LocationStudy) -> list[dict[str, object]]:
    """Single points of failure over all locations: the worst each does, and where."""
    order = {"not cleared": 0, "late": 1, "more breakers": 2}
    found: dict[str, dict[str, object]] = {}
    for r in s.results:
        for p in r.single_points:
            row = found.setdefault(
                p.failure,
                {"single_point_of_failure": p.failure, "p": float(p.probability), "worst": p.kind, "locations": 0},
            )
            if order[p.kind] < order[str(row["worst"])]:
                row["worst"] = p.kind
            row["locations"] = int(str(row["locations"])) + 1
    return sorted(
        found.values(),
        key=lambda x: (order[str(x["worst"])], -float(str(x["p"])), str(x["single_point_of_failure"])),
    )


def _side_by_side(studies: Mapping[str, LocationStudy]) -> tuple[list[dict[str, object]], list[str]]:
    comparison = compare(studies)
    rows: list[dict[str, object]] = []
    for measure in dict.fromkeys(c.measure for c in comparison.rows):
        row: dict[str, object] = {"measure": measure}
        for name in comparison.variants:
            cell = comparison.of(measure, name)
            mark = "" if measure in _GIVEN else MARKS.get(cell.verdict, "")
            row[name] = f"{show(cell.value.low, cell.value.high)} {mark}".rstrip()
        rows.append(row)
    return rows, ["measure", *comparison.variants]
