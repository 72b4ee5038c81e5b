"""A second, slow reading of the rules R1 to R9 for the tests: no cutting, no indices, no questions.

Every failure is known from the start, every block of the scheme takes part, every
signal is looked up by name and every gate evaluated anew. What the event engine
observes of a run has to agree with it.
"""

from __future__ import annotations

from collections.abc import Set
from dataclasses import dataclass

from schemesim.engine.program import Program
from schemesim.engine.sensing import Event, LogicalSensing
from schemesim.plant.model import Location
from schemesim.scheme.model import (
    MODES,
    Ask,
    Block,
    Breaker,
    FailureMode,
    Gate,
    Input,
    Latch,
    Not,
    Sense,
    Timer,
    inputs_of,
    signal_of,
)


class Unsettled(Exception):  # noqa: N818 - no error: a program this check leaves out
    """No state of rest before the event, or an instant without an end."""


@dataclass(frozen=True)
class Seen:
    """What a run shows: clearing, openings (breaker, trip, opening, role, interrupted), observed outputs."""

    t_clear_us: int | None
    openings: frozenset[tuple[str, int, int, int, bool]]
    operated: frozenset[tuple[str, int]]


class Naive:
    """One run with every failure known: ``yes`` holds the names of the questions answered yes."""

    def __init__(
        self, program: Program, event: Event, yes: Set[str], observe: Set[str] = frozenset(), horizon_us: int = 10**7
    ) -> None:
        self.program, self.event, self.yes = program, event, yes
        self.scheme, self.observe, self.horizon_us = program.scheme, observe, horizon_us
        self.blocks: dict[str, Block] = dict(self.scheme.block)
        self.value = dict.fromkeys(self.blocks, False)
        self.rank = dict.fromkeys(self.blocks, 0)
        self.pending: dict[str, tuple[int, bool]] = {}
        self.stage: dict[str, str] = {}
        self.interrupts: dict[str, bool] = {}
        self.committed: set[str] = set()
        self.opened: set[str] = set()
        self.openings: dict[str, tuple[str, int, int, int, bool]] = {}
        self.operated: dict[str, int] = {}
        self.t_clear: int | None = None
        senses = [b for b in self.blocks.values() if isinstance(b, Sense)]
        self.senses = [b.name for b in senses]
        self.breakers = [b.name for b in self.blocks.values() if isinstance(b, Breaker)]
        conditions = [b.condition for b in senses]
        self.sensed = LogicalSensing().bind(program, event, None, conditions, self.breakers)
        for name in self.breakers:
            device = program.plant.device.get(name)
            closed = device is None or device.closed
            self.value[name] = closed
            self.stage[name] = "closed" if closed else "open before"

    def happened(self, ask: Ask) -> bool:
        """Whether a failure is there."""
        component = self.scheme.component[ask.component]
        if component.name in self.scheme.out_of_service:
            return ask.mode is MODES[component.kind][0]
        p = component.probability(ask.mode)
        if p >= 1 or (p > 0 and f"{ask.component}: {ask.mode}" in self.yes):
            return True
        return any(
            ask in c.members and c.probability > 0 and f"common cause {c.name}" in self.yes
            for c in self.scheme.common_causes
        )

    def read(self, item: Input) -> bool:
        """An input as the block sees it."""
        return self.signal(signal_of(item))[0] != isinstance(item, Not)

    def signal(self, name: str) -> tuple[bool, int]:
        """Value and role of a signal."""
        if name in self._memo:
            return self._memo[name]
        block = self.blocks[name]
        found = self.gate(block) if isinstance(block, Gate) else (self.value[name], self.rank[name])
        self._memo[name] = found
        return found

    def gate(self, block: Gate) -> tuple[bool, int]:
        """Value and role of a gate."""
        true = [
            0 if isinstance(i, Not) else self.signal(signal_of(i))[1] for i in block.inputs if self.read(i)
        ]
        if len(true) < block.k or any(self.happened(a) for a in block.unless):
            return False, 0
        if block.given and not any(self.happened(a) for a in block.given):
            return False, 0
        own = 0
        if block.contact is not None:
            own = int(block.contact.role)
            if isinstance(self.event, Location) and self.event.section not in block.contact.protects:
                own = max(own, int(block.contact.beyond))
        return True, max(own, sorted(true)[block.k - 1])

    def rest(self) -> None:
        """The state before the event: what reads true for long has operated."""
        for _ in range(30):
            before = dict(self.value)
            self._rested: set[str] = set()
            for name in sorted(self.blocks):
                self._rest(name)
            if self.value == before:
                return
        raise Unsettled

    def _rest(self, name: str) -> None:
        if name in self._rested:
            return
        self._rested.add(name)
        block = self.blocks[name]
        for item in inputs_of(block):
            if not isinstance(block, Breaker):
                self._rest(signal_of(item))
        self._memo: dict[str, tuple[bool, int]] = {}
        if isinstance(block, Timer):
            self.value[name] = self.read(block.input)
        elif isinstance(block, Latch):
            if block.reset is not None and self.read(block.reset):
                self.value[name] = False
            elif self.read(block.set):
                self.value[name] = True

    def run(self) -> Seen:
        """Run to the end."""
        self.rest()
        now, passes, first = 0, 0, True
        holds: tuple[bool, ...] = ()
        fed = False
        while True:
            due = sorted(n for n, (t, _) in self.pending.items() if t == now)
            changed = first
            for name in due:
                changed |= self.expire(name, now)
            if changed:
                holds, still = self.sensed.state(frozenset(self.opened))
                if not first and fed and not still and self.t_clear is None:
                    self.t_clear = now
                fed, first = still, False
            self._memo = {}
            for name in self.breakers:
                if name not in self.committed and self.stage[name] == "closed":
                    self.commit(name, now)
            for name in self.observe:
                if self.signal(name)[0]:
                    self.operated.setdefault(name, now)
            for name, state in zip(self.senses, holds, strict=True):
                self.drive(name, state, now, 0)
            self.follow(now)
            left = [t for t, _ in self.pending.values()]
            if not left or min(left) > self.horizon_us:
                break
            passes = passes + 1 if min(left) == now else 0
            if passes > 150:
                raise Unsettled
            now = min(left)
        return Seen(self.t_clear, frozenset(self.openings.values()), frozenset(self.operated.items()))

    def follow(self, now: int) -> None:
        """Starts and cancellations at the end of a pass."""
        for name, block in self.blocks.items():
            if isinstance(block, Timer):
                self.drive(name, self.read(block.input), now, self.signal(signal_of(block.input))[1])
            elif isinstance(block, Latch):
                reset = block.reset is not None and self.read(block.reset)
                if (reset or self.read(block.set)) and self.value[name] == reset:
                    self.pending[name] = (now, not reset)
                    if not reset:
                        self.rank[name] = self.signal(signal_of(block.set))[1]
            elif isinstance(block, Breaker) and block.close and block.closing is not None:
                tripping = any(self.read(c) for c in block.coils)
                if self.stage[name] == "open" and self.read(block.close) and not tripping:
                    self.stage[name] = "closing"
                    self.pending[name] = (now + block.closing.nominal_us, True)

    def drive(self, name: str, state: bool, now: int, rank: int) -> None:
        """Start or stop a sense or a timer."""
        if name in self.pending:
            if self.pending[name][1] == state:
                return
            del self.pending[name]
        block = self.blocks[name]
        if self.value[name] != state:
            if isinstance(block, Sense):
                delay = block.operate if state else block.reset
            else:
                assert isinstance(block, Timer)
                delay = block.pick_up if state else block.drop_out
            if state:
                self.rank[name] = rank
            self.pending[name] = (now + delay.nominal_us, state)

    def commit(self, name: str, now: int) -> None:
        """Energise a breaker if a coil says so."""
        block = self.blocks[name]
        assert isinstance(block, Breaker)
        ranks = [self.signal(c)[1] for c in block.coils if self.signal(c)[0]]
        if not ranks:
            return
        self.committed.add(name)
        modes = (FailureMode.DOES_NOT_OPEN, FailureMode.OPENS_LATE, FailureMode.DOES_NOT_INTERRUPT)
        mode = next((m for m in modes if block.component and self.happened(Ask(block.component, m))), None)
        if mode is FailureMode.OPENS_LATE and block.late_by is None:
            mode = None
            if self.happened(Ask(block.component, FailureMode.DOES_NOT_INTERRUPT)):
                mode = FailureMode.DOES_NOT_INTERRUPT
        if mode is FailureMode.DOES_NOT_OPEN:
            return
        delay = block.interrupting.nominal_us
        if mode is FailureMode.OPENS_LATE and block.late_by is not None:
            delay += block.late_by.nominal_us
        self.interrupts[name] = mode is not FailureMode.DOES_NOT_INTERRUPT
        self.stage[name] = "opening"
        self.pending[name] = (now + delay, False)
        self.openings.setdefault(name, (name, now, now + delay, min(ranks), self.interrupts[name]))

    def expire(self, name: str, now: int) -> bool:
        """Something due takes effect; True if the topology changed."""
        _, target = self.pending.pop(name)
        block = self.blocks[name]
        if not isinstance(block, Breaker):
            self.value[name] = target
            return False
        if self.stage[name] == "opening":
            self.stage[name] = "auxiliary"
            self.pending[name] = (now + block.auxiliary.nominal_us, False)
            if self.interrupts[name]:
                self.opened.add(name)
            return self.interrupts[name]
        self.value[name] = target
        self.stage[name] = "closed" if target else "open"
        if target:
            self.opened.discard(name)
            self.committed.discard(name)
        return target
