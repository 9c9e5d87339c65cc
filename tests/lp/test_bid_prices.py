"""Bid prices are derivatives of the value: differences of scipy's optimal values, and all optimal duals.

Means of the normal family are raised by its cut at zero, by as little as 1e-9 of a seat; where that puts a
breakpoint of the value next to a whole seat, no difference quotient can resolve it, so that family is left out.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lp import LpOptions, Method, SeatProgram, optimise, solve
from network.arrays import FloatArray
from tests.lp.reference import OptimalFace, programs, value
from tests.networks import FAMILIES, Plan, Product, degenerate_plans, examples, one_leg, plans

STEP = 1e-3
SMOOTH = FAMILIES[:3]
ANY = st.one_of(plans(families=SMOOTH), degenerate_plans(families=SMOOTH))

seats = st.integers(1, 40)
mean = st.floats(0.1, 30.0)
products = st.lists(st.tuples(st.integers(1, 500).map(float), mean, st.floats(0.1, 9.0)), min_size=1, max_size=4)


def prices(program: SeatProgram) -> tuple[FloatArray, FloatArray]:
    optimum = optimise(program, LpOptions())
    return optimum.last_seat, optimum.next_seat


def slope(program: SeatProgram, direction: FloatArray) -> float:
    """One-sided derivative of the value of the whole program, currency a seat: of more seats, or of fewer lost."""
    there = value(program, program.capacity + STEP * direction)
    return abs(there - value(program, program.capacity)) / STEP


@given(plan=ANY)
@examples(100)
def test_all_legs_together_lose_the_sum_of_last_seats_and_gain_the_sum_of_next_ones(plan: Plan) -> None:
    for program in programs(plan.network()).values():
        last_seat, next_seat = prices(program)
        with_seats = (program.capacity > 0).astype(np.float64)
        near = 1e-6 * program.scale
        assert last_seat @ with_seats == pytest.approx(slope(program, -with_seats), rel=1e-6, abs=near)
        assert next_seat.sum() == pytest.approx(slope(program, np.ones(len(with_seats))), rel=1e-6, abs=near)


@given(plan=ANY)
@examples(60)
def test_each_leg_alone_brackets_its_prices_and_meets_them_where_it_has_one_slope(plan: Plan) -> None:
    for program in programs(plan.network()).values():
        found, near = prices(program), 1e-6 * program.scale
        for leg in np.flatnonzero(program.capacity > 0):
            alone = (np.arange(len(program.capacity)) == leg).astype(np.float64)
            less, more = slope(program, -alone), slope(program, alone)
            for each in found:
                assert more - near <= each[leg] <= less + near
            if less - more <= near:
                assert found[0][leg] == pytest.approx(found[1][leg], abs=3 * near)


@given(capacity=seats, rows=products, family=st.sampled_from(FAMILIES))
@examples(100)
def test_on_one_leg_prices_are_the_differences_of_the_value_to_the_seat(
    capacity: int, rows: list[Product], family: str
) -> None:
    plan = one_leg(capacity, rows, family)
    found = solve(plan.network())
    less, here, more = (value_of(one_leg(capacity + n, rows, family)) for n in (-1, 0, 1))
    near = 1e-9 * max(fare for fare, _, _ in rows)
    assert found.bid_price[0] == pytest.approx(here - less, rel=1e-9, abs=near)
    assert found.next_seat[0] == pytest.approx(more - here, rel=1e-9, abs=near)


def value_of(plan: Plan) -> float:
    """Value of a leg without any solver: its seats go to the best expected marginal revenues of all products.

    That is the definition of the expected marginal seat revenue, Belobaba (1987); the family is left to `Demand`.
    """
    network, capacity = plan.network(), plan.capacity[0]
    reached = network.demand.survivor(np.arange(1, capacity + 2)[:, None])
    revenues = np.where(reached >= 1e-6, network.fare * reached, 0.0)
    return float(np.sort(revenues.ravel())[::-1][:capacity].sum())


@given(capacity=seats, rows=products)
@examples(40)
def test_on_one_leg_prices_fall_with_seats(capacity: int, rows: list[Product]) -> None:
    found = [solve(one_leg(n, rows, "poisson").network()) for n in range(capacity, capacity + 3)]
    for few, many in pairwise(found):
        assert few.next_seat[0] == pytest.approx(many.bid_price[0], rel=1e-9)
        assert few.bid_price[0] >= few.next_seat[0] * (1 - 1e-12)


@given(plan=ANY)
@examples(100)
def test_no_optimal_dual_has_a_greater_sum_than_the_last_seats_or_a_smaller_one_than_the_next(plan: Plan) -> None:
    for program in programs(plan.network()).values():
        if len(program.columns) == 0:
            continue
        face, (last_seat, next_seat) = OptimalFace(program), prices(program)
        with_seats = (program.capacity > 0).astype(np.float64)
        near = 1e-6 * program.scale
        assert last_seat @ with_seats == pytest.approx(-face.least(-with_seats)[0], abs=near)
        assert next_seat.sum() == pytest.approx(face.least(np.ones(len(with_seats)))[0], abs=near)


@given(plan=ANY, seed=st.integers(0, 2**32 - 1))
@examples(80)
def test_among_optimal_duals_of_the_same_sum_none_is_shorter(plan: Plan, seed: int) -> None:
    """The shortest point p of a convex set is the one with ``p.q >= p.p`` for all its points q."""
    rng = np.random.default_rng(seed)
    for program in programs(plan.network()).values():
        if len(program.columns) == 0:
            continue
        face, (last_seat, next_seat) = OptimalFace(program), prices(program)
        with_seats = (program.capacity > 0).astype(np.float64)
        near = 1e-8 * program.scale
        for chosen, total in ((last_seat, with_seats), (next_seat, -np.ones(len(with_seats)))):
            floor = (total, float(total @ chosen) - near)
            assert face.least(chosen, floor)[0] >= chosen @ chosen - 1e-5 * program.scale**2
            for _ in range(2):
                other = face.least(rng.uniform(0.0, 1.0, len(chosen)), floor)[1]
                assert np.linalg.norm(other) >= np.linalg.norm(chosen) - 1e-5 * program.scale


@given(plan=ANY)
@examples(60)
def test_a_closed_leg_publishes_the_value_of_its_next_seat(plan: Plan) -> None:
    network = plan.network()
    for method in (Method.DETERMINISTIC, Method.PROBABILISTIC):
        found = solve(network, LpOptions(method))
        closed = network.remaining == 0
        np.testing.assert_array_equal(found.bid_price[closed], found.next_seat[closed])


def test_two_legs_in_a_row_share_what_only_a_through_passenger_pays() -> None:
    # By hand: one seat on each leg and a sure through passenger at 100. Any p + q = 100 is an optimal dual.
    network = Plan((1, 1), ((0, 1),), (((100.0, 1.0, 0.0),),), "normal").network()
    found = solve(network)
    np.testing.assert_allclose(found.bid_price, [50.0, 50.0], rtol=1e-9)
    np.testing.assert_allclose(found.next_seat, [0.0, 0.0], atol=1e-9)


def test_seats_that_no_product_of_the_path_can_use_have_no_price() -> None:
    # By hand: leg 1 has three seats, but no more than one passenger can come through leg 0.
    network = Plan((1, 3), ((0, 1),), (((100.0, 2.0, 0.0),),), "normal").network()
    found = solve(network)
    np.testing.assert_allclose(found.bid_price, [100.0, 0.0], rtol=1e-9)
    np.testing.assert_allclose(found.next_seat, [100.0, 0.0], rtol=1e-9)
    assert network.leg_load(found.allotted).tolist() == [1.0, 1.0]
