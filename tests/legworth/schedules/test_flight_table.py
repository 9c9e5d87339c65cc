"""Plain tables of flights: dates, local times, names, and every fault by line and column."""

from __future__ import annotations

import random
from datetime import date, datetime, time, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from legworth.schedules import Timetable, Window
from legworth.schedules.flight_table import read_flight_table
from network import InputError, SettingError
from network.faults import Faults
from tests.legworth.schedules.schedule_reference import rows_of
from tests.legworth.schedules.test_ssim import MARCH, ZONES, places_with

HEADER = "carrier,number,origin,destination,departs,arrives,arrives_day,from,to,days,equipment,seats,kind"
ROWS = [
    "ZQ,10,BER,NYC,10:00,13:00,,2027-03-01,2027-03-31,1234567,330,,air",
    "ZQ,11,NYC,BER,18:00,08:00,1,2027-03-01,2027-03-31,135,330,250,air",
    "ZQ,20,APW,HNL,00:30,06:30,-1,2027-03-01,2027-03-31,7,AT7,,",
    "ZQ,30,TYO,APW,23:30,12:00,1,2027-03-01,2027-03-14,6,AT7,,",
    "ZQ,30,APW,HNL,14:00,20:00,-1,2027-03-02,2027-03-15,7,AT7,,",
]
SEATS = {"330": 260, "AT7": 70}


def table_of(rows: list[str], path: Path, header: str = HEADER) -> Path:
    file = path / "flights.csv"
    file.write_bytes("\n".join([header, *rows, ""]).encode())
    return file


def read(
    file: Path, window: Window = MARCH, *, complete: bool = False, **zones: str
) -> tuple[Timetable | None, Faults]:
    faults = Faults()
    places = places_with(zones or ZONES, complete=complete)
    found = read_flight_table(file, window, places, SEATS, faults)
    return (None if found is None else found.in_order()), faults


def sound(rows: list[str], path: Path, window: Window = MARCH) -> Timetable:
    timetable, faults = read(table_of(rows, path), window)
    assert not faults.errors, [str(fault) for fault in faults.errors]
    assert timetable is not None
    return timetable


def test_flights_of_a_weekend(tmp_path: Path) -> None:
    weekend = Window(date(2027, 3, 12), date(2027, 3, 14))
    assert rows_of(sound(ROWS, tmp_path, weekend)) == [
        ("ZQ10-0312", "BER", "NYC", "2027-03-12T10:00:00+01:00", "2027-03-12T13:00:00-05:00", 260),
        ("ZQ11-0312", "NYC", "BER", "2027-03-12T18:00:00-05:00", "2027-03-13T08:00:00+01:00", 250),
        ("ZQ10-0313", "BER", "NYC", "2027-03-13T10:00:00+01:00", "2027-03-13T13:00:00-05:00", 260),
        ("ZQ20-0314", "APW", "HNL", "2027-03-14T00:30:00+13:00", "2027-03-13T06:30:00-10:00", 70),
        ("ZQ30-0313", "TYO", "APW", "2027-03-13T23:30:00+09:00", "2027-03-14T12:00:00+13:00", 70),
        ("ZQ30-0314", "APW", "HNL", "2027-03-14T14:00:00+13:00", "2027-03-13T20:00:00-10:00", 70),
        ("ZQ10-0314", "BER", "NYC", "2027-03-14T10:00:00+01:00", "2027-03-14T13:00:00-04:00", 260),
    ]


def test_two_legs_of_one_number_on_a_date_have_a_letter_and_one_vehicle(tmp_path: Path) -> None:
    rows = [
        "ZQ,5,NYC,BER,12:00,20:00,,2027-03-01,2027-03-01,1,738,100,",
        "ZQ,5,BER,AAA,08:00,08:30,,2027-03-01,2027-03-01,1,738,100,",
        "ZQ,5,AAA,NYC,10:00,11:00,,2027-03-01,2027-03-01,1,738,100,",
        "ZQ,6,BER,AAA,09:00,09:30,,2027-03-01,2027-03-01,1,738,100,",
        "ZQ,6,AAA,NYC,10:00,11:00,,2027-03-01,2027-03-01,1,320,100,",
    ]
    timetable = sound(rows, tmp_path)
    assert timetable.name.tolist() == ["ZQ5-0301", "ZQ6-0301", "ZQ5-0301B", "ZQ6-0301B", "ZQ5-0301C"]
    assert timetable.recurring.tolist() == ["ZQ5", "ZQ6", "ZQ5/B", "ZQ6/B", "ZQ5/C"]
    assert timetable.through.tolist() == [2, -1, 4, -1, -1]


