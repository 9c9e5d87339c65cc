"""Virtual classes against every possible cut, and their place in leg control."""

from __future__ import annotations

from collections.abc import Callable
from itertools import combinations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from heuristics import LegControl, leg_products, leg_protection, virtual_classes
from heuristics.ladder import Ladder
from network.model import Network

Build = Callable[..., Network]


def variance_within(fare: np.ndarray, weight: np.ndarray, cuts: tuple[int, ...]) -> float:
    """Demand-weighted squares about the class means, summed."""
    total = 0.0
    for part in np.split(np.arange(len(fare)), list(cuts)):
        centre = np.average(fare[part], weights=weight[part])
        total += float(np.sum(weight[part] * (fare[part] - centre) ** 2))
    return total


def drawn_ladder(rng: np.random.Generator, sizes: list[int]) -> Ladder:
    fares = [np.sort(rng.uniform(20, 400, n))[::-1] + np.arange(n)[::-1] for n in sizes]
    total = sum(sizes)
    start = np.concatenate([[0], np.cumsum(sizes)])
    mean = rng.gamma(0.6, 3.0, total) + 1e-3
    return Ladder(start, np.concatenate([*fares, []]), mean, mean * 1.5)


@given(
    seed=st.integers(0, 100_000),
    sizes=st.lists(st.integers(0, 9), min_size=1, max_size=5),
    classes=st.integers(1, 5),
)
@settings(deadline=None, max_examples=120)
def test_no_other_cut_has_less_variance(seed: int, sizes: list[int], classes: int) -> None:
    ladder = drawn_ladder(np.random.default_rng(seed), sizes)
    _, step = virtual_classes(ladder, classes)
    for leg, size in enumerate(sizes):
        if size == 0:
            continue
        rows = slice(ladder.leg_start[leg], ladder.leg_start[leg + 1])
        fare, weight = ladder.fare[rows], ladder.mean[rows]
        cuts = tuple(np.flatnonzero(np.diff(step[rows])) + 1)
        assert len(cuts) == min(classes, size) - 1
        every = [variance_within(fare, weight, c) for c in combinations(range(1, size), len(cuts))]
        ours = variance_within(fare, weight, cuts)
        assert ours <= min(every) + 1e-9 * np.sum(weight * fare**2)


def test_legs_are_cut_alike_alone_and_in_a_crowd() -> None:
    rng = np.random.default_rng(4)
    sizes = [700, 1, 0, 350, 699]
    crowd = drawn_ladder(rng, sizes)
    crowd_step = virtual_classes(crowd, 6)[1]
    for leg, size in enumerate(sizes):
        rows = slice(crowd.leg_start[leg], crowd.leg_start[leg + 1])
        alone = Ladder(np.array([0, size]), crowd.fare[rows], crowd.mean[rows], crowd.variance[rows])
        step = virtual_classes(alone, 6)[1]
        np.testing.assert_array_equal(step, crowd_step[rows] - crowd_step[rows][:1])


def test_classes_hold_all_demand_at_its_mean_fare() -> None:
    ladder = drawn_ladder(np.random.default_rng(8), [40, 25])
    classes, step = virtual_classes(ladder, 4)
    assert classes.leg_start.tolist() == [0, 4, 8]
    for k in range(8):
        members = step == k
        assert classes.mean[k] == pytest.approx(ladder.mean[members].sum())
        assert classes.variance[k] == pytest.approx(ladder.variance[members].sum())
        mean_fare = np.average(ladder.fare[members], weights=ladder.mean[members])
        assert classes.fare[k] == pytest.approx(mean_fare, rel=1e-9)
    assert np.all(np.diff(classes.fare)[[0, 1, 2, 4, 5, 6]] < 0)


def test_fares_in_clumps_are_cut_between_the_clumps() -> None:
    fare = np.array([203.0, 200.0, 198.0, 101.0, 100.0, 51.0, 50.0, 49.0])
    ladder = Ladder(np.array([0, 8]), fare, np.full(8, 2.0), np.full(8, 2.0))
    assert virtual_classes(ladder, 3)[1].tolist() == [0, 0, 0, 1, 1, 2, 2, 2]


def test_steps_without_demand_join_a_neighbour() -> None:
    fare = np.array([200.0, 199.0, 101.0, 100.0])
    mean = np.array([5.0, 0.0, 0.0, 5.0])
    assert virtual_classes(Ladder(np.array([0, 4]), fare, mean, mean), 2)[1].tolist() == [0, 0, 1, 1]
    nobody = np.zeros(4)
    assert virtual_classes(Ladder(np.array([0, 4]), fare, nobody, nobody), 2)[1].tolist() == [0, 0, 1, 1]


def test_with_a_class_for_every_fare_nothing_changes(build: Build) -> None:
    rows = [(300, 4, 2), (200, 6, 3), (120, 9, 3), (70, 20, 5)]
    network = build([25, 30], [[0], [0, 1]], [rows, rows])
    products = leg_products(network, [50.0, 30.0])
    plain, classed = (
        leg_protection(products, network.demand, network.remaining, LegControl(virtual_classes=k)) for k in (None, 8)
    )
    np.testing.assert_array_equal(plain.booking_limit, classed.booking_limit)
    np.testing.assert_allclose(plain.protection, classed.protection, rtol=1e-12)
    np.testing.assert_allclose(plain.seat_value, classed.seat_value, rtol=1e-12)


def test_one_class_is_first_come_first_served(build: Build) -> None:
    network = build([25], [[0]], [[(300, 40, 9), (200, 6, 3), (120, 90, 9)]])
    found = leg_protection(
        leg_products(network, [0.0]), network.demand, network.remaining, LegControl(virtual_classes=1)
    )
    assert found.booking_limit.tolist() == [25, 25, 25]


def test_there_is_at_least_one_class() -> None:
    with pytest.raises(ValueError, match="at least 1"):
        virtual_classes(drawn_ladder(np.random.default_rng(1), [3]), 0)
