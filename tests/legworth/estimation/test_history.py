"""The history table: what is read is what was written, and every contradiction is told with its row."""

from __future__ import annotations

import random
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet
import pytest
from hypothesis import given
from hypothesis import strategies as st

from legworth.estimation.history import BookingHistory
from legworth.estimation.history_table import read_history
from network import InputError, table_schema
from tests.legworth.damage import BYTES, WORDS
from tests.legworth.estimation.tables import AS_OF, CLASSES, HEADER, NAMES, faults_of, read_text
from tests.networks import examples

SOUND = (
    "2030-02-20,NOR-HUB,A,14,1,true",
    "2030-02-20,NOR-HUB,A,7,3,true",
    "2030-02-20,NOR-HUB,A,0,4,false",
    "2030-02-21,NOR-HUB,A,14,0,1",
    "2030-02-21,NOR-HUB,A,7,0,0",
    "2030-02-21,NOR-HUB,A,0,0,false",
    "2030-03-04,HUB-SUD,C,14,2,true",
    "2030-03-04,HUB-SUD,C,7,2,true",
)


def same(one: BookingHistory, other: BookingHistory) -> bool:
    """Whether two histories say the same."""
    arrays = ("departure", "series_itinerary", "series_class", "start", "days_before", "booked", "cancelled", "open")
    return (
        one.itinerary.tolist() == other.itinerary.tolist()
        and one.fare_classes == other.fare_classes
        and all(np.array_equal(getattr(one, name), getattr(other, name)) for name in arrays)
    )


def test_a_sound_table_is_read_as_written(tmp_path: Path) -> None:
    found = read_text(tmp_path, SOUND)
    history = found.history
    assert (found.rows, history.n_readings, history.n_series) == (8, 8, 3)
    assert history.itinerary.tolist() == ["HUB-SUD", "NOR-HUB"]
    at = {
        (history.itinerary[i], CLASSES[c], str(d)): s
        for s, (i, c, d) in enumerate(
            zip(history.series_itinerary, history.series_class, history.departure, strict=True)
        )
    }
    rows = slice(*history.start[at["NOR-HUB", "A", "2030-02-20"] :][:2])
    assert history.days_before[rows].tolist() == [14, 7, 0]
    assert history.booked[rows].tolist() == [1, 3, 4]
    assert history.open[rows].tolist() == [True, True, False]
    assert history.open_share is not None
    shares = history.open_share[rows]
    assert shares[:2].tolist() == [1, 1]
    assert np.isnan(shares[2]), "open at one reading and closed at the next: for which part is not known"
    rows = slice(*history.start[at["NOR-HUB", "A", "2030-02-21"] :][:2])
    assert np.isnan(history.open_share[rows][1])
    assert history.open_share[rows][2] == 0, "closed at both readings"


def test_rows_may_run_away_from_departure(tmp_path: Path) -> None:
    assert same(read_text(tmp_path, SOUND).history, read_text(tmp_path, SOUND[::-1]).history)


@pytest.mark.parametrize("ending", ["csv", "parquet"])
def test_formats_and_types_of_columns_say_the_same(tmp_path: Path, ending: str) -> None:
    plain = read_text(tmp_path, SOUND).history
    frame = pd.read_csv(tmp_path / "history.csv", dtype=str)
    table = pa.Table.from_pandas(frame, preserve_index=False)
    typed = table.set_column(0, "departure", table["departure"].cast(pa.timestamp("s")).cast(pa.date32()))
    typed = typed.set_column(3, "days_before", table["days_before"].cast(pa.int64()))
    typed = typed.set_column(5, "open", pa.array(frame["open"].isin(["true", "1"])))
    stamped = typed.set_column(0, "departure", table["departure"].cast(pa.timestamp("us")))
    for n, given_table in enumerate((table, typed, stamped)):
        path = tmp_path / f"again{n}.{ending}"
        if ending == "csv":
            pyarrow.csv.write_csv(given_table, path)
        else:
            pyarrow.parquet.write_table(given_table, path)
        assert same(plain, read_history(path, NAMES, CLASSES, AS_OF).history)


@st.composite
def histories(draw: st.DrawFn) -> list[str]:
    rows = []
    for itinerary in NAMES:
        for fare_class in draw(st.lists(st.sampled_from(CLASSES), unique=True)):
            for day in draw(st.lists(st.integers(1, 24), unique=True, max_size=3)):
                days = sorted(draw(st.lists(st.sampled_from([30, 14, 7, 3.5, 1, 0]), min_size=1, unique=True)))[::-1]
                booked = np.cumsum(draw(st.lists(st.integers(0, 3), min_size=len(days), max_size=len(days))))
                rows += [
                    f"2030-02-{day:02},{itinerary},{fare_class},{d},{b},true" for d, b in zip(days, booked, strict=True)
                ]
    return rows


