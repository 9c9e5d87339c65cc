"""Days of operation against counting day by day."""

from __future__ import annotations

from datetime import date, timedelta

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from legworth.schedules import Window
from legworth.schedules.operating_days import operating_days
from network import SettingError

EPOCH = date(1970, 1, 1)
DATES = st.dates(date(2026, 12, 1), date(2027, 6, 30))
PERIODS = st.tuples(DATES, DATES, st.integers(0, 127), st.sampled_from([1, 2]))


def number(day: date) -> int:
    return (day - EPOCH).days


@given(st.lists(PERIODS, max_size=8), DATES, st.integers(0, 120))
def test_dates_are_those_of_counting(periods: list[tuple[date, date, int, int]], start: date, length: int) -> None:
    window = Window(start, start + timedelta(days=length))
    first, last, weekdays, weeks = (
        np.array([number(value) if isinstance(value, date) else value for value in column], dtype=np.int64)
        for column in (zip(*periods, strict=True) if periods else [[]] * 4)
    )
    record, day = operating_days(first, last, weekdays, weeks, window)
    expected = [
        (row, number(on))
        for row, (begin, end, bits, every) in enumerate(periods)
        for on in (window.first + timedelta(days=n) for n in range(length + 1))
        if begin <= on <= end and bits >> on.weekday() & 1 and (on - begin).days // 7 % every == 0
    ]
    assert list(zip(record.tolist(), day.tolist(), strict=True)) == expected


@pytest.mark.parametrize(
    ("first", "last", "word"),
    [
        (date(2027, 3, 2), date(2027, 3, 1), "turn them round"),
        (date(1950, 1, 1), date(1950, 1, 2), "dates must lie"),
        (date(2180, 1, 1), date(2195, 1, 2), "dates must lie"),
        (date(2027, 1, 1), date(2047, 1, 1), "ten years"),
    ],
)
def test_windows_that_cannot_be(first: date, last: date, word: str) -> None:
    with pytest.raises(SettingError, match=word):
        Window(first, last)


def test_too_many_legs_are_refused() -> None:
    rows = 300_000
    every = np.full(rows, 127)
    with pytest.raises(SettingError, match=r"19,200,000 legs.*bring --from and --to together"):
        operating_days(
            np.zeros(rows), np.full(rows, 10**6), every, np.ones(rows), Window(date(2027, 1, 1), date(2027, 3, 5))
        )
