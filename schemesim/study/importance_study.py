"""Importance of every component over all fault locations: which of them is worth improving, and by how much.

For a component, *failed* means that any of its own modes has happened; a common cause is
an item of its own. With p the probability of that, and P1, P0 the probabilities of the event (a fault
not cleared, or late) where it has failed and where it has not, both averaged over the faults by their
frequency, the figures are those of :mod:`schemesim.study.importance`. They are linear in P1 and P0, or rise
with P1 and fall with P0, so the mean over the locations keeps their brackets.

One tree is explored for each location, and both probabilities of every item come from its leaves and their exact
weights: what a leaf did not ask about has failed there with its own probability. Only where P1 is left wider than is
wanted are trees explored on condition that a mode of the item has happened. An item in no leaf can have no more
Birnbaum importance than the mass left unexplored: ``others_at_most``.
"""

from __future__ import annotations

import math
import pickle
from collections.abc import Iterable, Iterator, Mapping
from concurrent.futures import Executor
from dataclasses import dataclass
from enum import StrEnum
from fractions import Fraction
from functools import lru_cache
from typing import TYPE_CHECKING

from schemesim.engine.case import bind
from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.outcome import Outcome
from schemesim.engine.program import Program
from schemesim.engine.sensing import Sensing
from schemesim.errors import ErrorList, nearest, reject
from schemesim.plant.model import Location
from schemesim.show.tables import to_html
from schemesim.study.brackets import Bracket, exactly, total
from schemesim.study.importance import Given, Importance, given_by_leaves, importance_table, modes_of, p_of
from schemesim.study.locations import Progress
from schemesim.study.measures import cleared_by_time
from schemesim.study.odds import askable
from schemesim.study.register import limits_of
from schemesim.study.tree import MAX_RUNS, Tree, explore

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes


class Spoils(StrEnum):
    """The event that importance is counted for."""

    NOT_CLEARED = "not cleared"
    LATE = "late or not cleared"


FIGURES = ("birnbaum", "criticality_ratio", "risk_achievement_worth", "risk_reduction_worth")
"""By what a table can be sorted."""


@dataclass(frozen=True)
class ImportanceAt:
    """One location: the event's probability, and every item in a leaf of its tree.

    What is in no leaf has the event's own bracket, failed or not. ``asks`` has the items that some
    run of the case may ask about: others change nothing there.
    """

    location: Location
    fed: bool
    p_event: Bracket
    items: Mapping[str, Given]
    asks: frozenset[str]
    runs: int
    unexplored: float


@dataclass(frozen=True)
class ImportanceStudy:
    """Importance of components and common causes over locations, by criticality ratio the greatest first.

    Attributes
    ----------
    event : Spoils
    items : tuple of Importance
        ``failure`` is the name of the component, or of a common cause.
    at : tuple of ImportanceAt
    p_event : Bracket
        Probability of the event, over the faults.
    faults_per_yr : float or None
        Faults a year at the locations; None without frequencies.
    others : int
        Components that can fail and are in no leaf of any tree.
    others_at_most : float
        Birnbaum importance that any of these can have.
    complete : bool
        False if the study was interrupted.
    """

    event: Spoils
    items: tuple[Importance, ...]
    at: tuple[ImportanceAt, ...]
    p_event: Bracket
    faults_per_yr: float | None
    others: int
    others_at_most: float
    complete: bool = True

    def of(self, name: str) -> Importance:
        """The figures of one item.

        Raises
        ------
        InputError
            If it is in no leaf.
        """
        known = {i.failure: i for i in self.items}
        if name not in known:
            raise reject("component", name, "one in a leaf of a tree", tip=nearest(name, known))
        return known[name]

    def avoided_per_yr(self, item: Importance) -> Bracket | None:
        """Events a year that would not happen if the item never failed: p × Birnbaum × faults a year."""
        if self.faults_per_yr is None:
            return None
        gained = exactly(item.probability) * item.birnbaum * exactly(self.faults_per_yr)
        return Bracket(max(gained.low, 0), max(gained.high, 0)) if item.birnbaum.low >= 0 else gained

    def table(self, by: str = "criticality_ratio") -> pd.DataFrame:
        """One row for each item, sorted by the middle of a figure's bracket.

        Parameters
        ----------
        by : str
            One of ``FIGURES``.

        Raises
        ------
        InputError
            For another figure.
        """
        check_figure(by)
        order = sorted(self.items, key=lambda i: (-_middle(getattr(i, by)), i.failure))
        frame = importance_table(order).rename(columns={"failure": "component"})
        if self.faults_per_yr is not None:
            gains = [self.avoided_per_yr(i) or exactly(0) for i in order]
            frame["avoided_per_yr_low"] = [float(g.low) for g in gains]
            frame["avoided_per_yr_high"] = [float(g.high) for g in gains]
        return frame

    def plot(self, by: str = "criticality_ratio", most: int = 20, ax: Axes | None = None) -> Axes:
        """The greatest figures as bars, with their brackets; ``by`` is one of ``FIGURES``."""
        from schemesim.show.bars import plot_bars  # heavy: only when a picture is asked for

        frame = self.table(by).head(most)
        rows = list(zip(frame["component"], frame[f"{by}_low"], frame[f"{by}_high"], strict=True))
        words = by.replace("_", " ")
        return plot_bars(rows, title=f"importance: fault {self.event}", x=words, shares="worth" not in by, ax=ax)

    def __repr__(self) -> str:
        lines = [
            f"ImportanceStudy({self.event}: {self.p_event} of a fault, {len(self.at)} locations, {len(self.items)} "
            f"items{'' if self.complete else ', interrupted'}; {self.others} more in no leaf, Birnbaum at most "
            f"{self.others_at_most:.2g} each)"
        ]
        lines.extend(f"  {i.failure:36} criticality {i.criticality_ratio}" for i in self.items[:10])
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.table())


