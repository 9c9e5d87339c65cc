"""The three programs beside each other, and the randomised one against what it averages."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from lp import SOLVERS, LpOptions, Method, SeatProgram, SolverOptions, sampled_columns, solve
from lp.solvers import SolverName
from network import SettingError
from tests.lp.reference import reference
from tests.networks import Plan, degenerate_plans, examples, hub_plan, one_leg, plans, sure_plan

FAST = SolverOptions("highs")
ERRORS = 5.0
"""Standard errors within which a mean over samples must lie of its expectation."""


@given(plan=st.one_of(plans(), degenerate_plans()))
@examples(100)
def test_the_deterministic_program_bounds_the_probabilistic_one(plan: Plan) -> None:
    network = plan.network()
    upper, lower = (solve(network, LpOptions(m, FAST)) for m in (Method.DETERMINISTIC, Method.PROBABILISTIC))
    assert lower.objective <= upper.objective * (1 + 1e-9)


@pytest.mark.parametrize("plan", [hub_plan(1, spokes=2), hub_plan(2, spokes=3, seats=12), hub_plan(3, spokes=2)])
@pytest.mark.parametrize("solver", SOLVERS)
def test_the_randomised_program_lies_between_the_others(plan: Plan, solver: SolverName) -> None:
    # Jensen's inequality: Talluri and van Ryzin (1999), Transportation Science 33(2).
    network, options = plan.network(), LpOptions(solver=SolverOptions(solver), samples=60)
    upper, between, lower = (
        solve(network, replace(options, method=m))
        for m in (Method.DETERMINISTIC, Method.RANDOMISED, Method.PROBABILISTIC)
    )
    room = ERRORS * between.objective_error
    assert 0 < room < 0.2 * between.objective
    assert between.objective <= upper.objective + room
    assert between.objective >= lower.objective - room
    assert between.certificate.holds
    assert between.bound == pytest.approx(between.objective, rel=1e-7)


@given(plan=plans())
@examples(15)
def test_the_randomised_program_is_the_mean_of_its_samples(plan: Plan) -> None:
    network = plan.network()
    options = LpOptions(Method.RANDOMISED, FAST, samples=5, seed=42)
    found = solve(network, options)
    outcomes = network.demand.sample(np.random.default_rng(42), 5)
    values = [reference(SeatProgram.of(network, sampled_columns(network, outcome))).value for outcome in outcomes]
    assert found.objective == pytest.approx(np.mean(values), rel=1e-9, abs=1e-9)
    assert found.objective_error == pytest.approx(np.std(values, ddof=1) / np.sqrt(5), rel=1e-6, abs=1e-6)
    again = solve(network, options)
    np.testing.assert_array_equal(again.bid_price, found.bid_price)


def test_another_seed_draws_other_samples() -> None:
    network = hub_plan(1, spokes=2).network()
    one, other = (solve(network, LpOptions(Method.RANDOMISED, FAST, samples=3, seed=seed)) for seed in (1, 2))
    assert one.objective != other.objective


def test_the_randomised_price_of_one_leg_estimates_its_closed_form() -> None:
    """Two classes on a leg: the last seat earns f_H if D_H >= c, else f_L if D_H + D_L >= c, else nothing.

    Talluri and van Ryzin (1999), Transportation Science 33(2): the dual of the program of each sample.
    """
    seats, fares, means, samples = 20, np.array([300.0, 120.0]), np.array([16.0, 5.0]), 400
    network = one_leg(seats, [(fare, mean, mean**0.5) for fare, mean in zip(fares, means, strict=True)]).network()
    found = solve(network, LpOptions(Method.RANDOMISED, FAST, samples=samples))
    high, both = stats.poisson.sf(seats - 1, means[0]), stats.poisson.sf(seats - 1, means.sum())
    expected = fares[0] * high + fares[1] * (both - high)
    square = fares[0] ** 2 * high + fares[1] ** 2 * (both - high)
    error = np.sqrt((square - expected**2) / samples)
    assert abs(found.bid_price[0] - expected) <= ERRORS * error
    assert error < 0.1 * expected


@pytest.mark.parametrize("solver", SOLVERS)
def test_without_doubt_the_programs_are_one(solver: SolverName) -> None:
    plan = sure_plan([3, 2], [([0, 1], 150.0, 2), ([0], 100.0, 2), ([1], 60.0, 2)])
    # By hand: 100 + 60 > 150 > 100, so leg 0 takes both its locals and one through passenger, leg 1 that one and
    # one local. The local on leg 1 and the through passenger have others behind them: 60, and 150 - 60 = 90.
    for method in Method:
        found = solve(plan.network(), LpOptions(method, SolverOptions(solver)))
        assert found.objective == pytest.approx(2 * 100 + 150 + 60)
        assert found.objective_error == 0
        np.testing.assert_allclose(found.bid_price, [90.0, 60.0], rtol=1e-9)
        np.testing.assert_allclose(found.next_seat, [90.0, 60.0], rtol=1e-9)
        np.testing.assert_allclose(found.allotted, [1.0, 2.0, 1.0], rtol=1e-9)
        np.testing.assert_allclose(found.expected_sales, [3.0, 2.0], rtol=1e-9)


def test_options_outside_their_limits_are_refused() -> None:
    for wrong in ({"tail": 0.0}, {"tail": 1.0}, {"tail": float("nan")}, {"samples": 1}, {"method": "guess"}):
        with pytest.raises(SettingError, match=next(iter(wrong))):
            LpOptions(**wrong)
    with pytest.raises(SettingError, match="unknown solver 'abacus'; choose cbc or highs"):
        SolverOptions("abacus")
    for limit in (0.0, -1.0, float("nan")):
        with pytest.raises(SettingError, match="time limit"):
            SolverOptions("cbc", limit)


def test_a_method_may_be_given_by_its_word() -> None:
    network = one_leg(2, [(100.0, 2.0, 2.0)]).network()
    for method in Method:
        assert solve(network, LpOptions(str(method), FAST)).method is method
    assert solve(network, LpOptions("probabilistic", FAST)).objective < solve(network, LpOptions("deterministic")).bound
