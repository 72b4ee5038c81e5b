"""A scheme with functions of one's own added: blocks, what they stand on, and the breakers they trip."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import replace

from schemesim.errors import ErrorList, nearest
from schemesim.scheme.model import Block, Breaker, Component, Gate, Input, Latch, Scheme


def extend(
    scheme: Scheme,
    *,
    components: Iterable[Component] = (),
    blocks: Iterable[Block] = (),
    trips: Mapping[str, Iterable[str]] | None = None,
    initiates: bool = True,
) -> Scheme:
    """Add a function of one's own to a scheme.

    Parameters
    ----------
    scheme : Scheme
        Stays as it is.
    components : iterable of Component
        Things that can fail which the function brings along.
    blocks : iterable of Block
        Its senses, gates, timers and latches. A block that has the name of one in the scheme takes its place.
    trips : mapping of signal to breakers or coils, or None
        What it trips: a breaker by name, through its first coil, or a coil such as ``"Alder.L1.CB/coil 2"``.
    initiates : bool
        Whether these trips start breaker failure, where the breaker has it.

    Returns
    -------
    Scheme

    Raises
    ------
    InputError
        With every mistake: a breaker or coil that the scheme does not trip, a component there already, and
        everything that :class:`Scheme` refuses.

    Examples
    --------
    >>> import schemesim as ss
    >>> b = ss.PlantBuilder()
    >>> ss.generator(b, "G1", station="Alder")
    >>> ss.feeder(b, "F1", station="Alder", load_mw=10)
    >>> ss.single_bus(b, "Alder", [ss.Bay("G1", "G1"), ss.Bay("F1", "F1")])
    >>> plant = b.build()
    >>> light = ss.Sense(
    ...     name="arc light", condition=ss.InZone(frozenset({"Alder.B1"}), ("Alder.G1.CTc",)),
    ...     operate=ss.fixed_ms(2), reset=ss.fixed_ms(5),
    ... )
    >>> trip = ss.Gate(name="arc trip", inputs=("arc light",), contact=ss.Contact("AFD", ss.Role.MAIN))
    >>> plain = ss.dress(plant, ss.single_set())
    >>> fast = extend(plain, blocks=[light, trip], trips={"arc trip": ["Alder.G1.CB"]})
    >>> for scheme in (plain, fast):
    ...     case = ss.bind(ss.compile_scheme(plant, scheme), ss.Location("Alder.B1"), ss.LogicalSensing())
    ...     print(ss.replay(case, ()).outcome.t_clear_us)
    80000
    52000
    """
    errors, known = ErrorList(), {c.name for c in scheme.components}
    brought = tuple(components)
    for c in brought:
        if c.name in known:
            errors.add("component", c.name, "a name that no component of the scheme has")
    made: dict[str, Block] = {b.name: b for b in scheme.blocks} | {b.name: b for b in blocks}
    coils = {name: b.coils for name, b in made.items() if isinstance(b, Breaker) and b.coils}
    by_coil = {signal.removesuffix(" energised"): (breaker, signal) for breaker, all in coils.items() for signal in all}
    for signal, targets in (trips or {}).items():
        if signal not in made:
            errors.add("signal that trips", signal, "the name of a block", tip=nearest(signal, made))
            continue
        for target in (targets,) if isinstance(targets, str) else targets:
            if target in coils:
                breaker, coil = target, coils[target][0]
            elif target in by_coil:
                breaker, coil = by_coil[target]
            else:
                tip = nearest(target, [*coils, *by_coil])
                errors.add(f"tripped by {signal!r}", target, "a breaker that the scheme trips, or its coil", tip=tip)
                continue
            _feed(made, coil, signal)
            if initiates:
                _initiate(made, f"{breaker}/50BF", signal)
    errors.raise_if_any()
    return replace(scheme, components=(*scheme.components, *brought), blocks=tuple(made.values()))


def _feed(made: dict[str, Block], gate: str, signal: str) -> None:
    block = made[gate]
    if isinstance(block, Gate) and signal not in block.inputs:
        made[gate] = replace(block, inputs=(*block.inputs, signal))


def _initiate(made: dict[str, Block], name: str, signal: str) -> None:
    """Start a breaker failure: where one trip alone has started it until now, a gate is put in its place."""
    seal = made.get(f"{name} sealed in")
    if not isinstance(seal, Latch):
        return
    gate = f"{name} initiate"
    if gate not in made:
        alone: Input = seal.set
        made[gate] = Gate(name=gate, inputs=(alone,))
        made[seal.name] = replace(seal, set=gate)
        started = made.get(f"{name} started")
        if isinstance(started, Gate):
            made[started.name] = replace(started, inputs=tuple(gate if i == alone else i for i in started.inputs))
    _feed(made, gate, signal)
