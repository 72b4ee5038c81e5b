"""Fault currents and voltages against the short-circuit results of ``pandapower``.

Like for like: its load-free method (equivalent voltage source, c = 1.1, no charging, taps in the middle), its
correction factors KT and KG, and units replaced by grids of a stated short-circuit power where a case carries no
subtransient data. Of that library only networks and short-circuit results are used.
"""

from __future__ import annotations

import importlib
import logging
import math
import warnings
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.sparse.linalg import splu

from schemesim.errors import InputError
from schemesim.plant.model import Location, Plant, SectionKind
from schemesim.plant.net_case import FaultType, ShuntFault
from schemesim.plant.net_data import LineImpedance, TransformerImpedance
from schemesim.plant.net_faults import PlantNetwork, network_of
from schemesim.plant.net_import import C_MAX, plant_of_pandapower
from schemesim.scenario import load_scenario

with warnings.catch_warnings():
    warnings.simplefilter("ignore")  # what that library warns of while it is imported is its own affair
    import pandapower as pp
    import pandapower.networks as networks
    from pandapower.shortcircuit import calc_sc

pytestmark = pytest.mark.filterwarnings("ignore")  # the same for its warnings in use
logging.getLogger("pandapower").setLevel(logging.ERROR)

NEAR = 1e-6
"""Largest relative difference."""

AREA_A = Path(__file__).resolve().parents[2] / "scenarios" / "rts96_area_a.yaml"


def with_grids(name: str) -> Any:
    """A published case with a grid of its own short-circuit power for every unit."""
    net = getattr(networks, name)()
    pp.toolbox.replace_gen_by_ext_grid(net)
    net.sgen.in_service = False
    rng = np.random.default_rng(7)
    net.ext_grid["s_sc_max_mva"] = rng.uniform(300, 6000, len(net.ext_grid))
    net.ext_grid["rx_max"] = rng.uniform(0.05, 0.2, len(net.ext_grid))
    return net


def places(plant: Plant) -> dict[str, str]:
    """A section of the busbar, or of the ring, of every station."""
    found: dict[str, str] = {}
    for s in plant.sections:
        if s.kind is SectionKind.BUS or s.name.endswith(".J"):
            found.setdefault(s.station, s.name)
    return found


def currents_ka(network: PlantNetwork, kind: FaultType) -> dict[str, float]:
    """Phase current of a fault at every station."""
    found = {}
    for station, section in places(network.equations.elements.plant).items():
        zero, one, two = network.at(ShuntFault(Location(section), kind)).solve().fault
        factor = {FaultType.LLL: 1.0, FaultType.LL: math.sqrt(3), FaultType.LG: 3.0}[kind]
        found[station] = factor * abs(one) / 1e3
        assert kind is FaultType.LLL or abs(abs(two) - abs(one)) <= 1e-9 * abs(one)
        assert kind is FaultType.LG or zero == 0
    return found


def compare_currents(net: Any, network: PlantNetwork, kinds: dict[str, FaultType], at_once: int = 1000) -> None:
    """Every bus, every type of fault; ``at_once`` buses in one call, which keeps the voltages of all for each."""
    buses = list(net.bus.index)
    for fault, kind in kinds.items():
        mine = currents_ka(network, kind)
        theirs: dict[str, float] = {}
        for start in range(0, len(buses), at_once):
            some = buses[start : start + at_once]
            calc_sc(net, bus=some, fault=fault, case="max", inverse_y=len(buses) < 1000)
            theirs |= {f"Bus{b}": float(net.res_bus_sc.ikss_ka[b]) for b in some}
        assert set(mine) == set(theirs)
        assert all(map(math.isfinite, theirs.values()))
        off = {name: mine[name] / theirs[name] - 1 for name in mine}
        assert max(map(abs, off.values())) < NEAR, max(off, key=lambda name: abs(off[name]))


def compare_voltages(net: Any, network: PlantNetwork, buses: list[int]) -> int:
    """Voltage at both ends and current of every line, for three-phase faults at some buses."""
    calc_sc(net, bus=buses, fault="3ph", case="max", branch_results=True, return_all_currents=True, inverse_y=False)
    plant = network.equations.elements.plant
    section = places(plant)
    told = 0
    end = {(d.b, d.b_at): d.name for d in plant.devices}
    for bus in buses:
        solution = network.at(ShuntFault(Location(section[f"Bus{bus}"]))).solve()
        rows = net.res_line_sc.xs(bus, level="bus")
        for n, row in rows.iterrows():
            line = plant.section[f"L{n}"]
            for x, v, i in ((0.0, row.vm_from_pu, row.ikss_from_ka), (1.0, row.vm_to_pu, row.ikss_to_ka)):
                device = end[line.name, x]
                mine = abs(solution.voltage(line.name, device)[1]) * math.sqrt(3) / (line.kv * 1e3)
                assert mine == pytest.approx(v, rel=NEAR, abs=1e-9)
                flow = abs(solution.current(device, line.name)[1]) / 1e3
                assert flow == pytest.approx(i, rel=NEAR, abs=1e-7)
                told += 1
    return told


