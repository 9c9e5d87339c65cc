"""Segment records of an airline schedule: codeshares and traffic restrictions.

Data elements that are read, with their meaning from memory of the manual: 8, a traffic restriction of one segment; 10,
the flights under which other carriers sell the leg; 50, the flight that operates the leg; 2, 9 and 127, the carrier
that operates it, for a codeshare, a wet lease or in words. The others are left alone.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from legworth.schedules.ssim_layout import FLIGHT_LEG, SEGMENT
from legworth.schedules.ssim_records import SsimRecords
from legworth.schedules.traffic import POINTS
from network.arrays import IntArray
from network.faults import Faults

__all__ = ["Segments", "read_segments", "restriction_rows"]

RESTRICTION, SOLD_AS, OPERATED_AS = b"008", b"010", b"050"
OPERATED_BY = (b"002", b"009", b"127")
ANY_POINT = b"QQQ"
CARRIER = re.compile(r"(?=\d?[A-Z])([A-Z0-9]{2}[A-Z]?)(?![A-Z0-9])")
FLIGHT = re.compile(r"([A-Z0-9]{2}[A-Z ]?) *0*([1-9]\d{0,3}) *([A-Z]?)")


@dataclass(frozen=True)
class Segments:
    """What segment records say, by position of the leg record that they follow.

    ``operated_as`` names the flight that operates a leg, ``operated_by`` the carrier where only that is told, and
    ``sold_as`` the flights that sell it besides. Restrictions are triples of leg, off point (None for every one) and
    code.
    """

    operated_as: dict[int, str]
    operated_by: dict[int, str]
    sold_as: dict[int, tuple[str, ...]]
    restrictions: tuple[tuple[int, bytes | None, bytes], ...]

    def among(self, kept: IntArray) -> Segments:
        """Return the same for some of the leg records, given as rising positions."""
        at = {old: new for new, old in enumerate(kept.tolist())}
        return Segments(
            {at[leg]: name for leg, name in self.operated_as.items() if leg in at},
            {at[leg]: name for leg, name in self.operated_by.items() if leg in at},
            {at[leg]: names for leg, names in self.sold_as.items() if leg in at},
            tuple((at[leg], off, code) for leg, off, code in self.restrictions if leg in at),
        )


def read_segments(records: SsimRecords, faults: Faults) -> Segments:
    """Read segment records; notes those that do not belong to the leg before them, and flights that cannot be read.

    Parameters
    ----------
    records
        All records of the file.
    faults
        Receives what is wrong.
    """
    leg_rows, segment_rows = (np.flatnonzero(records.type == which) for which in (b"3", b"4"))
    legs, segments = records.take(leg_rows), records.take(segment_rows)
    before = np.searchsorted(leg_rows, segment_rows) - 1
    parent = np.append(leg_rows, -1)[before]
    # Where a record between the two could not be read, the leg of the segment is not known.
    complete = records.place[segment_rows] - records.place[parent] == segment_rows - parent
    follows = (before >= 0) & complete
    segments, before = segments.take(follows), before[follows]
    if len(segments) == 0:
        return Segments({}, {}, {}, ())
    _note_strays(legs, segments, before, faults)
    element = segments.text(SEGMENT["data_element_identifier"])
    numeric = np.array([value.isdigit() and len(value) == 3 for value in element.tolist()], dtype=bool)
    segments.note(
        faults,
        np.flatnonzero(~numeric),
        SEGMENT["data_element_identifier"].column,
        lambda row: f"{element[row].decode()!r} is not a number of three digits; correct it",
    )
    board, off = (segments.text(SEGMENT[name]) for name in ("board_point", "off_point"))
    starts, ends = (legs.text(FLIGHT_LEG[name])[before] for name in ("departure_station", "arrival_station"))
    from_here = (board == ANY_POINT) | (board == starts)
    of_leg = from_here & ((off == ends) | (off == ANY_POINT))
    data = segments.text(SEGMENT["data"])
    flights: dict[bytes, dict[int, tuple[str, ...]]] = {SOLD_AS: {}, OPERATED_AS: {}}
    for code, found in flights.items():
        wanted = "one flight like 'XX 1234'" if code == OPERATED_AS else "flights like 'XX 1234', strokes between them"
        unreadable = []
        for row in np.flatnonzero((element == code) & of_leg).tolist():
            names = _flights(data[row].decode())
            if names is None or (code == OPERATED_AS and len(names) != 1):
                unreadable.append(row)
                continue
            leg = int(before[row])
            found[leg] = found.get(leg, ()) + names

        def problem(row: int, wanted: str = wanted) -> str:
            return f"{data[row].decode().strip()!r} names no flight; write {wanted}"

        segments.note(faults, unreadable, SEGMENT["data"].column, problem)
    restricted = np.flatnonzero((element == RESTRICTION) & from_here)
    restrictions = tuple(
        (int(before[row]), None if off[row] == ANY_POINT else bytes(off[row]), bytes(data[row].strip()[:1]))
        for row in restricted.tolist()
    )
    operated_as = {leg: names[0] for leg, names in flights[OPERATED_AS].items()}
    operated_by: dict[int, str] = {}
    for row in np.flatnonzero(np.isin(element, OPERATED_BY) & of_leg).tolist():
        carrier, leg = CARRIER.match(data[row].decode().lstrip("/ ")), int(before[row])
        if carrier is not None and leg not in operated_as:
            operated_by[leg] = carrier[1]
    return Segments(operated_as, operated_by, flights[SOLD_AS], restrictions)


def _note_strays(legs: SsimRecords, segments: SsimRecords, before: IntArray, faults: Faults) -> None:
    """Note segment records whose flight is not that of the leg record before them."""
    names = (
        "operational_suffix",
        "airline_designator",
        "flight_number",
        "itinerary_variation_identifier",
        "leg_sequence_number",
        "service_type",
        "itinerary_variation_overflow",
    )
    comparable = np.ones(len(segments), dtype=bool)
    for name in names:
        theirs, mine = legs.text(FLIGHT_LEG[name])[before], segments.text(SEGMENT[name])
        wrong = comparable & (mine != theirs)
        comparable &= ~wrong

        def problem(row: int, theirs: npt.NDArray[np.bytes_] = theirs, mine: npt.NDArray[np.bytes_] = mine) -> str:
            return (
                f"{mine[row].decode()!r} is not the {theirs[row].decode()!r} of the leg record before it "
                f"(line {legs.line[before[row]]}); segment records follow their leg"
            )

        segments.note(faults, np.flatnonzero(wrong), SEGMENT[name].column, problem)


def _flights(text: str) -> tuple[str, ...] | None:
    """Flights as carrier, number and suffix in one word; None if there is anything else."""
    found = [FLIGHT.fullmatch(part.strip()) for part in text.strip().split("/")]
    names = tuple(f"{m[1].strip()}{int(m[2])}{m[3]}" for m in found if m is not None)
    return names if len(names) == len(found) else None


def restriction_rows(
    legs: SsimRecords, segments: Segments, onward: IntArray
) -> tuple[IntArray, npt.NDArray[np.bytes_]]:
    """Restrictions by leg record, as `legworth.schedules.traffic.Traffic` keeps them.

    Parameters
    ----------
    legs, segments
        Records of type 3, and what those of type 4 say.
    onward
        (n,) position of the record of the next leg of the same flight and variation, -1 if there is none.

    Returns
    -------
    row, codes
        See `Traffic`. Codes of segment records come before those of the leg record.
    """
    field = FLIGHT_LEG["traffic_restriction_codes"]
    codes = np.ascontiguousarray(legs.content[:, field.first - 1 : field.last]).view("S1").copy()
    arrival = legs.text(FLIGHT_LEG["arrival_station"])
    for leg, off, code in segments.restrictions:
        at = leg
        for point in range(POINTS):
            if off is None or arrival[at] == off:
                codes[leg, point] = code or b" "
            at = int(onward[at])
            if at < 0:
                break
    used = (codes != b" ").any(axis=1)
    row = np.full(len(legs), -1)
    row[used] = np.arange(int(used.sum()))
    return row, codes[used]
