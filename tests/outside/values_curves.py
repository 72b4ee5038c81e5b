"""Time-current curves: times of the standards, of handbooks, and of the integral over a current that changes."""

from __future__ import annotations

import math
from functools import partial
from itertools import accumulate

from schemesim.engine.inverse import Motion, rate_of
from schemesim.scheme import curves
from tests.outside.records import DERIVED, LIBRARY, MEMORY, PUBLISHED, Record, half

SUBJECT = "curves"

MULTIPLES = ("1.5", "2", "3", "5", "10")

# IEEE C37.112 at TD = 1: seconds at the multiples above; reset from full travel at no current.
IEEE = {
    "IEEE moderately inverse": (("6.439", "3.803", "2.432", "1.688", "1.207"), 4.85),
    "IEEE very inverse": (("16.179", "7.028", "2.942", "1.308", "0.689"), 21.6),
    "IEEE extremely inverse": (("22.682", "9.522", "3.647", "1.297", "0.407"), 29.1),
}


def times(name: str) -> dict[str, float]:
    """Operate times of a curve at its multiples."""
    return {m: curves.standard_curve(name).operate_s(float(m)) for m in MULTIPLES}


def trip_s(name: str, *steps: tuple[float, float]) -> float:
    """When an element trips: multiples and how long each lasts, the last for ever."""
    curve = curves.standard_curve(name)
    starts = [0, *accumulate(round(seconds * 1e6) for _, seconds in steps[:-1])]
    motion = Motion()
    for start, (multiple, _) in zip(starts, steps, strict=True):
        motion = motion.turn(start, rate_of(curve, multiple, held=False))
    due = motion.due()
    return float("inf") if due is None else due / 1e6


STEPS = ((2.0, 1.0), (4.0, 0.5), (1.3, 2.0), (3.0, 0.0))
CONSTANTS = {"IEC A": (0.14, 0.0, 0.02), "IEEE very inverse": (19.61, 0.491, 2.0)}


def trip_by_scipy(name: str) -> float:
    """∫dt/t(I) = 1 solved with scipy, t(I) written out here from the standard's constants."""
    from scipy.integrate import quad
    from scipy.optimize import brentq

    a, b, p = CONSTANTS[name]
    ends = list(accumulate(seconds for _, seconds in STEPS))

    def speed(t: float) -> float:
        multiple = next((m for (m, _), end in zip(STEPS, ends, strict=True) if t < end), STEPS[-1][0])
        return 1.0 / (a / (math.pow(multiple, p) - 1.0) + b)

    def left(t: float) -> float:
        return float(quad(speed, 0, t, points=ends[:-1], limit=200, epsabs=1e-10)[0]) - 1

    return float(brentq(left, 0.0, 60.0, xtol=1e-9))


C37_112 = "IEEE C37.112, t = TD·(A/(M^p − 1) + B)"
IEC_151 = "IEC 60255-151, t = TMS·k/(M^α − 1)"
HANDBOOK = "protection handbooks: times of the IEC curves at ten times the setting"

of = partial(Record, SUBJECT)

RECORDS = (
    *(
        of(C37_112, PUBLISHED, f"{name}: seconds at M = {', '.join(MULTIPLES)}",
               {m: float(t) for m, t in zip(MULTIPLES, texts, strict=True)}, half("0.001"), partial(times, name))
        for name, (texts, _) in IEEE.items()
    ),
    *(
        of(C37_112, PUBLISHED, f"{name}: reset in seconds at no current", reset, 1e-9,
           partial(lambda n: curves.standard_curve(n, reset_by_curve=True).reset_time_s(0.0), name))
        for name, (_, reset) in IEEE.items()
    ),
    *(
        of(IEC_151, PUBLISHED, f"{name}: seconds at M = {m:g}", float(text), half(text),
           partial(lambda n, m: curves.standard_curve(n).operate_s(m), name, m))
        for name, m, text in (("IEC A", 10.0, "2.9706"), ("IEC B", 5.0, "3.375"), ("IEC C", 10.0, "0.8081"))
    ),
    *(
        of(HANDBOOK, MEMORY, f"{name}: seconds", float(text), half(text),
           partial(lambda n: curves.standard_curve(n).operate_s(10.0), name))
        for name, text in (("IEC A", "3.0"), ("IEC B", "1.5"), ("IEC C", "0.8"))
    ),
    of("integral of IEEE C37.112 worked out by hand", DERIVED,
       "extremely inverse, 0.5 s at M = 5, then M = 2: trips at, in seconds", 6.3502, half("6.3502"),
       lambda: trip_s("IEEE extremely inverse", (5.0, 0.5), (2.0, 0.0))),
    *(
        of("∫dt/t(I) = 1 (scipy.integrate.quad, scipy.optimize.brentq)", LIBRARY,
           f"{name}: M = 2, 4, 1.3, 3 in turn: trips at, in seconds", partial(trip_by_scipy, name), 5e-6,
           partial(trip_s, name, *STEPS))
        for name in CONSTANTS
    ),
)  # fmt: skip
