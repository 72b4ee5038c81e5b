"""What the figures of the network equations measure is the work meant: both ways agree."""

from __future__ import annotations

import pytest

from schemesim.plant.net_faults import network_of


@pytest.mark.filterwarnings("ignore")  # of the library that carries the network
def test_updates_and_fresh_factorisations_agree_on_what_is_timed() -> None:
    from tests.benchmarks.networks import lines_of, openings, published, update_over_refactorise

    plant = published("case24_ieee_rts")
    chosen = [(at, openings(plant, at.section, 20)) for at in lines_of(plant, 4)]
    assert [len(topologies) for _, topologies in chosen] == [20] * 4
    assert update_over_refactorise(network_of(plant), chosen, 20) > 0
