"""Connections one by one, straight from the words of the rules, and drawn schedules to try them on.

Figures lie on coarse grids, so that equal times, equal distances and just-kept limits turn up all the time.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime, timedelta
from itertools import pairwise

import numpy as np
from hypothesis import strategies as st

from network import Legs, Stations
from network.connection_settings import ConnectionRules, KindMinimum

FIRST = datetime(2030, 3, 1, tzinfo=UTC)


@dataclass(frozen=True)
class Stop:
    """A station: coordinates in degrees or None, connection minutes."""

    name: str
    place: tuple[float, float] | None
    minimum: float = 30


@dataclass(frozen=True)
class Ride:
    """A leg: instants in minutes after `FIRST`, offsets in minutes, kind, name of the vehicle's next leg."""

    name: str
    origin: str
    destination: str
    departs: int
    arrives: int
    departs_offset: int = 0
    arrives_offset: int = 0
    kind: str | None = None
    through: str | None = None


@dataclass(frozen=True)
class Schedule:
    """Stations and legs in some order, and the city pairs that are wanted (None: all)."""

    stops: tuple[Stop, ...]
    rides: tuple[Ride, ...]
    wanted: frozenset[tuple[str, str]] | None = None

    @property
    def stations(self) -> Stations:
        """The stations as arrays."""
        names = np.array([stop.name for stop in self.stops], dtype=object)
        places = [stop.place or (math.nan, math.nan) for stop in self.stops]
        lat, lon = (np.array([place[axis] for place in places]) for axis in (0, 1))
        return Stations(names, names, lat, lon, np.array([float(stop.minimum) for stop in self.stops]))

    @property
    def legs(self) -> Legs:
        """The legs as arrays."""
        place = {stop.name: at for at, stop in enumerate(self.stops)}
        epoch = np.datetime64(FIRST.replace(tzinfo=None), "s")
        whole = {
            name: np.array([getattr(ride, name) for ride in self.rides], dtype=np.int64)
            for name in ("departs", "arrives", "departs_offset", "arrives_offset")
        }
        zeros = np.zeros(len(self.rides), dtype=np.int64)
        return Legs(
            np.array([ride.name for ride in self.rides], dtype=object),
            np.array([place[ride.origin] for ride in self.rides], dtype=np.int64),
            np.array([place[ride.destination] for ride in self.rides], dtype=np.int64),
            epoch + whole["departs"] * np.timedelta64(60, "s"),
            epoch + whole["arrives"] * np.timedelta64(60, "s"),
            whole["departs_offset"],
            whole["arrives_offset"],
            zeros,
            zeros,
        )

    @property
    def kind(self) -> np.ndarray:
        """Kind of every leg."""
        return np.array([ride.kind for ride in self.rides], dtype=object)

    @property
    def through(self) -> np.ndarray:
        """Position of the leg that each vehicle runs next, -1 if none."""
        place = {ride.name: at for at, ride in enumerate(self.rides)}
        return np.array([place.get(ride.through or "", -1) for ride in self.rides], dtype=np.int64)

    @property
    def pairs(self) -> np.ndarray | None:
        """The wanted city pairs by position."""
        if self.wanted is None:
            return None
        place = {stop.name: at for at, stop in enumerate(self.stops)}
        return np.array([[place[a], place[b]] for a, b in sorted(self.wanted)], dtype=np.int64).reshape(-1, 2)


Path = tuple[Ride, ...]


