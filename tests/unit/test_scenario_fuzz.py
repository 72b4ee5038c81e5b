"""Mutated scenario files: for each kind of mutation it is stated what must happen, and it does.

A mutation is either *refused*, with a mistake at the path where it was made, or *accepted*: then
saving and loading lose nothing, and where it only says the same in another way the scenario
is equal to the one it was made from. Whatever the text, nothing but ``InputError`` comes out.
"""

from __future__ import annotations

import copy
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from schemesim.errors import InputError, Problem
from schemesim.scenario import Scenario, scenario_from_text, scenario_text
from schemesim.scenario.locate import Path as Keys
from schemesim.scenario.locate import render_path
from schemesim.scenario.reading import read_text
from schemesim.scenario.writing import write_text

CASES = 200
"""Most cases of each kind of mutation; some kinds have fewer that differ."""

SOURCE = (Path(__file__).resolve().parents[1] / "data" / "small.yaml").read_text(encoding="utf-8")
BASE: Any = read_text(SOURCE, "small.yaml").data
SCENARIO = scenario_from_text(SOURCE)


def walk(value: Any, path: Keys = ()) -> Iterator[tuple[Keys, Any]]:
    """Every value with its path."""
    yield path, value
    if isinstance(value, dict):
        for key, item in value.items():
            yield from walk(item, (*path, key))
    elif isinstance(value, list):
        for i, item in enumerate(value):
            yield from walk(item, (*path, i))


def at(data: Any, path: Keys) -> Any:
    for part in path:
        data = data[part]
    return data


def changed(path: Keys, value: Any) -> Any:
    """The base with another value at a path."""
    data = copy.deepcopy(BASE)
    at(data, path[:-1])[path[-1]] = value
    return data


def sites(pattern: str) -> list[Keys]:
    """Paths that fit a pattern; there must be some."""
    found = [path for path, _ in walk(BASE) if path and re.fullmatch(pattern, render_path(path))]
    assert found, pattern
    return found


