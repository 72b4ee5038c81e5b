"""What trip outputs stand on: everything that lies on their ways, from measurement to breaker, read off the blocks."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from schemesim.scheme.conditions import Condition, Current, InZone, NoFaultTrip, OutOfZone, Reach
from schemesim.scheme.model import Ask, Breaker, Gate, Latch, Not, Scheme, Sense, inputs_of, signal_of
from schemesim.scheme.trip_matrix import TRANSFER_TRIP, driving, plain_readers

CT, VT, COMMON_CAUSE = "ct", "vt", "common_cause"
PRIMARY = frozenset({"breaker", CT, VT})
"""Kinds that a second set of protection shares by its nature: one breaker, one CT with several cores, one VT."""


@dataclass(frozen=True, slots=True, order=True)
class Item:
    """Something a set of protection stands on.

    Attributes
    ----------
    kind : str
        A component kind; ``"ct"`` or ``"vt"``: the transformer itself, with its primary fuse, whatever the
        core or winding; ``"common_cause"``.
    name : str
    """

    kind: str
    name: str

    @property
    def primary(self) -> bool:
        """Whether it is the breaker or an instrument transformer: shared even by a full duplicate."""
        return self.kind in PRIMARY


class Walk:
    """Follows the signals of one scheme, upstream and downstream."""

    def __init__(self, scheme: Scheme) -> None:
        self.scheme = scheme
        self.readers = plain_readers(scheme)
        self._above: dict[str, frozenset[Item | Ask]] = {}

    # --- what is stood on ---------------------------------------------------------------

    def stands_on(self, outputs: Iterable[str]) -> dict[str, frozenset[Item | Ask]]:
        """For each breaker that any of the outputs trips, what lies on the ways to it (failures and things)."""
        found: dict[str, set[Item | Ask]] = {}
        for output in outputs:
            above = self.above(output)
            for breaker, below in self.below(output).items():
                found.setdefault(breaker, set()).update(above, below)
        return {b: frozenset(on) for b, on in found.items()}

    def above(self, output: str) -> frozenset[Item | Ask]:
        """What lies upstream of a signal, itself included; a breaker's auxiliary contact is where it ends."""
        if output not in self._above:
            found: set[Item | Ask] = set()
            todo, seen = [output], {output}
            while todo:
                block = self.scheme.block[todo.pop()]
                found.update(self._on(block.name))
                if isinstance(block, Breaker):
                    continue
                for signal in map(signal_of, inputs_of(block)):
                    if signal not in seen:
                        seen.add(signal)
                        todo.append(signal)
            self._above[output] = frozenset(found)
        return self._above[output]

    def below(self, output: str) -> dict[str, frozenset[Item | Ask]]:
        """For each breaker downstream what lies between; further functions (breaker failure) are not followed."""
        reached, todo = {output}, [output]
        breakers = []
        while todo:
            for name in self.readers.get(todo.pop(), ()):
                block = self.scheme.block[name]
                if isinstance(block, Breaker):
                    breakers.append(name)
                elif name not in reached and not self._further(name):
                    reached.add(name)
                    todo.append(name)
        return {b: self._between(b, reached) for b in sorted(set(breakers))}

    def _between(self, breaker: str, reached: set[str]) -> frozenset[Item | Ask]:
        found: set[Item | Ask] = set(self._on(breaker))
        todo, seen = [breaker], {breaker}
        while todo:
            for signal in driving(self.scheme.block[todo.pop()]):
                if signal in reached and signal not in seen:
                    seen.add(signal)
                    found.update(self._on(signal))
                    todo.append(signal)
        return frozenset(found)

    def _further(self, name: str) -> bool:
        contact = self.scheme.contacts.get(name)
        return contact is not None and contact.function != TRANSFER_TRIP

    def _on(self, name: str) -> Iterable[Item | Ask]:
        """What a block itself stands on."""
        block = self.scheme.block[name]
        if isinstance(block, Gate):
            yield from block.unless
            for ask in block.unless:
                yield self.item(ask)
                vt, is_winding, _ = ask.component.rpartition("/winding ")
                if is_winding:
                    yield Item(VT, vt)
        elif isinstance(block, Sense):
            yield from (Item(CT, ct) for ct in _cts(block.condition))
        elif isinstance(block, Breaker) and block.component:
            yield Item(self.scheme.component[block.component].kind.value, block.component)

    def item(self, ask: Ask) -> Item:
        """The component that an ask is about."""
        return Item(self.scheme.component[ask.component].kind.value, ask.component)

    def common(self, a: frozenset[Item | Ask], b: frozenset[Item | Ask]) -> set[Item]:
        """Items in both, and common causes with a member in each that is not the other's."""
        found = {item for item in a & b if isinstance(item, Item)}
        for cause in self.scheme.common_causes:
            of_a, of_b = a.intersection(cause.members), b.intersection(cause.members)
            if of_a and of_b and len(of_a | of_b) > 1:
                found.add(Item(COMMON_CAUSE, cause.name))
        return found

    # --- what stops both ----------------------------------------------------------------

    def stopped(self, outputs: Iterable[str], item: Item) -> frozenset[str]:
        """Breakers that the outputs trip with everything working and measured, and do not without the item."""
        chosen = list(outputs)
        return self._tripped(chosen, None) - self._tripped(chosen, item)

    def _tripped(self, outputs: list[str], without: Item | None) -> frozenset[str]:
        """Breakers that these outputs can trip; an inverted input may always be as it should."""
        region = self._region(outputs)
        true: set[str] = set()
        changed = True
        while changed:
            changed = False
            for name in region:
                if name not in true and self._can(name, true, without):
                    true.add(name)
                    changed = True
        return frozenset(n for n in true if isinstance(self.scheme.block[n], Breaker))

    def _region(self, outputs: list[str]) -> list[str]:
        """The blocks upstream and downstream of the outputs."""
        up, todo = set(outputs), list(outputs)
        while todo:
            block = self.scheme.block[todo.pop()]
            for signal in () if isinstance(block, Breaker) else driving(block):
                if signal not in up:
                    up.add(signal)
                    todo.append(signal)
        down, todo = set(outputs), list(outputs)
        while todo:
            for name in self.readers.get(todo.pop(), ()):
                if name not in down and not self._further(name):
                    down.add(name)
                    todo.append(name)
        return sorted(up | down)

    def _can(self, name: str, true: set[str], without: Item | None) -> bool:
        block = self.scheme.block[name]
        if without is not None and any(self._gone(on, without) for on in self._on(name)):
            return False
        match block:
            case Gate():
                met = sum(isinstance(i, Not) or signal_of(i) in true for i in block.inputs)
                return met >= block.k and not block.given
            case Sense():
                return not isinstance(block.condition, NoFaultTrip)
            case Latch():
                return isinstance(block.set, Not) or block.set in true
            case _:
                return any(signal in true for signal in driving(block))

    def _gone(self, on: Item | Ask, without: Item) -> bool:
        if without.kind == COMMON_CAUSE:
            members = next(c.members for c in self.scheme.common_causes if c.name == without.name)
            return on in members
        return on == without


def _cts(condition: Condition) -> tuple[str, ...]:
    match condition:
        case InZone(cts=cts):
            return cts
        case OutOfZone(ct=ct):
            return (ct,)
        case Reach(terminals=terminals):
            return tuple(t.ct for t in terminals)
        case Current(devices=devices):
            return devices
        case _:
            return ()
