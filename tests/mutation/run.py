"""Mutation run: how many small mistakes in the engine, the studies and the zone logic do the tests tell?

    python tests/mutation/run.py map [TESTS ...]       once: which tests run which lines (needs ``coverage``)
    python tests/mutation/run.py sample --count 400    a seeded random sample of mutants, each tried
    python tests/mutation/run.py report                score and survivors so far

Work goes on in a copy of the committed tree in ``--into`` (by default a folder for temporary files), never in the
working tree. ``map`` takes that copy; ``sample`` mutates it, one file at a time, and runs the tests that cover the
changed lines, short ones of every file first, until one fails. Results are kept a line each, so a sample that was
broken off goes on where it stopped. A mutant whose tests do not end counts as told, and so does one that cannot be
imported.
"""

from __future__ import annotations

import argparse
import json
import os
import random
import shutil
import subprocess
import sys
import tempfile
import time
from collections import Counter
from concurrent.futures import ThreadPoolExecutor
from dataclasses import asdict
from pathlib import Path
from queue import Queue
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
if __name__ == "__main__":
    sys.path[0] = str(ROOT)

from schemesim.study.intervals import wilson  # noqa: E402  # only now can it be found
from tests.mutation.covering import choose  # noqa: E402
from tests.mutation.mutants import Mutant, mutants_of, mutated  # noqa: E402

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


def environment(tree: Path) -> dict[str, str]:
    """Of a run in a copy: its own package, no byte code, one thread."""
    env = {k: v for k, v in os.environ.items() if k not in ("PYTEST_ADDOPTS", "PYTHONPATH")}
    return env | {"PYTHONPATH": str(tree), "PYTHONDONTWRITEBYTECODE": "1", "OMP_NUM_THREADS": "1", "MPLBACKEND": "Agg"}


def make_map(into: Path, tests: list[str]) -> None:
    """Copy the committed tree and map tests to lines."""
    tree = into / "tree"
    shutil.rmtree(into, ignore_errors=True)
    tree.mkdir(parents=True)
    archive = subprocess.run(["git", "-C", str(ROOT), "archive", "HEAD"], check=True, capture_output=True).stdout
    subprocess.run(["tar", "-x", "-C", str(tree)], input=archive, check=True)
    script = str(Path(__file__).with_name("covering.py"))
    command = [sys.executable, script, str(into / "map.json"), *(tests or ["tests", "schemesim"])]
    started = time.monotonic()
    subprocess.run(command, cwd=tree, env=environment(tree), check=True)
    found = json.loads((into / "map.json").read_text(encoding="utf-8"))
    print(f"{len(found['tests'])} tests mapped in {time.monotonic() - started:.0f} s")


def sample(into: Path, count: int, seed: int) -> list[Mutant]:
    """A random sample of all mutants, the same for a seed and a tree; a longer one begins with a shorter."""
    tree = into / "tree"
    every = [m for f in files(tree) for m in mutants_of(f, (tree / f).read_text(encoding="utf-8"))]
    print(f"{len(every)} mutants of {len(files(tree))} files; {min(count, len(every))} drawn with seed {seed}")
    random.Random(seed).shuffle(every)
    return every[:count]


def try_one(tree: Path, mutant: Mutant, found: dict[str, Any], budget_s: float) -> dict[str, Any]:
    """Make the change in a copy, run the tests that cover it, take it back."""
    tests = choose(found, mutant.file, mutant.first, mutant.last, budget_s)
    row = asdict(mutant) | {"tests": len(tests)}
    if not tests:
        return row | {"end": UNCOVERED, "seconds": 0.0}
    path = tree / mutant.file
    right = path.read_text(encoding="utf-8")
    started = time.monotonic()
    number = {name: n for n, name in enumerate(found["tests"])}
    nominal = sum(found["seconds"][number[t]] for t in tests)
    command = [sys.executable, "-m", "pytest", "-x", "-q", "-p", "no:cacheprovider", "-n0", "--no-header", *tests]
    try:
        path.write_text(mutated(right, mutant), encoding="utf-8")
        done = subprocess.run(
            command, cwd=tree, env=environment(tree), capture_output=True, text=True, timeout=60 + 10 * nominal
        )
        end = SURVIVED if done.returncode == 0 else KILLED
        by = next((x for x in done.stdout.splitlines() if x.startswith(("FAILED", "ERROR"))), "")
    except subprocess.TimeoutExpired:
        end, by = TIMEOUT, ""
    finally:
        path.write_text(right, encoding="utf-8")
    return row | {"end": end, "by": by[:160], "seconds": round(time.monotonic() - started, 2)}


