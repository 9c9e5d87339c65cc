"""Readings cut into intervals, and what an interval says in which a class closed."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from legworth.estimation.closing import Closing, ClosingWays, SeenDemand, open_part
from legworth.estimation.history import BookingHistory
from legworth.estimation.increments import MOST_CELLS, Increments


def history_of(*series: list[tuple[float, float, float, bool]], departure: str = "2026-03-10") -> BookingHistory:
    """Series of readings (days, booked, cancelled, open) of one class on rising dates."""
    days, booked, cancelled, is_open = (
        np.array(column) for column in zip(*[r for s in series for r in s], strict=True)
    )
    n = len(series)
    return BookingHistory(
        itinerary=np.array(["R"], dtype=object),
        fare_classes=("A",),
        departure=np.datetime64(departure, "D") + np.arange(n),
        series_itinerary=np.zeros(n, dtype=np.int64),
        series_class=np.zeros(n, dtype=np.int64),
        start=np.append(0, np.cumsum([len(s) for s in series])),
        days_before=days.astype(float),
        booked=booked.astype(float),
        cancelled=cancelled.astype(float),
        open=is_open.astype(bool),
    )


FULL = [(30.0, 2.0, 0.0, True), (10.0, 5.0, 0.0, True), (0.0, 6.0, 0.0, True)]


def test_increments_are_gross_of_cancellations() -> None:
    cut = Increments.of(history_of([(30, 4, 0, True), (10, 3, 2, True), (0, 5, 2, True)]))
    assert cut.count.tolist() == [4, 1, 2]
    assert cut.days.tolist() == [30, 10, 0]
    assert cut.share.tolist() == [1, 1, 1]


def test_missing_readings_widen_the_interval() -> None:
    cut = Increments.of(history_of(FULL, [(10, 4, 0, True)], [(30, 1, 0, True), (0, 7, 0, True)]))
    assert cut.first.tolist() == [0, 1, 2, 0, 0, 1]
    assert cut.last.tolist() == [0, 1, 2, 1, 0, 2]
    assert cut.count.tolist() == [2, 3, 1, 4, 1, 6]
    assert cut.per_series(cut.count).tolist() == [6, 4, 7]


def test_only_what_is_known_on_the_day_is_read() -> None:
    history = history_of(FULL, FULL, [(30, 1, 0, True)])
    cut = Increments.of(history, np.datetime64("2026-02-28"))
    # The departures are 10, 11 and 12 days away; the first was read today.
    assert cut.series.tolist() == [0, 1, 2]
    assert cut.count.tolist() == [2, 3, 2, 1]
    assert len(Increments.of(history, np.datetime64("2026-01-01"))) == 0


def test_series_can_be_chosen_up_to_a_day() -> None:
    cut = Increments.of(history_of(FULL, [(10, 4, 0, True)], FULL), None, np.array([2, 1, 0]), np.array([30.0, 20, 0]))
    assert cut.series.tolist() == [0, 2]
    assert cut.count.tolist() == [2, 2, 3, 1]


def test_intervals_closed_in_part_follow_open_ones() -> None:
    readings = [(40, 1, 0, True), (30, 1, 0, False), (20, 1, 0, False), (15, 1, 0, False), (10, 2, 0, True)]
    cut = Increments.of(history_of([*readings, (5, 2, 0, False), (3, 2, 0, False), (0, 3, 0, False)]))
    assert cut.edge.tolist() == [False, True, False, False, False, True, False, False]
    assert np.isnan(cut.share).tolist() == [False, True, True, True, False, True, True, True]


def test_intervals_closed_in_part_begin_open_where_that_is_known() -> None:
    readings = [(40, 1, 0, True), (30, 1, 0, False), (20, 1, 0, False), (10, 2, 0, True), (5, 2, 0, False)]
    history = replace(history_of(readings), begins_open=np.array([True, True, False, False, True]))
    assert Increments.of(history).edge.tolist() == [False, True, False, False, True]
    both = history_of(readings, readings)
    twice = replace(both, begins_open=np.tile([True, True, False, True, False], 2))
    assert Increments.of(twice, series=np.array([1])).edge.tolist() == [False, True, False, False, False]
    assert Increments.of(twice, least_days=np.array([20.0, 20.0])).edge.tolist() == [False, True, False] * 2
    one_cell = Increments.of(replace(history, begins_open=np.ones(5, dtype=bool)), days=np.array([40.0, 5.0]))
    assert one_cell.edge.tolist() == [False, True]


def test_a_known_open_share_is_taken() -> None:
    history = history_of([(30, 1, 0, True), (10, 2, 0, False), (0, 2, 0, False)])
    cut = Increments.of(replace(history, open_share=np.array([np.nan, 0.25, np.nan])))
    assert cut.share[:2].tolist() == [1, 0.25]
    assert cut.edge.tolist() == [False, False, False]
    assert SeenDemand.of(cut, "shared", 1).part.tolist() == [1, 0.25, 0]


def test_more_reading_days_than_cells_are_moved_to_the_nearest() -> None:
    days = np.linspace(100, 0, 3 * MOST_CELLS)
    readings = [(day, float(at), 0.0, True) for at, day in enumerate(days)]
    cut = Increments.of(history_of(readings))
    assert cut.n_cells == MOST_CELLS
    assert cut.count.sum() == 3 * MOST_CELLS - 1
    assert np.all(np.diff(cut.last) > 0)
    assert np.array_equal(cut.first[1:], cut.last[:-1] + 1)


@given(
    st.lists(
        st.lists(st.tuples(st.sampled_from([60, 30, 21, 14, 7, 3, 1, 0]), st.integers(0, 4)), min_size=1, max_size=8),
        min_size=1,
        max_size=5,
    )
)
@settings(max_examples=40, deadline=None)
def test_no_passenger_is_lost_and_no_cell_is_left_out(drawn: list[list[tuple[int, int]]]) -> None:
    series = []
    for readings in drawn:
        steps = dict(sorted(readings, reverse=True))
        total = np.cumsum(list(steps.values())).tolist()
        series.append([(float(d), float(n), 0.0, True) for d, n in zip(steps, total, strict=True)])
    cut = Increments.of(history_of(*series))
    assert cut.per_series(cut.count).tolist() == [readings[-1][1] for readings in series]
    width = cut.per_series((cut.last - cut.first + 1).astype(float))
    last = cut.last[cut.start[1:] - 1]
    assert np.array_equal(width, last + 1)
    again = cut.take(np.arange(len(series)))
    assert np.array_equal(again.count, cut.count)


def test_the_open_part_lies_between_nothing_and_all_and_grows_with_bookings() -> None:
    mean = np.array([1e-9, 0.01, 0.5, 3.0, 40.0])
    parts = np.stack([open_part(np.full(5, float(n)), mean) for n in range(6)])
    assert np.all((parts > 0) & (parts <= 1))
    assert np.all(np.diff(parts, axis=0) > -1e-12)
    assert np.all(np.diff(parts, axis=1) < 1e-6)
    assert parts[0, 0] == pytest.approx(0.5, abs=1e-6)


def test_ways_of_reading_a_closed_interval() -> None:
    readings = [(30, 2, 0, True), (20, 3, 0, False), (10, 4, 0, False), (0, 4, 0, False)]
    cut = Increments.of(history_of(readings))
    ways: tuple[Closing, ...] = ("shared", "limit", "discard", "ignore")
    told = {way: SeenDemand.of(cut, way, 1) for way in ways}
    assert told["ignore"].part.tolist() == [1, 1, 1, 1]
    assert told["ignore"].count.tolist() == [2, 1, 1, 0]
    assert told["discard"].part.tolist() == [1, 0, 0, 0]
    assert told["discard"].count.tolist() == [2, 0, 0, 0]
    assert told["limit"].part.tolist() == [1, 1, 1, 0]
    filled = told["limit"].expecting(cut, np.array([2.0, 1.0]), np.array([0, 0]))
    # E[N | N >= 1] of Poisson counts of means 2 and 1.
    assert filled.count[1:3] == pytest.approx([2 / (1 - np.exp(-2)), 1 / (1 - np.exp(-1))])
    # What came in the midst of a closed stretch says nothing.
    assert told["shared"].count.tolist() == [2, 1, 0, 0]
    seen = replace(told["shared"], learning=False, ways=ClosingWays(np.array([0.5]), np.zeros(1)))
    part = seen.expecting(cut, np.array([2.0]), np.array([0])).part
    assert part == pytest.approx([1, open_part(np.array([1.0]), np.array([2.0]))[0], 0, 0])
    seen = replace(seen, ways=ClosingWays(np.array([0.5]), np.array([1e12])))
    part = seen.expecting(cut, np.array([2.0]), np.array([0])).part
    assert part[1] == pytest.approx(open_part(np.array([1.0]), np.array([2.0]), own=True)[0])


@pytest.mark.parametrize("truth", [0.0, 0.3, 1.0])
def test_how_often_classes_are_open_in_part_is_learned(truth: float) -> None:
    """Closed by others at any instant alike, or from the beginning of the interval."""
    rng = np.random.default_rng(2)
    size = 20_000
    mean = 1.5 * rng.lognormal(0, 0.8, size)
    instant = np.where(rng.random(size) < truth, rng.random(size), 0.0)
    part, ways = _learned(rng.poisson(mean * instant), mean)
    assert ways.partly[0] == pytest.approx(truth, abs=0.08)
    assert part.mean() == pytest.approx(instant.mean(), abs=0.02)


@pytest.mark.parametrize("mean", [0.3, 1.5, 4.0])
@pytest.mark.parametrize("ratio", [0.0, 0.5, 3.0])
def test_how_often_own_bookings_close_a_class_is_learned(mean: float, ratio: float) -> None:
    """Others close it at a steady pace, each own booking with a steady chance; open parts are right on average."""
    rng = np.random.default_rng(3)
    size, pace = 80_000, 0.1
    chance = pace * ratio
    by_others = rng.exponential(1 / pace, size)
    means = mean * rng.lognormal(0, 0.8, size)  # products of a class differ, which tells the two apart
    at = np.cumsum(rng.exponential(1 / means[:, None], (size, 25)), axis=1)
    closes = rng.random((size, 25)) < chance
    by_own = np.where(closes.any(axis=1), at[np.arange(size), np.argmax(closes, axis=1)], np.inf)
    instant = np.minimum(by_others, by_own)
    within = instant < 1
    came = (at <= instant[:, None]).sum(axis=1)[within]
    part, ways = _learned(came, means[within])
    assert part.mean() == pytest.approx(instant[within].mean(), abs=0.04)
    # Passengers over the mean while open give back the mean.
    assert came.sum() / part.sum() == pytest.approx(came.sum() / instant[within].sum(), rel=0.1)
    assert (ways.own[0] > 0.2) == (ratio > 0)


def _learned(came: np.ndarray, mean: np.ndarray) -> tuple[np.ndarray, ClosingWays]:
    count, group = came.astype(float), np.zeros(len(came), dtype=int)
    ways = ClosingWays.begin(1)
    for _ in range(30):
        part, ways = ways.parts(count, mean, group, learn=True)
    return part, ways
