"""What a single value of a scenario file may be: names, numbers, choices, times.

Each type here is a strict check in the file's own words. A truth value is no number, a
number is no name; what is refused says what would have been accepted and guesses the
slip behind it.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from enum import StrEnum
from typing import Annotated, Any, NoReturn

from pydantic import PlainValidator
from pydantic_core import PydanticCustomError

from schemesim.errors import InputError, nearest
from schemesim.scenario.locate import Path
from schemesim.scheme.delays import Delay, Fixed
from schemesim.scheme.distributions import MAX_SIGMA, Empirical, LogNormal, Normal, Triangular, Uniform
from schemesim.ticks import MAX_MS, US_PER_MS, from_cycles, from_ms

MAX_NAME = 200
"""Most characters of a name."""
MAX_TEXT = 20_000
"""Most characters of a description."""
MAX_SAMPLE = 10_000
"""Most times in a sample."""

_NUMBER = r"[-+]?[0-9][0-9_]*(?:[.,][0-9]+)?(?:[eE][-+]?[0-9]+)?"
_WITH_UNIT = re.compile(rf"({_NUMBER})\s*([A-Za-z%µ/ ]+)")
_FORBIDDEN = frozenset("\n\t\r\0@")


@dataclass(frozen=True)
class Complaint:
    """A mistake inside a value: where below it, what was got and expected, and a tip."""

    below: Path
    value: object
    expectation: str
    tip: str = ""


def refuse(complaints: Iterable[Complaint]) -> NoReturn:
    """Give complaints to pydantic, which adds the path of the value."""
    raise PydanticCustomError("plain", "refused", {"complaints": tuple(complaints)})


def no(value: object, expectation: str, tip: str = "") -> NoReturn:
    """Refuse a value."""
    refuse([Complaint((), value, expectation, tip)])


def number_tip(value: object) -> str:
    """The slip behind something that should have been a number."""
    if isinstance(value, bool):
        return "a truth value is no number"
    if value is None:
        return "leave the key out, or give it a value"
    if not isinstance(value, str):
        return ""
    text = value.strip()
    if re.fullmatch(r"[0-9]+:[0-9:.]+", text):
        return "a clock time is text here"
    match = _WITH_UNIT.fullmatch(text)
    if match:
        if match[2].strip() == "%":
            return "write a percentage as a share: 3 % is 0.03"
        return f"write {match[1]} alone; the key states the unit"
    if "," in text and re.fullmatch(_NUMBER, text):
        return "write a decimal point, not a comma"
    if "_" in text and re.fullmatch(_NUMBER, text):
        return "write the digits without underscores"
    if re.fullmatch(r"[-+]?0[0-9]+|0[xob][0-9a-fA-F]+", text):
        return "write a decimal number without leading zeros"
    if re.fullmatch(_NUMBER + r"|[-+]?\.[0-9]+", text):
        return "write it without quotes"
    return ""


def text_tip(value: object) -> str:
    """The slip behind something that should have been a text."""
    if isinstance(value, bool):
        return f'put quotes around it: "{str(value).lower()}"'
    if isinstance(value, (int, float)):
        return f'put quotes around it: "{value}"'
    return "leave the key out, or give it a value" if value is None else ""


def take_name(value: object) -> str:
    """A name: text without '@', tabs or outer blanks."""
    if not isinstance(value, str):
        no(value, "a name (text)", text_tip(value))
    if not value or value != value.strip() or _FORBIDDEN & set(value):
        no(value, "text without '@', tabs or outer blanks, and not empty")
    if len(value) > MAX_NAME:
        no(value, f"a name of at most {MAX_NAME} characters")
    return value


def take_text(value: object) -> str:
    """Any text."""
    if not isinstance(value, str):
        no(value, "a text", text_tip(value))
    if len(value) > MAX_TEXT:
        no(value, f"a text of at most {MAX_TEXT} characters")
    return value


def take_station(value: object) -> str:
    """The name of a station, or an empty text for none."""
    return "" if value == "" and isinstance(value, str) else take_name(value)


def take_flag(value: object) -> bool:
    """true or false."""
    if isinstance(value, bool):
        return value
    tip = ""
    if isinstance(value, str) and value.lower() in {"yes", "on", "y", "true"}:
        tip = "write true, without quotes"
    elif isinstance(value, str) and value.lower() in {"no", "off", "n", "false"}:
        tip = "write false, without quotes"
    elif value is None:
        tip = "leave the key out, or give it a value"
    no(value, "true or false", tip)


def number(
    low: float = -math.inf, high: float = math.inf, *, over: bool = False, what: str = ""
) -> Callable[[object], float]:
    """A check for a finite number within bounds (``over``: over the lower one).

    Examples
    --------
    >>> number(0, 1)(0.25)
    0.25
    """
    if not what:
        what = f"a number over {low:g}" if over else f"a number of {low:g} or more"
        if high < math.inf:
            what = f"{what}, at most {high:g}" if over else f"a number from {low:g} to {high:g}"

    def take(value: object) -> float:
        if isinstance(value, bool) or not isinstance(value, (int, float)):
            no(value, what, number_tip(value))
        if not math.isfinite(value) or not low <= value <= high or (over and value == low):
            tip = "write a percentage as a share: 3 % is 0.03" if (low, high) == (0, 1) and 1 < value <= 100 else ""
            no(value, what, tip)
        return float(value)

    return take


def whole(low: int, high: int) -> Callable[[object], int]:
    """A check for a whole number within bounds."""
    what = f"a whole number from {low} to {high}"

    def take(value: object) -> int:
        if isinstance(value, bool) or not isinstance(value, (int, float)):
            no(value, what, number_tip(value))
        if not isinstance(value, int) or not low <= value <= high:
            no(value, what)
        return value

    return take


def choice(kind: type[StrEnum]) -> Callable[[object], StrEnum]:
    """A check for one of the words of an enumeration."""
    words = [str(member) for member in kind]

    def take(value: object) -> StrEnum:
        if not isinstance(value, str) or value not in words:
            tip = nearest(value, words) if isinstance(value, str) else text_tip(value)
            no(value, f"one of {', '.join(words)}", tip)
        return kind(value)

    return take


Name = Annotated[str, PlainValidator(take_name)]
Station = Annotated[str, PlainValidator(take_station)]
Text = Annotated[str, PlainValidator(take_text)]
Flag = Annotated[bool, PlainValidator(take_flag)]
NotNegative = Annotated[float, PlainValidator(number(0))]
OverZero = Annotated[float, PlainValidator(number(0, over=True))]
Share = Annotated[float, PlainValidator(number(0, 1))]
Rate = Annotated[float, PlainValidator(number(0, 1e6))]


def take_limit_ms(value: object) -> float:
    """A limit in ms: fixed, and long enough not to be meant in seconds."""
    found = number(0, MAX_MS, over=True, what=f"a time over 0, at most {MAX_MS:g} ms")(value)
    if found < 1:
        no(value, "a time of 1 ms or more", f"is it in seconds? {found:g} s is {1000 * found:g} ms")
    return found


# --- times ----------------------------------------------------------------------------

_A_TIME = f"a time from 0 to {MAX_MS:g}"
_FORMS: dict[str, tuple[str, ...]] = {
    "uniform": ("low", "high"),
    "triangular": ("low", "mode", "high"),
    "normal": ("mean", "sd", "low", "high"),
    "lognormal": ("median", "sigma", "low", "high"),
}
_UNSCALED = frozenset({"sigma"})


@dataclass(frozen=True)
class Time:
    """A time as it stands in a file: numbers in ms or cycles, and the form of their distribution."""

    form: str
    numbers: tuple[float, ...]

    def delay(self, frequency_hz: float | None) -> Delay:
        """The delay; ``frequency_hz`` is given where the numbers are cycles, None where they are ms."""

        def us(x: float) -> int:
            return from_ms(x) if frequency_hz is None else from_cycles(x, frequency_hz)

        n = self.numbers
        match self.form:
            case "fixed":
                return Fixed(us(n[0]))
            case "uniform":
                return Uniform(us(n[0]), us(n[1]))
            case "triangular":
                return Triangular(us(n[0]), us(n[1]), us(n[2]))
            case "normal":
                factor = US_PER_MS * (1.0 if frequency_hz is None else 1000.0 / frequency_hz)
                return Normal(us(n[0]), round(n[1] * factor, 3), us(n[2]), us(n[3]))
            case "lognormal":
                return LogNormal(us(n[0]), n[1], us(n[2]), us(n[3]))
        return Empirical(tuple(us(x) for x in n))


def take_time(value: object) -> Time:
    """A time, fixed or random: a number, or a mapping of one form of distribution to its numbers."""
    if not isinstance(value, dict):
        return Time("fixed", (_time(value, ()),))
    forms = [*_FORMS, "sample"]
    expected = f"a number, or a mapping of one of {', '.join(forms)} to its numbers"
    if len(value) != 1:
        no(sorted(value), expected)
    form, given = next(iter(value.items()))
    if form not in forms:
        refuse([Complaint((form,), form, expected, nearest(form, forms))])
    numbers = _sample(given) if form == "sample" else _numbers(form, given)
    time = Time(form, numbers)
    try:
        time.delay(None)
    except InputError as error:
        complaints = [Complaint((form,), list(numbers), _plain(form, p.subject, p.expectation)) for p in error.problems]
        refuse(complaints)
    return time


def _time(value: object, below: Path) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        refuse([Complaint(below, value, _A_TIME, number_tip(value))])
    if not math.isfinite(value) or not 0 <= value <= MAX_MS:
        refuse([Complaint(below, value, _A_TIME)])
    return float(value)


def _sample(given: object) -> tuple[float, ...]:
    if not isinstance(given, list) or not 1 <= len(given) <= MAX_SAMPLE:
        refuse([Complaint(("sample",), given, f"a list of 1 to {MAX_SAMPLE} times")])
    return _all((("sample", i), _A_TIME, number(0, MAX_MS), x) for i, x in enumerate(given))


def _numbers(form: str, given: object) -> tuple[float, ...]:
    keys = _FORMS[form]
    if isinstance(given, list) and form in {"uniform", "triangular"}:
        if len(given) != len(keys):
            refuse([Complaint((form,), given, f"{len(keys)} numbers: {', '.join(keys)}")])
        items: list[tuple[str, int | str, object]] = [(k, i, given[i]) for i, k in enumerate(keys)]
    elif isinstance(given, dict) and set(given) == set(keys):
        items = [(k, k, given[k]) for k in keys]
    else:
        refuse([Complaint((form,), given, f"a mapping with the keys {', '.join(keys)}")])
    return _all(((form, at), *_bounds(key), x) for key, at, x in items)


def _bounds(key: str) -> tuple[str, Callable[[object], float]]:
    if key in _UNSCALED:
        what = f"a number over 0, at most {MAX_SIGMA:g}"
        return what, number(0, MAX_SIGMA, over=True)
    if key == "sd":
        return f"a time over 0, at most {MAX_MS:g}", number(0, MAX_MS, over=True)
    return _A_TIME, number(0, MAX_MS)


def _all(items: Iterable[tuple[Path, str, Callable[[object], float], object]]) -> tuple[float, ...]:
    good: list[float] = []
    bad: list[Complaint] = []
    for below, expectation, take, value in items:
        try:
            good.append(take(value))
        except PydanticCustomError:
            bad.append(Complaint(below, value, expectation, number_tip(value)))
    if bad:
        refuse(bad)
    return tuple(good)


def _plain(form: str, subject: str, expectation: str) -> str:
    """A complaint of a delay about its order, in the file's unit-free words."""
    if expectation.startswith("at least"):
        order = {"normal": "low, mean, high", "lognormal": "low, median, high"}.get(form, ", ".join(_FORMS[form]))
        return f"{order} in rising order"
    return expectation.replace("a whole number of microseconds", "a time") if subject else expectation


