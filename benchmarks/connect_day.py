"""Time the connections of a whole day of flights, and how time and memory grow.

``python -m benchmarks.connect_day --flights FLIGHTS --airports AIRPORTS`` takes a table of reported flights (departs,
origin, destination, miles) and one of airports (airport, city, latitude, longitude); arrivals are assumed by the rules
of `tools.reported_day`. It connects the day with two and three legs, thinned days and several days in a row, each in a
process of its own so that its peak memory is its own, and prints Markdown tables. As a peer, pandas joins all arrivals
with all departures of an airport and filters the pairs by time. Everything runs on one core; seconds are those of the
core, medians, with the clock's in brackets.
"""

from __future__ import annotations

import resource
import statistics
import time
from collections.abc import Callable, Iterable
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from multiprocessing import get_context
from pathlib import Path

import click
import numpy as np
import pandas as pd

from legworth.schedules.connections import build_connections
from network import Legs, Stations
from network.connection_settings import ConnectionRules
from tools.reported_day import CONNECTION, offsets, read_day

SECONDS_OF_DAY = 86_400


@dataclass(frozen=True)
class Case:
    """One measurement: which part of the flights, for how many days, by which rules, how often."""

    flights: Path
    airports: Path
    rules: ConnectionRules
    share: float = 1.0
    days: int = 1
    repeat: int = 3


@dataclass(frozen=True)
class Figures:
    """What one measurement found."""

    legs: int
    itineraries: int
    by_legs: dict[str, int]
    looked_at: int
    dropped: dict[str, int]
    seconds: float
    clock: float
    before: float
    peak: float


class Timings:
    """Seconds of core and clock over repetitions."""

    def __init__(self) -> None:
        self._began = (0.0, 0.0)
        self._taken: list[tuple[float, float]] = []

    def begin(self) -> None:
        """Start a repetition."""
        self._began = (time.process_time(), time.perf_counter())

    def end(self) -> None:
        """End it."""
        self._taken.append((time.process_time() - self._began[0], time.perf_counter() - self._began[1]))

    def medians(self) -> tuple[float, float]:
        """Median seconds of core and clock."""
        core, clock = zip(*self._taken, strict=True)
        return statistics.median(core), statistics.median(clock)


def tables(case: Case) -> tuple[Legs, Stations]:
    """The flights and airports of a case as arrays; a thinned day keeps a random part of the flights."""
    flights, airports = read_day(case.flights, case.airports)
    if case.share < 1:
        flights = flights.sample(frac=case.share, random_state=1).sort_index()
    offset = offsets(airports).to_numpy()
    place = pd.Series(np.arange(len(airports)), index=airports["airport"])
    o, d = place[flights["origin"]].to_numpy(), place[flights["destination"]].to_numpy()
    day = np.repeat(np.arange(case.days), len(flights))
    many = np.tile(np.arange(len(flights)), case.days)
    epoch = np.datetime64("2001-01-10", "s")
    instants = {
        end: epoch + (flights[end].to_numpy()[many] * 60 + day * SECONDS_OF_DAY).astype("timedelta64[s]")
        for end in ("start", "end")
    }
    nothing = np.zeros(len(many), dtype=np.int64)
    name = (flights["leg"].to_numpy(dtype=object)[many] + "/" + day.astype(str).astype(object)).astype(object)
    legs = Legs(
        name, o[many], d[many], instants["start"], instants["end"], offset[o][many], offset[d][many], nothing, nothing
    )
    label = airports["city"].to_numpy(dtype=object)
    lat, lon = (airports[axis].to_numpy(dtype=np.float64, copy=True) for axis in ("latitude", "longitude"))
    stations = Stations(
        airports["airport"].to_numpy(dtype=object), label, lat, lon, np.full(len(airports), float(CONNECTION))
    )
    return legs, stations


