"""A whole network, component by component: the program separates exactly along them."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from joblib import Parallel, delayed

from lp.solution import LpOptions, Solution
from lp.solve import solve
from network import Component, Network, components
from network.arrays import FloatArray

__all__ = ["NetworkSolution", "solve_network"]


@dataclass(frozen=True, eq=False)
class NetworkSolution:
    """Certified optima of all components, and their figures put together.

    Attributes
    ----------
    parts
        Every component with its solution.
    objective, bound
        Sums over the components, currency.
    bid_price, next_seat, expected_sales
        (L,) as in `Solution`.
    allotted, sales
        (J,) as in `Solution`.
    """

    parts: tuple[tuple[Component, Solution], ...]
    objective: float
    bound: float
    bid_price: FloatArray
    next_seat: FloatArray
    expected_sales: FloatArray
    allotted: FloatArray
    sales: FloatArray

    @classmethod
    def of(cls, network: Network, pieces: Sequence[Component], solutions: Sequence[Solution]) -> NetworkSolution:
        """Put the solutions of all components of a network together, in the order of the network's arrays."""
        legs = {name: np.zeros(network.n_legs) for name in ("bid_price", "next_seat", "expected_sales")}
        products = {name: np.zeros(network.n_products) for name in ("allotted", "sales")}
        for piece, solution in zip(pieces, solutions, strict=True):
            for name, figures in legs.items():
                figures[piece.legs] = getattr(solution, name)
            for name, figures in products.items():
                figures[piece.products] = getattr(solution, name)
        return cls(
            parts=tuple(zip(pieces, solutions, strict=True)),
            objective=sum(solution.objective for solution in solutions),
            bound=sum(solution.bound for solution in solutions),
            **legs,
            **products,
        )


def solve_network(
    network: Network,
    options: LpOptions | None = None,
    *,
    start: FloatArray | None = None,
    jobs: int = 1,
    progress: Callable[[Component], None] | None = None,
    solve_part: Callable[[Network, LpOptions, FloatArray | None], Solution] = solve,
) -> NetworkSolution:
    """Solve every component and put the results together.

    Parameters
    ----------
    network
        The whole network.
    options
        Method, solver and their settings, the same for all components.
    start
        (L,) prices to start from.
    jobs
        Components solved side by side, in processes, by joblib; the backend is joblib's to choose
        (``joblib.parallel_config``), so the same call runs on a cluster.
    progress
        Called with each component when it is solved.
    solve_part
        What solves one component; `lp.solve.solve` or something around it, such as a stopwatch.

    Raises
    ------
    SolveError
        If any component has no certified optimum.
    """
    options = options or LpOptions()
    pieces = components(network)
    starts = [None if start is None else start[piece.legs] for piece in pieces]
    tasks = (delayed(solve_part)(piece.network, options, begin) for piece, begin in zip(pieces, starts, strict=True))
    solutions = []
    for piece, solution in zip(pieces, Parallel(n_jobs=jobs, return_as="generator")(tasks), strict=True):
        solutions.append(solution)
        if progress is not None:
            progress(piece)
    return NetworkSolution.of(network, pieces, solutions)
