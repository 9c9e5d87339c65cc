"""The optimal nested levels against enumeration of every policy and against known special cases."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from heuristics import emsr_b, littlewood_level, optimal_levels
from network.demand import Demand


def revenue(fare: list[float], mean: list[float], levels: tuple[int, ...], capacity: int) -> float:
    """Expected revenue of nested levels, low fares first, by enumeration of the demands."""
    outcomes = range(capacity + 1)
    total = 0.0
    for demand in product(outcomes, repeat=len(fare)):
        chance = 1.0
        for d, m in zip(demand, mean, strict=True):
            # The last outcome stands for all demand of at least the capacity.
            chance *= stats.poisson.pmf(d, m) if d < capacity else stats.poisson.sf(d - 1, m)
        left, earned = capacity, 0.0
        for j in reversed(range(len(fare))):
            sold = min(demand[j], max(left - (levels[j - 1] if j else 0), 0))
            left, earned = left - sold, earned + sold * fare[j]
        total += chance * earned
    return total


@pytest.mark.parametrize(
    ("fare", "mean"),
    [([100.0, 60.0, 20.0], [1.0, 1.5, 4.0]), ([100.0, 90.0, 30.0], [2.0, 0.7, 3.0])],
)
def test_no_policy_of_nested_levels_earns_more(fare: list[float], mean: list[float]) -> None:
    capacity = 4
    best = optimal_levels(fare, Demand.of(mean, np.sqrt(mean)), capacity)
    policies = [p for p in product(range(capacity + 1), repeat=2) if p[0] <= p[1]]
    earned = {p: revenue(fare, mean, p, capacity) for p in policies}
    assert best.value[-1] == pytest.approx(max(earned.values()), rel=1e-9)
    assert earned[tuple(best.levels.astype(int))] == pytest.approx(max(earned.values()), rel=1e-9)


@given(
    word=st.sampled_from(["poisson", "negative_binomial", "gamma", "normal"]),
    mean=st.floats(0.5, 40),
    low=st.floats(5, 95),
)
@settings(deadline=None, max_examples=50)
def test_two_classes_give_littlewood_in_whole_seats(word: str, mean: float, low: float) -> None:
    demand = Demand.of([mean, 20.0], [(1.5 * mean) ** 0.5, 6.0], word)
    ours = optimal_levels([100.0, low], demand, 90, family=word).levels[0]
    assert ours == min(np.floor(littlewood_level(100.0, low, demand.take([0]))[0]), 90)


@pytest.mark.parametrize("word", ["gamma", "normal"])
def test_finer_steps_come_to_the_real_level(word: str) -> None:
    demand = Demand.of([20.0, 30.0], [6.0, 8.0], word)
    level = littlewood_level(100.0, 45.0, demand.take([0]))[0]
    for step in (1.0, 0.25, 0.02):
        ours = optimal_levels([100.0, 45.0], demand, 40, step).levels[0]
        assert 0 <= level - ours < step


def test_discrete_demand_is_the_same_at_any_step() -> None:
    demand = Demand.of([5.0, 9.0, 6.0], np.sqrt([5.0, 18.0, 6.0]))
    whole = optimal_levels([90.0, 70.0, 20.0], demand, 25)
    finer = optimal_levels([90.0, 70.0, 20.0], demand, 25, step=0.25)
    np.testing.assert_allclose(finer.value, whole.value, rtol=1e-12)
    np.testing.assert_allclose(np.round(finer.levels), whole.levels)


def test_one_class_sells_its_demand() -> None:
    demand = Demand.of([12.0], [np.sqrt(12.0)])
    best = optimal_levels([50.0], demand, 20)
    np.testing.assert_allclose(best.value, 50 * demand.expected_sales(np.arange(21)[:, None])[:, 0], rtol=1e-12)
    assert best.levels.shape == (0,)


def test_value_rises_by_less_and_less() -> None:
    mean = np.array([15.0, 40.0, 50.0, 55.0, 120.0])
    value = optimal_levels([100, 60, 40, 35, 15], Demand.of(mean, np.sqrt(2 * mean)), 300).value
    gain = np.diff(value)
    assert value.shape == (301,)
    assert value[0] == 0
    assert np.all(gain >= 0)
    assert np.all(np.diff(gain) <= 1e-9)


def test_equal_fares_are_one_class_in_any_order() -> None:
    mean = np.array([6.0, 9.0, 4.0, 20.0])
    fare = np.array([100.0, 60.0, 60.0, 20.0])
    one = optimal_levels(fare, Demand.of(mean, np.sqrt(mean)), 40)
    other = optimal_levels(fare, Demand.of(mean[[0, 2, 1, 3]], np.sqrt(mean[[0, 2, 1, 3]])), 40)
    merged = optimal_levels(fare[[0, 1, 3]], Demand.of([6.0, 13.0, 20.0], np.sqrt([6.0, 13.0, 20.0])), 40)
    for found in (one, other):
        np.testing.assert_allclose(found.value, merged.value, rtol=1e-12)
        np.testing.assert_array_equal(found.levels, merged.levels[[0, 0, 1]])


def test_currency_does_not_matter() -> None:
    mean = np.array([6.0, 9.0, 20.0])
    demand = Demand.of(mean, np.sqrt(mean))
    one, scaled = (optimal_levels(np.array([9.0, 5.0, 2.0]) * s, demand, 40) for s in (1, 1000))
    np.testing.assert_array_equal(one.levels, scaled.levels)
    np.testing.assert_allclose(scaled.value, 1000 * one.value, rtol=1e-12)


def test_levels_of_emsr_b_never_earn_more() -> None:
    mean = [3.0, 2.0, 4.0]
    fare = [100.0, 70.0, 40.0]
    demand = Demand.of(mean, np.sqrt(mean))
    levels = tuple(emsr_b(fare, demand).astype(int))
    assert revenue(fare, mean, levels, 5) <= optimal_levels(fare, demand, 5).value[-1] * (1 + 1e-12)


def test_no_seats_and_wrong_arguments() -> None:
    demand = Demand.of([3.0, 2.0], [1.7, 1.4])
    nothing = optimal_levels([9.0, 5.0], demand, 0)
    assert nothing.value.tolist() == [0.0]
    assert nothing.levels.tolist() == [0.0]
    with pytest.raises(ValueError, match="capacity"):
        optimal_levels([9.0, 5.0], demand, -1)
    for step in (0.0, 0.3, -1.0, 2.0):
        with pytest.raises(ValueError, match="step"):
            optimal_levels([9.0, 5.0], demand, 5, step=step)
    with pytest.raises(ValueError, match="best first"):
        optimal_levels([5.0, 9.0], demand, 5)
