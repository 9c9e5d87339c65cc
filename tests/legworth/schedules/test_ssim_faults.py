"""Every fault of an airline schedule is told with its line and bytes, all at once, and nothing else is."""

from __future__ import annotations

import random
from collections.abc import Callable
from dataclasses import dataclass
from datetime import date

import pytest

from legworth.schedules import SsimOptions, Window
from legworth.schedules.ssim import read_ssim
from network import InputError, SettingError
from network.faults import LISTED_PER_KIND, Faults
from tests.legworth.schedules.ssim_writer import Leg, Segment, write
from tests.legworth.schedules.test_ssim import MARCH, ZONES, file_of, places_with, read

LEGS = [
    Leg(),
    Leg(sequence=2, origin="BBB", destination="CCC", departs=720, arrives=800),
    Leg(number=7, days="135", segments=(Segment(10, "YY 4001"),)),
]
CARRIER, FIRST, SECOND, THIRD, FOURTH, END = 6, 11, 12, 13, 14, 15
"""Lines of the file that `sound_lines` gives."""


def sound_lines() -> list[bytes]:
    lines = file_of(LEGS).splitlines()
    kinds = [lines[line - 1][:1] for line in (1, CARRIER, FIRST, SECOND, THIRD, FOURTH, END)]
    assert kinds == [b"1", b"2", b"3", b"3", b"3", b"4", b"5"]
    return lines


def with_bytes(line: int, first: int, text: bytes) -> list[bytes]:
    """Sound lines with other bytes from a position on."""
    lines = sound_lines()
    old = lines[line - 1]
    lines[line - 1] = old[: first - 1] + text + old[first - 1 + len(text) :]
    assert len(lines[line - 1]) == 200
    return lines


def places_of(lines: list[bytes], window: Window = MARCH, **how: object) -> list[tuple[int, str]]:
    timetable, faults = read(b"\n".join(lines) + b"\n", window, **how)  # type: ignore[arg-type]
    assert (timetable is None) == bool(faults.errors)
    for fault in faults.errors:
        assert "; " in fault.problem or fault.count > 1, fault
    return [(fault.line, fault.column) for fault in faults.errors]


def test_the_sound_file_has_no_fault() -> None:
    assert places_of(sound_lines()) == []


FIELDS = [
    (FIRST, 2, b"1", "2 operational suffix"),
    (FIRST, 3, b"z! ", "3-5 airline designator"),
    (FIRST, 3, b"12 ", "3-5 airline designator"),
    (FIRST, 6, b" 12A", "6-9 flight number"),
    (FIRST, 6, b"0000", "6-9 flight number"),
    (FIRST, 10, b" 1", "10-11 itinerary variation identifier"),
    (FIRST, 12, b"00", "12-13 leg sequence number"),
    (FIRST, 14, b"3", "14 service type"),
    (FIRST, 15, b"31FEB27", "15-21 period from"),
    (FIRST, 15, b"01MRZ27", "15-21 period from"),
    (FIRST, 15, b"00XXX00", "15-21 period from"),
    (FIRST, 22, b"32MAR27", "22-28 period to"),
    (FIRST, 22, b"28FEB27", "22-28 period to"),
    (FIRST, 29, b"1 2    ", "29-35 days of operation"),
    (FIRST, 29, b"       ", "29-35 days of operation"),
    (FIRST, 29, b"0123456", "29-35 days of operation"),
    (FIRST, 36, b"3", "36 frequency rate"),
    (FIRST, 37, b"A1A", "37-39 departure station"),
    (FIRST, 40, b"2401", "40-43 passenger departure time"),
    (FIRST, 40, b"1060", "40-43 passenger departure time"),
    (FIRST, 44, b"10:0", "44-47 aircraft departure time"),
    (FIRST, 48, b" 0100", "48-52 departure UTC variation"),
    (FIRST, 48, b"+1401", "48-52 departure UTC variation"),
    (FIRST, 55, b"bbb", "55-57 arrival station"),
    (FIRST, 55, b"AAA", "55-57 arrival station"),
    (FIRST, 58, b"99 9", "58-61 aircraft arrival time"),
    (FIRST, 62, b"-100", "62-65 passenger arrival time"),
    (FIRST, 66, b"+01.0", "66-70 arrival UTC variation"),
    (FIRST, 73, b"32 ", "73-75 aircraft type"),
    (FIRST, 120, b"X", "120 departure connection status"),
    (FIRST, 121, b"1", "121 arrival connection status"),
    (FIRST, 128, b"A", "128 itinerary variation overflow"),
    (FIRST, 150, b"A1", "150-160 traffic restriction codes"),
    (FIRST, 193, b"8", "193 departure date variation"),
    (FIRST, 194, b"B", "194 arrival date variation"),
    (FIRST, 195, b"00000x", "195-200 record serial number"),
    (CARRIER, 2, b"X", "2 time mode"),
    (CARRIER, 3, b"   ", "3-5 airline designator"),
    (CARRIER, 15, b"       ", "15-21 period from"),
    (1, 2, b"SOMETHING", "2-35 title of contents"),
    (FOURTH, 6, b"  8 ", "6-9 flight number"),
    (FOURTH, 14, b"F", "14 service type"),
    (FOURTH, 31, b" 10", "31-33 data element identifier"),
    (FOURTH, 40, b"NO FLIGHT", "40-194 data"),
    (END, 3, b"YY ", "3-5 airline designator"),
    (END, 188, b"000009", "188-193 serial number check reference"),
    (END, 194, b"C", "194 continuation code"),
    (FIRST, 1, b"9", "1 record type"),
]


