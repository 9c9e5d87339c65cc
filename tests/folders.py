"""A small sound network folder, held as bytes, and ways to spoil it.

Everything in it is invented. Itineraries tie L1, L2 and L3 together; L4 and L5 stand alone, so there are three
components. Every table has the header in line 1 and its rows from line 2 on.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from network import Network

SETTINGS = """\
name = "Tern Sound Ferries"
currency = "EUR"
as_of = "2030-02-25T02:30+01:00"
fare_classes = ["A", "B", "C"]

[defaults]
minimum_connection = 40
demand_family = "auto"
"""

STATIONS = """\
station,name,latitude,longitude,minimum_connection
HUB,Hubworth,50.125,8.5,35
NOR,"Norby, Old Town",54.25,9,
SUD,Südford,45.5,7.75,20
OST,Ostmere,51,14.5,
"""

LEGS = """\
leg,origin,destination,departs,arrives,capacity,sold
L1,NOR,HUB,2030-03-01T06:00+01:00,2030-03-01T07:30+01:00,24,12
L2,HUB,SUD,2030-03-01T08:30+01:00,2030-03-01T10:00+01:00,20,11
L3,HUB,OST,2030-03-01T08:15+01:00,2030-03-01T10:45+02:00,16,8
L4,OST,NOR,2030-03-02T12:00+02:00,2030-03-02T14:30+01:00,12,6
L5,SUD,HUB,2030-03-03T18:00+01:00,2030-03-03T19:30+01:00,10,3
"""

ITINERARIES = """\
itinerary,legs
NOR-HUB,L1
HUB-SUD,L2
HUB-OST,L3
NOR-SUD,L1 L2
NOR-OST,L1 L3
OST-NOR,L4
SUD-HUB,L5
"""

FARES = """\
itinerary,fare_class,fare
NOR-HUB,A,120
NOR-HUB,B,80
NOR-HUB,C,45.5
HUB-SUD,A,110
HUB-SUD,B,70
HUB-SUD,C,40
HUB-OST,A,140
HUB-OST,B,90
NOR-SUD,A,190
NOR-SUD,B,125
NOR-SUD,C,75
NOR-OST,A,210
NOR-OST,B,130
OST-NOR,A,150
OST-NOR,B,95
SUD-HUB,A,105
SUD-HUB,B,65
"""

DEMAND = """\
itinerary,fare_class,mean,deviation,curve
NOR-HUB,A,2.5,1.6,late
NOR-HUB,B,4,2.4,late
NOR-HUB,C,6,3.5,early
HUB-SUD,A,2,1.5,late
HUB-SUD,B,3.5,2.25,late
HUB-SUD,C,5,3,early
HUB-OST,A,1.5,1.3,late
HUB-OST,B,3,2,
NOR-SUD,A,1.75,1.4,late
NOR-SUD,B,2.5,1.8,late
NOR-SUD,C,4,2.5,early
NOR-OST,A,1,1,late
NOR-OST,B,2,1.6,early
OST-NOR,A,2,1.5,late
OST-NOR,B,5,2.75,early
SUD-HUB,A,2,1.5,
SUD-HUB,B,3,2,
"""

BOOKING_CURVES = """\
curve,days_before,share
early,60,0
early,30,0.5
early,7,0.9
early,0,1
late,30,0
late,7,0.25
late,0,1
"""

TABLES = ("stations", "legs", "itineraries", "fares", "demand", "booking_curves")


def sound_files() -> dict[str, bytes | None]:
    """The files of the sound folder, by name."""
    texts = {
        "network.toml": SETTINGS,
        "stations.csv": STATIONS,
        "legs.csv": LEGS,
        "itineraries.csv": ITINERARIES,
        "fares.csv": FARES,
        "demand.csv": DEMAND,
        "booking_curves.csv": BOOKING_CURVES,
    }
    return {name: text.encode() for name, text in texts.items()}


@dataclass
class Folder:
    """A network folder in memory; its changes return it, so that they can be chained."""

    files: dict[str, bytes | None] = field(default_factory=sound_files)
    """Content by name; None stands for a folder of that name."""

    def bytes(self, file: str) -> bytes:
        """Content of a file."""
        content = self.files[file]
        assert content is not None
        return content

    def text(self, file: str) -> str:
        """Text of a file."""
        return self.bytes(file).decode()

    def mutate(self, file: str, change: Callable[[str], str]) -> Folder:
        """Change the text of a file."""
        self.files[file] = change(self.text(file)).encode()
        return self

    def replace(self, file: str, old: str, new: str) -> Folder:
        """Replace a passage that stands exactly once."""
        assert self.text(file).count(old) == 1, f"{old!r} does not stand exactly once in {file}"
        return self.mutate(file, lambda text: text.replace(old, new))

    def line(self, file: str, number: int, new: str | None) -> Folder:
        """Put another line in the place of line ``number``, or take it out."""
        lines = self.text(file).splitlines(keepends=True)
        lines[number - 1 : number] = [] if new is None else [new + "\n"]
        return self.put(file, "".join(lines))

    def add(self, file: str, *lines: str) -> Folder:
        """Add lines at the end."""
        return self.mutate(file, lambda text: text + "".join(f"{line}\n" for line in lines))

    def cell(self, file: str, number: int, column: str, value: str) -> Folder:
        """Write a value, as it stands, into the cell of a line and a column."""
        rows = list(csv.reader(io.StringIO(self.text(file))))
        rows[number - 1][rows[0].index(column)] = value
        return self.line(file, number, ",".join(f'"{v}"' if "," in v else v for v in rows[number - 1]))

    def header(self, file: str, old: str, new: str) -> Folder:
        """Rename a column."""
        names = self.text(file).splitlines()[0].split(",")
        return self.line(file, 1, ",".join(new if name == old else name for name in names))

    def without_column(self, file: str, column: str) -> Folder:
        """Leave a column out."""
        return self.frame(file, lambda frame: frame.drop(columns=column))

    def frame(self, file: str, change: Callable[[pd.DataFrame], pd.DataFrame]) -> Folder:
        """Change a table as a frame of text."""
        return self.put(file, change(self.table(file)).to_csv(index=False, lineterminator="\n"))

    def table(self, file: str) -> pd.DataFrame:
        """A table as a frame of text, blank where a value is missing."""
        return pd.read_csv(io.BytesIO(self.bytes(file)), dtype=str, keep_default_na=False)

    def put(self, file: str, content: str | bytes | None) -> Folder:
        """Set the whole of a file, or put a folder in its place."""
        self.files[file] = content.encode() if isinstance(content, str) else content
        return self

    def drop(self, *files: str) -> Folder:
        """Leave files out."""
        for file in files:
            del self.files[file]
        return self

    def write(self, path: Path) -> Path:
        """Write the folder and return its path."""
        path.mkdir(parents=True, exist_ok=True)
        for name, content in self.files.items():
            if content is None:
                (path / name).mkdir()
            else:
                (path / name).write_bytes(content)
        return path


def by_name(network: Network) -> dict[str, Any]:
    """Everything a network says, by name instead of by position, so that equal networks give equal dicts."""
    stations, legs, curves = network.stations, network.legs, network.curves

    def curve(q: int) -> tuple[Any, ...]:
        rows = slice(curves.start[q], curves.start[q + 1])
        return curves.name[q], tuple(curves.days_before[rows]), tuple(curves.share[rows])

    return {
        "settings": (network.name, network.currency, network.as_of, network.fare_classes),
        "stations": {
            name: (stations.label[s], *map(_plain, (stations.latitude[s], stations.longitude[s])), connection)
            for s, (name, connection) in enumerate(zip(stations.name, stations.minimum_connection, strict=True))
        },
        "legs": {
            name: (
                *(stations.name[end[leg]] for end in (legs.origin, legs.destination)),
                *(str(instant[leg]) for instant in (legs.departs, legs.arrives)),
                *(int(f[leg]) for f in (legs.departs_offset, legs.arrives_offset, legs.capacity, legs.sold)),
                int(network.remaining[leg]),
            )
            for leg, name in enumerate(legs.name)
        },
        "itineraries": {
            name: tuple(legs.name[network.path_leg[network.path_start[i] : network.path_start[i + 1]]])
            for i, name in enumerate(network.itinerary)
        },
        "products": {
            (network.itinerary[network.product_itinerary[j]], network.fare_classes[network.product_class[j]]): (
                network.fare[j],
                *(f[j] for f in (network.demand.mean, network.demand.deviation, network.demand.family)),
                curve(network.curve[j]) if network.curve[j] >= 0 else None,
            )
            for j in range(network.n_products)
        },
    }


def _plain(value: float) -> float | None:
    return None if np.isnan(value) else float(value)
