"""Mutation run: how many small mistakes in the engine, the studies and the zone logic do the tests tell?

    python tests/mutation/run.py map [TESTS ...]        which tests run which lines (needs ``coverage``)
    python tests/mutation/run.py map --add TESTS ...    more tests, or tests written anew, over the same sources
    python tests/mutation/run.py sample --count 400     a seeded random sample of mutants, each tried
    python tests/mutation/run.py again                  those that survived and are not explained, once more
    python tests/mutation/run.py verify                 the tests that told mutants, with no change: they have to pass
    python tests/mutation/run.py report                 score and survivors so far

Work goes on in a copy of the committed tree in ``--into`` (by default a folder for temporary files), never in the
working tree. ``map`` takes that copy; ``sample`` mutates it, one file at a time, and runs the tests that cover the
changed lines, short ones of every file first, until one fails. Results are kept a line each, the last of a mutant
counts, so a sample that was broken off goes on where it stopped. A mutant whose tests do not end counts as told, and
so does one that cannot be imported. Survivors that no test can tell, or that change nothing a user sees, stand in
``survivors.toml``, each with its reason; the score is given with them and without.
"""

from __future__ import annotations

import argparse
import contextlib
import json
import os
import random
import shutil
import subprocess
import sys
import tempfile
import time
import tomllib
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
if __name__ == "__main__":
    sys.path[0] = str(ROOT)

from schemesim.study.intervals import wilson  # noqa: E402  # only now can it be found
from tests.mutation.covering import beside, by_file, choose, merged, running  # noqa: E402
from tests.mutation.forking import ended, environment, preload, start, wait  # noqa: E402
from tests.mutation.live import Loop, Task, session  # noqa: E402
from tests.mutation.mutants import Mutant, mutants_of, mutated  # noqa: E402

EXPLAINED = Path(__file__).with_name("survivors.toml")
TARGETS = (
    "schemesim/engine", "schemesim/study", "schemesim/plant/zones.py", "schemesim/plant/coverage.py",
    "schemesim/plant/current.py", "schemesim/plant/paths.py", "schemesim/plant/grid.py",
)  # fmt: skip
KILLED, SURVIVED, TIMEOUT, UNCOVERED = "killed", "survived", "timeout", "no test"


def files(tree: Path) -> list[str]:
    """The files that are mutated, in order."""
    found: list[Path] = []
    for target in TARGETS:
        path = tree / target
        found.extend(sorted(path.rglob("*.py")) if path.is_dir() else [path])
    return [str(p.relative_to(tree)) for p in found if p.stat().st_size]


def archived(paths: list[str], tree: Path) -> None:
    """Take files as committed."""
    archive = subprocess.run(["git", "-C", str(ROOT), "archive", "HEAD", *paths], check=True, capture_output=True)
    subprocess.run(["tar", "-x", "-C", str(tree)], input=archive.stdout, check=True)


def make_map(into: Path, tests: list[str], add: bool) -> None:
    """Copy the committed tree, or the tests to be added, and map tests to lines."""
    tree, target = into / "tree", into / ("more.json" if add else "map.json")
    if not add:
        shutil.rmtree(into, ignore_errors=True)
        tree.mkdir(parents=True)
    archived(tests if add else [], tree)
    run_here = [t for t in tests if not t.endswith(".py") or Path(t).name.startswith("test_")] if add else tests
    script = str(Path(__file__).with_name("covering.py"))
    command = [sys.executable, script, str(target), *(run_here or ["tests", "schemesim"])]
    started = time.monotonic()
    env = environment(tree) | {"PYTHONDONTWRITEBYTECODE": "1"}
    subprocess.run(command, cwd=tree, env=env, check=True)
    found = json.loads(target.read_text(encoding="utf-8"))
    print(f"{len(found['tests'])} tests mapped in {time.monotonic() - started:.0f} s")
    if add:
        whole = merged(json.loads((into / "map.json").read_text(encoding="utf-8")), found)
        (into / "map.json").write_text(json.dumps(whole), encoding="utf-8")


