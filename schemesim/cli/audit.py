"""The command ``audit``: before any simulation, the independence of the sets and the trip matrix."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING, Any

from schemesim.cli.output import DONE, check_place, put, table_text, write_csv
from schemesim.errors import InputError, reject

if TYPE_CHECKING:
    from schemesim.scenario import Scenario
    from schemesim.scheme.independence import Audit
    from schemesim.scheme.trip_comparison import TripComparison
    from schemesim.scheme.trip_matrix import TripMatrix

MOST_ROWS = 60
"""Most rows of one table in a text."""


def add_audit(commands: Any, common: argparse.ArgumentParser) -> None:
    """Add the command to the parser."""
    audit = commands.add_parser("audit", parents=[common], help="what the sets share, and the trip matrix")
    audit.add_argument("--policy", metavar="NAME", help="a policy other than the one in use")
    audit.add_argument("--element", metavar="NAME", action="append", help="only this element; several times")
    audit.add_argument("--expect", metavar="CSV", help="a trip matrix to compare with, one column for each breaker")
    audit.add_argument("--matrix", metavar="CSV", help="write the trip matrix, one column for each breaker")


def audit(scenario: Scenario, options: argparse.Namespace) -> int:
    """What the sets of main protection share, and the trip matrix, compared with one that is given."""
    from schemesim.scheme.independence import independence
    from schemesim.scheme.trip_comparison import compare_trip_matrix
    from schemesim.scheme.trip_matrix import trip_matrix

    if options.matrix is not None:
        try:
            check_place(options.matrix, options.file)
        except InputError as error:
            raise reject("--matrix", options.matrix, error.problems[0].expectation) from error
        if options.csv is not None and options.csv == options.matrix:
            raise reject("--matrix", options.matrix, "another file than --csv")
    scheme = scenario.scheme(options.policy)
    found = independence(scheme, options.element)
    matrix = trip_matrix(scheme)
    compared = None if options.expect is None else compare_trip_matrix(matrix, options.expect)
    wide = [{**r.key, **{b: r.cell(b) for b in matrix.breakers}} for r in matrix.rows]
    if options.matrix is not None:
        write_csv(options.matrix, wide)
    shared = found.records()
    ways = list(matrix.records())
    content: dict[str, object] = {
        "policy": options.policy or scenario.policy,
        "elements": [
            {
                "element": e,
                "sets": sorted({label for at, *two in found.pairs if at == e for label in two}),
                "fully_duplicated": found.fully_duplicated(e),
                "shared_kinds": list(found.kinds.get(e, ())),
            }
            for e in sorted(found.protects)
        ],
        "shared": shared,
        "trip_matrix": ways,
        "differences": None if compared is None else _differences(compared),
        "compared": None if compared is None else list(compared.compared),
    }
    put(options, scenario.name, content, shared, _text(found, matrix, compared, content["policy"]))
    return DONE


def _differences(compared: TripComparison) -> list[dict[str, object]]:
    return [
        {"kind": d.kind, "output": d.output, "breaker": d.breaker, "mark": d.mark} for d in compared.differences
    ]


def _text(found: Audit, matrix: TripMatrix, compared: TripComparison | None, policy: object) -> list[str]:
    from schemesim.scheme.trip_matrix import MARKS

    full = [e for e in found.protects if found.fully_duplicated(e)]
    rows: list[dict[str, object]] = []
    for e in sorted(found.protects):
        kinds = found.kinds.get(e)
        shares = "one set only" if kinds is None else ", ".join(kinds) or "nothing"
        rows.append({"element": e, "fully_duplicated": e in full, "the sets share": shares})
    text = [
        f"policy {policy}: {len(full)} of {len(found.protects)} elements fully duplicated "
        "(nothing shared but breakers, CTs and VTs)",
        "",
        table_text(rows, ["element", "fully_duplicated", "the sets share"]),
        "",
    ]
    secondary = [r for r in found.records() if not r["primary"]]
    if secondary:
        text.append("shared besides breakers, CTs and VTs; stops: breakers that no set can trip without it")
        text += _table(secondary, ["element", "sets", "kind", "item", "breakers", "stops"])
    marks = ", ".join(f"{m} {what}" for m, what in MARKS.items())
    text += [f"trip matrix: {len(matrix.rows)} trip outputs, {len(matrix.breakers)} breakers", marks]
    cells = [
        {"output": r.output, "breakers": ", ".join(f"{b} ({r.cell(b)})" for b in r.ways)} for r in matrix.rows
    ]
    text += _table(cells, ["output", "breakers"])
    if compared is not None:
        text.append(
            f"against the table given: {len(compared.missing)} missing in the scheme, {len(compared.extra)} extra; "
            f"{compared.outputs} trip"
            f" outputs are in it, {compared.unlisted} in no row"
        )
        text += _table(_differences(compared), ["kind", "output", "breaker", "mark"])
    return text[:-1] if text and not text[-1] else text


def _table(rows: list[dict[str, Any]], columns: list[str]) -> list[str]:
    if not rows:
        return [""]
    more = [f"… and {len(rows) - MOST_ROWS} more; all of them with --json"] if len(rows) > MOST_ROWS else []
    return [table_text(rows[:MOST_ROWS], columns), *more, ""]
