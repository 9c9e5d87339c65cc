"""Core seconds of every phase of the main job, by component of a network folder.

``OPENBLAS_NUM_THREADS=1 python -m benchmarks.day_phases FOLDER --days 1 --repeat 3`` prices single components of a
folder, spread evenly over it, in one process, and prints the least seconds of each phase for each component. Seconds
are those of the processor, solvers included, so that other work on the machine counts little.
"""

from __future__ import annotations

import resource
import tempfile
import time
from collections import defaultdict
from dataclasses import replace
from pathlib import Path

import click
import numpy as np

from heuristics import leg_products
from heuristics.arrivals import ArrivalPlan
from heuristics.dynamic import price_curves
from legworth.control import compare_controls
from legworth.curves import CurveMethod, NetworkCurves, curves_table
from legworth.results import result_tables
from legworth.writing import write_results
from lp import LpOptions, Method, NetworkSolution, solve
from network import Component, Network, components, read_folder


class CoreWatch:
    """Core seconds by phase, of this process and of the solvers that it started."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self._last = self._now()

    def lap(self, phase: str) -> None:
        """End a phase."""
        now = self._now()
        self.seconds[phase] = now - self._last
        self._last = now

    @staticmethod
    def _now() -> float:
        children = resource.getrusage(resource.RUSAGE_CHILDREN)
        return time.process_time() + children.ru_utime + children.ru_stime


def price(network: Network, watch: CoreWatch) -> None:
    """Price one component, phase by phase."""
    whole = Component(network, *(np.arange(n) for n in (network.n_legs, network.n_itineraries, network.n_products)))
    options = LpOptions()
    solution = solve(network, options, None, watch.lap)
    priced = NetworkSolution.of(network, [whole], [solution])
    bounding = solve(network, replace(options, method=Method.DETERMINISTIC), solution.bid_price)
    watch.lap("deterministic program")
    controls = compare_controls(network, priced.bid_price)
    watch.lap("leg controls")
    tables = result_tables(network, priced, controls)
    watch.lap("tables")
    plan = ArrivalPlan.of(network, leg_products(network, bounding.bid_price))
    curves = price_curves(plan, network.remaining)
    watch.lap("price curves")
    parts = ((np.arange(network.n_legs), curves),)
    tables["price_curves"] = curves_table(network, NetworkCurves(CurveMethod.DECOMPOSITION, parts, {}))
    watch.lap("table of curves")
    with tempfile.TemporaryDirectory() as folder:
        write_results(Path(folder) / "out", tables, {}, "parquet")
    watch.lap("write")


@click.command()
@click.argument("folder", type=click.Path(path_type=Path, exists=True))
@click.option("--days", type=click.IntRange(1), default=1, show_default=True, help="Components to price.")
@click.option("--repeat", type=click.IntRange(1), default=3, show_default=True)
def main(folder: Path, days: int, repeat: int) -> None:
    """Time every phase of single components."""
    watch = CoreWatch()
    network = read_folder(folder).network
    watch.lap("read")
    click.echo(f"read: {watch.seconds['read']:.2f} s, {network.n_products:,} products")
    pieces = components(network)
    for at in np.unique(np.linspace(0, len(pieces) - 1, days).round().astype(int)).tolist():
        piece = pieces[at].network
        seconds: defaultdict[str, list[float]] = defaultdict(list)
        for _ in range(repeat):
            watch = CoreWatch()
            price(piece, watch)
            for phase, taken in watch.seconds.items():
                seconds[phase].append(taken)
            seconds["all"].append(sum(watch.seconds.values()))
        click.echo(f"component {at}: {piece.n_products:,} products, {int(piece.remaining.sum()):,} seats")
        for phase, taken in seconds.items():
            click.echo(f"  {phase}: {min(taken):.3f} s")
    click.echo(f"peak memory {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024**2:.2f} GiB")


if __name__ == "__main__":
    main()
