"""The same programs by `scipy.optimize.linprog`, whole and column by column.

Nothing of the solution path of `lp` is used: the matrix is built from the paths of the network, and prices
are scipy's row duals, or vertices of the polyhedron of all optimal duals.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import OptimizeResult, linprog
from scipy.sparse import csc_array, csr_array, eye_array, hstack, vstack

from lp import SeatProgram, deterministic_columns, probabilistic_columns
from network import Network
from network.arrays import FloatArray

__all__ = ["OptimalFace", "Reference", "programs", "reference", "value"]

TIGHT = {"primal_feasibility_tolerance": 1e-10, "dual_feasibility_tolerance": 1e-10}


@dataclass(frozen=True)
class Reference:
    """Optimal value, seats (K,) and prices (L,)."""

    value: float
    seats: FloatArray
    prices: FloatArray


def programs(network: Network) -> dict[str, SeatProgram]:
    """Return the deterministic and the probabilistic program of a network."""
    return {
        "deterministic": SeatProgram.of(network, deterministic_columns(network)),
        "probabilistic": SeatProgram.of(network, probabilistic_columns(network)),
    }


def _legs_by_columns(program: SeatProgram) -> csr_array:
    """(L, K): 1 where the leg is on the path of the column."""
    network, columns = program.network, program.columns
    rows, places = [], []
    for column, itinerary in enumerate(columns.itinerary.tolist()):
        path = network.path_leg[network.path_start[itinerary] : network.path_start[itinerary + 1]].tolist()
        rows += path
        places += [column] * len(path)
    return csr_array((np.ones(len(rows)), (rows, places)), shape=(len(program.capacity), len(columns)))


def _solved(**problem: object) -> OptimizeResult:
    result = linprog(method="highs", options=TIGHT, **problem)
    assert result.status == 0, result.message
    return result


def reference(program: SeatProgram, capacity: FloatArray | None = None) -> Reference:
    """Solve the whole program, at other capacities, (L,), if given."""
    seats = program.capacity if capacity is None else capacity
    columns = program.columns
    if len(columns) == 0:
        return Reference(0.0, np.zeros(0), np.zeros(len(seats)))
    width = np.column_stack([np.zeros(len(columns)), columns.width])
    result = _solved(c=-columns.value, A_ub=_legs_by_columns(program), b_ub=seats, bounds=width)
    return Reference(-result.fun, result.x, -result.ineqlin.marginals)


def value(program: SeatProgram, capacity: FloatArray) -> float:
    """Optimal value at some capacities, (L,)."""
    return reference(program, capacity).value


class OptimalFace:
    """All optimal duals of a program, by the definition: feasible in the dual, and worth no more than the optimum.

    Variables are the prices p of the legs and the worth u of the columns::

        p >= 0, u >= 0, price of the path of k + u_k >= v_k, c.p + w.u <= V
    """

    def __init__(self, program: SeatProgram) -> None:
        columns = program.columns
        self.size, optimum = len(program.capacity), reference(program).value
        path = csc_array(_legs_by_columns(program).T)
        covers = hstack([-path, -eye_array(len(columns))])
        worth = csr_array(np.concatenate([program.capacity, columns.width])[None, :])
        self.matrix = csr_array(vstack([covers, worth]))
        self.limit = np.append(-columns.value, optimum + 1e-12 * max(optimum, 1.0))

    def least(self, weight: FloatArray, floor: tuple[FloatArray, float] | None = None) -> tuple[float, FloatArray]:
        """Least ``weight @ p``, and p, (L,); with a floor ``(a, s)`` among those with ``a @ p >= s``."""
        rest = np.zeros(self.matrix.shape[1] - self.size)
        matrix, limit = self.matrix, self.limit
        if floor is not None:
            matrix = csr_array(vstack([matrix, csr_array(np.concatenate([-floor[0], rest])[None, :])]))
            limit = np.append(limit, -floor[1])
        result = _solved(c=np.concatenate([weight, rest]), A_ub=matrix, b_ub=limit, bounds=(0, None))
        return float(result.fun), result.x[: self.size]
