"""Failure data given as rates, and the table of starting values: what they give and what they refuse."""

from __future__ import annotations

from pathlib import Path

import pytest

from schemesim.errors import InputError
from schemesim.scheme.failure_data import FailureData, Override
from schemesim.scheme.model import MODES, ComponentKind, FailureMode
from schemesim.scheme.redundancy import iec_61508_pfd, redundant
from schemesim.scheme.starting_values import (
    COLUMNS,
    FILE,
    load_starting_values,
    read_starting_values,
)
from schemesim.scheme.unavailability import Over, Quality, RateData, RateRule, optimal_interval_yr, unavailability

RELAY, DC = ComponentKind.RELAY, ComponentKind.DC
FTO, LOST = FailureMode.FAILURE_TO_OPERATE, FailureMode.LOST


def test_the_parts_add_up_by_hand() -> None:
    """One failure a year, half of it found at once; tested every two years for 87.6 h, repaired in 87.6 h.

    Hidden rate 0.5, x = 1: mean 1 − (1 − 1/e) = 1/e; worst 1 − 1/e. Found: 0.5 × 0.01/(1.005). Tests: 0.01/2.
    """
    e = 2.718281828459045
    u = unavailability(
        RateData(
            rate_per_yr=1, coverage=0.5, test_interval_yr=2, test_duration_h=87.6, repair_h=87.6, on_demand=0.001
        )
    )
    assert u.hidden_mean == pytest.approx(1 / e)
    assert u.hidden_worst == pytest.approx(1 - 1 / e)
    assert u.found_in_repair == pytest.approx(0.005 / 1.005)
    assert u.tested_in_repair == pytest.approx((1 - 1 / e) * 0.005)
    assert u.under_test == pytest.approx(0.005)
    assert u.mean == pytest.approx(1 / e + 0.005 / 1.005 + (1 - 1 / e) * 0.005 + 0.005 + 0.001)
    assert u.worst - u.mean == pytest.approx(1 - 2 / e)
    assert u.over(Over.WORST) == u.worst
    assert u.over(Over.MEAN) == u.mean


def test_an_unavailability_is_no_more_than_one() -> None:
    u = unavailability(RateData(rate_per_yr=1000, test_interval_yr=1, repair_h=8760, on_demand=1))
    assert (u.mean, u.worst) == (1.0, 1.0)


@pytest.mark.parametrize(
    ("given", "subject", "expected"),
    [
        ({"rate_per_yr": -1, "revealed": True}, "rate_per_yr", "a number from 0"),
        ({"rate_per_yr": float("nan"), "revealed": True}, "rate_per_yr", "a number from 0"),
        ({"rate_per_yr": True, "revealed": True}, "rate_per_yr", "a number from 0"),
        ({"coverage": 1.01}, "coverage", "a share from 0 to 1"),
        ({"on_demand": 1.01}, "on_demand", "a probability from 0 to 1"),
        ({"repair_h": -1}, "repair_h", "a number from 0"),
        ({"test_interval_yr": 0}, "test_interval_yr", "a number over 0"),
        ({"rate_per_yr": 1}, "test_interval_yr", "stay hidden without a test"),
        ({"test_duration_h": 4}, "test_duration_h", "test_interval_yr beside it"),
        ({"test_duration_h": 88, "test_interval_yr": 0.01}, "test_duration_h", "at most the interval of 87.6 h"),
        ({"coverage": 0.5, "revealed": True}, "coverage", "none beside revealed"),
    ],
)
def test_bad_data_are_refused(given: dict[str, float], subject: str, expected: str) -> None:
    with pytest.raises(InputError) as caught:
        RateData(**given)  # type: ignore[arg-type]  # what a user may write
    (problem,) = caught.value.problems
    assert problem.subject == subject
    assert expected in problem.expectation


