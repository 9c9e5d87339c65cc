"""Reading: whatever sound form the tables take, they give the same network."""

from __future__ import annotations

import csv
import io
import random
from collections.abc import Callable
from datetime import UTC, datetime, timedelta, timezone
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from network import Network, input_schemas, read_folder
from network.csv_text import CsvText
from tests.folders import TABLES, Folder, by_name

DEMO = Path(__file__).parents[2] / "demo_network"


def read(folder: Folder, path: Path) -> Network:
    return read_folder(folder.write(path)).network


def in_parquet(folder: Folder, table: str, frame: pd.DataFrame) -> None:
    content = io.BytesIO()
    frame.to_parquet(content, index=False)
    folder.drop(f"{table}.csv").put(f"{table}.parquet", content.getvalue())


def every_table(change: Callable[[bytes], bytes]) -> Folder:
    folder = Folder()
    for table in TABLES:
        folder.put(f"{table}.csv", change(folder.bytes(f"{table}.csv")))
    return folder


def quoted(content: bytes) -> bytes:
    out = io.StringIO()
    csv.writer(out, quoting=csv.QUOTE_ALL, lineterminator="\n").writerows(csv.reader(io.StringIO(content.decode())))
    return out.getvalue().encode()


FORMS: dict[str, Callable[[bytes], bytes]] = {
    "UTF-8 mark": lambda content: b"\xef\xbb\xbf" + content,
    "CRLF": lambda content: content.replace(b"\n", b"\r\n"),
    "CR": lambda content: content.replace(b"\n", b"\r"),
    "quoted fields": quoted,
    "quoted fields and CRLF": lambda content: quoted(content).replace(b"\n", b"\r\n"),
    "no line end at the end": lambda content: content.rstrip(b"\n"),
    "blank lines between": lambda content: content.replace(b"\n", b"\n\n"),
    "spaces around the header": lambda content: content.replace(b",", b" , ", content.splitlines()[0].count(b",")),
}


@pytest.mark.parametrize("form", FORMS)
def test_forms_of_csv_give_the_same_network(form: str, tmp_path: Path) -> None:
    assert by_name(read(every_table(FORMS[form]), tmp_path / "form")) == by_name(read(Folder(), tmp_path / "plain"))


@pytest.mark.parametrize("form", FORMS)
def test_lines_are_counted_right_in_every_form(form: str, tmp_path: Path) -> None:
    folder = Folder().cell("legs.csv", 4, "sold", "17")
    content = FORMS[form](folder.bytes("legs.csv"))
    warning, *others = read_folder(folder.put("legs.csv", content).write(tmp_path)).warnings
    lines = content.decode().replace("\r\n", "\n").replace("\r", "\n").split("\n")
    assert not others
    assert lines[warning.line - 1].replace('"', "").startswith("L3,")


def test_the_order_of_columns_does_not_matter(tmp_path: Path) -> None:
    folder = Folder()
    for table in TABLES:
        folder.frame(f"{table}.csv", lambda frame: frame[frame.columns[::-1]])
    assert by_name(read(folder, tmp_path / "turned")) == by_name(read(Folder(), tmp_path / "plain"))


@pytest.mark.parametrize(
    ("table", "old", "new"),
    [("stations.csv", "Ostmere", 'Ost"mere'), ("legs.csv", "L5", "0x5"), ("itineraries.csv", "NOR-OST", 'NOR"OST')],
)
def test_a_doubtful_file_is_read_to_the_same_figures(table: str, old: str, new: str, tmp_path: Path) -> None:
    """A stray quote, or what looks hexadecimal among whole numbers, sends a file to the slower reader."""
    plain, doubtful = Folder(), Folder()
    for file in ("stations.csv", "legs.csv", "itineraries.csv", "fares.csv", "demand.csv"):
        plain.mutate(file, lambda text: text.replace(old, "Other"))
        doubtful.mutate(file, lambda text: text.replace(old, new))
    schema = input_schemas()[table.removesuffix(".csv")]
    assert CsvText(table, doubtful.bytes(table), schema.names).doubtful(schema)
    assert not CsvText(table, plain.bytes(table), schema.names).doubtful(schema)
    expected, found = (by_name(read(folder, tmp_path / name)) for folder, name in ((plain, "a"), (doubtful, "b")))
    assert repr(found).replace(repr(new), "'Other'") == repr(expected)


