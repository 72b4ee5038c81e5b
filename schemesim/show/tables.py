"""Tables as HTML: two columns of bounds become one bracket, numbers are written as engineers read them.

How a column is written follows from its name, in which its unit stands: ``p_…`` and other
shares are probabilities, ``…_ms`` times, the rest quantities. Headings stay the names of the
frame's columns, so that what is seen can be asked for.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Iterable
from html import escape
from numbers import Real
from typing import TYPE_CHECKING, Any

from schemesim.show.numbers import NONE, probability, quantity, time_ms

if TYPE_CHECKING:
    import pandas as pd

MOST_ROWS = 60
"""Rows shown in a notebook; the frame has them all."""

_SHARES = frozenset({"p", "dependability", "security", "unexplored", "probability", "birnbaum", "criticality_ratio"})
_MS = re.compile(r"(^|_)ms(_|$)")


def column_format(name: str) -> Callable[..., str]:
    """How the numbers of a column are written.

    Examples
    --------
    >>> column_format("p_cleared")(0.5), column_format("t_clear_ms_nominal")(70.0), column_format("load_lost_mw")(12.5)
    ('50 %', '70', '12.5')
    """
    if _MS.search(name):
        return time_ms
    if name in _SHARES or (name.startswith("p_") and not name.endswith("_per_yr")):
        return probability
    return quantity


def cells(frame: pd.DataFrame) -> tuple[list[str], list[list[str]], list[bool]]:
    """Headings, the text of each cell, and which columns are numbers.

    ``x_low`` with ``x_high`` beside it become ``x``, a bracket; plain ``low`` and ``high`` one
    named ``bracket``. Where a column ``measure`` names what a row is about, it tells how its
    numbers are written.
    """
    names = [str(c) for c in frame.columns]
    told = [str(m) for m in frame["measure"]] if "measure" in names else None
    columns: list[tuple[str, list[str], bool]] = []
    i = 0
    while i < len(names):
        values = frame.iloc[:, i].tolist()
        stem = _stem(*names[i : i + 2])
        write = [column_format(n) for n in (told or [stem or names[i]] * len(frame))]
        highs = frame.iloc[:, i + 1].tolist() if stem else []
        if stem and all(_is_pair(a, b) for a, b in zip(values, highs, strict=True)):
            columns.append((stem, [_pair(w, a, b) for w, a, b in zip(write, values, highs, strict=True)], True))
            i += 2
        else:
            numeric = any(_is_number(v) for v in values) and all(_is_number(v) or _missing(v) for v in values)
            columns.append((names[i], [_cell(w, v) for w, v in zip(write, values, strict=True)], numeric))
            i += 1
    texts = [[column[row] for _, column, _ in columns] for row in range(len(frame))]
    return [n for n, _, _ in columns], texts, [numeric for _, _, numeric in columns]


def _stem(low: str, high: str = "") -> str:
    """What two columns side by side are the bounds of; empty if they are none."""
    if (low, high) == ("low", "high"):
        return "bracket"
    stem = low.removesuffix("_low")
    return stem if stem != low and high == f"{stem}_high" else ""


def _is_pair(low: Any, high: Any) -> bool:
    if _missing(low) or _missing(high):
        return True
    return _is_number(low) and _is_number(high) and low <= high


def to_html(frame: pd.DataFrame, *, caption: str = "", most: int = MOST_ROWS) -> str:
    """A frame as an HTML table.

    Parameters
    ----------
    frame : pandas.DataFrame
    caption : str
    most : int
        Rows written; how many more there are is said below.
    """
    headings, texts, numeric = cells(frame)
    side = [' style="text-align:right;white-space:nowrap"' if n else ' style="text-align:left"' for n in numeric]
    lines = ['<table class="dataframe">']
    if caption:
        lines.append(f"<caption>{escape(caption)}</caption>")
    lines.append(f"<thead><tr>{_row('th', headings, side)}</tr></thead><tbody>")
    lines += [f"<tr>{_row('td', row, side)}</tr>" for row in texts[:most]]
    lines.append("</tbody></table>")
    if len(texts) > most:
        lines.append(f"<p>{len(texts) - most} more rows in <code>table()</code>.</p>")
    return "\n".join(lines)


def readable(frame: pd.DataFrame) -> pd.DataFrame:
    """The same table as text that is fit to be printed: brackets in one column, numbers as engineers read them.

    The frames that results give hold plain numbers, to be computed with; this one is for a
    report. Either can be written by pandas: ``to_csv``, ``to_excel``, ``to_latex``.

    Examples
    --------
    >>> import pandas as pd
    >>> frame = pd.DataFrame({"bus": ["B1"], "p_cleared_low": [0.999], "p_cleared_high": [0.9991]})
    >>> readable(frame).to_dict("records")
    [{'bus': 'B1', 'p_cleared': '99.900…99.910 %'}]
    """
    import pandas as pd  # heavy: only when a table is asked for

    headings, texts, _ = cells(frame)
    return pd.DataFrame(texts, columns=headings, index=frame.index, dtype=object)


def ranked(frame: pd.DataFrame, *by: str) -> pd.DataFrame:
    """The rows sorted by columns, or by the middle of their bounds, the greatest first; ties keep their order."""
    keys = {}
    for name in by:
        if name in frame.columns:
            keys[name] = frame[name]
        else:
            keys[name] = frame[f"{name}_low"] + frame[f"{name}_high"]
    order = frame.assign(**{f"__{n}": k for n, k in keys.items()})
    order = order.sort_values([f"__{n}" for n in keys], ascending=False, kind="stable")
    return frame.loc[order.index]


def _row(tag: str, texts: Iterable[str], side: Iterable[str]) -> str:
    return "".join(f"<{tag}{s}>{escape(t)}</{tag}>" for t, s in zip(texts, side, strict=True))


def _is_number(value: Any) -> bool:
    return isinstance(value, Real) and type(value).__name__ not in ("bool", "bool_") and not _missing(value)


def _missing(value: Any) -> bool:
    return type(value).__name__ in ("NoneType", "NAType", "NaTType") or (isinstance(value, float) and math.isnan(value))


def _pair(write: Callable[..., str], low: Any, high: Any) -> str:
    return NONE if _missing(low) or _missing(high) else write(float(low), float(high))


def _cell(write: Callable[..., str], value: Any) -> str:
    if _missing(value):
        return NONE
    if type(value).__name__ in ("bool", "bool_"):
        return "yes" if value else "no"
    return write(float(value)) if _is_number(value) else str(value)