def test_bad_questions_are_refused() -> None:
    item = RateData(on_demand=0.1)
    for wrong in (
        lambda: redundant(item, 3, 2),
        lambda: redundant(item, 0, 2),
        lambda: redundant(item, 1, 2, beta=1.5),
        lambda: iec_61508_pfd("1oo3", 1e-6, 0),
        lambda: iec_61508_pfd("1oo2", -1e-6, 0),
        lambda: iec_61508_pfd("1oo2", 1e-6, 1.1),
        lambda: optimal_interval_yr(0, 4),
        lambda: optimal_interval_yr(0.01, 4, 1.0),
        lambda: RateRule(kind=DC, mode=FTO, data=item),
    ):
        with pytest.raises(InputError):
            wrong()


def test_rates_win_over_kinds_and_overrides_over_rates() -> None:
    rule = RateRule(kind=RELAY, mode=FTO, data=RateData(on_demand=0.25))
    here = RateRule(kind=RELAY, mode=FTO, data=RateData(on_demand=0.5), pattern="Alder/*")
    data = FailureData(
        modes={RELAY: {FTO: 0.125, FailureMode.DELAYED_OPERATION: 0.0625}},
        rates=(rule, here),
        overrides=(Override("Alder/L9/*", {FTO: 0.75}),),
    )

    def p(name: str, kind: ComponentKind = RELAY) -> float:
        return float(data.component(name, kind).probability(FTO))

    assert (p("Birch/L1/relay 1"), p("Alder/L1/relay 1"), p("Alder/L9/relay 1")) == (0.25, 0.5, 0.75)
    assert p("Alder.L1.CB/coil 1", ComponentKind.COIL) == 0  # of another kind
    assert data.component("Birch/L1/relay 1", RELAY).probability(FailureMode.DELAYED_OPERATION) == 0.0625
    assert data.rule_of("Birch/L1/relay 1", RELAY, FTO) is rule
    assert data.rule_of("Alder/L1/relay 1", RELAY, FTO) is here
    assert data.rule_of("Alder/L9/relay 1", RELAY, FTO) is None
    assert data.rule_of("Alder/L1/relay 1", RELAY, FailureMode.DELAYED_OPERATION) is None


def test_the_worst_of_the_interval_can_be_asked_for() -> None:
    rule = RateRule(kind=DC, mode=LOST, data=RateData(rate_per_yr=0.02, test_interval_yr=1))
    mean, worst = (
        float(FailureData(modes={}, rates=(rule,), over=over).component("DC", DC).probability(LOST)) for over in Over
    )
    assert mean == pytest.approx(0.01, rel=0.01)
    assert worst == pytest.approx(0.02, rel=0.011)


def test_the_table_that_ships_has_every_mode_with_its_source() -> None:
    values = load_starting_values()
    assert {(r.rule.kind, r.rule.mode) for r in values.rows} == {(k, m) for k, modes in MODES.items() for m in modes}
    assert all(r.source for r in values.rows)
    table = values.table()
    assert list(table["quality"]) == [str(r.quality) for r in values.rows]
    assert (table["p_mean"] <= table["p_worst"]).all()
    assert str(values.rows[0].rule.mode) in values._repr_html_()


def test_the_table_that_ships_keeps_to_the_orders_of_magnitude_from_memory() -> None:
    """Starting unavailabilities: relay 1E-4 and settings or logic 1E-3, CT and VT 1E-5 a phase, DC 5E-5, breaker
    3E-4, fibre channel 1E-4 to leased 1E-3, hidden over-reach 1E-2; each within a factor of three or so."""
    data = load_starting_values().failure_data()
    wanted = {
        (RELAY, FTO): 1.1e-3,
        (RELAY, FailureMode.UNWANTED_OPERATION): 1e-2,
        (ComponentKind.CT_CORE, FailureMode.OPEN): 3e-5,
        (ComponentKind.VT_WINDING, LOST): 3e-5,
        (DC, LOST): 5e-5,
        (ComponentKind.CHANNEL, LOST): 3e-4,
        (ComponentKind.BREAKER, FailureMode.DOES_NOT_OPEN): 3e-4,
    }
    for (kind, mode), p in wanted.items():
        assert p / 3 < data.component("any", kind).probability(mode) < p * 3, (kind, mode)


