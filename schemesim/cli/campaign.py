"""The command ``campaign``: run one on a scenario, show and export what a store holds, replay any trial."""

from __future__ import annotations

import argparse
import os
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from typing import TYPE_CHECKING, Any, cast

from schemesim.cli.output import DONE, INTERRUPTED, NOTE, number_of, plain, put, table_text, whole_of
from schemesim.errors import nearest, reject
from schemesim.plant.model import Location

if TYPE_CHECKING:
    from schemesim.scenario import Scenario
    from schemesim.study.campaign_run import CampaignResult
    from schemesim.study.montecarlo import Method

MAX_TRIALS = 10**12
MAX_WORKERS = 256
MAX_ROWS = 200
"""Most rows of a table of places in a text."""

SEPARATOR = ";"
"""Between the failures of a set in a file of failure sets."""


def add_campaign(commands: Any) -> None:
    """Add the command to the parser."""
    top = commands.add_parser(
        "campaign",
        help="Monte Carlo or failure sets over locations and policies, kept in a store",
        description="Trials at many fault locations under several policies, kept in a store as they finish.",
        epilog=NOTE,
    )
    actions = top.add_subparsers(dest="action", required=True, metavar="ACTION")
    out = argparse.ArgumentParser(add_help=False)
    out.add_argument("--json", action="store_true", help="print one JSON object")
    out.add_argument("--csv", metavar="PATH", help="write the table as CSV too, whole or not at all")
    odds = argparse.ArgumentParser(add_help=False)
    odds.add_argument("--confidence", metavar="SHARE", default="0.95", help="of each interval (0.95)")
    odds.add_argument("--interval", choices=["wilson", "clopper_pearson"], default="wilson", help="kind (wilson)")
    store = argparse.ArgumentParser(add_help=False)
    store.add_argument("file", metavar="STORE", help="store of a campaign")

    run = actions.add_parser("run", parents=[out, odds], help="run what is not in the store yet")
    run.add_argument("file", metavar="SCENARIO", help="scenario file (YAML)")
    run.add_argument("--store", metavar="PATH", required=True, help="where results are kept; gone on with if there")
    run.add_argument("--policy", metavar="NAME", action="append", help="a variant; several times; that in use else")
    run.add_argument("--compare", action="store_true", help="every policy of the scenario")
    run.add_argument("--location", metavar="SECTION[@POS]", action="append", help="only here; several times")
    run.add_argument("--no-fault", action="store_true", help="trips with no fault too")
    run.add_argument("--trials", metavar="N", help="trials at each place (as in the scenario)")
    run.add_argument("--seed", metavar="N", help="as in the scenario")
    run.add_argument(
        "--failures", metavar="PATH", help=f"failure sets instead of trials: one a line, failures parted by {SEPARATOR}"
    )
    run.add_argument("--relay", metavar="NAME", help="count operations of this relay (dependability, security)")
    run.add_argument("--station", metavar="NAME", help="… of the protection of this station")
    run.add_argument("--workers", metavar="N", default="1", help="processes (1; results are the same)")
    run.add_argument("--chunk", metavar="N", help="trials in one piece of work (results are the same)")
    run.add_argument("--quiet", action="store_true", help="no progress on the error output")

    show = actions.add_parser("show", parents=[store, out, odds], help="measures of every place, with intervals")
    show.add_argument("--variant", metavar="NAME", help="only this policy")
    show.add_argument("--location", metavar="SECTION[@POS]", help="only here, with all kinds of ending")

    export = actions.add_parser("export", parents=[store, odds], help="write what is in a store as CSV or Parquet")
    export.add_argument("out", metavar="OUT", help="file that ends in .csv or .parquet")
    export.add_argument("--measures", action="store_true", help="measures of places, instead of counts of endings")
    export.set_defaults(csv=None, json=False)

    replay = actions.add_parser("replay", parents=[store, out], help="one trial as a full clearing sequence")
    replay.add_argument("--location", metavar="SECTION[@POS]", required=True, help="a place of the campaign")
    replay.add_argument("--variant", metavar="NAME", help="policy; needed where there are several")
    replay.add_argument("--trial", metavar="N", required=True, help="number of the trial or failure set, from 0")
    replay.add_argument("--all", action="store_true", help="every row of the log")


