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

On the reference scheme (``tests/benchmarks/reference.py``), with what each was made of beside it:

batch_over_event
    Trials per second of Monte Carlo on the batch engine over those of the event engine.
batch_over_plain
    The same over those of the plain SimPy script of that scheme (``plain_simpy.py``).
event_over_kernel
    As above.
tree_in_event_runs, tree_tight_in_event_runs
    Time until at most 1e-6, or 1e-9, of the mass is unexplored, in runs of the event engine; the median over
    several places of the fault.
plain_over_tree
    Time the plain script would need for 10 % relative error of the probability "not cleared", from its
    measured rate, over the time of the tree until its bracket is within ±10 %.
over_draws
    Time per trial of the batch engine over the time to draw that trial's random numbers alone.
growth, peak_mib
    Time per trial of a million trials over that of ten thousand, and the peak memory until then.

And of the whole library:

grid
    Time per location of a station of the IEEE test system: in a grid of 242 buses over that in one of 26.
import, first_run
    Importing the library, and importing it and playing a first clearing sequence in a plant of three
    breakers, over importing numpy; each in fresh interpreters.
topologies_area_a, solved_cases_per_s_*
    Topologies the tree at 1e-4 of the location meets, and faults solved per second over them: three-phase (``_lg``: to
    earth), with the currents of every breaker of the stations around; on 9,241 buses over 100 topologies a location.
update_over_refactorise_20, update_over_refactorise_100
    Such cases per second over those of a fresh sparse factorisation each, at 9,241 buses, where a location meets
    so many topologies. (The name of any of these prints all of them.)
time_per_case_exponent
    Exponent of the time of a case against buses, 24 to 9,241.
memory_gib_9241
    Most memory this process has held at its end, in GiB.

Times are the least of several repeats in one process, of processor time, linear algebra on one thread: threads
that spin while others keep the processor busy would count as work. Tables of the growth go to
the standard error output. With ``--quick`` the trees at 1e-6 of the scenarios are left out. Names of
figures as arguments print these alone; a name ending in ``_demo`` or ``_rts96`` prints its group.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterable, Iterator
from pathlib import Path


def main(arguments: list[str]) -> None:
    """Measure and print, each figure as soon as it is known."""
    for library in ("OPENBLAS", "OMP", "MKL"):  # before numpy is loaded
        os.environ.setdefault(f"{library}_NUM_THREADS", "1")
    sys.path.insert(0, str(Path(__file__).resolve().parents[2]))
    from tests.benchmarks.figures import grid_figures
    from tests.benchmarks.figures_reference import FIGURES
    from tests.benchmarks.figures_start import start_figures
    from tests.benchmarks.networks import NETWORK, network_figures

    groups: dict[tuple[str, ...], Callable[[], Iterable[tuple[str, float]]]] = {
        **{(name,): measure for name, measure in FIGURES.items()},
        ("grid",): grid_figures,
        ("import", "first_run"): start_figures,
        NETWORK: network_figures,
        ("demo", "rts96"): lambda: of_scenarios("--quick" in arguments),
    }
    wanted = [a for a in arguments if not a.startswith("-")]
    known = {name for names in groups for name in names}
    asked = {a if a in known else a.rpartition("_")[2] for a in wanted}
    if asked - known:
        raise SystemExit(f"no such figure: {', '.join(sorted(asked - known))}; there are {', '.join(sorted(known))}")
    for names, measure in groups.items():
        if not wanted or asked.intersection(names):
            for figure in measure():
                show(*figure)


def of_scenarios(quick: bool) -> Iterator[tuple[str, float]]:
    """The figures of the scenarios that ship."""
    from tests.benchmarks.figures import costs, engine_figures, growth_figures, table, tree_figures

    for name in ("demo", "rts96"):
        yield from engine_figures(name)
        yield from tree_figures(name, ("1e-4",) if quick else ("1e-4", "1e-6"))
    for name in ("demo", "rts96"):
        found = costs(name)
        print(table(name, found), file=sys.stderr)
        yield from growth_figures(name, found)


def show(name: str, value: float) -> None:
    """One line."""
    print(f"{name} {value:.4g}", flush=True)


if __name__ == "__main__":
    main(sys.argv[1:])
