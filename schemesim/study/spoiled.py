"""What a failure does to the clearing of a fault at one location: the fault stays, is late, or takes more breakers."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum

from schemesim.engine.case import Case, bind
from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.program import Program
from schemesim.engine.sensing import Sensing
from schemesim.plant.model import Location
from schemesim.scheme.model import Probability
from schemesim.study.injection import Injected, inject
from schemesim.study.losses import lost
from schemesim.study.measures import cleared_by_time


class Effect(IntEnum):
    """What failures do to the clearing of a fault, the worst last."""

    NONE = 0
    MORE_BREAKERS = 1
    LATE = 2
    NOT_CLEARED = 3

    @property
    def label(self) -> str:
        """Plain words."""
        return self.name.lower().replace("_", " ")


@dataclass(frozen=True, slots=True)
class Spoiled:
    """What failures do at one fault location.

    Attributes
    ----------
    location : Location
    effect : Effect
    t_clear_us, t_clear_without_us : int or None
        Clearing time under the failures and without any; None: not cleared.
    breakers, breakers_without : int
        Breakers opened under the failures and without any.
    excess : int
        Breakers opened beyond the intended.
    load_lost_mw, load_lost_without_mw : float
    cleared_by : str
        The role of what cleared it, in plain words; empty if nothing did.
    """

    location: Location
    effect: Effect
    t_clear_us: int | None
    t_clear_without_us: int | None
    breakers: int
    breakers_without: int
    excess: int
    load_lost_mw: float
    load_lost_without_mw: float
    cleared_by: str


def place_row(s: Spoiled) -> dict[str, object]:
    """A location spoiled as a flat row, times in ms."""
    return {
        "location": str(s.location),
        "effect": s.effect.label,
        "t_clear_ms": None if s.t_clear_us is None else s.t_clear_us / 1000,
        "t_clear_ms_without": None if s.t_clear_without_us is None else s.t_clear_without_us / 1000,
        "cleared_by": s.cleared_by,
        "breakers": s.breakers,
        "breakers_without": s.breakers_without,
        "breakers_excess": s.excess,
        "load_lost_mw": s.load_lost_mw,
        "load_lost_mw_without": s.load_lost_without_mw,
    }


@dataclass(frozen=True)
class AtLocation:
    """What injection found at one location: failures that spoil it, and what is spoiled anyway."""

    location: Location
    found: tuple[tuple[tuple[str, ...], Probability, Spoiled], ...]
    anyway: Spoiled | None
    runs: int


@dataclass(frozen=True)
class RegisterOptions:
    """How each location is looked at."""

    order: int = 1
    dispatch: str | None = None
    horizon_us: int = DEFAULT_HORIZON_US


def register_at(
    program: Program, location: Location, sensing: Sensing, limit_us: int, options: RegisterOptions
) -> AtLocation:
    """Inject every single failure (or pair) at one location."""
    case = bind(program, location, sensing, dispatch=options.dispatch)
    injection = inject(case, options.order, horizon_us=options.horizon_us)
    base = injection.base
    effects: dict[frozenset[str], Effect] = {}
    found = []
    for row in injection.rows[1:]:
        effect = _effect(base, row, limit_us)
        effects[frozenset(row.failures)] = effect
        alone = [effects.get(frozenset({f}), Effect.NONE) for f in row.failures] if len(row.failures) > 1 else []
        if effect > max(alone, default=Effect.NONE):
            found.append((row.failures, row.probability, _spoiled(case, location, base, row, effect)))
    stays = base.outcome.t_clear_us is None and case.topology(0).fed
    late = base.outcome.t_clear_us is not None and base.outcome.t_clear_us > limit_us
    bad = Effect.NOT_CLEARED if stays else Effect.LATE if late else Effect.NONE
    anyway = _spoiled(case, location, base, base, bad) if bad else None
    return AtLocation(location, tuple(found), anyway, injection.runs)


def _effect(base: Injected, row: Injected, limit_us: int) -> Effect:
    """What failures do that is not so without them."""
    was, now = base.outcome, row.outcome
    if now.t_clear_us is None:
        return Effect.NOT_CLEARED if was.t_clear_us is not None else _more(base, row)
    if now.t_clear_us > limit_us and cleared_by_time(was, limit_us):
        return Effect.LATE
    return _more(base, row)


def _more(base: Injected, row: Injected) -> Effect:
    return Effect.MORE_BREAKERS if row.excess > base.excess else Effect.NONE


def _spoiled(case: Case, location: Location, base: Injected, row: Injected, effect: Effect) -> Spoiled:
    return Spoiled(
        location=location,
        effect=effect,
        t_clear_us=row.outcome.t_clear_us,
        t_clear_without_us=base.outcome.t_clear_us,
        breakers=len(row.outcome.tripped),
        breakers_without=len(base.outcome.tripped),
        excess=row.excess,
        load_lost_mw=lost(case, row.final_mask)[0],
        load_lost_without_mw=lost(case, base.final_mask)[0],
        cleared_by=row.cleared_by,
    )
