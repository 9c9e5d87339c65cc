"""The main job as a recipe: read and check, price, compare, label, summarise."""

from __future__ import annotations

import platform
import time
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from importlib.metadata import version
from pathlib import Path
from typing import Any

import pandas as pd

from heuristics import LegControl
from heuristics.arrivals import days_before_departure
from legworth import __version__
from legworth.control import ControlComparison, compare_controls
from legworth.curves import CurveMethod, curves_table, network_curves
from legworth.results import result_tables
from lp import LpOptions, Method, NetworkSolution, Solution, solve, solve_network
from network import Component, Fault, Network, read_folder
from network.arrays import FloatArray

__all__ = ["PricedNetwork", "PricingOptions", "price_folder"]


@dataclass(frozen=True)
class PricingOptions:
    """How a folder is priced: the linear program, leg control, price curves, and components side by side."""

    lp: LpOptions = field(default_factory=LpOptions)
    legs: LegControl = field(default_factory=LegControl)
    curves: CurveMethod | None = None
    jobs: int = 1


@dataclass(frozen=True, eq=False)
class PricedNetwork:
    """A priced network.

    Attributes
    ----------
    network, warnings
        What was read.
    solution, controls
        Certified bid prices, and both controls side by side.
    tables
        Result tables by name.
    summary
        Sizes, method, objective, bounds, certificate, seconds and versions.
    """

    network: Network
    warnings: tuple[Fault, ...]
    solution: NetworkSolution
    controls: ControlComparison
    tables: dict[str, pd.DataFrame]
    summary: dict[str, Any]


class Stopwatch:
    """Seconds by phase; laps of one name add up."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self._last = time.perf_counter()

    def lap(self, phase: str) -> None:
        """End a phase."""
        now = time.perf_counter()
        self.seconds[phase] = self.seconds.get(phase, 0.0) + now - self._last
        self._last = now


def price_folder(
    folder: Path,
    options: PricingOptions | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> PricedNetwork:
    """Price a network folder.

    Parameters
    ----------
    folder
        The network folder.
    options
        How.
    progress
        Called with the legs priced so far and the legs in all.

    Raises
    ------
    InputError
        If the tables are at fault.
    SolveError
        If a component has no certified optimum.
    """
    options = options or PricingOptions()
    watch = Stopwatch()
    network, warnings = (read := read_folder(folder)).network, read.warnings
    watch.lap("read")
    done = 0

    def count(piece: Component) -> None:
        nonlocal done
        done += len(piece.legs)
        if progress is not None:
            progress(done, network.n_legs)

    solution = solve_network(network, options.lp, jobs=options.jobs, progress=count, solve_part=timed_solve)
    watch.lap("bid_prices")
    bounding = _bounding(network, options, solution)
    watch.lap("revenue_bound")
    controls = compare_controls(network, solution.bid_price, options.legs)
    watch.lap("leg_control")
    tables = result_tables(network, solution, controls)
    watch.lap("tables")
    bounds = {"dual": solution.bound, "revenue": bounding.objective}
    poisson_bounds: dict[str, float] = {}
    if options.curves is not None:
        curves = network_curves(network, bounding.bid_price, options.curves, jobs=options.jobs)
        tables["price_curves"] = curves_table(network, curves)
        poisson_bounds = curves.bounds
        watch.lap("price_curves")
    summary = _summary(network, options, solution, controls)
    summary |= {"bounds": bounds, "poisson_bounds": poisson_bounds, "seconds": watch.seconds}
    summary["warnings"] = sum(warning.count for warning in warnings)
    return PricedNetwork(network, warnings, solution, controls, tables, summary)


def timed_solve(network: Network, options: LpOptions, start: FloatArray | None) -> Solution:
    """Solve one component and note the seconds of each phase."""
    watch = Stopwatch()
    solution = solve(network, options, start, watch.lap)
    return replace(solution, seconds=watch.seconds)


def _bounding(network: Network, options: PricingOptions, solution: NetworkSolution) -> NetworkSolution:
    """Solve the deterministic program, whose optimum no control can beat on average."""
    if options.lp.method is Method.DETERMINISTIC:
        return solution
    exact = replace(options.lp, method=Method.DETERMINISTIC)
    return solve_network(network, exact, start=solution.bid_price, jobs=options.jobs)


def _summary(
    network: Network, options: PricingOptions, solution: NetworkSolution, controls: ControlComparison
) -> dict[str, Any]:
    connections = controls.connections
    departed = days_before_departure(network) <= 0
    return {
        "network": network.name,
        "currency": network.currency,
        "as_of": network.as_of.isoformat(),
        "method": str(options.lp.method),
        "objective": solution.objective,
        "bounds": {},
        "certified": all(part.certificate.holds for _, part in solution.parts),
        "sizes": _sizes(network),
        "legs_departed": int(departed.sum()),
        "legs_with_price": int((solution.bid_price[~departed] > 0).sum()),
        "legs_without_seats": int((network.remaining[~departed] == 0).sum()),
        "legs_where_controls_disagree": int((~controls.agrees).sum()),
        "products_where_controls_disagree": int(connections.disagrees.sum()),
        "at_stake": float(connections.at_stake.sum()),
        "components": [_component(piece, part) for piece, part in solution.parts],
        "settings": {
            "solver": options.lp.solver.name,
            "time_limit": options.lp.solver.time_limit,
            "tail": options.lp.tail,
            "samples": options.lp.samples if options.lp.method is Method.RANDOMISED else None,
            "seed": options.lp.seed if options.lp.method is Method.RANDOMISED else None,
            "leg_control_family": options.legs.family,
            "virtual_classes": options.legs.virtual_classes,
            "price_curves": options.curves,
        },
        "versions": {
            "legworth": __version__,
            "python": platform.python_version(),
            **{name: version(name) for name in ("numpy", "scipy", "pandas", "pulp", "highspy", "clarabel")},
        },
    }


def _sizes(network: Network) -> dict[str, int]:
    return {
        "stations": len(network.stations),
        "legs": network.n_legs,
        "itineraries": network.n_itineraries,
        "products": network.n_products,
        "remaining_seats": int(network.remaining.sum()),
    }


def _component(piece: Component, part: Solution) -> dict[str, Any]:
    return {
        "first_leg": str(piece.whole.legs.name[piece.legs[0]]),
        "legs": len(piece.legs),
        "itineraries": len(piece.itineraries),
        "products": len(piece.products),
        "columns": part.columns,
        "opened": part.opened,
        "rounds": part.rounds,
        "solver": part.solver,
        "objective": part.objective,
        "objective_error": part.objective_error,
        "bound": part.bound,
        "certificate": part.certificate.as_dict(),
        "seconds": part.seconds,
    }
