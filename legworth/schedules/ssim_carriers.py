"""Carrier records of an airline schedule and their trailers: time mode, carrier and period of what follows them."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date

import numpy as np

from legworth.schedules.ssim_fields import DESIGNATOR, OPEN_END, FieldReader, read_period
from legworth.schedules.ssim_layout import CARRIER, FLIGHT_LEG, TRAILER
from legworth.schedules.ssim_records import SsimRecords
from network.arrays import BoolArray, IntArray, NameArray
from network.faults import Faults

__all__ = ["Carriers", "compare_with_carriers", "read_carriers"]


@dataclass(frozen=True, eq=False)
class Carriers:
    """Carrier records: their place in the file, time mode, designator, and period of validity in days."""

    place: IntArray
    in_utc: BoolArray
    designator: NameArray
    first: IntArray
    last: IntArray


def read_carriers(records: SsimRecords, around: date, faults: Faults) -> Carriers:
    """Read carrier records, and note trailers of another carrier.

    Parameters
    ----------
    records
        All records of the file.
    around
        Years of two digits are taken in the century closest to this date.
    faults
        Receives what is wrong.
    """
    trailers = records.take(records.type == b"5")
    records = records.take(records.type == b"2")
    read = FieldReader(records, faults)
    mode, modes = read.words(
        CARRIER["time_mode"], "[UL]", "is no time mode; write L where times are local and U where they are UTC"
    )
    of, names = read.words(CARRIER["airline_designator"], DESIGNATOR, "is not an airline designator; correct it")
    first, last = read_period(read, CARRIER["period_from"], CARRIER["period_to"], around)
    carriers = Carriers(
        records.place,
        np.array([*modes, ""], dtype=str)[mode] == "U",
        np.array([*names, ""], dtype=object)[of],
        first,
        last,
    )
    _check_trailers(trailers, carriers, faults)
    return carriers


def _check_trailers(records: SsimRecords, carriers: Carriers, faults: Faults) -> None:
    """Note trailers of another carrier than that of the carrier record before them."""
    if not len(carriers.place):
        return
    found = records.text(TRAILER["airline_designator"])
    of = np.searchsorted(carriers.place, records.place) - 1
    wrong = [
        row
        for row, (name, at) in enumerate(zip(found.tolist(), of.tolist(), strict=True))
        if at >= 0 and name.decode().strip() != carriers.designator[at]
    ]
    records.note(
        faults,
        wrong,
        TRAILER["airline_designator"].column,
        lambda row: (
            f"{found[row].decode()!r} is not the carrier {carriers.designator[of[row]]!r} of these records; correct it"
        ),
    )


def compare_with_carriers(
    records: SsimRecords,
    carriers: Carriers,
    of: IntArray,
    known: BoolArray,
    own: NameArray,
    period: tuple[IntArray, IntArray],
    faults: Faults,
) -> None:
    """Warn of legs of another carrier than that of their carrier record, or outside its period.

    Parameters
    ----------
    records
        Leg records.
    carriers, of
        Carrier records, and the position of that of each leg.
    known
        Legs that could be read and have one.
    own, period
        Carrier of every leg, and its first and last day.
    faults
        Receives the warnings.
    """
    rows = np.flatnonzero(known)
    if not len(rows) or not len(carriers.place):
        return
    other = rows[own[rows] != carriers.designator[of[rows]]]
    records.note(
        faults,
        other,
        FLIGHT_LEG["airline_designator"].column,
        lambda row: f"{own[row]!r} is not the carrier {carriers.designator[of[row]]!r} of these records; it was taken",
        warning=True,
    )
    before = rows[period[0][rows] < carriers.first[of[rows]]]
    after = rows[(period[1][rows] > carriers.last[of[rows]]) & (period[1][rows] != OPEN_END)]
    for found, name, word in ((before, "period_from", "begins before"), (after, "period_to", "ends after")):

        def problem(row: int, word: str = word) -> str:
            return f"the period {word} that of the carrier record; all of it was taken"

        records.note(faults, found, FLIGHT_LEG[name].column, problem, warning=True)
