"""A scenario as plain data in full: the inverse of reading, with the plant as lists."""

from __future__ import annotations

from dataclasses import fields
from typing import Any

from schemesim.engine.sensing import NoFault
from schemesim.errors import reject
from schemesim.plant.model import Location, Plant, SectionKind
from schemesim.scenario.impedances import impedances_data
from schemesim.scenario.locate import Data
from schemesim.scenario.maintenance import maintenance_data
from schemesim.scenario.model import ListedRun, Scenario
from schemesim.scenario.money import money_data
from schemesim.scenario.parts import policy_data
from schemesim.scenario.rates import rates_data
from schemesim.scenario.scalars import ms
from schemesim.scenario.schema import VERSION
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import Ask


def document_of(scenario: Scenario) -> Data:
    """Plain data that reads back as the same scenario."""
    s = scenario.study
    data: dict[str, Any] = {
        "schemesim": VERSION,
        "name": scenario.name,
        "description": scenario.description,
        "frequency_hz": scenario.frequency_hz,
        "plant": _plant(scenario.plant),
        "policies": {name: policy_data(p) for name, p in sorted(scenario.policies.items())},
        "policy": scenario.policy,
        "exceptions": dict(scenario.exceptions),
        "failure_data": _failure_data(scenario.data),
        "out_of_service": sorted(scenario.out_of_service),
        "fault_frequencies": {"elements": _frequencies(scenario)},
        "limits": {
            "limit_ms": ms(scenario.limits.default_us),
            "by_kv": [{"kv": kv, "limit_ms": ms(us)} for kv, us in scenario.limits.by_kv],
            "backup_ms": ms(scenario.limits.backup_us),
            "zone_2_ms": ms(scenario.limits.zone_2_us),
        },
        "study": {
            "epsilon": s.epsilon,
            "horizon_ms": ms(s.horizon_us),
            "positions": list(s.positions),
            "dispatch": s.dispatch,
            "seed": s.seed,
            "trials": s.trials,
            "restore_h": s.restore_h,
            "sensing": str(s.sensing),
            "fault": str(s.fault),
            "fault_ohm": s.fault_ohm,
        },
        "runs": [_run(r) for r in scenario.runs],
        "money": _money(scenario),
        "maintenance": maintenance_data(scenario.maintenance),
    }
    return _pruned(data)


def _pruned(data: dict[str, Any]) -> dict[str, Any]:
    """Without what is left out in a file: nothing, empty texts, empty lists and mappings."""
    data["study"] = {k: v for k, v in data["study"].items() if v is not None}
    return {k: v for k, v in data.items() if v not in (None, "", [], {})}


def _plain(item: Any) -> dict[str, Any]:
    """A dataclass of the plant without what stays at its default."""
    out: dict[str, Any] = {}
    for f in fields(item):
        value = getattr(item, f.name)
        if f.name == "impedance":
            continue
        if value != f.default or f.name == "windings":
            out[f.name] = list(value) if isinstance(value, tuple) else str(value) if f.name == "kind" else value
    return out


def _plant(plant: Plant) -> dict[str, Any]:
    dispatches = [{"name": d.name, "out": sorted(d.out)} for d in plant.dispatches]
    found: dict[str, Any] = {
        "length_unit": plant.length_unit,
        "sections": [_plain(x) for x in plant.sections],
        "devices": [_plain(x) for x in plant.devices],
        "sources": [_plain(x) for x in plant.sources],
        "voltage_transformers": [_plain(x) for x in plant.vts],
        "dispatches": dispatches,
        "impedances": impedances_data(plant),
    }
    return {k: v for k, v in found.items() if v}


def _number(p: Any) -> float | int:
    if isinstance(p, (int, float)):
        return p
    raise reject("probability", p, "a number that a file can say (a fraction cannot be saved)")


def _failure_data(data: FailureData) -> dict[str, Any]:
    overrides: list[dict[str, Any]] = []
    for o in data.overrides:
        item: dict[str, Any] = {"pattern": o.pattern, "modes": {str(m): _number(p) for m, p in o.modes.items()}}
        if o.no_fault_per_yr is not None:
            item["no_fault_per_yr"] = o.no_fault_per_yr
        overrides.append(item)
    causes = [
        {"name": c.name, "probability": _number(c.probability), "members": _asks(c.members)}
        for c in data.common_causes
    ]
    return {
        "start_from_defaults": False,
        "modes": {str(k): {str(m): _number(p) for m, p in modes.items()} for k, modes in data.modes.items()},
        "no_fault_per_yr": {str(k): rate for k, rate in data.no_fault_per_yr.items()},
        "overrides": overrides,
        "relay_beta": data.relay_beta,
        "common_causes": causes,
        "rates": rates_data(data.rates),
        "rates_over": str(data.over),
    }


def _asks(asks: tuple[Ask, ...]) -> dict[str, str]:
    return {a.component: str(a.mode) for a in asks}


def _frequencies(scenario: Scenario) -> dict[str, float]:
    return {exact(scenario.plant, where): rate for where, rate in scenario.frequencies.items() if rate}


def exact(plant: Plant, where: Location) -> str:
    """A location as text that reads back as the same, to the last digit of its position."""
    is_line = plant.section[where.section].kind is SectionKind.LINE
    return f"{where.section}@{where.position!r}" if is_line else where.section


def _money(scenario: Scenario) -> dict[str, Any] | None:
    if scenario.money is None:
        return None
    where = [exact(scenario.plant, at) for at in scenario.money.locations]
    return money_data(scenario.money) | ({"locations": where} if where else {})


def _run(run: ListedRun) -> dict[str, Any]:
    event = run.event
    found: dict[str, Any] = {"name": run.name}
    if isinstance(event, NoFault):
        found["no_fault"] = event.component
    else:
        whole = event.position == 0.5
        found["fault"] = event.section if whole else f"{event.section}@{event.position!r}"
    rest: dict[str, Any] = {
        "failures": _asks(run.failures),
        "common_causes": list(run.common_causes),
        "out_of_service": sorted(run.out_of_service),
        "policy": run.policy,
        "dispatch": run.dispatch,
        "expect": run.expect,
    }
    return found | {k: v for k, v in rest.items() if v}
