"""Mutants tried in forks of one pytest session that has everything imported and collected.

A child puts the code of the mutant in place of that of the live functions and runs the tests; nothing is imported
anew, so a mutant costs what its tests cost. What is computed on import (constants, defaults, class bodies, tables) is
not changed by that: such mutants are left to the slow way. So is nothing told that is not so: a test that fails here
fails because of the change; one that passes might still tell the mutant in a process of its own.
"""

from __future__ import annotations

import ast
import gc
import os
import resource
import sys
import time
import traceback
from collections.abc import Callable, Iterator
from pathlib import Path
from types import CodeType, FunctionType

import pytest

from tests.mutation.forking import ended
from tests.mutation.mutants import Mutant, changed

Task = tuple[Mutant, list[str], float]
"""A mutant, its tests, and the seconds they may take."""


def codes(code: CodeType) -> Iterator[CodeType]:
    """Every code of a module's, in order."""
    for const in code.co_consts:
        if isinstance(const, CodeType):
            yield const
            yield from codes(const)


def keyed(code: CodeType) -> dict[tuple[str, int, int], CodeType]:
    """By name, first line and which of these it is."""
    out: dict[tuple[str, int, int], CodeType] = {}
    for c in codes(code):
        n = 0
        while (key := (c.co_qualname, c.co_firstlineno, n)) in out:
            n += 1
        out[key] = c
    return out


def put_in_place(path: Path, mutant: Mutant, functions: list[FunctionType]) -> bool:
    """Change the live functions of a file; False if the change is in none of them."""
    tree = ast.parse(path.read_text(encoding="utf-8"))
    old = compile(tree, str(path), "exec", dont_inherit=True)
    new = compile(changed(tree, mutant), str(path), "exec", dont_inherit=True)
    before, after = keyed(old), keyed(new)
    if before.keys() != after.keys() or own(old) != own(new):
        return False
    turned = {c: after[k] for k, c in before.items() if c != after[k]}
    found = [f for f in functions if f.__code__ in turned]
    for f in found:
        f.__code__ = turned[f.__code__]
    return bool(found)


def own(code: CodeType) -> tuple[object, ...]:
    """What a module's or a class's body does itself, without the functions in it."""
    consts = tuple(own(c) if not c.co_flags & 1 else c.co_name for c in code.co_consts if isinstance(c, CodeType))
    plain = tuple((type(c), c) for c in code.co_consts if not isinstance(c, CodeType))
    return code.co_code, consts, plain


def child(task: Task, path: Path, functions: list[FunctionType], items: list[pytest.Item], log: Path) -> None:
    """Make the change, run the tests until one fails, and end: 0 none did, 1 one did, 3 the change is not live."""
    code = 99
    try:
        os.setsid()
        for fd in (1, 2):
            os.dup2(os.open(os.devnull, os.O_WRONLY), fd)
        resource.setrlimit(resource.RLIMIT_CPU, (round(task[2]) + 30, round(task[2]) + 35))
        code = 0 if put_in_place(path, task[0], functions) else 3
        for item, after in zip(items, [*items[1:], None], strict=True) if code == 0 else ():
            item.config.hook.pytest_runtest_protocol(item=item, nextitem=after)
            if item.session.testsfailed:
                log.write_text(item.nodeid, encoding="utf-8")
                code = 1
                break
            if time.process_time() > task[2]:
                break
    except BaseException:
        log.write_text(traceback.format_exc(), encoding="utf-8")
        code = 99
    finally:
        os._exit(code)


class Loop:
    """A plugin that tries mutants in place of running tests."""

    def __init__(
        self, tree: Path, tasks: Iterator[Task], workers: int, told: Callable[[Task, int, str, float], None]
    ) -> None:
        self.tree, self.tasks, self.workers, self.told = tree, tasks, workers, told

    def pytest_runtestloop(self, session: pytest.Session) -> bool:
        """In place of the tests, one after another."""
        by_name = {item.nodeid: item for item in session.items}
        print(f"{len(by_name)} tests collected", flush=True)
        functions: dict[str, list[FunctionType]] = {}
        for f in gc.get_objects():
            if isinstance(f, FunctionType):
                functions.setdefault(f.__code__.co_filename, []).append(f)
        gc.freeze()
        running: list[tuple[int, float, Task, Path]] = []
        number = 0
        while True:
            while len(running) < self.workers and (task := next(self.tasks, None)) is not None:
                number += 1
                log = self.tree.parent / f"said-{number % 64}"
                log.unlink(missing_ok=True)
                items = [by_name[t] for t in task[1] if t in by_name]
                pid = os.fork()
                if not pid:
                    path = self.tree / task[0].file
                    child(task, path, functions.get(str(path), []), items, log)
                running.append((pid, time.monotonic(), task, log))
            if not running:
                return True
            for one in list(running):
                code = ended(one[0], one[1], 900.0)
                if code is not None:
                    running.remove(one)
                    said = one[3].read_text(encoding="utf-8") if one[3].exists() else ""
                    self.told(one[2], code, said, time.monotonic() - one[1])
            time.sleep(0.01)


def session(tree: Path, paths: list[str], loop: Loop) -> int:
    """Collect tests of a copy, in this process, and give them to the loop."""
    os.chdir(tree)
    sys.path[:] = [str(tree), *(p for p in sys.path if not (Path(p or ".") / "schemesim").is_dir())]
    for name in [n for n in sys.modules if n.partition(".")[0] == "schemesim"]:
        del sys.modules[name]
    return int(pytest.main(["-q", "-s", "-p", "no:cacheprovider", "--no-header", *paths], plugins=[loop]))
