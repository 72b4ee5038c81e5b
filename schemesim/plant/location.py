"""Where a fault falls."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True, order=True)
class Location:
    """Where a fault falls: a section and, along a line, a position from 0 to 1.

    Examples
    --------
    >>> str(Location("L1", 0.25))
    'L1@0.25'
    """

    section: str
    position: float = 0.5

    def __str__(self) -> str:
        return self.section if self.position == 0.5 else f"{self.section}@{self.position:g}"

    def is_named(self, text: str) -> bool:
        """Whether a text names it: as printed, or with its position also where that is the middle.

        Examples
        --------
        >>> Location("L1").is_named("L1@0.5"), Location("L1").is_named("L1"), Location("L1", 0.1).is_named("L1")
        (True, True, False)
        """
        return text in (str(self), f"{self.section}@{self.position:g}")
