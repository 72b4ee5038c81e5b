"""The reference case as a Monte Carlo script in plain SimPy, such as an engineer would write for this one line.

    python tests/benchmarks/plain_simpy.py 10000

A fault on line L4, half way between Birch (breaker and a half) and Dunmore (single bus). Each end has two sets: set 1
with line differential, set 2 with permissive overreach, both with three distance zones, each on its own DC,
coil, channel and VT winding; and a local directional relay. The three breakers of L4 have breaker failure with
retrip, lockout and transfer trip; the other lines have three distance zones. Times in ms, lengths in km.

Nothing here is taken from the library. Failures hold for a whole trial, so whatever they keep from
working is left out of it from the start; what the network looks like with some breakers open is worked out
once for each set of open breakers.
"""

from __future__ import annotations

import random
import sys
from collections.abc import Callable, Generator, Iterator
from functools import cache, partial
from math import inf
from typing import Any, NamedTuple

import networkx as nx
import numpy as np
import simpy

HORIZON_MS = 10_000.0

# --- the network ---------------------------------------------------------------------------

BREAKERS = {
    "Alder.L1.CB": ("Alder 1", "L1 Alder"),
    "Alder.L2.CB": ("Alder 2", "L2 Alder"),
    "Birch.D1.CB1": ("Birch 1", "L1 Birch"),
    "Birch.D1.CB2": ("L1 Birch", "L3 Birch"),
    "Birch.D1.CB3": ("L3 Birch", "Birch 2"),
    "Birch.D2.CB1": ("Birch 1", "L2 Birch"),
    "Birch.D2.CB2": ("L2 Birch", "L4 Birch"),
    "Birch.D2.CB3": ("L4 Birch", "Birch 2"),
    "Birch.D3.CB1": ("Birch 1", "G3"),
    "Birch.D3.CB2": ("G3", "F2"),
    "Birch.D3.CB3": ("F2", "Birch 2"),
    "Cedar.CB1": ("L3 Cedar", "F3"),
    "Cedar.CB2": ("F3", "L5 Cedar"),
    "Cedar.CB3": ("L5 Cedar", "F4"),
    "Cedar.CB4": ("F4", "L3 Cedar"),
    "Dunmore.L4.CB": ("Dunmore", "L4 Dunmore"),
    "Dunmore.L5.CB": ("Dunmore", "L5 Dunmore"),
    "Dunmore.F5.CB": ("Dunmore", "F5"),
    "Dunmore.F6.CB": ("Dunmore", "F6"),
    "Alder.BC.CB": ("Alder 1", "Alder 2"),
}
LENGTH_KM = {"L1": 20.0, "L2": 20.0, "L3": 25.0, "L4": 30.0, "L5": 35.0}
RUNS = {"L1": ("Alder", "Birch"), "L2": ("Alder", "Birch"), "L3": ("Birch", "Cedar"), "L5": ("Dunmore", "Cedar")}
SOURCES = ("Alder 1", "Alder 2", "G3")  # G1, G2, G3

ENDS = {  # the breakers that the relays of each line end trip
    "Alder/L1": ("Alder.L1.CB",),
    "Alder/L2": ("Alder.L2.CB",),
    "Birch/L1": ("Birch.D1.CB1", "Birch.D1.CB2"),
    "Birch/L2": ("Birch.D2.CB1", "Birch.D2.CB2"),
    "Birch/L3": ("Birch.D1.CB2", "Birch.D1.CB3"),
    "Birch/L4": ("Birch.D2.CB2", "Birch.D2.CB3"),
    "Cedar/L3": ("Cedar.CB1", "Cedar.CB4"),
    "Cedar/L5": ("Cedar.CB2", "Cedar.CB3"),
    "Dunmore/L4": ("Dunmore.L4.CB",),
    "Dunmore/L5": ("Dunmore.L5.CB",),
}
AROUND = {  # what breaker failure trips: breaker, and the channel to it where it is elsewhere
    "Birch.D2.CB2": (
        ("Birch.D2.CB1", ""),
        ("Birch.D2.CB3", ""),
        ("Alder.L2.CB", "Alder-Birch/channel 1"),
        ("Dunmore.L4.CB", "Birch-Dunmore/channel 1"),
    ),
    "Birch.D2.CB3": (
        ("Birch.D1.CB3", ""),
        ("Birch.D2.CB2", ""),
        ("Birch.D3.CB3", ""),
        ("Dunmore.L4.CB", "Birch-Dunmore/channel 1"),
    ),
    "Dunmore.L4.CB": (
        ("Dunmore.F5.CB", ""),
        ("Dunmore.F6.CB", ""),
        ("Dunmore.L5.CB", ""),
        ("Birch.D2.CB2", "Birch-Dunmore/channel 1"),
        ("Birch.D2.CB3", "Birch-Dunmore/channel 1"),
    ),
}


