"""Network value: the deterministic, probabilistic and randomised linear programs, their duals and certificate."""

from lp.canonical import canonical_prices
from lp.certificate import Certificate, certify
from lp.columns import SeatColumns, deterministic_columns, probabilistic_columns, sampled_columns
from lp.parts import NetworkSolution, solve_network
from lp.problem import SeatProgram
from lp.solution import LpOptions, Method, Solution
from lp.solve import Optimum, optimise, solve
from lp.solvers import SOLVERS, SolverOptions, solver_version
from lp.values import SeatValue, SeatValues

__all__ = [
    "SOLVERS",
    "Certificate",
    "LpOptions",
    "Method",
    "NetworkSolution",
    "Optimum",
    "SeatColumns",
    "SeatProgram",
    "SeatValue",
    "SeatValues",
    "Solution",
    "SolverOptions",
    "canonical_prices",
    "certify",
    "deterministic_columns",
    "optimise",
    "probabilistic_columns",
    "sampled_columns",
    "solve",
    "solve_network",
    "solver_version",
]
