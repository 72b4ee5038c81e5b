"""Random small plants with random schemes on them, and what can be shuffled in them.

Delays come from a short list so that they tie often. Loops go through latch resets and
breakers only.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from fractions import Fraction
from itertools import product
from random import Random
from typing import Any, TypeVar

from hypothesis import strategies as st

from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import Event, NoFault
from schemesim.plant.model import Device, DeviceKind, Location, Plant, Section, SectionKind, Source
from schemesim.plant.terminals import Terminal
from schemesim.scheme.conditions import (
    Always,
    Condition,
    Current,
    Direction,
    InZone,
    NoFaultTrip,
    OutOfZone,
    Reach,
    Undervoltage,
)
from schemesim.scheme.delays import Delay, Fixed
from schemesim.scheme.distributions import Empirical, Triangular, Uniform
from schemesim.scheme.model import (
    MODES,
    Ask,
    Block,
    Breaker,
    CommonCause,
    Component,
    ComponentKind,
    Contact,
    FailureMode,
    Gate,
    Input,
    Latch,
    Not,
    Role,
    Scheme,
    Sense,
    Timer,
)

T = TypeVar("T")

HORIZON_US = 2_000_000


@dataclass(frozen=True)
class Sample:
    """A program, an event on it and the gates to observe."""

    plant: Plant
    scheme: Scheme
    event: Event
    observe: frozenset[str]

    @property
    def program(self) -> Program:
        """The scheme compiled."""
        return compile_scheme(self.plant, self.scheme)


def samples(size: int = 3) -> st.SearchStrategy[Sample]:
    """Random samples, each made from one number (it is shown when an example fails)."""
    return st.builds(lambda seed: sample(Random(seed), size), st.integers(0, 2**48))


def sample(rng: Random, size: int = 3) -> Sample:
    """One random plant, scheme and event."""
    plant = random_plant(rng, size)
    scheme = random_scheme(rng, plant, size)
    event: Event = Location(rng.choice(plant.sections).name, rng.choice((0.1, 0.5, 0.9)))
    if rng.random() < 0.1:
        event = NoFault(rng.choice(scheme.components).name)
    gates = [b.name for b in scheme.blocks if isinstance(b, Gate)]
    observe = frozenset(rng.sample(gates, min(len(gates), rng.choice((0, 0, 1, 2)))))
    return Sample(plant, scheme, event, observe)


def random_plant(rng: Random, size: int) -> Plant:
    """Buses in a tree with some parallel ways, joined by couplers and lines; sources and loads."""
    count = rng.randint(2, 2 + size // 2)
    buses = [f"B{i}" for i in range(count)]
    sections = [Section(name=b, kind=SectionKind.BUS, load_mw=rng.choice((0.0, 10.0))) for b in buses]
    devices: list[Device] = []
    ways = [(rng.randrange(i), i) for i in range(1, count)]
    ways += [(a, b) for a, b in (rng.sample(range(count), 2) for _ in range(rng.randint(0, 2)))]
    for n, (i, j) in enumerate(ways):
        a, b = buses[i], buses[j]
        if rng.random() < 0.5:
            x = f"X{n}"
            sections.append(Section(name=f"{x}.c", kind=SectionKind.CONDUCTOR))
            closed = rng.random() < 0.85
            devices.append(Device(name=f"{x}.CB", kind=DeviceKind.BREAKER, a=a, b=f"{x}.c", closed=closed))
            devices.append(Device(name=f"{x}.CT", kind=DeviceKind.CT, a=f"{x}.c", b=b, cores=("1",)))
            continue
        line = f"L{n}"
        sections.append(Section(name=line, kind=SectionKind.LINE, length=rng.choice((10.0, 20.0))))
        for end, bus, at in (("a", a, 0.0), ("b", b, 1.0)):
            c = f"{line}{end}"
            sections.append(Section(name=f"{c}.c", kind=SectionKind.CONDUCTOR))
            devices.append(Device(name=f"{c}.CB", kind=DeviceKind.BREAKER, a=bus, b=f"{c}.c"))
            devices.append(Device(name=f"{c}.CT", kind=DeviceKind.CT, a=f"{c}.c", b=line, b_at=at, cores=("1",)))
    sources = [
        Source(name=f"G{b}", section=b, trips=rng.random() < 0.5, feeds_own_zone=rng.random() < 0.9)
        for b in rng.sample(buses, rng.randint(1, count))
    ]
    return Plant(tuple(sections), tuple(devices), tuple(sources))


def _delay(rng: Random) -> Fixed:
    return Fixed(rng.choice((0, 0, 10_000, 10_000, 20_000, 30_000, 50_000, 100_000)))


def _condition(rng: Random, plant: Plant, components: list[Component]) -> Condition:
    cts = [d for d in plant.devices if d.kind is DeviceKind.CT]
    names = [s.name for s in plant.sections]
    some = frozenset(rng.sample(names, rng.randint(1, len(names))))
    ct = rng.choice(cts)
    pick = rng.randrange(10)
    if pick < 2:
        return InZone(some, tuple(d.name for d in rng.sample(cts, rng.randint(1, len(cts)))))
    if pick < 6:
        way = rng.choice(list(Direction))
        return Reach((Terminal(ct.name, rng.choice((ct.a, ct.b))),), rng.choice((0.0, 8.0, 15.0, 50.0)), way)
    if pick == 6:
        return Current(tuple(d.name for d in rng.sample(cts, rng.randint(1, min(2, len(cts))))))
    if pick == 7:
        return Undervoltage(rng.choice(names), rng.choice((0.0, 8.0, 50.0)))
    if pick == 8:
        return rng.choice((OutOfZone(some, ct.name), Always()))
    return NoFaultTrip(rng.choice(components).name)


def _components(rng: Random) -> list[Component]:
    kinds = [
        ComponentKind.RELAY,
        ComponentKind.RELAY,
        ComponentKind.DC,
        ComponentKind.COIL,
        ComponentKind.CHANNEL,
        ComponentKind.BREAKER,
        ComponentKind.BREAKER,
    ]
    out = []
    for n, kind in enumerate(kinds):
        modes = rng.sample(MODES[kind], rng.randint(1, min(2, len(MODES[kind]))))
        if rng.random() < 0.08:
            weights = [Fraction(1)] + [Fraction(0)] * (len(modes) - 1)
        elif rng.random() < 0.08 and len(modes) > 1:
            weights = [Fraction(1, len(modes))] * len(modes)
        else:
            weights = [Fraction(rng.randint(1, 4), 16) for _ in modes]
        out.append(Component(f"{rng.choice('abcdefgh')}{n}", kind, tuple(zip(modes, weights, strict=True))))
    return out


class _Maker:
    """Draws blocks with names that stand in no order."""

    def __init__(self, rng: Random, plant: Plant) -> None:
        self.rng, self.plant = rng, plant
        self.components = _components(rng)
        self.asks = [Ask(c.name, m) for c in self.components for m in MODES[c.kind]]
        self.blocks: list[Block] = []
        self.breakers = [*plant.breakers, *plant.tripping_sources]
        self._n = 0

    def name(self) -> str:
        self._n += 1
        return f"{self.rng.choice('abcdefghij')}{self._n}"

    def add(self, block: Block) -> str:
        self.blocks.append(block)
        return block.name

    def inputs(self, pool: list[str], most: int, inverted: float) -> tuple[Input, ...]:
        chosen = self.rng.sample(pool, self.rng.randint(1, min(most, len(pool))))
        return tuple(Not(s) if self.rng.random() < inverted else s for s in chosen)

    def one(self, pool: list[str], inverted: float = 0.15) -> Input:
        return self.inputs(pool, 1, inverted)[0]

    def failures(self, chance: float) -> tuple[Ask, ...]:
        if self.rng.random() > chance:
            return ()
        return tuple(self.rng.sample(self.asks, self.rng.randint(1, 2)))

    def gate(self, pool: list[str], contact: Contact | None, inverted: float = 0.2) -> str:
        inputs = self.inputs(pool, 3, inverted)
        unless, given = self.failures(0.5), self.failures(0.15)
        k = self.rng.randint(1, len(inputs)) if self.rng.random() < 0.5 else 1
        return self.add(Gate(name=self.name(), inputs=inputs, k=k, unless=unless, given=given, contact=contact))

    def middle(self, pool: list[str], later: list[str]) -> str:
        pick = self.rng.randrange(5)
        if pick < 2:
            return self.gate(pool, None)
        if pick < 4:
            up, down = _delay(self.rng), _delay(self.rng)
            return self.add(Timer(name=self.name(), input=self.one(pool), pick_up=up, drop_out=down))
        reset = None if self.rng.random() < 0.4 else self.one(pool + later, 0.3)
        return self.add(Latch(name=self.name(), set=self.one(pool), reset=reset))

    def contact(self, roles: tuple[Role, ...]) -> Contact:
        names = [s.name for s in self.plant.sections]
        protects = frozenset(self.rng.sample(names, self.rng.randint(1, len(names))))
        role = self.rng.choice(roles)
        return Contact("f", role, protects, max(role, max(roles)))


def random_scheme(rng: Random, plant: Plant, size: int) -> Scheme:
    """Senses, a middle of gates, timers and latches, trips, a layer started by trips, coils, breakers."""
    make = _Maker(rng, plant)
    senses = [
        make.add(
            Sense(
                name=make.name(),
                condition=_condition(rng, plant, make.components),
                operate=_delay(rng),
                reset=_delay(rng),
            )
        )
        for _ in range(rng.randint(1, 1 + size))
    ]
    contacts52 = rng.sample(make.breakers, min(2, len(make.breakers))) if rng.random() < 0.4 else []
    closed = {d.name for d in plant.devices if d.closed}
    pool = senses + contacts52
    middle: list[str] = []
    for _ in range(rng.randint(0, size)):
        middle.append(make.middle(pool + middle, []))
    pool += middle
    first = (Role.MAIN, Role.MAIN_TIMED, Role.LOCAL)
    trips = [make.gate(pool, make.contact(first)) for _ in range(rng.randint(1, 1 + size))]
    later: list[str] = []
    for _ in range(rng.randint(0, size)):
        later.append(make.middle(senses + trips + later, trips))
    second = (Role.BREAKER_FAILURE, Role.REMOTE)
    trips += [make.gate(later + senses, make.contact(second)) for _ in range(rng.randint(0, size) if later else 0)]
    for name in make.breakers:
        if rng.random() < 0.1:
            continue
        coils = tuple(
            make.add(
                Gate(name=make.name(), inputs=make.inputs(trips, 3, 0.0), unless=make.failures(0.4))
            )
            for _ in range(rng.randint(1, 2))
        )
        modes = [c.name for c in make.components if c.kind is ComponentKind.BREAKER]
        commands = [c for c in middle + later if rng.random() < 0.3]
        close = rng.choice(commands) if commands and name in closed else ""
        make.add(
            Breaker(
                name=name,
                coils=coils,
                interrupting=Fixed(rng.choice((20_000, 30_000, 50_000))),
                auxiliary=Fixed(rng.choice((0, 5_000, 10_000))),
                component=rng.choice([*modes, ""]),
                late_by=rng.choice((None, Fixed(30_000), Fixed(100_000))),
                close=close,
                closing=Fixed(rng.choice((10_000, 50_000))) if close else None,
            )
        )
    there = {b.name for b in make.blocks}
    missing = [n for n in make.breakers if n not in there]
    for name in missing:  # read by others, tripped by nothing
        never = make.add(Gate(name=make.name(), inputs=()))
        make.add(Breaker(name=name, coils=(never,), interrupting=Fixed(20_000), auxiliary=Fixed(0)))
    causes = []
    for n in range(rng.randint(0, 2)):
        members = tuple(rng.sample(make.asks, 2))
        causes.append(CommonCause(f"{rng.choice('xyz')}{n}", members, Fraction(rng.randint(0, 3), 16)))
    out = frozenset(rng.sample([c.name for c in make.components], 1)) if rng.random() < 0.15 else frozenset()
    return Scheme(tuple(make.components), tuple(make.blocks), tuple(causes), out)


def with_random_delays(s: Sample, rng: Random, share: float = 0.4) -> Sample:
    """The same sample with a share of its delays random; some may be zero, and some tie with others."""

    def change(block: Block) -> Block:
        delays = [f.name for f in fields(block) if isinstance(getattr(block, f.name), Delay)]
        changed: dict[str, Any] = {name: _random_delay(rng) for name in delays if rng.random() < share}
        return replace(block, **changed)

    return replace(s, scheme=replace(s.scheme, blocks=tuple(change(b) for b in s.scheme.blocks)))


def _random_delay(rng: Random) -> Delay:
    pick = rng.randrange(5)
    if pick < 2:
        return Empirical(tuple(rng.choice((0, 10_000, 20_000, 30_000, 50_000)) for _ in range(3)))
    low = rng.choice((0, 0, 5_000, 10_000))
    high = low + rng.choice((2, 20_000, 40_000))
    return Triangular(low, low, high) if pick == 2 else Uniform(low, high)


def with_seals(s: Sample, rng: Random) -> Sample:
    """The same sample with latches and timers between trips and some coils, and instants that may never settle.

    What a sealed trip does depends on the role in which it was true when the seal began. A seal has one trip before
    it: of several, what is known of their failures when it begins would decide the role.
    """
    coils = {c for b in s.scheme.blocks if isinstance(b, Breaker) for c in b.coils}
    senses = [b.name for b in s.scheme.blocks if isinstance(b, Sense)]
    blocks: list[Block] = []
    for n, block in enumerate(s.scheme.blocks):
        if block.name not in coils or not isinstance(block, Gate) or not block.inputs or rng.random() < 0.4:
            blocks.append(block)
            continue
        joined, seal, restless = (f"{rng.choice('abcdefghij')}{kind}{n}" for kind in ("joined", "seal", "restless"))
        if rng.random() < 0.08:
            w, delay = f"{restless}.w", rng.choice((Fixed(0), Empirical((0, 0, 10_000))))
            contact = Contact("f", Role.LOCAL, frozenset({s.plant.sections[0].name}), Role.LOCAL)
            blocks += [
                Latch(name=f"{restless}.l", set=rng.choice(senses), reset=w),
                Timer(name=w, input=f"{restless}.l", pick_up=delay, drop_out=delay),
                Gate(name=restless, inputs=(f"{restless}.l", w, Not(w)), k=3, contact=contact),
            ]
            block = replace(block, inputs=(*block.inputs, restless))
        blocks.append(Gate(name=joined, inputs=(rng.choice(block.inputs),)))
        late = Timer(name=seal, input=joined, pick_up=_delay(rng), drop_out=_delay(rng))
        blocks.append(rng.choice((late, Latch(name=seal, set=joined, reset=None))))
        more = tuple(i for i in block.inputs if rng.random() < 0.3)
        blocks.append(replace(block, inputs=(seal, *more), k=1))
    return replace(s, scheme=replace(s.scheme, blocks=tuple(blocks)))


def shuffled(s: Sample, rng: Random) -> Sample:
    """The same sample declared in another order."""

    def mix(items: tuple[T, ...]) -> tuple[T, ...]:
        return tuple(rng.sample(items, len(items)))

    blocks = tuple(
        replace(b, inputs=mix(b.inputs), unless=mix(b.unless), given=mix(b.given)) if isinstance(b, Gate) else b
        for b in s.scheme.blocks
    )
    blocks = tuple(replace(b, coils=mix(b.coils)) if isinstance(b, Breaker) else b for b in blocks)
    scheme = Scheme(
        tuple(replace(c, modes=mix(c.modes)) for c in mix(s.scheme.components)),
        mix(blocks),
        tuple(replace(c, members=mix(c.members)) for c in mix(s.scheme.common_causes)),
        s.scheme.out_of_service,
    )
    plant = Plant(mix(s.plant.sections), mix(s.plant.devices), mix(s.plant.sources))
    return Sample(plant, scheme, s.event, s.observe)


def states(program: Program) -> list[tuple[frozenset[str], Fraction]]:
    """Every full set of answers with its probability: the names of the questions answered yes."""
    parts: list[list[tuple[frozenset[str], Fraction]]] = []
    for cause in program.scheme.common_causes:
        p = Fraction(cause.probability)
        if p > 0:
            parts.append([(frozenset({f"common cause {cause.name}"}), p), (frozenset(), 1 - p)])
    for c in program.scheme.components:
        if c.name in program.scheme.out_of_service:
            continue
        some = [(f"{c.name}: {m}", Fraction(p)) for m, p in c.modes if 0 < p < 1]
        if some:
            rest = Fraction(1) - sum((p for _, p in some), Fraction(0))
            parts.append([*((frozenset({n}), p) for n, p in some), (frozenset(), rest)])
    out = []
    for choice in product(*parts):
        p = Fraction(1)
        names: frozenset[str] = frozenset()
        for more, q in choice:
            names, p = names | more, p * q
        if p > 0:
            out.append((names, p))
    return out


def random_state(program: Program, rng: Random) -> frozenset[str]:
    """One full set of answers, failures being likelier than they are."""
    names: set[str] = set()
    for cause in program.scheme.common_causes:
        if cause.probability > 0 and rng.random() < 0.15:
            names.add(f"common cause {cause.name}")
    for c in program.scheme.components:
        some = [m for m, p in c.modes if 0 < p < 1]
        if c.name not in program.scheme.out_of_service and some and rng.random() < 0.4:
            names.add(f"{c.name}: {rng.choice(some)}")
    return frozenset(names)


__all__ = [
    "HORIZON_US",
    "FailureMode",
    "Sample",
    "random_plant",
    "random_scheme",
    "random_state",
    "sample",
    "samples",
    "shuffled",
    "states",
    "with_random_delays",
    "with_seals",
]
