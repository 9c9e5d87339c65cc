"""Time a million single-seat requests against prices in force.

``python -m benchmarks.decide_million FOLDER --prices DIR`` draws products and moments at random, decides them three
times, and prints medians for the answers and for the table with its sentences.
"""

from __future__ import annotations

import statistics
import time
from pathlib import Path

import click
import numpy as np
import pandas as pd

from legworth.decisions import Requests, decide, decisions_table
from legworth.price_table import read_prices
from network import read_folder


@click.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--prices", type=click.Path(path_type=Path), required=True)
@click.option("--requests", "size", type=int, default=1_000_000, show_default=True)
def main(folder: Path, prices: Path, size: int) -> None:
    """Print seconds per million requests."""
    network = read_folder(folder).network
    table = read_prices(prices, network)
    rng = np.random.default_rng(3)
    product = rng.integers(0, network.n_products, size)
    itinerary = network.product_itinerary[product].astype(np.int64)
    moment = network.as_of.timestamp() + rng.uniform(0, 2 * 86_400, size)
    requests = Requests(itinerary, product, np.full(size, np.nan), np.ones(size, dtype=np.int64), moment)
    asked = pd.DataFrame(
        {
            "request": np.arange(size).astype(str),
            "itinerary": network.itinerary[itinerary],
            "fare_class": np.array(network.fare_classes)[network.product_class[product]],
        }
    )
    answering, labelling = [], []
    for _ in range(3):
        clock = time.perf_counter()
        found = decide(network, table, requests)
        answering.append(time.perf_counter() - clock)
        clock = time.perf_counter()
        decisions_table(network, asked, requests, found)
        labelling.append(time.perf_counter() - clock)
    kind = "price curves" if table.has_curves else "plain bid prices"
    print(f"{size:,} requests by {kind}: answers {statistics.median(answering):.2f} s, ", end="")
    print(f"table with sentences {statistics.median(labelling):.2f} s; {found.accepted.mean():.1%} accepted")


if __name__ == "__main__":
    main()
