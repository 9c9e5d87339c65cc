"""Bounds on expected revenue against exact network values, the deterministic optimum and their own definitions."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cache

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from heuristics import LegProducts, leg_products
from heuristics.bounds import RevenueBounds, _legs_apart, period_bounds, poisson_bounds, split_shares
from heuristics.fare_split import FareSplit, SplitOptions, Stage, best_split, split_bound
from lp import LpOptions, Method, solve
from network import Network
from network.arrays import FloatArray
from tests.networks import Plan, examples, hub_plan, plans
from tests.oracle import (
    Case,
    departing,
    drawn_case,
    leg_trail,
    leg_trails,
    network_value,
    policy_revenue,
)

SEEDS = range(24)
ROUNDING = 1 + 1e-9


def linear(network: Network) -> tuple[float, FloatArray]:
    """Optimum and optimal duals of the deterministic program."""
    found = solve(network, LpOptions(Method.DETERMINISTIC))
    return found.objective, found.bid_price


@dataclass(frozen=True, eq=False)
class Chain:
    """A drawn case with its exact value, bounds and fare split."""

    case: Case
    value: float
    linear: float
    products: LegProducts
    bounds: RevenueBounds
    split: FareSplit

    @property
    def stages(self) -> list[Stage]:
        return [Stage(chances[self.products.product], 1) for chances in self.case.periods]


@cache
def chain(seed: int) -> Chain:
    case = drawn_case(seed)
    network = case.network
    optimum, prices = linear(network)
    products = leg_products(network, prices)
    stages = [Stage(chances[products.product], 1) for chances in case.periods]
    start = split_shares(network, products, prices)
    return Chain(
        case,
        float(network_value(case).flat[-1]),
        optimum,
        products,
        period_bounds(network, prices, case.periods),
        best_split(network.remaining, products.leg, products.product, start, stages, SplitOptions(40)),
    )


@pytest.mark.parametrize("seed", SEEDS)
def test_every_bound_lies_between_the_exact_value_and_the_deterministic_optimum(seed: int) -> None:
    found = chain(seed)
    bounds = found.bounds
    assert bounds.linear == pytest.approx(found.linear, rel=1e-9)
    assert found.value <= found.split.bound * ROUNDING
    assert found.split.bound <= bounds.split * ROUNDING
    assert bounds.split <= bounds.linear * ROUNDING
    assert found.value <= bounds.legs_apart * ROUNDING
    assert bounds.legs_apart <= bounds.one_leg * ROUNDING
    assert np.all(bounds.by_leg <= bounds.linear * ROUNDING)
    assert bounds.one_leg == bounds.by_leg.min()
    assert bounds.least == min(bounds.one_leg, bounds.legs_apart, bounds.split)


@pytest.mark.parametrize("seed", SEEDS)
def test_no_policy_of_seat_values_earns_more_than_the_exact_value(seed: int) -> None:
    found = chain(seed)
    for fare in (found.products.adjusted_fare, found.split.share):
        trails = leg_trails(found.case.network, found.products, fare, found.case.periods)
        revenue = policy_revenue(found.case, trails)
        assert revenue <= found.value * ROUNDING
        # Seen on all these cases: neither is more than 4 % below the optimum.
        assert revenue >= 0.96 * found.value


def priced_shares(found: Chain) -> FloatArray:
    """Shares whose bound is at most that of the legs kept apart.

    Products of a kept leg give every other leg its price and the kept leg the rest. Then each leg that is not kept
    is worth at most its seats at their price and its part of what fares exceed path prices by.
    """
    network, products = found.case.network, found.products
    prices = linear(network)[1]
    kept = found.bounds.apart[products.leg]
    crossing = np.isin(products.product, products.product[kept])
    split = split_shares(network, products, prices)
    return np.where(kept, products.adjusted_fare, np.where(crossing, prices[products.leg], split))


@pytest.mark.parametrize("seed", [*SEEDS, 44])
def test_a_split_that_starts_from_the_decomposition_is_never_above_it(seed: int) -> None:
    # From other shares the search may stop above it: its bound is a minimum only where the search ends at one.
    found = chain(seed)
    network, products = found.case.network, found.products
    start = priced_shares(found)
    np.testing.assert_allclose(np.bincount(products.product, weights=start), network.fare)
    shares = np.broadcast_to(start, (len(found.stages), len(start)))
    bound, _ = split_bound(network.remaining, products.leg, shares, found.stages)
    assert found.value <= bound * ROUNDING
    assert bound <= found.bounds.legs_apart * ROUNDING


def by_definition(case: Case, prices: FloatArray, leg: int) -> float:
    """``V_l + sum_(k != l) p_k c_k + sum_(j not through l) E[D_j] (f_j - P_j)^+``, product by product."""
    network = case.network
    bound, fares, chances = 0.0, [], []
    for j in range(network.n_products):
        i = network.product_itinerary[j]
        path = network.path_leg[network.path_start[i] : network.path_start[i + 1]].tolist()
        if min(network.remaining[path]) == 0:
            continue
        if leg in path:
            fares.append(network.fare[j] - sum(prices[k] for k in path if k != leg))
            chances.append(case.periods[:, j])
        else:
            bound += case.periods[:, j].sum() * max(network.fare[j] - prices[path].sum(), 0.0)
    bound += sum(p * c for k, (p, c) in enumerate(zip(prices, network.remaining, strict=True)) if k != leg)
    if fares:
        bound += leg_trail(int(network.remaining[leg]), np.array(fares), np.array(chances).T)[-1, -1]
    return float(bound)


@st.composite
def priced_cases(draw: st.DrawFn) -> tuple[Case, FloatArray]:
    """Draw any small network, requests for up to 8 periods, and any prices, whole ones and none among them."""
    network = draw(plans(max_legs=3, max_seats=4)).network()
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    chance = rng.uniform(0.0, 1.0 / max(network.n_products, 1), (int(rng.integers(1, 9)), network.n_products))
    prices = draw(st.lists(st.integers(0, 9), min_size=network.n_legs, max_size=network.n_legs))
    return Case(network, chance), 12.5 * np.array(prices, dtype=np.float64)


@given(drawn=priced_cases())
@examples(120)
def test_bounds_at_any_prices(drawn: tuple[Case, FloatArray]) -> None:
    case, prices = drawn
    network = case.network
    found = period_bounds(network, prices, case.periods)
    value, near = float(network_value(case).flat[-1]), 1e-9
    for leg in range(network.n_legs):
        assert found.by_leg[leg] == pytest.approx(by_definition(case, prices, leg), rel=1e-9, abs=near)
    for bound in (found.one_leg, found.legs_apart, found.split):
        assert value - near <= bound <= found.linear + near
    assert found.legs_apart <= found.one_leg + near
    for itinerary in np.unique(network.product_itinerary):
        path = network.path_leg[network.path_start[itinerary] : network.path_start[itinerary + 1]]
        assert network.remaining[path].min() == 0 or np.count_nonzero(found.apart[path]) <= 1


@given(drawn=priced_cases())
@examples(60)
def test_split_shares_sum_to_the_fares(drawn: tuple[Case, FloatArray]) -> None:
    case, prices = drawn
    network = case.network
    products = leg_products(network, prices)
    share = split_shares(network, products, prices)
    assert np.all(share >= 0.0)
    summed = np.bincount(products.product, weights=share, minlength=network.n_products)
    np.testing.assert_allclose(summed, network.fare, rtol=1e-12)
    priced = network.displacement(prices)[products.product] > 0
    assert np.all(share[priced & (prices[products.leg] == 0)] == 0.0)


def test_one_leg_alone_is_exact_at_any_price() -> None:
    network = Plan((4,), ((0,),), (((100.0, 3.0, 3.0**0.5), (40.0, 4.0, 2.0)),), "poisson").network()
    chance = np.tile([0.3, 0.4], (10, 1))
    value = leg_trail(4, np.array([100.0, 40.0]), chance)[-1, -1]
    for price in (0.0, 33.0, 250.0):
        found = period_bounds(network, [price], chance)
        assert [found.one_leg, found.legs_apart, found.split] == pytest.approx([value] * 3, rel=1e-12)


def test_inward_legs_of_a_hub_are_kept_together() -> None:
    # By hand: legs 0 and 1 lead into the hub and legs 2 and 3 out of it; every product joins one with another.
    paths = ((0, 2), (0, 3), (1, 2), (1, 3))
    products = tuple(((100.0 + 10 * i, 3.0, 3.0**0.5), (40.0, 4.0, 2.0)) for i in range(4))
    network = departing(Plan((4, 5, 4, 5), paths, products, "poisson").network(), 30.0, -1, [])
    found = poisson_bounds(network, linear(network)[1])
    assert found.apart.tolist() in ([True, True, False, False], [False, False, True, True])
    kept = found.saving[found.apart]
    assert np.all(kept > 0.0)
    assert found.legs_apart == pytest.approx(found.linear - kept.sum(), rel=1e-12)
    assert found.legs_apart < found.one_leg


def test_one_leg_is_kept_where_it_saves_more_than_all_its_neighbours() -> None:
    # By hand: leg 0 carries everybody; legs 1 to 3 have seats to spare.
    paths = ((0, 1), (0, 2), (0, 3))
    products = tuple(((100.0, 3.0, 3.0**0.5),) for _ in paths)
    network = departing(Plan((6, 50, 50, 50), paths, products, "poisson").network(), 30.0, -1, [])
    found = poisson_bounds(network, linear(network)[1])
    assert found.apart.tolist() == [True, False, False, False]


def test_one_leg_is_kept_where_the_choice_in_order_saves_less() -> None:
    # By hand: leg 0 saves 10 and is joined to two triangles of legs that save 4.5 each. In the order of their saving
    # less that of their neighbours, a leg of each triangle comes first: -14.5 against -17.
    triangles = [(1, 2), (2, 3), (1, 3), (4, 5), (5, 6), (4, 6)]
    paths = (*((0, leg) for leg in range(1, 7)), *triangles)
    network = Plan((5,) * 7, paths, tuple(((100.0, 1.0, 1.0),) for _ in paths)).network()
    saving = np.array([10.0] + [4.5] * 6)
    assert _legs_apart(network, np.ones(12), saving).tolist() == [True] + [False] * 6
    saving[0] = 8.0
    assert saving[_legs_apart(network, np.ones(12), saving)].sum() == 9.0


def test_products_with_a_full_leg_promise_nothing() -> None:
    rows = (((100.0, 3.0, 3.0**0.5),), ((90.0, 4.0, 2.0),), ((150.0, 2.0, 2.0**0.5),))
    paths = ((0,), (1,), (0, 1))
    full = departing(Plan((4, 0), paths, rows, "poisson").network(), 20.0, -1, [])
    alone = departing(Plan((4, 0), paths[:1], rows[:1], "poisson").network(), 20.0, -1, [])
    for prices in ([0.0, 0.0], [30.0, 20.0]):
        found, wanted = poisson_bounds(full, prices), poisson_bounds(alone, prices)
        assert found.linear == pytest.approx(wanted.linear, rel=1e-12)
        np.testing.assert_allclose(found.by_leg, wanted.by_leg, rtol=1e-12)
        assert found.split == pytest.approx(wanted.split, rel=1e-12)


@pytest.mark.parametrize("seed", range(6))
def test_poisson_bounds_hold_for_requests_that_come_by_chance_at_any_time(seed: int) -> None:
    # Exact value: periods so short that two requests hardly ever share one. It exceeds the Poisson value a little.
    network = departing(drawn_case(seed).network, 20.0, -1, [])
    _, prices = linear(network)
    found = poisson_bounds(network, prices)
    mean = network.demand.expected
    coarse, fine = (network_value(Case(network, np.tile(mean / n, (n, 1)))).flat[-1] for n in (400, 800))
    value = 2 * fine - coarse
    assert value < fine < coarse
    assert value <= found.least
    assert found.split <= found.linear
    assert np.all(found.by_leg <= found.linear * ROUNDING)


def test_a_period_bound_of_many_short_periods_is_the_poisson_bound() -> None:
    network = departing(drawn_case(5).network, 20.0, -1, [])
    _, prices = linear(network)
    found = poisson_bounds(network, prices, 0.1)
    coarse, fine = (period_bounds(network, prices, np.tile(network.demand.expected / n, (n, 1))) for n in (500, 1000))
    np.testing.assert_allclose(2 * fine.by_leg - coarse.by_leg, found.by_leg, rtol=1e-4)
    np.testing.assert_allclose(2 * fine.split_value - coarse.split_value, found.split_value, rtol=1e-3)


def test_curves_change_leg_values_and_not_the_linear_bound() -> None:
    network = hub_plan(5).network()
    _, prices = linear(network)
    late = [{30.0: 0.02, 7.0: 0.3, 0.0: 1.0}, {30.0: 0.3, 7.0: 0.9, 0.0: 1.0}]
    low_first = poisson_bounds(departing(network, 60.0, np.where(network.product_class < 2, 0, 1), late), prices)
    even = poisson_bounds(departing(network, 60.0, -1, []), prices)
    high_first = poisson_bounds(departing(network, 60.0, np.where(network.product_class < 2, 1, 0), late), prices)
    assert low_first.linear == even.linear == high_first.linear
    # Common practice: it is dear passengers after cheap ones that make seats hard to sell well.
    assert np.all(low_first.adjusted_value < even.adjusted_value)
    assert np.all(even.adjusted_value < high_first.adjusted_value)
    assert low_first.split < even.split < high_first.split < even.linear


def test_separate_components_add_up() -> None:
    first, second = (departing(drawn_case(seed).network, 20.0, -1, []) for seed in (1, 2))
    one, two = (poisson_bounds(network, linear(network)[1], 0.05) for network in (first, second))
    both = departing(beside(drawn_plan(1), drawn_plan(2)).network(), 20.0, -1, [])
    prices = np.concatenate([linear(first)[1], linear(second)[1]])
    found = poisson_bounds(both, prices, 0.05)
    assert found.linear == pytest.approx(one.linear + two.linear, rel=1e-12)
    assert found.split == pytest.approx(one.split + two.split, rel=1e-5)
    assert found.legs_apart == pytest.approx(one.legs_apart + two.legs_apart, rel=1e-5)


def drawn_plan(seed: int) -> Plan:
    """Return the plan of a drawn case."""
    network = drawn_case(seed).network
    rows = np.column_stack([network.fare, network.demand.mean, network.demand.deviation])
    ends = zip(network.path_start[:-1], network.path_start[1:], strict=True)
    return Plan(
        tuple(network.remaining.tolist()),
        tuple(tuple(network.path_leg[a:b].tolist()) for a, b in ends),
        tuple(tuple(map(tuple, part.tolist())) for part in np.split(rows, network.product_start[1:-1])),
        "poisson",
    )


def beside(one: Plan, two: Plan) -> Plan:
    """Put two plans into one, without anything in common."""
    shift = len(one.capacity)
    paths = tuple(tuple(leg + shift for leg in path) for path in two.paths)
    return Plan(one.capacity + two.capacity, one.paths + paths, one.products + two.products, one.family)


def test_currency_scales_every_bound() -> None:
    case = drawn_case(7)
    _, prices = linear(case.network)
    found = period_bounds(case.network, prices, case.periods)
    dearer = replace(case.network, fare=1000.0 * case.network.fare)
    scaled = period_bounds(dearer, 1000.0 * prices, case.periods)
    np.testing.assert_allclose(scaled.by_leg, 1000.0 * found.by_leg, rtol=1e-9)
    assert scaled.split == pytest.approx(1000.0 * found.split, rel=1e-9)


def test_wrong_arguments() -> None:
    case = drawn_case(0)
    network = case.network
    for prices in ([1.0], np.full(network.n_legs, np.nan), np.full(network.n_legs, -1.0)):
        with pytest.raises(ValueError, match="bid price"):
            period_bounds(network, prices, case.periods)
    fine = np.zeros(network.n_legs)
    for chance in (-0.1, 1.0, float("nan")):
        with pytest.raises(ValueError, match="probabilities"):
            period_bounds(network, fine, np.full((3, network.n_products), chance))
    for shape in ((1, network.n_products - 1), (network.n_products,)):
        with pytest.raises(ValueError, match="probabilities"):
            period_bounds(network, fine, np.zeros(shape))
    with pytest.raises(ValueError, match="requests per step"):
        poisson_bounds(network, fine, 2.0)


def test_nothing_to_sell() -> None:
    network = Plan((), (), ()).network()
    for found in (poisson_bounds(network, []), period_bounds(network, [], np.zeros((3, 0)))):
        assert (found.linear, found.one_leg, found.legs_apart, found.split, found.least) == (0.0, 0.0, 0.0, 0.0, 0.0)
