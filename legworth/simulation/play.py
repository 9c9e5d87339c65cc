"""Play requests against a rule: the inner loop, array-wise over paths."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from legworth.simulation.requests import RequestPaths
from legworth.simulation.rules import Rule, Situation
from network.arrays import BoolArray, IntArray

__all__ = ["Bookings", "play"]


TOGETHER = 256
"""Requests of every path that are prepared together, so that the figures in work stay near the processor."""


@dataclass(eq=False)
class Bookings:
    """How far P paths have come.

    Attributes
    ----------
    left
        (P, L + 1) seats left; the last place is that of the leg of no importance and holds 1.
    answers
        (N + 1, P) whether each request was accepted; the last row is for none.
    """

    left: IntArray
    answers: BoolArray

    @classmethod
    def none(cls, situation: Situation, requests: RequestPaths) -> Bookings:
        """All paths at the snapshot."""
        longest, n_paths = requests.product.shape
        left = np.tile(np.append(situation.seats, 1).astype(np.int32), (n_paths, 1))
        return cls(left, np.zeros((longest + 1, n_paths), dtype=bool))

    @property
    def legs(self) -> IntArray:
        """(P, L) seats left."""
        return self.left[:, :-1]

    @property
    def accepted(self) -> BoolArray:
        """(N, P) whether each request was accepted."""
        return self.answers[:-1]


def play(
    requests: RequestPaths,
    rule: Rule,
    situation: Situation,
    bookings: Bookings,
    begin: IntArray | None = None,
    end: IntArray | None = None,
) -> None:
    """Answer requests one after the other, the n-th of every path at once.

    Parameters
    ----------
    requests
        N requests and cancellations a path at most.
    rule
        How they are answered.
    situation
        Paths of the products.
    bookings
        Seats left and answers so far; both are changed in place.
    begin, end
        (P,) first request of every path, and the first one after it that is left for later; all if not given.
    """
    longest, n_paths = requests.product.shape
    path = np.arange(n_paths)
    first = np.zeros(n_paths, dtype=np.int64) if begin is None else begin
    last = np.full(n_paths, longest) if end is None else end
    for step in range(0, int((last - first).max(initial=0)), TOGETHER):
        row = first + step + np.arange(TOGETHER)[:, None]
        row = row[: int((row < last).any(axis=1).sum())]
        within = row < last
        row = np.where(within, row, longest)
        at = np.where(within, requests.at[np.minimum(row, longest - 1), path], np.inf)
        product = np.where(within, requests.product[np.minimum(row, longest - 1), path], requests.n_products)
        if requests.returns is None:
            _sell(rule, situation, product, at, row, bookings)
        else:
            returned = np.where(within, requests.returns[np.minimum(row, longest - 1), path], -1)
            _sell(rule, situation, product, at, row, bookings, requests, returned)


def _sell(
    rule: Rule,
    situation: Situation,
    product: IntArray,
    at: npt.NDArray[np.float64],
    row: IntArray,
    bookings: Bookings,
    requests: RequestPaths | None = None,
    returned: IntArray | None = None,
) -> None:
    """Answer the requests of a stretch, (n, P), sell their seats, and take back those that are cancelled.

    ``row`` says where the answers go, and ``returned`` which earlier request is cancelled, -1 for none.
    """
    left, answers, path = bookings.left.reshape(-1), bookings.answers, np.arange(product.shape[1])
    asked = product < len(situation.fare) - 1
    back = np.zeros(0, dtype=np.int64)
    travelled = product
    if requests is not None and returned is not None:
        back = np.where(returned >= 0, returned, len(answers) - 1)
        # A cancellation gives back the seats of what was asked for.
        travelled = np.where(returned >= 0, requests.product[np.minimum(back, len(answers) - 2), path], product)
    legs = np.ascontiguousarray(situation.legs[travelled].transpose(0, 2, 1))
    judge = rule.judge(situation, product, at, legs)
    place = legs + path * bookings.left.shape[1]
    takes = legs < situation.n_legs
    for n in range(len(product)):
        seats = left.take(place[n])
        sold = judge(n, seats) & asked[n] & (seats > 0).all(axis=0)
        answers[row[n], path] = sold
        if returned is None:
            left[place[n]] = seats - (sold & takes[n])
        else:
            answers[-1] = False
            given = sold.astype(np.int32) - answers[back[n], path]
            left[place[n]] = seats - given * takes[n]
