"""The recipe: columns, approximate prices, exact optimum, canonical prices, certificate."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from lp.canonical import canonical_prices
from lp.certificate import certify
from lp.columns import SeatColumns, deterministic_columns, probabilistic_columns, sampled_columns
from lp.pricing_out import FENCE, solve_priced_out
from lp.problem import SeatProgram
from lp.smoothing import WARM_WINDOWS, WINDOWS, smoothed_prices
from lp.solution import LpOptions, Method, Solution
from lp.solvers import solver_version
from network import Network
from network.arrays import FloatArray

__all__ = ["Optimum", "Phase", "optimise", "solve"]

Phase = Callable[[str], None]
"""Called with the name of each phase as it ends: assemble, approach, solve, choose, certify."""


def _unheard(phase: str) -> None:
    """Take the name of a phase and do nothing."""


@dataclass(frozen=True, eq=False)
class Optimum:
    """An optimum of one program, before it is certified.

    Attributes
    ----------
    seats
        (K,) seats per column.
    last_seat, next_seat
        (L,) canonical optimal duals (see `lp.canonical`).
    opened, rounds
        Columns the solver saw in its last call, and solver calls.
    """

    seats: FloatArray
    last_seat: FloatArray
    next_seat: FloatArray
    opened: int
    rounds: int


def solve(
    network: Network, options: LpOptions | None = None, start: FloatArray | None = None, phase: Phase = _unheard
) -> Solution:
    """Bid prices of one network.

    Parameters
    ----------
    network
        What is sold, the seats left and the demand to come.
    options
        Method, solver and their settings.
    start
        (L,) prices to start from, such as last night's; they change the time taken, not the result.
    phase
        Called as each phase ends.

    Returns
    -------
    Solution
        A certified optimum.

    Raises
    ------
    SolveError
        If the solver is missing, stops without an optimum, or its optimum is not certified.
    """
    options = options or LpOptions()
    if options.method is Method.RANDOMISED:
        return _solve_samples(network, options, start, phase)
    if options.method is Method.PROBABILISTIC:
        columns = probabilistic_columns(network, options.tail)
    else:
        columns = deterministic_columns(network)
    phase("assemble")
    return _solve_columns(network, columns, options, start, phase)


def optimise(
    program: SeatProgram, options: LpOptions, start: FloatArray | None = None, phase: Phase = _unheard
) -> Optimum:
    """Solve one program exactly and choose its canonical prices; certify it before you use it.

    Raises
    ------
    ValueError
        If ``start`` is not one finite price per leg.
    SolveError
        If the solver is missing or stops without an optimum.
    """
    if start is not None and (start.shape != program.capacity.shape or not np.isfinite(start).all()):
        raise ValueError(f"expected a finite price to start from for each of {len(program.capacity)} legs")
    if len(program.columns) == 0:
        nothing = np.zeros(len(program.capacity))
        return Optimum(np.zeros(0), nothing, nothing, 0, 0)
    windows = WINDOWS if start is None else WARM_WINDOWS
    prices, window = smoothed_prices(program, start, windows)
    phase("approach")
    found = solve_priced_out(program, prices, FENCE * window, options.solver, whole=options.whole)
    phase("solve")
    last_seat, next_seat = canonical_prices(program, found.seats)
    phase("choose")
    return Optimum(found.seats, last_seat, next_seat, found.opened, found.rounds)


def _solve_columns(
    network: Network, columns: SeatColumns, options: LpOptions, start: FloatArray | None, phase: Phase
) -> Solution:
    program = SeatProgram.of(network, columns)
    optimum = optimise(program, options, start, phase)
    certificate = certify(program, optimum.seats, optimum.last_seat)
    certificate.require()
    certify(program, optimum.seats, optimum.next_seat).require()
    phase("certify")
    passengers = columns.expected_sales(optimum.seats, network.fare)
    return Solution(
        method=options.method,
        solver=solver_version(options.solver.name),
        objective=certificate.primal,
        bound=certificate.dual,
        objective_error=0.0,
        bid_price=np.where(network.remaining > 0, optimum.last_seat, optimum.next_seat),
        next_seat=optimum.next_seat,
        allotted=columns.sales(optimum.seats, network.n_products),
        sales=passengers,
        expected_sales=network.leg_load(passengers),
        certificate=certificate,
        columns=len(columns),
        opened=optimum.opened,
        rounds=optimum.rounds,
    )


def _solve_samples(network: Network, options: LpOptions, start: FloatArray | None, phase: Phase) -> Solution:
    """Average the deterministic program over drawn outcomes of demand (Talluri and van Ryzin 1999)."""
    outcomes = network.demand.sample(np.random.default_rng(options.seed), options.samples)
    solutions: list[Solution] = []
    for outcome in outcomes:
        columns = sampled_columns(network, outcome)
        phase("assemble")
        solutions.append(_solve_columns(network, columns, options, start, phase))
        start = solutions[0].bid_price
    objectives = np.array([solution.objective for solution in solutions])
    worst = max(solutions, key=lambda solution: abs(solution.certificate.gap))
    error = float(objectives.std(ddof=1) / np.sqrt(len(objectives)))
    return replace(
        worst,
        objective=float(objectives.mean()),
        bound=float(np.mean([solution.bound for solution in solutions])),
        objective_error=error,
        bid_price=np.mean([solution.bid_price for solution in solutions], axis=0),
        next_seat=np.mean([solution.next_seat for solution in solutions], axis=0),
        allotted=np.mean([solution.allotted for solution in solutions], axis=0),
        sales=np.mean([solution.sales for solution in solutions], axis=0),
        expected_sales=np.mean([solution.expected_sales for solution in solutions], axis=0),
        columns=sum(solution.columns for solution in solutions),
        opened=max(solution.opened for solution in solutions),
        rounds=sum(solution.rounds for solution in solutions),
    )
