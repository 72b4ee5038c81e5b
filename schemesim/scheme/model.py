"""The scheme: components that can fail, and functions made of five primitives.

A scheme knows sense, gate, timer, latch and breaker blocks joined by signals; every
standard function is a composition of these. A block's output is a signal of the same
name; a breaker's output is its 52a contact (true while closed).

Failures enter at gates. ``unless`` names failures that keep a true output from
leaving (no DC, relay fails to operate, coil open ...); ``given`` names failures that
are required for it (over-reach, a false receipt ...): the gate is true if its inputs
are, none of ``unless`` has happened and, where ``given`` is not empty, one of it has.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from enum import IntEnum, StrEnum
from fractions import Fraction
from functools import cached_property

from schemesim.errors import ErrorList, nearest
from schemesim.scheme.conditions import Condition
from schemesim.scheme.curves import Curve
from schemesim.scheme.delays import Delay

Probability = float | Fraction


class ComponentKind(StrEnum):
    """What can fail."""

    RELAY = "relay"
    CT_CORE = "ct_core"
    VT_WINDING = "vt_winding"
    DC = "dc"
    CHANNEL = "channel"
    COIL = "coil"
    BREAKER = "breaker"
    LOCKOUT = "lockout"


class FailureMode(StrEnum):
    """Modes of failure; those of one component exclude each other."""

    FAILURE_TO_OPERATE = "failure_to_operate"
    DELAYED_OPERATION = "delayed_operation"
    UNWANTED_OPERATION = "unwanted_operation"
    OPEN = "open"
    LOST = "lost"
    LATE = "late"
    FALSE_RECEIPT = "false_receipt"
    DOES_NOT_OPEN = "does_not_open"
    OPENS_LATE = "opens_late"
    DOES_NOT_INTERRUPT = "does_not_interrupt"
    AUXILIARY_WRONG = "auxiliary_wrong"


MODES: Mapping[ComponentKind, tuple[FailureMode, ...]] = {
    ComponentKind.RELAY: (
        FailureMode.FAILURE_TO_OPERATE,
        FailureMode.DELAYED_OPERATION,
        FailureMode.UNWANTED_OPERATION,
    ),
    ComponentKind.CT_CORE: (FailureMode.OPEN,),
    ComponentKind.VT_WINDING: (FailureMode.LOST,),
    ComponentKind.DC: (FailureMode.LOST,),
    ComponentKind.CHANNEL: (FailureMode.LOST, FailureMode.LATE, FailureMode.FALSE_RECEIPT),
    ComponentKind.COIL: (FailureMode.FAILURE_TO_OPERATE,),
    ComponentKind.BREAKER: (
        FailureMode.DOES_NOT_OPEN,
        FailureMode.OPENS_LATE,
        FailureMode.DOES_NOT_INTERRUPT,
        FailureMode.AUXILIARY_WRONG,
    ),
    ComponentKind.LOCKOUT: (FailureMode.FAILURE_TO_OPERATE,),
}
"""The modes each kind of component can have; the first is the one of an item out of service."""


class Role(IntEnum):
    """Why a function trips, in the order in which a tie is decided."""

    MAIN = 0
    MAIN_TIMED = 1
    LOCAL = 2
    BREAKER_FAILURE = 3
    REMOTE = 4
    UNWANTED = 5
    """A main function that operated beyond its zone."""

    @property
    def label(self) -> str:
        """Plain words."""
        return ("main", "main, timed zone", "local back-up", "breaker failure", "remote back-up", "unwanted")[self]


@dataclass(frozen=True, slots=True)
class Component:
    """A thing that can fail.

    Parameters
    ----------
    name : str
    kind : ComponentKind
    modes : tuple of (FailureMode, probability)
        Probability on demand of each mode; modes exclude each other.
    no_fault_per_yr : float
        Rate of tripping with no fault at all (rule R18), per year.
    station : str
    """

    name: str
    kind: ComponentKind
    modes: tuple[tuple[FailureMode, Probability], ...] = ()
    no_fault_per_yr: float = 0.0
    station: str = ""

    def probability(self, mode: FailureMode) -> Probability:
        """Probability on demand of one mode."""
        return dict(self.modes).get(mode, 0.0)


@dataclass(frozen=True, slots=True, order=True)
class Ask:
    """One failure mode of one component."""

    component: str
    mode: FailureMode


@dataclass(frozen=True, slots=True)
class CommonCause:
    """A cause that brings the same mode on all its members.

    A question of its own, asked before any member's own part and joined to it by OR.
    For a beta factor β of a total Q its probability is βQ and the members' own (1−β)Q.
    """

    name: str
    members: tuple[Ask, ...]
    probability: Probability


@dataclass(frozen=True, slots=True)
class Not:
    """An inverted input."""

    signal: str


Input = str | Not


@dataclass(frozen=True, slots=True)
class Contact:
    """Marks a gate as the trip output of a function.

    Parameters
    ----------
    function : str
        Function by its device number, e.g. ``"87B"``.
    role : Role
        Role for faults on the sections in ``protects``.
    protects : frozenset of str
        Sections the function is meant for.
    beyond : Role
        Role for faults elsewhere.
    relay : str
        Component that hosts it.
    chain : str
        Label of the set of protection it belongs to, e.g. ``"1"``.
    element : str
        The protected element.
    station : str
    """

    function: str
    role: Role
    protects: frozenset[str] = frozenset()
    beyond: Role = Role.REMOTE
    relay: str = ""
    chain: str = ""
    element: str = ""
    station: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Sense:
    """A measured condition with an operate and a reset time.

    With a ``curve`` its operate time is inverse wherever the sensing knows currents (rule R10);
    ``operate`` then stands for it where the sensing knows none.
    """

    name: str
    condition: Condition
    operate: Delay
    reset: Delay
    curve: Curve | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Gate:
    """At least ``k`` of the inputs, subject to failures; no time of its own."""

    name: str
    inputs: tuple[Input, ...]
    k: int = 1
    unless: tuple[Ask, ...] = ()
    given: tuple[Ask, ...] = ()
    contact: Contact | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Timer:
    """A pick-up and a drop-out delay."""

    name: str
    input: Input
    pick_up: Delay
    drop_out: Delay


@dataclass(frozen=True, slots=True, kw_only=True)
class Latch:
    """Sealed in by ``set`` until ``reset``; reset wins. Without a reset it never falls in a run."""

    name: str
    set: Input
    reset: Input | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Breaker:
    """A breaker (or a generator's own trip) and its trip path.

    Parameters
    ----------
    name : str
        Name of the breaker, or of a source with a trip, in the plant.
    coils : tuple of str
        Signals that energise a trip coil.
    interrupting : Delay
        From energising the coil to current interrupted.
    auxiliary : Delay
        From interruption to the 52a contact following.
    component : str
        Component whose modes are asked when a coil is energised.
    late_by : Delay or None
        What ``opens_late`` adds.
    close : str
        Signal that closes it, or empty.
    closing : Delay or None
        Closing time.
    """

    name: str
    coils: tuple[str, ...]
    interrupting: Delay
    auxiliary: Delay
    component: str = ""
    late_by: Delay | None = None
    close: str = ""
    closing: Delay | None = None


Block = Sense | Gate | Timer | Latch | Breaker


@dataclass(frozen=True)
class Scheme:
    """Components, common causes and blocks, in the order of their names.

    ``out_of_service`` names components out for work; ``intertrips`` gives for a section
    the breakers tripped by design for a fault on it, besides the border of its zone.

    Raises
    ------
    InputError
        With every mistake: names used twice, signals, components or modes not there,
        probabilities outside 0..1 or modes of one component summing over 1.
    """

    components: tuple[Component, ...]
    blocks: tuple[Block, ...]
    common_causes: tuple[CommonCause, ...] = ()
    out_of_service: frozenset[str] = frozenset()
    intertrips: tuple[tuple[str, frozenset[str]], ...] = ()

    def __post_init__(self) -> None:
        object.__setattr__(self, "components", tuple(sorted(self.components, key=lambda c: c.name)))
        object.__setattr__(self, "blocks", tuple(sorted(self.blocks, key=lambda b: b.name)))
        object.__setattr__(self, "intertrips", tuple(sorted(self.intertrips, key=lambda i: (i[0], sorted(i[1])))))
        object.__setattr__(self, "common_causes", tuple(sorted(self.common_causes, key=lambda c: c.name)))
        check_scheme(self).raise_if_any()

    def __repr__(self) -> str:
        return (
            f"Scheme({len(self.components)} components, {len(self.blocks)} blocks, "
            f"{len(self.contacts)} trip outputs, {len(self.common_causes)} common causes)"
        )

    @cached_property
    def component(self) -> Mapping[str, Component]:
        """Components by name."""
        return {c.name: c for c in self.components}

    @cached_property
    def block(self) -> Mapping[str, Block]:
        """Blocks by name."""
        return {b.name: b for b in self.blocks}

    def intertripped(self, section: str) -> frozenset[str]:
        """Breakers tripped by design for a fault on a section besides the border of its zone."""
        return frozenset().union(*(names for at, names in self.intertrips if at == section))

    @cached_property
    def contacts(self) -> Mapping[str, Contact]:
        """Trip outputs by the name of their gate."""
        return {b.name: b.contact for b in self.blocks if isinstance(b, Gate) and b.contact}


def inputs_of(block: Block) -> tuple[Input, ...]:
    """The signals a block reads."""
    match block:
        case Gate():
            return block.inputs
        case Timer():
            return (block.input,)
        case Latch():
            return (block.set,) if block.reset is None else (block.set, block.reset)
        case Breaker():
            return (*block.coils, block.close) if block.close else block.coils
        case Sense():
            return ()


def signal_of(item: Input) -> str:
    """The name of the signal behind an input."""
    return item.signal if isinstance(item, Not) else item


def check_scheme(scheme: Scheme) -> ErrorList:
    """Every mistake in a scheme."""
    errors = ErrorList()
    signals = [b.name for b in scheme.blocks]
    names = [c.name for c in scheme.components]
    for what, items in (("block", signals), ("component", names)):
        for name in sorted({n for n in items if items.count(n) > 1} if len(set(items)) < len(items) else ()):
            errors.add(f"{what} name", name, "a name not used twice")
    known_signals, known = set(signals), set(names)
    for b in scheme.blocks:
        for item in inputs_of(b):
            if signal_of(item) not in known_signals:
                tip = nearest(signal_of(item), signals)
                errors.add(f"input of block {b.name!r}", signal_of(item), "the name of a block", tip=tip)
        if isinstance(b, Gate):
            if not 1 <= b.k <= max(len(b.inputs), 1):
                errors.add(f"k of gate {b.name!r}", b.k, f"a whole number from 1 to {len(b.inputs)}")
            for ask in (*b.unless, *b.given):
                _check_ask(errors, scheme, known, f"block {b.name!r}", ask)
        elif isinstance(b, Breaker):
            if not b.coils:
                errors.add(f"breaker {b.name!r}", "no trip coil", "at least one coil signal")
            if b.component and b.component not in known:
                errors.add(f"component of breaker {b.name!r}", b.component, "the name of a component")
    for c in scheme.components:
        _check_component(errors, c)
    for cause in scheme.common_causes:
        if not 0 <= cause.probability <= 1:
            errors.add(f"probability of common cause {cause.name!r}", cause.probability, "a number from 0 to 1")
        for ask in cause.members:
            _check_ask(errors, scheme, known, f"common cause {cause.name!r}", ask)
    for name in sorted(scheme.out_of_service - known):
        errors.add("out of service", name, "the name of a component", tip=nearest(name, names))
    return errors


def _check_component(errors: ErrorList, c: Component) -> None:
    total: Probability = 0
    for mode, p in c.modes:
        if mode not in MODES[c.kind]:
            errors.add(f"mode of {c.kind.value} {c.name!r}", str(mode), f"one of {[str(m) for m in MODES[c.kind]]}")
        if not 0 <= p <= 1:
            errors.add(f"probability of {mode} of {c.name!r}", p, "a number from 0 to 1")
        total += p
    if len({m for m, _ in c.modes}) < len(c.modes):
        errors.add(f"modes of {c.name!r}", [str(m) for m, _ in c.modes], "each mode once")
    if total > 1 + 1e-12:
        errors.add(f"modes of {c.name!r}", float(total), "probabilities that sum to 1 or less")
    if not 0 <= c.no_fault_per_yr < float("inf"):
        errors.add(f"no_fault_per_yr of {c.name!r}", c.no_fault_per_yr, "a finite rate of zero or more")


def _check_ask(errors: ErrorList, scheme: Scheme, known: set[str], subject: str, ask: Ask) -> None:
    if ask.component not in known:
        errors.add(subject, ask.component, "the name of a component", tip=nearest(ask.component, known))
    elif ask.mode not in MODES[scheme.component[ask.component].kind]:
        errors.add(subject, str(ask.mode), f"a mode of a {scheme.component[ask.component].kind.value}")
