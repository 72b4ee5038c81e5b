"""Schema, reading and writing of the dataclasses a policy is made of, derived from their fields.

A field of the model is a key of the file under the same name. A time ``x`` is ``x_ms``,
or ``x_cycles`` of the file's ``frequency_hz``; a part of its own is a mapping; a part
that may be absent is ``false``, ``true`` (as it is by default) or a mapping of what
differs. What a file leaves out stays as it is in the base it starts from.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields, is_dataclass, replace
from enum import StrEnum
from functools import cache
from types import NoneType, UnionType
from typing import Annotated, Any, TypeVar, Union, get_args, get_origin, get_type_hints

from pydantic import BaseModel, ConfigDict, Field, PlainValidator, WrapValidator, create_model

from schemesim.errors import InputError, Problem
from schemesim.scenario.locate import Path, Tree
from schemesim.scenario.scalars import Duration, Flag, Name, NotNegative, Time, choice, delay_data, take_time, whole
from schemesim.scheme.delays import Delay
from schemesim.scheme.policy import Policy
from schemesim.ticks import MAX_MS

MAX_SETS = 10
"""Most sets of protection in one policy."""

PAIRS = tuple[tuple[str, str], ...]
"""The model's form of a small mapping of labels."""

PROMPT = frozenset(
    {"operate", "reset", "auxiliary", "retrip", "detector_operate", "detector_reset", "lockout", "channel"}
)
"""Times that may lie below one millisecond; another that does is in seconds by mistake."""

_T = TypeVar("_T")


class Part(BaseModel):
    """A mapping of the file: every key known, nothing changed once read."""

    model_config = ConfigDict(extra="forbid", frozen=True, arbitrary_types_allowed=True)


@cache
def part_model(cls: type[Any], without: tuple[str, ...] = ()) -> type[Part]:
    """The schema of a dataclass: the keys a file may have for it, all of them optional."""
    hints = get_type_hints(cls)
    keys: dict[str, Any] = {}
    for f in fields(cls):
        if f.name in without:
            continue
        hint, optional = _bare(hints[f.name])
        if hint is Delay:
            check = PlainValidator(_time_or_none if optional else take_time)
            for unit in ("ms", "cycles"):
                keys[f"{f.name}_{unit}"] = (Annotated[Time | None, check] if optional else Duration, None)
        else:
            keys[f.name] = (_key_type(hint, optional), None)
    return create_model(cls.__name__, __base__=Part, **keys)


def _bare(hint: Any) -> tuple[Any, bool]:
    """A type without its None, and whether it had one."""
    if get_origin(hint) in {Union, UnionType}:
        rest = [a for a in get_args(hint) if a is not NoneType]
        if len(rest) == 1:
            return rest[0], True
    return hint, False


def _key_type(hint: Any, optional: bool) -> Any:
    if hint is str:
        return Name
    if hint is bool:
        return Flag
    if hint is int:
        return Annotated[int, PlainValidator(whole(0, 1000))]
    if hint is float:
        return NotNegative
    if hint == PAIRS:
        return dict[str, Name]
    if get_origin(hint) is tuple:
        return Annotated[list[part_model(get_args(hint)[0])], Field(max_length=MAX_SETS)]  # type: ignore[misc]  # made here
    if isinstance(hint, type) and issubclass(hint, StrEnum):
        return Annotated[Any, PlainValidator(choice(hint))]
    if is_dataclass(hint) and isinstance(hint, type):
        inner = part_model(hint)
        return Annotated[inner, WrapValidator(_flag_or_mapping)] if optional else inner
    raise TypeError(f"no key for {hint}")  # a mistake of ours, met by the tests


def _time_or_none(value: object) -> Time | None:
    return None if value is None else take_time(value)


def _flag_or_mapping(value: object, handler: Any) -> Any:
    return value if isinstance(value, bool) else handler(value)