def check_unmutated(tree: Path, found: dict[str, Any]) -> None:
    """The tests have to run in the copy, on the copy's own package."""
    code = "import schemesim, sys; sys.exit(not schemesim.__file__.startswith(sys.argv[1]))"
    subprocess.run([sys.executable, "-c", code, str(tree)], cwd=tree, env=environment(tree), check=True)
    few = [found["tests"][n] for n in sorted(range(len(found["tests"])), key=lambda n: found["seconds"][n])[:20]]
    command = [sys.executable, "-m", "pytest", "-x", "-q", "-p", "no:cacheprovider", "-n0", *few]
    subprocess.run(command, cwd=tree, env=environment(tree), check=True, stdout=subprocess.DEVNULL)


def run(into: Path, count: int, seed: int, workers: int, budget_s: float) -> None:
    """Try a sample; what was tried before is not tried again."""
    found = json.loads((into / "map.json").read_text(encoding="utf-8"))
    chosen = sample(into, count, seed)
    results = into / f"results-{seed}.jsonl"
    known = {(r["file"], r["node"], r["kind"]) for r in rows(results)}
    todo = [m for m in chosen if (m.file, m.node, m.kind) not in known]
    print(f"{len(chosen) - len(todo)} tried before, {len(todo)} to try")
    if not todo:
        return
    trees: Queue[Path] = Queue()
    with tempfile.TemporaryDirectory(prefix="mutation-") as place:
        for n in range(workers):
            copy = Path(place) / str(n)
            shutil.copytree(into / "tree", copy)
            trees.put(copy)
        check_unmutated(copy, found)

        def work(mutant: Mutant) -> dict[str, Any]:
            tree = trees.get()
            try:
                return try_one(tree, mutant, found, budget_s)
            finally:
                trees.put(tree)

        with ThreadPoolExecutor(workers) as pool, results.open("a", encoding="utf-8") as out:
            for n, (mutant, row) in enumerate(zip(todo, pool.map(work, todo), strict=True), 1):
                out.write(json.dumps(row, ensure_ascii=False) + "\n")
                out.flush()
                print(f"{n}/{len(todo)} {row['end']:9} {row['seconds']:6.1f} s  {mutant.name}", flush=True)


def rows(results: Path) -> list[dict[str, Any]]:
    """Results so far; a last line that was cut off is left out."""
    if not results.exists():
        return []
    out = []
    for text in results.read_text(encoding="utf-8").splitlines():
        try:
            out.append(json.loads(text))
        except json.JSONDecodeError:
            continue
    return out


def report(found: list[dict[str, Any]]) -> str:
    """The score with its interval, and what survived."""
    if not found:
        return "nothing tried yet"
    ends = Counter(r["end"] for r in found)
    told = ends[KILLED] + ends[TIMEOUT]
    low, high = wilson(told, len(found))
    seconds = sum(r["seconds"] for r in found)
    counts = ", ".join(f"{n} {end}" for end, n in sorted(ends.items()))
    alive = (r for r in found if r["end"] in (SURVIVED, UNCOVERED))
    lines = [f"{r['end']}: {r['file']}:{r['first']}: {r['what']} ({r['tests']} tests)" for r in alive]
    score = f"score {told}/{len(found)} = {told / len(found):.1%} (95 % Wilson {low:.1%} to {high:.1%}): {counts}"
    return "\n".join([*sorted(lines), f"{score}; {seconds / len(found):.1f} s a mutant"])


def main(arguments: list[str]) -> int:
    """See the top of the file."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("command", choices=("map", "sample", "report"))
    parser.add_argument("tests", nargs="*", help="of map: files or folders of tests (all of them by default)")
    parser.add_argument("--into", type=Path, default=Path(tempfile.gettempdir()) / "schemesim-mutation")
    parser.add_argument("--count", type=int, default=400)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--workers", type=int, default=1)
    parser.add_argument("--budget", type=float, default=30.0, help="seconds of tests for a mutant, unmutated")
    asked = parser.parse_intermixed_args(arguments)
    if asked.command == "map":
        make_map(asked.into, asked.tests)
        return 0
    if asked.command == "sample":
        run(asked.into, asked.count, asked.seed, asked.workers, asked.budget)
    print(report(rows(asked.into / f"results-{asked.seed}.jsonl")))
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
