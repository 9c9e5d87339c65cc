"""Network control beside leg-level control: networks small enough to work out by hand, and what always holds."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from heuristics import LegControl
from legworth.control import compare_controls
from lp import LpOptions, SolverOptions, solve
from network import Network
from tests.networks import FAMILIES, Plan, examples, one_leg, plans

FAST = LpOptions(solver=SolverOptions("highs"))


def cheap_through(fare: float, mean: float = 3.0, seats: int = 2, family: str = "normal") -> Network:
    """A through product and a local at 100 on either leg, where two sure locals ask.

    Leg by leg the through fare ranks first on both legs, so that its passengers get every seat.
    """
    rows = (((fare, mean, 0.0),), ((100.0, 2.0, 0.0),), ((100.0, 2.0, 0.0),))
    return Plan((seats, seats), ((0, 1), (0,), (1,)), rows, family).network()


def test_a_cheap_through_passenger_by_hand() -> None:
    # Prices of 90: the through fare of 150 displaces 180 and is refused; each local contributes 10. Leg by leg,
    # three sure passengers at 150 are protected, so both seats are theirs and no local gets in.
    found = compare_controls(cheap_through(150.0), np.array([90.0, 90.0]))
    each = found.connections
    assert each.displacement.tolist() == [180.0, 90.0, 90.0]
    assert each.contribution.tolist() == [-30.0, 10.0, 10.0]
    assert each.open.tolist() == [False, True, True]
    assert each.open_by_leg_control.tolist() == [True, False, False]
    assert each.disagrees.tolist() == [True, True, True]
    # Two through passengers give away 30 each, two locals a leg 10 each.
    assert each.at_stake.tolist() == [60.0, 20.0, 20.0]
    assert found.agrees.tolist() == [False, False]


def test_money_at_stake_is_that_of_expected_passengers() -> None:
    # Poisson demand of 3 for two seats: E[min(D, 2)] = P(D >= 1) + P(D >= 2) passengers at 30 each.
    each = compare_controls(cheap_through(150.0, family="poisson"), np.array([90.0, 90.0])).connections
    assert each.disagrees[0]
    assert each.at_stake[0] == pytest.approx(30.0 * stats.poisson.sf([0, 1], 3.0).sum(), rel=1e-12)


def test_leg_control_has_no_more_at_stake_than_the_seats_it_would_sell() -> None:
    # Leg 0 keeps three of its five seats for sure locals at 200 and leaves two to the through fare of 150, which at
    # prices of 100 and 60 gives away 10 a passenger; four would come.
    rows = (((150.0, 4.0, 0.0),), ((200.0, 3.0, 0.0),))
    network = Plan((5, 9), ((0, 1), (0,)), rows, "normal").network()
    each = compare_controls(network, np.array([100.0, 60.0])).connections
    assert each.disagrees.tolist() == [True, False]
    assert each.at_stake.tolist() == [20.0, 0.0]


def test_a_dear_through_passenger_by_hand() -> None:
    # At 300 it reaches its displacement of 180 under network control and ranks first leg by leg.
    found = compare_controls(cheap_through(300.0, mean=1.0), np.array([90.0, 90.0]))
    assert found.connections.open.tolist() == [True, True, True]
    assert found.connections.open_by_leg_control.tolist() == [True, True, True]
    assert found.connections.at_stake.tolist() == [0.0, 0.0, 0.0]
    assert found.agrees.tolist() == [True, True]


def test_one_leg_may_agree_while_another_does_not() -> None:
    # A third leg sells its own passengers either way.
    rows = (((150.0, 3.0, 0.0),), ((100.0, 2.0, 0.0),), ((100.0, 2.0, 0.0),), ((70.0, 1.0, 0.0),))
    network = Plan((2, 2, 5), ((0, 1), (0,), (1,), (2,)), rows, "normal").network()
    found = compare_controls(network, np.array([90.0, 90.0, 0.0]))
    assert found.agrees.tolist() == [False, False, True]
    assert found.connections.open[3]
    assert found.connections.open_by_leg_control[3]


def test_without_seats_nothing_is_sold_by_anyone() -> None:
    found = compare_controls(cheap_through(150.0, seats=0), np.array([0.0, 0.0]))
    assert not found.connections.open.any()
    assert not found.connections.open_by_leg_control.any()
    assert found.connections.at_stake.tolist() == [0.0, 0.0, 0.0]
    assert found.agrees.tolist() == [True, True]


def test_one_full_leg_closes_the_whole_path() -> None:
    rows = (((900.0, 3.0, 0.0),), ((100.0, 2.0, 0.0),))
    found = compare_controls(Plan((0, 5), ((0, 1), (1,)), rows, "normal").network(), np.array([0.0, 0.0]))
    assert found.connections.open.tolist() == [False, True]
    assert not found.connections.open_by_leg_control[0]


def test_a_fare_that_equals_its_displacement_is_accepted() -> None:
    # 0.1 + 0.2 is not 0.3 in binary fractions.
    rows = (((0.3, 1.0, 0.0),), ((0.3 * (1 - 1e-6), 1.0, 0.0),), ((0.3 * (1 + 1e-6), 1.0, 0.0),))
    network = Plan((5, 5), ((0, 1), (0, 1), (0, 1)), rows, "normal").network()
    each = compare_controls(network, np.array([0.1, 0.2])).connections
    assert each.open.tolist() == [True, False, True]
    assert each.contribution[0] == 0.0
    assert each.contribution[1] < 0 < each.contribution[2]


def test_one_virtual_class_opens_every_product_to_leg_control() -> None:
    network = cheap_through(150.0)
    assert not compare_controls(network, np.zeros(2)).connections.open_by_leg_control.all()
    assert compare_controls(network, np.zeros(2), LegControl(virtual_classes=1)).connections.open_by_leg_control.all()


@pytest.mark.parametrize("family", FAMILIES)
@given(
    seats=st.integers(0, 40),
    high=st.floats(20.0, 2000.0),
    ratio=st.floats(0.02, 0.98),
    mean=st.floats(0.5, 35.0),
    dispersion=st.floats(1.05, 6.0),
)
@examples(60)
def test_on_one_leg_with_two_classes_the_controls_agree(
    family: str, seats: int, high: float, ratio: float, mean: float, dispersion: float
) -> None:
    """Both are Littlewood's rule (1972) there, as more low fares ask than there are seats."""
    rows = ((high, mean, (mean * dispersion) ** 0.5), (ratio * high, 480.0, 22.5))
    network = one_leg(seats, rows, family).network()
    found = compare_controls(network, solve(network, FAST).bid_price, LegControl(family))
    assert not found.connections.disagrees.any()
    assert found.connections.at_stake.tolist() == [0.0, 0.0]
    assert found.agrees.tolist() == [True]
    assert found.connections.open[0] == (seats > 0)


