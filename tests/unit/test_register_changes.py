"""Before and after of the register, place by place, against what each register says."""

from __future__ import annotations

from dataclasses import replace

import pytest

from schemesim.engine.sensing import LogicalSensing
from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.study.comparison import compare
from schemesim.study.locations import study_locations
from schemesim.study.register import Register, register
from schemesim.study.register_changes import compare_registers
from schemesim.study.spoiled import Effect
from tests.unit.small_schemes import feeder_scheme, program_of

SENSING = LogicalSensing()
F1, F2 = Location("F1"), Location("F2")
M1 = "M1: failure_to_operate"


def of_feeders(*out: str, limit_us: int = 200_000, where: tuple[Location, ...] = (F1, F2)) -> Register:
    program = program_of(replace(feeder_scheme(), out_of_service=frozenset(out)))
    return register(program, SENSING, list(where), limit_us=limit_us)


def pairs_of(found: Register) -> dict[tuple[str, Location], Effect]:
    return {(e.name, s.location): s.effect for e in found.singles for s in e.spoiled}


def test_a_second_main_takes_the_first_off_the_register_where_it_stood() -> None:
    before, after = of_feeders("M2"), of_feeders()
    found = compare_registers(before, after)
    old, new = pairs_of(before), pairs_of(after)
    assert {(r.failures[0], r.location) for r in found.gone} == old.keys() - new.keys()
    assert {(r.failures[0], r.location) for r in found.new} == new.keys() - old.keys()
    assert (M1, F1) in {(r.failures[0], r.location) for r in found.gone}
    assert found.same + len(found.gone) + len(found.new) + len(found.changed) == len(old.keys() | new.keys())
    back = compare_registers(after, before)
    assert {r.failures for r in back.new} == {r.failures for r in found.gone}
    line = next(r.row for r in found.gone if r.failures == (M1,) and r.location == F1)
    assert (line["change"], line["before"], line["after"]) == ("gone", old[M1, F1].label, "none")
    assert found.table().to_dict("list")["failures"] == [", ".join(r.failures) for r in found.rows]


def test_what_is_late_by_another_time_or_effect_has_changed() -> None:
    before, after = of_feeders(), of_feeders("BF")
    found = compare_registers(before, after)
    stuck = next(r for r in found.changed if r.failures == ("CB1: does_not_open",) and r.location == F1)
    assert stuck.before is not None
    assert stuck.after is not None
    # With breaker failure at 220 ms; without it the infeed's timer is left.
    assert stuck.before.t_clear_us == 220_000
    assert stuck.after.t_clear_us is None or stuck.after.t_clear_us > 220_000


def test_nothing_differs_from_itself() -> None:
    one = of_feeders()
    found = compare_registers(one, one)
    assert found.rows == ()
    assert found.same == len(pairs_of(one))
    assert list(found.table().columns)[:3] == ["location", "failures", "change"]


def test_registers_of_other_places_are_refused() -> None:
    with pytest.raises(InputError, match="same locations"):
        compare_registers(of_feeders(), of_feeders(where=(F1,)))
    with pytest.raises(InputError, match="complete"):
        compare_registers(replace(of_feeders(), complete=False), of_feeders())


def test_as_many_single_points_at_fewer_places_are_not_called_the_same() -> None:
    whole = study_locations(program_of(feeder_scheme()), SENSING, [F1, F2], limit_us=200_000)
    results = {r.location: r for r in whole.results}
    point = results[F1].single_points[0]
    both = replace(results[F2], single_points=(*results[F2].single_points, point))  # it spoils F2 as well
    before = replace(whole, results=tuple(both if r.location == F2 else r for r in whole.results))
    found = compare({"before": before, "after": whole})
    assert found.of("single_points", "after").verdict == "same number"
    assert found.of("single_points_at_places", "after").verdict == "better"
    assert found.of("single_points_at_places", "after").difference.high == -1
    again = compare({"before": whole, "again": whole})
    assert again.of("single_points", "again").verdict == "same"
