"""EMSR-a and EMSR-b as properties, and against their formulas written out class by class on scipy.stats."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from heuristics import emsr_a, emsr_b, littlewood_level
from network.demand import Demand

WORDS = ["poisson", "negative_binomial", "gamma", "normal"]


@st.composite
def legs(draw: st.DrawFn) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Falling fares, at least one unit apart, with means and deviations."""
    n = draw(st.integers(2, 7))
    gaps = draw(st.lists(st.floats(1, 200), min_size=n, max_size=n))
    mean = np.array(draw(st.lists(st.floats(0.1, 80), min_size=n, max_size=n)))
    spread = np.array(draw(st.lists(st.floats(1.1, 5), min_size=n, max_size=n)))
    return np.cumsum(gaps)[::-1], mean, np.sqrt(spread * mean)


@given(leg=legs())
@settings(deadline=None)
def test_emsr_b_by_its_formula(leg: tuple[np.ndarray, np.ndarray, np.ndarray]) -> None:
    fare, mean, deviation = leg
    expected = []
    for j in range(1, len(fare)):
        m, s = mean[:j].sum(), np.sqrt(np.sum(deviation[:j] ** 2))
        mean_fare = np.sum(fare[:j] * mean[:j]) / m
        expected.append(max(stats.norm.ppf(1 - fare[j] / mean_fare, m, s), 0.0))
    ours = emsr_b(fare, Demand.of(mean, deviation, "normal"), "normal")
    np.testing.assert_allclose(ours, np.maximum.accumulate(expected), rtol=1e-9, atol=1e-9)


@given(leg=legs())
@settings(deadline=None)
def test_emsr_a_by_its_formula(leg: tuple[np.ndarray, np.ndarray, np.ndarray]) -> None:
    fare, mean, deviation = leg
    expected = [
        sum(max(stats.norm.ppf(1 - fare[j] / fare[i], mean[i], deviation[i]), 0.0) for i in range(j))
        for j in range(1, len(fare))
    ]
    ours = emsr_a(fare, Demand.of(mean, deviation, "normal"))
    np.testing.assert_allclose(ours, np.maximum.accumulate(expected), rtol=1e-9, atol=1e-9)


@given(leg=legs(), word=st.sampled_from(WORDS))
@settings(deadline=None)
def test_both_begin_with_littlewood_and_rise(leg: tuple[np.ndarray, np.ndarray, np.ndarray], word: str) -> None:
    fare, mean, deviation = leg
    demand = Demand.of(mean, deviation, word)
    first = littlewood_level(fare[0], fare[1], demand.take([0]))
    for levels in (emsr_a(fare, demand, word), emsr_b(fare, demand, word)):
        assert levels.shape == (len(fare) - 1,)
        np.testing.assert_allclose(levels[:1], first, rtol=1e-9, atol=1e-9)
        assert np.all(np.diff(levels) >= 0)


@given(leg=legs(), word=st.sampled_from(WORDS), scale=st.sampled_from([0.01, 0.5, 4.0, 1024.0]))
@settings(deadline=None)
def test_currency_does_not_matter(leg: tuple[np.ndarray, np.ndarray, np.ndarray], word: str, scale: float) -> None:
    fare, mean, deviation = leg
    demand = Demand.of(mean, deviation, word)
    for rule in (emsr_a, emsr_b):
        np.testing.assert_allclose(rule(fare * scale, demand, word), rule(fare, demand, word), rtol=1e-9)


@pytest.mark.parametrize("rule", [emsr_a, emsr_b])
@pytest.mark.parametrize("order", [[0, 1, 2, 3], [0, 2, 1, 3]])
def test_equal_fares_are_one_class(rule, order: list[int]) -> None:
    fare, mean = np.array([100.0, 60.0, 60.0, 15.0]), np.array([15.0, 40.0, 12.0, 120.0])
    levels = rule(fare, Demand.of(mean[order], np.sqrt(mean[order])))
    merged = rule(fare[[0, 1, 3]], Demand.of([15.0, 52.0, 120.0], np.sqrt([15.0, 52.0, 120.0])))
    np.testing.assert_allclose(levels, merged[[0, 0, 1]], rtol=1e-12)


@pytest.mark.parametrize("rule", [emsr_a, emsr_b])
def test_fares_that_rounding_splits_are_still_equal(rule) -> None:
    demand = Demand.of([15.0, 40.0, 12.0], np.sqrt([15.0, 40.0, 12.0]))
    np.testing.assert_array_equal(rule([60.0, 60.0 - 1e-12, 20.0], demand), rule([60.0, 60.0, 20.0], demand))


def test_best_classes_of_equal_fare_face_no_protection() -> None:
    demand = Demand.of([15.0, 40.0, 12.0], np.sqrt([15.0, 40.0, 12.0]))
    assert emsr_b([60.0, 60.0, 20.0], demand)[0] == 0.0


def test_classes_without_demand_protect_nothing() -> None:
    demand = Demand.of([0.0, 0.0, 12.0, 3.0], [0.0, 0.0, 2.0, 1.0])
    assert emsr_b([90.0, 80.0, 70.0, 60.0], demand)[:2].tolist() == [0.0, 0.0]
    assert emsr_a([90.0, 80.0, 70.0, 60.0], demand)[:2].tolist() == [0.0, 0.0]


def test_one_class_has_no_level() -> None:
    assert emsr_a([10.0], Demand.of([3.0], [1.0])).shape == (0,)
    assert emsr_b([10.0], Demand.of([3.0], [1.0])).shape == (0,)


@pytest.mark.parametrize("rule", [emsr_a, emsr_b])
@pytest.mark.parametrize("fare", [[1.0, 2.0], [2.0], [2.0, np.nan], [2.0, 0.0], [[2.0, 1.0]]])
def test_wrong_fares_are_refused(rule, fare: list) -> None:
    with pytest.raises(ValueError, match="fare"):
        rule(fare, Demand.of([1.0, 1.0], [1.0, 1.0]))
