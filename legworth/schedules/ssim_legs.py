"""Flight leg records of an airline schedule: every field that says which legs operate when, checked and read."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from legworth.schedules.operating_days import Window
from legworth.schedules.periodic import Columns, PeriodicEnd, PeriodicLegs
from legworth.schedules.places import Places
from legworth.schedules.seats import configured_seats
from legworth.schedules.ssim_carriers import compare_with_carriers, read_carriers
from legworth.schedules.ssim_fields import (
    DESIGNATOR,
    FieldReader,
    clock_time,
    date_variation,
    days_of_operation,
    flight_number,
    frequency,
    leg_number,
    read_period,
    utc_variation,
    variation_number,
)
from legworth.schedules.ssim_layout import FLIGHT_LEG
from legworth.schedules.ssim_records import SsimRecords
from network.arrays import BoolArray, IntArray, NameArray
from network.faults import Faults

__all__ = ["SsimLegs", "read_legs"]

COLUMNS = Columns(
    period="15-28 period",
    departs=FLIGHT_LEG["passenger_departure_time"].column,
    arrives=FLIGHT_LEG["passenger_arrival_time"].column,
    departs_variation=FLIGHT_LEG["departure_UTC_variation"].column,
    arrives_variation=FLIGHT_LEG["arrival_UTC_variation"].column,
    origin=FLIGHT_LEG["departure_station"].column,
    destination=FLIGHT_LEG["arrival_station"].column,
    equipment=FLIGHT_LEG["aircraft_type"].column,
)
HALF_DAY = 720
STATUS = {"D": "domestic", "I": "international"}


@dataclass(frozen=True, eq=False)
class SsimLegs:
    """Leg records that could be read: as records, as legs, their service types, and all stations.

    ``kept`` gives their positions among all leg records.
    """

    records: SsimRecords
    kept: IntArray
    legs: PeriodicLegs
    service: npt.NDArray[np.str_]
    places: Places


def read_legs(
    records: SsimRecords, window: Window, places: Places, services: str, cabins: str, faults: Faults
) -> SsimLegs:
    """Read carrier, leg and trailer records.

    Parameters
    ----------
    records
        All records of the file.
    window
        Dates wanted; years of two digits are taken in the century closest to them.
    places
        Known stations; others are added, or faults if the table is complete.
    services
        Letters of the service types taken; the stations of others need not be in the table.
    cabins
        Letters of the cabins whose seats count; all if empty.
    faults
        Receives every field that cannot be read.
    """
    carriers = read_carriers(records, window.first, faults)
    found = records.take(records.type == b"3")
    read = FieldReader(found, faults)
    flight, own = _flights(read)
    service, names = read.words(FLIGHT_LEG["service_type"], r"[A-Z]", "is not a service type; write one letter")
    period = read_period(read, FLIGHT_LEG["period_from"], FLIGHT_LEG["period_to"], window.first)
    weekdays = read.values(
        FLIGHT_LEG["days_of_operation"],
        days_of_operation,
        "does not hold days of operation; write each day's number in its own place, like '1 3 5 7'",
    )
    weeks = read.values(FLIGHT_LEG["frequency_rate"], frequency, "is not a frequency rate; write 2 or a blank")
    taken = np.isin(np.array([*names, ""], dtype=str)[service], list(services))
    places, stations = _stations(read, places, taken, faults)
    departs, arrives = _ends(read, stations)
    equipment, types = read.words(
        FLIGHT_LEG["aircraft_type"], r"[A-Z0-9]{3}", "is not an aircraft type; write three letters or digits"
    )
    _check_traffic_codes(read)
    of = np.searchsorted(carriers.place, found.place) - 1
    known = (of >= 0) & ~read.bad
    compare_with_carriers(found, carriers, of, known, own, period, faults)
    in_utc = np.append(carriers.in_utc, False)[of]
    legs = PeriodicLegs(
        file=found.file,
        line=found.line,
        columns=COLUMNS,
        flight=flight,
        variation=_variation(read),
        sequence=read.values(
            FLIGHT_LEG["leg_sequence_number"], leg_number, "is not a number from 01 to 99; correct it"
        ),
        first=period[0],
        last=period[1],
        weekdays=weekdays,
        weeks=weeks,
        departs=departs,
        arrives=arrives,
        in_utc=in_utc,
        seats=_seats(read, cabins),
        equipment=np.array([*types, ""], dtype=object)[equipment],
        kind=_kind(read),
    )
    good = np.flatnonzero(~read.bad)
    kinds = np.array([*names, ""], dtype=str)[service]
    return SsimLegs(found.take(good), good, legs.take(good), kinds[good], places)


def _flights(read: FieldReader) -> tuple[NameArray, NameArray]:
    """Carrier, number and suffix in one word, and the carrier alone."""
    carrier, carriers = read.words(
        FLIGHT_LEG["airline_designator"], DESIGNATOR, "is not an airline designator; correct it"
    )
    number = read.values(
        FLIGHT_LEG["flight_number"], flight_number, "is not a flight number; write up to four digits, not all 0"
    )
    suffix, suffixes = read.words(
        FLIGHT_LEG["operational_suffix"], "[A-Z ]", "is not an operational suffix; write a letter or a blank"
    )
    own = np.array([*carriers, ""], dtype=object)[carrier]
    after = np.array([*suffixes, ""], dtype=object)[suffix]
    return own + number.astype(str).astype(object) + after, own


def _variation(read: FieldReader) -> IntArray:
    """Itinerary variation of every record, its overflow counted as hundreds."""
    units = read.values(
        FLIGHT_LEG["itinerary_variation_identifier"],
        variation_number,
        "is not a number of two digits; number variations from 01",
    )
    hundreds = read.values(
        FLIGHT_LEG["itinerary_variation_overflow"],
        lambda text: 0 if text == " " else int(text) if text.isdigit() else None,
        "is neither a digit nor blank; correct it",
    )
    return 100 * hundreds + units


def _stations(
    read: FieldReader, places: Places, taken: BoolArray, faults: Faults
) -> tuple[Places, tuple[IntArray, IntArray]]:
    """Positions of the stations of both ends among all known; the new ones are added, or noted for legs taken."""
    positions = []
    lacking = np.zeros(len(read.bad), dtype=bool)
    for name in ("departure_station", "arrival_station"):
        field = FLIGHT_LEG[name]
        of, names = read.words(field, "[A-Z]{3}", "is not a station; write three letters")
        texts = np.array(names, dtype=object)
        if places.complete:
            unknown = (places.locate(texts) < 0)[of] & ~read.bad & taken if len(texts) else np.zeros(0, dtype=bool)

            def problem(row: int, texts: NameArray = texts, of: IntArray = of) -> str:
                return f"{texts[of[row]]!r} is not in the table of stations; add it or correct the name"

            read.records.note(faults, np.flatnonzero(unknown), field.column, problem)
            lacking |= unknown
        else:
            places = places.with_names(np.array([text for text in names if text], dtype=object))
        positions.append((of, texts))
    read.bad |= lacking
    located = [places.locate(texts)[of] if len(texts) else of for of, texts in positions]
    loop = ~read.bad & taken & (located[0] == located[1])
    read.records.note(
        faults,
        np.flatnonzero(loop),
        FLIGHT_LEG["arrival_station"].column,
        lambda _: "the leg ends where it begins; correct one of the two",
    )
    read.bad |= loop
    return places, (located[0], located[1])


def _ends(read: FieldReader, stations: tuple[IntArray, IntArray]) -> tuple[PeriodicEnd, PeriodicEnd]:
    """Both ends of every leg, at the times that hold for passengers.

    Date variations belong to aircraft times. A passenger time on the other side of midnight is the one within twelve
    hours of the aircraft's. Where one of the two times is blank the other holds for both.
    """
    ends = []
    for name, station in zip(("departure", "arrival"), stations, strict=True):
        wanted = "is not a time of day; write HHMM from 0000 to 2400"
        passenger, aircraft = (
            read.values(
                FLIGHT_LEG[f"{who}_{name}_time"],
                lambda text: -1 if not text.strip() else clock_time(text),
                wanted,
            )
            for who in ("passenger", "aircraft")
        )
        neither = (passenger < 0) & (aircraft < 0)
        read.records.note(
            read.faults,
            np.flatnonzero(neither),
            FLIGHT_LEG[f"passenger_{name}_time"].column,
            lambda _: "the time is missing; write HHMM",
        )
        read.bad |= neither
        passenger = np.where(passenger < 0, aircraft, passenger)
        aircraft = np.where(aircraft < 0, passenger, aircraft)
        day = read.values(
            FLIGHT_LEG[f"{name}_date_variation"], date_variation, "is no date variation; write 0 to 7, or A for -1"
        )
        day = day + (aircraft - passenger > HALF_DAY) - (passenger - aircraft > HALF_DAY)
        variation = read.values(
            FLIGHT_LEG[f"{name}_UTC_variation"], utc_variation, "is no variation from UTC; write it like +0130"
        )
        ends.append(PeriodicEnd(station, passenger, day, variation))
    return ends[0], ends[1]


def _seats(read: FieldReader, cabins: str) -> IntArray:
    """Seats of the aircraft configuration, -1 where it does not give them."""
    return read.values(FLIGHT_LEG["aircraft_configuration"], lambda text: configured_seats(text, cabins), "")


def _kind(read: FieldReader) -> NameArray:
    """Kind of leg by its connection status: domestic, international, both with a dash, or nothing."""
    wanted = "is no connection status; write D for domestic, I for international, or a blank"
    (one, ones), (two, twos) = (
        read.words(FLIGHT_LEG[f"{end}_connection_status"], "[DI ]", wanted) for end in ("departure", "arrival")
    )
    table = np.array(
        [
            [STATUS[a] if a == b else f"{STATUS[a]}-{STATUS[b]}" if a in STATUS and b in STATUS else "" for b in twos]
            if a in STATUS
            else [""] * len(twos)
            for a in ones
        ],
        dtype=object,
    ).reshape(len(ones), len(twos))
    return np.asarray(table[one, two], dtype=object)


def _check_traffic_codes(read: FieldReader) -> None:
    """Note traffic restriction codes that are no letters."""
    read.words(
        FLIGHT_LEG["traffic_restriction_codes"],
        "[A-Z ]{11}",
        "holds signs that are no traffic restriction codes; write letters and blanks",
    )
