"""Rows of a history table as arrays, sorted into series."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import pandas as pd

from legworth.estimation.history import BookingHistory
from network.arrays import BoolArray, FloatArray, IntArray, NameArray

__all__ = ["Readings"]


@dataclass(frozen=True, eq=False)
class Readings:
    """Rows of a history table as arrays, (R,) each.

    Attributes
    ----------
    file, line_of
        Where they come from, and the line of a row.
    departure
        Days since 1970-01-01.
    itinerary, fare_class
        Positions in the names of the table, and among the fare classes.
    days_before, booked, cancelled, open, open_share
        As the table says; ``cancelled`` and ``open_share`` are None without the column, open_share NaN where blank.
    row
        Row of the table of every reading, once sorted; None before.
    """

    file: str
    line_of: Callable[[int], int]
    departure: IntArray
    itinerary: IntArray
    fare_class: IntArray
    days_before: FloatArray
    booked: FloatArray
    cancelled: FloatArray | None
    open: BoolArray
    open_share: FloatArray | None
    row: IntArray | None

    def sorted(self, kept: BoolArray) -> Readings:
        """Keep some rows, sorted by itinerary, class, departure and falling days before departure."""
        rows = None if kept.all() else np.flatnonzero(kept)
        code, days = pd.factorize(self.days_before, sort=True)
        spans = (int(self.fare_class.max()) + 1, int(self.departure.max() - self.departure.min()) + 1, len(days))
        key = self.itinerary.astype(np.int64)
        key = (key * spans[0] + self.fare_class) * spans[1] + (self.departure - self.departure.min())
        key = key * spans[2] + (spans[2] - 1 - code)
        key = key if rows is None else key[rows]
        order = np.arange(len(key)) if np.all(key[1:] >= key[:-1]) else np.argsort(key, kind="stable")
        row = order if rows is None else rows[order]
        return replace(
            self,
            departure=self.departure[row],
            itinerary=self.itinerary[row],
            fare_class=self.fare_class[row],
            days_before=self.days_before[row],
            booked=self.booked[row],
            cancelled=None if self.cancelled is None else self.cancelled[row],
            open=self.open[row],
            open_share=None if self.open_share is None else self.open_share[row],
            row=row,
        )

    @cached_property
    def first(self) -> BoolArray:
        """(R,) whether a sorted reading is the first of its series."""
        same = self.itinerary[1:] == self.itinerary[:-1]
        same &= self.fare_class[1:] == self.fare_class[:-1]
        same &= self.departure[1:] == self.departure[:-1]
        return np.append(True, ~same)[: len(self.departure)]

    @cached_property
    def start(self) -> IntArray:
        """(S + 1,) where series begin."""
        return np.append(np.flatnonzero(self.first), len(self.first))

    @cached_property
    def series(self) -> IntArray:
        """(R,) series of every sorted reading."""
        return np.cumsum(self.first, dtype=np.int32) - np.int32(1)

    @cached_property
    def gross(self) -> FloatArray:
        """(R,) passengers booked by then, those included who cancelled."""
        return self.booked if self.cancelled is None else self.booked + self.cancelled

    def history(self, names: NameArray, fare_classes: tuple[str, ...]) -> BookingHistory:
        """Sorted readings as a history; names that no reading uses are left out."""
        at = self.start[:-1]
        used, itinerary = np.unique(self.itinerary[at], return_inverse=True)
        through, share, begins_open = self._through()
        nobody = np.broadcast_to(0.0, len(self.booked))
        return BookingHistory(
            itinerary=names[used],
            fare_classes=fare_classes,
            departure=self.departure[at].astype("datetime64[D]"),
            series_itinerary=itinerary.astype(np.int32),
            series_class=self.fare_class[at].astype(np.int32),
            start=self.start,
            days_before=self.days_before,
            booked=self.booked,
            cancelled=nobody if self.cancelled is None else self.cancelled,
            open=through,
            open_share=share,
            begins_open=begins_open,
        )

    def _through(self) -> tuple[BoolArray, FloatArray, BoolArray]:
        """Whether the class was open all through an interval, in which share of it (NaN if unknown), at its beginning.

        The interval before the first reading is taken to be like the moment that ends it.
        """
        before = np.append(True, self.open[:-1])
        before = np.where(self.first, self.open, before)
        through = self.open & before
        rise = np.diff(self.gross, prepend=0.0)
        closed = ~self.open & ~before & ~(np.where(self.first, self.gross, rise) > 0)
        share = np.where(through, 1.0, np.where(closed, 0.0, np.nan))
        if self.open_share is None:
            return through, share, before
        known = ~np.isnan(self.open_share)
        share = np.where(known, self.open_share, share)
        return share >= 1.0, share, before