TIMES = sites(r"policies\..*_(ms|cycles)")
FIXED_TIMES = [p for p in TIMES if isinstance(at(BASE, p), (int, float))]
LIMITS = sites(r".*(limit_ms|horizon_ms|backup_ms|zone_2_ms)")
SHARES = sites(
    r".*(\.at|probability|relay_beta|coverage|on_demand|positions\[\d\]|modes\.\w+\.\w+|overrides\[\d\]\.modes\.\w+)"
)
RATES = sites(
    r".*(per_length_per_yr|by_kind\.\w+|elements\.\w+|no_fault_per_yr(\.\w+)?|\.kv|load_mw|restore_h|repair_h"
    r"|rate_per_yr|hours_per_yr)"
)
RATES = [p for p in RATES if isinstance(at(BASE, p), (int, float))]
LENGTHS = sites(r".*\.length")
WHOLES = sites(r"schemesim|study\.(seed|trials)|.*selection\.\w+")
FLAGS = sites(r".*(remote_backup|trips|coupler_closed|revealed|staggered|reported)")
CHOICES = sites(r".*(\.layout|\.ct|\.start|rates_over|rates\[\d\]\.(kind|quality)|monitored\[\d\]\.kind)")
NAMES = sites(r".*\.(name|station|section|core|retrip_coil|base)|name|policy|study\.dispatch|.*cores\[\d\]")
NUMBERS = FIXED_TIMES + LIMITS + SHARES + RATES + LENGTHS
MAPPINGS = [
    path
    for path, value in walk(BASE)
    if isinstance(value, dict)
    and not re.fullmatch(
        r"policies|exceptions|.*(selection|modes|modes\.\w+|no_fault_per_yr|members|by_kind|elements|failures)"
        r"|.*_(ms|cycles)(\.\w+)?",
        render_path(path),
    )
]
LISTS = [path for path, value in walk(BASE) if isinstance(value, list) and value]
NAMED_LISTS = [p for p in LISTS if all(isinstance(x, dict) and "name" in x for x in at(BASE, p))]
REQUIRED = sites(
    r"schemesim|plant|policy|.*(stations\[\d\]\.(name|layout|bays)|lines\[0\]\.\w+ame|\.length|load_mw|overrides\[\d\]\.pattern"
    r"|generators\[0\]\.name|feeders\[\d\]\.name|infeeds\[0\]\.(name|section)|dispatches\[0\]\.(name|out)"
    r"|by_kv\[0\]\.(kv|limit_ms)|rates\[\d\]\.(kind|mode)|outage_hours\[\d\]\.hours_per_yr"
    r"|common_causes\[0\]\.(name|probability|members)|runs\[\d\]\.name)"
)
SPARE = sites(
    r"name|description|exceptions|out_of_service|fault_frequencies|limits|study|runs|failure_data\.relay_beta"
    r"|.*(stations\[\d\]\.(kv|windings)|lines\[0\]\.kv|\.trips|coupler_closed|remote_backup|selection|expect"
    r"|no_fault_per_yr|by_kind|elements|by_kv|epsilon|seed|trials|positions|restore_h|local_backup|reaches|rates"
    r"|rates_over|quality|source|backup_ms|zone_2_ms|monitored|watches|outage_hours)|maintenance"
)
REFERENCES = sites(
    r"policy|study\.dispatch|.*(bays\[\d\]\.to|infeeds\[0\]\.section|\.base|out\[0\]|exceptions\.\w+|runs\[\d\]\.(fault"
    r"|no_fault|policy|dispatch)|common_causes\[0\]|out_of_service\[0\]|monitored\[1\]\.(pattern|watches\[0\])"
    r"|outage_hours\[1\]\.(kind|pattern))"
)
REFERENCES = [p for p in REFERENCES if isinstance(at(BASE, p), str)]
KEY_REFERENCES = sites(
    r"exceptions\.\w+|fault_frequencies\.elements\.\w+|.*(selection\.\w+|failures\[.*\]|members\[.*\])"
    r"|failure_data\.(modes|no_fault_per_yr)\.\w+|fault_frequencies\.by_kind\.\w+"
)

NOT_TEXT = st.one_of(st.integers(-9, 9), st.booleans(), st.floats(-1, 1), st.none(), st.just([]), st.just({}))
NOT_NUMBER = st.one_of(
    st.booleans(), st.none(), st.sampled_from(["", "no", "12:30", "1,5", "5 ms", "3%", "1_0", "017", "2024-01-01"])
)
NOT_FINITE = st.sampled_from([float("nan"), float("inf"), float("-inf")])
NEGATIVE = st.floats(-1e12, -1e-12)


def accepted(text: str) -> Scenario:
    """Load; saving and loading again must give the same scenario and the same text."""
    scenario = scenario_from_text(text)
    saved = scenario_text(scenario)
    again = scenario_from_text(saved)
    assert again == scenario
    assert scenario_text(again) == saved
    return scenario


def refused(text: str, path: Keys, *others: Keys) -> None:
    """Loading must fail, with a mistake at the path (or another place stated)."""
    with pytest.raises(InputError) as caught:
        scenario_from_text(text)
    where = {p.path for p in caught.value.problems}
    assert where & {render_path(p) for p in (path, *others)}, str(caught.value)
    assert all(p.line for p in caught.value.problems if p.path), str(caught.value)


fuzz = settings(max_examples=CASES)


@fuzz
@given(st.sampled_from(REQUIRED))
def test_a_required_key_left_out_is_missed_there(path: Keys) -> None:
    data = copy.deepcopy(BASE)
    del at(data, path[:-1])[path[-1]]
    refused(write_text(data), path)


@fuzz
@given(st.sets(st.sampled_from(SPARE), min_size=1, max_size=3))
def test_an_optional_key_may_be_left_out(paths: set[Keys]) -> None:
    data = copy.deepcopy(BASE)
    for path in sorted(paths, key=lambda p: (-len(p), str(p))):
        del at(data, path[:-1])[path[-1]]
    accepted(write_text(data))


