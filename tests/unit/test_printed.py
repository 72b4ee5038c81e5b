"""What results print of themselves: every figure in it is the one the result holds."""

from __future__ import annotations

import math
from fractions import Fraction
from typing import Any

import pytest

from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.study.brackets import Bracket
from schemesim.study.frontier import NextBest, Step, Weighed
from schemesim.study.location import LocationResult
from schemesim.study.locations import LocationStudy, study_locations
from schemesim.study.measures import Quantile
from schemesim.study.misoperations import Judged, Misoperation, MisoperationStudy
from schemesim.study.montecarlo import Share
from schemesim.study.register import register
from schemesim.study.timer_study import TimerStudy
from tests.unit.small_schemes import feeder_scheme, program_of
from tests.unit.test_timer_study import studied, timed


@pytest.fixture(scope="module")
def feeders() -> LocationStudy:
    places = [Location("F1"), Location("F2")]
    return study_locations(program_of(feeder_scheme()), LogicalSensing(), places, limit_us=205_000, epsilon=0)


def test_a_study_of_locations(feeders: LocationStudy) -> None:
    first, *measures = repr(feeders).splitlines()
    runs = sum(r.runs for r in feeders.results)
    points = len(feeders.single_points)
    assert first == f"LocationStudy: 2 locations, {runs} runs, limit 205 ms, {points} single points of failure"
    assert [line.split() for line in measures] == [[name, *repr(b).split()] for name, b in feeders.measures().items()]


@pytest.mark.parametrize(("place", "cleared"), [(0, "70 ms"), (1, "470 ms")])
def test_a_location(feeders: LocationStudy, place: int, cleared: str) -> None:
    """Main protection at 20 + 50 on F1; the infeed's back-up at 20 + 400 + 50 for F2, which has none of its own."""
    found: LocationResult = feeders.results[place]
    first, *figures, last = repr(found).splitlines()
    counts = f"{len(found.single_points)} single points of failure, {found.runs} runs)"
    intended = f"{len(found.intended)} breakers intended"
    assert first == f"LocationResult(F{place + 1}: with no failure cleared at {cleared}, {intended}, {counts}"
    rows = found.table().itertuples(index=False)
    for line, (name, low, high) in zip(figures, rows, strict=True):
        assert line.split()[0] == name
        assert line.split()[1] == repr(Bracket(low, high))
    assert last.endswith(f" {found.clearing.quantile(0.95)!r}")


@pytest.mark.parametrize(
    ("ends", "said"),
    [
        ((70_000, 70_000), "70 ms"),
        ((70_000, 470_500), "70 ms…470.5 ms"),
        ((70_000, None), "70 ms…not cleared"),
        ((None, None), "not cleared"),
    ],
)
def test_a_quantile(ends: tuple[int | None, int | None], said: str) -> None:
    assert repr(Quantile(*ends)) == said


def test_shares() -> None:
    assert repr(Share(1, 8, 0.01, 0.5, 0.9)) == "0.125 (0.01 to 0.5 at 90 %)"
    assert repr(Share(0, 0, 0.0, 1.0, 0.95)) == "nan (0 to 1 at 95 %)"


def judged(per_yr: float | None) -> Judged:
    p = {m: Bracket(0.25, 0.5) if m is Misoperation.SLOW_TRIP else Bracket(0, 0) for m in Misoperation}
    return Judged("F1", per_yr, p, Bracket(0.25, 0.5))


def test_misoperations_a_year() -> None:
    lines = repr(MisoperationStudy((judged(2.0), judged(4.0)))).splitlines()
    assert lines[0] == "MisoperationStudy(2 events)"
    said = {str(m): line.removeprefix(f"  {m}").strip() for m, line in zip(Misoperation, lines[1:], strict=True)}
    assert said.pop(str(Misoperation.SLOW_TRIP)) == "1.5…3 a year"  # (2 + 4) × 0.25 to 0.5
    assert set(said.values()) == {"0 a year"}
    assert repr(MisoperationStudy((judged(None),))).count("no frequencies") == len(Misoperation)


