"""The floors of the library: imports point downward only, form no cycle, and no file grows too long."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import networkx as nx
import pytest

ROOT = Path(__file__).resolve().parents[2]
TOP = "schemesim"
MAX_LINES = 420

FLOORS: tuple[tuple[str, ...], ...] = (
    ("errors", "show", "ticks"),
    ("plant",),
    ("scheme",),
    ("engine",),
    ("study",),
    ("report",),
    ("scenario",),
    ("__main__", "cli"),
)


def floor_of(module: str) -> int | None:
    """Floor of a dotted module name below the top package; None where it has none."""
    room = module.split(".")[1]
    if room.startswith("scenario_"):
        room = "scenario"
    return next((level for level, rooms in enumerate(FLOORS) if room in rooms), None)


def modules_in(root: Path) -> dict[str, Path]:
    """Every module of the library under `root`, by dotted name; a package stands for its `__init__`."""
    found = {}
    for path in sorted((root / TOP).rglob("*.py")):
        parts = path.relative_to(root).with_suffix("").parts
        found[".".join(parts[:-1] if parts[-1] == "__init__" else parts)] = path
    return found


def imports_of(module: str, path: Path, known: dict[str, Path]) -> Iterator[tuple[int, str]]:
    """Line and dotted target of every import of the library in a file, wherever in the file it stands.

    `from package import name` is an import of `package.name` where that is a module, else of `package`;
    a name taken from the top package is always an import of the top package.
    """
    package = module if path.name == "__init__.py" else module.rpartition(".")[0]
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"), str(path))):
        targets: list[str] = []
        if isinstance(node, ast.Import):
            targets = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level:
                parents = package.split(".")
                parents = parents[: len(parents) - node.level + 1]
                base = ".".join([*parents, base] if base else parents)
            for alias in node.names:
                inner = f"{base}.{alias.name}"
                targets.append(inner if base != TOP and inner in known else base)
        elif isinstance(node, ast.Call):
            name = node.func.attr if isinstance(node.func, ast.Attribute) else getattr(node.func, "id", "")
            if name in {"import_module", "__import__"} and node.args:
                first = node.args[0]
                if isinstance(first, ast.Constant) and isinstance(first.value, str):
                    targets = [first.value]
        else:
            continue
        for target in targets:
            if target == TOP or target.startswith(f"{TOP}."):
                yield node.lineno, target


def violations(root: Path) -> list[str]:
    """What breaks the order of the floors under `root`, one line each; empty when nothing does."""
    known = modules_in(root)
    wrong = []
    for module, path in known.items():
        if module == TOP:
            continue
        own = floor_of(module)
        if own is None:
            wrong.append(f"{module}: has no floor")
            continue
        for line, target in imports_of(module, path, known):
            if target == TOP:
                wrong.append(f"{module}:{line}: imports the top package")
                continue
            other = floor_of(target)
            if other is None:
                wrong.append(f"{module}:{line}: imports {target}, which has no floor")
            elif other > own:
                wrong.append(f"{module}:{line}: imports {target}, {other - own} up")
    return wrong


def import_graph(root: Path) -> nx.DiGraph[str]:
    """Who imports whom, among the modules of the library under `root`."""
    known = modules_in(root)
    graph: nx.DiGraph[str] = nx.DiGraph()
    graph.add_nodes_from(known)
    for module, path in known.items():
        graph.add_edges_from((module, target) for _, target in imports_of(module, path, known))
    return graph


def too_long(root: Path) -> dict[str, int]:
    """Files of more than `MAX_LINES` lines, with their number of lines."""
    lengths = {
        str(path.relative_to(root)): len(path.read_text(encoding="utf-8").splitlines())
        for path in modules_in(root).values()
    }
    return {name: length for name, length in lengths.items() if length > MAX_LINES}


def test_imports_point_downward_only() -> None:
    assert violations(ROOT) == []


def test_no_module_imports_itself_through_others() -> None:
    graph = import_graph(ROOT)
    assert graph.number_of_nodes() == len(list((ROOT / TOP).rglob("*.py")))
    assert set(graph) >= {f"{TOP}.errors", f"{TOP}.ticks", f"{TOP}.plant", f"{TOP}.engine"}
    assert list(nx.simple_cycles(graph)) == []
    assert nx.is_directed_acyclic_graph(graph)


def test_no_file_is_too_long() -> None:
    assert too_long(ROOT) == {}


def plant_tree(root: Path, files: dict[str, str]) -> Path:
    """Write a small library under `root`: the packages, and `files` by path below the top package."""
    for package in ("", "plant", "scheme", "engine", "study"):
        folder = root / TOP / package
        folder.mkdir(parents=True, exist_ok=True)
        (folder / "__init__.py").write_text("", encoding="utf-8")
    for name, text in {"errors.py": "", "ticks.py": "", "plant/graph.py": "", **files}.items():
        (root / TOP / name).write_text(text, encoding="utf-8")
    return root


LAZY = "def late() -> None:\n    from schemesim.study import odds\n"
TYPING = "from typing import TYPE_CHECKING\nif TYPE_CHECKING:\n    from schemesim.engine import event\n"


@pytest.mark.parametrize(
    ("name", "text", "expected"),
    [
        (
            "plant/graph.py",
            "import schemesim.scheme",
            "schemesim.plant.graph:1: imports schemesim.scheme, 1 up",
        ),
        ("plant/graph.py", LAZY, "schemesim.plant.graph:2: imports schemesim.study, 3 up"),
        ("plant/graph.py", TYPING, "schemesim.plant.graph:3: imports schemesim.engine, 2 up"),
        (
            "plant/graph.py",
            "from ..engine import event",
            "schemesim.plant.graph:1: imports schemesim.engine, 2 up",
        ),
        ("plant/__init__.py", "from ..study import odds", "schemesim.plant:1: imports schemesim.study, 3 up"),
        (
            "errors.py",
            "from schemesim.plant import graph",
            "schemesim.errors:1: imports schemesim.plant.graph, 1 up",
        ),
        (
            "ticks.py",
            "from importlib import import_module\nm = import_module('schemesim.plant.graph')",
            "schemesim.ticks:2: imports schemesim.plant.graph, 1 up",
        ),
        ("study/odds.py", "from schemesim import errors", "schemesim.study.odds:1: imports the top package"),
        ("study/odds.py", "from .. import errors", "schemesim.study.odds:1: imports the top package"),
        ("ticks.py", "from . import errors", "schemesim.ticks:1: imports the top package"),
        ("__main__.py", "import schemesim", "schemesim.__main__:1: imports the top package"),
        (
            "scenario_file.py",
            "import schemesim.cli",
            "schemesim.scenario_file:1: imports schemesim.cli, 1 up",
        ),
        ("attic.py", "", "schemesim.attic: has no floor"),
        (
            "study/odds.py",
            "import schemesim.attic",
            "schemesim.study.odds:1: imports schemesim.attic, which has no floor",
        ),
    ],
)
def test_a_planted_violation_is_found(tmp_path: Path, name: str, text: str, expected: str) -> None:
    assert violations(plant_tree(tmp_path, {name: text})) == [expected]


def test_what_points_downward_is_accepted(tmp_path: Path) -> None:
    files = {
        "__init__.py": "from schemesim.study.odds import p\n",
        "scenario.py": "from schemesim.scenario_file import load\nfrom schemesim.study import odds\n",
        "scenario_file.py": "import yaml\nfrom schemesim.errors import InputError\n",
        "study/odds.py": "from ..engine import event\nfrom .tree import leaf\nimport schemesim.plant.graph\n",
        "study/tree.py": "import schemesimilar\n",
        "__main__.py": "from schemesim.scenario import load\n",
    }
    root = plant_tree(tmp_path, files)
    assert violations(root) == []
    assert nx.is_directed_acyclic_graph(import_graph(root))


def test_a_planted_cycle_is_found(tmp_path: Path) -> None:
    files = {
        "study/odds.py": "from schemesim.study import tree\n",
        "study/tree.py": "def late() -> None:\n    from .odds import p\n",
    }
    root = plant_tree(tmp_path, files)
    assert violations(root) == []
    cycles = [set(cycle) for cycle in nx.simple_cycles(import_graph(root))]
    assert cycles == [{"schemesim.study.odds", "schemesim.study.tree"}]


def test_a_planted_long_file_is_found(tmp_path: Path) -> None:
    files = {"plant/graph.py": "x = 1\n" * (MAX_LINES + 1), "errors.py": "x = 1\n" * MAX_LINES}
    assert too_long(plant_tree(tmp_path, files)) == {f"{TOP}/plant/graph.py": MAX_LINES + 1}
