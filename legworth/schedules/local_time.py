"""Local clocks: from the time on a station's clock to the instant, and back, for whole columns at once.

The rules of every IANA zone come from `zoneinfo`. Where clocks go forward some times of day do not exist (a gap);
where they go back some occur twice (a fold), and the first of the two is meant unless something else tells them apart.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from functools import lru_cache
from zoneinfo import ZoneInfo

import numpy as np

from network.arrays import BoolArray, IntArray, NameArray

__all__ = ["Clock", "Instants", "clock_of", "instants_of", "offsets_at"]

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
STEP = 12 * 3600
"""Seconds between two looks at a zone; no zone changes its clocks and changes them back within that time."""

DAY = 86400
CHUNK = 64
"""Days to which spans are rounded, so that the same clock serves spans that are nearly the same."""


@dataclass(frozen=True)
class Instants:
    """Instants of local times, by row.

    ``utc`` is in seconds since 1970 and ``offset`` in seconds east of UTC. Rows in ``gap`` show a time that the
    clocks leave out (``utc`` then goes on with the offset before); rows in ``fold`` show one that occurs twice.
    """

    utc: IntArray
    offset: IntArray
    gap: BoolArray
    fold: BoolArray


@dataclass(frozen=True)
class Clock:
    """The offsets of one zone over a span of time: from ``begins[i]`` on it is ``offset[i]`` seconds."""

    begins: IntArray
    offset: IntArray

    def at(self, utc: IntArray) -> IntArray:
        """Offset in seconds at instants, both (n,)."""
        found: IntArray = self.offset[np.searchsorted(self.begins, utc, side="right") - 1]
        return found

    def of_local(self, local: IntArray) -> Instants:
        """Instants at which the clock shows local times, (n,) seconds since 1970 as if it stood at UTC."""
        starts = self.begins + self.offset
        piece = np.searchsorted(starts, local, side="right") - 1
        ends = np.append(self.begins[1:] + self.offset[:-1], np.iinfo(np.int64).max)
        fold = (piece > 0) & (local < ends[piece - 1])
        piece = np.where(fold, piece - 1, piece)
        offset = self.offset[piece]
        return Instants(local - offset, offset, local >= ends[piece], fold)


@lru_cache(maxsize=2048)
def clock_of(name: str, first: int, last: int) -> Clock:
    """Return the clock of a zone from day ``first`` to day ``last`` (days since 1970), and three days around them."""
    zone = ZoneInfo(name)

    def offset_at(second: int) -> int:
        found = (EPOCH + timedelta(seconds=second)).astimezone(zone).utcoffset() or timedelta()
        return round(found.total_seconds())

    looks = range((first - 3) * DAY, (last + 4) * DAY, STEP)
    begins, offsets = [looks[0]], [offset_at(looks[0])]
    for look in looks[1:]:
        new = offset_at(look)
        if new != offsets[-1]:
            low, high = look - STEP, look
            while high - low > 1:
                middle = (low + high) // 2
                low, high = (low, middle) if offset_at(middle) != offsets[-1] else (middle, high)
            begins.append(high)
            offsets.append(new)
    begins[0] = np.iinfo(np.int64).min // 2
    return Clock(np.array(begins, dtype=np.int64), np.array(offsets, dtype=np.int64))


def instants_of(local: IntArray, zone: IntArray, names: NameArray) -> Instants:
    """Instants of local times in several zones.

    Parameters
    ----------
    local
        (n,) seconds since 1970 as the clocks show them.
    zone
        (n,) position of the zone of each in ``names``; -1 stands for UTC.
    names
        IANA names.
    """
    utc, offset = local.astype(np.int64, copy=True), np.zeros(len(local), dtype=np.int64)
    gap, fold = np.zeros(len(local), dtype=bool), np.zeros(len(local), dtype=bool)
    for rows, clock in _by_zone(local, zone, names):
        found = clock.of_local(local[rows])
        utc[rows], offset[rows], gap[rows], fold[rows] = found.utc, found.offset, found.gap, found.fold
    return Instants(utc, offset, gap, fold)


def offsets_at(utc: IntArray, zone: IntArray, names: NameArray) -> IntArray:
    """Offsets in seconds at instants in several zones; arguments as in `instants_of`, but UTC."""
    offset = np.zeros(len(utc), dtype=np.int64)
    for rows, clock in _by_zone(utc, zone, names):
        offset[rows] = clock.at(utc[rows])
    return offset


def _by_zone(seconds: IntArray, zone: IntArray, names: NameArray) -> list[tuple[IntArray, Clock]]:
    if len(seconds) == 0:
        return []
    first, last = (int(end) // DAY // CHUNK * CHUNK for end in (seconds.min(), seconds.max() + CHUNK * DAY))
    order = np.argsort(zone, kind="stable")
    used, begins = np.unique(zone[order], return_index=True)
    parts = np.split(order, begins[1:])
    return [
        (rows, clock_of(str(names[which]), first, last)) for which, rows in zip(used, parts, strict=True) if which >= 0
    ]
