"""How long may a breaker-failure timer, or a zone 2, wait: needless trips against late clearing.

For each timer: the margin (timer less breaker time less detector reset), the total back-up clearing time
against its limit, and against the setting the probability

- that it trips needlessly, once what it has to outlast goes its normal way;
- that clearing is late, where it is needed.

A zone 2 trips needlessly if it does so before breaker failure has cleared; where that trips the same
breaker over a channel, no further one opens for it.

The rest is a matter of weights: a needless trip and a late clearing each cost something, and happen so
many times a year. The risk of a setting is the sum; the best setting has the least of it, and the band
is where both probabilities stay under their targets.

Probabilities come from sums of the delays of the scheme (:mod:`schemesim.study.time_sums`), as
brackets that hold for the delays as stated; a delay without spread makes them 0 or 1. Races and their
chains are read off logged runs (:mod:`schemesim.study.timer_races`). A breaker that opens late is
not counted as stuck: give its opening time the spread it has.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.program import Program
from schemesim.engine.sensing import Sensing
from schemesim.errors import ErrorList, nearest, reject
from schemesim.plant.model import Location
from schemesim.show.tables import to_html
from schemesim.study.brackets import Bracket, exactly
from schemesim.study.register import limits_of
from schemesim.study.time_sums import Grid
from schemesim.study.timer_races import SettingRace, timer_races

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

MOST_SETTINGS = 2000
"""Settings looked at for one timer, at most."""


@dataclass(frozen=True)
class Weights:
    """What is at stake, and what may be.

    Parameters
    ----------
    needless, late : float
        Cost of one needless trip and of one late clearing, in any one unit (1 and 1: both counted alike).
    needless_target, late_target : float
        Probabilities that the band keeps to: of a needless trip each time the timer could trip needlessly, of a
        late clearing each time it is needed.

    Raises
    ------
    InputError
        For a cost that is negative or no number, and a target outside 0 to 1.
    """

    needless: float = 1.0
    late: float = 1.0
    needless_target: float = 1e-3
    late_target: float = 1e-3

    def __post_init__(self) -> None:
        errors = ErrorList()
        for name in ("needless", "late"):
            if not 0 <= getattr(self, name) < math.inf:
                errors.add(f"weight {name}", getattr(self, name), "a finite number of zero or more")
        for name in ("needless_target", "late_target"):
            if not 0 <= getattr(self, name) <= 1:
                errors.add(name, getattr(self, name), "a probability from 0 to 1")
        errors.raise_if_any()


@dataclass(frozen=True)
class SettingPoint:
    """One setting of one timer: both probabilities, and the risk a year in the unit of the weights."""

    setting_us: int
    p_needless: Bracket
    p_late: Bracket
    risk_per_yr: Bracket


@dataclass(frozen=True)
class TimerResult:
    """One timer studied.

    Attributes
    ----------
    race : SettingRace
    now : SettingPoint
        As it is set.
    points : tuple of SettingPoint
        In order of the setting.
    weights : Weights
    """

    race: SettingRace
    now: SettingPoint
    points: tuple[SettingPoint, ...]
    weights: Weights

    @property
    def best_us(self) -> int:
        """The setting of least risk; of several alike that lie together, the middle one."""
        risk = [float(p.risk_per_yr.low) + float(p.risk_per_yr.high) for p in self.points]
        least = min(risk)
        first = next(i for i, r in enumerate(risk) if r <= least)
        last = first
        while last + 1 < len(risk) and risk[last + 1] <= least:
            last += 1
        return self.points[(first + last) // 2].setting_us

    @property
    def best_within_us(self) -> tuple[int, int]:
        """Shortest and longest of the settings studied that may have the least risk, whatever the brackets hold."""
        least = min(p.risk_per_yr.high for p in self.points)
        may = [p.setting_us for p in self.points if p.risk_per_yr.low <= least]
        return min(may), max(may)

    @property
    def band_us(self) -> tuple[int, int] | None:
        """Shortest and longest setting studied at which both probabilities certainly keep to their targets."""
        w = self.weights
        good = [
            p.setting_us
            for p in self.points
            if p.p_needless.high <= w.needless_target and p.p_late.high <= w.late_target
        ]
        return (min(good), max(good)) if good else None

    @property
    def row(self) -> dict[str, object]:
        """One row of the table."""
        r, band = self.race, self.band_us
        row: dict[str, object] = {
            "timer": r.timer,
            "subject": r.subject,
            "location": str(r.location),
            "setting_ms": r.delay.nominal_us / 1000,
            "margin_ms": r.margin_us / 1000,
            "margin_ms_runs": _ms(r.margin_run_us),
            "total_ms": _ms(r.total_us),
            "total_ms_runs": _ms(r.total_run_us),
            "limit_ms": _ms(r.limit_us),
        }
        for name in ("p_needless", "p_late", "risk_per_yr"):
            b: Bracket = getattr(self.now, name)
            row[f"{name}_low"], row[f"{name}_high"] = float(b.low), float(b.high)
        row["best_ms"] = self.best_us / 1000
        row["best_ms_from"], row["best_ms_to"] = (t / 1000 for t in self.best_within_us)
        row["band_ms_from"], row["band_ms_to"] = (None, None) if band is None else (band[0] / 1000, band[1] / 1000)
        row["exposed_per_yr"], row["needed_per_yr"] = r.exposed_per_yr, r.needed_per_yr
        return row

    def plot(self, ax: Axes | None = None) -> Axes:
        """Both probabilities against the setting; marked: as it is set, the best, the band that keeps to targets."""
        from schemesim.show.curves import Line, plot_bands  # heavy: only when a picture is asked for

        now, best, band = self.race.delay.nominal_us / 1000, self.best_us / 1000, self.band_us
        lines = [Line(now, f"set {now:g} ms")] + ([] if best == now else [Line(best, f"least risk {best:g} ms", True)])
        curves = {
            "needless trip, when it could trip so": [p.p_needless for p in self.points],
            "cleared late, when it is needed": [p.p_late for p in self.points],
        }
        limit = "" if self.race.limit_us is None else f", limit {self.race.limit_us / 1000:g} ms"
        return plot_bands(
            [p.setting_us / 1000 for p in self.points],
            {name: [(float(b.low), float(b.high)) for b in curve] for name, curve in curves.items()},
            title=f"{self.race.timer}, fault on {self.race.location}{limit}", x="setting, ms", y="probability",
            lines=lines, good=None if band is None else (band[0] / 1000, band[1] / 1000),
            good_text="both keep to their targets", ax=ax,
        )  # fmt: skip

    def curve(self) -> pd.DataFrame:
        """Probabilities and risk against the setting."""
        import pandas as pd  # heavy: only when a table is asked for

        rows = []
        for p in self.points:
            row: dict[str, object] = {"setting_ms": p.setting_us / 1000}
            for name in ("p_needless", "p_late", "risk_per_yr"):
                b: Bracket = getattr(p, name)
                row[f"{name}_low"], row[f"{name}_high"] = float(b.low), float(b.high)
            rows.append(row)
        return pd.DataFrame(rows)


@dataclass(frozen=True)
class TimerStudy:
    """Every timer studied.

    Attributes
    ----------
    results : tuple of TimerResult
        Breaker-failure timers, then those of zone 2.
    per_yr : bool
        Whether risks are per year; else per fault at each location.
    """

    results: tuple[TimerResult, ...]
    weights: Weights = field(default_factory=Weights)
    per_yr: bool = False

    def of(self, timer: str) -> TimerResult:
        """The result of a timer, by its name or, for breaker failure, its breaker's.

        Raises
        ------
        InputError
            If it was not studied.
        """
        for r in self.results:
            if timer == r.race.timer or r.race.timer == f"{timer}/50BF timer":
                return r
        known = [r.race.timer for r in self.results]
        raise reject("timer", timer, "a timer studied, or its breaker", tip=nearest(timer, known))

    def table(self) -> pd.DataFrame:
        """One row for each timer."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame([r.row for r in self.results])

    def __repr__(self) -> str:
        lines = [f"TimerStudy({len(self.results)} timers)"]
        for r in self.results[:20]:
            band = "no band" if r.band_us is None else f"band {r.band_us[0] / 1000:g} to {r.band_us[1] / 1000:g} ms"
            lines.append(
                f"  {r.race.timer:32} set {r.race.delay.nominal_us / 1000:g} ms, margin {r.race.margin_us / 1000:g} ms,"
                f" best {r.best_us / 1000:g} ms, {band}"
            )
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.table())


