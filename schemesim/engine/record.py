"""The log of a run: time, component, what happened, and the row that led to it."""

from __future__ import annotations

from schemesim.engine.case import Case
from schemesim.engine.outcome import Row
from schemesim.engine.program import Kind
from schemesim.engine.rules import TRUE, UNKNOWN


class Recorder:
    """Keeps rows when asked to; otherwise costs next to nothing."""

    def __init__(self, case: Case, keep: bool) -> None:
        self.case, self.keep = case, keep
        self.rows: list[Row] = []
        self.topology_row = -1
        self._now = 0
        self._pass = 0
        self._happened: dict[int, int] = {}
        self._prevented: set[int] = set()

    def at(self, now: int, pass_no: int) -> None:
        """Set the instant and the pass of the rows to come."""
        self._now, self._pass = now, pass_no

    def begin(self) -> None:
        """The initiating event."""
        self.topology_row = self.row(str(self.case.event), "fault", "begins", -1)

    def row(self, subject: str, kind: str, what: str, cause: int, margin_us: int | None = None) -> int:
        """Add a row; returns its index, or -1 when no log is kept."""
        if not self.keep:
            return -1
        self.rows.append(Row(len(self.rows), self._now, self._pass, subject, kind, what, cause, margin_us))
        return len(self.rows) - 1

    def changed(self, block: int, value: int, cause: int) -> int:
        """A block that holds state changed its output."""
        if not self.keep:
            return -1
        kind = self.case.kind[block]
        up, down = _WORDS[kind]
        return self.row(self.case.names[block], kind.name.lower(), up if value == TRUE else down, cause)

    def gate(self, g: int, value: int, values: list[int], rows: list[int]) -> int:
        """A gate became true, or ceased to be."""
        if not self.keep:
            return -1
        inputs = self.case.inputs[g]
        if value == TRUE:
            cause = max((rows[j] for j, inv in inputs if (values[j] == TRUE) != inv), default=-1)
        else:
            cause = max((rows[j] for j, _ in inputs), default=-1)
        contact = self.case.contacts[g]
        kind = "gate" if contact is None else "trip output"
        return self.row(self.case.names[g], kind, "operates" if value == TRUE else "resets", cause)

    def started(self, block: int, rising: bool, delay_us: int, cause: int) -> int:
        """A delay began to run."""
        if not self.keep or delay_us == 0:
            return cause
        kind = self.case.kind[block]
        what = "starts" if rising else "starts to reset"
        return self.row(self.case.names[block], kind.name.lower(), what, cause)

    def stopped(self, block: int, rising: bool, left_us: int, cause: int) -> None:
        """A delay was stopped before it ran out: the margin is what was left of it."""
        if self.keep:
            kind = self.case.kind[block]
            what = "stopped before operating" if rising else "held"
            self.row(self.case.names[block], kind.name.lower(), what, cause, left_us)

    def turned(self, block: int, was_due_us: int, due_us: int | None, cause: int) -> None:
        """An inverse-time element goes on at another speed, or stops: then what was left is the margin."""
        if due_us is None:
            self.stopped(block, True, was_due_us - self._now, cause)
        elif self.keep:
            what = "sped up" if due_us < was_due_us else "slowed down"
            self.row(self.case.names[block], self.case.kind[block].name.lower(), what, cause)

    def answer(self, question: int, yes: bool, cause: int) -> None:
        """A question was answered."""
        if self.keep:
            row = self.row(self.case.questions[question].name, "question", "yes" if yes else "no", cause)
            if yes:
                self._happened[question] = row

    def prevented(self, g: int, value: list[int], verdict: list[int]) -> None:
        """A gate that would operate, were it not for a failure that happened: told once, with the failure as cause."""
        inputs = self.case.inputs[g]
        if g in self._prevented or sum(value[j] != UNKNOWN and (value[j] == TRUE) != inv for j, inv in inputs) < max(
            self.case.k[g], 1
        ):
            return
        failed = (q for a in self.case.unless[g] if verdict[a] == TRUE for q in self.case.asks[a])
        cause = next((self._happened[q] for q in failed if q in self._happened), -1)
        if cause >= 0:
            self._prevented.add(g)
            kind = "gate" if self.case.contacts[g] is None else "trip output"
            self.row(self.case.names[g], kind, "prevented", cause)

    def finish(self, at_horizon: bool, horizon_us: int) -> tuple[Row, ...]:
        """The whole log."""
        if at_horizon:
            self._now = horizon_us
            self.row("run", "run", "ends at the horizon with something pending", -1)
        return tuple(self.rows)


_WORDS = {
    Kind.SENSE: ("picks up", "drops out"),
    Kind.TIMER: ("operates", "resets"),
    Kind.LATCH: ("seals in", "is reset"),
    Kind.BREAKER: ("52a closed", "52a open"),
    Kind.GATE: ("operates", "resets"),
}
