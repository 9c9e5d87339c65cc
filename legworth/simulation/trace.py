"""Prices over time on chosen legs: what the last seat is worth to each control as it is sold."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from legworth.simulation.entries import Schedule
from legworth.simulation.requests import RequestPaths
from legworth.simulation.rules import Situation
from network.arrays import FloatArray

__all__ = ["INSTANTS", "Trace", "trace_prices"]

INSTANTS = 60
"""Instants at which prices are told, evenly from the snapshot to the leg's departure."""


@dataclass(frozen=True, eq=False)
class Trace:
    """One leg over time.

    Attributes
    ----------
    days
        (K,) days before departure, falling to 0.
    price
        (K,) mean value of the last seat over the paths that have one left, currency, by entry; NaN where none has.
    left
        (K,) mean seats left, by entry.
    """

    days: FloatArray
    price: dict[str, FloatArray]
    left: dict[str, FloatArray]


def trace_prices(
    requests: RequestPaths,
    situation: Situation,
    leg: int,
    answers: dict[str, npt.NDArray[np.bool_]],
    schedules: dict[str, Schedule],
) -> Trace:
    """Follow one leg of a part of the network.

    Parameters
    ----------
    requests, situation
        P paths, and what they met.
    leg
        Position of the leg.
    answers
        (N, P) answers by entry.
    schedules
        Rules by entry; those that know no value of a seat are left out.
    """
    horizon = float(situation.days_now[leg])
    instants = np.linspace(0.0, horizon, INSTANTS)
    uses = (situation.legs == leg).any(axis=1)
    row, path = np.nonzero(uses[requests.product])
    asked, sign = row, np.ones(len(row))
    if requests.returns is not None:
        back = requests.returns
        gone, owner = np.nonzero((back >= 0) & uses[np.take_along_axis(requests.product, np.maximum(back, 0), axis=0)])
        row, path = np.append(row, gone), np.append(path, owner)
        asked, sign = np.append(asked, back[gone, owner]), np.append(sign, -np.ones(len(gone)))
    stretch = np.searchsorted(instants, requests.at[row, path], side="left")
    price: dict[str, FloatArray] = {}
    left: dict[str, FloatArray] = {}
    for name, accepted in answers.items():
        if schedules[name].rules[0].table is None:
            continue
        weight = sign * accepted[asked, path]
        key = stretch * requests.n_paths + path
        size = (INSTANTS + 1) * requests.n_paths
        sold = np.bincount(key, weights=weight, minlength=size).reshape(INSTANTS + 1, -1)[:INSTANTS].cumsum(axis=0)
        seats = np.rint(situation.seats[leg] - sold).astype(np.int64)
        means = np.full(INSTANTS, np.nan)
        for k, when in enumerate(instants.tolist()):
            table = schedules[name].rule_at(when).table
            if table is not None and np.any(seats[k] > 0):
                means[k] = np.nanmean(table.price(leg, seats[k], horizon - when))
        price[name], left[name] = means, seats.mean(axis=1)
    return Trace(horizon - instants, price, left)
