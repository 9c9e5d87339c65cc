"""Links: which leg may follow which, where passengers change."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from legworth.schedules.connection_board import DAY, DepartureBoard
from legworth.schedules.connection_report import Tally
from network.arrays import BoolArray, IntArray
from network.connection_settings import MINUTES_OF_WEEK, ConnectionRules
from network.model import ranges

__all__ = ["Links", "chunks", "find_links"]

PAIRS_AT_ONCE = 2_000_000


@dataclass(frozen=True, eq=False)
class Links:
    """Leg ``a`` may be followed by the legs ``leg[start[a]:start[a + 1]]``, in order of departure."""

    start: IntArray
    leg: IntArray


def find_links(board: DepartureBoard, rules: ConnectionRules, tally: Tally) -> Links:
    """Find every pair of legs between which passengers can change, and note those that break a rule of time.

    Departures of a station lie side by side in the board, so that those inside the window of an arrival are a range
    found by bisection; no pair outside a window is looked at. A leg that the same vehicle runs next is no change and is
    left out.

    Parameters
    ----------
    board
        L legs.
    rules
        Times in minutes; the longer of the station's and the kinds' minimum holds.
    tally
        Receives counts and examples of ``minimum_connection``, ``maximum_connection`` (departures within a day of the
        arrival alone, for beyond that nobody would think of a connection), ``minimum_by_kinds`` and ``overnight``.

    Returns
    -------
    Links
        None at all where an itinerary is to have one leg.
    """
    if rules.most_legs == 1:
        return Links(np.zeros(len(board) + 1, dtype=np.int64), np.zeros(0, dtype=np.int32))
    windows = _Windows.of(board, rules)
    windows.note_misfits(board, rules, tally)
    by_kinds = _minimum_by_kinds(board, rules)
    count = windows.high - windows.low
    edges = chunks(count, PAIRS_AT_ONCE)
    found: list[IntArray] = []
    kept = np.zeros(len(board) + 1, dtype=np.int64)
    for begin, end in pairwise(edges):
        first = np.repeat(np.arange(begin, end, dtype=np.int32), count[begin:end])
        second = ranges(windows.low[begin:end], count[begin:end]).astype(np.int32)
        fits = board.through[first] != second
        fits &= _long_enough(board, first, second, fits, by_kinds, tally)
        if not rules.overnight:
            fits &= _same_date(board, first, second, fits, tally)
        kept[begin + 1 : end + 1] = np.bincount(first[fits] - begin, minlength=end - begin)
        found.append(second[fits])
    return Links(np.cumsum(kept), np.concatenate([np.zeros(0, dtype=np.int32), *found]))


@dataclass(frozen=True, eq=False)
class _Windows:
    """Departures by arriving leg, as positions: ``same`` those no earlier than the arrival, ``low`` to ``high`` those
    inside the window, ``day`` the end of those within a day.
    """

    same: IntArray
    low: IntArray
    high: IntArray
    day: IntArray

    @classmethod
    def of(cls, board: DepartureBoard, rules: ConnectionRules) -> _Windows:
        span = int(board.arrives.max(initial=0)) + MINUTES_OF_WEEK * 60 + DAY + 1
        key = board.origin.astype(np.int64) * span + board.departs
        arrives = board.destination.astype(np.int64) * span + board.arrives
        least = _seconds(board.stations.minimum_connection)[board.destination]
        same = np.searchsorted(key, arrives)
        low = np.searchsorted(key, arrives + least)
        most = int(np.floor(np.round(rules.maximum_connection * 60, 6)))
        high = np.searchsorted(key, arrives + most, side="right")
        day = np.searchsorted(key, arrives + DAY, side="right")
        high = np.maximum(high, low)
        return cls(same, low, high, np.maximum(day, high))

    def note_misfits(self, board: DepartureBoard, rules: ConnectionRules, tally: Tally) -> None:
        """Count departures before and after the window, not pair by pair."""
        station, needed = board.stations.name, board.stations.minimum_connection

        def too_short(first: int, second: int) -> str:
            at = board.destination[first]
            return f"{_minutes(board, first, second):g} minutes at {station[at]}, which needs {needed[at]:g}"

        def too_long(first: int, second: int) -> str:
            at = board.destination[first]
            most = rules.maximum_connection
            return f"{_minutes(board, first, second):g} minutes at {station[at]}, where {most:g} are the most"

        for rule, begin, end, words in (
            ("minimum_connection", self.same, self.low, too_short),
            ("maximum_connection", self.high, self.day, too_long),
        ):
            self._note_range(rule, begin, end, words, board, tally)

    @staticmethod
    def _note_range(
        rule: str,
        begin: IntArray,
        end: IntArray,
        words: Callable[[int, int], str],
        board: DepartureBoard,
        tally: Tally,
    ) -> None:
        through = board.through
        stays = (through >= begin) & (through < end)
        count = end - begin - stays
        tally.count[rule] += int(count.sum())
        few = np.flatnonzero(count)[: tally.most_examples]
        first, second = np.repeat(few, (end - begin)[few]), ranges(begin[few], (end - begin)[few])
        tally.show(
            rule,
            np.flatnonzero(through[first] != second),
            lambda row: f"{board.words([first[row], second[row]])}: {words(int(first[row]), int(second[row]))}",
        )


def _seconds(minutes: np.ndarray) -> IntArray:
    """Whole seconds that are at least so many minutes; the rounding takes away what binary fractions add."""
    return np.ceil(np.round(minutes * 60, 6)).astype(np.int64)


def _minutes(board: DepartureBoard, first: int, second: int) -> float:
    return float(board.departs[second] - board.arrives[first]) / 60


def _minimum_by_kinds(board: DepartureBoard, rules: ConnectionRules) -> IntArray | None:
    """(K + 1, K + 1) seconds from kind to kind, last for legs without kind; None if no pair of kinds has any."""
    place = {kind: at for at, kind in enumerate(board.kinds)}
    least = np.zeros((len(place) + 1, len(place) + 1), dtype=np.int64)
    for minimum in rules.minimum_by_kinds:
        if minimum.arriving in place and minimum.departing in place:
            seconds = _seconds(np.array([minimum.minutes]))[0]
            least[place[minimum.arriving], place[minimum.departing]] = seconds
    return least if least.any() else None


def _long_enough(
    board: DepartureBoard, first: IntArray, second: IntArray, fits: BoolArray, least: IntArray | None, tally: Tally
) -> BoolArray:
    if least is None:
        return np.ones(len(first), dtype=bool)
    needed = least[board.kind[first], board.kind[second]]
    enough = board.departs[second] - board.arrives[first] >= needed

    def words(row: int) -> str:
        a, b = int(first[row]), int(second[row])
        kinds = f"{board.kinds[board.kind[a]]} to {board.kinds[board.kind[b]]}"
        at = board.stations.name[board.destination[a]]
        return f"{board.words([a, b])}: {_minutes(board, a, b):g} minutes at {at}, {kinds} needs {needed[row] / 60:g}"

    tally.note("minimum_by_kinds", np.flatnonzero(fits & ~enough), words)
    return enough


def _same_date(board: DepartureBoard, first: IntArray, second: IntArray, fits: BoolArray, tally: Tally) -> BoolArray:
    same: BoolArray = board.arrives_day[first] == board.departs_day[second]

    def words(row: int) -> str:
        a, b = int(first[row]), int(second[row])
        dates = [np.datetime64(int(day), "D") for day in (board.arrives_day[a], board.departs_day[b])]
        at = board.stations.name[board.destination[a]]
        return f"{board.words([a, b])}: arrives at {at} on {dates[0]}, leaves on {dates[1]}"

    tally.note("overnight", np.flatnonzero(fits & ~same), words)
    return same


def chunks(weight: IntArray, limit: int) -> list[int]:
    """Edges of runs of neighbours that weigh at most ``limit`` together, or are one alone."""
    total = np.concatenate([[0], np.cumsum(weight)])
    edges = [0]
    while edges[-1] < len(weight):
        reach = int(np.searchsorted(total, total[edges[-1]] + limit, side="right")) - 1
        edges.append(max(reach, edges[-1] + 1))
    return edges
