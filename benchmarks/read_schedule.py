"""How long a season of an airline takes to read: ``python -m benchmarks.read_schedule [--legs 100000]``.

The file is invented: records of all stations in local time, each with a period of a few weeks within the summer and
some days of the week. Reading it, expanding it to dates and writing stations and legs are timed apart.
"""

from __future__ import annotations

import resource
import tempfile
import time
from datetime import UTC, date, datetime, timedelta
from pathlib import Path

import click
import numpy as np

from legworth.schedules import Places, SsimOptions, Window
from legworth.schedules.folder import FolderOptions, make_folder
from legworth.schedules.reading import ScheduleOptions, read_schedule
from tests.legworth.schedules.ssim_writer import Leg, write

SUMMER = Window(date(2027, 3, 28), date(2027, 10, 30))


def season(legs: int) -> bytes:
    """Write a season of so many leg records: flights of two legs, five periods each."""
    rng = np.random.default_rng(20270328)
    stations = ["".join(chr(65 + int(sign)) for sign in (n // 26 % 26, n % 26, 7)) for n in range(400)]
    found: list[Leg] = []
    for record in range(legs // 2):
        flight, part = divmod(record, 5)
        carrier, number = f"Q{chr(65 + flight // 9000)}", flight % 9000 + 1
        home, via, end = rng.choice(400, 3, replace=False).tolist()
        first = SUMMER.first + timedelta(days=43 * part)
        departs = int(rng.integers(300, 800))
        plain = Leg(
            carrier=carrier,
            number=number,
            variation=part + 1,
            first=first,
            last=first + timedelta(days=int(rng.integers(10, 43))),
            days="".join(rng.permutation(list("1234567"))[: rng.integers(1, 8)].tolist()),
            origin=stations[home],
            destination=stations[via],
            departs=departs,
            arrives=departs + 120,
            configuration=f"C12Y{int(rng.integers(80, 180))}",
        )
        second = {"sequence": 2, "origin": stations[via], "destination": stations[end]}
        found += [plain, plain.but(**second, departs=departs + 165, arrives=departs + 300)]
    by_carrier: dict[str, list[Leg]] = {}
    for leg in found:
        by_carrier.setdefault(leg.carrier, []).append(leg)
    return write(*by_carrier.items(), first=SUMMER.first, last=SUMMER.last)


@click.command()
@click.option("--legs", default=100_000, show_default=True, help="Leg records.")
@click.option("--days", default=217, show_default=True, help="Days wanted, from the first of the season on.")
def main(legs: int, days: int) -> None:
    window = Window(SUMMER.first, SUMMER.first + timedelta(days=days - 1))
    with tempfile.TemporaryDirectory() as made:
        path = Path(made) / "season.ssim"
        path.write_bytes(season(legs))
        begins = time.perf_counter()
        timetable = read_schedule(path, Places.none(), {}, ScheduleOptions(window, ssim=SsimOptions()))
        read = time.perf_counter()
        options = FolderOptions("Season", "EUR", datetime(2027, 3, 1, tzinfo=UTC), itineraries=False)
        make_folder(Path(made) / "folder", timetable, options)
        written = time.perf_counter()
        size = (Path(made) / "folder" / "legs.csv").stat().st_size
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"{legs:,} leg records, {len(timetable):,} legs by date over {days} days, {len(timetable.places)} stations")
    print(f"read and expanded {read - begins:.1f} s, written {written - read:.1f} s ({size / 2**20:,.0f} MB)")
    print(f"most memory {memory:,.0f} MB")


if __name__ == "__main__":
    main()