class Apply:
    """Puts what a file says onto the model it starts from, and notes mistakes with their place.

    Parameters
    ----------
    tree : Tree
    frequency_hz : float
        Power frequency for times in cycles.
    """

    def __init__(self, tree: Tree, frequency_hz: float | None) -> None:
        self.tree, self.hz = tree, frequency_hz
        self.problems: list[Problem] = []

    def note(self, path: Path, subject: str, value: object, expectation: str, tip: str = "") -> None:
        """Note a mistake."""
        self.problems.append(self.tree.problem(path, subject, value, expectation, tip=tip))

    def changed(self, base: _T, said: Part, path: Path, without: tuple[str, ...] = ()) -> _T:
        """The base with everything that was said."""
        hints = get_type_hints(type(base))
        given = said.model_fields_set
        changes: dict[str, Any] = {}
        for f in fields(base):  # type: ignore[arg-type]  # always a dataclass here
            if f.name in without:
                continue
            hint, optional = _bare(hints[f.name])
            if hint is Delay:
                self._time(changes, said, f.name, path)
                continue
            if f.name not in given:
                continue
            value, here = getattr(said, f.name), (*path, f.name)
            if isinstance(value, bool) and optional:
                changes[f.name] = (getattr(base, f.name) or hint()) if value else None
            elif isinstance(value, Part):
                changes[f.name] = self.changed(getattr(base, f.name) or hint(), value, here)
            elif hint == PAIRS:
                changes[f.name] = tuple(sorted(value.items()))
            elif isinstance(value, list):
                item = get_args(hint)[0]
                changes[f.name] = tuple(self.changed(item(), v, (*here, i)) for i, v in enumerate(value))
            else:
                changes[f.name] = value
        return replace(base, **changes) if changes else base  # type: ignore[type-var]  # a dataclass

    def _time(self, changes: dict[str, Any], said: Part, name: str, path: Path) -> None:
        keys = [f"{name}_{unit}" for unit in ("ms", "cycles") if f"{name}_{unit}" in said.model_fields_set]
        if len(keys) == 2:
            self.note((*path, keys[1]), keys[1], "both", f"either {keys[0]} or {keys[1]}")
            return
        for key in keys:
            time = getattr(said, key)
            if time is None:
                changes[name] = None
                continue
            in_cycles = key.endswith("_cycles")
            if in_cycles and self.hz is None:
                self.note((*path, key), key, "cycles", "frequency_hz at the top of the file, for times in cycles")
                continue
            try:
                delay = time.delay(self.hz if in_cycles else None)
            except InputError:
                self.note((*path, key), key, list(time.numbers), f"a time of at most {MAX_MS:g} ms")
                continue
            if not in_cycles and name not in PROMPT and 0 < delay.nominal_us < 1000:
                tip = f"is it in seconds? {delay.nominal_us / 1000:g} s is {delay.nominal_us:g} ms"
                self.note((*path, key), key, delay.nominal_us / 1000, "0, or a time of 1 ms or more", tip)
            changes[name] = delay


def part_data(part: Any, without: tuple[str, ...] = ()) -> dict[str, Any]:
    """Everything of a dataclass as a file says it: the inverse of :meth:`Apply.changed`."""
    data: dict[str, Any] = {}
    for f in fields(part):
        if f.name not in without:
            value = getattr(part, f.name)
            hint, _ = _bare(get_type_hints(type(part))[f.name])
            if hint is Delay:
                data[f"{f.name}_ms"] = None if value is None else delay_data(value)
            else:
                data[f.name] = _plain(value, hint)
    return data


def _plain(value: Any, hint: Any) -> Any:
    if hint == PAIRS:
        return dict(value)
    if isinstance(value, tuple):
        return [part_data(v) for v in value]
    if value is None:
        return False
    if is_dataclass(value):
        return part_data(value)
    return str(value) if isinstance(value, StrEnum) else value


PolicyIn: type[Part] = create_model(
    "Policy", __base__=part_model(Policy, ("name",)), base=(Name, "")
)
"""The schema of a policy: its fields, and the policy it starts from."""


def policy_data(policy: Policy) -> Mapping[str, Any]:
    """A policy in full, as a file says it."""
    return part_data(policy, ("name",))
