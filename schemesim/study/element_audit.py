"""What elements see against what they are set to: sensitivity, blindness, over-reach.

For every element, every fault and every state of the sources: quantity ÷ setting. What an
element is meant to see is what logical sensing says of it: its zone, its reach, its direction.
Meant and below 1 is blind; not meant and 1 or more is over-reaching.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from schemesim.engine.electrical import prepare
from schemesim.engine.program import Kind, Program
from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import nearest, reject
from schemesim.plant.model import Location
from schemesim.plant.net_case import FaultType, ShuntFault
from schemesim.scheme.conditions import Current
from schemesim.scheme.model import Gate, Sense
from schemesim.scheme.phasor_elements import Biased, Element, Part, size_of
from schemesim.scheme.phasor_quantities import Quantities
from schemesim.scheme.settings import Settings
from schemesim.scheme.settings_data import NetworkOf
from schemesim.show.tables import to_html

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

_CARRIES = 0.01
"""Share of the fault current below which a CT has nothing of it to see."""


@dataclass(frozen=True, slots=True)
class Worst:
    """Quantity ÷ setting at its worst, and where.

    Attributes
    ----------
    multiple : float
    fault : str
        Location and type.
    state : str
        Dispatch, and the infeed that is out.
    """

    multiple: float
    fault: str
    state: str


@dataclass(frozen=True, slots=True)
class ElementRow:
    """One element over all faults and states.

    Attributes
    ----------
    block : str
        Sense block; of a differential, what the blocks of its CTs have in common.
    must, must_not : int
        How many faults it is meant to see, and not.
    blind, over : int
        How many of these it does not see, and does.
    least : Worst or None
        The smallest multiple of what it is meant to see.
    greatest : Worst or None
        The greatest of what it is not.
    """

    block: str
    must: int
    blind: int
    must_not: int
    over: int
    least: Worst | None
    greatest: Worst | None


@dataclass(frozen=True, repr=False)
class ElementAudit:
    """Every element audited, the least sensitive first."""

    rows: tuple[ElementRow, ...]
    faults: int
    states: int

    def __repr__(self) -> str:
        return (
            f"ElementAudit({len(self.rows)} elements, {self.faults} faults, {self.states} states: "
            f"{len(self.blind)} blind somewhere, {len(self.over_reaching)} over-reaching)"
        )

    @property
    def blind(self) -> tuple[ElementRow, ...]:
        """Elements that do not see something they are meant to see."""
        return tuple(r for r in self.rows if r.blind)

    @property
    def over_reaching(self) -> tuple[ElementRow, ...]:
        """Elements that see something they are not meant to see, the worst first."""
        over = [r for r in self.rows if r.over and r.greatest is not None]
        return tuple(sorted(over, key=lambda r: (-(r.greatest.multiple if r.greatest else 0.0), r.block)))

    def records(self) -> list[dict[str, object]]:
        """One row for each element, as data: counts, worst multiples and where they occur; None where there is none."""
        rows: list[dict[str, object]] = []
        for r in self.rows:
            row: dict[str, object] = {"block": r.block}
            for way, worst, counts in (
                ("least", r.least, {"must": r.must, "blind": r.blind}),
                ("greatest", r.greatest, {"must_not": r.must_not, "over": r.over}),
            ):
                row |= {**counts, way: worst.multiple if worst else None}
                row |= {f"{way}_at": worst.fault if worst else "", f"{way}_in": worst.state if worst else ""}
            rows.append(row)
        return rows

    def table(self) -> pd.DataFrame:
        """One row for each element: counts, worst multiples and where they occur."""
        import pandas as pd

        names = ["block", "must", "blind", "least", "least_at", "least_in", "must_not", "over", "greatest",
                 "greatest_at", "greatest_in"]  # fmt: skip
        return pd.DataFrame(self.records(), columns=names).astype({"least": float, "greatest": float})

    def _repr_html_(self) -> str:
        return to_html(self.table())

    def plot(self, ax: Axes | None = None, *, most: int = 40) -> Axes:
        """Smallest multiple of what each must see and greatest of what it must not, around the setting."""
        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(8, 1 + 0.25 * min(most, max(len(self.rows), 1)))).add_subplot()
        shown = [r for r in self.rows if r.least is not None or r.greatest is not None][:most]
        for way, mark, words in (("least", "o", "must see: smallest"), ("greatest", "x", "must not see: greatest")):
            found = [(getattr(r, way).multiple, n) for n, r in enumerate(shown) if getattr(r, way) is not None]
            inside = [(min(max(m, 0.01), 100.0), n) for m, n in found]
            ax.plot([m for m, _ in inside], [n for _, n in inside], mark, label=words)
        ax.axvline(1.0, color="0.4", linewidth=1.0)
        ax.set_xscale("log")
        ax.set_xlim(0.008, 125.0)
        ax.set_yticks(range(len(shown)), [r.block for r in shown])
        ax.invert_yaxis()
        ax.set_xlabel("quantity ÷ setting (0.01 and below, 100 and above at the edges)")
        ax.legend()
        return ax


def audit_elements(
    program: Program,
    settings: Settings,
    *,
    faults: Iterable[FaultType | str] = (FaultType.LLL, FaultType.LL),
    resistance_ohm: float = 0.0,
    locations: Sequence[Location] | None = None,
    dispatches: Sequence[str | None] | None = None,
    infeeds: Iterable[str] | None = None,
    blocks: Iterable[str] | None = None,
    network: NetworkOf | None = None,
) -> ElementAudit:
    """Quantity ÷ setting of every element for what it must and must not see, at its worst.

    Parameters
    ----------
    program : Program
    settings : Settings
    faults : iterable of FaultType
    resistance_ohm : float
    locations : sequence of Location or None
        Fault locations; by default each section, lines at 5, 50 and 95 %.
    dispatches : sequence of (str or None), or None
        States of the sources; by default all in service and every state of the plant.
    infeeds : iterable of str or None
        Sources taken out one at a time in each state; by default all of them, () for none.
    blocks : iterable of str or None
        Sense blocks; by default those that act by their setting, and not only where something fails
        (an over-reach, an open CT core).
    network : NetworkOf or None

    Returns
    -------
    ElementAudit
        An element through whose CTs nothing feeds the fault in a state has nothing to see there and
        is not counted. A current detector is meant to see faults in the zones on both its sides only, and
        nothing is counted against it elsewhere.

    Raises
    ------
    InputError
        If a block has no setting, or a location, dispatch or source is not there.

    Examples
    --------
    ``audit_elements(program, settings_for(plant, scheme)).table().head(20)`` shows the least sensitive.
    """
    if network is None:
        from schemesim.plant.net_faults import network_of  # heavy: scipy

        network = network_of
    plant = program.plant
    settings.check(plant, program.scheme)
    chosen = _chosen(program, settings, blocks)
    places = plant.locations((0.05, 0.5, 0.95)) if locations is None else tuple(locations)
    states = (None, *(d.name for d in plant.dispatches)) if dispatches is None else tuple(dispatches)
    away = tuple(s.name for s in plant.sources) if infeeds is None else tuple(infeeds)
    for name in sorted(set(away) - set(plant.source)):
        raise reject("infeed", name, "the name of a source", tip=nearest(name, plant.source))
    kinds = tuple(FaultType(k) for k in faults)
    groups = _grouped(chosen, settings)
    tally = {name: _Tally() for name in groups}
    elements = {name: _whole(settings.of[group[0]].element) for name, group in groups.items()}
    missing = {name: settings.of[group[0]].missing for name, group in groups.items()}
    for dispatch in states:
        grid = network(plant, dispatch)
        memory = grid.prefault()
        running = {s.name for s in plant.sources_in(dispatch)}
        out = ["", *(name for name in away if name in running and len(running) > 1)]
        for place in places:
            single = _meant(program, place, dispatch, chosen)
            said = {
                name: [single[b] for b in group if b in single and settings.of[b].counts(place.section)]
                for name, group in groups.items()
            }
            meant = {name: any(each) for name, each in said.items() if each}
            for kind in kinds:
                faulted = grid.at(ShuntFault(place, kind, resistance_ohm))
                prepare(faulted, settings.cts)
                for name in out:
                    state = ", ".join(x for x in (dispatch or "all in service", f"{name} out" if name else "") if x)
                    solved = faulted.solve(frozenset({name} if name else ()))
                    if not solved.fed:
                        continue
                    q = Quantities(plant, solved, memory)
                    total = size_of(solved.fault, Part.PHASE)
                    for block, must in meant.items():
                        if _feeds(q, elements[block], total):
                            multiple = elements[block].multiple(q.without(missing[block]))
                            tally[block].count(must, multiple, f"{place} {kind}", state)
    rows = [t.row(name) for name, t in tally.items()]
    rows.sort(key=lambda r: (r.least.multiple if r.least else float("inf"), r.block))
    return ElementAudit(tuple(rows), len(places) * len(kinds), (1 + len(set(away))) * len(states))


class _Tally:
    """Counts of one element."""

    def __init__(self) -> None:
        self.seen = [0, 0]
        self.wrong = [0, 0]
        self.worst: list[Worst | None] = [None, None]

    def count(self, must: bool, multiple: float, fault: str, state: str) -> None:
        """One fault in one state."""
        n = 0 if must else 1
        self.seen[n] += 1
        self.wrong[n] += (multiple < 1.0) if must else (multiple >= 1.0)
        old = self.worst[n]
        if old is None or (multiple < old.multiple if must else multiple > old.multiple):
            self.worst[n] = Worst(multiple, fault, state)

    def row(self, block: str) -> ElementRow:
        """The element's row."""
        return ElementRow(block, self.seen[0], self.wrong[0], self.seen[1], self.wrong[1], *self.worst)