TIMES = st.integers(0, 1439).map(lambda minute: f"{minute // 60:02d}:{minute % 60:02d}")
PLACES = sorted(ZONES)


@settings(deadline=None, max_examples=60)
@given(
    st.lists(
        st.tuples(
            st.permutations(PLACES).map(lambda places: places[:2]),
            TIMES,
            TIMES,
            st.integers(-1, 2),
            st.sets(st.sampled_from("1234567"), min_size=1),
            st.integers(0, 20),
        ),
        min_size=1,
        max_size=5,
    ),
    st.dates(date(2027, 1, 1), date(2027, 12, 1)),
)
def test_local_times_are_those_of_zoneinfo(
    tmp_path_factory: pytest.TempPathFactory, drawn: list[tuple[list[str], str, str, int, set[str], int]], start: date
) -> None:
    window = Window(start, start + timedelta(days=30))
    rows, expected = [], []
    for number, (ends, departs, arrives, shift, days, length) in enumerate(drawn, 1):
        last = start + timedelta(days=length)
        rows.append(
            f"ZQ,{number},{ends[0]},{ends[1]},{departs},{arrives},{shift},{start},{last},{''.join(sorted(days))},X,9,"
        )
        for day in (start + timedelta(days=n) for n in range(length + 1)):
            if str(day.isoweekday()) in days:
                moments = [
                    datetime.combine(day + timedelta(days=after), time.fromisoformat(clock), ZoneInfo(ZONES[end]))
                    for end, clock, after in ((ends[0], departs, 0), (ends[1], arrives, shift))
                ]
                expected.append((number, *moments))
    impossible = {
        number
        for number, *moments in expected
        for moment in moments
        if datetime.fromtimestamp(moment.timestamp(), moment.tzinfo).replace(tzinfo=None, fold=0)
        != moment.replace(tzinfo=None)
    }
    late = {number for number, departs, arrives in expected if arrives.timestamp() <= departs.timestamp()} - impossible
    timetable, faults = read(table_of(rows, tmp_path_factory.mktemp("drawn")), window)
    lines = {fault.line - 1: fault.problem for fault in faults.errors}
    assert impossible | late >= lines.keys() >= impossible
    assert all("does not exist" in lines[number] or number in late for number in impossible)
    if lines or not expected:
        return
    assert timetable is not None
    assert sorted(row[3:5] for row in rows_of(timetable)) == sorted(
        (departs.isoformat(), arrives.isoformat()) for _, departs, arrives in expected
    )


FAULTS = {
    "no carrier": (2, "carrier", ",10,BER"),
    "white space in the number": (2, "number", "ZQ,1 0,BER"),
    "a time of 24:00": (2, "departs", "BER,NYC,24:00,13:00"),
    "a time without colon": (2, "departs", "BER,NYC,1000,13:00"),
    "a time of one digit": (2, "arrives", "BER,NYC,10:00,9:00"),
    "a date in another form": (2, "from", "01.03.2027,2027-03-31"),
    "no such date": (2, "to", "2027-03-01,2027-02-30"),
    "a period turned round": (2, "to", "2027-03-31,2027-03-01"),
    "days out of order": (2, "days", "2027-03-31,31,"),
    "day 8": (2, "days", "2027-03-31,8,"),
    "no days": (2, "days", "2027-03-31,,"),
    "days of arrival out of bounds": (2, "arrives_day", "13:00,8,"),
    "a leg to its own station": (2, "destination", "BER,BER"),
    "equipment without seats": (2, "equipment", "1234567,777,"),
    "no equipment at all": (2, "equipment", "1234567,,"),
    "too many seats": (2, "seats", "330,100001"),
    "half a seat": (2, "seats", "330,99.5"),
    "no zone": (2, "origin", "ZQ,10,XXX"),
    "arrival before departure": (2, "arrives", "10:00,03:00"),
}
ROW = "ZQ,10,BER,NYC,10:00,13:00,,2027-03-01,2027-03-31,1234567,330,,air"
PARTS = {
    "no carrier": "ZQ,10,BER",
    "white space in the number": "ZQ,10,BER",
    "a time of 24:00": "BER,NYC,10:00,13:00",
    "a time without colon": "BER,NYC,10:00,13:00",
    "a time of one digit": "BER,NYC,10:00,13:00",
    "a date in another form": "2027-03-01,2027-03-31",
    "no such date": "2027-03-01,2027-03-31",
    "a period turned round": "2027-03-01,2027-03-31",
    "days out of order": "2027-03-31,1234567,",
    "day 8": "2027-03-31,1234567,",
    "no days": "2027-03-31,1234567,",
    "days of arrival out of bounds": "13:00,,",
    "a leg to its own station": "BER,NYC",
    "equipment without seats": "1234567,330,",
    "no equipment at all": "1234567,330,",
    "too many seats": "330,",
    "half a seat": "330,",
    "no zone": "ZQ,10,BER",
    "arrival before departure": "10:00,13:00",
}


