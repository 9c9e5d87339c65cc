"""The pieces of work of a study, each for one part of the network and one block of paths.

They are the same ones however many processes do them, so that results do not depend on that number.
"""

from __future__ import annotations

import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from legworth.simulation.attendance import Attendance
from legworth.simulation.bounds import expectation_bounds
from legworth.simulation.entries import Entry, Schedule, play_anew, play_schedule, prepare_schedule
from legworth.simulation.forecast import reading_instants
from legworth.simulation.hindsight import Hindsight
from legworth.simulation.measures import Book, Tally, tally
from legworth.simulation.methods import bid_prices
from legworth.simulation.requests import RequestPaths, draw_requests
from legworth.simulation.rules import Situation
from legworth.simulation.settings import SimulationOptions
from legworth.simulation.trace import Trace, trace_prices
from lp import Method as Program
from network import Network
from network.arrays import FloatArray, IntArray

__all__ = ["Part", "Played", "Task", "cut_tasks", "prepare_part", "run_task"]

REQUESTS_TOGETHER = 6_000_000
MOST_TOGETHER = 500
PATHS_ANEW = 5
"""Paths that one task plays with preparations of their own."""


@dataclass(frozen=True, eq=False)
class Part:
    """A part of the network, ready to be played.

    Attributes
    ----------
    number
        Its place among the parts, which names its random numbers.
    network, forecast
        What requests are drawn from, and what controls are prepared from.
    situation, book
        Paths and fares of the products, and how they are counted.
    instants
        Readings, days after the snapshot.
    schedules
        Rules that serve all paths, by entry.
    prices
        (L,) bid prices of the deterministic program, currency; none where the forecast is wrong.
    bounds
        Bounds on expected revenue, and whether all demand is Poisson; None where the forecast is wrong.
    seconds
        Seconds of preparation, by entry.
    attendance
        Who turns up.
    watched
        Legs to follow over time.
    """

    number: int
    network: Network
    forecast: Network
    situation: Situation
    book: Book
    instants: FloatArray
    schedules: dict[str, Schedule]
    prices: FloatArray
    bounds: tuple[dict[str, float], bool] | None
    seconds: dict[str, float]
    attendance: Attendance | None = None
    watched: tuple[int, ...] = ()

    def watching(self, legs: Sequence[int]) -> Part:
        """Return the part with legs to follow."""
        return replace(self, watched=tuple(legs))


@dataclass(frozen=True, eq=False)
class Task:
    """Some paths of a part, played by rules that serve all paths, or by one entry that is prepared anew.

    Attributes
    ----------
    part
        Position of the part.
    paths
        (P,) numbers of the paths.
    entry
        The entry that is prepared anew; None for all others together.
    cost
        About how much work it is, in millions of requests answered.
    """

    part: int
    paths: IntArray
    entry: Entry | None
    cost: float


@dataclass(frozen=True, eq=False)
class Played:
    """What a task brings back: figures by entry, hindsight optima, prices followed by leg, seconds by activity."""

    tallies: dict[str, Tally]
    hindsight: FloatArray
    traces: dict[int, Trace]
    seconds: dict[str, float]


