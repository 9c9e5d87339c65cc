"""Prices depend on what is sold, not on names, order, currency, solver, start or route; and they do not jump."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lp import SOLVERS, LpOptions, Method, Solution, SolverOptions, solve
from lp.solvers import SolverName
from network import Network
from tests.networks import Plan, degenerate_plans, examples, hub_plan, plans

ANY = st.one_of(plans(), degenerate_plans())
EXACT = st.sampled_from([Method.DETERMINISTIC, Method.PROBABILISTIC])


def assert_same(one: Solution, other: Solution, network: Network, scale: float = 1.0) -> None:
    """The prices of ``one`` are ``scale`` times those of ``other``, to a millionth of the greatest fare."""
    near = 1e-6 * scale * network.fare.max(initial=1.0)
    assert one.objective == pytest.approx(scale * other.objective, rel=1e-9, abs=near)
    np.testing.assert_allclose(one.bid_price, scale * other.bid_price, rtol=0, atol=near)
    np.testing.assert_allclose(one.next_seat, scale * other.next_seat, rtol=0, atol=near)


@given(plan=ANY, method=EXACT, data=st.data())
@examples(80)
def test_the_order_of_legs_itineraries_and_classes_does_not_matter(
    plan: Plan, method: Method, data: st.DataObject
) -> None:
    legs = data.draw(st.permutations(range(len(plan.capacity))))
    itineraries = data.draw(st.permutations(range(len(plan.paths))))
    network = plan.network()
    found, turned = (solve(n, LpOptions(method)) for n in (network, plan.reordered(legs, itineraries).network()))
    expected = replace(found, bid_price=found.bid_price[legs], next_seat=found.next_seat[legs])
    assert_same(turned, expected, network)


@pytest.mark.parametrize("solver", SOLVERS)
def test_the_order_of_a_hub_does_not_matter(solver: SolverName) -> None:
    plan = hub_plan(11, spokes=6)
    rng = np.random.default_rng(4)
    legs, itineraries = (rng.permutation(len(each)).tolist() for each in (plan.capacity, plan.paths))
    options = LpOptions(solver=SolverOptions(solver))
    found, turned = (solve(p.network(), options) for p in (plan, plan.reordered(legs, itineraries)))
    expected = replace(found, bid_price=found.bid_price[legs], next_seat=found.next_seat[legs])
    assert_same(turned, expected, plan.network())


@given(plan=ANY)
@examples(40)
def test_names_do_not_matter(plan: Plan) -> None:
    network = plan.network()
    blank = replace(
        network,
        legs=replace(network.legs, name=np.full(network.n_legs, "->", dtype=object)),
        itinerary=np.full(network.n_itineraries, "a b", dtype=object),
    )
    found, renamed = solve(network), solve(blank)
    np.testing.assert_array_equal(renamed.bid_price, found.bid_price)
    np.testing.assert_array_equal(renamed.next_seat, found.next_seat)


@pytest.mark.parametrize("factor", [0.01, 137.5, 1e6])
@given(plan=ANY, method=EXACT)
@examples(25)
def test_prices_scale_with_the_currency(factor: float, plan: Plan, method: Method) -> None:
    network = plan.network()
    found, scaled = (solve(n, LpOptions(method)) for n in (network, plan.with_fares(factor).network()))
    assert_same(scaled, found, network, factor)


@pytest.mark.parametrize("factor", [0.01, 137.5, 1e6])
@pytest.mark.parametrize("solver", SOLVERS)
def test_prices_of_a_hub_scale_with_the_currency(factor: float, solver: SolverName) -> None:
    plan, options = hub_plan(5, spokes=6), LpOptions(solver=SolverOptions(solver))
    found, scaled = (solve(p.network(), options) for p in (plan, plan.with_fares(factor)))
    assert_same(scaled, found, plan.network(), factor)


@pytest.mark.parametrize("method", [Method.DETERMINISTIC, Method.PROBABILISTIC])
@pytest.mark.parametrize("seed", range(3))
def test_solver_start_and_route_do_not_matter(method: Method, seed: int) -> None:
    network = hub_plan(seed, spokes=6).network()
    cold = solve(network, LpOptions(method))
    rng = np.random.default_rng(seed)
    for solver in SOLVERS:
        options = LpOptions(method, SolverOptions(solver))
        assert_same(solve(network, options), cold, network)
        assert_same(solve(network, replace(options, whole=True)), cold, network)
        for start in (cold.bid_price, cold.next_seat, np.zeros(12), np.full(12, 1e5), rng.uniform(0, 500, 12)):
            assert_same(solve(network, options, start), cold, network)


@given(plan=ANY, method=EXACT, data=st.data())
@examples(60)
def test_a_warm_start_does_not_matter(plan: Plan, method: Method, data: st.DataObject) -> None:
    network, n_legs = plan.network(), len(plan.capacity)
    start = data.draw(st.lists(st.sampled_from([0.0, 5.0, 99.0, 1e4]), min_size=n_legs, max_size=n_legs))
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("lp.pricing_out.WHOLE", 0)
        warm = solve(network, LpOptions(method, SolverOptions("highs")), np.array(start))
    assert_same(warm, solve(network, LpOptions(method)), network)


def moved(plan: Plan, change: float, seed: int) -> Plan:
    """Return the plan with every mean changed at random by at most a share."""
    rng = np.random.default_rng(seed)
    rows = [[(f, m * (1 + change * rng.uniform(-1, 1)), s) for f, m, s in classes] for classes in plan.products]
    return plan.with_products(rows)


@pytest.mark.parametrize("seed", range(6))
def test_a_small_change_of_demand_moves_prices_little(seed: int) -> None:
    """Twenty legs; measured over 36 draws: at most 0.6 % of the mean price on any leg, 0.18 % on average.

    A price that jumps between two optimal duals would keep the size of its jump however small the change, so
    that a hundredth of the change must also move prices by about a hundredth.
    """
    plan = hub_plan(seed, spokes=10, seats=40)
    before = solve(plan.network())
    assert before.bid_price.shape == (20,)
    level = before.bid_price.mean()
    for kind in ("bid_price", "next_seat"):
        coarse, fine = (
            np.abs(getattr(solve(moved(plan, change, seed).network()), kind) - getattr(before, kind))
            for change in (1e-3, 1e-5)
        )
        assert 0 < coarse.max() <= 0.02 * level
        assert coarse.mean() <= 0.005 * level
        assert fine.max() <= 0.0002 * level
