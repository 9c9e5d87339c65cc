"""Displacement-adjusted EMSR-b: Littlewood on two classes, and the properties of its seat values."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from heuristics import (
    LegControl,
    LegProducts,
    LegProtection,
    emsr_b,
    leg_products,
    leg_protection,
    littlewood_level,
    seat_value_curve,
)
from network.errors import SettingError
from network.model import Network

Build = Callable[..., Network]
WORDS = ["poisson", "negative_binomial", "gamma", "normal"]
OPTIONS = st.sampled_from([LegControl(), *(LegControl(w) for w in WORDS), LegControl(virtual_classes=3)])


def one_leg(build: Build, rows: list[tuple[float, float, float]], capacity: int, family: str) -> LegProtection:
    """Control of a single leg at full fares."""
    network = build([capacity], [[0]], [rows], family)
    return leg_protection(leg_products(network, [0.0]), network.demand, network.remaining, LegControl(family))


def drawn(build: Build, seed: int) -> tuple[Network, LegProducts]:
    """Three legs; paths, fares (some alike), demand (some none), seats and bid prices drawn."""
    rng = np.random.default_rng(seed)
    paths = [[0], [1], [0, 1], [1, 2], [0, 1, 2]]
    products = []
    for _ in paths:
        fares = np.sort(rng.choice([30, 45, 60, 80, 110, 150, 220, 300], 3))[::-1]
        mean = rng.choice([0.0, 0.02, 0.8, 4.0, 15.0], 3)
        deviation = np.sqrt(mean * rng.choice([0.4, 1.0, 1.5, 4.0], 3))
        products.append(list(zip(fares, mean, deviation, strict=True)))
    network = build(rng.integers(0, 40, 3), paths, products)
    return network, leg_products(network, rng.choice([0.0, 15.0, 44.0, 90.0], 3))


@given(
    word=st.sampled_from(WORDS),
    mean=st.floats(0.2, 90),
    dispersion=st.floats(0.2, 6),
    low=st.floats(1, 99),
    capacity=st.integers(0, 150),
)
@settings(deadline=None, max_examples=200)
def test_two_classes_are_littlewood(
    build: Build, word: str, mean: float, dispersion: float, low: float, capacity: int
) -> None:
    deviation = (dispersion * mean) ** 0.5
    found = one_leg(build, [(100, mean, deviation), (low, 30, 9)], capacity, word)
    high = build([1], [[0]], [[(100, mean, deviation)]], word).demand
    level = littlewood_level(100, low, high)[0]
    assert found.protection[0] == pytest.approx(min(level, capacity), rel=1e-9, abs=1e-9)
    assert found.protection[1] == capacity
    assert found.booking_limit.tolist() == [capacity, max(capacity - np.floor(level), 0)]


@pytest.mark.parametrize("word", WORDS)
def test_two_classes_decide_like_littlewood_at_every_seat(build: Build, word: str) -> None:
    mean, deviation = 12.0, 5.0
    theirs = {
        "poisson": stats.poisson(mean).sf(np.arange(40)),
        "negative_binomial": stats.nbinom(mean**2 / 13, 12 / 25).sf(np.arange(40)),
        "gamma": stats.gamma(mean**2 / 25, scale=25 / mean).sf(np.arange(1, 41)),
        "normal": stats.norm(mean, deviation).sf(np.arange(1, 41)),
    }[word]
    curve = seat_value_curve(one_leg(build, [(100, mean, deviation), (37, 30, 9)], 40, word), 0)
    for x in range(1, 41):
        found = one_leg(build, [(100, mean, deviation), (37, 30, 9)], x, word)
        # Littlewood (1972): the last of x seats goes to the low fare iff it reaches f_high P(D >= x).
        accept = 100 * theirs[x - 1] <= 37
        assert found.open.tolist() == [True, accept]
        assert (curve[x - 1] <= 37) == accept
        assert accept or curve[x - 1] == pytest.approx(100 * theirs[x - 1], rel=1e-9)


@given(seed=st.integers(0, 100_000), options=OPTIONS)
@settings(deadline=None, max_examples=150)
def test_open_is_adjusted_fare_at_least_the_seat_value(build: Build, seed: int, options: LegControl) -> None:
    network, products = drawn(build, seed)
    found = leg_protection(products, network.demand, network.remaining, options)
    fare = products.adjusted_fare
    if options.virtual_classes is not None:
        # A virtual class answers as one, at its mean fare.
        fare = np.where(found.step >= 0, found.joint.ladder.fare[found.step], fare)
    worth = found.step >= 0
    np.testing.assert_array_equal(worth, products.adjusted_fare > 1e-6)
    stands = network.remaining[products.leg] > 0
    enough = fare >= found.seat_value[products.leg]
    np.testing.assert_array_equal(found.open, worth & stands & enough)


@given(seed=st.integers(0, 100_000), options=OPTIONS)
@settings(deadline=None, max_examples=150)
def test_seat_value_falls_with_seats_and_curve_and_control_agree(build: Build, seed: int, options: LegControl) -> None:
    network, products = drawn(build, seed)
    found = leg_protection(products, network.demand, network.remaining, options)
    for leg in range(3):
        curve = seat_value_curve(found, leg)
        assert curve.shape == (network.remaining[leg],)
        assert np.all(curve >= 0)
        assert np.all(np.diff(curve) <= 0)
        for x in (0, 1, 5, 11):
            fewer = np.minimum(network.remaining, x)
            value = leg_protection(products, network.demand, fewer, options).seat_value[leg]
            if len(curve):
                assert value == pytest.approx(curve[max(fewer[leg], 1) - 1], rel=1e-12, abs=1e-15)


@given(seed=st.integers(0, 100_000), options=OPTIONS)
@settings(deadline=None, max_examples=100)
def test_levels_and_limits_are_nested(build: Build, seed: int, options: LegControl) -> None:
    network, products = drawn(build, seed)
    found = leg_protection(products, network.demand, network.remaining, options)
    for leg in range(3):
        rows = slice(products.leg_start[leg], products.leg_start[leg + 1])
        seats = network.remaining[leg]
        protection, limit, step = found.protection[rows], found.booking_limit[rows], found.step[rows]
        assert np.all((protection >= 0) & (protection <= seats))
        assert np.all(np.diff(protection) >= 0)
        assert np.all((limit >= 0) & (limit <= seats))
        assert np.all(np.diff(limit) <= 0)
        assert np.all(limit[step < 0] == 0)
        if np.any(step >= 0):
            assert limit[0] == seats
            assert protection[-1] == seats
        for members in (step == s for s in np.unique(step)):
            assert np.ptp(limit[members]) == 0
            assert np.ptp(protection[members]) == 0


@given(seed=st.integers(0, 100_000))
@settings(deadline=None, max_examples=60)
def test_every_leg_is_emsr_b_over_its_adjusted_fares(build: Build, seed: int) -> None:
    network, products = drawn(build, seed)
    found = leg_protection(products, network.demand, np.full(3, 500))
    for leg in range(3):
        rows = np.arange(products.leg_start[leg], products.leg_start[leg + 1])
        rows = rows[products.adjusted_fare[rows] > 1e-6]
        if rows.size:
            demand = network.demand.take(products.product[rows])
            level = emsr_b(products.adjusted_fare[rows], demand)
            borders = np.flatnonzero(np.diff(found.step[rows]))
            np.testing.assert_allclose(found.protection[rows[borders]], np.minimum(level[borders], 500), rtol=1e-9)


@given(seed=st.integers(0, 100_000), options=OPTIONS)
@settings(deadline=None, max_examples=60)
def test_order_of_itineraries_does_not_matter(build: Build, seed: int, options: LegControl) -> None:
    rng = np.random.default_rng(seed)
    paths = [[0], [0, 1], [1], [0, 1]]
    rows = [
        [(float(f), float(m), float(m)) for f, m in zip((90, 60, 30), rng.uniform(0, 9, 3), strict=True)] for _ in paths
    ]
    order = list(rng.permutation(4))
    price = np.array([12.0, 30.0])
    limits, values = [], []
    for turn in (list(range(4)), order):
        network = build([14, 9], [paths[i] for i in turn], [rows[i] for i in turn])
        products = leg_products(network, price)
        found = leg_protection(products, network.demand, network.remaining, options)
        itinerary = np.array(turn)[network.product_itinerary[products.product]]
        name = list(zip(products.leg, itinerary, network.product_class[products.product], strict=True))
        limits.append(dict(zip(name, found.booking_limit.tolist(), strict=True)))
        values.append(found.seat_value)
    assert limits[0] == limits[1]
    np.testing.assert_allclose(values[0], values[1], rtol=1e-9)


@given(seed=st.integers(0, 100_000), options=OPTIONS, scale=st.sampled_from([0.01, 0.25, 100.0]))
@settings(deadline=None, max_examples=60)
def test_currency_does_not_matter(build: Build, seed: int, options: LegControl, scale: float) -> None:
    network, products = drawn(build, seed)
    scaled = LegProducts(
        products.leg_start, products.product, products.adjusted_fare * scale, products.tolerance * scale
    )
    one, other = (leg_protection(p, network.demand, network.remaining, options) for p in (products, scaled))
    np.testing.assert_array_equal(one.booking_limit, other.booking_limit)
    np.testing.assert_allclose(one.protection, other.protection, rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(other.seat_value, scale * one.seat_value, rtol=1e-9, atol=1e-12)


@given(seed=st.integers(0, 100_000))
@settings(deadline=None, max_examples=40)
def test_demand_at_no_adjusted_fare_counts_for_nothing(build: Build, seed: int) -> None:
    network, products = drawn(build, seed)
    found = leg_protection(products, network.demand, network.remaining)
    keep = products.adjusted_fare > 1e-6
    start = np.concatenate([[0], np.cumsum(keep)])[products.leg_start]
    cut = LegProducts(start, products.product[keep], products.adjusted_fare[keep], products.tolerance)
    alone = leg_protection(cut, network.demand, network.remaining)
    np.testing.assert_array_equal(alone.seat_value, found.seat_value)
    np.testing.assert_array_equal(alone.booking_limit, found.booking_limit[keep])


def test_fares_that_rounding_parts_open_together_at_their_seat_value(build: Build) -> None:
    # On the first leg 200.3 - 0.2 stands a rounding error above 200.1.
    network = build([9, 9], [[0], [0, 1]], [[(200.1, 30, 5)], [(200.3, 30, 5)]])
    products = leg_products(network, [0.0, 0.2])
    found = leg_protection(products, network.demand, network.remaining)
    fare = products.adjusted_fare[:2]
    assert fare[0] > fare[1]
    assert found.booking_limit[:2].tolist() == [9, 9]
    assert np.all(fare >= found.seat_value[0])


def test_a_leg_that_nobody_wants_is_worth_nothing(build: Build) -> None:
    network = build([5, 7, 4], [[0], [1]], [[(90, 0, 0), (40, 0, 0)], [(80, 3, 2)]])
    found = leg_protection(leg_products(network, np.zeros(3)), network.demand, network.remaining)
    assert found.seat_value[[0, 2]].tolist() == [0, 0]
    assert seat_value_curve(found, 0).tolist() == [0] * 5
    assert seat_value_curve(found, 2).tolist() == [0] * 4
    assert found.booking_limit.tolist() == [5, 5, 7]


def test_with_no_seat_left_all_is_closed_and_the_first_seat_is_valued(build: Build) -> None:
    rows = [(100, 8, 3), (60, 9, 4)]
    none, one = (one_leg(build, rows, seats, "auto") for seats in (0, 1))
    assert not none.open.any()
    assert none.booking_limit.tolist() == [0, 0]
    assert none.protection.tolist() == [0, 0]
    assert none.seat_value == one.seat_value
    assert none.seat_value[0] > 60


def test_wrong_arguments_are_refused(build: Build) -> None:
    network = build([5], [[0]], [[(90, 1, 1)]])
    products = leg_products(network, [0.0])
    for remaining in ([1, 2], [-1], [1.5]):
        with pytest.raises(ValueError, match="remaining seats"):
            leg_protection(products, network.demand, remaining)
    with pytest.raises(ValueError, match="demand has 0 products"):
        leg_protection(products, network.demand.take([]), [5])
    with pytest.raises(ValueError, match="no leg 3"):
        seat_value_curve(leg_protection(products, network.demand, [5]), 3)
    with pytest.raises(SettingError, match="family"):
        LegControl(family="weibull")
    with pytest.raises(SettingError, match="virtual classes"):
        LegControl(virtual_classes=0)
