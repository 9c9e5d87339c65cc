"""What came of departures after a number of days, as far as the class was open: the outcomes of a backtest."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from legworth.estimation.closing import open_part
from legworth.estimation.history import BookingHistory
from network.arrays import FloatArray, IntArray
from network.model import ranges

__all__ = ["Intervals", "readings_at", "while_open"]

FARTHEST = 1.5
"""A reading stands for a number of days if it lies at no more than this times as many."""


def readings_at(history: BookingHistory, days: float) -> IntArray:
    """(S,) the last reading of every series at so many days or more; -1 where there is none near, or it is the last."""
    early = history.days_before >= days
    count = np.add.reduceat(early.astype(np.int64), history.start[:-1]) if history.n_series else np.zeros(0, np.int64)
    reading = history.start[:-1] + count - 1
    near = history.days_before[np.maximum(reading, 0)] <= FARTHEST * days
    return np.where((count > 0) & near & (reading + 1 < history.start[1:]), reading, -1)


@dataclass(frozen=True, eq=False)
class Intervals:
    """Intervals that follow n readings.

    Attributes
    ----------
    owner
        (m,) which of the n readings each follows.
    begin, end
        (m,) days before departure.
    came
        (m,) passengers who booked in it, gross of cancellations.
    open_share
        (m,) share of it during which the class was open, NaN where unknown.
    """

    owner: IntArray
    begin: FloatArray
    end: FloatArray
    came: FloatArray
    open_share: FloatArray

    @classmethod
    def after(cls, history: BookingHistory, series: IntArray, reading: IntArray) -> Intervals:
        """Take the intervals after a reading of each of n series, positions both."""
        length = history.start[series + 1] - reading - 1
        rows = ranges(reading + 1, length)
        before = rows - 1
        gross = history.booked[rows] + history.cancelled[rows] - history.booked[before] - history.cancelled[before]
        owner = np.repeat(np.arange(len(series)), length)
        if history.open_share is not None:
            share = history.open_share[rows]
        else:
            # Closed all along if nothing came and it was not open in the intervals beside it.
            is_open = history.open[rows]
            same = owner[1:] == owner[:-1]
            beside = history.open[before]
            beside[:-1] |= same & is_open[1:]
            share = np.where(is_open, 1.0, np.where(beside | (gross > 0), np.nan, 0.0))
        return cls(
            owner=owner,
            begin=history.days_before[before],
            end=history.days_before[rows],
            came=gross,
            open_share=share,
        )


def while_open(intervals: Intervals, mean: FloatArray, expected: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Passengers who came while the class was open, and the share of demand to come that met it open.

    Of an interval that closed midway the part counts during which it was open, as if demand came evenly within it.
    What is seen until a class closes says the same of its rate, however it came to close (a stopping time). Where it is
    not known how long the class was open, the part is the expected one given the bookings in it
    (`legworth.estimation.closing.open_part`).

    Parameters
    ----------
    intervals
        Intervals after n readings.
    mean
        (n,) passengers forecast from these readings on.
    expected
        (m,) share of the demand to come, from the reading on, that falls into each interval by the booking curve.

    Returns
    -------
    came, reach
        (n,) passengers, and shares from 0 to 1.
    """
    share = intervals.open_share.copy()
    unknown = np.flatnonzero(np.isnan(share))
    share[unknown] = open_part(intervals.came[unknown], mean[intervals.owner[unknown]] * expected[unknown])
    came = np.bincount(intervals.owner, intervals.came, minlength=len(mean))
    reach = np.bincount(intervals.owner, share * expected, minlength=len(mean))
    return came.astype(np.float64), np.clip(reach, 0.0, 1.0)
