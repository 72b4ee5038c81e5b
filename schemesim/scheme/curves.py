"""Time-current curves of inverse-time elements: operate and reset times of a constant current.

What a curve answers is a time at a multiple of the pick-up that does not change. How the
time of a current that does change follows from it is rule R10, in
`schemesim.engine.inverse`.

The standard curves are those of IEEE Std C37.112 (moderately, very and extremely inverse)
and of IEC 60255-151 (A, B and C; its D, E and F are the three of C37.112).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from schemesim.errors import ErrorList, nearest, reject
from schemesim.scheme.delay_checks import MAX_US

if TYPE_CHECKING:
    from collections.abc import Iterable

    from matplotlib.axes import Axes


@dataclass(frozen=True, slots=True, kw_only=True)
class Curve:
    """A time-current curve: t = dial·(a/(M^p − 1) + b), M the multiple of the pick-up.

    Parameters
    ----------
    name : str
    a, b : float
        Constants of the curve in seconds.
    p : float
        Exponent of the multiple.
    dial : float
        Time dial (TD) or time multiplier setting (TMS).
    reset_s : float or None
        Constant of the reset curve in seconds: from full travel to rest in
        dial·reset_s/(1 − M^reset_p) at a multiple below 1. None: resets at once.
    reset_p : float
        Exponent of the reset curve.
    overtravel_us : int
        How long a disc runs on after its current has gone, in microseconds.
    flat_above : float
        Multiple above which the time no longer falls.

    Raises
    ------
    InputError
        With every figure that is not finite or out of its range.

    Notes
    -----
    IEEE Std C37.112-1996, equations for t(I) and the reset time; IEC 60255-151:2009,
    equations of the dependent time characteristics, where b is zero and the reset exponent is
    that of table 2. That the time is constant above 20 times the setting is a limit IEC
    60255-151 names as usual (*from memory*).

    Examples
    --------
    >>> curve = standard_curve("IEEE extremely inverse", dial=1.0)
    >>> round(curve.operate_s(5.0), 3), curve.operate_us(5.0), curve.operate_us(0.9)
    (1.297, 1296700, None)
    """

    name: str
    a: float
    b: float = 0.0
    p: float
    dial: float = 1.0
    reset_s: float | None = None
    reset_p: float = 2.0
    overtravel_us: int = 0
    flat_above: float = 20.0

    def __post_init__(self) -> None:
        errors = ErrorList()
        for what, value, least in (("a", self.a, 0.0), ("p", self.p, 0.0), ("dial", self.dial, 0.0)):
            if not _number(value) or not least < value < math.inf:
                errors.add(f"{what} of curve {self.name!r}", value, "a finite number over zero")
        if not _number(self.b) or not 0 <= self.b < math.inf:
            errors.add(f"b of curve {self.name!r}", self.b, "a finite number of zero or more")
        if self.reset_s is not None and (not _number(self.reset_s) or not 0 < self.reset_s < math.inf):
            errors.add(f"reset_s of curve {self.name!r}", self.reset_s, "a finite number over zero, or None")
        if not _number(self.reset_p) or not 0 < self.reset_p < math.inf:
            errors.add(f"reset_p of curve {self.name!r}", self.reset_p, "a finite number over zero")
        if not _number(self.overtravel_us) or not 0 <= self.overtravel_us <= MAX_US:
            errors.add(f"overtravel_us of curve {self.name!r}", self.overtravel_us, f"from 0 to {MAX_US} microseconds")
        if not _number(self.flat_above) or not self.flat_above > 1:
            errors.add(f"flat_above of curve {self.name!r}", self.flat_above, "a multiple over 1")
        errors.raise_if_any()

    def operate_s(self, multiple: float) -> float:
        """Operate time in seconds at a constant multiple of the pick-up; infinite at 1 and below."""
        if not multiple > 1.0:
            return math.inf
        power = min(multiple, self.flat_above) ** self.p - 1.0
        return math.inf if power <= 0 else self.dial * (self.a / power + self.b)

    def reset_time_s(self, multiple: float) -> float:
        """Time in seconds from full travel to rest at a constant multiple below 1; 0 where it resets at once."""
        if self.reset_s is None:
            return 0.0
        if multiple >= 1.0:
            return math.inf
        rest = 1.0 - max(multiple, 0.0) ** self.reset_p
        return math.inf if rest <= 0 else self.dial * self.reset_s / rest

    def operate_us(self, multiple: float) -> int | None:
        """The operate time rounded once to whole microseconds (1 at least); None where it never operates."""
        return _whole(self.operate_s(multiple))

    def reset_us(self, multiple: float) -> int | None:
        """The reset time rounded once to whole microseconds; None where it stands still."""
        return _whole(self.reset_time_s(multiple))

    def plot(self, ax: Axes | None = None, *, pick_up_a: float | None = None, upto: float = 20.0) -> Axes:
        """Draw the curve on logarithmic axes: time over the multiple of the pick-up, or over current in A."""
        return plot_curves([(self, pick_up_a)], ax, upto=upto)


def _number(value: object) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool)


def _whole(seconds: float) -> int | None:
    """Whole microseconds; a time that never comes to an end, or not within the longest time taken, is None."""
    us = seconds * 1e6
    return None if not us <= MAX_US else max(round(us), 1)


STANDARD: tuple[Curve, ...] = (
    Curve(name="IEEE moderately inverse", a=0.0515, b=0.1140, p=0.02, reset_s=4.85),
    Curve(name="IEEE very inverse", a=19.61, b=0.491, p=2.0, reset_s=21.6),
    Curve(name="IEEE extremely inverse", a=28.2, b=0.1217, p=2.0, reset_s=29.1),
    Curve(name="IEC A", a=0.14, p=0.02, reset_s=13.5),
    Curve(name="IEC B", a=13.5, p=1.0, reset_s=47.3),
    Curve(name="IEC C", a=80.0, p=2.0, reset_s=80.0),
)
"""Curves of IEEE C37.112 and IEC 60255-151 at a dial of 1 (reset constants of A, B and C *from memory*)."""


def standard_curve(
    name: str, *, dial: float = 1.0, reset_by_curve: bool = False, overtravel_us: int = 0
) -> Curve:
    """A standard curve by name.

    Parameters
    ----------
    name : str
        ``"IEC A"`` (inverse), ``"IEC B"`` (very inverse), ``"IEC C"`` (extremely inverse),
        ``"IEEE moderately inverse"``, ``"IEEE very inverse"`` or ``"IEEE extremely inverse"``.
    dial : float
        Time dial, or time multiplier setting.
    reset_by_curve : bool
        Reset as a disc does, by the curve of the standard; else at once.
    overtravel_us : int
        How long a disc runs on, in microseconds.

    Raises
    ------
    InputError
        If there is no curve of that name, or a figure is out of its range.

    Examples
    --------
    >>> round(standard_curve("IEC A").operate_s(10.0), 4)
    2.9706
    """
    for curve in STANDARD:
        if curve.name == name:
            kept = curve.reset_s if reset_by_curve else None
            return replace(curve, dial=dial, reset_s=kept, overtravel_us=overtravel_us)
    names = [c.name for c in STANDARD]
    raise reject("curve", name, f"one of {names}", tip=nearest(name, names))


def dial_for(curve: Curve, multiple: float, time_s: float) -> float:
    """The dial at which a curve takes a time at a multiple of its pick-up.

    Parameters
    ----------
    multiple : float
        Over 1.
    time_s : float
        Time wanted, in seconds.

    Examples
    --------
    >>> round(dial_for(standard_curve("IEC A"), 10.0, 0.7), 3)
    0.236
    """
    at_one = replace(curve, dial=1.0).operate_s(multiple)
    if not math.isfinite(at_one) or not 0 < time_s < math.inf:
        raise reject("dial wanted", (multiple, time_s), "a multiple over 1 and a finite time over zero")
    return time_s / at_one


def plot_curves(
    curves: Iterable[tuple[Curve, float | None]], ax: Axes | None = None, *, upto: float = 20.0
) -> Axes:
    """Draw curves on one pair of logarithmic axes.

    Parameters
    ----------
    curves : iterable of (Curve, pick-up in A or None)
        All with a pick-up (the axis is current) or all without (the axis is the multiple).
    ax : Axes or None
        Where to draw; a new one by default.
    upto : float
        Highest multiple of the pick-up.

    Returns
    -------
    Axes
    """
    import numpy as np

    if ax is None:
        from matplotlib.figure import Figure

        ax = Figure().add_subplot()
    multiples = np.geomspace(1.05, upto, 200)
    in_amperes = False
    for curve, pick_up_a in curves:
        in_amperes |= pick_up_a is not None
        scale = 1.0 if pick_up_a is None else pick_up_a
        ax.loglog(multiples * scale, [curve.operate_s(float(m)) for m in multiples], label=curve.name)
    ax.set_xlabel("current (A)" if in_amperes else "multiple of the pick-up")
    ax.set_ylabel("time (s)")
    ax.grid(visible=True, which="both", alpha=0.3)
    ax.legend()
    return ax
