"""Readings as increments on one grid of days: what was booked in every interval, and whether it could be."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import pandas as pd

from legworth.estimation.history import BookingHistory
from network.arrays import BoolArray, FloatArray, IntArray
from network.model import ranges

__all__ = ["MOST_CELLS", "Increments"]

MOST_CELLS = 400
"""Cells of the grid; where history has more reading days, each is moved to the nearest of so many."""


@dataclass(frozen=True, eq=False)
class Increments:
    """Bookings, gross of cancellations, between the readings of series.

    Cell i of the grid reaches from the reading day ``days[i - 1]`` to ``days[i]``, cell 0 from the beginning of
    sales. A row closes the interval since the row before it, cells ``first`` to ``last``: more than one where
    readings are missing.

    Attributes
    ----------
    days
        (M,) days before departure of the grid, falling.
    series
        (S,) positions, among the series wanted, of those that have a reading.
    start
        (S + 1,) where the rows of every series begin.
    first, last
        (R,) cells.
    count
        (R,) passengers.
    open
        (R,) whether the class was open throughout the interval.
    share
        (R,) share of the interval during which it was open: 1 where ``open``, NaN where that is not known.
    edge
        (R,) whether it was not open throughout, for a share not known, though open when the interval began.
    """

    days: FloatArray
    series: IntArray
    start: IntArray
    first: IntArray
    last: IntArray
    count: FloatArray
    open: BoolArray
    share: FloatArray
    edge: BoolArray

    @classmethod
    def of(
        cls,
        history: BookingHistory,
        as_of: np.datetime64 | None = None,
        series: IntArray | None = None,
        least_days: FloatArray | None = None,
        days: FloatArray | None = None,
    ) -> Increments:
        """Cut readings into increments.

        Parameters
        ----------
        history
            Readings.
        as_of
            Readings of later days are left out.
        series
            Positions of the series wanted, in any order; all if left out.
        least_days
            Days before departure, one a wanted series; later readings are left out.
        days
            Grid to use, falling; by default the reading days that occur.
        """
        chosen = np.arange(len(history.departure)) if series is None else np.asarray(series)
        length = np.diff(history.start)[chosen]
        whole = series is None
        rows = slice(None) if whole else ranges(history.start[chosen], length)
        days_before = history.days_before[rows]
        known = np.ones(len(days_before), dtype=bool)
        if as_of is not None:
            ahead = (history.departure[chosen] - as_of.astype("datetime64[D]")).astype(np.float64)
            known &= days_before >= np.repeat(ahead, length)
        if least_days is not None:
            known &= days_before >= np.repeat(least_days, length)
        owner = np.repeat(np.arange(len(chosen), dtype=np.int32), length)
        gross = history.booked[rows] + history.cancelled[rows]
        is_open = history.open[rows]
        share = np.full(len(is_open), np.nan) if history.open_share is None else history.open_share[rows]
        share = np.where(is_open, 1.0, share)
        begins_open = np.append(False, is_open[:-1]) if history.begins_open is None else history.begins_open[rows]
        if not np.all(known):
            days_before, owner, gross = days_before[known], owner[known], gross[known]
            is_open, share, begins_open = is_open[known], share[known], begins_open[known]
        grid, cell = _grid(days_before) if days is None else (days, nearest(days, days_before))
        begins = np.ones(len(owner), dtype=bool)
        begins[1:] = owner[1:] != owner[:-1]
        count = np.maximum(np.diff(gross, prepend=0.0), 0.0)
        count[begins] = gross[begins]
        again = np.zeros(len(owner), dtype=bool)
        again[1:] = ~begins[1:] & (cell[1:] <= cell[:-1])
        if np.any(again):
            heads = np.flatnonzero(~again)
            count, is_open = np.add.reduceat(count, heads), np.logical_and.reduceat(is_open, heads)
            share = np.where(is_open, 1.0, np.where(np.diff(np.append(heads, len(again))) > 1, np.nan, share[heads]))
            cell, owner, begins, begins_open = cell[heads], owner[heads], begins[heads], begins_open[heads]
        first = np.zeros(len(cell), dtype=np.int16)
        first[1:] = cell[:-1] + 1
        first[begins] = 0
        heads = np.flatnonzero(begins)
        return cls(
            days=grid,
            series=owner[heads].astype(np.int64),
            start=np.append(heads, len(owner)),
            first=first,
            last=cell,
            count=count,
            open=is_open,
            share=share,
            edge=begins_open & np.isnan(share) & ~begins,
        )

    def __len__(self) -> int:
        return len(self.count)

    @property
    def n_cells(self) -> int:
        """Number of cells M."""
        return len(self.days)

    @cached_property
    def owner(self) -> IntArray:
        """(R,) position in ``series`` of every row."""
        return np.repeat(np.arange(len(self.series), dtype=np.int32), np.diff(self.start))

    def per_series(self, per_row: FloatArray) -> FloatArray:
        """(S,) sums of a figure per row."""
        return np.add.reduceat(per_row, self.start[:-1]) if len(self.series) else np.zeros(0)

    def take(self, chosen: IntArray) -> Increments:
        """Return the rows of some series, given as rising positions in ``series``."""
        length = np.diff(self.start)[chosen]
        rows = ranges(self.start[chosen], length)
        return Increments(
            days=self.days,
            series=self.series[chosen],
            start=np.append(0, np.cumsum(length)),
            first=self.first[rows],
            last=self.last[rows],
            count=self.count[rows],
            open=self.open[rows],
            share=self.share[rows],
            edge=self.edge[rows],
        )


def nearest(days: FloatArray, days_before: FloatArray) -> IntArray:
    """Position in falling days of the one nearest to each of some days."""
    rising = days[::-1]
    middle = (rising[1:] + rising[:-1]) / 2
    return (len(days) - 1 - np.searchsorted(middle, days_before)).astype(np.int16)


def _grid(days_before: FloatArray) -> tuple[FloatArray, IntArray]:
    """Falling reading days, and the position of every reading among them."""
    code, distinct = pd.factorize(days_before)
    order = np.argsort(-distinct)
    if len(distinct) > MOST_CELLS:
        at = np.linspace(0, len(distinct) - 1, MOST_CELLS).round().astype(np.int64)
        days = distinct[order][at]
        return days, nearest(days, days_before)
    rank = np.empty(len(order), dtype=np.int16)
    rank[order] = np.arange(len(order))
    return distinct[order], rank[code]
