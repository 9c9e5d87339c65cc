"""Airline schedules: what is written from a model is what is read."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import date, timedelta
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from legworth.schedules import Places, SsimOptions, Timetable, Window
from legworth.schedules.ssim import read_ssim
from network.faults import Faults
from tests.legworth.schedules.schedule_reference import expected_rows, rows_of
from tests.legworth.schedules.ssim_writer import Leg, Segment, write

ZONES = {
    "AAA": "UTC",
    "BER": "Europe/Berlin",
    "NYC": "America/New_York",
    "TYO": "Asia/Tokyo",
    "APW": "Pacific/Apia",
    "HNL": "Pacific/Honolulu",
    "LDH": "Australia/Lord_Howe",
}
MARCH = Window(date(2027, 3, 1), date(2027, 3, 31))


def places_with(zones: Mapping[str, str], *, complete: bool = False) -> Places:
    plain = Places.none().with_names(np.array(list(zones), dtype=object))
    return replace(plain, timezone=np.array(list(zones.values()), dtype=object), complete=complete)


def read(
    data: bytes,
    window: Window = MARCH,
    *,
    zones: Mapping[str, str] | None = None,
    seats: Mapping[str, int] | None = None,
    options: SsimOptions | None = None,
) -> tuple[Timetable | None, Faults]:
    faults = Faults()
    places = Places.none() if zones is None else places_with(zones)
    found = read_ssim("w.ssim", data, window, places, seats or {}, options or SsimOptions(), faults)
    return (None if found is None else found.in_order()), faults


def sound(data: bytes, window: Window = MARCH, **how: object) -> Timetable:
    timetable, faults = read(data, window, **how)  # type: ignore[arg-type]
    assert not faults.errors, [str(fault) for fault in faults.errors]
    assert timetable is not None
    return timetable


def file_of(legs: Sequence[Leg], mode: str = "L", **how: object) -> bytes:
    by_carrier: dict[str, list[Leg]] = {}
    for leg in legs:
        by_carrier.setdefault(leg.carrier, []).append(leg)
    return write(*by_carrier.items(), mode=mode, **how)  # type: ignore[arg-type]


CONFIGURATIONS = {"Y180": 180, "C12Y138": 150, "F008C024Y244": 276, "Y189VVB738": 189, "J30W21Y200BB02": 251, "Y000": 0}
STATIONS = sorted(ZONES)
VARIATIONS = st.one_of(st.none(), st.integers(-47, 55).map(lambda quarters: 15 * quarters))


@st.composite
def schedules(draw: st.DrawFn) -> tuple[list[Leg], str]:
    """Flights of one to three legs, whose times rise by what the reader itself goes by: variation or zone."""
    mode = draw(st.sampled_from("LU"))
    legs: list[Leg] = []
    for number in range(1, draw(st.integers(1, 4)) + 1):
        first = draw(st.dates(date(2027, 2, 20), date(2027, 4, 5)))
        plain = Leg(
            carrier=draw(st.sampled_from(["ZQ", "Z9", "QZX"])),
            number=draw(st.sampled_from([number, 1000 + number])),
            suffix=draw(st.sampled_from(["", "D"])),
            variation=draw(st.sampled_from([1, 7, 99, 123])),
            service=draw(st.sampled_from("JSUQ")),
            first=first,
            last=draw(st.one_of(st.none(), st.integers(0, 60).map(lambda days, first=first: first + timedelta(days)))),
            days=draw(st.sets(st.sampled_from("1234567"), min_size=1).map("".join)),
            every_other_week=draw(st.booleans()),
        )
        clock = draw(st.integers(0, 1439))
        calls = draw(st.lists(st.sampled_from(STATIONS), min_size=2, max_size=4, unique=True))
        offsets = {
            call: draw(st.integers(-11 * 4, 14 * 4).map(lambda quarters: 15 * quarters)) if mode == "L" else 0
            for call in calls
        }
        for sequence, (origin, destination) in enumerate(pairwise(calls), 1):
            lands = clock + draw(st.integers(1, 700))
            early, late = draw(st.integers(0, 15)), draw(st.integers(0, 15))
            times = [clock + offsets[origin], lands + offsets[destination]]
            if not all(-1440 <= time < 8 * 1440 for time in times):
                break
            given_variation = [offsets[call] if mode == "L" else draw(VARIATIONS) for call in (origin, destination)]
            legs.append(
                plain.but(
                    sequence=sequence,
                    origin=origin,
                    destination=destination,
                    departs=times[0] % 1440,
                    arrives=times[1] % 1440,
                    departs_day=times[0] // 1440,
                    arrives_day=times[1] // 1440,
                    passenger_departs=(times[0] - early) % 1440,
                    passenger_arrives=(times[1] + late) % 1440,
                    departs_variation=given_variation[0],
                    arrives_variation=given_variation[1],
                    configuration=draw(st.sampled_from(sorted(CONFIGURATIONS))),
                )
            )
            clock = lands + draw(st.integers(30, 200))
    return legs, mode


@settings(deadline=None)
@given(schedules(), st.sampled_from(["\n", "\r\n", ""]), st.booleans())
def test_what_is_written_is_read(drawn: tuple[list[Leg], str], end: str, filling: bool) -> None:
    legs, mode = drawn
    zones = {} if mode == "L" else ZONES
    timetable, faults = read(file_of(legs, mode, end=end, filling=filling), zones=zones)
    expected = expected_rows(legs, mode, ZONES, MARCH.first, MARCH.last, CONFIGURATIONS)
    names = [row[0] for row in expected]
    if len(set(names)) < len(names):  # flights in UTC may share a local date
        assert any("operates on" in fault.problem for fault in faults.errors)
        return
    assert not faults.errors, [str(fault) for fault in faults.errors]
    assert timetable is not None
    assert rows_of(timetable) == expected


@settings(deadline=None)
@given(schedules())
def test_through_legs_go_on_where_the_vehicle_is(drawn: tuple[list[Leg], str]) -> None:
    legs, mode = drawn
    timetable, faults = read(file_of(legs, mode), zones={} if mode == "L" else ZONES)
    if faults.errors or timetable is None:
        return
    at = np.flatnonzero(timetable.through >= 0)
    onward = timetable.through[at]
    assert (timetable.destination[at] == timetable.origin[onward]).all()
    assert (timetable.arrives[at] <= timetable.departs[onward]).all()
    assert len(set(onward.tolist())) == len(onward)
    assert len(at) == sum(name[-1].isalpha() for name in timetable.name.tolist())


ONE_DAY = Window(date(2027, 3, 1), date(2027, 3, 1))


def one(leg: Leg, window: Window = ONE_DAY, mode: str = "L", **how: object) -> tuple[str, str]:
    """Departure and arrival of the only leg of a window."""
    ((_, _, _, departs, arrives, _),) = rows_of(sound(file_of([leg], mode), window, **how))
    return departs, arrives


BERLIN_NEW_YORK = Leg(
    origin="BER", destination="NYC", departs=600, arrives=780, departs_variation=60, arrives_variation=-300
)


def test_local_times_by_variation() -> None:
    assert one(BERLIN_NEW_YORK) == ("2027-03-01T10:00:00+01:00", "2027-03-01T13:00:00-05:00")


def test_local_times_by_zone_where_the_variation_is_missing() -> None:
    leg = BERLIN_NEW_YORK.but(departs_variation=None, arrives_variation=None)
    assert one(leg, zones=ZONES) == one(BERLIN_NEW_YORK)
    summer = Window(date(2027, 3, 29), date(2027, 3, 29))
    assert one(leg, summer, zones=ZONES) == ("2027-03-29T10:00:00+02:00", "2027-03-29T13:00:00-04:00")


def test_times_in_utc_are_shown_by_the_local_clock() -> None:
    leg = BERLIN_NEW_YORK.but(departs=540, arrives=1080)
    assert one(leg, mode="U") == one(BERLIN_NEW_YORK)


def test_a_flight_in_utc_is_named_by_its_local_date() -> None:
    leg = Leg(origin="TYO", destination="HNL", departs=1380, arrives=360, arrives_day=1)
    leg = leg.but(departs_variation=540, arrives_variation=-600)
    timetable = sound(file_of([leg], "U"), ONE_DAY)
    assert rows_of(timetable)[0][:1] + rows_of(timetable)[0][3:5] == (
        "ZQ123-0302",
        "2027-03-02T08:00:00+09:00",
        "2027-03-01T20:00:00-10:00",
    )


def test_east_over_the_date_line_the_leg_arrives_on_the_day_before() -> None:
    leg = Leg(origin="APW", destination="HNL", departs=30, arrives=390, arrives_day=-1)
    leg = leg.but(departs_variation=780, arrives_variation=-600)
    assert one(leg) == ("2027-03-01T00:30:00+13:00", "2027-02-28T06:30:00-10:00")


def test_midnight_and_the_leg_after_it() -> None:
    legs = [
        Leg(departs=1380, arrives=30, arrives_day=1),
        Leg(sequence=2, origin="BBB", destination="CCC", departs=70, arrives=130, departs_day=1, arrives_day=1),
    ]
    timetable = sound(file_of(legs), ONE_DAY)
    assert [(row[0], row[3], row[4]) for row in rows_of(timetable)] == [
        ("ZQ123-0301", "2027-03-01T23:00:00+00:00", "2027-03-02T00:30:00+00:00"),
        ("ZQ123-0301B", "2027-03-02T01:10:00+00:00", "2027-03-02T02:10:00+00:00"),
    ]
    assert timetable.through.tolist() == [1, -1]


def test_2400_is_the_end_of_the_day() -> None:
    assert one(Leg(arrives=1440))[1] == "2027-03-02T00:00:00+00:00"


def test_passenger_times_on_the_other_side_of_midnight() -> None:
    assert one(Leg(departs=10, passenger_departs=1430))[0] == "2027-02-28T23:50:00+00:00"
    assert one(Leg(arrives=1435, passenger_arrives=5))[1] == "2027-03-02T00:05:00+00:00"


def test_a_blank_passenger_time_is_that_of_the_aircraft() -> None:
    data = file_of([Leg(departs=600, arrives=690)])
    line = next(line for line in data.splitlines() if line.startswith(b"3"))
    blank = line[:39] + b"    " + line[43:61] + b"    " + line[65:]
    assert rows_of(sound(data.replace(line, blank), ONE_DAY)) == rows_of(sound(data, ONE_DAY))


def test_an_open_end_goes_on() -> None:
    assert len(sound(file_of([Leg(last=None)]), Window(date(2027, 2, 20), date(2027, 12, 31)))) == 306


def test_the_same_file_without_line_ends() -> None:
    legs = [Leg(), Leg(number=7, days="24")]
    assert rows_of(sound(file_of(legs, end=""))) == rows_of(sound(file_of(legs)))


def test_years_of_two_digits_are_those_of_the_window() -> None:
    leg = Leg(first=date(2099, 12, 30), last=date(2100, 1, 2))
    names = sound(file_of([leg]), Window(date(2099, 12, 1), date(2100, 2, 1))).name.tolist()
    assert names == ["ZQ123-1230", "ZQ123-1231", "ZQ123-0101", "ZQ123-0102"]


def test_over_a_year_names_hold_the_year() -> None:
    leg = Leg(first=date(2027, 3, 1), last=date(2028, 3, 1), days="1234567")
    timetable = sound(file_of([leg]), Window(date(2027, 3, 1), date(2028, 3, 1)))
    assert timetable.name[[0, -1]].tolist() == ["ZQ123-20270301", "ZQ123-20280301"]
    assert len(set(timetable.name.tolist())) == len(timetable) == 367


def test_through_passengers_change_where_the_aircraft_changes() -> None:
    legs = [Leg(), Leg(sequence=2, origin="BBB", destination="CCC", departs=720, arrives=800, equipment="738")]
    assert sound(file_of(legs), ONE_DAY).through.tolist() == [-1, -1]


def test_seats_come_from_the_table_where_the_configuration_has_none() -> None:
    legs = [Leg(configuration=""), Leg(number=2, configuration="NEW", equipment="AT7"), Leg(number=3, equipment="AT7")]
    timetable = sound(file_of(legs), ONE_DAY, seats={"320": 174, "*": 70})
    assert dict(zip(timetable.name.tolist(), timetable.capacity.tolist(), strict=True)) == {
        "ZQ123-0301": 174,
        "ZQ2-0301": 70,
        "ZQ3-0301": 180,
    }


def test_cabins_that_count() -> None:
    legs = [Leg(configuration="F008C024Y244")]
    assert sound(file_of(legs), ONE_DAY, options=SsimOptions(cabins="FC")).capacity.tolist() == [32]


def test_services_without_passengers_are_left_out() -> None:
    """F and V are cargo, by aircraft and by lorry; P is positioning (from memory)."""
    legs = [Leg(), *(Leg(number=2 + at, service=code, configuration="") for at, code in enumerate("FPV"))]
    timetable = sound(file_of(legs), ONE_DAY)
    assert timetable.name.tolist() == ["ZQ123-0301"]
    assert timetable.left_out == {f"leg records of service type {code}": 1 for code in "FPV"}
    legs[2] = Leg(number=3, service="P")
    assert len(sound(file_of(legs), ONE_DAY, options=SsimOptions(service_types="JP"))) == 2


@pytest.mark.parametrize(
    ("status", "kind"),
    [("DD", "domestic"), ("II", "international"), ("DI", "domestic-international"), ("  ", ""), ("D ", ""), (" I", "")],
)
def test_the_connection_status_is_the_kind(status: str, kind: str) -> None:
    assert sound(file_of([Leg(status=status)]), ONE_DAY).kind.tolist() == [kind]


OPERATING = Leg(carrier="ZQ", number=10)
SOLD_AS = Leg(carrier="YY", number=4001, configuration="")


@pytest.mark.parametrize(
    "legs",
    [
        [OPERATING, SOLD_AS.but(segments=(Segment(50, "ZQ   10"),))],
        [OPERATING.but(segments=(Segment(10, "XX 0001 /YY 4001"),)), SOLD_AS],
        [
            SOLD_AS.but(segments=(Segment(50, "ZQ 0010", "AAA", "BBB"),)),
            OPERATING.but(segments=(Segment(10, "YY 4001"),)),
        ],
        [SOLD_AS.but(segments=(Segment(2, "ZQ"),)), OPERATING],
        [SOLD_AS.but(segments=(Segment(127, "ZQ /STERNKAP LINES"),)), OPERATING],
        [SOLD_AS.but(segments=(Segment(127, "/ZQ"),)), OPERATING],
    ],
    ids=["element 50", "element 10", "both", "element 2", "element 127", "element 127 after a stroke"],
)
def test_codeshares_are_not_counted_twice(legs: list[Leg]) -> None:
    timetable = sound(file_of(legs))
    assert len(timetable) == 31
    assert {name.partition("-")[0] for name in timetable.name.tolist()} == {"ZQ10"}
    assert timetable.left_out["legs sold under another flight (codeshares)"] == 31


def test_a_flight_sold_besides_is_only_left_out_when_it_is_the_same_departure() -> None:
    other = Leg(carrier="YY", number=4001, departs=660, arrives=750)
    timetable = sound(file_of([OPERATING.but(segments=(Segment(10, "YY 4001"),)), other]), ONE_DAY)
    assert timetable.name.tolist() == ["ZQ10-0301", "YY4001-0301"]


def test_codeshares_operated_outside_the_file() -> None:
    legs = [OPERATING, Leg(carrier="ZQ", number=4001, departs=700, arrives=790, segments=(Segment(50, "YY 0007"),))]
    timetable, faults = read(file_of(legs), ONE_DAY)
    assert timetable is not None
    assert timetable.name.tolist() == ["ZQ10-0301"]
    assert "YY7, which is not in this file" in str(faults.warnings[0])
    kept = sound(file_of(legs), ONE_DAY, options=SsimOptions(partner_legs=True))
    assert kept.name.tolist() == ["ZQ10-0301", "ZQ4001-0301"]


@pytest.mark.parametrize(
    "told",
    [Segment(127, "YY SOMEBODY"), Segment(127, "ZQX"), Segment(127, "ZQUICK AIR"), Segment(3, "ZQ"), Segment(127, "")],
    ids=["its own carrier", "another carrier", "a name", "the owner of the aircraft", "nothing"],
)
def test_a_leg_is_no_codeshare_by_what_does_not_name_its_operator(told: Segment) -> None:
    timetable = sound(file_of([OPERATING, SOLD_AS.but(configuration="Y100", segments=(told,))]), ONE_DAY)
    assert sorted(timetable.name.tolist()) == ["YY4001-0301", "ZQ10-0301"]


def test_a_leg_operated_by_another_carrier_without_a_leg_of_its_own_is_counted() -> None:
    """A wet lease has one record, that of the carrier that sells it."""
    leased = SOLD_AS.but(departs=700, arrives=790, configuration="Y100", segments=(Segment(9, "ZQ"),))
    timetable = sound(file_of([OPERATING, leased]), ONE_DAY)
    assert timetable.name.tolist() == ["ZQ10-0301", "YY4001-0301"]


def test_other_elements_are_left_alone() -> None:
    legs = [Leg(segments=(Segment(127, "ANY WORDS"), Segment(1, "/"), Segment(999, "")))]
    assert rows_of(sound(file_of(legs))) == rows_of(sound(file_of([Leg()])))


@pytest.mark.parametrize("end", ["\n", "\r\n", ""])
def test_an_empty_carrier_is_no_fault(end: str) -> None:
    assert len(sound(write(("ZQ", []), ("YY", [Leg(carrier="YY")]), end=end), ONE_DAY)) == 1
