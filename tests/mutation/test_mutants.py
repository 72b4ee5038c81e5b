"""The mutation run's own parts: each mutant is one change, compiles, and leaves alone what does not run."""

from __future__ import annotations

import ast
import importlib.util
import json
import tomllib
from pathlib import Path

import pytest

from tests.mutation.covering import beside, by_file, choose, merged, spread
from tests.mutation.forking import start, wait
from tests.mutation.live import put_in_place
from tests.mutation.mutants import mutants_of, mutated
from tests.mutation.run import (
    EXPLAINED,
    KILLED,
    ROOT,
    SURVIVED,
    TARGETS,
    TIMEOUT,
    UNCOVERED,
    explained,
    files,
    report,
    rows,
    sample,
)

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
    assert choose(found, "g.py", 1, 1, budget_s=0.1) == ["c::1"]  # run on import only: of the folder
    assert choose(found, "other/g.py", 1, 1, budget_s=9) == []


def test_a_longer_sample_begins_with_a_shorter(tmp_path: object, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("tests.mutation.run.TARGETS", ("schemesim/plant/zones.py",))
    (into := ROOT.__class__(str(tmp_path))).joinpath("tree").symlink_to(ROOT)
    assert sample(into, 12, 3)[:5] == sample(into, 5, 3)
    assert sample(into, 5, 4) != sample(into, 5, 3)


def test_the_report_gives_the_score_and_the_survivors() -> None:
    row = {"file": "f.py", "first": 3, "what": "1 → 2", "tests": 4, "seconds": 2.0, "line": "x = 1"}
    text = report([row | {"end": end} for end in (KILLED, KILLED, SURVIVED, UNCOVERED)], {})
    assert "survived: f.py:3: 1 → 2 (4 tests)" in text
    assert "score 2/4 = 50.0% (95 % Wilson 15.0% to 85.0%)" in text
    assert report([], {}) == "nothing tried yet"


def test_the_score_without_what_is_explained_counts_only_what_is_explained() -> None:
    row = {"file": "f.py", "first": 3, "what": "1 → 2", "tests": 4, "seconds": 2.0, "line": "x = 1"}
    ends = [KILLED, KILLED, TIMEOUT, SURVIVED, SURVIVED, SURVIVED]
    found = [row | {"end": end, "what": f"{n}"} for n, end in enumerate(ends)]
    why = {
        ("f.py", "x = 1", "3"): "equivalent",
        ("f.py", "x = 1", "4"): "harmless",
        ("f.py", "x = 1", "0"): "equivalent",
    }
    lines = report(found, why).splitlines()
    assert lines[0] == "survived (equivalent): f.py:3: 3 (4 tests)"
    assert [x.partition(" (95")[0] for x in lines[3:]] == [
        "score 3/6 = 50.0%",
        "explained: 1 equivalent, 1 harmless",
        "score without the equivalent 3/5 = 60.0%",
        "score without the harmless either 3/4 = 75.0%",
    ]


def test_the_last_result_of_a_mutant_counts(tmp_path: Path) -> None:
    row = {"file": "f.py", "node": 3, "kind": 0}
    kept = [row | {"end": SURVIVED}, row | {"node": 4, "end": KILLED}, row | {"end": KILLED}]
    (tmp_path / "r").write_text("\n".join(map(json.dumps, kept)) + '\n{"file": "cut o')
    assert [r["end"] for r in rows(tmp_path / "r")] == [KILLED, KILLED]
    assert rows(tmp_path / "none") == []


def test_maps_are_joined_and_a_test_written_anew_counts_as_it_is_now() -> None:
    old = {"tests": ["a", "b"], "seconds": [1, 2], "sets": [[0, 1], [0]], "lines": {"f": {"1": 0, "2": 1}}}
    new = {"tests": ["c", "b"], "seconds": [3, 4], "sets": [[0, 1], [0]], "lines": {"f": {"2": 0}, "g": {"7": 1}}}
    found = merged(old, new)
    assert dict(zip(found["tests"], found["seconds"], strict=True)) == {"a": 1, "b": 4, "c": 3}
    of = {f"{f}{line}": choose(found, f, int(line), int(line), 99) for f, by in found["lines"].items() for line in by}
    assert of == {"f1": ["a"], "f2": ["a", "c", "b"], "g7": ["c"]}


def test_every_survivor_explained_is_a_mutant_with_a_kind_and_a_reason() -> None:
    entries = tomllib.loads(EXPLAINED.read_text(encoding="utf-8"))["survivor"]
    assert len({(e["file"], e["line"], e["what"]) for e in entries}) == len(entries) == len(explained())
    assert {e["kind"] for e in entries} <= {"equivalent", "harmless"}
    assert all(len(e["why"]) > 20 for e in entries)
    assert all(e["file"].startswith(TARGETS) for e in entries)


def test_a_child_runs_the_tests_of_the_copy_and_not_ours(tmp_path: Path) -> None:
    """In the copy the version is another: the test in it passes there."""
    (tmp_path / "schemesim").mkdir()
    (tmp_path / "schemesim/__init__.py").write_text("WHERE = 'copy'\n")
    (tmp_path / "tests").mkdir()
    for name, wanted in (("good", "copy"), ("bad", "ours")):
        text = f"from schemesim import WHERE\n\ndef test_it():\n    assert WHERE == {wanted!r}\n"
        (tmp_path / f"tests/test_{name}.py").write_text(text)
    codes = [wait(start(tmp_path, [f"tests/test_{name}.py"], tmp_path / "log")) for name in ("good", "bad")]
    assert codes == [0, 1], (tmp_path / "log").read_text()
    assert wait(start(tmp_path, ["tests/test_good.py"], tmp_path / "log"), limit_s=0.0) == -1


def test_a_live_function_takes_the_code_of_the_mutant_and_a_default_does_not(tmp_path: Path) -> None:
    path = tmp_path / "live_source.py"
    path.write_text("def more(n, by=1):\n    return [x + by for x in range(n)]\n\n\nMOST = 3\n")
    spec = importlib.util.spec_from_file_location("live_source", path)
    assert spec is not None
    assert spec.loader is not None
    spec.loader.exec_module(module := importlib.util.module_from_spec(spec))
    found = {m.what: m for m in mutants_of("live_source.py", path.read_text())}
    assert module.more(2) == [1, 2]
    for what in ("1 → 2", "3 → 4"):  # of a default and of a constant: set on import
        assert not put_in_place(path, found[what], [module.more])
    assert module.more(2) == [1, 2]
    assert put_in_place(path, found["x + by → x - by"], [module.more])
    assert module.more(2) == [-1, 0]


def test_the_file_named_after_a_module_comes_first_then_a_few_tests_of_each() -> None:
    seconds = {f"tests/test_{name}.py::{n}": n / 10 for name, some in (("a", 1), ("risk", 6)) for n in range(some)}
    found = by_file(list(seconds), seconds, "schemesim/study/risk.py")
    assert found[:5] == [*(f"tests/test_risk.py::{n}" for n in range(4)), "tests/test_a.py::0"]
    assert found[5:] == ["tests/test_risk.py::4", "tests/test_risk.py::5"]


def test_tests_beside_those_that_run_a_line_are_of_the_same_files() -> None:
    assert beside(["a::1"], ["a::1", "a::2", "b::1"]) == ["a::2"]