class View(NamedTuple):
    """What is seen with some breakers open: fault fed, breakers that carry, distance ahead of each line end."""

    fed: bool
    carrying: frozenset[str]
    km: dict[str, float]


@cache
def view(opened: frozenset[str]) -> View:
    """The network with some breakers open."""
    g: nx.Graph[str] = nx.Graph()
    g.add_edges_from((a, b, {"km": 0.0}) for name, (a, b) in BREAKERS.items() if name not in opened)
    g.add_edges_from((f"{line} {a}", f"{line} {b}", {"km": LENGTH_KM[line]}) for line, (a, b) in RUNS.items())
    g.add_edges_from((end, "fault", {"km": LENGTH_KM["L4"] / 2}) for end in ("L4 Birch", "L4 Dunmore"))
    fed = any(source in g and nx.has_path(g, source, "fault") for source in SOURCES)
    # A breaker carries if it lies on a simple path from a source to the fault.
    h = g.copy()
    h.add_edges_from(("grid", node) for node in (*SOURCES, "fault"))
    loops = ({frozenset(edge) for edge in part} for part in nx.biconnected_component_edges(h))
    loop = next(part for part in loops if frozenset(("grid", "fault")) in part)
    carrying = frozenset(name for name, ends in BREAKERS.items() if name not in opened and frozenset(ends) in loop)
    return View(fed, carrying, {end: _ahead(g, end, carrying) for end in ENDS})


def _ahead(g: nx.Graph[str], end: str, carrying: frozenset[str]) -> float:
    """How far ahead of a line end the fault is; infinite if its current does not flow there or it is behind."""
    station, line = end.split("/")
    if not carrying.intersection(ENDS[end]):
        return inf
    node = f"{line} {station}"
    cut = g.copy()
    cut.remove_edges_from([BREAKERS[b] for b in ENDS[end]])
    km = nx.single_source_dijkstra_path_length(cut, "fault", weight="km")
    ahead = km.get(node, inf)
    outside = {n for b in ENDS[end] if g.has_edge(*BREAKERS[b]) for n in BREAKERS[b]} - {node}
    behind = min((km.get(n, inf) for n in outside), default=inf)
    return ahead if ahead <= behind + 1e-9 else inf


# --- times: drawn, or nominal -------------------------------------------------------------

Draw = Callable[[random.Random], float]


def _cut(draw: Draw, low: float, high: float) -> Draw:
    def cut(rng: random.Random) -> float:
        while True:
            value = draw(rng)
            if low <= value <= high:
                return value

    return cut


MEASURED_MS = (42.0, 44.0, 45.0, 46.0, 47.0, 48.0, 50.0, 53.0, 58.0)
TIMES: dict[str, tuple[Draw, float]] = {  # how it is drawn, and its nominal value
    "differential": (_cut(lambda r: r.gauss(22.0, 3.0), 12.0, 40.0), 22.0),
    "distance": (_cut(lambda r: r.lognormvariate(3.2188758248682006, 0.2), 12.0, 60.0), 25.0),  # ln 25
    "reset": (lambda r: r.uniform(10.0, 18.0), 14.0),
    "channel": (lambda r: r.triangular(8.0, 25.0, 12.0), 12.0),
    "breaker": (lambda r: r.choice(MEASURED_MS), 47.0),
    "late": (lambda r: r.uniform(60.0, 140.0), 100.0),
    "detector reset": (lambda r: r.uniform(12.0, 24.0), 18.0),
    "lockout": (lambda r: r.triangular(6.0, 16.0, 9.0), 9.0),
}


# --- one trial ------------------------------------------------------------------------------


Steps = Generator[simpy.Event, Any, None]


