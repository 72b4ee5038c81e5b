"""Every notebook runs from the top in a kernel of its own."""

from __future__ import annotations

import os
from pathlib import Path

import nbformat
import pytest
from nbclient import NotebookClient

ROOT = Path(__file__).resolve().parents[2]
NOTEBOOKS = sorted((ROOT / "notebooks").glob("*.ipynb"))


def test_there_are_notebooks() -> None:
    assert NOTEBOOKS


@pytest.mark.filterwarnings("default")  # the kernel's own start-up warns on some platforms
@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda p: p.stem)
def test_notebook_runs_from_the_top(path: Path) -> None:
    notebook = nbformat.read(path, as_version=4)
    assert all(not cell.get("outputs") for cell in notebook.cells), "commit notebooks without outputs"
    client = NotebookClient(notebook, timeout=300, resources={"metadata": {"path": str(path.parent)}})
    client.execute(env={**os.environ, "PYTHONPATH": str(ROOT)})
    code = [cell for cell in notebook.cells if cell.cell_type == "code" and cell.source.strip()]
    assert code
    assert all(cell.execution_count for cell in code)
    assert any("image/png" in out.get("data", {}) for cell in code for out in cell.outputs), "no picture drawn"
