"""Simple forecasts to hold an estimate against: the average of all departures, and the same week of last year.

Both take what was booked for what was wanted, as is done by hand: bookings after the same number of days before
departure, of departures of the same product that had left by the snapshot.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from legworth.estimation.history import BookingHistory
from network.arrays import FloatArray, IntArray

__all__ = ["LAST_YEAR", "Rivals"]

LAST_YEAR, WEEK = 364, 3
"""Days back to the same weekday of last year, and days around it that still belong to its week."""


@dataclass(frozen=True, eq=False)
class Rivals:
    """Bookings after some days before departure, ready to be averaged.

    Attributes
    ----------
    key
        (S,) product and date of every series in one whole number, rising.
    span
        Days that keep products apart in it.
    first
        First date of the history.
    booked, seen
        (S + 1,) running sums of bookings and of series that hold them.
    """

    key: IntArray
    span: int
    first: np.datetime64
    booked: FloatArray
    seen: FloatArray

    @classmethod
    def of(cls, history: BookingHistory, reading: IntArray) -> Rivals:
        """Prepare them.

        Parameters
        ----------
        history
            Readings.
        reading
            (S,) reading of every series after which bookings count, -1 for none (`readings_at`).
        """
        last = history.start[1:] - 1
        gross = history.booked + history.cancelled
        seen = reading >= 0
        picked = np.where(seen, gross[last] - gross[np.maximum(reading, 0)], 0.0)
        first = history.departure.min()
        span = int((history.departure.max() - first).astype(np.int64)) + 2 * LAST_YEAR
        product = history.series_itinerary.astype(np.int64) * len(history.fare_classes) + history.series_class
        key = product * span + (history.departure - first).astype(np.int64)
        return cls(key, span, first, np.append(0.0, np.cumsum(picked)), np.append(0.0, np.cumsum(seen)))

    def average(self, series: IntArray, by: np.datetime64) -> FloatArray:
        """(n,) mean over the departures of the same product before a date; NaN where there are none."""
        product = self.key[series] // self.span
        return self._mean(product * self.span, product * self.span + self._day(by))

    def last_year(self, series: IntArray, by: np.datetime64) -> FloatArray:
        """(n,) mean over the week around the same weekday of last year, before a date; NaN where there are none."""
        product, day = self.key[series] // self.span, self.key[series] % self.span
        centre = day - LAST_YEAR
        low = product * self.span + np.maximum(centre - WEEK, 0)
        high = product * self.span + np.clip(centre + WEEK + 1, 0, self._day(by))
        return self._mean(low, np.maximum(low, high))

    def _day(self, date: np.datetime64) -> int:
        return int(np.clip((date - self.first).astype(np.int64), 0, self.span - 1))

    def _mean(self, low: IntArray, high: IntArray) -> FloatArray:
        begin, end = np.searchsorted(self.key, low), np.searchsorted(self.key, high)
        number = self.seen[end] - self.seen[begin]
        total = self.booked[end] - self.booked[begin]
        return np.asarray(np.divide(total, number, out=np.full(len(number), np.nan), where=number > 0))