@pytest.mark.parametrize("doubtful", [False, True])
def test_figures_are_read_to_the_last_digit(doubtful: bool, tmp_path: Path) -> None:
    """Python's own float() is the reference."""
    rng = random.Random(7)
    texts = [repr(rng.random() * 10 ** rng.randint(-8, 8)) for _ in range(300)] + [
        "0.1",
        "1e2",
        "5E-3",
        ".5",
        "7.",
        "+3",
    ]
    mark = 'a"b' if doubtful else ""
    itineraries = ["itinerary,legs"] + [f"I{i}{mark},L1" for i in range(len(texts))]
    fares = ["itinerary,fare_class,fare"] + [
        f"{row.split(',')[0]},A,{text}" for row, text in zip(itineraries[1:], texts, strict=True)
    ]
    folder = Folder().put("itineraries.csv", "\n".join(itineraries)).put("fares.csv", "\n".join(fares))
    demand = [line.replace("fare", "mean").rpartition(",")[0] for line in fares[1:]]
    folder.put("demand.csv", "\n".join(["itinerary,fare_class,mean,deviation", *(f"{row},1,1" for row in demand)]))
    assert read(folder, tmp_path).fare.tolist() == [float(text) for text in texts]


def typed(frame: pd.DataFrame) -> pd.DataFrame:
    """Figures as numbers and blank text as missing, instants left as text with their offsets."""
    answer = {}
    for name in frame.columns:
        values = frame[name].mask(frame[name] == "", None)
        figures = pd.to_numeric(values, errors="coerce")
        answer[name] = figures if figures.notna().sum() == values.notna().sum() else values
    return pd.DataFrame(answer)


PARQUET: dict[str, Callable[[pd.DataFrame], pd.DataFrame]] = {
    "typed": typed,
    "text with blanks": lambda frame: frame,
    "categories": lambda frame: frame.astype("category"),
    "typed categories": lambda frame: typed(frame).astype("category"),
}


@pytest.mark.parametrize("form", PARQUET)
def test_parquet_gives_the_network_of_csv(form: str, tmp_path: Path) -> None:
    folder = Folder()
    for table in TABLES:
        in_parquet(folder, table, PARQUET[form](folder.table(f"{table}.csv")))
    assert by_name(read(folder, tmp_path / "parquet")) == by_name(read(Folder(), tmp_path / "csv"))


def test_parquet_instants_with_a_zone_are_the_same_instants(tmp_path: Path) -> None:
    folder, expected = Folder(), read(Folder(), tmp_path / "csv")
    frame = folder.table("legs.csv")
    for column in ("departs", "arrives"):
        frame[column] = pd.to_datetime(frame[column], utc=True).dt.tz_convert("Europe/Berlin")
    in_parquet(folder, "legs", frame)
    found = read(folder, tmp_path / "parquet")
    np.testing.assert_array_equal(found.legs.departs, expected.legs.departs)
    np.testing.assert_array_equal(found.legs.arrives, expected.legs.arrives)
    assert set(found.legs.departs_offset) == {60}, "Berlin keeps UTC+1 in winter (common knowledge)"


def test_a_folder_named_like_a_partition_adds_no_column(tmp_path: Path) -> None:
    folder = Folder()
    in_parquet(folder, "legs", folder.table("legs.csv"))
    assert by_name(read(folder, tmp_path / "day=1")) == by_name(read(Folder(), tmp_path / "plain"))


def test_the_demo_reads_alike_from_csv_and_parquet(tmp_path: Path) -> None:
    (tmp_path / "network.toml").write_bytes((DEMO / "network.toml").read_bytes())
    for table in TABLES:
        frame = pd.read_csv(
            DEMO / f"{table}.csv", dtype={"leg": str, "curve": str}, keep_default_na=False, na_values=[""]
        )
        frame.to_parquet(tmp_path / f"{table}.parquet", index=False)
    csv_read, parquet_read = read_folder(DEMO), read_folder(tmp_path)
    assert by_name(parquet_read.network) == by_name(csv_read.network)
    assert len(parquet_read.warnings) == len(csv_read.warnings)


