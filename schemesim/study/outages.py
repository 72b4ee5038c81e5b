"""One item out for work: every location studied again with each set, DC domain, channel or breaker out."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping
from concurrent.futures import Executor
from dataclasses import replace
from fnmatch import fnmatchcase
from fractions import Fraction

from schemesim.engine.case import Case, bind
from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import Sensing
from schemesim.errors import ErrorList, nearest
from schemesim.plant.model import Location, Plant
from schemesim.scheme.model import Breaker, ComponentKind, Gate, Scheme
from schemesim.study.brackets import Bracket, exactly
from schemesim.study.location import LocationOptions, LocationResult, measure
from schemesim.study.locations import LocationStudy, iter_locations
from schemesim.study.outage_results import BREAKER, CHANNEL, DC, KINDS, SET, Outage, OutageResult, OutageStudy, Worse
from schemesim.study.register import limits_of
from schemesim.study.spoiled import Effect
from schemesim.study.tree import explore
from schemesim.study.weak_points import SinglePoint

Progress = Callable[[int, int], None]

HOURS_PER_YR = 8760

_SEVERITY = {"more breakers": Effect.MORE_BREAKERS, "late": Effect.LATE, "not cleared": Effect.NOT_CLEARED}


def planned_outages(program: Program, kinds: Iterable[str] = KINDS) -> tuple[Outage, ...]:
    """Everything of these kinds that can be taken out for work.

    Sets are all chains of trip outputs: main sets, local back-up, breaker failure; a relay whose outputs name no
    element or chain is one by itself. Breakers
    that are open anyway are left out, and so is what is out of service already.

    Raises
    ------
    InputError
        For a kind that is none.
    """
    chosen, errors = list(kinds), ErrorList()
    for kind in chosen:
        if kind not in KINDS:
            errors.add("kind of outage", kind, f"any of {[*KINDS]}", tip=nearest(kind, KINDS))
    errors.raise_if_any()
    return outages_of(program.scheme, program.plant, chosen)


def outages_of(scheme: Scheme, plant: Plant, kinds: Iterable[str] = KINDS) -> tuple[Outage, ...]:
    """The same of a scheme that is not compiled; see :func:`planned_outages`."""
    chosen = list(kinds)
    out: list[Outage] = []
    if SET in chosen:
        sets: dict[str, set[str]] = {}
        for c in scheme.contacts.values():
            if c.relay:
                name = set_name(c.station, c.element, c.chain) if c.element and c.chain else c.relay
                sets.setdefault(name, set()).add(c.relay)
        out += [Outage(SET, name, frozenset(relays)) for name, relays in sorted(sets.items())]
    for kind, component_kind in ((DC, ComponentKind.DC), (CHANNEL, ComponentKind.CHANNEL)):
        if kind in chosen:
            names = (c.name for c in scheme.components if c.kind is component_kind)
            out += [Outage(kind, name, frozenset({name})) for name in names]
    if BREAKER in chosen:
        devices = plant.device
        tripped = {b.name for b in scheme.blocks if isinstance(b, Breaker)}
        out += [Outage(BREAKER, n) for n in plant.breakers if devices[n].closed and n in tripped]
    return tuple(o for o in out if o.kind == BREAKER or not o.components <= scheme.out_of_service)


def set_name(station: str, element: str, chain: str) -> str:
    """The name of the outage of a set.

    Examples
    --------
    >>> set_name("Alder", "L1", "2")
    'Alder/L1 set 2'
    """
    place = f"{station}/{element}" if station else element
    return f"{place} set {chain}"


def with_out(program: Program, outage: Outage) -> Program:
    """The program with an item out for work."""
    plant, scheme = program.plant, program.scheme
    if outage.kind == BREAKER:
        devices = tuple(replace(d, closed=False) if d.name == outage.name else d for d in plant.devices)
        return compile_scheme(replace(plant, devices=devices), scheme)
    return compile_scheme(plant, replace(scheme, out_of_service=scheme.out_of_service | outage.components))


def study_outages(
    program: Program,
    sensing: Sensing,
    locations: Iterable[Location] | None = None,
    *,
    limit_us: int | Mapping[Location, int],
    outages: Iterable[Outage] | None = None,
    hours_per_yr: Mapping[str, float] | None = None,
    frequencies: Mapping[Location, float] | None = None,
    epsilon: float = 1e-3,
    dispatch: str | None = None,
    horizon_us: int = DEFAULT_HORIZON_US,
    executor: Executor | None = None,
    progress: Progress | None = None,
) -> OutageStudy:
    """Study every location with each item out for work.

    Parameters
    ----------
    program : Program
    sensing : Sensing
    locations : iterable of Location or None
        By default every location of the plant.
    limit_us : int or mapping of Location to int
        Longest clearing time that is in time, in microseconds.
    outages : iterable of Outage or None
        By default all of :func:`planned_outages`.
    hours_per_yr : mapping of str to float, or None
        Hours out per year of each item, by its kind or its name (``*`` and ``?`` stand for any
        text); a later entry that fits wins. Every outage needs one.
    frequencies : mapping of Location to float, or None
        Faults per year.
    epsilon : float
        Mass of each tree left unexplored; every single failure is explored whatever it is.
    dispatch : str or None
    horizon_us : int
    executor : concurrent.futures.Executor or None
        Runs the work; the results are the same with any, or with none.
    progress : callable or None
        Called with the number of locations done and of all, over all outages.

    Returns
    -------
    OutageStudy

    Raises
    ------
    InputError
        For locations, limits or hours that are not as stated, or an outage without hours.
    """
    chosen = list(dict.fromkeys(program.plant.locations() if locations is None else locations))
    todo = planned_outages(program) if outages is None else tuple(outages)
    limits = _checked(program, chosen, limit_us, frequencies)
    hours = _hours(todo, hours_per_yr)
    options = LocationOptions(max(limits.values(), default=0), epsilon, horizon_us=horizon_us, dispatch=dispatch)
    bears = {at: _bears_on(bind(program, at, sensing, dispatch=dispatch)) for at in chosen}
    places = {o: [at for at in chosen if o.kind == BREAKER or o.components & bears[at]] for o in todo}
    pieces = len(chosen) + sum(map(len, places.values()))
    done = 0

    def studied(version: Program, where: list[Location]) -> dict[Location, LocationResult]:
        nonlocal done
        found: dict[Location, LocationResult] = {}
        for limit in sorted({limits[at] for at in where}):
            mine = [at for at in where if limits[at] == limit]
            for r in iter_locations(version, sensing, mine, replace(options, limit_us=limit), executor=executor):
                found[r.location] = r
                done += 1
                if progress is not None:
                    progress(done, pieces)
        return found

    before: dict[Location, LocationResult] = {}
    asked: dict[Location, frozenset[str]] = {}
    results: list[OutageResult] = []
    complete = True
    try:
        for at in chosen:
            before[at], asked[at] = _base(program, at, sensing, replace(options, limit_us=limits[at]))
            done += 1
            if progress is not None:
                progress(done, pieces)
        for outage in todo:
            again = [at for at in places[outage] if outage.kind == BREAKER or outage.components & asked[at]]
            done += len(places[outage]) - len(again)
            now = {**before, **studied(with_out(program, outage), again)}
            study = LocationStudy(tuple(now[at] for at in chosen), options, frequencies)
            results.append(_result(outage, study, before, limits, len(places[outage]), hours.get(outage)))
    except KeyboardInterrupt:
        complete = False
    base = LocationStudy(tuple(before[at] for at in chosen if at in before), options, frequencies, None, complete)
    return OutageStudy(base, tuple(results), complete)


def _base(
    program: Program, at: Location, sensing: Sensing, options: LocationOptions
) -> tuple[LocationResult, frozenset[str]]:
    """A location with all in service, and the components whose failure its tree depends on.

    Where no run of the tree asked about an item, every run ends alike with the item out (rule R4): the location's
    results hold as they are. What is certain is never asked, so an item with a mode that has no question always counts.
    """
    case = bind(program, at, sensing, dispatch=options.dispatch)
    tree = explore(
        case, epsilon=options.epsilon, max_runs=options.max_runs, horizon_us=options.horizon_us, complete=1
    )
    met = {q for leaf in tree.leaves for q, _ in leaf.asked}
    found = {program.questions[q].component for q in met}
    for name in case.names:
        block = program.scheme.block[name]
        if isinstance(block, Gate):
            asks = (*block.unless, *block.given)
            found.update(ask.component for ask in asks if not program.asks.get(ask) or ask in program.constant)
    return measure(case, at, tree, options.limit_us), frozenset(found)


def _bears_on(case: Case) -> frozenset[str]:
    """Components whose failure can change anything in a case.

    An item out keeps outputs from leaving, so what no gate of the case asks about changes nothing.
    """
    found: set[str] = set()
    for name in case.names:
        block = case.program.scheme.block[name]
        if isinstance(block, Gate):
            found.update(ask.component for ask in (*block.unless, *block.given))
    return frozenset(found)


def _result(
    outage: Outage,
    study: LocationStudy,
    before: Mapping[Location, LocationResult],
    limits: Mapping[Location, int],
    affected: int,
    hours: float | None,
) -> OutageResult:
    worse: list[Worse] = []
    points: list[tuple[Location, SinglePoint]] = []
    uncleared, late = exactly(0), exactly(0)
    then_uncleared, then_late = exactly(0), exactly(0)
    for now in study.results:
        was = before[now.location]
        rate = exactly((study.frequencies or {}).get(now.location, 0.0))
        then_uncleared = then_uncleared + rate * _if_fed(now, now.p_not_cleared)
        then_late = then_late + rate * _if_fed(now, now.p_late_or_uncleared)
        if now is was:
            continue
        spoiled = _worse(now, was, limits[now.location]) if now.fed else None
        if spoiled is not None:
            worse.append(spoiled)
        known = {p.failure: _SEVERITY[p.kind] for p in was.single_points}
        found = (p for p in now.single_points if _SEVERITY[p.kind] > known.get(p.failure, Effect.NONE))
        points += [(now.location, p) for p in found]
        uncleared = uncleared + rate * (_if_fed(now, now.p_not_cleared) - _if_fed(was, was.p_not_cleared))
        late = late + rate * (_if_fed(now, now.p_late_or_uncleared) - _if_fed(was, was.p_late_or_uncleared))
    share = None if hours is None or study.frequencies is None else exactly(Fraction(hours) / HOURS_PER_YR)
    return OutageResult(
        outage=outage,
        study=study,
        affected=affected,
        worse=tuple(worse),
        new_points=tuple(points),
        hours_per_yr=hours,
        uncleared_per_yr=None if share is None else share * then_uncleared,
        late_or_uncleared_per_yr=None if share is None else share * then_late,
        added_uncleared_per_yr=None if share is None else share * uncleared,
        added_late_or_uncleared_per_yr=None if share is None else share * late,
    )


def _if_fed(result: LocationResult, value: Bracket) -> Bracket:
    return value if result.fed else exactly(0)


def _worse(now: LocationResult, was: LocationResult, limit_us: int) -> Worse | None:
    a, b = now.nominal, was.nominal
    if a is None or b is None:
        return None
    in_time = b.t_clear_us is not None and b.t_clear_us <= limit_us
    effect = Effect.NONE
    if a.t_clear_us is None and b.t_clear_us is not None:
        effect = Effect.NOT_CLEARED
    elif a.t_clear_us is not None and a.t_clear_us > limit_us and in_time:
        effect = Effect.LATE
    elif len(a.tripped - now.intended) > len(b.tripped - was.intended):
        effect = Effect.MORE_BREAKERS
    if effect is Effect.NONE:
        return None
    return Worse(now.location, effect, a.t_clear_us, b.t_clear_us, len(a.tripped), len(b.tripped))


def _hours(outages: Iterable[Outage], hours: Mapping[str, float] | None) -> dict[Outage, float]:
    """Hours per year of each outage; the last entry that fits."""
    if hours is None:
        return {}
    errors, found, used = ErrorList(), {}, set()
    for key, value in hours.items():
        given: object = value
        if isinstance(given, bool) or not isinstance(given, (int, float)) or not 0 <= given <= HOURS_PER_YR:
            errors.add(f"hours_per_yr of {key!r}", value, f"hours from 0 to {HOURS_PER_YR:g}")
    for o in outages:
        for key, value in hours.items():
            if key in (o.kind, o.name) or fnmatchcase(o.name, key):
                found[o] = value
                used.add(key)
        if o not in found:
            errors.add(f"hours_per_yr of {o.name!r}", "nothing", f"hours per year of it, or of kind {o.kind!r}")
    for key in set(hours) - used - set(KINDS):
        errors.add("hours_per_yr", key, f"a kind ({', '.join(KINDS)}) or the name of an outage studied")
    errors.raise_if_any()
    return found


def _checked(
    program: Program,
    chosen: list[Location],
    limit_us: int | Mapping[Location, int],
    frequencies: Mapping[Location, float] | None,
) -> dict[Location, int]:
    errors = ErrorList()
    for at, rate in (frequencies or {}).items():
        if not 0 <= rate < math.inf:
            errors.add(f"faults per year at {at}", rate, "a finite number of zero or more")
    errors.raise_if_any()
    return limits_of(program, chosen, limit_us)
