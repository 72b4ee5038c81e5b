"""The trip matrix: which trip output opens which breaker and by what way, read off the blocks without a run.

From every trip output the signals are followed to the breakers: through coils, lockout
relays (86), votes and transfer trips; a breaker-failure function that is reached is
initiated. :mod:`schemesim.scheme.trip_comparison` holds it against one that a user gives.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from schemesim.scheme.model import (
    Block,
    Breaker,
    ComponentKind,
    Contact,
    Gate,
    Latch,
    Not,
    Role,
    Scheme,
    inputs_of,
    signal_of,
)
from schemesim.show.tables import to_html

if TYPE_CHECKING:
    import pandas as pd

TRANSFER_TRIP = "transfer trip"
"""Function of a contact that only hands a trip on to another station."""

TRIP, LOCKOUT, TRANSFER, INITIATE = "T", "86", "TT", "BFI"
MARKS: Mapping[str, str] = {
    TRIP: "trips",
    LOCKOUT: "trips through a lockout relay",
    TRANSFER: "trips by transfer trip",
    INITIATE: "initiates breaker failure",
}
"""What a cell can say."""


@dataclass(frozen=True, slots=True, order=True)
class Way:
    """One way from a trip output to a breaker, or to its breaker-failure function.

    Attributes
    ----------
    mark : str
        ``"T"``, ``"86"`` or ``"TT"`` (``"86+TT"``: through both), or ``"BFI"``.
    coil, lockout, channel : str
        Components on the way; empty where there is none.
    vote : str
        ``"2oo3"`` where the way needs other outputs too; empty where it does not.
    """

    mark: str
    coil: str = ""
    lockout: str = ""
    channel: str = ""
    vote: str = ""

    @property
    def marks(self) -> frozenset[str]:
        """Its marks one by one; every way that is no initiation is a trip."""
        return frozenset(self.mark.split("+")) | (frozenset() if self.mark == INITIATE else {TRIP})


@dataclass(frozen=True, slots=True)
class TripRow:
    """A trip output and where it leads: ways by breaker (or source with a trip)."""

    output: str
    contact: Contact
    ways: Mapping[str, tuple[Way, ...]]

    def marks(self, breaker: str) -> frozenset[str]:
        """Everything the output does to a breaker."""
        return frozenset(m for way in self.ways.get(breaker, ()) for m in way.marks)

    def cell(self, breaker: str) -> str:
        """The marks of a breaker as text, ``T`` where it is tripped directly; empty for nothing."""
        return " ".join(sorted({way.mark for way in self.ways.get(breaker, ())}, key=_rank))

    @property
    def key(self) -> dict[str, str]:
        """What names the row in a table."""
        c = self.contact
        return {
            "station": c.station, "element": c.element, "function": c.function, "set": c.chain, "output": self.output,
        }  # fmt: skip


def _rank(mark: str) -> tuple[int, str]:
    order = (TRIP, LOCKOUT, TRANSFER, f"{LOCKOUT}+{TRANSFER}", INITIATE)
    return (order.index(mark), mark)


KEYS = ("station", "element", "function", "set", "output")
"""Columns that name a trip output in a table."""


@dataclass(frozen=True)
class TripMatrix:
    """Trip outputs by breakers.

    Attributes
    ----------
    rows : tuple of TripRow
        By station, element, function, set and name; outputs of transfer trips are ways, not rows.
    breakers : tuple of str
        Every breaker and source with a trip that the scheme can open.
    """

    rows: tuple[TripRow, ...]
    breakers: tuple[str, ...]

    @cached_property
    def row(self) -> Mapping[str, TripRow]:
        """Rows by the name of their output."""
        return {r.output: r for r in self.rows}

    def table(self) -> pd.DataFrame:
        """One row for each trip output, one column for each breaker; see :data:`MARKS` for the cells."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame([{**r.key, **{b: r.cell(b) for b in self.breakers}} for r in self.rows])

    def ways_table(self) -> pd.DataFrame:
        """One row for each way, with the coil, lockout relay and channel it goes through."""
        import pandas as pd

        return pd.DataFrame(list(self.records()))

    def records(self) -> Iterator[dict[str, str]]:
        """Every way as a flat row."""
        for r in self.rows:
            for breaker, ways in r.ways.items():
                for w in ways:
                    way = {"coil": w.coil, "lockout": w.lockout, "channel": w.channel, "vote": w.vote}
                    yield {**r.key, "breaker": breaker, "mark": w.mark, **way}

    def __repr__(self) -> str:
        cells = sum(len(r.ways) for r in self.rows)
        return f"TripMatrix({len(self.rows)} trip outputs, {len(self.breakers)} breakers, {cells} cells)"

    def _repr_html_(self) -> str:
        return to_html(self.table())


