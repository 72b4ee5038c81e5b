"""Whole clearing sequences: a stuck breaker in each layout, dead zones, loss of a station's DC.

The standard times are those of :mod:`tests.rules.small`: relay 20 ms, lockout 10, breaker 50, breaker-failure timer
150, channel 15, zone 2 350, end-fault logic 40 after the auxiliary contact (5). So a line fault opens at 70, a bus
fault at 80; behind a stuck breaker 230 and 240 here, 245 and 255 at the far end.
"""

from __future__ import annotations

from functools import partial

from schemesim.plant.layouts import CtPlacement
from schemesim.scheme.policy import Policy, duplicate_chain, single_set
from tests.outside.records import DERIVED, MEMORY, PRACTICE, Record
from tests.outside.sequences import NOT_CLEARED, circuits_out, hub, openings, tripped_at_dale
from tests.rules.small import chain

SUBJECT = "whole sequences"

ARRANGEMENTS = "IEEE C37.119: breakers tripped by breaker failure, by bus arrangement"
OUT = "what each bus arrangement loses for a stuck breaker (station design handbooks)"

ONE = single_set()

# Layout, faulted section, stuck breaker; breakers opened at the station; what is out of service then.
STUCK = [
    ("single bus", "L1", "L1.CB", {"L2.CB", "L3.CB", "L4.CB"}, {"B1", "L1", "L2", "L3", "L4"}),
    ("sectionalised bus", "L1", "L1.CB", {"L3.CB", "S1.CB"}, {"B1", "L1", "L3"}),
    ("double bus", "L1", "L1.CB", {"L3.CB", "BC.CB"}, {"B1", "L1", "L3"}),
    ("double bus", "Dale.B1", "BC.CB", {"L1.CB", "L2.CB", "L3.CB", "L4.CB"}, {"B1", "B2", "L1", "L2", "L3", "L4"}),
    ("ring", "L1", "CB1", {"CB4", "CB2"}, {"L1", "L2"}),
    ("breaker and a half", "L1", "D1.CB1", {"D1.CB2", "D2.CB1"}, {"B1", "L1"}),
    ("breaker and a half", "L1", "D1.CB2", {"D1.CB1", "D1.CB3"}, {"L1", "L2"}),
    ("breaker and a half", "Dale.B1", "D1.CB1", {"D2.CB1", "D1.CB2"}, {"B1", "L1"}),
]

LINE_SIDE, BUS_SIDE = CtPlacement.CIRCUIT_SIDE, CtPlacement.BUS_SIDE
NO_BF = single_set(breaker_failure=None)
END_FAULT = single_set(end_fault=True, breaker_failure=None)
DEAD_ZONE = "fault between breaker and CT, one CT only (protection handbooks, bus-bar protection)"
COUPLER = "fault between a bus coupler and its one CT takes both buses (protection handbooks, bus-bar protection)"
STATION_DC = "loss of a station's DC: its bus is cleared from the remote ends only"
DARK = ("Birch/DC 1: lost", "Birch/DC 2: lost")


def dead_zone(ct: CtPlacement, policy: Policy) -> dict[str, float]:
    """The sequence of a fault between Birch.L1.CB and its one CT."""
    between = "Birch.L1.c" if ct is LINE_SIDE else "Birch.L1.b"
    return openings(chain(ct=ct), policy, between)


of = partial(Record, SUBJECT)

