"""Failure data: what each component's modes cost in probability, by kind and by name.

Defaults stand for a kind; rates, with the tests and repairs that go with them, stand for a
kind or a pattern of names and win over these; overrides name one component or a pattern with ``*`` and
``?`` and win over both; later ones win. A beta factor makes a common cause of the relays that
protect the same element at the same station.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fnmatch import fnmatchcase

from schemesim.errors import ErrorList, nearest, reject
from schemesim.scheme.model import (
    MODES,
    Ask,
    CommonCause,
    Component,
    ComponentKind,
    FailureMode,
    Probability,
)
from schemesim.scheme.unavailability import Over, RateRule, unavailability

Modes = Mapping[FailureMode, Probability]

ORDERS_OF_MAGNITUDE: Mapping[ComponentKind, Modes] = {
    ComponentKind.RELAY: {
        FailureMode.FAILURE_TO_OPERATE: 1e-3,
        FailureMode.DELAYED_OPERATION: 1e-4,
        FailureMode.UNWANTED_OPERATION: 1e-2,
    },
    ComponentKind.CT_CORE: {FailureMode.OPEN: 3e-5},
    ComponentKind.VT_WINDING: {FailureMode.LOST: 3e-5},
    ComponentKind.DC: {FailureMode.LOST: 5e-5},
    ComponentKind.CHANNEL: {
        FailureMode.LOST: 1e-3,
        FailureMode.LATE: 1e-3,
        FailureMode.FALSE_RECEIPT: 1e-4,
    },
    ComponentKind.COIL: {FailureMode.FAILURE_TO_OPERATE: 1e-4},
    ComponentKind.BREAKER: {
        FailureMode.DOES_NOT_OPEN: 3e-4,
        FailureMode.OPENS_LATE: 1e-4,
        FailureMode.DOES_NOT_INTERRUPT: 3e-5,
        FailureMode.AUXILIARY_WRONG: 1e-5,
    },
    ComponentKind.LOCKOUT: {FailureMode.FAILURE_TO_OPERATE: 1e-4},
}
"""Starting values, orders of magnitude from memory of the trade's literature; replace them by your own.

A relay's ``failure_to_operate`` includes settings and logic errors, its
``unwanted_operation`` is a hidden over-reach on exposure.
"""

NO_FAULT_PER_YR: Mapping[ComponentKind, float] = {ComponentKind.RELAY: 1e-3}
"""Yearly rate of tripping with no fault, an assumed order of magnitude."""


@dataclass(frozen=True)
class Override:
    """Failure data of the components whose names match a pattern."""

    pattern: str
    modes: Modes = field(default_factory=dict)
    no_fault_per_yr: float | None = None

    def __post_init__(self) -> None:
        errors, known = ErrorList(), [str(m) for m in FailureMode]
        for mode in self.modes:
            if mode not in known:
                tip = nearest(mode, known)
                errors.add(f"failure mode of {self.pattern!r}", str(mode), f"one of {known}", tip=tip)
        errors.raise_if_any()


@dataclass(frozen=True)
class FailureData:
    """Probabilities on demand and rates of tripping with no fault.

    Parameters
    ----------
    modes : mapping of ComponentKind to mapping of FailureMode to probability
    no_fault_per_yr : mapping of ComponentKind to rate
    overrides : tuple of Override
        Modes named replace those of the kind; others stay.
    relay_beta : float
        Share of a relay's ``failure_to_operate`` that is common to all relays of the same
        element at the same station (0: none).
    common_causes : tuple of CommonCause
        Further causes; their members' own probabilities are taken as given.
    rates : tuple of RateRule
        Modes whose probability follows from a rate, tests and repairs.
    over : Over
        Whether that is the mean over the test interval or the worst in it.

    Examples
    --------
    >>> data = FailureData(overrides=(Override("Alder/DC *", {FailureMode.LOST: 0.01}),))
    >>> data.component("Alder/DC 1", ComponentKind.DC).probability(FailureMode.LOST)
    0.01
    """

    modes: Mapping[ComponentKind, Modes] = field(default_factory=lambda: dict(ORDERS_OF_MAGNITUDE))
    no_fault_per_yr: Mapping[ComponentKind, float] = field(default_factory=lambda: dict(NO_FAULT_PER_YR))
    overrides: tuple[Override, ...] = ()
    relay_beta: float = 0.0
    common_causes: tuple[CommonCause, ...] = ()
    rates: tuple[RateRule, ...] = ()
    over: Over = Over.MEAN

    def __post_init__(self) -> None:
        if not 0 <= self.relay_beta <= 1:
            raise reject("relay_beta", self.relay_beta, "a share from 0 to 1")

    def component(self, name: str, kind: ComponentKind, station: str = "") -> Component:
        """The component with its data."""
        found = dict(self.modes.get(kind, {}))
        rate = self.no_fault_per_yr.get(kind, 0.0)
        for r in self.rates:
            if r.kind is kind and fnmatchcase(name, r.pattern):
                found[r.mode] = unavailability(r.data).over(self.over)
        for o in self.overrides:
            if fnmatchcase(name, o.pattern):
                found.update({m: p for m, p in o.modes.items() if m in MODES[kind]})
                rate = rate if o.no_fault_per_yr is None else o.no_fault_per_yr
        modes = tuple((m, p) for m, p in sorted(found.items()) if p != 0)
        return Component(name, kind, modes, rate, station)

    def rule_of(self, name: str, kind: ComponentKind, mode: FailureMode) -> RateRule | None:
        """The rule that the probability of a mode follows from; None where it is given as such."""
        for o in self.overrides:
            if mode in o.modes and fnmatchcase(name, o.pattern):
                return None
        fit = (r for r in reversed(self.rates) if (r.kind, r.mode) == (kind, mode) and fnmatchcase(name, r.pattern))
        return next(fit, None)

    def share(self, groups: Mapping[str, list[Component]]) -> tuple[dict[str, Component], tuple[CommonCause, ...]]:
        """Split a beta factor off the relays of each group into a common cause.

        For a group with failure probability Q (the least of its members') the cause has βQ
        and each member keeps its own minus βQ.
        """
        changed: dict[str, Component] = {}
        causes: list[CommonCause] = []
        mode = FailureMode.FAILURE_TO_OPERATE
        for group, members in sorted(groups.items()):
            shared = self.relay_beta * min((c.probability(mode) for c in members), default=0)
            if len(members) < 2 or not shared > 0:
                continue
            causes.append(CommonCause(f"{group} relays", tuple(Ask(c.name, mode) for c in members), shared))
            for c in members:
                own = tuple((m, p - shared if m is mode else p) for m, p in c.modes)
                changed[c.name] = Component(c.name, c.kind, own, c.no_fault_per_yr, c.station)
        return changed, tuple(causes)
