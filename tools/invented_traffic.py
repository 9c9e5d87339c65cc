"""Arithmetic shared by the programs that invent traffic for a network folder.

Great circles, timed connections, demand that is balanced over competing local and through passengers,
and the writing of the tables. Nothing here reads the clock; whoever calls brings a seeded generator.

Legs are given by position. A path is a row of leg positions in travel order, padded with -1.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Literal

import numpy as np
import pandas as pd

from network.arrays import FloatArray, IntArray
from network.great_circle import great_circle

__all__ = [
    "FloatArray",
    "IntArray",
    "TableFormat",
    "balance",
    "connect",
    "great_circle",
    "journeys",
    "leg_sums",
    "local_and_through",
    "over_dispersed",
    "write_folder",
]

TableFormat = Literal["csv", "parquet"]


def connect(
    station: IntArray,
    arrives: IntArray,
    minimum: IntArray,
    *,
    from_station: IntArray,
    departs: IntArray,
    maximum: int,
) -> tuple[IntArray, IntArray]:
    """Pair arrivals with every later departure of the same station inside a time window.

    Parameters
    ----------
    station, arrives, minimum
        (A,) where and when each arrival ends, and the least connection there; minutes.
    from_station, departs
        (D,) where and when each departure begins; minutes on the same clock.
    maximum
        Longest connection, minutes.

    Returns
    -------
    tuple of IntArray
        (P,) positions among the arrivals and (P,) positions among the departures.
    """
    day = 10_000_000  # minutes; wider than any timetable, so the stations never mix in one sort key
    order = np.argsort(from_station * day + departs, kind="stable")
    key = (from_station * day + departs)[order]
    low = np.searchsorted(key, station * day + arrives + minimum, side="left")
    high = np.maximum(np.searchsorted(key, station * day + arrives + maximum, side="right"), low)
    count = high - low
    first = np.repeat(np.arange(len(station)), count)
    within = np.arange(count.sum()) - np.repeat(np.cumsum(count) - count, count)
    return first, order[np.repeat(low, count) + within]


def journeys(o: IntArray, d: IntArray, start: IntArray, end: IntArray, minimum: IntArray, *, maximum: int) -> IntArray:
    """Find every journey of one to three legs that calls nowhere twice.

    Parameters
    ----------
    o, d
        (L,) station positions of the ends of the legs.
    start, end
        (L,) minutes on one clock.
    minimum
        (S,) least connection of every station, minutes; above `maximum` nobody changes there.
    maximum
        Longest connection, minutes.

    Returns
    -------
    IntArray
        (I, 3) paths, padded with -1; row ``l < L`` is leg ``l`` alone, then come two legs, then three.
    """
    one = np.full((len(o), 3), -1)
    one[:, 0] = np.arange(len(o))
    a, b = connect(d, end, minimum[d], from_station=o, departs=start, maximum=maximum)
    two = np.column_stack([a, b, np.full(len(a), -1)])[o[a] != d[b]]
    b = two[:, 1]
    p, c = connect(d[b], end[b], minimum[d[b]], from_station=o, departs=start, maximum=maximum)
    three = np.column_stack([two[p, :2], c])
    three = three[(d[c] != o[three[:, 0]]) & (d[c] != d[three[:, 0]])]
    return np.concatenate([one, two, three])


def leg_sums(paths: IntArray, per_path: FloatArray, n_legs: int) -> FloatArray:
    """Sum a figure per path, (I,), over the legs of the paths, (I, K) padded with -1; gives (n_legs,)."""
    used = paths >= 0
    weights = np.broadcast_to(per_path[:, None], paths.shape)[used]
    return np.asarray(np.bincount(paths[used], weights=weights, minlength=n_legs), dtype=np.float64)


def balance(paths: IntArray, prior: FloatArray, target: FloatArray, rounds: int = 40, reach: float = 8.0) -> FloatArray:
    """Scale path flows until the legs carry about what they should.

    Iterative proportional fitting in the manner of Deming and Stephan (1940): each flow is multiplied by the
    geometric mean of target over load of its legs. A flow moves at most by the factor `reach` from its
    prior, so that a leg with few paths does not blow up one of them; such a leg stays short of its target.

    Parameters
    ----------
    paths
        (I, K) leg positions, padded with -1.
    prior
        (I,) positive relative sizes of the flows.
    target
        (L,) wanted sum of the flows of every leg.
    rounds, reach
        Passes over the legs; widest factor between a flow and its scaled prior.

    Returns
    -------
    FloatArray
        (I,) flows.
    """
    if len(paths) == 0:
        return np.zeros(0)
    used = paths >= 0
    owner = np.nonzero(used)[0]
    leg = paths[used]
    length = used.sum(axis=1)
    total = np.sum(target[np.unique(leg)])
    start = prior * (total / np.sum(prior * length))
    flow: FloatArray = start.copy()
    for _ in range(rounds):
        load = np.bincount(leg, weights=flow[owner], minlength=len(target))
        step = np.log(np.maximum(target, 1e-12) / np.maximum(load, 1e-12))
        mean_step = np.bincount(owner, weights=step[leg], minlength=len(flow)) / length
        flow = np.clip(flow * np.exp(mean_step), start / reach, start * reach)
    return flow


def local_and_through(
    paths: IntArray,
    prior: FloatArray,
    target: FloatArray,
    through_share: FloatArray,
    least_local: float = 0.12,
) -> FloatArray:
    """Share the demand of every leg between its local passengers and those who only pass through.

    Parameters
    ----------
    paths
        (I, K) leg positions, padded with -1; row ``l < L`` is the local itinerary of leg ``l``.
    prior
        (I,) relative sizes of the through flows; those of the L local rows are ignored.
    target, through_share
        (L,) passengers wanted on every leg and the part of them that should connect.
    least_local
        Least local demand, as a part of the target.

    Returns
    -------
    FloatArray
        (I,) mean demand of every itinerary, local rows first as given.
    """
    n_legs = len(target)
    through = balance(paths[n_legs:], prior[n_legs:], through_share * target)
    carried = leg_sums(paths[n_legs:], through, n_legs)
    local = np.maximum(target - carried, least_local * target)
    return np.concatenate([local, through])


def over_dispersed(mean: FloatArray, spread: FloatArray) -> FloatArray:
    """Standard deviation of a Poisson demand whose rate is itself uncertain.

    Variance = mean + (spread * mean)^2, that of a Poisson law mixed over a gamma rate with coefficient of
    variation `spread` (the negative binomial); `spread` 0 is plain Poisson.
    """
    return np.sqrt(mean + (spread * mean) ** 2)


def write_folder(
    folder: Path, settings: str, tables: Mapping[str, pd.DataFrame], table_format: TableFormat = "csv"
) -> None:
    """Write a network folder: the settings as ``network.toml``, every table as CSV or Parquet.

    Tables go out in UTF-8 with commas and LF line ends, columns and rows as they stand. A table of the
    same name in the other format is removed, so that a folder never holds both.
    """
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "network.toml").write_text(settings, encoding="utf-8", newline="\n")
    other = "parquet" if table_format == "csv" else "csv"
    for name, table in tables.items():
        path = folder / f"{name}.{table_format}"
        if table_format == "csv":
            table.to_csv(path, index=False, lineterminator="\n", encoding="utf-8")
        else:
            table.to_parquet(path, index=False)
        path.with_suffix(f".{other}").unlink(missing_ok=True)