def campaign(options: argparse.Namespace) -> int:
    """Carry out an action."""
    actions: Mapping[str, Callable[[argparse.Namespace], int]] = {
        "run": _run, "show": _show, "export": _export, "replay": _replay,
    }  # fmt: skip
    return actions[options.action](options)


class TrialProgress:
    """Trials done of all, and the rate at which they are run, on the error output."""

    def __init__(self, quiet: bool, clock: Callable[[], float] = time.monotonic) -> None:
        self.quiet, self.clock = quiet, clock
        self._first: tuple[float, int] | None = None
        self._shown = 0.0
        self._line = sys.stderr.isatty()

    def __call__(self, done: int, of: int) -> None:
        """So many trials are in, of so many."""
        now = self.clock()
        if self._first is None:
            self._first = now, done
        every = 0.2 if self._line else 5.0
        if self.quiet or (now - self._shown < every and done < of and self._shown):
            return
        self._shown = now
        started, before = self._first
        rate = (done - before) / (now - started) if now > started else 0.0
        text = f"campaign: {done} of {of} trials"
        if done > before:
            text += f", {rate:.3g} a second, {(of - done) / rate:.0f} s to go"
        elif before:
            text += ", in the store already"
        end = "\n" if done == of or not self._line else ""
        print(f"\r{text}\033[K" if self._line else text, end=end, file=sys.stderr, flush=True)


def _run(options: argparse.Namespace) -> int:
    from schemesim.scenario import load_scenario
    from schemesim.scenario.campaigns import campaign_scenario, source_of
    from schemesim.scenario.model import location
    from schemesim.study.campaign_run import CHUNK, run_campaign

    for path in (options.store, options.csv):
        if path is not None and os.path.realpath(path) == os.path.realpath(options.file):
            raise reject("campaign", path, "another file than the scenario")
    confidence = number_of(options.confidence, "--confidence", 1e-6, 1 - 1e-9)
    trials = None if options.trials is None else whole_of(options.trials, "--trials", 1, MAX_TRIALS)
    seed = None if options.seed is None else whole_of(options.seed, "--seed", 0, 2**63 - 1)
    workers = whole_of(options.workers, "--workers", 1, MAX_WORKERS)
    chunk = CHUNK if options.chunk is None else whole_of(options.chunk, "--chunk", 1, MAX_TRIALS)
    if options.failures is not None and options.trials is not None:
        raise reject("--failures", options.failures, "no --trials beside it: each set is run once")
    scenario = load_scenario(options.file)
    names = _policies(scenario, options)
    found = campaign_scenario(
        scenario,
        names,
        locations=[location(scenario.plant, text) for text in options.location] if options.location else None,
        no_fault=options.no_fault,
        trials=trials,
        seed=seed,
        failures=() if options.failures is None else _sets(options.failures),
        observe=_outputs(scenario, names, options),
    )
    result = run_campaign(
        found, options.store, workers=workers, chunk=chunk,
        progress=TrialProgress(options.quiet), source=source_of(scenario),
    )  # fmt: skip
    _put(options, scenario.name, result, confidence, options.interval)
    if not result.complete:
        print("interrupted; what was finished is in the store, and the same call goes on from there", file=sys.stderr)
    return DONE if result.complete else INTERRUPTED


def _policies(scenario: Scenario, options: argparse.Namespace) -> list[str]:
    if options.policy and options.compare:
        raise reject("campaign run", "both", "--policy or --compare")
    return list(scenario.policies) if options.compare else options.policy or [scenario.policy]


