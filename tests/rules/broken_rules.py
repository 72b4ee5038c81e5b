"""Rules broken on purpose, one at a time and in one engine only: the comparison of the engines has to notice each."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import pytest

from tests.rules.agree import Compared, compare_fixed

WITHIN = 25
"""Programs within which each has to show."""

Patch = pytest.MonkeyPatch


@dataclass(frozen=True)
class Broken:
    """One rule broken.

    ``first`` is the number of a program near which it shows in a comparison, so that the test is quick.
    """

    name: str
    plant: Callable[[Patch], None]
    first: int
    compare: Callable[[int, Compared], None] = compare_fixed


def by_name(names: Sequence[str]) -> tuple[int, ...]:
    """The places of names in the order of the alphabet."""
    place = {name: i for i, name in enumerate(sorted(names))}
    return tuple(place[name] for name in names)
