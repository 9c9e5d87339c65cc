"""Demand to come against a known truth, and what every estimate must do."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from scipy import optimize

from legworth.estimation.closing import Closing, SeenDemand
from legworth.estimation.demand_fit import DemandFit, fit_demand
from legworth.estimation.demand_options import DemandOptions
from legworth.estimation.dispersion import coverage
from legworth.estimation.estimate import estimate_demand
from legworth.estimation.forecasts import find_series, forecast
from legworth.estimation.increments import Increments
from legworth.estimation.rates import refit_rates, sight
from network import SettingError
from network.demand import Demand
from network.folder import read_folder
from tests.folders import Folder
from tests.legworth.estimation.drawn import CLASSES, DAYS, SHARES, Drawn, draw_history

AS_OF = np.datetime64("2026-12-01")
"""After every departure drawn here."""

STILL = DemandOptions(half_life=None, season=False)


@cache
def world() -> Drawn:
    """400 departures a day apart, half of them held out."""
    return draw_history(5, n_itineraries=30, n_pairs=6, n_dates=400, seats=1.0, weekday=True, two_kinds=True)


@cache
def fitted(closing: Closing = "shared") -> DemandFit:
    """All history of that world."""
    return fit_demand(world().history, world().pools, AS_OF, replace(STILL, closing=closing))


@cache
def learned() -> DemandFit:
    """What is known halfway through it."""
    return fit_demand(world().history, world().pools, np.datetime64("2025-07-25"), STILL)


def by_class(fit: DemandFit, drawn: Drawn) -> np.ndarray:
    """(K,) estimated over asked, of a mean departure."""
    rate = fit.rates.rate.reshape(drawn.rate.shape).sum(axis=0)
    mean_effect = np.exp(np.log(drawn.effect).mean())
    return rate * drawn.effect.mean() / mean_effect / (drawn.demand.sum(axis=(0, 2, 3)) / drawn.demand.shape[2])


def test_means_are_recovered_where_naive_averages_are_low() -> None:
    """Rates within two standard errors of a departure's demand, for nine in ten products; naive ones 6 to 15 % low."""
    drawn = world()
    normal = np.exp(np.log(drawn.effect).mean())
    rate = fitted().model.rate.reshape(drawn.rate.shape) / normal
    error = np.sqrt((drawn.rate + drawn.dispersion * drawn.rate**2) / drawn.demand.shape[2])
    assert np.mean(np.abs(rate - drawn.rate) < 2 * error) > 0.9
    assert by_class(fitted(), drawn) == pytest.approx(1.0, abs=0.04)
    assert np.all(by_class(fitted("ignore"), drawn)[1:] < (0.94, 0.87))


def test_shrunk_rates_are_nearer_than_raw_ones() -> None:
    drawn = world()
    normal = np.exp(np.log(drawn.effect).mean())
    short = fit_demand(drawn.history, drawn.pools, np.datetime64("2025-03-01"), replace(STILL, weekday=False))
    raw, shrunk = (figures.reshape(drawn.rate.shape) - drawn.rate for figures in (short.model.rate, short.rates.rate))
    assert normal == pytest.approx(0.97, abs=0.05)
    assert np.mean(shrunk**2) < 0.95 * np.mean(raw**2)


def test_deviations_are_within_a_tenth() -> None:
    drawn = world()
    fit = fitted()
    rate = drawn.rate * np.exp(np.log(drawn.effect).mean())
    truth = np.sqrt(rate + drawn.dispersion * rate**2)
    shrunk = fit.rates.rate.reshape(rate.shape)
    found = np.sqrt(shrunk + fit.model.dispersion.reshape(rate.shape) * shrunk**2)
    assert np.mean(np.abs(found / truth - 1) < 0.1) > 0.9
    assert found.sum() == pytest.approx(truth.sum(), rel=0.04)


def test_curves_are_recovered_for_both_kinds_of_market() -> None:
    drawn, fit = world(), fitted()
    assert len(fit.curve_name) == 2 * len(CLASSES)
    share = np.where(drawn.late[:, None, None], SHARES**3, SHARES)
    found = fit.model.shapes.cumulative[:, 1:][fit.model.curve].reshape(share.shape)
    assert np.abs(found - share).max() < 0.04


def test_effects_of_the_weekday_are_recovered() -> None:
    truth = np.log([1.2, 0.9, 0.8, 0.9, 1.4, 0.7, 1.1])
    assert fitted().effects.weekday == pytest.approx(np.tile(truth - truth.mean(), (3, 1)), abs=0.1)
    assert np.all(fitted().effects.season == 0)


