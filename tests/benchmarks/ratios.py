"""Print the figures of speed, one ``name value`` a line: ``python tests/benchmarks/ratios.py``.

``demo`` is line L1 of the demo scenario at its middle, ``rts96`` line A27 of the IEEE test system,
area A, both under the policy in use there.

runs_per_s_*
    Runs of the event engine per second: those of the tree at 1e-4, topologies known.
events_per_run_*
    Timeouts that took effect in such a run, on the average.
event_over_kernel_*
    Such runs over as many bare SimPy timeouts as they handle: the price of the rules.
tree_runs_E_*, tree_s_E_*
    Runs and seconds the event tree needs until the mass not explored is at most E.
growth_buses_*, growth_bind_*, growth_run_*, growth_tree_*, growth_location_*
    The same location on a grid so many times larger: time to bind it, of one run, of its tree
    at 1e-4, and of all of it, over those on the smallest grid. 1 means the grid costs nothing.

common_numbers_cut_*
    How many times fewer trials a difference needs with common random numbers than with independent
    ones, for a relay of the demo ten times better; by measure.

Times are the least of several repeats in one process, of processor time. Tables of the growth go to
the standard error output. With ``--quick`` the trees at 1e-6 are left out.
"""

from __future__ import annotations

import sys
from pathlib import Path


def main(arguments: list[str]) -> None:
    """Measure and print, each figure as soon as it is known."""
    sys.path.insert(0, str(Path(__file__).resolve().parents[2]))
    from tests.benchmarks.common_numbers import differences
    from tests.benchmarks.figures import costs, engine_figures, growth_figures, table, tree_figures

    for measure, row in differences().items():
        if row.paired is not None:
            show(f"common_numbers_cut_{measure}", row.paired.variance_factor)
    epsilons = ("1e-4",) if "--quick" in arguments else ("1e-4", "1e-6")
    for name in ("demo", "rts96"):
        for figure in engine_figures(name):
            show(*figure)
        for figure in tree_figures(name, epsilons):
            show(*figure)
    for name in ("demo", "rts96"):
        found = costs(name)
        print(table(name, found), file=sys.stderr)
        for figure in growth_figures(name, found):
            show(*figure)


def show(name: str, value: float) -> None:
    """One line."""
    print(f"{name} {value:.4g}", flush=True)


if __name__ == "__main__":
    main(sys.argv[1:])