@given(plan=plans(), data=st.data())
@examples(100)
def test_what_holds_for_any_network_and_any_prices(plan: Plan, data: st.DataObject) -> None:
    network = plan.network()
    n_legs = network.n_legs
    price = st.lists(st.sampled_from([0.0, 8.0, 50.0, 120.0]), min_size=n_legs, max_size=n_legs)
    prices = np.array(data.draw(price))
    found = compare_controls(network, prices)
    each = found.connections
    for j, itinerary in enumerate(network.product_itinerary):
        path = plan.paths[itinerary]
        assert each.displacement[j] == pytest.approx(prices[list(path)].sum())
        has_seats = all(plan.capacity[leg] > 0 for leg in path)
        assert each.open[j] == (has_seats and network.fare[j] >= each.displacement[j] * (1 - 1e-9))
        limits = found.plain.booking_limit[found.plain.products.product == j]
        assert each.open_by_leg_control[j] == bool(limits.min() > 0)
        stake = abs(each.contribution[j]) * network.demand.expected[j]
        assert 0 <= each.at_stake[j] <= stake * (1 + 1e-9)
        if not each.disagrees[j]:
            assert each.at_stake[j] == 0
    for leg in range(n_legs):
        touched = [leg in plan.paths[itinerary] for itinerary in network.product_itinerary]
        assert found.agrees[leg] == (not np.any(each.disagrees[touched]))


@given(plan=plans())
@examples(60)
def test_the_adjusted_control_on_one_leg_is_the_plain_one(plan: Plan) -> None:
    """Without connections nothing is displaced elsewhere."""
    alone = Plan(plan.capacity, tuple(path[:1] for path in plan.paths), plan.products, plan.family)
    network = alone.network()
    found = compare_controls(network, solve(network, FAST).bid_price)
    np.testing.assert_array_equal(found.adjusted.booking_limit, found.plain.booking_limit)
    np.testing.assert_array_equal(found.adjusted.seat_value, found.plain.seat_value)