def test_the_season_is_recovered_where_history_is_long_enough() -> None:
    drawn = draw_history(8, n_itineraries=10, n_pairs=3, n_dates=600, seats=None, season=0.4)
    fit = fit_demand(drawn.history, drawn.pools, AS_OF, replace(STILL, season=True))
    assert fit.effects.season[:, 0] == pytest.approx([0.4] * 3, abs=0.08)
    assert np.abs(fit.effects.season[:, 1:]).max() < 0.08
    short = fit_demand(drawn.history, drawn.pools, np.datetime64("2025-07-01"), replace(STILL, season=True))
    assert np.all(short.effects.season == 0)


@pytest.mark.parametrize("days_left", [90.0, 30.0, 14.0, 3.0])
def test_held_out_departures_are_covered(days_left: float) -> None:
    """80 % intervals over more than 9,000 departures of products that the fit has not seen: 75 to 85 %."""
    drawn = world()
    history = drawn.history
    series = np.flatnonzero(history.departure >= np.datetime64("2025-07-25") + int(days_left))
    asked = drawn.demand.reshape(-1, len(DAYS))[series][:, days_left > DAYS].sum(axis=1).astype(float)
    found = forecast(
        learned(),
        history.series_itinerary[series],
        history.series_class[series],
        history.departure[series],
        np.full(len(series), days_left),
        history,
    )
    assert len(series) > 9_000
    assert coverage(Demand.of(found.mean, found.deviation), asked).mean() == pytest.approx(0.8, abs=0.03)
    assert found.mean.sum() == pytest.approx(asked.sum(), rel=0.08)
    assert np.mean((found.mean - asked) ** 2) == pytest.approx(np.mean(found.deviation**2), rel=0.25)
    blind = forecast(
        learned(),
        history.series_itinerary[series],
        history.series_class[series],
        history.departure[series],
        np.full(len(series), days_left),
    )
    assert np.all(blind.update == 1)
    if days_left < 60:  # by then enough is booked to tell busy departures
        assert np.mean((found.mean - asked) ** 2) < 0.97 * np.mean((blind.mean - asked) ** 2)


def test_without_closed_classes_rates_and_curves_are_plain_means() -> None:
    drawn = draw_history(2, n_itineraries=12, n_pairs=3, n_dates=60, seats=None)
    asked = drawn.demand.mean(axis=2)
    for closing in ("shared", "limit", "discard", "ignore"):
        options = DemandOptions(closing=closing, half_life=None, weekday=False, season=False)  # type: ignore[arg-type]
        fit = fit_demand(drawn.history, drawn.pools, AS_OF, options)
        assert fit.model.rate.reshape(asked.shape[:2]) == pytest.approx(asked.sum(axis=2), rel=2e-3, abs=2e-3)
        shares = asked.sum(axis=0) / asked.sum(axis=(0, 2))[:, None]
        assert np.abs(fit.model.shapes.share - shares).max() < 0.02
        assert fit.warnings == ()


def test_rates_maximise_the_likelihood_of_what_was_seen() -> None:
    """Products watched for parts of departures: the negative binomial likelihood maximised directly by scipy."""
    rng = np.random.default_rng(9)
    a, size = 0.7, 120
    drawn = draw_history(1, n_itineraries=1, n_pairs=1, n_dates=size, seats=None)
    fit = fit_demand(drawn.history, drawn.pools, AS_OF, replace(STILL, weekday=False))
    increments = Increments.of(drawn.history)
    seen = SeenDemand.of(increments, "discard", 3)
    model = replace(fit.model, dispersion=np.full(3, a), rate=np.full(3, 1.0), prior=np.zeros(3))
    effect = rng.uniform(0.5, 2.0, 3 * size)
    product = np.repeat(np.arange(3), size)
    view = sight(increments, model, product, effect, np.ones(3 * size), seen)
    reach = rng.uniform(0.1, 1.0, 3 * size)
    view = replace(view, reach=reach, came=rng.poisson(2 * effect * reach * rng.gamma(1 / a, a, 3 * size)))
    rates = refit_rates(model, view, rounds=500).rate
    for at in range(3):
        n, m = view.came[product == at], (effect * view.reach)[product == at]

        def loss(rate: float, n: np.ndarray = n, m: np.ndarray = m) -> float:
            return -float(np.sum(n * np.log(rate) - (n + 1 / a) * np.log1p(a * rate * m)))

        best = optimize.minimize_scalar(loss, bounds=(1e-3, 60.0), method="bounded", options={"xatol": 1e-10})
        assert rates[at] == pytest.approx(best.x, rel=1e-3)


