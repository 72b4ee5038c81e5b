"""R10 in the batch engine: inverse-time blocks of many rows do what the event engine says, to the microsecond."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from schemesim.engine.answers import ForcedAnswers
from schemesim.engine.batch import run_batch
from schemesim.engine.disc_columns import NEVER_DUE, DiscColumns
from schemesim.engine.event import run_event
from schemesim.engine.inverse import AT_ONCE, Motion, speed_for
from schemesim.engine.many import ManyForced
from tests.rules.test_r10_inverse_time import CURVE, Steps

multiples = st.sampled_from((0.5, 0.96, 1.01, 1.2, 1.5, 2.0, 3.0, 5.0))


@settings(max_examples=60)
@given(
    st.tuples(multiples, multiples, multiples),
    st.sampled_from((50.0, 100.0, 300.0, 777.7)),
    st.sampled_from((60.0, 100.0, 400.0, 900.0, 2000.0)),
    st.sampled_from((0, 30_000, 200_000, 1_000_000)),
    st.sampled_from((None, 0.5, 3.0)),
    st.sampled_from((1.0, 0.9)),
    st.sampled_from((700_000, 10_000_000)),
)
def test_r10_rows_agree_with_the_event_engine(
    seen: tuple[float, float, float],
    first: float,
    second: float,
    overtravel_us: int,
    reset_s: float | None,
    drop_out: float,
    horizon_us: int,
) -> None:
    curve = replace(CURVE, overtravel_us=overtravel_us, reset_s=reset_s)
    case = Steps(seen, first=first, second=second, curve=curve, drop_out=drop_out).case()
    expected = run_event(case, ForcedAnswers({}), horizon_us=horizon_us).outcome
    batch = run_batch(case, 3, ManyForced({}), horizon_us=horizon_us)
    assert all(batch.outcome(row).without_via() == expected.without_via() for row in range(3))


speeds = st.one_of(
    st.just(0),
    st.just(AT_ONCE),
    st.integers(1, 10**7).flatmap(lambda t: st.sampled_from((speed_for(t), -speed_for(t)))),
)


@given(st.lists(st.tuples(st.integers(0, 5_000_000), speeds), min_size=1, max_size=6), st.sampled_from((0, 1, 40_000)))
def test_r10_columns_move_as_one_disc_does(steps: list[tuple[int, int]], overtravel_us: int) -> None:
    one, many, rows, now = Motion(), DiscColumns([overtravel_us], 2), np.arange(2), 0
    for elapsed, rate in steps:
        now += elapsed
        due = one.due()
        if due is not None and due <= now:
            break  # it has operated: what follows is another story
        one = one.turn(now, rate, overtravel_us)
        many.turn(0, rows, np.full(2, now), np.full(2, rate), overtravel=True)
        expected = one.due()
        assert many.due(0, rows).tolist() == [NEVER_DUE if expected is None else expected] * 2