@dataclass
class Reference:
    """What the rules give, found by looking at every pair and every path."""

    schedule: Schedule
    rules: ConnectionRules
    permitted: Callable[[tuple[str, ...]], bool] = lambda names: True
    dropped: Counter[str] = field(default_factory=Counter)
    unjudged: int = 0

    def paths(self) -> set[tuple[str, ...]]:
        """Names of the legs of every itinerary."""
        if self.rules.most_legs > 1:
            for first in self.schedule.rides:
                for second in self.schedule.rides:
                    self._judge_pair(first, second)
        found = [path for ride in self.schedule.rides for path in self._grown((ride,))]
        found = [path for path in found if self._wanted(path) and self._permitted(path) and self._straight(path)]
        if not self.rules.keep_dominated:
            found = self._undominated(found)
        return {tuple(ride.name for ride in path) for path in self._limited(found)}

    def _stays(self, first: Ride, second: Ride) -> bool:
        return first.through == second.name

    def _judge_pair(self, first: Ride, second: Ride) -> None:
        gap = second.departs - first.arrives
        if first.destination != second.origin or self._stays(first, second) or not 0 <= gap <= 24 * 60:
            return
        fault = self._pair_fault(first, second)
        if fault:
            self.dropped[fault] += 1

    def _pair_fault(self, first: Ride, second: Ride) -> str | None:
        """The first rule of time that a change breaks."""
        gap, rules = second.departs - first.arrives, self.rules
        at = next(stop for stop in self.schedule.stops if stop.name == first.destination)
        if gap < at.minimum:
            return "minimum_connection"
        if gap > rules.maximum_connection:
            return "maximum_connection"
        for minimum in rules.minimum_by_kinds:
            if (minimum.arriving, minimum.departing) == (first.kind, second.kind) and gap < minimum.minutes:
                return "minimum_by_kinds"
        dates = [
            (FIRST + timedelta(minutes=instant + offset)).date()
            for instant, offset in ((first.arrives, first.arrives_offset), (second.departs, second.departs_offset))
        ]
        return "overnight" if dates[0] != dates[1] and not rules.overnight else None

    def _grown(self, path: Path) -> Iterator[Path]:
        """The path and all that begin with it."""
        yield path
        aboard = 1
        while aboard < len(path) and self._stays(path[-aboard - 1], path[-aboard]):
            aboard += 1
        for ride in self.schedule.rides:
            if ride.origin != path[-1].destination or ride.departs < path[-1].arrives:
                continue
            if self._stays(path[-1], ride):
                if aboard == self.rules.most_through:
                    continue
            elif vehicles(path) == self.rules.most_legs or self._pair_fault(path[-1], ride):
                continue
            if ride.destination in {path[0].origin, *(earlier.destination for earlier in path)}:
                self.dropped["return"] += 1
                continue
            yield from self._grown((*path, ride))

    def _wanted(self, path: Path) -> bool:
        fits = self.schedule.wanted is None or ends(path) in self.schedule.wanted
        self.dropped["wanted"] += not fits
        return fits

    def _permitted(self, path: Path) -> bool:
        fits = self.permitted(tuple(ride.name for ride in path))
        self.dropped["permitted"] += not fits
        return fits

    def _straight(self, path: Path) -> bool:
        if vehicles(path) == 1:
            return True
        places = {stop.name: stop.place for stop in self.schedule.stops}
        calls = [places[path[0].origin], *(places[ride.destination] for ride in path)]
        if None in calls:
            self.unjudged += 1
            return True
        whole = sum(distance(a, b) for a, b in pairwise(calls) if a and b)
        fits = whole <= self.rules.detour * distance(calls[0] or (0, 0), calls[-1] or (0, 0)) * (1 + 1e-9)
        self.dropped["detour"] += not fits
        return fits

    def _undominated(self, paths: list[Path]) -> list[Path]:
        kept = []
        for x in paths:
            if vehicles(x) > 1 and any(better(y, x) for y in paths if ends(y) == ends(x)):
                self.dropped["dominated"] += 1
            else:
                kept.append(x)
        return kept

    def _limited(self, paths: list[Path]) -> list[Path]:
        if self.rules.most_per_day is None:
            return paths
        kept = []
        for path in paths:
            rivals = sorted((p for p in paths if ends(p) == ends(path) and day(p) == day(path)), key=merit)
            if vehicles(path) == 1 or rivals.index(path) < self.rules.most_per_day:
                kept.append(path)
            else:
                self.dropped["most_per_day"] += 1
        return kept


def vehicles(path: Path) -> int:
    """Vehicles that a passenger sits in."""
    return 1 + sum(first.through != second.name for first, second in pairwise(path))


def ends(path: Path) -> tuple[str, str]:
    """First and last station."""
    return path[0].origin, path[-1].destination


def day(path: Path) -> object:
    """Local date of departure."""
    return (FIRST + timedelta(minutes=path[0].departs + path[0].departs_offset)).date()


def merit(path: Path) -> tuple[int, int, list[str]]:
    """Elapsed time, then legs that count, then names."""
    return path[-1].arrives - path[0].departs, vehicles(path), [ride.name for ride in path]


def better(y: Path, x: Path) -> bool:
    """Whether y makes x pointless."""
    of_y, of_x = ((-p[0].departs, p[-1].arrives, vehicles(p)) for p in (y, x))
    return all(a <= b for a, b in zip(of_y, of_x, strict=True)) and of_y != of_x


def distance(a: tuple[float, float], b: tuple[float, float]) -> float:
    """Great circle on the unit sphere, by the chord between the two points."""
    points = []
    for lat, lon in (a, b):
        phi, lam = math.radians(lat), math.radians(lon)
        points.append((math.cos(phi) * math.cos(lam), math.cos(phi) * math.sin(lam), math.sin(phi)))
    return 2 * math.asin(min(math.dist(*points) / 2, 1.0))


