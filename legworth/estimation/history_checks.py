"""Readings held against each other: what no true history can say, and what it leaves out."""

from __future__ import annotations

from collections.abc import Callable
from datetime import datetime

import numpy as np
import pandas as pd

from legworth.estimation.readings import Readings
from network.arrays import BoolArray
from network.faults import Faults

__all__ = ["check_sequences", "snapshot_day"]

USUAL = 0.5
"""Share of the series that span a number of days from which on a reading is expected there."""


def snapshot_day(as_of: datetime) -> float:
    """Days since 1970-01-01 of the snapshot, by its own clock, with the part of the day."""
    local = as_of.replace(tzinfo=None)
    return float((np.datetime64(local, "s") - np.datetime64(0, "s")) / np.timedelta64(1, "D"))


def check_sequences(readings: Readings, now: float, faults: Faults, *, may_reopen: bool = False) -> None:
    """Note sorted readings that contradict each other or the snapshot, and warn of those that are lacking.

    Parameters
    ----------
    readings
        Sorted readings.
    now
        Days since 1970-01-01 of the snapshot.
    may_reopen
        Whether a class that was closed at two readings may have been open in between, so that bookings in between are
        odd only. Where ``open_share`` says that it was closed all along they are a fault all the same.
    faults
        Receives what is found. Of a series whose rows repeat or are out of order nothing else is told.
    """
    found = _Found(readings, faults)
    repeated = found.repeats()
    spoiled = repeated | found.disorder(~repeated)
    found.future(now)
    sound = ~spoiled[readings.series]
    found.falls(sound)
    found.sold_while_closed(sound, may_reopen=may_reopen)
    found.gaps(sound, now)


