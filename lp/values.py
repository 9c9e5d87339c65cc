"""Exact value of seats: V(c) for any seats c, by solving again from one present optimum.

A bid price is a first-order figure. What a party of n on a path displaces is V(c) - V(c - n a), and what a
bigger vehicle earns is V(c + n e) - V(c); neither is n times a price. All such questions about one network
share its columns and start from the prices of its present optimum.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from lp.certificate import Certificate, certify
from lp.columns import SeatColumns, deterministic_columns, probabilistic_columns
from lp.pricing_out import FENCE, solve_priced_out
from lp.problem import SeatProgram
from lp.smoothing import smoothed_prices
from lp.solution import LpOptions, Method
from lp.solvers import SolverOptions
from network import Network
from network.arrays import FloatArray

__all__ = ["SeatValue", "SeatValues"]


@dataclass(frozen=True, eq=False)
class SeatValue:
    """A certified optimum at some number of seats.

    Attributes
    ----------
    value
        V, currency.
    sales
        (J,) passengers expected of every product within the seats that the optimum sets aside for it.
    certificate
        Proof of the optimum.
    """

    value: float
    sales: FloatArray
    certificate: Certificate


@dataclass(frozen=True, eq=False)
class SeatValues:
    """The optimal value as a function of seats, around the present optimum of a network.

    Make one with `SeatValues.of`, then ask as often as you like.

    Attributes
    ----------
    program
        The program at the present seats; its columns serve any seats.
    prices, fence
        (L,) approximate bid prices at the present seats, and the distance of the fences around them, currency.
    present
        The present optimum.
    solver
        The solver.
    """

    program: SeatProgram
    prices: FloatArray
    fence: float
    present: SeatValue
    solver: SolverOptions

    @classmethod
    def of(cls, network: Network, options: LpOptions | None = None, start: FloatArray | None = None) -> SeatValues:
        """Solve the network at its present seats.

        Parameters
        ----------
        network
            The network, best one component of it.
        options
            Deterministic or probabilistic program, and the solver.
        start
            (L,) prices to start from.

        Raises
        ------
        ValueError
            For the randomised program, whose value is a mean over samples.
        SolveError
            If there is no certified optimum.
        """
        options = options or LpOptions()
        program = SeatProgram.of(network, _columns(network, options))
        prices, window = np.zeros(len(program.capacity)), 1.0
        if len(program.columns):
            prices, window = smoothed_prices(program, start)
        present = _optimum(program, prices, FENCE * window, options.solver)
        return cls(program, prices, FENCE * window, present, options.solver)

    def at(self, remaining: npt.ArrayLike) -> SeatValue:
        """Optimum at other remaining seats, (L,).

        Raises
        ------
        ValueError
            If there is not one figure per leg, none negative.
        SolveError
            If there is no certified optimum.
        """
        remaining = np.asarray(remaining)
        if remaining.shape != self.program.capacity.shape or np.any(remaining < 0):
            raise ValueError("expected remaining seats, not negative, for every leg")
        program = self.program.with_capacity(remaining.astype(np.float64))
        return _optimum(program, self.prices, self.fence, self.solver)

    def without_party(self, itinerary: int, party: int) -> SeatValue:
        """Optimum for everybody else once a party has its seats on the path of an itinerary.

        What the party displaces is V(c) - V(c - n a): ``present.value`` less the value returned; whom it
        displaces is told by the difference of their ``sales``.

        Raises
        ------
        ValueError
            If the party is below one or a leg of the path has fewer seats.
        """
        network = self.program.network
        path = network.path_leg[network.path_start[itinerary] : network.path_start[itinerary + 1]]
        remaining = self.program.capacity.copy()
        if party < 1 or np.any(remaining[path] < party):
            raise ValueError(f"a party of {party} does not fit into the seats left on the path")
        remaining[path] -= party
        return self.at(remaining)

    def displacement(self, itinerary: int, party: int) -> float:
        """Exact displacement of a party on the path of an itinerary, V(c) - V(c - n a), currency."""
        return self.present.value - self.without_party(itinerary, party).value

    def change(self, leg: int, seats: int) -> float:
        """What more seats on one leg earn, or fewer, V(c + n e_l) - V(c), currency.

        Raises
        ------
        ValueError
            If the leg has fewer seats than are taken away.
        """
        remaining = self.program.capacity.copy()
        remaining[leg] += seats
        return self.at(remaining).value - self.present.value


def _columns(network: Network, options: LpOptions) -> SeatColumns:
    if options.method is Method.RANDOMISED:
        raise ValueError("exact values are defined for one program, not for samples; choose another method")
    if options.method is Method.DETERMINISTIC:
        return deterministic_columns(network)
    return probabilistic_columns(network, options.tail, any_seats=True)


def _optimum(program: SeatProgram, prices: FloatArray, fence: float, solver: SolverOptions) -> SeatValue:
    columns, network = program.columns, program.network
    seats, found = np.zeros(len(columns)), np.zeros(len(program.capacity))
    if len(columns):
        optimum = solve_priced_out(program, prices, fence, solver)
        seats, found = optimum.seats, optimum.prices
    certificate = certify(program, seats, found)
    certificate.require()
    return SeatValue(certificate.primal, columns.expected_sales(seats, network.fare), certificate)
