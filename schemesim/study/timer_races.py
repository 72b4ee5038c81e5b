"""The two races a timed back-up runs, read off the clearing sequences of a scheme.

A breaker-failure timer must outlast the normal clearing (breaker time, then the reset of the detector,
or of the auxiliary contact where that is used), and still leave time for the breakers around within the
limit. The timer of a remote zone 2 must outlast breaker failure (its whole clearing, and the reset of the
zone's element) and in turn be in time. In both the timer trips needlessly if it runs out first. A timer
that runs out at the very instant at which its reason is gone does not trip.

What happens when is taken from logged runs at nominal times: with nothing failing, and with each breaker
stuck that main protection trips. The chain of delays behind an opening is followed back through the causes
in the log, so a race stands on the delays that decide it. The timer, the breaker and the
detector of a breaker's failure protection are found by their names, as the library gives them.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from fractions import Fraction

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case, bind
from schemesim.engine.event import DEFAULT_HORIZON_US, run_event
from schemesim.engine.outcome import Run
from schemesim.engine.program import Program
from schemesim.engine.sensing import Sensing
from schemesim.plant.model import Location
from schemesim.scheme.delays import Delay
from schemesim.scheme.model import Breaker, FailureMode, Gate, Role, Sense, Timer, signal_of
from schemesim.study.delay_chains import apart, chain_of, earliest_of, overlap, starts_of
from schemesim.study.measures import cleared_by
from schemesim.study.races import races
from schemesim.study.time_sums import Span

TIMER, DETECTOR, CONTACT = "{}/50BF timer", "{}/50BF current", "{}/50BF 52a"

ZONE_2 = "21-2"

@dataclass(frozen=True)
class SettingRace:
    """A timer between what it must outlast and the limit.

    Attributes
    ----------
    timer : str
        Its block.
    subject : str
        The breaker it stands for, or the breaker failure that a zone 2 races.
    location : Location
        The fault; for a breaker the one with the longest total.
    delay : Delay
        Of the timer; its nominal value is the setting, what is random about it stays when the setting moves.
    outlast : Span
        Needless trip if this is longer than the timer.
    rest : Span or None
        All of the total clearing time but the timer; None where the breaker is not what back-up waits for.
    limit_us : int or None
        Late if the total is longer.
    margin_run_us, total_run_us : int or None
        The least margin left where main protection clears, and the longest total, in runs at nominal times.
        The former is less than that of the scheme where current flows on until another breaker has opened.
    exposed_per_yr, needed_per_yr : float
        How often a year it could trip needlessly, and is needed; per fault where no frequencies are given.
    others : tuple of Span
        Other openings that clearing waits for with the breaker stuck.
    """

    timer: str
    subject: str
    location: Location
    delay: Delay
    outlast: Span
    rest: Span | None
    limit_us: int | None
    margin_run_us: int | None
    total_run_us: int | None
    exposed_per_yr: float
    needed_per_yr: float
    others: tuple[Span, ...] = ()

    @property
    def margin_us(self) -> int:
        """Timer less what it must outlast, from the scheme's nominal times."""
        return self.delay.nominal_us - self.outlast.nominal_us

    @property
    def total_us(self) -> int | None:
        """Nominal total clearing time."""
        return None if self.rest is None else self.delay.nominal_us + self.rest.nominal_us


@dataclass(frozen=True)
class _Stuck:
    """One breaker stuck at one location."""

    breaker: str
    location: Location
    rate: float
    margin_us: int | None
    total_us: int | None
    rest: Span | None
    others: tuple[Span, ...]
    zones: tuple[tuple[str, int], ...]


def timer_races(
    program: Program,
    sensing: Sensing,
    locations: Iterable[Location],
    *,
    limits: Mapping[Location, int],
    zone_2_limit_us: int | None = None,
    frequencies: Mapping[Location, float] | None = None,
    dispatch: str | None = None,
    horizon_us: int = DEFAULT_HORIZON_US,
) -> tuple[SettingRace, ...]:
    """Every race of breaker-failure timers and of zone 2 against them, one for each timer.

    Parameters
    ----------
    program : Program
    sensing : Sensing
    locations : iterable of Location
    limits : mapping of Location to int
        Longest total clearing time with a breaker stuck, in microseconds.
    zone_2_limit_us : int or None
        The same where a remote zone 2 clears; None: no limit for it.
    frequencies : mapping of Location to float, or None
        Faults per year; by default each location counts 1.
    dispatch : str or None
    horizon_us : int
    """
    found: dict[str, list[_Stuck]] = {}
    for at in locations:
        case = bind(program, at, sensing, dispatch=dispatch)
        if case.topology(0).fed:
            rate = 1.0 if frequencies is None else frequencies.get(at, 0.0)
            for one in _at(case, at, rate, horizon_us):
                found.setdefault(one.breaker, []).append(one)
    out = [_breaker_race(program, breaker, cases, limits) for breaker, cases in sorted(found.items())]
    return (*out, *_zone_races(program, found, zone_2_limit_us))