def sample(into: Path, count: int, seed: int, only: Sequence[str] = ()) -> list[Mutant]:
    """A random sample of all mutants, the same for a seed and a tree; a longer one begins with a shorter."""
    tree = into / "tree"
    chosen = [f for f in files(tree) if not only or Path(f).name in only]
    every = [m for f in chosen for m in mutants_of(f, (tree / f).read_text(encoding="utf-8"))]
    print(f"{len(every)} mutants of {len(chosen)} files; {min(count, len(every))} drawn with seed {seed}")
    random.Random(seed).shuffle(every)
    return every[:count]


class Trial:
    """A mutant being tried in a copy of the tree."""

    def __init__(self, tree: Path, mutant: Mutant, tests: list[str], nominal_s: float, number: int) -> None:
        self.tree, self.mutant, self.tests = tree, mutant, tests
        self.limit_s = 60 + 10 * nominal_s
        self.path, self.log = tree / mutant.file, tree.with_suffix(".log")
        self.right, self.times = self.path.read_text(encoding="utf-8"), self.path.stat()
        self.path.write_text(mutated(self.right, mutant), encoding="utf-8")
        os.utime(self.path, (number, number))  # a time of its own, so that no byte code of another is taken for it
        self.started = time.monotonic()
        self.pid = start(tree, tests, self.log)

    def end(self) -> dict[str, Any] | None:
        """The result, and the source as it was; None while tests run."""
        code = ended(self.pid, self.started, self.limit_s)
        if code is None:
            return None
        self.path.write_text(self.right, encoding="utf-8")
        os.utime(self.path, ns=(self.times.st_atime_ns, self.times.st_mtime_ns))
        said = self.log.read_text(encoding="utf-8", errors="replace").splitlines()
        by = next((x for x in said if x.startswith(("FAILED", "ERROR"))), "") if code > 0 else ""
        end = TIMEOUT if code == -1 else KILLED if code else SURVIVED
        spent = round(time.monotonic() - self.started, 2)
        return asdict(self.mutant) | {"tests": len(self.tests), "end": end, "by": by[:200], "seconds": spent}


def check_unmutated(tree: Path, found: dict[str, Any]) -> None:
    """The tests have to run in the copy, on the copy's own package."""
    few = [found["tests"][n] for n in sorted(range(len(found["tests"])), key=lambda n: found["seconds"][n])[:20]]
    code = wait(start(tree, few, tree.with_suffix(".log")))
    if code:
        raise SystemExit(f"tests fail with no change: {tree.with_suffix('.log').read_text(encoding='utf-8')[-3000:]}")


def run(into: Path, todo: list[Mutant], seed: int, workers: int, budget_s: float) -> None:
    """Try mutants in forks of one session, those that are not live in processes of their own; keep the results."""
    found = json.loads((into / "map.json").read_text(encoding="utf-8"))
    seconds = dict(zip(found["tests"], found["seconds"], strict=True))
    slow: list[Mutant] = []
    done = 0

    def keep(row: dict[str, Any]) -> None:
        nonlocal done
        done += 1
        with results_of(into, seed).open("a", encoding="utf-8") as out:
            out.write(json.dumps(row, ensure_ascii=False) + "\n")
        where = f"{row['file']}:{row['first']}: {row['what']}"
        print(f"{done}/{len(todo)} {row['end']:9} {row['seconds']:6.1f} s  {where}", flush=True)

    def tasks() -> Iterator[Task]:
        for m in todo:
            tests = running(found, m.file, m.first, m.last)
            if tests:
                more = beside(tests, found["tests"])
                yield m, by_file(tests, seconds, m.file) + by_file(more, seconds, m.file), budget_s
            else:
                keep(asdict(m) | {"tests": 0, "end": UNCOVERED, "by": "", "seconds": 0.0})

    def told(task: Task, code: int, said: str, spent: float) -> None:
        if code == 3:
            slow.append(task[0])
            return
        if code == 99:
            raise SystemExit(f"{task[0].name}: {said}")
        end = TIMEOUT if code < 0 else KILLED if code else SURVIVED
        keep(asdict(task[0]) | {"tests": len(task[1]), "end": end, "by": said[:200], "seconds": round(spent, 2)})

    with tempfile.TemporaryDirectory(prefix="mutation-") as place:
        free = [Path(place) / str(n) for n in range(workers)]
        for copy in free:
            shutil.copytree(into / "tree", copy)
        preload(free[0])
        paths = sorted({t.partition("::")[0] for m in todo for t in running(found, m.file, m.first, m.last)})
        session(free[0], paths, Loop(free[0], tasks(), workers, told))
        run_slowly(slow, found, free, budget_s, keep)