class _Found:
    """What is wrong with sorted readings."""

    def __init__(self, readings: Readings, faults: Faults) -> None:
        self.readings, self.faults = readings, faults
        self.follows = ~readings.first
        self.before = np.maximum(np.arange(len(readings.first)) - 1, 0)

    def _note(self, rows: BoolArray, column: str, problem: Callable[[int], str], *, warning: bool = False) -> None:
        readings = self.readings
        assert readings.row is not None
        row = readings.row
        at = np.flatnonzero(rows)
        at = at[np.argsort(row[at], kind="stable")]
        self.faults.add_rows(
            readings.file, at.tolist(), lambda r: readings.line_of(int(row[r])), column, problem, warning=warning
        )

    def _line(self, reading: int) -> str:
        assert self.readings.row is not None
        place = "row" if self.readings.file.endswith(".parquet") else "line"
        return f"{place} {self.readings.line_of(int(self.readings.row[reading]))}"

    def repeats(self) -> BoolArray:
        """(S,) series with two readings at the same number of days."""
        readings = self.readings
        days = readings.days_before
        same = self.follows & (days == days[self.before])
        self._note(
            same,
            "days_before",
            lambda r: (
                f"a reading of this departure at {days[r]:g} days stands already in {self._line(r - 1)}; "
                "keep one of the two"
            ),
        )
        return np.bincount(readings.series[same], minlength=len(readings.start) - 1) > 0

    def disorder(self, sound: BoolArray) -> BoolArray:
        """(S,) series, of those sound so far, whose rows run neither towards departure nor away from it."""
        readings = self.readings
        row, days = readings.row, readings.days_before
        assert row is not None
        n_series = len(readings.start) - 1
        later = self.follows & (row > row[self.before]) & (days != days[self.before])
        sooner = self.follows & (row < row[self.before]) & (days != days[self.before])
        down = np.bincount(readings.series[later], minlength=n_series)
        up = np.bincount(readings.series[sooner], minlength=n_series)
        mixed = sound & (down > 0) & (up > 0)
        if not mixed.any():
            return mixed
        odd = np.where((down >= up)[readings.series], sooner, later) & mixed[readings.series]
        self._note(
            odd,
            "days_before",
            lambda r: (
                f"the reading at {days[r]:g} days is out of order with that at {days[r - 1]:g} days in "
                f"{self._line(r - 1)}; correct it, or sort the readings of a departure by days_before"
            ),
        )
        return mixed

    def future(self, now: float) -> None:
        """Readings from after the snapshot."""
        readings = self.readings
        at = readings.departure - readings.days_before
        self._note(
            at > now,
            "days_before",
            lambda r: (
                f"{readings.days_before[r]:g} days before {np.datetime64(int(readings.departure[r]), 'D')} lies after "
                "the snapshot (as_of of network.toml); correct one of them or remove the row"
            ),
        )

    def falls(self, sound: BoolArray) -> None:
        """Bookings that fall other than by cancellation, and cancellations taken back."""
        readings = self.readings
        days, gross = readings.days_before, readings.gross
        fallen = sound & self.follows & (gross < gross[self.before])
        counted = readings.cancelled is not None
        what = "booked and cancelled together fall" if counted else "booked falls"
        mend = "correct one of them" if counted else "count cancellations in a column cancelled, or correct it"
        self._note(
            fallen,
            "booked",
            lambda r: (
                f"{what} from {gross[r - 1]:g} at {days[r - 1]:g} days ({self._line(r - 1)}) to {gross[r]:g} at "
                f"{days[r]:g}; {mend}"
            ),
        )
        if readings.cancelled is not None:
            gone = readings.cancelled
            self._note(
                sound & self.follows & (gone < gone[self.before]),
                "cancelled",
                lambda r: (
                    f"cancelled falls from {gone[r - 1]:g} at {days[r - 1]:g} days ({self._line(r - 1)}) to "
                    f"{gone[r]:g} at {days[r]:g}; it is a running total, so correct one of them"
                ),
            )

    def sold_while_closed(self, sound: BoolArray, *, may_reopen: bool) -> None:
        """Bookings that rise though the class was closed all the time."""
        readings = self.readings
        gross, days = readings.gross, readings.days_before
        share = readings.open_share
        told = np.zeros(len(gross), dtype=bool) if share is None else ~np.isnan(share)
        shut = np.zeros(len(gross), dtype=bool) if share is None else told & (share <= 0)
        both = self.follows & ~readings.open & ~readings.open[self.before] & ~told
        rise = np.where(self.follows, gross - gross[self.before], gross)
        self._note(
            sound & shut & (rise > 0),
            "booked",
            lambda r: (
                f"{rise[r]:g} booked up to {days[r]:g} days though open_share says that the class was closed "
                "all along; correct one of them"
            ),
        )
        mend = (
            "it is taken to have been open for a part"
            if may_reopen
            else "correct open or booked, give open_share, or say --may-reopen if it may have been open in between"
        )
        self._note(
            sound & both & (rise > 0),
            "booked",
            lambda r: (
                f"{rise[r]:g} booked between {days[r - 1]:g} and {days[r]:g} days though the class was closed at both; "
                f"{mend}"
            ),
            warning=may_reopen,
        )

    def gaps(self, sound: BoolArray, now: float) -> None:
        """Warn of readings that most series have and one lacks: in between, or at its end."""
        readings = self.readings
        code, days = pd.factorize(readings.days_before, sort=True)
        start = readings.start
        low, high = code[start[1:] - 1], code[start[:-1]]
        held = np.bincount(code, minlength=len(days))
        edges = np.bincount(low, minlength=len(days) + 1) - np.bincount(high + 1, minlength=len(days) + 1)
        usual = held >= USUAL * np.maximum(np.cumsum(edges)[: len(days)], 1)
        below = np.append(0, np.cumsum(usual))
        lacking = below[code[self.before]] - below[code + 1]
        gap = sound & self.follows & (lacking > 0)
        self._note(
            gap,
            "days_before",
            lambda r: (
                f"{lacking[r]:g} reading{'s' if lacking[r] > 1 else ''} of most departures lacking between "
                f"{readings.days_before[r - 1]:g} and {readings.days_before[r]:g} days; that is taken as one interval"
            ),
            warning=True,
        )
        last = np.zeros(len(code), dtype=bool)
        last[start[1:] - 1] = True
        # A reading is due for sure once even a departure at the end of its date is nearer than that.
        left = np.maximum(readings.departure + 1 - now, 0.0)
        due = below[code] - below[np.searchsorted(days, left)]
        self._note(
            sound & last & (due > 0),
            "days_before",
            lambda r: (
                f"the last reading of this departure is that at {readings.days_before[r]:g} days, though {due[r]:g} "
                "later ones of most departures were due; what was booked since is not known"
            ),
            warning=True,
        )
