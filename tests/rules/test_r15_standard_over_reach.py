"""R15: over-reach of the standard functions is asked only where the fault lies in what they would also see.

The chain (see :mod:`tests.rules.small`), stepped distance at Alder: zone 1 sees 80 km of L1 and 104 km if it
over-reaches (× 1.3), zone 2 120 km and 156 km; L2 begins at 100 km.
"""

from __future__ import annotations

import pytest

from schemesim.engine.program import compile_scheme
from schemesim.scheme.dress import dress
from schemesim.scheme.policy import LineScheme, ProtectionSet, Reaches, single_set
from tests.rules.small import NO_RATES, asked, chain, opened, play_program

STEPPED = single_set(sets=(ProtectionSet(line=LineScheme.DISTANCE),), remote_backup=False)
OVER = "Alder/L1/relay 1: unwanted_operation"
BUS_OVER = "Birch/Birch.B1/relay 1: unwanted_operation"


@pytest.mark.parametrize(
    ("place", "exposed", "t_alder_us"),
    [
        ("L1@0.5", False, 70_000),  # 50 km: zone 1 sees it anyway
        ("L1@0.9", True, 70_000),  # 90 km: only an over-reaching zone 1 trips at once
        ("L2@0.04", True, 70_000),  # 104 km: the last that it would see, on the next line
        ("L2@0.05", False, None),  # 105 km: in zone 2, which Birch's zone 1 on L2 forestalls
        ("L2@0.3", False, None),  # 130 km: an over-reaching zone 2 would see it, but its time never runs out
        ("L2@0.6", False, None),  # 160 km: seen by nothing
    ],
)
def test_r15_distance(place: str, exposed: bool, t_alder_us: int | None) -> None:
    program = compile_scheme(chain(), dress(chain(), STEPPED, NO_RATES))
    sound = play_program(program, place)
    assert (OVER in asked(program, sound)) == exposed
    failing = play_program(program, place, OVER)
    assert opened(failing).get("Alder.L1.CB") == t_alder_us


def test_r15_an_over_reaching_zone_2_is_asked_when_its_time_has_run_out() -> None:
    # L2 at 30 km, 130 km from Alder, Birch's relay of L2 dead: Cedar (70 km) opens at 70, G1 feeds on through
    # L1. An over-reaching zone 2 clears it at 20 + 350 + 50; without it nothing does here.
    program = compile_scheme(chain(), dress(chain(), STEPPED, NO_RATES))
    dead = "Birch/L2/relay 1: failure_to_operate"
    sound = play_program(program, "L2@0.3", dead)
    assert OVER in asked(program, sound)
    assert opened(sound) == {"Cedar.L2.CB": 70_000}
    assert opened(play_program(program, "L2@0.3", dead, OVER)) == {"Cedar.L2.CB": 70_000, "Alder.L1.CB": 420_000}


def test_r15_no_factor_no_question() -> None:
    exact = single_set(sets=(ProtectionSet(line=LineScheme.DISTANCE),), reaches=Reaches(over_reach=1.0))
    program = compile_scheme(chain(), dress(chain(), exact, NO_RATES))
    for place in ("L1@0.9", "L2@0.04"):
        assert OVER not in asked(program, play_program(program, place))


@pytest.mark.parametrize(("place", "exposed"), [("L1@0.9", True), ("L1", True), ("F2", True), ("G1", False)])
def test_r15_a_bus_differential_is_exposed_to_faults_next_to_it(place: str, exposed: bool) -> None:
    # Over-reach of Birch's 87B: 20, lockout 30, its breakers open at 80.
    program = compile_scheme(chain(), dress(chain(), STEPPED, NO_RATES))
    assert (BUS_OVER in asked(program, play_program(program, place))) == exposed
    if exposed:
        assert opened(play_program(program, place, BUS_OVER))["Birch.L2.CB"] == 80_000
