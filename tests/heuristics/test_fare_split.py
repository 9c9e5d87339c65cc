"""Fare splits against exact values, plain leg programs, finite differences and the least bound there is."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from heuristics import LegProducts, leg_products
from heuristics.bounds import split_shares
from heuristics.fare_split import FareSplit, SplitOptions, Stage, best_split, split_bound
from lp import LpOptions, Method, solve
from network.arrays import FloatArray
from tests.networks import examples
from tests.oracle import Case, drawn_case, least_split_bound, leg_trails, network_value

SEEDS = range(12)
seeds = st.integers(0, 2**32 - 1)


@dataclass(frozen=True, eq=False)
class Split:
    """A drawn case, its leg products, and shares in proportion to the deterministic prices."""

    case: Case
    products: LegProducts
    start: FloatArray

    @property
    def stages(self) -> list[Stage]:
        return [Stage(chances[self.products.product], 1) for chances in self.case.periods]

    def bound(self, share: FloatArray) -> tuple[float, FloatArray]:
        return split_bound(self.case.network.remaining, self.products.leg, share, self.stages)

    def best(self, start: FloatArray, iterations: int = 60) -> FareSplit:
        options = SplitOptions(iterations)
        products = self.products
        return best_split(self.case.network.remaining, products.leg, products.product, start, self.stages, options)

    def summed(self, share: FloatArray) -> FloatArray:
        """(K, J) sums of the shares of every product."""
        return np.array([np.bincount(self.products.product, weights=row) for row in share])

    def random_share(self, seed: int) -> FloatArray:
        """Shares by stage that sum to the fares, some negative."""
        rng = np.random.default_rng(seed)
        product = self.products.product
        part = rng.uniform(-0.5, 1.0, (len(self.stages), len(product)))
        excess = (self.summed(part) - 1.0) / np.bincount(product)
        return np.asarray(self.case.network.fare[product] * (part - excess[:, product]))


@cache
def split(seed: int) -> Split:
    case = drawn_case(seed)
    prices = solve(case.network, LpOptions(Method.DETERMINISTIC)).bid_price
    products = leg_products(case.network, prices)
    return Split(case, products, split_shares(case.network, products, prices))


@cache
def found(seed: int) -> FareSplit:
    return split(seed).best(split(seed).start)


@given(seed=st.sampled_from(SEEDS), draw=seeds)
@examples(40)
def test_the_bound_is_the_sum_of_plain_leg_programs(seed: int, draw: int) -> None:
    given_split = split(seed)
    share = given_split.random_share(draw)
    trails = leg_trails(given_split.case.network, given_split.products, share, given_split.case.periods)
    assert given_split.bound(share)[0] == pytest.approx(sum(trail[-1, -1] for trail in trails), rel=1e-9)


@given(seed=st.sampled_from(SEEDS), draw=seeds)
@examples(40)
def test_no_shares_promise_less_than_the_network_earns(seed: int, draw: int) -> None:
    given_split = split(seed)
    share = given_split.random_share(draw)
    np.testing.assert_allclose(given_split.summed(share), given_split.case.network.fare * np.ones((len(share), 1)))
    assert given_split.bound(share)[0] >= network_value(given_split.case).flat[-1] * (1 - 1e-12)


@given(seed=st.sampled_from(SEEDS), draw=seeds)
@examples(40)
def test_slope_is_the_derivative_of_the_bound(seed: int, draw: int) -> None:
    given_split, rng = split(seed), np.random.default_rng(draw)
    share = given_split.random_share(draw)
    move = rng.normal(0.0, 1e-6, share.shape)
    above, below = (given_split.bound(share + sign * move)[0] for sign in (1.0, -1.0))
    slope = given_split.bound(share)[1]
    assert (above - below) / 2 == pytest.approx((slope * move).sum(), rel=1e-4, abs=1e-10)


@given(draw=seeds)
@examples(200)
def test_slope_never_lies_above_the_bound_even_where_shares_equal_seat_values(draw: int) -> None:
    """A subgradient g of a convex function b has ``b(r') >= b(r) + g.(r' - r)`` for all r'."""
    rng = np.random.default_rng(draw)
    seats, leg = rng.integers(0, 5, 2), np.sort(rng.integers(0, 2, 6))
    stages = [Stage(rng.uniform(0.0, 1 / 6, 6), int(rng.integers(1, 3))) for _ in range(rng.integers(1, 8))]
    share = 50.0 * rng.integers(-1, 3, (len(stages), 6)).astype(np.float64)
    bound, slope = split_bound(seats, leg, share, stages)
    for _ in range(5):
        move = rng.normal(0.0, 40.0, share.shape) * (rng.random(share.shape) < 0.5)
        assert split_bound(seats, leg, share + move, stages)[0] >= bound + (slope * move).sum() - 1e-9


