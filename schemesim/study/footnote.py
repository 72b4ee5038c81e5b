"""Single points of failure in the groups of a transmission planning standard, and what is exempt.

NERC TPL-001-5.1, Table 1, footnote 13 (published; wording from memory): the components of
a protection system whose failure a planner studies, where they are non-redundant, are

a. a single relay that responds to electrical quantities, without an alternative that
   provides comparable normal clearing times (a relay is never exempt for being monitored);
b. a single communications system needed for a communication-aided scheme (exempt: one that
   is monitored and reported at a control centre);
c. a single station DC supply (exempt: one that is monitored and reported for both low voltage and
   open circuit);
d. a single control circuit, auxiliary and lockout relays included, from the DC supply
   through the trip coil (the trip coil may be left out if it is monitored and reported).

What is comparable is judged by the limit: an item is in the register only where its failure
leaves a fault uncleared, late, or with more breakers opened. Failures to operate belong there,
late operation included. Breakers, CT cores, VT windings and common causes do not, nor does
unwanted operation: they are listed apart.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from enum import StrEnum
from fnmatch import fnmatchcase

from schemesim.errors import ErrorList, nearest
from schemesim.scheme.model import ComponentKind, FailureMode, Scheme

LOW_VOLTAGE, OPEN_CIRCUIT = "low_voltage", "open_circuit"
WATCHED = frozenset({LOW_VOLTAGE, OPEN_CIRCUIT})
"""What has to be monitored of a station DC supply for it to be exempt."""


class Group(StrEnum):
    """The groups of the footnote, and what is in none."""

    RELAY = "a relay"
    COMMUNICATIONS = "b communications"
    DC = "c station dc supply"
    CONTROL = "d control circuit"
    APART = "apart"


GROUPS: dict[ComponentKind, Group] = {
    ComponentKind.RELAY: Group.RELAY,
    ComponentKind.CHANNEL: Group.COMMUNICATIONS,
    ComponentKind.DC: Group.DC,
    ComponentKind.COIL: Group.CONTROL,
    ComponentKind.LOCKOUT: Group.CONTROL,
}

_UNWANTED = frozenset({FailureMode.UNWANTED_OPERATION, FailureMode.FALSE_RECEIPT})


@dataclass(frozen=True, slots=True)
class Monitored:
    """Items that are monitored.

    Parameters
    ----------
    pattern : str
        Names of components; ``*`` and ``?`` stand for any text.
    kind : ComponentKind or None
        Only these.
    watches : frozenset of str
        Of a DC supply: ``"low_voltage"``, ``"open_circuit"``; more than one entry may add up.
    reported : bool
        At a control centre; what is not reported is not exempt.
    """

    pattern: str = "*"
    kind: ComponentKind | None = None
    watches: frozenset[str] = WATCHED
    reported: bool = True

    def of(self, name: str, kind: ComponentKind) -> bool:
        """Whether a component is meant."""
        return self.kind in (None, kind) and (name == self.pattern or fnmatchcase(name, self.pattern))


@dataclass(frozen=True, slots=True)
class Grouped:
    """Where a failure belongs.

    Attributes
    ----------
    group : Group
    exempt : bool
        In a group, and left out of it because it is monitored.
    why : str
        Why it is exempt, or is not although it is monitored, or stands apart; empty otherwise.
    """

    group: Group
    exempt: bool = False
    why: str = ""


def check_monitored(scheme: Scheme, monitored: Iterable[Monitored]) -> None:
    """Refuse what is not of the scheme.

    Raises
    ------
    InputError
        For a pattern that fits no component, or something else watched.
    """
    errors = ErrorList()
    for m in monitored:
        if not any(m.of(c.name, c.kind) for c in scheme.components):
            kind = f" of kind {m.kind}" if m.kind else ""
            tip = nearest(m.pattern, scheme.component)
            errors.add("monitored", m.pattern, f"a component of the scheme{kind}, or a pattern that fits one", tip=tip)
        for word in sorted(m.watches - WATCHED):
            errors.add(f"watched of {m.pattern!r}", word, f"any of {sorted(WATCHED)}", tip=nearest(word, WATCHED))
    errors.raise_if_any()


def group_of(scheme: Scheme, component: str, mode: str, monitored: Iterable[Monitored] = ()) -> Grouped:
    """The group of a failure mode of a component; of a common cause where the component is empty.

    Examples
    --------
    >>> from schemesim.scheme.model import Component
    >>> scheme = Scheme((Component("A/DC 1", ComponentKind.DC), Component("A/R", ComponentKind.RELAY)), ())
    >>> group_of(scheme, "A/DC 1", "lost", [Monitored("*", watches=frozenset({LOW_VOLTAGE}))]).exempt
    False
    >>> group_of(scheme, "A/DC 1", "lost", [Monitored("*")]).exempt
    True
    >>> group_of(scheme, "A/R", "failure_to_operate", [Monitored("*")]).exempt
    False
    """
    if not component:
        return Grouped(Group.APART, why="common cause")
    kind = scheme.component[component].kind
    if kind not in GROUPS:
        return Grouped(Group.APART, why=kind.value)
    if mode in _UNWANTED:
        return Grouped(Group.APART, why="unwanted operation")
    group = GROUPS[kind]
    mine = [m for m in monitored if m.of(component, kind)]
    told = [m for m in mine if m.reported]
    if not mine:
        return Grouped(group)
    if kind in (ComponentKind.RELAY, ComponentKind.LOCKOUT):
        return Grouped(group, why="monitored, which exempts no relay")
    if not told:
        return Grouped(group, why="monitored, but not reported")
    if kind is ComponentKind.DC:
        lacking = WATCHED - frozenset().union(*(m.watches for m in told))
        if lacking:
            return Grouped(group, why=f"not monitored for {' and '.join(sorted(lacking))}")
        return Grouped(group, exempt=True, why="monitored for low voltage and open circuit, and reported")
    return Grouped(group, exempt=True, why="monitored and reported")
