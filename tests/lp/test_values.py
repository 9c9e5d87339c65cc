"""Exact values of seats: differences of two optima of scipy, and a published case where bid prices must fail."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lp import (
    SOLVERS,
    LpOptions,
    Method,
    SeatProgram,
    SeatValues,
    SolverOptions,
    deterministic_columns,
    probabilistic_columns,
    solve,
)
from lp.solvers import SolverName
from tests.lp.reference import value
from tests.networks import Plan, degenerate_plans, examples, hub_plan, plans, sure_plan

EXACT = [Method.DETERMINISTIC, Method.PROBABILISTIC]
ANY = st.one_of(plans(), degenerate_plans())


def program_at(plan: Plan, seats: np.ndarray, method: Method) -> float:
    """Value by scipy of the network that has those seats, built anew."""
    network = plan.network().with_remaining(seats)
    make = deterministic_columns if method is Method.DETERMINISTIC else probabilistic_columns
    return value(SeatProgram.of(network, make(network)), seats.astype(np.float64))


@pytest.mark.parametrize("solver", SOLVERS)
@given(plan=ANY, data=st.data())
@examples(50)
def test_values_at_any_seats_are_those_of_a_network_built_anew(
    solver: SolverName, plan: Plan, data: st.DataObject
) -> None:
    n_legs = len(plan.capacity)
    for method in EXACT:
        values = SeatValues.of(plan.network(), LpOptions(method, SolverOptions(solver)))
        assert values.present.value == pytest.approx(program_at(plan, np.array(plan.capacity), method), rel=1e-7)
        seats = np.array(data.draw(st.lists(st.integers(0, 30), min_size=n_legs, max_size=n_legs)))
        found = values.at(seats)
        assert found.value == pytest.approx(program_at(plan, seats, method), rel=1e-7, abs=1e-9)
        assert found.certificate.holds
        fares = plan.network().fare
        assert found.sales @ fares == pytest.approx(found.value, rel=1e-9, abs=1e-9)


@given(plan=ANY, data=st.data())
@examples(50)
def test_displacement_of_a_party_grows_with_it_and_beats_the_bid_prices(plan: Plan, data: st.DataObject) -> None:
    """V is concave, so a party displaces at least its seats at last-seat prices of any one optimal dual."""
    if not plan.paths:
        return
    itinerary = data.draw(st.integers(0, len(plan.paths) - 1))
    path = list(plan.paths[itinerary])
    most = min(plan.capacity[leg] for leg in path)
    values, network = SeatValues.of(plan.network()), plan.network()
    price = float(solve(network).bid_price[path].sum())
    near = 1e-6 * network.fare.max(initial=1.0)
    before = 0.0
    for party in range(1, most + 1):
        found = values.displacement(itinerary, party)
        assert found >= party * price - near
        assert found >= before - near
        rest = values.without_party(itinerary, party)
        assert rest.value == pytest.approx(values.present.value - found)
        before = found
    for party in (0, -1, most + 1):
        with pytest.raises(ValueError, match="does not fit"):
            values.displacement(itinerary, party)


def test_more_seats_earn_less_and_less() -> None:
    plan = hub_plan(4, spokes=3)
    values = SeatValues.of(plan.network())
    earned = [values.change(2, n) for n in range(-5, 6)]
    steps = np.diff(earned)
    assert np.all(steps >= -1e-9)
    assert np.all(np.diff(steps) <= 1e-6)
    assert earned[5] == pytest.approx(0.0, abs=1e-6)
    with pytest.raises(ValueError, match="not negative"):
        values.change(2, -plan.capacity[2] - 1)
    with pytest.raises(ValueError, match="for every leg"):
        values.at(np.array([1, 2]))


def test_two_seats_that_one_passenger_needs_together() -> None:
    """Talluri and van Ryzin (1998), Management Science 44(11): no bid prices can do what is best here; from memory.

    Two legs of one seat; locals at 250 now, a through passenger at 500 later with a chance of 0.8. Each leg alone
    displaces 400, so no local should be taken; both together displace 400 as well, so the through passenger
    should. Prices above 250 on both legs would refuse him: p + q = 400 is all that a dual can say.
    """
    mean = -np.log(0.2)
    plan = Plan((1, 1), ((0, 1), (0,), (1,)), (((500.0, mean, 1.0),), (), ()), "poisson")
    values = SeatValues.of(plan.network())
    assert values.present.value == pytest.approx(400.0, rel=1e-9)
    assert [values.displacement(i, 1) for i in range(3)] == pytest.approx([400.0, 400.0, 400.0], rel=1e-9)
    np.testing.assert_allclose(solve(plan.network()).bid_price, [200.0, 200.0], rtol=1e-9)


def test_displacement_by_hand() -> None:
    # Two seats on each leg; locals at 90, 50 (leg 0) and 60, 30 (leg 1), each sure. A party of one displaces the
    # cheaper on both legs, a party of two all four.
    rows = [([0, 1], 1.0, 0), ([0], 90.0, 1), ([0], 50.0, 1), ([1], 60.0, 1), ([1], 30.0, 1)]
    for method in EXACT:
        values = SeatValues.of(sure_plan([2, 2], rows).network(), LpOptions(method))
        assert values.present.value == pytest.approx(230.0)
        assert values.displacement(0, 1) == pytest.approx(80.0)
        assert values.displacement(0, 2) == pytest.approx(230.0)
        np.testing.assert_allclose(values.without_party(0, 1).sales, [0, 1, 0, 1, 0], atol=1e-9)
        assert values.change(0, -1) == pytest.approx(-50.0)
        assert values.change(0, 5) == pytest.approx(0.0, abs=1e-9)


def test_samples_have_no_exact_value() -> None:
    with pytest.raises(ValueError, match="not for samples"):
        SeatValues.of(hub_plan(1, spokes=2).network(), LpOptions(Method.RANDOMISED))


@pytest.mark.parametrize("seed", range(4))
def test_one_seat_displaces_what_the_prices_before_and_after_say(seed: int) -> None:
    # V is concave: V(c) - V(c - a) is at least p.a for every optimal dual p at c, at most p.a for every one at c - a.
    network = hub_plan(seed).network()
    before = solve(network)
    values = SeatValues.of(network, start=before.bid_price)
    for itinerary in range(0, network.n_itineraries, 7):
        path = network.path_leg[network.path_start[itinerary] : network.path_start[itinerary + 1]]
        seats = network.remaining.copy()
        seats[path] -= 1
        after = solve(network.with_remaining(seats), start=before.bid_price)
        exact = values.displacement(itinerary, 1)
        for prices in (before.bid_price, before.next_seat):
            assert exact >= prices[path].sum() - 1e-6
        assert exact <= after.next_seat[path].sum() + 1e-6