@pytest.mark.parametrize(("line", "first", "text", "column"), FIELDS, ids=[f"{row[3]} {row[2]!r}" for row in FIELDS])
def test_a_faulty_field_is_told_by_line_and_bytes(line: int, first: int, text: bytes, column: str) -> None:
    found = places_of(with_bytes(line, first, text))
    assert (line, column) in found
    assert {where for where, _ in found} <= {line, line + 1, END}


@pytest.mark.parametrize("byte", [b"\xc3", b"\xff", b"\0", b"\t", b"\x7f"])
@pytest.mark.parametrize(
    ("first", "column"),
    [(1, "1 record type"), (38, "37-39 departure station"), (148, "148 flight transit layover"), (125, "125")],
)
def test_signs_that_are_no_ascii(byte: bytes, first: int, column: str) -> None:
    assert (FIRST, column) in places_of(with_bytes(FIRST, first, byte))


@pytest.mark.parametrize("length", [199, 201, 1, 150])
def test_lines_of_another_length(length: int) -> None:
    lines = sound_lines()
    lines[SECOND - 1] = lines[SECOND - 1].ljust(length)[:length]
    timetable, faults = read(b"\n".join(lines))
    assert timetable is None
    assert [(f.line, f.column) for f in faults.errors] == [(SECOND, "")]
    assert f"holds {length} bytes where a record has 200" in str(faults.errors[0])


