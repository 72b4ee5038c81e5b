"""Tables of a page: cells that sort by a value other than their text, headings with units.

On a narrow screen the script of the page gives each cell its heading, and the rows become cards.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from html import escape

from schemesim.report.sequence import plain
from schemesim.study.brackets import Bracket, show


@dataclass(frozen=True, slots=True)
class Cell:
    """One cell.

    Attributes
    ----------
    text : str
        What is read.
    value : float or str
        What it is sorted by.
    html : str
        Used in place of the text where it is not empty.
    """

    text: str
    value: float | str = ""
    html: str = ""


def words(text: object) -> Cell:
    """A cell of words, sorted without regard to case."""
    return Cell(str(text), str(text).lower())


def number(value: float | int | None, none: str = "–") -> Cell:
    """A number with the digits that matter; nothing and infinity sort behind every number.

    Examples
    --------
    >>> number(70.0).text, number(None).text, number(1e-5).text
    ('70', '–', '1e-05')
    """
    if value is None:
        return Cell(none, math.inf)
    if not math.isfinite(value):
        return Cell("no bound", math.inf)
    return Cell(f"{value:.6g}", float(value))


def bracket(b: Bracket) -> Cell:
    """A bracket that certainly holds, sorted by its low end."""
    return Cell(show(b.low, b.high), float(b.low))


def time_ms(t_us: int | None, none: str = "–") -> Cell:
    """A time in ms.

    Examples
    --------
    >>> time_ms(70_500).text, time_ms(None, "never").text
    ('70.5', 'never')
    """
    return Cell(none, math.inf) if t_us is None else Cell(plain(t_us / 1000), t_us / 1000)


def table(
    name: str,
    caption: str,
    columns: Sequence[str],
    rows: Sequence[Sequence[Cell]],
    *,
    sortable: bool = True,
    unsorted: Sequence[str] = (),
    tags: Sequence[str] = (),
) -> str:
    """A table of a page.

    Parameters
    ----------
    name : str
        Its id.
    caption : str
    columns : sequence of str
        Headings, units included. The first column names what a row is about.
    rows : sequence of sequence of Cell
    sortable : bool
        Headings are buttons, but for those in ``unsorted``.
    tags : sequence of str
        One word or more for each row that a filter may ask for.
    """
    numeric = [bool(rows) and all(isinstance(row[i].value, float) for row in rows) for i in range(len(columns))]

    def heading(i: int) -> str:
        side = ' class="n"' if numeric[i] else ""
        label = escape(columns[i])
        if not sortable or columns[i] in unsorted:
            return f'<th scope="col"{side}>{label}</th>'
        return (
            f'<th scope="col" aria-sort="none"{side}>'
            f'<button type="button" class="sort" data-column="{i}">{label}</button></th>'
        )

    def cell(i: int, c: Cell) -> str:
        side = ' class="n"' if numeric[i] else ""
        key = f' data-v="{escape(_key(c.value))}"' if sortable else ""
        inner = c.html or escape(c.text)
        return f'<th scope="row"{side}{key}>{inner}</th>' if i == 0 else f"<td{side}{key}>{inner}</td>"

    head = "".join(heading(i) for i in range(len(columns)))
    lines = []
    for n, row in enumerate(rows):
        tag = f' data-tags="{escape(tags[n])}"' if tags else ""
        lines.append(f"<tr{tag}>" + "".join(cell(i, c) for i, c in enumerate(row)) + "</tr>")
    kind = ' class="sortable"' if sortable else ""
    body = "\n".join(lines)
    return (
        f'<div class="wide" role="region" tabindex="0" aria-label="{escape(caption)}">\n'
        f'<table id="{name}"{kind}>\n<caption>{escape(caption)}</caption>\n'
        f"<thead><tr>{head}</tr></thead>\n<tbody>\n{body}\n</tbody>\n</table>\n</div>"
    )


def _key(value: float | str) -> str:
    if isinstance(value, str):
        return value
    return "1e999" if math.isinf(value) else repr(value)
