"""Time and memory of the report of changes over a year of parts.

``python -m benchmarks.changes_year --out DIR [--parts N] [--changed SHARE] [--jobs N]``

A year of departures is a store of several hundred parts. To have one quickly, two days of the synthetic regional
carrier (`benchmarks.synthetic_year`) are priced as they stand on two nights, and their results put into a store
under as many dates as asked for; of these the share given has the second night's figures on the second night, and all
others are taken over. Reported are seconds by step, the peak of memory, and how large the report is.
"""

from __future__ import annotations

import io
import json
import resource
import time
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from pathlib import Path

import click
import pyarrow as pa
import pyarrow.compute
import pyarrow.parquet

from benchmarks.synthetic_year import write_next_night, write_year
from legworth.pricing import PricingOptions
from legworth.refresh import PartInput, PartOutput, cut_parts, run_part
from legworth.refresh.changes import ChangesOptions, find_changes
from legworth.refresh.changes_page import changes_page
from legworth.refresh.changes_prices import ExplainOptions
from legworth.refresh.part_folder import parquet_bytes
from legworth.store import Manifest, Night, PartEntry, Store, UnfinishedNight
from network import read_folder

FIRST = date(2027, 6, 2)
"""First of the two days priced; the day before has departed on the second night."""

NAMED = ("leg", "legs", "itinerary")
TIMED = ("departs", "arrives")
LEFT_OUT = ("protection.parquet", "proof.parquet")
"""Tables that the report does not read."""


@dataclass(frozen=True)
class Days:
    """The two priced days of one night, by date."""

    outputs: dict[date, PartOutput]

    @classmethod
    def of(cls, folder: Path) -> Days:
        """Price them."""
        network = read_folder(folder).network
        wanted = {f"{FIRST + timedelta(days=n)}": FIRST + timedelta(days=n) for n in (0, 1)}
        outputs = {
            wanted[part.name]: run_part(PartInput(part.name, part.network_of(network), 1, PricingOptions()))
            for part in cut_parts(network)
            if part.name in wanted
        }
        return cls(outputs)

    def base(self, day: date) -> tuple[date, PartOutput]:
        """Return the priced day that stands for a date."""
        base = FIRST + timedelta(days=(day - FIRST).days % 2)
        return base, self.outputs[base]

    def files(self, day: date, as_of: datetime) -> dict[str, bytes]:
        """Files of the part of a date."""
        base, output = self.base(day)
        found = {}
        for name, data in output.written.items():
            if name.endswith(".parquet"):
                if name not in LEFT_OUT:
                    found[name] = _moved(data, base, day)
            else:
                found[name] = _at(data, as_of) if name == "network.toml" else data
        return found

    def entry(self, day: date, taken_over_from: str | None) -> PartEntry:
        """What the manifest says of the part of a date."""
        output = self.base(day)[1]
        sizes = output.summary["sizes"]
        return PartEntry(
            name=f"{day}",
            legs=sizes["legs"],
            itineraries=sizes["itineraries"],
            products=sizes["products"],
            objective=output.summary["objective"],
            certificate={name: proof.as_dict() for name, proof in output.certificates.items()},
            taken_over_from=taken_over_from,
            seconds=output.seconds,
        )


def _moved(data: bytes, base: date, day: date) -> bytes:
    """A table of one date under another: names and times."""
    table = pyarrow.parquet.read_table(io.BytesIO(data))
    columns = {}
    for name in table.column_names:
        values = table[name].combine_chunks()
        if name in NAMED:
            values = _replaced(values, f"{base:%Y%m%d}", f"{day:%Y%m%d}")
        elif name in TIMED and pa.types.is_timestamp(values.type):
            values = pa.compute.add(values, pa.scalar(day - base, pa.duration(values.type.unit)))
        elif name in TIMED:
            for after in (1, 0):
                then = base + timedelta(days=after)
                values = _replaced(values, f"{then}", f"{then}".replace("-", "/"))
            for after in (1, 0):
                then, now = base + timedelta(days=after), day + timedelta(days=after)
                values = _replaced(values, f"{then}".replace("-", "/"), f"{now}")
        columns[name] = values
    return parquet_bytes(pa.table(columns))


def _replaced(values: pa.Array, old: str, new: str) -> pa.Array:
    if isinstance(values, pa.ChunkedArray):
        values = values.chunk(0)
    if pa.types.is_dictionary(values.type):
        names = pa.compute.replace_substring(values.dictionary.cast(pa.string()), old, new)
        return pa.DictionaryArray.from_arrays(values.indices, names)
    return pa.compute.replace_substring(values, old, new)


