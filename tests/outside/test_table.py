"""Every value from outside, one test each; what the table counts; and that a wrong constant of ours is told."""

from __future__ import annotations

import math
from collections import Counter
from fractions import Fraction
from functools import partial

import pytest

from tests.outside.records import Quality, Record, difference
from tests.outside.suite import counted, last_line, records
from tests.outside.table import ROOT, line, wide

RECORDS = records()
SUBJECTS = sorted({r.subject for r in RECORDS})


@pytest.mark.parametrize("record", RECORDS, ids=lambda r: f"{r.subject}: {r.what}")
def test_value(record: Record) -> None:
    found = record.compared()
    assert found.fits, f"{record.source}: {found.value} here {found.ours}, {found.units:.3g} of the tolerance"


def test_there_are_enough_values_of_enough_sources() -> None:
    """Sixty that count, twenty sources, fifteen whole sequences or odds; something of every subject."""
    assert counted(RECORDS) >= 60
    assert len({r.source for r in RECORDS}) >= 20
    assert sum(r.whole for r in RECORDS) >= 15
    per_subject = Counter(r.subject for r in RECORDS)
    assert min(per_subject.values()) >= 5, per_subject
    assert len({(r.subject, r.source, r.what) for r in RECORDS}) == len(RECORDS)


def test_the_readme_gives_the_numbers_of_the_table() -> None:
    text = " ".join((ROOT / "README.md").read_text(encoding="utf-8").split())
    apart = {r.source for r in RECORDS if r.quality not in (Quality.DERIVED, Quality.PRACTICE)}
    said = (
        f"{len(RECORDS)} values ({counted(RECORDS)} counting at most ten of a subject) from "
        f"{len({r.source for r in RECORDS})} sources, {len(apart)} of them"
    )
    assert said in text
    assert f"{sum(r.whole for r in RECORDS)} are whole clearing sequences" in text


def test_every_record_says_where_it_is_from() -> None:
    for r in RECORDS:
        assert r.source
        assert r.what
        assert 0 <= r.tolerance < math.inf
        assert callable(r.value) or r.quality is not Quality.LIBRARY, f"{r.what} is computed on the spot"


def test_a_difference_is_told() -> None:
    assert difference(1.0, Fraction(3, 2)) == 0.5
    assert difference({"a": 1.0, "b": 2.0}, {"a": 1.0, "b": 2.5}) == 0.5
    assert difference({"a": 1.0}, {"b": 1.0}) == math.inf
    assert difference({"a": 1.0}, {"a": 1.0, "b": 1.0}) == math.inf
    assert difference(frozenset({"a"}), frozenset({"a", "b"})) == math.inf
    assert difference(1.0, math.nan) == math.inf
    assert difference(math.inf, 1.0) == math.inf
    assert difference("none", "none") == 0
    assert difference("none", 0.0) == math.inf


def test_the_table_says_what_is_out() -> None:
    half = partial(Record, "odd", "a book", Quality.PUBLISHED, "half of one", 0.5, 0.01)
    rows = [half(lambda: 0.505).compared(), half(lambda: 0.52).compared()]
    assert [c.fits for c in rows] == [True, False]
    assert line(rows[0]).endswith("0.5")
    assert line(rows[1]).endswith("2 OUT")
    assert wide(rows[1]).split("\t")[-1] == "2"
    assert last_line(rows[:1]).startswith("1 values (1 counting")
    assert "1 out of tolerance; largest difference 2.00" in last_line(rows)
