"""Single points of failure grouped as NERC TPL-001-5.1, Table 1, footnote 13, says (published; wording from memory).

a. a single relay which responds to electrical quantities, without an alternative that provides comparable
   normal clearing times; b. a single communications system needed for a communication-aided scheme, unless
   monitored and reported; c. a single station DC supply, unless monitored and reported for both low voltage and
   open circuit; d. a single control circuit, lockout relays and trip coils included, where only the trip coil may
   be left out if it is monitored and reported. Breakers and instrument transformers are not in the footnote.
"""

from __future__ import annotations

import pytest

from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.plant.layouts import Bay, generator, line, single_bus
from schemesim.plant.model import Location, Plant, PlantBuilder
from schemesim.scheme.dress import dress
from schemesim.scheme.model import MODES, Component, ComponentKind, Scheme
from schemesim.scheme.policy import Policy, duplicate_chain, duplicate_relay, single_set
from schemesim.study.footnote import LOW_VOLTAGE, OPEN_CIRCUIT, Group, Monitored, group_of
from schemesim.study.register import Register, register

K = ComponentKind
FOOTNOTE = {
    K.RELAY: Group.RELAY,
    K.CHANNEL: Group.COMMUNICATIONS,
    K.DC: Group.DC,
    K.COIL: Group.CONTROL,
    K.LOCKOUT: Group.CONTROL,
    K.BREAKER: Group.APART,
    K.CT_CORE: Group.APART,
    K.VT_WINDING: Group.APART,
}
NOT_TO_OPERATE = {"unwanted_operation", "false_receipt"}


def one(kind: ComponentKind) -> Scheme:
    return Scheme((Component("X", kind),), ())


@pytest.mark.parametrize("kind", list(K))
def test_each_kind_stands_in_its_group(kind: ComponentKind) -> None:
    for mode in MODES[kind]:
        wanted = Group.APART if mode in NOT_TO_OPERATE else FOOTNOTE[kind]
        assert group_of(one(kind), "X", mode).group is wanted


@pytest.mark.parametrize("kind", list(K))
def test_monitoring_exempts_channel_supply_and_coil_and_never_a_relay(kind: ComponentKind) -> None:
    mode = MODES[kind][0]
    exempt = group_of(one(kind), "X", mode, [Monitored("X")]).exempt
    assert exempt == (kind in (K.CHANNEL, K.DC, K.COIL))
    assert not group_of(one(kind), "X", mode, [Monitored("X", reported=False)]).exempt
    assert not group_of(one(kind), "X", mode, [Monitored("Y")]).exempt


@pytest.mark.parametrize(
    ("watches", "exempt"),
    [((), False), ((LOW_VOLTAGE,), False), ((OPEN_CIRCUIT,), False), ((LOW_VOLTAGE, OPEN_CIRCUIT), True)],
)
def test_a_supply_needs_both_low_voltage_and_open_circuit(watches: tuple[str, ...], exempt: bool) -> None:
    found = group_of(one(K.DC), "X", "lost", [Monitored("X", watches=frozenset(watches))])
    assert (found.group, found.exempt) == (Group.DC, exempt)


def grid() -> Plant:
    b = PlantBuilder()
    line(b, "L1", length=40)
    for unit, station, end in (("G1", "Alder", 0), ("G2", "Birch", 1)):
        generator(b, unit, station=station)
        single_bus(b, station, [Bay(unit, unit), Bay("L1", "L1", at=end)])
    return b.build()


def found_for(policy: Policy) -> Register:
    plant = grid()
    program = compile_scheme(plant, dress(plant, policy))
    at = [Location("L1", 0.95), Location("L1"), Location("Alder.B1")]
    return register(program, LogicalSensing(), at, limit_us=150_000)


def test_an_alternative_with_comparable_times_takes_an_item_out_of_the_footnote() -> None:
    """One set: relay, channel, supply and control circuit. A second relay: no relay. A second chain: nothing at all."""
    groups = [Group.RELAY, Group.COMMUNICATIONS, Group.DC, Group.CONTROL]
    counts = {p.name: [bool(found_for(p).group(g)) for g in groups] for p in (
        single_set(), duplicate_relay(), duplicate_chain(),
    )}  # fmt: skip
    assert counts == {
        "single set": [True, True, True, True],
        "duplicate relay": [False, True, True, True],
        "duplicate chain": [False, False, False, False],
    }
    assert {e.grouped[0].why for e in found_for(duplicate_chain()).group(Group.APART)} >= {"breaker"}
