"""The real hub day through the main job: counts of the real timetable, and what must hold whatever the money.

The flights are real (``data/README.md`` names their source); seats, fares and demand are assumed by the rules of
`tests.outside.hub_day`. No assumed money is pinned here. The number of connections follows from the real departures
and the assumed arrivals, and none of the drawn figures.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from legworth.pricing import PricedNetwork, PricingOptions, price_folder
from lp import LpOptions, Method, SolverOptions
from network import components
from tests.outside.hub_day import FARE_CLASSES, HUB, write_hub_day

FLIGHTS = pd.read_csv(Path(__file__).with_name("data") / "cvg_flights_2001-01-10.csv")


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    made = tmp_path_factory.mktemp("hub_day")
    write_hub_day(made)
    return made


@pytest.fixture(scope="module")
def priced(folder: Path) -> PricedNetwork:
    return price_folder(folder)


@pytest.fixture(scope="module")
def sure(folder: Path) -> PricedNetwork:
    return price_folder(folder, PricingOptions(LpOptions(Method.DETERMINISTIC, SolverOptions("highs"))))


def test_sizes_are_those_of_the_real_day(priced: PricedNetwork) -> None:
    # Counted in the table of the Bureau of Transportation Statistics: 181 departures and 189 arrivals, 57 airports.
    assert (FLIGHTS["origin"] == HUB).sum() == 181
    assert (FLIGHTS["destination"] == HUB).sum() == 189
    assert len(set(FLIGHTS["origin"]) | set(FLIGHTS["destination"])) == 58
    network, itineraries = priced.network, 3980
    assert (network.n_legs, len(network.stations), network.n_itineraries) == (370, 58, itineraries)
    assert network.n_products == itineraries * len(FARE_CLASSES) == 23_880
    assert np.bincount(np.diff(network.path_start)).tolist() == [0, 370, itineraries - 370]
    assert priced.warnings == ()


def test_components_are_the_flights_that_connect_and_those_alone(priced: PricedNetwork) -> None:
    # A flight alone arrives too late or leaves too early for any connection.
    sizes = [len(piece.legs) for piece, _ in priced.solution.parts]
    assert sorted(sizes) == [1] * 7 + [363]
    assert sum(sizes) == 370
    assert [len(piece.legs) for piece in components(priced.network)] == sizes


def test_every_component_is_certified_and_the_sum_is_reported(priced: PricedNetwork) -> None:
    certificates = [part.certificate for _, part in priced.solution.parts]
    assert all(certificate.holds for certificate in certificates)
    assert priced.summary["certified"] is True
    assert priced.summary["objective"] == pytest.approx(sum(certificate.primal for certificate in certificates))
    assert max(abs(certificate.gap) for certificate in certificates) <= 1e-9


def test_the_deterministic_program_is_an_upper_bound(priced: PricedNetwork, sure: PricedNetwork) -> None:
    assert priced.solution.objective <= priced.solution.bound * (1 + 1e-9)
    assert priced.solution.objective <= sure.solution.objective
    assert priced.summary["bounds"]["revenue"] == pytest.approx(sure.solution.objective, rel=1e-9)
    everything = float(priced.network.fare @ priced.network.demand.expected)
    assert sure.solution.objective <= everything


@pytest.mark.parametrize("which", ["priced", "sure"])
def test_prices_lie_between_nothing_and_the_highest_fare_of_the_leg(which: str, request: pytest.FixtureRequest) -> None:
    found: PricedNetwork = request.getfixturevalue(which)
    network, solution = found.network, found.solution
    highest = np.zeros(network.n_legs)
    for product, itinerary in enumerate(network.product_itinerary):
        path = network.path_leg[network.path_start[itinerary] : network.path_start[itinerary + 1]]
        highest[path] = np.maximum(highest[path], network.fare[product])
    for prices in (solution.bid_price, solution.next_seat):
        assert np.all((prices >= 0) & (prices <= highest))
    load = network.leg_load(solution.allotted)
    assert np.all(load <= network.remaining * (1 + 1e-9))
    assert np.all(solution.bid_price[load < network.remaining - 1e-6] == 0)
    assert np.all(solution.expected_sales <= load * (1 + 1e-9))


def test_solvers_and_routes_give_the_same_prices(folder: Path, priced: PricedNetwork) -> None:
    near = 1e-6 * priced.network.fare.max()
    highs = price_folder(folder, PricingOptions(LpOptions(solver=SolverOptions("highs")), jobs=2))
    assert highs.solution.objective == pytest.approx(priced.solution.objective, rel=1e-9)
    np.testing.assert_allclose(highs.solution.bid_price, priced.solution.bid_price, rtol=0, atol=near)
    np.testing.assert_allclose(highs.solution.next_seat, priced.solution.next_seat, rtol=0, atol=near)


def test_protection_rises_with_rank_and_booking_limits_fall_within_the_seats(priced: PricedNetwork) -> None:
    table = priced.tables["protection"]
    remaining = pd.Series(priced.network.remaining, index=priced.network.legs.name)
    assert len(table) == np.diff(priced.network.path_start)[priced.network.product_itinerary].sum()
    assert set(table["leg"].astype(str)) == set(remaining.index)
    for leg, rows in table.groupby("leg", observed=True):
        assert rows["rank"].tolist() == list(range(1, len(rows) + 1))
        assert np.all(np.diff(rows["adjusted_fare"]) <= 0)
        worth = rows[rows["adjusted_fare"] > 0]
        assert np.all(np.diff(worth["protection"]) >= 0)
        assert np.all(np.diff(rows["booking_limit"]) <= 0)
        assert rows["booking_limit"].between(0, remaining[leg]).all()
        assert worth["booking_limit"].iloc[0] == remaining[leg]
        assert worth["protection"].between(0, remaining[leg]).all()


def test_control_accepts_exactly_what_reaches_its_displacement(priced: PricedNetwork) -> None:
    network, found = priced.network, priced.controls.connections
    displacement = network.displacement(priced.solution.bid_price)
    np.testing.assert_array_equal(found.open, network.fare >= displacement - 1e-9 * network.fare)
    assert np.all(found.at_stake >= 0)
    assert np.all(found.at_stake[~found.disagrees] == 0)
    assert priced.tables["connections"]["at_stake"].sum() == pytest.approx(priced.summary["at_stake"])
    assert not priced.controls.agrees.all()


def test_more_seats_never_cost_anything(folder: Path, priced: PricedNetwork, tmp_path: Path) -> None:
    # One seat more on every flight: worth at most the sum of the next seats, at least nothing.
    for table in folder.iterdir():
        (tmp_path / table.name).write_bytes(table.read_bytes())
    legs = pd.read_csv(folder / "legs.csv")
    legs.assign(capacity=legs["capacity"] + 1).to_csv(tmp_path / "legs.csv", index=False)
    options = PricingOptions()
    more = price_folder(tmp_path, replace(options, lp=replace(options.lp, solver=SolverOptions("highs"))))
    gain = more.solution.objective - priced.solution.objective
    assert 0 <= gain <= priced.solution.next_seat.sum() * (1 + 1e-6)
    assert gain >= more.solution.bid_price.sum() * (1 - 1e-6)
