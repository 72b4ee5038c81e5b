"""A clearing sequence: the rows of a log that are shown, and the cause of each."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

from schemesim.engine.case import Case
from schemesim.engine.outcome import Row, Run, Status
from schemesim.report.selection import output_of, support
from schemesim.ticks import to_cycles, to_ms


@dataclass(frozen=True, eq=False, repr=False)
class ClearingSequence:
    """The clearing sequence of one run: its rows, and what led to each.

    Attributes
    ----------
    case : Case
    run : Run
        With its log.
    frequency_hz : float
        Power frequency for times in cycles.
    limit_us : int or None
        Clearing time not to be exceeded, in microseconds.
    kept : tuple of int
        Rows of the log that matter for reading, in order.
    story : frozenset of int
        Those on the way to an opening, a clearing, a breaker that does not open or a
        failure (plain gates too), or to a trip output (elements, timers and latches).
    """

    case: Case
    run: Run
    frequency_hz: float
    limit_us: int | None
    kept: tuple[int, ...]
    story: frozenset[int]

    @property
    def title(self) -> str:
        """What the run is about."""
        failures = [self.case.questions[q].name for q, yes in self.run.asked if yes]
        begun = self.run.log[0].subject
        what = begun if self.run.outcome.status is Status.NO_FAULT else f"fault on {begun}"
        return f"{what}; {', '.join(failures) or 'no failure'}"

    @property
    def ending(self) -> str:
        """How it ended, against the limit where there is one."""
        o = self.run.outcome
        text = str(o.status) if o.t_clear_us is None else f"cleared at {self.when(o.t_clear_us)}"
        if self.limit_us is not None and o.t_clear_us is not None:
            left = self.limit_us - o.t_clear_us
            side = "inside" if left >= 0 else "beyond"
            text += f", {plain(to_ms(abs(left)))} ms {side} the limit of {plain(to_ms(self.limit_us))} ms"
        if o.at_horizon:
            text += "; something still pending at the horizon"
        return text

    def when(self, t_us: int) -> str:
        """A time in ms and in cycles."""
        return f"{plain(to_ms(t_us))} ms ({to_cycles(t_us, self.frequency_hz):.2f} cycles)"

    def rows(self, all: bool = False) -> tuple[Row, ...]:
        """Rows of the log: those kept, or every one."""
        return self.run.log if all else tuple(self.run.log[i] for i in self.kept)

    def cause_of(self, row: Row, all: bool = False) -> Row | None:
        """The row that led to one: the nearest that is shown. None for the beginning, or what held before it.

        Of several things that a gate needs together (inputs, and a failure that is required
        for it), it is the one that came last.
        """
        i = self._behind[row.index][0]
        while i >= 0 and not all and i not in self._shown:
            i = self._behind[i][0]
        return self.run.log[i] if i >= 0 else None

    def since_us(self, row: Row) -> int:
        """Since when what a row says has been so.

        A trip output of which nothing depends at first is asked about later (rule R4); its row
        stands where it was asked, but it has been operated since its inputs have.
        """
        return self._behind[row.index][1]

    def because(self, row: Row, all: bool = False) -> str:
        """The row that led to one, in words."""
        cause = self.cause_of(row, all)
        if cause is not None:
            return f"{cause.subject} {self._words(cause)}"
        return "" if row.index == 0 or row.kind == "run" else "as before the event"

    def says(self, row: Row) -> str:
        """What happened, in words."""
        since, words = self.since_us(row), self._words(row)
        return words if since == row.t_us else f"{words} (on since {plain(to_ms(since))} ms)"

    def fails_at_once(self, row: Row) -> bool:
        """Whether a row that answers a question is about a breaker: it fails when it is told to open, not before."""
        return self.case.questions[self.question_at[row.index]].component in self.case.program.plant.device

    def _words(self, row: Row) -> str:
        if row.kind == "question":
            if row.what == "no":
                return "has not failed"
            return "fails" if self.fails_at_once(row) else "had failed; first felt here"
        if row.what == "prevented":
            question = self.case.questions[self.question_at[row.cause]]
            failure = f"{question.component} {question.mode.replace('_', ' ')}" if question.component else question.name
            trips = row.kind == "trip output" or output_of(row.subject).endswith("trip")
            return f"{'no trip' if trips else 'no output'}: {failure}"
        return words_of(row)

    @cached_property
    def _shown(self) -> frozenset[int]:
        return frozenset(self.kept)

    @cached_property
    def question_at(self) -> Mapping[int, int]:
        """The question (its index in the program) of each row that answers one."""
        asked = (r.index for r in self.run.log if r.kind == "question")
        return dict(zip(asked, (q for q, _ in self.run.asked), strict=True))

    @cached_property
    def _behind(self) -> tuple[tuple[int, int], ...]:
        """For each row the one that led to it, and since when what it says has been so."""
        together = support(self.case, self.run)
        found: list[tuple[int, int]] = []
        for row in self.run.log:
            led = max(together.get(row.index) or (row.cause,), key=lambda i: (found[i][1] if i >= 0 else 0, i))
            since = row.t_us
            if row.kind in ("gate", "trip output") and row.what == "operates":
                since = found[led][1] if led >= 0 else 0  # without a cause: it was so before the event
            found.append((led, since))
        return tuple(found)


def shorten(text: str, width: int) -> str:
    """A text no longer than ``width``, the middle left out where it must be.

    Examples
    --------
    >>> shorten("Alder.BC.CB/50BF retrip timer", 20)
    'Alder.BC.…trip timer'
    """
    if len(text) <= width:
        return text
    head = (width - 1) * 9 // 19
    return f"{text[:head]}…{text[len(text) - (width - 1 - head) :]}"


def plain(value: float) -> str:
    """A number with the decimals it has, three at most."""
    text = f"{value:.3f}"
    return text.rstrip("0").rstrip(".")


def words_of(row: Row) -> str:
    """What a row of the log says.

    A timer that runs out has put nothing out yet: what stands behind it may ask for more, as breaker failure
    does for current. An element that starts has begun to measure and not picked up.
    """
    return _WORDS.get((row.kind, row.what), row.what)


_WORDS = {
    ("timer", "operates"): "runs out",
    ("sense", "starts"): "begins to measure",
    ("sense", "starts to reset"): "begins to reset",
}
