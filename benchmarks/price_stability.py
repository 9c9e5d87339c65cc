"""How far prices move when demand hardly does: the solver's own duals against the canonical ones.

``python -m benchmarks.price_stability FOLDER --draws 20`` changes every mean demand by at most 0.1 % at random,
deviations likewise, solves again and prints the distribution of price changes as a Markdown table: for the
duals that the solver happens to return for the whole program, and for the published last-seat prices.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import click
import numpy as np

from lp import SOLVERS, LpOptions, SeatProgram, SolverOptions, canonical_prices, probabilistic_columns
from lp.pricing_out import solve_priced_out
from lp.smoothing import smoothed_prices
from network import Demand, Network, components, read_folder

LEVELS = (50, 90, 99, 99.9, 100)


def prices(network: Network, options: LpOptions, *, whole: bool) -> tuple[np.ndarray, np.ndarray]:
    """Return the solver's own duals and the last-seat prices, (L,) each, of every component."""
    own, canonical = np.zeros(network.n_legs), np.zeros(network.n_legs)
    for piece in components(network):
        program = SeatProgram.of(piece.network, probabilistic_columns(piece.network))
        if len(program.columns) == 0:
            continue
        start, window = smoothed_prices(program)
        found = solve_priced_out(program, start, 4 * window, options.solver, whole=whole)
        own[piece.legs] = found.prices
        canonical[piece.legs] = canonical_prices(program, found.seats)[0]
    return own, canonical


@click.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--draws", type=click.IntRange(1), default=20, show_default=True)
@click.option("--change", type=float, default=0.001, show_default=True, help="Greatest relative change of a mean.")
@click.option("--solver", type=click.Choice(SOLVERS), default="cbc", show_default=True)
@click.option("--whole/--fenced", default=True, help="Give the solver every column at once, or only undecided ones.")
def main(folder: Path, draws: int, change: float, solver: str, *, whole: bool) -> None:
    """Print the distribution of price changes over legs and draws."""
    network = read_folder(folder).network
    options = LpOptions(solver=SolverOptions("highs" if solver == "highs" else "cbc"))
    rng = np.random.default_rng(11)
    before = prices(network, options, whole=whole)
    moves: tuple[list[np.ndarray], list[np.ndarray]] = ([], [])
    for _ in range(draws):
        factor = rng.uniform(1 - change, 1 + change, network.n_products)
        demand = Demand.of(network.demand.mean * factor, network.demand.deviation * factor)
        after = prices(replace(network, demand=demand), options, whole=whole)
        for kind in (0, 1):
            moves[kind].append(np.abs(after[kind] - before[kind]))
    print(f"{network.name}: {network.n_legs:,} legs, {draws} draws, means changed by at most {change:.1%}")
    print(f"mean price {before[1].mean():.2f}\n")
    print(
        "| price | " + " | ".join(f"{level:g} %" for level in LEVELS) + " | moved by more than 1 % of the mean price |"
    )
    print("| --- |" + " --- |" * (len(LEVELS) + 1))
    for kind, label in enumerate((f"dual as {solver} returns it", "canonical last seat")):
        moved = np.concatenate(moves[kind])
        figures = " | ".join(f"{value:.4f}" for value in np.percentile(moved, LEVELS))
        print(f"| {label} | {figures} | {(moved > 0.01 * before[1].mean()).mean():.2%} |")


if __name__ == "__main__":
    main()
