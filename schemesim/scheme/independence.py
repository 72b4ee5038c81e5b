"""The independence audit: every item that two sets of main protection share, from measurement to breaker.

For each element and each breaker that both sets trip, what a set stands on is read off
the blocks: upstream of its trip outputs the relays, DC domains, CT cores, VT windings and
channels whose failure keeps a signal from leaving, downstream the lockout relays, coils, DC domains,
channels and the breaker itself. What both stand on is shared. ``fully duplicated`` is
then a claim that holds or does not: nothing is shared but the breaker and the primary
part of the instrument transformers.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cached_property
from itertools import combinations
from typing import TYPE_CHECKING

from schemesim.errors import ErrorList, nearest
from schemesim.scheme.model import Role, Scheme
from schemesim.scheme.standing import Item, Walk
from schemesim.scheme.trip_matrix import TRANSFER_TRIP
from schemesim.show.tables import to_html

if TYPE_CHECKING:
    import pandas as pd

MAIN_ROLES = (Role.MAIN, Role.MAIN_TIMED)


@dataclass(frozen=True, slots=True)
class Shared:
    """An item that two sets of an element share.

    Attributes
    ----------
    element : str
    sets : tuple of str
        The labels of the two sets.
    item : Item
    breakers : frozenset of str
        Those on whose trip by either set the item lies.
    stops : frozenset of str
        Those of them that no set of the element's main protection can trip without the item.
    """

    element: str
    sets: tuple[str, str]
    item: Item
    breakers: frozenset[str]
    stops: frozenset[str]


@dataclass(frozen=True)
class Audit:
    """What the sets of main protection share, element by element.

    Attributes
    ----------
    shared : tuple of Shared
    pairs : tuple of (element, set, set)
        What was compared.
    alone : tuple of str
        Elements with one set only: there is nothing to compare.
    protects : mapping of element to sections
        The sections its main protection is meant for.
    """

    shared: tuple[Shared, ...]
    pairs: tuple[tuple[str, str, str], ...]
    alone: tuple[str, ...]
    protects: Mapping[str, frozenset[str]]

    def of(self, element: str) -> tuple[Shared, ...]:
        """What the sets of one element share.

        Raises
        ------
        InputError
            For an element without main protection.
        """
        _check_elements([element], self.protects)
        return tuple(s for s in self.shared if s.element == element)

    def at(self, section: str) -> tuple[Shared, ...]:
        """What is shared by the sets of every element whose main protection is meant for a fault on this section."""
        return tuple(s for s in self.shared if section in self.protects[s.element])

    def fully_duplicated(self, element: str) -> bool:
        """Whether an element has two sets or more, which share only the breaker and instrument transformers."""
        _check_elements([element], self.protects)
        return element not in self.alone and all(s.item.primary for s in self.of(element))

    @cached_property
    def kinds(self) -> Mapping[str, tuple[str, ...]]:
        """For each element the kinds of what its sets share."""
        found: dict[str, set[str]] = {e: set() for e, _, _ in self.pairs}
        for s in self.shared:
            found[s.element].add(s.item.kind)
        return {e: tuple(sorted(kinds)) for e, kinds in sorted(found.items())}

    def table(self) -> pd.DataFrame:
        """One row for each item shared."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame(self.records(), columns=list(COLUMNS))

    def records(self) -> list[dict[str, object]]:
        """One flat row for each item shared."""
        return [
            {
                "element": s.element,
                "sets": " and ".join(s.sets),
                "kind": s.item.kind,
                "item": s.item.name,
                "primary": s.item.primary,
                "breakers": ", ".join(sorted(s.breakers)),
                "stops": ", ".join(sorted(s.stops)),
            }
            for s in self.shared
        ]

    def __repr__(self) -> str:
        both = [e for e in self.protects if self.fully_duplicated(e)]
        secondary = sum(not s.item.primary for s in self.shared)
        return (
            f"Audit({len(both)} of {len(self.protects)} elements fully duplicated, {len(self.alone)} with one set; "
            f"{secondary} items shared besides breakers and instrument transformers)"
        )

    def _repr_html_(self) -> str:
        return to_html(self.table())


COLUMNS = ("element", "sets", "kind", "item", "primary", "breakers", "stops")


def independence(scheme: Scheme, elements: Iterable[str] | None = None) -> Audit:
    """Every item that the sets of main protection of each element share, timed zones included.

    Sets are told apart by the ``chain`` of their trip outputs. An item is shared where it
    lies on the way of both sets to the same breaker: what one set needs for one breaker and the other
    for another is not. A VT is known by the name of its windings, ``VT/winding N``.
    Whether an item also stops both (``stops``) is decided with everything else working and
    everything measured: it is then no choice of words but a breaker without a trip.

    Parameters
    ----------
    scheme : Scheme
    elements : iterable of str or None
        Only these; by default all with main protection.

    Returns
    -------
    Audit

    Raises
    ------
    InputError
        For an element without main protection.

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, feeder, generator, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> from schemesim.scheme.dress import dress
    >>> from schemesim.scheme.policy import duplicate_chain, duplicate_relay
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder")
    >>> feeder(b, "F1", station="Alder", load_mw=10)
    >>> single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1")])
    >>> plant = b.build()
    >>> for policy in (duplicate_relay(), duplicate_chain()):
    ...     found = independence(dress(plant, policy))
    ...     print(found.kinds["F1"], found.fully_duplicated("F1"))
    ('breaker', 'coil', 'ct', 'ct_core', 'dc') False
    ('breaker', 'ct') True
    """
    outputs: dict[str, dict[str, list[str]]] = {}
    protects: dict[str, frozenset[str]] = {}
    for name, contact in scheme.contacts.items():
        if contact.role in MAIN_ROLES and contact.function != TRANSFER_TRIP:
            outputs.setdefault(contact.element, {}).setdefault(contact.chain, []).append(name)
            if contact.role is Role.MAIN:
                protects[contact.element] = protects.get(contact.element, frozenset()) | contact.protects
    chosen = sorted(outputs) if elements is None else sorted(set(elements))
    _check_elements(chosen, outputs)
    walk = Walk(scheme)
    shared: list[Shared] = []
    pairs: list[tuple[str, str, str]] = []
    for element in chosen:
        sets = outputs[element]
        stands_on = {label: walk.stands_on(names) for label, names in sets.items()}
        every = [name for names in sets.values() for name in names]
        stopped: dict[Item, frozenset[str]] = {}
        for a, b in combinations(sorted(sets), 2):
            pairs.append((element, a, b))
            found: dict[Item, set[str]] = {}
            for breaker in set(stands_on[a]) & set(stands_on[b]):
                for item in walk.common(stands_on[a][breaker], stands_on[b][breaker]):
                    found.setdefault(item, set()).add(breaker)
            for item, breakers in sorted(found.items()):
                if item not in stopped:
                    stopped[item] = walk.stopped(every, item)
                shared.append(Shared(element, (a, b), item, frozenset(breakers), stopped[item] & breakers))
    alone = tuple(e for e in chosen if len(outputs[e]) < 2)
    return Audit(tuple(shared), tuple(pairs), alone, {e: protects.get(e, frozenset()) for e in chosen})


def _check_elements(elements: Iterable[str], known: Iterable[str]) -> None:
    errors, names = ErrorList(), list(known)
    for name in elements:
        if name not in names:
            errors.add("element", name, "an element with main protection", tip=nearest(name, names))
    errors.raise_if_any()
