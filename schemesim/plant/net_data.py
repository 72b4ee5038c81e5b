"""Impedances of lines, transformers and sources, as a plant may carry them.

All of them are optional: a plant without any is whole for every question but those of currents and voltages.
"""

from __future__ import annotations

import cmath
import math
import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Protocol

Mistake = tuple[str, object, str]
"""What, value, expectation."""

_GROUP = re.compile(r"(YN|Y|D)(?:(yn|y|d)(\d{1,2}))(?:(yn|y|d)(\d{1,2}))?")


@dataclass(frozen=True, slots=True, kw_only=True)
class LineImpedance:
    """Series impedance of a whole line, spread evenly along it; charging is left out.

    Parameters
    ----------
    r_ohm, x_ohm : float
        Positive (and negative) sequence, of the whole length.
    r0_ohm, x0_ohm : float or None
        Zero sequence; None: not known, so that faults to earth are refused.

    Examples
    --------
    >>> LineImpedance(r_ohm=2, x_ohm=10, r0_ohm=6, x0_ohm=30).z0
    (6+30j)
    """

    r_ohm: float
    x_ohm: float
    r0_ohm: float | None = None
    x0_ohm: float | None = None

    @property
    def z1(self) -> complex:
        """Positive-sequence impedance in ohm."""
        return complex(self.r_ohm, self.x_ohm)

    @property
    def z0(self) -> complex | None:
        """Zero-sequence impedance in ohm."""
        return None if self.r0_ohm is None or self.x0_ohm is None else complex(self.r0_ohm, self.x0_ohm)

    def mistakes(self) -> Iterator[Mistake]:
        """What cannot be."""
        yield from _finite(self, "r_ohm", "x_ohm", "r0_ohm", "x0_ohm")
        if (self.r0_ohm is None) != (self.x0_ohm is None):
            yield "zero-sequence impedance", "one of two", "both r0_ohm and x0_ohm, or neither"
        if self.z1 == 0 or self.z0 == 0:
            yield "impedance", 0, "an impedance that is not zero (what has none is a bus or a conductor)"


@dataclass(frozen=True, slots=True, kw_only=True)
class TransformerImpedance:
    """Leakage impedances, rated voltages, winding connections and neutral earthing of a transformer.

    Its first winding is at position 0 of the section, the last at 1, the middle one of three at 0.5.

    Parameters
    ----------
    mva : float
        Rated power: the base of the impedances.
    kv : tuple of float
        Rated voltage of each winding, two or three.
    r_pu, x_pu : tuple of float
        Between windings 1-2 (of two), or 1-2, 1-3, 2-3 (of three).
    r0_pu, x0_pu : tuple of float
        The same in zero sequence with all windings earthed; empty: as in positive sequence.
    group : str
        Vector group: ``YNyn0``, ``YNd1``, ``Dyn11``, ``YNyn0d1``. ``N`` is an earthed neutral.
    earth_r_ohm, earth_x_ohm : tuple of float
        Impedance between each neutral and earth; empty: solid.

    Notes
    -----
    In zero sequence an earthed star winding passes current on, a delta winding is a short circuit behind its
    leakage impedance, an unearthed star blocks; the magnetising impedance is left out (Anderson, Analysis of Faulted
    Power Systems, 1973). A neutral impedance counts three times.

    Examples
    --------
    >>> t = TransformerImpedance(mva=100, kv=(132, 33), r_pu=(0.0,), x_pu=(0.1,), group="YNd1")
    >>> t.windings, t.shifts
    (('YN', 'D'), (0.0, -30.0))
    """

    mva: float
    kv: tuple[float, ...]
    r_pu: tuple[float, ...]
    x_pu: tuple[float, ...]
    group: str
    r0_pu: tuple[float, ...] = ()
    x0_pu: tuple[float, ...] = ()
    earth_r_ohm: tuple[float, ...] = ()
    earth_x_ohm: tuple[float, ...] = ()

    @property
    def windings(self) -> tuple[str, ...]:
        """Connection of each winding: YN, Y or D."""
        found = _GROUP.fullmatch(self.group)
        return () if found is None else tuple(part.upper() for part in found.group(1, 2, 4) if part)

    @property
    def shifts(self) -> tuple[float, ...]:
        """Angle in degrees of each winding's positive-sequence voltage against the first's."""
        found = _GROUP.fullmatch(self.group)
        return () if found is None else (0.0, *(-30.0 * int(n) for n in found.group(3, 5) if n))

    @property
    def z1(self) -> tuple[complex, ...]:
        """Leakage impedances in per unit, positive sequence."""
        return tuple(map(complex, self.r_pu, self.x_pu))

    @property
    def z0(self) -> tuple[complex, ...]:
        """Leakage impedances in per unit, zero sequence."""
        return tuple(map(complex, self.r0_pu, self.x0_pu)) if self.x0_pu else self.z1

    @property
    def earth_ohm(self) -> tuple[complex, ...]:
        """Impedance between each neutral and earth."""
        none = (0.0,) * len(self.kv)
        return tuple(map(complex, self.earth_r_ohm or none, self.earth_x_ohm or none))

    def mistakes(self) -> Iterator[Mistake]:
        """What cannot be."""
        n = len(self.kv)
        if n not in (2, 3):
            yield "kv", self.kv, "the rated voltages of two or three windings"
            return
        pairs = 1 if n == 2 else 3
        for key, count in (("r_pu", pairs), ("x_pu", pairs), ("r0_pu", pairs), ("x0_pu", pairs)):
            value = getattr(self, key)
            if len(value) != count and not (key in ("r0_pu", "x0_pu") and not self.r0_pu and not self.x0_pu):
                yield key, value, f"{count} number{'s' if count > 1 else ''}, one for each pair of windings"
        for key in ("earth_r_ohm", "earth_x_ohm"):
            if len(getattr(self, key)) not in (0, n):
                yield key, getattr(self, key), f"{n} numbers, one for each winding, or none"
        for key in ("mva", "kv", "r_pu", "x_pu", "r0_pu", "x0_pu", "earth_r_ohm", "earth_x_ohm"):
            value = getattr(self, key)
            for x in value if isinstance(value, tuple) else (value,):
                if not math.isfinite(x) or (key in ("mva", "kv") and not x > 0):
                    yield key, x, "finite numbers" + (" over zero" if key in ("mva", "kv") else "")
        if len(self.windings) != n:
            yield "group", self.group, f"a vector group of {n} windings, e.g. {'YNd11' if n == 2 else 'YNyn0d1'}"
        if 0 in self.z1 or 0 in self.z0:
            yield "impedance", 0, "leakage impedances that are not zero"


