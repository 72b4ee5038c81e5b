"""Failure injection: the outcome of every single failure, and of every pair, on one case.

A failure nobody asks about changes nothing observed (rule R4), so only those met need a
run: the failures asked in the run without any, and for each of them those asked in
the run under it. Every other failure or pair has the outcome of what is met of it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from itertools import combinations
from typing import TYPE_CHECKING, Literal

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import Case
from schemesim.engine.event import DEFAULT_HORIZON_US, run_event
from schemesim.engine.outcome import Outcome, Run, Status
from schemesim.errors import reject
from schemesim.scheme.model import Probability
from schemesim.show.tables import to_html
from schemesim.study.measures import cleared_by, excess
from schemesim.study.tree import Engine

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class Injected:
    """The outcome under a few failures.

    Attributes
    ----------
    failures : tuple of str
    questions : tuple of int
        Their indices in the program.
    probability : Probability
        That all of them happen (the product of their probabilities on demand).
    outcome : Outcome
    final_mask : int
    met : tuple of str
        Those of the failures that were asked about; the others were immaterial.
    changed : bool
        The outcome differs from that without any failure.
    cleared_by : str
        Role of what cleared the fault, in plain words; empty if it was not.
    excess : int
        Breakers opened beyond the intended ones.
    """

    failures: tuple[str, ...]
    questions: tuple[int, ...]
    probability: Probability
    outcome: Outcome
    final_mask: int
    met: tuple[str, ...]
    changed: bool
    cleared_by: str
    excess: int

    @property
    def immaterial(self) -> bool:
        """Whether one of the failures was not asked about: the outcome is that of the others."""
        return len(self.met) < len(self.failures)


@dataclass(frozen=True)
class Injection:
    """Every failure, or combination, injected into one case; the first row has none."""

    event: str
    order: int
    rows: tuple[Injected, ...]
    runs: int

    @property
    def base(self) -> Injected:
        """The outcome with no failure."""
        return self.rows[0]

    def where(self, failures: Iterable[str]) -> Injected:
        """The row of these failures.

        Raises
        ------
        InputError
            If they were not among the candidates.
        """
        wanted = frozenset(failures)
        for row in self.rows:
            if frozenset(row.failures) == wanted:
                return row
        raise reject("injected failures", sorted(wanted), "a combination that was among the candidates")

    def ranked(self) -> tuple[Injected, ...]:
        """Rows with failures, the worst first: not cleared, then the longest, then most breakers, then by name.

        A common cause counts as one failure.
        """
        return tuple(sorted(self.rows[1:], key=_worst_first))

    def worst(self) -> Injected:
        """The row with the worst outcome; that without a failure if there is no other."""
        return next(iter(self.ranked()), self.base)

    def table(self, ranked: bool = False) -> pd.DataFrame:
        """One row for each combination, times in ms; ``ranked``: after the first the worst first, else by name."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame(
            [
                {
                    "failures": ", ".join(r.failures) or "none",
                    "order": len(r.failures),
                    "p": float(r.probability),
                    "status": str(r.outcome.status),
                    "t_clear_ms": None if r.outcome.t_clear_us is None else r.outcome.t_clear_us / 1000,
                    "cleared_by": r.cleared_by,
                    "breakers": len(r.outcome.tripped),
                    "breakers_excess": r.excess,
                    "tripped": ", ".join(sorted(r.outcome.tripped)),
                    "changed": r.changed,
                    "immaterial": r.immaterial,
                }
                for r in ((self.base, *self.ranked()) if ranked else self.rows)
            ]
        )

    def __repr__(self) -> str:
        changed = sum(r.changed for r in self.rows)
        tried = len(self.rows) - 1
        return f"Injection({self.event}: {tried} combinations, {changed} change the outcome, {self.runs} runs)"

    def _repr_html_(self) -> str:
        return to_html(self.table())


def inject(
    case: Case,
    order: int = 1,
    candidates: Literal["met", "all"] = "met",
    *,
    horizon_us: int = DEFAULT_HORIZON_US,
    run: Engine = run_event,
) -> Injection:
    """Inject every single failure (order 1), and every pair as well (order 2).

    Parameters
    ----------
    case : Case
    order : int
        1 or 2: N-1 or N-2 of the protection system.
    candidates : {"met", "all"}
        ``"met"``: combinations all of which are asked about. ``"all"``: every failure that
        bears on the case, the immaterial ones with the outcome they leave unchanged.
    horizon_us : int
    run : Engine

    Returns
    -------
    Injection
        The run without a failure first, then singles, then pairs, by name.

    Raises
    ------
    InputError
        For another order or another word for the candidates.
    """
    if order not in (1, 2):
        raise reject("order of injection", order, "1 (every single failure) or 2 (every pair too)")
    if candidates not in ("met", "all"):
        raise reject("candidates", candidates, "'met' or 'all'")
    done: dict[tuple[int, ...], Run] = {}

    def ran(failures: tuple[int, ...]) -> Run:
        if failures not in done:
            done[failures] = run(case, FixedAnswers(case.program, failures), horizon_us=horizon_us)
        return done[failures]

    def met_of(failures: tuple[int, ...]) -> tuple[tuple[int, ...], Run]:
        """What is met of the failures, and the run; only what is met is run."""
        met: tuple[int, ...] = ()
        while True:
            found = ran(met)
            further = [q for q, _ in found.asked if q in failures and q not in met]
            if not further:
                return met, found
            met = tuple(sorted((*met, further[0])))

    siblings = case.program.siblings
    singles = [q for q, _ in ran(()).asked] if candidates == "met" else _bearing(case)
    chosen: set[tuple[int, ...]] = {(q,) for q in singles}
    if order == 2:
        if candidates == "all":
            pairs: Iterable[tuple[int, int]] = combinations(sorted(singles), 2)
        else:
            pairs = {(min(q, r), max(q, r)) for q in singles for r, _ in ran((q,)).asked if r != q}
        chosen.update((q, r) for q, r in pairs if r not in siblings[q])
    base = ran(())
    rows = []
    for failures in [(), *sorted(chosen, key=lambda f: (len(f), f))]:
        met, found = met_of(failures)
        if candidates == "met" and len(met) < len(failures):
            continue
        rows.append(_row(case, failures, met, found, base))
    return Injection(str(case.event), order, tuple(rows), len(done))


def _worst_first(row: Injected) -> tuple[int, float, int, tuple[str, ...]]:
    o = row.outcome
    rank = {Status.NOT_CLEARED: 0, Status.UNDETERMINED: 1}.get(o.status, 2)
    return rank, -(o.t_clear_us or 0), -len(o.tripped), row.failures


def _bearing(case: Case) -> list[int]:
    """Every question that bears on the case."""
    asked = {q for group in case.asks for q in group}
    asked.update(q for asks in case.breaker_asks for ask in asks for q in ask.questions)
    return sorted(asked)


def _row(case: Case, failures: tuple[int, ...], met: tuple[int, ...], found: Run, base: Run) -> Injected:
    names = tuple(case.questions[q].name for q in failures)
    p: Probability = 1
    for q in failures:
        p = p * case.questions[q].probability
    role = cleared_by(case, found.outcome)
    return Injected(
        failures=names,
        questions=failures,
        probability=p,
        outcome=found.outcome,
        final_mask=found.final_mask,
        met=tuple(case.questions[q].name for q in met),
        changed=(found.outcome, found.final_mask) != (base.outcome, base.final_mask),
        cleared_by="" if role is None else role.label,
        excess=excess(case, found.outcome),
    )