Duration = Annotated[Time, PlainValidator(take_time)]


def delay_data(delay: Delay) -> Any:
    """A delay as a file says it, in ms.

    Examples
    --------
    >>> delay_data(Fixed(12_500)), delay_data(Uniform(1000, 2000))
    (12.5, {'uniform': [1, 2]})
    """
    match delay:
        case Fixed():
            return ms(delay.us)
        case Uniform():
            return {"uniform": [ms(delay.low_us), ms(delay.high_us)]}
        case Triangular():
            return {"triangular": [ms(delay.low_us), ms(delay.mode_us), ms(delay.high_us)]}
        case Normal():
            sd, low, high = ms(delay.sd_us), ms(delay.low_us), ms(delay.high_us)
            return {"normal": {"mean": ms(delay.mean_us), "sd": sd, "low": low, "high": high}}
        case LogNormal():
            low, high = ms(delay.low_us), ms(delay.high_us)
            return {"lognormal": {"median": ms(delay.median_us), "sigma": delay.sigma, "low": low, "high": high}}
        case Empirical():
            return {"sample": [ms(us) for us in delay.sample_us]}
    no(delay, "a delay that a file can say")


def ms(us: float) -> int | float:
    """Milliseconds, whole where they are."""
    value = us / US_PER_MS
    return int(value) if value.is_integer() else value
