"""Search: from first legs to whole journeys, block by block so that memory stays bounded."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from legworth.schedules.connection_board import DepartureBoard
from legworth.schedules.connection_choice import LaterArrivals, dominated, limit_per_day
from legworth.schedules.connection_journeys import Journeys
from legworth.schedules.connection_links import Links, chunks
from legworth.schedules.connection_report import Tally
from network.arrays import BoolArray, FloatArray, IntArray
from network.connection_settings import ConnectionRules
from network.great_circle import great_circle
from network.model import ranges

__all__ = ["Permitted", "search"]

Permitted = Callable[[IntArray, IntArray], BoolArray]
"""Tells of journeys, given by where their legs start and by legs as positions in their table, which may be sold."""

JOURNEYS_AT_ONCE = 1_000_000
"""Journeys that one block may look at, unless they all begin with one departure."""
ORIGINS_AT_ONCE = 200
ROUNDING = 1e-9
"""Part by which a way may exceed the greatest detour through the rounding of floating-point numbers."""


@dataclass(frozen=True, eq=False)
class _Level:
    """Unfinished journeys of equally many legs: (n, k) legs, vehicles, legs on the last vehicle, kilometres."""

    path: IntArray
    vehicles: IntArray
    aboard: IntArray
    km: FloatArray

    def take(self, which: IntArray) -> _Level:
        return _Level(self.path[which], self.vehicles[which], self.aboard[which], self.km[which])


@dataclass(frozen=True, eq=False)
class _Search:
    """What stays the same over all blocks."""

    board: DepartureBoard
    links: Links
    rules: ConnectionRules
    wanted: IntArray | None
    permitted: Permitted | None
    tally: Tally
    later: LaterArrivals

    def block(self, first: IntArray) -> Journeys:
        """Find the journeys that begin with some legs, given by station and falling departure."""
        board, rules = self.board, self.rules
        destinations = _Destinations.of(board, first, self.wanted)
        once = np.ones(len(first), dtype=np.int8)
        level = _Level(first.astype(np.int32)[:, None], once, once, board.km[first])
        parts: list[Journeys] = []
        while len(level.path):
            parts.append(self._offered(level, destinations))
            level = self._extended(level)
        journeys = Journeys.joined(board, parts)
        if not rules.keep_dominated:
            worse = dominated(journeys.pair, journeys.departs, journeys.arrives, journeys.vehicles)
            worse &= ~journeys.direct
            self._note_dominated(np.flatnonzero(worse), journeys)
            journeys = journeys.take(np.flatnonzero(~worse))
            self.later.learn(journeys, int(board.origin[first[-1]]))
        return limit_per_day(journeys, rules.most_per_day, self.tally)

    def _extended(self, level: _Level) -> _Level:
        """Add one leg in every way: the same vehicle goes on, or the passenger changes; never back to a station."""
        board, rules, links = self.board, self.rules, self.links
        last = level.path[:, -1]
        stay = np.flatnonzero((board.through[last] >= 0) & (level.aboard < rules.most_through))
        change = np.flatnonzero(level.vehicles < rules.most_legs)
        begin, end = links.start[last[change]], links.start[last[change] + 1]
        before = np.concatenate([stay, np.repeat(change, end - begin)])
        leg = np.concatenate([board.through[last[stay]], links.leg[ranges(begin, end - begin)]])
        to = board.destination[leg]
        back = to == board.origin[level.path[before, 0]]
        for column in range(level.path.shape[1] - 1):
            back |= to == board.destination[level.path[before, column]]

        def words(row: int) -> str:
            path = [*level.path[before[row]], leg[row]]
            return f"{board.words(path)}: back to {board.stations.name[to[row]]}"

        self.tally.note("return", np.flatnonzero(back), words)
        stays = np.arange(len(before)) < len(stay)
        on = np.flatnonzero(~back)
        before, leg, stays = before[on], leg[on], stays[on]
        return _Level(
            np.column_stack([level.path[before], leg]),
            level.vehicles[before] + ~stays,
            np.where(stays, level.aboard[before] + 1, 1).astype(np.int8),
            level.km[before] + board.km[leg],
        )

    def _offered(self, level: _Level, destinations: _Destinations) -> Journeys:
        """Those that may end here: wanted, permitted, no detour, not dominated by what leaves in later blocks."""
        board, rules, tally = self.board, self.rules, self.tally
        first, last = level.path[:, 0], level.path[:, -1]
        origin, to = board.origin[first], board.destination[last]
        row = destinations.row(origin)
        ends = np.arange(len(first))
        if destinations.wanted is not None:
            fits = destinations.wanted[row, to]
            tally.note(
                "wanted",
                np.flatnonzero(~fits),
                lambda at: f"{board.words(level.path[at])}: {board.ends(int(first[at]), int(last[at]))}",
            )
            ends = ends[fits]
        if self.permitted is not None:
            ends = ends[self._may_be_sold(level.path[ends], self.permitted)]
        changes = level.vehicles > 1
        direct_km = destinations.km[row[ends], to[ends]]
        too_long = changes[ends] & (level.km[ends] > rules.detour * direct_km * (1 + ROUNDING))
        tally.unjudged += int(np.count_nonzero(changes[ends] & np.isnan(level.km[ends])))

        def detour(at: int) -> str:
            times = f"{level.km[ends[at]] / direct_km[at]:.2f} times" if direct_km[at] else "longer than"
            return f"{board.words(level.path[ends[at]])}: {times} the direct way, {rules.detour:g} at most"

        tally.note("detour", np.flatnonzero(too_long), detour)
        ends = ends[~too_long]
        if not rules.keep_dominated:
            worse = changes[ends] & self.later.dominate(
                origin[ends], to[ends], board.arrives[last[ends]], level.vehicles[ends]
            )
            self._note_dominated(ends[worse], _journeys(board, level))
            ends = ends[~worse]
        return _journeys(board, level.take(ends))

    def _may_be_sold(self, path: IntArray, permitted: Permitted) -> BoolArray:
        number, legs = path.shape
        fits = permitted(np.arange(number + 1) * legs, self.board.position[path].ravel())
        self.tally.note("permitted", np.flatnonzero(~fits), lambda at: self.board.words(path[at]))
        return fits

    def _note_dominated(self, which: IntArray, journeys: Journeys) -> None:
        board = self.board

        def words(row: int) -> str:
            at = int(which[row])
            leaves = np.datetime64(board.epoch + int(journeys.departs[at]), "s")
            return f"{journeys.words(at)}: {journeys.ends(at)}, leaves {leaves}Z"

        self.tally.note("dominated", np.arange(len(which)), words)


@dataclass(frozen=True, eq=False)
class _Destinations:
    """By station of departure, (n,) rising positions: kilometres to every station and whether that is wanted."""

    origins: IntArray
    km: FloatArray
    wanted: BoolArray | None

    @classmethod
    def of(cls, board: DepartureBoard, first: IntArray, wanted: IntArray | None) -> _Destinations:
        origins = np.unique(board.origin[first])
        lat, lon = board.stations.latitude, board.stations.longitude
        km = great_circle(lat[origins, None], lon[origins, None], lat[None, :], lon[None, :])
        if wanted is None:
            return cls(origins, km, None)
        row = np.searchsorted(origins, wanted[:, 0])
        row[row == len(origins)] = 0
        here = origins[row] == wanted[:, 0]
        table = np.zeros(km.shape, dtype=bool)
        table[row[here], wanted[here, 1]] = True
        return cls(origins, km, table)

    def row(self, origin: IntArray) -> IntArray:
        return np.searchsorted(self.origins, origin)


def _journeys(board: DepartureBoard, level: _Level) -> Journeys:
    number, legs = level.path.shape
    return Journeys(board, np.arange(number + 1) * legs, level.path.reshape(-1), level.vehicles)


def search(
    board: DepartureBoard,
    links: Links,
    rules: ConnectionRules,
    wanted: IntArray | None,
    permitted: Permitted | None,
    tally: Tally,
    progress: Callable[[int, int], None] | None = None,
) -> Journeys:
    """Find every journey within the rules.

    A journey grows leg by leg, all of equally many legs at once. First legs are taken in blocks: station by station,
    and at each from the last departure to the first, so that what dominates a journey is in its block or known from
    blocks before. A block looks at about `JOURNEYS_AT_ONCE` journeys whatever the size of the board.

    Parameters
    ----------
    board, links
        L legs and where passengers can change.
    rules
        What a journey must keep to.
    wanted
        (p, 2) stations of departure and destination between which journeys are wanted; None for all.
    permitted
        Which journeys may be sold; None for all.
    tally
        Receives counts and examples of what is dropped.
    progress
        Is told how many first legs of how many are done.
    """
    run = _Search(board, links, rules, wanted, permitted, tally, LaterArrivals(board, rules.most_legs))
    parts = []
    done = 0
    for first in _blocks(board, links, rules):
        parts.append(run.block(first))
        done += len(first)
        if progress:
            progress(done, len(board))
    return limit_per_day(Journeys.joined(board, parts), rules.most_per_day, tally)


def _blocks(board: DepartureBoard, links: Links, rules: ConnectionRules) -> Iterator[IntArray]:
    """First legs by station and falling departure, cut where the departure changes."""
    order = np.lexsort((np.arange(len(board)), -board.departs, board.origin))
    origin, departs = board.origin[order], board.departs[order]
    begins = np.flatnonzero(np.append(True, (origin[1:] != origin[:-1]) | (departs[1:] != departs[:-1])))
    if len(board) == 0:
        return
    weight = np.add.reduceat(_journeys_from(board, links, rules)[order], begins)
    place = np.unique(origin, return_inverse=True)[1][begins]
    bounds = np.append(begins, len(order))
    # A station more than ORIGINS_AT_ONCE after the first of a block begins a block of its own.
    for few in np.split(np.arange(len(begins)), np.flatnonzero(np.diff(place // ORIGINS_AT_ONCE)) + 1):
        edges = chunks(weight[few], JOURNEYS_AT_ONCE)
        for begin, end in pairwise(edges):
            yield order[bounds[few[begin]] : bounds[few[0] + end]]


def _journeys_from(board: DepartureBoard, links: Links, rules: ConnectionRules) -> IntArray:
    """(L,) journeys that begin with each leg, before any is dropped for coming back."""
    through = np.where(board.through >= 0, board.through, len(board))
    ways = np.zeros(len(board) + 1)
    for _ in range(rules.most_legs):
        total = np.concatenate([[0.0], np.cumsum(ways[links.leg])])
        here = np.append(1.0 + total[links.start[1:]] - total[links.start[:-1]], 0.0)
        ways, reach = here.copy(), np.append(through, len(board))
        for _ in range(rules.most_through - 1):
            if np.all(reach == len(board)):
                break
            ways += here[reach]
            reach = np.append(through, len(board))[reach]
    return np.minimum(ways[:-1], 1e12).astype(np.int64)
