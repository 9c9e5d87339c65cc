"""The search in sorted runs against numpy's own search, run by run; the greatest seat against the answer known."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from network.arrays import FloatArray, IntArray
from network.runs import SortedRuns, greatest_seats
from tests.networks import examples


@dataclass(frozen=True)
class Search:
    """Runs, thresholds, the run of each threshold, and any allowed answer for each to begin at."""

    runs: SortedRuns
    threshold: FloatArray
    run: IntArray
    near: IntArray


@st.composite
def searches(draw: st.DrawFn) -> Search:
    """Draw runs of figures on a coarse grid, so that ties abound; some runs are empty."""
    figure = st.integers(-3, 12).map(lambda n: n / 2)
    runs = draw(st.lists(st.lists(figure, max_size=9), min_size=1, max_size=5))
    value = [figure for run in runs for figure in sorted(run, reverse=True)]
    start = np.concatenate([[0], np.cumsum([len(run) for run in runs])])
    asked = draw(st.lists(st.tuples(st.integers(0, len(runs) - 1), figure, st.floats(0, 1)), max_size=20))
    run = np.array([r for r, _, _ in asked], dtype=np.int64)
    part = np.array([part for _, _, part in asked])
    near = start[run] + np.floor(part * np.diff(start)[run]).astype(np.int64)
    threshold = np.array([figure for _, figure, _ in asked])
    return Search(SortedRuns(np.array(value, dtype=np.float64), start), threshold, run, near)


def expected(search: Search) -> list[int]:
    """Where ``numpy.searchsorted`` puts each threshold among the rising negatives of its run."""
    found = []
    for threshold, r in zip(search.threshold, search.run, strict=True):
        begin, end = search.runs.start[r], search.runs.start[r + 1]
        found.append(int(begin + np.searchsorted(-search.runs.value[begin:end], -threshold, side="left")))
    return found


@given(search=searches())
@examples(200)
def test_search_of_any_thresholds(search: Search) -> None:
    assert search.runs.count_above(search.threshold, search.run).tolist() == expected(search)


@given(search=searches())
@examples(200)
def test_a_near_answer_changes_nothing(search: Search) -> None:
    kept = search.near.copy()
    assert search.runs.count_above(search.threshold, search.run, search.near).tolist() == expected(search)
    np.testing.assert_array_equal(search.near, kept)


@given(search=searches(), data=st.data())
@examples(50)
def test_one_threshold_a_run(search: Search, data: st.DataObject) -> None:
    n_runs = len(search.runs.start) - 1
    figures = st.lists(st.integers(-3, 12).map(lambda n: n / 2), min_size=n_runs, max_size=n_runs)
    threshold = np.array(data.draw(figures))
    all_runs = np.arange(n_runs)
    wanted = expected(Search(search.runs, threshold, all_runs, all_runs))
    assert search.runs.count_above(threshold).tolist() == wanted
    assert search.runs.count_above(threshold, near=search.runs.start[:-1]).tolist() == wanted


def test_far_answers_are_found_from_either_end_of_a_long_run() -> None:
    value = np.arange(1000.0)[::-1]
    runs = SortedRuns(np.concatenate([value, value + 0.5]), np.array([0, 1000, 2000]))
    threshold, run = np.array([500.0, 500.0, 0.0, 998.7]), np.array([0, 1, 0, 1])
    # By hand: 499 figures lie above 500; 500 of those with a half; 999 above 0; 1 above 998.7.
    for near in ([0, 1000, 0, 1000], [1000, 2000, 1000, 2000]):
        assert runs.count_above(threshold, run, np.array(near)).tolist() == [499, 1500, 999, 1001]


@given(cases=st.lists(st.tuples(st.integers(0, 300), st.floats(-50, 700)), max_size=20))
@examples(200)
def test_the_greatest_seat_is_found_from_anywhere(cases: list[tuple[int, float]]) -> None:
    answer = np.array([seats for seats, _ in cases], dtype=np.float64)
    looks: list[FloatArray] = []

    def holds(seats: FloatArray, at: IntArray) -> np.ndarray:
        looks.append(seats)
        return seats <= answer[at]

    found = greatest_seats(np.array([start for _, start in cases]), holds)
    assert found.tolist() == answer.tolist()
    assert all(np.all((seats >= 1) & (seats == np.floor(seats))) for seats in looks)


def test_two_looks_do_where_the_start_is_right() -> None:
    looks = 0

    def holds(seats: FloatArray, at: IntArray) -> np.ndarray:
        nonlocal looks
        looks += seats.size
        return seats <= 7

    assert greatest_seats(np.full(5, 7.4), holds).tolist() == [7.0] * 5
    assert looks == 10
