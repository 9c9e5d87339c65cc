"""An optimum that was kept is certified again, and anything else is not."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from legworth.refresh.proof import Proof, certify_again, filled_columns
from lp import LpOptions, Method, Solution, deterministic_columns, probabilistic_columns, solve
from network import Network
from tests.networks import degenerate_plans, examples, hub_plan, plans

METHODS = st.sampled_from([Method.PROBABILISTIC, Method.DETERMINISTIC])


def kept(solution: Solution) -> Proof:
    return Proof(solution.allotted, solution.bid_price, solution.next_seat)


@examples(30)
@given(st.one_of(plans(), degenerate_plans()), METHODS)
def test_every_optimum_is_certified_again(plan, method) -> None:  # type: ignore[no-untyped-def]
    network, options = plan.network(), LpOptions(method)
    solution = solve(network, options)
    certificate = certify_again(network, kept(solution), options)
    assert certificate is not None
    assert certificate.primal == pytest.approx(solution.objective, rel=1e-9, abs=1e-9)


@examples(30)
@given(plans(), METHODS)
def test_the_seats_of_a_product_are_laid_into_its_columns(plan, method) -> None:  # type: ignore[no-untyped-def]
    network = plan.network()
    deterministic = method is Method.DETERMINISTIC
    columns = deterministic_columns(network) if deterministic else probabilistic_columns(network)
    solution = solve(network, LpOptions(method))
    seats = filled_columns(columns, solution.allotted)
    assert np.all((seats >= 0) & (seats <= columns.width))
    assert columns.sales(seats, network.n_products) == pytest.approx(solution.allotted, abs=1e-9)
    assert float(columns.value @ seats) == pytest.approx(solution.objective, rel=1e-9, abs=1e-9)


@pytest.fixture(scope="module")
def hub() -> tuple[Network, Proof]:
    network = hub_plan(3).network()
    return network, kept(solve(network))


def test_prices_or_seats_that_were_changed_are_not_certified(hub: tuple[Network, Proof]) -> None:
    network, proof = hub
    dearest = np.argmax(proof.bid_price)
    for factor in (0.8, 1.2):
        prices = proof.bid_price.copy()
        prices[dearest] *= factor
        assert certify_again(network, replace(proof, bid_price=prices), LpOptions()) is None
        assert certify_again(network, replace(proof, next_seat=prices), LpOptions()) is None
    seats = proof.allotted.copy()
    seats[np.argmax(seats)] += 1
    assert certify_again(network, replace(proof, allotted=seats), LpOptions()) is None


def test_other_data_are_not_certified(hub: tuple[Network, Proof]) -> None:
    network, proof = hub
    leg = int(np.argmax(proof.bid_price))
    fewer = network.remaining.copy()
    fewer[leg] -= 1
    dearer = network.fare.copy()
    dearer *= 1.01
    assert certify_again(network, proof, LpOptions()) is not None
    assert certify_again(network.with_remaining(fewer), proof, LpOptions()) is None
    assert certify_again(replace(network, fare=dearer), proof, LpOptions()) is None
    assert certify_again(network, proof, LpOptions(Method.DETERMINISTIC)) is None


def test_figures_that_are_none_are_not_certified(hub: tuple[Network, Proof]) -> None:
    network, proof = hub
    holed = proof.allotted.copy()
    holed[0] = np.nan
    for spoilt in (replace(proof, allotted=holed), replace(proof, bid_price=proof.bid_price[1:])):
        assert certify_again(network, spoilt, LpOptions()) is None


def test_a_leg_without_seats_is_published_with_its_next_seat_price() -> None:
    network = hub_plan(5).network()
    closed = network.remaining.copy()
    closed[:3] = 0
    network = network.with_remaining(closed)
    proof = kept(solve(network))
    assert certify_again(network, proof, LpOptions()) is not None
    other = proof.bid_price.copy()
    other[0] += 1.0
    assert certify_again(network, replace(proof, bid_price=other), LpOptions()) is None
