"""Leg control keeps no seats for demand that another leg makes impossible."""

from __future__ import annotations

import numpy as np

from legworth.control import leg_control
from tests.networks import Plan


def test_nothing_is_kept_for_through_passengers_of_a_closed_leg() -> None:
    products = (((500.0, 10.0, 3.0),), ((100.0, 20.0, 4.0),))
    network = Plan((0, 10), ((0, 1), (1,)), products).network()
    for prices in (np.zeros(2), np.array([200.0, 90.0])):
        found = leg_control(network, prices)
        local = found.products.product == 1
        assert found.booking_limit[local].tolist() == [10]
    # The closed leg itself still says what a seat on it would be worth.
    assert leg_control(network, np.zeros(2)).seat_value[0] > 0
    both = Plan((4, 10), ((0, 1), (1,)), products).network()
    assert leg_control(both, np.zeros(2)).booking_limit[leg_control(both, np.zeros(2)).products.product == 1][0] < 10
