"""Simulated history whose truth is known: what the generator logs is true, and what the estimate makes of it.

``LEGWORTH_TRUTH_DATES`` sets the dates of departure that are simulated (default 300); the full size is
``python -m benchmarks.estimate_truth``.
"""

from __future__ import annotations

import os
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pyarrow.parquet
import pytest

from legworth.estimation.history_table import read_history
from legworth.simulation.rules import Situation
from network import read_folder
from tests.legworth.simulation.cases import hub_in_time
from tools import demo_scenario as world
from tools.history_truth import held_out_truth, mean_truth, naive_means
from tools.make_demo_history import demo_plan, read_service_day, service_day, true_demand, write_history
from tools.simulated_history import HistoryPlan, SimulatedHistory, simulate_history

DATES = int(os.environ.get("LEGWORTH_TRUTH_DATES", "300"))
STATIONS = ("ORV", "SAL", "BRO", "TIN")


@cache
def small() -> SimulatedHistory:
    """A little hub, on 60 dates."""
    plan = HistoryPlan(
        hub_in_time(3),
        np.datetime64("2028-01-03"),
        60,
        reading_days=(18.0, 10.0, 5.0, 2.0, 0.0),
        weekday=(2.0, *(1.0,) * 6),
    )
    return simulate_history(plan)


@pytest.fixture(scope="module")
def carrier(tmp_path_factory: pytest.TempPathFactory) -> SimulatedHistory:
    """A part of the demo carrier, on as many dates as are asked for."""
    day = service_day(STATIONS)
    network = read_service_day(day, tmp_path_factory.mktemp("day"))
    return simulate_history(replace(demo_plan(network, world.AS_OF, DATES), season=0.0))


def test_readings_say_what_happened() -> None:
    """Nobody books while closed, everybody while open, and seats hold out."""
    found = small()
    booked, asked = (np.diff(figures, axis=2, prepend=0) for figures in (found.booked, found.requested))
    assert np.all(booked[found.open_share <= 0] == 0)
    assert np.array_equal(booked[found.open_share >= 1], asked[found.open_share >= 1])
    assert np.all(booked <= asked)
    assert 0.1 < (found.open_share < 1).mean() < 0.9
    assert np.all(found.seats_sold(np.inf) <= found.plan.network.remaining)
    assert (
        found.seats_sold(np.inf).sum()
        == (
            found.sold * (Situation.of(found.plan.network).legs[found.product] < found.plan.network.n_legs).sum(axis=1)
        ).sum()
    )


def test_time_open_is_the_time_in_which_requests_were_sold() -> None:
    """Within intervals that closed midway, requests were sold before the closing and not after it."""
    found = small()
    days = np.append(found.plan.network.legs.departs.size + 100.0, found.days)  # a beginning before all
    sold = found.sold
    horizon = 20.0
    begin = np.minimum(days[:-1], horizon)
    interval = np.minimum(np.searchsorted(-found.days, -found.at), len(found.days) - 1)
    share = found.open_share[found.date, found.product, interval]
    midway = (share > 0) & (share < 1)
    assert midway.sum() > 100
    # With one rule in force all through it, the place of a request within the interval decides.
    place = (begin[interval] - found.at) / (begin[interval] - found.days[interval])
    early, late = midway & (place < share * 0.5), midway & (place > 0.5 + share * 0.5)
    assert sold[early].mean() > sold[late].mean() + 0.3


def test_demand_follows_weekdays_and_curves() -> None:
    found = small()
    asked = found.requested[:, :, -1].sum(axis=1)
    mondays = np.arange(found.plan.dates) % 7 == 0
    assert asked[mondays].mean() == pytest.approx(2 * asked[~mondays].mean(), rel=0.15)
    share = found.share(np.broadcast_to(found.days[:, None], (len(found.days), found.plan.network.n_products)))
    whole = found.requested.sum(axis=(0, 1))
    expected = (share * found.plan.network.demand.mean).sum(axis=1) / found.plan.network.demand.mean.sum()
    np.testing.assert_allclose(whole / whole[-1], expected, atol=0.03)


