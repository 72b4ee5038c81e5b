"""The report page as a file: what it says is what the study found, and it needs nothing else."""

from __future__ import annotations

import html
import json
import re
from html.parser import HTMLParser
from pathlib import Path

import pytest

from schemesim.errors import InputError
from schemesim.report.page import NOTE, HtmlPage, html_page
from schemesim.report.page_table import Cell, bracket, number, table, time_ms, words
from schemesim.scenario import Scenario, load_scenario
from schemesim.scenario.reporting import assumptions_of, report_scenario
from schemesim.scenario.studying import study_scenario
from schemesim.study.brackets import Bracket
from schemesim.study.locations import LocationStudy
from tests.unit.test_cli import call

ROOT = Path(__file__).resolve().parents[2]
SMALL = ROOT / "tests" / "data" / "small.yaml"
VOID = {"meta", "link", "input", "br", "img", "hr"}


class Reader(HTMLParser):
    """Elements that stay open or are closed out of turn, ids, and the texts of table cells."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.wrong: list[str] = []
        self.ids: list[str] = []
        self.table = ""
        self.rows: dict[str, list[list[str]]] = {}

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        found = dict(attrs)
        if found.get("id"):
            self.ids.append(str(found["id"]))
        if tag == "table":
            self.table = str(found["id"])
            self.rows[self.table] = []
        if tag == "tr":
            self.rows[self.table].append([])
        if tag in ("td", "th"):
            self.rows[self.table][-1].append("")
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.ids += [str(value) for name, value in attrs if name == "id"]
        if tag in VOID or not self.open:
            self.wrong.append(f"<{tag}/> outside a picture")

    def handle_endtag(self, tag: str) -> None:
        if not self.open or self.open.pop() != tag:
            self.wrong.append(f"</{tag}>")

    def handle_data(self, data: str) -> None:
        if any(x in ("td", "th") for x in self.open) and self.rows[self.table][-1]:
            self.rows[self.table][-1][-1] += data


def read(page: HtmlPage) -> Reader:
    reader = Reader()
    reader.feed(page.html)
    reader.close()
    return reader


@pytest.fixture(scope="module")
def small() -> Scenario:
    return load_scenario(SMALL)


@pytest.fixture(scope="module")
def study(small: Scenario) -> LocationStudy:
    return study_scenario(small, locations=[at for at in small.frequencies if at.section in ("L1", "F1")])


@pytest.fixture(scope="module")
def page(small: Scenario, study: LocationStudy) -> HtmlPage:
    return report_scenario(small, study=study, max_cases=2)


def test_the_page_is_well_formed_and_no_id_stands_twice(page: HtmlPage) -> None:
    found = read(page)
    assert found.wrong == []
    assert found.open == []
    assert len(found.ids) == len(set(found.ids))
    assert len(found.ids) > 20


def test_every_reference_inside_a_picture_leads_somewhere(page: HtmlPage) -> None:
    ids = set(read(page).ids)
    referred = set(re.findall(r'(?:url\(#|href="#)([^")]+)', page.html))
    assert len(referred) > 10
    assert referred - ids == set()


def test_the_page_names_nothing_outside_itself(page: HtmlPage) -> None:
    outside = re.findall(r"(?:https?:)?//[\w.-]+[^\s\"'<]*", page.html)
    namespaces = {"http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"}
    assert {x for x in outside if x.startswith("http")} - namespaces == set()
    assert not re.search(r"<(?:script|img|iframe|link)[^>]+(?:src|href)=\"(?!data:)", page.html)
    assert "default-src 'none'" in page.html


def test_locations_say_what_the_study_found(page: HtmlPage, study: LocationStudy, small: Scenario) -> None:
    rows = read(page).rows["locations-table"]
    heading, found = rows[0], {row[0]: dict(zip(rows[0], row, strict=True)) for row in rows[1:]}
    assert set(found) == {str(r.location) for r in study.results}
    assert "t worst, ms" in heading
    for r in study.results:
        row = found[str(r.location)]
        assert row["P(within limit)"] == str(r.p_within_limit)
        assert row["P(late or not cleared)"] == str(r.p_late_or_uncleared)
        assert float(row["limit, ms"]) == small.limit_us(r.location) / 1000
        assert row["single points"] == str(len(r.single_points))
        assert row["worst single failure"].startswith(r.single_points[0].failure)
        assert r.nominal is not None
        assert r.nominal.t_clear_us is not None
        assert float(row["t, ms"]) == r.nominal.t_clear_us / 1000


def test_every_run_of_the_scenario_is_listed_and_its_sequence_is_there(page: HtmlPage, small: Scenario) -> None:
    found = read(page)
    for run in small.runs:
        assert f'data-title="run: {html.escape(run.name)}"' in page.html
        assert html.escape(run.expect) in page.html
    numbers = re.findall(r'<template id="case-(\d+)"', page.html)
    assert len(numbers) == len(small.runs) + 1 + 2  # and nothing failing, and the worst of two locations
    for n in numbers:
        assert len(found.rows[f"sequence-{n}"]) > 2
    assert page.html.count("<svg role=") == len(numbers) + 1


def test_the_page_tells_assumptions_settings_and_the_safety_note(page: HtmlPage, small: Scenario) -> None:
    found = read(page)
    listed = assumptions_of(small)
    assert [row[0] for row in found.rows["assumptions-table"][1:]] == [a.topic for a in listed]
    assert all(a.source for a in listed)
    assert {"what a relay sees", "limit of the clearing time", "failure data", "fault frequencies", "times"} <= {
        a.topic for a in listed
    }
    assert page.html.count(html.escape(NOTE)) == 2
    assert f"<dt>seed</dt><dd>{small.study.seed} " in page.html
    for name in ("schemesim", "numpy", "python"):
        assert f"<dt>{name}</dt><dd>" in page.html


def test_stated_failure_data_and_shipped_ones_are_told_apart(small: Scenario) -> None:
    source = {a.statement: a.source for a in assumptions_of(small) if a.topic == "failure data"}
    assert source["relay, failure to operate: 0.002 on demand"] == "scenario"
    assert source["coil, failure to operate: 0.0001 on demand"].startswith("shipped order of magnitude")
    rates = [text for statement, text in source.items() if statement.startswith("vt winding, lost: 0.02 a year")]
    assert rates == ["scenario: assumed; fuse failures of one year"]


def test_times_stated_and_shipped_are_told_apart(small: Scenario) -> None:
    found = {(a.statement.partition(":")[0], a.source.partition(" ")[0]): a.statement for a in assumptions_of(small)
             if a.topic == "times"}  # fmt: skip
    assert "delay 250 ms" in found[("local back-up", "policy")]
    assert "bus delay 270 ms" in found[("local back-up", "as")]
    assert found[("breaker", "as")] == "breaker: interrupting 50 ms, auxiliary 5 ms, late by 100 ms"


def test_the_same_study_gives_the_same_page(small: Scenario, study: LocationStudy, page: HtmlPage) -> None:
    assert report_scenario(small, study=study, max_cases=2).html == page.html


def test_names_with_marks_of_html_stay_text() -> None:
    text = table("t", "a < b", ["x & y"], [[words('<script>"1"</script>')]])
    assert "<script>" not in text
    assert "a &lt; b" in text
    assert "x &amp; y" in text


def test_cells_sort_by_what_they_mean() -> None:
    text = table("t", "", ["n", "b", "t"], [[number(2.5), bracket(Bracket(0.1, 0.2)), time_ms(None, "never")]])
    assert re.findall(r'data-v="([^"]*)"', text) == ["2.5", "0.1", "1e999"]
    assert Cell("a").value == ""


def test_save_writes_the_page_or_says_why_not(page: HtmlPage, tmp_path: Path) -> None:
    where = page.save(tmp_path / "page.html")
    assert where.read_text(encoding="utf-8") == page.html
    with pytest.raises(InputError, match="place of the page"):
        page.save(tmp_path / "nowhere" / "page.html")
    assert "kB" in repr(page)


@pytest.mark.parametrize("bad", [-1, 1.5, True])
def test_a_number_of_cases_that_is_none_is_refused(small: Scenario, study: LocationStudy, bad: int) -> None:
    with pytest.raises(InputError, match="max_cases"):
        report_scenario(small, study=study, max_cases=bad)


def test_a_page_without_register_and_cases_says_so(small: Scenario, study: LocationStudy) -> None:
    from schemesim.report.page import PageContent

    limits = {r.location: small.limit_us(r.location) for r in study.results}
    made = html_page(PageContent("Bare", "", "", small.program(), study, limits))
    found = read(made)
    assert found.wrong == []
    assert "No clearing sequence is listed." in made.html
    assert "No register was made." in made.html


def test_the_command_writes_the_page_and_tells_its_figures(small: Scenario, tmp_path: Path) -> None:
    out = tmp_path / "out.html"
    done = call("report", SMALL, "--location", "F1", "--cases", "1", "--output", out, "--json", "--quiet")
    assert done.returncode == 0, done.stderr
    data = json.loads(done.stdout)
    assert data["kind"] == "report"
    assert data["locations"] == 1
    assert data["output"] == str(out)
    text = out.read_text(encoding="utf-8")
    assert len(text.encode()) == data["bytes"]
    direct = study_scenario(small, locations=[at for at in small.frequencies if at.section == "F1"])
    assert data["measures"] == [
        {"measure": name, "low": float(b.low), "high": float(b.high)} for name, b in direct.measures().items()
    ]
    assert NOTE in data["note"]


@pytest.mark.parametrize(
    ("arguments", "phrase"),
    [
        (("--output", "nowhere/out.html"), "a file in a folder that is there"),
        (("--cases", "-1"), "--cases"),
        (("--location", "L9"), "fault"),
        (("--policy", "plane"), "policy"),
    ],
)
def test_bad_arguments_of_the_command_exit_2(arguments: tuple[str, ...], phrase: str) -> None:
    done = call("report", SMALL, *arguments)
    assert done.returncode == 2
    assert phrase in done.stderr


def test_the_scenario_is_never_overwritten(tmp_path: Path) -> None:
    copy = tmp_path / "small.yaml"
    copy.write_bytes(SMALL.read_bytes())
    done = call("report", copy, "--output", copy)
    assert done.returncode == 2
    assert copy.read_bytes() == SMALL.read_bytes()