@given(seed=st.sampled_from(SEEDS), draw=seeds)
@examples(30)
def test_no_leg_accepts_more_requests_than_come_or_than_it_has_seats(seed: int, draw: int) -> None:
    given_split = split(seed)
    _, slope = given_split.bound(given_split.random_share(draw))
    requests = np.array([stage.requests for stage in given_split.stages])
    assert np.all((slope >= 0.0) & (slope <= requests * (1 + 1e-12)))
    seats = given_split.case.network.remaining
    accepted = np.bincount(given_split.products.leg, weights=slope.sum(axis=0), minlength=len(seats))
    assert np.all(accepted <= seats * (1 + 1e-12))


def test_steps_of_a_stage_are_stages_with_the_same_shares() -> None:
    given_split = split(0)
    share = given_split.random_share(1)[:4]
    stages = [Stage(stage.requests, steps) for stage, steps in zip(given_split.stages, (3, 1, 2, 4), strict=False)]
    apart = [Stage(stage.requests, 1) for stage in stages for _ in range(stage.steps)]
    owner = np.repeat(np.arange(4), [stage.steps for stage in stages])
    seats, leg = given_split.case.network.remaining, given_split.products.leg
    bound, slope = split_bound(seats, leg, share, stages)
    wanted, each = split_bound(seats, leg, share[owner], apart)
    assert bound == pytest.approx(wanted, rel=1e-12)
    np.testing.assert_allclose(slope, [each[owner == k].sum(axis=0) for k in range(4)], rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize("seed", SEEDS)
def test_best_split_lies_between_the_least_bound_and_its_start(seed: int) -> None:
    best, given_split = found(seed), split(seed)
    least = least_split_bound(given_split.case, given_split.products)
    assert network_value(given_split.case).flat[-1] <= least * (1 + 1e-9)
    assert least * (1 - 1e-9) <= best.bound <= best.start_bound
    # The search stops early on purpose: at most 0.6 % above the least bound.
    assert best.bound <= least * 1.006
    whole = np.broadcast_to(given_split.start, best.share.shape)
    assert best.start_bound == pytest.approx(given_split.bound(whole)[0], rel=1e-12)
    assert best.bound == pytest.approx(given_split.bound(best.share)[0], rel=1e-12)
    np.testing.assert_allclose(given_split.summed(best.share), np.tile(given_split.case.network.fare, (len(whole), 1)))


def test_a_search_goes_on_where_the_slope_jumps() -> None:
    # From this start a single run of L-BFGS reports convergence 0.9 % above the least bound.
    stopped = split(44)
    least = least_split_bound(stopped.case, stopped.products)
    assert found(44).bound <= least * 1.002


def test_better_shares_are_kept_from_a_good_start() -> None:
    best = found(3)
    again = split(3).best(best.share, iterations=3)
    assert again.start_bound == pytest.approx(best.bound, rel=1e-12)
    assert again.bound <= best.bound * (1 + 1e-12)


def test_locals_alone_are_exact_and_need_no_search() -> None:
    case = drawn_case(1)
    network = case.network
    local = np.flatnonzero(np.diff(network.path_start) == 1)
    kept = np.isin(network.product_itinerary, local)
    only = Case(network.subnetwork(np.arange(network.n_legs), local), case.periods[:, kept])
    products = leg_products(only.network, np.zeros(network.n_legs))
    stages = [Stage(chances[products.product], 1) for chances in only.periods]
    best = best_split(network.remaining, products.leg, products.product, products.adjusted_fare, stages)
    assert best.bound == pytest.approx(network_value(only).flat[-1], rel=1e-12)
    assert best.evaluations == 1
    assert best.message == "no product has several legs"
    np.testing.assert_array_equal(best.share, np.tile(products.adjusted_fare, (len(stages), 1)))


def test_no_seats_are_worth_nothing() -> None:
    given_split = split(2)
    seats, products = np.zeros(3, dtype=np.int64), given_split.products
    best = best_split(seats, products.leg, products.product, given_split.start, given_split.stages)
    assert (best.bound, best.start_bound) == (0.0, 0.0)


def test_stages_and_shares_must_be_as_many() -> None:
    given_split = split(0)
    with pytest.raises(ValueError, match="zip"):
        given_split.bound(given_split.random_share(0)[1:])
