"""R10: an inverse-time element integrates ∫dt/t(I) = 1, resets at once or by its curve, and a disc overtravels.

The currents are stated by topology, as multiples of the pick-up. The curve used is t = 1/(M − 1) s:
0.25 s at M = 5, 0.5 s at M = 3, 1 s at M = 2. Breaker openings change the current; each breaker is
driven by a plain element of its own and opens 50 ms after it.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence, Set
from dataclasses import dataclass, field, replace
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from schemesim.engine.case import Case, bind
from schemesim.engine.inverse import AT_ONCE, FULL, Motion, rate_of, speed_for
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import Event, LogicalSensing
from schemesim.plant.model import Location
from schemesim.scheme.conditions import Condition, Current
from schemesim.scheme.curves import Curve
from schemesim.scheme.model import Block, Scheme
from tests.rules.hand import at, breaker, gate, openings, play, radial, sense, timer, times, trip

CURVE = Curve(name="one over M less one", a=1.0, p=1.0, flat_above=1000.0)
PICKED = 1.0


@dataclass(frozen=True)
class Stated:
    """Multiples by the sets of breakers open; above 1 picked up, down to ``drop_out`` held."""

    by_opened: Mapping[frozenset[str], float]
    drop_out: float = 1.0

    def candidates(self, program: Program, event: Event, dispatch: str | None) -> list[int]:  # noqa: ARG002
        return []

    def bind(
        self,
        program: Program,  # noqa: ARG002
        event: Event,  # noqa: ARG002
        dispatch: str | None,  # noqa: ARG002
        conditions: Sequence[Condition],
        openable: Iterable[str],  # noqa: ARG002
    ) -> _Stated:
        return _Stated(self, tuple(conditions))


@dataclass(frozen=True)
class _Stated:
    stated: Stated
    conditions: tuple[Condition, ...]

    def _multiple(self, condition: Condition, opened: Set[str]) -> float:
        if isinstance(condition, Current) and condition.devices == ("IN.CT",):
            return self.stated.by_opened[frozenset(opened)]
        return 10.0

    def state(self, opened: Set[str]) -> tuple[tuple[bool, ...], bool]:
        holds = tuple(self._multiple(c, opened) >= PICKED for c in self.conditions)
        return holds, not {"IN.CB"} & opened

    def lost(self, opened: Set[str]) -> tuple[float, tuple[str, ...]]:  # noqa: ARG002
        return 0.0, ()

    def measured(self, opened: Set[str]) -> tuple[tuple[float, ...], tuple[bool, ...]]:
        multiples = tuple(self._multiple(c, opened) for c in self.conditions)
        return multiples, tuple(self.stated.drop_out <= m < PICKED for m in multiples)


@dataclass
class Steps:
    """F1.CB opens at ``first`` ms and F2.CB at ``second``; the disc at IN sees the multiples given in turn."""

    multiples: tuple[float, float, float]
    first: float
    second: float = 5000.0
    curve: Curve = CURVE
    drop_out: float = 1.0
    reset: float = 30.0
    blocks: list[Block] = field(default_factory=list)

    def case(self) -> Case:
        self.blocks = [
            replace(sense("51", "IN.CT", 77, self.reset), curve=self.curve),
            trip("51.t", "51"),
            gate("IN.coil", "51.t"),
            breaker("IN.CB", "IN.coil"),
        ]
        for name, when in (("F1", self.first), ("F2", self.second)):
            self.blocks += [
                sense(f"{name}.s", f"{name}.CT", 0),
                timer(f"{name}.w", f"{name}.s", when - 50),
                trip(f"{name}.t", f"{name}.w"),
                gate(f"{name}.coil", f"{name}.t"),
                breaker(f"{name}.CB", f"{name}.coil"),
            ]
        one, two, three = self.multiples
        states = {
            frozenset[str](): one,
            frozenset({"F1.CB"}): two,
            frozenset({"F2.CB"}): three,
            frozenset({"F1.CB", "F2.CB"}): three,
        }
        with_in = {opened | {"IN.CB"}: 0.0 for opened in states}
        scheme = Scheme((), tuple(self.blocks))
        return bind(compile_scheme(radial(), scheme), Location("F1"), Stated({**states, **with_in}, self.drop_out))


def test_r10_a_constant_current_operates_after_the_time_of_the_curve() -> None:
    """M = 5 throughout: 250 ms; the breaker opens at 300. The plain operate time of 77 ms is not used."""
    run = play(Steps((5, 5, 5), first=900).case())
    assert at(run, "51", "picks up") == 250
    assert openings(run)["IN.CB"] == (250, 300)
    assert run.outcome.t_clear_us == 300_000


def test_r10_the_current_steps_down_while_it_runs() -> None:
    """M = 5 for 100 ms is 100/250 = 0.4 of the way; the rest at M = 2 takes 0.6 · 1000 = 600 ms: 700."""
    run = play(Steps((5, 2, 2), first=100).case())
    assert at(run, "51", "slowed down") == 100
    assert at(run, "51", "picks up") == 700


def test_r10_the_current_steps_up_while_it_runs() -> None:
    """M = 2 for 400 ms is 0.4; the rest at M = 5 takes 0.6 · 250 = 150: 550."""
    run = play(Steps((2, 5, 5), first=400).case())
    assert at(run, "51", "sped up") == 400
    assert at(run, "51", "picks up") == 550


def test_r10_two_steps() -> None:
    """M = 2 for 300 ms (0.3), M = 5 for 100 (0.4), M = 3 for the rest: 0.3 · 500 = 150: 550."""
    run = play(Steps((2, 5, 3), first=300, second=400).case())
    assert at(run, "51", "picks up") == 550


def test_r10_it_resets_at_once_below_drop_out() -> None:
    """M = 5 for 200 of 250 ms, then nothing for 100, then M = 5 again: a whole 250 from 300: 550."""
    run = play(Steps((5, 0.5, 5), first=200, second=300).case())
    (stopped,) = [r for r in run.log if r.subject == "51" and r.what == "stopped before operating"]
    assert (stopped.t_us, stopped.margin_us) == (200_000, 50_000)
    assert times(run, "51", "starts") == [0, 300]
    assert at(run, "51", "picks up") == 550


def test_r10_it_goes_back_by_its_reset_curve() -> None:
    """Reset 0.75/(1 − M²) s: 1000 ms at M = 0.5. M = 5 for 200 ms: 0.8; back for 300: 0.5; M = 5: 125 more: 625."""
    curve = replace(CURVE, reset_s=0.75)
    run = play(Steps((5, 0.5, 5), first=200, second=500, curve=curve).case())
    assert at(run, "51", "picks up") == 625


def test_r10_the_reset_curve_ends_at_rest() -> None:
    """0.8 of the way is gone after 800 ms at M = 0.5; 900 later it starts from rest: 1100 + 250."""
    curve = replace(CURVE, reset_s=0.75)
    run = play(Steps((5, 0.5, 5), first=200, second=1100, curve=curve).case())
    assert at(run, "51", "picks up") == 1350


def test_r10_a_disc_runs_on_and_operates() -> None:
    """The current falls at 200 of 250 ms; the disc runs on for up to 60: it operates at 250 and drops out at 280."""
    curve = replace(CURVE, overtravel_us=60_000)
    run = play(Steps((5, 0, 0), first=200, curve=curve).case())
    assert (at(run, "51", "picks up"), at(run, "51", "drops out")) == (250, 280)
    assert openings(run)["IN.CB"] == (250, 300)


def test_r10_a_disc_that_runs_on_long_enough_to_the_microsecond_operates() -> None:
    """50 ms to go when the current falls: an overtravel of 50 ms is enough, one of 49.999 is not."""
    for overtravel_us, operates in ((50_000, True), (49_999, False)):
        run = play(Steps((5, 0, 0), first=200, curve=replace(CURVE, overtravel_us=overtravel_us)).case())
        assert ("IN.CB" in openings(run)) is operates


def test_r10_a_disc_runs_on_and_then_goes_back() -> None:
    """M = 5 for 100 ms: 0.4; it runs on 40 ms to 0.56, then goes back 160 ms at M = 0.5: 0.40; M = 5: 150: 450."""
    curve = replace(CURVE, reset_s=0.75, overtravel_us=40_000)
    run = play(Steps((5, 0.5, 5), first=100, second=300, curve=curve).case())
    assert at(run, "51", "picks up") == 450


def test_r10_a_current_that_returns_while_the_disc_runs_on() -> None:
    """M = 5 for 100 ms (0.4), 20 ms run on (0.48), back at M = 3: 0.52 · 500 = 260 from 120: 380. No reset at all."""
    curve = replace(CURVE, overtravel_us=40_000)
    run = play(Steps((5, 0, 3), first=100, second=120, curve=curve).case())
    assert at(run, "51", "picks up") == 380


def test_r10_between_drop_out_and_pick_up_it_stands_still() -> None:
    """Drop-out at 0.95. M = 5 for 100 ms (0.4), 0.97 for 300, then M = 5: 150 more from 400: 550."""
    run = play(Steps((5, 0.97, 5), first=100, second=400, drop_out=0.95).case())
    assert at(run, "51", "picks up") == 550


def test_r10_an_output_between_drop_out_and_pick_up_stays() -> None:
    """It operates at 250; from 280 the current lies at 0.97: held by a drop-out of 0.95, but not by one of 0.98."""
    for drop_out, falls in ((0.95, []), (0.98, [310])):
        steps = Steps((5, 0.97, 0.97), first=280, drop_out=drop_out)
        scheme = steps.case().program.scheme
        alone = Scheme((), tuple(b for b in scheme.blocks if b.name != "IN.CB"))
        stated = Stated({frozenset(): 5.0, frozenset({"F1.CB"}): 0.97}, drop_out)
        program = compile_scheme(radial(), alone)
        run = play(bind(program, Location("F1"), stated, observe={"51.t"}), horizon_us=400_000)
        assert at(run, "51", "picks up") == 250
        assert times(run, "51", "drops out") == falls


def test_r10_what_is_held_before_the_event_has_not_picked_up() -> None:
    """M = 0.97 from the start, drop-out at 0.95: nothing; M = 5 from 100 ms: 350."""
    run = play(Steps((0.97, 5, 5), first=100, drop_out=0.95).case())
    assert at(run, "51", "picks up") == 350


def test_r10_operated_at_the_instant_its_current_falls() -> None:
    """R3: due at 250, and F1 opens at 250 too: it has operated."""
    run = play(Steps((5, 0, 0), first=250).case())
    assert openings(run)["IN.CB"] == (250, 300)


def test_r10_without_currents_the_plain_operate_time_stands() -> None:
    """Logical sensing knows none: 77 ms."""
    program = Steps((5, 5, 5), first=900).case().program
    run = play(bind(program, Location("F1"), LogicalSensing()))
    assert at(run, "51", "picks up") == 77


@given(st.integers(1, 2**30 - 1))
def test_r10_a_constant_speed_takes_exactly_its_time(time_us: int) -> None:
    motion = Motion().turn(1000, speed_for(time_us))
    assert motion.due() == 1000 + time_us
    assert motion.at(1000 + time_us) == FULL
    assert motion.at(999 + time_us) < FULL


@given(st.integers(1, 10**7), st.integers(1, 10**7), st.integers(0, 10**7))
def test_r10_stopping_to_look_changes_nothing(time_us: int, other_us: int, pause_us: int) -> None:
    """Turning to the speed it has is no change; a current that was stronger for a while is never later."""
    speed = speed_for(time_us)
    motion = Motion().turn(0, speed)
    looked = motion.turn(min(pause_us, time_us - 1), speed)
    assert looked.due() == motion.due() == time_us
    stepped = looked.turn(looked.since, speed_for(other_us)).due()
    assert stepped is not None
    assert looked.since < stepped <= looked.since + other_us
    assert (stepped <= time_us) or other_us > time_us


def test_r10_speeds() -> None:
    assert rate_of(CURVE, 5.0, held=False) == -(-FULL // 250_000)
    assert rate_of(CURVE, 0.97, held=True) == 0
    assert rate_of(CURVE, 0.97, held=False) == AT_ONCE
    assert rate_of(replace(CURVE, reset_s=0.75), 0.5, held=False) == -speed_for(1_000_000)
    assert rate_of(CURVE, 1.0, held=False) == 0
    assert rate_of(CURVE, 1.0 + 1e-9, held=False) == 0  # over eleven days: taken as never


@pytest.mark.parametrize("rate", [0, AT_ONCE, -speed_for(1_000_000)])
def test_r10_an_element_below_pick_up_is_never_due(rate: int) -> None:
    assert Motion().turn(0, speed_for(250_000)).turn(100_000, rate).due() is None


Step = tuple[int, int, str]
"""How long (us), the time of the curve (us), and what happens: it travels, goes back, resets at once, stands still."""


def by_fractions(steps: Sequence[Step], overtravel_us: int) -> Fraction | None:
    """∫dt/t(I) in exact fractions: when it gets to 1, or None."""
    now, travel = Fraction(0), Fraction(0)
    last, running_on = Fraction(0), Fraction(0)
    for lasts, time_us, what in steps:
        end = now + lasts
        if what == "travels":
            last, running_on = Fraction(1, time_us), Fraction(overtravel_us)
            if travel + lasts * last >= 1:
                return now + (1 - travel) / last
            travel, now = travel + lasts * last, end
            continue
        on = min(Fraction(lasts), running_on)
        if last and travel + on * last >= 1:
            return now + (1 - travel) / last
        travel, running_on = travel + on * last, running_on - on
        rest: Fraction = lasts - on
        if rest > 0 or running_on == 0:
            if what == "resets":
                travel = Fraction(0)
            elif what == "goes back":
                travel = max(Fraction(0), travel - rest / time_us)
        now = end
    return None


def by_motion(steps: Sequence[Step], overtravel_us: int) -> int | None:
    """The same by the code of the engines."""
    motion, now = Motion(), 0
    for lasts, time_us, what in steps:
        speed = {"travels": speed_for(time_us), "goes back": -speed_for(time_us), "resets": AT_ONCE, "stands": 0}[what]
        if speed != motion.rate:
            motion = motion.turn(now, speed, overtravel_us)
        due = motion.due()
        if due is not None and due <= now + lasts:
            return due
        now += lasts
    return None


@given(
    st.lists(
        st.tuples(
            st.integers(1, 400_000),
            st.integers(50_000, 900_000),
            st.sampled_from(["travels", "travels", "goes back", "resets", "stands"]),
        ),
        min_size=1,
        max_size=12,
    ),
    st.sampled_from([0, 0, 30_000, 200_000]),
)
def test_r10_the_integral_agrees_with_exact_fractions(steps: list[Step], overtravel_us: int) -> None:
    """Within two microseconds, as each speed is rounded up once; a step that ends just then may hide it."""
    exact, found = by_fractions(steps, overtravel_us), by_motion(steps, overtravel_us)
    ends = [sum(s[0] for s in steps[: n + 1]) for n in range(len(steps))]
    if exact is None or found is None:
        alone = [Fraction(x) for x in (exact, found) if x is not None]
        assert all(any(abs(x - end) <= 2 for end in ends) for x in alone)
    elif not any(abs(exact - end) <= 2 or abs(found - end) <= 2 for end in ends):
        assert abs(found - exact) <= 2
