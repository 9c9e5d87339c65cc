"""The solvers, through PuLP: the one place that knows their status words and the sign of their duals.

The program goes out as a *minimisation* of the negative value, because adapters treat the duals of a
maximisation differently. A row ``load <= capacity`` then has a dual that is not positive, and the bid
price is its negative. Values are sent as shares of the greatest, times a thousand, so that a solver's
absolute tolerances mean the same in every currency.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from importlib.metadata import version
from typing import Literal

import numpy as np
import pulp

from network.arrays import FloatArray, IntArray
from network.errors import SettingError, SolverMissingError, SolverStoppedError

__all__ = ["SOLVERS", "OpenProgram", "SolverName", "SolverOptions", "solve_open", "solver_version"]

SolverName = Literal["cbc", "highs"]
SOLVERS: tuple[SolverName, ...] = ("cbc", "highs")
VALUE_SCALE = 1000.0


@dataclass(frozen=True)
class SolverOptions:
    """Which solver, and how long it may take for one program (seconds, None for no limit)."""

    name: SolverName = "cbc"
    time_limit: float | None = None

    def __post_init__(self) -> None:
        if self.name not in SOLVERS:
            raise SettingError(f"unknown solver {self.name!r}; choose {' or '.join(SOLVERS)}")
        if self.time_limit is not None and not self.time_limit > 0:
            raise SettingError(f"time limit {self.time_limit} is not above 0 seconds")


@dataclass(frozen=True, eq=False)
class OpenProgram:
    """A program small enough for a solver.

    Column n is worth ``value[n]``, is at most ``width[n]`` (perhaps infinite) and enters the rows
    ``row[start[n]:start[n + 1]]`` with ``sign``, 1 or -1; row r holds at most ``capacity[r]``.
    """

    value: FloatArray
    width: FloatArray
    start: IntArray
    row: IntArray
    sign: FloatArray
    capacity: FloatArray


def solve_open(program: OpenProgram, options: SolverOptions) -> tuple[FloatArray, FloatArray]:
    """Solve a program.

    Returns
    -------
    seats, prices
        Seats per column and price per row, as precise as the solver gives them.

    Raises
    ------
    SolverMissingError
        If the solver cannot be started.
    SolverStoppedError
        If it ends without an optimum.
    """
    # Fences alone are worth less than nothing: where every column is decided, their size is the scale.
    greatest = program.value.max(initial=0.0) or np.abs(program.value).max(initial=0.0) or 1.0
    scale = VALUE_SCALE / greatest
    problem = pulp.LpProblem("seats", pulp.LpMinimize)
    ends = [width if width < np.inf else None for width in program.width.tolist()]
    variables = [problem.add_variable(f"x{position}", 0.0, end) for position, end in enumerate(ends)]
    cost = (-scale * program.value).tolist()
    problem += pulp.LpAffineExpression(list(zip(variables, cost, strict=True)))
    members: list[list[tuple[pulp.LpVariable, int]]] = [[] for _ in range(len(program.capacity))]
    column_of = np.repeat(np.arange(len(program.value)), np.diff(program.start)).tolist()
    for row, column, sign in zip(program.row.tolist(), column_of, program.sign.tolist(), strict=True):
        members[row].append((variables[column], sign))
    rows = []
    for position, (terms, capacity) in enumerate(zip(members, program.capacity.tolist(), strict=True)):
        row_of = pulp.LpConstraint(pulp.LpAffineExpression(terms), pulp.LpConstraintLE, f"r{position}", capacity)
        problem.addConstraint(row_of)
        rows.append(row_of)
    _run(problem, options)
    seats = np.array([variable.varValue for variable in variables], dtype=np.float64)
    prices = np.array([0.0 if row.pi is None else -row.pi for row in rows], dtype=np.float64) / scale
    if np.isnan(seats).any() or np.isnan(prices).any():
        raise SolverStoppedError(f"{options.name} left values empty; try the other solver")
    return np.clip(seats, 0.0, program.width), np.maximum(prices, 0.0)


def solver_version(name: SolverName) -> str:
    """Name and version of the solver's package."""
    package = {"cbc": "pulp", "highs": "highspy"}[name]
    return f"{name} ({package} {version(package)})"


@cache
def _factories() -> dict[str, Callable[[float | None], pulp.LpSolver]]:
    tight = ["primalTolerance 1e-9", "dualTolerance 1e-9"]
    return {
        "cbc": lambda limit: pulp.COIN_CMD(
            path=pulp.PULP_CBC_CMD.pulp_cbc_path, msg=False, timeLimit=limit, options=tight
        ),
        "highs": lambda limit: pulp.HiGHS(
            msg=False, timeLimit=limit, primal_feasibility_tolerance=1e-9, dual_feasibility_tolerance=1e-9
        ),
    }


def _run(problem: pulp.LpProblem, options: SolverOptions) -> None:
    solver = _factories()[options.name](options.time_limit)
    if not solver.available():
        raise SolverMissingError(f"solver {options.name} cannot be started; install it or choose another")
    try:
        status = problem.solve(solver)
    except Exception as error:  # of any kind: adapters parse what a dying solver leaves behind
        what = (str(error).splitlines() or [""])[0] or type(error).__name__
        raise SolverStoppedError(f"{options.name} failed: {what}; try the other solver") from error
    if status != pulp.LpStatusOptimal or problem.sol_status != pulp.LpSolutionOptimal:
        limit = f" (the time limit was {options.time_limit:g} s)" if options.time_limit else ""
        early = status == pulp.LpStatusOptimal
        what = "stopped before it had proved an optimum" if early else f"ended as {pulp.LpStatus[status].lower()}"
        raise SolverStoppedError(f"{options.name} {what}{limit}; allow more time or try the other solver")
