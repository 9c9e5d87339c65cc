"""Booking history drawn from a known truth: products that share the seats of one departure a day."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from legworth.estimation.estimate import Pools
from legworth.estimation.history import BookingHistory
from legworth.estimation.regression import YEAR
from network.arrays import BoolArray, FloatArray, IntArray

DAYS = np.array([90.0, 60, 45, 30, 21, 14, 10, 7, 5, 3, 2, 1, 0])
CLASSES = ("A", "B", "C")
SHARES = np.array(
    [
        [0.0, 0.01, 0.02, 0.04, 0.07, 0.12, 0.2, 0.3, 0.42, 0.58, 0.7, 0.84, 1.0],
        [0.01, 0.04, 0.08, 0.16, 0.27, 0.42, 0.55, 0.68, 0.78, 0.88, 0.93, 0.97, 1.0],
        [0.04, 0.14, 0.25, 0.42, 0.56, 0.7, 0.8, 0.87, 0.92, 0.96, 0.98, 0.99, 1.0],
    ]
)


@dataclass(frozen=True, eq=False)
class Drawn:
    """A history and the truth behind it.

    Attributes
    ----------
    history, pools
        What an estimate sees.
    rate
        (I, K) mean demand of a departure without effects.
    dispersion
        (I, K) variance of a departure's own factor.
    late
        (I,) whether the itinerary books late.
    effect
        (D,) factor of every date.
    demand
        (I, K, D, M) requests by cell.
    """

    history: BookingHistory
    pools: Pools
    rate: FloatArray
    dispersion: FloatArray
    late: BoolArray
    effect: FloatArray
    demand: IntArray


def draw_history(
    seed: int,
    *,
    n_itineraries: int = 40,
    n_pairs: int = 8,
    n_dates: int = 200,
    mean: float = 0.8,
    dispersion: float = 0.8,
    spread: float = 0.0,
    lasting: bool = True,
    two_kinds: bool = False,
    seats: float | None = 0.85,
    weekday: bool = False,
    season: float = 0.0,
    first: str = "2025-01-06",
) -> Drawn:
    """Draw a history.

    Requests of a departure come one by one; every class has a booking limit on the seats sold by all, nested, so
    that classes close because of what all have booked, in the middle of intervals. ``seats`` is the capacity as a
    part of mean demand; None never closes.
    """
    rng = np.random.default_rng(seed)
    n_classes, n_cells = len(CLASSES), len(DAYS)
    pair = np.arange(n_itineraries) % n_pairs
    level = rng.lognormal(0, 0.7, (n_pairs, 1))[pair] * rng.lognormal(0, 0.3, (n_itineraries, n_classes))
    rate = mean * level * np.array([0.6, 1.0, 1.4])
    day = np.datetime64(first, "D") + np.arange(n_dates)
    effect = np.ones(n_dates)
    if weekday:
        effect = np.array([1.2, 0.9, 0.8, 0.9, 1.4, 0.7, 1.1])[(day.astype(np.int64) + 3) % 7]
    effect = effect * np.exp(season * np.cos(2 * np.pi * day.astype(np.int64) / YEAR))
    variance = dispersion * rng.lognormal(0.0, spread, rate.shape)
    late = (pair % 2 == 1) if two_kinds else np.zeros(n_itineraries, dtype=bool)
    share = np.diff(np.where(late[:, None, None], SHARES**3, SHARES), axis=2, prepend=0.0)
    mean_by_cell = (rate[:, :, None] * share)[:, :, None, :] * effect[:, None]
    own: FloatArray | float = 1.0
    if dispersion:
        shape = 1 / variance[:, :, None, None]
        size = (*rate.shape, n_dates, 1 if lasting else n_cells)
        own = rng.gamma(shape, 1 / shape, size)
    demand = rng.poisson(mean_by_cell * own)
    booked, is_open = _sell(rng, demand, seats, float(rate.sum()))
    n_series = n_itineraries * n_classes * n_dates
    shape = (n_itineraries, n_classes, n_dates)
    history = BookingHistory(
        itinerary=np.array([f"R{i:03d}" for i in range(n_itineraries)], dtype=object),
        fare_classes=CLASSES,
        departure=np.broadcast_to(day, shape).ravel(),
        series_itinerary=np.broadcast_to(np.arange(n_itineraries)[:, None, None], shape).ravel(),
        series_class=np.broadcast_to(np.arange(n_classes)[:, None], shape).ravel(),
        start=np.arange(n_series + 1) * n_cells,
        days_before=np.tile(DAYS, n_series),
        booked=np.cumsum(booked, axis=3).ravel().astype(np.float64),
        cancelled=np.zeros(n_series * n_cells),
        open=is_open.ravel(),
    )
    names = np.array([f"O{p}-D{p}" for p in range(n_pairs)], dtype=object)
    return Drawn(history, Pools(pair, names), rate, variance, late, effect, demand)


def _sell(rng: np.random.Generator, demand: IntArray, seats: float | None, mean: float) -> tuple[IntArray, np.ndarray]:
    """Bookings by cell and whether the class was open throughout, all dates side by side."""
    if seats is None:
        return demand, np.ones(demand.shape, dtype=bool)
    _, n_classes, n_dates, n_cells = demand.shape
    limit = np.floor(seats * mean * np.array([1.0, 0.85, 0.65]))[:n_classes]
    booked = np.zeros_like(demand)
    is_open = np.ones(demand.shape, dtype=bool)
    for date in range(n_dates):
        sold = 0
        for cell in range(n_cells):
            i, k = np.nonzero(demand[:, :, date, cell])
            ask = np.repeat(np.stack([i, k], axis=1), demand[i, k, date, cell], axis=0)
            for at in rng.permutation(len(ask)):
                if sold < limit[ask[at, 1]]:
                    sold += 1
                    booked[ask[at, 0], ask[at, 1], date, cell] += 1
            is_open[:, sold >= limit, date, cell:] = False
    return booked, is_open