@given(rows=histories(), seed=st.integers(0, 99))
@examples(40)
def test_order_of_departures_does_not_matter(
    tmp_path_factory: pytest.TempPathFactory, rows: list[str], seed: int
) -> None:
    if not rows:
        return
    folder = tmp_path_factory.mktemp("drawn")
    keys = [row.rsplit(",", 3)[0] for row in rows]
    order = {key: place for place, key in enumerate(np.random.default_rng(seed).permutation(sorted(set(keys))))}
    shuffled = [row for _, row in sorted(zip(keys, rows, strict=True), key=lambda pair: order[pair[0]])]
    one, other = read_text(folder, rows).history, read_text(folder, shuffled).history
    assert same(one, other)


CONTRADICTIONS = {
    "bookings fall": (
        ["2030-02-20,NOR-HUB,A,14,3,true", "2030-02-20,NOR-HUB,A,7,2,true"],
        "history.csv:3: booked: booked falls from 3 at 14 days (line 2) to 2 at 7; count cancellations in a column "
        "cancelled, or correct it",
    ),
    "out of order": (
        [f"2030-02-20,NOR-HUB,A,{day},{n},true" for n, day in enumerate((14, 7, 10, 3))],
        "history.csv:3: days_before: the reading at 7 days is out of order with that at 10 days in line 4",
    ),
    "twice": (
        ["2030-02-20,NOR-HUB,A,7,3,true", "2030-02-20,NOR-HUB,A,7,3,true"],
        "history.csv:3: days_before: a reading of this departure at 7 days stands already in line 2; keep one of ",
    ),
    "twice, far apart": (
        [f"2030-02-20,NOR-HUB,A,{day},3,true" for day in (14, 7, 3, 14)],
        "history.csv:5: days_before: a reading of this departure at 14 days stands already in line 2; keep one of ",
    ),
    "after departure": (
        ["2030-02-20,NOR-HUB,A,-1,3,true"],
        "history.csv:2: days_before: -1 was read after departure, when no class is open; remove the row or correct it",
    ),
    "unknown itinerary": (
        ["2030-02-20,NOR-HAB,A,7,3,true", "2030-02-20,NOR-HAB,A,3,3,true"],
        "history.csv:2: itinerary: 'NOR-HAB' (2 rows) is no itinerary or history_name of the network; ",
    ),
    "unknown class": (
        ["2030-02-20,NOR-HUB,D,7,3,true"],
        "history.csv:2: fare_class: 'D' (1 rows) is not a fare class of the network; ",
    ),
    "sold while closed": (
        ["2030-02-20,NOR-HUB,A,7,3,false", "2030-02-20,NOR-HUB,A,3,5,false"],
        "history.csv:3: booked: 2 booked between 7 and 3 days though the class was closed at both; ",
    ),
    "no number": (
        ["2030-02-20,NOR-HUB,A,7,NaN,true"],
        "history.csv:2: booked: 'NaN' is not a whole number; give a figure",
    ),
    "half a passenger": (
        ["2030-02-20,NOR-HUB,A,7,2.5,true"],
        "history.csv:2: booked: '2.5' is not a whole number; give a figure",
    ),
    "not a date": (
        ["2030-02-30,NOR-HUB,A,7,3,true"],
        "history.csv:2: departure: '2030-02-30' is not a date; write it as 2027-03-01",
    ),
    "neither open nor closed": (
        ["2030-02-20,NOR-HUB,A,7,3,perhaps"],
        "history.csv:2: open: 'perhaps' is neither true nor false; write one of them",
    ),
    "missing": (["2030-02-20,NOR-HUB,A,7,,true"], "history.csv:2: booked: the value is missing; fill it in"),
    "no itinerary": (["2030-02-20,,A,7,3,true"], "history.csv:2: itinerary: the value is missing; fill it in"),
    "the future": (
        ["2030-03-02,NOR-HUB,A,3,3,true"],
        "history.csv:2: days_before: 3 days before 2030-03-02 lies after the snapshot (as_of of network.toml); ",
    ),
    "too far": (
        ["2030-02-20,NOR-HUB,A,1001,3,true"],
        "history.csv:2: days_before: 1001 is outside its limits; it must be from 0 to 1,000 days",
    ),
    "ragged": (
        ["2030-02-20,NOR-HUB,A,7,3,true", "2030-02-20,NOR-HUB,A,3,3"],
        "history.csv:3: holds another number of values than the 6 columns of the header; ",
    ),
}