@pytest.mark.parametrize(
    ("cost", "removed", "estimate", "verdict", "ratio"),
    [
        (100.0, (250.0, 300.0), 275.0, "pays", 2.75),
        (100.0, (50.0, 300.0), 175.0, "likely pays", 1.75),
        (100.0, (50.0, 110.0), 80.0, "likely does not pay", 0.8),
        (100.0, (20.0, 100.0), 60.0, "does not pay", 0.6),
        (0.0, (1.0, 2.0), 1.5, "pays", math.inf),
        (0.0, (-2.0, -1.0), -1.5, "does not pay", -math.inf),
    ],
)
def test_an_addition_weighed(
    cost: float, removed: tuple[float, float], estimate: float, verdict: str, ratio: float
) -> None:
    worth = Weighed("second coil", cost, Bracket(*removed), estimate)
    assert (worth.net_estimate, worth.verdict, worth.ratio) == (estimate - cost, verdict, ratio)
    assert worth.net_per_yr == Bracket(removed[0] - cost, removed[1] - cost)


def test_the_next_best_and_what_is_not_possible() -> None:
    worth = Weighed("second coil", 100.0, Bracket(250.0, 300.0), 275.0)
    ledger: Any = None  # is not printed
    found = NextBest("EUR", (Step(1, (worth,), "second coil"),), (("core 9", "there is none"),), ledger, ledger)
    first, line, last = repr(found).splitlines()
    assert first == "NextBest in EUR a year: second coil"
    assert line.split() == ["1", "+", "second", "coil", "cost", "100", "removes", "250…300", "pays"]
    assert last == "  not possible: core 9: there is none"


def test_a_register_counts_by_group() -> None:
    found = register(program_of(feeder_scheme()), LogicalSensing(), [Location("F1"), Location("F2")], limit_us=200_000)
    lines = repr(found).splitlines()
    assert lines[0] == f"Register(5 single points of failure, 0 pairs, 2 locations, {found.runs} runs)"
    # IN alone leaves a fault uncleared; the DC is in group c; the stuck and the slow breaker and the cause stand apart.
    said = {line[:22].strip(): line[22:].strip() for line in lines[1:]}
    assert said["a relay"] == "1 (1 leave a fault uncleared), 0 exempt"
    assert said["b communications"] == "0 (0 leave a fault uncleared), 0 exempt"
    assert said["c station dc supply"] == "1 (0 leave a fault uncleared), 0 exempt"
    assert said["apart"] == "3 (0 leave a fault uncleared), 0 exempt"


def test_timers() -> None:
    """Set to 150 ms; the margin is 150 - 50 - 20."""
    found: TimerStudy = studied(timed(), 300_000, step_us=10_000)
    (result,) = found.results
    row: dict[str, Any] = result.row
    first, line = repr(found).splitlines()
    assert first == "TimerStudy(1 timers)"
    words = line.removeprefix(f"  {result.race.timer}").split()
    assert words[:3] == ["set", "150", "ms,"]
    assert words[3:6] == ["margin", "80", "ms,"]
    assert words[6:9] == ["best", f"{row['best_ms']:g}", "ms,"]
    assert list(result.curve()["setting_ms"]) == [p.setting_us / 1000 for p in result.points]
    assert 150 in list(result.curve()["setting_ms"])
    with pytest.raises(InputError, match="a timer studied"):
        found.of("none")
    assert found.of("Alder.F1.CB") is result


def test_a_bracket_divided_by_what_may_be_zero() -> None:
    assert Bracket(0, 1) / Bracket(0, Fraction(1, 2)) == Bracket(0, math.inf)
    assert Bracket(1, 1) / Bracket(0, Fraction(1, 2)) == Bracket(2, math.inf)
    assert Bracket(-1, 1) / Bracket(0, 1) == Bracket(-math.inf, math.inf)
    assert Bracket(0, 0) / Bracket(0, 0) == Bracket(0, math.inf)
