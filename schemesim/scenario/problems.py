"""Mistakes found by the schema, said in plain words and put where they stand in the file."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any, get_args, get_origin

from pydantic import BaseModel, ValidationError

from schemesim.errors import Problem, nearest
from schemesim.scenario.locate import Path, Tree
from schemesim.scenario.scalars import Complaint

ITEM = {
    "stations": "station",
    "bays": "bay",
    "sections": "section",
    "devices": "device",
    "sources": "source",
    "voltage_transformers": "voltage transformer",
    "dispatches": "dispatch",
    "lines": "line",
    "transformers": "transformer",
    "generators": "generator",
    "feeders": "feeder",
    "infeeds": "infeed",
    "sets": "set",
    "overrides": "override",
    "common_causes": "common cause",
    "runs": "run",
    "by_kv": "limit",
}
"""What an item of a list is called."""


def problems_of(error: ValidationError, tree: Tree, model: type[BaseModel]) -> list[Problem]:
    """Every mistake of a validation as a problem with file, line and path."""
    found: list[Problem] = []
    for e in error.errors(include_url=False):
        path: Path = tuple(e["loc"])
        for c in _complaints(e, path, model):
            whole = (*path, *c.below)
            subject, of_key = subject_of(whole), e["type"] == "extra_forbidden"
            found.append(tree.problem(whole, subject, c.value, c.expectation, tip=c.tip, of_key=of_key))
    return found


def subject_of(path: Path) -> str:
    """What stands at a path, in words.

    Examples
    --------
    >>> subject_of(("plant", "lines", 0, "length"))
    'length'
    >>> subject_of(("plant", "lines", 0))
    'line'
    """
    if not path:
        return "file"
    last = path[-1]
    if isinstance(last, str):
        return last
    parent = next((p for p in reversed(path) if isinstance(p, str)), "item")
    return ITEM.get(parent, parent)


def _complaints(e: Any, path: Path, model: type[BaseModel]) -> Iterable[Complaint]:
    kind, value, ctx = e["type"], e["input"], e.get("ctx", {})
    match kind:
        case "plain":
            complaints: tuple[Complaint, ...] = ctx["complaints"]
            return complaints
        case "missing":
            tip = _left_out(value, path, model)
            return [Complaint((), "nothing", "this key, which is required", tip)]
        case "extra_forbidden":
            known = sorted(known_keys(model, path[:-1]))
            tip = nearest(str(path[-1]), known)
            return [Complaint((), path[-1], f"a known key: {', '.join(known)}" if known else "no key here", tip)]
        case "too_long":
            return [Complaint((), f"{ctx['actual_length']} items", f"at most {ctx['max_length']} items")]
        case "too_short":
            return [Complaint((), f"{ctx['actual_length']} items", f"at least {ctx['min_length']} items")]
        case "list_type":
            return [Complaint((), _kind(value), "a list", _empty_tip(value))]
        case "dict_type" | "model_type":
            return [Complaint((), _kind(value), "a mapping of keys to values", _empty_tip(value))]
    return [Complaint((), value, "something else")]  # no other type can come from this schema


def _left_out(value: object, path: Path, model: type[BaseModel]) -> str:
    """A tip where a missing key may have been misspelt."""
    if not isinstance(value, Mapping):
        return ""
    extra = [k for k in value if k not in known_keys(model, path[:-1])]
    close = nearest(str(path[-1]), extra)
    return close.replace("did you mean", "is it").replace("?", " here?") if close else ""


def _kind(value: object) -> object:
    return "nothing" if value is None else value


def _empty_tip(value: object) -> str:
    return "leave the key out, or give it a value" if value is None else ""


def known_keys(model: type[BaseModel], path: Path) -> set[str]:
    """Keys the schema knows in the mapping at a path; empty where any name may stand."""
    here: Any = model
    for part in path:
        here = _inner(here)
        if isinstance(here, type) and issubclass(here, BaseModel):
            field = here.model_fields.get(str(part))
            here = None if field is None else field.annotation
        elif get_origin(here) is list:
            here = get_args(here)[0]
        elif get_origin(here) is dict:
            here = get_args(here)[1]
        else:
            return set()
    here = _inner(here)
    return set(here.model_fields) if isinstance(here, type) and issubclass(here, BaseModel) else set()


def _inner(hint: Any) -> Any:
    """A type without the notes put on it."""
    while hasattr(hint, "__metadata__"):
        hint = hint.__origin__
    return hint
