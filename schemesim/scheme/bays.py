"""Exceptions for a bay: one end of a line, or a whole unit, with the breakers there.

A bay is named by station and element, ``Alder/L1``. Its policy holds for the relays of the
element at that station and for the breakers they trip there: which DC domain feeds their
coils, and how their breaker failure is done.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import fields, replace

from schemesim.errors import nearest
from schemesim.plant.model import SectionKind
from schemesim.scheme.build import SchemeBuilder
from schemesim.scheme.elements import Element
from schemesim.scheme.policy import Policy

_OF_AN_END = ("name", "sets", "local_backup", "breaker_failure", "lockout", "end_fault", "coil_dc", "times")


def policy_of(exceptions: Mapping[str, Policy], policy: Policy, element: str, station: str = "") -> Policy:
    """The policy of an element, or of its bay at a station.

    Examples
    --------
    >>> one, two = Policy(name="one"), Policy(name="two")
    >>> [policy_of({"Alder/L1": two}, one, "L1", station).name for station in ("Alder", "Birch")]
    ['two', 'one']
    """
    return exceptions.get(f"{station}/{element}", exceptions.get(element, policy))


def base_of(exceptions: Mapping[str, Policy], policy: Policy, name: str) -> Policy:
    """The policy in force for an element, a breaker or a bay: of a bay without one of its own, its element's."""
    return exceptions.get(name, exceptions.get(name.partition("/")[2], policy))


def bays_of(e: Element) -> tuple[str, ...]:
    """The bays of an element: a line has one at each station, a bus none, any other one if it stands in one station."""
    stations = tuple(dict.fromkeys(side.station for side in e.sides))
    if e.kind is SectionKind.BUS or (e.kind is not SectionKind.LINE and len(stations) > 1):
        return ()
    return tuple(f"{station}/{e.name}" for station in stations)


def with_bays(b: SchemeBuilder, elements: Sequence[Element], special: Mapping[str, Policy]) -> list[Element]:
    """The elements with the policies of their bays; one that cannot be had at one end alone is a mistake."""
    found: list[Element] = []
    for e in elements:
        mine = {name: special[name] for name in bays_of(e) if name in special}
        if mine and e.kind is not SectionKind.LINE:
            e = replace(e, policy=next(iter(mine.values())))
        elif mine:
            mine = {name: policy for name, policy in mine.items() if _fits(b, name, policy, e.policy)}
            sides = (replace(s, policy=mine.get(f"{s.station}/{e.name}")) for s in e.sides)
            e = replace(e, sides=tuple(sides))
        found.append(e)
    return found


def _fits(b: SchemeBuilder, name: str, mine: Policy, whole: Policy) -> bool:
    """Whether the policy of one end has alike with the line's what both ends have to have alike."""
    differ = [f.name for f in fields(Policy) if f.name not in _OF_AN_END]
    differ = [f for f in differ if getattr(mine, f) != getattr(whole, f)]
    if replace(mine.times, breaker=whole.times.breaker) != whole.times:
        differ.append("times")
    if [(s.label, s.line, s.channel) for s in mine.sets] != [(s.label, s.line, s.channel) for s in whole.sets]:
        differ.append("label, line or channel of the sets")
    if differ:
        b.errors.add(
            f"exception {name!r}", f"{', '.join(differ)} of policy {mine.name!r}",
            f"as in policy {whole.name!r} of the line: its ends may differ in core, winding, DC, coil, local back-up, "
            "and in what concerns their breakers",
        )  # fmt: skip
    return not differ


def feed_coils(
    b: SchemeBuilder, elements: Sequence[Element], special: Mapping[str, Policy], policy: Policy, *, breakers_say: bool
) -> dict[str, Policy]:
    """Settle which DC domain feeds the coils that an exception speaks of; returns the policy of each breaker and unit.

    An exception for a breaker says it where it differs from the policy of the rest, one for a bay says it for the
    breakers of the bay, and for the units of its element.
    """
    usual = dict(policy.coil_dc)
    own: set[tuple[str, str]] = set()
    for breaker in b.plant.breakers if breakers_say else ():
        for coil, dc in special[breaker].coil_dc if breaker in special else ():
            if usual.get(coil) != dc:
                b.feed(breaker, coil, dc, breaker)
                own.add((breaker, coil))
    of = {name: special.get(name, policy) for name in b.plant.breakers}
    of |= {s.name: special.get(s.section, policy) for s in b.plant.sources}
    by: dict[str, str] = {}
    for e in elements:
        for name in bays_of(e):
            if name not in special:
                continue
            mine = special[name]
            at = [s for s in e.sides if f"{s.station}/{e.name}" == name]
            units = [t for t in e.targets if t in b.plant.source and e.kind is not SectionKind.LINE]
            for target in (*dict.fromkeys(x for s in at for x in s.breakers), *units):
                for coil, dc in mine.coil_dc:
                    if (target, coil) not in own:
                        b.feed(target, coil, dc, name)
                if target in special:
                    continue
                if target in by and of[target] != mine:
                    expected = f"the same as of {by[target]!r}, or an exception for the breaker itself"
                    b.errors.add(f"policy of breaker {target!r}", f"{mine.name!r} by exception {name!r}", expected)
                of[target], by[target] = mine, name
    return of


def check_exceptions(
    b: SchemeBuilder, names: Sequence[str], elements: Sequence[Element], special: Mapping[str, Policy]
) -> None:
    """Every exception has to be for something that is there."""
    known = {*names, *b.plant.breakers}
    bays = [name for e in elements for name in bays_of(e)]
    for name in sorted(set(special) - known - set(bays)):
        dotted = [bay for bay in bays if bay.replace("/", ".") == name]
        tip = nearest(name, dotted or [*names, *bays, *b.plant.breakers])
        expected = "the name of an element, a breaker or a bay (station/element)"
        b.errors.add("exception to the policy", name, expected, tip=tip)
