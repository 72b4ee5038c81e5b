"""Inverse time (rule R10), in the code that every engine shares.

An inverse-time element travels from 0 to ``FULL``. At a constant current it takes the
time t of its curve, rounded once to whole microseconds; its speed is then the whole
number ceil(``FULL`` / t) per microsecond, and all that follows is exact: what it has
travelled is speed times time elapsed, and it operates at the first microsecond at which
``FULL`` is reached. So ∫dt/t(I) = 1, and a constant current operates after exactly t
(for t below 2**30 microseconds, eighteen minutes).

Speeds depend on the topology only. One over zero travels on. ``AT_ONCE`` is that of an
element below drop-out that resets at once; one below zero that of a disc that goes back by
its reset curve; zero that of one that stands still, between drop-out and pick-up.

A disc with overtravel runs on for that time at its last speed once its current has fallen,
and operates if it gets to ``FULL`` by then; only after that does it go back.
"""

from __future__ import annotations

from typing import NamedTuple

from schemesim.scheme.curves import Curve

FULL = 1 << 60
"""Full travel."""

AT_ONCE = -FULL
"""Speed of an element that resets at once."""


def speed_for(time_us: int) -> int:
    """The speed at which full travel takes a time (one microsecond or more).

    Examples
    --------
    >>> speed = speed_for(1_296_700)
    >>> Motion(rate=speed).due()
    1296700
    """
    return -(-FULL // time_us)


def rate_of(curve: Curve, multiple: float, held: bool) -> int:
    """The speed of an element at a multiple of its pick-up.

    Parameters
    ----------
    curve : Curve
    multiple : float
        Quantity measured ÷ pick-up.
    held : bool
        The quantity lies between drop-out and pick-up: an element that has started stands still.

    Returns
    -------
    int
        Over zero, zero, below zero, or ``AT_ONCE``.
    """
    if multiple >= 1.0:
        time_us = curve.operate_us(multiple)
        return 0 if time_us is None else speed_for(time_us)
    if held:
        return 0
    if curve.reset_s is None:
        return AT_ONCE
    time_us = curve.reset_us(multiple)
    return 0 if time_us is None else -speed_for(time_us)


class Motion(NamedTuple):
    """How an element moves from one instant on; all times in microseconds.

    Attributes
    ----------
    progress : int
        Travel at ``since``.
    rate : int
        Speed from ``since`` on; where the disc runs on, from ``until`` on.
    last, until : int
        The speed at which it runs on after its current has fallen, and when that ends.
    """

    progress: int = 0
    since: int = 0
    rate: int = AT_ONCE
    last: int = 0
    until: int = 0

    def at(self, now: int) -> int:
        """Travel at an instant at or after ``since``, from 0 to ``FULL``."""
        progress, since = self.progress, self.since
        if self.until > since:
            end = min(now, self.until)
            progress, since = min(FULL, progress + (end - since) * self.last), end
            if now <= self.until:
                return progress
        if self.rate == AT_ONCE:
            return 0
        return max(0, min(FULL, progress + (now - since) * self.rate))

    def due(self) -> int | None:
        """When it gets to ``FULL`` if nothing changes; None for never."""
        if self.rate > 0:
            return self.since - (self.progress - FULL) // self.rate
        if self.until > self.since:
            when = self.since - (self.progress - FULL) // self.last
            return when if when <= self.until else None
        return None

    def turn(self, now: int, rate: int, overtravel_us: int = 0) -> Motion:
        """The motion after the speed changed; where the current has fallen, the disc runs on first."""
        progress = self.at(now)
        if rate > 0 or progress >= FULL:
            return Motion(progress, now, rate)
        if self.rate > 0:
            return Motion(progress, now, rate, self.rate, now + overtravel_us)
        if self.until > now:
            return Motion(progress, now, rate, self.last, self.until)
        return Motion(progress, now, rate)
