"""Demand against scipy.stats, summation and numerical integration."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate, stats

from network.demand import Demand, Family
from network.families import near_quantile

MEAN = np.array([0.004, 0.3, 1.0, 4.7, 27.3, 160.0])
WORDS = ["poisson", "negative_binomial", "gamma", "normal"]

means = st.floats(0.01, 300)
dispersions = st.floats(1.01, 12)


def reference(word: str, mean: float, deviation: float) -> object:
    """The frozen scipy.stats distribution of the same mean and deviation."""
    variance = deviation**2
    match word:
        case "poisson":
            return stats.poisson(mean)
        case "negative_binomial":
            return stats.nbinom(mean**2 / (variance - mean), mean / variance)
        case "gamma":
            return stats.gamma(mean**2 / variance, scale=variance / mean)
        case _:
            return stats.norm(mean, deviation)


def both(word: str, dispersion: float = 1.7) -> tuple[Demand, list]:
    deviation = np.sqrt(dispersion * MEAN)
    ours = Demand.of(MEAN, deviation, word)
    return ours, [reference(word, m, s) for m, s in zip(MEAN, deviation, strict=True)]


@pytest.mark.parametrize("word", WORDS)
def test_survivor_is_that_of_scipy(word: str) -> None:
    ours, theirs = both(word)
    k = np.array([1, 2, 3, 7, 30, 200])
    discrete = word in WORDS[:2]
    expected = np.array([r.sf(k - 1 if discrete else k) for r in theirs]).T
    np.testing.assert_allclose(ours.survivor(k[:, None]), expected, rtol=1e-9, atol=1e-300)


@pytest.mark.parametrize("word", WORDS)
def test_survivor_by_index_is_the_broadcast_one(word: str) -> None:
    ours, _ = both(word)
    mixed = Demand(
        np.tile(MEAN, 2),
        np.tile(ours.deviation, 2),
        np.concatenate([ours.family, np.full(len(MEAN), Family.POISSON)]).astype(np.int8),
    )
    index = np.array([11, 0, 5, 5, 2, 7, 3])
    k = np.array([1.0, 1, 150, 2.5, -1, 0, 3])
    expected = mixed.survivor(k[:, None])[np.arange(7), index]
    np.testing.assert_array_equal(mixed.survivor(k, index), expected)


@pytest.mark.parametrize("word", WORDS[:2])
def test_a_discrete_demand_reaches_a_fraction_when_it_reaches_the_next_whole_number(word: str) -> None:
    ours, _ = both(word)
    np.testing.assert_array_equal(ours.survivor([[0.2], [3.001], [4.0]]), ours.survivor([[1], [4], [4]]))


@pytest.mark.parametrize("word", WORDS)
def test_every_demand_reaches_nothing_and_none_reaches_infinity(word: str) -> None:
    ours, _ = both(word)
    np.testing.assert_array_equal(ours.survivor([[-3.0], [0.0]]), 1.0)
    np.testing.assert_array_equal(ours.survivor(np.inf), 0.0)


@given(word=st.sampled_from(WORDS), mean=means, dispersion=dispersions, p=st.floats(0.001, 0.999))
@settings(deadline=None)
def test_quantile_is_the_least_number_that_covers_p(word: str, mean: float, dispersion: float, p: float) -> None:
    deviation = (dispersion * mean) ** 0.5
    q = Demand.of([mean], [deviation], word).quantile(p)[0]
    theirs = reference(word, mean, deviation)
    if word in WORDS[:2]:
        assert q == np.floor(q) >= 0
        assert theirs.cdf(q) >= p * (1 - 1e-9)
        assert q == 0 or theirs.cdf(q - 1) < p * (1 + 1e-9)
    else:
        assert q == pytest.approx(max(theirs.ppf(p), 0.0), rel=1e-9, abs=1e-12)


@given(word=st.sampled_from(WORDS), mean=means, dispersion=dispersions, low=st.floats(0.01, 0.98))
@settings(deadline=None)
def test_seats_up_to_the_quantile_are_those_worth_more_than_the_ratio(
    word: str, mean: float, dispersion: float, low: float
) -> None:
    demand = Demand.of([mean], [(dispersion * mean) ** 0.5], word)
    q = demand.quantile(1 - low)[0]
    whole = np.floor(q)
    assert whole == 0 or demand.survivor(whole)[0] > low - 1e-9
    assert demand.survivor(whole + 1)[0] <= low + 1e-9


def test_quantile_at_the_ends() -> None:
    demand = Demand.of([3.0, 3.0, 3.0, 3.0], [2.0, 1.7320508, 0.0, 1.0])
    assert demand.quantile(0.0).tolist() == [0.0, 0.0, 0.0, 0.0]
    assert demand.quantile(1.0).tolist() == [np.inf, np.inf, 3.0, np.inf]


@pytest.mark.parametrize("word", WORDS[:2])
@pytest.mark.parametrize("y", [0, 1, 4, 4.25, 30, 170])
def test_expected_sales_sum_to_those_of_scipy(word: str, y: float) -> None:
    ours, theirs = both(word)
    d = np.arange(4000)
    expected = [np.sum(np.minimum(d, y) * r.pmf(d)) for r in theirs]
    np.testing.assert_allclose(ours.expected_sales(y), expected, rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize("word", WORDS[2:])
@pytest.mark.parametrize("y", [0, 0.5, 4.25, 30, 170])
def test_expected_sales_integrate_to_those_of_scipy(word: str, y: float) -> None:
    ours, theirs = both(word)
    # E[min(max(X, 0), y)] is the area below the survivor function from 0 to y.
    expected = [integrate.quad(r.sf, 0, y, points=[min(r.mean(), y)], limit=400, epsabs=1e-11)[0] for r in theirs]
    np.testing.assert_allclose(ours.expected_sales(y), expected, rtol=1e-7, atol=1e-9)


@pytest.mark.parametrize("word", WORDS)
def test_on_endless_seats_the_expected_demand_is_sold(word: str) -> None:
    ours, _ = both(word)
    np.testing.assert_array_equal(ours.expected_sales(np.inf), ours.expected)
    np.testing.assert_allclose(ours.expected_sales(1e5), ours.expected, rtol=1e-9)


def test_only_the_cut_normal_has_another_mean() -> None:
    for word in WORDS[:3]:
        ours, _ = both(word)
        np.testing.assert_array_equal(ours.expected, MEAN)
    ours, theirs = both("normal")
    expected = [r.expect(lambda x: x, lb=0, epsabs=1e-12) for r in theirs]
    np.testing.assert_allclose(ours.expected, expected, rtol=1e-6)
    assert np.all(ours.expected > MEAN - 1e-12)


@given(
    word=st.sampled_from(WORDS),
    mean=st.floats(0.0001, 400),
    dispersion=dispersions,
    tail=st.sampled_from([1e-6, 1e-3, 0.3, 0.5, 1.0]),
)
@settings(deadline=None)
def test_seats_end_where_the_survivor_function_of_scipy_falls_below_the_tail(
    word: str, mean: float, dispersion: float, tail: float
) -> None:
    deviation = (dispersion * mean) ** 0.5
    demand = Demand.of([mean, 0.0], [deviation, 0.0], word)
    k, none = demand.seats(tail)
    theirs = reference(word, mean, deviation)
    shift = 1 if word in WORDS[:2] else 0
    assert none == 0
    assert demand.seats(tail).dtype == np.int64
    assert k == 0 or theirs.sf(k - shift) >= tail * (1 - 1e-9)
    assert theirs.sf(k + 1 - shift) < tail * (1 + 1e-9)


def test_searches_start_next_to_the_quantile_of_scipy() -> None:
    rng = np.random.default_rng(5)
    mean, p = 10 ** rng.uniform(-1, 2.5, 2_000), rng.uniform(0.02, 0.9999, 2_000)
    for variance in (mean, mean * rng.uniform(1.05, 4, 2_000)):
        if variance is mean:
            theirs = stats.poisson.ppf(p, mean)
        else:
            theirs = stats.nbinom.ppf(p, mean**2 / (variance - mean), mean / variance)
        off = np.maximum(np.floor(near_quantile(p, mean, variance)), 0.0) - theirs
        assert np.mean((off == 0) | (off == -1)) > 0.97, "where two looks do"
        assert np.abs(off).max() <= 3


def test_seats_of_a_long_tail() -> None:
    # Geometric: P(D >= k) = (m / (1 + m))^k, so the last seat is a logarithm.
    mean = 50.0
    demand = Demand.of([mean], [np.sqrt(mean + mean**2)], "negative_binomial")
    assert demand.seats(1e-6)[0] == np.floor(np.log(1e-6) / np.log(mean / (1 + mean)))


@pytest.mark.parametrize("word", WORDS)
def test_samples_have_the_moments_and_the_whole_numbers_of_their_family(word: str) -> None:
    mean = np.array([6.0, 30.0, 0.0])
    deviation = np.array([3.0, 8.0, 0.0])
    size = 40_000
    draws = Demand.of(mean, deviation, word).sample(np.random.default_rng(7), size)
    assert draws.shape == (size, 3)
    assert np.all(draws >= 0)
    assert np.all(draws[:, 2] == 0)
    assert np.all(draws == np.floor(draws)) == (word in WORDS[:2])
    for i in range(2):
        theirs = reference(word, mean[i], deviation[i])
        # A limit of six standard errors of the proportion below each of these points.
        for point in np.asarray(theirs.ppf([0.1, 0.5, 0.9])):
            share = np.mean(draws[:, i] <= point)
            assert abs(share - theirs.cdf(point)) < 6 * 0.5 / np.sqrt(size)


def test_sampling_is_repeatable_and_independent() -> None:
    demand = Demand.of([20.0, 20.0, 20.0], [4.4, 9.0, 2.0])
    first, again = (demand.sample(np.random.default_rng(3), 5000) for _ in range(2))
    np.testing.assert_array_equal(first, again)
    correlation = np.corrcoef(first.T) - np.eye(3)
    assert np.max(np.abs(correlation)) < 6 / np.sqrt(5000)


@pytest.mark.parametrize(
    ("ratio", "family"),
    [
        (0.0, Family.NORMAL),
        (0.94, Family.NORMAL),
        (0.96, Family.POISSON),
        (1.0, Family.POISSON),
        (1.04, Family.POISSON),
        (1.06, Family.NEGATIVE_BINOMIAL),
        (9.0, Family.NEGATIVE_BINOMIAL),
    ],
)
def test_auto_compares_variance_with_mean(ratio: float, family: Family) -> None:
    assert Demand.of([25.0], [np.sqrt(25.0 * ratio)]).family[0] == family


def test_forced_families() -> None:
    poisson = Demand.of([5.0], [4.0], "poisson")
    assert poisson.survivor(3)[0] == pytest.approx(stats.poisson.sf(2, 5))
    assert poisson.variance[0] == 5.0
    narrow = Demand.of([5.0, 5.0], [1.0, np.sqrt(5.0)], "negative_binomial")
    assert narrow.family.tolist() == [Family.POISSON, Family.POISSON]


@pytest.mark.parametrize("word", ["auto", "gamma", "normal"])
def test_no_deviation_is_no_doubt(word: str) -> None:
    sure = Demand.of([4.5], [0.0], word)
    assert sure.survivor([[4.0], [4.5], [4.6]]).ravel().tolist() == [1.0, 1.0, 0.0]
    assert sure.quantile([[0.01], [0.99]]).ravel().tolist() == [4.5, 4.5]
    assert sure.expected_sales([[2.0], [9.0]]).ravel().tolist() == [2.0, 4.5]
    assert sure.seats().tolist() == [4]
    assert sure.sample(np.random.default_rng(1), 3).ravel().tolist() == [4.5, 4.5, 4.5]


@pytest.mark.parametrize("word", ["auto", *WORDS])
def test_no_mean_is_no_demand(word: str) -> None:
    none = Demand.of([0.0], [2.0], word)
    assert none.survivor(1)[0] == 0.0
    assert none.quantile(0.9)[0] == 0.0
    assert none.expected_sales(7)[0] == 0.0
    assert none.expected[0] == 0.0
    assert none.seats()[0] == 0


def test_take_keeps_the_order_asked_for() -> None:
    demand = Demand.of([1.0, 2.0, 3.0], [1.0, 3.0, 0.5])
    assert demand.take([2, 0]).mean.tolist() == [3.0, 1.0]
    assert demand.take(np.array([False, True, False])).family.tolist() == [Family.NEGATIVE_BINOMIAL]
    assert len(demand.take([])) == 0
    assert demand.take([]).survivor(1).shape == (0,)


@pytest.mark.parametrize(
    ("mean", "deviation"),
    [
        ([np.nan], [1.0]),
        ([1.0], [np.nan]),
        ([-1.0], [1.0]),
        ([1.0], [-1.0]),
        ([np.inf], [1.0]),
        ([1.0, 2.0], [1.0]),
        ([[1.0]], [[1.0]]),
    ],
)
def test_wrong_figures_are_refused(mean: list, deviation: list) -> None:
    with pytest.raises(ValueError, match=r"finite|shapes"):
        Demand.of(mean, deviation)


def test_wrong_arguments_are_refused() -> None:
    demand = Demand.of([1.0, 2.0], [1.0, 1.0])
    with pytest.raises(ValueError, match="unknown demand family"):
        Demand.of([1.0], [1.0], "weibull")
    with pytest.raises(ValueError, match="NaN"):
        demand.survivor(np.nan)
    with pytest.raises(ValueError, match="shapes differ"):
        demand.survivor([1.0, 2.0, 3.0], [0, 1])
    with pytest.raises(ValueError, match="between 0 and 1"):
        demand.quantile(1.1)
    with pytest.raises(ValueError, match="negative"):
        demand.expected_sales(-1)
    with pytest.raises(ValueError, match="tail"):
        demand.seats(0.0)
    with pytest.raises(ValueError, match="variance above its mean"):
        Demand(np.array([2.0]), np.array([1.0]), np.array([Family.NEGATIVE_BINOMIAL], dtype=np.int8))
    with pytest.raises(ValueError, match="none of Family"):
        Demand(np.array([2.0]), np.array([1.0]), np.array([9], dtype=np.int8))


def test_demands_cannot_be_changed() -> None:
    given_mean = np.array([1.0, 2.0])
    demand = Demand.of(given_mean, [1.0, 1.0])
    given_mean[0] = 99.0
    assert demand.mean[0] == 1.0
    for values in (demand.mean, demand.deviation, demand.family, demand.expected):
        with pytest.raises(ValueError, match="read-only"):
            values[0] = 5
