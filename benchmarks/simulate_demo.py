"""Seconds of a simulation, and where they go.

Run ``python -m benchmarks.simulate_demo``; it prints a line an activity, process seconds added up over processes.
"""

from __future__ import annotations

import time
from pathlib import Path

import click

from legworth.simulation import REOPTIMISED, STANDARD, SimulationOptions, simulate
from network import read_folder


@click.command()
@click.argument("folder", type=click.Path(path_type=Path), default=Path("demo_network"))
@click.option("--paths", default=1000, show_default=True)
@click.option("--reoptimised-paths", default=0, show_default=True)
@click.option("--jobs", default=2, show_default=True)
def main(folder: Path, paths: int, reoptimised_paths: int, jobs: int) -> None:
    """Play FOLDER under all standard controls and say where the time went."""
    network = read_folder(folder).network
    options = SimulationOptions(
        paths=paths, methods=(*STANDARD, *REOPTIMISED), reoptimised_paths=reoptimised_paths, jobs=jobs
    )
    begin = time.perf_counter()
    found = simulate(network, options)
    seconds = time.perf_counter() - begin
    requests = paths * float(network.demand.expected.sum())
    controls = sum(1 for name in found.tallies if len(found.tallies[name].revenue) == paths)
    click.echo(f"{network.name}: {paths:,} paths, {requests:,.0f} requests, {controls} controls on all of them")
    click.echo(f"{seconds:8.1f} s on the clock with {jobs} processes")
    for activity, value in sorted(found.seconds.items(), key=lambda item: -item[1]):
        click.echo(f"{value:8.1f} s {activity}")


if __name__ == "__main__":
    main()
