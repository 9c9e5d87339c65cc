"""The exact optimum of a whole program from a small one: most columns are decided by prices alone.

Prices near the optimum tell most columns apart at once: worth clearly more than their path, they are sold;
worth clearly less, they are not. Only the undecided ones go to the solver, and around every price stands a
fence: one column that buys seats of the leg at the upper fence price, one that sells them at the lower. By
duality the solver's prices then stay inside the fences, where every fixed column is decided rightly, and a
solution that uses no fence column is an optimum of the whole program. Where one is used, that leg's fence is
moved out and the program solved again. (The boxstep method of Marsten, Hogan and Blankenship, Operations
Research 23, 1975, with columns sorted by value instead of generated.)
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.sparse import csc_array
from scipy.sparse.linalg import lsmr

from lp.problem import SeatProgram
from lp.solvers import OpenProgram, SolverOptions, solve_open
from network.arrays import FloatArray, IntArray
from network.errors import SolverStoppedError
from network.model import ranges

__all__ = ["FENCE", "PricedOut", "solve_priced_out"]

WHOLE = 400
"""A program of at most this many columns is opened whole."""

MOST_ROUNDS = 40
FENCE = 4.0
"""Distance of the first fences from approximate prices, in windows of the last smoothing."""

WIDEN = 4.0
"""Factor by which a fence that the prices press on moves out."""

PRESSED = 1e-9
"""Seats that a fence column must trade to count as used."""

SNAP = 1e-7
"""Share of a column's width within which a solver's figure is taken for 0 or for full."""


@dataclass(frozen=True, eq=False)
class PricedOut:
    """An optimum of the whole program.

    Attributes
    ----------
    seats, prices
        (K,) seats per column and (L,) prices, one optimal dual of many.
    rounds, opened
        Solver calls, and columns open in the last one.
    """

    seats: FloatArray
    prices: FloatArray
    rounds: int
    opened: int


def solve_priced_out(
    program: SeatProgram, prices: FloatArray, window: float, options: SolverOptions, *, whole: bool = False
) -> PricedOut:
    """Solve a program, starting from approximate prices.

    Parameters
    ----------
    program
        The program, with at least one column.
    prices
        (L,) approximate bid prices; any will do, good ones are faster.
    window
        Distance of the first fences from ``prices``, currency.
    options
        The solver.
    whole
        Open every column at once, without fences, as a reference.

    Raises
    ------
    SolveError
        If the solver is missing or stops without an optimum.
    """
    size = len(program.capacity)
    fence = np.full(size, np.inf if whole or len(program.columns) <= WHOLE else window)
    for rounds in range(1, MOST_ROUNDS + 1):
        path, reach = program.path_price(prices), program.path_price(fence)
        first, last = program.columns.count_above(path + reach), program.columns.count_above(path - reach)
        undecided = ranges(first, last - first)
        sold, fraction, found, pressed = _solve_undecided(program, first, undecided, (prices, fence), options)
        if not pressed.any():
            seats = _sharpened(program, _all_seats(program, sold, undecided, fraction))
            return PricedOut(seats, found, rounds, len(undecided))
        fence = np.where(pressed, WIDEN * fence, fence)
    raise SolverStoppedError(f"prices still press on their fences after {MOST_ROUNDS} rounds; try the other solver")


def _solve_undecided(
    program: SeatProgram,
    first: IntArray,
    undecided: IntArray,
    fences: tuple[FloatArray, FloatArray],
    options: SolverOptions,
) -> tuple[IntArray, FloatArray, FloatArray, np.ndarray]:
    """Solve for the undecided columns; those before ``first`` are sold, the others are not.

    Returns
    -------
    sold, fraction, prices, pressed
        ``first`` again, seats of the undecided columns, price of every leg, and True where a fence is used.
    """
    columns, network = program.columns, program.network
    centre, fence = fences
    room = program.capacity - program.incidence @ columns.seats_before(first)
    itinerary = columns.itinerary[undecided]
    length = np.diff(network.path_start)[itinerary]
    legs = network.path_leg[ranges(network.path_start[itinerary], length)]
    buys = np.flatnonzero(np.isfinite(fence))
    sells = np.flatnonzero(np.isfinite(fence) & (centre > fence))
    n, n_buys, n_fences = len(undecided), len(buys), len(buys) + len(sells)
    used, row = np.unique(np.concatenate([legs, buys, sells]), return_inverse=True)
    opened = OpenProgram(
        value=np.concatenate([columns.value[undecided], -(centre + fence)[buys], (centre - fence)[sells]]),
        width=np.concatenate([columns.width[undecided], np.full(n_fences, np.inf)]),
        start=np.concatenate([[0], np.cumsum(np.concatenate([length, np.ones(n_fences, dtype=np.int64)]))]),
        row=row,
        sign=np.concatenate([np.ones(len(legs)), np.full(n_buys, -1.0), np.ones(len(sells))]),
        capacity=room[used],
    )
    traded, found = solve_open(opened, options)
    prices = np.zeros(len(room))
    prices[used] = found
    pressed = np.zeros(len(room), dtype=bool)
    pressed[buys] = traded[n : n + n_buys] > PRESSED
    pressed[sells] |= traded[n + n_buys :] > PRESSED
    return first, traded[:n], prices, pressed


def _all_seats(program: SeatProgram, sold: IntArray, undecided: IntArray, fraction: FloatArray) -> FloatArray:
    """Seats of all columns, (K,), from the decided and the undecided ones."""
    columns = program.columns
    seats = np.zeros(len(columns))
    full = ranges(columns.start[:-1], sold - columns.start[:-1])
    seats[full] = columns.width[full]
    seats[undecided] = fraction
    return seats


def _sharpened(program: SeatProgram, seats: FloatArray) -> FloatArray:
    """Recover the digits that a solver's text file drops.

    Figures next to a bound are set on it; the others are corrected by the least change that makes the full
    legs exactly full, which in a basic solution determines them.
    """
    width = program.columns.width
    seats = np.where(seats < SNAP * width, 0.0, np.where(seats > (1 - SNAP) * width, width, seats))
    between = np.flatnonzero((seats > 0) & (seats < width))
    if len(between) == 0:
        return seats
    incidence = csc_array(program.incidence)[:, program.columns.itinerary[between]]
    spare = program.capacity - program.load(seats)
    full = np.flatnonzero((np.abs(spare) < 1e-5) & (incidence @ np.ones(len(between)) > 0))
    rows = incidence[full]
    correction = lsmr(rows, spare[full], atol=1e-15, btol=1e-15, maxiter=10 * len(between) + 100)[0]
    sharper = seats.copy()
    sharper[between] = np.clip(seats[between] + correction, 0.0, width[between])
    worst = np.abs(program.capacity - program.load(sharper))[full].max(initial=0.0)
    return sharper if worst <= np.abs(spare[full]).max(initial=0.0) else seats
