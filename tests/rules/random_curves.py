"""Inverse-time elements in random programs, and currents that go with them.

Whether a condition holds is what the graph says; by how much its quantity exceeds the setting is drawn for each set
of breakers open, so that elements slow down, speed up, stand still, go back and run on as breakers open.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence, Set
from dataclasses import dataclass, replace
from random import Random

from schemesim.engine.program import Program
from schemesim.engine.sensing import Event, LogicalSensing, Sensed
from schemesim.scheme.conditions import Condition
from schemesim.scheme.curves import Curve
from schemesim.scheme.model import Sense
from tests.rules.random_schemes import Sample

DROP_OUT = 0.95


def with_curves(s: Sample, rng: Random) -> Sample:
    """The same sample with inverse-time elements among its senses: t = a/(M − 1), 5 ms to 2 s."""
    blocks = tuple(
        replace(b, curve=_curve(rng)) if isinstance(b, Sense) and rng.random() < 0.6 else b for b in s.scheme.blocks
    )
    return replace(s, scheme=replace(s.scheme, blocks=blocks))


def _curve(rng: Random) -> Curve:
    return Curve(
        name="drawn",
        a=rng.choice((0.02, 0.05, 0.2)),
        p=1.0,
        reset_s=rng.choice((None, None, 0.02, 0.3)),
        overtravel_us=rng.choice((0, 0, 5_000, 30_000)),
    )


@dataclass(frozen=True)
class DrawnCurrents(LogicalSensing):
    """Sensing on the graph, with multiples of the settings drawn from a seed."""

    seed: int

    def bind(
        self,
        program: Program,
        event: Event,
        dispatch: str | None,
        conditions: Sequence[Condition],
        openable: Iterable[str],
    ) -> Sensed:
        """See :class:`schemesim.engine.sensing.Sensing`."""
        return _Drawn(self.seed, super().bind(program, event, dispatch, conditions, openable))


@dataclass(frozen=True)
class _Drawn:
    seed: int
    inner: Sensed

    def state(self, opened: Set[str]) -> tuple[tuple[bool, ...], bool]:
        return self.inner.state(opened)

    def lost(self, opened: Set[str]) -> tuple[float, tuple[str, ...]]:
        return self.inner.lost(opened)

    def measured(self, opened: Set[str]) -> tuple[tuple[float, ...], tuple[bool, ...]]:
        """Multiples of the settings, and which of them lie between drop-out and pick-up."""
        rng = Random(f"{self.seed} {sorted(opened)}")
        holds, _ = self.inner.state(opened)
        multiples = tuple(rng.choice((1.1, 1.5, 2.0, 3.0, 5.0) if h else (0.0, 0.5, 0.96)) for h in holds)
        return multiples, tuple(DROP_OUT <= m < 1.0 for m in multiples)


__all__ = ["DrawnCurrents", "with_curves"]