def _sets(path: str) -> list[tuple[str, ...]]:
    """Failure sets of a file: one a line; ``none`` is a set without failures, and what follows # is left out."""
    try:
        with open(path, encoding="utf-8") as stream:
            lines = [line.partition("#")[0].strip() for line in stream]
    except (OSError, UnicodeDecodeError) as error:
        raise reject("--failures", path, f"a text file that can be read ({error})") from None
    found = []
    for line in filter(None, lines):
        names = tuple(name.strip() for name in line.split(SEPARATOR) if name.strip())
        found.append(() if names == ("none",) else names)
    if not found:
        raise reject("--failures", path, "a file with a failure set on a line")
    return found


def _outputs(scenario: Scenario, names: Sequence[str], options: argparse.Namespace) -> frozenset[str]:
    from schemesim.study.dependability import outputs_of

    if options.relay is None and options.station is None:
        return frozenset()
    found: set[str] = set()
    for name in names:
        if name in scenario.policies:
            found.update(outputs_of(scenario.scheme(name), relay=options.relay, station=options.station))
    return frozenset(found)


def _show(options: argparse.Namespace) -> int:
    from schemesim.study.campaign_run import load_campaign

    confidence = number_of(options.confidence, "--confidence", 1e-6, 1 - 1e-9)
    result = load_campaign(options.file)
    _put(options, "", result, confidence, options.interval)
    return DONE


def _put(
    options: argparse.Namespace, name: str, result: CampaignResult, confidence: float, method: Method
) -> None:
    places = list(result.places)
    one_variant = getattr(options, "variant", None)
    one_event = _printed(options.location) if options.action == "show" else None
    for what, wanted, known in (
        ("variant", one_variant, {p.variant for p in places}),
        ("location", one_event, {p.event for p in places}),
    ):
        if wanted is not None and wanted not in known:
            raise reject(what, wanted, f"a {what} that was counted", tip=nearest(wanted, known))
    chosen = [p for p in places if one_variant in (None, p.variant) and one_event in (None, p.event)]
    rows = [p.row(confidence, method) for p in chosen]
    watched = any(r[f"{s}_estimate"] is not None for r in rows for s in ("dependability", "security"))
    shares = ["p_cleared", "p_within_limit", "p_by_main", "p_selective"]
    shares += ["dependability", "security"] if watched else []
    shown = [
        {
            "location": r["event"], "variant": r["variant"], "trials": r["trials"],
            **{s: _interval(r, s) for s in shares},
            "breakers": _interval(r, "breakers_mean"), "t_p95_ms": r["t_clear_ms_p95"],
        }
        for r in rows[:MAX_ROWS]
    ]  # fmt: skip
    state = "" if result.complete else "; not complete, the same call goes on from there"
    text = [f"{result.trials} of {max(result.trials, result.wanted)} trials at {len(places)} places{state}", ""]
    if shown:
        text += [table_text(shown, list(shown[0]), 1), ""]
    if len(rows) > MAX_ROWS:
        text += [f"… and {len(rows) - MAX_ROWS} more; all of them with --json or --csv", ""]
    kind = "Wilson" if method == "wilson" else "Clopper–Pearson"
    text += [
        f"low…high: {100 * confidence:g} % interval of each place alone ({kind}; normal for the mean number of",
        "breakers tripped); places and variants share their random numbers, so they are not independent",
    ]
    content: dict[str, object] = {
        "action": options.action, "complete": result.complete, "trials": result.trials, "wanted": result.wanted,
        "confidence": confidence, "interval": method, "rows": rows,
    }  # fmt: skip
    if one_event is not None:
        endings = [_ending(p.variant, t) for p in chosen for t in p.tallies]
        content["endings"] = endings
        text += ["", table_text(endings, list(endings[0]), 1)] if endings else []
    put(options, name, content, rows, text)


