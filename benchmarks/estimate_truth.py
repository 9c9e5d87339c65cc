"""Estimates against the truth: simulated history under leg-level control, and what the estimate makes of it.

Run ``python -m benchmarks.estimate_truth``; it prints means, deviations and intervals against the truth, naive averages
beside them, and what prices earn that come from estimates instead of the truth.
"""

from __future__ import annotations

import tempfile
import time
from dataclasses import replace
from pathlib import Path

import click
import numpy as np

from legworth.estimation.closing import CLOSINGS
from legworth.estimation.estimate import DemandOptions
from legworth.estimation.method_comparison import compare_methods
from legworth.estimation.method_report import LABELS
from legworth.estimation.recipe import EstimateOptions, estimate_folder
from legworth.simulation.entries import entries_of, play_anew, play_schedule, prepare_schedule
from legworth.simulation.forecast import reading_instants
from legworth.simulation.requests import draw_requests
from legworth.simulation.rules import Situation
from legworth.simulation.table import confidence
from network import Network, components, read_folder
from tools import demo_scenario as world
from tools.history_truth import held_out_truth, mean_truth, naive_means
from tools.make_demo_history import AROUND, demo_plan, read_service_day, service_day, write_history
from tools.simulated_history import SimulatedHistory, simulate_history

METHODS = ("leg+", "curves", "deterministic")
ANEW = ("curves+", "deterministic+")


