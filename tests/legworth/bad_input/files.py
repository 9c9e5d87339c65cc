"""Files and headers that are no table, or not the right one."""

from __future__ import annotations

import io
from collections.abc import Callable

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from tests.folders import Folder
from tests.legworth.bad_input.kinds import Cases

__all__ = ["FILES", "HEADERS"]


def parquet(folder: Folder, table: str, change: Callable[[pd.DataFrame], pd.DataFrame]) -> Folder:
    """Put a changed table in Parquet in the place of its CSV."""
    content = io.BytesIO()
    change(folder.table(f"{table}.csv")).to_parquet(content, index=False)
    return folder.drop(f"{table}.csv").put(f"{table}.parquet", content.getvalue())


def nan_and_truth(folder: Folder) -> Folder:
    """Write figures in Parquet of which one is NaN, which pandas would write as missing, and truth values."""
    parquet(folder, "legs", lambda frame: frame.assign(sold=True))
    means = pa.array([float("nan") if n == 4 else 2.0 for n in range(17)])
    table = pa.Table.from_pandas(folder.table("demand.csv"), preserve_index=False)
    content = io.BytesIO()
    pq.write_table(table.set_column(table.column_names.index("mean"), "mean", means), content)
    return folder.drop("demand.csv").put("demand.parquet", content.getvalue())


def not_utf8(folder: Folder) -> Folder:
    """Write Parquet text that is none."""
    names = pa.array([b"HUB", b"N\xd8R", b"SUD", b"OST"]).view(pa.string())
    content = io.BytesIO()
    pq.write_table(pa.table({"station": names}), content)
    return folder.drop("stations.csv").put("stations.parquet", content.getvalue())


HEADERS: Cases = {
    "stations: wrong header": (
        lambda f: f.header("stations.csv", "station", "code"),
        [("stations.csv", 1, "code"), ("stations.csv", 1, "station")],
    ),
    "legs: wrong header": (
        lambda f: f.header("legs.csv", "capacity", "seats"),
        [("legs.csv", 1, "seats"), ("legs.csv", 1, "capacity")],
    ),
    "itineraries: wrong header": (
        lambda f: f.header("itineraries.csv", "legs", "path"),
        [("itineraries.csv", 1, "path"), ("itineraries.csv", 1, "legs")],
    ),
    "fares: header in capitals": (
        lambda f: f.header("fares.csv", "fare", "Fare"),
        [("fares.csv", 1, "Fare"), ("fares.csv", 1, "fare")],
    ),
    "demand: wrong header": (
        lambda f: f.header("demand.csv", "deviation", "sigma"),
        [("demand.csv", 1, "sigma"), ("demand.csv", 1, "deviation")],
    ),
    "booking curves: wrong header": (
        lambda f: f.header("booking_curves.csv", "share", "portion"),
        [("booking_curves.csv", 1, "portion"), ("booking_curves.csv", 1, "share")],
    ),
    "legs: missing columns": (
        lambda f: f.without_column("legs.csv", "sold").without_column("legs.csv", "arrives"),
        [("legs.csv", 1, "arrives"), ("legs.csv", 1, "sold")],
    ),
    "fares: missing column": (lambda f: f.without_column("fares.csv", "fare"), [("fares.csv", 1, "fare")]),
    "demand: duplicate column": (lambda f: f.header("demand.csv", "curve", "mean"), [("demand.csv", 1, "mean")]),
    "stations: a column without a name": (
        lambda f: f.mutate("stations.csv", lambda text: text.replace("\n", ",\n")),
        [("stations.csv", 1, "(no name)")],
    ),
    "legs: semicolons": (lambda f: f.mutate("legs.csv", lambda t: t.replace(",", ";")), [("legs.csv", 1, "")]),
    "fares: tabs": (lambda f: f.mutate("fares.csv", lambda t: t.replace(",", "\t")), [("fares.csv", 1, "")]),
    "fares: no header": (
        lambda f: f.line("fares.csv", 1, None),
        [("fares.csv", 1, name) for name in ("NOR-HUB", "A", "120", "itinerary", "fare_class", "fare")],
    ),
    "itineraries: a blank line before the header": (
        lambda f: f.mutate("itineraries.csv", lambda text: "\n" + text),
        [("itineraries.csv", 1, "")],
    ),
    "stations: a quote in the header that does not close": (
        lambda f: f.mutate("stations.csv", lambda text: '"' + text),
        [("stations.csv", 1, "")],
    ),
    "fares: header only": (lambda f: f.mutate("fares.csv", lambda t: t.splitlines()[0] + "\n"), [("fares.csv", 0, "")]),
    "booking curves: header only": (
        lambda f: f.mutate("booking_curves.csv", lambda text: text.splitlines()[0]),
        [("booking_curves.csv", 0, "")],
    ),
}

