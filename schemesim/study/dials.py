"""Dependability against security, one dial at a time: reach, voting, blocking or permissive.

Each position of the dial is a policy. For every one the plant is dressed anew, and for each fault location
one tree is explored that observes the trip outputs of main protection. From it come, for every
relay, every set at its station, every element's protection and the whole station:

- *dependability*: P(operates | fault inside), over the faults on what the group protects;
- *security*: P(no unwanted operation | fault outside), over the faults that some of it does not protect;
- unwanted operations a year with no fault at all.

An element's protection operates where as many of its sets do as its policy's voting asks for; a relay and a
set count alone. What a set does is judged by its outputs: with voting, sets that operate at different times count
as agreed. Timed zones are left out unless asked for: they clear what a scheme has missed, and faults beyond.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

from schemesim.engine.case import bind
from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.outcome import Outcome, Status
from schemesim.engine.program import Program, compile_scheme
from schemesim.engine.sensing import LogicalSensing, NoFault, Sensing
from schemesim.errors import ErrorList, nearest, reject
from schemesim.plant.model import Location, Plant
from schemesim.scheme.bays import policy_of
from schemesim.scheme.dress import dress
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import Role
from schemesim.scheme.policy import LineScheme, Policy, ProtectionSet
from schemesim.show.tables import to_html
from schemesim.study.brackets import Bracket, exactly, total
from schemesim.study.tree import Happens, explore

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

REACHES = ("zone_1", "zone_2", "zone_3", "over_reach", "reverse")
DIALS = ("votes", "line", *REACHES)
"""Dials by name: voting of the sets, scheme of the lines, reaches and the factor of an over-reach."""

VOTES = ("1oo1", "1oo2", "2oo2", "2oo3")
"""The usual positions of the dial ``votes``."""

KINDS = ("relay", "set", "element", "station")
"""What figures are given for."""


@dataclass(frozen=True)
class Figures:
    """What one group does at one position of the dial.

    Attributes
    ----------
    position : str
    kind, name : str
        Kind of the group, one of ``KINDS``, and its name.
    dependability, security : Bracket or None
        None where there is no fault inside, or outside.
    no_fault_per_yr : Bracket
    """

    position: str
    kind: str
    name: str
    dependability: Bracket | None
    security: Bracket | None
    no_fault_per_yr: Bracket


@dataclass(frozen=True)
class DialStudy:
    """The figures of every group at every position.

    Attributes
    ----------
    dial : str
    positions : tuple of str
    figures : tuple of Figures
        Position by position.
    """

    dial: str
    positions: tuple[str, ...]
    figures: tuple[Figures, ...]

    def curve(self, name: str) -> tuple[Figures, ...]:
        """The figures of one group from position to position.

        Raises
        ------
        InputError
            If there is no such group.
        """
        found = tuple(f for f in self.figures if f.name == name)
        if not found:
            known = sorted({f.name for f in self.figures})
            raise reject("group", name, "a relay, set, element or station studied", tip=nearest(name, known))
        return found

    def table(self, kind: str | None = None) -> pd.DataFrame:
        """One row for each group and position, the positions of a group together."""
        import pandas as pd  # heavy: only when a table is asked for

        return pd.DataFrame(self.records(kind))

    def records(self, kind: str | None = None) -> list[dict[str, object]]:
        """The rows of the table, of one kind of group or of all."""
        names = dict.fromkeys((f.kind, f.name) for f in self.figures if kind in (None, f.kind))
        rows = []
        for group in sorted(names, key=lambda g: (-KINDS.index(g[0]), g[1])):
            for f in self.figures:
                if (f.kind, f.name) == group:
                    row: dict[str, object] = {"kind": f.kind, "group": f.name, self.dial: f.position}
                    for what in ("dependability", "security", "no_fault_per_yr"):
                        b: Bracket | None = getattr(f, what)
                        row[f"{what}_low"] = None if b is None else float(b.low)
                        row[f"{what}_high"] = None if b is None else float(b.high)
                    rows.append(row)
        return rows

    def plot(self, kind: str = "station", ax: Axes | None = None) -> Axes:
        """Dependability against security of every group of a kind, from position to position."""
        from schemesim.show.trade import plot_trade  # heavy: only when a picture is asked for

        return plot_trade(self.dial, [f for f in self.figures if f.kind == kind], ax)

    def __repr__(self) -> str:
        lines = [f"DialStudy({self.dial}: {', '.join(self.positions)})"]
        lines.extend(
            f"  {f.name:24} {f.position:12} dependability {f.dependability}, security {f.security}, "
            f"{f.no_fault_per_yr} a year with no fault"
            for f in self.figures
            if f.kind == "station"
        )
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        return to_html(self.table())


def dial_policies(policy: Policy, dial: str, values: Iterable[object]) -> tuple[tuple[str, Policy], ...]:
    """A policy with one dial turned to several positions.

    Parameters
    ----------
    policy : Policy
    dial : str
        ``"votes"``: texts such as ``"2oo3"``; where the policy has fewer sets, its last one is doubled as a further
        relay on the same core, winding, supply, coil and channel, and where it has more the first ones are taken.
        ``"line"``: schemes of the lines, for all sets. Otherwise a reach, or the factor of an over-reach.
    values : iterable
        Positions.

    Raises
    ------
    InputError
        For another dial, and for positions that it does not have.

    Examples
    --------
    >>> from schemesim.scheme.policy import single_set
    >>> [(label, len(p.sets), p.votes) for label, p in dial_policies(single_set(), "votes", ["1oo1", "2oo3"])]
    [('1oo1', 1, 1), ('2oo3', 3, 2)]
    """
    if dial not in DIALS:
        raise reject("dial", dial, f"one of {list(DIALS)}", tip=nearest(dial, DIALS))
    turn: Callable[[Policy, object], Policy] = {"votes": _voting, "line": _line}.get(dial, _reach(dial))
    found = tuple((f"{v:g}" if isinstance(v, float) else str(v), turn(policy, v)) for v in values)
    if not found:
        raise reject(f"positions of {dial}", "none", "a position at least")
    return found


def _voting(policy: Policy, value: object) -> Policy:
    k, given, n = str(value).replace("-out-of-", "oo").partition("oo")
    if not given or not k.isdigit() or not n.isdigit() or not 1 <= int(k) <= int(n) <= 9:
        raise reject("votes", value, "k out of n up to 9, such as 2oo3")
    if not policy.sets:
        raise reject(f"sets of policy {policy.name!r}", "none", "a set at least, to vote")
    sets: list[ProtectionSet] = list(policy.sets[: int(n)])
    labels = (str(i) for i in range(1, 100))
    while len(sets) < int(n):
        label = next(x for x in labels if x not in {s.label for s in sets})
        sets.append(replace(sets[-1], label=label))
    return replace(policy, name=f"{policy.name}, {value}", sets=tuple(sets), votes=int(k))


def _line(policy: Policy, value: object) -> Policy:
    if value not in set(LineScheme):
        known = [str(s) for s in LineScheme]
        raise reject("line", value, f"one of {known}", tip=nearest(str(value), known))
    sets = tuple(replace(s, line=LineScheme(str(value))) for s in policy.sets)
    return replace(policy, name=f"{policy.name}, {value}", sets=sets)


def _reach(dial: str) -> Callable[[Policy, object], Policy]:
    def turn(policy: Policy, value: object) -> Policy:
        if isinstance(value, bool) or not isinstance(value, (int, float)):
            raise reject(dial, value, "a number")
        reaches = replace(policy.reaches, **{dial: float(value)})  # type: ignore[arg-type]  # checked by DIALS
        return replace(policy, name=f"{policy.name}, {dial} {value:g}", reaches=reaches)

    return turn


Chains = Mapping[str, frozenset[str]]
"""Trip outputs by the label of the set they belong to."""


@dataclass(frozen=True)
class _Part:
    """One element's protection in a group: its outputs by set, how many sets must agree, what it protects."""

    outputs: Chains
    votes: int
    protects: frozenset[str]

    def operates(self, operated: frozenset[str]) -> bool:
        return sum(not names.isdisjoint(operated) for names in self.outputs.values()) >= self.votes


