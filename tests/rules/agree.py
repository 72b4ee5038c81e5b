"""Both engines on the same random programs, answers and delays: where do they differ?

``python tests/rules/agree.py 10000`` compares so many programs, prints what was compared and exits with 1
if anything differed; ``--from 5000`` starts at another one. A program is made from its number, by which a
difference is found again.

Compared are each opening (breaker, both times, role, trip output, whether it interrupted), the time of clearing,
outputs observed, whether the horizon cut a run short, breakers open at the end, and questions with their
answers in the order asked. Packed words know all answers from the start and ask nothing; which of several trip
outputs of one role energised a coil at one instant they name by their own rule, so that name is left out for them.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from fractions import Fraction
from pathlib import Path
from random import Random
from typing import TYPE_CHECKING

import numpy as np

if __name__ == "__main__":  # run as a script: the project's own folder comes first
    sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from schemesim.engine.answers import DrawnAnswers
from schemesim.engine.batch import run_batch
from schemesim.engine.case import Case, bind
from schemesim.engine.columns import Columns, gather
from schemesim.engine.event import run_event
from schemesim.engine.many import ManyDrawn, ManyDrawnTimes, ManyNominalTimes, ManyTimes
from schemesim.engine.outcome import Outcome
from schemesim.engine.packed import Packed
from schemesim.engine.sensing import LogicalSensing
from schemesim.engine.times import DelayTimes
from schemesim.engine.walk import Walk
from schemesim.engine.wiring import wiring_of
from schemesim.errors import RunError
from schemesim.study.tree import Tree, explore
from tests.rules.random_curves import DrawnCurrents, with_curves
from tests.rules.random_schemes import HORIZON_US, Sample, sample, with_random_delays, with_seals

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Rows = NDArray[np.intp]

TRIALS = 8
"""Runs of each program in each comparison."""

SEED = 1
"""Of answers and delays."""

TREE_RUNS = 60

Asked = tuple[tuple[int, bool], ...]


@dataclass(frozen=True)
class Seen:
    """What one engine made of one run; None for questions where an engine asks none."""

    outcome: Outcome
    final_mask: int
    asked: Asked | None

    def plain(self) -> Seen:
        """Without what packed words leave open."""
        return Seen(self.outcome.without_via(), self.final_mask, None)


@dataclass(frozen=True)
class Difference:
    """Where two engines differ; what does not settle is None."""

    program: int
    what: str
    trial: int
    event: object
    batch: object

    def __str__(self) -> str:
        return f"program {self.program}, {self.what}, trial {self.trial}:\n  event {self.event}\n  batch {self.batch}"


@dataclass(frozen=True)
class Setting:
    """A case with all that its runs depend on."""

    number: int
    case: Case
    random: bool
    horizon_us: int

    @property
    def answers(self) -> ManyDrawn:
        """The answers of all trials, for a batch."""
        return ManyDrawn(self.case.program, SEED, 0, TRIALS)

    @property
    def times(self) -> ManyTimes:
        """The delays of all trials, for a batch."""
        return ManyDrawnTimes(SEED, 0, TRIALS) if self.random else ManyNominalTimes()

    def event(self, trial: int) -> Seen | None:
        """A trial on the event engine; None where an instant does not settle."""
        times = DelayTimes(SEED, trial) if self.random else None
        answers = DrawnAnswers(self.case.program, SEED, trial)
        try:
            run = run_event(self.case, answers, times=times, horizon_us=self.horizon_us)
        except RunError:
            return None
        return Seen(run.outcome, run.final_mask, run.asked)


Engine = Callable[[Setting, "Rows"], list[Seen]]
"""Runs some trials together."""


def walked(setting: Setting, rows: Rows) -> list[Seen]:
    """The automaton of states."""
    walk = Walk(setting.case, rows, setting.answers, setting.times)
    walk.asked = []
    walk.finish(setting.horizon_us)
    asked: dict[int, list[tuple[int, bool]]] = {int(row): [] for row in rows}
    place = {int(row): i for i, row in enumerate(rows)}
    for some, nodes in walk.asked:
        for row, node in zip(some.tolist(), nodes.tolist(), strict=True):
            q = walk.automaton.asks[node]
            asked[row].append((walk.automaton.w.questions[q], bool(walk.yes[q, place[row]])))
    found = _seen(setting.case, walk.columns(), rows)
    return [replace(one, asked=tuple(asked[int(row)])) for one, row in zip(found, rows, strict=True)]


def in_words(setting: Setting, rows: Rows) -> list[Seen]:
    """Words of 64 rows."""
    packed = Packed(wiring_of(setting.case), rows, setting.answers, setting.times, setting.horizon_us)
    packed.finish()
    return _seen(setting.case, packed.columns(), rows)


def _seen(case: Case, columns: Columns, rows: Rows) -> list[Seen]:
    batch = gather(case, [columns])
    masks = [batch.endings[int(e)].final_mask for e in batch.ending]
    return [Seen(batch.outcome(i), mask, None) for i, mask in zip(range(rows.size), masks, strict=True)]


def settings_of(number: int, random: bool, curves: bool = False) -> Setting:
    """The program of a number, with delays random or all fixed, with inverse-time elements or without."""
    rng = Random(number)
    s: Sample = sample(rng, rng.choice((2, 3, 4)))
    sealed = rng.random() < 0.5
    if random:  # before seals: what is restless there goes on at once or slowly, not each microsecond
        s = with_random_delays(s, rng)
    if sealed:
        s = with_seals(s, rng)
    horizon_us = rng.choice((HORIZON_US, HORIZON_US, HORIZON_US, 60_000, 100_000))
    sensing = LogicalSensing()
    if curves:
        s, sensing = with_curves(s, rng), DrawnCurrents(number)
    return Setting(number, bind(s.program, s.event, sensing, observe=s.observe), random, horizon_us)


@dataclass
class Compared:
    """What was compared and what differed."""

    counts: Counter[str]
    differences: list[Difference]

    def runs(self, setting: Setting, engines: dict[str, Engine]) -> None:
        """Every trial of a program on the event engine and on others."""
        expected = [setting.event(trial) for trial in range(TRIALS)]
        settled = np.array([t for t, seen in enumerate(expected) if seen is not None], dtype=np.intp)
        self.counts["programs"] += 1
        self.counts["openings"] += sum(len(seen.outcome.openings) for seen in expected if seen)
        self.counts["questions"] += sum(len(seen.asked or ()) for seen in expected if seen)
        self.counts["cleared"] += sum(seen.outcome.t_clear_us is not None for seen in expected if seen)
        self.counts["outputs observed"] += sum(len(seen.outcome.operated) for seen in expected if seen)
        self.counts["cut at the horizon"] += sum(seen.outcome.at_horizon for seen in expected if seen)
        for name, engine in engines.items():
            try:
                found: list[Seen | None] = [*engine(setting, settled)]
            except RunError:
                found = [None] * len(settled)
            for trial, got in zip(settled.tolist(), found, strict=True):
                self.counts[f"runs {name}"] += 1
                want = expected[trial]
                if want is not None and engine is in_words:
                    want, got = want.plain(), got and got.plain()
                if want != got:
                    self.differences.append(Difference(setting.number, name, trial, want, got))
            for trial in range(TRIALS):
                if expected[trial] is None:
                    self.unsettled(setting, name, engine, trial)

    def unsettled(self, setting: Setting, name: str, engine: Engine, trial: int) -> None:
        """A trial of which an instant does not settle: it settles nowhere."""
        self.counts["runs that do not settle"] += 1
        try:
            (got,) = engine(setting, np.array([trial]))
        except RunError:
            return
        self.differences.append(Difference(setting.number, name, trial, None, got))

    def trees(self, number: int) -> None:
        """The event tree that goes on from where runs part, and the one that runs each leaf from its start."""
        rng = Random(number)
        setting = settings_of(number, random=rng.random() < 0.3)
        case, horizon_us = setting.case, setting.horizon_us
        questions = case.program.questions
        given: dict[int | str, bool] = {}
        if questions and rng.random() < 0.4:
            given[rng.choice(questions).name] = rng.random() < 0.5
        complete, max_runs = rng.choice((0, 0, 1, 2)), rng.choice((TREE_RUNS, 2))
        epsilon = rng.choice((Fraction(0), Fraction(1, 50)))

        def tree(forks: bool) -> Tree | None:
            kept: dict[str, object] = {} if forks else {"run": run_event}
            try:
                return explore(
                    case,
                    epsilon=epsilon,
                    max_runs=max_runs,
                    horizon_us=horizon_us,
                    given=given,
                    complete=complete,
                    **kept,  # type: ignore[arg-type]  # the one keyword left out or given
                )
            except RunError:
                return None

        want, got = tree(forks=False), tree(forks=True)
        self.counts["trees"] += 1
        self.counts["trees on condition"] += bool(given)
        if want is None or got is None:
            self.counts["trees that do not settle"] += 1
            if want is not got:
                self.differences.append(Difference(number, "tree", -1, want, got))
            return
        self.counts["leaves"] += len(want.leaves)
        for part in ("leaves", "ends", "masses", "unexplored", "runs", "stopped", "given", "depth"):
            a, b = getattr(want, part), getattr(got, part)
            if a != b:
                self.differences.append(Difference(number, f"tree, {part}", -1, a, b))


def nothing_yet() -> Compared:
    """Nothing compared so far."""
    return Compared(Counter(), [])


def compare_fixed(number: int, compared: Compared) -> None:
    """All delays fixed: the automaton, and words."""
    compared.runs(settings_of(number, random=False), {"automaton": walked, "words": in_words})


def compare_random(number: int, compared: Compared) -> None:
    """Some delays random: words, and the automaton with times of their own for each row."""
    setting = settings_of(number, random=True)
    compared.runs(setting, {"words, random delays": in_words, "automaton, random delays": walked})


def compare_nominal(number: int, compared: Compared) -> None:
    """Random delays at their nominal times."""
    setting = replace(settings_of(number, random=True), random=False)
    compared.runs(setting, {"automaton, nominal times": walked, "words, nominal times": in_words})


def compare_inverse(number: int, compared: Compared) -> None:
    """Inverse-time elements, with delays fixed or random."""
    setting = settings_of(number, random=number % 2 == 1, curves=True)
    compared.counts["inverse-time elements"] += len(setting.case.inverse)
    compared.runs(setting, {"words, inverse time": in_words})


def compare_trees(number: int, compared: Compared) -> None:
    """Event trees."""
    compared.trees(number)


EVERY = (compare_fixed, compare_random, compare_nominal, compare_inverse, compare_trees)


def programs(first: int, count: int) -> Iterator[tuple[int, Compared]]:
    """Compare programs one after the other; the number of each and all that was compared so far."""
    compared = nothing_yet()
    for number in range(first, first + count):
        for compare in EVERY:
            compare(number, compared)
        yield number, compared


def pieces_agree(setting: Setting, rows: int) -> bool:
    """Whether a batch is the same in one piece and in pieces of 64 rows, what does not settle included."""
    program, random = setting.case.program, setting.random

    def part(first: int, count: int) -> list[Outcome] | None:
        times = ManyDrawnTimes(SEED, first, count) if random else None
        answers = ManyDrawn(program, SEED, first, count)
        try:
            batch = run_batch(setting.case, count, answers, times=times, horizon_us=setting.horizon_us)
        except RunError:
            return None
        return [batch.outcome(i) for i in range(count)]

    whole = part(0, rows)
    pieces = [part(first, min(64, rows - first)) for first in range(0, rows, 64)]
    if whole is None or None in pieces:
        return whole is None and None in pieces
    return whole == [outcome for piece in pieces for outcome in piece or ()]


def main() -> int:
    """The command line."""
    parser = argparse.ArgumentParser(description="Compare the engines on random programs.")
    parser.add_argument("count", type=int, help="how many programs")
    parser.add_argument("--from", dest="first", type=int, default=0, help="the number of the first one")
    asked = parser.parse_args()
    compared = nothing_yet()
    shown = 0
    for number, compared in programs(asked.first, asked.count):
        for difference in compared.differences[shown:]:
            print(difference, flush=True)
        shown = len(compared.differences)
        if (number + 1 - asked.first) % 1000 == 0:
            print(f"{number + 1 - asked.first} programs, {shown} differences", flush=True)
        if shown >= 10:
            break
    for name, value in sorted(compared.counts.items()):
        print(f"{name:28} {value:>10,}")
    print(f"{'differences':28} {shown:>10,}")
    return 1 if shown else 0


if __name__ == "__main__":
    sys.exit(main())
