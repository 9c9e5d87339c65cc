"""Gains of seats whose values move: every place found by following is that of a search from scratch."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from heuristics.requests import FarePlaces, Requests
from network.arrays import FloatArray, IntArray
from network.runs import SortedRuns
from tests.networks import examples


@st.composite
def moves(draw: st.DrawFn) -> tuple[SortedRuns, FloatArray, IntArray, list[FloatArray]]:
    """Draw fares of some legs on a coarse grid, requests, seats, and values that move; some legs sell nothing."""
    fare = st.integers(-4, 40).map(lambda quarters: quarters / 4)
    runs = draw(st.lists(st.lists(fare, max_size=14), min_size=1, max_size=4))
    fares = SortedRuns(
        np.array([figure for run in runs for figure in sorted(run, reverse=True)], dtype=np.float64),
        np.concatenate([[0], np.cumsum([len(run) for run in runs])]),
    )
    expected = np.array(draw(st.lists(st.floats(0, 3), min_size=len(fares.value), max_size=len(fares.value))))
    leg = np.array(draw(st.lists(st.integers(0, len(runs) - 1), min_size=1, max_size=8)))
    value = st.integers(0, 44).map(lambda quarters: quarters / 4)
    steps = draw(st.lists(st.lists(value, min_size=len(leg), max_size=len(leg)), min_size=1, max_size=6))
    return fares, expected.astype(np.float64), leg, [np.array(step) for step in steps]


def by_sums(fares: SortedRuns, expected: FloatArray, leg: IntArray, value: FloatArray) -> FloatArray:
    """Phi(z) as its definition says, seat by seat."""
    gains = []
    for of, z in zip(leg, value, strict=True):
        rows = slice(fares.start[of], fares.start[of + 1])
        gains.append(np.sum(expected[rows] * np.maximum(fares.value[rows] - z, 0.0)))
    return np.array(gains)


@given(drawn=moves())
@examples(150)
def test_gains_are_those_of_the_definition(drawn: tuple[SortedRuns, FloatArray, IntArray, list[FloatArray]]) -> None:
    fares, expected, leg, steps = drawn
    places = FarePlaces(fares, leg)
    for requests in (Requests(places, expected), Requests(FarePlaces(fares, leg), expected)):
        for value in steps:
            gain, above = requests.gain(value)
            np.testing.assert_allclose(gain, by_sums(fares, expected, leg, value), atol=1e-12)
            open_fares = fares.value[None] > value[:, None]
            own = np.repeat(np.arange(len(fares.start) - 1), np.diff(fares.start))[None] == leg[:, None]
            np.testing.assert_allclose(above, (open_fares & own) @ expected, atol=1e-12)


@given(drawn=moves())
@examples(150)
def test_places_serve_one_stretch_of_time_after_the_other(
    drawn: tuple[SortedRuns, FloatArray, IntArray, list[FloatArray]],
) -> None:
    fares, expected, leg, steps = drawn
    places = FarePlaces(fares, leg)
    for value in steps:
        carried, fresh = Requests(places, expected), Requests(FarePlaces(fares, leg), expected)
        for found, wanted in zip(carried.gain(value), fresh.gain(value), strict=True):
            assert found.tolist() == wanted.tolist()
        expected = expected[::-1].copy()