FILES: Cases = {
    "empty file": (lambda f: f.put("legs.csv", ""), [("legs.csv", 0, "")]),
    "a file of white space": (lambda f: f.put("legs.csv", " \n\n  \r\n"), [("legs.csv", 0, "")]),
    "UTF-16": (lambda f: f.put("fares.csv", f.text("fares.csv").encode("utf-16")), [("fares.csv", 1, "")]),
    "UTF-16 without a mark": (
        lambda f: f.put("fares.csv", f.text("fares.csv").encode("utf-16-le")),
        [("fares.csv", 1, "")],
    ),
    "Latin-1": (
        lambda f: f.put("stations.csv", f.text("stations.csv").encode("latin-1")),
        [("stations.csv", 4, "")],
    ),
    "a NUL": (lambda f: f.replace("demand.csv", "HUB-OST,B", "HUB-OST,\0B"), [("demand.csv", 9, "")]),
    "a picture": (lambda f: f.put("demand.csv", b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR"), [("demand.csv", 3, "")]),
    "a line of 10 MB": (lambda f: f.cell("stations.csv", 3, "name", "x" * 10_000_000), [("stations.csv", 3, "")]),
    "missing table": (lambda f: f.drop("itineraries.csv"), [("itineraries.csv", 0, "")]),
    "missing tables": (
        lambda f: f.drop("stations.csv", "fares.csv"),
        [("stations.csv", 0, ""), ("fares.csv", 0, "")],
    ),
    "a folder in place of a table": (lambda f: f.put("legs.csv", None), [("legs.csv", 0, "")]),
    "a folder in place of an optional table": (
        lambda f: f.put("booking_curves.csv", None),
        [("booking_curves.csv", 0, "")],
    ),
    "CSV beside Parquet": (lambda f: f.put("legs.parquet", b""), [("legs.csv", 0, "")]),
    "broken Parquet": (
        lambda f: f.drop("legs.csv").put("legs.parquet", b"PAR1 and then nothing PAR1"),
        [("legs.parquet", 0, "")],
    ),
    "empty Parquet": (lambda f: f.drop("legs.csv").put("legs.parquet", b""), [("legs.parquet", 0, "")]),
    "Parquet with wrong columns": (
        lambda f: parquet(f, "fares", lambda frame: frame.rename(columns={"fare": "price"})),
        [("fares.parquet", 0, "price"), ("fares.parquet", 0, "fare")],
    ),
    "Parquet without rows": (lambda f: parquet(f, "fares", lambda frame: frame[:0]), [("fares.parquet", 0, "")]),
    "Parquet with lists": (
        lambda f: parquet(f, "itineraries", lambda frame: frame.assign(legs=frame["legs"].str.split(" "))),
        [("itineraries.parquet", 0, "legs")],
    ),
    "Parquet with text in Latin-1": (not_utf8, [("stations.parquet", 0, "station")]),
    "Parquet with NaN and with truth values": (
        nan_and_truth,
        [*(("legs.parquet", row, "sold") for row in range(1, 6)), ("demand.parquet", 5, "mean")],
    ),
    "Parquet with instants without zone": (
        lambda f: parquet(f, "legs", lambda frame: frame.assign(departs=pd.Timestamp(2030, 3, 1))),
        [("legs.parquet", row, "departs") for row in range(1, 6)],
    ),
    "unbalanced quote": (lambda f: f.line("stations.csv", 4, 'SUD,"Sudford,45.5,7.75,20'), [("stations.csv", 4, "")]),
    "unbalanced quote in the last line": (
        lambda f: f.line("itineraries.csv", 8, 'SUD-HUB,"L5'),
        [("itineraries.csv", 8, "")],
    ),
    "text after a quoted value": (
        lambda f: f.line("stations.csv", 3, 'NOR,"Norby" Old Town,54,9,'),
        [("stations.csv", 3, "")],
    ),
    "too many values in a row": (
        lambda f: f.line("stations.csv", 3, "NOR,Norby, Old Town,54,9,").line("fares.csv", 3, "NOR-HUB,B,80,00"),
        [("stations.csv", 3, ""), ("fares.csv", 3, "")],
    ),
    "too few values in a row": (
        lambda f: f.line("legs.csv", 3, "L2,HUB,SUD").line("demand.csv", 18, "SUD-HUB,B"),
        [("legs.csv", 3, ""), ("demand.csv", 18, "")],
    ),
    "faults after quoted line ends": (
        lambda f: f.line("stations.csv", 3, 'NOR,"Norby,\nOld\r\nTown",54.25,9,').replace(
            "stations.csv", "45.5", "95.5"
        ),
        [("stations.csv", 6, "latitude")],
    ),
    "faults after quoted line ends, read record by record": (
        lambda f: f.line("stations.csv", 3, 'NOR,"Norby,\nOld\r\nTown",54.25,9,').replace("stations.csv", "45.5", "x"),
        [("stations.csv", 6, "latitude")],
    ),
    "faults after blank lines": (
        lambda f: f.replace("legs.csv", "\nL3", "\n\n\r\n\nL3").replace("legs.csv", "16,8", "16,-8"),
        [("legs.csv", 7, "sold")],
    ),
}
