"""Proof of an optimum kept beside its results: seats per product, so that it can be certified again without a solver.

A part whose inputs are those of last night is not solved again, but nor is it believed: the columns are built from
tonight's data, the seats of last night laid into them, and primal and dual certified as after any solve.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from legworth.refresh.part_folder import product_names
from lp import (
    Certificate,
    LpOptions,
    Method,
    SeatColumns,
    SeatProgram,
    certify,
    deterministic_columns,
    probabilistic_columns,
)
from network import Network
from network.arrays import FloatArray

__all__ = ["Proof", "certify_again", "filled_columns", "proof_table"]


@dataclass(frozen=True, eq=False)
class Proof:
    """An optimum of one program.

    Attributes
    ----------
    allotted
        (J,) seats set aside for every product.
    bid_price, next_seat
        (L,) published prices, currency.
    """

    allotted: FloatArray
    bid_price: FloatArray
    next_seat: FloatArray

    def fits(self, network: Network) -> bool:
        """Whether there is one finite figure for every product and leg."""
        shapes = self.allotted.shape == (network.n_products,) and self.bid_price.shape == self.next_seat.shape
        if not shapes or self.bid_price.shape != (network.n_legs,):
            return False
        return all(bool(np.isfinite(figures).all()) for figures in (self.allotted, self.bid_price, self.next_seat))


def proof_table(network: Network, allotted: FloatArray, allotted_mean_demand: FloatArray) -> pa.Table:
    """Make the table ``proof``: (J,) seats set aside by the program priced, and by the deterministic one."""
    return pa.table({**product_names(network), "allotted": allotted, "allotted_mean_demand": allotted_mean_demand})


def certify_again(network: Network, proof: Proof, options: LpOptions) -> Certificate | None:
    """Certify an optimum kept earlier against the data as they are now.

    Parameters
    ----------
    network
        The network, as read now.
    proof
        What was kept.
    options
        Deterministic or probabilistic program.

    Returns
    -------
    Certificate or None
        That of the bid prices; None if it, or that of the next-seat prices, does not hold.
    """
    if options.method is Method.RANDOMISED:
        raise ValueError("the randomised program has no one optimum to certify")
    if not proof.fits(network):
        return None
    deterministic = options.method is Method.DETERMINISTIC
    columns = deterministic_columns(network) if deterministic else probabilistic_columns(network, options.tail)
    program = SeatProgram.of(network, columns)
    seats = filled_columns(columns, proof.allotted)
    # A leg without seats is published with its next-seat price. What its last-seat price would be costs nothing and
    # binds nothing as long as it is high enough, so the highest value there is completes the proof.
    closed = network.remaining == 0
    found = certify(program, seats, np.where(closed, program.scale, proof.bid_price))
    beside = certify(program, seats, proof.next_seat)
    same = np.array_equal(proof.bid_price[closed], proof.next_seat[closed])
    complete = bool(np.isclose(columns.sales(seats, network.n_products), proof.allotted, rtol=0, atol=1e-6).all())
    return found if found.holds and beside.holds and same and complete else None


def filled_columns(columns: SeatColumns, allotted: FloatArray) -> FloatArray:
    """Lay the seats of every product, (J,), into its columns, the most valuable first, giving (K,)."""
    order = np.argsort(columns.product, kind="stable")
    product, width = columns.product[order], columns.width[order]
    before = np.cumsum(width) - width
    begins = np.append(True, np.diff(product) != 0)[: len(product)]
    before -= before[begins][np.cumsum(begins) - 1] if len(product) else 0.0
    seats = np.empty(len(columns))
    seats[order] = np.clip(allotted[product] - before, 0.0, width)
    return seats