def run_slowly(
    todo: list[Mutant], found: dict[str, Any], free: list[Path], budget_s: float, keep: Callable[[dict[str, Any]], None]
) -> None:
    """Try mutants each in a process that imports the project anew."""
    number = {name: n for n, name in enumerate(found["tests"])}
    waiting, tried = list(reversed(todo)), list[Trial]()
    while waiting or tried:
        while waiting and free:
            mutant = waiting.pop()
            tests = choose(found, mutant.file, mutant.first, mutant.last, budget_s, files=8)
            nominal = sum(found["seconds"][number[t]] for t in tests)
            tried.append(Trial(free.pop(), mutant, tests, nominal, 1_000_000_000 + 2 * len(waiting)))
        for trial in list(tried):
            row = trial.end()
            if row is not None:
                tried.remove(trial)
                free.append(trial.tree)
                keep(row)
        time.sleep(0.05)


def verify(into: Path, found: list[dict[str, Any]]) -> int:
    """Run with no change each test that told a mutant; how many fail."""
    known = json.loads((into / "map.json").read_text(encoding="utf-8"))["tests"]
    said = [r["by"].removeprefix("FAILED ").removeprefix("ERROR ") for r in found if r["end"] == KILLED]
    told = [k for by in said for k in known if k == by or by.startswith(f"{k} - ")]
    with tempfile.TemporaryDirectory(prefix="mutation-") as place:
        shutil.copytree(into / "tree", tree := Path(place) / "0")
        preload(tree)
        code = wait(start(tree, sorted(set(told)), log := tree.with_suffix(".log"), ()), 3600)
        print(log.read_text(encoding="utf-8")[-2000:])
    print(f"{len(set(told))} tests told {len(told)} mutants; with no change they {'fail' if code else 'pass'}")
    return code


def results_of(into: Path, seed: int) -> Path:
    """The file that results are kept in."""
    return into / f"results-{seed}.jsonl"


def key(row: dict[str, Any]) -> tuple[str, int, int]:
    """Which mutant a row is of."""
    return row["file"], row["node"], row["kind"]


def rows(results: Path) -> list[dict[str, Any]]:
    """The last result of each mutant; a last line that was cut off is left out."""
    out: dict[tuple[str, int, int], dict[str, Any]] = {}
    for text in results.read_text(encoding="utf-8").splitlines() if results.exists() else ():
        with contextlib.suppress(json.JSONDecodeError):
            row = json.loads(text)
            out[key(row)] = row
    return list(out.values())


def explained(path: Path = EXPLAINED) -> dict[tuple[str, str, str], str]:
    """Survivors read: file, line of source and change, and which kind of harmless each is."""
    if not path.exists():
        return {}
    entries = tomllib.loads(path.read_text(encoding="utf-8"))["survivor"]
    return {(e["file"], e["line"], e["what"]): e["kind"] for e in entries}


def with_line(found: list[dict[str, Any]], tree: Path) -> list[dict[str, Any]]:
    """Rows with the line of source they change, by which an explanation is found though lines move."""
    text = {f: (tree / f).read_text(encoding="utf-8").splitlines() for f in {r["file"] for r in found}}
    return [r | {"line": text[r["file"]][r["first"] - 1].strip()} for r in found]


