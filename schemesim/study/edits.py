"""Edits: a policy with one thing changed, everywhere or for some elements, and the additions known by name."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace

from schemesim.engine.program import Program, compile_scheme
from schemesim.errors import nearest, reject
from schemesim.plant.model import Plant
from schemesim.scheme.bays import base_of
from schemesim.scheme.dress import dress
from schemesim.scheme.failure_data import FailureData, Override
from schemesim.scheme.model import Scheme
from schemesim.scheme.policy import BreakerFailurePolicy, LocalBackup, Policy, ProtectionSet

Change = Callable[[Policy], Policy]
"""From a policy to another; it gives the same policy back where it does not apply."""


def unchanged(policy: Policy) -> Policy:
    """The same policy."""
    return policy


@dataclass(frozen=True)
class Edit:
    """Something done to a variant.

    Parameters
    ----------
    name : str
    change : callable
        From a policy to a policy.
    elements : tuple of str
        Only these elements, breakers or bays (``station/element``: one end of a line, or a unit, with the
        breakers there); empty: everywhere, exceptions included.
    overrides : tuple of Override
        Failure data, after all others.
    """

    name: str
    change: Change = unchanged
    elements: tuple[str, ...] = ()
    overrides: tuple[Override, ...] = ()


@dataclass(frozen=True)
class Recipe:
    """What a variant is made of.

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, feeder, generator, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> from schemesim.scheme.policy import single_set
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder")
    >>> feeder(b, "F1", station="Alder", load_mw=10)
    >>> single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1")])
    >>> base = Recipe(b.build(), single_set())
    >>> more = base.edited(ADDITIONS["second relay"])
    >>> sorted(set(more.scheme().component) - set(base.scheme().component))
    ['Alder/Alder.B1/relay 2', 'Alder/F1/relay 2', 'Alder/G1/relay 2']
    """

    plant: Plant
    policy: Policy
    data: FailureData = field(default_factory=FailureData)
    exceptions: Mapping[str, Policy] = field(default_factory=dict)
    out_of_service: frozenset[str] = frozenset()

    def edited(self, edit: Edit) -> Recipe:
        """The recipe with an edit made."""
        data = self.data
        if edit.overrides:
            data = replace(data, overrides=(*data.overrides, *edit.overrides))
        if edit.elements:
            some = {e: edit.change(base_of(self.exceptions, self.policy, e)) for e in edit.elements}
            return replace(self, data=data, exceptions={**self.exceptions, **some})
        special = {e: edit.change(p) for e, p in self.exceptions.items()}
        return replace(self, policy=edit.change(self.policy), exceptions=special, data=data)

    def scheme(self) -> Scheme:
        """The plant dressed so."""
        found = dress(self.plant, self.policy, self.data, exceptions=self.exceptions)
        out = self.out_of_service & set(found.component)
        return replace(found, out_of_service=out) if out else found

    def program(self) -> Program:
        """The scheme compiled."""
        return compile_scheme(self.plant, self.scheme())


def _second_relay(p: Policy) -> Policy:
    if len(p.sets) != 1:
        return p
    coil = "2" if "2" in dict(p.coil_dc) else p.sets[0].coil  # a second coil that is there already is used
    return replace(p, sets=(p.sets[0], replace(p.sets[0], label="2", coil=coil)))


def _of_set_2(p: Policy, item: str) -> Policy:
    """Set 2 gets an item of its own where it shares that of set 1."""
    if len(p.sets) < 2 or getattr(p.sets[1], item) != getattr(p.sets[0], item):
        return p
    two: ProtectionSet = replace(p.sets[1], **{item: "2"})  # type: ignore[arg-type]  # items are labels
    return replace(p, sets=(p.sets[0], two, *p.sets[2:]))


def _second_dc(p: Policy) -> Policy:
    p = _of_set_2(p, "dc")
    if len(p.sets) < 2 or p.sets[1].dc != "2":
        return p
    coils = {c: "2" if c == p.sets[1].coil != p.sets[0].coil else dc for c, dc in p.coil_dc}
    return replace(p, coil_dc=tuple(sorted(coils.items())))


def _second_coil(p: Policy) -> Policy:
    dc = p.sets[1].dc if len(p.sets) > 1 else "1"
    coils = {"2": dc, **dict(p.coil_dc)}
    bf = p.breaker_failure
    changed = _of_set_2(replace(p, coil_dc=tuple(sorted(coils.items()))), "coil")
    if bf is not None:
        return replace(changed, breaker_failure=replace(bf, retrip_coil="2"))
    return changed if changed.sets != p.sets else p


def _spare(p: Policy) -> tuple[str, str]:
    """DC domain and trip coil for back-up: the second where there is one."""
    coil = "2" if "2" in dict(p.coil_dc) else "1"
    return ("2" if any(s.dc == "2" for s in p.sets) else "1"), coil


def _local_backup(p: Policy) -> Policy:
    if p.local_backup is not None:
        return p
    dc, coil = _spare(p)
    return replace(p, local_backup=LocalBackup(dc=dc, coil=coil))


def _breaker_failure(p: Policy) -> Policy:
    if p.breaker_failure is not None:
        return p
    plain = BreakerFailurePolicy(retrip_coil=_spare(p)[1], transfer_trip=False)
    return replace(p, breaker_failure=replace(plain, times=replace(plain.times, retrip=None)))


def _retrip(p: Policy) -> Policy:
    bf = p.breaker_failure
    if bf is None or bf.times.retrip is not None:
        return p
    times = replace(bf.times, retrip=BreakerFailurePolicy().times.retrip)
    return replace(p, breaker_failure=replace(bf, times=times))


def _transfer_trip(p: Policy) -> Policy:
    bf = p.breaker_failure
    return p if bf is None else replace(p, breaker_failure=replace(bf, transfer_trip=True))


ADDITIONS: Mapping[str, Edit] = {
    e.name: e
    for e in (
        Edit("second relay", _second_relay),
        Edit("second CT core", lambda p: _of_set_2(p, "core")),
        Edit("second VT winding", lambda p: _of_set_2(p, "winding")),
        Edit("second DC", _second_dc),
        Edit("second coil", _second_coil),
        Edit("second channel", lambda p: _of_set_2(p, "channel")),
        Edit("second lockout", lambda p: _of_set_2(p, "lockout")),
        Edit("local back-up", _local_backup),
        Edit("breaker failure", _breaker_failure),
        Edit("retrip", _retrip),
        Edit("transfer trip", _transfer_trip),
        Edit("end-fault logic", lambda p: replace(p, end_fault=True)),
        Edit("remote back-up", lambda p: replace(p, remote_backup=True)),
    )
}
"""Single additions by name; one that is there already, or has nothing to stand on yet, changes nothing."""


def addition(name: str) -> Edit:
    """An addition by its name.

    Raises
    ------
    InputError
        If it is not known, with the nearest.
    """
    if name not in ADDITIONS:
        raise reject("addition", name, f"one of {', '.join(ADDITIONS)}", tip=nearest(name, ADDITIONS))
    return ADDITIONS[name]
