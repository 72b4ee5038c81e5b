"""What a one-line diagram shows on top of the plant itself."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from schemesim.engine.outcome import Opening
from schemesim.plant.model import Location


@dataclass(frozen=True)
class State:
    """What is shown on top of the plant itself.

    Attributes
    ----------
    fault : Location or None
    openings : mapping of breaker (or source) to Opening
    intended : frozenset of str
        Breakers that should open; empty without a case.
    failed : mapping of device to str
        What failed at it, in words.
    dead : frozenset of str
        Sections left without a source.
    isolation : mapping of section to int
        Sections drawn as part of an isolation zone; the number tells zones side by side apart.
    protected : mapping of element to frozenset of str
        Protected zones outlined, by the element they belong to.
    title : str
    """

    fault: Location | None = None
    openings: Mapping[str, Opening] = field(default_factory=dict)
    intended: frozenset[str] = frozenset()
    failed: Mapping[str, str] = field(default_factory=dict)
    dead: frozenset[str] = frozenset()
    isolation: Mapping[str, int] = field(default_factory=dict)
    protected: Mapping[str, frozenset[str]] = field(default_factory=dict)
    title: str = ""
