"""How well and how fast demand is estimated from drawn histories whose truth is known.

``python -m benchmarks.estimate_drawn`` prints, over drawn worlds, rates estimated over demand asked for under every
reading of closed intervals, errors in standard errors, and the coverage of 80 % intervals of held-out departures;
``--rows 10000000`` adds the time and the memory of one fit to so many readings.
"""

from __future__ import annotations

import resource
import time

import click
import numpy as np

from legworth.estimation.closing import CLOSINGS, Closing
from legworth.estimation.dispersion import coverage
from legworth.estimation.estimate import DemandFit, DemandOptions, Pools, fit_demand, forecast
from legworth.estimation.history import BookingHistory
from network.demand import Demand
from tests.legworth.estimation.drawn import DAYS, SHARES, Drawn, draw_history

AFTER = np.datetime64("2030-01-01")


def still(closing: Closing = "shared") -> DemandOptions:
    return DemandOptions(closing=closing, half_life=None, weekday=False, season=False)


def own_limits(seed: int, mean: float, a: float) -> tuple[BookingHistory, Pools, float]:
    """Products that close on a booking limit of their own, and the mean demand asked for."""
    rng = np.random.default_rng(seed)
    n, dates, cells = 30, 300, len(DAYS)
    own = rng.gamma(1 / a, a, (n, dates, 1)) if a else 1.0
    total = np.cumsum(rng.poisson(mean * own * np.diff(SHARES[1], prepend=0.0), (n, dates, cells)), axis=2)
    limit = rng.poisson(mean, (n, dates, 1))
    history = BookingHistory(
        itinerary=np.array([f"R{i}" for i in range(n)], dtype=object),
        fare_classes=("A",),
        departure=np.tile(np.datetime64("2025-01-06") + np.arange(dates), n),
        series_itinerary=np.repeat(np.arange(n), dates),
        series_class=np.zeros(n * dates, dtype=np.int64),
        start=np.arange(n * dates + 1) * cells,
        days_before=np.tile(DAYS, n * dates),
        booked=np.minimum(total, limit).ravel().astype(np.float64),
        cancelled=np.zeros(total.size),
        open=(total < limit).ravel(),
    )
    pools = Pools(np.arange(n) // 5, np.array(list("abcdef"), dtype=object))
    return history, pools, float(total[:, :, -1].mean())


def recovery(worlds: int) -> None:
    """Rates over demand asked for, and their errors."""
    print("| world | closed at departure | " + " | ".join(CLOSINGS) + " | within 2 errors |")
    print("| --- |" + " --- |" * (len(CLOSINGS) + 2))
    for seats in (1.05, 0.95, 0.85):
        ratio, closed, near = [], [], []
        for seed in range(worlds):
            drawn = draw_history(seed, n_dates=300, seats=seats)
            asked = drawn.demand.sum(axis=3).mean(axis=2)
            fits = [fit_demand(drawn.history, drawn.pools, AFTER, still(way)) for way in CLOSINGS]
            rates = [fit.model.rate.reshape(asked.shape) for fit in fits]
            ratio.append([rate.sum(axis=0) / asked.sum(axis=0) for rate in rates])
            closed.append(1 - drawn.history.open.reshape(drawn.demand.shape)[:, :, :, -1].mean(axis=(0, 2)))
            error = np.sqrt((drawn.rate + drawn.dispersion * drawn.rate**2) / 300)
            near.append(np.mean(np.abs(rates[0] - drawn.rate) < 2 * error, axis=0))
        for k, name in enumerate("ABC"):
            means = " | ".join(f"{figure:.3f}" for figure in np.mean(ratio, axis=0)[:, k])
            print(f"| seats {seats}, {name} | {np.mean(closed, axis=0)[k]:.0%} | {means} | {np.mean(near, 0)[k]:.0%} |")
    for mean, a in ((1.0, 0.0), (5.0, 0.5), (20.0, 0.1)):
        history, pools, asked_mean = own_limits(1, mean, a)
        rates = [fit_demand(history, pools, AFTER, still(way)).model.rate for way in CLOSINGS]
        means = " | ".join(f"{rate.mean() / asked_mean:.3f}" for rate in rates)
        shut = 1 - history.open[history.start[1:] - 1].mean()
        print(f"| own limits, mean {mean:g}, a {a:g} | {shut:.0%} | {means} | |")


def held_out(drawn: Drawn, fit: DemandFit, begin: np.datetime64, days_left: float) -> tuple[int, float, float, float]:
    """Departures, coverage, bias and ratio of squared errors to variance."""
    history = drawn.history
    series = np.flatnonzero(history.departure >= begin + int(days_left))
    asked = drawn.demand.reshape(-1, len(DAYS))[series][:, days_left > DAYS].sum(axis=1).astype(np.float64)
    names = history.series_itinerary[series], history.series_class[series], history.departure[series]
    found = forecast(fit, *names, np.full(len(series), days_left), history)
    inside = float(coverage(Demand.of(found.mean, found.deviation), asked).mean())
    squares = float(np.mean((found.mean - asked) ** 2) / np.mean(found.deviation**2))
    return len(series), inside, float(found.mean.sum() / asked.sum() - 1), squares


def covered() -> None:
    """Coverage of held-out departures."""
    print("\n| mean, a | days left | departures | coverage | bias | squared error over variance |")
    print("| --- | --- | --- | --- | --- | --- |")
    for mean, a in ((0.2, 0.8), (0.8, 0.8), (5.0, 0.3), (0.8, 0.0)):
        drawn = draw_history(3, n_dates=400, mean=mean, dispersion=a, seats=1.0, weekday=True, spread=0.5)
        begin = np.datetime64("2025-01-06") + 200
        fit = fit_demand(drawn.history, drawn.pools, begin, DemandOptions(half_life=None))
        for days_left in (90.0, 30.0, 7.0, 1.0):
            n, inside, bias, squares = held_out(drawn, fit, begin, days_left)
            print(f"| {mean:g}, {a:g} | {days_left:g} | {n:,} | {inside:.1%} | {bias:+.1%} | {squares:.2f} |")


def long_history(rows: int) -> tuple[BookingHistory, Pools]:
    """Ten readings a departure, 200 dates, five classes, closed at random from some reading on."""
    rng = np.random.default_rng(1)
    days = np.array([120, 90, 60, 30, 21, 14, 7, 3, 1, 0.0])
    share = np.array([0.02, 0.05, 0.1, 0.2, 0.15, 0.15, 0.13, 0.1, 0.06, 0.04])
    n, classes, dates = max(rows // 10_000, 1), 5, 200
    series = n * classes * dates
    rate = np.repeat(rng.lognormal(-0.5, 1, n * classes), dates) * rng.gamma(1, 1, series)
    came = rng.poisson(rate[:, None] * share).astype(np.float64)
    place, close = np.arange(10), rng.integers(4, 40, series)[:, None]
    came[place > close] = 0
    history = BookingHistory(
        itinerary=np.array([f"R{i}" for i in range(n)], dtype=object),
        fare_classes=tuple("ABCDE"),
        departure=np.tile(np.datetime64("2025-01-06") + np.arange(dates), n * classes),
        series_itinerary=np.repeat(np.arange(n, dtype=np.int32), classes * dates),
        series_class=np.tile(np.repeat(np.arange(classes, dtype=np.int32), dates), n),
        start=np.arange(series + 1) * 10,
        days_before=np.tile(days, series),
        booked=np.cumsum(came, axis=1).ravel(),
        cancelled=np.zeros(series * 10),
        open=(place < close).ravel(),
    )
    pairs = np.arange(n) // 5
    return history, Pools(pairs, np.array([f"P{i}" for i in range(pairs.max() + 1)], dtype=object))


@click.command()
@click.option("--worlds", type=click.IntRange(1), default=4, show_default=True, help="Drawn worlds a row.")
@click.option("--rows", type=click.IntRange(0), default=0, help="Readings of a history to time; none by default.")
def main(worlds: int, rows: int) -> None:
    """Print the figures as Markdown tables."""
    recovery(worlds)
    covered()
    if rows:
        history, pools = long_history(rows)
        before, begin = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss, time.perf_counter()
        fit_demand(history, pools, AFTER)
        seconds, most = time.perf_counter() - begin, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
        print(
            f"\n{len(history.days_before):,} readings: {seconds:.1f} s, {most / 1e6:.2f} GB ({before / 1e6:.2f} before)"
        )


if __name__ == "__main__":
    main()
