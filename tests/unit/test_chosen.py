"""Locations given as text where a study of a scenario wants them."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from schemesim.errors import InputError
from schemesim.plant.model import Location
from schemesim.scenario.campaigns import campaign_scenario
from schemesim.scenario.chosen import Places, chosen_of
from schemesim.scenario.files import load_scenario
from schemesim.scenario.model import Scenario
from schemesim.scenario.studying import study_scenario
from schemesim.scenario.weak import register_scenario

SMALL = Path(__file__).resolve().parents[1] / "data" / "small.yaml"


@pytest.fixture(scope="module")
def small() -> Scenario:
    return load_scenario(SMALL)


@pytest.mark.parametrize(
    ("places", "expected"),
    [
        ("L1@0.25", [Location("L1", 0.25)]),
        (Location("L1", 0.25), [Location("L1", 0.25)]),
        (["Cedar.B2", "L1", Location("Cedar.B2")], [Location("Cedar.B2"), Location("L1")]),
        ([], []),
    ],
)
def test_text_is_a_location(small: Scenario, places: Places, expected: list[Location]) -> None:
    assert chosen_of(small.plant, places) == expected


def test_every_mistake_is_told(small: Scenario) -> None:
    with pytest.raises(InputError) as caught:
        chosen_of(small.plant, ["Cedar.B9", "L1@2", Location("L7"), 3])  # type: ignore[list-item]  # as a user may
    assert [p.value for p in caught.value.problems] == ["Cedar.B9", "L1@2", "L7", 3]
    assert "did you mean 'Cedar.B" in str(caught.value)


def test_a_register_and_a_study_of_places_named_in_text(small: Scenario) -> None:
    by_text = register_scenario(small, locations=["Cedar.B2"])
    assert by_text == register_scenario(small, locations=[Location("Cedar.B2")])
    assert [r.location for r in study_scenario(small, locations="L1@0.5").results] == [Location("L1", 0.5)]


@pytest.mark.parametrize("study", [register_scenario, study_scenario, campaign_scenario])
def test_a_study_refuses_what_is_no_place(small: Scenario, study: Callable[..., object]) -> None:
    with pytest.raises(InputError, match=r"did you mean 'Cedar\.B"):
        study(small, locations=["Cedar.B9"])
