"""The section ``money`` of a scenario file: its schema, and the way to the model and back."""
# ruff: noqa: RUF012 - pydantic copies the default of a field for each object

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import fields
from typing import Annotated, Any

from pydantic import Field, PlainValidator

from schemesim.errors import InputError, nearest
from schemesim.plant.model import Location, Plant
from schemesim.scenario.locate import Path
from schemesim.scenario.notes import Notes
from schemesim.scenario.parts import Part, part_model
from schemesim.scenario.scalars import Name, NotNegative, Text, choice, no, number, take_text
from schemesim.scheme.model import ComponentKind, Scheme
from schemesim.scheme.policy import Policy
from schemesim.study.currency import CODES, EXPECTED, is_unit
from schemesim.study.edits import ADDITIONS
from schemesim.study.money import CostRule, Costs, Money, Values, assumptions

TOP = "money"

ValuesIn: type[Part] = part_model(Values)


def _unit(value: object) -> str:
    text = take_text(value)
    if not is_unit(text):
        no(value, EXPECTED, nearest(text.upper(), CODES))
    return text


_Life = Annotated[float | None, PlainValidator(number(1, 1000))]


class CostIn(Part):
    """What components of a kind cost."""

    kind: Annotated[ComponentKind, PlainValidator(choice(ComponentKind))]
    pattern: Name = "*"
    bought: NotNegative = 0.0
    installed: NotNegative = 0.0
    per_test: NotNegative = 0.0
    test_interval_yr: Annotated[float | None, PlainValidator(number(0.01, 1000))] = None
    life_yr: _Life = None


class MoneyIn(Part):
    """The section."""

    unit: Annotated[str, PlainValidator(_unit)] = ""
    discount_rate: Annotated[float, PlainValidator(number(0, 1))] = 0.05
    life_yr: _Life = 25.0
    costs: Annotated[list[CostIn], Field(max_length=1000)] = []
    values: ValuesIn = ValuesIn()  # type: ignore[valid-type]  # made from the dataclass
    start: Name = ""
    additions: Annotated[list[Name], Field(max_length=100)] = []
    ranges: dict[str, Annotated[list[NotNegative], Field(min_length=2, max_length=2)]] = {}
    error_factors: dict[str, Annotated[float, PlainValidator(number(1, 1000))]] = {}
    locations: Annotated[list[Text], Field(max_length=1000)] = []
    policies: Annotated[list[Name], Field(max_length=100)] = []


def money_of(
    notes: Notes, said: MoneyIn, plant: Plant, policies: Mapping[str, Policy], restore_h: float
) -> Money | None:
    """The model of the section, or None where it is wrong or not there.

    ``restore_h`` is that of the study, where the section states no ``restoration_h``.
    """
    from schemesim.scenario.model import location  # the model holds money itself

    if not said.model_fields_set:
        return None
    before = len(notes.problems)
    if not said.unit:
        notes.note((TOP,), "unit", "nothing", EXPECTED)
    if said.start and said.start not in policies:
        tip = nearest(said.start, policies)
        notes.note((TOP, "start"), "policy", said.start, f"one of {', '.join(policies)}", tip)
    for i, name in enumerate(said.policies):
        if name not in policies:
            tip = nearest(name, policies)
            notes.note((TOP, "policies", i), "policy", name, f"one of {', '.join(policies)}", tip)
    for i, name in enumerate(said.additions):
        _known(notes, (TOP, "additions", i), "addition", name, ADDITIONS)
    for name in said.ranges:
        _known(notes, (TOP, "ranges", name), "range", name, assumptions(), of_key=True)
    for name in said.error_factors:
        kinds = [*map(str, ComponentKind), "no_fault"]
        _known(notes, (TOP, "error_factors", name), "error factor", name, kinds, of_key=True)
    where: list[Location] = []
    for i, text in enumerate(said.locations):
        try:
            where.append(location(plant, text))
        except InputError as error:
            notes.take(error, (TOP, "locations", i))
    rules = [
        _made(notes, (TOP, "costs", i), lambda item=item: Costs(rules=(_rule(item),)).rules[0])
        for i, item in enumerate(said.costs)
    ]
    part: Part = said.values
    given = {"restoration_h": restore_h} | {name: getattr(part, name) for name in part.model_fields_set}
    values = _made(notes, (TOP, "values"), lambda: Values(**given))
    if len(notes.problems) > before or values is None:
        return None
    costs = Costs(
        rules=tuple(r for r in rules if r is not None),
        discount_rate=said.discount_rate,
        life_yr=25.0 if said.life_yr is None else said.life_yr,
    )
    found: Money | None = _made(
        notes,
        (TOP, "ranges"),
        lambda: Money(
            unit=said.unit,
            costs=costs,
            values=values,
            start=said.start,
            additions=tuple(said.additions),
            ranges=tuple((n, low, high) for n, (low, high) in sorted(said.ranges.items())),
            error_factors=tuple(sorted(said.error_factors.items())),
            locations=tuple(where),
            policies=tuple(dict.fromkeys(said.policies)),
        ),
    )
    return found


def _rule(item: CostIn) -> CostRule:
    return CostRule(**{f.name: getattr(item, f.name) for f in fields(CostRule)})


def _made(notes: Notes, path: Path, make: Any) -> Any:
    """What is made, or None and its mistakes noted."""
    try:
        return make()
    except InputError as error:
        notes.take(error, path)
        return None


def _known(
    notes: Notes, path: Path, subject: str, name: str, known: Iterable[str], *, of_key: bool = False
) -> None:
    words = list(known)
    if name not in words:
        notes.note(path, subject, name, f"one of {', '.join(words)}", nearest(name, words), of_key=of_key)


def check_costs(notes: Notes, money: Money | None, schemes: Mapping[str, Scheme]) -> None:
    """Note every component that some policy uses and that has no cost."""
    if money is None:
        return
    users: dict[tuple[str, str], list[str]] = {}
    for policy, scheme in schemes.items():
        for c in money.costs.missing(scheme.components):
            users.setdefault((str(c.kind), c.name), []).append(policy)
    path: Path = (TOP, "costs") if money.costs.rules else (TOP,)
    for (kind, name), policies in users.items():
        under = " and ".join(repr(p) for p in policies)
        notes.note(path, f"cost of {kind} {name!r}", "nothing", "a cost (0 if it is free)", f"used by {under}")


def money_data(money: Money) -> dict[str, Any]:
    """The section in full, as a file says it."""
    costs = [
        {k: str(v) if k == "kind" else v for k, v in ((f.name, getattr(r, f.name)) for f in fields(r)) if v is not None}
        for r in money.costs.rules
    ]
    values = {f.name: getattr(money.values, f.name) for f in fields(Values)}
    data: dict[str, Any] = {
        "unit": money.unit,
        "discount_rate": money.costs.discount_rate,
        "life_yr": money.costs.life_yr,
        "costs": costs,
        "values": {k: v for k, v in values.items() if v is not None},
        "start": money.start,
        "additions": list(money.additions),
        "policies": list(money.policies),
        "ranges": {name: [low, high] for name, low, high in money.ranges},
        "error_factors": dict(money.error_factors),
    }
    return {k: v for k, v in data.items() if v not in ("", [], {})}
