"""Pick-up: how bookings so far move demand to come."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from legworth.estimation.pickup import Pickup, ToCome, pick_up

positive = st.floats(0.01, 50.0)


def picked(
    came: float,
    *,
    expected: float = 4.0,
    so_far: float = 3.0,
    variance: float = 0.6,
    lasting: float = 1.0,
    fresh: float = 0.0,
    rate_variance: float = 0.0,
    way: Pickup = "combined",
) -> ToCome:
    figures = (expected, came, so_far, variance, lasting, fresh, fresh, rate_variance)
    arrays = [np.array([figure]) for figure in figures]
    return pick_up(*arrays, way=way)


@given(came=st.integers(0, 40), expected=positive, so_far=positive, variance=st.floats(0.01, 4.0))
def test_combined_pick_up_is_the_gamma_poisson_posterior(
    came: int, expected: float, so_far: float, variance: float
) -> None:
    """Conjugate posterior of the departure's factor: gamma of shape 1/a + n and rate 1/a + m (textbook)."""
    posterior = stats.gamma(1 / variance + came, scale=1 / (1 / variance + so_far))
    found = picked(came, expected=expected, so_far=so_far, variance=variance)
    assert found.mean[0] == pytest.approx(expected * posterior.mean(), rel=1e-9)
    assert found.deviation[0] ** 2 == pytest.approx(found.mean[0] + expected**2 * posterior.var(), rel=1e-9)


@given(came=st.integers(0, 40), so_far=positive)
def test_the_combined_rule_lies_between_additive_and_multiplicative(came: int, so_far: float) -> None:
    ways: tuple[Pickup, ...] = ("additive", "combined", "multiplicative")
    additive, combined, multiplicative = (picked(came, so_far=so_far, way=way).mean[0] for way in ways)
    assert additive == pytest.approx(4.0)
    assert multiplicative == pytest.approx(4.0 * came / so_far)
    low, high = sorted((additive, multiplicative))
    assert low - 1e-9 <= combined <= high + 1e-9


def test_nothing_seen_changes_nothing() -> None:
    for way in ("combined", "additive", "multiplicative"):
        found = picked(0.0, so_far=0.0, way=way)  # type: ignore[arg-type]
        assert found.update[0] == 1
        assert found.deviation[0] ** 2 == pytest.approx(4 + 0.6 * 16)


def test_a_departure_ahead_of_its_curve_expects_more_the_more_busyness_lasts() -> None:
    means = [picked(6.0, lasting=share, fresh=0.2).mean[0] for share in (0.0, 0.3, 0.7, 1.0)]
    assert means[0] == pytest.approx(4.0)
    assert np.all(np.diff(means) > 0)


def test_what_is_not_known_of_the_rate_widens_the_distribution_and_leaves_the_mean() -> None:
    sure, unsure = picked(3.0), picked(3.0, rate_variance=0.25)
    assert unsure.mean[0] == sure.mean[0]
    assert unsure.deviation[0] > sure.deviation[0]
