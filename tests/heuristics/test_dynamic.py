"""Leg programs against closed forms, scipy's integrator, plain recursion and the optimal nested levels."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from scipy.integrate import solve_ivp

from heuristics import dynamic, leg_products, optimal_levels
from heuristics.arrivals import PUBLISHED_DAYS, ArrivalPlan
from heuristics.dynamic import PriceCurves, price_curves, run_periods
from network import Demand, Network
from network.arrays import FloatArray
from network.runs import SortedRuns
from tests.networks import Plan, Product, examples, hub_plan, one_leg
from tests.oracle import Readings, departing, leg_trail, rows_of

LATE: Readings = {30.0: 0.02, 14.0: 0.15, 7.0: 0.40, 3.0: 0.65, 0.0: 1.0}
MIDDLE: Readings = {30.0: 0.10, 14.0: 0.45, 7.0: 0.70, 3.0: 0.85, 0.0: 1.0}
EARLY: Readings = {30.0: 0.30, 14.0: 0.80, 7.0: 0.93, 3.0: 0.98, 0.0: 1.0}


def poisson(*rows: tuple[float, float]) -> list[Product]:
    """Fares and means."""
    return [(fare, mean, mean**0.5) for fare, mean in rows]


@dataclass(frozen=True)
class Leg:
    """One leg: seats, fares and means, days to go, and the curve of each class, -1 for none."""

    seats: int
    rows: tuple[tuple[float, float], ...]
    days: float
    curve: tuple[int, ...]

    def plan(self, days: tuple[float, ...] = PUBLISHED_DAYS) -> ArrivalPlan:
        network = one_leg(self.seats, poisson(*self.rows), "poisson").network()
        return plan_of(departing(network, self.days, self.curve, [LATE, MIDDLE, EARLY]), days)

    def curves(self, step: float = 0.5) -> PriceCurves:
        return price_curves(self.plan(), np.array([self.seats]), step)


FEW = Leg(20, ((100.0, 8.0), (60.0, 8.0), (30.0, 12.0)), 40.0, (0, 1, 2))
MANY = Leg(60, ((100.0, 18.0), (60.0, 20.0), (45.0, 15.0), (30.0, 32.0)), 40.5, (0, 1, 1, 2))
BIG = Leg(150, ((400.0, 18.0), (300.0, 20.0), (200.0, 45.0), (150.0, 52.0), (100.0, 70.0)), 60.0, (0, 1, 1, 2, 2))
EVEN = Leg(10, ((100.0, 9.0), (40.0, 11.0)), 21.0, (-1, -1))
MIXED = Leg(12, ((100.0, 9.0), (70.0, 4.0), (40.0, 11.0)), 25.0, (-1, 0, 2))
LEGS = (FEW, MANY, BIG, EVEN, MIXED)


def plan_of(network: Network, days: tuple[float, ...] = PUBLISHED_DAYS) -> ArrivalPlan:
    return ArrivalPlan.of(network, leg_products(network, np.zeros(network.n_legs)), days)


def seat_values(value: FloatArray) -> FloatArray:
    """(c,) values of seats 1..c from (c + 1,) values of a leg, along the last axis."""
    return np.diff(value, axis=-1)


def integrated(plan: ArrivalPlan, seats: int, share: FloatArray | None = None) -> tuple[dict[float, FloatArray], float]:
    """Solve ``dV(x)/dt = sum_j lambda_j max(0, r_j - V(x) + V(x - 1))`` of the first leg by scipy's DOP853.

    Returns (c,) seat values by days, up to those of the snapshot, and the value of all seats at the snapshot.
    """
    rows = slice(plan.fares.start[0], plan.fares.start[1])
    value, found = np.zeros(seats + 1), {}
    for k, segment in enumerate(plan.segments()):
        found[segment.days] = seat_values(value)
        fare = plan.fares.value[rows] if share is None else share[k][rows]
        requests = segment.requests[rows]

        def slope(_: float, v: FloatArray, fare: FloatArray = fare, requests: FloatArray = requests) -> FloatArray:
            return np.append(0.0, requests @ np.maximum(fare[:, None] - np.diff(v), 0.0))

        value = solve_ivp(slope, (0.0, 1.0), value, method="DOP853", rtol=1e-9, atol=1e-9).y[:, -1]
    found[float(plan.days_now[0])] = seat_values(value)
    return found, float(value[-1])


@pytest.mark.parametrize("leg", LEGS)
def test_values_at_every_time_are_those_of_an_integrator(leg: Leg) -> None:
    wanted, total = integrated(leg.plan(), leg.seats)
    found = leg.curves()
    dearest = leg.rows[0][0]
    assert found.total[0] == pytest.approx(total, rel=2e-4)
    np.testing.assert_allclose(found.now, wanted[leg.days], atol=1e-3 * dearest)
    for day, value in zip(found.days, found.value, strict=True):
        assert value.sum() == pytest.approx(wanted[day].sum(), rel=1e-3)
        np.testing.assert_allclose(value, wanted[day], atol=5e-3 * dearest)


@pytest.mark.parametrize("leg", LEGS)
def test_a_quarter_of_the_step_leaves_about_a_sixteenth_of_the_error(leg: Leg) -> None:
    wanted, _ = integrated(leg.plan(), leg.seats)
    coarse, fine = (np.abs(leg.curves(step).now - wanted[leg.days]).max() for step in (0.5, 0.125))
    assert 8 < coarse / fine < 32


@pytest.mark.parametrize(("seats", "mean"), [(10, 6.0), (20, 20.0), (12, 30.0), (60, 50.0)])
def test_one_class_is_worth_its_fare_times_the_chance_that_demand_reaches_the_seat(seats: int, mean: float) -> None:
    # Closed form: whoever comes is accepted, so V(x) = f E[min(D, x)] and seat x is worth f P(D >= x), D Poisson
    # with the demand still to come.
    leg = Leg(seats, ((100.0, mean),), 30.0, (0,))
    found = leg.curves()
    seat, upto = np.arange(1, seats + 1), np.arange(seats)
    # Seats are worth the fare times sums of survivor functions: E[min(D, c)] = sum over x <= c of P(D >= x).
    assert found.total[0] == pytest.approx(100.0 * stats.poisson.sf(upto, mean).sum(), rel=2e-4)
    for day, value in zip(found.days, found.value, strict=True):
        come = np.interp(day, list(LATE)[::-1], list(LATE.values())[::-1])
        to_come = mean * (1.0 - come) / 0.98
        np.testing.assert_allclose(value, 100.0 * stats.poisson.sf(seat - 1, to_come), atol=0.5)
        assert value.sum() == pytest.approx(100.0 * stats.poisson.sf(upto, to_come).sum(), rel=1e-3, abs=1e-9)


def test_low_before_high_gives_the_optimal_nested_levels() -> None:
    # Each class comes entirely before the next better one. Then the value of seat x when class j + 1 begins is the
    # marginal value of x seats to classes 1..j of Brumelle and McGill (1993).
    fare, mean, seats = [100.0, 60.0, 40.0, 35.0, 15.0], np.array([15.0, 40.0, 50.0, 55.0, 120.0]), 300
    changes = [10.0, 20.0, 30.0, 40.0]
    curves: list[Readings] = [{10.0: 0.0, 0.0: 1.0}]
    curves += [{day + 10.0: 0.0, day: 1.0, 0.0: 1.0} for day in changes]
    rows = poisson(*zip(fare, mean.tolist(), strict=True))
    network = departing(one_leg(seats, rows, "poisson").network(), 50.0, range(5), curves)
    plan = plan_of(network, (0.0, *changes))
    found, fine = (price_curves(plan, network.remaining, step) for step in (0.5, 0.1))
    best = optimal_levels(fare, Demand.of(mean, np.sqrt(mean)), seats)
    for j, (value, nearer) in enumerate(zip(found.value[1:], fine.value[1:], strict=True), start=1):
        upper = optimal_levels(fare[:j], Demand.of(mean[:j], np.sqrt(mean[:j])), seats)
        np.testing.assert_allclose(value, np.diff(upper.value), atol=0.5)
        np.testing.assert_allclose(nearer, np.diff(upper.value), atol=0.03)
        assert np.count_nonzero(value > fare[j]) == best.levels[j - 1]
    assert found.total[0] == pytest.approx(best.value[-1], rel=1e-4)
    # Read on recomputation of Gallego (2013), lecture notes on single-resource revenue management (from memory).
    assert best.levels.tolist() == [14.0, 54.0, 101.0, 169.0]


def legs() -> st.SearchStrategy[Leg]:
    """Draw legs; some have no seats, no demand or no worth."""
    row = st.tuples(st.integers(0, 20).map(lambda n: 10.0 * n), st.integers(0, 12).map(lambda n: n / 2))
    rows = st.lists(st.tuples(row, st.integers(-1, 2)), min_size=1, max_size=5)

    def build(seats: int, rows: list[tuple[tuple[float, float], int]], days: float) -> Leg:
        return Leg(seats, tuple(r for r, _ in rows), days, tuple(c for _, c in rows))

    return st.builds(build, st.integers(0, 15), rows, st.integers(0, 120).map(lambda n: n / 3))


@given(leg=legs())
@examples(60)
def test_values_fall_with_seats_and_rise_with_time_to_go(leg: Leg) -> None:
    found = leg.curves()
    near = 1e-9 * max(fare for fare, _ in leg.rows)
    times = [*found.value[found.days < leg.days], found.now]
    for value in times:
        assert np.all(np.diff(value) <= near)
        assert np.all(value >= 0.0)
    for late, early in pairwise(times):
        assert np.all(early >= late - near)
    np.testing.assert_array_equal(found.value[0], np.zeros(leg.seats))
    assert found.total[0] == pytest.approx(found.now.sum(), rel=1e-9)
    # More than every fare asked for, or the best fare on every seat, cannot be earned.
    assert found.total[0] <= sum(fare * mean for fare, mean in leg.rows) * (1 + 1e-3) + near
    assert np.all(found.now <= max(fare for fare, _ in leg.rows) + near)


def test_legs_without_seats_or_demand_are_worth_nothing_and_change_nothing() -> None:
    rows = (tuple(poisson((100.0, 9.0), (40.0, 11.0))), tuple(poisson((90.0, 30.0))), ())
    network = departing(Plan((10, 0, 4), ((0,), (1,), (2,)), rows, "poisson").network(), 21.0, -1, [])
    found = price_curves(plan_of(network), network.remaining)
    assert found.seat_start.tolist() == [0, 10, 10, 14]
    assert found.total[1:].tolist() == [0.0, 0.0]
    np.testing.assert_array_equal(found.now[10:], 0.0)
    np.testing.assert_array_equal(found.now[:10], EVEN.curves().now)


def test_no_legs() -> None:
    network = Plan((), (), ()).network()
    found = price_curves(plan_of(network), network.remaining)
    assert found.now.shape == (0,)
    assert found.total.shape == (0,)


def test_nothing_is_published_before_the_snapshot() -> None:
    rows = (tuple(poisson((100.0, 9.0))), tuple(poisson((90.0, 30.0))))
    network = departing(Plan((3, 2), ((0,), (1,)), rows, "poisson").network(), [2.0, 5.5], -1, [])
    found = price_curves(plan_of(network, (0, 1, 2, 3, 4, 5, 6)), network.remaining)
    assert found.days.tolist() == [0, 1, 2, 3, 4, 5]
    known = ~np.isnan(found.value)
    np.testing.assert_array_equal(known[:, :3], np.broadcast_to((found.days <= 2)[:, None], (6, 3)))
    assert known[:, 3:].all()
    np.testing.assert_array_equal(found.value[2, :3], found.now[:3])
    assert np.all(found.now[3:] > found.value[5, 3:])


def test_legs_in_one_plan_are_solved_as_if_alone(monkeypatch: pytest.MonkeyPatch) -> None:
    network = departing(hub_plan(3).network(), np.linspace(3.0, 30.0, 10), -1, [])
    plan = plan_of(network, (0.0, 7.0))
    together = price_curves(plan, network.remaining)
    monkeypatch.setattr(dynamic, "SEATS_TOGETHER", 1)
    apart = price_curves(plan, network.remaining)
    for leg in range(network.n_legs):
        rows, seats = rows_of(leg_products(network, np.zeros(10)), leg), slice(*apart.seat_start[leg : leg + 2])
        fares = SortedRuns(plan.fares.value[rows], np.array([0, rows.stop - rows.start]))
        own = ArrivalPlan(fares, plan.mean[rows], plan.curve[rows], plan.curves, plan.days_now[[leg]], plan.days)
        alone = price_curves(own, network.remaining[[leg]])
        assert apart.total[leg] == pytest.approx(alone.total[0], rel=1e-9)
        np.testing.assert_allclose(apart.now[seats], alone.now, rtol=1e-9, atol=1e-9)
        np.testing.assert_allclose(apart.value[:, seats], alone.value, rtol=1e-9, atol=1e-9)
    # Only the steps differ.
    np.testing.assert_allclose(together.total, apart.total, rtol=1e-3)
    assert np.array_equal(np.isnan(together.value), np.isnan(apart.value))


def test_fares_may_change_from_segment_to_segment() -> None:
    plan = MANY.plan((0.0, 5.0))
    count = len(list(plan.segments()))
    same = np.broadcast_to(plan.fares.value, (count, len(plan.mean)))
    one, other = (price_curves(plan, np.array([60]), share=share) for share in (None, same))
    np.testing.assert_allclose(other.now, one.now, rtol=1e-12)
    changing = same * np.random.default_rng(5).uniform(-0.2, 1.5, same.shape)
    found = price_curves(plan, np.array([60]), share=changing)
    wanted, total = integrated(plan, 60, changing)
    assert found.total[0] == pytest.approx(total, rel=1e-3)
    np.testing.assert_allclose(found.value[1], wanted[5.0], atol=0.3)
    np.testing.assert_allclose(found.now, wanted[MANY.days], atol=0.3)


@given(
    seats=st.lists(st.integers(0, 7), min_size=1, max_size=3),
    periods=st.integers(0, 25),
    seed=st.integers(0, 2**32 - 1),
)
@examples(60)
def test_periods_are_the_plain_recursion(seats: list[int], periods: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    start = np.concatenate([[0], np.cumsum(rng.integers(0, 6, len(seats)))])
    # Whole fares on a coarse grid: many are equal, some are nothing or less.
    fare = np.concatenate([np.sort(rng.integers(-2, 8, n) * 25.0)[::-1] for n in np.diff(start)])
    chance = rng.uniform(0.0, 1.0 / max(len(fare), 1), (periods, len(fare)))
    line, value = run_periods(SortedRuns(fare, start), np.array(seats), chance)
    totals = line.totals(value)
    for leg, n in enumerate(seats):
        rows = slice(start[leg], start[leg + 1])
        wanted = leg_trail(n, fare[rows], chance[:, rows])[-1]
        np.testing.assert_allclose(value[line.start[leg] : line.start[leg + 1]], seat_values(wanted), atol=1e-9)
        assert totals[leg] == pytest.approx(wanted[-1], rel=1e-9, abs=1e-9)


def test_many_short_periods_come_to_the_poisson_program() -> None:
    plan = EVEN.plan((0.0,))
    requests = np.sum([segment.requests for segment in plan.segments()], axis=0)
    errors = []
    for periods in (400, 800):
        line, value = run_periods(plan.fares, np.array([EVEN.seats]), [requests / periods] * periods)
        errors.append(line.totals(value)[0] - integrated(plan, EVEN.seats)[1])
    # At most one request a period leaves less to chance and earns more; the difference halves with the period.
    assert 0 < errors[1] < errors[0]
    assert errors[0] / errors[1] == pytest.approx(2.0, rel=0.05)


def test_wrong_arguments() -> None:
    plan = EVEN.plan()
    for step in (0.0, -0.5, 1.5, float("nan")):
        with pytest.raises(ValueError, match="requests per step"):
            price_curves(plan, np.array([3]), step)
    for seats in ([-1], [3, 4]):
        with pytest.raises(ValueError, match="remaining seats"):
            price_curves(plan, np.array(seats))
