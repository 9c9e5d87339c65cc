"""Requests come as many as demand says and when the curves say, the same whoever asks for them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from legworth.simulation.requests import RequestPaths, draw_requests, first_departure
from network import Network
from tests.legworth.simulation.cases import EARLY, LATE, hub_in_time, leg_in_time
from tests.networks import Plan
from tests.oracle import Readings, departing

PATHS = 4000


def instants(network: Network, seed: int = 3) -> RequestPaths:
    return draw_requests(network, np.arange(PATHS), seed)


@pytest.mark.parametrize(
    ("family", "mean", "deviation"),
    [("poisson", 6.0, 6.0**0.5), ("negative_binomial", 6.0, 4.5), ("normal", 9.0, 2.0), ("gamma", 8.0, 5.0)],
)
def test_numbers_have_the_mean_and_variance_of_demand(family: str, mean: float, deviation: float) -> None:
    network = leg_in_time(10, [(100.0, mean, deviation)], 40.0, family=family)
    count = instants(network).demand[:, 0]
    wanted = float(network.demand.expected[0])
    assert abs(count.mean() - wanted) <= 4 * deviation / PATHS**0.5
    # Rounding at random to whole passengers adds at most a quarter to the variance of continuous demand.
    low, high = deviation**2, deviation**2 + (0.25 if family in ("normal", "gamma") else 0.0)
    assert 0.9 * low <= count.var(ddof=1) <= 1.1 * high


@pytest.mark.parametrize(("mean", "deviation"), [(6.0, 6.0**0.5), (6.0, 4.5)])
def test_numbers_follow_the_law_of_the_reference_library(mean: float, deviation: float) -> None:
    network = leg_in_time(10, [(100.0, mean, deviation)], 40.0)
    count = instants(network).demand[:, 0]
    variance = deviation**2
    law = stats.poisson(mean) if variance <= mean * 1.05 else stats.nbinom(mean**2 / (variance - mean), mean / variance)
    edges = np.arange(0, 13)
    observed = np.bincount(np.minimum(count, 13), minlength=14)
    expected = PATHS * np.append(law.pmf(edges), law.sf(12))
    assert stats.chisquare(observed, expected).pvalue > 1e-3


@pytest.mark.parametrize("days", [80.0, 45.0, 20.0, 3.5])
@pytest.mark.parametrize(("curve", "readings"), [(0, EARLY), (1, LATE), (-1, None)])
def test_arrivals_by_day_match_the_curve(days: float, curve: int, readings: Readings | None) -> None:
    requests = instants(leg_in_time(10, [(100.0, 5.0, 5.0**0.5)], days, curve))
    before = days - requests.at[requests.real]
    edges = np.linspace(0.0, days, 15)
    observed, _ = np.histogram(before, edges)
    if readings is None:
        share = 1.0 - edges / days
    else:
        day, come = np.array(list(readings))[::-1], np.array(list(readings.values()))[::-1]
        share = np.interp(edges, day, come)
        share = (share - share[-1]) / (1.0 - share[-1])
    expected = -np.diff(share) * observed.sum()
    some = expected > 0
    assert observed[~some].sum() == 0
    assert stats.chisquare(observed[some], expected[some]).pvalue > 1e-3


def test_over_dispersed_demand_is_busy_all_along() -> None:
    # Early and late requests of one path are uncorrelated for Poisson demand and correlated under a shared rate.
    found = {}
    for deviation in (8.0**0.5, 6.0):
        requests = instants(leg_in_time(10, [(100.0, 8.0, deviation)], 60.0, -1))
        early = ((requests.at < 30.0) & requests.real).sum(axis=0)
        late = ((requests.at >= 30.0) & requests.real).sum(axis=0)
        found[deviation] = float(np.corrcoef(early, late)[0, 1])
    # Covariance q (1 - q) (s**2 - m) over variance q**2 (s**2 - m) + q m, with q a half: 28 / (28 + 16).
    assert abs(found[8.0**0.5]) < 0.06
    assert found[6.0] == pytest.approx(28 / 44, abs=0.06)


def test_a_path_does_not_depend_on_the_others() -> None:
    network = hub_in_time(4)
    all_of_them, some = draw_requests(network, np.arange(9), 7), draw_requests(network, np.array([8, 3]), 7)
    for place, path in enumerate([8, 3]):
        many = all_of_them.real[:, path]
        np.testing.assert_array_equal(all_of_them.product[many, path], some.product[some.real[:, place], place])
        np.testing.assert_array_equal(all_of_them.at[many, path], some.at[some.real[:, place], place])
    other = draw_requests(network, np.arange(9), 8)
    assert not np.array_equal(other.demand, all_of_them.demand)
    assert not np.array_equal(draw_requests(network, np.arange(9), 7, part=1).demand, all_of_them.demand)


def test_requests_come_in_order_and_before_the_first_leg_leaves() -> None:
    network = hub_in_time(5)
    requests = draw_requests(network, np.arange(50), 1)
    within = requests.real
    assert np.all(requests.at[1:] >= requests.at[:-1])
    latest = np.append(first_departure(network)[network.product_itinerary], np.inf)[requests.product]
    assert np.all((requests.at >= 0) & (requests.at <= latest + 1e-9))
    assert np.all(np.isinf(requests.at[~within]))


def test_nobody_asks_for_what_has_left() -> None:
    plan = Plan((5, 5), ((0,), (0, 1), (1,)), (((10.0, 3.0, 2.0),),) * 3)
    network = departing(plan.network(), [0.0, 5.0], -1, [])
    assert draw_requests(network, np.arange(200), 1).demand.sum(axis=0).tolist()[:2] == [0, 0]
    assert draw_requests(network, np.arange(200), 1).demand[:, 2].sum() > 0


def test_no_demand_makes_empty_paths() -> None:
    network = leg_in_time(5, [(10.0, 0.0, 0.0)], 5.0)
    requests = draw_requests(network, np.arange(4), 1)
    assert requests.product.shape == (0, 4)
    assert requests.demand.tolist() == [[0]] * 4


def test_mismatched_arrays_raise() -> None:
    requests = draw_requests(hub_in_time(5), np.arange(3), 1)
    with pytest.raises(ValueError, match="differ in shape"):
        replace(requests, at=requests.at[1:])
