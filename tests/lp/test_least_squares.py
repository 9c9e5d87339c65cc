"""The shortest point against Lawson and Hanson's least distance programming, and bounds against points inside them."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import linprog, nnls
from scipy.sparse import csr_array

from lp.implied import implied_bounds
from lp.least_squares import least_norm
from network.arrays import FloatArray

MONEY = 1000.0


def drawn(seed: int, size: int, rows: int, jitter: float = 0.0) -> tuple[csr_array, FloatArray, FloatArray, FloatArray]:
    """Paths over prices with limits around a hidden point, which is returned last; a third are equations.

    Prices come in steps of 100, so that many limits are tight together; ``jitter`` moves them off each other.
    """
    rng = np.random.default_rng(seed)
    matrix = np.zeros((rows, size))
    for row in matrix:
        row[rng.choice(size, min(size, int(rng.integers(2, 4))), replace=False)] = 1.0
    hidden = rng.integers(0, 6, size) * 100.0
    noise = jitter * rng.uniform(-1.0, 1.0, (2, rows))
    kind = rng.integers(0, 3, rows)
    worth = matrix @ hidden
    low = np.where(kind == 1, 0.0, worth - np.abs(noise[0]) * (kind == 2))
    high = np.where(kind == 0, np.inf, worth + np.abs(noise[1]) * (kind == 2))
    return csr_array(matrix), low, high, hidden


def lawson_hanson(rows: csr_array, low: FloatArray, high: FloatArray) -> FloatArray:
    """Shortest p >= 0 within the limits: Lawson and Hanson (1974), Solving Least Squares Problems, chapter 23."""
    matrix, limited = rows.toarray(), np.isfinite(high)
    must = np.vstack([matrix, -matrix[limited], np.eye(matrix.shape[1])])
    bound = np.concatenate([low, -high[limited], np.zeros(matrix.shape[1])]) / MONEY
    target = np.zeros(matrix.shape[1] + 1)
    target[-1] = 1.0
    stacked = np.vstack([must.T, bound])
    residual = stacked @ nnls(stacked, target, maxiter=10_000)[0] - target
    return -residual[:-1] / residual[-1] * MONEY


@pytest.mark.parametrize("seed", range(40))
def test_the_shortest_point_is_that_of_least_distance_programming(seed: int) -> None:
    size = 2 + seed % 7
    rows, low, high, _ = drawn(seed, size, 1 + seed % 5)
    found = least_norm(rows, low, high, np.zeros(size), np.full(size, np.inf))
    np.testing.assert_allclose(found, lawson_hanson(rows, low, high), rtol=0, atol=1e-6 * MONEY)


@pytest.mark.parametrize("jitter", [0.0, 1e-13, 1e-9, 1e-6, 1e-3])
@pytest.mark.parametrize("seed", range(25))
def test_the_shortest_point_is_in_its_place_and_nothing_there_is_shorter(seed: int, jitter: float) -> None:
    """The shortest point p of a convex set is the one with ``p.q >= p.p`` for all its points q."""
    size = 3 + seed % 9
    rows, low, high, _ = drawn(100 + seed, size, 2 + seed % 8, jitter)
    found = least_norm(rows, low, high, np.zeros(size), np.full(size, np.inf))
    near = 1e-5
    assert np.all(found >= -near)
    assert np.all(rows @ found >= low - near)
    assert np.all(rows @ found <= high + near)
    matrix, limited = rows.toarray(), np.isfinite(high)
    least = linprog(
        found,
        A_ub=np.vstack([-matrix, matrix[limited]]),
        b_ub=np.concatenate([-low, high[limited]]) + near,
        bounds=(0, None),
    )
    assert least.fun >= found @ found - 1e-6 * MONEY**2


def test_many_prices_on_a_chain() -> None:
    # By hand: neighbours share 100 along a chain of 41 prices; p, 100 - p, p, ... with 21 p = 20 (100 - p).
    size = 41
    rows = csr_array(np.eye(size - 1, size) + np.eye(size - 1, size, 1))
    hundred = np.full(size - 1, 100.0)
    found = least_norm(rows, hundred, hundred, np.zeros(size), np.full(size, np.inf))
    p = 100 * 20 / 41
    np.testing.assert_allclose(found, np.where(np.arange(size) % 2 == 0, p, 100 - p), rtol=1e-9)


def test_bounds_that_meet_leave_nothing_to_choose() -> None:
    rows = csr_array(np.array([[1.0, 1.0, 0.0], [0.0, 1.0, 1.0]]))
    found = least_norm(
        rows, np.array([70.0, 0.0]), np.array([70.0, 90.0]), np.array([50.0, 0, 5]), np.array([50.0, 99, 99])
    )
    np.testing.assert_allclose(found, [50.0, 20.0, 5.0], rtol=1e-12)


@pytest.mark.parametrize("seed", range(30))
def test_implied_bounds_lose_no_point_and_are_within_the_given_ones(seed: int) -> None:
    size = 2 + seed % 8
    rows, low, high, hidden = drawn(200 + seed, size, 1 + seed % 9)
    given = np.zeros(size), np.where(np.arange(size) % 2 == 0, np.inf, hidden + 50.0)
    lower, upper = implied_bounds(rows, (low, high), given)
    assert np.all(lower >= given[0])
    assert np.all(upper <= given[1])
    assert np.all(lower <= hidden + 1e-9)
    assert np.all(upper >= hidden - 1e-9)
    wide_lower, wide_upper = implied_bounds(rows, (low, high), given, 1.0)
    assert np.all(wide_lower <= lower + 1e-9)
    assert np.all(wide_upper >= upper - 1e-9)


def test_implied_bounds_by_hand() -> None:
    # p <= 30 and p + q = 100 leave 70 <= q <= 100; then q + r <= 120 leaves r <= 50.
    rows = csr_array(np.array([[1.0, 1.0, 0.0], [0.0, 1.0, 1.0]]))
    lower, upper = implied_bounds(
        rows, (np.array([100.0, 0.0]), np.array([100.0, 120.0])), (np.zeros(3), np.array([30.0, np.inf, np.inf]))
    )
    assert lower.tolist() == [0.0, 70.0, 0.0]
    assert upper.tolist() == [30.0, 100.0, 50.0]
