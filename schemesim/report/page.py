"""One page that tells a whole study: a self-contained HTML file that needs neither network nor server.

The page holds the summary, the plant, every location in a table that can be sorted and
filtered, clearing sequences that open on a click, the register of single points of failure, what was
assumed and where it comes from, versions and seed, and the safety note. Its texts, its look and what it
does stand in the files ``page_files/page.html``, ``page.css`` and ``page.js`` beside this one.
"""

from __future__ import annotations

import platform
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import partial
from html import escape
from importlib import metadata, resources
from pathlib import Path
from string import Template

from schemesim.engine.program import Program
from schemesim.errors import reject
from schemesim.plant.model import Location, Plant
from schemesim.report import page_parts as parts
from schemesim.report.one_line import plot_one_line
from schemesim.report.page_svg import shared_patterns, svg_of
from schemesim.report.station_parts import station_names
from schemesim.report.timeline import Timeline
from schemesim.study.locations import LocationStudy
from schemesim.study.register import Register

NOTE = (
    "Results support and never replace a qualified engineer's review, local codes and the equipment's own "
    "documentation."
)
"""The safety note on every page."""

MAX_STATIONS = 6
"""Most stations in one one-line diagram."""

LIBRARIES = ("schemesim", "matplotlib", "networkx", "numpy", "pandas", "pydantic", "scipy", "simpy")
"""Packages whose versions a page tells."""


@dataclass(frozen=True, eq=False)
class PageCase:
    """A clearing sequence listed on a page.

    Attributes
    ----------
    name : str
        What it is called in the list.
    sequence : Timeline
    location : str
        The location of the study it stands for (its row in the table opens it), or empty.
    text : str
        What is expected, or anything else worth reading.
    """

    name: str
    sequence: Timeline
    location: str = ""
    text: str = ""


@dataclass(frozen=True)
class Assumption:
    """Something the results rest on.

    Attributes
    ----------
    topic, statement : str
    source : str
        Where it comes from.
    """

    topic: str
    statement: str
    source: str


@dataclass(frozen=True, eq=False)
class PageContent:
    """What a page tells.

    Attributes
    ----------
    title, subtitle, description : str
    program : Program
        The scheme studied, with its plant.
    study : LocationStudy
    limits_us : mapping of Location to int
        Longest clearing time that is in time, by location.
    cases : tuple of PageCase
    register : Register or None
    assumptions : tuple of Assumption
    settings : mapping of str to str
        Seed, epsilon and whatever else is needed to get the same results again.
    """

    title: str
    subtitle: str
    description: str
    program: Program
    study: LocationStudy
    limits_us: Mapping[Location, int]
    cases: tuple[PageCase, ...] = ()
    register: Register | None = None
    assumptions: tuple[Assumption, ...] = ()
    settings: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, repr=False)
class HtmlPage:
    """A finished page.

    Attributes
    ----------
    title : str
    html : str
        The whole file.
    """

    title: str
    html: str

    def save(self, path: str | Path) -> Path:
        """Write the page as a UTF-8 file; returns its path.

        Raises
        ------
        InputError
            For a place that cannot be written.
        """
        try:
            Path(path).write_text(self.html, encoding="utf-8", newline="\n")
        except OSError as error:
            raise reject("place of the page", str(path), f"a file that can be written ({error.strerror})") from None
        return Path(path)

    def __repr__(self) -> str:
        return f"HtmlPage({self.title!r}, {len(self.html.encode()) / 1024:.0f} kB); .save(path) writes it"


def html_page(content: PageContent, progress: Callable[[int, int], None] | None = None) -> HtmlPage:
    """The page of a study.

    Parameters
    ----------
    content : PageContent
    progress : callable or None
        Called with the number of pictures drawn and of all.

    Returns
    -------
    HtmlPage
        The same text for the same content and versions.
    """
    pictures: list[str] = []
    for n, case in enumerate(content.cases, start=1):
        label = f"Clearing sequence: {case.sequence.title}; {case.sequence.ending}. The table below says the same."
        pictures.append(svg_of(case.sequence.plot, f"case-{n}", label))
        if progress is not None:
            progress(n, len(content.cases))
    patterns, pictures = shared_patterns(pictures)
    at_location: dict[str, list[tuple[int, str]]] = {}
    for n, case in enumerate(content.cases, start=1):
        if case.location:
            at_location.setdefault(case.location, []).append((n, case.name))
    study = content.study
    filled = Template(_asset("page.html")).substitute(
        title=escape(content.title),
        subtitle=escape(content.subtitle),
        description=f"<p>{escape(content.description)}</p>" if content.description else "",
        note=escape(NOTE),
        patterns=patterns,
        style=_asset("page.css"),
        script=_asset("page.js"),
        figures=parts.figures(study, content.limits_us),
        measures=parts.measures(study),
        one_line=_one_line(content.program.plant),
        plant=parts.plant(content.program),
        locations=parts.locations(study, content.limits_us, at_location),
        location_count=str(len(study.results)),
        case_list=parts.case_list([(c.name, c.location, c.sequence.ending) for c in content.cases]),
        case_templates="\n".join(
            parts.case_template(n, c.name, c.text, c.sequence, picture)
            for n, (c, picture) in enumerate(zip(content.cases, pictures, strict=True), start=1)
        ),
        register=parts.register(content.register),
        assumptions=parts.assumptions([(a.topic, a.statement, a.source) for a in content.assumptions]),
        settings=parts.settings(content.settings),
        versions=parts.settings({"python": platform.python_version(), **_versions()}),
    )
    return HtmlPage(content.title, filled)


def _one_line(plant: Plant) -> str:
    """The one-line diagram; one for each station where there are many."""
    stations = station_names(plant)
    groups = [stations] if len(stations) <= MAX_STATIONS else [(name,) for name in stations]
    pictures = []
    for n, group in enumerate(groups, start=1):
        what = f"station {group[0]}" if len(groups) > 1 else "the plant"
        label = f"One-line diagram of {what}, isolation zones shaded. The table of isolation zones says the same."
        drawn = svg_of(partial(plot_one_line, plant, stations=group), f"plant-{n}", label)
        name = f"One-line diagram of {escape(what)}"
        box = f'<div class="wide" role="region" tabindex="0" aria-label="{name}">{drawn}</div>'
        pictures.append(box if len(groups) == 1 else f"<details><summary>{escape(group[0])}</summary>{box}</details>")
    return "\n".join(pictures)


def _asset(name: str) -> str:
    return resources.files("schemesim.report").joinpath("page_files", name).read_text(encoding="utf-8")


def _versions() -> dict[str, str]:
    found: dict[str, str] = {}
    for name in LIBRARIES:
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            found[name] = "not installed as a package"
    return found
