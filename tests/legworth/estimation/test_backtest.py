"""The backtest: outcomes are what came while open, rivals are plain averages, scores are what they say."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from legworth.estimation.backtest import Backtest, BacktestOptions, HeldOut, run_backtest
from legworth.estimation.history import BookingHistory
from legworth.estimation.outcomes import Intervals, readings_at, while_open
from legworth.estimation.pools import Pools
from legworth.estimation.rivals import Rivals
from legworth.estimation.scores import score_backtest
from network import SettingError
from tests.legworth.estimation.drawn import Drawn, draw_history
from tests.networks import examples

AS_OF = np.datetime64("2025-07-25")
QUICK = BacktestOptions(snapshots=3, spacing=21, horizons=(30.0, 7.0, 1.0))


@cache
def drawn() -> Drawn:
    """200 departures a day apart, some of whose classes close."""
    return draw_history(12, n_itineraries=30, n_pairs=5, n_dates=200, seats=1.05, weekday=True)


@cache
def backtested() -> Backtest:
    """The backtest of these."""
    found = run_backtest(drawn().history, drawn().pools, AS_OF, options=QUICK)
    assert found is not None
    return found


def one_product(days: list[float], booked: list[list[float]], share: list[list[float]] | None = None) -> BookingHistory:
    """One product on one date after the other, a week apart."""
    n = len(booked)
    open_share = np.ones(n * len(days)) if share is None else np.array(share, dtype=np.float64).ravel()
    return BookingHistory(
        itinerary=np.array(["one"], dtype=object),
        fare_classes=("A",),
        departure=np.datetime64("2029-01-05") + 7 * np.arange(n),
        series_itinerary=np.zeros(n, dtype=np.int64),
        series_class=np.zeros(n, dtype=np.int64),
        start=np.arange(n + 1) * len(days),
        days_before=np.tile(days, n),
        booked=np.array(booked, dtype=np.float64).ravel(),
        cancelled=np.zeros(n * len(days)),
        open=open_share >= 1,
        open_share=open_share,
    )


def test_a_reading_stands_for_the_days_that_it_is_near() -> None:
    history = one_product([30, 14, 7, 0], [[0, 1, 2, 3]])
    assert [int(readings_at(history, days)[0]) for days in (30, 14, 10, 7, 3, 1)] == [0, 1, 1, 2, -1, -1]
    assert readings_at(history, 40)[0] == -1


def test_outcomes_count_while_the_class_was_open() -> None:
    history = one_product([14, 7, 3, 0], [[2, 4, 5, 5]], [[1, 1, 0.5, 0]])
    intervals = Intervals.after(history, np.array([0]), np.array([0]))
    came, reach = while_open(intervals, np.array([6.0]), np.array([0.5, 0.3, 0.2]))
    assert came.tolist() == [3]
    assert reach[0] == pytest.approx(0.5 + 0.15)


@given(share=st.floats(0.05, 1.0), mean=st.floats(0.5, 12.0), seed=st.integers(0, 999))
@examples(25)
def test_while_open_is_fair_however_the_class_closes(share: float, mean: float, seed: int) -> None:
    """Passengers while open over the mean of their reach come to one: also when closing depends on those passengers."""
    rng = np.random.default_rng(seed)
    n, steps = 4000, 20
    came = rng.poisson(mean / steps, (n, steps))
    limit = np.maximum(np.ceil(share * mean), 1)
    sold = np.cumsum(came, axis=1)
    closed = sold >= limit
    after = np.where(closed.any(axis=1), closed.argmax(axis=1) + 1, steps)
    whole = sold[np.arange(n), after - 1]
    intervals = Intervals(np.arange(n), np.ones(n), np.zeros(n), whole.astype(np.float64), after / steps)
    seen, reach = while_open(intervals, np.full(n, mean), np.ones(n))
    expected = mean * reach.sum()
    assert abs(seen.sum() - expected) <= 5 * np.sqrt(expected)


def test_rivals_are_plain_averages_of_what_had_left() -> None:
    weeks = 60
    history = one_product([30, 7, 0], [[0, 1, 1 + k % 5] for k in range(weeks)])
    rivals = Rivals.of(history, readings_at(history, 7.0))
    series = np.array([weeks - 1])
    by = history.departure[weeks - 4]
    picked = np.arange(weeks) % 5
    assert rivals.average(series, by)[0] == pytest.approx(picked[: weeks - 4].mean())
    assert rivals.last_year(series, by)[0] == picked[weeks - 1 - 52]
    assert np.isnan(rivals.last_year(np.array([10]), by)[0])
    assert np.isnan(rivals.average(np.array([10]), history.departure[0])[0])


def test_forecasts_use_nothing_of_the_future() -> None:
    """Readings taken after the last forecast change no forecast."""
    history = drawn().history
    moment = np.repeat(history.departure, np.diff(history.start)) - history.days_before.astype("timedelta64[D]")
    last = backtested().snapshots[0] + 6
    changed = BookingHistory(
        **{name: getattr(history, name) for name in BookingHistory.__dataclass_fields__}
        | {"booked": history.booked + 3.0 * (moment > last)}
    )
    again = run_backtest(changed, drawn().pools, AS_OF, options=QUICK)
    assert again is not None
    one, other = backtested().held, again.held
    first = one.snapshot == backtested().snapshots[0]
    assert first.any()
    assert not first.all()
    known = dict(zip(keys(one), one.mean / one.reach, strict=True))
    compared = [
        (mean, known[key])
        for key, mean in zip(keys(other), other.mean / other.reach, strict=True)
        if key[0] == str(backtested().snapshots[0]) and key in known
    ]
    assert len(compared) > 500
    np.testing.assert_allclose(*np.array(compared).T, rtol=1e-9)


def keys(held: HeldOut) -> list[tuple[str, int, int, str, float]]:
    columns = (held.snapshot.astype(str), held.itinerary, held.fare_class, held.departure.astype(str), held.horizon)
    return list(zip(*(column.tolist() for column in columns), strict=True))


def test_every_forecast_is_of_a_day_in_the_window() -> None:
    held, options = backtested().held, backtested().options
    made = held.departure - held.horizon.astype("timedelta64[D]")
    assert np.all((made >= held.snapshot) & (made < held.snapshot + options.window))
    assert np.all(held.departure < AS_OF)
    assert len(set(keys(held))) == len(held)


def test_the_interval_holds_what_it_says_and_the_estimate_beats_averages() -> None:
    scores = score_backtest(backtested())
    assert scores.every.forecasts >= 1000
    assert scores.every.coverage is not None
    assert 0.75 <= scores.every.coverage <= 0.85
    assert scores.every.error is not None
    assert scores.every.chance is not None
    assert scores.every.error < 1.05 * scores.every.chance
    assert scores.every.bias == pytest.approx(0.0, abs=0.1)


def test_scores_are_what_they_say() -> None:
    held = backtested().held
    scores = score_backtest(backtested())
    every = scores.every
    assert every.came == pytest.approx(held.came.sum())
    assert every.error == pytest.approx(np.abs(held.mean - held.came).sum() / held.came.sum())
    assert every.bias == pytest.approx((held.mean.sum() - held.came.sum()) / held.came.sum())
    for parts in (scores.by_class, scores.by_horizon, scores.by_size):
        assert sum(part.forecasts for part in parts) == every.forecasts
        assert sum(part.came for part in parts) == pytest.approx(every.came)
    for part in scores.together:
        assert part.came == pytest.approx(every.came)
        assert part.error is not None
        assert every.error is not None
        assert part.error < every.error
    off = [abs(weak.deviations) for weak in scores.weak_products]
    assert off == sorted(off, reverse=True)
    assert len({weak.what for weak in scores.weak_departures}) == len(scores.weak_departures)


def test_a_long_history_is_tested_by_whole_city_pairs() -> None:
    few = BacktestOptions(snapshots=1, horizons=(1.0,), most_readings=drawn().history.n_readings // 2)
    found = run_backtest(drawn().history, drawn().pools, AS_OF, options=few)
    assert found is not None
    assert found.pairs < found.all_pairs == 5
    pair = drawn().pools.city_pair
    kept = set(pair[found.history.series_itinerary])
    assert len(kept) == found.pairs
    whole = np.isin(pair[drawn().history.series_itinerary], list(kept))
    assert found.history.n_series == whole.sum()


def test_a_history_shorter_than_a_year_is_held_against_the_average() -> None:
    found = backtested()
    nothing = np.full(len(found.held), np.nan)
    score = score_backtest(replace(found, held=replace(found.held, last_year=nothing))).every
    can = ~np.isnan(found.held.average)
    came = found.held.came[can]
    assert score.compared == can.sum() > 500
    assert (score.error_last_year, score.bias_last_year) == (None, None)
    assert score.error_average == pytest.approx(np.abs(found.held.average[can] - came).sum() / came.sum())
    assert score.error_same == pytest.approx(np.abs(found.held.mean[can] - came).sum() / came.sum())


def test_too_short_a_history_is_not_tested() -> None:
    history = one_product([7, 0], [[0, 1]])
    pools = Pools(np.zeros(1, dtype=np.int64), np.array(["one"], dtype=object))
    assert run_backtest(history, pools, np.datetime64("2029-02-01")) is None


@pytest.mark.parametrize("wrong", [{"snapshots": -1}, {"horizons": ()}, {"horizons": (0.0,)}, {"share": 1.0}])
def test_options_out_of_their_limits_are_told(wrong: dict[str, object]) -> None:
    with pytest.raises(SettingError):
        BacktestOptions(**wrong)  # type: ignore[arg-type]