def test_a_file_cut_off_in_the_middle() -> None:
    data = file_of(LEGS)
    for at in (len(data) // 2, 150, 201 * 13 + 17):
        timetable, faults = read(data[:at])
        assert timetable is None
        assert "holds" in str(faults.errors[-1])


def test_a_file_cut_off_between_records() -> None:
    lines = sound_lines()[:THIRD]
    timetable, faults = read(b"\n".join(lines))
    assert timetable is None
    assert [(f.line, f.column, f.problem.partition(";")[0]) for f in faults.errors] == [
        (THIRD, "1 record type", "the file ends without a trailer (type 5)")
    ]


@dataclass(frozen=True)
class Order:
    """A change of the order of records, and where it shows first."""

    change: Callable[[list[bytes]], None]
    line: int
    column: str


def swap(one: int, other: int) -> Callable[[list[bytes]], None]:
    def change(lines: list[bytes]) -> None:
        lines[one - 1], lines[other - 1] = lines[other - 1], lines[one - 1]

    return change


ORDERS = {
    "a leg twice": Order(
        lambda lines: lines.insert(FIRST, lines[FIRST - 1]), FIRST + 1, "195-200 record serial number"
    ),
    "a leg missing": Order(lambda lines: lines.pop(FIRST - 1), FIRST, "195-200 record serial number"),
    "two legs swapped": Order(swap(FIRST, SECOND), FIRST, "195-200 record serial number"),
    "no header": Order(lambda lines: lines.pop(0), CARRIER - 1, "1 record type"),
    "no carrier": Order(lambda lines: lines.pop(CARRIER - 1), FIRST - 1, "1 record type"),
    "a segment before its leg": Order(swap(THIRD, FOURTH), THIRD, "2 operational suffix"),
    "carrier after a leg": Order(swap(CARRIER, FIRST), CARRIER, "1 record type"),
    "trailer in the middle": Order(swap(SECOND, END), SECOND, "194 continuation code"),
    "header twice": Order(lambda lines: lines.insert(1, lines[0]), 2, "1 record type"),
}


@pytest.mark.parametrize("name", ORDERS)
def test_records_in_the_wrong_order(name: str) -> None:
    lines, order = sound_lines(), ORDERS[name]
    order.change(lines)
    found = places_of(lines)
    assert found
    if name == "a segment before its leg":
        assert (THIRD, "6-9 flight number") in found
    else:
        assert (order.line, order.column) in found


def test_unknown_stations_are_faults_only_with_a_complete_table() -> None:
    faults = Faults()
    places = places_with({"AAA": "", "BBB": ""}, complete=True)
    assert read_ssim("w.ssim", file_of(LEGS), MARCH, places, {}, SsimOptions(), faults) is None
    assert [(f.line, f.column) for f in faults.errors] == [(SECOND, "55-57 arrival station")]
    assert "'CCC' is not in the table of stations" in str(faults.errors[0])


def test_both_unknown_stations_of_a_leg_are_told_at_once_and_those_of_legs_not_taken_not_at_all() -> None:
    legs = [Leg(origin="XXA", destination="XXB"), Leg(number=2, service="F", origin="XXC", destination="XXD")]
    unclocked = Leg(number=3, service="F", departs_variation=None, arrives_variation=None)
    faults = Faults()
    places = places_with({"AAA": "", "BBB": ""}, complete=True)
    assert read_ssim("w.ssim", file_of([*legs, unclocked]), MARCH, places, {}, SsimOptions(), faults) is None
    assert [f.column for f in faults.errors] == ["37-39 departure station", "55-57 arrival station"]
    faults = Faults()
    found = read_ssim("w.ssim", file_of([Leg(), legs[1], unclocked]), MARCH, places, {}, SsimOptions(), faults)
    assert not faults.found
    assert found is not None
    assert found.left_out == {"leg records of service type F": 2}


BERLIN = Leg(origin="BER", destination="NYC", departs=150, arrives=400, departs_variation=None, arrives_variation=None)


def problems(leg: Leg, **how: object) -> tuple[list[str], list[str]]:
    _, faults = read(file_of([leg]), zones=ZONES, **how)  # type: ignore[arg-type]
    return [str(fault) for fault in faults.errors], [str(fault) for fault in faults.warnings]


@pytest.mark.parametrize("variation", [None, 60, 120])
def test_a_time_that_does_not_exist(variation: int | None) -> None:
    """On 28 March 2027 clocks in Berlin go from 02:00 to 03:00 (IANA time zone database)."""
    errors, _ = problems(BERLIN.but(departs_variation=variation))
    assert len(errors) == 1
    assert errors[0].startswith("w.ssim:11: 40-43 passenger departure time: 02:30 on 2027-03-28 at BER (Europe/Berlin)")
    assert "does not exist" in errors[0]


def test_a_time_that_occurs_twice() -> None:
    """On 31 October 2027 clocks in Berlin go from 03:00 back to 02:00 (IANA time zone database)."""
    autumn = Window(date(2027, 10, 31), date(2027, 10, 31))
    leg = BERLIN.but(last=None)
    errors, warnings = problems(leg, window=autumn)
    assert errors == []
    assert "40-43 passenger departure time: warning: 02:30 on 2027-10-31 at BER occurs twice" in warnings[0]
    timetable, _ = read(file_of([leg]), autumn, zones=ZONES)
    assert timetable is not None
    assert timetable.departs_offset.tolist() == [120]
    for variation in (60, 120):
        timetable, faults = read(file_of([leg.but(departs_variation=variation)]), autumn, zones=ZONES)
        assert timetable is not None
        assert timetable.departs_offset.tolist() == [variation]
        twice = [w for w in faults.warnings if "twice" in str(w)]
        assert not twice


def test_a_variation_that_the_zone_does_not_have() -> None:
    errors, warnings = problems(BERLIN.but(departs=600, arrives=700, departs_variation=60, arrives_variation=-300))
    assert errors == []
    assert warnings == [
        "w.ssim:11: 48-52 departure UTC variation: warning: +0100 is not what Europe/Berlin has at 10:00 on 2027-03-28 "
        "at BER (+0200); the variation of the schedule was taken",
        "w.ssim:11: 66-70 arrival UTC variation: warning: -0500 is not what America/New_York has at 11:40 on "
        "2027-03-14 at NYC (-0400); the variation of the schedule was taken",
    ]


def test_no_variation_and_no_zone() -> None:
    lines = file_of([Leg(departs_variation=None)]).splitlines()
    assert places_of(lines) == [(11, "48-52 departure UTC variation")]


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"arrives": 590}, "arrives 0:10 h before it departs"),
        ({"arrives": 600}, "arrives when it departs"),
        ({"arrives_day": -1}, "arrives 22:30 h before it departs"),
        ({"arrives_day": 1}, "takes 25:30 h, more than 24 hours"),
        ({"departs_variation": -120}, "arrives 0:30 h before it departs"),
    ],
)
def test_legs_that_arrive_too_early_or_too_late(changes: dict[str, int], words: str) -> None:
    _, faults = read(file_of([Leg(**changes)]))  # type: ignore[arg-type]
    (error,) = faults.errors
    assert (error.line, error.column) == (11, "62-65 passenger arrival time")
    assert words in error.problem


