"""Small nights to put into a store, and a process that can be cut off at any file operation.

A night of price ``n`` says ``n`` in every row, so that a reader can tell whether all it read is of one night.
"""

from __future__ import annotations

import functools
import io
import multiprocessing
import os
import signal
import sys
import tempfile
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.compute
import pyarrow.csv
import pyarrow.parquet as pq

from legworth.curves import CurveMethod
from legworth.pricing import PricingOptions, price_folder
from legworth.store import Manifest, Night, PartEntry, Store, UnfinishedNight
from tests.folders import TABLES, Folder

FIRST = datetime(2030, 2, 25, 2, 30, tzinfo=UTC)
PARTS = ("2030-03-01", "2030-03-02")
LEGS = 3


def parquet(table: pa.Table) -> bytes:
    """A table as Parquet."""
    sink = io.BytesIO()
    pq.write_table(table, sink)
    return sink.getvalue()


def prices(part: str, price: float) -> bytes:
    """Bid prices of a part, all the same."""
    return parquet(
        pa.table(
            {
                "leg": [f"{part}-{n}" for n in range(LEGS)],
                "bid_price": [float(price)] * LEGS,
                "next_seat": [float(price)] * LEGS,
                "remaining": [n + 1 for n in range(LEGS)],
                "expected_sales": [0.5] * LEGS,
            }
        )
    )


def fill(aside: UnfinishedNight, price: float, parts: tuple[str, ...] = PARTS, last: Night | None = None) -> None:
    """Write a small night; its last part is taken over where there is a night to take it from."""
    for part in parts:
        aside.write(f"part={part}/summary.json", f'{{"price": {price}}}\n'.encode())
        if last is not None and part == parts[-1]:
            aside.take_over(f"part={part}/bid_prices.parquet", last)
        else:
            aside.write(f"part={part}/bid_prices.parquet", prices(part, price))


def manifest_of(aside: UnfinishedNight, as_of: datetime, **more: Any) -> Manifest:
    """A manifest that names the parts written."""
    parts = tuple(PartEntry(name=part, legs=LEGS, itineraries=0, products=0, objective=100.0) for part in aside.parts())
    return Manifest(**{"night": aside.name, "number": aside.number, "as_of": as_of, "parts": parts} | more)


def publish(store: Store, price: float = 1.0, day: int = 0, **how: Any) -> Night:
    """Publish a small night."""
    as_of = FIRST + timedelta(days=day)
    with store.begin(as_of) as aside:
        fill(aside, price, how.pop("parts", PARTS), how.pop("last", None))
        return aside.publish(manifest_of(aside, as_of, **how))


def price_of(night: Night) -> float:
    """The one price that a whole night says."""
    found = set(night.table("bid_prices")["bid_price"].to_pylist())
    assert len(found) == 1
    return float(found.pop())


@functools.cache
def priced_parts() -> dict[str, dict[str, pa.Table]]:
    """The sound folder of `tests.folders`, priced, as tables by part: one part a day."""
    with tempfile.TemporaryDirectory() as name:
        folder = Folder().write(Path(name))
        priced = price_folder(folder, PricingOptions(curves=CurveMethod.DECOMPOSITION))
        tables = {table: pa.Table.from_pandas(frame, preserve_index=False) for table, frame in priced.tables.items()}
        text = pa.csv.ConvertOptions(column_types={"departs": pa.string(), "arrives": pa.string()})
        tables |= {name: pa.csv.read_csv(folder / f"{name}.csv", convert_options=text) for name in TABLES}
    of_legs = {"2030-03-01": ["L1", "L2", "L3"], "2030-03-02": ["L4"], "2030-03-03": ["L5"]}
    paths = tables["itineraries"].to_pydict()
    found = {}
    for part, legs in of_legs.items():
        sold = [name for name, path in zip(paths["itinerary"], paths["legs"], strict=True) if path.split()[0] in legs]
        wanted = {"leg": legs, "itinerary": sold}
        found[part] = {name: _rows(table, wanted) for name, table in tables.items()}
    return found


def _rows(table: pa.Table, wanted: dict[str, list[str]]) -> pa.Table:
    for column, names in wanted.items():
        if column in table.column_names:
            chosen = pa.compute.is_in(table[column].cast(pa.string()), value_set=pa.array(names))
            return table.filter(chosen)
    return table


def publish_priced(store: Store, day: int = 0, factor: float = 1.0, leave_out: tuple[str, ...] = ()) -> Night:
    """Publish the priced sound folder, its bid prices times a factor."""
    as_of = FIRST + timedelta(days=day)
    with store.begin(as_of) as aside:
        entries = []
        for part, tables in priced_parts().items():
            if part in leave_out:
                continue
            for name, whole in tables.items():
                table = whole
                if name == "bid_prices":
                    raised = pa.compute.multiply(table["bid_price"], factor)
                    table = table.set_column(1, "bid_price", raised)
                aside.write(f"part={part}/{name}.parquet", parquet(table))
            products = tables["fares"].num_rows
            entries.append(
                PartEntry(
                    name=part,
                    legs=tables["legs"].num_rows,
                    itineraries=tables["itineraries"].num_rows,
                    products=products,
                    objective=1000.0 * factor,
                    certificate={"holds": True},
                    seconds={"solve": 0.25},
                )
            )
        return aside.publish(
            Manifest(
                night=aside.name,
                number=aside.number,
                as_of=as_of,
                parts=tuple(entries),
                seconds={"read": 1.0, "solve": 2.0},
            )
        )


CHILDREN = multiprocessing.get_context("forkserver" if sys.platform != "win32" else "spawn")
CHILDREN.set_forkserver_preload(["legworth.store", "legworth.store.hand_over", "tests.legworth.store.small_nights"])


class Operations:
    """Counts what a process does to the files below a folder, and does something at one of these moments.

    Python tells audit hooks of every open, rename, link, removal and new folder before it is done.
    """

    EVENTS = frozenset({"open", "os.rename", "os.link", "os.remove", "os.mkdir", "os.rmdir", "os.truncate"})

    def __init__(self, folder: Path, moment: int, act: Callable[[], None], *, on: bool = False) -> None:
        self.count = 0
        self._folder, self._moment, self._act, self._on = str(folder), moment, act, on
        sys.addaudithook(self._heard)

    def _heard(self, event: str, arguments: tuple[Any, ...]) -> None:
        if event in self.EVENTS and arguments and self._folder in str(arguments[0]):
            self.count += 1
            if self.count == self._moment or (self._on and self.count > self._moment):
                self._act()


def killed() -> None:
    """End this process as a power cut would: nothing is cleaned up."""
    os.kill(os.getpid(), signal.SIGKILL)


def run_child(target: Callable[..., None], *arguments: Any) -> int:
    """Run a function in a process of its own; return its exit code, -9 if it was killed."""
    process = CHILDREN.Process(target=target, args=arguments)
    process.start()
    process.join(60)
    assert process.exitcode is not None
    return process.exitcode