def trip_matrix(scheme: Scheme) -> TripMatrix:
    """The trip matrix of a scheme, by following its signals.

    A way ends at the next trip output, but for those of function ``"transfer trip"``; where
    that one is of breaker failure the cell of its breaker says ``"BFI"``. Inverted inputs, the
    reset of a latch and closing are no trips. A function that only trips under a failure
    counts like any other: the matrix says what is wired.

    Parameters
    ----------
    scheme : Scheme

    Returns
    -------
    TripMatrix

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, feeder, generator, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> from schemesim.scheme.dress import dress
    >>> from schemesim.scheme.policy import single_set
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder")
    >>> feeder(b, "F1", station="Alder", load_mw=10)
    >>> single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1")])
    >>> found = trip_matrix(dress(b.build(), single_set()))
    >>> found.row["Alder/F1/1 50 trip"].cell("Alder.F1.CB")
    'T BFI'
    >>> found.row["Alder/Alder.B1/1 87B trip"].cell("Alder.G1.CB")
    '86 BFI'
    """
    readers = plain_readers(scheme)
    rows = []
    for name, contact in scheme.contacts.items():
        if contact.function != TRANSFER_TRIP:
            rows.append(TripRow(name, contact, _follow(scheme, readers, name)))
    order = sorted(rows, key=lambda r: tuple(r.key.values()))
    return TripMatrix(tuple(order), tuple(b.name for b in scheme.blocks if isinstance(b, Breaker)))


def plain_readers(scheme: Scheme) -> Mapping[str, tuple[str, ...]]:
    """For each signal the blocks that it can help to make true: not inverted, no reset, no closing."""
    found: dict[str, list[str]] = {}
    for b in scheme.blocks:
        for item in driving(b):
            found.setdefault(item, []).append(b.name)
    return {name: tuple(to) for name, to in found.items()}


def driving(block: Block) -> tuple[str, ...]:
    """The signals that help to make a block true (to open it, for a breaker)."""
    match block:
        case Breaker():
            return block.coils
        case Latch():
            items: Sequence[str | Not] = (block.set,)
        case _:
            items = inputs_of(block)
    return tuple(signal_of(i) for i in items if not isinstance(i, Not))


@dataclass(frozen=True, slots=True)
class _So:
    """What a way has been through so far."""

    coil: str = ""
    lockout: str = ""
    channel: str = ""
    vote: str = ""


def _follow(scheme: Scheme, readers: Mapping[str, tuple[str, ...]], output: str) -> Mapping[str, tuple[Way, ...]]:
    found: dict[str, set[Way]] = {}
    todo: list[tuple[str, _So]] = [(output, _So())]
    seen = set(todo)
    while todo:
        signal, so_far = todo.pop()
        for name in readers.get(signal, ()):
            block = scheme.block[name]
            if isinstance(block, Breaker):
                mark = "+".join(m for m, used in ((LOCKOUT, so_far.lockout), (TRANSFER, so_far.channel)) if used)
                way = Way(mark or TRIP, so_far.coil, so_far.lockout, so_far.channel, so_far.vote)
                found.setdefault(name, set()).add(way)
                continue
            if isinstance(block, Gate) and block.contact and block.contact.function != TRANSFER_TRIP:
                if block.contact.role is Role.BREAKER_FAILURE:
                    found.setdefault(block.contact.element or name, set()).add(Way(INITIATE))
                continue
            step = (name, _through(scheme, block, so_far))
            if step not in seen:
                seen.add(step)
                todo.append(step)
    return {b: tuple(sorted(ways, key=lambda w: (_rank(w.mark), w))) for b, ways in sorted(found.items())}


def _through(scheme: Scheme, block: Block, so_far: _So) -> _So:
    """What a way has been through once it has passed a block."""
    if not isinstance(block, Gate):
        return so_far
    at: dict[ComponentKind, str] = {}
    for ask in block.unless:
        at.setdefault(scheme.component[ask.component].kind, ask.component)
    vote = f"{block.k}oo{len(block.inputs)}" if block.k > 1 else so_far.vote
    return _So(
        at.get(ComponentKind.COIL, so_far.coil),
        at.get(ComponentKind.LOCKOUT, so_far.lockout),
        at.get(ComponentKind.CHANNEL, so_far.channel),
        vote,
    )
