"""Grading of curves in series: the dial of the one behind that waits for the one in front."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

from schemesim.errors import ErrorList, reject
from schemesim.scheme.curves import Curve
from schemesim.scheme.settings import Choice


@dataclass(frozen=True, slots=True)
class Seen:
    """One fault as two elements in series see it.

    Parameters
    ----------
    name : str
        Where, and in what state.
    current_a : float
        At the element behind.
    front_s : float
        Operate time of the element in front.
    """

    name: str
    current_a: float
    front_s: float


def graded(curve: Curve, pick_up_a: float, faults: Sequence[Seen], margin_s: float = 0.3) -> tuple[Curve, Choice]:
    """The curve with the smallest dial at which it waits out the element in front by a margin at every fault.

    Parameters
    ----------
    curve : Curve
        Its dial is replaced.
    pick_up_a : float
        Of the element behind.
    faults : sequence of Seen
        Those below the pick-up are left out: the element behind does not see them.
    margin_s : float
        Breaker time, overtravel, errors and safety: 0.3 to 0.4 s (common practice).

    Returns
    -------
    Curve
        With the dial chosen.
    Choice
        The dial, and the fault that decides it.

    Raises
    ------
    InputError
        If no fault is seen by the element behind, or a figure is out of its range.

    Examples
    --------
    >>> from schemesim.scheme.curves import standard_curve
    >>> curve, choice = graded(standard_curve("IEC A"), 200.0, [Seen("F1", 2000.0, 0.5), Seen("F2", 1000.0, 0.7)])
    >>> round(curve.dial, 4), choice.reason
    (0.2693, 'waits 0.3 s longer than 0.5 s at F1')
    """
    errors = ErrorList()
    if not 0 < pick_up_a < math.inf:
        errors.add("pick_up_a", pick_up_a, "a finite number over zero")
    if not 0 <= margin_s < math.inf:
        errors.add("margin_s", margin_s, "a finite time of zero or more")
    for fault in faults:
        if not (0 <= fault.current_a < math.inf and 0 <= fault.front_s < math.inf):
            errors.add(f"fault {fault.name!r}", (fault.current_a, fault.front_s), "a finite current and time")
    errors.raise_if_any()
    unit = replace(curve, dial=1.0)
    dials = [
        ((f.front_s + margin_s) / unit.operate_s(f.current_a / pick_up_a), f.name, f)
        for f in faults
        if f.current_a > pick_up_a
    ]
    if not dials:
        raise reject("faults", [f.name for f in faults], f"at least one above the pick-up of {pick_up_a:g} A")
    dial, _, decides = max(dials, key=lambda item: (item[0], item[1]))
    reason = f"waits {margin_s:g} s longer than {decides.front_s:g} s at {decides.name}"
    return replace(curve, dial=dial), Choice("dial", dial, reason)