def test_later_readings_are_not_looked_at() -> None:
    history = world().history
    day = np.datetime64("2025-07-25")
    known = history.days_before >= np.repeat((history.departure - day).astype(float), np.diff(history.start))
    wrong = replace(history, booked=np.where(known, history.booked, 999.0))
    again = fit_demand(wrong, world().pools, day, STILL)
    assert np.array_equal(again.rates.rate, learned().rates.rate)
    at = np.flatnonzero(history.departure == day + 14)
    figures = (history.series_itinerary[at], history.series_class[at], history.departure[at], np.full(len(at), 14.0))
    assert np.array_equal(forecast(learned(), *figures, history).mean, forecast(again, *figures, wrong).mean)


def test_a_product_closed_all_along_falls_back_to_its_pool_and_is_flagged() -> None:
    drawn = draw_history(4, n_itineraries=12, n_pairs=3, n_dates=90, seats=None)
    history = drawn.history
    shut = (history.series_itinerary == 3) & (history.series_class == 1)
    rows = np.repeat(shut, np.diff(history.start))
    closed = replace(history, booked=np.where(rows, 0.0, history.booked), open=history.open & ~rows)
    fit = fit_demand(closed, drawn.pools, AS_OF, STILL)
    itinerary, fare_class = np.array([3, 3, -1]), np.array([1, 0, 1])
    found = forecast(fit, itinerary, fare_class, np.full(3, AS_OF), np.full(3, 90.0))
    assert found.weak.tolist() == [True, False, True]
    assert found.own_weight[0] == 0
    assert found.rate[0] > 0
    # Without history of its own a product takes the rate of its city pair and class, or that of its class.
    assert found.rate[2] == pytest.approx(fit.rates.pair_rate[-1, 1])
    pair = np.array([-1, -1, drawn.pools.city_pair[3]])
    borrowed = forecast(fit, itinerary, fare_class, np.full(3, AS_OF), np.full(3, 90.0), None, pair)
    assert borrowed.rate[2] == pytest.approx(borrowed.rate[0], rel=1e-6)
    assert np.array_equal(borrowed.rate[:2], found.rate[:2])
    assert np.all(fit.rates.pair_variance[:-1, 1] < fit.rates.pair_variance[-1, 1])
    assert found.deviation[0] ** 2 / found.mean[0] > 1


def test_a_class_that_was_never_open_is_named_and_a_history_without_open_classes_refused() -> None:
    """Of such a class nothing is known, not even by its pool; demand of none keeps no seats, so it must be told."""
    drawn = draw_history(4, n_itineraries=12, n_pairs=3, n_dates=90, seats=None)
    history = drawn.history
    rows = np.repeat(history.series_class == 0, np.diff(history.start))
    closed = replace(
        history,
        booked=np.where(rows, 0.0, history.booked),
        open=history.open & ~rows,
        open_share=np.where(rows, 0.0, 1.0),
    )
    fit = fit_demand(closed, drawn.pools, AS_OF, STILL)
    assert [note.startswith(f"Class {CLASSES[0]} was never open") for note in fit.warnings] == [True]
    rate = fit.rates.rate.reshape(drawn.rate.shape)
    assert np.all(rate[:, 0] == 0)
    assert np.all(rate[:, 1:] > 0)
    with pytest.raises(SettingError, match="no class was open in any reading"):
        fit_demand(
            replace(history, booked=0 * history.booked, open=np.zeros_like(history.open)), drawn.pools, AS_OF, STILL
        )


def test_a_class_closed_towards_departure_everywhere_is_told() -> None:
    drawn = draw_history(4, n_itineraries=12, n_pairs=3, n_dates=90, seats=None)
    late = np.tile(DAYS < 5, len(drawn.history.departure)) & np.repeat(drawn.history.series_class == 2, len(DAYS))
    by_five = np.repeat(drawn.history.booked.reshape(-1, len(DAYS))[:, DAYS == 5], len(DAYS), axis=1).ravel()
    booked = np.where(late, by_five, drawn.history.booked)
    closed = replace(drawn.history, booked=booked, open=drawn.history.open & ~late, open_share=np.where(late, 0.0, 1.0))
    fit = fit_demand(closed, drawn.pools, AS_OF, STILL)
    assert fit.warnings == (
        f"Hardly ever open in some interval: {CLASSES[2]}; that part of the booking curves is borrowed",
    )
    assert fit.model.shapes.blind[2].any()
    assert not fit.model.shapes.blind[:2].any()
    assert np.all(fit.model.shapes.share > 0)


