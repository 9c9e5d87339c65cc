"""The record layout of airline schedule files, byte by byte, and facts of the trade about them.

Source: IATA, Standard Schedules Information Manual, chapter 7, *from memory*: positions, names and codes below were
written down without the manual at hand. The offsets between local time and UTC are those of the IANA database.
"""

from __future__ import annotations

from datetime import date
from itertools import pairwise

import numpy as np
import pytest

from legworth.schedules import Places, SsimOptions, Window
from legworth.schedules.seats import configured_seats
from legworth.schedules.ssim import read_ssim
from legworth.schedules.ssim_layout import CARRIER, FLIGHT_LEG, HEADER, SEGMENT, TRAILER, Layout
from legworth.schedules.ssim_records import SsimRecords
from legworth.schedules.traffic import Traffic
from network.faults import Faults

LEG_FIELDS = """\
1-1 record type
2-2 operational suffix
3-5 airline designator
6-9 flight number
10-11 itinerary variation identifier
12-13 leg sequence number
14-14 service type
15-21 period from
22-28 period to
29-35 days of operation
36-36 frequency rate
37-39 departure station
40-43 passenger departure time
44-47 aircraft departure time
48-52 departure UTC variation
53-54 departure terminal
55-57 arrival station
58-61 aircraft arrival time
62-65 passenger arrival time
66-70 arrival UTC variation
71-72 arrival terminal
73-75 aircraft type
76-95 reservations booking designators
96-100 reservations booking modifiers
101-110 meal service
111-119 joint operation airlines
120-120 departure connection status
121-121 arrival connection status
122-122 secure flight indicator
128-128 itinerary variation overflow
129-131 aircraft owner
132-134 cockpit crew employer
135-137 cabin crew employer
138-140 onward airline designator
141-144 onward flight number
145-145 aircraft rotation layover
146-146 onward operational suffix
148-148 flight transit layover
149-149 operating airline disclosure
150-160 traffic restriction codes
161-161 traffic restriction overflow
173-192 aircraft configuration
193-193 departure date variation
194-194 arrival date variation
195-200 record serial number
"""


def table() -> dict[str, tuple[int, int]]:
    found = {}
    for line in LEG_FIELDS.splitlines():
        place, _, name = line.partition(" ")
        first, last = place.split("-")
        found[name] = (int(first), int(last))
    return found


@pytest.mark.parametrize("name", table())
def test_every_field_of_the_leg_record_stands_where_it_stands(name: str) -> None:
    """Bytes put at a position, and nowhere else, come out as that field and as no other."""
    first, last = table()[name]
    record = np.full((1, 200), ord("."), dtype=np.uint8)
    record[0, first - 1 : last] = [ord("A") + place % 26 for place in range(last - first + 1)]
    records = SsimRecords("f", record, np.array([1]), np.array([1]))
    for field in FLIGHT_LEG.values():
        text = records.text(field)[0].decode()
        assert ("." not in text) == (field.name == name)
        assert len(text) == field.width


def test_the_leg_record_has_these_fields_and_no_others() -> None:
    assert {field.name: (field.first, field.last) for field in FLIGHT_LEG.values()} == table()


@pytest.mark.parametrize("layout", [HEADER, CARRIER, FLIGHT_LEG, SEGMENT, TRAILER])
def test_fields_do_not_overlap_and_end_with_the_serial_number(layout: Layout) -> None:
    fields = list(layout.values())
    assert fields[0].name == "record type"
    assert all(one.last < other.first for one, other in pairwise(fields))
    assert (fields[-1].first, fields[-1].last) == (195, 200)


POSITIONS = {
    "carrier": (CARRIER, {"time mode": 2, "airline designator": 3, "season": 11, "period from": 15, "period to": 22}),
    "segment": (SEGMENT, {"data element identifier": 31, "board point": 34, "off point": 37, "data": 40}),
    "trailer": (TRAILER, {"airline designator": 3, "serial number check reference": 188, "continuation code": 194}),
    "header": (HEADER, {"title of contents": 2, "data set serial number": 192}),
}


