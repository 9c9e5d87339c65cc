"""Why prices moved: every step against a network in which only that much has changed."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import poisson

from legworth.refresh import changes_causes
from legworth.refresh.changes import ChangesOptions, find_changes
from legworth.refresh.changes_causes import How
from legworth.refresh.changes_networks import NetworkPair, leg_alone
from legworth.refresh.changes_prices import ExplainOptions, PriceMove
from legworth.store import Night, Store
from lp import LpOptions, Method, solve
from network import read_folder
from tests.folders import Folder
from tests.legworth.refresh.changes_cases import NeverAnswers, hub_folder, publish_folder
from tests.networks import Plan, examples, plans

IN1 = 2
"""Line of ``in1`` in legs.csv, and of its dearest fare and demand in the tables of products."""


@pytest.fixture
def store(tmp_path: Path) -> Store:
    return Store.open(tmp_path / "store", create=True)


def seats_changed(folder: Folder) -> Folder:
    return folder.cell("legs.csv", IN1, "sold", "31")


def demand_changed(folder: Folder) -> Folder:
    """Demand of all products through ``in1``, and of no other."""
    for number, line in enumerate(folder.text("demand.csv").splitlines(), start=1):
        if line.startswith("in") and "-1," in line:
            folder.cell("demand.csv", number, "mean", f"{float(line.split(',')[2]) * 1.3:.3f}")
    return folder


def fares_changed(folder: Folder) -> Folder:
    for number, line in enumerate(folder.text("fares.csv").splitlines(), start=1):
        if line.startswith("in") and "-1," in line:
            folder.cell("fares.csv", number, "fare", f"{float(line.split(',')[2]) * 1.1:.2f}")
    return folder


def rest_changed(folder: Folder) -> Folder:
    return (
        folder.cell("legs.csv", 4, "sold", "28")
        .add("itineraries.csv", "back+far-1,back1 far1")
        .add("fares.csv", "back+far-1,A,420")
        .add("demand.csv", "back+far-1,A,4,2")
    )


def price(folder: Folder, place: Path, leg: str = "in1") -> float:
    network = read_folder(folder.write(place)).network
    return float(solve(network).bid_price[network.legs.name == leg][0])


def move_of(tonight: Night, last: Night, leg: str, explain: ExplainOptions | None = None) -> PriceMove:
    options = ChangesOptions(explain=explain or ExplainOptions())
    prices = find_changes(tonight, last, options=options).prices
    assert prices is not None
    return next(move for move in prices.moves if move.leg == leg)


def test_each_step_is_the_price_of_a_network_with_just_that_changed(store: Store, tmp_path: Path) -> None:
    changes = (seats_changed, demand_changed, fares_changed, rest_changed)
    folder, prices = hub_folder(), [price(hub_folder(), tmp_path / "base")]
    last = publish_folder(store, folder, tmp_path)
    prices.extend(price(change(folder), tmp_path / change.__name__) for change in changes)
    move = move_of(publish_folder(store, folder, tmp_path), last, "in1")
    cause = move.cause
    assert cause.how is How.PART
    steps = [cause.seats, cause.demand, cause.fares, cause.neighbours]
    assert steps == pytest.approx(np.diff(prices).tolist(), abs=1e-6)
    assert sum(steps) == pytest.approx(move.now - move.then, abs=1e-12)
    assert all(abs(step) > 0.5 for step in steps)
    assert cause.facts is not None
    assert cause.facts.fares_changed == 9
    assert cause.facts.fare_now == pytest.approx(1.1 * cause.facts.fare_then, rel=1e-3)


def test_a_leg_whose_inputs_stand_moves_by_its_neighbours_alone(store: Store, tmp_path: Path) -> None:
    last = publish_folder(store, hub_folder(), tmp_path)
    move = move_of(publish_folder(store, seats_changed(hub_folder()), tmp_path), last, "far1")
    assert (move.cause.seats, move.cause.demand, move.cause.fares) == (0, 0, 0)
    assert move.cause.neighbours == move.now - move.then
    assert move.cause.facts is not None
    assert move.cause.facts.neighbour == "in1"


def single_leg(sold: int) -> Folder:
    folder = Folder().drop("booking_curves.csv")
    folder.put(
        "legs.csv",
        f"""leg,origin,destination,departs,arrives,capacity,sold
L1,NOR,HUB,2030-03-01T06:00+01:00,2030-03-01T07:30+01:00,20,{sold}
""",
    )
    folder.put("itineraries.csv", "itinerary,legs\nNOR-HUB,L1\n")
    folder.put("fares.csv", "itinerary,fare_class,fare\nNOR-HUB,A,200\nNOR-HUB,B,40\n")
    return folder.put(
        "demand.csv",
        """itinerary,fare_class,mean,deviation
