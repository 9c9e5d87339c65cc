"""Methods of unconstraining side by side: what all must do, and what tells them apart."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from legworth.estimation.censored_sample import CensoredSample, EmOptions
from legworth.estimation.detruncation import detruncate
from legworth.estimation.increments import Increments
from legworth.estimation.unconstraining import METHODS, ClassSamples, unconstrain
from tests.legworth.estimation.drawn import draw_history

NAIVE = ("ignore", "discard", "replace")
COUNTS = st.lists(st.integers(0, 30), min_size=3, max_size=25)


def censored(seed: int, size: int = 4000, mean: float = 8.0, a: float = 0.0) -> tuple[np.ndarray, np.ndarray]:
    """Poisson or over-dispersed counts, each with a limit of its own."""
    rng = np.random.default_rng(seed)
    demand = rng.poisson(mean * (rng.gamma(1 / a, a, size) if a else 1.0), size)
    limit = rng.integers(int(mean) - 2, int(mean) + 5, size)
    return np.minimum(demand, limit), demand >= limit


@pytest.mark.parametrize("method", METHODS)
@given(values=COUNTS)
@settings(max_examples=15, deadline=None)
def test_without_a_closed_class_the_mean_is_the_plain_mean(method: str, values: list[int]) -> None:
    fit = unconstrain(CensoredSample.of(values, np.zeros(len(values), dtype=bool)), method)
    assert fit.mean[0] == pytest.approx(np.mean(values), abs=1e-9)
    assert not fit.weak[0]


@pytest.mark.parametrize("method", METHODS)
def test_order_does_not_matter_and_groups_do_not_mix(method: str) -> None:
    seen, closed = censored(1, 200)
    other, shut = censored(2, 120, mean=4.0)
    apart = [unconstrain(CensoredSample.of(*pair), method) for pair in ((seen, closed), (other, shut))]
    group = np.repeat([0, 1], [200, 120])
    order = np.random.default_rng(3).permutation(320)
    values, flags = np.append(seen, other)[order], np.append(closed, shut)[order]
    together = unconstrain(CensoredSample.of(values, flags, group[order], 2), method)
    assert together.mean == pytest.approx([fit.mean[0] for fit in apart], rel=1e-6)
    assert together.deviation == pytest.approx([fit.deviation[0] for fit in apart], rel=1e-4)


@pytest.mark.parametrize("method", ["projection", "normal", "poisson", "negative_binomial"])
def test_nothing_that_was_seen_is_taken_away(method: str) -> None:
    seen, closed = censored(5, 300)
    sample = CensoredSample.of(seen, closed)
    fit = unconstrain(sample, method)
    assert np.all(fit.imputed >= sample.value)
    assert np.array_equal(fit.imputed[~sample.closed], sample.value[~sample.closed])
    assert fit.mean[0] > unconstrain(sample, "ignore").mean[0]


@pytest.mark.parametrize(("method", "a"), [("poisson", 0.0), ("negative_binomial", 0.5), ("negative_binomial", 0.0)])
@pytest.mark.parametrize("seed", range(4))
def test_the_mean_is_recovered_where_naive_ones_are_low(method: str, a: float, seed: int) -> None:
    """Of 4,000 counts of mean 8: within two and a half standard errors, which hold for what was not seen as well."""
    seen, closed = censored(seed, a=a)
    sample = CensoredSample.of(seen, closed)
    error = np.sqrt((8 + a * 64) / 4000 / max(1 - closed.mean(), 0.3))
    assert unconstrain(sample, method).mean[0] == pytest.approx(8.0, abs=2.5 * error)
    assert unconstrain(sample, "ignore").mean[0] < (7.4 if a == 0 else 6.4)
    assert unconstrain(sample, "discard").mean[0] < (7.1 if a == 0 else 6.0)
    assert unconstrain(sample, "replace").mean[0] < (7.6 if a == 0 else 7.0)


def test_a_smaller_tau_raises_demand_more() -> None:
    sample = CensoredSample.of(*censored(1, 300))
    means = [detruncate(sample, tau=tau).mean[0] for tau in (0.2, 0.5, 0.8, 1.0)]
    assert np.all(np.diff(means) < 0)
    assert means[-1] == pytest.approx(unconstrain(sample, "ignore").mean[0], abs=1e-9)
    for tau in (0.0, 1.5):
        with pytest.raises(ValueError, match="tau"):
            detruncate(sample, tau=tau)


@pytest.mark.parametrize("method", METHODS)
def test_a_group_that_was_never_open_takes_the_figures_of_all_and_is_flagged(method: str) -> None:
    seen, closed = censored(1, 300)
    group = np.append(np.zeros(300, dtype=int), [1, 1, 1])
    sample = CensoredSample.of(np.append(seen, [2, 0, 3]), np.append(closed, [True] * 3), group, 2)
    fit = unconstrain(sample, method)
    assert fit.weak.tolist() == [False, True]
    assert fit.mean[1] == pytest.approx(fit.mean[0], rel=0.05)
    nothing = unconstrain(CensoredSample.of([1, 2], [True, True]), method)
    assert nothing.weak.all()
    assert np.isnan(nothing.mean).all()


@pytest.mark.parametrize("method", ["projection", "normal", "poisson", "negative_binomial"])
def test_the_limit_of_rounds_is_kept_and_told(method: str) -> None:
    sample = CensoredSample.of(*censored(1, 300))
    fit = unconstrain(sample, method, EmOptions(iterations=1))
    assert fit.iterations == 1
    assert not fit.converged[0]
    assert unconstrain(sample, method).converged[0]


def test_samples_and_methods_out_of_range_are_refused() -> None:
    with pytest.raises(ValueError, match="negative"):
        CensoredSample.of([1, -1], [False, False])
    with pytest.raises(ValueError, match="finite"):
        CensoredSample.of([1, np.nan], [False, False])
    with pytest.raises(ValueError, match="groups"):
        CensoredSample.of([1, 2], [False, False], [0, 2], 2)
    with pytest.raises(ValueError, match="shapes"):
        CensoredSample.of([1, 2], [False])
    with pytest.raises(ValueError, match="unknown method"):
        unconstrain(CensoredSample.of([1], [False]), "guess")


def test_methods_of_a_whole_history_rank_as_they_should() -> None:
    drawn = draw_history(1, n_itineraries=20, n_dates=120, seats=0.95)
    increments = Increments.of(drawn.history)
    samples = ClassSamples.of(increments, drawn.history.series_class, 3)
    means = {method: samples.fit(method).mean for method in METHODS}
    asked = drawn.demand.mean(axis=(0, 2)).sum(axis=1)
    assert np.all(means["ignore"] < asked)
    assert np.all(means["negative_binomial"] >= means["ignore"])
    free = Increments.of(draw_history(1, n_itineraries=20, n_dates=120, seats=None).history)
    for method in METHODS:
        assert ClassSamples.of(free, drawn.history.series_class, 3).fit(method).mean == pytest.approx(asked, rel=1e-6)


@pytest.mark.parametrize("method", NAIVE)
def test_naive_methods_do_not_iterate(method: str) -> None:
    assert unconstrain(CensoredSample.of(*censored(1, 50)), method).iterations == 0


@pytest.mark.parametrize("method", ["poisson", "negative_binomial"])
def test_what_has_settled_does_not_move_with_others(method: str) -> None:
    """A group that is nearly always closed takes many more rounds; the other ends as if it were alone."""
    seen, closed = censored(4, 400, a=0.3)
    slow, shut = censored(6, 400, mean=5.0)
    shut[20:] = True
    alone = unconstrain(CensoredSample.of(seen, closed), method)
    values, flags = np.append(seen, slow), np.append(closed, shut)
    both = unconstrain(CensoredSample.of(values, flags, np.repeat([0, 1], 400), 2), method)
    assert both.iterations > 3 * alone.iterations
    assert both.mean[0] == alone.mean[0]
    assert both.deviation[0] == alone.deviation[0]
