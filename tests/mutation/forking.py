"""Tests of a copy of the project, run in a child that finds everything but the project imported already."""

from __future__ import annotations

import contextlib
import importlib
import os
import signal
import sys
import time
import traceback
from pathlib import Path

# What the tests import for long; no plugin of pytest, which wants to be the first to import those.
HEAVY = (
    "numpy", "numpy.testing", "networkx", "yaml", "pydantic", "pandas", "matplotlib.pyplot", "scipy.stats",
    "scipy.sparse.linalg", "scipy.linalg", "scipy.integrate", "simpy",
)  # fmt: skip
OURS = ("schemesim", "tests")


def environment(tree: Path) -> dict[str, str]:
    """Of a run in a copy: its own package, one thread, no picture on a screen."""
    env = {k: v for k, v in os.environ.items() if k not in ("PYTEST_ADDOPTS", "PYTHONPATH")}
    return env | {"PYTHONPATH": str(tree), "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1", "MPLBACKEND": "Agg"}


def preload(tree: Path) -> None:
    """Import what no mutant changes."""
    vars(sys.modules["__main__"]).pop("__file__", None)  # processes that a test starts shall not import this run's own
    os.environ.update(environment(tree))
    for name in HEAVY:
        with contextlib.suppress(ImportError):
            importlib.import_module(name)


def start(tree: Path, tests: list[str], log: Path, options: tuple[str, ...] = ("-x",)) -> int:
    """Start tests in a child, in a session of its own; what it prints goes to a file. Its id."""
    sys.stdout.flush()
    sys.stderr.flush()
    pid = os.fork()
    if pid:
        return pid
    code = 99
    try:
        os.setsid()
        out = os.open(log, os.O_WRONLY | os.O_CREAT | os.O_TRUNC)
        os.dup2(out, 1)
        os.dup2(out, 2)
        os.chdir(tree)
        os.environ.update(environment(tree))
        for name in [n for n in sys.modules if n.partition(".")[0] in OURS]:
            del sys.modules[name]
        sys.path[:] = [str(tree), *(p for p in sys.path if not (Path(p) / "schemesim").is_dir())]
        sys.argv = ["pytest", *tests]
        import pytest

        arguments = ["-q", "-p", "no:cacheprovider", "--no-header", "--tb=line", *options, *tests]
        code = int(pytest.main(arguments))
        found = sys.modules.get("schemesim")
        if found is not None and not str(found.__file__).startswith(str(tree)):
            code = 98
    except BaseException:
        traceback.print_exc()
    finally:
        sys.stdout.flush()
        sys.stderr.flush()
        os._exit(code)


def ended(pid: int, started: float, limit_s: float) -> int | None:
    """The code a child ended with, -1 if it took too long and was stopped; None while it runs."""
    done, status = os.waitpid(pid, os.WNOHANG)
    if done:
        return os.waitstatus_to_exitcode(status)
    if time.monotonic() - started < limit_s:
        return None
    with contextlib.suppress(ProcessLookupError):
        os.killpg(pid, signal.SIGKILL)
    os.waitpid(pid, 0)
    return -1


def wait(pid: int, limit_s: float = 600.0) -> int:
    """The code a child ends with."""
    started = time.monotonic()
    while (code := ended(pid, started, limit_s)) is None:
        time.sleep(0.02)
    return code
