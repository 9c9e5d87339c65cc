"""Many questions at once, column by column, so that none costs more than its share of a few passes over arrays."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from legworth.decisions import SENTENCES, Decisions, Reason, Requests, decide, decisions_table
from legworth.service.messages import AskMany
from legworth.service.served_night import ServedNight
from legworth.service.served_part import ServedPart

__all__ = ["answer_many"]

WORDS = np.array([reason.name.lower() for reason in Reason], dtype=object)


async def answer_many(night: ServedNight, asked: AskMany, left: dict[str, int], now: float) -> dict[str, Any]:
    """Answer many questions, each by itself, part by part; an unknown itinerary is refused, not an error.

    Parameters
    ----------
    night, asked
        What judges, and what is asked.
    left
        Seats left by leg name.
    now
        Seconds since 1970-01-01 UTC.

    Returns
    -------
    dict
        Columns of `legworth.service.messages.Answers`; NaN where there is no figure.
    """
    count = len(asked.itinerary)
    fare = np.full(count, np.nan) if asked.fare is None else np.array(asked.fare, dtype=np.float64)
    seats = np.ones(count, dtype=np.int64) if asked.seats is None else np.array(asked.seats, dtype=np.int64)
    found_fare, displacement = fare.copy(), np.full(count, np.nan)
    reason = np.full(count, Reason.UNKNOWN_ITINERARY, dtype=np.int8)
    binding, sentence = np.full(count, None, dtype=object), np.full(count, None, dtype=object)
    for name, rows in night.itineraries.parts_of(asked.itinerary):
        if name is None:
            sentence[rows] = SENTENCES[Reason.UNKNOWN_ITINERARY]
            continue
        part = night.ready(name) or await night.part(name)
        whole = len(rows) == count
        names = asked.itinerary if whole else [asked.itinerary[row] for row in rows]
        classes = asked.fare_class
        if classes is not None and not whole:
            classes = tuple(classes[row] for row in rows)
        requests = part.located(names, classes, fare[rows], seats[rows], now)
        found = decide(part.network, part.prices, requests, part.remaining(left))
        reason[rows], found_fare[rows], displacement[rows] = found.reason, found.fare, found.displacement
        binding[rows] = part.leg_names[found.binding_leg]
        if asked.sentences:
            sentence[rows] = _sentences(part, requests, found)
    return {
        "accepted": reason == Reason.FARE_REACHES_PRICE,
        "reason": WORDS[reason].tolist(),
        "fare": found_fare,
        "displacement": displacement,
        "binding_leg": binding.tolist(),
        "sentence": sentence.tolist() if asked.sentences else None,
        "night": night.name,
    }


def _sentences(part: ServedPart, requests: Requests, found: Decisions) -> np.ndarray:
    nameless = pd.DataFrame({name: np.zeros(len(found.reason)) for name in ("request", "itinerary", "fare_class")})
    return decisions_table(part.network, nameless, requests, found)["sentence"].to_numpy(dtype=object)
