"""The study as a recipe: cut the network up, prepare controls, draw requests, play, bound, add up."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from joblib import Parallel, delayed

from heuristics.arrivals import days_before_departure
from legworth.simulation.bounds import Bound, sum_bounds
from legworth.simulation.entries import Entry, entries_of
from legworth.simulation.forecast import Stress, demand_times, wrong_forecast
from legworth.simulation.measures import Tally
from legworth.simulation.settings import BASELINE, SimulationOptions
from legworth.simulation.tasks import Part, Played, Task, cut_tasks, prepare_part, run_task
from legworth.simulation.trace import Trace
from network import Component, Network, SettingError, components
from network.arrays import FloatArray

__all__ = ["Simulation", "simulate"]

WATCHED = 4
"""Legs followed over time if none is named: those whose seats are worth most."""

Progress = Callable[[float, float], None]


@dataclass(frozen=True, eq=False)
class Simulation:
    """What was found.

    Attributes
    ----------
    network, options
        The network, and what was asked for.
    entries
        Who took part.
    tallies
        Figures of every path by name of entry; entries may have played the first paths only.
    hindsight
        (P,) hindsight optimum of every path, currency.
    bounds
        Bounds on expected revenue.
    traces
        Prices over time by name of leg.
    seconds
        Process seconds by activity, added up over processes.
    """

    network: Network
    options: SimulationOptions
    entries: tuple[Entry, ...]
    tallies: dict[str, Tally]
    hindsight: FloatArray
    bounds: list[Bound]
    traces: dict[str, Trace]
    seconds: dict[str, float]


def simulate(
    network: Network,
    options: SimulationOptions | None = None,
    stress: Stress | None = None,
    progress: Progress | None = None,
) -> Simulation:
    """Play whole booking horizons of a network under several controls.

    Parameters
    ----------
    network
        Requests are drawn from its demand, and controls are prepared from it too unless there is stress.
    options
        What is simulated.
    stress
        How the forecast that controls are prepared from is wrong; nothing is bounded or followed over time then.
    progress
        Called with the work done and the work in all.

    Raises
    ------
    SettingError
        If an option is out of its limits or a leg to follow is unknown.
    SolveError
        If a program has no certified optimum.
    """
    options = options or SimulationOptions()
    drawn_from = network
    if options.demand_factor != 1.0:
        drawn_from = replace(network, demand=demand_times(network.demand, options.demand_factor))
    entries = entries_of((*options.methods, *(() if BASELINE in options.methods else (BASELINE,))))
    if options.reoptimised_paths == 0:
        entries = tuple(entry for entry in entries if not entry.path_by_path)
    pieces = _pieces(drawn_from, stress)
    if not pieces:
        raise SettingError("there is no leg, so there is nothing to simulate")
    run = Parallel(n_jobs=options.jobs, return_as="generator")
    parts = _prepared(run, pieces, entries, options, float(days_before_departure(network).max(initial=0.0)))
    watched = {} if stress else _watch(network, parts, [piece.legs for piece, _ in pieces], options.legs)
    parts = [part.watching([leg for leg, _ in watched.get(part.number, [])]) for part in parts]
    tasks = list(cut_tasks(parts, entries, options))
    results = _played(run, parts, tasks, options.seed, progress)
    hindsight = _hindsight(tasks, results, options.paths)
    bounds = _all_bounds(parts, hindsight, options)
    tallies = {entry.name: _sum_tallies(entry.name, tasks, results) for entry in entries}
    traces = _named_traces(watched, tasks, results)
    return Simulation(network, options, entries, tallies, hindsight, bounds, traces, _seconds(parts, results))


def _prepared(
    run: Parallel,
    pieces: Sequence[tuple[Component, Network | None]],
    entries: Sequence[Entry],
    options: SimulationOptions,
    horizon: float,
) -> list[Part]:
    shared = [entry for entry in entries if not entry.path_by_path]
    calls = (
        delayed(prepare_part)(number, piece.network, wrong, shared, options, horizon)
        for number, (piece, wrong) in enumerate(pieces)
    )
    return list(run(calls))


def _played(
    run: Parallel, parts: Sequence[Part], tasks: Sequence[Task], seed: int, progress: Progress | None
) -> list[Played]:
    total, done = sum(task.cost for task in tasks), 0.0
    results: list[Played] = []
    for task, result in zip(tasks, run(delayed(run_task)(parts[task.part], task, seed) for task in tasks), strict=True):
        results.append(result)
        done += task.cost
        if progress is not None:
            progress(done, total)
    return results


def _pieces(network: Network, stress: Stress | None) -> list[tuple[Component, Network | None]]:
    """Parts of a network, each with its wrong forecast, None if it is right."""
    right = components(network)
    if stress is None:
        return [(piece, None) for piece in right]
    wrong = components(wrong_forecast(network, stress))
    return [(piece, other.network) for piece, other in zip(right, wrong, strict=True)]


def _watch(
    network: Network, parts: Sequence[Part], legs: Sequence[np.ndarray], names: Sequence[str]
) -> dict[int, list[tuple[int, str]]]:
    """Legs to follow, by part: position in the part, and name."""
    position = {str(name): leg for leg, name in enumerate(network.legs.name)}
    unknown = [name for name in names if name not in position]
    if unknown:
        raise SettingError(f"there is no leg {unknown[0]!r}; name legs as in legs.csv")
    worth = np.zeros(network.n_legs)
    for part, own in zip(parts, legs, strict=True):
        worth[own] = part.prices * part.network.remaining
    chosen = [position[name] for name in names] or np.argsort(-worth, kind="stable")[:WATCHED].tolist()
    found: dict[int, list[tuple[int, str]]] = {}
    for leg in dict.fromkeys(chosen):
        number = next(number for number, own in enumerate(legs) if leg in own)
        found.setdefault(number, []).append((int(np.searchsorted(legs[number], leg)), str(network.legs.name[leg])))
    return found


def _sum_tallies(name: str, tasks: Sequence[Task], results: Sequence[Played]) -> Tally:
    """Join the blocks of paths of every part, and add the parts up in their order."""
    blocks: dict[int, list[Tally]] = {}
    for task, result in zip(tasks, results, strict=True):
        if name in result.tallies:
            blocks.setdefault(task.part, []).append(result.tallies[name])
    first, *others = (Tally.joined(of_part) for _, of_part in sorted(blocks.items()))
    for other in others:
        first = first + other
    return first


def _hindsight(tasks: Sequence[Task], results: Sequence[Played], paths: int) -> FloatArray:
    total = np.zeros(paths)
    for task, result in zip(tasks, results, strict=True):
        if task.entry is None:
            total[task.paths] += result.hindsight
    return total


def _all_bounds(parts: Sequence[Part], hindsight: FloatArray, options: SimulationOptions) -> list[Bound]:
    """Bounds of the whole network; none under a wrong forecast."""
    known = [part.bounds for part in parts if part.bounds is not None]
    if not known:
        return []
    error = float(hindsight.std(ddof=1) / np.sqrt(len(hindsight)))
    of_paths = Bound.of("hindsight", float(hindsight.mean()), error)
    return [of_paths, *sum_bounds(known, everybody_comes=options.attendance is None)]


def _named_traces(
    watched: dict[int, list[tuple[int, str]]], tasks: Sequence[Task], results: Sequence[Played]
) -> dict[str, Trace]:
    names = {(part, leg): name for part, legs in watched.items() for leg, name in legs}
    return {
        names[task.part, leg]: trace
        for task, result in zip(tasks, results, strict=True)
        for leg, trace in result.traces.items()
    }


def _seconds(parts: Sequence[Part], results: Sequence[Played]) -> dict[str, float]:
    total: dict[str, float] = {}
    for seconds in (*(part.seconds for part in parts), *(result.seconds for result in results)):
        for activity, value in seconds.items():
            total[activity] = total.get(activity, 0.0) + value
    return total