def scored(told: int, of: int) -> str:
    """A score with its interval."""
    low, high = wilson(told, of)
    return f"{told}/{of} = {told / of:.1%} (95 % Wilson {low:.1%} to {high:.1%})"


def report(found: list[dict[str, Any]], why: dict[tuple[str, str, str], str]) -> str:
    """The score with its interval, raw and without what is explained, and what survived."""
    if not found:
        return "nothing tried yet"
    ends = Counter(r["end"] for r in found)
    told = ends[KILLED] + ends[TIMEOUT]
    alive = [r for r in found if r["end"] in (SURVIVED, UNCOVERED)]
    kinds = Counter(why[k] for r in alive if (k := (r["file"], r["line"], r["what"])) in why)
    lines = [
        f"{r['end']}{f' ({kind})' if (kind := why.get((r['file'], r['line'], r['what']))) else ''}: "
        f"{r['file']}:{r['first']}: {r['what']} ({r['tests']} tests)"
        for r in alive
    ]
    counts = ", ".join(f"{n} {end}" for end, n in sorted(ends.items()))
    seconds = sum(r["seconds"] for r in found) / len(found)
    lines = [*sorted(lines), f"score {scored(told, len(found))}: {counts}; {seconds:.1f} s a mutant"]
    if kinds:
        said = ", ".join(f"{n} {kind}" for kind, n in sorted(kinds.items()))
        net = len(found) - kinds["equivalent"]
        lines.append(f"explained: {said}")
        lines.append(f"score without the equivalent {scored(told, net)}")
        lines.append(f"score without the harmless either {scored(told, net - kinds['harmless'])}")
    return "\n".join(lines)


def main(arguments: list[str]) -> int:
    """See the top of the file."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("command", choices=("map", "sample", "again", "verify", "report"))
    parser.add_argument("tests", nargs="*", help="of map: files or folders of tests (all of them by default)")
    parser.add_argument("--add", action="store_true", help="of map: to the map there is, over the same sources")
    parser.add_argument("--into", type=Path, default=Path(tempfile.gettempdir()) / "schemesim-mutation")
    parser.add_argument("--count", type=int, default=400)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--workers", type=int, default=1)
    parser.add_argument("--budget", type=float, default=30.0, help="seconds of tests for a mutant, unmutated")
    parser.add_argument("--also", type=Path, nargs="*", default=[], help="of report: other places of work to add up")
    parser.add_argument("--only", nargs="*", default=[], help="of sample: names of files to draw from")
    parser.add_argument("--without", nargs="*", default=[], help="of sample: names of files left for another time")
    asked = parser.parse_intermixed_args(arguments)
    if asked.command == "map":
        make_map(asked.into, asked.tests, asked.add)
        return 0
    tree, results = asked.into / "tree", results_of(asked.into, asked.seed)
    found, why = with_line(rows(results), tree), explained()
    if asked.command == "verify":
        return verify(asked.into, found)
    todo: list[Mutant] = []
    if asked.command == "sample":
        known = {key(r) for r in found}
        drawn = sample(asked.into, asked.count, asked.seed, asked.only)
        chosen = [m for m in drawn if Path(m.file).name not in asked.without]
        todo = [m for m in chosen if (m.file, m.node, m.kind) not in known]
        print(f"{len(chosen) - len(todo)} tried before, {len(todo)} to try")
    elif asked.command == "again":
        alive = [r for r in found if r["end"] in (SURVIVED, UNCOVERED)]
        fields = Mutant.__dataclass_fields__
        todo = [Mutant(**{f: r[f] for f in fields}) for r in alive if (r["file"], r["line"], r["what"]) not in why]
    if todo:
        run(asked.into, todo, asked.seed, asked.workers, asked.budget)
    places = [asked.into, *asked.also]
    print(report([r for into in places for r in with_line(rows(results_of(into, asked.seed)), into / "tree")], why))
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
