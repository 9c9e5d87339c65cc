"""Dispersion, persistence and coverage."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from legworth.estimation.dispersion import coverage, fit_over_dispersion, persistence, product_dispersion
from network.demand import Demand


@pytest.mark.parametrize("a", [0.2, 1.0, 2.5])
@pytest.mark.parametrize("mean", [0.3, 5.0])
def test_dispersion_is_recovered(a: float, mean: float) -> None:
    rng = np.random.default_rng(3)
    expected = mean * rng.lognormal(0, 0.4, 20_000)
    counts = rng.poisson(expected * rng.gamma(1 / a, a, 20_000)).astype(float)
    # The standard error of small a is about the root of 2 / n over the mean.
    error = np.sqrt(2 / 20_000) / mean
    assert fit_over_dispersion(counts, expected) == pytest.approx(a, abs=2.5 * error + 0.05 * a)


def test_poisson_counts_have_none_and_nothing_seen_has_none() -> None:
    rng = np.random.default_rng(1)
    assert fit_over_dispersion(rng.poisson(4.0, 5000).astype(float), np.full(5000, 4.0)) < 0.02
    assert fit_over_dispersion(np.zeros(0), np.zeros(0)) == 0


def test_dispersion_does_not_mind_classes_that_close_when_busy() -> None:
    """A departure is watched to the end only if few came in its first half: moments go wrong, likelihood does not."""
    rng = np.random.default_rng(4)
    own = rng.gamma(1 / 0.8, 0.8, 40_000)
    first, second = rng.poisson(3 * own), rng.poisson(3 * own)
    watched = first < 5
    counts = (first + np.where(watched, second, 0)).astype(float)
    expected = np.where(watched, 6.0, 3.0)
    assert fit_over_dispersion(counts, expected) == pytest.approx(0.8, rel=0.05)
    assert np.mean((counts - expected) ** 2 - expected) / np.mean(expected**2) < 0.6


def test_products_have_dispersions_of_their_own_as_far_as_they_show() -> None:
    rng = np.random.default_rng(5)
    truth = 0.8 * rng.lognormal(0, 0.6, 150)
    product = np.repeat(np.arange(150), 300)
    mean = np.full(len(product), 4.0)
    counts = rng.poisson(mean * rng.gamma(1 / truth[product], truth[product])).astype(float)
    pooled = np.full(150, fit_over_dispersion(counts, mean))
    found = product_dispersion(counts, mean, np.ones(len(mean)), product, pooled, np.zeros(150, dtype=int))
    apart, together = (np.sqrt(np.mean(np.log(a / truth) ** 2)) for a in (found, pooled))
    assert apart < 0.3 * together
    same = rng.poisson(mean * rng.gamma(1 / 0.8, 0.8, len(mean))).astype(float)
    found = product_dispersion(same, mean, np.ones(len(mean)), product, np.full(150, 0.8), np.zeros(150, dtype=int))
    assert np.std(np.log(found)) < 0.1


@pytest.mark.parametrize("lasting", [0.0, 0.5, 1.0])
def test_persistence_is_recovered(lasting: float) -> None:
    rng = np.random.default_rng(6)
    size, cells, a = 20_000, 5, 1.0
    share = np.array([0.1, 0.2, 0.4, 0.2, 0.1])
    whole = rng.gamma(1 / (lasting * a), lasting * a, (size, 1)) if lasting else np.ones((size, 1))
    # What does not last is drawn by interval, as large as leaves the variance of the whole at a.
    fresh = (1 - lasting) * a / np.sum(share**2)
    own = rng.gamma(1 / fresh, fresh, (size, cells)) if fresh else np.ones((size, cells))
    expected = np.broadcast_to(6.0 * share, (size, cells))
    residual = rng.poisson(expected * whole * own) - expected
    found = persistence(
        (residual**2).sum(axis=1), (expected**2).sum(axis=1), residual.sum(axis=1), expected.sum(axis=1)
    )
    assert found.share == pytest.approx(lasting, abs=0.12)
    assert found.concentration == pytest.approx(np.sum(share**2), abs=1e-9)


@given(mean=st.floats(0.02, 30.0), over=st.floats(0.0, 3.0), share=st.sampled_from([0.5, 0.8, 0.95]))
@settings(max_examples=40, deadline=None)
def test_a_right_distribution_is_covered_exactly(mean: float, over: float, share: float) -> None:
    """Weighed by the chances of the outcomes, coverage is the share itself, also far below one passenger."""
    outcomes = np.arange(0, 4000).astype(float)
    one = Demand.of([mean], [np.sqrt(mean + over * mean**2)])
    chance = -np.diff(one.survivor(np.arange(0, 4001)[:, None])[:, 0])
    many = Demand.of(np.full(4000, mean), np.full(4000, one.deviation[0]))
    assert chance @ coverage(many, outcomes, share=share) == pytest.approx(share, abs=1e-6)


def test_wrong_distributions_are_told() -> None:
    rng = np.random.default_rng(7)
    counts = rng.negative_binomial(1.0, 1 / 6.0, 5000).astype(float)
    right = Demand.of(np.full(5000, 5.0), np.full(5000, np.sqrt(30.0)))
    assert coverage(right, counts).mean() == pytest.approx(0.8, abs=0.015)
    narrow = Demand.of(np.full(5000, 5.0), np.full(5000, np.sqrt(5.0)))
    assert coverage(narrow, counts).mean() < 0.6
    wide = Demand.of(np.full(5000, 5.0), np.full(5000, np.sqrt(120.0)))
    assert coverage(wide, counts).mean() > 0.85
    high = Demand.of(np.full(5000, 10.0), np.full(5000, np.sqrt(30.0)))
    assert coverage(high, counts).mean() < 0.7


def test_lower_bounds_count_for_what_they_may_have_been() -> None:
    rng = np.random.default_rng(8)
    demand = rng.poisson(6.0, 20_000)
    limit = rng.integers(2, 12, 20_000)
    law = Demand.of(np.full(20_000, 6.0), np.full(20_000, np.sqrt(6.0)))
    seen = np.minimum(demand, limit).astype(float)
    assert coverage(law, seen, demand >= limit).mean() == pytest.approx(0.8, abs=0.015)
    assert coverage(law, np.zeros(20_000), np.ones(20_000, dtype=bool)).mean() == pytest.approx(0.8, abs=1e-9)


def test_shares_and_shapes_out_of_range_are_refused() -> None:
    law = Demand.of([1.0], [1.0])
    with pytest.raises(ValueError, match="share"):
        coverage(law, np.zeros(1), share=1.0)
    with pytest.raises(ValueError, match="outcome"):
        coverage(law, np.zeros(2))