_NOTHING = Outcome(Status.UNDETERMINED, None, ())


@dataclass
class _Sums:
    inside: list[tuple[Bracket, Bracket]] = field(default_factory=list)
    outside: list[tuple[Bracket, Bracket]] = field(default_factory=list)
    rates: list[Bracket] = field(default_factory=list)


def study_dial(
    plant: Plant,
    points: Sequence[tuple[str, Policy]],
    *,
    dial: str = "position",
    stations: Iterable[str] | None = None,
    elements: Iterable[str] | None = None,
    data: FailureData | None = None,
    exceptions: Mapping[str, Policy] | None = None,
    out_of_service: frozenset[str] = frozenset(),
    sensing: Sensing | None = None,
    locations: Iterable[Location] | None = None,
    frequencies: Mapping[Location, float] | None = None,
    timed: bool = False,
    dispatch: str | None = None,
    epsilon: float = 1e-4,
    max_runs: int = 20_000,
    horizon_us: int = DEFAULT_HORIZON_US,
) -> DialStudy:
    """Dependability and security of relays, sets, elements and stations at each position of a dial.

    Parameters
    ----------
    plant : Plant
    points : sequence of (str, Policy)
        Positions and their policies; see :func:`dial_policies`.
    dial : str
        Name of the dial, for tables.
    stations, elements : iterable of str or None
        Only these; by default all. A station then has the elements chosen.
    data, exceptions
        As for :func:`~schemesim.scheme.dress.dress`; an exception keeps its own policy at every position.
    out_of_service : frozenset of str
        Components out for work; those that a position does not have are left aside.
    sensing : Sensing or None
    locations : iterable of Location or None
        Faults; by default every location of the plant.
    frequencies : mapping of Location to float, or None
        Faults per year; by default every location weighs the same.
    timed : bool
        Count timed zones of main protection too.
    dispatch : str or None
    epsilon : float
        Mass of each tree left unexplored.
    max_runs, horizon_us : int

    Raises
    ------
    InputError
        For positions used twice, and for stations, elements or locations that are not there.
    """
    labels = [label for label, _ in points]
    chosen = list(dict.fromkeys(plant.locations() if locations is None else locations))
    wanted = (None if stations is None else set(stations), None if elements is None else set(elements))
    _check(plant, labels, chosen, frequencies, wanted)
    senses = sensing or LogicalSensing()
    figures: list[Figures] = []
    for label, policy in points:
        scheme = dress(plant, policy, data, exceptions=exceptions)
        program = compile_scheme(plant, replace(scheme, out_of_service=out_of_service & set(scheme.component)))
        groups = _groups(program, policy, dict(exceptions or {}), wanted, timed)
        if not groups:
            raise reject("main protection", sorted(set().union(*(w or () for w in wanted))), "a relay that trips there")
        sums = {key: _Sums() for key in groups}
        observe = frozenset(n for parts in groups.values() for p in parts for x in p.outputs.values() for n in x)

        def tree_of(event: Location | NoFault) -> Callable[[Happens], Bracket] | None:
            """How probable something is after an event; None where no output can operate."""
            case = bind(program, event, senses, dispatch=dispatch, observe=observe)  # noqa: B023 - used in this turn
            if isinstance(event, Location) and not case.topology(0).fed:
                return None
            if not case.observed:
                return lambda happens: exactly(int(happens(_NOTHING)))
            return explore(case, epsilon=epsilon, max_runs=max_runs, horizon_us=horizon_us).bracket

        for at in chosen:
            weight = 1 if frequencies is None else frequencies.get(at, 0.0)
            found = tree_of(at) if weight > 0 else None
            if found is not None:
                for key, parts in groups.items():
                    _judge(sums[key], parts, at.section, exactly(weight), found)
        for component in program.scheme.components:
            if component.no_fault_per_yr > 0 and component.name not in out_of_service:
                found = tree_of(NoFault(component.name))
                if found is not None:
                    for key, parts in groups.items():
                        sums[key].rates.append(_rate(component.no_fault_per_yr, found(_any(parts))))
        figures += [
            Figures(label, kind, name, _mean(s.inside), _mean(s.outside), total(s.rates))
            for (kind, name), s in sums.items()
        ]
    return DialStudy(dial, tuple(labels), tuple(figures))


