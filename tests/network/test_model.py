"""`Network` and its tables: what they refuse, that they cannot be changed, and their sums against dense algebra."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import fields, replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from network import Demand, Network, read_folder
from network.model import ranges
from tests.folders import Folder
from tests.networks import Plan, plans


@pytest.fixture
def network(tmp_path: Path) -> Network:
    return read_folder(Folder().write(tmp_path)).network


def longer(values: np.ndarray) -> np.ndarray:
    return np.append(values, values[-1:])


def put(values: np.ndarray, position: int, value: object) -> np.ndarray:
    answer = values.copy()
    answer[position] = value
    return answer


def swapped(values: np.ndarray) -> np.ndarray:
    return values[[1, 0, *range(2, len(values))]]


REFUSED: dict[str, tuple[str, Callable[[Network], Network]]] = {
    "seats of another length": ("remaining has length", lambda n: replace(n, remaining=longer(n.remaining))),
    "seats below zero": ("remaining must lie", lambda n: replace(n, remaining=put(n.remaining, 0, -1))),
    "seats that are NaN": (
        "remaining must hold whole numbers",
        lambda n: replace(n, remaining=put(n.remaining.astype(float), 0, np.nan)),
    ),
    "seats that are fractions": (
        "remaining must hold whole numbers",
        lambda n: replace(n, remaining=n.remaining + 0.5),
    ),
    "fares of another length": ("has length", lambda n: replace(n, fare=longer(n.fare))),
    "a fare that is NaN": ("fares must be finite", lambda n: replace(n, fare=put(n.fare, 3, np.nan))),
    "a fare that is infinite": ("fares must be finite", lambda n: replace(n, fare=put(n.fare, 3, np.inf))),
    "a fare below zero": ("not negative", lambda n: replace(n, fare=put(n.fare, 3, -0.01))),
    "starts of another length": ("path_start has length", lambda n: replace(n, path_start=longer(n.path_start))),
    "paths of another length": ("path_leg has length", lambda n: replace(n, path_leg=longer(n.path_leg))),
    "a path that leaves the legs": ("path_leg must lie", lambda n: replace(n, path_leg=put(n.path_leg, 0, n.n_legs))),
    "a path over leg -1": ("path_leg must lie", lambda n: replace(n, path_leg=put(n.path_leg, 0, -1))),
    "an itinerary without legs": ("at least one leg", lambda n: replace(n, path_start=put(n.path_start, 1, 0))),
    "paths that begin later": (
        "from position 0 on",
        lambda n: replace(n, path_start=n.path_start + 1, path_leg=longer(n.path_leg)),
    ),
    "itinerary names of another length": ("path_start has length", lambda n: replace(n, itinerary=longer(n.itinerary))),
    "products of another length": (
        "product_class has length",
        lambda n: replace(n, product_class=longer(n.product_class)),
    ),
    "products out of order": ("must be sorted", lambda n: replace(n, product_class=swapped(n.product_class))),
    "a product twice": ("without duplicates", lambda n: replace(n, product_class=put(n.product_class, 1, 0))),
    "a product of no itinerary": (
        "product_itinerary must lie",
        lambda n: replace(n, product_itinerary=put(n.product_itinerary, -1, n.n_itineraries)),
    ),
    "a product of no class": (
        "product_class must lie",
        lambda n: replace(n, product_class=put(n.product_class, -1, len(n.fare_classes))),
    ),
    "too few classes": ("product_class must lie", lambda n: replace(n, fare_classes=n.fare_classes[:1])),
    "demand of another length": ("demand has length", lambda n: replace(n, demand=n.demand.take(np.arange(3)))),
    "curves of another length": ("curve has length", lambda n: replace(n, curve=longer(n.curve))),
    "a curve that there is not": ("curve must lie", lambda n: replace(n, curve=put(n.curve, 0, len(n.curves)))),
    "legs and seats that differ": (
        "remaining has length",
        lambda n: replace(n, legs=replace(n.legs, **{f.name: getattr(n.legs, f.name)[:-1] for f in fields(n.legs)})),
    ),
    "origins of another length": (
        "origin has length",
        lambda n: replace(n, legs=replace(n.legs, origin=longer(n.legs.origin))),
    ),
    "latitudes of another length": (
        "latitude has length",
        lambda n: replace(n, stations=replace(n.stations, latitude=longer(n.stations.latitude))),
    ),
    "shares of another length": (
        "booking curves do not fit",
        lambda n: replace(n, curves=replace(n.curves, share=longer(n.curves.share))),
    ),
    "starts of curves that differ": (
        "booking curves do not fit",
        lambda n: replace(n, curves=replace(n.curves, start=n.curves.start[:-1])),
    ),
    "a mean that is NaN": (
        "mean must be finite",
        lambda n: replace(n, demand=Demand.of(put(n.demand.mean, 0, np.nan), n.demand.deviation)),
    ),
}


@pytest.mark.parametrize("name", REFUSED)
def test_what_does_not_fit_is_refused(name: str, network: Network) -> None:
    words, spoil = REFUSED[name]
    with pytest.raises(ValueError, match=words):
        spoil(network)


def test_arrays_cannot_be_changed(network: Network) -> None:
    for record in (network, network.legs, network.stations, network.curves, network.demand):
        for field in fields(record):
            values = getattr(record, field.name)
            if isinstance(values, np.ndarray):
                with pytest.raises(ValueError, match="read-only"):
                    values[...] = values


def dense(network: Network) -> np.ndarray:
    """(L, I) incidence by plain loops."""
    answer = np.zeros((network.n_legs, network.n_itineraries))
    for i in range(network.n_itineraries):
        for leg in network.path_leg[network.path_start[i] : network.path_start[i + 1]]:
            answer[leg, i] = 1
    return answer


@given(plans(max_legs=6), st.integers(0, 1000))
@settings(deadline=None, max_examples=100)
def test_sums_along_paths_are_those_of_the_dense_matrix(plan: Plan, seed: int) -> None:
    network, rng = plan.network(), np.random.default_rng(seed)
    incidence = dense(network)
    per_leg, per_product = rng.random(network.n_legs), rng.random(network.n_products)
    member = np.eye(network.n_itineraries)[:, network.product_itinerary]
    np.testing.assert_array_equal(network.incidence.toarray(), incidence)
    np.testing.assert_allclose(network.path_sum(per_leg), incidence.T @ per_leg)
    np.testing.assert_allclose(network.displacement(per_leg), (incidence.T @ per_leg)[network.product_itinerary])
    np.testing.assert_allclose(network.leg_load(per_product), incidence @ member @ per_product, atol=1e-12)
    least = [network.remaining[incidence[:, i] > 0].min() for i in range(network.n_itineraries)]
    assert network.path_remaining.tolist() == least


@pytest.mark.parametrize("method", ["path_sum", "displacement", "leg_load"])
def test_figures_of_another_length_are_refused(method: str, network: Network) -> None:
    wanted = network.n_products if method == "leg_load" else network.n_legs
    with pytest.raises(ValueError, match="expected one figure"):
        getattr(network, method)(np.zeros(wanted + 1))


def test_products_of_an_itinerary_stand_together(network: Network) -> None:
    for i in range(network.n_itineraries):
        rows = np.flatnonzero(network.product_itinerary == i)
        assert rows.tolist() == list(range(network.product_start[i], network.product_start[i + 1]))


def test_a_subnetwork_keeps_what_was_chosen(network: Network) -> None:
    part = network.subnetwork(np.array([0, 2, 3]), np.array([0, 2, 4, 5]))
    assert part.legs.name.tolist() == ["L1", "L3", "L4"]
    assert part.itinerary.tolist() == ["NOR-HUB", "HUB-OST", "NOR-OST", "OST-NOR"]
    assert part.path_leg.tolist() == [0, 1, 0, 1, 2]
    assert part.fare.tolist() == [120, 80, 45.5, 140, 90, 210, 130, 150, 95]
    assert part.remaining.tolist() == [12, 8, 6]
    assert len(part.stations) == len(network.stations)


def test_a_subnetwork_of_everything_is_the_network(network: Network) -> None:
    whole = network.subnetwork(np.arange(network.n_legs), np.arange(network.n_itineraries))
    for field in fields(network):
        found, expected = getattr(whole, field.name), getattr(network, field.name)
        if isinstance(expected, np.ndarray):
            np.testing.assert_array_equal(found, expected)


def test_an_itinerary_must_not_leave_a_subnetwork(network: Network) -> None:
    with pytest.raises(ValueError, match="leaves the chosen legs"):
        network.subnetwork(np.array([0]), np.array([3]))


def test_other_seats_leave_the_rest_alone(network: Network) -> None:
    seats = network.remaining + 1
    other = network.with_remaining(seats)
    seats[0] = 99
    assert other.remaining.tolist() == (network.remaining + 1).tolist()
    assert other.fare is network.fare


@given(st.lists(st.tuples(st.integers(0, 20), st.integers(0, 5)), max_size=8))
def test_ranges_are_those_of_arange(pairs: list[tuple[int, int]]) -> None:
    start, length = (np.array([pair[n] for pair in pairs], dtype=np.int64) for n in (0, 1))
    expected = [value for first, count in pairs for value in range(first, first + count)]
    assert ranges(start, length).tolist() == expected
