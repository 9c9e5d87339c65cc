"""Airline schedules in the layout of SSIM chapter 7, read into a timetable."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
import pandas as pd

from legworth.schedules.flights import timetable_of
from legworth.schedules.operating_days import Window
from legworth.schedules.periodic import Departures, PeriodicLegs, departures_of
from legworth.schedules.places import Places
from legworth.schedules.seats import ANY_EQUIPMENT, UNKNOWN
from legworth.schedules.ssim_layout import FLIGHT_LEG, SEGMENT
from legworth.schedules.ssim_legs import read_legs
from legworth.schedules.ssim_records import read_records
from legworth.schedules.ssim_segments import Segments, read_segments, restriction_rows
from legworth.schedules.timetable import Timetable
from legworth.schedules.traffic import Traffic
from network.arrays import BoolArray, IntArray
from network.faults import Faults
from network.model import ranges

__all__ = ["PASSENGER_SERVICES", "SsimOptions", "read_ssim"]

PASSENGER_SERVICES = "BGJQRSU"
"""Service types that are sold by the seat: scheduled and additional passenger services, shuttles, mixed aircraft, and
passengers in surface vehicles. V, surface vehicles too, is cargo and mail in lorries (from memory)."""

LONGEST_LEG = 24
"""Hours; no scheduled flight takes longer."""


@dataclass(frozen=True)
class SsimOptions:
    """What is taken from an airline schedule.

    Attributes
    ----------
    service_types
        Letters of the service types taken.
    cabins
        Letters of the cabins whose seats count; all if empty.
    partner_legs
        Whether to keep legs that another carrier operates, where its own record is not in the file.
    """

    service_types: str = PASSENGER_SERVICES
    cabins: str = ""
    partner_legs: bool = False


def read_ssim(
    file: str,
    data: bytes,
    window: Window,
    places: Places,
    seats: Mapping[str, int],
    options: SsimOptions,
    faults: Faults,
) -> Timetable | None:
    """Read an airline schedule file.

    Parameters
    ----------
    file, data
        Its name, for faults, and its content.
    window
        Dates of operation wanted, as the file states them: those of UTC where its time mode is U.
    places
        Known stations.
    seats
        Seats by aircraft type, for legs whose configuration does not give them.
    options
        What is taken.
    faults
        Receives everything that is wrong, by line and bytes.

    Returns
    -------
    Timetable or None
        None if records or fields are at fault, so that legs cannot be told.
    """
    records = read_records(file, data, faults)
    if records is None:
        return None
    found = read_legs(records, window, places, options.service_types, options.cabins, faults)
    segments = read_segments(records, faults).among(found.kept)
    left_out: dict[str, int] = {}
    onward = _next_record(found.legs) if segments.restrictions else np.full(len(found.legs), -1)
    everywhere = np.ones(len(found.legs), dtype=bool)
    traffic = Traffic(everywhere, everywhere, *restriction_rows(found.records, segments, onward))
    taken = np.isin(found.service, list(options.service_types))
    for kind in np.unique(found.service[~taken]):
        left_out[f"leg records of service type {kind}"] = int((found.service == kind).sum())
    legs = _with_seats(_only(found.legs, taken), seats)
    dated = departures_of(legs, found.places, window, faults, LONGEST_LEG)
    carrier = found.records.text(FLIGHT_LEG["airline_designator"])
    dated = _without_duplicates(legs, carrier, segments, dated, options, left_out, faults)
    timetable = timetable_of(legs, dated, found.places, window, traffic, faults)
    return None if faults.errors else replace(timetable, left_out=left_out)


def _with_seats(legs: PeriodicLegs, seats: Mapping[str, int]) -> PeriodicLegs:
    """Take seats from the table where the configuration does not give them."""
    kinds, at = np.unique(legs.equipment.astype(str), return_inverse=True)
    by_table = np.array([seats.get(str(kind), seats.get(ANY_EQUIPMENT, UNKNOWN)) for kind in kinds], dtype=np.int64)
    return replace(legs, seats=np.where(legs.seats < 0, by_table[at], legs.seats))


def _only(legs: PeriodicLegs, taken: BoolArray) -> PeriodicLegs:
    """Return the same records, but those not taken operate on no day, so that positions stay."""
    return replace(legs, weekdays=np.where(taken, legs.weekdays, 0))


def _next_record(legs: PeriodicLegs) -> IntArray:
    """Position of the record of the next leg of the same flight and variation, -1 if there is none."""
    flights, _ = pd.factorize(pd.Series(legs.flight, dtype=object))
    here, onward = (pd.MultiIndex.from_arrays([flights, legs.variation, legs.sequence + step]) for step in (0, 1))
    first = np.flatnonzero(~here.duplicated())
    found: IntArray = np.append(first, -1)[here[first].get_indexer(onward)]
    return found


def _without_duplicates(
    legs: PeriodicLegs,
    carrier: npt.NDArray[np.bytes_],
    segments: Segments,
    dated: Departures,
    options: SsimOptions,
    left_out: dict[str, int],
    faults: Faults,
) -> Departures:
    """Leave out legs under which another flight is sold, so that no seat is counted twice.

    A record with data element 50 is one. So is a departure of a flight that the operating leg names in data element
    10, if it is between the same stations at the same instant, and one of which only the operating carrier is told, if
    that carrier has a leg of its own there and then.
    """
    if len(dated) == 0 or not (segments.operated_as or segments.operated_by or segments.sold_as):
        return dated
    flights, names = pd.factorize(pd.Series(legs.flight, dtype=object))
    position = {str(name): at for at, name in enumerate(names)}
    operating = np.full(len(legs), -1)
    for record, name in segments.operated_as.items():
        if name != legs.flight[record]:
            operating[record] = position.get(name, len(position))
    marketed = operating[dated.record] >= 0

    _, pair = np.unique(
        legs.departs.station * (int(legs.arrives.station.max()) + 1) + legs.arrives.station, return_inverse=True
    )
    minute = (dated.departs - dated.departs.min()) // 60
    when_and_where = pair[dated.record] * (int(minute.max()) + 1) + minute
    span = int(when_and_where.max()) + 1

    sold = [
        (record, position[name])
        for record, found in segments.sold_as.items()
        for name in found
        if name in position and name != legs.flight[record]
    ]
    if sold:
        record, flight = np.array(sold, dtype=np.int64).T
        begins, ends = (np.searchsorted(dated.record, record, side=side) for side in ("left", "right"))
        rows = ranges(begins, ends - begins)
        marketed |= np.isin(
            flights[dated.record] * span + when_and_where,
            np.repeat(flight, ends - begins) * span + when_and_where[rows],
        )
    if segments.operated_by:
        carriers, by = np.unique(np.char.strip(carrier), return_inverse=True)
        told = np.full(len(legs), -1)
        for record, name in segments.operated_by.items():
            at = int(np.searchsorted(carriers, name.encode()))
            if at < len(carriers) and carriers[at] == name.encode() and at != by[record]:
                told[record] = at
        theirs = (by[dated.record] * span + when_and_where)[~marketed]
        marketed |= (told[dated.record] >= 0) & np.isin(told[dated.record] * span + when_and_where, theirs)
    own = (flights[dated.record] * span + when_and_where)[~marketed]
    unseen = (operating[dated.record] >= 0) & ~np.isin(operating[dated.record] * span + when_and_where, own)
    left_out["legs sold under another flight (codeshares)"] = int((marketed & ~unseen).sum())
    if options.partner_legs:
        return dated.take(~marketed | unseen)
    alone = np.unique(dated.record[unseen])
    if len(alone):
        left_out["legs that are operated under a flight outside this file"] = int(unseen.sum())
    legs.note(
        faults,
        alone,
        SEGMENT["data"].column,
        lambda row: (
            f"{legs.flight[row]} is operated as {segments.operated_as[row]}, which is not in this file on all of its "
            "dates; those legs are left out (--partner-legs keeps them)"
        ),
        warning=True,
    )
    return dated.take(~marketed)
