"""Failure injection: every single failure and every pair, against running each of them."""

from __future__ import annotations

from fractions import Fraction
from itertools import combinations
from typing import Any

import pytest

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.event import run_event
from schemesim.errors import InputError
from schemesim.scheme.model import Scheme
from schemesim.study.injection import inject
from schemesim.study.tree import explore
from tests.unit.small_schemes import case_of, feeder_case, feeder_scheme, voting_scheme

SCHEMES = {"feeder": feeder_scheme(), "voting": voting_scheme()}


@pytest.mark.parametrize("scheme", SCHEMES.values(), ids=list(SCHEMES))
def test_all_pairs_are_what_running_them_gives(scheme: Scheme) -> None:
    case = case_of(scheme)
    found = inject(case, 2, "all")
    nowhere = {"R3: failure_to_operate", "R3: delayed_operation"}  # no block of the voting scheme depends on them
    everything = [q for q, question in enumerate(case.questions) if question.name not in nowhere]
    pairs = [p for p in combinations(everything, 2) if p[1] not in case.program.siblings[p[0]]]
    assert {r.questions for r in found.rows} == {(), *((q,) for q in everything), *pairs}
    assert found.runs < len(found.rows)
    for row in found.rows:
        run = run_event(case, FixedAnswers(case.program, row.questions))
        assert (row.outcome, row.final_mask) == (run.outcome, run.final_mask)
        assert set(row.met) == {case.questions[q].name for q, yes in run.asked if yes}
        assert row.immaterial == (len(row.met) < len(row.questions))


@pytest.mark.parametrize("scheme", SCHEMES.values(), ids=list(SCHEMES))
def test_met_is_all_less_the_immaterial(scheme: Scheme) -> None:
    case = case_of(scheme)
    everything, met = inject(case, 2, "all"), inject(case, 2)
    assert met.rows == tuple(r for r in everything.rows if not r.immaterial)
    assert len(met.rows) < len(everything.rows)


def test_injection_and_the_tree_meet_the_same_failures() -> None:
    case = feeder_case()
    leaves = explore(case, epsilon=0).leaves
    for order in (1, 2):
        wanted = {leaf.yes for leaf in leaves if len(leaf.yes) <= order}
        assert {r.questions for r in inject(case, order).rows} == wanted


def test_rows_by_hand() -> None:
    found = inject(feeder_case(), 2, "all")
    assert (found.base.outcome.t_clear_us, found.base.cleared_by, found.base.excess) == (70_000, "main", 0)
    stuck = found.where(["CB1: does_not_open"])
    assert (stuck.outcome.t_clear_us, stuck.cleared_by, stuck.excess) == (220_000, "breaker failure", 1)
    assert stuck.probability == Fraction(1, 8)
    alone = found.where(["M2: failure_to_operate"])
    assert (alone.changed, alone.immaterial) == (True, False)  # the trip came by the other relay: another output
    unmet = found.where(["IN: failure_to_operate"])
    assert (unmet.changed, unmet.immaterial, unmet.met) == (False, True, ())
    pair = found.where(["IN: failure_to_operate", "DC: lost"])
    assert (str(pair.outcome.status), pair.cleared_by) == ("not cleared", "")
    assert pair.probability == Fraction(1, 3000)
    table = found.table()
    assert len(table) == len(found.rows)
    assert table["failures"][0] == "none"
    assert table.loc[table["failures"] == "CB1: does_not_open", "t_clear_ms"].item() == 220.0
    with pytest.raises(InputError, match="among the candidates"):
        found.where(["M1: delayed_operation", "M1: failure_to_operate"])  # they exclude each other


@pytest.mark.parametrize("bad", [{"order": 3}, {"order": 0}, {"candidates": "some"}])
def test_bad_options_are_refused(bad: dict[str, Any]) -> None:
    with pytest.raises(InputError):
        inject(feeder_case(), **bad)
