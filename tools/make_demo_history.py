"""Make a booking history whose truth is known: ``python -m tools.make_demo_history --out demo_history``.

Everything is invented. One service day of the demo carrier, or of the part of it around one hub, is sold again and
again for more than a year and played by `tools.simulated_history`. Written are

- ``network/``: the departures still ahead of the snapshot as a network folder without demand, its itineraries with the
  names under which history holds them;
- ``history.parquet``: the readings known at the snapshot;
- ``true/``: the same folder with the true demand to come, given the requests so far.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from datetime import datetime, timedelta
from pathlib import Path

import click
import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet

from legworth.simulation.forecast import demand_times
from network import Demand, Network, read_folder
from network.arrays import BoolArray
from tools import demo_scenario as world
from tools.invented_traffic import over_dispersed, write_folder
from tools.make_demo_network import make_tables
from tools.simulated_history import HistoryPlan, SimulatedHistory, simulate_history

__all__ = ["demo_plan", "main", "service_day", "true_demand", "write_history"]

AROUND = ("ORV", "SAL", "BRO", "DUN", "FEN", "QUE", "TIN")
"""Stations of the part of the carrier that is simulated by default."""
HORIZON = 120
"""Days before departure at which sales begin."""
DATES = 440
AHEAD = 14
"""Dates of departure from the snapshot on that the folder holds."""
SEASON = 0.2
LOAD = 1.1
"""Whole demand over seats, mean of the legs."""
SEED = 20250108


def service_day(stations: Sequence[str] | None = AROUND, seed: int = SEED) -> dict[str, pd.DataFrame]:
    """Tables of a Monday of the demo carrier between some stations, all if None; names without the date.

    Whole demand takes the place of the demand to come of the demo, with the variation of its rates.
    """
    tables = make_tables()
    legs = tables["legs"]
    legs = legs[legs["leg"].str.endswith("-0301")]
    if stations is not None:
        legs = legs[legs["origin"].isin(stations) & legs["destination"].isin(stations)]
    own = set(legs["leg"])
    itineraries = tables["itineraries"]
    itineraries = itineraries[[set(path.split()) <= own for path in itineraries["legs"]]]
    fares, demand = (
        tables[name][tables[name]["itinerary"].isin(set(itineraries["itinerary"]))] for name in ("fares", "demand")
    )
    departs = legs.set_index("leg")["departs"]
    first = pd.to_datetime(itineraries["legs"].str.split().str[0].map(departs))
    left = pd.Series((first - world.AS_OF).to_numpy() / np.timedelta64(1, "D"), index=itineraries["itinerary"])
    curves = tables["booking_curves"]
    to_come = np.ones(len(demand))
    days = left[demand["itinerary"]].to_numpy(dtype=np.float64)
    for name, curve in curves.groupby("curve"):
        mine = (demand["curve"] == name).to_numpy()
        reached = np.interp(days[mine], curve["days_before"].to_numpy()[::-1], curve["share"].to_numpy()[::-1])
        to_come[mine] = 1.0 - reached
    mean = demand["mean"].to_numpy()
    spread = np.sqrt(np.maximum(demand["deviation"].to_numpy() ** 2 - mean, 0.0)) / mean
    whole = mean / np.maximum(to_come, 0.05)
    path = itineraries.set_index("itinerary")["legs"].str.split()
    wanted = pd.Series(whole).groupby(demand["itinerary"].to_numpy()).sum()
    carried = pd.DataFrame({"leg": path, "wanted": wanted[path.index]}).explode("leg").groupby("leg")["wanted"].sum()
    load = float((carried / legs.set_index("leg")["capacity"][carried.index]).mean())
    whole = np.round(whole * (LOAD / load), 4)
    demand = demand.assign(mean=whole, deviation=over_dispersed(whole, np.minimum(spread, 0.9)).round(4))
    bare = {name: _undated(name) for name in (*legs["leg"], *itineraries["itinerary"])}
    legs = legs.assign(leg=legs["leg"].map(bare), sold=0)
    itineraries = itineraries.assign(
        itinerary=itineraries["itinerary"].map(bare),
        legs=[" ".join(bare[leg] for leg in path.split()) for path in itineraries["legs"]],
    )
    fares, demand = (table.assign(itinerary=table["itinerary"].map(bare)) for table in (fares, demand))
    used = set(legs["origin"]) | set(legs["destination"])
    known = tables["stations"]
    return {
        "stations": known[known["station"].isin(used)],
        "legs": legs,
        "itineraries": itineraries,
        "fares": fares,
        "demand": demand,
        "booking_curves": curves,
    }


def _undated(name: str) -> str:
    return "-".join(part for part in name.split("-") if part != "0301")


def demo_plan(
    network: Network, as_of: datetime, dates: int = DATES, ahead: int = AHEAD, seed: int = SEED
) -> HistoryPlan:
    """Plan so many dates of a service day, the last ``ahead`` from the day of the snapshot on."""
    first = np.datetime64(as_of.date(), "D") - (dates - ahead)
    return HistoryPlan(network, first, dates, world.WEEKDAY_LEVEL, SEASON, seed=seed)


def true_demand(simulated: SimulatedHistory, as_of: float, date: int) -> Demand:
    """True demand to come of the products of a date at an instant, given the requests so far.

    Whole demand is Poisson at a rate that a gamma distribution draws for each date and product; requests so far
    make it another gamma distribution (conjugate; textbook).
    """
    network = simulated.plan.network
    whole = demand_times(network.demand, simulated.plan.factor[date])
    left = np.maximum(simulated.departs[date] - as_of, 0.0)
    come = simulated.share(left)
    asked = simulated.requests_by(as_of)[date]
    extra = np.maximum(whole.variance - whole.mean, 0.0)
    shape = np.divide(whole.mean**2, extra, out=np.full(len(extra), np.inf), where=extra > 1e-12)
    sure = ~np.isfinite(shape)
    held = np.where(sure, 1.0, shape)
    update = np.where(sure, 1.0, (held + asked) / (held + whole.mean * come))
    mean = np.where(left > 0, whole.mean * (1.0 - come) * update, 0.0)
    spread = np.where(sure, 0.0, 1.0 / np.sqrt(held + asked))
    return Demand.of(mean, over_dispersed(mean, spread))


def write_history(simulated: SimulatedHistory, day: dict[str, pd.DataFrame], as_of: datetime, out: Path) -> int:
    """Write ``history.parquet``, ``network/`` and ``true/``; returns the rows of the history."""
    now = _instant(as_of)
    out.mkdir(parents=True, exist_ok=True)
    rows = _write_parquet(simulated.tables(now), out / "history.parquet")
    ahead = np.flatnonzero(simulated.plan.departure >= np.datetime64(as_of.date(), "D"))
    tables, demand = _ahead(simulated, day, now, ahead.tolist())
    settings = (
        'name = "Vendamar Isles Link, part of it"\ncurrency = "EUR"\n'
        f'as_of = "{as_of.isoformat(timespec="minutes")}"\n'
        f"fare_classes = [{', '.join(f'{chr(34)}{name}{chr(34)}' for name in world.FARE_CLASSES)}]\n\n"
        f"[defaults]\nminimum_connection = {world.MINIMUM_CONNECTION}\n"
    )
    write_folder(out / "network", settings, tables)
    write_folder(out / "true", settings, tables | {"demand": demand, "booking_curves": day["booking_curves"]})
    return rows


def _instant(as_of: datetime) -> float:
    """Days since 1970-01-01 on the clock of the snapshot."""
    return float((np.datetime64(as_of.replace(tzinfo=None), "s") - np.datetime64(0, "s")) / np.timedelta64(1, "D"))


def _write_parquet(tables: Iterable[pa.Table], path: Path) -> int:
    rows = 0
    writer = None
    for table in tables:
        writer = writer or pyarrow.parquet.ParquetWriter(path, table.schema, compression="zstd")
        writer.write_table(table)
        rows += table.num_rows
    if writer is not None:
        writer.close()
    return rows


def _ahead(
    simulated: SimulatedHistory, day: dict[str, pd.DataFrame], now: float, dates: list[int]
) -> tuple[dict[str, pd.DataFrame], pd.DataFrame]:
    """Tables of the departures still ahead, and their true demand."""
    plan = simulated.plan
    sold = simulated.seats_sold(now)
    legs, itineraries, fares, demand = [], [], [], []
    for date in dates:
        stamp = str(plan.departure[date])[5:].replace("-", "")
        shift = timedelta(days=int((plan.departure[date] - np.datetime64(world.FIRST_DAY.date(), "D")).astype(int)))
        table = day["legs"]
        moved = {
            name: [(datetime.fromisoformat(value) + shift).isoformat(timespec="minutes") for value in table[name]]
            for name in ("departs", "arrives")
        }
        legs.append(table.assign(leg=_dated(table["leg"], stamp), sold=sold[date], **moved))
        table = day["itineraries"]
        paths = [" ".join(f"{leg}-{stamp}" for leg in path.split()) for path in table["legs"]]
        itineraries.append(
            table.assign(itinerary=_dated(table["itinerary"], stamp), legs=paths, history_name=table["itinerary"])
        )
        fares.append(day["fares"].assign(itinerary=_dated(day["fares"]["itinerary"], stamp)))
        true = true_demand(simulated, now, date)
        demand.append(
            day["demand"].assign(
                itinerary=_dated(day["demand"]["itinerary"], stamp),
                mean=true.mean.round(5),
                deviation=true.deviation.round(5),
            )
        )
    together = (pd.concat(parts, ignore_index=True) for parts in (legs, itineraries, fares, demand))
    names = ("legs", "itineraries", "fares", "demand")
    tables = {"stations": day["stations"], **dict(zip(names, together, strict=True))}
    return tables, tables.pop("demand")


def _dated(names: pd.Series, stamp: str) -> pd.Series:
    return names + f"-{stamp}"


def read_service_day(day: dict[str, pd.DataFrame], folder: Path) -> Network:
    """Network of a service day at the beginning of its sales, by way of a folder."""
    begin = world.FIRST_DAY - timedelta(days=HORIZON)
    settings = (
        f'name = "service day"\ncurrency = "EUR"\nas_of = "{begin.isoformat(timespec="minutes")}"\n'
        f"fare_classes = [{', '.join(f'{chr(34)}{name}{chr(34)}' for name in world.FARE_CLASSES)}]\n"
    )
    write_folder(folder, settings, day)
    return read_folder(folder).network


@click.command()
@click.option("--out", type=click.Path(path_type=Path), required=True, help="Folder to write.")
@click.option("--dates", default=DATES, show_default=True, help="Dates of departure, those ahead included.")
@click.option("--ahead", default=AHEAD, show_default=True, help="Dates of departure from the snapshot on.")
@click.option("--whole", is_flag=True, help="The whole carrier instead of the part around one hub.")
@click.option("--seed", default=SEED, show_default=True, help="Seed of the random generator.")
def main(out: Path, dates: int, ahead: int, *, whole: bool, seed: int) -> None:
    """Write a booking history, the folder that it is for, and the truth behind both."""
    day = service_day(None if whole else AROUND)
    network = read_service_day(day, out / "day")
    simulated = simulate_history(demo_plan(network, world.AS_OF, dates, ahead, seed))
    rows = write_history(simulated, day, world.AS_OF, out)
    closed: BoolArray = simulated.open_share < 1
    click.echo(
        f"{rows:,} readings of {dates:,} dates and {network.n_products:,} products, {closed.mean():.0%} not open"
    )
    asked, sold = len(simulated.sold), int(simulated.sold.sum())
    click.echo(f"{asked:,} requests, {sold:,} of them sold")


if __name__ == "__main__":
    main()
