"""Common causes: the beta factor of redundant items, in a group formula and in the event tree of a scheme.

Sources: beta-factor model (K. N. Fleming, 1975, from memory): of the failure probability Q of each of n items βQ fails
all of them; so n items of which one is needed fail with βQ + ((1−β)Q)^n less their product. The two published
examples of three trains stand with the static logic.
"""

from __future__ import annotations

from fractions import Fraction

import pytest

from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import Component, ComponentKind, FailureMode
from schemesim.scheme.redundancy import redundant
from schemesim.scheme.unavailability import RateData, RateRule, unavailability

FTO = FailureMode.FAILURE_TO_OPERATE


@pytest.mark.parametrize("count", [2, 3, 4])
@pytest.mark.parametrize("beta", [0.0, 0.1, 0.5, 1.0])
def test_on_demand_the_group_is_the_closed_form(count: int, beta: float) -> None:
    q = 0.2
    common, apart = beta * q, ((1 - beta) * q) ** count
    found = redundant(RateData(on_demand=q), 1, count, beta=beta)
    assert found.mean == pytest.approx(common + apart - common * apart, rel=1e-12)
    assert found.worst == pytest.approx(found.mean, rel=1e-12)
    assert found.common_cause_mean == pytest.approx(common, rel=1e-12)


def test_at_beta_one_a_duplicate_is_worth_nothing() -> None:
    item = RateData(rate_per_yr=0.1, test_interval_yr=2, repair_h=100)
    assert redundant(item, 1, 2, beta=1.0).mean == pytest.approx(unavailability(item).mean, rel=1e-12)


def test_a_common_cause_is_found_at_the_next_test_of_either() -> None:
    """Leading terms: βλT/2 tested together, βλT/4 by turns."""
    item = RateData(rate_per_yr=1e-6, test_interval_yr=1)
    assert redundant(item, 1, 2, beta=0.1).common_cause_mean == pytest.approx(1e-7 / 2, rel=1e-5)
    assert redundant(item, 1, 2, beta=0.1, staggered=True).common_cause_mean == pytest.approx(1e-7 / 4, rel=1e-5)


def test_an_infrequent_failure_of_a_duplicate_is_nearly_all_common_cause() -> None:
    """βλT/2 against (λT)²/3: with λT = 0.01 and β = 0.1 the common cause is 0.94 of the whole."""
    item = RateData(rate_per_yr=0.01, test_interval_yr=1)
    found = redundant(item, 1, 2, beta=0.1)
    own = (0.9 * 0.01) ** 2 / 3
    assert found.common_cause_mean / found.mean == pytest.approx(0.0005 / (0.0005 + own), rel=0.01)


def test_relays_given_by_rates_split_off_their_beta_factor() -> None:
    rule = RateRule(kind=ComponentKind.RELAY, mode=FTO, data=RateData(on_demand=0.125))
    data = FailureData(modes={}, rates=(rule,), relay_beta=0.25)
    relays = [data.component(f"A/L1/relay {n}", ComponentKind.RELAY) for n in (1, 2)]
    changed, causes = data.share({"A/L1": relays})
    assert [Fraction(c.probability) for c in causes] == [Fraction(1, 32)]
    assert {Fraction(c.probability(FTO)) for c in changed.values()} == {Fraction(3, 32)}
    assert all(isinstance(c, Component) for c in changed.values())
