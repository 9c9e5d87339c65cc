"""Backtest: forecasts made from what was known on past days, held against what came.

On each of some days the whole fit is made anew from the readings known by then; over the following week it forecasts
the departures that are a round number of days away, with their bookings so far. What came counts as far as the class
was open (`legworth.estimation.outcomes`), and so do the forecasts, the estimate's and its rivals' alike.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from legworth.estimation.dispersion import coverage
from legworth.estimation.estimate import DemandFit, DemandOptions, Forecast, Pools, fit_demand, forecast
from legworth.estimation.history import BookingHistory
from legworth.estimation.outcomes import Intervals, readings_at, while_open
from legworth.estimation.rivals import Rivals
from legworth.simulation.forecast import demand_times
from network import Demand, SettingError
from network.arrays import FloatArray, IntArray, TimeArray

__all__ = ["Backtest", "BacktestOptions", "HeldOut", "run_backtest"]


@dataclass(frozen=True)
class BacktestOptions:
    """What is tested.

    Attributes
    ----------
    snapshots
        Past days on which everything is fitted anew; 0 for no backtest.
    spacing
        Days between them.
    window
        Days from each on which it forecasts, its own included.
    horizons
        Days before departure at which it forecasts.
    share
        Share that the interval is to hold.
    most_readings
        Readings above which the test takes a sample of the city pairs.
    seed
        Seed of that sample.

    Raises
    ------
    SettingError
        If one is out of its limits.
    """

    snapshots: int = 4
    spacing: int = 28
    window: int = 7
    horizons: tuple[float, ...] = (60.0, 30.0, 14.0, 7.0, 3.0, 1.0)
    share: float = 0.8
    most_readings: int = 2_000_000
    seed: int = 1

    def __post_init__(self) -> None:
        if self.snapshots < 0 or self.spacing < 1 or self.window < 1:
            raise SettingError("a backtest needs snapshots of at least 0, and spacing and window of at least a day")
        if not self.horizons or not all(np.isfinite(day) and day > 0 for day in self.horizons):
            raise SettingError("horizons of a backtest must be days before departure, above 0")
        if not 0 < self.share < 1:
            raise SettingError(f"the share of the interval must be above 0 and below 1, got {self.share}")


@dataclass(frozen=True, eq=False)
class HeldOut:
    """Forecasts and outcomes, (n,) each.

    Attributes
    ----------
    itinerary, fare_class, departure
        Positions as in the history, and dates.
    snapshot
        Days on which the fits were made.
    horizon
        Days before departure at which they forecast.
    came
        Passengers who came while the class was open.
    reach
        Share of the demand to come that met it open.
    mean, deviation
        Forecast of these passengers.
    inside
        Chance that the outcome lies in the interval (`legworth.estimation.dispersion.coverage`).
    chance
        Expected distance of the outcome from the mean, were the forecast distribution right.
    average, last_year
        What the rivals forecast of the same passengers; NaN where they have nothing to go by.
    """

    itinerary: IntArray
    fare_class: IntArray
    departure: TimeArray
    snapshot: TimeArray
    horizon: FloatArray
    came: FloatArray
    reach: FloatArray
    mean: FloatArray
    deviation: FloatArray
    inside: FloatArray
    chance: FloatArray
    average: FloatArray
    last_year: FloatArray

    def __len__(self) -> int:
        return len(self.came)

    @classmethod
    def joined(cls, parts: list[HeldOut]) -> HeldOut:
        """Put forecasts one after the other."""
        names = cls.__dataclass_fields__
        return cls(**{name: np.concatenate([getattr(part, name) for part in parts]) for name in names})


@dataclass(frozen=True, eq=False)
class Backtest:
    """What a backtest looked at.

    Attributes
    ----------
    options
        What was asked for.
    history
        The history tested, perhaps a sample of the city pairs.
    pairs, all_pairs
        City pairs tested, and all of them.
    snapshots
        Days of the fits, rising.
    held
        Forecasts and outcomes.
    left_out
        Outcomes that do not count since the class was not open any more.
    """

    options: BacktestOptions
    history: BookingHistory
    pools: Pools
    pairs: int
    all_pairs: int
    snapshots: TimeArray
    held: HeldOut
    left_out: int


def run_backtest(
    history: BookingHistory,
    pools: Pools,
    as_of: np.datetime64,
    how: DemandOptions | None = None,
    options: BacktestOptions | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> Backtest | None:
    """Forecast past departures from what was known before them.

    Parameters
    ----------
    history
        Readings.
    pools
        City pairs of its itineraries.
    as_of
        Day of the snapshot; departures of that day or later have no outcome yet.
    how
        How demand is estimated.
    options
        What is tested.
    progress
        Called with the fits made and those to make.

    Returns
    -------
    Backtest or None
        None if no snapshot leaves readings before it and outcomes after it.
    """
    options = options or BacktestOptions()
    tested, tested_pools, pairs = _sample(history, pools, options)
    day = as_of.astype("datetime64[D]")
    snapshots = day - options.window - options.spacing * np.arange(options.snapshots)[::-1]
    begin = _first_reading(tested)
    snapshots = snapshots[snapshots > begin]
    at = {days: readings_at(tested, days) for days in options.horizons}
    rivals = {days: Rivals.of(tested, reading) for days, reading in at.items()}
    parts, used, left_out = [], [], 0
    for done, snapshot in enumerate(snapshots):
        if progress is not None:
            progress(done, len(snapshots))
        chosen = {days: _chosen(tested, reading, snapshot, day, options.window) for days, reading in at.items()}
        if not any(len(series) for series in chosen.values()):
            continue
        try:
            fit = fit_demand(tested, tested_pools, snapshot, how)
        except SettingError:  # nothing was known by then
            continue
        used.append(snapshot)
        for days, series in chosen.items():
            held, dropped = _held_out(tested, fit, rivals[days], series, at[days][series], days, snapshot, options)
            parts.append(held)
            left_out += dropped
    if progress is not None:
        progress(len(snapshots), len(snapshots))
    if not any(len(part) for part in parts):
        return None
    held = HeldOut.joined(parts)
    return Backtest(options, tested, tested_pools, pairs, len(pools.name), np.array(used), held, left_out)


def _sample(history: BookingHistory, pools: Pools, options: BacktestOptions) -> tuple[BookingHistory, Pools, int]:
    """Whole city pairs of a history, few enough of them to hold only so many readings."""
    if history.n_readings <= options.most_readings:
        return history, pools, len(pools.name)
    pair = pools.city_pair[history.series_itinerary]
    size = np.bincount(pair, np.diff(history.start), minlength=len(pools.name))
    order = np.random.default_rng(options.seed).permutation(len(size))
    number = max(1, int(np.searchsorted(np.cumsum(size[order]), options.most_readings)))
    kept = np.isin(pair, order[:number])
    return history.chosen(np.flatnonzero(kept)), pools, number


def _first_reading(history: BookingHistory) -> np.datetime64:
    """The day by which a first departure has left."""
    return np.datetime64(history.departure.min(), "D") if history.n_series else np.datetime64("9999-01-01")


def _chosen(
    history: BookingHistory, reading: IntArray, snapshot: np.datetime64, day: np.datetime64, window: int
) -> IntArray:
    """Series that have left, and whose reading was taken within the window of a snapshot."""
    taken = (history.departure - snapshot).astype(np.float64) - history.days_before[np.maximum(reading, 0)]
    least = history.days_before[history.start[1:] - 1]
    ends = least <= np.quantile(least, 0.9)
    return np.flatnonzero((reading >= 0) & (taken >= 0) & (taken < window) & (history.departure < day) & ends)


def _held_out(
    history: BookingHistory,
    fit: DemandFit,
    rivals: Rivals,
    series: IntArray,
    reading: IntArray,
    horizon: float,
    snapshot: np.datetime64,
    options: BacktestOptions,
) -> tuple[HeldOut, int]:
    """Forecast some series at some of their readings; also how many outcomes do not count."""
    departure, days_left = history.departure[series], history.days_before[reading]
    itinerary, fare_class = history.series_itinerary[series], history.series_class[series]
    found = forecast(fit, itinerary, fare_class, departure, days_left, history)
    intervals = Intervals.after(history, series, reading)
    came, reach = while_open(intervals, found.mean, _part(fit, found, intervals))
    # To drop those open for a short while would favour some outcomes: a class may close with a booking.
    kept = reach > 0
    demand = demand_times(Demand.of(found.mean[kept], found.deviation[kept]), reach[kept])
    held = HeldOut(
        itinerary=itinerary[kept],
        fare_class=fare_class[kept],
        departure=departure[kept],
        snapshot=np.full(int(kept.sum()), snapshot),
        horizon=np.full(int(kept.sum()), horizon),
        came=came[kept],
        reach=reach[kept],
        mean=demand.mean,
        deviation=demand.deviation,
        inside=coverage(demand, came[kept], share=options.share),
        chance=2.0 * (demand.expected - demand.expected_sales(demand.expected)),
        average=rivals.average(series[kept], snapshot) * reach[kept],
        last_year=rivals.last_year(series[kept], snapshot) * reach[kept],
    )
    return held, int((~kept).sum())


def _part(fit: DemandFit, found: Forecast, intervals: Intervals) -> FloatArray:
    """(m,) share of the demand to come that falls into each interval, by the fitted curves."""
    curve = found.curve[intervals.owner]
    begin, end = (fit.model.shapes.to_come(curve, days) for days in (intervals.begin, intervals.end))
    whole = found.to_come[intervals.owner]
    return np.divide(begin - end, whole, out=np.zeros(len(begin)), where=whole > 1e-12)