class Signal:
    """Follows what is wanted of it after a time to operate, or to let go; each is drawn once in a trial."""

    __slots__ = ("changed", "off", "on", "state", "trial", "value", "wanted")

    def __init__(self, trial: Trial, on: str | float, off: str | float, changed: Callable[[], None]) -> None:
        self.trial, self.on, self.off, self.changed = trial, on, off, changed
        self.value = self.wanted = False
        self.state = 0

    def follow(self, wanted: bool) -> None:
        if wanted == self.wanted:
            return
        self.wanted = wanted
        self.state += 1
        if wanted == self.value:
            return
        delay = self.on if wanted else self.off
        if isinstance(delay, str):
            delay = self.trial.draw(delay)
            if wanted:
                self.on = delay
            else:
                self.off = delay
        if delay == 0:
            self.value = wanted
            self.changed()
        else:
            self.trial.env.process(self._wait(delay, self.state))

    def _wait(self, delay: float, state: int) -> Steps:
        yield self.trial.env.timeout(delay)
        if state == self.state:
            self.value = self.wanted
            self.changed()


class LineEnd:
    """The relays at one end of a line: three distance zones in one set."""

    def __init__(self, trial: Trial, name: str) -> None:
        self.trial, self.name = trial, name
        self.station, self.line = name.split("/")
        self.breakers = [trial.breaker(b) for b in ENDS[name]]
        self.sets = [self.zones("1")]
        self.tripping = False

    def zones(self, label: str) -> list[tuple[Signal, Signal | None, float]]:
        """Zones of a set: the element, its timer, its reach."""
        length = LENGTH_KM[self.line]
        out: list[tuple[Signal, Signal | None, float]] = []
        for share, delay in ((0.8, 0.0), (1.2, 350.0), (2.2, 1000.0)):
            timer = Signal(self.trial, delay, 0.0, self.update) if delay else None
            changed = partial(self.zone_changed, len(out), label)
            out.append((Signal(self.trial, "distance", "reset", changed), timer, share * length))
        return out

    def zone_changed(self, n: int, label: str) -> None:
        element, timer, _ = self.sets[int(label) - 1][n]
        if timer is not None:
            timer.follow(element.value)
        self.update()

    def look(self, now: View) -> None:
        km = now.km[self.name]
        for zones in self.sets:
            for element, _, reach in zones:
                element.follow(km <= reach)

    def timed(self, label: str) -> bool:
        """A zone of this set has operated after its time, and its relay and voltage are there."""
        if not self.trial.works(
            f"{self.station}/{self.line}/relay {label}",
            f"{self.station}/DC {label}",
            f"{self.station}.{self.line}.VT/winding {label}",
        ):
            return False
        return any((timer or element).value for element, timer, _ in self.sets[int(label) - 1])

    def update(self) -> None:
        tripping = self.timed("1")
        if tripping:
            for b in self.breakers:
                b.trip("1")
        self.initiate(tripping)

    def initiate(self, tripping: bool) -> None:
        if tripping != self.tripping:
            self.tripping = tripping
            for b in self.breakers:
                if b.failure is not None:
                    b.failure.initiated(self.name, tripping)


class ProtectedEnd(LineEnd):
    """An end of L4: two sets, line differential and permissive overreach, and the local relay."""

    def __init__(self, trial: Trial, name: str) -> None:
        super().__init__(trial, name)
        self.far = "Dunmore" if self.station == "Birch" else "Birch"
        self.sets.append(self.zones("2"))
        cts = (*ENDS["Birch/L4"], *ENDS["Dunmore/L4"])
        self.differential = [(Signal(trial, "differential", "reset", self.update), ct) for ct in cts]
        self.receipt = Signal(trial, "channel", "channel", self.update)
        self.timer = Signal(trial, 400.0, 0.0, self.update)
        self.local = Signal(trial, 20.0, 15.0, self.local_changed)
        here, far, ok = self.station, self.far, trial.works
        one = (f"{here}/L4/relay 1", f"{here}/DC 1", f"{far}/L4/relay 1", f"{far}/DC 1")
        self.differential_works = ok(*one, "L4/channel 1")
        two = (f"{here}/L4/relay 2", f"{here}/DC 2", f"{here}.L4.VT/winding 2")
        self.scheme_works = ok(
            *two, "L4/channel 2", f"{far}/L4/relay 2", f"{far}/DC 2", f"{far}.L4.VT/winding 2"
        )
        n = 1 if here == "Birch" else 2
        self.local_works = ok(f"{here}/L4/relay local {n}", f"{here}/DC 1", f"{here}.L4.VT/winding 1")

    def local_changed(self) -> None:
        self.timer.follow(self.local.value)

    def zone_changed(self, n: int, label: str) -> None:
        if label == "2" and n == 1:
            far = self.trial.ends[f"{self.far}/L4"]
            if isinstance(far, ProtectedEnd):
                far.receipt.follow(self.sets[1][1][0].value)
        super().zone_changed(n, label)

    def look(self, now: View) -> None:
        super().look(now)
        for element, ct in self.differential:
            element.follow(ct in now.carrying)
        self.local.follow(now.km[self.name] <= 1.1 * LENGTH_KM["L4"])

    def update(self) -> None:
        first = self.timed("1") or (self.differential_works and any(e.value for e, _ in self.differential))
        overreach = self.scheme_works and self.sets[1][1][0].value and self.receipt.value
        second = overreach or self.timed("2")
        local = self.local_works and self.timer.value
        for b in self.breakers:
            if first or local:
                b.trip("1")
            if second:
                b.trip("2")
        self.initiate(first or second or local)