@click.command()
@click.option("--dates", default=440, show_default=True, help="Dates of departure.")
@click.option("--whole", is_flag=True, help="The whole demo carrier instead of the part around one hub.")
@click.option("--paths", default=200, show_default=True, help="Booking horizons played for revenue.")
@click.option("--anew", default=5, show_default=True, help="Of these, played by controls prepared path by path.")
@click.option("--prepared", default=16, show_default=True, help="How often control is prepared anew in the history.")
@click.option("--means-alone", is_flag=True, help="End after the means.")
@click.option("--seed", default=20250108, show_default=True, help="Seed of the random generator.")
def main(dates: int, *, whole: bool, paths: int, anew: int, prepared: int, means_alone: bool, seed: int) -> None:
    """Simulate a history and hold estimates against its truth."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        day = service_day(None if whole else AROUND)
        network = read_service_day(day, folder / "day")
        begin = time.perf_counter()
        simulated = simulate_history(replace(demo_plan(network, world.AS_OF, dates, seed=seed), prepared=prepared))
        rows = write_history(simulated, day, world.AS_OF, folder)
        click.echo(
            f"{rows:,} readings, {network.n_products:,} products on {dates:,} dates; "
            f"simulated in {time.perf_counter() - begin:.0f} s"
        )
        share = simulated.open_share
        click.echo(
            f"intervals: {(share <= 0).mean():.1%} closed, {((share > 0) & (share < 1)).mean():.1%} closed midway"
        )
        means(simulated)
        if means_alone:
            return
        intervals(simulated)
        revenue(folder, paths, anew)


def means(simulated: SimulatedHistory) -> None:
    """Print means and deviations against the truth."""
    as_of = np.datetime64(world.AS_OF.date(), "D") - 1
    history = simulated.history()
    network = simulated.plan.network
    classes = network.fare_classes
    click.echo("\nMean demand of a departure against the truth, bias by class")
    click.echo(f"{'':64}{'  '.join(f'{name:>6}' for name in (*classes, 'all'))}")
    for closing in CLOSINGS:
        truth, fit = mean_truth(simulated, history, as_of, DemandOptions(closing=closing))
        figures = [truth.bias_of(at) for at in range(len(classes))]
        spread = [truth.deviation_of(at) for at in range(len(classes))]
        _line(f"estimate, closing {closing}", [*figures, truth.bias])
        click.echo(f"    within two standard errors: {truth.within:.1%} of {network.n_products:,} products")
        if closing == "shared":
            _line("    deviation of a departure", [*spread, truth.deviation_of()])
            alike = replace(fit, as_of=as_of + 1, options=replace(fit.options, half_life=None))
    for label, throughout in (("since the reading before", True), ("at the reading", False)):
        truth, _ = mean_truth(simulated, simulated.flags_alone(throughout=throughout), as_of)
        figures = [truth.bias_of(at) for at in range(len(classes))]
        _line(f"estimate without open_share, open {label}", [*figures, truth.bias])
        click.echo(f"    within two standard errors: {truth.within:.1%} of {network.n_products:,} products")
    true = truth.true
    for label, naive in naive_means(simulated, as_of).items():
        known = ~np.isnan(naive)
        figures = [
            float(naive[mine].sum() / true[mine].sum() - 1)
            for at in range(len(classes))
            for mine in [known & (network.product_class == at)]
        ]
        _line(f"naive, {label}", [*figures, float(naive[known].sum() / true[known].sum() - 1)])
    compared = compare_methods(history, alike)
    assert compared is not None
    by_class = np.array([true[network.product_class == at].mean() for at in range(len(classes))])
    for line in compared.lines:
        _line(f"side by side, {LABELS[line.method]}", [*(line.by_class / by_class - 1), line.every / true.mean() - 1])


def _line(label: str, figures: list[float]) -> None:
    click.echo(f"{label:<64}{'  '.join(f'{figure:+6.1%}' for figure in figures)}")


def intervals(simulated: SimulatedHistory) -> None:
    """Print how many requests of held-out departures lie in the 80 % interval."""
    plan = simulated.plan
    last = float(plan.departure[-1].astype(np.int64)) - 14
    found = held_out_truth(simulated, simulated.history(), [last - 28 * k + 0.1 for k in range(4)], 14)
    click.echo(f"\n{len(found.came):,} held-out departures of products, {found.came.sum():,.0f} requests, open or not")
    click.echo(f"bias {found.bias:+.1%}, coverage of the 80 % interval {found.coverage:.1%}")
    for at, name in enumerate(plan.network.fare_classes):
        mine = found.fare_class == at
        click.echo(
            f"    class {name}: bias {found.mean[mine].sum() / found.came[mine].sum() - 1:+.1%}, "
            f"coverage {found.inside[mine].mean():.1%}"
        )
    for low, high in ((0.0, 0.1), (0.1, 1.0), (1.0, 5.0), (5.0, np.inf)):
        mine = (found.mean >= low) & (found.mean < high)
        if mine.any():
            click.echo(
                f"    {low:g} to {high:g} passengers: coverage {found.inside[mine].mean():.1%} of {mine.sum():,}"
            )


def revenue(folder: Path, paths: int, anew: int) -> None:
    """Print what controls earn on the true demand, prepared from estimates and from the truth."""
    true = read_folder(folder / "true").network
    options = EstimateOptions()
    options = replace(options, backtest=replace(options.backtest, snapshots=0))
    begin = time.perf_counter()
    estimated = estimate_folder(folder / "history.parquet", folder / "network", options).network
    click.echo(f"\nRevenue on the true demand ({paths} paths; estimated in {time.perf_counter() - begin:.0f} s)")
    click.echo(f"demand to come: true {true.demand.mean.sum():,.0f}, estimated {estimated.demand.mean.sum():,.0f}")
    booked = _as_booked(estimated, folder)
    for name in (*METHODS, *(ANEW if anew > 1 else ())):
        n = anew if name in ANEW else paths
        earned = {
            label: _earned(name, true, forecast, n)
            for label, forecast in (("truth", true), ("estimate", estimated), ("ignoring closures", booked))
        }
        right = earned["truth"]
        click.echo(f"{name:<16} {n:4} paths, from the truth {right.mean():12,.0f}")
        for label in ("estimate", "ignoring closures"):
            mean, low, high = confidence(earned[label] - right)
            gain, least, most = mean / right.mean(), low / right.mean(), high / right.mean()
            click.echo(f"    from {label:<20} {gain:+.2%} (95 % {least:+.2%} to {most:+.2%})")


def _as_booked(estimated: Network, folder: Path) -> Network:
    """Forecast that takes bookings for demand."""
    options = EstimateOptions(demand=DemandOptions(closing="ignore"))
    options = replace(options, backtest=replace(options.backtest, snapshots=0))
    return estimate_folder(folder / "history.parquet", folder / "network", options).network


def _earned(name: str, true: Network, forecast: Network, paths: int) -> np.ndarray:
    """(P,) revenue of one control, prepared from a forecast, on requests from the truth; parts add up."""
    (entry,) = entries_of([name])
    total = np.zeros(paths)
    for number, (part, other) in enumerate(zip(components(true), components(forecast), strict=True)):
        requests = draw_requests(part.network, np.arange(paths), 7, number)
        situation = Situation.of(part.network)
        instants = reading_instants(part.network, None)
        if entry.path_by_path:
            accepted, _ = play_anew(requests, entry, other.network, situation, instants)
        else:
            accepted, _ = play_schedule(
                requests, prepare_schedule(entry, other.network, situation, instants), situation
            )
        total += np.where(accepted, situation.fare[requests.product], 0.0).sum(axis=0)
    return total


if __name__ == "__main__":
    main()
