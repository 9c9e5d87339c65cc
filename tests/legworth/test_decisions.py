"""Accept or refuse: every answer recomputed by hand, from plain bid prices and from price curves."""

from __future__ import annotations

import json
from datetime import datetime
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet
import pytest

from legworth.decisions import Reason, Requests, decide
from legworth.price_table import PriceTable, read_prices
from network import Network, read_folder
from tests.commands import run
from tests.folders import Folder

DAY = 86_400.0


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return Folder().write(tmp_path_factory.mktemp("network"))


@pytest.fixture(scope="module")
def priced(folder: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    """The folder priced without and with price curves."""
    out = {kind: tmp_path_factory.mktemp(kind) for kind in ("none", "decomposition", "fare-splits")}
    for kind, path in out.items():
        assert run("price", folder, "--out", path, "--curves", kind).code == 0
    return out


def asked(network: Network, itinerary: str, fare: float, seats: int = 1, days_early: float = 0.0) -> Requests:
    position = np.flatnonzero(network.itinerary == itinerary)
    return Requests(
        itinerary=np.array([position[0] if len(position) else -1]),
        product=np.array([-1]),
        fare=np.array([fare]),
        seats=np.array([seats]),
        moment=np.array([network.as_of.timestamp() + days_early * DAY]),
    )


def test_plain_bid_prices_decide_by_their_sum(folder: Path, priced: dict[str, Path]) -> None:
    network = read_folder(folder).network
    table = read_prices(priced["none"], network)
    price = pd.read_csv(priced["none"] / "bid_prices.csv", index_col="leg")["bid_price"]
    path = price["L1"] + price["L2"]
    for fare, seats, accepted in ((path + 0.01, 1, True), (path - 0.01, 1, False), (path, 3, True)):
        found = decide(network, table, asked(network, "NOR-SUD", fare, seats))
        assert found.accepted[0] == accepted
        assert found.displacement[0] == pytest.approx(seats * path)
        dearest = "L1" if price["L1"] >= price["L2"] else "L2"
        assert network.legs.name[found.binding_leg[0]] == dearest


@pytest.mark.parametrize("kind", ["decomposition", "fare-splits"])
def test_price_curves_decide_by_seats_left_and_day(folder: Path, priced: dict[str, Path], kind: str) -> None:
    network = read_folder(folder).network
    table = read_prices(priced[kind], network)
    curves = pd.read_csv(priced[kind] / "price_curves.csv")
    departs = datetime.fromisoformat("2030-03-01T06:00+01:00"), datetime.fromisoformat("2030-03-01T08:30+01:00")
    for early in (0.0, 0.3, 1.6, 3.2):
        for seats in (1, 2, 5):
            total = 0.0
            for leg, instant, left in zip(("L1", "L2"), departs, (12, 9), strict=True):
                days = (instant.timestamp() - network.as_of.timestamp()) / DAY - early
                rows = curves[curves["leg"] == leg]
                block = rows[rows["days_before"] == rows["days_before"][rows["days_before"] >= days - 1e-12].min()]
                wanted = block["remaining"].between(left - seats + 1, left)
                assert wanted.sum() == seats
                total += block["bid_price"][wanted].sum()
            for fare, accepted in ((total / seats + 1e-3, True), (total / seats - 1e-3, False)):
                found = decide(network, table, asked(network, "NOR-SUD", fare, seats, early))
                assert found.displacement[0] == pytest.approx(total, rel=1e-9, abs=1e-9)
                assert found.accepted[0] == (accepted or total < 1e-9)


def test_prices_of_curves_fall_with_seats_and_never_below_zero(priced: dict[str, Path]) -> None:
    for kind in ("decomposition", "fare-splits"):
        curves = pd.read_csv(priced[kind] / "price_curves.csv")
        assert (curves["bid_price"] >= 0).all()
        for _, block in curves.groupby(["leg", "days_before"]):
            assert (block["remaining"].to_numpy() == np.arange(1, len(block) + 1)).all()
            assert (np.diff(block["bid_price"]) <= 1e-9).all()


def test_every_kind_of_request_has_its_own_answer(folder: Path, priced: dict[str, Path], tmp_path: Path) -> None:
    rows = [
        ("good", "NOR-SUD", "A", "", "1", "", Reason.FARE_REACHES_PRICE, "Accepted"),
        ("cheap", "NOR-SUD", "", "0.01", "", "", Reason.FARE_BELOW_PRICE, "below the price"),
        ("nowhere", "NOR-NOWHERE", "A", "", "1", "", Reason.UNKNOWN_ITINERARY, "not known"),
        ("other class", "NOR-OST", "C", "", "1", "", Reason.UNKNOWN_PRODUCT, "not sold in this fare class"),
        ("free", "NOR-OST", "", "", "1", "", Reason.NO_FARE, "neither a fare nor a fare class"),
        ("nobody", "NOR-OST", "A", "", "0", "", Reason.NO_PASSENGERS, "nobody"),
        ("less", "NOR-OST", "A", "", "-2", "", Reason.NO_PASSENGERS, "nobody"),
        ("crowd", "NOR-SUD", "A", "", "10", "", Reason.TOO_FEW_SEATS, "L2 has fewer than 10"),
        ("late", "NOR-SUD", "A", "", "1", "2030-03-01T07:00+01:00", Reason.DEPARTED, "L1 has departed"),
    ]
    header = "request,itinerary,fare_class,fare,seats,moment\n"
    wanted = tmp_path / "wanted.csv"
    wanted.write_text(header + "".join(",".join(row[:6]) + "\n" for row in rows))
    answers = tmp_path / "answers.parquet"
    outcome = run("decide", folder, "--prices", priced["none"], "--requests", wanted, "--out", answers)
    assert outcome.code == 0
    found = pd.read_parquet(answers).set_index("request")
    for name, *_, reason, words in rows:
        assert found.loc[name, "reason"] == reason.name.lower()
        assert words in found.loc[name, "sentence"]
        assert (found.loc[name, "answer"] == "accept") == (reason is Reason.FARE_REACHES_PRICE)


def test_a_sold_out_leg_and_a_leg_without_price_are_named(folder: Path, priced: dict[str, Path]) -> None:
    network = read_folder(folder).network
    table = read_prices(priced["none"], network)
    full = network.with_remaining(np.where(network.legs.name == "L2", 0, network.remaining))
    found = decide(full, table, asked(network, "NOR-SUD", 500.0))
    assert found.reason[0] == Reason.NO_SEATS
    assert network.legs.name[found.binding_leg[0]] == "L2"
    unpriced = PriceTable(
        np.where(network.legs.name == "L1", np.nan, table.bid_price),
        table.first_block,
        table.days,
        table.first_seat,
        table.price,
    )
    found = decide(network, unpriced, asked(network, "NOR-SUD", 500.0))
    assert found.reason[0] == Reason.NO_PRICE
    assert network.legs.name[found.binding_leg[0]] == "L1"


def test_what_is_printed_lets_the_answer_be_worked_out_again(folder: Path, priced: dict[str, Path]) -> None:
    for kind in ("none", "decomposition"):
        outcome = run(
            *("decide", folder, "--prices", priced[kind], "--itinerary", "NOR-SUD", "--fare-class", "B"),
            *("--seats", "3", "--json"),
        )
        answer = json.loads(outcome.out)["decisions"][0]
        parts = [float(part) for part in answer["leg_prices"].split("+")]
        assert sum(parts) == pytest.approx(answer["displacement"], abs=0.011)
        assert (answer["answer"] == "accept") == (3 * answer["fare"] >= answer["displacement"])
        assert answer["fare"] == 125.0


def test_faults_in_requests_and_prices_are_listed(folder: Path, priced: dict[str, Path], tmp_path: Path) -> None:
    bad = tmp_path / "bad.csv"
    bad.write_text("request,itinerary,seats\na,NOR-SUD,two\na,NOR-SUD,1\n")
    outcome = run("decide", folder, "--prices", priced["none"], "--requests", bad)
    assert outcome.code == 2
    assert "bad.csv:2: seats: 'two'" in outcome.err
    assert "bad.csv:3: request:" in outcome.err
    assert run("decide", folder, "--prices", tmp_path, "--itinerary", "NOR-SUD").code == 2
    assert run("decide", folder, "--prices", priced["none"]).code == 2
    strange = tmp_path / "strange"
    strange.mkdir()
    (strange / "bid_prices.csv").write_text(
        "leg,bid_price,next_seat,remaining,expected_sales\nL1,5,4,3,2\nL77,5,4,3,2\n"
    )
    outcome = run("decide", folder, "--prices", strange, "--itinerary", "NOR-SUD", "--fare", "10")
    assert outcome.code == 2
    assert "bid_prices.csv:3: leg: 'L77' is not a leg of the network" in outcome.err


def test_answers_in_bulk_equal_answers_one_by_one(folder: Path, priced: dict[str, Path]) -> None:
    network = read_folder(folder).network
    table = read_prices(priced["decomposition"], network)
    rng = np.random.default_rng(4)
    m = 300
    product = rng.integers(0, network.n_products, m)
    many = Requests(
        itinerary=np.where(rng.random(m) < 0.05, -1, network.product_itinerary[product]).astype(np.int64),
        product=np.where(rng.random(m) < 0.2, -1, product),
        fare=np.where(rng.random(m) < 0.5, np.nan, rng.uniform(0, 200, m)),
        seats=rng.integers(0, 12, m),
        moment=network.as_of.timestamp() + rng.uniform(-1, 8, m) * DAY,
    )
    together = decide(network, table, many)
    for i in range(m):
        one = Requests(
            *(getattr(many, name)[i : i + 1] for name in ("itinerary", "product", "fare", "seats", "moment"))
        )
        alone = decide(network, table, one)
        assert alone.reason[0] == together.reason[i]
        assert alone.binding_leg[0] == together.binding_leg[i]
        np.testing.assert_allclose(alone.displacement[0], together.displacement[i], rtol=1e-9, equal_nan=True)


def one_leg_table(prices: list[float]) -> PriceTable:
    """Price table of one leg with one block, in force from ten days before departure."""
    ends = np.array([0, 1])
    return PriceTable(np.array([5.0]), ends, np.array([10.0]), np.array([0, len(prices)]), np.array(prices))


@pytest.mark.parametrize(
    ("remaining", "party", "total"),
    [(5, 1, 10), (5, 2, 40), (3, 3, 210), (12, 8, 7 * 10 + 10), (12, 7, 70), (7, 4, 10 + 10 + 10 + 30), (7, 1, 10)],
)
def test_a_party_pays_seat_by_seat_and_seats_beyond_the_curve_cost_its_last(
    remaining: int, party: int, total: float
) -> None:
    table = one_leg_table([90.0, 70.0, 50.0, 30.0, 10.0])
    found = table.party_price(np.array([0]), np.array([3.0]), np.array([remaining]), np.array([party]))
    assert found.tolist() == [total]


@pytest.mark.parametrize("kind", ["none", "decomposition"])
def test_one_price_equals_prices_in_bulk(folder: Path, priced: dict[str, Path], kind: str) -> None:
    table = read_prices(priced[kind], read_folder(folder).network)
    draw = np.random.default_rng(3)
    leg = draw.integers(0, len(table.bid_price), 500)
    party = draw.integers(1, 9, 500)
    remaining = party + draw.integers(0, 30, 500)
    days = draw.exponential(20.0, 500)
    days[:60] = draw.choice(table.days, 60) if table.has_curves else 1.0
    found = table.party_price(leg, days, remaining, party)
    single = [table.one_party_price(*each) for each in zip(leg, days, remaining, party, strict=True)]
    np.testing.assert_array_equal(found, single)


def test_prices_of_another_snapshot_or_currency_are_noticed(
    folder: Path, priced: dict[str, Path], tmp_path: Path
) -> None:
    later = Folder().replace("network.toml", "2030-02-25T02:30", "2030-02-26T02:30").write(tmp_path / "later")
    outcome = run("decide", later, "--prices", priced["none"], "--itinerary", "NOR-SUD", "--fare", "300")
    assert "CAUTION: this folder's snapshot is 2030-02-26" in outcome.out
    dollars = Folder().replace("network.toml", '"EUR"', '"USD"').write(tmp_path / "dollars")
    outcome = run("decide", dollars, "--prices", priced["none"], "--itinerary", "NOR-SUD", "--fare", "300")
    assert (outcome.code, "price it again" in outcome.err) == (2, True)


def test_a_gap_in_a_price_curve_is_a_fault(folder: Path, priced: dict[str, Path], tmp_path: Path) -> None:
    lines = (priced["decomposition"] / "price_curves.csv").read_text().splitlines(keepends=True)
    (tmp_path / "bid_prices.csv").write_text((priced["decomposition"] / "bid_prices.csv").read_text())
    (tmp_path / "price_curves.csv").write_text("".join(lines[:2] + lines[3:]))
    outcome = run("decide", folder, "--prices", tmp_path, "--itinerary", "NOR-SUD", "--fare", "300")
    assert outcome.code == 2
    assert "price_curves.csv:3: remaining: 3 stands where the price for 2 seats left is missing" in outcome.err


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["--fare", "nan", "--fare-class", "A"], "'--fare': 'nan' is not a finite number"),
        (["--fare", "1e300"], "'--fare': 1e+300 is not in the range"),
        (["--seats", "0"], "'--seats': 0 is not in the range"),
        (["--moment", "2030-02-27T12:00"], "'--moment': '2030-02-27T12:00' has no offset"),
        (["--moment", "noon"], "'--moment': 'noon' is not a date and time"),
        (
            ["--moment", "2030-02-25T02:29:59+01:00"],
            "--moment 2030-02-25T02:29:59+01:00 is before the snapshot, 2030-02-25T02:30:00+01:00",
        ),
    ],
)
def test_a_request_that_cannot_be_judged_is_refused(
    options: list[str], words: str, folder: Path, priced: dict[str, Path]
) -> None:
    outcome = run("decide", folder, "--prices", priced["none"], "--itinerary", "NOR-SUD", *options)
    assert (outcome.code, outcome.out) == (2, "")
    assert words in outcome.err


