"""The optimum: each solver, by every route, against the whole program in scipy.optimize.linprog."""

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
    SolverOptions,
    canonical_prices,
    certify,
    deterministic_columns,
    optimise,
    probabilistic_columns,
    solve,
)
from lp.pricing_out import solve_priced_out
from lp.solvers import SolverName
from network import Network
from tests.lp.reference import programs, reference
from tests.networks import Plan, degenerate_plans, examples, hub_plan, plans

EXACT = [Method.DETERMINISTIC, Method.PROBABILISTIC]


def whole_program(network: Network, method: Method) -> SeatProgram:
    make = deterministic_columns if method is Method.DETERMINISTIC else probabilistic_columns
    return SeatProgram.of(network, make(network))


def check_against_reference(network: Network, options: LpOptions) -> None:
    """Objective, certificate, and what the published arrays must be whatever the optimum."""
    program = whole_program(network, options.method)
    found, known = solve(network, options), reference(program)
    assert found.objective == pytest.approx(known.value, rel=1e-7, abs=1e-9)
    assert found.bound == pytest.approx(known.value, rel=1e-7, abs=1e-9)
    assert found.certificate.holds
    assert found.certificate.columns == found.columns == len(program.columns)
    highest = np.zeros(network.n_legs)
    for itinerary, fare in zip(network.product_itinerary, network.fare, strict=True):
        path = network.path_leg[network.path_start[itinerary] : network.path_start[itinerary + 1]]
        highest[path] = np.maximum(highest[path], fare)
    for prices in (found.bid_price, found.next_seat):
        assert np.all(prices >= 0)
        assert np.all(prices <= highest * (1 + 1e-9))
    load = network.leg_load(found.allotted)
    assert np.all(load <= network.remaining + 1e-6)
    np.testing.assert_array_equal(found.bid_price[load < network.remaining - 1e-6], 0.0)
    assert np.all(found.expected_sales <= load + 1e-6)


@pytest.mark.parametrize("solver", SOLVERS)
@given(plan=plans())
@examples(150)
def test_both_programs_reach_the_optimum_of_scipy(solver: SolverName, plan: Plan) -> None:
    for method in EXACT:
        check_against_reference(plan.network(), LpOptions(method, SolverOptions(solver)))


@pytest.mark.parametrize("solver", SOLVERS)
@given(plan=degenerate_plans())
@examples(150)
def test_peculiar_networks_reach_the_optimum_of_scipy(solver: SolverName, plan: Plan) -> None:
    for method in EXACT:
        check_against_reference(plan.network(), LpOptions(method, SolverOptions(solver)))


@pytest.mark.parametrize("solver", SOLVERS)
@given(plan=st.one_of(plans(), degenerate_plans()))
@examples(150)
def test_pricing_out_reaches_the_optimum_of_small_programs_too(solver: SolverName, plan: Plan) -> None:
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("lp.pricing_out.WHOLE", 0)
        for method in EXACT:
            check_against_reference(plan.network(), LpOptions(method, SolverOptions(solver)))


@pytest.mark.parametrize("solver", SOLVERS)
@given(
    plan=st.one_of(plans(), degenerate_plans()),
    start=st.lists(st.sampled_from([0.0, 1e-9, 3.0, 77.0, 1e3, 1e6]), min_size=4, max_size=4),
    window=st.sampled_from([1e-3, 1.0, 60.0, 1e4]),
)
@examples(40)
def test_any_prices_and_any_fence_will_do_to_begin_with(
    solver: SolverName, plan: Plan, start: list[float], window: float
) -> None:
    prices = np.array(start[: len(plan.capacity)])
    for program in programs(plan.network()).values():
        if len(program.columns) == 0:
            continue
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr("lp.pricing_out.WHOLE", 0)
            seats = solve_priced_out(program, prices, window, SolverOptions(solver)).seats
        expected = optimise(program, LpOptions(whole=True))
        certificate = certify(program, seats, expected.last_seat)
        assert certificate.holds, certificate.failures
        last_seat, next_seat = canonical_prices(program, seats)
        np.testing.assert_allclose(last_seat, expected.last_seat, rtol=0, atol=1e-6 * program.scale)
        np.testing.assert_allclose(next_seat, expected.next_seat, rtol=0, atol=1e-6 * program.scale)


@pytest.mark.parametrize("solver", SOLVERS)
@pytest.mark.parametrize("method", EXACT)
def test_a_hub_with_many_columns_reaches_the_optimum_of_scipy(solver: SolverName, method: Method) -> None:
    network = hub_plan(3, spokes=5).network()
    found = solve(network, LpOptions(method, SolverOptions(solver)))
    check_against_reference(network, LpOptions(method, SolverOptions(solver)))
    if method is Method.PROBABILISTIC:
        assert found.columns > 2000
        assert found.opened < found.columns / 4


@given(plan=st.one_of(plans(), degenerate_plans()))
@examples(200)
def test_prices_of_scipy_pass_the_certificate(plan: Plan) -> None:
    for program in programs(plan.network()).values():
        known = reference(program)
        certificate = certify(program, known.seats, known.prices)
        assert certificate.holds, certificate.failures
        assert certificate.primal == pytest.approx(known.value, rel=1e-9, abs=1e-9)


@given(plan=st.one_of(plans(), degenerate_plans()))
@examples(80)
def test_the_solvers_agree_on_value_and_prices(plan: Plan) -> None:
    network = plan.network()
    for method in EXACT:
        cbc, highs = (solve(network, LpOptions(method, SolverOptions(name))) for name in SOLVERS)
        assert cbc.objective == pytest.approx(highs.objective, rel=1e-7, abs=1e-9)
        size = network.fare.max(initial=1.0)
        np.testing.assert_allclose(cbc.bid_price, highs.bid_price, rtol=0, atol=1e-6 * size)
        np.testing.assert_allclose(cbc.next_seat, highs.next_seat, rtol=0, atol=1e-6 * size)


@pytest.mark.parametrize("solver", SOLVERS)
@pytest.mark.parametrize("method", EXACT)
def test_seats_to_spare_everywhere_leave_nothing_to_decide(solver: SolverName, method: Method) -> None:
    # Every column is sold, so that the solver sees fences only, each of which costs money.
    paths = tuple((i % 2,) for i in range(401))
    network = Plan((9000, 9000), paths, (((100.0, 5.0, 0.0),),) * 401, "normal").network()
    found = solve(network, LpOptions(method, SolverOptions(solver)))
    assert found.objective == pytest.approx(401 * 5 * 100)
    assert found.bid_price.tolist() == found.next_seat.tolist() == [0.0, 0.0]
    assert found.opened == 0


def test_no_itinerary_at_all_is_worth_nothing() -> None:
    for method in Method:
        found = solve(Plan((3, 0), (), ()).network(), LpOptions(method))
        assert (found.objective, found.bid_price.tolist(), found.next_seat.tolist()) == (0.0, [0.0, 0.0], [0.0, 0.0])
        assert found.columns == found.rounds == 0


def test_a_start_that_is_no_price_per_leg_is_refused() -> None:
    network = hub_plan(1, spokes=2).network()
    for start in (np.zeros(3), np.array([0.0, np.nan, 0.0, 0.0]), np.array([0.0, np.inf, 0.0, 0.0])):
        with pytest.raises(ValueError, match="finite price to start from for each of 4 legs"):
            solve(network, start=start)
