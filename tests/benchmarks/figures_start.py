"""What it costs to begin: importing, and a first clearing sequence, over importing numpy alone.

Every measurement is a fresh interpreter that times itself; the kinds are taken in turn, so that what
disturbs one disturbs the others, and the least of each is kept.
"""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Iterator

from tests.benchmarks.figures import Figure

_TIMED = """
import time
start = time.process_time()
{work}
spent = time.process_time() - start
print(spent)
"""

NUMPY = "import numpy"
IMPORT = "import schemesim"
FIRST_RUN = """
import schemesim as ss
b = ss.PlantBuilder()
ss.generator(b, "G1", station="Alder")
ss.feeder(b, "F1", 10.0, station="Alder")
ss.feeder(b, "F2", 10.0, station="Alder")
ss.single_bus(b, "Alder", [ss.Bay("G1", "G1"), ss.Bay("F1", "F1"), ss.Bay("F2", "F2")])
plant = b.build()
program = ss.compile_scheme(plant, ss.dress(plant, ss.single_set()))
case = ss.bind(program, ss.Location("F1"), ss.LogicalSensing())
run = ss.replay(case, ss.FixedAnswers(program))
rows = ss.timeline(case, run)
assert len(plant.breakers) == 3
assert run.outcome.t_clear_us == 70_000
assert run.outcome.tripped == {"Alder.F1.CB"}
"""


def spent_s(work: str) -> float:
    """Processor time of some work in a fresh interpreter, its start not counted."""
    told = subprocess.run([sys.executable, "-c", _TIMED.format(work=work)], capture_output=True, text=True, check=True)
    return float(told.stdout)


def ratios(repeats: int = 7) -> tuple[float, float]:
    """Importing the library, and a first run, over importing numpy."""
    found: dict[str, list[float]] = {NUMPY: [], IMPORT: [], FIRST_RUN: []}
    for _ in range(repeats):
        for work, times in found.items():
            times.append(spent_s(work))
    numpy, imported, first = (min(times) for times in found.values())
    return imported / numpy, first / numpy


def start_figures() -> Iterator[Figure]:
    """Both ratios."""
    imported, first = ratios()
    yield "import", imported
    yield "first_run", first
