"""Days of operation: from a period and days of the week to dates."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date

import numpy as np

from network import SettingError
from network.arrays import IntArray
from network.model import ranges

__all__ = ["MOST_LEGS", "Window", "operating_days"]

MOST_LEGS = 10_000_000
"""Legs that one run may make; more than that is taken for a mistake in the dates."""

EARLIEST, LATEST = date(1972, 1, 1), date(2190, 12, 31)


@dataclass(frozen=True)
class Window:
    """The dates wanted, both included.

    Raises
    ------
    SettingError
        If the last lies before the first, or either lies outside 1972 to 2190.
    """

    first: date
    last: date

    def __post_init__(self) -> None:
        if self.last < self.first:
            raise SettingError(f"--to {self.last} lies before --from {self.first}; turn them round")
        if self.first < EARLIEST or self.last > LATEST:
            raise SettingError(f"dates must lie from {EARLIEST} to {LATEST}; correct --from or --to")
        if (self.last - self.first).days > 3660:
            raise SettingError("--from and --to lie more than ten years apart; bring them closer together")

    @property
    def days(self) -> tuple[int, int]:
        """First and last day, in days since 1970."""
        first, last = np.array([self.first, self.last], dtype="datetime64[D]").astype(np.int64).tolist()
        return first, last

    @property
    def long(self) -> bool:
        """Whether month and day do not tell all dates apart, a day of slack on either side."""
        return (self.last - self.first).days > 362


def operating_days(
    first: IntArray, last: IntArray, weekdays: IntArray, weeks: IntArray, window: Window
) -> tuple[IntArray, IntArray]:
    """Dates on which records operate.

    Parameters
    ----------
    first, last
        (n,) period of each record, in days since 1970, both included.
    weekdays
        (n,) days of the week as bits: 1 for Monday to 64 for Sunday.
    weeks
        (n,) 1 for every week, 2 for every other week. Weeks count from the first day of the period.
    window
        The dates wanted.

    Returns
    -------
    record, day
        Position of the record and date in days since 1970, by record and date.

    Raises
    ------
    SettingError
        If there are more than `MOST_LEGS`.
    """
    from_day, to_day = window.days
    found = []
    for weekday in range(7):
        rows = np.flatnonzero(weekdays >> weekday & 1)
        begins = first[rows]
        begins = begins + (weekday - (begins + 3)) % 7
        step = 7 * weeks[rows]
        begins = begins + np.maximum(-((begins - from_day) // step), 0) * step
        ends = np.minimum(last[rows], to_day)
        found.append((rows, begins, step, np.maximum((ends - begins) // step + 1, 0)))
    total = sum(int(count.sum()) for *_, count in found)
    if total > MOST_LEGS:
        raise SettingError(f"{total:,} legs in these dates, more than {MOST_LEGS:,}; bring --from and --to together")
    record = np.concatenate([np.repeat(rows, count) for rows, _, _, count in found])
    day = np.concatenate(
        [
            np.repeat(begins, count) + np.repeat(step, count) * ranges(np.zeros_like(count), count)
            for _, begins, step, count in found
        ]
    )
    order = np.lexsort((day, record))
    return record[order], day[order]
