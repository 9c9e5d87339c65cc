"""Estimates against reference libraries: scipy, statsmodels, and likelihoods maximised directly.

The sample of ten departures and its figures are our own, fitted by ``scipy.stats.norm.fit`` on
``scipy.stats.CensoredData`` (maximum likelihood, 29.87151 and 7.64990); nothing of it is published. Projection
detruncation at tau = 0.5 was worked out for the same sample with a program of its own.
"""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import integrate, optimize, stats

from legworth.estimation.censored_counts import fit_censored_negative_binomial, fit_censored_poisson
from legworth.estimation.censored_normal import fit_censored_normal
from legworth.estimation.censored_sample import CensoredSample
from legworth.estimation.closing import open_part
from legworth.estimation.detruncation import detruncate
from legworth.estimation.dispersion import fit_over_dispersion
from legworth.estimation.regression import fit_effects

SEEN = (23, 31, 18, 35, 35, 27, 30, 22, 35, 29)
CLOSED = (0, 0, 0, 1, 1, 0, 0, 0, 1, 0)


def draw(seed: int, *, over_dispersed: bool = True) -> tuple[np.ndarray, np.ndarray]:
    """Counts with limits of their own, and whether each met its limit."""
    rng = np.random.default_rng(seed)
    mean = rng.uniform(1.0, 15.0)
    counts = rng.poisson(mean * (rng.gamma(2.0, 0.5, 300) if over_dispersed else 1.0), 300)
    limit = rng.poisson(1.2 * mean, 300)
    return np.minimum(counts, limit), counts >= limit


def test_ten_departures() -> None:
    sample = CensoredSample.of(SEEN, CLOSED)
    fit = fit_censored_normal(sample)
    assert [fit.mean[0], fit.deviation[0]] == pytest.approx([29.87151, 7.64990], abs=1e-4)
    assert fit.imputed.max() == pytest.approx(39.5716, abs=1e-3)
    assert fit.converged[0]


def test_ten_departures_by_projection() -> None:
    fit = detruncate(CensoredSample.of(SEEN, CLOSED))
    assert [fit.mean[0], fit.deviation[0], fit.imputed.max()] == pytest.approx([29.49355, 7.24718, 38.3118], abs=1e-4)


@pytest.mark.parametrize("seed", range(8))
def test_censored_normal_is_that_of_scipy(seed: int) -> None:
    rng = np.random.default_rng(seed)
    demand, limit = rng.normal(40.0, 9.0, 150), rng.normal(44.0, 6.0, 150)
    seen, closed = np.minimum(demand, limit), demand >= limit
    reference = stats.norm.fit(stats.CensoredData(uncensored=seen[~closed], right=seen[closed]))
    fit = fit_censored_normal(CensoredSample.of(seen, closed))
    assert [fit.mean[0], fit.deviation[0]] == pytest.approx(reference, abs=1e-4)


@pytest.mark.parametrize("seed", range(6))
def test_censored_poisson_maximises_the_likelihood(seed: int) -> None:
    seen, closed = draw(seed, over_dispersed=False)

    def loss(mean: float) -> float:
        return -float(np.where(closed, stats.poisson.logsf(seen - 1, mean), stats.poisson.logpmf(seen, mean)).sum())

    reference = optimize.minimize_scalar(loss, bounds=(0.1, 60.0), method="bounded", options={"xatol": 1e-8})
    fit = fit_censored_poisson(CensoredSample.of(seen, closed))
    assert fit.mean[0] == pytest.approx(reference.x, rel=1e-5)


@pytest.mark.parametrize("seed", range(6))
def test_censored_negative_binomial_maximises_the_likelihood(seed: int) -> None:
    seen, closed = draw(seed)

    def loss(logarithms: np.ndarray) -> float:
        mean, shape = np.exp(logarithms)
        law = stats.nbinom(shape, shape / (shape + mean))
        return -float(np.where(closed, law.logsf(seen - 1), law.logpmf(seen)).sum())

    begin = np.array([np.log(seen.mean() + 1), 0.5])
    found = optimize.minimize(loss, begin, method="Nelder-Mead", options={"xatol": 1e-8, "fatol": 1e-10})
    mean, shape = np.exp(found.x)
    fit = fit_censored_negative_binomial(CensoredSample.of(seen, closed))
    assert [fit.mean[0], fit.deviation[0]] == pytest.approx([mean, np.sqrt(mean + mean**2 / shape)], rel=1e-4)


@pytest.mark.parametrize("seed", range(4))
def test_dispersion_is_that_of_statsmodels(seed: int) -> None:
    """Negative binomial regression (NB2) of statsmodels on the same exposures, its constant taken over."""
    rng = np.random.default_rng(seed)
    exposure = rng.uniform(0.5, 6.0, 500)
    counts = rng.poisson(exposure * rng.gamma(1.6, 1 / 1.6, 500))
    reference = sm.NegativeBinomial(counts, np.ones(500), offset=np.log(exposure)).fit(disp=0)
    constant, alpha = reference.params
    assert fit_over_dispersion(counts.astype(float), np.exp(constant) * exposure) == pytest.approx(alpha, rel=2e-3)


def test_weekday_effects_are_those_of_a_regression_where_they_are_large() -> None:
    """Poisson regression of statsmodels on dummies; with effects so large the pull towards none hardly shows."""
    rng = np.random.default_rng(3)
    day = np.arange(20_000, 20_350)
    weekday = (day + 3) % 7
    truth = np.log([2.0, 1.0, 0.5, 0.7, 1.5, 3.0, 1.0])
    came = rng.poisson(50.0 * np.exp(truth[weekday]))
    dummies = (weekday[:, None] == np.arange(7)).astype(float)
    reference = sm.GLM(came, dummies, family=sm.families.Poisson()).fit().params
    found = fit_effects(day, came[None].astype(float), np.full((1, len(day)), 50.0), weekday=True, season=False)
    assert found.weekday[0] == pytest.approx(reference - reference.mean(), abs=0.01)


@pytest.mark.parametrize("count", [0, 1, 3, 12])
@pytest.mark.parametrize("mean", [0.01, 0.4, 3.0, 20.0])
def test_open_part_is_that_of_numerical_integration(count: int, mean: float) -> None:
    """Closing instant anywhere alike: the mean of t weighed by the Poisson chance of the count at mean m t."""

    def weight(t: float) -> float:
        return float(stats.poisson.pmf(count, mean * t)) / scale

    scale = float(stats.poisson.pmf(count, min(float(count), mean) if count else 0.0))
    part = integrate.quad(lambda t: t * weight(t), 0, 1)[0] / integrate.quad(weight, 0, 1)[0]
    assert open_part(np.array([float(count)]), np.array([mean]))[0] == pytest.approx(part, rel=1e-6)


@pytest.mark.parametrize("count", [1, 2, 9])
@pytest.mark.parametrize("mean", [0.05, 2.0, 15.0])
def test_open_part_until_an_own_booking_is_that_of_numerical_integration(count: int, mean: float) -> None:
    """The instant of the last of the bookings is gamma distributed (scipy), given that it falls into the interval."""
    law = stats.gamma(count, scale=1 / mean)
    part = law.expect(lambda t: t, ub=1.0) / law.cdf(1.0)
    assert open_part(np.array([float(count)]), np.array([mean]), own=True)[0] == pytest.approx(part, rel=1e-5)
