"""Cancellations, no-shows and overselling: by hand on single seats, by closed forms, and against a plain loop."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from legworth.simulation import SimulationOptions, simulate
from legworth.simulation.attendance import Attendance, rates_by_class
from legworth.simulation.measures import Book, Tally, tally
from legworth.simulation.methods import METHODS
from legworth.simulation.play import Bookings, play
from legworth.simulation.requests import RequestPaths, draw_requests
from legworth.simulation.rules import SeatRule, Situation
from network import Network, SettingError
from tests.legworth.simulation.cases import hub_in_time, leg_in_time

FARE = 100.0


def single(seats: int, authorised: int, events: list[tuple[float, float, bool]], cost: float = 0.0) -> Tally:
    """First come, first served on one leg: events are instants of request and cancellation, and absence."""
    network = leg_in_time(seats, [(FARE, 3.0, 3.0)], 30.0)
    at, cancels_at = np.array([event[0] for event in events]), np.array([event[1] for event in events])
    nobody = np.zeros(len(events), dtype=np.int64)
    requests = RequestPaths.of(nobody, at, nobody, 1, 1, cancels_at, np.array([event[2] for event in events]))
    situation = Situation.of(network, np.array([authorised]))
    bookings = Bookings.none(situation, requests)
    play(requests, METHODS["first-come"].prepare(network, situation), situation, bookings)
    return tally(requests, bookings.accepted, situation, Book.of(network, 30.0, cost))


def test_a_cancelled_seat_returns_to_sale() -> None:
    never = np.inf
    full = single(1, 1, [(1.0, never, False), (3.0, never, False)])
    assert (full.revenue[0], full.refused[0], full.cancelled[0]) == (FARE, 1, 0)
    free = single(1, 1, [(1.0, 2.0, False), (3.0, never, False)])
    assert (free.revenue[0], free.refused[0], free.cancelled[0], free.occupied[0]) == (FARE, 0, 1, 1)
    late = single(1, 1, [(1.0, 4.0, False), (3.0, never, False)])
    assert (late.revenue[0], late.refused[0], late.cancelled[0], late.occupied[0], late.spoiled[0]) == (0, 1, 1, 0, 1)


def test_a_request_that_was_refused_gives_no_seat_back() -> None:
    found = single(1, 1, [(1.0, np.inf, False), (2.0, 3.0, False), (4.0, np.inf, False)])
    assert (found.revenue[0], found.refused[0], found.cancelled[0]) == (FARE, 2, 0)


def test_who_stays_away_pays_and_leaves_the_seat_empty() -> None:
    found = single(2, 2, [(1.0, np.inf, True), (2.0, np.inf, False), (3.0, np.inf, False)])
    assert (found.revenue[0], found.passengers[0], found.occupied[0], found.spoiled[0]) == (2 * FARE, 2, 1, 1)


def test_denied_boarding_costs() -> None:
    found = single(1, 3, [(1.0, np.inf, False), (2.0, np.inf, False), (3.0, np.inf, True)], cost=250.0)
    assert (found.denied[0], found.occupied[0], found.revenue[0]) == (1, 1, 3 * FARE - 250.0)


def test_denied_boardings_follow_the_binomial_law() -> None:
    # A leg sold out to b bookings of which each turns up with chance p: E[max(B(b, p) - c, 0)], by scipy.
    seats, authorised, stays = 20, 23, 0.88
    network = leg_in_time(seats, [(FARE, 60.0, 60.0**0.5)], 30.0)
    attendance = Attendance(absent=(("*", 1 - stays),), authorised=1.15, denied_cost=300.0)
    assert attendance.seats(network).tolist() == [authorised]
    found = simulate(network, SimulationOptions(4000, 3, ("first-come",), attendance=attendance))
    figures = found.tallies["first-come"]
    turned_up = np.arange(seats + 1, authorised + 1)
    expected = float(((turned_up - seats) * stats.binom(authorised, stays).pmf(turned_up)).sum())
    assert abs(figures.denied.mean() - expected) <= 4 * figures.denied.std() / 4000**0.5
    np.testing.assert_allclose(figures.revenue, FARE * authorised - 300.0 * figures.denied)


@pytest.mark.parametrize("rate", [0.15, 0.6])
def test_rates_are_kept_where_seats_abound(rate: float) -> None:
    network = leg_in_time(500, [(FARE, 30.0, 30.0**0.5), (60.0, 30.0, 30.0**0.5)], 30.0)
    attendance = Attendance(cancelled=(("class 0", rate),), absent=(("class 1", rate),))
    requests = draw_requests(network, np.arange(500), 8, attendance=attendance)
    plain = draw_requests(network, np.arange(500), 8)
    np.testing.assert_array_equal(requests.demand, plain.demand)
    assert requests.cancelled is not None
    assert requests.absent is not None
    for flag, product in ((requests.cancelled, 0), (requests.absent, 1)):
        asked, held = int(plain.demand[:, product].sum()), int(flag.sum())
        assert np.all(requests.product[flag] == product)
        assert stats.binomtest(held, asked, rate).pvalue > 1e-3


def test_cancellations_come_evenly_between_request_and_departure() -> None:
    network = leg_in_time(500, [(FARE, 20.0, 20.0**0.5)], 30.0)
    requests = draw_requests(network, np.arange(300), 8, attendance=Attendance(cancelled=(("*", 0.5),)))
    assert requests.returns is not None
    row, path = np.nonzero(requests.returns >= 0)
    booked = requests.at[requests.returns[row, path], path]
    part = (requests.at[row, path] - booked) / (30.0 - booked)
    assert stats.kstest(part, "uniform").pvalue > 1e-3


@pytest.mark.parametrize("name", ["first-come", "leg", "curves"])
def test_the_loop_with_cancellations_answers_as_a_plain_one(name: str) -> None:
    # Some paths are longer than what the loop prepares together.
    network = hub_in_time(2, spokes=4, seats=60)
    attendance = Attendance(cancelled=(("*", 0.3),), authorised=1.1)
    seats = attendance.seats(network)
    assert np.any(seats > network.remaining)
    requests = draw_requests(network, np.arange(4), 6, attendance=attendance)
    assert requests.returns is not None
    assert len(requests.product) > 256
    situation = Situation.of(network, seats)
    rule = METHODS[name].prepare(network.with_remaining(seats), situation)
    bookings = Bookings.none(situation, requests)
    play(requests, rule, situation, bookings)
    for path in range(4):
        left, answers = seats.copy(), np.zeros(len(requests.product), dtype=bool)
        for n, product in enumerate(requests.product[:, path]):
            back = int(requests.returns[n, path])
            asked = int(requests.product[back, path]) if back >= 0 else int(product)
            legs = situation.legs[asked]
            legs = legs[legs < network.n_legs]
            if back >= 0:
                left[legs] += answers[back]
            elif product < network.n_products and np.all(left[legs] > 0):
                answers[n] = _accepts(rule, situation, asked, float(requests.at[n, path]), left, legs)
                left[legs] -= answers[n]
        np.testing.assert_array_equal(bookings.accepted[:, path], answers)
        np.testing.assert_array_equal(bookings.legs[path], left)


def _accepts(rule: object, situation: Situation, product: int, at: float, left: np.ndarray, legs: np.ndarray) -> bool:
    if isinstance(rule, SeatRule):
        return bool(np.all(left[legs] >= rule.need[0, product, : len(legs)]))
    table = rule.table
    asked = sum(table.price(int(k), left[k : k + 1], float(situation.days_now[k]) - at)[0] for k in legs)
    return bool(situation.fare[product] * (1 + 1e-9) >= asked)


@pytest.mark.parametrize("cost", [0.0, 80.0, 5000.0])
def test_no_control_beats_hindsight_when_some_stay_away(cost: float) -> None:
    network = hub_in_time(3)
    attendance = Attendance((("*", 0.1),), (("*", 0.15), ("class 0", 0.3)), 1.2, cost)
    options = SimulationOptions(
        20, 2, ("first-come", "leg", "deterministic", "curves", "curves+"), 4, 3, attendance=attendance
    )
    found = simulate(network, options)
    for figures in found.tallies.values():
        assert np.all(figures.revenue <= found.hindsight[: len(figures.revenue)] * (1 + 1e-9))
        assert np.all(figures.occupied <= network.remaining.sum())
    assert [bound.name for bound in found.bounds if bound.holds] == ["hindsight"]
    assert found.tallies["first-come"].denied.sum() > 0
    same = simulate(network, replace(options, jobs=2))
    np.testing.assert_array_equal(same.tallies["curves+"].revenue, found.tallies["curves+"].revenue)


def test_nobody_cancelling_changes_nothing() -> None:
    network: Network = hub_in_time(3)
    options = SimulationOptions(10, 2, ("leg", "curves"), 0)
    plain, with_rates = simulate(network, options), simulate(network, replace(options, attendance=Attendance()))
    for name, figures in plain.tallies.items():
        np.testing.assert_array_equal(with_rates.tallies[name].revenue, figures.revenue)
    np.testing.assert_allclose(with_rates.hindsight, plain.hindsight, rtol=1e-12)


@pytest.mark.parametrize("text", ["x", "A=", "A=0.1,=", "A=b"])
def test_rates_not_understood(text: str) -> None:
    with pytest.raises(SettingError, match="not understood"):
        rates_by_class(text)


def test_limits() -> None:
    for wrong in ({"cancelled": (("*", 1.5),)}, {"authorised": 0.9}, {"denied_cost": -1.0}):
        with pytest.raises(SettingError):
            replace(Attendance(), **wrong)
    with pytest.raises(SettingError, match="no fare class 'Z'"):
        Attendance(cancelled=(("Z", 0.1),)).rates(hub_in_time(3))
