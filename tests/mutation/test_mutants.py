"""The mutation run's own parts: each mutant is one change, compiles, and leaves alone what does not run."""

from __future__ import annotations

import ast

import pytest

from tests.mutation.covering import choose, spread
from tests.mutation.mutants import mutants_of, mutated
from tests.mutation.run import KILLED, ROOT, SURVIVED, TARGETS, UNCOVERED, files, report, sample

SOURCE = '''"""A text of 7 words, not to be changed."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterable


def most(items: list[int | None], limit: int = 3) -> int | None:
    """At most 3."""
    best = None
    for item in items:
        if item is None or not item < limit:
            continue
        best = max(best or 0, item)
    return best
'''


def test_every_mutant_of_a_small_source() -> None:
    found = mutants_of("x.py", SOURCE)
    assert sorted(m.what for m in found) == sorted(
        [
            "3 → 4", "3 → 2",
            "item is None or not item < limit → item is None and (not item < limit)",
            "if item is None or not item < limit → if not",
            "item is None → item is not None", "not item < limit → item < limit",
            "item < limit → item <= limit", "item < limit → item >= limit",
            "continue → break", "max(best or 0, item) → min(best or 0, item)", "best or 0 → best and 0",
            "0 → 1", "0 → -1", "return best → return None",
        ]
    )  # fmt: skip
    assert {(m.first, m.last) for m in found if m.what.startswith("3")} == {(11, 11)}


@pytest.mark.parametrize("file", ["schemesim/plant/zones.py", "schemesim/engine/outcome.py"])
def test_every_mutant_compiles_and_differs(file: str) -> None:
    source = (ROOT / file).read_text(encoding="utf-8")
    plain = ast.unparse(ast.parse(source))
    found = mutants_of(file, source)
    texts = [mutated(source, m) for m in found]
    assert len(texts) >= 15
    assert all(compile(t, file, "exec") for t in texts)
    assert all(ast.unparse(ast.parse(t)) != plain for t in texts)
    assert len({(m.node, m.kind) for m in found}) == len(found)


def test_the_files_are_those_of_the_engine_the_studies_and_the_zone_logic() -> None:
    found = files(ROOT)
    assert {"schemesim/engine/event.py", "schemesim/study/tree.py", "schemesim/plant/zones.py"} <= set(found)
    assert all(f.startswith(TARGETS) for f in found)


def test_tests_are_chosen_of_every_file_in_turn() -> None:
    seconds = {"a::1": 1.0, "a::2": 2.0, "b::1": 5.0, "c::1": 0.5}
    assert spread(list(seconds), seconds) == ["c::1", "a::1", "b::1", "a::2"]
    names = list(seconds)
    lines = {"f.py": {"3": 0, "9": 1}}
    found = {"tests": names, "seconds": list(seconds.values()), "sets": [[0, 1], [2, 3]], "lines": lines}
    assert choose(found, "f.py", 3, 4, budget_s=10) == ["a::1", "a::2"]
    assert choose(found, "f.py", 5, 5, budget_s=4) == ["c::1", "a::1", "a::2"]  # no test of the line: of the module
    assert choose(found, "f.py", 9, 9, budget_s=0.1) == ["c::1"]  # one at least
    assert choose(found, "g.py", 1, 1, budget_s=9) == []


def test_a_longer_sample_begins_with_a_shorter(tmp_path: object, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("tests.mutation.run.TARGETS", ("schemesim/plant/zones.py",))
    (into := ROOT.__class__(str(tmp_path))).joinpath("tree").symlink_to(ROOT)
    assert sample(into, 12, 3)[:5] == sample(into, 5, 3)
    assert sample(into, 5, 4) != sample(into, 5, 3)


def test_the_report_gives_the_score_and_the_survivors() -> None:
    row = {"file": "f.py", "first": 3, "what": "1 → 2", "tests": 4, "seconds": 2.0}
    rows = [row | {"end": end} for end in (KILLED, KILLED, SURVIVED, UNCOVERED)]
    text = report(rows)
    assert "survived: f.py:3: 1 → 2 (4 tests)" in text
    assert "score 2/4 = 50.0% (95 % Wilson 15.0% to 85.0%)" in text
    assert report([]) == "nothing tried yet"