class BreakerFailure:
    """50BF of one breaker: sealed in while current flows, retrip at once, and a lockout relay after the timer."""

    def __init__(self, trial: Trial, breaker: Breaker) -> None:
        self.trial, self.breaker = trial, breaker
        self.by: set[str] = set()
        self.sealed = self.locked_out = False
        dc = f"{breaker.station}/DC 1"
        self.works = trial.works(f"{breaker.name}/BF relay", dc)
        self.lockout_works = trial.works(f"{breaker.name}/86BF 1", dc)
        self.current = Signal(trial, 5.0, "detector reset", self.update)
        self.timer = Signal(trial, 150.0, 0.0, self.update)
        self.wanted = Signal(trial, 0.0, 100.0, self.operate)
        self.lockout = Signal(trial, "lockout", 0.0, self.lock_out)

    def initiated(self, by: str, tripping: bool) -> None:
        if tripping:
            self.by.add(by)
        else:
            self.by.discard(by)
        self.update()

    def update(self) -> None:
        current, init = self.current.value, bool(self.by)
        self.sealed = current and (self.sealed or init)
        started = init or self.sealed
        if started and current and self.works:
            self.breaker.trip("2")
        self.timer.follow(started)
        self.wanted.follow(self.timer.value and current)

    def operate(self) -> None:
        self.lockout.follow(self.works and self.wanted.value)

    def lock_out(self) -> None:
        if self.locked_out or not self.lockout.value or not self.lockout_works:
            return
        self.locked_out = True
        times: dict[str, float] = {}
        for name, channel in AROUND[self.breaker.name]:
            target = self.trial.breaker(name)
            if not channel:
                target.trip("1")
            elif self.trial.works(channel, f"{self.breaker.station}/DC 1", f"{target.station}/DC 1"):
                if target.station not in times:  # one transfer trip for all breakers of a station
                    times[target.station] = self.trial.draw("channel")
                self.trial.env.process(self.transfer(times[target.station], target))

    def transfer(self, delay: float, target: Breaker) -> Steps:
        yield self.trial.env.timeout(delay)
        target.trip("1")


class Breaker:
    """A breaker with its coils."""

    def __init__(self, trial: Trial, name: str) -> None:
        self.trial, self.name = trial, name
        self.station = name.split(".")[0]
        self.committed = False
        self.failure = BreakerFailure(trial, self) if name in AROUND else None

    def trip(self, coil: str) -> None:
        trial = self.trial
        if self.committed or not trial.works(f"{self.name}/coil {coil}", f"{self.station}/DC {coil}"):
            return
        self.committed = True
        mode = trial.failed.get(self.name)
        if mode != "does_not_open":
            delay = trial.draw("breaker")
            if mode == "opens_late":
                delay += trial.draw("late")
            trial.openings[self.name] = trial.env.now + delay
            if mode != "does_not_interrupt":
                trial.env.process(self.open(delay))

    def open(self, delay: float) -> Steps:
        yield self.trial.env.timeout(delay)
        self.trial.opened.add(self.name)
        self.trial.look()


