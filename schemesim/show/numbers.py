"""Numbers as engineers read them: percent, probabilities, times, rates, and brackets rounded outward.

Digits of a bracket are cut outward, so what is printed still holds.
"""

from __future__ import annotations

import math
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Decimal

NONE = "–"
"""Where there is no value."""

_SHOWN_ALIKE = 1e-11  # relative width below which one number is shown
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def between(low: float, high: float) -> str:
    """A low and a high bound in plain digits, cut outward.

    Examples
    --------
    >>> between(0.25, 0.25), between(1.2e-9, 3.1e-9), between(0.0, float("inf"))
    ('0.25', '1.2e-9…3.1e-9', '0…inf')
    """
    a, b = float(low), float(high)
    if math.isinf(a) or math.isinf(b):
        return f"{a:.6g}…{b:.6g}"
    if b - a <= _SHOWN_ALIKE * max(abs(a), abs(b)):
        return f"{(a if a == b else (a + b) / 2):.10g}"
    x, y = outward(a, b)
    return f"{_plain(x)}…{_plain(y)}"


def outward(low: float, high: float) -> tuple[Decimal, Decimal]:
    """Two bounds, each with no more digits than tell them apart, never moved inward."""
    place = Decimal(1).scaleb(math.floor(math.log10(high - low)))
    if high - low < 5 * float(place):
        place = place.scaleb(-1)
    return (
        Decimal(repr(low)).quantize(place, ROUND_FLOOR),
        Decimal(repr(high)).quantize(place, ROUND_CEILING),
    )


def probability(low: float, high: float | None = None) -> str:
    """A probability, or its bracket: in percent where that reads well, else as a power of ten.

    Below one in a hundred it is a power of ten; above, percent, with as many nines as matter.

    Parameters
    ----------
    low, high : float
        Bounds; one number where only one is given.

    Examples
    --------
    >>> probability(0.25), probability(0.99971234), probability(1.234e-5), probability(0), probability(1)
    ('25 %', '99.971 %', '1.23×10⁻⁵', '0', '1')
    >>> probability(0.9997123, 0.9997154), probability(1.2e-5, 1.31e-5), probability(0, 2e-4), probability(0, 1)
    ('99.97123…99.97154 %', '(1.20…1.31)×10⁻⁵', '(0…2.0)×10⁻⁴', '0…100 %')
    """
    a, b = float(low), float(low if high is None else high)
    if math.isnan(a) or math.isnan(b):
        return NONE
    if a == b or b - a <= _SHOWN_ALIKE * max(abs(a), abs(b)):
        value = a if a == b else (a + b) / 2
        if value in (0.0, 1.0):
            return f"{value:g}"
        if abs(value) < 0.01:
            return power(value)
        digits = max(2, math.ceil(-math.log10(1 - value))) if 0.5 < value < 1 else 3
        places = (
            max(digits - 1, 0) if 0.5 < value < 1 else max(digits - 1 - math.floor(math.log10(abs(value) * 100)), 0)
        )
        shown = Decimal(repr(value)).scaleb(2).quantize(Decimal(1).scaleb(-places), ROUND_HALF_EVEN)
        return f"{_apart(_cut(shown))} %"
    x, y = outward(a, b)
    if b < 0.01 and a > -0.01:
        return _powers(x, y)
    return f"{_apart(x.scaleb(2))}…{_apart(y.scaleb(2))} %"


def power(value: float, digits: int = 3) -> str:
    """A number times a power of ten.

    Examples
    --------
    >>> power(1.234e-5), power(3e-4), power(0.0), power(2.5e7)
    ('1.23×10⁻⁵', '3×10⁻⁴', '0', '2.5×10⁷')
    """
    if value == 0:
        return "0"
    mantissa, _, exponent = f"{value:.{digits - 1}e}".partition("e")
    if "." in mantissa:
        mantissa = mantissa.rstrip("0").rstrip(".")
    mantissa = mantissa.replace("-", "−")
    return f"{mantissa}×10{str(int(exponent)).translate(_SUPERSCRIPT)}"


def quantity(low: float, high: float | None = None) -> str:
    """A figure with a unit of its own (a mean, MW, money): four digits, thousands apart; tiny ones as a power of ten.

    Examples
    --------
    >>> quantity(1234567.0), quantity(0.123456), quantity(2e-6), quantity(3.0, 3.5), quantity(12, math.inf)
    ('1 235 000', '0.1235', '2×10⁻⁶', '3.0…3.5', '12 or more')
    """
    a, b = float(low), float(low if high is None else high)
    if math.isnan(a) or math.isnan(b):
        return NONE
    if math.isinf(b) and not math.isinf(a):
        return f"{quantity(a)} or more"
    if math.isinf(a):
        return "no bound"
    if a == b or b - a <= _SHOWN_ALIKE * max(abs(a), abs(b)):
        value = a if a == b else (a + b) / 2
        if value and abs(value) < 1e-3:
            return power(value)
        if value == round(value) and abs(value) < 1e4:
            return f"{value:.0f}"
        return _apart(_cut(Decimal(f"{value:.4g}")))
    x, y = outward(a, b)
    if max(abs(a), abs(b)) < 1e-3:
        return _powers(x, y)
    return f"{_apart(x)}…{_apart(y)}"


def time_ms(low: float, high: float | None = None) -> str:
    """A time in ms, three decimals at most; infinity is a fault that may stay.

    Examples
    --------
    >>> time_ms(70.0), time_ms(82.125), time_ms(70, 230), time_ms(70, math.inf), time_ms(math.nan)
    ('70', '82.125', '70…230', '70…never', '–')
    """
    a, b = float(low), float(low if high is None else high)
    if math.isnan(a) or math.isnan(b):
        return NONE
    texts = ["never" if math.isinf(t) else _apart(_cut(Decimal(f"{t:.3f}"))) for t in (a, b)]
    return texts[0] if texts[0] == texts[1] else "…".join(texts)


def _powers(x: Decimal, y: Decimal) -> str:
    """Two bounds times one power of ten."""
    exponent = max(v.adjusted() for v in (x, y) if v)
    shown = [f"{v.scaleb(-exponent):f}".replace("-", "−") if v else "0" for v in (x, y)]
    return f"({'…'.join(shown)})×10{str(exponent).translate(_SUPERSCRIPT)}"


def _plain(x: Decimal) -> str:
    """Digits without trailing zeros; an exponent only where they would be many."""
    x = x.normalize()
    if x == 0:
        return "0"
    return f"{x:f}" if -5 <= x.adjusted() < 12 else f"{x:e}"


def _apart(x: Decimal) -> str:
    """Digits as they are, thousands apart."""
    if x == 0:
        return "0"
    return f"{x:,f}".replace(",", " ").replace("-", "−") if -6 <= x.adjusted() < 12 else f"{x.normalize():e}"


def _cut(x: Decimal) -> Decimal:
    """Without trailing zeros behind the point."""
    return x.quantize(Decimal(1)) if x == x.to_integral_value() else x.normalize()
