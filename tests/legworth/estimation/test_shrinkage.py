"""Empirical-Bayes shrinkage: small products borrow, large ones speak for themselves."""

from __future__ import annotations

import numpy as np
import pytest

from legworth.estimation.shrinkage import shrink, shrink_rates


def world(seed: int, spread: float = 0.3) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """True rates, (I, K), passengers seen, and the city pair of every itinerary."""
    rng = np.random.default_rng(seed)
    pair = np.arange(240) % 30
    level = rng.lognormal(0, 0.6, (30, 1))[pair]
    rate = 0.2 * level * rng.gamma(1 / spread, spread, (240, 3)) * np.array([0.5, 1.0, 2.0])
    return rate, rng.poisson(30 * rate).astype(float), pair


@pytest.mark.parametrize("seed", range(3))
def test_shrunk_rates_are_nearer_the_truth(seed: int) -> None:
    rate, came, pair = world(seed)
    exposure = np.full(rate.shape, 30.0)
    found = shrink_rates(came, exposure, exposure, pair, 30)
    shrunk = found.rate.reshape(rate.shape)
    error = np.mean((shrunk - rate) ** 2)
    assert error < 0.75 * np.mean((came / 30 - rate) ** 2)
    pooled = np.broadcast_to(found.pair_rate[-1], rate.shape)
    assert error < 0.5 * np.mean((pooled - rate) ** 2)
    assert shrunk.sum(axis=0) == pytest.approx(came.sum(axis=0) / 30, rel=0.02)


def test_the_relative_variance_is_what_the_errors_show() -> None:
    squares, said = 0.0, 0.0
    for seed in range(4):
        rate, came, pair = world(seed)
        exposure = np.full(rate.shape, 30.0)
        found = shrink_rates(came, exposure, exposure, pair, 30)
        squares += float(np.sum((found.rate - rate.ravel()) ** 2))
        said += float(np.sum(found.variance * found.rate**2))
    assert squares == pytest.approx(said, rel=0.15)


def test_more_history_weighs_more_and_none_borrows_all() -> None:
    rate, came, pair = world(5)
    exposure = np.full(rate.shape, 30.0)
    exposure[0], came[0] = 0.0, 0.0
    exposure[1], came[1] = 3000.0, np.round(3000 * rate[1])
    found = shrink_rates(came, exposure, exposure, pair, 30)
    weight = found.own_weight.reshape(rate.shape)
    assert np.all(weight[0] == 0)
    assert np.all(weight[1] > 0.9)
    assert np.all(weight[1] > weight[2:].max(axis=0))
    assert np.all((weight >= 0) & (weight <= 1))
    assert np.all(found.rate.reshape(rate.shape)[0] > 0)
    assert found.rate.reshape(rate.shape)[1] == pytest.approx(rate[1], rel=0.1)


def test_the_own_weight_is_how_far_the_rate_moves_with_the_own_rate() -> None:
    _, came, pair = world(6)
    exposure = np.full(came.shape, 30.0)
    found = shrink_rates(came, exposure, exposure, pair, 30)
    weight, rate = found.own_weight.reshape(came.shape), found.rate.reshape(came.shape)
    moved = []
    for itinerary, fare_class in ((0, 0), (3, 1), (10, 0)):
        more = came.copy()
        more[itinerary, fare_class] += 0.3
        again = shrink_rates(more, exposure, exposure, pair, 30).rate.reshape(came.shape)
        moved.append((again - rate)[itinerary, fare_class] / (0.3 / 30) - weight[itinerary, fare_class])
    assert np.abs(moved).max() < 0.05  # how far pools vary is fitted anew as well


def test_a_product_alone_in_its_city_pair_borrows_little() -> None:
    came = np.random.default_rng(7).poisson(30.0 * np.random.default_rng(8).gamma(4.0, 1.0, (40, 2))).astype(float)
    exposure = np.full(came.shape, 30.0)
    found = shrink_rates(came, exposure, exposure, np.arange(40), 40)
    assert np.all(found.own_weight > 0.8)
    assert found.rate.reshape(came.shape) == pytest.approx(came / 30, rel=0.15, abs=0.25)


def test_products_that_differ_by_chance_alone_are_taken_as_one() -> None:
    rng = np.random.default_rng(1)
    expected = np.full(500, 4.0)
    found = shrink(rng.poisson(4.0, 500).astype(float), expected, np.zeros(500, dtype=int), 1)
    assert np.all(found.weight < 0.1)
    assert found.factor == pytest.approx(1.0, abs=0.2)


def test_pools_are_fitted_apart() -> None:
    rng = np.random.default_rng(2)
    pool = np.repeat([0, 1], 400)
    own = np.append(rng.gamma(1.0, 1.0, 400), np.ones(400))
    found = shrink(rng.poisson(10 * own).astype(float), np.full(800, 10.0), pool, 2)
    assert np.all(found.weight[:400] > 0.8)
    assert np.all(found.weight[400:] < 0.2)