RECORDS = (
    *(
        of(ARRANGEMENTS, MEMORY, f"{layout}, fault on {place}, {cb} stuck: opened at the station",
           frozenset(opened), 0, partial(tripped_at_dale, layout, ONE, place, f"Dale.{cb}: does_not_open"), whole=True)
        for layout, place, cb, opened, _ in STUCK
    ),
    *(
        of(OUT, PRACTICE, f"{layout}, fault on {place}, {cb} stuck: out of service", frozenset(out), 0,
           partial(circuits_out, layout, ONE, place, f"Dale.{cb}: does_not_open"), whole=True)
        for layout, place, cb, _, out in STUCK
    ),
    of("a bus fault in a breaker and a half takes no circuit", PRACTICE, "out of service",
       frozenset({"B1"}), 0, lambda: circuits_out("breaker and a half", ONE, "Dale.B1"), whole=True),
    of("ring: times of a stuck breaker, far end by transfer trip", DERIVED,
       "20 + 50; 20 + 150 + 10 + 50; and 15 for the channel",
       {"Dale.CB4": 70.0, "East.L1.CB": 70.0, "Dale.CB2": 230.0, "North.L2.CB": 245.0, "cleared": 245.0}, 0.0005,
       lambda: openings(hub("ring"), ONE, "L1", "Dale.CB1: does_not_open"), whole=True),
    # CT on the line's side: the bus differential sees the fault, opens the bus, and the line goes on feeding it.
    of(DEAD_ZONE, PRACTICE, "CT on the line's side, breaker failure and transfer trip",
       {"Birch.L1.CB": 80.0, "Birch.L2.CB": 80.0, "Birch.F2.CB": 80.0, "Alder.L1.CB": 255.0, "cleared": 255.0}, 0.0005,
       lambda: dead_zone(LINE_SIDE, ONE), whole=True),
    of(DEAD_ZONE, PRACTICE, "CT on the line's side, end-fault logic: 80 + 5 + 40 + 15 + 50",
       {"Birch.L1.CB": 80.0, "Birch.L2.CB": 80.0, "Birch.F2.CB": 80.0, "Alder.L1.CB": 190.0, "cleared": 190.0}, 0.0005,
       lambda: dead_zone(LINE_SIDE, END_FAULT), whole=True),
    of(DEAD_ZONE, PRACTICE, "CT on the line's side, neither: the far end's zone 2",
       {"Birch.L1.CB": 80.0, "Birch.L2.CB": 80.0, "Birch.F2.CB": 80.0, "Alder.L1.CB": 420.0, "cleared": 420.0}, 0.0005,
       lambda: dead_zone(LINE_SIDE, NO_BF), whole=True),
    # CT on the bus's side: the line's relays see it, open the line, and the bus goes on feeding it.
    of(DEAD_ZONE, PRACTICE, "CT on the bus's side, breaker failure trips the bus",
       {"Birch.L1.CB": 70.0, "Alder.L1.CB": 85.0, "Birch.L2.CB": 230.0, "Birch.F2.CB": 230.0, "cleared": 230.0}, 0.0005,
       lambda: dead_zone(BUS_SIDE, ONE), whole=True),
    # One CT at the coupler: the bus whose zone reaches to the CT is tripped, and the other goes on feeding the fault
    # until breaker failure of the coupler trips it too.
    *(
        of(COUPLER, PRACTICE, f"CT on the side of {side}: {first[1]} at once, the other by breaker failure",
           dict.fromkeys(("Dale.BC.CB", *(f"Dale.{x}.CB" for x in first[0])), 80.0)
           | dict.fromkeys((f"Dale.{x}.CB" for x in last), 240.0) | {"cleared": 240.0}, 0.0005,
           partial(lambda ct, place: openings(hub("double bus", ct=ct), ONE, place), ct, place), whole=True)
        for side, ct, place, first, last in (
            ("B1", BUS_SIDE, "Dale.BC.b", (("L2", "L4"), "B2"), ("L1", "L3")),
            ("B2", LINE_SIDE, "Dale.BC.c", (("L1", "L3"), "B1"), ("L2", "L4")),
        )
    ),
    of(STATION_DC, PRACTICE, "bus fault at a station with generation left dark: never cleared",
       {"Birch.L1.CB": 420.0, "cleared": NOT_CLEARED}, 0.0005,
       lambda: openings(chain(), duplicate_chain(), "Alder.B1", "Alder/DC 1: lost", "Alder/DC 2: lost"), whole=True),
    of(STATION_DC, PRACTICE, "stuck breaker, breaker failure dead with the DC: zone 2",
       {"Birch.L2.CB": 80.0, "Birch.F2.CB": 80.0, "Alder.L1.CB": 420.0, "cleared": 420.0}, 0.0005,
       lambda: openings(chain(), duplicate_chain(), "Birch.B1", "Birch.L1.CB: does_not_open", DARK[0]), whole=True),
    of("two DC domains: either alone is lost without loss of speed", PRACTICE,
       "line fault at 50 %, DC 1 of one end lost",
       {"Alder.L1.CB": 70.0, "Birch.L1.CB": 70.0, "cleared": 70.0}, 0.0005,
       lambda: openings(chain(), duplicate_chain(), "L1", DARK[0]), whole=True),
)  # fmt: skip
