"""Time every phase of the main job on synthetic days, beside HiGHS on the whole program, in one run.

``python -m benchmarks.solve_days --size middle --repeat 3`` writes the day, then repeats: read, assemble,
approach, solve, choose, certify (cold); the same with every mean changed by up to 2 % and started from the
prices just found (warm); and scipy's HiGHS on the same whole program with all its columns. It prints medians
as a Markdown table, ratios against HiGHS, and the peak memory of our own part.
"""

from __future__ import annotations

import resource
import statistics
import tempfile
import time
from collections import defaultdict
from dataclasses import replace
from pathlib import Path

import click
import numpy as np
from scipy.optimize import linprog
from scipy.sparse import csc_array

from benchmarks.synthetic_days import SIZES, write_day
from legworth.control import compare_controls
from legworth.pricing import Stopwatch
from legworth.results import result_tables
from legworth.writing import write_results
from lp import LpOptions, NetworkSolution, SeatProgram, Solution, SolverOptions, probabilistic_columns, solve
from network import Demand, Network, components, read_folder

Timings = dict[str, list[float]]
PHASES = ("read", "assemble", "approach", "solve", "choose", "certify", "leg control", "write")


def whole_by_highs(program: SeatProgram) -> float:
    """Optimum of the whole program by scipy's HiGHS, all columns at once."""
    columns = program.columns
    matrix = csc_array(program.incidence)[:, columns.itinerary]
    bounds = np.column_stack([np.zeros(len(columns)), columns.width])
    result = linprog(-columns.value, A_ub=matrix, b_ub=program.capacity, bounds=bounds, method="highs")
    if result.status != 0:
        raise RuntimeError(result.message)
    return -float(result.fun)


def changed(network: Network, rng: np.random.Generator) -> Network:
    """Return the network with every mean changed by up to 2 %, deviations likewise."""
    factor = rng.uniform(0.98, 1.02, network.n_products)
    demand = network.demand
    return replace(network, demand=Demand.of(demand.mean * factor, demand.deviation * factor))


def timed(network: Network, options: LpOptions, timings: Timings, start: np.ndarray | None = None) -> list[Solution]:
    """Solve all components, adding up the seconds of every phase."""
    watch = Stopwatch()
    solutions = []
    for piece in components(network):
        begin = None if start is None else start[piece.legs]
        watch.lap("split")
        solutions.append(solve(piece.network, options, begin, watch.lap))
    for phase, seconds in watch.seconds.items():
        timings[phase].append(seconds)
    timings["all phases"].append(sum(watch.seconds.values()))
    return solutions


def run(size: str, repeat: int, solver: str, *, peer: bool) -> None:
    """Measure one size and print its table."""
    options = LpOptions(solver=SolverOptions(solver))
    cold: Timings = defaultdict(list)
    warm: Timings = defaultdict(list)
    highs: list[float] = []
    rng = np.random.default_rng(7)
    difference = 0.0
    with tempfile.TemporaryDirectory() as folder:
        day = Path(folder) / "day"
        write_day(day, size)
        for _ in range(repeat):
            clock = time.perf_counter()
            network = read_folder(day).network
            cold["read"].append(time.perf_counter() - clock)
            solutions = timed(network, options, cold)
            prices = NetworkSolution.of(network, components(network), solutions)
            clock = time.perf_counter()
            controls = compare_controls(network, prices.bid_price)
            cold["leg control"].append(time.perf_counter() - clock)
            clock = time.perf_counter()
            write_results(Path(folder) / "out", result_tables(network, prices, controls), {}, "parquet")
            cold["write"].append(time.perf_counter() - clock)
            timed(changed(network, rng), options, warm, prices.bid_price)
            if not highs:
                memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024**2
            if peer:
                program = SeatProgram.of(network, probabilistic_columns(network))
                clock = time.perf_counter()
                whole = whole_by_highs(program)
                highs.append(time.perf_counter() - clock)
                difference = max(difference, abs(whole - prices.objective) / whole)
    columns = sum(solution.columns for solution in solutions)
    print(f"\n### {size}: {network.n_legs:,} legs, {network.n_products:,} products, {columns:,} columns\n")
    print("| phase | cold, s | warm, s |\n|---|---|---|")
    for phase in (*PHASES, "all phases"):
        figures = [f"{statistics.median(t[phase]):.3f}" if t[phase] else "" for t in (cold, warm)]
        print(f"| {'assemble to certify' if phase == 'all phases' else phase} | {figures[0]} | {figures[1]} |")
    if peer:
        ratios = []
        for timings in (cold, warm):
            exact = [a - b for a, b in zip(timings["all phases"], timings["assemble"], strict=True)]
            ratios.append(
                (
                    statistics.median(h / t for h, t in zip(highs, timings["all phases"], strict=True)),
                    statistics.median(h / t for h, t in zip(highs, exact, strict=True)),
                )
            )
        print(f"| HiGHS on the whole program, columns given | {statistics.median(highs):.3f} | |")
        print(f"| HiGHS / (assemble to certify) | {ratios[0][0]:.1f} | {ratios[1][0]:.1f} |")
        print(f"| HiGHS / (approach to certify) | {ratios[0][1]:.1f} | {ratios[1][1]:.1f} |")
        print(f"\nGreatest relative difference of the two optima: {difference:.1e}.")
    print(f"Opened columns {sum(s.opened for s in solutions):,}; peak memory before HiGHS's turn {memory:.2f} GiB.")


@click.command()
@click.option("--size", "sizes", type=click.Choice(list(SIZES)), multiple=True, default=["small", "middle"])
@click.option("--repeat", type=click.IntRange(1), default=3, show_default=True)
@click.option("--solver", type=click.Choice(["cbc", "highs"]), default="cbc", show_default=True)
@click.option("--peer/--no-peer", default=True, help="Also solve the whole program by HiGHS.")
def main(sizes: tuple[str, ...], repeat: int, solver: str, *, peer: bool) -> None:
    """Time the main job on synthetic days."""
    for size in sizes:
        run(size, repeat, solver, peer=peer)


if __name__ == "__main__":
    main()
