"""What a path of bookings comes to: revenue, load, refusals, and how bookings built up."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
import numpy.typing as npt

from legworth.simulation.requests import RequestPaths
from legworth.simulation.rules import Situation
from network import Network
from network.arrays import BoolArray, FloatArray, IntArray

__all__ = ["BINS", "Book", "Tally", "tally"]


BINS = 40
"""Equal stretches of the horizon by which the build-up of bookings is told."""


@dataclass(frozen=True, eq=False)
class Book:
    """How the products of a part of the network are counted.

    Attributes
    ----------
    connecting
        (J + 1,) whether a product has several legs.
    high
        (J + 1,) whether its fare class is in the best third by order.
    fare_class
        (J + 1,) position of its fare class.
    n_classes
        Number of fare classes of the whole network.
    horizon
        Days from the snapshot to the last departure of the whole network.
    on_board
        (L,) seats on board that are free at the snapshot.
    denied_cost
        Currency for a passenger denied boarding on a leg.
    """

    connecting: BoolArray
    high: BoolArray
    fare_class: IntArray
    n_classes: int
    horizon: float
    on_board: IntArray
    denied_cost: float = 0.0

    @classmethod
    def of(cls, network: Network, horizon: float, denied_cost: float = 0.0) -> Book:
        """Count the products of a network."""
        n_classes = len(network.fare_classes)
        several = np.diff(network.path_start)[network.product_itinerary] > 1
        best = network.product_class < max(1, -(-n_classes // 3))
        return cls(
            connecting=np.append(several, False),
            high=np.append(best, False),
            fare_class=np.append(network.product_class, 0).astype(np.int64),
            n_classes=n_classes,
            horizon=horizon,
            on_board=network.remaining,
            denied_cost=denied_cost,
        )


@dataclass(frozen=True, eq=False)
class Tally:
    """Figures of every path, (P,) each but the last; those of separate parts add up.

    Attributes
    ----------
    revenue
        Fares of bookings not cancelled, less what denied boarding costs, currency.
    passengers, connecting
        Passengers booked at departure, and those of them with several legs.
    refused, refused_high
        Requests refused, and those of them in the best third of the fare classes.
    occupied
        Seats taken on all legs by passengers booked after the snapshot.
    spoiled
        Seats empty at departure that a refused request wanted: the lesser of the empty seats of a leg and the
        requests over it that were refused, summed over legs.
    cancelled, denied
        Bookings cancelled, and passengers denied boarding, once for each leg.
    built_up
        (P, C, B) passengers accepted by fare class and stretch of the horizon, those included who cancel later.
    """

    revenue: FloatArray
    passengers: FloatArray
    connecting: FloatArray
    refused: FloatArray
    refused_high: FloatArray
    occupied: FloatArray
    spoiled: FloatArray
    cancelled: FloatArray
    denied: FloatArray
    built_up: FloatArray

    def __add__(self, other: Tally) -> Tally:
        return Tally(*(getattr(self, field.name) + getattr(other, field.name) for field in fields(self)))

    @classmethod
    def joined(cls, parts: list[Tally]) -> Tally:
        """Put paths one after the other."""
        return cls(*(np.concatenate([getattr(part, field.name) for part in parts]) for field in fields(cls)))


def tally(requests: RequestPaths, accepted: BoolArray, situation: Situation, book: Book) -> Tally:
    """Count the answers of one control.

    Parameters
    ----------
    requests
        N requests a path at most, P paths.
    accepted
        (N, P) answers.
    situation, book
        Paths and fares of the products, and how to count them.
    """
    product = requests.product
    refused = requests.real & ~accepted
    stays = accepted if requests.cancelled is None else accepted & ~requests.cancelled
    present = stays if requests.absent is None else stays & ~requests.absent
    boarding = _by_leg(requests, present, situation)
    occupied = np.minimum(boarding, book.on_board)
    denied = (boarding - occupied).sum(axis=1).astype(np.float64)
    empty = book.on_board - occupied
    spoiled = np.minimum(_by_leg(requests, refused, situation), empty)

    def total(per_product: npt.NDArray[np.generic], chosen: BoolArray) -> FloatArray:
        return np.asarray(np.where(chosen, per_product[product], 0).sum(axis=0), dtype=np.float64)

    return Tally(
        revenue=total(situation.fare, stays) - book.denied_cost * denied,
        passengers=stays.sum(axis=0).astype(np.float64),
        connecting=total(book.connecting, stays),
        refused=refused.sum(axis=0).astype(np.float64),
        refused_high=total(book.high, refused),
        occupied=occupied.sum(axis=1).astype(np.float64),
        spoiled=spoiled.sum(axis=1).astype(np.float64),
        cancelled=(accepted & ~stays).sum(axis=0).astype(np.float64),
        denied=denied,
        built_up=_built_up(requests, accepted, book),
    )


def _by_leg(requests: RequestPaths, chosen: BoolArray, situation: Situation) -> IntArray:
    """(P, L) how many of the requests chosen, (N, P), use each leg."""
    width = situation.n_legs + 1
    row, path = np.nonzero(chosen)
    count = np.zeros(requests.n_paths * width, dtype=np.int64)
    for legs in situation.legs[requests.product[row, path]].T:
        count += np.bincount(path * width + legs, minlength=len(count))
    return count.reshape(requests.n_paths, width)[:, :-1]


def _built_up(requests: RequestPaths, accepted: BoolArray, book: Book) -> FloatArray:
    row, path = np.nonzero(accepted)
    at = requests.at[row, path] / book.horizon if book.horizon > 0 else np.zeros(len(row))
    stretch = np.clip((at * BINS).astype(np.int64), 0, BINS - 1)
    key = (path * book.n_classes + book.fare_class[requests.product[row, path]]) * BINS + stretch
    count = np.bincount(key, minlength=requests.n_paths * book.n_classes * BINS)
    return count.reshape(requests.n_paths, book.n_classes, BINS).astype(np.float64)
