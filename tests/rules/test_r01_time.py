"""R1: time is a whole number of microseconds."""

from __future__ import annotations

import pytest

from schemesim.errors import InputError
from schemesim.scheme.delays import Fixed, fixed_ms
from tests.rules.hand import at, breaker, case, gate, openings, play, radial, sense, trip


def test_r01_a_fraction_of_a_millisecond_is_kept_to_the_microsecond() -> None:
    """Picks up at 16.667 ms, trips at once, opens 33.333 ms later: at 50.000 ms, to the microsecond."""
    bound = case(
        radial(),
        [sense("oc", "F1.CT", 16.667), trip("t", "oc"), gate("coil", "t"), breaker("F1.CB", "coil", opens=33.333)],
    )
    run = play(bound)
    (opening,) = run.outcome.openings
    assert (opening.t_trip_us, opening.t_open_us, run.outcome.t_clear_us) == (16_667, 50_000, 50_000)
    assert all(type(t) is int for t in (opening.t_trip_us, opening.t_open_us, run.outcome.t_clear_us))


def test_r01_a_microsecond_decides() -> None:
    """The main trip at 20.000 ms is a microsecond ahead of the other at 20.001 ms, or behind it at 20.002 ms."""
    for other, first in ((20.001, "t1"), (19.999, "t2")):
        bound = case(
            radial(),
            [
                sense("oc1", "F1.CT", 20.0),
                sense("oc2", "F1.CT", other),
                trip("t1", "oc1"),
                trip("t2", "oc2"),
                gate("coil", "t1", "t2"),
                breaker("F1.CB", "coil"),
            ],
        )
        run = play(bound)
        assert run.outcome.openings[0].via == first
        assert openings(run) == {"F1.CB": (min(20.0, other), min(20.0, other) + 50)}
        assert at(run, "F1", "cleared") == min(20.0, other) + 50


@pytest.mark.parametrize("bad", [-1, float("nan"), float("inf"), True, "20"])
def test_r01_negative_nan_infinite_times_are_refused(bad: object) -> None:
    with pytest.raises(InputError):
        fixed_ms(bad)  # type: ignore[arg-type]  # bad on purpose
    with pytest.raises(InputError):
        Fixed(bad)  # type: ignore[arg-type]  # bad on purpose
