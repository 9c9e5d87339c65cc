"""Arrival plans by hand and by their sums."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime, timedelta

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from heuristics import leg_products
from heuristics.arrivals import ArrivalPlan, days_before_departure
from network import Network
from network.arrays import FloatArray
from tests.networks import Plan, examples, one_leg, plans
from tests.oracle import Readings, departing

CURVE = {30.0: 0.2, 10.0: 0.5, 0.0: 1.0}


def plan_of(network: Network, days: tuple[float, ...] = (0.0,)) -> ArrivalPlan:
    return ArrivalPlan.of(network, leg_products(network, np.zeros(network.n_legs)), days)


def parts(network: Network, days: tuple[float, ...] = (0.0,)) -> dict[float, FloatArray]:
    """Requests of every row by the days at which each segment ends."""
    return {segment.days: segment.requests for segment in plan_of(network, days).segments()}


def on_sale(days: float, curve: Readings | None, mean: float = 8.0) -> Network:
    network = one_leg(5, [(100.0, mean, mean**0.5)]).network()
    return departing(network, days, -1 if curve is None else 0, [] if curve is None else [curve])


def test_straight_between_readings() -> None:
    # By hand: 35 % has come by day 20, so 15 of the other 65 % come by day 10 and 50 of them after it.
    found = parts(on_sale(20.0, CURVE))
    assert list(found) == [0.0, 10.0]
    np.testing.assert_allclose([found[0.0][0], found[10.0][0]], [8 * 0.50 / 0.65, 8 * 0.15 / 0.65], rtol=1e-12)


def test_flat_before_the_first_reading() -> None:
    # By hand: 20 % has come before day 30 and nothing comes from day 45 to day 30.
    found = parts(on_sale(45.0, CURVE))
    np.testing.assert_allclose([found[day][0] for day in (0.0, 10.0, 30.0)], [5.0, 3.0, 0.0], atol=1e-12)


def test_wanted_days_cut_the_segments() -> None:
    found = parts(on_sale(20.0, CURVE), (0.0, 4.0, 15.0, 40.0))
    assert list(found) == [0.0, 4.0, 10.0, 15.0]
    # By hand: straight lines, so the last 50 % fall 20 to 30 on days 4 to 0 and 10 to 4.
    wanted = [0.20, 0.30, 0.075, 0.075]
    np.testing.assert_allclose([r[0] for r in found.values()], 8 * np.array(wanted) / 0.65, rtol=1e-12)


def test_no_curve_is_even() -> None:
    found = parts(on_sale(16.0, None), (0.0, 4.0, 12.0))
    np.testing.assert_allclose([r[0] for r in found.values()], [2.0, 4.0, 2.0], rtol=1e-12)


def test_a_curve_that_leaves_nothing_to_come_is_even() -> None:
    found = parts(on_sale(10.0, {20.0: 1.0, 0.0: 1.0}), (0.0, 5.0))
    np.testing.assert_allclose([r[0] for r in found.values()], [4.0, 4.0], rtol=1e-12)


def test_every_leg_counts_days_from_its_own_departure() -> None:
    network = Plan((5, 5), ((0, 1),), (((100.0, 6.0, 6.0**0.5),),)).network()
    plan = plan_of(departing(network, [2.0, 3.0], -1, []), (0.0, 1.0, 2.0))
    found = {segment.days: segment.requests[plan.leg.argsort(kind="stable")] for segment in plan.segments()}
    np.testing.assert_allclose(found[0.0], [3.0, 2.0])
    np.testing.assert_allclose(found[1.0], [3.0, 2.0])
    np.testing.assert_allclose(found[2.0], [0.0, 2.0])


def test_days_of_the_snapshot() -> None:
    network = on_sale(0.0, None)
    departure = datetime(2030, 1, 1, tzinfo=UTC)
    for before in (timedelta(days=3, hours=6), timedelta(seconds=30), timedelta(0), -timedelta(days=1)):
        earlier = replace(network, as_of=departure - before)
        assert days_before_departure(earlier)[0] == pytest.approx(max(before / timedelta(days=1), 0.0), abs=1e-9)


def test_nothing_comes_after_departure() -> None:
    network = Plan((5, 5), ((0,), (1,)), (((100.0, 6.0, 6.0**0.5),), ((80.0, 4.0, 2.0),))).network()
    plan = plan_of(departing(network, [0.0, 3.0], -1, []))
    total = np.sum([segment.requests for segment in plan.segments()], axis=0)
    np.testing.assert_allclose(total, [0.0, 4.0])
    assert plan.days_now.tolist() == [0.0, 3.0]
    assert list(plan_of(departing(network, 0.0, -1, [])).segments()) == []


def test_nobody_asks_for_a_path_with_a_full_leg() -> None:
    rows = (((100.0, 6.0, 6.0**0.5),), ((80.0, 4.0, 2.0),), ((70.0, 3.0, 3.0**0.5),))
    network = departing(Plan((5, 0), ((0,), (1,), (0, 1)), rows).network(), 3.0, -1, [])
    products = leg_products(network, np.zeros(2))
    plan = ArrivalPlan.of(network, products)
    assert dict(zip(zip(plan.leg, products.product, strict=True), plan.mean, strict=True)) == {
        (0, 0): 6.0,
        (0, 2): 0.0,
        (1, 1): 0.0,
        (1, 2): 0.0,
    }


@pytest.mark.parametrize("days", [(), (1.0, 2.0), (0.0, 2.0, 2.0), (0.0, 5.0, 3.0)])
def test_days_must_rise_from_departure(days: tuple[float, ...]) -> None:
    with pytest.raises(ValueError, match="rise from 0"):
        plan_of(on_sale(9.0, None), days)


@st.composite
def timed(draw: st.DrawFn) -> Network:
    """Draw a network with legs up to 40 days away and up to three curves."""
    network = draw(plans()).network()
    reading = st.tuples(st.integers(1, 60), st.integers(0, 20))
    curves = []
    for readings in draw(st.lists(st.lists(reading, max_size=4), max_size=3)):
        days = sorted({float(day) for day, _ in readings}, reverse=True)
        shares = sorted(share / 20 for _, share in readings)[: len(days)]
        curves.append(dict(zip(days, shares, strict=True)) | {0.0: 1.0})
    days = draw(st.lists(st.integers(0, 160), min_size=network.n_legs, max_size=network.n_legs))
    curve = draw(st.lists(st.integers(-1, len(curves) - 1), min_size=network.n_products, max_size=network.n_products))
    return departing(network, np.array(days) / 4, np.array(curve, dtype=np.int64), curves)


@given(network=timed(), wanted=st.lists(st.integers(1, 45), max_size=4, unique=True).map(sorted))
@examples(150)
def test_all_demand_comes_between_snapshot_and_departure(network: Network, wanted: list[int]) -> None:
    plan = plan_of(network, (0.0, *map(float, wanted)))
    segments = list(plan.segments())
    total = np.sum([segment.requests for segment in segments], axis=0) if segments else np.zeros(len(plan.mean))
    there = plan.days_now[plan.leg] > 0
    np.testing.assert_allclose(total, np.where(there, plan.mean, 0.0), rtol=1e-9, atol=1e-12)
    for segment in segments:
        assert np.all(segment.requests >= -1e-12)
        np.testing.assert_array_equal(segment.requests[segment.days >= plan.days_now[plan.leg]], 0.0)
    assert set(plan.days) <= {segment.days for segment in segments} | {0.0, plan.days_now.max()}
    assert [segment.days for segment in segments] == sorted({segment.days for segment in segments})


@given(network=timed())
@examples(50)
def test_rows_stand_beside_the_leg_products(network: Network) -> None:
    products = leg_products(network, np.full(network.n_legs, 7.0))
    plan = ArrivalPlan.of(network, products)
    sellable = network.path_remaining[network.product_itinerary] > 0
    np.testing.assert_array_equal(plan.fares.value, products.adjusted_fare)
    np.testing.assert_array_equal(plan.leg, products.leg)
    np.testing.assert_array_equal(plan.mean, (network.demand.expected * sellable)[products.product])
    np.testing.assert_array_equal(plan.curve, network.curve[products.product])