def check_figure(by: str) -> None:
    """Refuse a figure that importance has not.

    Raises
    ------
    InputError
        For another than those of ``FIGURES``.
    """
    if by not in FIGURES:
        raise reject("figure to sort by", by, f"one of {list(FIGURES)}", tip=nearest(by, FIGURES))


def _middle(b: Bracket) -> float:
    """What an item is sorted by; an unbounded figure by its low end, which is known."""
    low, high = float(b.low), float(b.high)
    return low if math.isinf(high) or math.isinf(low) else (low + high) / 2


@dataclass(frozen=True)
class _Options:
    event: Spoils
    epsilon: float
    epsilon_given: float
    max_runs: int
    horizon_us: int
    dispatch: str | None


def study_importance(
    program: Program,
    sensing: Sensing,
    locations: Iterable[Location] | None = None,
    *,
    limit_us: int | Mapping[Location, int],
    event: Spoils | str = Spoils.LATE,
    frequencies: Mapping[Location, float] | None = None,
    dispatch: str | None = None,
    epsilon: float = 1e-4,
    epsilon_given: float = 0.05,
    max_runs: int = MAX_RUNS,
    horizon_us: int = DEFAULT_HORIZON_US,
    executor: Executor | None = None,
    progress: Progress | None = None,
) -> ImportanceStudy:
    """Importance of every component that a tree asks about, over fault locations.

    Parameters
    ----------
    program : Program
    sensing : Sensing
    locations : iterable of Location or None
        By default every location of the plant.
    limit_us : int or mapping of Location to int
        Longest clearing time that is in time, in microseconds.
    event : Spoils
        ``"late or not cleared"`` or ``"not cleared"``.
    frequencies : mapping of Location to float, or None
        Faults per year; by default every location weighs the same.
    dispatch : str or None
    epsilon : float
        Mass of the tree of each location left unexplored.
    epsilon_given : float
        Width of P(event | failed) under which the leaves of the location's tree will do; what is wider is explored
        again on condition of the failure, to that mass. In the shares of the event it counts only times the
        failure's own probability.
    max_runs, horizon_us : int
    executor : concurrent.futures.Executor or None
        Runs the work; the results are the same with any, or with none.
    progress : callable or None
        Called with the number of locations done and of all.

    Raises
    ------
    InputError
        For locations, limits, frequencies or an event that are not as stated.

    References
    ----------
    Z. W. Birnbaum in *Multivariate Analysis II* (1969); risk achievement and reduction worth after
    NUREG/CR-3385 (from memory).
    """
    if event not in set(Spoils):
        raise reject("event", event, f"one of {[str(e) for e in Spoils]}", tip=nearest(str(event), list(Spoils)))
    chosen = list(dict.fromkeys(program.plant.locations() if locations is None else locations))
    limits = limits_of(program, chosen, limit_us)
    weights = _weights(chosen, frequencies)
    options = _Options(Spoils(event), epsilon, epsilon_given, max_runs, horizon_us, dispatch)
    done: list[ImportanceAt] = []
    complete = True
    try:
        for found in _each(program, sensing, chosen, limits, options, executor):
            done.append(found)
            if progress is not None:
                progress(len(done), len(chosen))
    except KeyboardInterrupt:
        complete = False
    return _summed(program, Spoils(event), done, weights, frequencies is not None, complete)


def _weights(chosen: list[Location], frequencies: Mapping[Location, float] | None) -> dict[Location, float]:
    errors = ErrorList()
    for at, rate in (frequencies or {}).items():
        if not 0 <= rate < float("inf"):
            errors.add(f"faults per year at {at}", rate, "a finite number of zero or more")
    errors.raise_if_any()
    return {at: 1 if frequencies is None else frequencies.get(at, 0.0) for at in chosen}


