"""Booking curves: the shape of demand over the reading intervals, by expectation-maximisation."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from legworth.estimation.increments import Increments
from network.arrays import BoolArray, FloatArray, IntArray
from network.model import BookingCurves

__all__ = ["Shapes", "cell_sums", "spread"]

BORROWED = 10.0
"""Passengers' worth of the mean curve of all that every curve borrows."""


def spread(increments: Increments, group: IntArray, n_groups: int, per_row: FloatArray) -> FloatArray:
    """Add a figure per row to every cell that the row covers: (n_groups, M) sums.

    Parameters
    ----------
    increments
        Rows.
    group
        (R,) group of every row.
    n_groups
        Number of groups.
    per_row
        (R,) figures.
    """
    width = increments.n_cells + 1
    at = group.astype(np.int64) * width
    size = n_groups * width
    begun = np.bincount(at + increments.first, per_row, minlength=size)
    ended = np.bincount(at + increments.last + 1, per_row, minlength=size)
    return np.cumsum((begun - ended).reshape(n_groups, width), axis=1)[:, :-1]


def cell_sums(
    increments: Increments, group: IntArray, n_groups: int, shape: FloatArray, reach: FloatArray, per_row: FloatArray
) -> FloatArray:
    """Share figures out over the cells of their rows in proportion to the shape: (n_groups, M) sums.

    Parameters
    ----------
    increments, group, n_groups
        As in `spread`.
    shape
        (n_groups, M) share of demand of every cell.
    reach
        (R,) share of demand of the cells of every row.
    per_row
        (R,) figures.
    """
    single = increments.first == increments.last
    if np.all(single):
        at = group.astype(np.int64) * increments.n_cells + increments.last
        return np.asarray(np.bincount(at, per_row, minlength=shape.size).reshape(shape.shape), dtype=np.float64)
    return shape * spread(increments, group, n_groups, per_row / np.maximum(reach, 1e-12))


HARDLY = 0.01
"""Part of what the best seen cell would have brought, up to which a cell says nothing of its own."""


@dataclass(frozen=True, eq=False)
class Shapes:
    """Share of demand by curve and cell.

    Attributes
    ----------
    days
        (M,) reading days, falling.
    share
        (Q, M) of every curve; each adds up to 1.
    blind
        (Q, M) True where classes of the curve were open hardly ever in the cell, so that the share is borrowed.
    """

    days: FloatArray
    share: FloatArray
    blind: BoolArray

    @classmethod
    def flat(cls, days: FloatArray, n_curves: int) -> Shapes:
        """Curves that say nothing yet."""
        share = np.full((n_curves, len(days)), 1.0 / len(days))
        return cls(days, share, np.zeros(share.shape, dtype=bool))

    @classmethod
    def fitted(cls, days: FloatArray, came: FloatArray, expected: FloatArray) -> Shapes:
        """Fit curves to passengers by cell and to what rate times openness would have brought at a share of 1.

        In every cell a curve borrows `BORROWED` passengers' worth of the curve of all times its own ratio to it in
        the cell before, so that a class that is always closed towards departure goes on as it was last seen. A cell
        that was open in no class takes the mean daily rate of its neighbours.

        Parameters
        ----------
        days
            (M,) reading days, falling.
        came, expected
            (Q, M) passengers who came, and passengers that would have come in every cell, were its share 1.
        """
        everyone = came.sum(axis=0), expected.sum(axis=0)
        known = everyone[1] > 0
        if not np.any(known):
            return cls.flat(days, len(came))
        width = np.abs(np.diff(days, prepend=2 * days[0] - days[1] if len(days) > 1 else days[0] + 1))
        pace = everyone[0][known] / everyone[1][known] / width[known]
        common = np.interp(np.arange(len(days)), np.flatnonzero(known), pace) * width
        common /= max(common.sum(), 1e-300)
        share = np.empty(came.shape)
        ratio = np.ones(len(came))
        for cell in range(len(days)):
            share[:, cell] = (came[:, cell] + BORROWED * ratio * common[cell]) / (expected[:, cell] + BORROWED)
            ratio = np.where(common[cell] > 0, share[:, cell] / max(common[cell], 1e-300), ratio)
        total = share.sum(axis=1, keepdims=True)
        blind = expected <= HARDLY * expected.max(axis=1, keepdims=True)
        return cls(days, share / np.maximum(total, 1e-300), blind)

    @property
    def cumulative(self) -> FloatArray:
        """(Q, M + 1) share that has come before every cell, and 1."""
        return np.concatenate([np.zeros((len(self.share), 1)), np.cumsum(self.share, axis=1)], axis=1)

    def reach(self, increments: Increments, curve: IntArray) -> FloatArray:
        """(R,) share of demand in the cells of every row, given its curve."""
        total = self.cumulative
        width = total.shape[1]
        flat = total.ravel()
        at = curve.astype(np.int32) * width
        return np.asarray(flat[at + increments.last + 1] - flat[at + increments.first])

    def to_come(self, curve: IntArray, days_left: FloatArray) -> FloatArray:
        """(n,) share still to come some days before departure, straight between readings, flat before the first."""
        left = np.empty(len(curve))
        total = self.cumulative[:, 1:]
        for q in range(len(self.share)):
            mine = np.flatnonzero(curve == q)
            left[mine] = 1.0 - np.interp(days_left[mine], self.days[::-1], total[q, ::-1])
        return np.where(days_left > 0, np.clip(left, 0.0, 1.0), 0.0)

    def density(self, curve: IntArray, days_left: FloatArray) -> FloatArray:
        """(n,) sum of squared shares of the cells to come, of what they hold together; 1 where nothing is to come."""
        begun = len(self.days) - np.searchsorted(self.days[::-1], days_left)
        tail = np.concatenate([np.cumsum(self.share[:, ::-1], axis=1)[:, ::-1], np.zeros((len(self.share), 1))], axis=1)
        squares = np.concatenate(
            [np.cumsum(self.share[:, ::-1] ** 2, axis=1)[:, ::-1], np.zeros((len(self.share), 1))], axis=1
        )
        left = tail[curve, begun]
        return np.where(left > 1e-9, squares[curve, begun] / np.maximum(left, 1e-9) ** 2, 1.0)

    def booking_curves(self, name: tuple[str, ...]) -> BookingCurves:
        """Return the curves as a table of readings that ends with all of demand on day 0."""
        share = np.minimum(self.cumulative[:, 1:], 1.0)
        share[:, -1] = 1.0
        days = self.days
        if days[-1] > 0:
            days, share = np.append(days, 0.0), np.column_stack([share, np.ones(len(share))])
        return BookingCurves(
            name=np.array(name, dtype=object),
            start=np.arange(len(share) + 1) * len(days),
            days_before=np.tile(days, len(share)),
            share=share.ravel(),
        )