def net_of_area_a(plant: Plant) -> Any:
    """The test system as the other library's tables: one bus a station, the same impedances."""
    net = pp.create_empty_network(sn_mva=100)
    bus = {}
    for station in sorted({s.station for s in plant.sections if s.station}):
        kv = max(s.kv for s in plant.sections if (s.station == station and s.kind is SectionKind.BUS) or
                 (s.station == station and s.name.endswith(".J")))  # fmt: skip
        bus[station] = pp.create_bus(net, vn_kv=kv, name=station)
    for s in plant.sections:
        ends = sorted((d.b_at, d.station) for d in plant.at_section[s.name] if d.b == s.name)
        if isinstance(s.impedance, LineImpedance):
            z = s.impedance
            pp.create_line_from_parameters(
                net, bus[ends[0][1]], bus[ends[-1][1]], 1.0, z.r_ohm, z.x_ohm, 0.0, 1.0,
                r0_ohm_per_km=z.r0_ohm, x0_ohm_per_km=z.x0_ohm, c0_nf_per_km=0.0,
            )  # fmt: skip
        elif isinstance(s.impedance, TransformerImpedance):
            t = s.impedance
            pp.create_transformer_from_parameters(
                net, bus[ends[-1][1]], bus[ends[0][1]], t.mva, t.kv[1], t.kv[0], 100 * t.r_pu[0],
                100 * abs(t.z1[0]), 0.0, 0.0, shift_degree=0.0,
            )  # fmt: skip
    for source in plant.sources:
        z1 = source.impedance
        assert z1 is not None
        kv = net.bus.vn_kv[bus[source.station]]
        power = C_MAX * kv**2 / abs(z1.z1)
        pp.create_ext_grid(net, bus[source.station], s_sc_max_mva=power, rx_max=z1.r_ohm / z1.x_ohm)
    net.trafo["power_station_unit"] = True  # that is: no factor KT, as the scenario's data are used as they are
    return net


def test_area_a_at_every_bus() -> None:
    plant = load_scenario(AREA_A).plant
    network = network_of(plant, voltage_factor=C_MAX)
    net = net_of_area_a(plant)
    section = places(plant)
    for fault, kind in (("3ph", FaultType.LLL), ("2ph", FaultType.LL)):
        calc_sc(net, fault=fault, case="max")
        for b, ka in net.res_bus_sc.ikss_ka.items():
            station = net.bus.name[b]
            one = abs(network.at(ShuntFault(Location(section[station]), kind)).solve().fault[1]) / 1e3
            assert one * (1 if kind is FaultType.LLL else math.sqrt(3)) == pytest.approx(ka, rel=NEAR), station
    assert len(net.res_bus_sc) == 24


def test_the_24_and_118_bus_cases_at_every_bus() -> None:
    for name in ("case24_ieee_rts", "case118"):
        net = with_grids(name)
        network = network_of(plant_of_pandapower(net), voltage_factor=C_MAX)
        compare_currents(net, network, {"3ph": FaultType.LLL, "2ph": FaultType.LL})
        buses = list(net.bus.index)[:: max(1, len(net.bus) // 6)]
        assert compare_voltages(net, network, buses) == 2 * len(buses) * len(net.line)


def test_generators_with_their_correction_factor() -> None:
    net = networks.case118()
    net.ext_grid["s_sc_max_mva"], net.ext_grid["rx_max"] = 5000.0, 0.1
    net.sgen.in_service = False
    net.gen["vn_kv"] = net.bus.vn_kv.loc[net.gen.bus].to_numpy() * 1.05
    net.gen["xdss_pu"], net.gen["cos_phi"], net.gen["sn_mva"] = 0.2, 0.85, 250.0
    net.gen["rdss_ohm"] = 0.5
    network = network_of(plant_of_pandapower(net), voltage_factor=C_MAX)
    compare_currents(net, network, {"3ph": FaultType.LLL})


def test_the_9241_bus_case_at_every_bus(monkeypatch: pytest.MonkeyPatch) -> None:
    """Three-phase and line to line at every bus; voltages and line currents all over the network for a fault at one.

    That library factorises its own matrix in an order that suits symmetric ones: a third of the time.
    """

    def factorized(matrix: Any) -> Any:
        symmetric = {"SymmetricMode": True}
        return splu(matrix.tocsc(), permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.01, options=symmetric).solve

    monkeypatch.setattr(importlib.import_module("pandapower.shortcircuit.calc_sc"), "factorized", factorized)
    net = with_grids("case9241pegase")
    plant = plant_of_pandapower(net, ct="bus_side", cores=("1",), loads=False)  # type: ignore[arg-type]  # by its name
    network = network_of(plant, voltage_factor=C_MAX)
    assert len(places(plant)) == 9241
    compare_currents(net, network, {"3ph": FaultType.LLL, "2ph": FaultType.LL})
    compare_voltages(net, network, [4000])


def test_what_cannot_be_read_is_refused() -> None:
    net = networks.case118()
    with pytest.raises(InputError) as error:
        plant_of_pandapower(net)
    assert {p.subject for p in error.value.problems} >= {"column s_sc_max_mva of ext_grid", "column xdss_pu of gen"}