def megabytes() -> float:
    """Peak memory of this process so far."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


def measure(case: Case) -> Figures:
    """Connect once or several times, in this process."""
    legs, stations = tables(case)
    before = megabytes()
    timings = Timings()
    for _ in range(case.repeat):
        timings.begin()
        found = build_connections(legs, stations, case.rules)
        timings.end()
    peak = megabytes()
    dropped = {rule: what.count for rule, what in found.dropped.items() if what.count}
    whole = sum(what.count for what in found.dropped.values() if what.what == "itineraries")
    by_legs: dict[str, int] = found.as_dict()["by_legs"]
    return Figures(len(legs), len(found), by_legs, len(found) + whole, dropped, *timings.medians(), before, peak)


def join_all(case: Case) -> Figures:
    """The peer: join all arrivals and departures of an airport, then filter by time and the way back."""
    legs, _ = tables(case)
    before = megabytes()
    timings = Timings()
    for _ in range(case.repeat):
        timings.begin()
        frame = pd.DataFrame(
            {"o": legs.origin, "d": legs.destination, "departs": legs.departs, "arrives": legs.arrives}
        )
        pairs = frame.merge(frame, left_on="d", right_on="o", suffixes=("_a", "_b"))
        wait = (pairs["departs_b"] - pairs["arrives_a"]) / pd.Timedelta(minutes=1)
        fits = wait.between(CONNECTION, case.rules.maximum_connection) & (pairs["o_a"] != pairs["d_b"])
        kept = int(fits.sum())
        timings.end()
    return Figures(len(legs), kept, {"2": kept}, len(pairs), {}, *timings.medians(), before, megabytes())


def each_alone(cases: Iterable[Case], work: Callable[[Case], Figures] = measure) -> list[Figures]:
    """Measure every case in a fresh process, one after the other."""
    found = []
    for case in cases:
        with ProcessPoolExecutor(1, mp_context=get_context("spawn")) as pool:
            found.append(pool.submit(work, case).result())
    return found


def print_row(label: str, figures: Figures) -> None:
    """One row of a table."""
    memory = f"{figures.peak:,.0f} ({figures.peak - figures.before:+,.0f})"
    click.echo(
        f"| {label} | {figures.legs:,} | {figures.looked_at:,} | {figures.itineraries:,} | {figures.seconds:.2f} "
        f"({figures.clock:.2f}) | "
        f"{memory} |"
    )


HEADER = """\
| case | legs | looked at | kept | s (by the clock) | peak memory, MiB (over the tables) |
| --- | --- | --- | --- | --- | --- |"""


@click.command()
@click.option("--flights", type=click.Path(path_type=Path, exists=True), required=True, help="Reported flights.")
@click.option("--airports", type=click.Path(path_type=Path, exists=True), required=True, help="Places of the airports.")
@click.option("--repeat", type=click.IntRange(1), default=3, show_default=True)
@click.option("--days", type=int, multiple=True, default=(2, 4, 8), show_default=True, help="Days in a row.")
def main(flights: Path, airports: Path, repeat: int, days: tuple[int, ...]) -> None:
    """Connect a day of flights."""

    def case(most_legs: int, share: float = 1.0, days: int = 1, **rules: bool) -> Case:
        return Case(flights, airports, ConnectionRules(most_legs=most_legs, **rules), share, days, repeat)

    click.echo("One day, 40 to 180 minutes, detours up to 1.5\n\n" + HEADER)
    whole = {
        "two legs": case(2),
        "two legs, dominated ones kept": case(2, keep_dominated=True),
        "three legs": case(3),
        "three legs, dominated ones kept": case(3, keep_dominated=True),
    }
    found = dict(zip(whole, each_alone(whole.values()), strict=True))
    for label, figures in found.items():
        print_row(label, figures)
    print_row("pandas, all pairs joined", each_alone([case(2)], join_all)[0])
    click.echo()
    for label in ("two legs", "three legs"):
        parts = ", ".join(f"{rule} {count:,}" for rule, count in found[label].dropped.items())
        sizes = ", ".join(f"{count:,} of {legs}" for legs, count in found[label].by_legs.items())
        click.echo(f"{label}: {sizes}; dropped: {parts}")
    for most_legs in (2, 3):
        click.echo(f"\nGrowth, at most {most_legs} legs\n\n{HEADER}")
        shares = [0.125, 0.25, 0.5]
        thinned = each_alone(case(most_legs, share) for share in shares)
        for share, figures in zip(shares, thinned, strict=True):
            print_row(f"{share:.1%} of the flights", figures)
        one = found["two legs" if most_legs == 2 else "three legs"]
        print_row("one day", one)
        longer = each_alone(case(most_legs, days=number) for number in days)
        for number, figures in zip(days, longer, strict=True):
            print_row(f"{number} days", figures)
        if longer:
            power = np.log(longer[-1].seconds / one.seconds) / np.log(longer[-1].legs / one.legs)
            click.echo(f"\nSeconds grow with days to the power {power:.2f}.")


if __name__ == "__main__":
    main()