@pytest.mark.parametrize("case", sorted(CONTRADICTIONS))
def test_a_contradiction_is_told_with_its_row(tmp_path: Path, case: str) -> None:
    rows, told = CONTRADICTIONS[case]
    (fault,) = faults_of(tmp_path, rows)
    assert fault.startswith(told)


def test_faults_of_cells_and_names_are_told_together(tmp_path: Path) -> None:
    rows = ["2030-02-20,NOR-HAB,A,7,3,true", "2030-02-2,NOR-HUB,Z,7,x,maybe", "2030-02-20,NOR-HUB,A,-2,1e9,true", "a,b"]
    told = faults_of(tmp_path, rows)
    places = [fault.split(": ")[0] + " " + fault.split(": ")[1].split(" ")[0] for fault in told]
    assert places == [
        "history.csv:2 itinerary",
        "history.csv:3 booked",
        "history.csv:3 departure",
        "history.csv:3 fare_class",
        "history.csv:3 open",
        "history.csv:4 booked",
        "history.csv:4 days_before",
        "history.csv:5 holds",
    ]


def test_faults_between_rows_are_told_together(tmp_path: Path) -> None:
    rows = [
        "2030-02-20,NOR-HUB,A,7,3,true",
        "2030-02-20,NOR-HUB,A,3,2,true",
        "2030-02-20,NOR-HUB,B,7,3,false",
        "2030-02-20,NOR-HUB,B,3,4,false",
        "2030-02-21,NOR-HUB,B,7,3,false",
        "2030-02-21,NOR-HUB,B,7,4,false",
        "2030-03-20,NOR-HUB,B,7,4,false",
    ]
    assert [fault.split(":")[1] for fault in faults_of(tmp_path, rows)] == ["3", "5", "7", "8"]


def test_of_many_faults_of_a_kind_the_rest_are_counted(tmp_path: Path) -> None:
    rows = [row for day in range(1, 21) for row in (f"2030-01-{day:02},NOR-HUB,A,7,3,true",) * 3]
    told = faults_of(tmp_path, rows)
    assert len(told) == 26
    assert told[-1].endswith("and 15 more like it from here on")


def test_cancellations_explain_bookings_that_fall(tmp_path: Path) -> None:
    rows = ["2030-02-20,NOR-HUB,A,7,3,true,0", "2030-02-20,NOR-HUB,A,3,2,true,2"]
    header = f"{HEADER},cancelled"
    history = read_text(tmp_path, rows, header).history
    assert history.cancelled.tolist() == [0, 2]
    (fault,) = faults_of(tmp_path, [rows[0], "2030-02-20,NOR-HUB,A,3,1,true,1"], header)
    assert "booked and cancelled together fall from 3 at 7 days" in fault
    told = faults_of(tmp_path, ["2030-02-20,NOR-HUB,A,7,3,true,2", "2030-02-20,NOR-HUB,A,3,4,true,1"], header)
    assert [fault.split(": ")[1] for fault in told] == ["cancelled"]


def test_the_share_of_time_open_decides_where_it_is_given(tmp_path: Path) -> None:
    header = f"{HEADER},open_share"
    rows = [
        "2030-02-20,NOR-HUB,A,7,3,false,1",
        "2030-02-20,NOR-HUB,A,3,5,false,0.25",
        "2030-02-20,NOR-HUB,A,0,5,false,",
    ]
    history = read_text(tmp_path, rows, header).history
    assert history.open.tolist() == [True, False, False]
    assert history.open_share is not None
    assert history.open_share.tolist() == [1, 0.25, 0]
    (fault,) = faults_of(tmp_path, [rows[0], "2030-02-20,NOR-HUB,A,3,5,false,0"], header, may_reopen=True)
    assert "open_share says that the class was closed all along" in fault


def test_a_class_may_have_been_open_in_between(tmp_path: Path) -> None:
    rows = ["2030-02-20,NOR-HUB,A,7,3,false", "2030-02-20,NOR-HUB,A,0,5,false"]
    found = read_text(tmp_path, rows, may_reopen=True)
    assert [warning.column for warning in found.warnings] == ["booked"]
    assert found.history.open_share is not None
    assert np.isnan(found.history.open_share[1])


