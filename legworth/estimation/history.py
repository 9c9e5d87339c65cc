"""Booking history as arrays: what was booked by when, and whether the class was open."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from network.arrays import BoolArray, FloatArray, IntArray, NameArray, TimeArray
from network.model import ranges

__all__ = ["BookingHistory"]


@dataclass(frozen=True, eq=False)
class BookingHistory:
    """Readings of past and present departures, series by series.

    A series is one itinerary in one fare class on one departure date. Its readings are the rows
    ``start[s]:start[s + 1]``, days before departure falling. Reading r closes the interval since the reading before
    it; the first reading of a series closes the interval since sales began.

    Attributes
    ----------
    itinerary
        (I,) names under which history is kept (``history_name`` of the itineraries, by default their names).
    fare_classes
        Names of the fare classes, best first, as in the network.
    departure
        (S,) date of departure of the first leg, datetime64[D].
    series_itinerary, series_class
        (S,) positions in ``itinerary`` and ``fare_classes``. Series are sorted by itinerary, class and departure.
    start
        (S + 1,) where the readings of every series begin.
    days_before
        (R,) days before departure of every reading, falling within a series, never negative.
    booked
        (R,) passengers booked by then, net of cancellations.
    cancelled
        (R,) passengers who had cancelled by then; all 0 without the column.
    open
        (R,) whether the class was open during the whole interval that the reading closes.
    open_share
        (R,) share of the time of that interval during which it was open, NaN where that is not known; None where
        it is known of no reading. Where ``open`` holds it is 1.
    begins_open
        (R,) whether the class is known to have been open when that interval began; None where the intervals that
        follow one open throughout are all that is known of it.
    """

    itinerary: NameArray
    fare_classes: tuple[str, ...]
    departure: TimeArray
    series_itinerary: IntArray
    series_class: IntArray
    start: IntArray
    days_before: FloatArray
    booked: FloatArray
    cancelled: FloatArray
    open: BoolArray
    open_share: FloatArray | None = None
    begins_open: BoolArray | None = None

    @property
    def n_series(self) -> int:
        """Number of series S."""
        return len(self.departure)

    @property
    def n_readings(self) -> int:
        """Number of readings R."""
        return len(self.days_before)

    @cached_property
    def series(self) -> IntArray:
        """(R,) series of every reading."""
        return np.repeat(np.arange(self.n_series, dtype=np.int32), np.diff(self.start))

    def chosen(self, series: IntArray) -> BookingHistory:
        """Return the history of some series alone, given as rising positions."""
        series = np.asarray(series)
        length = np.diff(self.start)[series]
        rows = ranges(self.start[series], length)
        return replace(
            self,
            departure=self.departure[series],
            series_itinerary=self.series_itinerary[series],
            series_class=self.series_class[series],
            start=np.append(0, np.cumsum(length)),
            days_before=self.days_before[rows],
            booked=self.booked[rows],
            cancelled=self.cancelled[rows],
            open=self.open[rows],
            open_share=None if self.open_share is None else self.open_share[rows],
            begins_open=None if self.begins_open is None else self.begins_open[rows],
        )