@pytest.mark.parametrize("name", FAULTS)
def test_a_fault_is_told_by_line_and_column(name: str, tmp_path: Path) -> None:
    line, column, new = FAULTS[name]
    assert ROW.count(PARTS[name]) == 1
    timetable, faults = read(table_of([ROW.replace(PARTS[name], new), *ROWS[1:]], tmp_path))
    assert timetable is None
    assert [(fault.line, fault.column) for fault in faults.errors] == [(line, column)]
    assert "; " in faults.errors[0].problem


def test_stations_that_the_table_does_not_have(tmp_path: Path) -> None:
    _, faults = read(table_of(ROWS[:2], tmp_path), complete=True, BER="Europe/Berlin")
    assert [(fault.line, fault.column) for fault in faults.errors] == [(2, "destination"), (3, "origin")]
    assert "'NYC' is not in the table of stations" in str(faults.errors[0])
    _, faults = read(table_of(ROWS[2:3], tmp_path), complete=True, BER="Europe/Berlin")
    assert [fault.column for fault in faults.errors] == ["destination", "origin"]


def test_overlapping_periods_of_a_flight(tmp_path: Path) -> None:
    rows = [ROWS[1], ROWS[1].replace("18:00", "19:00").replace(",135,", ",56,")]
    _, faults = read(table_of(rows, tmp_path))
    (error,) = faults.errors
    assert (error.line, error.column) == (3, "from and to")
    assert "ZQ11 operates on 2027-03-05 by line 2 already" in error.problem


def test_the_table_may_be_parquet(tmp_path: Path) -> None:
    csv = table_of(ROWS, tmp_path)
    parquet = tmp_path / "flights.parquet"
    pd.read_csv(csv, dtype=str, keep_default_na=False).to_parquet(parquet, index=False)
    one, other = read(csv)[0], read(parquet)[0]
    assert one is not None
    assert other is not None
    assert rows_of(one) == rows_of(other)


def test_columns_may_stand_in_any_order_and_optional_ones_be_left_out(tmp_path: Path) -> None:
    frame = pd.read_csv(table_of(ROWS[:2], tmp_path), dtype=str, keep_default_na=False)
    frame["seats"] = frame["seats"].replace("", "260")
    plain, _ = read(tmp_path / "flights.csv")
    short = tmp_path / "short.csv"
    frame.drop(columns=["equipment", "kind"])[["seats", *frame.columns[:10]]].to_csv(short, index=False)
    found, faults = read(short)
    assert not faults.found
    assert plain is not None
    assert found is not None
    assert rows_of(plain) == rows_of(found)


def test_mutated_tables_end_in_legs_or_in_faults(tmp_path: Path) -> None:
    content = ("\n".join([HEADER, *ROWS]) + "\n").encode()
    outcomes = {True: 0, False: 0}
    for seed in range(100):
        rng, data = random.Random(seed), bytearray(content)
        for _ in range(rng.choice([1, 1, 2, 4])):
            at = rng.randrange(len(data))
            if rng.random() < 0.7:
                data[at] = rng.choice(b'0123456789,:-\n"ABZ\xff\0 ')
            else:
                del data[at : at + rng.choice([1, 3, 20])]
        file = tmp_path / "flights.csv"
        file.write_bytes(data)
        try:
            timetable, faults = read(file)
        except (InputError, SettingError):
            outcomes[False] += 1
            continue
        assert (timetable is None) == bool(faults.errors)
        outcomes[timetable is not None] += 1
    assert min(outcomes.values()) > 5, outcomes