def acting(program: Program, settings: Settings) -> tuple[str, ...]:
    """Sense blocks that act by their setting, and not only where something fails."""
    return tuple(
        b.name
        for i, b in enumerate(program.blocks)
        if isinstance(b, Sense) and b.name in settings.of and not _only_where_something_fails(program, i)
    )


def _chosen(program: Program, settings: Settings, blocks: Iterable[str] | None) -> dict[str, Sense]:
    """The blocks to audit."""
    found: dict[str, Sense] = {}
    for name in acting(program, settings) if blocks is None else blocks:
        block = program.scheme.block.get(name)
        if not isinstance(block, Sense) or name not in settings.of:
            raise reject("block", name, "a sense block with a setting", tip=nearest(name, settings.of))
        found[name] = block
    return found


def _only_where_something_fails(program: Program, block: int) -> bool:
    """Whether everything a block leads to asks for a failure that makes its output possible."""
    readers, queue = [], list(program.consumers[block])
    while queue:
        i = queue.pop()
        if program.kind[i] is Kind.TIMER:
            queue.extend(program.consumers[i])
        else:
            readers.append(program.blocks[i])
    return bool(readers) and all(isinstance(b, Gate) and b.given for b in readers)


def _grouped(chosen: Mapping[str, Sense], settings: Settings) -> dict[str, list[str]]:
    """Blocks by row: the shares of one differential stand together, named by what they have in common."""
    found: dict[str, list[str]] = {}
    for name in chosen:
        shared = isinstance(settings.of[name].element, Biased)
        found.setdefault(name.partition(" sees ")[0] if shared else name, []).append(name)
    return found