NOR-HUB,A,9,3
NOR-HUB,B,30,5.5
""",
    )


@pytest.mark.parametrize("explain", [ExplainOptions(), ExplainOptions(parts=0)])
def test_seats_sold_on_one_leg_raise_the_price_as_the_two_class_rule_says(
    store: Store, tmp_path: Path, explain: ExplainOptions
) -> None:
    """Littlewood (1972), from memory: the last of c seats is worth f_H P(D_H >= c) while that exceeds the lower fare.

    The probabilities are those of scipy.stats.
    """
    last = publish_folder(store, single_leg(10), tmp_path)
    move = move_of(publish_folder(store, single_leg(12), tmp_path), last, "L1", explain)
    survivor = poisson(9).sf
    assert move.cause.seats == pytest.approx(200 * (survivor(8 - 1) - survivor(10 - 1)), abs=1e-6)
    assert move.cause.neighbours == pytest.approx(0, abs=1e-6)
    assert move.cause.how is (How.PART if explain.parts else How.LEG)


def test_beyond_the_work_allowed_the_leg_is_solved_alone_and_it_is_said(store: Store, tmp_path: Path) -> None:
    last = publish_folder(store, hub_folder(), tmp_path)
    both = seats_changed(hub_folder()).cell("legs.csv", 6, "sold", "30")
    tonight = publish_folder(store, both, tmp_path)
    for explain in (ExplainOptions(parts=0), ExplainOptions(products=0)):
        move = move_of(tonight, last, "in1", explain)
        assert move.cause.how is How.LEG
        assert move.cause.why_not
        assert move.cause.seats > 0
        total = move.cause.seats + move.cause.demand + move.cause.fares + move.cause.neighbours
        assert total == pytest.approx(move.move, abs=1e-12)
    prices = find_changes(tonight, last, options=ChangesOptions(explain=ExplainOptions(parts=1))).prices
    assert prices is not None
    part = {leg: leg[-1] for leg in (move.leg for move in prices.moves)}
    solved = {part[move.leg] for move in prices.moves if move.cause.how is How.PART}
    assert solved == {part[prices.moves[0].leg]}
    assert {move.cause.how for move in prices.moves} == {How.PART, How.LEG}


@pytest.mark.parametrize(("dies", "seconds"), [(True, 600.0), (False, 0.5)])
def test_a_process_that_dies_or_hangs_while_it_looks_for_causes_harms_no_other_part(
    dies: bool, seconds: float, store: Store, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    last = publish_folder(store, hub_folder(), tmp_path)
    both = seats_changed(hub_folder()).cell("legs.csv", 6, "sold", "30")
    tonight = publish_folder(store, both, tmp_path)
    here = find_changes(tonight, last).prices
    monkeypatch.setattr(changes_causes, "explain_part", NeverAnswers("2030-03-01", dies))
    apart = ChangesOptions(explain=ExplainOptions(jobs=2, seconds=seconds))
    found = find_changes(tonight, last, options=apart).prices
    assert here is not None
    assert found is not None
    assert {move.leg[-1] for move in here.moves} == {"1", "2"}
    for move, known in zip(found.moves, here.moves, strict=True):
        if move.leg.endswith("1"):
            assert (move.leg, move.move, move.cause.how) == (known.leg, known.move, How.NOT)
            assert ("died" if dies else "took more than 0.5 s") in move.cause.why_not
        elif dies:
            assert move == known  # answered by the other process, and the same


def test_another_program_tonight_is_noticed(store: Store, tmp_path: Path) -> None:
    """Last night's prices do not come out again, so the part is not split by a program that never made them."""
    last = publish_folder(store, hub_folder(), tmp_path)
    deterministic = LpOptions(method=Method.DETERMINISTIC)
    move = move_of(publish_folder(store, seats_changed(hub_folder()), tmp_path, lp=deterministic), last, "in1")
    assert move.cause.how is How.LEG
    assert "do not come out again" in move.cause.why_not


def test_a_part_that_cannot_be_read_again_is_told_as_such(store: Store, tmp_path: Path) -> None:
    last = publish_folder(store, hub_folder(), tmp_path)
    tonight = publish_folder(store, seats_changed(hub_folder()), tmp_path)
    (last.folder / "part=2030-03-01" / "fares.parquet").unlink()
    move = move_of(tonight, last, "in1")
    assert move.cause.how is How.NOT
    assert "cannot be read again" in move.cause.why_not


@examples(20)
@given(plans(), plans())
def test_each_network_of_a_pair_has_the_optimum_of_its_night(last: Plan, tonight: Plan) -> None:
    """Legs and products that only the other night has change neither revenue nor prices."""
    nights = [plan.network() for plan in (last, tonight)]
    pair = NetworkPair.of(nights[0], nights[1])
    for own, of_pair in zip(nights, (pair.last, pair.tonight), strict=True):
        alone, within = solve(own), solve(of_pair)
        assert within.objective == pytest.approx(alone.objective, abs=1e-6)
        place = [pair.leg(name) for name in own.legs.name]
        assert within.bid_price[place] == pytest.approx(alone.bid_price, abs=1e-6 * max(own.fare.max(initial=0), 1))


@examples(25)
@given(plans(max_legs=3), st.integers(0, 2))
def test_a_leg_alone_is_never_worth_less_than_within_the_network(plan: Plan, leg: int) -> None:
    """At the prices of the others its own price is one of its optimal duals, of which the last seat's is greatest."""
    network = plan.network()
    leg %= network.n_legs
    if network.remaining[leg] == 0:
        return
    prices = solve(network).bid_price
    alone = leg_alone(NetworkPair.of(network, network), leg, prices)
    assert solve(alone.last).bid_price[0] >= prices[leg] - 1e-6 * max(float(network.fare.max(initial=0.0)), 1.0)
