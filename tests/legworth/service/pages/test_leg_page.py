"""What the leg page shows, against other ways to the same figure; and waiting for a solve."""

from __future__ import annotations

import threading
from typing import Any

import pytest

from legworth.service.pages import leg as leg_page
from legworth.service.pages.leg_figures import one_more_sale, seat_value_chart
from legworth.service.served_part import read_part
from legworth.service.settings import ServiceSettings
from legworth.service.tokens import TokenFile
from legworth.store import Store
from lp import LpOptions, solve_network
from tests.legworth.service.pages.hostile_night import leg_named, opened
from tests.legworth.service.pages.reading import check_page


def test_one_more_sale_is_the_difference_of_two_solves(store: Store) -> None:
    night = store.in_force()
    assert night is not None
    for name in night.parts():
        network = read_part(night.folder / f"part={name}", name).network
        for leg in range(network.n_legs):
            fewer = network.remaining.copy()
            fewer[leg] -= 1
            values = [solve_network(each, LpOptions()).objective for each in (network, network.with_remaining(fewer))]
            found = one_more_sale(network, leg, LpOptions())
            assert found.value == pytest.approx(values[0] - values[1], abs=1e-6)
            assert found.left == network.remaining[leg]
            lost = sum(line.fare * line.passengers for line in found.displaced)
            assert lost == pytest.approx(found.value, abs=0.02 * sum(network.fare) / len(network.fare) + 0.01)


def test_seats_worth_the_bid_price_are_those_set_aside(store: Store) -> None:
    """Complementary slackness: seats worth more than the bid price are set aside, and none worth less."""
    night = store.in_force()
    assert night is not None
    proof = night.table("proof").to_pandas().set_index(["itinerary", "fare_class"])["allotted"]
    lines = 0
    for name in night.parts():
        part = read_part(night.folder / f"part={name}", name)
        for leg in range(part.network.n_legs):
            bid = float(part.prices.bid_price[leg])
            _, rows = seat_value_chart(part, leg)
            for row in rows:
                allotted = proof[(row.itinerary, row.fare_class)]
                tie = row.last is not None and abs(row.last - bid) <= 1e-6
                assert (
                    row.seats - 1 - 1e-9 <= allotted <= row.seats + 1e-9
                    if tie
                    else allotted == pytest.approx(row.seats)
                )
                lines += 1
    assert lines > 10


def test_leg_page_shows_seats_of_the_ledger_at_once(store: Store) -> None:
    token = TokenFile(store.path / "tokens.json").make("till", ("ask", "sell"))
    for browser in opened(store, ServiceSettings()):
        before = browser.get(leg_named("L4").replace("/leg?", "/leg/now.json?")).json()
        sold = browser.post(
            "/v1/sales",
            json={"itinerary": "OST-NOR", "fare": 5000, "seats": 2},
            headers={"Authorization": f"Bearer {token}", "Idempotency-Key": "pages-1"},
        )
        assert sold.status_code == 200
        after = browser.get(leg_named("L4").replace("/leg?", "/leg/now.json?")).json()
        assert int(after["remaining"]) == int(before["remaining"]) - 2
        assert float(after["price"]) > float(before["price"])
        page = check_page(browser.get(leg_named("L4"))).text
        assert f"now: {after['remaining']} left" in page


def test_a_long_solve_waits_on_a_page_that_looks_again(store: Store, monkeypatch: pytest.MonkeyPatch) -> None:
    go = threading.Event()
    real = leg_page.one_more_sale

    def slow(*words: Any) -> Any:
        assert go.wait(30)
        return real(*words)

    monkeypatch.setattr(leg_page, "one_more_sale", slow)
    monkeypatch.setattr(leg_page, "PATIENCE", 0.01)
    address = leg_named("L5").replace("/leg?", "/leg/displaced?")
    for browser in opened(store, ServiceSettings()):
        for _ in range(2):
            response = browser.get(address)
            assert response.status_code == 202
            assert ("meta", {"http-equiv": "refresh", "content": "2"}) in check_page(response).tags
        go.set()
        monkeypatch.setattr(leg_page, "PATIENCE", 30.0)
        response = browser.get(address)
        assert response.status_code == 200
        assert "What it displaces" in check_page(response).text