@pytest.mark.parametrize("record", POSITIONS)
def test_fields_of_the_other_records(record: str) -> None:
    layout, expected = POSITIONS[record]
    assert {field.name: field.first for field in layout.values() if field.name in expected} == expected


RECORD = (
    "3 ZQ  1230101J28MAR2730OCT27 2 4 6 2FRA09350940+0200 1JFK12001205-0400 432D"
    "FCYBMHQ                       M             DIY"
)
"""The head of a leg record as a carrier would write it; the carrier is invented."""


def test_a_record_written_out_by_hand() -> None:
    record = (RECORD.ljust(172) + "F008C030Y221VV1").ljust(194) + "000003"
    head = ("1AIRLINE STANDARD SCHEDULE DATA SET".ljust(40) + "2").ljust(191) + "001000001"
    carrier = "2LZQ      S27 28MAR2730OCT2701FEB27".ljust(71) + "P"
    trailer = ("5 ZQ 01FEB27".ljust(187) + "000003E").ljust(194) + "000004"
    data = "\r\n".join([head, carrier.ljust(194) + "000002", record, trailer]).encode()
    faults = Faults()
    window = Window(date(2027, 3, 28), date(2027, 4, 17))
    timetable = read_ssim("f", data, window, Places.none(), {}, SsimOptions(), faults)
    assert not faults.found
    assert timetable is not None
    # Tuesdays, Thursdays and Saturdays of the first and the third week from Sunday 28 March on.
    days = ["0330", "0401", "0403", "0413", "0415", "0417"]
    assert timetable.name.tolist() == [f"ZQ123-{day}" for day in days]
    assert timetable.departs[0] == np.datetime64("2027-03-30T07:35").astype("datetime64[s]").astype(np.int64)
    assert timetable.arrives[0] == np.datetime64("2027-03-30T16:05").astype("datetime64[s]").astype(np.int64)
    assert timetable.capacity.tolist() == [259] * 6
    assert timetable.kind[0] == "domestic-international"


@pytest.mark.parametrize(
    ("text", "seats"),
    [
        ("Y180", 180),
        ("C12Y138", 150),
        ("C012Y138", 150),
        ("F8C30W24Y244", 306),
        ("Y189VV738", 189),
        ("C8Y100BB02LL04PP06", 108),
        ("PP27", -1),
        ("", -1),
        ("M1", 1),
        ("VVY200", -1),
    ],
)
def test_aircraft_configurations(text: str, seats: int) -> None:
    """Letters of cabins with seats; bulk, loading devices, pallets and the version after VV hold none (from memory)."""
    assert configured_seats(text) == seats


@pytest.mark.parametrize(
    ("code", "local", "connecting"),
    [
        (" ", True, True),
        ("A", False, True),  # no local traffic
        ("B", True, False),  # local traffic only
        ("F", True, True),  # local and online connecting traffic only
        ("I", False, False),  # technical landing
        ("K", False, True),  # connecting traffic only
        ("Y", False, True),  # online connecting traffic only
        ("T", False, False),  # online stopover traffic only
    ],
)
def test_traffic_restriction_codes(code: str, local: bool, connecting: bool) -> None:
    """Meaning of the codes from memory. Leg 0 is restricted; it is sold by itself, and with leg 1 after a change."""
    codes = np.full((1, 11), b" ", dtype="S1")
    codes[0, 0] = code.encode()
    traffic = Traffic(np.ones(2, bool), np.ones(2, bool), np.array([0, -1]), codes)
    found = traffic.permitted(np.array([-1, -1]), np.array([0, 1, 3]), np.array([0, 0, 1]))
    assert found.tolist() == [local, connecting]
    # Where passengers stay on board over leg 1 the code of the first leg alone says nothing.
    assert traffic.permitted(np.array([1, -1]), np.array([0, 2]), np.array([0, 1])).tolist() == [True]
