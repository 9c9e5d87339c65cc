"""One leg, two classes: the network's bid price makes Littlewood's decision at every number of remaining seats.

K. Littlewood (1972), Forecasting and control of passenger bookings, AGIFORS Symposium Proceedings 12: with low fares
asking first, a seat is sold to one of them as long as f_L >= f_H P(D_H >= c), c the seats still left. The
probabilities are those of scipy.stats.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats

from lp import SOLVERS, LpOptions, SolverOptions, solve
from lp.solvers import SolverName
from tests.networks import FAMILIES, Plan, examples, one_leg

MOST = 40
"""Remaining seats tried: 0 to this many."""

high_fares = st.floats(20.0, 2000.0)
ratios = st.floats(0.02, 0.98)
means = st.floats(0.5, 35.0)
dispersions = st.floats(1.05, 6.0)


def survivor(family: str, mean: float, dispersion: float) -> np.ndarray:
    """P(D >= k) for k = 1..MOST."""
    k, variance = np.arange(1, MOST + 1), mean * dispersion
    match family:
        case "poisson":
            return stats.poisson(mean).sf(k - 1)
        case "negative_binomial":
            return stats.nbinom(mean**2 / (variance - mean), mean / variance).sf(k - 1)
        case "gamma":
            return stats.gamma(mean**2 / variance, scale=variance / mean).sf(k)
        case _:
            return stats.norm(mean, variance**0.5).sf(k)


def two_classes(family: str, high: float, low: float, mean: float, dispersion: float) -> tuple[tuple[float, ...], ...]:
    """Products of a high fare and of a low one for which more passengers ask than there could be seats."""
    plenty = 12.0 * MOST
    return (high, mean, (mean * dispersion) ** 0.5), (low, plenty, (1.05 * plenty) ** 0.5)


@pytest.mark.parametrize("solver", SOLVERS)
@pytest.mark.parametrize("family", FAMILIES)
@given(high=high_fares, ratio=ratios, mean=means, dispersion=dispersions)
@examples(30)
def test_the_decision_is_that_of_littlewood_at_every_number_of_seats(
    solver: SolverName, family: str, high: float, ratio: float, mean: float, dispersion: float
) -> None:
    """One leg for every number of remaining seats, side by side in one program."""
    low, seats = ratio * high, np.arange(1, MOST + 1)
    waiting = high * survivor(family, mean, dispersion)
    assume(np.all(np.abs(waiting - low) > 1e-9 * high))
    rows = two_classes(family, high, low, mean, dispersion)
    plan = Plan((0, *seats.tolist()), tuple((leg,) for leg in range(MOST + 1)), (rows,) * (MOST + 1), family)
    found = solve(plan.network(), LpOptions(solver=SolverOptions(solver)))
    prices = found.bid_price[1:]
    np.testing.assert_array_equal(low >= prices * (1 - 1e-9), low >= waiting)
    np.testing.assert_allclose(prices, np.maximum(waiting, low), rtol=1e-9)
    assert np.all(high >= prices)
    # With no seat left the price is that of the first one, should there be one.
    np.testing.assert_allclose(found.bid_price[0], max(waiting[0], low), rtol=1e-9)


@pytest.mark.parametrize("solver", SOLVERS)
@pytest.mark.parametrize("family", FAMILIES)
@given(seats=st.integers(1, MOST), high=high_fares, ratio=ratios, mean=means, dispersion=dispersions)
@examples(20)
def test_a_leg_by_itself_is_worth_the_same(
    solver: SolverName, family: str, seats: int, high: float, ratio: float, mean: float, dispersion: float
) -> None:
    low, reached = ratio * high, survivor(family, mean, dispersion)
    rows = two_classes(family, high, low, mean, dispersion)
    found = solve(one_leg(seats, rows, family).network(), LpOptions(solver=SolverOptions(solver)))
    assert found.bid_price[0] == pytest.approx(max(high * reached[seats - 1], low), rel=1e-9)
    if seats < MOST:
        assert found.next_seat[0] == pytest.approx(max(high * reached[seats], low), rel=1e-9)


def test_a_hotel_of_118_rooms() -> None:
    # Cachon and Terwiesch, Matching Supply with Demand, chapter on revenue management; from memory: high fare 225,
    # low fare 159, Poisson demand of mean 27.3 for the high one; 24 are protected, so the booking limit is 94.
    # With 24 rooms left the low fare is refused, with 25 it is accepted.
    rows = ((225.0, 27.3, 1.0), (159.0, 480.0, 1.0))
    prices = [solve(one_leg(rooms, rows, "poisson").network()).bid_price[0] for rooms in (24, 25, 118)]
    assert [price <= 159.0 * (1 + 1e-9) for price in prices] == [False, True, True]
    assert prices[0] == pytest.approx(225 * (1 - 0.2381), rel=1e-4)  # 0.2381 is P(D <= 23), published
