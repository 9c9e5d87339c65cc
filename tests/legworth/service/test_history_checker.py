"""The checker itself: it passes a sound history and catches every kind of bad one."""

from __future__ import annotations

from dataclasses import replace

import pytest

from legworth.service.orders import SeatCount
from tests.legworth.service.history_checker import Entry, Event, faults

BEFORE = {"A": SeatCount("A", 5, 1), "B": SeatCount("B", 4, 0)}
AFTER = {"A": SeatCount("A", 5, 4), "B": SeatCount("B", 4, 2)}
JOURNAL = [
    Entry("1", "sale", ("A", "B"), 3, True),
    Entry("2", "sale", ("A",), 2, False),
    Entry("3", "cancellation", ("A", "B"), 1, True, "1"),
    Entry("4", "sale", ("A",), 1, True),
]
EVENTS = [
    Event("1", "sale", ("A", "B"), 3, True),
    Event("2", "sale", ("A",), 2, False),
    Event("3", "cancellation", ("A", "B"), 1, True, "1"),
    Event("4", "sale", ("A",), 1, None),
    Event("5", "sale", ("B",), 1, None),
]


def test_a_sound_history_has_no_faults() -> None:
    assert faults(BEFORE, AFTER, JOURNAL, EVENTS) == []


def counts(a: int, b: int) -> dict[str, SeatCount]:
    return {"A": SeatCount("A", 5, a), "B": SeatCount("B", 4, b)}


@pytest.mark.parametrize(
    ("after", "journal", "events", "word"),
    [
        pytest.param(counts(4, 2), JOURNAL[:3], EVENTS, "makes 3", id="count without order"),
        pytest.param(counts(1, 0), JOURNAL[3:], EVENTS, "not in the journal", id="lost sale"),
        pytest.param(counts(5, 2), [*JOURNAL, JOURNAL[3]], EVENTS, "2 times", id="key applied twice"),
        pytest.param(counts(5, 2), JOURNAL, EVENTS, "5 seats sold", id="count moved twice for one key"),
        pytest.param(
            counts(1, 0),
            [],
            [Event("1", "sale", ("A", "B"), 3, True)],
            "told of 4 to 4",
            id="sale gone from journal and counts alike",
        ),
        pytest.param(counts(4, 3), JOURNAL, EVENTS, "3 seats sold", id="torn sale"),
        pytest.param(
            counts(6, 2),
            [*JOURNAL, Entry("5", "sale", ("A",), 2, True)],
            [*EVENTS[:4], Event("5", "sale", ("A",), 2, True)],
            "oversold A",
            id="oversold",
        ),
        pytest.param(
            counts(2, 0),
            [*JOURNAL, Entry("6", "cancellation", ("A", "B"), 3, True, "1")],
            [*EVENTS, Event("6", "cancellation", ("A", "B"), 3, True, "1")],
            "not sold",
            id="given back twice",
        ),
        pytest.param(
            counts(4, 2), JOURNAL, [replace(EVENTS[0], accepted=False), *EVENTS[1:]], "says True", id="answer turned"
        ),
        pytest.param(counts(4, 2), JOURNAL, EVENTS[1:], "nobody sent", id="order of nobody"),
        pytest.param(
            counts(4, 2), JOURNAL, [replace(EVENTS[0], seats=2), *EVENTS[1:]], "another order", id="other order"
        ),
    ],
)
def test_a_bad_history_is_caught(
    after: dict[str, SeatCount], journal: list[Entry], events: list[Event], word: str
) -> None:
    assert any(word in fault for fault in faults(BEFORE, after, journal, events))
