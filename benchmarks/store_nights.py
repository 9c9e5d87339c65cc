"""How long the store of nights takes at the size of a year: publishing, reading, asking, handing over.

``python -m benchmarks.store_nights --store DIR`` fills an empty folder with nights of random prices, all parts the
same size, and reports seconds and peak memory. Nights after the first take all parts over but a share.
"""

from __future__ import annotations

import argparse
import io
import resource
import time
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from functools import partial
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from legworth.store import Manifest, Night, PartEntry, Store
from legworth.store.comparison import compare_nights
from legworth.store.hand_over import FORMATS, HandOverFormat, HandOverOptions, hand_over
from legworth.store.hand_over_reading import read_hand_over
from legworth.store.sql import query
from network.store_settings import StoreSettings

FIRST = datetime(2030, 1, 1, 2, 30, tzinfo=UTC)
SEATS, DAYS = 90, 16
QUERIES = {
    "one leg, all nights": "SELECT night, bid_price FROM bid_prices WHERE leg = '{leg}' ORDER BY night",
    "one leg, its part named": "SELECT night, bid_price FROM bid_prices WHERE leg = '{leg}' AND part = '{part}'",
    "one night, by part": "SELECT part, avg(bid_price) FROM bid_prices WHERE night = '{night}' GROUP BY part",
    "in force, by part": "SELECT part, avg(bid_price) FROM tonight_bid_prices GROUP BY part",
    "in force, money at stake": "SELECT part, sum(at_stake) FROM tonight_connections GROUP BY part",
    "all nights, by night": "SELECT night, avg(bid_price) FROM bid_prices GROUP BY night",
    "in force, all curves": "SELECT count(*), max(bid_price) FROM tonight_price_curves",
    "manifests only": "SELECT night, sum(seconds) FROM parts GROUP BY night",
}


def parquet(columns: dict[str, object]) -> bytes:
    sink = io.BytesIO()
    pq.write_table(pa.table(columns), sink, compression="zstd")
    return sink.getvalue()


def part_files(rng: np.random.Generator, day: str, legs: int, products: int, optional: bool) -> dict[str, bytes]:
    names = pa.array([f"LEG{n}-{day}" for n in range(legs)])
    price = np.round(rng.gamma(4.0, 20.0, legs), 2)
    leg = pa.DictionaryArray.from_arrays(pa.array(np.repeat(np.arange(legs, dtype=np.int32), DAYS * SEATS)), names)
    seats = np.tile(np.arange(1, SEATS + 1), legs * DAYS)
    itinerary = pa.array([f"ITINERARY{n}-{day}" for n in range(products // 8)])
    codes = np.repeat(np.arange(products // 8, dtype=np.int32), 8)
    demand = {
        "itinerary": pa.DictionaryArray.from_arrays(pa.array(codes), itinerary),
        "fare_class": pa.array(np.tile(list("ABCDEFGH"), products // 8)),
        "mean": rng.gamma(0.5, 0.5, len(codes)),
        "deviation": rng.gamma(0.5, 0.5, len(codes)),
    }
    if optional:
        demand["curve"] = pa.array(np.tile(["early", "late"], len(codes) // 2))
    return {
        "bid_prices": parquet(
            {
                "leg": names,
                "bid_price": price,
                "next_seat": price,
                "remaining": rng.integers(0, SEATS, legs),
                "expected_sales": rng.gamma(2.0, 10.0, legs),
            }
        ),
        "price_curves": parquet(
            {
                "leg": leg,
                "days_before": np.tile(np.repeat(np.linspace(180.0, 0.0, DAYS), SEATS), legs),
                "remaining": seats,
                "bid_price": np.repeat(price, DAYS * SEATS) * 40.0 / seats,
            }
        ),
        "connections": parquet({**demand, "at_stake": rng.gamma(0.2, 20.0, len(codes))}),
    }


def publish(store: Store, number: int, last: Night | None, arguments: argparse.Namespace) -> Night:
    rng = np.random.default_rng(number)
    as_of = FIRST + timedelta(days=number)
    with store.begin(as_of) as aside:
        entries = []
        for n in range(number, number + arguments.parts):
            day = f"{FIRST + timedelta(days=n):%Y-%m-%d}"
            same = last is not None and day in last.manifest.part and rng.random() > arguments.changed
            made = {} if same else part_files(rng, day, arguments.legs, arguments.products, n % 2 == 0)
            for table in ("bid_prices", "price_curves", "connections"):
                path = f"part={day}/{table}.parquet"
                if same and last is not None:
                    aside.take_over(path, last)
                else:
                    aside.write(path, made[table])
            aside.write(f"part={day}/network.toml", b'name = "Year"\n')
            aside.write(f"part={day}/summary.json", b"{}\n")
            entries.append(
                PartEntry(
                    name=day,
                    legs=arguments.legs,
                    itineraries=arguments.products // 8,
                    products=arguments.products,
                    objective=float(rng.gamma(9.0, 1000.0)),
                    taken_over_from=last.name if same and last else None,
                )
            )
        before = time.perf_counter()
        night = aside.publish(Manifest(night=aside.name, number=aside.number, as_of=as_of, parts=tuple(entries)))
        print(f"night {number + 1}: publish itself {time.perf_counter() - before:.2f} s", flush=True)
        return night


def told_hand_over(night: Night, to: Path, form: HandOverFormat) -> None:
    print(hand_over(night, to, FIRST, HandOverOptions((form,))))


def timed(label: str, work: Callable[[], object]) -> None:
    before, spent = time.perf_counter(), time.process_time()
    work()
    spent = time.process_time() - spent
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    print(
        f"{label:32s} {time.perf_counter() - before:8.2f} s {spent:8.2f} core s   peak so far {peak:.2f} GB", flush=True
    )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--store", type=Path, required=True)
    parser.add_argument("--nights", type=int, default=20)
    parser.add_argument("--parts", type=int, default=365)
    parser.add_argument("--legs", type=int, default=200)
    parser.add_argument("--products", type=int, default=48_000)
    parser.add_argument("--changed", type=float, default=0.05)
    parser.add_argument("--hand-over", type=Path)
    parser.add_argument("--thin", action="store_true")
    arguments = parser.parse_args()
    store = Store.open(arguments.store, create=True)
    last: Night | None = None
    for number in range(arguments.nights):
        timed(f"night {number + 1}, with its making", partial(publish, store, number, last, arguments))
        last = store.in_force()
    assert last is not None
    timed("in_force", store.in_force)
    timed("nights, all manifests read", lambda: [night.manifest for night in store.nights()])
    timed("verify one night", last.verify)
    timed("table bid_prices", lambda: last.table("bid_prices"))
    timed("connect", lambda: store.sql().close())
    day = last.parts()[arguments.parts // 2]
    names = {"leg": f"LEG7-{day}", "part": day, "night": last.name}
    for label, statement in QUERIES.items():
        timed(f"query: {label}", partial(query, store, statement.format(**names)))
    if arguments.nights > 1:
        timed("compare", lambda: compare_nights(store.nights()[0], last))
    if arguments.hand_over is not None:
        for form in FORMATS:
            timed(f"hand over, {form}", partial(told_hand_over, last, arguments.hand_over, form))
            timed("  verify it", lambda: read_hand_over(arguments.hand_over))
    if arguments.thin:
        timed("thin to 5", lambda: store.thin(StoreSettings(keep_newest=5, keep_weeks=0, keep_months=0)))


if __name__ == "__main__":
    main()
