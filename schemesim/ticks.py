"""Integer time: inside the library a time is a whole number of microseconds (rule R1).

The face takes milliseconds or cycles and converts once, here.
"""

from __future__ import annotations

import math

from schemesim.errors import reject

US_PER_MS = 1000
MAX_MS = 1e9
"""Longest time accepted (about eleven days): more is a slip of units."""


def from_ms(value_ms: float, what: str = "time") -> int:
    """Microseconds of a time given in milliseconds.

    Parameters
    ----------
    value_ms : float
        Time in ms; zero or more, finite.
    what : str
        Name used in the error.

    Returns
    -------
    int
        The time in microseconds, rounded to the nearest whole one.

    Raises
    ------
    InputError
        If the value is negative, NaN, infinite, not a number or over ``MAX_MS``.

    Examples
    --------
    >>> from_ms(12.5)
    12500
    """
    if isinstance(value_ms, bool) or not isinstance(value_ms, (int, float)):
        raise reject(what, value_ms, "a number of milliseconds")
    if not math.isfinite(value_ms) or value_ms < 0 or value_ms > MAX_MS:
        raise reject(what, value_ms, f"a finite time from 0 to {MAX_MS:g} ms")
    return round(value_ms * US_PER_MS)


def looks_like_seconds(value_ms: float, least_ms: float = 1.0) -> str:
    """A hint where a time in ms is so short that it can only be meant in seconds, or an empty text.

    Parameters
    ----------
    value_ms : float
    least_ms : float
        Shortest time that is plausible besides zero: 1 ms for anything that a relay or breaker does, more for a
        delay that waits for another, or a limit.

    Examples
    --------
    >>> looks_like_seconds(0.02), looks_like_seconds(20.0), looks_like_seconds(1, least_ms=10)
    ('is it in seconds? 0.02 s is 20 ms', '', 'is it in seconds? 1 s is 1000 ms')
    """
    return f"is it in seconds? {value_ms:g} s is {1000 * value_ms:g} ms" if 0 < value_ms < least_ms else ""


def looks_like_percent(share: float) -> str:
    """A hint where a share from 0 to 1 can only be meant in percent, or an empty text.

    Examples
    --------
    >>> looks_like_percent(50), looks_like_percent(0.5)
    ('is it in percent? 50 % is 0.5', '')
    """
    return f"is it in percent? {share:g} % is {share / 100:g}" if 1 < share <= 100 else ""


def limit_mistake(limit_us: object) -> tuple[str, str] | None:
    """What is wrong with a limit of the clearing time in microseconds: what was expected, and a hint; or None.

    A limit over zero and under a millisecond can only be meant in ms.

    Examples
    --------
    >>> limit_mistake(150)
    ('a whole number of microseconds, zero or at least 1000', 'is it in ms? 150 ms is 150000')
    >>> limit_mistake(150_000) is None
    True
    """
    if isinstance(limit_us, bool) or not isinstance(limit_us, int) or limit_us < 0:
        return "a whole number of microseconds, zero or more", ""
    if 0 < limit_us < US_PER_MS:
        expected = f"a whole number of microseconds, zero or at least {US_PER_MS}"
        return expected, f"is it in ms? {limit_us} ms is {limit_us * US_PER_MS}"
    return None


def check_limit_us(limit_us: object) -> None:
    """Refuse a limit that :func:`limit_mistake` finds wrong.

    Raises
    ------
    InputError
    """
    mistake = limit_mistake(limit_us)
    if mistake is not None:
        raise reject("limit_us", limit_us, mistake[0], tip=mistake[1])


def from_cycles(cycles: float, frequency_hz: float, what: str = "time") -> int:
    """Microseconds of a time given in cycles of the power frequency.

    Raises
    ------
    InputError
        If the cycles or the frequency are not positive finite numbers.

    Examples
    --------
    >>> from_cycles(3, 60)
    50000
    """
    if isinstance(frequency_hz, bool) or not isinstance(frequency_hz, (int, float)):
        raise reject("power frequency", frequency_hz, "a number of hertz")
    if not math.isfinite(frequency_hz) or frequency_hz <= 0:
        raise reject("power frequency", frequency_hz, "a finite frequency over 0 Hz")
    if isinstance(cycles, bool) or not isinstance(cycles, (int, float)):
        raise reject(what, cycles, "a number of cycles")
    return from_ms(cycles * 1000.0 / frequency_hz, what)


def to_ms(ticks: int) -> float:
    """Milliseconds of a time in microseconds.

    Examples
    --------
    >>> to_ms(12500)
    12.5
    """
    return ticks / US_PER_MS


def to_cycles(ticks: int, frequency_hz: float) -> float:
    """Cycles of the power frequency of a time in microseconds.

    Examples
    --------
    >>> to_cycles(50000, 60)
    3.0
    """
    return ticks * frequency_hz / 1e6
