"""Many questions at once, column by column, so that none costs more than its share of a few passes over arrays.

A batch is judged in slices, and the loop that answers requests looks after everybody else between two of them.
"""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from time import perf_counter
from typing import Any

import numpy as np

from legworth.decisions import SENTENCES, Reason, decide, sentences
from legworth.service.messages import AskMany
from legworth.service.served_night import ServedNight
from legworth.service.served_part import ServedPart
from network.arrays import BoolArray, FloatArray, IntArray

__all__ = ["Turn", "Turns", "answer_many"]

TURN = 0.002
"""Seconds after which a batch lets others go first."""
SLICE = 500
"""Questions of one part judged in one go, and names looked up: about as long again."""
WORDS = np.array([reason.name.lower() for reason in Reason], dtype=object)


class Turns:
    """Whose turn it is among the batches that are judged: others wait for one slice, not for one of each batch."""

    def __init__(self) -> None:
        self._lock = asyncio.Lock()

    @asynccontextmanager
    async def batch(self) -> AsyncIterator[Turn]:
        """Begin with a batch, and give the turn back at its end."""
        turn = Turn(self._lock)
        try:
            yield turn
        finally:
            turn.pause()


class Turn:
    """The turns of one batch.

    Parameters
    ----------
    lock
        Held by the batch whose turn it is.
    """

    def __init__(self, lock: asyncio.Lock) -> None:
        self._lock = lock
        self._held = False
        self._until = 0.0

    async def take(self) -> None:
        """Go on at once while the turn lasts; after it let everybody else go first."""
        if self._held:
            if perf_counter() < self._until:
                return
            await asyncio.sleep(0)
            self.pause()
        await self._lock.acquire()
        self._held, self._until = True, perf_counter() + TURN

    def pause(self) -> None:
        """Give the turn back before waiting for anything."""
        if self._held:
            self._held = False
            self._lock.release()


class _Answers:
    """Columns of the answers, filled slice by slice; refused as unknown until then.

    Parameters
    ----------
    asked
        What is asked.
    """

    def __init__(self, asked: AskMany) -> None:
        count = len(asked.itinerary)
        self.asked = asked
        self.fare: FloatArray = np.full(count, np.nan)
        if asked.fare is not None:
            self.fare = np.array(asked.fare, dtype=np.float64)
        self.seats: IntArray = np.ones(count, dtype=np.int64)
        if asked.seats is not None:
            self.seats = np.array(asked.seats, dtype=np.int64)
        self.displacement: FloatArray = np.full(count, np.nan)
        self.reason = np.full(count, Reason.UNKNOWN_ITINERARY, dtype=np.int8)
        self.binding, self.sentence = np.full(count, None, dtype=object), np.full(count, None, dtype=object)

    @property
    def accepted(self) -> BoolArray:
        """(N,) whether each is accepted."""
        return np.asarray(self.reason == Reason.FARE_REACHES_PRICE)

    def judge(self, part: ServedPart, rows: IntArray, remaining: IntArray, now: float) -> None:
        """Judge some of the questions, all of one part."""
        asked = self.asked
        names = [asked.itinerary[row] for row in rows]
        classes = None if asked.fare_class is None else [asked.fare_class[row] for row in rows]
        requests = part.located(names, classes, self.fare[rows], self.seats[rows], now)
        found = decide(part.network, part.prices, requests, remaining)
        self.reason[rows], self.fare[rows], self.displacement[rows] = found.reason, found.fare, found.displacement
        self.binding[rows] = part.leg_names[found.binding_leg]
        if asked.sentences:
            self.sentence[rows] = sentences(part.network, requests, found).to_numpy(zero_copy_only=False)


async def answer_many(
    night: ServedNight, asked: AskMany, left: dict[str, int], now: float, turns: Turns
) -> dict[str, Any]:
    """Answer many questions, each by itself, part by part; an unknown itinerary is refused, not an error.

    Parameters
    ----------
    night, asked
        What judges, and what is asked.
    left
        Seats left by leg name; every slice takes them as they then are.
    now
        Seconds since 1970-01-01 UTC.
    turns
        Shared by all batches.

    Returns
    -------
    dict
        Columns of `legworth.service.messages.Answers`; NaN where there is no figure.
    """
    count = len(asked.itinerary)
    answers = _Answers(asked)
    codes = np.empty(count, dtype=np.int32)
    async with turns.batch() as turn:
        for begin in range(0, count, SLICE):
            await turn.take()
            codes[begin : begin + SLICE] = night.itineraries.codes_of(asked.itinerary[begin : begin + SLICE])
        for name, rows in night.itineraries.by_part(codes):
            if name is None:
                answers.sentence[rows] = SENTENCES[Reason.UNKNOWN_ITINERARY]
                continue
            part = night.ready(name)
            if part is None:
                turn.pause()
                part = await night.part(name)
            for some in np.array_split(rows, -(-len(rows) // SLICE)):
                await turn.take()
                answers.judge(part, some, part.remaining(left), now)
    return {
        "accepted": answers.accepted,
        "reason": WORDS[answers.reason].tolist(),
        "fare": answers.fare,
        "displacement": answers.displacement,
        "binding_leg": answers.binding.tolist(),
        "sentence": answers.sentence.tolist() if asked.sentences else None,
        "night": night.name,
    }