@fuzz
@given(
    st.sampled_from(MAPPINGS),
    st.from_regex(r"[a-z]{3,8}_[xyz]{2}", fullmatch=True),
    st.sampled_from([1, "x", None, []]),
)
def test_an_unknown_key_is_refused_there(path: Keys, key: str, value: Any) -> None:
    refused(write_text(changed((*path, key), value)), (*path, key))


@fuzz
@given(st.sampled_from(REFERENCES), st.from_regex(r"[A-Z][a-z]{2,6} [0-9]{3}", fullmatch=True))
def test_a_reference_to_nothing_is_refused_there(path: Keys, name: str) -> None:
    refused(write_text(changed(path, name)), path, path[:-1])  # components of a run: at their list


@fuzz
@given(st.sampled_from(KEY_REFERENCES), st.from_regex(r"[A-Z][a-z]{2,6} [0-9]{3}", fullmatch=True))
def test_a_key_that_names_nothing_is_refused_there(path: Keys, name: str) -> None:
    data = copy.deepcopy(BASE)
    holder = at(data, path[:-1])
    holder[name] = holder.pop(path[-1])
    refused(write_text(data), (*path[:-1], name))


@fuzz
@given(st.sampled_from(NAMES), NOT_TEXT)
def test_what_is_no_text_is_refused_as_a_name(path: Keys, value: Any) -> None:
    refused(write_text(changed(path, value)), path)


@fuzz
@given(st.sampled_from(NAMES), st.sampled_from(["a@b", " a", "a ", "a\tb", "x" * 201]))
def test_a_bad_name_is_refused_there(path: Keys, value: str) -> None:
    refused(write_text(changed(path, value)), path)


@fuzz
@given(st.sampled_from(NUMBERS + WHOLES), NOT_NUMBER)
def test_what_is_no_number_is_refused_there(path: Keys, value: Any) -> None:
    refused(write_text(changed(path, value)), path)


@fuzz
@given(
    st.sampled_from(FLAGS + CHOICES),
    st.one_of(st.integers(-9, 9), st.sampled_from(["no", "yes", "true", "both sides"])),
)
def test_what_is_no_choice_is_refused_there(path: Keys, value: Any) -> None:
    refused(write_text(changed(path, value)), path)


@fuzz
@given(st.sampled_from(NUMBERS), st.one_of(NEGATIVE, NOT_FINITE))
def test_a_number_out_of_bounds_is_refused_there(path: Keys, value: float) -> None:
    refused(write_text(changed(path, value)), path)


@fuzz
@given(st.sampled_from(SHARES), st.floats(1, 1e300, exclude_min=True))
def test_a_probability_over_one_is_refused_there(path: Keys, value: float) -> None:
    refused(write_text(changed(path, value)), path)


@fuzz
@given(
    st.sampled_from(FIXED_TIMES),
    st.sampled_from(
        [
            ({"uniform": [5, 4]}, ("uniform",)),
            ({"uniform": [5, -4]}, ("uniform", 1)),
            ({"triangular": [1, 2]}, ("triangular",)),
            ({"normal": {"mean": 5, "sd": 0, "low": 1, "high": 9}}, ("normal", "sd")),
            ({"lognormal": {"median": 5, "sigma": 99, "low": 1, "high": 9}}, ("lognormal", "sigma")),
            ({"normal": {"mean": 5, "sd": 1, "low": 6, "high": 9}}, ("normal",)),
            ({"sample": []}, ("sample",)),
            ({"sample": [1, "2"]}, ("sample", 1)),
            ({"gamma": [1, 2]}, ("gamma",)),
            ({}, ()),
            ({"uniform": [1, 2], "sample": [1]}, ()),
        ]
    ),
)
def test_a_bad_distribution_is_refused_there(path: Keys, bad: tuple[Any, Keys]) -> None:
    value, below = bad
    refused(write_text(changed(path, value)), (*path, *below))