def test_periods_of_a_flight_that_overlap() -> None:
    legs = [
        Leg(last=date(2027, 3, 14), days="135"),
        Leg(variation=2, first=date(2027, 3, 12), departs=660, arrives=750, days="57"),
        Leg(variation=3, first=date(2027, 3, 20), departs=700, arrives=790, days="24"),
    ]
    _, faults = read(file_of(legs))
    (error,) = faults.errors
    assert (error.line, error.column) == (12, "15-28 period")
    assert error.problem.startswith("ZQ123 leg 1 operates on 2027-03-12 by line 11 already")


def test_legs_of_a_flight_that_do_not_meet() -> None:
    legs = [Leg(), Leg(sequence=2, origin="CCC", destination="DDD", departs=720, arrives=800)]
    _, faults = read(file_of(legs))
    assert [(f.line, f.column) for f in faults.errors] == [(12, "37-39 departure station")]
    legs = [Leg(), Leg(sequence=2, origin="BBB", destination="DDD", departs=680, arrives=800)]
    _, faults = read(file_of(legs))
    assert [(f.line, f.column) for f in faults.errors] == [(12, "40-43 passenger departure time")]


def test_equipment_without_seats_is_named() -> None:
    _, faults = read(file_of([Leg(configuration="", equipment="AT7")]))
    (error,) = faults.errors
    assert (error.line, error.column) == (11, "73-75 aircraft type")
    assert "equipment 'AT7'; add it to a table of seats" in error.problem


def test_equipment_that_does_not_run_needs_no_seats() -> None:
    legs = [Leg(), Leg(number=5, configuration="", first=date(2027, 6, 1), last=date(2027, 6, 2))]
    timetable, faults = read(file_of(legs))
    assert timetable is not None
    assert not faults.found


def test_all_faults_come_at_once_and_are_counted_beyond_a_limit() -> None:
    legs = [Leg(number=n, departs_variation=0) for n in range(1, 61)]
    data = file_of(legs).replace(b"BBB", b"B?B").replace(b"0100002010101J", b"0100002010101J")
    _, faults = read(data)
    assert len(faults.errors) == LISTED_PER_KIND + 1
    assert sum(fault.count for fault in faults.errors) == 60


def test_faults_of_several_kinds_come_together() -> None:
    lines = with_bytes(FIRST, 40, b"2500")
    second = bytearray(lines[SECOND - 1])
    second[14:21] = b"99MAR27"
    lines[SECOND - 1] = bytes(second)
    lines[THIRD - 1] = lines[THIRD - 1][:173] + b"              " + lines[THIRD - 1][187:]
    assert [where for where, _ in places_of(lines)] == [FIRST, SECOND, THIRD]


@pytest.mark.parametrize("data", [b"", b"\n\n", b"0" * 200, b"0" * 200 + b"\n", b"x", b"1,2\n3,4\n"])
def test_files_that_hold_no_records(data: bytes) -> None:
    timetable, faults = read(data)
    assert timetable is None
    assert faults.errors


def mutated(seed: int) -> bytes:
    """A sound file with a few bytes, lines or blocks changed."""
    rng = random.Random(seed)
    legs = [*LEGS, Leg(number=9, traffic="AB"), Leg(number=10, segments=(Segment(50, "ZQ  123"), Segment(8, "A")))]
    data = bytearray(write(("ZQ", legs), ("YY", [Leg(carrier="YY")]), end=rng.choice(["\n", "\r\n", ""])))
    for _ in range(rng.choice([1, 1, 2, 5])):
        at = rng.randrange(len(data))
        match rng.randrange(6):
            case 0 | 1 | 2:
                data[at] = rng.choice(b" 0123456789ABCXZ+-\0\xff\n") if rng.random() < 0.9 else rng.randrange(256)
            case 3:
                del data[at : at + rng.choice([1, 7, 200, 201])]
            case 4:
                data[at:at] = data[at : at + rng.choice([1, 200, 201])]
            case _:
                field = rng.choice([b"00XXX00", b"9999", b"2400", b"+1400", b"       ", b"31DEC99", b"A", b"QQQ"])
                data[at : at + len(field)] = field
    return bytes(data)


def test_500_mutated_files_end_in_legs_or_in_faults() -> None:
    outcomes = {"legs": 0, "faults": 0}
    for seed in range(500):
        try:
            timetable, faults = read(mutated(seed), zones=ZONES if seed % 2 else None)
        except (InputError, SettingError):
            outcomes["faults"] += 1
            continue
        assert (timetable is None) == bool(faults.errors)
        outcomes["faults" if timetable is None else "legs"] += 1
        for fault in faults.found:
            assert fault.line >= 0
            assert "\n" not in str(fault)
    assert min(outcomes.values()) > 30, outcomes
