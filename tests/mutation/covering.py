"""Which tests run which lines, and how long each takes: one run of the tests under ``coverage``."""

from __future__ import annotations

import json
import sys
from collections import Counter
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pytest

if TYPE_CHECKING:
    import coverage


class Contexts:
    """A plugin that tells coverage which test is running and notes how long it takes."""

    def __init__(self, cov: coverage.Coverage) -> None:
        self.cov = cov
        self.seconds: dict[str, float] = {}
        self.failed: list[str] = []

    def pytest_collection_modifyitems(self, items: list[pytest.Item]) -> None:
        """Leave out what drives a browser."""
        items[:] = [item for item in items if not item.get_closest_marker("browser")]

    @pytest.hookimpl(hookwrapper=True)
    def pytest_runtest_protocol(self, item: pytest.Item) -> Any:
        """Around one test."""
        self.cov.switch_context(item.nodeid)
        yield
        self.cov.switch_context("")

    def pytest_runtest_logreport(self, report: pytest.TestReport) -> None:
        """After set-up, call and tear-down."""
        self.seconds[report.nodeid] = self.seconds.get(report.nodeid, 0.0) + report.duration
        if report.failed:
            self.failed.append(report.nodeid)


def cover(paths: list[str], into: Path) -> None:
    """Run the tests in the present directory and write the map."""
    import coverage

    cov = coverage.Coverage(data_file=None, source=["schemesim"], config_file=False)
    contexts = Contexts(cov)
    cov.start()
    pytest.main(["-q", "-p", "no:cacheprovider", *paths], plugins=[contexts])
    cov.stop()
    failed = set(contexts.failed)
    if not contexts.seconds:
        raise SystemExit("no test ran")
    if failed:
        print(f"left out, for they fail unmutated: {sorted(failed)}", file=sys.stderr)
    data = cov.get_data()
    names = sorted(contexts.seconds)
    number = {name: n for n, name in enumerate(names)}
    sets: dict[tuple[int, ...], int] = {}  # many lines are run by the same tests
    lines: dict[str, dict[int, int]] = {}
    for file in sorted(data.measured_files()):
        found = lines.setdefault(str(Path(file).relative_to(Path.cwd())), {})
        for line, tests in data.contexts_by_lineno(file).items():
            here = tuple(sorted(number[t] for t in tests if t in number and t not in failed))
            found[line] = sets.setdefault(here, len(sets))
    seconds = [round(contexts.seconds[n], 4) for n in names]
    found_all = {"tests": names, "seconds": seconds, "sets": list(sets), "lines": lines}
    into.write_text(json.dumps(found_all), encoding="utf-8")


def merged(old: dict[str, Any], new: dict[str, Any]) -> dict[str, Any]:
    """A map of the tests of both; of a test in both, as the newer has it."""
    names = [*(t for t in old["tests"] if t not in set(new["tests"])), *new["tests"]]
    number = {name: n for n, name in enumerate(names)}
    seconds = dict(zip([*old["tests"], *new["tests"]], [*old["seconds"], *new["seconds"]], strict=True))
    fresh = set(new["tests"])
    lines: dict[str, dict[str, set[int]]] = {}
    for found in (old, new):
        sets = [
            {number[t] for t in map(found["tests"].__getitem__, here) if found is new or t not in fresh}
            for here in found["sets"]
        ]
        for file, by_line in found["lines"].items():
            for line, which in by_line.items():
                lines.setdefault(file, {}).setdefault(line, set()).update(sets[which])
    kept: dict[tuple[int, ...], int] = {}
    told = {
        file: {line: kept.setdefault(tuple(sorted(here)), len(kept)) for line, here in by_line.items()}
        for file, by_line in lines.items()
    }
    return {"tests": names, "seconds": [seconds[n] for n in names], "sets": list(kept), "lines": told}


def by_file(tests: list[str], seconds: Mapping[str, float], module: str) -> list[str]:
    """A few of the shortest tests of every file, a file named after the module first; then the others."""
    files: dict[str, list[str]] = {}
    for t in sorted(tests, key=lambda t: (seconds[t], t)):
        files.setdefault(t.partition("::")[0], []).append(t)
    stem = Path(module).stem

    def rank(file: str) -> tuple[bool, bool, float]:
        return stem not in Path(file).stem, file.startswith("schemesim/"), seconds[files[file][0]]

    order = sorted(files, key=rank)
    return [t for f in order for t in files[f][:4]] + [t for f in order for t in files[f][4:]]


def beside(tests: list[str], every: list[str]) -> list[str]:
    """Other tests of the same files: a fixture of a module is set up once, and counts for the test that came first."""
    files, own = {t.partition("::")[0] for t in tests}, set(tests)
    return [t for t in every if t not in own and t.partition("::")[0] in files]


def spread(tests: list[str], seconds: Mapping[str, float]) -> list[str]:
    """The shortest test of every file, then the second of every file, and so on."""
    taken: Counter[str] = Counter()
    turns = []
    for t in sorted(tests, key=lambda t: (seconds[t], t)):
        file = t.partition("::")[0]
        turns.append((taken[file], seconds[t], t))
        taken[file] += 1
    return [t for _, _, t in sorted(turns)]


def running(found: dict[str, Any], file: str, first: int, last: int) -> list[str]:
    """Every test that runs some lines; of lines that run on import only, any of the module, or of its folder."""
    of = found["lines"].get(file, {})
    sets = found["sets"]
    tests = {t for line in range(first, last + 1) if str(line) in of for t in sets[of[str(line)]]}
    if not tests:
        tests = {t for here in set(of.values()) for t in sets[here]}
    if not tests:
        folder = [lines for name, lines in found["lines"].items() if Path(name).parent == Path(file).parent]
        tests = {t for lines in folder for here in set(lines.values()) for t in sets[here]}
    return [found["tests"][n] for n in sorted(tests)]


def choose(found: dict[str, Any], file: str, first: int, last: int, budget_s: float, files: int = 100) -> list[str]:
    """Tests for a change in some lines, of every file in turn, as many as a budget of seconds and of files allows."""
    tests = running(found, file, first, last)
    seconds = dict(zip(found["tests"], found["seconds"], strict=True))
    near = list(dict.fromkeys(t.partition("::")[0] for t in by_file(tests, seconds, file)))[:files]
    out: list[str] = []
    spent = 0.0
    for t in spread([t for t in tests if t.partition("::")[0] in near], seconds):
        if not out or spent + seconds[t] <= budget_s:  # one at least
            spent += seconds[t]
            out.append(t)
    return out


if __name__ == "__main__":
    cover(sys.argv[2:], Path(sys.argv[1]))
