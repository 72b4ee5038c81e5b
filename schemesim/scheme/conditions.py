"""What an element measures, stated as a condition; how it is found out is the sensing's business.

With logical sensing a condition is decided on the graph of the plant; an electrical
sensing may answer the same conditions from computed quantities.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from schemesim.plant.terminals import Terminal


class Direction(StrEnum):
    """Direction of a reach, seen from the CT: forward is toward the protected side."""

    FORWARD = "forward"
    REVERSE = "reverse"
    BOTH = "both"


@dataclass(frozen=True, slots=True)
class InZone:
    """The fault lies in a protected zone and at least one of these CTs carries current (differential)."""

    sections: frozenset[str]
    cts: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class OutOfZone:
    """The fault (or the load current) passes through this CT and does not lie in the zone."""

    sections: frozenset[str]
    ct: str


@dataclass(frozen=True, slots=True)
class Reach:
    """The fault lies within a reach along the shortest electrical path, in a direction.

    """

    terminals: tuple[Terminal, ...]
    reach: float
    direction: Direction = Direction.FORWARD


@dataclass(frozen=True, slots=True)
class Current:
    """One of these devices carries fault current (load current where there is no fault)."""

    devices: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Undervoltage:
    """The fault lies within a reach of a section, whatever carries current."""

    section: str
    reach: float


@dataclass(frozen=True, slots=True)
class NoFaultTrip:
    """This component trips with no fault at all (rule R18)."""

    component: str


@dataclass(frozen=True, slots=True)
class Always:
    """Always true: for receipts that can be false at any time."""


@dataclass(frozen=True, slots=True)
class External:
    """Set by a process of the user's own."""


Condition = (
    InZone | OutOfZone | Reach | Current | Undervoltage | NoFaultTrip | Always | External
)
