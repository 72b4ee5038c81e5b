"""Coordination of elements in series: how much longer the one behind waits, fault by fault."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from schemesim.engine.program import Kind, Program
from schemesim.errors import nearest, reject
from schemesim.plant.model import Location
from schemesim.plant.net_case import FaultType, ShuntFault
from schemesim.scheme.curves import Curve, plot_curves
from schemesim.scheme.model import Sense, Timer
from schemesim.scheme.phasor_elements import Overcurrent
from schemesim.scheme.phasor_quantities import Quantities
from schemesim.scheme.settings import Settings
from schemesim.scheme.settings_data import NetworkOf
from schemesim.show.tables import to_html

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes


@dataclass(frozen=True, slots=True)
class Margin:
    """One pair of elements at one fault.

    Attributes
    ----------
    front, behind : str
        Sense blocks; ``front`` is to operate first.
    fault, state : str
    front_multiple, behind_multiple : float
        Quantity ÷ setting of each.
    front_s, behind_s : float
        Their times; infinite where one does not pick up.
    """

    front: str
    behind: str
    fault: str
    state: str
    front_multiple: float
    behind_multiple: float
    front_s: float
    behind_s: float

    @property
    def margin_s(self) -> float:
        """How much longer the one behind takes; infinite where it does not see the fault, NaN where neither does."""
        if math.isinf(self.behind_s):
            return math.inf if math.isfinite(self.front_s) else math.nan
        return self.behind_s - self.front_s


@dataclass(frozen=True, repr=False)
class Coordination:
    """Margins of pairs in series, the smallest first, and the curves behind them."""

    margins: tuple[Margin, ...]
    wanted_s: float
    curves: tuple[tuple[str, Curve, float], ...]

    def __repr__(self) -> str:
        return f"Coordination({len(self.margins)} margins, {len(self.short)} below {self.wanted_s:g} s)"

    @property
    def short(self) -> tuple[Margin, ...]:
        """Margins below what is wanted; among them every fault that only the one behind sees."""
        return tuple(m for m in self.margins if m.margin_s < self.wanted_s)

    def worst(self, front: str, behind: str) -> Margin:
        """The smallest margin of a pair.

        Raises
        ------
        InputError
            If the pair is not among those studied.
        """
        for m in self.margins:
            if (m.front, m.behind) == (front, behind):
                return m
        raise reject("pair", (front, behind), "a pair that was studied, at a fault one of them sees")

    def table(self) -> pd.DataFrame:
        """One row for each pair and fault: multiples, times and margin in seconds."""
        import pandas as pd

        names = ["front", "behind", "fault", "state", "front_multiple", "behind_multiple", "front_s", "behind_s"]
        frame = pd.DataFrame([[getattr(m, n) for n in names] for m in self.margins], columns=names)
        frame["margin_s"] = [m.margin_s for m in self.margins]
        return frame

    def _repr_html_(self) -> str:
        return to_html(self.table())

    def plot(self, ax: Axes | None = None) -> Axes:
        """The inverse curves over current, and each pair's smallest margin as a line between the two times."""
        from dataclasses import replace

        drawn = [(replace(curve, name=name), pick_up) for name, curve, pick_up in self.curves]
        ax = plot_curves(drawn, ax)
        pick_ups = {name: pick_up for name, _, pick_up in self.curves}
        done: set[tuple[str, str]] = set()
        for m in self.margins:
            ends = (m.front_s, m.behind_s)
            if (m.front, m.behind) not in done and all(map(math.isfinite, ends)) and m.behind in pick_ups:
                done.add((m.front, m.behind))
                current = m.behind_multiple * pick_ups[m.behind]
                ax.plot([current, current], ends, marker="_", color="0.3")
                ax.annotate(f"{m.margin_s:.2f} s", (current, math.sqrt(max(ends[0], 1e-3) * ends[1])))
        return ax


def coordination(
    program: Program,
    settings: Settings,
    pairs: Iterable[tuple[str, str]],
    locations: Sequence[Location],
    *,
    faults: Iterable[FaultType | str] = (FaultType.LLL,),
    resistance_ohm: float = 0.0,
    dispatches: Sequence[str | None] = (None,),
    wanted_s: float = 0.3,
    network: NetworkOf | None = None,
) -> Coordination:
    """Margins between elements in series for faults that the one in front is to clear.

    Parameters
    ----------
    program : Program
    settings : Settings
    pairs : iterable of (front, behind)
        Sense blocks.
    locations : sequence of Location
    faults : iterable of FaultType
    resistance_ohm : float
    dispatches : sequence of (str or None)
    wanted_s : float
        Margin wanted: breaker time, overtravel, errors and safety; 0.3 s is common practice.
    network : NetworkOf or None

    Returns
    -------
    Coordination
        The time of a block is that of its curve, or its operate time, and that of a timer behind
        it where it leads to just one. Faults neither sees are left out.

    Raises
    ------
    InputError
        If a block has no setting, or a location or dispatch is not there.

    Examples
    --------
    ``coordination(program, settings, [("F1 51", "G1 51")], [Location("F1")]).plot()``
    """
    if network is None:
        from schemesim.plant.net_faults import network_of  # heavy: scipy

        network = network_of
    wanted = [tuple(pair) for pair in pairs]
    names = sorted({name for pair in wanted for name in pair})
    senses: dict[str, Sense] = {}
    for name in names:
        block = program.scheme.block.get(name)
        if not isinstance(block, Sense) or name not in settings.of:
            raise reject("block", name, "a sense block with a setting", tip=nearest(name, settings.of))
        senses[name] = block
    found: list[Margin] = []
    for dispatch in dispatches:
        grid = network(program.plant, dispatch)
        for place in locations:
            for kind in faults:
                solved = grid.at(ShuntFault(place, FaultType(kind), resistance_ohm)).solve(frozenset())
                q = Quantities(program.plant, solved, grid.prefault())
                seen = {n: settings.of[n].element.multiple(q.without(settings.of[n].missing)) for n in names}
                times = {name: time_s(program, senses[name], seen[name]) for name in names}
                for front, behind in wanted:
                    if math.isfinite(min(times[front], times[behind])):
                        state = dispatch or "all in service"
                        found.append(
                            Margin(front, behind, f"{place} {FaultType(kind)}", state, seen[front], seen[behind],
                                   times[front], times[behind])
                        )  # fmt: skip
    found.sort(key=lambda m: (m.margin_s, m.front, m.behind, m.fault, m.state))
    curves = []
    for name, block in senses.items():
        element = settings.of[name].element
        if block.curve is not None and isinstance(element, Overcurrent):
            curves.append((name, block.curve, element.pick_up_a))
    return Coordination(tuple(found), wanted_s, tuple(curves))


def time_s(program: Program, block: Sense, multiple: float) -> float:
    """Time in seconds from a current that does not change to the output of a block and its timer; infinite below 1."""
    if multiple < 1.0:
        return math.inf
    own = block.operate.nominal_us / 1e6 if block.curve is None else block.curve.operate_s(multiple)
    i = program.index[block.name]
    timers = [program.blocks[c] for c in program.consumers[i] if program.kind[c] is Kind.TIMER]
    if len(timers) == 1 and isinstance(timers[0], Timer):
        own += timers[0].pick_up.nominal_us / 1e6
    return own