def test_instants_are_those_of_the_standard_library(tmp_path: Path) -> None:
    """datetime.fromisoformat is the reference for ISO 8601 with offset."""
    rng = random.Random(11)
    rows, expected = [], []
    for leg in range(300):
        zone = timezone(timedelta(minutes=rng.randrange(-14 * 60, 14 * 60 + 1, 15)))
        departs = datetime(2027, 1, 1, tzinfo=zone) + timedelta(minutes=rng.randrange(5_000_000))
        text = departs.isoformat(timespec="minutes" if leg % 3 else "seconds", sep=" " if leg % 5 == 0 else "T")
        rows.append(f"M{leg},NOR,HUB,{text},{(departs + timedelta(minutes=50)).isoformat()},5,0")
        expected.append((departs.astimezone(UTC).replace(tzinfo=None), departs.utcoffset()))
    folder = Folder().add("legs.csv", *rows)
    legs = read(folder, tmp_path).legs
    for position, (instant, offset) in enumerate(expected, start=5):
        assert legs.departs[position] == np.datetime64(instant, "s")
        assert timedelta(minutes=int(legs.departs_offset[position])) == offset


@pytest.mark.parametrize(
    "text",
    ["2030-03-01T05:00Z", "2030-03-01T06:00+0100", "2030-03-01 06:00+01:00", "2030-03-01T06:00:00.250+01:00"],
)
def test_ways_to_write_one_instant(text: str, tmp_path: Path) -> None:
    legs = read(Folder().cell("legs.csv", 2, "departs", text), tmp_path).legs
    assert legs.departs[0] == np.datetime64("2030-03-01T05:00:00")
    assert legs.departs_offset[0] == (0 if text.endswith("Z") else 60)


def test_optional_columns_may_be_left_out(tmp_path: Path) -> None:
    folder = Folder().frame("stations.csv", lambda frame: frame[["station"]])
    folder.without_column("demand.csv", "curve").drop("booking_curves.csv")
    network = read(folder, tmp_path)
    assert network.stations.label.tolist() == network.stations.name.tolist() == ["HUB", "NOR", "SUD", "OST"]
    assert np.isnan(network.stations.latitude).all()
    assert network.stations.minimum_connection.tolist() == [40.0] * 4
    assert network.curve.tolist() == [-1] * network.n_products
    assert len(network.curves) == 0


def test_a_blank_connection_time_takes_the_default(tmp_path: Path) -> None:
    assert read(Folder(), tmp_path / "40").stations.minimum_connection.tolist() == [35, 40, 20, 40]
    other = Folder().replace("network.toml", "minimum_connection = 40", "minimum_connection = 12.5")
    assert read(other, tmp_path / "12").stations.minimum_connection.tolist() == [35, 12.5, 20, 12.5]
    none = Folder().replace("network.toml", "minimum_connection = 40\n", "")
    assert read(none, tmp_path / "none").stations.minimum_connection.tolist() == [35, 30, 20, 30]


def test_the_demand_family_of_the_settings_holds(tmp_path: Path) -> None:
    folder = Folder().replace("network.toml", '"auto"', '"gamma"')
    assert set(read(folder, tmp_path).demand.family) == {2}


def test_an_instant_may_be_a_toml_date_time(tmp_path: Path) -> None:
    folder = Folder().replace("network.toml", '"2030-02-25T02:30+01:00"', "2030-02-25T02:30:00+01:00")
    assert read(folder, tmp_path).as_of == datetime(2030, 2, 25, 1, 30, tzinfo=UTC)


def test_settings_may_begin_with_a_mark(tmp_path: Path) -> None:
    folder = Folder().mutate("network.toml", lambda text: "\ufeff" + text)
    assert read(folder, tmp_path).name == "Tern Sound Ferries"