class Trial:
    """One fault with some components failed: openings by breaker, and when it was cleared (None: never)."""

    def __init__(self, failed: dict[str, str], rng: random.Random | None) -> None:
        self.env = simpy.Environment()
        self.failed, self.rng = failed, rng
        self.opened: set[str] = set()
        self.openings: dict[str, float] = {}
        self.t_clear_ms: float | None = None
        self._breakers: dict[str, Breaker] = {}
        self.ends: dict[str, LineEnd] = {name: ProtectedEnd(self, name) for name in ("Birch/L4", "Dunmore/L4")}
        self.look()
        self.env.run(until=HORIZON_MS)

    def draw(self, what: str) -> float:
        draw, nominal = TIMES[what]
        return nominal if self.rng is None else draw(self.rng)

    def works(self, *components: str) -> bool:
        return self.failed.keys().isdisjoint(components)

    def breaker(self, name: str) -> Breaker:
        found = self._breakers.get(name)
        if found is None:
            found = self._breakers[name] = Breaker(self, name)
        return found

    def look(self) -> None:
        """The network has changed: tell every relay that sees anything, or did."""
        now = view(frozenset(self.opened))
        if not now.fed and self.t_clear_ms is None:
            self.t_clear_ms = self.env.now
        for name, km in now.km.items():
            if name not in self.ends and km <= 2.2 * LENGTH_KM[name.split("/")[1]]:
                self.ends[name] = LineEnd(self, name)
        for end in self.ends.values():
            end.look(now)
        for name in AROUND:
            failure = self.breaker(name).failure
            if failure is not None:
                failure.current.follow(name in now.carrying)


# --- failures, and many trials --------------------------------------------------------------


def failure_data() -> dict[str, dict[str, float]]:
    """The modes of each component with their probabilities, which exclude each other."""
    often, seldom, rare = 1e-2, 1e-3, 1e-4
    out: dict[str, dict[str, float]] = {}
    for name in BREAKERS:
        stuck = seldom if name in AROUND else rare
        out[name] = {"does_not_open": stuck, "opens_late": stuck, "does_not_interrupt": rare}
        out[f"{name}/coil 1"] = {"failure_to_operate": rare}
    for name in AROUND:
        out[f"{name}/coil 2"] = out[f"{name}/BF relay"] = out[f"{name}/86BF 1"] = {"failure_to_operate": rare}
    for end in ENDS:
        station, line = end.split("/")
        out[f"{end}/relay 1"] = {"failure_to_operate": often if line == "L4" else seldom}
        out[f"{station}.{line}.VT/winding 1"] = out[f"{station}/DC 1"] = {"lost": rare}
    for n, station in enumerate(("Birch", "Dunmore"), 1):
        out[f"{station}/L4/relay 2"] = out[f"{station}/L4/relay local {n}"] = {"failure_to_operate": often}
        out[f"{station}.L4.VT/winding 2"] = out[f"{station}/DC 2"] = {"lost": rare}
    out["L4/channel 1"] = out["L4/channel 2"] = {"lost": often}
    out["Alder-Birch/channel 1"] = out["Birch-Dunmore/channel 1"] = {"lost": seldom}
    return out


def failures(rng: np.random.Generator, trials: int, at_once: int = 1000) -> Iterator[dict[str, str]]:
    """For each trial the components that fail, and how."""
    data = failure_data()
    names = list(data)
    any_of = np.array([sum(modes.values()) for modes in data.values()])
    for start in range(0, trials, at_once):
        n = min(at_once, trials - start)
        u = rng.random((n, len(names)))
        drawn: list[dict[str, str]] = [{} for _ in range(n)]
        for t, c in np.argwhere(u < any_of).tolist():
            below = 0.0
            for mode, p in data[names[c]].items():
                below += p
                if u[t, c] < below:
                    drawn[t][names[c]] = mode
                    break
        yield from drawn


def run(trials: int, seed: int) -> Iterator[Trial]:
    """Trials with random failures and times."""
    rng = random.Random(seed)
    for failed in failures(np.random.default_rng(seed), trials):
        yield Trial(failed, rng)


def main(arguments: list[str]) -> None:
    """Print how often the fault was not cleared, late, or took more than the three breakers of the line."""
    trials = int(arguments[0]) if arguments else 1000
    lost = late = more = 0
    for t in run(trials, seed=1):
        lost += t.t_clear_ms is None
        late += t.t_clear_ms is not None and t.t_clear_ms > 150
        more += len(t.openings) > 3
    print(f"of {trials} trials: not cleared {lost}, after 150 ms {late}, more than three breakers {more}")


if __name__ == "__main__":
    main(sys.argv[1:])
