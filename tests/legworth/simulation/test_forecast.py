"""What is still to come, when to read, and what wrong forecasts change."""

from __future__ import annotations

import numpy as np
import pytest

from legworth.simulation.forecast import (
    STRESSES,
    Stress,
    at_instant,
    demand_times,
    reading_instants,
    wrong_forecast,
)
from legworth.simulation.requests import draw_requests, first_departure
from network import Family, SettingError
from tests.legworth.simulation.cases import hub_in_time, leg_in_time

PATHS = 6000


@pytest.mark.parametrize("days", [3.0, 20.0, 38.0])
@pytest.mark.parametrize(("mean", "deviation"), [(6.0, 6.0**0.5), (6.0, 4.5)])
@pytest.mark.parametrize("curve", [0, 1, -1])
def test_demand_to_come_is_that_of_the_requests_after_the_instant(
    days: float, mean: float, deviation: float, curve: int
) -> None:
    network = leg_in_time(9, [(100.0, mean, deviation)], 40.0, curve)
    requests = draw_requests(network, np.arange(PATHS), 2)
    later = ((requests.at > days) & requests.real).sum(axis=0)
    seen = at_instant(network, days, np.array([4]))
    wanted, variance = float(seen.demand.mean[0]), float(seen.demand.variance[0])
    assert abs(later.mean() - wanted) <= 4 * (variance / PATHS) ** 0.5
    assert later.var(ddof=1) == pytest.approx(variance, rel=0.1, abs=0.01)
    assert seen.remaining.tolist() == [4]
    assert (seen.as_of - network.as_of).total_seconds() == pytest.approx(days * 86_400)


def test_at_the_snapshot_nothing_changes() -> None:
    network = hub_in_time(1)
    seen = at_instant(network, 0.0)
    np.testing.assert_array_equal(seen.demand.mean, network.demand.mean)
    assert seen.as_of == network.as_of


def test_nothing_is_to_come_once_the_first_leg_has_left() -> None:
    network = hub_in_time(1)
    seen = at_instant(network, 19.75)
    gone = (first_departure(network) <= 19.75)[network.product_itinerary]
    assert gone.any()
    assert not gone.all()
    assert np.all(seen.demand.mean[gone] == 0)
    assert np.all(seen.demand.mean[~gone & (network.demand.mean > 0)] > 0)


def test_readings_come_closer_towards_departure() -> None:
    network = hub_in_time(1)
    instants = reading_instants(network, None, 16)
    assert len(instants) == 16
    assert instants[0] == 0.0
    assert np.all(np.diff(instants) > 0)
    assert np.all(np.diff(instants, 2) < 0)
    assert instants[-1] < 20.0
    assert reading_instants(network, (30.0, 7.0, 1.0, 0.0)).tolist() == [0.0, 13.0, 19.0]


def test_wrong_forecasts_change_what_they_name() -> None:
    network = hub_in_time(2)
    demand = network.demand
    high = wrong_forecast(network, STRESSES["means-high"]).demand
    np.testing.assert_allclose(high.mean, 1.2 * demand.mean)
    np.testing.assert_allclose(high.deviation, 1.2 * np.sqrt(demand.variance))
    wide = wrong_forecast(network, STRESSES["deviations-high"]).demand
    np.testing.assert_allclose(wide.mean, demand.mean)
    np.testing.assert_allclose(wide.deviation, 2.0 * np.sqrt(demand.variance))
    narrow = wrong_forecast(network, STRESSES["deviations-low"]).demand
    assert np.any(narrow.family == Family.NORMAL)
    # Every itinerary of the hub network calls at its one station.
    grown = wrong_forecast(network, STRESSES["hub-growth"]).demand
    np.testing.assert_allclose(grown.mean * 1.3, demand.mean)


def test_shifted_curves_still_rise_to_one_at_departure() -> None:
    network = hub_in_time(2)
    for days in (7.0, -7.0):
        curves = wrong_forecast(network, Stress("shifted", shift=days)).curves
        for curve in range(len(curves)):
            rows = slice(curves.start[curve], curves.start[curve + 1])
            assert np.all(np.diff(curves.days_before[rows]) < 0)
            assert np.all(np.diff(curves.share[rows]) >= 0)
            assert (curves.days_before[rows][-1], curves.share[rows][-1]) == (0.0, 1.0)
        first = slice(curves.start[0], curves.start[1])
        assert np.interp(30.0 + days, curves.days_before[first][::-1], curves.share[first][::-1]) == pytest.approx(0.5)


def test_demand_of_another_size_varies_as_its_rate_does() -> None:
    demand = hub_in_time(2).demand
    for factor in (0.4, 1.0, 2.5):
        other = demand_times(demand, factor)
        np.testing.assert_allclose(other.mean, factor * demand.mean)
        # Of a mixed Poisson number, variance less mean is the variance of the rate.
        np.testing.assert_allclose(other.variance - other.mean, factor**2 * (demand.variance - demand.mean), atol=1e-9)


def test_factors_must_be_above_zero() -> None:
    with pytest.raises(SettingError, match="above zero"):
        wrong_forecast(hub_in_time(2), Stress("nothing", mean=0.0))