def stuck_question(program: Program, breaker: str) -> str | None:
    """Name of the question whether a breaker stays closed, or None where it cannot."""
    block = program.scheme.block[breaker]
    name = f"{block.component}: {FailureMode.DOES_NOT_OPEN}" if isinstance(block, Breaker) else ""
    return name if name in {q.name for q in program.questions} else None


def _at(case: Case, at: Location, rate: float, horizon_us: int) -> Iterator[_Stuck]:
    """Every breaker that main protection trips for one fault, and what happens if it is stuck."""
    program = case.program
    block = program.scheme.block
    normal = run_event(case, FixedAnswers(program), log=True, horizon_us=horizon_us)
    for opening in normal.outcome.openings:
        name = opening.breaker
        question = stuck_question(program, name)
        if opening.role is not Role.MAIN or TIMER.format(name) not in block or question is None:
            continue
        margin = _margin(program, normal, name) if cleared_by(case, normal.outcome) is Role.MAIN else None
        ran = run_event(case, FixedAnswers(program, [question]), log=True, horizon_us=horizon_us)
        rest, others = _rest(case, ran, name)
        zones = tuple(
            (r.timer, r.margin_us) for r in races(ran) if rest is not None and _is_zone(program, r.timer, at.section)
        )
        yield _Stuck(name, at, rate, margin, ran.outcome.t_clear_us if rest else None, rest, others, zones)


def _margin(program: Program, run: Run, breaker: str) -> int | None:
    """What the timer has left when its reason is gone in a run, negative where it ran out before."""
    timer = program.scheme.block[TIMER.format(breaker)]
    starts = [r.t_us for r in run.log if r.subject == timer.name and r.what == "starts"]
    gone = [r.t_us for r in run.log if r.subject == DETECTOR.format(breaker) and r.what == "drops out"]
    if CONTACT.format(breaker) in program.scheme.block:
        gone += [r.t_us for r in run.log if r.subject == breaker and r.what == "52a open"]
    if not starts or not gone or not isinstance(timer, Timer):
        return None
    return starts[0] + timer.pick_up.nominal_us - max(gone)


def _rest(case: Case, run: Run, breaker: str) -> tuple[Span | None, tuple[Span, ...]]:
    """What the total clearing time is made of besides the timer, and other openings it waits for."""
    t_clear, program = run.outcome.t_clear_us, case.program
    if t_clear is None:
        return None, ()
    bit = {case.names[b]: 1 << n for n, b in enumerate(case.breakers)}
    opened = {r.subject: r.index for r in run.log if r.what == "opens" and r.t_us <= t_clear and r.subject in bit}
    mask = sum(bit[name] for name in opened)
    needed = [name for name in opened if case.topology(mask & ~bit[name]).fed]
    if case.topology(sum(bit[name] for name in needed)).fed:
        needed = list(opened)  # several stand for each other: all of them are surely enough
    timer = TIMER.format(breaker)
    chains = [chain_of(run, program, opened[name]) for name in needed]
    through = [c for c in chains if timer in dict(c)]
    if not through:
        return None, ()
    others = tuple(Span(tuple(d for _, d in c)) for c in chains if timer not in dict(c))
    cut = [[n for n, _ in c].index(timer) for c in through]
    before, early = apart(starts_of(program, run, timer, f"{breaker}/50BF initiate") or [through[0][: cut[0]]])
    after, late = apart([c[k + 1 :] for c, k in zip(through, cut, strict=True)])
    shortest, shared = earliest_of(before) if all(before) else ((), False)
    return (
        Span(
            parts=tuple(d for _, d in (*early, *late)),
            longest=tuple(tuple(d for _, d in c) for c in after if c),
            shortest=shortest,
            shared=shared or overlap(after),
        ),
        others,
    )


