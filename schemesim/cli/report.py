"""The command ``report``: a study as one self-contained HTML page."""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

from schemesim.cli.output import DONE, INTERRUPTED, Progress, number_of, put, whole_of
from schemesim.errors import reject

if TYPE_CHECKING:
    from schemesim.scenario import Scenario


def add_report(commands: Any, common: argparse.ArgumentParser) -> None:
    """Add the command to the parser."""
    one = commands.add_parser("report", parents=[common], help="a study as one self-contained HTML page")
    one.add_argument("--output", metavar="PATH", help="the file written (the scenario's name with .html)")
    one.add_argument("--policy", metavar="NAME", help="a policy other than the one in use")
    one.add_argument("--location", metavar="SECTION[@POS]", action="append", help="only here; several times")
    one.add_argument("--epsilon", metavar="MASS", help="probability left unexplored at each location")
    one.add_argument("--cases", metavar="N", default="100", help="most locations whose worst failure is drawn (100)")
    one.add_argument("--workers", metavar="N", default="1", help="processes (1 by default; results are the same)")


def report(scenario: Scenario, options: argparse.Namespace) -> int:
    """Study a scenario and write the page; an interrupt writes what was finished."""
    from schemesim.cli.study import MAX_WORKERS, _executor
    from schemesim.scenario.model import location
    from schemesim.scenario.reporting import report_scenario
    from schemesim.scenario.studying import study_scenario
    from schemesim.scenario.writing import write_whole

    path = options.output or os.path.splitext(os.path.basename(options.file))[0] + ".html"
    _check_output(path, options)
    at = None if options.location is None else [location(scenario.plant, text) for text in options.location]
    epsilon = None if options.epsilon is None else number_of(options.epsilon, "--epsilon", 1e-12, 0.5)
    most = whole_of(options.cases, "--cases", 0, 10_000)

    def stage(name: str) -> Callable[[int, int], None]:
        return Progress(name, options.quiet, unit="sequences" if name == "pictures" else "locations")

    with _executor(whole_of(options.workers, "--workers", 1, MAX_WORKERS)) as executor:
        study = study_scenario(
            scenario, options.policy, locations=at, epsilon=epsilon, executor=executor, progress=stage("study")
        )
        page = report_scenario(
            scenario, options.policy, study=study, max_cases=most, executor=executor, stage=stage
        )
    write_whole(path, page.html.encode())
    rows = [{"measure": name, "low": float(b.low), "high": float(b.high)} for name, b in study.measures().items()]
    size = len(page.html.encode())
    content: dict[str, object] = {
        "policy": options.policy or scenario.policy,
        "complete": study.complete,
        "locations": len(study.results),
        "output": path,
        "bytes": size,
        "measures": rows,
    }
    text = [] if study.complete else ["interrupted: the page tells what was finished until then", ""]
    text.append(f"{path}: {size / 1024:.0f} kB, {len(study.results)} locations; it opens in any browser")
    put(options, scenario.name, content, rows, text)
    if not study.complete:
        print("interrupted", file=sys.stderr)
    return DONE if study.complete else INTERRUPTED


def _check_output(path: str, options: argparse.Namespace) -> None:
    """Refuse a place that cannot be written, or holds the scenario, before any work is done."""
    if os.path.realpath(path) in {os.path.realpath(x) for x in (options.file, options.csv) if x is not None}:
        raise reject("--output", path, "another file than the scenario and the CSV")
    if os.path.isdir(path) or not os.path.isdir(os.path.dirname(os.path.abspath(path))):
        raise reject("--output", path, "a file in a folder that is there")
