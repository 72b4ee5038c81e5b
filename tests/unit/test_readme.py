"""README's examples run as they stand, one after the other, and the notebooks it names are all there are."""

from __future__ import annotations

import ast
import re
from pathlib import Path

import pytest

import schemesim as ss
from schemesim.report.timeline import Timeline

ROOT = Path(__file__).resolve().parents[2]
README = (ROOT / "README.md").read_text(encoding="utf-8")
EXAMPLES = re.findall(r"```python\n(.*?)```", README, flags=re.S)


def test_the_examples_run_in_order(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    known: dict[str, object] = {}
    assert len(EXAMPLES) == 3
    for n, code in enumerate(EXAMPLES):
        if "load_equipment" in code:  # her own tables: what the last lines of the example write
            monkeypatch.chdir(tmp_path)
            plant = known["plant"]
            assert isinstance(plant, ss.Plant)
            ss.equipment_list(plant).to_excel("equipment.xlsx", index=False)
            ss.relay_schedule(plant, ss.duplicate_chain()).table().to_csv("relays.csv", index=False)
        exec(compile(ast.parse(code), f"README example {n + 1}", "exec"), known)
    sequence = known["sequence"]
    assert isinstance(sequence, Timeline)
    assert "beyond the limit of 150 ms" in sequence.ending


def test_every_notebook_is_named_and_every_name_is_one() -> None:
    named = set(re.findall(r"`(?:notebooks/)?(\w+\.ipynb)`", README))
    assert named == {path.name for path in (ROOT / "notebooks").glob("*.ipynb")}
