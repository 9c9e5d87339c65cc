"""The array-wise loop answers as a plain loop does, and earns what closed forms say."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from heuristics import leg_products
from heuristics.arrivals import ArrivalPlan
from heuristics.dynamic import price_curves
from legworth.control import compare_controls, leg_control
from legworth.simulation.entries import entries_of, play_anew, play_schedule, prepare_schedule
from legworth.simulation.forecast import reading_instants
from legworth.simulation.methods import METHODS, bid_prices
from legworth.simulation.play import Bookings, play
from legworth.simulation.requests import RequestPaths, draw_requests
from legworth.simulation.rules import PriceRule, Rule, SeatRule, Situation
from lp import Method as Program
from network import Network
from network.arrays import IntArray
from tests.legworth.simulation.cases import hub_in_time, leg_in_time, plain_play, revenue_of

QUICK = [name for name in METHODS if name not in ("randomised", "fare-splits")]


def played(network: Network, rule: Rule, requests: RequestPaths) -> tuple[np.ndarray, IntArray]:
    situation = Situation.of(network)
    bookings = Bookings.none(situation, requests)
    play(requests, rule, situation, bookings)
    return bookings.accepted, bookings.legs


@pytest.mark.parametrize("name", QUICK)
@pytest.mark.parametrize("seed", [1, 2])
def test_the_loop_answers_as_a_plain_one(name: str, seed: int) -> None:
    network = hub_in_time(seed)
    situation = Situation.of(network)
    rule = METHODS[name].prepare(network, situation)
    requests = draw_requests(network, np.arange(6), seed)
    accepted, left = played(network, rule, requests)
    adjusted = np.append(network.fare, 0.0) * (1 + 1e-9)

    def accepts(product: int, at: float, seats: IntArray) -> bool:
        legs = situation.legs[product]
        legs = legs[legs < network.n_legs]
        if isinstance(rule, SeatRule):
            return bool(np.all(seats[legs] >= rule.need[0, product, : len(legs)]))
        assert isinstance(rule, PriceRule)
        days = situation.days_now[legs] - at
        asked = sum(rule.table.price(int(k), seats[k : k + 1], float(d))[0] for k, d in zip(legs, days, strict=True))
        return bool(adjusted[product] >= asked)

    for path in range(6):
        answers, seats = plain_play(network, requests, path, accepts)
        assert accepted[:, path].tolist() == answers
        assert left[path].tolist() == seats.tolist()


@pytest.mark.parametrize("name", [*QUICK, "leg+", "deterministic+", "adjusted+", "curves+"])
def test_capacity_is_never_exceeded(name: str) -> None:
    network = hub_in_time(3)
    situation, instants = Situation.of(network), reading_instants(network, None, 4)
    requests = draw_requests(network, np.arange(8), 11)
    (entry,) = entries_of([name])
    if entry.path_by_path:
        accepted, left = play_anew(requests, entry, network, situation, instants)
    else:
        accepted, left = play_schedule(requests, prepare_schedule(entry, network, situation, instants), situation)
    assert accepted.any()
    assert not accepted[~requests.real].any()
    load = np.zeros((8, network.n_legs), dtype=np.int64)
    row, path = np.nonzero(accepted)
    uses = network.incidence.toarray().astype(np.int64)[:, network.product_itinerary].T
    np.add.at(load, path, uses[requests.product[row, path]])
    assert np.all(load <= network.remaining)
    np.testing.assert_array_equal(left, network.remaining - load)


@pytest.mark.parametrize(("seats", "mean", "deviation"), [(10, 8.0, 8.0**0.5), (10, 12.0, 12.0**0.5), (10, 9.0, 6.0)])
def test_first_come_first_served_on_one_leg_sells_the_lesser_of_demand_and_seats(
    seats: int, mean: float, deviation: float
) -> None:
    # E[min(D, c)] = sum over k = 1..c of P(D >= k), by the laws of scipy.
    network = leg_in_time(seats, [(120.0, mean, deviation)], 30.0)
    requests = draw_requests(network, np.arange(4000), 5)
    situation = Situation.of(network)
    accepted, _ = played(network, METHODS["first-come"].prepare(network, situation), requests)
    variance = deviation**2
    law = stats.poisson(mean) if variance <= mean * 1.05 else stats.nbinom(mean**2 / (variance - mean), mean / variance)
    closed = 120.0 * float(law.sf(np.arange(seats)).sum())
    revenue = revenue_of(network, requests, accepted)
    assert abs(revenue.mean() - closed) <= 3 * revenue.std(ddof=1) / 4000**0.5


def test_two_classes_low_before_high_earn_what_the_two_class_rule_expects() -> None:
    # K. Littlewood (1972): with y seats kept, low sells min(D_L, c - y) and high min(D_H, c - low), low coming first.
    seats, (high, low) = 20, (200.0, 90.0)
    network = leg_in_time(seats, [(high, 9.0, 3.0), (low, 22.0, 22.0**0.5)], 30.0)
    law_high, law_low = stats.poisson(9.0), stats.poisson(22.0)
    kept = next(y for y in range(seats + 1) if high * law_high.sf(y) < low)
    demand = draw_requests(network, np.arange(4000), 9).demand
    product = np.concatenate([np.repeat([1, 0], [low_, high_]) for high_, low_ in demand])
    path = np.repeat(np.arange(4000), demand.sum(axis=1))
    at = np.where(product == 1, 1.0, 2.0)
    requests = RequestPaths.of(product, at, path, 4000, 2)
    rule = METHODS["leg"].prepare(network, Situation.of(network))
    accepted, _ = played(network, rule, requests)
    expected = 0.0
    for sold in range(seats - kept + 1):
        chance = law_low.pmf(sold) if sold < seats - kept else law_low.sf(sold - 1)
        expected += chance * (low * sold + high * law_high.sf(np.arange(seats - sold)).sum())
    revenue = revenue_of(network, requests, accepted)
    assert abs(revenue.mean() - expected) <= 3 * revenue.std(ddof=1) / 4000**0.5
    # Independent of our EMSR-b: the seats kept against the low class.
    assert isinstance(rule, SeatRule)
    assert rule.need[0, 1, 0] == kept + 1


@pytest.mark.parametrize("curve", [0, 1, -1])
def test_price_curves_of_one_leg_earn_the_value_of_the_program(curve: int) -> None:
    # On one leg with Poisson requests the program's policy is optimal and V its expected revenue.
    products = [(220.0, 5.0, 5.0**0.5), (130.0, 6.0, 6.0**0.5), (70.0, 9.0, 3.0)]
    network = leg_in_time(12, products, 40.0, curve)
    plan = ArrivalPlan.of(network, leg_products(network, np.zeros(1)))
    value = float(price_curves(plan, network.remaining).total[0])
    requests = draw_requests(network, np.arange(4000), 21)
    accepted, _ = played(network, METHODS["curves"].prepare(network, Situation.of(network)), requests)
    revenue = revenue_of(network, requests, accepted)
    assert abs(revenue.mean() - value) <= 3 * revenue.std(ddof=1) / 4000**0.5


@pytest.mark.parametrize("seed", [1, 5, 6])
def test_at_the_snapshot_controls_open_what_pricing_says(seed: int) -> None:
    network = hub_in_time(seed)
    situation = Situation.of(network)
    one_each = np.arange(network.n_products, dtype=np.int32)[None, :]
    requests = RequestPaths(one_each, np.zeros(one_each.shape), network.n_products)
    prices = bid_prices(network, Program.PROBABILISTIC)
    controls = compare_controls(network, prices)
    open_to = {
        "probabilistic": controls.connections.open,
        "leg": controls.connections.open_by_leg_control,
    }
    for name, wanted in open_to.items():
        accepted, _ = played(network, METHODS[name].prepare(network, situation), requests)
        np.testing.assert_array_equal(accepted[0], wanted)
    by_product = leg_control(network, bid_prices(network, Program.DETERMINISTIC))
    limit = np.full(network.n_products, np.inf)
    np.minimum.at(limit, by_product.products.product, by_product.booking_limit)
    accepted, _ = played(network, METHODS["adjusted"].prepare(network, situation), requests)
    np.testing.assert_array_equal(accepted[0], limit > 0)


def test_rules_for_every_path_answer_as_each_alone() -> None:
    network = hub_in_time(8)
    situation = Situation.of(network)
    requests = draw_requests(network, np.arange(3), 2)
    lean = network.with_remaining(np.maximum(network.remaining - 3, 0))
    for name in ("deterministic", "adjusted", "curves"):
        method = METHODS[name]
        rules = [
            method.prepare(network, situation),
            method.prepare(lean, situation),
            method.prepare(network, situation),
        ]
        together, _ = played(network, type(rules[0]).stacked(rules), requests)
        for path, rule in enumerate(rules):
            alone, _ = played(network, rule, requests)
            np.testing.assert_array_equal(together[:, path], alone[:, path])
