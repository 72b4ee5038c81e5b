"""A matplotlib picture as SVG text that stands inside a page: text stays text, no date, few digits."""

from __future__ import annotations

import io
import re
from collections.abc import Callable, Sequence
from html import escape
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_HEAD = re.compile(r"^.*?(?=<svg)", re.DOTALL)
_META = re.compile(r"<metadata>.*?</metadata>|<style.*?</style>", re.DOTALL)
_LOOK = "stroke-linejoin: round; stroke-linecap: butt; font-family: 'DejaVu Sans', Verdana, sans-serif"
"""What every picture says in its style element, and its font, said once."""
_NEEDLESS = re.compile(
    r'font-family: [^;"]*;? ?| transform="rotate\(-?0 [^)]*\)"|(?<=<g) id="[^"]*"|<!--.*?-->', re.DOTALL
)
_LONG = re.compile(r"-?\d+\.\d{3,}")
_BLANKS = re.compile(r"\s*\n\s*|(?<=>)\s+(?=<)")
_REFERENCE = re.compile(r'(\bid="|url\(#|href="#)')


def svg_of(draw: Callable[[], Axes], name: str, label: str) -> str:
    """Draw and return an ``<svg>`` element.

    Parameters
    ----------
    draw : callable
        Draws the picture and returns its axes; it is called with text kept as text.
    name : str
        Letters, digits and ``-``: put before every id, so that pictures of one page do not meddle.
    label : str
        What the picture shows, for who cannot see it.

    Returns
    -------
    str
        The same for the same picture. Coordinates are cut to a hundredth of a point.

    Examples
    --------
    >>> from matplotlib.figure import Figure
    >>> text = svg_of(lambda: Figure(figsize=(2, 1)).add_subplot(), "p1", "An empty frame")
    >>> text.startswith('<svg role="img" aria-label="An empty frame"'), "<dc:date>" in text
    (True, False)
    """
    from matplotlib import rc_context  # heavy: only when a picture is asked for

    stream = io.StringIO()
    with rc_context({"svg.fonttype": "none", "svg.hashsalt": name}):
        figure = draw().get_figure(root=True)
        assert figure is not None  # axes that were just drawn stand on one
        figure.savefig(stream, format="svg", metadata={"Date": None})
    text = _META.sub("", _HEAD.sub("", stream.getvalue()))
    text = _NEEDLESS.sub("", text)
    text = _LONG.sub(lambda found: f"{float(found[0]):.2f}".rstrip("0").rstrip("."), text)
    text = _REFERENCE.sub(lambda found: f"{found[1]}{name}-", _BLANKS.sub(_gap, text))
    return text.replace("<svg", f'<svg role="img" aria-label="{escape(label)}" style="{_LOOK}"', 1).strip()


def _gap(found: re.Match[str]) -> str:
    """Nothing between two tags, one blank elsewhere."""
    text = found.string
    return "" if text[found.start() - 1] == ">" and text[found.end() : found.end() + 1] == "<" else " "


_PATTERN = re.compile(r'<pattern id="([^"]+)"(.*?)</pattern>', re.DOTALL)


def shared_patterns(pictures: Sequence[str]) -> tuple[str, list[str]]:
    """Hatches that several pictures have alike, taken out of them to stand once on the page.

    Returns
    -------
    tuple of str and list of str
        The patterns, and the pictures that refer to them.

    Examples
    --------
    >>> once = '<pattern id="{0}-h" x="0"></pattern><path fill="url(#{0}-h)"/>'
    >>> shared_patterns([once.format("a"), once.format("b")])
    ('<pattern id="hatch-1" x="0"></pattern>', ['<path fill="url(#hatch-1)"/>', '<path fill="url(#hatch-1)"/>'])
    """
    names: dict[str, str] = {}
    changed: list[str] = []
    for picture in pictures:
        for found in _PATTERN.finditer(picture):
            name = names.setdefault(found[2], f"hatch-{len(names) + 1}")
            picture = picture.replace(f"url(#{found[1]})", f"url(#{name})")
        changed.append(_PATTERN.sub("", picture))
    patterns = "".join(f'<pattern id="{name}"{rest}</pattern>' for rest, name in names.items())
    return patterns, changed