def importance_at(
    program: Program, location: Location, sensing: Sensing, limit_us: int, options: _Options
) -> ImportanceAt:
    """The tree of one location, and more for items whose bracket it leaves too wide."""
    case = bind(program, location, sensing, dispatch=options.dispatch)
    if not case.topology(0).fed:
        return ImportanceAt(location, False, exactly(Fraction(0)), {}, frozenset(), 0, 0.0)

    def happens(outcome: Outcome) -> bool:
        if options.event is Spoils.NOT_CLEARED:
            return outcome.t_clear_us is None
        return not cleared_by_time(outcome, limit_us)

    def grown(given: Mapping[int | str, bool]) -> Tree:
        return explore(
            case,
            epsilon=options.epsilon_given if given else options.epsilon,
            max_runs=options.max_runs,
            horizon_us=options.horizon_us,
            complete=1 if not given else 0,
            given=given,
        )

    tree = grown({})
    asked = {q for leaf in tree.leaves for q, _ in leaf.asked}
    runs = tree.runs
    every = modes_of(program)
    modes_asked = {n: modes for n, modes in sorted(every.items()) if not asked.isdisjoint(modes)}
    items = given_by_leaves(tree, modes_asked, happens)
    for name, found in items.items():
        if found.failed.width <= options.epsilon_given:
            continue
        parts: list[Bracket] = []
        for q in modes_asked[name]:
            more = grown({q: True})
            runs += more.runs
            parts.append(exactly(program.questions[q].probability) * more.bracket(happens))
        anew = _clipped(total(parts) / exactly(p_of(program, modes_asked[name])))
        both = Bracket(max(anew.low, found.failed.low), min(anew.high, found.failed.high))
        items[name] = Given(both, found.works)
    may = askable(case)
    asks = frozenset(n for n, modes in every.items() if not may.isdisjoint(modes))
    return ImportanceAt(location, True, tree.bracket(happens), items, asks, runs, float(tree.unexplored))


def _clipped(b: Bracket) -> Bracket:
    return Bracket(max(b.low, 0), min(b.high, 1))


def _summed(
    program: Program,
    event: Spoils,
    done: list[ImportanceAt],
    weights: Mapping[Location, float],
    per_yr: bool,
    complete: bool,
) -> ImportanceStudy:
    modes = modes_of(program)
    counted = [(exactly(Fraction(weights[a.location])), a) for a in done if a.fed and weights[a.location] > 0]
    if not counted:
        raise reject("locations", [str(a.location) for a in done], "one that is fed, with faults, at least")
    weight = total(w for w, _ in counted)

    def mean(values: Iterable[tuple[Bracket, Bracket]]) -> Bracket:
        return _clipped(total(w * b for w, b in values) / weight)

    p_event = mean((w, a.p_event) for w, a in counted)
    items = []
    for name in sorted({name for _, a in counted for name in a.items}):
        here = [(w, a.items.get(name, Given(a.p_event, a.p_event))) for w, a in counted]
        failed, works = mean((w, g.failed) for w, g in here), mean((w, g.works) for w, g in here)
        gained = total(
            w * (g.failed - g.works) for (w, a), (_, g) in zip(counted, here, strict=True) if name in a.asks
        )
        items.append(Importance(name, p_of(program, modes[name]), failed, works, gained / weight, p_event))
    rest = mean((w, Bracket(0, min(a.unexplored, 1.0))) for w, a in counted).high
    return ImportanceStudy(
        event=event,
        items=tuple(sorted(items, key=lambda i: (-_middle(i.criticality_ratio), i.failure))),
        at=tuple(done),
        p_event=p_event,
        faults_per_yr=float(weight.high) if per_yr else None,
        others=len(modes) - len(items),
        others_at_most=float(rest),
        complete=complete,
    )


def _each(
    program: Program,
    sensing: Sensing,
    chosen: list[Location],
    limits: Mapping[Location, int],
    options: _Options,
    executor: Executor | None,
) -> Iterator[ImportanceAt]:
    if executor is None:
        for at in chosen:
            yield importance_at(program, at, sensing, limits[at], options)
        return
    shared = pickle.dumps((program, sensing, options))
    yield from executor.map(_piece, [shared] * len(chosen), chosen, [limits[at] for at in chosen])


@lru_cache(maxsize=2)
def _unpacked(shared: bytes) -> tuple[Program, Sensing, _Options]:
    program, sensing, options = pickle.loads(shared)
    return program, sensing, options


def _piece(shared: bytes, location: Location, limit_us: int) -> ImportanceAt:
    program, sensing, options = _unpacked(shared)
    return importance_at(program, location, sensing, limit_us, options)