def _at(settings: bytes, as_of: datetime) -> bytes:
    """``network.toml`` at another snapshot."""
    lines = settings.decode().splitlines()
    return "".join(f'as_of = "{as_of.isoformat()}"\n' if x.startswith("as_of") else f"{x}\n" for x in lines).encode()


def _take_over(aside: UnfinishedNight, last: Night, day: date, as_of: datetime) -> None:
    for path in sorted((last.folder / f"part={day}").iterdir()):
        name = f"part={day}/{path.name}"
        if path.suffix == ".parquet":
            aside.take_over(name, last)
        else:
            aside.write(name, _at(path.read_bytes(), as_of) if path.name == "network.toml" else path.read_bytes())


def publish_year(store: Store, as_of: datetime, days: dict[date, Days], kept: Days, last: Night | None) -> Night:
    """Publish a night of some dates; those priced as ``kept`` are taken over if there is a night before."""
    entries = []
    with store.begin(as_of) as aside:
        for day, priced in days.items():
            if last is not None and priced is kept:
                _take_over(aside, last, day, as_of)
                entries.append(priced.entry(day, last.name))
                continue
            for name, data in priced.files(day, as_of).items():
                aside.write(f"part={day}/{name}", data)
            entries.append(priced.entry(day, None))
        settings = {"method": "probabilistic"}
        return aside.publish(
            Manifest(night=aside.name, number=aside.number, as_of=as_of, parts=tuple(entries), settings=settings)
        )


def _store(out: Path, parts: int, changed: float) -> tuple[Night, Night]:
    write_year(out / "inputs-1", 3, 1)
    write_next_night(out / "inputs-2", out / "inputs-1", 1.0, 1)
    then, now = Days.of(out / "inputs-1"), Days.of(out / "inputs-2")
    store = Store.open(out / "store", create=True)
    days = [FIRST + timedelta(days=n) for n in range(parts + 1)]
    step = max(round(1 / changed), 1) if changed > 0 else parts + 2
    last = publish_year(store, datetime(2027, 6, 1, 2, tzinfo=UTC), dict.fromkeys(days[:-1], then), then, None)
    tonight = {day: now if n % step == 0 or n == parts else then for n, day in enumerate(days)}
    del tonight[days[0]]
    return last, publish_year(store, datetime(2027, 6, 3, 2, tzinfo=UTC), tonight, then, last)


def _core_seconds() -> float:
    """Processor time of this process and of those it has ended, solvers among them."""
    used = [resource.getrusage(who) for who in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)]
    return sum(usage.ru_utime + usage.ru_stime for usage in used)


@click.command()
@click.option("--out", type=click.Path(path_type=Path), required=True, help="Folder to work in; made if missing.")
@click.option("--parts", type=click.IntRange(2), default=365, show_default=True, help="Parts of a night.")
@click.option("--changed", type=click.FloatRange(0, 1), default=0.05, show_default=True, help="Share that changed.")
@click.option("--jobs", type=click.IntRange(1), default=1, show_default=True, help="Parts explained side by side.")
def main(out: Path, parts: int, changed: float, jobs: int) -> None:
    """Build two nights and time the report."""
    last, tonight = _store(out, parts, changed)
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    begin, spent = time.perf_counter(), _core_seconds()
    changes = find_changes(tonight, last, options=ChangesOptions(explain=ExplainOptions(jobs=jobs)))
    found = time.perf_counter()
    page = changes_page(changes)
    done, spent = time.perf_counter(), _core_seconds() - spent
    document = json.dumps(changes.as_dict(), allow_nan=False)
    assert changes.prices is not None
    assert changes.run is not None
    how = [str(move.cause.how) for move in changes.prices.moves]
    click.echo(
        f"{parts} parts, {changes.products.parts_compared} compared, {changes.run.legs:,} legs, "
        f"{changes.run.products:,} products"
    )
    click.echo(f"find_changes {found - begin:.1f} s, page {done - found:.1f} s, {spent:.1f} core seconds together")
    click.echo(f"causes: {how.count('part')} by solving the part again, {how.count('leg')} on the leg alone")
    click.echo(f"page {len(page) / 1e3:,.0f} kB, document {len(document) / 1e3:,.0f} kB")
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    click.echo(f"peak memory {peak:,.0f} MB (building the store {before:,.0f} MB)")


if __name__ == "__main__":
    main()
