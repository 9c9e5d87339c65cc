"""Runs of the trips of a GTFS feed: on every day of service, and again and again where a trip has a frequency."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from legworth.schedules.gtfs_calendar import NO_TIME, seconds_of
from legworth.schedules.gtfs_calls import TripLegs
from legworth.schedules.gtfs_tables import GtfsTables
from legworth.schedules.operating_days import MOST_LEGS, Window
from network import SettingError, counted
from network.arrays import BoolArray, IntArray, NameArray
from network.model import ranges

__all__ = ["Runs", "runs_of"]


@dataclass(frozen=True, eq=False)
class Runs:
    """Runs by position, (R,) each.

    Attributes
    ----------
    trip
        Row in trips.txt.
    day
        Day of service, days since 1970.
    shift
        Seconds by which the run is later than the times of its trip.
    block
        Block, -1 if none; runs by frequency have none.
    stem, of_stem
        Words that name trips and departures, and the position of each run's.
    """

    trip: IntArray
    day: IntArray
    shift: IntArray
    block: IntArray
    stem: NameArray
    of_stem: IntArray

    def __len__(self) -> int:
        return len(self.trip)


def runs_of(tables: GtfsTables, service: IntArray, active: BoolArray, legs: TripLegs, window: Window) -> Runs:
    """Put trips on their days of service.

    A trip in frequencies.txt runs from each start time on, at every headway before the end time, with the running
    times of its own calls. Where times are not exact the same departures are taken, with a warning.

    Raises
    ------
    SettingError
        If there are too many legs.
    """
    trip, shift = _departures(tables, legs)
    active = np.append(active, np.zeros((1, active.shape[1]), dtype=bool), axis=0)  # trips without a known service
    on_service, on_day = np.nonzero(active)
    begins = np.searchsorted(on_service, np.arange(len(active) + 1))
    count = np.diff(begins)[service[trip]]
    total = int((count * np.diff(legs.start)[trip]).sum())
    if total > MOST_LEGS:
        raise SettingError(f"{total:,} legs in these dates, more than {MOST_LEGS:,}; bring --from and --to together")
    departure = np.repeat(np.arange(len(trip)), count)
    day = on_day[ranges(begins[service[trip]], count)] + window.days[0]
    block, _ = tables["trips"].codes("block_id")
    again = shift != NO_SHIFT
    stem = _stems(tables, trip, np.where(again, shift, NO_SHIFT), legs)
    return Runs(
        trip=trip[departure],
        day=day,
        shift=np.where(again, shift, 0)[departure],
        block=np.where(again, -1, block[trip])[departure],
        stem=stem,
        of_stem=departure,
    )


NO_SHIFT = np.iinfo(np.int64).min
"""Shift of trips that run by their own times."""


def _departures(tables: GtfsTables, legs: TripLegs) -> tuple[IntArray, IntArray]:
    """Trips that have legs, once for each departure of a day of service, and the shift of each."""
    has_legs = np.diff(legs.start) > 0
    table = tables.get("frequencies")
    if table is None:
        trips = np.flatnonzero(has_legs)
        return trips, np.full(len(trips), NO_SHIFT)
    trip = table.find("trip_id", tables["trips"], "trip_id")
    start, end = seconds_of(table, "start_time"), seconds_of(table, "end_time")
    headway = table.numbers("headway_secs", 1)
    turned = (start != NO_TIME) & (end != NO_TIME) & (end <= start)
    table.note(np.flatnonzero(turned), "end_time", lambda row: "is not after start_time; correct one of the two")
    about = np.flatnonzero(table.numbers("exact_times") == 0)
    if len(about):
        table.faults.add(
            table.data.file,
            table.data.line_of(int(about[0])),
            "exact_times",
            f"{counted(len(about), 'row from here on gives', 'rows from here on give')} only the time between "
            "departures; departures were taken at the start time and every headway after it",
            warning=True,
            count=len(about),
        )
    good = np.flatnonzero((trip >= 0) & (start != NO_TIME) & (end > start))
    good = good[has_legs[trip[good]]]
    step = np.maximum(headway[good], 1)
    count = -((start[good] - end[good]) // step)
    if int(count.sum()) > MOST_LEGS:
        raise SettingError(f"frequencies.txt makes more than {MOST_LEGS:,} departures a day; correct headway_secs")
    row = np.repeat(good, count)
    at = start[row] + ranges(np.zeros_like(count), count) * headway[row]
    repeated = trip[row]
    shift = at - legs.departs[legs.start[repeated]]
    twice = pd.DataFrame({"trip": repeated, "shift": shift}).duplicated().to_numpy()
    table.note(
        np.unique(row[twice]),
        "start_time",
        lambda at: "departs at a time at which an earlier row of the same trip departs; part the two periods",
    )
    own = np.flatnonzero(has_legs & ~np.isin(np.arange(len(has_legs)), trip))
    return np.append(own, repeated), np.append(np.full(len(own), NO_SHIFT), shift)


def _stems(tables: GtfsTables, trip: IntArray, shift: IntArray, legs: TripLegs) -> NameArray:
    """Names of departures: the trip_id, its white space as underscores, and @HHMM where it runs by frequency."""
    trips = tables["trips"]
    plain = np.array(["_".join(name.split()) for name in trips.texts("trip_id").tolist()], dtype=object)
    stem = plain[trip]
    again = np.flatnonzero(shift != NO_SHIFT)
    first = legs.departs[legs.start[trip[again]]] + shift[again]
    for at, second in zip(again.tolist(), first.tolist(), strict=True):
        hour, rest = divmod(second, 3600)
        text = f"{hour:02d}{rest // 60:02d}" + (f"{rest % 60:02d}" if rest % 60 else "")
        stem[at] = f"{stem[at]}@{text}"
    alike = pd.DataFrame({"stem": stem, "trip": trip, "shift": shift})
    twice = alike.duplicated("stem").to_numpy() & ~alike.duplicated(["trip", "shift"]).to_numpy()
    trips.note(
        np.unique(trip[twice]),
        "trip_id",
        lambda row: "differs from another trip in white space alone, or in @ and a time; rename one of the two",
    )
    return stem
