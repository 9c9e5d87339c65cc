"""Displacement-adjusted fares against their definition written out product by product."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from heuristics import leg_products
from network.model import Network

Build = Callable[..., Network]


def drawn(build: Build, seed: int) -> tuple[Network, np.ndarray]:
    """A network of four legs with paths of one to three of them, and bid prices."""
    rng = np.random.default_rng(seed)
    paths = [list(rng.permutation(4)[: rng.integers(1, 4)]) for _ in range(rng.integers(1, 9))]
    products = [
        [(float(fare), 3.0, 2.0) for fare in np.sort(rng.integers(20, 400, rng.integers(1, 4)))[::-1]] for _ in paths
    ]
    return build([10, 20, 30, 40], paths, products), rng.uniform(0, 150, 4)


@given(seed=st.integers(0, 10_000))
@settings(deadline=None, max_examples=60)
def test_every_leg_has_its_products_with_the_fare_left_by_the_other_legs(build: Build, seed: int) -> None:
    network, price = drawn(build, seed)
    ranked = leg_products(network, price)
    for leg in range(4):
        expected = {}
        for j in range(network.n_products):
            i = network.product_itinerary[j]
            path = network.path_leg[network.path_start[i] : network.path_start[i + 1]]
            if leg in path:
                expected[j] = network.fare[j] - sum(price[other] for other in path if other != leg)
        rows = slice(ranked.leg_start[leg], ranked.leg_start[leg + 1])
        found = dict(zip(ranked.product[rows].tolist(), ranked.adjusted_fare[rows].tolist(), strict=True))
        assert found == pytest.approx(expected, rel=1e-12, abs=1e-9)
        assert len(found) == rows.stop - rows.start
        assert np.all(np.diff(ranked.adjusted_fare[rows]) <= 0)
        assert ranked.rank[rows].tolist() == list(range(1, len(found) + 1))
        assert np.all(ranked.leg[rows] == leg)


def test_without_bid_prices_fares_are_full(build: Build) -> None:
    network = build([10, 10], [[0], [0, 1]], [[(100, 1, 1)], [(150, 1, 1), (90, 1, 1)]])
    ranked = leg_products(network, np.zeros(2))
    assert ranked.product.tolist() == [1, 0, 2, 1, 2]
    assert ranked.adjusted_fare.tolist() == [150, 100, 90, 150, 90]


def test_equal_adjusted_fares_are_grouped_though_rounding_parts_them(build: Build) -> None:
    # 200.3 - 0.2 is not 200.1 in binary.
    network = build([9, 9], [[0], [0, 1], [0]], [[(200.1, 1, 1)], [(200.3, 1, 1)], [(50.0, 1, 1)]])
    ranked = leg_products(network, [0.0, 0.2])
    first = ranked.adjusted_fare[:2]
    assert first[0] != first[1]
    assert ranked.group[:3].tolist() == [0, 0, 1]
    assert ranked.group[3] == 2


def test_a_leg_without_products_has_no_rows(build: Build) -> None:
    network = build([9, 9, 9], [[0], [2]], [[(10, 1, 1)], [(20, 1, 1)]])
    assert leg_products(network, np.zeros(3)).leg_start.tolist() == [0, 1, 1, 2]


@pytest.mark.parametrize("price", [[1.0], [1.0, np.nan], [1.0, -1.0], [np.inf, 1.0], [[1.0, 1.0]]])
def test_wrong_bid_prices_are_refused(build: Build, price: list) -> None:
    network = build([9, 9], [[0, 1]], [[(10, 1, 1)]])
    with pytest.raises(ValueError, match="bid price"):
        leg_products(network, price)
