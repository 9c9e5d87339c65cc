"""The two hub problems played by the simulator: one request a period; see `hub_problems` for source and standing.

Requests are drawn as the rule of the source says, one a period, and fed to the simulator as they are. Controls are
prepared by the product code from the expected requests, as if they came as Poisson processes: each product has
a booking curve of its own that says how many of its requests have come by each period.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest

from legworth.simulation.entries import entries_of, play_schedule, prepare_schedule
from legworth.simulation.forecast import reading_instants
from legworth.simulation.hindsight import Hindsight
from legworth.simulation.requests import RequestPaths
from legworth.simulation.rules import Situation
from network import Network
from network.arrays import FloatArray
from tests.oracle import departing
from tests.outside.hub_problems import PERIODS, PROBLEMS, HubProblem

PATHS = 1000
FIRST_COME = {4.0: (18_359.9, 12.1), 8.0: (28_295.7, 25.6)}
"""Ours, by another program: mean revenue of first come, first served, and its standard error."""
HINDSIGHT = {4.0: (20_899.9, 32.0), 8.0: (33_932.5, 69.4)}
"""Ours, by another program: mean of the hindsight optimum, and its standard error."""

both = pytest.mark.parametrize("problem", PROBLEMS, ids=lambda problem: f"ratio {problem.ratio:g}")


@cache
def network_of(problem: HubProblem) -> Network:
    """The network, a day a period, with a curve for every product; period t ends 199 - t days before departure."""
    come = np.cumsum(problem.requests, axis=0) / problem.requests.sum(axis=0)
    come[-1] = 1.0
    days = np.arange(PERIODS, -1.0, -1.0)
    curves = [dict(zip(days.tolist(), [0.0, *share], strict=True)) for share in come.T.tolist()]
    return departing(problem.network(), float(PERIODS), np.arange(come.shape[1]), curves)


@cache
def requests_of(problem: HubProblem) -> RequestPaths:
    rng = np.random.default_rng(41)
    product = np.stack([rng.choice(len(chances), PATHS, p=chances / chances.sum()) for chances in problem.requests])
    at = np.broadcast_to(np.arange(1.0, PERIODS + 1)[:, None], product.shape)
    return RequestPaths(product, at, problem.requests.shape[1])


@cache
def revenue(problem: HubProblem, name: str) -> FloatArray:
    network, requests = network_of(problem), requests_of(problem)
    situation, (entry,) = Situation.of(network), entries_of([name])
    schedule = prepare_schedule(entry, network, situation, reading_instants(network, None))
    accepted, left = play_schedule(requests, schedule, situation)
    assert left.min() >= 0
    return np.asarray((network.fare[requests.product] * accepted).sum(axis=0))


@cache
def hindsight(problem: HubProblem) -> FloatArray:
    return Hindsight(network_of(problem)).values(requests_of(problem).demand)


def error(values: FloatArray) -> float:
    return float(values.std(ddof=1) / len(values) ** 0.5)


@both
def test_price_curves_earn_at_least_the_published_revenue(problem: HubProblem) -> None:
    # Published (secondary), by simulation of the policy of the Lagrangian bound: 20,018 and 32,226.
    found = revenue(problem, "curves")
    assert found.mean() >= problem.published_revenue - 2 * error(found)
    # Published (secondary) bound on any policy: 20,439 and 33,305.
    assert found.mean() <= problem.published_bound + 2 * error(found)


@both
def test_first_come_first_served_earns_what_we_know(problem: HubProblem) -> None:
    wanted, its_error = FIRST_COME[problem.ratio]
    found = revenue(problem, "first-come")
    assert abs(found.mean() - wanted) <= 3 * np.hypot(error(found), its_error)


@both
def test_hindsight_optimum_earns_what_we_know_and_no_control_more(problem: HubProblem) -> None:
    wanted, its_error = HINDSIGHT[problem.ratio]
    found = hindsight(problem)
    assert abs(found.mean() - wanted) <= 3 * np.hypot(error(found), its_error)
    for name in ("first-come", "leg", "leg+", "deterministic", "adjusted", "curves"):
        assert np.all(revenue(problem, name) <= found * (1 + 1e-9))


@both
def test_price_curves_earn_more_than_the_other_controls(problem: HubProblem) -> None:
    # Surely so: the paired difference is more than three of its standard errors above nothing.
    for name in ("first-come", "leg", "leg+", "deterministic", "adjusted"):
        gain = revenue(problem, "curves") - revenue(problem, name)
        assert gain.mean() > 3 * error(gain)
