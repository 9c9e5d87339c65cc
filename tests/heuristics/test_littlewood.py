"""Littlewood's rule as properties."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from heuristics import littlewood_level
from network.demand import Demand


@given(mean=st.floats(0.5, 200), low=st.floats(1, 99))
@settings(deadline=None)
def test_each_protected_seat_earns_more_than_the_low_fare(mean: float, low: float) -> None:
    level = littlewood_level(100, low, Demand.of([mean], [mean**0.5]))[0]
    # Littlewood (1972): accept the low fare iff it reaches f_high P(D >= seats left).
    worth = 100 * stats.poisson.sf(np.arange(0, 2000), mean)
    assert level == np.count_nonzero(worth > low)


@pytest.mark.parametrize("family", ["gamma", "normal"])
def test_continuous_level_balances_the_two_fares(family: str) -> None:
    demand = Demand.of([80.0, 40.0], [35.0, 8.0], family)
    level = littlewood_level([675, 300], [375, 290], demand)
    np.testing.assert_allclose([675, 300] * demand.survivor(level), [375, 290], rtol=1e-9)


def test_limits_of_the_fare_ratio() -> None:
    demand = Demand.of([30.0], [5.4])
    assert littlewood_level(100, 100, demand)[0] == 0
    assert littlewood_level(100, 250, demand)[0] == 0
    assert littlewood_level(100, 0, demand)[0] == np.inf
    assert littlewood_level(100, 0, Demand.of([30.0], [0.0]))[0] == 30


def test_a_seat_worth_just_the_low_fare_is_not_kept() -> None:
    # Geometric demand of mean 1: P(D >= k) is exactly one half to the k.
    geometric = Demand.of([1.0], [2**0.5], "negative_binomial")
    for seats in range(1, 8):
        assert littlewood_level(100.0, 100 * 0.5**seats, geometric)[0] == seats - 1


@given(scale=st.floats(0.001, 1000))
def test_currency_does_not_matter(scale: float) -> None:
    demand = Demand.of([30.0], [3.0])
    scaled = littlewood_level(310 * scale, 120 * scale, demand)
    np.testing.assert_allclose(scaled, littlewood_level(310, 120, demand), rtol=1e-9)


@pytest.mark.parametrize(("high", "low"), [(np.nan, 1), (100, np.nan), (100, -1), (0, 0), (-5, 1), (np.inf, 1)])
def test_wrong_fares_are_refused(high: float, low: float) -> None:
    with pytest.raises(ValueError, match="fares must be finite"):
        littlewood_level(high, low, Demand.of([1.0], [1.0]))