def study_timers(
    program: Program,
    sensing: Sensing,
    locations: Iterable[Location] | None = None,
    *,
    limit_us: int | Mapping[Location, int],
    zone_2_limit_us: int | None = None,
    frequencies: Mapping[Location, float] | None = None,
    weights: Weights | None = None,
    settings_us: Sequence[int] | None = None,
    step_us: int = 1000,
    dispatch: str | None = None,
    horizon_us: int = DEFAULT_HORIZON_US,
) -> TimerStudy:
    """Study the breaker-failure timer of every breaker, and every zone 2 that races breaker failure.

    Parameters
    ----------
    program : Program
    sensing : Sensing
    locations : iterable of Location or None
        Faults; by default every location of the plant.
    limit_us : int or mapping of Location to int
        Longest total clearing time with a breaker stuck, in microseconds.
    zone_2_limit_us : int or None
        Longest clearing time by a remote zone 2; None: none is set, and it is never late.
    frequencies : mapping of Location to float, or None
        Faults per year; without them figures are for one fault at each location.
    weights : Weights or None
        Costs and targets.
    settings_us : sequence of int or None
        Settings to look at; by default all in steps of ``step_us`` that can matter.
    step_us : int
    dispatch : str or None
    horizon_us : int

    Raises
    ------
    InputError
        For locations, limits, frequencies or settings that are not as stated.
    """
    chosen = list(dict.fromkeys(program.plant.locations() if locations is None else locations))
    limits = limits_of(program, chosen, limit_us)
    errors = ErrorList()
    for name, number in (("step_us", step_us), *((("setting"), t) for t in settings_us or ())):
        value: object = number
        if isinstance(value, bool) or not isinstance(value, int) or value < (1 if name == "step_us" else 0):
            errors.add(name, value, "a whole number of microseconds" + (" over zero" if name == "step_us" else ""))
    if settings_us is not None and not settings_us:
        errors.add("settings_us", "none", "a setting at least")
    for at, rate in (frequencies or {}).items():
        if not 0 <= rate < math.inf:
            errors.add(f"faults per year at {at}", rate, "a finite number of zero or more")
    errors.raise_if_any()
    w = weights or Weights()
    races = timer_races(
        program,
        sensing,
        chosen,
        limits=limits,
        zone_2_limit_us=zone_2_limit_us,
        frequencies=frequencies,
        dispatch=dispatch,
        horizon_us=horizon_us,
    )
    return TimerStudy(tuple(study_race(r, w, settings_us, step_us) for r in races), w, frequencies is not None)


