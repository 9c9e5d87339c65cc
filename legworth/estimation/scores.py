"""Scores of a backtest: error, bias and coverage, by horizon, class and size, and where the estimate is weakest."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from legworth.estimation.backtest import Backtest, HeldOut
from network.arrays import BoolArray, FloatArray, IntArray

__all__ = ["Score", "Scores", "Weakness", "score_backtest"]

SIZES = ((0.0, 0.1), (0.1, 1.0), (1.0, 5.0), (5.0, np.inf))
"""Passengers forecast, between which forecasts are told apart."""
LISTED = 12
LEAST_CAME = 5.0
"""Passengers forecast or come below which nothing is called weak: chance alone."""


@dataclass(frozen=True)
class Score:
    """How forecasts fared.

    Attributes
    ----------
    label
        Which ones.
    forecasts
        Their number.
    came, forecast
        Passengers who came while open, and forecast.
    error
        Weighted absolute percentage error: distances of outcome and forecast over passengers who came; None if none
        came.
    chance
        The error that the forecast distributions themselves foresee, right means and all.
    bias
        Forecast less came, over came.
    coverage
        Share of the outcomes within the interval.
    compared
        Forecasts that both rivals could make, or the average alone where no departure has one of last year; the figures
        below are of these alone.
    error_same, error_last_year, error_average, bias_same, bias_last_year, bias_average
        Error and bias of the estimate and of its rivals.
    """

    label: str
    forecasts: int
    came: float
    forecast: float
    error: float | None
    chance: float | None
    bias: float | None
    coverage: float | None
    compared: int
    error_same: float | None
    error_last_year: float | None
    error_average: float | None
    bias_same: float | None
    bias_last_year: float | None
    bias_average: float | None

    def as_dict(self) -> dict[str, Any]:
        """Plain record."""
        return asdict(self)


@dataclass(frozen=True)
class Weakness:
    """A product or a day on which the estimate was far off.

    Attributes
    ----------
    what
        Its name.
    forecasts
        Forecasts made of it.
    came, forecast
        Passengers.
    deviations
        Forecast less came, in standard deviations as forecast.
    """

    what: str
    forecasts: int
    came: float
    forecast: float
    deviations: float


@dataclass(frozen=True)
class Scores:
    """All scores of a backtest.

    Attributes
    ----------
    every
        Of all forecasts by product and departure.
    together
        Of forecasts added up: all products of a city pair on a date, and all products on a date.
    by_horizon, by_class, by_size
        By days before departure, fare class and passengers forecast.
    weak_products, weak_departures
        Where forecasts were farthest off, measured by what was to be expected.
    """

    every: Score
    together: tuple[Score, ...]
    by_horizon: tuple[Score, ...]
    by_class: tuple[Score, ...]
    by_size: tuple[Score, ...]
    weak_products: tuple[Weakness, ...]
    weak_departures: tuple[Weakness, ...]

    def as_dict(self) -> dict[str, Any]:
        """Plain record."""
        return asdict(self)


def score_backtest(found: Backtest) -> Scores:
    """Score a backtest."""
    held, history = found.held, found.history
    classes = history.fare_classes
    return Scores(
        every=_score("all forecasts", held),
        together=tuple(_together(found)),
        by_horizon=tuple(
            _score(f"{days:g} day{'' if days == 1 else 's'}", held, held.horizon == days)
            for days in sorted(found.options.horizons, reverse=True)
            if np.any(held.horizon == days)
        ),
        by_class=tuple(
            _score(name, held, held.fare_class == at)
            for at, name in enumerate(classes)
            if np.any(held.fare_class == at)
        ),
        by_size=tuple(
            _score(f"{low:g} to {high:g}" if np.isfinite(high) else f"{low:g} or more", held, chosen)
            for low, high in SIZES
            if np.any(chosen := (held.mean >= low) & (held.mean < high))
        ),
        weak_products=_weak_products(found),
        weak_departures=_weak_departures(found),
    )


@dataclass(frozen=True, eq=False)
class _Sums:
    """Forecasts and outcomes to be scored, (n,) each; without ``inside`` they are sums of several."""

    came: FloatArray
    mean: FloatArray
    average: FloatArray
    last_year: FloatArray
    chance: FloatArray | None = None
    inside: FloatArray | None = None


def _ratio(part: float, whole: float) -> float | None:
    return part / whole if whole > 0 else None


def _score(label: str, held: HeldOut, chosen: BoolArray | None = None) -> Score:
    at = np.arange(len(held)) if chosen is None else np.flatnonzero(chosen)
    figures = (held.came, held.mean, held.average, held.last_year, held.chance, held.inside)
    return _scored(label, _Sums(*(figure[at] for figure in figures)))


def _scored(label: str, sums: _Sums) -> Score:
    has_last_year = bool(np.any(~np.isnan(sums.last_year)))
    both = ~np.isnan(sums.average) & (~np.isnan(sums.last_year) | (not has_last_year))
    came = sums.came[both]
    total, compared = float(sums.came.sum()), float(came.sum())

    def error(forecasts: FloatArray) -> float | None:
        return _ratio(float(np.abs(forecasts[both] - came).sum()), compared)

    def bias(forecasts: FloatArray) -> float | None:
        return (float(forecasts[both].sum()) - compared) / compared if compared > 0 else None

    return Score(
        label=label,
        forecasts=len(sums.came),
        came=total,
        forecast=float(sums.mean.sum()),
        error=_ratio(float(np.abs(sums.mean - sums.came).sum()), total),
        chance=None if sums.chance is None else _ratio(float(sums.chance.sum()), total),
        bias=(float(sums.mean.sum()) - total) / total if total > 0 else None,
        coverage=float(sums.inside.mean()) if sums.inside is not None and len(sums.inside) else None,
        compared=int(both.sum()),
        error_same=error(sums.mean),
        error_last_year=error(sums.last_year) if has_last_year else None,
        error_average=error(sums.average),
        bias_same=bias(sums.mean),
        bias_last_year=bias(sums.last_year) if has_last_year else None,
        bias_average=bias(sums.average),
    )


def _together(found: Backtest) -> Iterable[Score]:
    """Scores of forecasts added up by city pair, date and horizon, and by date and horizon."""
    held = found.held
    pair = found.pools.city_pair[held.itinerary]
    _, date = np.unique(held.departure, return_inverse=True)
    _, horizon = np.unique(held.horizon, return_inverse=True)
    for label, first in (("city pair and date", pair), ("date", np.zeros(len(held), dtype=np.int64))):
        _, group = np.unique(np.stack([first, date, horizon]), axis=1, return_inverse=True)
        figures = (held.came, held.mean, held.average, held.last_year)
        yield _scored(label, _Sums(*(np.bincount(group.ravel(), figure).astype(np.float64) for figure in figures)))


def _weak_products(found: Backtest) -> tuple[Weakness, ...]:
    held, history = found.held, found.history
    n_classes = len(history.fare_classes)
    product = held.itinerary.astype(np.int64) * n_classes + held.fare_class

    def name(key: int) -> str:
        return f"{history.itinerary[key // n_classes]} {history.fare_classes[key % n_classes]}"

    return _weakest(held, product, name)


def _weak_departures(found: Backtest) -> tuple[Weakness, ...]:
    held, pools = found.held, found.pools
    pair = pools.city_pair[held.itinerary].astype(np.int64)
    span = 1_000_000
    key = pair * span + held.departure.astype("datetime64[D]").astype(np.int64)

    def name(at: int) -> str:
        return f"{pools.name[at // span]} on {np.datetime64(at % span, 'D')}"

    return _weakest(held, key, name)


def _weakest(held: HeldOut, key: IntArray, name: Callable[[int], str]) -> tuple[Weakness, ...]:
    keys, group = np.unique(key, return_inverse=True)
    came, mean = np.bincount(group, held.came), np.bincount(group, held.mean)
    # Forecasts of one departure at several horizons hold the same passengers: their deviations add up.
    variance = np.bincount(group, held.deviation**2)
    number = np.bincount(group)
    horizons = len(np.unique(held.horizon))
    off = (mean - came) / np.sqrt(np.maximum(variance * horizons, 1e-12))
    off = np.where(np.maximum(came, mean) >= LEAST_CAME, off, 0.0)
    order = np.argsort(-np.abs(off), kind="stable")[:LISTED]
    return tuple(
        Weakness(name(int(keys[at])), int(number[at]), float(came[at]), float(mean[at]), float(off[at]))
        for at in order
        if off[at] != 0
    )