def _whole(element: Element) -> Element:
    """A differential as a whole, not the share of one CT."""
    return replace(element, share_of="") if isinstance(element, Biased) else element


def _meant(program: Program, place: Location, dispatch: str | None, chosen: Mapping[str, Sense]) -> dict[str, bool]:
    """Whether each element is meant to see a fault; those it says nothing of are left out."""
    names = list(chosen)
    conditions = [chosen[name].condition for name in names]
    holds, _ = LogicalSensing().bind(program, place, dispatch, conditions, ()).state(frozenset())
    found: dict[str, bool] = {}
    zone = program.zones.of[place.section]
    for name, condition, true in zip(names, conditions, holds, strict=True):
        if isinstance(condition, Current):
            beside = {program.zones.of[s] for d in condition.devices for s in _sides(program, d)}
            for breaker, sides in program.zones.sides.items():
                if beside & set(sides) and _next_to(program, breaker, condition.devices):
                    beside |= set(sides)
            if zone in beside and true:
                found[name] = True
            continue
        found[name] = true
    return found


def _sides(program: Program, device: str) -> tuple[str, ...]:
    d = program.plant.device.get(device)
    return (d.a, d.b) if d is not None else (program.plant.source[device].section,)


def _next_to(program: Program, breaker: str, devices: Sequence[str]) -> bool:
    """Whether a breaker shares a section with one of these devices."""
    own = set(_sides(program, breaker))
    return any(own & set(_sides(program, d)) for d in devices)


def _feeds(q: Quantities, element: Element, total: float) -> bool:
    """Whether a CT of the element carries some of the fault current (an element without CTs always sees)."""
    cts = element.looks_at[0]
    if not cts:
        return True
    return any(size_of(_of(q, ct), Part.PHASE) > _CARRIES * total for ct in cts)


def _of(q: Quantities, ct: str) -> tuple[complex, complex, complex]:
    device = q.plant.device.get(ct)
    return q.solution.current(ct, device.b if device is not None else q.plant.source[ct].section)
