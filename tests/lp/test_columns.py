"""Seat columns against scipy.stats and against plain loops."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from lp import deterministic_columns, probabilistic_columns, sampled_columns
from tests.networks import Plan, degenerate_plans, examples, one_leg, plans


def test_a_seat_is_worth_the_fare_times_the_chance_that_demand_reaches_it() -> None:
    # Expected marginal seat revenue, Belobaba (1987); the chances are those of scipy.stats.
    plan = Plan((6, 4), ((0,), (0, 1)), (((200.0, 3.0, 1.0), (90.0, 8.0, 1.0)), ((250.0, 2.5, 1.0),)), "poisson")
    columns = probabilistic_columns(plan.network())
    seats = np.arange(1, 8)
    values = np.concatenate([200 * stats.poisson.sf(seats - 1, 3.0), 90 * stats.poisson.sf(seats - 1, 8.0)])
    np.testing.assert_allclose(columns.value[columns.itinerary == 0], np.sort(values)[::-1], rtol=1e-9)
    through = 250 * stats.poisson.sf(np.arange(5), 2.5)
    np.testing.assert_allclose(columns.value[columns.itinerary == 1], through, rtol=1e-9)
    assert np.all(columns.width == 1.0)
    np.testing.assert_array_equal(np.bincount(columns.product), [7, 7, 5])


def test_columns_are_as_deep_as_demand_matters() -> None:
    network = one_leg(500, [(100.0, 3.0, 1.0)], "poisson").network()
    for tail in (1e-6, 1e-3):
        deepest = int(stats.poisson.isf(tail, 3.0)) + 1
        while stats.poisson.sf(deepest - 1, 3.0) < tail:
            deepest -= 1
        assert len(probabilistic_columns(network, tail)) == deepest
    assert len(probabilistic_columns(one_leg(4, [(100.0, 30.0, 1.0)], "poisson").network())) == 5
    assert len(probabilistic_columns(one_leg(4, [(100.0, 3.0, 1.0)], "poisson").network(), any_seats=True)) > 5


@given(plan=st.one_of(plans(), degenerate_plans()))
@examples(80)
def test_columns_are_sorted_positive_and_those_of_their_itinerary(plan: Plan) -> None:
    network = plan.network()
    outcome = network.demand.sample(np.random.default_rng(1), 1)[0]
    for columns in (deterministic_columns(network), probabilistic_columns(network), sampled_columns(network, outcome)):
        assert np.all(columns.value > 0)
        assert np.all(columns.width > 0)
        assert len(columns.start) == network.n_itineraries + 1
        np.testing.assert_array_equal(network.product_itinerary[columns.product], columns.itinerary)
        for i in range(network.n_itineraries):
            assert np.all(np.diff(columns.value[columns.start[i] : columns.start[i + 1]]) <= 0)


@given(plan=plans())
@examples(60)
def test_widths_and_values_of_sure_programs_are_demand_and_fare(plan: Plan) -> None:
    network = plan.network()
    outcome = network.demand.sample(np.random.default_rng(2), 1)[0]
    for columns, demand in (
        (deterministic_columns(network), network.demand.expected),
        (sampled_columns(network, outcome), outcome),
    ):
        sold = (network.fare > 0) & (demand > 0)
        assert sorted(columns.product) == np.flatnonzero(sold).tolist()
        np.testing.assert_array_equal(columns.width, demand[columns.product])
        np.testing.assert_array_equal(columns.value, network.fare[columns.product])


@given(plan=st.one_of(plans(), degenerate_plans()), threshold=st.floats(-10.0, 500.0), seed=st.integers(0, 99))
@examples(80)
def test_columns_above_a_threshold_are_counted(plan: Plan, threshold: float, seed: int) -> None:
    columns = probabilistic_columns(plan.network())
    rng = np.random.default_rng(seed)
    each = threshold + rng.uniform(-50.0, 50.0, len(columns.start) - 1)
    if len(columns):
        each[rng.random(len(each)) < 0.5] = rng.choice(columns.value)
    runs = [columns.value[a:b] for a, b in zip(columns.start[:-1], columns.start[1:], strict=True)]
    expected = [a + np.sum(run > t) for a, run, t in zip(columns.start[:-1], runs, each, strict=True)]
    assert columns.count_above(each).tolist() == expected
    for near in (columns.start[:-1], columns.start[1:], rng.integers(columns.start[:-1], columns.start[1:] + 1)):
        assert columns.count_above(each, near).tolist() == expected
    seats = [run.size and int(np.sum(run > t)) for run, t in zip(runs, each, strict=True)]
    assert columns.seats_before(columns.count_above(each)).tolist() == seats


@pytest.mark.parametrize("family", ["poisson", "gamma"])
def test_expected_sales_within_an_allotment_are_those_of_scipy(family: str) -> None:
    # E[min(D, n)] is the sum of P(D >= k) over k = 1..n for whole demand, and no less for any other.
    network = one_leg(9, [(100.0, 4.0, 2.0)], family).network()
    columns = probabilistic_columns(network)
    sales = columns.expected_sales((np.arange(len(columns)) < 6).astype(np.float64), network.fare)
    law = stats.poisson(4.0) if family == "poisson" else stats.gamma(4.0, scale=1.0)
    chances = law.sf(np.arange(6)) if family == "poisson" else law.sf(np.arange(1, 7))
    assert sales[0] == pytest.approx(chances.sum(), rel=1e-9)