def test_unknown_itineraries_are_left_out_or_kept_on_demand(tmp_path: Path) -> None:
    rows = ["2030-02-20,OLD,A,7,3,true", "2030-02-20,OLD,A,0,3,true", *SOUND]
    dropped = read_text(tmp_path, rows, unknown="drop")
    assert same(dropped.history, read_text(tmp_path, SOUND).history)
    read = read_text(tmp_path, rows, unknown="drop")
    assert "'OLD' (2 rows)" in str(read.warnings[0])
    kept = read_text(tmp_path, rows, unknown="keep")
    assert kept.warnings == ()
    assert kept.history.n_series == dropped.history.n_series + 1
    assert "OLD" in kept.history.itinerary


def test_gaps_and_early_ends_are_warnings(tmp_path: Path) -> None:
    rows = [f"2030-02-{day:02},NOR-HUB,A,{before},1,true" for day in range(1, 9) for before in (14, 7, 3, 0)]
    assert read_text(tmp_path, rows).warnings == ()
    gap = rows[:5] + rows[7:]
    (warning,) = read_text(tmp_path, gap).warnings
    assert str(warning).startswith(
        "history.csv:7: days_before: warning: 2 readings of most departures lacking between 14 "
    )
    (warning,) = read_text(tmp_path, rows[:-1]).warnings
    assert warning.line == len(rows)
    assert "the last reading of this departure is that at 3 days, though 1 later ones" in warning.problem
    # What has not left cannot have been read to the end.
    ahead = [f"2030-03-01,NOR-HUB,A,{before},1,true" for before in (14, 7)]
    assert read_text(tmp_path, rows + ahead).warnings == ()


def test_an_absent_or_empty_table_is_told(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="there is no such file"):
        read_history(tmp_path / "none.csv", NAMES, CLASSES, AS_OF)
    assert faults_of(tmp_path, []) == ["history.csv: has a header but no rows; add the readings"]
    (fault,) = faults_of(tmp_path, ["2030-02-20,NOR-HUB,A,7,3"], "departure,itinerary,fare_class,days_before,booked")
    assert "open: the column is missing" in fault


def test_the_schema_is_what_the_reader_reads() -> None:
    schema = table_schema("legworth", "history")
    assert [column.name for column in schema if not column.optional] == HEADER.split(",")


@pytest.mark.parametrize("block", range(4))
def test_damaged_tables_are_read_or_told_of(tmp_path: Path, block: int) -> None:
    """Whatever is done to a table, it is read or its faults are listed; each names the file."""
    sound = ("\n".join([f"{HEADER},open_share,cancelled", *(f"{row},,0" for row in SOUND)]) + "\n").encode()
    pieces = [word.encode() for word in WORDS] + BYTES + [b"true", b"-3", b"1e999", b"2030-02-29", b"99999-01-01"]
    for case in range(50):
        rng = random.Random(1000 * block + case)
        data = sound
        for _ in range(rng.randint(1, 4)):
            at, length = rng.randrange(len(data)), rng.choice((0, 1, 2, 8, 40))
            data = data[:at] + rng.choice(pieces) + data[at + length :]
        path = tmp_path / "history.csv"
        path.write_bytes(data)
        try:
            read_history(path, NAMES, CLASSES, AS_OF)
        except InputError as error:
            assert error.faults
            assert all(fault.file == "history.csv" for fault in error.faults)


def test_damaged_and_odd_parquet_is_told_of(tmp_path: Path) -> None:
    read_text(tmp_path, SOUND)
    frame = pd.read_csv(tmp_path / "history.csv", dtype=str)
    sound, path = pa.Table.from_pandas(frame, preserve_index=False), tmp_path / "odd.parquet"
    n = len(frame)
    odd = {
        "departure": pa.array([10**9] * n, pa.int32()).cast(pa.date32()),
        "itinerary": pa.array([["a"]] * n),
        "fare_class": pa.array([b"\xff\xfe"] * n, pa.binary()).view(pa.binary()),
        "days_before": pa.array([float("nan")] * n),
        "booked": pa.array([1.5] * n),
        "open": pa.array([2] * n),
    }
    for column, values in odd.items():
        pyarrow.parquet.write_table(sound.set_column(sound.column_names.index(column), column, values), path)
        with pytest.raises(InputError) as error:
            read_history(path, NAMES, CLASSES, AS_OF)
        assert {fault.column for fault in error.value.faults} == {column}
    pyarrow.parquet.write_table(sound, path)
    data = path.read_bytes()
    rng = random.Random(5)
    for _ in range(60):
        at = rng.randrange(len(data))
        path.write_bytes(data[:at] + bytes([rng.randrange(256)]) + data[at + rng.choice((0, 1, 5)) :])
        try:
            read_history(path, NAMES, CLASSES, AS_OF)
        except InputError as told:
            assert told.faults