def _breaker_race(
    program: Program, breaker: str, cases: list[_Stuck], limits: Mapping[Location, int]
) -> SettingRace:
    block = program.scheme.block
    timer, switch, detector = block[TIMER.format(breaker)], block[breaker], block[DETECTOR.format(breaker)]
    if not isinstance(timer, Timer) or not isinstance(switch, Breaker) or not isinstance(detector, Sense):
        raise TypeError(breaker)  # the library gives these names to these kinds
    resets: tuple[tuple[Delay, ...], ...] = ((detector.reset,),)
    if CONTACT.format(breaker) in block:
        resets = (*resets, (switch.auxiliary,))
    outlast = Span((switch.interrupting,), longest=resets)
    backed = [c for c in cases if c.total_us is not None]
    worst = max(backed or cases, key=lambda c: ((c.total_us or 0) - limits[c.location], str(c.location)))
    margins = [c.margin_us for c in cases if c.margin_us is not None]
    stuck = p_stuck(program, breaker)
    exposed = sum((Fraction(c.rate) for c in cases if c.margin_us is not None), Fraction(0))
    return SettingRace(
        timer=timer.name,
        subject=breaker,
        location=worst.location,
        delay=timer.pick_up,
        outlast=outlast,
        rest=worst.rest,
        limit_us=limits[worst.location],
        margin_run_us=min(margins, default=None),
        total_run_us=worst.total_us,
        exposed_per_yr=float((1 - stuck) * exposed),
        needed_per_yr=float(stuck * sum((Fraction(c.rate) for c in backed), Fraction(0))),
        others=worst.others,
    )


def p_stuck(program: Program, breaker: str) -> Fraction:
    """Probability that a breaker does not open, or does not interrupt."""
    block = program.scheme.block[breaker]
    component = program.scheme.component.get(block.component) if isinstance(block, Breaker) else None
    modes = (FailureMode.DOES_NOT_OPEN, FailureMode.DOES_NOT_INTERRUPT)
    return Fraction(0) if component is None else sum((Fraction(component.probability(m)) for m in modes), Fraction(0))


def _zone_of(program: Program, timer: str) -> Gate | None:
    """The trip output behind the timer of a zone."""
    todo, seen = [program.index[timer]], set()
    while todo:
        for n in program.consumers[todo.pop(0)]:
            block = program.blocks[n]
            if isinstance(block, Gate) and n not in seen:
                seen.add(n)
                if block.contact is not None:
                    return block
                todo.append(n)
    return None


def _is_zone(program: Program, timer: str, section: str) -> bool:
    """Whether a timer is that of a zone 2 which stands for the fault as remote back-up."""
    block = program.scheme.block[timer]
    if not isinstance(block, Timer):
        return False
    sense = program.scheme.block[signal_of(block.input)]
    out = _zone_of(program, timer)
    contact = None if out is None else out.contact
    within = contact is not None and contact.function == ZONE_2 and section not in contact.protects
    return within and isinstance(sense, Sense) and not timer.endswith(", beyond its reach, timer")


def _zone_races(
    program: Program, found: Mapping[str, list[_Stuck]], limit_us: int | None
) -> Iterator[SettingRace]:
    """For each zone-2 timer the breaker failure that leaves it the least margin."""
    block = program.scheme.block
    worst: dict[str, tuple[int, _Stuck]] = {}
    exposed: dict[str, Fraction] = {}
    needed: dict[str, Fraction] = {}
    for breaker, cases in sorted(found.items()):
        relay = program.scheme.component.get(f"{breaker}/BF relay")
        fails = Fraction(0) if relay is None else Fraction(relay.probability(FailureMode.FAILURE_TO_OPERATE))
        for case in cases:
            for timer, margin in case.zones:
                often = p_stuck(program, breaker) * Fraction(case.rate)
                exposed[timer] = exposed.get(timer, Fraction(0)) + often
                needed[timer] = needed.get(timer, Fraction(0)) + often * fails
                if timer not in worst or margin < worst[timer][0]:
                    worst[timer] = (margin, case)
    for name, (margin, case) in sorted(worst.items()):
        waits = block[name]
        sense = block[signal_of(waits.input)] if isinstance(waits, Timer) else None
        failing = block[TIMER.format(case.breaker)]
        trips = _tripped_by(program, name)
        if isinstance(waits, Timer) and isinstance(sense, Sense) and isinstance(failing, Timer) and case.rest:
            longest = tuple((d,) for d in trips)
            yield SettingRace(
                timer=name,
                subject=case.breaker,
                location=case.location,
                delay=waits.pick_up,
                outlast=case.rest.plus(failing.pick_up, sense.reset, less=(sense.operate,)),
                rest=Span((sense.operate,), longest=longest) if longest else None,
                limit_us=limit_us,
                margin_run_us=margin,
                total_run_us=None,
                exposed_per_yr=float(exposed[name]),
                needed_per_yr=float(needed[name]),
            )


def _tripped_by(program: Program, timer: str) -> tuple[Delay, ...]:
    """Opening times of the breakers that a zone trips where it stands, over no channel."""
    todo, seen = [program.index[timer]], set()
    found: dict[str, Delay] = {}
    while todo:
        for n in program.consumers[todo.pop()]:
            block = program.blocks[n]
            if isinstance(block, Breaker):
                found[block.name] = block.interrupting
            elif isinstance(block, Gate) and n not in seen and "/50BF" not in block.name:
                seen.add(n)
                todo.append(n)
    return tuple(found[name] for name in sorted(found))
