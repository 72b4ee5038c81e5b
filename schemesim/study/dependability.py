"""Dependability and security of a relay, a set or a station's protection (IEC 60050-448).

IEC 60050-448 calls *dependability* the probability for a protection of not having a
failure to operate, *security* that of not having an unwanted operation, under given
conditions. Here a protection is a group of trip outputs, and:

- *dependability* is the probability that at least one output of the group that protects
  the faulted section operates, over the faults inside (those on a section that some
  output of the group protects), weighted by fault frequency. The breaker is no part of it;
- *security* is the probability that no main output of the group operates that does not
  protect the faulted section, over the faults outside (on sections not all of its main
  outputs protect). Timed zones and back-up are meant to operate for faults beyond what
  they protect when others fail, so their operations are judged by selectivity;
- unwanted operations with no fault at all are counted per year: each component of
  the scheme that trips on its own, by the probability that an output of the group follows.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

from schemesim.engine.case import bind
from schemesim.engine.event import DEFAULT_HORIZON_US
from schemesim.engine.program import Program
from schemesim.engine.sensing import NoFault, Sensing
from schemesim.errors import ErrorList, nearest, reject
from schemesim.plant.model import Location
from schemesim.scheme.model import Role, Scheme
from schemesim.show.tables import to_html
from schemesim.study.brackets import Bracket, exactly, total
from schemesim.study.tree import Happens, explore

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True)
class Judged:
    """One fault location and what a group of outputs does there.

    ``operates`` is None for a fault outside, ``no_unwanted`` for one that every main output protects.
    """

    location: Location
    weight: float
    operates: Bracket | None
    no_unwanted: Bracket | None


@dataclass(frozen=True)
class Dependability:
    """Dependability and security of a group of trip outputs.

    Attributes
    ----------
    outputs : tuple of str
    judged : tuple of Judged
        Fault by fault; faults no source feeds are left out.
    no_fault_per_yr : Bracket
        Unwanted operations with no fault, per year.
    """

    outputs: tuple[str, ...]
    judged: tuple[Judged, ...]
    no_fault_per_yr: Bracket

    @property
    def dependability(self) -> Bracket | None:
        """Over the faults inside; None where there is none."""
        return _weighted([(j.weight, j.operates) for j in self.judged])

    @property
    def security(self) -> Bracket | None:
        """Over the faults outside; None where there is none."""
        return _weighted([(j.weight, j.no_unwanted) for j in self.judged])

    def table(self) -> pd.DataFrame:
        """One row for each fault location."""
        import pandas as pd  # heavy: only when a table is asked for

        def ends(b: Bracket | None) -> tuple[float | None, float | None]:
            return (None, None) if b is None else (float(b.low), float(b.high))

        return pd.DataFrame(
            [
                {
                    "location": str(j.location),
                    "weight": j.weight,
                    "p_operates_low": ends(j.operates)[0],
                    "p_operates_high": ends(j.operates)[1],
                    "p_no_unwanted_low": ends(j.no_unwanted)[0],
                    "p_no_unwanted_high": ends(j.no_unwanted)[1],
                }
                for j in self.judged
            ]
        )

    def _repr_html_(self) -> str:
        return to_html(self.table())

    def __repr__(self) -> str:
        return (
            f"Dependability({len(self.outputs)} outputs: dependability {self.dependability}, "
            f"security {self.security}, {self.no_fault_per_yr} unwanted a year with no fault)"
        )


def outputs_of(
    scheme: Scheme,
    *,
    relay: str | None = None,
    chain: str | None = None,
    element: str | None = None,
    station: str | None = None,
    roles: Iterable[Role] | None = None,
) -> tuple[str, ...]:
    """Trip outputs of a relay, a set (chain), a protected element, a station, or what these have in common.

    Parameters
    ----------
    scheme : Scheme
    relay, chain, element, station : str or None
        What they have to belong to; not looked at where None.
    roles : iterable of Role or None
        Only these roles.

    Raises
    ------
    InputError
        If there is no such output.
    """
    wanted = {"relay": relay, "chain": chain, "element": element, "station": station}
    asked = {name: value for name, value in wanted.items() if value is not None}
    allowed = set(Role if roles is None else roles)
    found = tuple(
        name
        for name, contact in sorted(scheme.contacts.items())
        if contact.role in allowed and all(getattr(contact, k) == v for k, v in asked.items())
    )
    if not found:
        known = {str(getattr(c, k)) for c in scheme.contacts.values() for k in asked}
        tip = next((t for t in (nearest(v, known) for v in asked.values()) if t), "")
        raise reject("trip outputs", asked, "a relay, set, element or station with a trip output", tip=tip)
    return found


def study_dependability(
    program: Program,
    sensing: Sensing,
    outputs: Iterable[str],
    locations: Iterable[Location] | None = None,
    *,
    frequencies: Mapping[Location, float] | None = None,
    dispatch: str | None = None,
    epsilon: float = 1e-6,
    max_runs: int = 20_000,
    horizon_us: int = DEFAULT_HORIZON_US,
) -> Dependability:
    """Dependability and security of a group of trip outputs.

    Parameters
    ----------
    program : Program
    sensing : Sensing
    outputs : iterable of str
        Gates with a contact; see :func:`outputs_of`.
    locations : iterable of Location or None
        Faults; by default every location of the plant.
    frequencies : mapping of Location to float, or None
        Faults per year; by default every location weighs the same.
    dispatch : str or None
    epsilon : float
        Mass of each tree left unexplored.
    max_runs, horizon_us : int

    Raises
    ------
    InputError
        If an output is no trip output of the scheme.
    """
    contacts = program.scheme.contacts
    chosen = tuple(sorted(set(outputs)))
    errors = ErrorList()
    for name in chosen:
        if name not in contacts:
            errors.add("trip output", name, "the name of a trip output", tip=nearest(name, contacts))
    errors.raise_if_any()
    mains = [name for name in chosen if contacts[name].role is Role.MAIN]
    judged = []
    for at in program.plant.locations() if locations is None else locations:
        wanted = frozenset(n for n in chosen if at.section in contacts[n].protects)
        unwanted = frozenset(n for n in mains if at.section not in contacts[n].protects)
        weight = 1 if frequencies is None else frequencies.get(at, 0.0)
        case = bind(program, at, sensing, dispatch=dispatch, observe=wanted | unwanted)
        if not case.topology(0).fed:
            continue
        if case.observed:
            tree = explore(case, epsilon=epsilon, max_runs=max_runs, horizon_us=horizon_us)
            right, wrong = tree.bracket(_operates(wanted)), tree.bracket(_silent(unwanted))
        else:  # none of them can operate for this fault
            right, wrong = exactly(0), exactly(1)
        judged.append(Judged(at, weight, right if wanted else None, wrong if unwanted else None))
    rates = []
    for component in program.scheme.components:
        if component.no_fault_per_yr > 0 and component.name not in program.scheme.out_of_service:
            case = bind(program, NoFault(component.name), sensing, dispatch=dispatch, observe=frozenset(chosen))
            tree = explore(case, epsilon=epsilon, max_runs=max_runs, horizon_us=horizon_us)
            rates.append(exactly(component.no_fault_per_yr) * tree.bracket(_operates(frozenset(chosen))))
    return Dependability(chosen, tuple(judged), total(rates))


def _operates(names: frozenset[str]) -> Happens:
    return lambda outcome: any(name in names for name, _ in outcome.operated)


def _silent(names: frozenset[str]) -> Happens:
    return lambda outcome: not any(name in names for name, _ in outcome.operated)


def _weighted(items: list[tuple[float, Bracket | None]]) -> Bracket | None:
    known = [(w, b) for w, b in items if b is not None and w > 0]
    if not known:
        return None
    weights = total(exactly(w) for w, _ in known)
    mean = total(exactly(w) * b for w, b in known) / weights
    return Bracket(max(mean.low, 0), min(mean.high, 1))
