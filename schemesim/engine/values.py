"""Values and stages in the batch engine, as small numbers in bytes; states of a run, and what a step commits."""

from __future__ import annotations

from typing import NamedTuple

from schemesim.engine.wiring import Start

FALSE, TRUE, UNKNOWN, OPEN = 0, 1, 2, 3
"""Values of a signal; OPEN is unknown for want of an answer to the gate's own question."""

CLOSED, OPENING, AUXILIARY, AWAY, CLOSING = 0, 1, 2, 3, 4
"""Stages of a breaker; AWAY is open with its auxiliary contact behind it."""

NOT_KNOWN, NO, YES = 0, 1, 2
"""What is known of a question."""

TO_FALSE, TO_TRUE = 1, 2
"""Where a pending block is going."""


class State(NamedTuple):
    """Everything about a run but its times; what cannot matter any more is left out."""

    value: bytes
    role: bytes
    verdict: bytes
    suppressed: int
    enabled: int
    known: bytes
    pending: bytes
    decided: int
    stage: bytes
    interrupting: int
    open_mask: int
    live: int
    cleared: bool
    slots: tuple[tuple[int, ...], ...]


class Commit(NamedTuple):
    """A breaker is committed: its place, role, trip output, whether it will interrupt, and what it takes."""

    place: int
    role: int
    via: int
    interrupts: bool
    start: Start
