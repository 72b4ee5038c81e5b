"""Random delays of one trial (rule R19)."""

from __future__ import annotations

from schemesim.engine.draws import Numbers, uniform
from schemesim.scheme.delays import Delay


class DelayTimes:
    """Draws the delays of one trial: one uniform per seed, trial and block name.

    The same name gives the same time for every engine, any number of workers, any order
    of declaration, over restarts within a run and across variants.
    """

    def __init__(self, seed: int, trial: int) -> None:
        self.seed, self.trial = seed, trial
        uniform(seed, "", trial)  # refuses what is no seed or trial
        self._numbers = Numbers()
        self._drawn: dict[str, int] = {}

    def of(self, name: str, delay: Delay) -> int:
        """The time in microseconds of a named delay in this trial."""
        known = self._drawn.get(name)
        if known is None:
            known = self._drawn[name] = delay.at(self._numbers.of(self.seed, name, self.trial))
        return known
