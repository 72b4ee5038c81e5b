"""Every fault location of a plant, one by one or on any executor, and the sums over them.

Each location is a piece of work of its own whose result depends on nothing else, so the
study is the same on one process, on several or on a cluster.
"""

from __future__ import annotations

import pickle
from collections import deque
from collections.abc import Callable, Iterable, Iterator, Mapping
from concurrent.futures import Executor, Future
from dataclasses import dataclass, field
from functools import lru_cache
from typing import TYPE_CHECKING

from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.program import Program
from schemesim.engine.sensing import Sensing
from schemesim.errors import ErrorList, nearest, reject
from schemesim.plant.model import Location
from schemesim.scheme.model import Role
from schemesim.show.tables import to_html
from schemesim.study.brackets import Bracket, exactly, total
from schemesim.study.location import LocationOptions, LocationResult, study_location
from schemesim.study.no_fault import NoFaultStudy
from schemesim.study.spread import breakers_over, cleared_over
from schemesim.study.tree import MAX_RUNS
from schemesim.ticks import limit_mistake

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

Progress = Callable[[int, int], None]

_AHEAD = 64  # pieces of work handed to an executor before the first is taken back


@dataclass(frozen=True)
class LocationStudy:
    """Every location studied, and the sums weighted by fault frequency.

    Attributes
    ----------
    results : tuple of LocationResult
        In the order of the locations asked for.
    options : LocationOptions
    frequencies : mapping of Location to float, or None
        Faults per year; without them every location weighs the same and nothing is per year.
    no_fault : NoFaultStudy or None
    complete : bool
        False if the study was interrupted: the locations finished until then are here.
    """

    results: tuple[LocationResult, ...]
    options: LocationOptions
    frequencies: Mapping[Location, float] | None = None
    no_fault: NoFaultStudy | None = None
    complete: bool = True

    def where(self, location: Location | str) -> LocationResult:
        """The result of one location, by itself or by name (``"L1"`` and ``"L1@0.5"`` are the same).

        Raises
        ------
        InputError
            If it was not studied.
        """
        for r in self.results:
            if r.location.is_named(location) if isinstance(location, str) else r.location == location:
                return r
        known = [str(r.location) for r in self.results]
        raise reject("location", str(location), "a location studied", tip=nearest(str(location), known))

    def weight(self, result: LocationResult) -> float:
        """Faults per year at a location (1 without frequencies; 0 where no source feeds the fault)."""
        if not result.fed:
            return 0
        return 1 if self.frequencies is None else self.frequencies.get(result.location, 0.0)

    def weighted(self, value: Callable[[LocationResult], Bracket]) -> Bracket:
        """The mean of a bracket over the locations, weighted by fault frequency."""
        weights = [(self.weight(r), r) for r in self.results if self.weight(r) > 0]
        if not weights:
            return Bracket(0, 1)
        return total(exactly(w) * value(r) for w, r in weights) / total(exactly(w) for w, _ in weights)

    def per_yr(self, value: Callable[[LocationResult], Bracket]) -> Bracket | None:
        """The sum of a bracket over the locations, each times its faults per year; None without frequencies."""
        if self.frequencies is None:
            return None
        return total(exactly(self.weight(r)) * value(r) for r in self.results)

    def measures(self) -> dict[str, Bracket]:
        """The figures of the whole study by name, units in the names.

        Shares are clipped to 0..1; figures per year need frequencies. ``needless_trips_per_yr``
        counts breakers opened beyond the intended ones, those opened with no fault
        included where they were studied.
        """
        out = {
            "p_cleared": _share(self.weighted(lambda r: r.p_cleared)),
            "p_within_limit": _share(self.weighted(lambda r: r.p_within_limit)),
            "p_by_main": _share(self.weighted(lambda r: r.p_by_main)),
        }
        for role in list(Role)[1:]:
            out[f"p_by_{role.name.lower()}"] = _share(self.weighted(_by_role(role)))
        out["p_selective"] = _share(self.weighted(lambda r: r.p_selective))
        out["breakers_mean"] = self.weighted(lambda r: r.breakers_mean.bracket)
        out["breakers_excess"] = self.weighted(lambda r: r.breakers_excess.bracket)
        out["load_lost_mw_mean"] = self.weighted(lambda r: r.load_lost_mw.bracket)
        faults = self.per_yr(lambda _: exactly(1))
        needless = self.per_yr(lambda r: r.breakers_excess.bracket)
        for name, value in (
            ("faults_per_yr", faults),
            ("uncleared_per_yr", self.per_yr(lambda r: r.p_not_cleared)),
            ("late_or_uncleared_per_yr", self.per_yr(lambda r: r.p_late_or_uncleared)),
            ("fault_needless_trips_per_yr", needless),
        ):
            if value is not None:
                out[name] = Bracket(max(value.low, 0), value.high)
        if self.no_fault is not None:
            out["no_fault_trips_per_yr"] = self.no_fault.breakers_per_yr
            if needless is not None:
                out["needless_trips_per_yr"] = needless + self.no_fault.breakers_per_yr
        return out

    @property
    def single_points(self) -> dict[str, tuple[str, ...]]:
        """Each single point of failure and the locations it spoils."""
        found: dict[str, list[str]] = {}
        for r in self.results:
            for point in r.single_points:
                found.setdefault(point.failure, []).append(str(r.location))
        return {name: tuple(at) for name, at in sorted(found.items())}

    @property
    def ranked(self) -> tuple[LocationResult, ...]:
        """Locations by how often a year (or per fault) one is cleared late or not at all, the most first."""
        return tuple(sorted(self.results, key=lambda r: -self.weight(r) * float(r.p_late_or_uncleared.low)))

    def table(self, *, ranked: bool = False) -> pd.DataFrame:
        """One row for each location, in the order studied or, with ``ranked``, by what matters."""
        import pandas as pd  # heavy: only when a table is asked for

        results = self.ranked if ranked else self.results
        frame = pd.DataFrame([r.row for r in results])
        if self.frequencies is not None and results:
            rates = [self.frequencies.get(r.location, 0.0) for r in results]
            frame.insert(1, "freq_per_yr", rates)
        return frame

    def summary(self) -> pd.DataFrame:
        """The figures of the whole study, one row for each measure."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame(
            [{"measure": name, "low": float(b.low), "high": float(b.high)} for name, b in self.measures().items()]
        )

    def plot(self, most: int | None = None, ax: Axes | None = None) -> Axes:
        """A map of what opens for a fault at each location, at least how often, and what is intended to.

        Parameters
        ----------
        most : int or None
            How many locations: those cleared late or not at all the most often. None: all.
        ax : matplotlib Axes or None
        """
        from schemesim.show.matrix import PlaceRow, plot_map  # heavy: only when a picture is asked for

        chosen = self.results if most is None else self.ranked[:most]
        rows = [
            PlaceRow(str(r.location), r.intended, {b: float(p.low) for b, p in r.opens.items()})
            for r in chosen
            if r.fed
        ]
        groups: dict[str, list[str]] = {}
        for name in sorted({b for r in rows for b in (*r.intended, *r.opens)}):
            groups.setdefault(name.partition(".")[0], []).append(name)
        alone = [b for some in groups.values() if len(some) == 1 for b in some]  # such as the trips of sources
        groups = {station: some for station, some in groups.items() if len(some) > 1} | {"": alone}
        return plot_map(rows, groups, title="breakers opened, by the place of the fault", ax=ax)

    def plot_breakers(self, ax: Axes | None = None) -> Axes:
        """The share of faults that trip each number of breakers, over all locations, with its brackets."""
        from schemesim.show.bars import plot_counts  # heavy: only when a picture is asked for

        found = breakers_over((r for r in self.results if self.weight(r) > 0), self.weighted)
        counts = {n: (float(b.low), float(b.high)) for n, b in found.items()}
        return plot_counts(counts, title="breakers tripped, all faults", x="breakers tripped", ax=ax)

    def plot_clearing(self, ax: Axes | None = None) -> Axes:
        """The share of faults not yet cleared after a time, over all locations; the limit marked."""
        from schemesim.show.curves import Line, plot_left  # heavy: only when a picture is asked for

        found = cleared_over([r for r in self.results if self.weight(r) > 0], self.weighted)
        steps = [(t / 1000, (float(b.low), float(b.high))) for t, b in found]
        limit = self.options.limit_us / 1000
        line = Line(limit, f"limit {limit:g} ms", dashed=True)
        return plot_left(steps, title="time to clear, all faults", lines=[line], ax=ax)

    def __repr__(self) -> str:
        lines = [
            f"LocationStudy: {len(self.results)} locations{'' if self.complete else ' (interrupted)'}, "
            f"{sum(r.runs for r in self.results)} runs, limit {self.options.limit_us / 1000:g} ms, "
            f"{len(self.single_points)} single points of failure"
        ]
        lines.extend(f"  {name:28} {b}" for name, b in self.measures().items())
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.summary()) + to_html(self.table(ranked=True))


def iter_locations(
    program: Program,
    sensing: Sensing,
    locations: Iterable[Location],
    options: LocationOptions,
    *,
    executor: Executor | None = None,
) -> Iterator[LocationResult]:
    """Study locations one by one, in the order given, each as soon as it is done.

    Parameters
    ----------
    program : Program
    sensing : Sensing
    locations : iterable of Location
    options : LocationOptions
    executor : concurrent.futures.Executor or None
        Runs the work; the results are the same with any, or with none.
    """
    items = list(locations)
    if executor is None:
        for location in items:
            yield study_location(program, location, sensing, options)
        return
    shared = pickle.dumps((program, sensing, options))
    waiting: deque[Future[LocationResult]] = deque()
    todo = deque(items)
    try:
        while waiting or todo:
            while todo and len(waiting) < _AHEAD:
                waiting.append(executor.submit(_study_shared, shared, todo.popleft()))
            yield waiting.popleft().result()
    finally:
        for future in waiting:
            future.cancel()


@lru_cache(maxsize=2)
def _unpacked(shared: bytes) -> tuple[Program, Sensing, LocationOptions]:
    """What all pieces of work share, unpacked once in each worker."""
    program, sensing, options = pickle.loads(shared)
    return program, sensing, options


def _study_shared(shared: bytes, location: Location) -> LocationResult:
    program, sensing, options = _unpacked(shared)
    return study_location(program, location, sensing, options)


@dataclass
class _Kept:
    results: list[LocationResult] = field(default_factory=list)
    complete: bool = True


def study_locations(
    program: Program,
    sensing: Sensing,
    locations: Iterable[Location] | None = None,
    *,
    limit_us: int,
    dispatch: str | None = None,
    epsilon: float = 1e-5,
    max_runs: int = MAX_RUNS,
    horizon_us: int = DEFAULT_HORIZON_US,
    frequencies: Mapping[Location, float] | None = None,
    no_fault: NoFaultStudy | None = None,
    executor: Executor | None = None,
    progress: Progress | None = None,
) -> LocationStudy:
    """Study every fault location.

    Parameters
    ----------
    program : Program
    sensing : Sensing
    locations : iterable of Location or None
        By default every location of the plant.
    limit_us : int
        Longest clearing time that is in time, in microseconds.
    dispatch : str or None
    epsilon : float
        Mass of each tree left unexplored.
    max_runs : int
        Runs each tree may take.
    horizon_us : int
    frequencies : mapping of Location to float, or None
        Faults per year, permanent and transient together; see :func:`spread_frequency`.
    no_fault : NoFaultStudy or None
        Trips with no fault, to be counted among the needless ones.
    executor : concurrent.futures.Executor or None
    progress : callable or None
        Called with the number of locations done and of all.

    Returns
    -------
    LocationStudy
        A keyboard interrupt ends the study early; what was finished is kept and
        ``complete`` is False.

    Raises
    ------
    InputError
        For unknown locations, bad frequencies or a limit that is no time.
    """
    chosen = list(program.plant.locations() if locations is None else locations)
    _check(program, chosen, limit_us, frequencies)
    options = LocationOptions(limit_us, epsilon, max_runs, horizon_us, dispatch)
    kept = _Kept()
    try:
        for result in iter_locations(program, sensing, chosen, options, executor=executor):
            kept.results.append(result)
            if progress is not None:
                progress(len(kept.results), len(chosen))
    except KeyboardInterrupt:
        kept.complete = False
    return LocationStudy(tuple(kept.results), options, frequencies, no_fault, kept.complete)


def spread_frequency(locations: Iterable[Location], per_section: Mapping[str, float]) -> dict[Location, float]:
    """Faults per year by location from those by section, shared evenly by the locations of a section.

    Examples
    --------
    >>> rates = spread_frequency([Location("L", 0.1), Location("L", 0.9), Location("B")], {"L": 0.5, "B": 0.01})
    >>> {str(at): rate for at, rate in rates.items()}
    {'L@0.1': 0.25, 'L@0.9': 0.25, 'B': 0.01}
    """
    items = list(locations)
    count: dict[str, int] = {}
    for at in items:
        count[at.section] = count.get(at.section, 0) + 1
    return {at: per_section.get(at.section, 0.0) / count[at.section] for at in items}


def _check(
    program: Program, locations: list[Location], limit_us: int, frequencies: Mapping[Location, float] | None
) -> None:
    errors = ErrorList()
    known = program.plant.section
    for at in locations:
        item: object = at
        if not isinstance(item, Location):
            errors.add("location", item, "a Location", tip=_as_location(item))
        elif at.section not in known:
            errors.add("section", at.section, "a section", tip=nearest(at.section, known))
    mistake = limit_mistake(limit_us)
    if mistake is not None:
        errors.add("limit_us", limit_us, mistake[0], tip=mistake[1])
    for at, rate in (frequencies or {}).items():
        if not 0 <= rate < float("inf"):
            errors.add(f"faults per year at {at}", rate, "a finite number of zero or more")
        if at not in locations:
            tip = _as_location(at)
            errors.add("location of a fault frequency", str(at), "one of the locations studied", tip=tip)
    errors.raise_if_any()


def _as_location(item: object) -> str:
    return f"Location({item!r}) is a fault there" if isinstance(item, str) else ""


def _by_role(role: Role) -> Callable[[LocationResult], Bracket]:
    return lambda result: result.p_by_role[role]


def _share(b: Bracket) -> Bracket:
    return Bracket(max(b.low, 0), min(b.high, 1))