def test_the_demo_history_is_read_without_a_word(tmp_path: Path) -> None:
    day = service_day(("ORV", "SAL"))
    network = read_service_day(day, tmp_path / "day")
    found = simulate_history(demo_plan(network, world.AS_OF, 40, ahead=5))
    rows = write_history(found, day, world.AS_OF, tmp_path)
    folder = read_folder(tmp_path / "network", with_demand=False)
    read = read_history(
        tmp_path / "history.parquet", folder.history_name, folder.network.fare_classes, folder.network.as_of
    )
    assert read.rows == rows > 1000
    assert read.warnings == ()
    true = read_folder(tmp_path / "true").network
    assert np.array_equal(true.remaining, folder.network.remaining)
    assert (true.remaining < true.legs.capacity).any()
    bare = pyarrow.parquet.read_table(tmp_path / "history.parquet").drop_columns(["open_share"])
    pyarrow.parquet.write_table(bare, tmp_path / "bare.parquet")
    names, classes = folder.history_name, folder.network.fare_classes
    without = read_history(tmp_path / "bare.parquet", names, classes, folder.network.as_of, may_reopen=True).history
    alone = found.flags_alone(throughout=False)
    today = np.datetime64(world.AS_OF.date(), "D")
    here, there = (each.chosen(np.flatnonzero(each.departure < today)) for each in (alone, without))
    assert here.open.sum() == there.open.sum() < here.n_readings
    assert here.open_share is not None
    assert there.open_share is not None
    assert np.isnan(here.open_share).sum() == np.isnan(there.open_share).sum() > 0
    assert (here.open_share == 0).sum() == (there.open_share == 0).sum() > 0
    assert here.begins_open is not None
    assert there.begins_open is not None
    assert here.begins_open.sum() == there.begins_open.sum() > here.open.sum()
    direct = found.history(float(np.datetime64(world.AS_OF.replace(tzinfo=None), "s").astype(int)) / 86_400)
    assert direct.n_readings == rows
    assert direct.booked.sum() == read.history.booked.sum()
    assert direct.open.sum() == read.history.open.sum()


def test_the_truth_to_come_is_that_of_the_requests_that_come(carrier: SimulatedHistory) -> None:
    """Given the requests so far, the demand still to come has the mean of the requests that follow."""
    plan = carrier.plan
    came = expected = variance = 0.0
    for date in range(100, 140):
        now = float(plan.departure[date].astype(np.int64)) - 9.7
        demand = true_demand(carrier, now, date)
        came += (carrier.requested[date, :, -1] - carrier.requests_by(now)[date]).sum()
        expected, variance = expected + demand.mean.sum(), variance + demand.variance.sum()
    assert abs(came - expected) <= 4 * np.sqrt(variance)


def test_means_are_recovered_where_naive_averages_are_low(carrier: SimulatedHistory) -> None:
    """All bookings taken for demand are more than 20 % low, departures open to the end more than 15 %."""
    as_of = carrier.plan.departure[-15]
    truth, _ = mean_truth(carrier, carrier.history(), as_of)
    assert truth.within >= 0.9
    assert np.sqrt(np.mean(((truth.estimated - truth.true) / truth.error) ** 2)) <= 1.25
    assert abs(truth.bias) <= 0.03
    for naive, low in zip(naive_means(carrier, as_of).values(), (-0.2, -0.15), strict=True):
        known = ~np.isnan(naive)
        assert naive[known].sum() / truth.true[known].sum() - 1 < low


def test_flags_alone_recover_most_of_the_means(carrier: SimulatedHistory) -> None:
    """A flag for the whole interval says more than one at the reading, which misses what closed and opened before."""
    as_of = carrier.plan.departure[-15]
    whole, _ = mean_truth(carrier, carrier.flags_alone(throughout=True), as_of)
    moment, _ = mean_truth(carrier, carrier.flags_alone(throughout=False), as_of)
    assert whole.within >= 0.9
    assert abs(whole.bias) <= 0.05
    assert -0.11 <= moment.bias < whole.bias - 0.02


def test_deviations_are_recovered(carrier: SimulatedHistory) -> None:
    truth, _ = mean_truth(carrier, carrier.history(), carrier.plan.departure[-15])
    assert abs(truth.deviation_of()) <= 0.05
    for fare_class in range(len(carrier.plan.network.fare_classes)):
        assert abs(truth.deviation_of(fare_class)) <= 0.1


def test_errors_are_those_of_the_products(carrier: SimulatedHistory) -> None:
    """Whatever bits hold the positions of a network: those of more than 127 products overflow eight."""
    network = carrier.plan.network
    assert network.n_products > 127
    truth, fit = mean_truth(carrier, carrier.history(), carrier.plan.departure[-15])
    variance = fit.rates.variance.reshape(network.n_itineraries, -1)[network.product_itinerary, network.product_class]
    assert truth.error == pytest.approx(truth.estimated * np.sqrt(variance))


def test_the_interval_holds_held_out_requests(carrier: SimulatedHistory) -> None:
    """Requests of departures ahead, met by an open class or not: 75 to 85 % of them in the 80 % interval."""
    last = float(carrier.plan.departure[-1].astype(np.int64)) - 14
    found = held_out_truth(carrier, carrier.history(), [last + 0.1, last - 14 + 0.1], 14)
    assert len(found.came) >= 1000
    assert 0.75 <= found.coverage <= 0.85
    assert abs(found.bias) <= 0.05
    for low, high in ((0.0, 1.0), (1.0, np.inf)):
        mine = (found.mean >= low) & (found.mean < high)
        assert 0.75 <= found.inside[mine].mean() <= 0.85