def test_recent_departures_count_more() -> None:
    drawn = draw_history(6, n_itineraries=12, n_pairs=3, n_dates=200, seats=None)
    history = drawn.history
    recent = np.repeat(history.departure >= history.departure.min() + 100, np.diff(history.start))
    grown = replace(history, booked=history.booked * np.where(recent, 2.0, 1.0))
    last = np.datetime64(history.departure.max(), "D")
    totals = {
        half_life: fit_demand(grown, drawn.pools, last, replace(STILL, half_life=half_life)).rates.rate.sum()
        for half_life in (None, 100.0, 20.0)
    }
    assert totals[None] < totals[100.0] < totals[20.0]
    asked = drawn.demand.sum() / 200
    assert totals[None] == pytest.approx(1.5 * asked, rel=0.05)
    assert totals[20.0] == pytest.approx(2 * asked, rel=0.1)


def test_the_same_history_gives_the_same_figures() -> None:
    again = fit_demand(world().history, world().pools, np.datetime64("2025-07-25"), STILL)
    assert np.array_equal(again.rates.rate, learned().rates.rate)
    assert np.array_equal(again.model.shapes.share, learned().model.shapes.share)


def test_a_sample_of_a_long_history_says_the_same(monkeypatch: pytest.MonkeyPatch) -> None:
    """Curves from a third of the readings, rates and effects from all."""
    monkeypatch.setattr("legworth.estimation.demand_fit.SAMPLE", len(world().history.days_before) // 3)
    sampled = fit_demand(world().history, world().pools, AS_OF, STILL)
    whole = fitted()
    assert sampled.rates.rate.sum() == pytest.approx(whole.rates.rate.sum(), rel=0.01)
    assert np.abs(sampled.rates.rate / whole.rates.rate - 1).max() < 0.1
    assert np.abs(sampled.model.shapes.cumulative - whole.model.shapes.cumulative).max() < 0.05


def test_options_and_days_out_of_range_are_refused() -> None:
    for wrong in ({"closing": "guess"}, {"pickup": "guess"}, {"half_life": 0.0}, {"half_life": np.inf}, {"seed": -1}):
        with pytest.raises(SettingError):
            DemandOptions(**wrong)  # type: ignore[arg-type]
    with pytest.raises(SettingError, match="no reading"):
        fit_demand(world().history, world().pools, np.datetime64("2020-01-01"))


def test_products_of_a_network_are_estimated(tmp_path: Path) -> None:
    """Departures of the folder by name and date, with their bookings so far; unknown ones fall back to their class."""
    folder = Folder()
    folder.write(tmp_path)
    network = read_folder(tmp_path).network
    drawn = draw_history(7, n_itineraries=6, n_pairs=6, n_dates=150, seats=None, first="2029-10-20")
    names = np.array(["NOR-HUB", "HUB-SUD", "HUB-OST", "NOR-SUD", "NOR-OST", "OST-NOR"], dtype=object)
    history = replace(drawn.history, itinerary=names)
    found = estimate_demand(history, network, network.as_of, STILL)
    assert found.mean.shape == found.deviation.shape == (network.n_products,)
    assert np.all(found.mean > 0)
    assert np.all(found.deviation**2 >= found.mean * (1 - 1e-9))
    assert found.fit.pools.name.tolist() == sorted(names)
    unknown = network.itinerary[network.product_itinerary] == "SUD-HUB"
    assert np.array_equal(found.forecast.weak, unknown)
    assert found.forecast.own_weight[unknown].tolist() == [0, 0]
    # 1 March is 4.1 days away: what was booked by the reading of 5 days before counts.
    assert np.all(found.forecast.update[~unknown] != 1)
    assert np.all((found.forecast.to_come > 0) & (found.forecast.to_come < 0.8))
    renamed = np.where(network.itinerary == "SUD-HUB", "NOR-HUB", network.itinerary)
    named = estimate_demand(history, network, network.as_of, STILL, renamed)
    assert not named.forecast.weak.any()
    again = replace(
        network, demand=Demand.of(found.mean, found.deviation), curve=found.forecast.curve, curves=found.curves
    )
    assert again.curves.share[again.curves.start[1:] - 1].tolist() == [1.0] * len(again.curves)
    with pytest.raises(ValueError, match="fare classes"):
        estimate_demand(replace(history, fare_classes=("A", "B", "X")), network, network.as_of)
    later = datetime(2031, 1, 1, tzinfo=UTC)
    assert np.all(estimate_demand(history, network, later, STILL).mean == 0)


def test_series_are_found_by_itinerary_class_and_date() -> None:
    history = world().history
    at = np.random.default_rng(1).permutation(len(history.departure))[:200]
    itinerary, fare_class, departure = history.series_itinerary[at], history.series_class[at], history.departure[at]
    assert np.array_equal(find_series(history, itinerary, fare_class, departure), at)
    assert np.all(find_series(history, itinerary, fare_class, departure + 1000) == -1)
    assert np.all(find_series(history, np.full(200, -1), fare_class, departure) == -1)
