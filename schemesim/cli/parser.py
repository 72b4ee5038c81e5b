"""Arguments of the command line, and what becomes of errors and interrupts."""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Sequence

from schemesim.cli.audit import add_audit
from schemesim.cli.campaign import add_campaign, campaign
from schemesim.cli.decide import add_decide
from schemesim.cli.elements import add_elements
from schemesim.cli.output import BAD_INPUT, CANNOT_GO_ON, DONE, INTERRUPTED, NOTE, check_place
from schemesim.cli.register import add_register
from schemesim.cli.report import add_report
from schemesim.cli.testing import add_testing
from schemesim.cli.timer import add_timer
from schemesim.errors import InputError, SchemesimError

_EXAMPLES = """examples:
  python -m schemesim check scenario.yaml
  python -m schemesim show scenario.yaml --run "relay fails"
  python -m schemesim show scenario.yaml --fault L1@0.9 --fail "Alder/L1/relay 1: failure_to_operate"
  python -m schemesim study scenario.yaml --compare --workers 2 --csv locations.csv
  python -m schemesim inject scenario.yaml --fault L1 --order 2 --json

exit status: 0 done, 1 a run that cannot go on, 2 bad input, 130 interrupted
"""


def parser() -> argparse.ArgumentParser:
    """The parser of the command line."""
    top = argparse.ArgumentParser(
        prog="python -m schemesim",
        description="Protection schemes on a scenario file: clearing sequences, failures, odds at every location.",
        epilog=_EXAMPLES + "\n" + NOTE,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    common = argparse.ArgumentParser(add_help=False)
    common.add_argument("file", metavar="FILE", help="scenario file (YAML)")
    common.add_argument("--json", action="store_true", help="print one JSON object, {\"schemesim\": 1, \"kind\": …}")
    common.add_argument("--csv", metavar="PATH", help="write the table as CSV too, whole or not at all")
    common.add_argument("--quiet", action="store_true", help="no progress on the error output")
    place = argparse.ArgumentParser(add_help=False)
    place.add_argument("--fault", metavar="SECTION[@POS]", help="where the fault falls, e.g. L1@0.9")
    place.add_argument("--policy", metavar="NAME", help="a policy other than the one in use")
    place.add_argument("--dispatch", metavar="NAME", help="a dispatch other than that of the scenario's study")
    commands = top.add_subparsers(dest="command", required=True, metavar="COMMAND")
    commands.add_parser("check", parents=[common], help="check a scenario and say what is in it")
    show = commands.add_parser("show", parents=[common, place], help="one clearing sequence as a table")
    show.add_argument("--run", metavar="NAME", help="a run listed in the scenario")
    show.add_argument(
        "--fail",
        metavar="FAILURE",
        action="append",
        default=[],
        help='"component: mode" or "common cause NAME"; may be given several times',
    )
    show.add_argument("--all", action="store_true", help="every row of the log")
    study = commands.add_parser("study", parents=[common], help="the odds at every fault location")
    study.add_argument("--policy", metavar="NAME", action="append", help="may be given several times")
    study.add_argument("--compare", action="store_true", help="all policies of the scenario side by side")
    study.add_argument("--epsilon", metavar="MASS", help="probability left unexplored at each location")
    study.add_argument("--workers", metavar="N", default="1", help="processes (1 by default; results are the same)")
    study.add_argument("--location", metavar="SECTION[@POS]", action="append", help="only here; several times")
    study.add_argument("--no-fault", action="store_true", help="trips with no fault too")
    inject = commands.add_parser("inject", parents=[common, place], help="every single failure, or every pair")
    inject.add_argument("--order", metavar="1|2", default="1", help="1: every single failure; 2: every pair too")
    inject.add_argument("--all", action="store_true", help="failures that change nothing too")
    add_decide(commands, common)
    add_register(commands, common)
    add_audit(commands, common)
    add_elements(commands, common)
    add_testing(commands, common)
    add_timer(commands, common)
    add_report(commands, common)
    add_campaign(commands)
    return top


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line; returns the exit status.

    Parameters
    ----------
    arguments : sequence of str or None
        By default those of the process.
    """
    options = parser().parse_args(arguments)
    try:
        status = _run(options)
        sys.stdout.flush()
    except InputError as error:
        count = len(error.problems)
        print(error, file=sys.stderr)
        if count > 1:
            print(f"{count} mistakes", file=sys.stderr)
        if any(p.line is not None for p in error.problems):  # they stand in a file, which was read no further
            print("once these are mended, mistakes of a later kind may appear", file=sys.stderr)
        return BAD_INPUT
    except SchemesimError as error:
        print(error, file=sys.stderr)
        return CANNOT_GO_ON
    except KeyboardInterrupt:
        print("interrupted; nothing was finished", file=sys.stderr)
        return INTERRUPTED
    except BrokenPipeError:  # the reader of the output has gone; there is nobody to tell
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return DONE
    return status


def _run(options: argparse.Namespace) -> int:
    if options.command == "campaign":  # its file may be a store
        if options.csv is not None:
            check_place(options.csv, options.file)
        return campaign(options)
    from schemesim.cli.audit import audit
    from schemesim.cli.commands import check, inject, show  # heavy: not needed to tell of bad arguments
    from schemesim.cli.decide import decide
    from schemesim.cli.elements import elements, settings
    from schemesim.cli.register import outages, register
    from schemesim.cli.report import report
    from schemesim.cli.study import study
    from schemesim.cli.testing import intervals, misoperations
    from schemesim.cli.timer import dial, importance, timer
    from schemesim.scenario import load_scenario

    if options.csv is not None:
        check_place(options.csv, options.file)
    command = {"check": check, "show": show, "inject": inject, "study": study, "decide": decide,
               "register": register, "outages": outages, "audit": audit, "settings": settings, "elements": elements,
               "intervals": intervals, "misoperations": misoperations,
               "timer": timer, "dial": dial, "importance": importance, "report": report}[options.command]  # fmt: skip
    return command(load_scenario(options.file), options)
