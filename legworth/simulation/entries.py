"""Entries of a study: methods prepared once, or prepared anew at every reading, and how they play."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from legworth.simulation.forecast import at_instant
from legworth.simulation.methods import METHODS, Method
from legworth.simulation.play import Bookings, play
from legworth.simulation.requests import RequestPaths
from legworth.simulation.rules import Rule, Situation
from network import Network, SettingError
from network.arrays import BoolArray, FloatArray, IntArray

__all__ = ["Entry", "Schedule", "entries_of", "play_anew", "play_schedule", "prepare_schedule"]


AGAIN = "+"
"""Ends the name of a method that is prepared anew at every reading."""


@dataclass(frozen=True)
class Entry:
    """A method as it takes part.

    Attributes
    ----------
    name
        Name of the method; with a plus sign if re-optimised.
    """

    name: str

    @property
    def method(self) -> Method:
        """The method itself."""
        return METHODS[self.name.removesuffix(AGAIN)]

    @property
    def reoptimised(self) -> bool:
        """Whether it is prepared anew at every reading."""
        return self.name.endswith(AGAIN)

    @property
    def path_by_path(self) -> bool:
        """Whether every path needs preparations of its own."""
        return self.reoptimised and self.method.by_seats

    @property
    def label(self) -> str:
        """What it is, in a few words."""
        return f"{self.method.label}, re-optimised" if self.reoptimised else self.method.label


def entries_of(names: Sequence[str]) -> tuple[Entry, ...]:
    """Entries by name, each once, in the order given.

    Raises
    ------
    SettingError
        If there is no such method.
    """
    for name in names:
        if name.removesuffix(AGAIN) not in METHODS or name.count(AGAIN) > 1:
            known = ", ".join(METHODS)
            raise SettingError(f"unknown method {name!r}; choose of {known}, with + at the end to re-optimise")
    return tuple(Entry(name) for name in dict.fromkeys(names))


@dataclass(frozen=True, eq=False)
class Schedule:
    """Rules in force from some instants on.

    Attributes
    ----------
    instants
        (R,) days after the snapshot, rising from 0.
    rules
        R rules.
    """

    instants: FloatArray
    rules: tuple[Rule, ...]

    def rule_at(self, instant: float) -> Rule:
        """Return the rule in force."""
        return self.rules[max(int(np.searchsorted(self.instants, instant, side="right")) - 1, 0)]


def prepare_schedule(entry: Entry, network: Network, situation: Situation, instants: FloatArray) -> Schedule:
    """Prepare an entry whose rules serve all paths.

    Parameters
    ----------
    entry
        The entry; not path by path.
    network, situation
        Part of the network as forecast, and what requests meet.
    instants
        Readings of re-optimisation.
    """
    if not entry.reoptimised:
        return Schedule(np.zeros(1), (entry.method.prepare(network, situation),))
    rules = tuple(entry.method.prepare(at_instant(network, float(when)), situation) for when in instants)
    return Schedule(instants, rules)


def play_schedule(requests: RequestPaths, schedule: Schedule, situation: Situation) -> tuple[BoolArray, IntArray]:
    """Play rules that serve all paths; returns (N, P) answers and (P, L) seats left at the end."""
    return _play(requests, situation, schedule.instants, lambda reading, left: schedule.rules[reading])


def play_anew(
    requests: RequestPaths, entry: Entry, network: Network, situation: Situation, instants: FloatArray
) -> tuple[BoolArray, IntArray]:
    """Play a method that is prepared anew for every path at every reading; returns as `play_schedule`.

    Parameters
    ----------
    requests
        Requests of P paths.
    entry
        The entry.
    network, situation
        Part of the network as forecast at the snapshot, and what requests meet.
    instants
        Readings, days after the snapshot.
    """

    def rule_of(reading: int, left: IntArray) -> Rule:
        when = float(instants[reading])
        if reading == 0:
            return entry.method.prepare(network, situation)
        rules = [entry.method.prepare(at_instant(network, when, seats), situation) for seats in left]
        return type(rules[0]).stacked(rules)

    return _play(requests, situation, instants, rule_of)


def _play(
    requests: RequestPaths, situation: Situation, instants: FloatArray, rule_of: Callable[[int, IntArray], Rule]
) -> tuple[BoolArray, IntArray]:
    bookings = Bookings.none(situation, requests)
    count = np.isfinite(requests.at).sum(axis=0)
    for reading in range(len(instants)):
        begin = (requests.at < instants[reading]).sum(axis=0)
        end = (requests.at < instants[reading + 1]).sum(axis=0) if reading + 1 < len(instants) else count
        if np.any(end > begin):
            play(requests, rule_of(reading, bookings.legs), situation, bookings, begin, end)
    return bookings.accepted, bookings.legs