def _check(
    plant: Plant,
    labels: list[str],
    locations: list[Location],
    frequencies: Mapping[Location, float] | None,
    wanted: tuple[set[str] | None, set[str] | None],
) -> None:
    errors = ErrorList()
    if not labels or len(set(labels)) < len(labels):
        errors.add("positions", labels, "a position at least, and none twice")
    stations = {s.station for s in plant.sections if s.station}
    for what, names, known in (
        ("station", wanted[0] or (), stations),
        ("element", wanted[1] or (), set(plant.section)),
        ("section", [at.section for at in locations], set(plant.section)),
    ):
        for name in sorted(set(names) - known):
            errors.add(what, name, f"the name of a {what}", tip=nearest(name, known))
    for at, rate in (frequencies or {}).items():
        if not 0 <= rate < float("inf"):
            errors.add(f"faults per year at {at}", rate, "a finite number of zero or more")
    errors.raise_if_any()


def _groups(
    program: Program,
    policy: Policy,
    exceptions: Mapping[str, Policy],
    wanted: tuple[set[str] | None, set[str] | None],
    timed: bool,
) -> dict[tuple[str, str], list[_Part]]:
    """Relays, sets, elements and stations by kind and name, each as the elements' protections it is made of."""
    roles = (Role.MAIN, Role.MAIN_TIMED) if timed else (Role.MAIN,)
    by_element: dict[tuple[str, str], dict[str, set[str]]] = {}
    relay: dict[tuple[str, str, str], str] = {}
    protects: dict[tuple[str, str], frozenset[str]] = {}
    for name, c in sorted(program.scheme.contacts.items()):
        sets = {s.label for s in policy_of(exceptions, policy, c.element, c.station).sets}
        here = (wanted[0] is None or c.station in wanted[0]) and (wanted[1] is None or c.element in wanted[1])
        if here and c.role in roles and c.relay and c.chain in sets:
            key = c.station, c.element
            by_element.setdefault(key, {}).setdefault(c.chain, set()).add(name)
            relay[(*key, c.chain)] = c.relay
            protects[key] = protects.get(key, frozenset()) | c.protects
    groups: dict[tuple[str, str], list[_Part]] = {}
    for (station, element), chains in sorted(by_element.items()):
        area = protects[(station, element)]
        for chain, outputs in sorted(chains.items()):
            alone = _Part({chain: frozenset(outputs)}, 1, area)
            groups.setdefault(("relay", relay[(station, element, chain)]), []).append(alone)
            groups.setdefault(("set", f"{station} set {chain}"), []).append(alone)
        votes = policy_of(exceptions, policy, element, station).votes
        whole = _Part({chain: frozenset(outputs) for chain, outputs in chains.items()}, votes, area)
        groups.setdefault(("element", f"{station}/{element}"), []).append(whole)
        groups.setdefault(("station", station), []).append(whole)
    return groups


def _any(parts: Iterable[_Part]) -> Happens:
    items = tuple(parts)

    def happens(outcome: Outcome) -> bool:
        operated = frozenset(name for name, _ in outcome.operated)
        return any(p.operates(operated) for p in items)

    return happens


def _judge(
    sums: _Sums, parts: list[_Part], section: str, weight: Bracket, found: Callable[[Happens], Bracket]
) -> None:
    """Add one fault to the sums of a group."""
    right = [p for p in parts if section in p.protects]
    wrong = [p for p in parts if section not in p.protects]
    if right:
        sums.inside.append((weight, found(_any(right))))
    if wrong:
        unwanted = _any(wrong)
        sums.outside.append((weight, found(lambda o: not unwanted(o))))


def _rate(per_yr: float, p: Bracket) -> Bracket:
    return exactly(per_yr) * p if p.high > 0 else exactly(0)


def _mean(items: list[tuple[Bracket, Bracket]]) -> Bracket | None:
    if not items:
        return None
    mean = total(w * b for w, b in items) / total(w for w, _ in items)
    return Bracket(max(mean.low, 0), min(mean.high, 1))
