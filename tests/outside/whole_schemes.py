"""Small dressed schemes whose whole odds a reader can write down, and what fails them as a fault tree."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction

from schemesim.engine.case import Case, bind
from schemesim.engine.program import compile_scheme
from schemesim.engine.sensing import LogicalSensing
from schemesim.plant.layouts import Bay, feeder, generator, single_bus
from schemesim.plant.model import Location, Plant, PlantBuilder
from schemesim.scheme.dress import dress
from schemesim.scheme.failure_data import FailureData, Override
from schemesim.scheme.model import ComponentKind, FailureMode
from schemesim.scheme.policy import Policy, duplicate_chain, duplicate_relay, single_set
from schemesim.study.tree import explore
from tests.outside.fault_trees import Tree, p_diagram
from tests.rules.small import chain

K, M = ComponentKind, FailureMode

ODDS: Mapping[ComponentKind, Mapping[FailureMode, Fraction]] = {
    K.RELAY: {M.FAILURE_TO_OPERATE: Fraction(1, 100)},
    K.CT_CORE: {M.OPEN: Fraction(1, 500)},
    K.VT_WINDING: {M.LOST: Fraction(1, 400)},
    K.DC: {M.LOST: Fraction(1, 250)},
    K.CHANNEL: {M.LOST: Fraction(1, 50)},
    K.COIL: {M.FAILURE_TO_OPERATE: Fraction(1, 200)},
    K.BREAKER: {M.DOES_NOT_OPEN: Fraction(1, 300)},
    K.LOCKOUT: {M.FAILURE_TO_OPERATE: Fraction(1, 1000)},
}
"""Larger than in the field, so that what two failures do together counts."""

# The CTs on the circuit's side belong to the bus differentials, which an open core would trip for a fault beside
# them: left out, so that the fault trees below are all there is.
DATA = FailureData(modes=ODDS, no_fault_per_yr={}, overrides=(Override("*.CTc/core *", {M.OPEN: Fraction(0)}),))


@dataclass(frozen=True)
class WholeScheme:
    """A plant, a policy, a fault, a limit; and the fault tree of "not cleared within the limit"."""

    plant: Plant
    policy: Policy
    at: Location
    limit_us: int
    top: Tree

    def case(self) -> Case:
        """The fault bound to the dressed plant."""
        return bind(compile_scheme(self.plant, dress(self.plant, self.policy, DATA)), self.at, LogicalSensing())

    def ours(self) -> float:
        """The middle of the event tree's bracket, 2E-9 wide or less."""
        tree = explore(self.case(), epsilon=2e-9, max_runs=20_000)
        late = tree.bracket(lambda o: o.t_clear_us is None or o.t_clear_us > self.limit_us)
        if late.width > 2e-9:
            raise ArithmeticError(f"{late} is too wide")
        return float(late.low + late.high) / 2

    def exact(self) -> Fraction:
        """From a binary decision diagram of the fault tree."""
        return p_diagram(self.odds(), self.top)

    def odds(self) -> dict[str, Fraction]:
        """Probability that each component fails in any mode."""
        components = self.case().program.scheme.components
        return {c.name: sum((Fraction(p) for _, p in c.modes), Fraction(0)) for c in components}


def line_end(here: str, far: str) -> Tree:
    """A line end under two whole chains does not open: its breaker, or both chains.

    Chain 1 has its differential and, in the same relay, zone 1; chain 2 zone 1 and a permissive scheme on it.
    """
    core, far_core = f"{here}.L1.CTb/core 1", f"{far}.L1.CTb/core 1"
    no_distance: Tree = ("or", core, f"{here}.L1.VT/winding 1")
    no_differential: Tree = (
        "or", "L1/channel 1", f"{far}/L1/relay 1", f"{far}/DC 1", ("and", core, far_core)
    )  # fmt: skip
    first: Tree = (
        "or", f"{here}/L1/relay 1", f"{here}/DC 1", f"{here}.L1.CB/coil 1", ("and", no_distance, no_differential)
    )  # fmt: skip
    second: Tree = (
        "or", f"{here}/L1/relay 2", f"{here}/DC 2", f"{here}.L1.CB/coil 2", f"{here}.L1.CTb/core 2",
        f"{here}.L1.VT/winding 2",
    )  # fmt: skip
    return ("or", f"{here}.L1.CB", ("and", first, second))


def shared_end(here: str) -> Tree:
    """A line end under two relays on one chain does not open."""
    chain_1 = (f"{here}/DC 1", f"{here}.L1.CB/coil 1", f"{here}.L1.CTb/core 1", f"{here}.L1.VT/winding 1")
    parts = (f"{here}.L1.CB", *chain_1)
    return ("or", *parts, ("and", f"{here}/L1/relay 1", f"{here}/L1/relay 2"))


def two_chains() -> WholeScheme:
    """A line between two sources, every part of the chain twice, no back-up."""
    policy = duplicate_chain(breaker_failure=None, remote_backup=False)
    top: Tree = ("or", line_end("Alder", "Birch"), line_end("Birch", "Alder"))
    return WholeScheme(chain(), policy, Location("L1"), 150_000, top)


def two_relays() -> WholeScheme:
    """The same line with the relay twice, the rest once."""
    policy = duplicate_relay(breaker_failure=None, remote_backup=False)
    return WholeScheme(chain(), policy, Location("L1"), 150_000, ("or", shared_end("Alder"), shared_end("Birch")))


def radial() -> Plant:
    """A generator and a feeder on one bus."""
    b = PlantBuilder()
    generator(b, "G", station="Alder")
    feeder(b, "F", 10.0, station="Alder")
    single_bus(b, "Alder", [Bay("G", "G"), Bay("F", "F")])
    return b.build()


def with_breaker_failure() -> WholeScheme:
    """A feeder with one chain, and breaker failure behind its breaker, within 300 ms."""
    local: Tree = ("or", "Alder.F.CB", "Alder.F.CB/coil 1")
    behind: Tree = (
        "or", "Alder.F.CB/BF relay", "Alder.F.CTb/core 3", "Alder.F.CB/86BF 1", "Alder.G.CB", "Alder.G.CB/coil 1"
    )  # fmt: skip
    top: Tree = ("or", "Alder/F/relay 1", "Alder/DC 1", "Alder.F.CTb/core 1", ("and", local, behind))
    return WholeScheme(radial(), single_set(), Location("F"), 300_000, top)