def study_race(
    race: SettingRace, weights: Weights, settings_us: Sequence[int] | None = None, step_us: int = 1000
) -> TimerResult:
    """Both probabilities and the risk of one timer against its setting.

    Parameters
    ----------
    race : SettingRace
    weights : Weights
    settings_us : sequence of int or None
        By default from where a needless trip is certain to where a late clearing is.
    step_us : int
    """
    nominal = race.delay.nominal_us
    # With what is random about the timer: it runs out after its setting, plus its time less its nominal one.
    outlast = race.outlast.plus(less=(race.delay,)).grid()
    rest = None if race.rest is None else race.rest.plus(race.delay).grid()
    others = [s.grid() for s in race.others]

    def at(setting: int) -> SettingPoint:
        needless = outlast.exceeds(setting - nominal)
        late = _late(rest, others, race.limit_us, setting - nominal)
        risk = exactly(race.exposed_per_yr * weights.needless) * needless + (
            exactly(race.needed_per_yr * weights.late) * late
        )
        return SettingPoint(setting, needless, late, Bracket(risk.low or 0.0, risk.high or 0.0))

    if settings_us is None:
        low, high = max(outlast.low_us + nominal, 0), outlast.high_us + nominal
        if rest is not None and race.limit_us is not None:
            low = min(low, max(race.limit_us - rest.high_us + nominal, 0))
            high = max(high, race.limit_us - rest.low_us + nominal)
        low, high = min(low, nominal) // step_us * step_us, max(high, nominal)
        step = step_us * max(1, math.ceil((high - low) / step_us / MOST_SETTINGS))
        settings: Sequence[int] = range(max(low - step, 0), high + 2 * step, step)
    else:
        settings = sorted(set(settings_us))
    return TimerResult(race, at(nominal), tuple(at(t) for t in settings), weights)


def _late(rest: Grid | None, others: list[Grid], limit_us: int | None, later_us: int) -> Bracket:
    """P(late) where the timer is set later by so much; what else clearing waits for adds its own at most."""
    if rest is None or limit_us is None:
        return exactly(0.0)
    found = rest.exceeds(limit_us - later_us)
    apart = [g.exceeds(limit_us) for g in others]
    low = max(float(b.low) for b in (found, *apart))
    return Bracket(low, min(float(found.high) + sum(float(b.high) for b in apart), 1.0))


def _ms(t_us: int | None) -> float | None:
    return None if t_us is None else t_us / 1000