class _Clock:
    """Seconds by activity; laps of one name add up."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self._last = time.perf_counter()

    def lap(self, activity: str) -> None:
        now = time.perf_counter()
        self.seconds[activity] = self.seconds.get(activity, 0.0) + now - self._last
        self._last = now


def prepare_part(
    number: int,
    network: Network,
    wrong: Network | None,
    entries: Sequence[Entry],
    options: SimulationOptions,
    horizon: float,
) -> Part:
    """Prepare the controls and bounds of a part.

    Parameters
    ----------
    number
        Its place among the parts.
    network, wrong
        What requests are drawn from, and the wrong forecast that controls are prepared from, None if it is right.
    entries
        Entries whose rules serve all paths.
    options
        What is simulated.
    horizon
        Days from the snapshot to the last departure of the whole network.
    """
    clock = _Clock()
    attendance = options.attendance
    seats = network.remaining if attendance is None else attendance.seats(network)
    forecast = (network if wrong is None else wrong).with_remaining(seats)
    situation = Situation.of(network, seats)
    instants = reading_instants(network, options.reading_days, options.readings)
    schedules = {}
    for entry in entries:
        schedules[entry.name] = prepare_schedule(entry, forecast, situation, instants)
        clock.lap(f"prepare {entry.name}")
    prices, bounds = np.zeros(network.n_legs), None
    if wrong is None:
        prices = bid_prices(network, Program.DETERMINISTIC)
        bounds = expectation_bounds(network, fare_splits=options.fare_splits)
    clock.lap("bounds")
    book = Book.of(network, horizon, 0.0 if attendance is None else attendance.denied_cost)
    return Part(
        number, network, forecast, situation, book, instants, schedules, prices, bounds, clock.seconds, attendance
    )


def cut_tasks(parts: Sequence[Part], entries: Sequence[Entry], options: SimulationOptions) -> Iterator[Task]:
    """Cut a study into tasks, the longest kind first."""
    anew = [entry for entry in entries if entry.path_by_path]
    first = np.arange(min(options.reoptimised_paths, options.paths))
    for part in parts:
        for entry in anew:
            for begin in range(0, len(first), PATHS_ANEW):
                paths = first[begin : begin + PATHS_ANEW]
                cost = 1e-5 * (part.network.n_products + 500) * len(paths) * len(part.instants)
                yield Task(part.number, paths, entry, cost)
    for part in parts:
        asked = float(part.network.demand.expected.sum())
        together = int(np.clip(REQUESTS_TOGETHER / max(asked, 1.0), 1, MOST_TOGETHER))
        for begin in range(0, options.paths, together):
            paths = np.arange(begin, min(begin + together, options.paths))
            yield Task(part.number, paths, None, 1e-6 * asked * len(paths) * (len(part.schedules) + 2))


def run_task(part: Part, task: Task, seed: int) -> Played:
    """Draw the requests of a task and play them."""
    clock = _Clock()
    requests = draw_requests(part.network, task.paths, seed, part.number, part.attendance)
    clock.lap("draw requests")
    tallies: dict[str, Tally] = {}
    answers: dict[str, npt.NDArray[np.bool_]] = {}
    if task.entry is not None:
        accepted, _ = play_anew(requests, task.entry, part.forecast, part.situation, part.instants)
        clock.lap(f"play {task.entry.name}")
        tallies[task.entry.name] = tally(requests, accepted, part.situation, part.book)
        clock.lap("count")
        return Played(tallies, np.zeros(0), {}, clock.seconds)
    for name, schedule in part.schedules.items():
        accepted, _ = play_schedule(requests, schedule, part.situation)
        clock.lap(f"play {name}")
        tallies[name] = tally(requests, accepted, part.situation, part.book)
        if part.watched and task.paths[0] == 0:
            answers[name] = accepted
        clock.lap("count")
    traces = {
        leg: trace_prices(requests, part.situation, leg, answers, part.schedules) for leg in part.watched if answers
    }
    clock.lap("follow prices")
    hindsight = np.zeros(len(task.paths))
    if part.bounds is not None:
        hindsight = _hindsight(part, requests)
    clock.lap("hindsight")
    return Played(tallies, hindsight, traces, clock.seconds)


def _hindsight(part: Part, requests: RequestPaths) -> FloatArray:
    """(P,) hindsight optima, currency; see `legworth.simulation.hindsight` for cancellations and no-shows."""
    network = part.network
    if part.attendance is None:
        return Hindsight(network).values(requests.demand)
    if part.book.denied_cost < network.fare.max(initial=0.0):
        network = network.with_remaining(part.situation.seats)
    return Hindsight(network).values(requests.demand_present) + requests.demand_absent @ network.fare