@st.composite
def schedules(draw: st.DrawFn, most_legs: int = 12) -> Schedule:
    """Draw schedules of a few stations and crowded times, some vehicles running on."""
    count = draw(st.integers(2, 5))
    grid = [(lat, lon) for lat in (0.0, 10.0, 20.0) for lon in (0.0, 10.0, 20.0)]
    places = st.sampled_from([*grid, None])
    minima = st.sampled_from([0, 10, 20, 12.5])
    stops = tuple(Stop(name, draw(places), draw(minima)) for name in "PQRST"[:count])
    rides = draw(st.lists(_rides(count), min_size=draw(st.sampled_from([0, most_legs])), max_size=most_legs))
    rides = [replace(ride, name=f"{'BA'[n % 2]}{n}") for n, ride in enumerate(rides)]
    for n, ride in enumerate(rides):
        after = [r.name for r in rides if r.origin == ride.destination and r.departs >= ride.arrives]
        rides[n] = replace(ride, through=draw(st.sampled_from([None, None, *after])))
    pairs = [(a.name, b.name) for a in stops for b in stops]
    wanted = None
    if draw(st.sampled_from([False, False, True])):
        wanted = frozenset(pairs) - draw(st.frozensets(st.sampled_from(pairs), max_size=4))
    return Schedule(stops, tuple(rides), wanted)


@st.composite
def _rides(draw: st.DrawFn, count: int) -> Ride:
    origin = draw(st.integers(0, count - 1))
    destination = (origin + draw(st.integers(1, count - 1))) % count
    departs = 10 * draw(st.integers(0, 9)) + draw(st.sampled_from([0, 0, 0, 24 * 60 - 60]))
    arrives = departs + 10 * draw(st.integers(1, 3))
    offsets = [draw(st.sampled_from([0, 0, -60, 120])) for _ in range(2)]
    kind = draw(st.sampled_from(["air", "rail", "air", None, ""]))
    return Ride("", "PQRST"[origin], "PQRST"[destination], departs, arrives, *offsets, kind)


@st.composite
def rule_sets(draw: st.DrawFn) -> ConnectionRules:
    """Draw all rules."""
    kinds = st.tuples(st.sampled_from(["air", "rail", "sea"]), st.sampled_from(["air", "rail"]))
    pairs: Sequence[tuple[str, str]] = draw(st.lists(kinds, unique=True, max_size=3))
    return ConnectionRules(
        most_legs=draw(st.sampled_from([3, 2, 1])),
        most_through=draw(st.sampled_from([1, 2, 12])),
        minimum_by_kinds=tuple(
            KindMinimum(arriving=a, departing=b, minutes=draw(st.sampled_from([0, 15, 30]))) for a, b in pairs
        ),
        maximum_connection=draw(st.sampled_from([180, 1440, 50, 15])),
        overnight=draw(st.booleans()),
        detour=draw(st.sampled_from([1.5, 1.2, 1.0, 3.0, 1000.0])),
        keep_dominated=draw(st.booleans()),
        most_per_day=draw(st.sampled_from([None, 1, 2, 3])),
    )


def crowded(seed: int) -> tuple[Schedule, ConnectionRules]:
    """A schedule on which connections of two and three legs abound, and loose rules, both from one random generator."""
    rng = np.random.default_rng(seed)
    names = "PQRSTU"[: rng.integers(4, 7)]
    stops = tuple(
        Stop(name, None if rng.random() < 0.05 else (10.0 * rng.integers(0, 4), 10.0 * rng.integers(0, 4)), minimum)
        for name, minimum in zip(names, rng.choice([0, 10, 20, 12.5], len(names)), strict=True)
    )
    rides = []
    for n in range(rng.integers(12, 26)):
        origin, destination = rng.choice(len(names), 2, replace=False)
        departs = 10 * int(rng.integers(0, 20)) + (24 * 60 - 100) * int(rng.random() < 0.5)
        arrives = departs + 10 * int(rng.integers(1, 4))
        offsets = [int(offset) for offset in rng.choice([0, 0, -60, 120], 2)]
        kind = rng.choice(["air", "rail", ""])
        rides.append(
            Ride(f"{'BA'[n % 2]}{n}", names[origin], names[destination], departs, arrives, *offsets, str(kind))
        )
    for n, ride in enumerate(rides):
        after = [other.name for other in rides if other.origin == ride.destination and other.departs >= ride.arrives]
        if after and rng.random() < 0.2:
            rides[n] = replace(ride, through=str(rng.choice(after)))
    rules = ConnectionRules(
        most_legs=int(rng.choice([3, 3, 2])),
        most_through=int(rng.choice([1, 2, 12])),
        minimum_by_kinds=(KindMinimum(arriving="air", departing="rail", minutes=float(rng.choice([0, 15, 40]))),),
        maximum_connection=float(rng.choice([60, 120, 1440])),
        overnight=bool(rng.random() < 0.7),
        detour=float(rng.choice([1.0, 1.5, 2.0, 1000.0])),
        keep_dominated=bool(rng.random() < 0.3),
        most_per_day=[None, 1, 2, 3][rng.integers(0, 4)],
    )
    return Schedule(stops, tuple(rides)), rules