def _ending(variant: str, tally: Any) -> dict[str, object]:
    """One kind of ending as a row."""
    end = tally.ending
    times = [us for us, _ in tally.times if us is not None]
    ms = [f"{t / 1000:g}" for t in sorted({min(times), max(times)})] if times else []
    return {
        "variant": variant, "trials": tally.trials, "status": str(end.status), "t_clear_ms": "…".join(ms) or None,
        "cleared_by": None if end.cleared_by is None else end.cleared_by.label,
        "breakers": len(end.breakers), "tripped": ", ".join(sorted(end.breakers)),
    }  # fmt: skip


def _printed(text: str | None) -> str | None:
    """A location as campaigns print it: the middle of a line goes without its position.

    Examples
    --------
    >>> _printed("L1@0.50"), _printed("L1@0.10"), _printed("Alder.B1")
    ('L1', 'L1@0.1', 'Alder.B1')
    """
    section, at, position = (text or "").rpartition("@")
    try:
        return str(Location(section, float(position))) if at else text
    except ValueError:
        return text


def _interval(row: Mapping[str, object], name: str) -> str | None:
    """An estimate and its interval in one cell.

    Examples
    --------
    >>> _interval({"p_estimate": 0.5, "p_low": 0.25, "p_high": 0.75}, "p")
    '0.5 (0.25…0.75)'
    """
    value, low, high = (cast("float | None", row[key]) for key in (f"{name}_estimate", f"{name}_low", f"{name}_high"))
    if value is None or low is None or high is None or value != value:
        return None
    return f"{value:.5g} ({low:.5g}…{high:.5g})"


def _export(options: argparse.Namespace) -> int:
    from schemesim.scenario.campaigns import export_campaign

    if os.path.realpath(options.out) == os.path.realpath(options.file):
        raise reject("campaign export", options.out, "another file than the store")
    confidence = number_of(options.confidence, "--confidence", 1e-6, 1 - 1e-9)
    rows = export_campaign(
        options.file, options.out, measures=options.measures, confidence=confidence, method=options.interval
    )
    print(f"{rows} rows in {options.out}\n\n{NOTE}")
    return DONE


def _replay(options: argparse.Namespace) -> int:
    from schemesim.cli.commands import conditions, outcome_data
    from schemesim.report.timeline import timeline
    from schemesim.scenario.campaigns import campaign_in
    from schemesim.study.campaign_replay import replay_trial

    trial = whole_of(options.trial, "--trial", 0, MAX_TRIALS)
    scenario, found = campaign_in(options.file)
    names = list(found.variants)
    if options.variant is None and len(names) > 1:
        raise reject("campaign replay", "no variant", f"--variant, one of {names}")
    done = replay_trial(found, options.variant or names[0], _printed(options.location) or "", trial, store=options.file)
    hz = scenario.frequency_hz or 50.0
    limit_us = found.limit_at(done.event)
    sequence = timeline(done.case, done.run, frequency_hz=hz, limit_ms=limit_us / 1000)
    rows = [
        {str(k): None if v is None or v != v else v for k, v in row.items()}
        for row in sequence.table(options.all).reset_index().astype(object).to_dict("records")
    ]
    content: dict[str, object] = {
        "action": "replay", "trial": trial, "variant": done.variant, "event": str(done.event),
        "dispatch": done.case.dispatch, "failures": list(done.failures), "counted": done.counted,
        "limit_ms": limit_us / 1000, "frequency_hz": hz, "outcome": outcome_data(done.run.outcome),
        "rows": [plain(row) for row in rows],
    }  # fmt: skip
    what = "failure set" if found.failures else f"seed {found.seed}, trial"
    counted = "just so counted in the store" if done.counted else "not in the store yet"
    text = [f"{what} {trial}: {counted}", *conditions(done.variant, done.case), sequence.to_text(options.all)]
    if scenario.frequency_hz is None:
        text += ["", "cycles of 50 Hz; the scenario states no frequency_hz"]
    put(options, scenario.name, content, rows, text)
    return DONE