@fuzz
@given(st.sampled_from(NAMED_LISTS), st.data())
def test_an_item_given_twice_is_refused_there(path: Keys, data: st.DataObject) -> None:
    items = at(BASE, path)
    item = data.draw(st.sampled_from(items))
    if path[-1] == "bays":
        refused(write_text(changed(path, [*items, item])), (*path, len(items)))
    else:
        refused(write_text(changed(path, [*items, item])), (*path, len(items), "name"))


@fuzz
@given(st.sampled_from(LISTS), st.sampled_from([0, "x", {}, {"a": 1}, None]))
def test_what_is_no_list_is_refused_there(path: Keys, value: Any) -> None:
    refused(write_text(changed(path, value)), path)


def shuffled(value: Any, draw: Any, path: Keys = ()) -> Any:
    """The same in another order: keys of all mappings, items of lists that are sets."""
    if isinstance(value, dict):
        keys = draw(st.permutations(list(value)))
        return {key: shuffled(value[key], draw, (*path, key)) for key in keys}
    if isinstance(value, list):
        items = [shuffled(x, draw, (*path, i)) for i, x in enumerate(value)]
        free = path[-1] in {"stations", "lines", "feeders", "runs", "positions", "sample", "cores", "windings"}
        return draw(st.permutations(items)) if free and path[-1] not in {"cores", "windings"} else items
    return value


@fuzz
@given(st.data())
def test_order_changes_nothing(data: st.DataObject) -> None:
    assert accepted(write_text(shuffled(BASE, data.draw))) == SCENARIO


def spelled(path: Keys, text: str) -> str:
    """The base with an unquoted text at a path."""
    marker = "marked here"
    return write_text(changed(path, marker)).replace(marker, text)


@fuzz
@given(st.sampled_from(NUMBERS), st.sampled_from(["{:.3e}", "{:.6f}", "+{}", "{:E}", "{!r}"]))
def test_a_number_may_be_written_in_any_form(path: Keys, form: str) -> None:
    value = at(BASE, path)
    text = form.format(float(value))
    if float(text) == value:
        assert accepted(spelled(path, text)) == SCENARIO
    else:
        accepted(spelled(path, text))


@fuzz
@given(st.sampled_from(NAMES + REFERENCES + CHOICES), st.sampled_from(['"{}"', "'{}'"]))
def test_quotes_of_either_kind_change_nothing(path: Keys, form: str) -> None:
    assert accepted(spelled(path, form.format(at(BASE, path)))) == SCENARIO


@fuzz
@given(
    st.sampled_from([p for p, v in walk(BASE) if p and not isinstance(v, (dict, list))]),
    st.sampled_from(["&a x", "*a", "!!str x", "!python/name:os.system x"]),
)
def test_anchors_aliases_and_tags_are_refused_there(path: Keys, text: str) -> None:
    refused(spelled(path, text), path)


@fuzz
@given(
    st.integers(0, len(SOURCE)),
    st.integers(0, 12),
    st.text(st.sampled_from("abc01.-:#'\"[]{}, \n\t&*!|>%@`?\0é\ud800"), max_size=8),
)
def test_any_text_is_accepted_or_refused_in_full(start: int, length: int, new: str) -> None:
    text = SOURCE[:start] + new + SOURCE[start + length :]
    accepted_or_refused(text)


def accepted_or_refused(text: str) -> None:
    """Load, with no claim which it is."""
    problems: tuple[Problem, ...] | None = None
    try:
        scenario_from_text(text)
    except InputError as error:
        problems = error.problems
    if problems is None:
        accepted(text)
    else:
        assert problems
        assert all(p.expectation and p.file for p in problems)


VALUES = st.recursive(NOT_TEXT | st.text(st.sampled_from("ab1. é:#"), max_size=5), st.lists, max_leaves=4)


@fuzz
@given(st.sampled_from([p for p, _ in walk(BASE) if p]), VALUES)
def test_any_value_is_accepted_or_refused_in_full(path: Keys, value: Any) -> None:
    accepted_or_refused(write_text(changed(path, value)))