def test_a_request_at_the_snapshot_is_judged(folder: Path, priced: dict[str, Path]) -> None:
    arguments = ("decide", folder, "--prices", priced["none"], "--itinerary", "NOR-SUD", "--fare-class", "A")
    outcome = run(*arguments, "--moment", "2030-02-25T01:30Z")
    assert outcome.code == 0
    assert outcome.out == run(*arguments).out


def test_moments_before_the_snapshot_are_faults_of_the_table(
    folder: Path, priced: dict[str, Path], tmp_path: Path
) -> None:
    """Neither the seats nor the prices of that time are known."""
    table = tmp_path / "early.csv"
    moments = ("2030-02-25T02:30+01:00", "2030-02-25T02:29+01:00", "0001-01-01T00:00+14:00", "", "2030-02-25T01:29:59Z")
    table.write_text("request,itinerary,moment\n" + "".join(f"{n},NOR-SUD,{m}\n" for n, m in enumerate(moments)))
    outcome = run("decide", folder, "--prices", priced["none"], "--requests", table)
    *lines, last = outcome.err.splitlines()
    assert (outcome.code, last) == (2, "3 faults; nothing was computed or written")
    assert [line.partition(" is before the snapshot")[0] for line in lines] == [
        "early.csv:3: moment: 2030-02-25T02:29:00+01:00",
        "early.csv:4: moment: 0001-01-01T00:00:00+14:00",
        "early.csv:6: moment: 2030-02-25T01:29:59+00:00",
    ]
    assert all("2030-02-25T02:30:00+01:00" in line for line in lines)


@pytest.mark.parametrize("value", ["nan", "inf", "-1"])
def test_fares_of_a_table_are_figures(value: str, folder: Path, priced: dict[str, Path], tmp_path: Path) -> None:
    (tmp_path / "r.csv").write_text(f"request,itinerary,fare_class,fare\n1,NOR-SUD,A,{value}\n")
    columns = {"request": ["1"], "itinerary": ["NOR-SUD"], "fare_class": ["A"], "fare": [float(value)]}
    pyarrow.parquet.write_table(pa.table(columns), tmp_path / "r.parquet")
    for place in ("r.csv:2", "r.parquet:1"):
        outcome = run("decide", folder, "--prices", priced["none"], "--requests", tmp_path / place.partition(":")[0])
        assert (outcome.code, outcome.out) == (2, "")
        assert f"{place}: fare: " in outcome.err


def test_options_of_one_request_do_not_stand_beside_a_table(folder: Path, priced: dict[str, Path]) -> None:
    outcome = run("decide", folder, "--prices", priced["none"], "--requests", "r.csv", "--fare", "5", "--seats", "2")
    assert outcome.code == 2
    assert "leave --fare and --seats out" in outcome.err
