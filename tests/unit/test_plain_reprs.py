"""Large things say in a line what they are; the worst of what was injected comes first."""

from __future__ import annotations

import schemesim as ss


def small() -> ss.Program:
    b = ss.PlantBuilder()
    ss.generator(b, "G1", station="Alder")
    ss.feeder(b, "F1", station="Alder", load_mw=10)
    ss.single_bus(b, "Alder", [ss.Bay("G1", "G1"), ss.Bay("F1", "F1")])
    plant = b.build()
    return ss.compile_scheme(plant, ss.dress(plant, ss.single_set()))


def test_plant_and_scheme_say_in_one_line_what_they_hold() -> None:
    program = small()
    plant, scheme = program.plant, program.scheme
    assert repr(plant) == f"Plant(1 station, 2 breakers, {len(plant.sections)} sections, 1 sources)"
    assert repr(scheme).startswith(f"Scheme({len(scheme.components)} components, {len(scheme.blocks)} blocks, ")
    assert f"{len(scheme.contacts)} trip outputs" in repr(scheme)


def test_the_worst_injected_failure_is_the_last_to_clear_or_does_not() -> None:
    case = ss.bind(small(), ss.Location("F1"), ss.LogicalSensing())
    found = ss.inject(case, order=2)
    ranked = found.ranked()
    assert sorted(r.failures for r in ranked) == sorted(r.failures for r in found.rows[1:])
    uncleared = [r for r in found.rows if r.outcome.t_clear_us is None]
    assert uncleared  # one set of protection: its loss is felt
    assert {r.failures for r in ranked[: len(uncleared)]} == {r.failures for r in uncleared}
    times = [r.outcome.t_clear_ms for r in ranked[len(uncleared) :]]
    known = [t for t in times if t is not None]
    assert len(known) == len(times)
    assert known == sorted(known, reverse=True)
    assert found.worst() is ranked[0]
    assert found.table(ranked=True).failures.tolist()[1] == ", ".join(ranked[0].failures)
    assert found.table().failures.tolist()[0] == found.table(ranked=True).failures.tolist()[0] == "none"