HEAD = ",".join(COLUMNS)
GOOD = "dc,lost,0.02,,0.9,1,0,12,latent,measured,our records 2010-2020"


def test_a_table_of_ones_own_is_read(tmp_path: Path) -> None:
    file = tmp_path / "own.csv"
    file.write_text(f"\ufeff{HEAD}\r\n\r\n{GOOD}\r\n", encoding="utf-8")
    values = load_starting_values(file)
    row = values.of(DC, LOST)
    assert row is not None
    assert (row.quality, row.source) == (Quality.MEASURED, "our records 2010-2020")
    assert row.rule.data == RateData(rate_per_yr=0.02, coverage=0.9, test_interval_yr=1, repair_h=12)
    assert values.of(RELAY, FTO) is None
    data = values.failure_data(Over.WORST, relay_beta=0.1)
    assert data.component("A/DC 1", DC).probability(LOST) == pytest.approx(0.002 + 0.018 * 12 / 8760, rel=0.01)
    assert data.relay_beta == 0.1


@pytest.mark.parametrize(
    ("text", "line", "column", "expected"),
    [
        (f"{HEAD}\n{GOOD.replace('0.02', '-0.02')}", 2, "rate_per_yr", "a number from 0"),
        (f"{HEAD}\n{GOOD.replace('0.9,', '1.1,')}", 2, "coverage", "a share from 0 to 1"),
        (f"{HEAD}\n\n{GOOD.replace(',1,0,', ',,0,')}", 3, "test_interval_yr", "stay hidden without a test"),
        (f"{HEAD}\n{GOOD.replace('0.02', 'twice')}", 2, "rate_per_yr", "a number"),
        (f"{HEAD}\n{GOOD.replace('0.02', '')}", 2, "rate_per_yr", "a rate, or a probability on demand"),
        (f"{HEAD}\n{GOOD.replace('dc', 'dcs')}", 2, "kind", "one of relay, ct_core"),
        (f"{HEAD}\n{GOOD.replace('lost', 'open')}", 2, "mode", "one of lost"),
        (f"{HEAD}\n{GOOD.replace('measured', 'good')}", 2, "quality", "one of published"),
        (f"{HEAD}\n{GOOD.replace('latent', 'hidden')}", 2, "detection", "one of latent, revealed"),
        (f"{HEAD}\n{GOOD.rpartition(',')[0]},", 2, "source", "where the values come from"),
        (f"{HEAD}\n{GOOD}\n{GOOD}", 3, "mode", "each mode of a dc once"),
        (f"{HEAD}\n{GOOD},x", 2, "", "11 cells"),
        (f'{HEAD}\n{GOOD},"x', 2, "", "quotes closed"),
        (f"{HEAD.replace('coverage', 'coverages')}\n{GOOD}", 1, "coverages", "one of kind"),
        (HEAD, None, "", "one row at least"),
    ],
)
def test_a_bad_table_is_refused_at_its_line(text: str, line: int | None, column: str, expected: str) -> None:
    with pytest.raises(InputError) as caught:
        read_starting_values(text, FILE)
    first = caught.value.problems[0]
    assert (first.file, first.line, first.path) == (FILE, line, column)
    assert expected in first.expectation


def test_a_table_that_cannot_be_read_is_refused(tmp_path: Path) -> None:
    (tmp_path / "latin.csv").write_bytes(HEAD.encode() + b"\n\xff")
    for name, expected in (("none.csv", "a readable CSV file"), ("latin.csv", "UTF-8 text")):
        with pytest.raises(InputError, match=expected):
            load_starting_values(tmp_path / name)