@dataclass(frozen=True, slots=True, kw_only=True)
class SourceImpedance:
    """Impedance behind which a source keeps its voltage, in ohm at the voltage of its section.

    Parameters
    ----------
    r_ohm, x_ohm : float
        Positive sequence: of a machine its subtransient or transient reactance, of a grid c·U²/S.
    r2_ohm, x2_ohm : float or None
        Negative sequence; None: as positive.
    r0_ohm, x0_ohm : float or None
        Zero sequence with three times any neutral impedance; None: not earthed, no current.
    """

    r_ohm: float
    x_ohm: float
    r2_ohm: float | None = None
    x2_ohm: float | None = None
    r0_ohm: float | None = None
    x0_ohm: float | None = None

    @property
    def z1(self) -> complex:
        """Positive-sequence impedance in ohm."""
        return complex(self.r_ohm, self.x_ohm)

    @property
    def z2(self) -> complex:
        """Negative-sequence impedance in ohm."""
        return self.z1 if self.r2_ohm is None or self.x2_ohm is None else complex(self.r2_ohm, self.x2_ohm)

    @property
    def z0(self) -> complex | None:
        """Zero-sequence impedance in ohm, None where it is open."""
        return None if self.r0_ohm is None or self.x0_ohm is None else complex(self.r0_ohm, self.x0_ohm)

    def mistakes(self) -> Iterator[Mistake]:
        """What cannot be."""
        yield from _finite(self, "r_ohm", "x_ohm", "r2_ohm", "x2_ohm", "r0_ohm", "x0_ohm")
        for s in ("2", "0"):
            if (getattr(self, f"r{s}_ohm") is None) != (getattr(self, f"x{s}_ohm") is None):
                yield f"sequence {s} impedance", "one of two", f"both r{s}_ohm and x{s}_ohm, or neither"
        if 0 in (self.z1, self.z2, self.z0):
            yield "impedance", 0, "an impedance that is not zero"


@dataclass(frozen=True, slots=True, kw_only=True)
class Coupling:
    """Mutual zero-sequence impedance of two lines side by side over their whole lengths, 0 beside 0.

    Parameters
    ----------
    a, b : str
        Names of the lines.
    r0_ohm, x0_ohm : float
        Mutual impedance of the whole length; negative where one's end 0 is beside the other's end 1.
    """

    a: str
    b: str
    r0_ohm: float
    x0_ohm: float

    @property
    def z0(self) -> complex:
        """Mutual impedance in ohm."""
        return complex(self.r0_ohm, self.x0_ohm)

    def mistakes(self) -> Iterator[Mistake]:
        """What cannot be."""
        yield from _finite(self, "r0_ohm", "x0_ohm")
        if self.a == self.b:
            yield "lines", self.a, "two different lines"


def _finite(item: object, *keys: str) -> Iterator[Mistake]:
    for key in keys:
        value = getattr(item, key)
        if value is not None and not cmath.isfinite(value):
            yield key, value, "a finite number"


class _Section(Protocol):
    @property
    def name(self) -> str: ...
    @property
    def kind(self) -> str: ...
    @property
    def impedance(self) -> LineImpedance | TransformerImpedance | None: ...


class _Source(Protocol):
    @property
    def name(self) -> str: ...
    @property
    def impedance(self) -> SourceImpedance | None: ...


def impedance_mistakes(
    sections: Iterable[_Section], sources: Iterable[_Source], couplings: Iterable[Coupling]
) -> Iterator[Mistake]:
    """Every mistake in the impedances of a plant."""
    lines = set()
    for s in sections:
        if s.kind == "line":
            lines.add(s.name)
        if s.impedance is None:
            continue
        kinds = ("transformer",) if isinstance(s.impedance, TransformerImpedance) else ("line", "feeder")
        if s.kind not in kinds:
            yield f"impedance of {s.kind} {s.name!r}", type(s.impedance).__name__, "none, or one of its own kind"
        for what, value, expectation in s.impedance.mistakes():
            yield f"{what} of {s.name!r}", value, expectation
    for source in sources:
        for what, value, expectation in source.impedance.mistakes() if source.impedance is not None else ():
            yield f"{what} of {source.name!r}", value, expectation
    pairs: set[frozenset[str]] = set()
    for c in couplings:
        pair = frozenset((c.a, c.b))
        for what, value, expectation in c.mistakes():
            yield f"{what} of the coupling of {c.a!r} and {c.b!r}", value, expectation
        for name in sorted(pair - lines):
            yield "coupled line", name, "the name of a line"
        if pair in pairs:
            yield "coupling", f"{c.a} and {c.b}", "one coupling of two lines"
        pairs.add(pair)
