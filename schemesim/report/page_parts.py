"""The parts of a page: figures, measures, plant, locations, cases, register, assumptions, settings."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from html import escape

from schemesim.engine.program import Program
from schemesim.plant.model import Location
from schemesim.plant.zones import isolation_zones
from schemesim.report.page_table import Cell, bracket, number, table, time_ms, words
from schemesim.report.sequence import plain
from schemesim.report.timeline import Timeline
from schemesim.study.location import LocationResult
from schemesim.study.locations import LocationStudy
from schemesim.study.register import Register
from schemesim.ticks import to_cycles, to_ms

MEASURES = {
    "p_cleared": "fault cleared",
    "p_within_limit": "cleared within the limit",
    "p_by_main": "cleared by main protection",
    "p_by_main_timed": "cleared by a timed zone of main protection",
    "p_by_local": "cleared by local back-up",
    "p_by_breaker_failure": "cleared by breaker-failure protection",
    "p_by_remote": "cleared by remote back-up",
    "p_by_unwanted": "cleared by a main function beyond its zone",
    "p_selective": "no breaker opened beyond the intended",
    "breakers_mean": "breakers opened, mean",
    "breakers_excess": "breakers opened beyond the intended, mean",
    "load_lost_mw_mean": "load lost, mean, MW",
    "faults_per_yr": "faults per year",
    "uncleared_per_yr": "faults not cleared, per year",
    "late_or_uncleared_per_yr": "faults late or not cleared, per year",
    "fault_needless_trips_per_yr": "breakers opened needlessly in faults, per year",
    "no_fault_trips_per_yr": "breakers opened with no fault, per year",
    "needless_trips_per_yr": "breakers opened needlessly, per year",
}
"""What the measures of a study are called on a page."""

_GRADES = {"not cleared": 0, "late": 1, "more breakers": 2}


def figures(study: LocationStudy, limits_us: Mapping[Location, int]) -> str:
    """The figures to be read first."""
    found = study.measures()
    spoilt = {p.failure for r in study.results for p in r.single_points}
    stays = {p.failure for r in study.results for p in r.single_points if p.not_cleared}
    late = [r for r in study.results if _spoilt_by_design(r, limits_us[r.location])]
    told = [("locations studied", str(len(study.results)) + ("" if study.complete else " (interrupted)"))]
    first = ("p_within_limit", "p_selective", "late_or_uncleared_per_yr", "uncleared_per_yr")
    told += [(MEASURES[name], bracket(found[name]).text) for name in first if name in found]
    told += [
        ("single points of failure", str(len(spoilt))),
        ("… that leave a fault uncleared", str(len(stays))),
        ("locations late or not cleared with nothing failing", str(len(late))),
    ]
    items = "".join(f"<div><dt>{escape(name)}</dt><dd>{escape(value)}</dd></div>" for name, value in told)
    return f'<dl class="figures">{items}</dl>'


def _spoilt_by_design(r: LocationResult, limit_us: int) -> bool:
    """Whether a fault is late, or stays, with no failure at all."""
    t = None if r.nominal is None else r.nominal.t_clear_us
    return r.fed and r.nominal is not None and (t is None or t > limit_us)


def measures(study: LocationStudy) -> str:
    """All measures of the study, with their brackets."""
    weights = "weighted by faults per year" if study.frequencies is not None else "each location alike"
    rows = [[words(MEASURES.get(name, name)), bracket(b)] for name, b in study.measures().items()]
    return table("measures", f"All locations together, {weights}", ["measure", "bracket"], rows, sortable=False)


def plant(program: Program) -> str:
    """The isolation zones of the plant: what the breakers can cut out, and what protects it."""
    zones = isolation_zones(program.plant)
    by_element: dict[str, set[str]] = {}
    for contact in program.scheme.contacts.values():
        if contact.element in zones.of and contact.function:
            by_element.setdefault(zones.of[contact.element], set()).add(contact.function)
    rows = []
    for name, members in zones.members.items():
        inside = sorted(s.name for s in program.plant.sources if s.section in members)
        load = sum(program.plant.section[m].load_mw for m in members)
        rows.append(
            [
                words(name),
                words(program.plant.section[name].kind),
                words(", ".join(sorted(zones.border[name])) or "none"),
                words(", ".join(sorted(by_element.get(name, ()))) or "none of its own"),
                words(", ".join(inside) or "–"),
                number(load),
            ]
        )
    columns = ["isolation zone", "kind", "breakers at its border", "functions", "sources", "load, MW"]
    return table("zones", f"The {len(rows)} isolation zones", columns, rows)


def locations(
    study: LocationStudy, limits_us: Mapping[Location, int], cases: Mapping[str, Sequence[tuple[int, str]]]
) -> str:
    """One row for each location; ``cases`` are those that a row can open, as number and name."""
    rows, tags = [], []
    for r in study.results:
        limit, p95 = limits_us[r.location], r.clearing.quantile(0.95)
        nominal = None if r.nominal is None else r.nominal.t_clear_us
        kinds = {p.kind for p in r.single_points}
        worst = min(kinds, key=lambda k: _GRADES[k], default="")
        row = [words(r.location), Cell("", "", _openers(str(r.location), cases.get(str(r.location), ())))]
        if study.frequencies is not None:
            rate = study.frequencies.get(r.location, 0.0)
            row.append(Cell(f"{rate:.3g}", rate))
        row += [
            bracket(r.p_within_limit),
            bracket(r.p_late_or_uncleared),
            bracket(r.p_by_main),
            bracket(r.p_selective),
            time_ms(limit),
            time_ms(nominal, "not fed" if not r.fed else "never"),
            Cell(_span(p95.low_us, p95.high_us), float("inf") if p95.high_us is None else p95.high_us / 1000),
            time_ms(r.clearing.worst_us),
            bracket(r.breakers_mean.bracket),
            number(len(r.single_points)),
            words(f"{r.single_points[0].failure} ({r.single_points[0].kind})" if r.single_points else "none"),
        ]
        late = _spoilt_by_design(r, limit)
        tags.append(" ".join(x for x in (worst.replace(" ", "-"), "late-anyway" if late else "") if x))
        rows.append(row)
    rate_too = [] if study.frequencies is None else ["faults per year"]
    columns = ["location", "sequence", *rate_too, "P(within limit)", "P(late or not cleared)", "P(by main)",
               "P(selective)", "limit, ms", "t, ms", "t 95 %, ms", "t worst, ms", "breakers, mean", "single points",
               "worst single failure"]  # fmt: skip
    caption = "Every location studied; a bracket low…high certainly holds"
    return table("locations-table", caption, columns, rows, unsorted=["sequence"], tags=tags)


def _openers(location: str, cases: Sequence[tuple[int, str]]) -> str:
    if not cases:
        return "–"
    buttons = (
        f'<button type="button" class="open" data-case="{n}" aria-label="Open clearing sequence: {escape(name)}">'
        f"{'open' if len(cases) == 1 else escape(name.removeprefix(f'{location}: ').partition(':')[0])}</button>"
        for n, name in cases
    )
    return " ".join(buttons)


def _span(low_us: int | None, high_us: int | None) -> str:
    low, high = time_ms(low_us, "never").text, time_ms(high_us, "never").text
    return low if low == high else f"{low}…{high}"


def case_list(cases: Sequence[tuple[str, str, str]]) -> str:
    """Buttons that open the cases, with how each ended; those of locations folded away.

    Each case is a name, the location it stands for (or an empty text), and its end.
    """
    if not cases:
        return "<p>No clearing sequence is listed.</p>"
    items = [
        f'<li><button type="button" class="case" data-case="{n}">{escape(name)}</button> '
        f"<span>{escape(ending)}</span></li>"
        for n, (name, _, ending) in enumerate(cases, start=1)
    ]
    runs = [item for item, (_, location, _) in zip(items, cases, strict=True) if not location]
    places = [item for item, (_, location, _) in zip(items, cases, strict=True) if location]
    text = f'<ul class="cases">\n{_lines(runs)}\n</ul>' if runs else ""
    if places:
        shown = "" if runs else " open"
        text += (
            f"<details{shown}><summary>At the locations studied: {len(places)}</summary>\n"
            f'<ul class="cases">\n{_lines(places)}\n</ul></details>'
        )
    return text


def _lines(items: Sequence[str]) -> str:
    return "\n".join(items)


def case_template(number_: int, name: str, text: str, sequence: Timeline, picture: str) -> str:
    """What a case shows once it is opened: its picture and the same as a table."""
    rows = []
    for r in sequence.rows():
        cause = sequence.cause_of(r)
        behind = "" if cause is None else f"{cause.index} "
        left = "" if r.margin_us is None else f" ({plain(to_ms(r.margin_us))} ms left)"
        rows.append(
            [
                words(r.index),
                time_ms(r.t_us),
                Cell(f"{to_cycles(r.t_us, sequence.frequency_hz):.2f}", to_cycles(r.t_us, sequence.frequency_hz)),
                words(r.subject),
                words(sequence.says(r) + left),
                words(behind + sequence.because(r)),
            ]
        )
    columns = ["row", "t, ms", "t, cycles", "component", "what", "cause"]
    listing = table(f"sequence-{number_}", "The sequence, row by row", columns, rows, sortable=False)
    said = f"<p>{escape(text)}</p>" if text else ""
    return (
        f'<template id="case-{number_}" data-title="{escape(name)}">\n<p class="ending">{escape(sequence.title)}: '
        f"<strong>{escape(sequence.ending)}</strong></p>\n{said}\n"
        f'<div class="wide" role="region" tabindex="0" aria-label="Picture, scrolls sideways">{picture}</div>\n'
        f"{listing}\n</template>"
    )


def register(found: Register | None) -> str:
    """The register of single points of failure."""
    if found is None:
        return "<p>No register was made.</p>"
    rows = []
    for e in (*found.singles, *found.pairs):
        row = e.row
        where = str(row["where"])
        few = ", ".join(str(s.location) for s in e.spoiled[:3])
        listed = escape(where) if len(e.spoiled) <= 3 else (
            f"<details><summary>{escape(few)} and {len(e.spoiled) - 3} more</summary>{escape(where)}</details>"
        )  # fmt: skip
        rows.append(
            [
                words(e.name),
                words(e.group.value + (", exempt" if e.exempt else "")),
                Cell(f"{float(e.probability):.3g}", float(e.probability)),
                Cell(e.worst.label, float(-e.worst)),
                number(len(e.spoiled)),
                time_ms(max((s.t_clear_us for s in e.spoiled if s.t_clear_us is not None), default=None)),
                number(max(s.breakers for s in e.spoiled)),
                Cell(where, where.lower(), listed),
            ]
        )
    columns = ["failure", "group", "probability", "worst effect", "locations", "t worst, ms", "breakers, most", "where"]
    caption = f"{len(found.singles)} single points of failure at {found.locations} locations, the worst first"
    if found.pairs:
        caption += f"; {len(found.pairs)} pairs that do worse than each alone"
    anyway = "".join(f"<li>{escape(str(s.location))}: {escape(s.effect.label)}</li>" for s in found.anyway)
    design = f"<h3>With no failure at all</h3><ul>{anyway}</ul>" if anyway else ""
    return table("register-table", caption, columns, rows) + design


def assumptions(found: Sequence[tuple[str, str, str]]) -> str:
    """What the results rest on, each with its source."""
    rows = [[words(topic), words(said), words(source)] for topic, said, source in found]
    return table("assumptions-table", "What the results rest on", ["about", "assumed", "source"], rows, sortable=False)


def settings(found: Mapping[str, str]) -> str:
    """Names and values."""
    items = "".join(f"<div><dt>{escape(name)}</dt><dd>{escape(value)}</dd></div>" for name, value in found.items())
    return f'<dl class="settings">{items}</dl>'
