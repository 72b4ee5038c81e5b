"""Checks that every kind of delay makes of its own figures: whole microseconds in bounds, in order."""

from __future__ import annotations

import operator
from typing import Any

import numpy as np

from schemesim.errors import ErrorList
from schemesim.ticks import MAX_MS, US_PER_MS

MAX_US = int(MAX_MS * US_PER_MS)
"""Longest time accepted, in microseconds."""

A_TIME = f"a whole number of microseconds from 0 to {MAX_US}"
"""What is expected of a time, in the words of an error."""


def whole_us(value: object) -> int | None:
    """The value as a plain whole number of microseconds, or None where it is not one in bounds."""
    if isinstance(value, (bool, np.bool_)):
        return None
    number: Any = value
    try:
        time = operator.index(number)
    except TypeError:
        return None
    return time if 0 <= time <= MAX_US else None


def take_times(delay: object, errors: ErrorList, *names: str) -> None:
    """Check times named in rising order; keep them as plain integers."""
    kind = type(delay).__name__
    last: tuple[str, int] | None = None
    for name in names:
        value = getattr(delay, name)
        time = whole_us(value)
        if time is None:
            errors.add(f"{kind} {name}", value, A_TIME)
            continue
        object.__setattr__(delay, name, time)
        if last is not None and time < last[1]:
            errors.add(f"{kind} {name}", time, f"at least {last[0]} = {last[1]}")
        else:
            last = name, time


def take_spread(delay: object, errors: ErrorList, name: str, most: float, tip: str) -> None:
    """Check a spread: a finite number over zero; keep it as a plain float."""
    value = getattr(delay, name)
    is_number = isinstance(value, (int, float, np.integer, np.floating)) and not isinstance(value, bool)
    if not is_number or not 0 < value <= most:
        errors.add(f"{type(delay).__name__} {name}", value, f"a number over 0, at most {most:g}", tip=tip)
        return
    object.__setattr__(delay, name, float(value))
