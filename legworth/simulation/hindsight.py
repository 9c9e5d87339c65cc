"""The hindsight optimum: what a control that knew all requests beforehand would have earned on each path.

It is the deterministic program on the demand that came. One model holds a column for every product; from path to path
only the columns' widths change, so HiGHS goes on from the optimum before. Every optimum is certified by `lp.certify`
from its seats and prices, as all others are.

Who cancels is never worth a seat, and who stays away but does not cancel always pays for one that stays free: the
program is one of those present. If denied boarding costs no less than the highest fare, it never pays to authorise
more seats than there are on board; if it costs less, seats authorised count as free of that cost, and the value is
still a bound, but not a tight one.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import highspy
import numpy as np
from scipy.sparse import csc_array

from lp import SeatProgram, certify, sampled_columns
from network import Network, SolverStoppedError
from network.arrays import FloatArray, IntArray

__all__ = ["Hindsight"]


@dataclass(frozen=True, eq=False)
class Plan:
    """A certified optimum for one path.

    Attributes
    ----------
    value
        Currency.
    seats
        (J,) passengers of every product.
    """

    value: float
    seats: FloatArray


class Hindsight:
    """Hindsight optima of one part of the network, path after path.

    Parameters
    ----------
    network
        Fares, paths and seats left.
    """

    def __init__(self, network: Network) -> None:
        self._network = network
        # All products at a width of one: the order of their columns is that of any demand.
        self._columns = sampled_columns(network, np.ones(network.n_products))
        make: Any = highspy.Highs  # it carries no types
        self._solver = make()
        self._solver.setOptionValue("output_flag", False)
        self._solver.setOptionValue("threads", 1)
        if len(self._columns):
            self._solver.passModel(self._model())

    def plan(self, demand: IntArray) -> Plan:
        """Solve for the demand of one path, (J,) requests.

        Raises
        ------
        SolveError
            If there is no certified optimum.
        """
        seats = np.zeros(self._network.n_products)
        count = len(self._columns)
        program = SeatProgram.of(self._network, sampled_columns(self._network, demand.astype(np.float64)))
        if count == 0 or len(program.columns) == 0:
            return Plan(0.0, seats)
        width = demand[self._columns.product].astype(np.float64)
        self._solver.changeColsBounds(count, np.arange(count, dtype=np.int32), np.zeros(count), width)
        self._solver.run()
        status = self._solver.getModelStatus()
        if status != highspy.HighsModelStatus.kOptimal:
            raise SolverStoppedError(f"highs ended a hindsight program as {self._solver.modelStatusToString(status)}")
        found = self._solver.getSolution()
        seats[self._columns.product] = np.clip(found.col_value, 0.0, width)
        # The program goes out as a minimisation, so a row's dual is the negative of a price.
        prices = np.maximum(-np.asarray(found.row_dual), 0.0)
        certificate = certify(program, seats[program.columns.product], prices)
        certificate.require()
        return Plan(certificate.primal, seats)

    def values(self, demand: IntArray) -> FloatArray:
        """Optimum of every path, (P,), currency, for (P, J) requests."""
        return np.array([self.plan(of_path).value for of_path in demand])

    def _model(self) -> highspy.HighsLp:
        network, columns = self._network, self._columns
        matrix = csc_array(csc_array(network.incidence)[:, columns.itinerary])
        model = highspy.HighsLp()
        model.num_col_, model.num_row_ = len(columns), network.n_legs
        model.col_cost_ = -columns.value
        model.col_lower_, model.col_upper_ = np.zeros(len(columns)), np.ones(len(columns))
        model.row_lower_ = np.full(network.n_legs, -np.inf)
        model.row_upper_ = network.remaining.astype(np.float64)
        model.a_matrix_.format_ = highspy.MatrixFormat.kColwise
        model.a_matrix_.start_, model.a_matrix_.index_ = matrix.indptr, matrix.indices
        model.a_matrix_.value_ = matrix.data
        return model
