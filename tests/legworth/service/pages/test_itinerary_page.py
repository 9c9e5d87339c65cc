"""What the itinerary page shows, against other ways to the same figure."""

from __future__ import annotations

from legworth.service.served_part import read_part
from legworth.store import Store
from lp import LpOptions, solve_network
from tests.legworth.service.pages.hostile_night import NAMES, Browser, itinerary_named
from tests.legworth.service.pages.reading import check_page


def test_party_price_is_what_the_interface_answers(browser: Browser) -> None:
    for size in (1, 2, 5):
        asked = {"itinerary": NAMES["NOR-SUD"], "fare": 0, "seats": size}
        answer = browser.post("/v1/decisions", json=asked).json()
        page = check_page(browser.get(itinerary_named("NOR-SUD", n=size))).text
        assert f"pay{'s' if size == 1 else ''} at least {answer['displacement'] / size:,.2f}" in page


def test_exact_displacement_is_the_difference_of_two_solves(browser: Browser, store: Store) -> None:
    night = store.in_force()
    assert night is not None
    part_name = night.table("legs", ["leg"]).to_pandas().set_index("leg")["part"][NAMES["L1"]]
    network = read_part(night.folder / f"part={part_name}", part_name).network
    at = list(network.itinerary).index(NAMES["NOR-SUD"])
    fewer = network.remaining.copy()
    fewer[network.path_leg[network.path_start[at] : network.path_start[at + 1]]] -= 4
    values = [solve_network(each, LpOptions()).objective for each in (network, network.with_remaining(fewer))]
    address = itinerary_named("NOR-SUD", n=4).replace("/itinerary?", "/itinerary/exact?")
    response = browser.get(address)
    while response.status_code == 202:
        response = browser.get(address)
    assert f"{values[0] - values[1]:,.2f}" in check_page(response).text
