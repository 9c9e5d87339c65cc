"""What holds on every page: its links, names that would break it, and what is wrong or not there."""

from __future__ import annotations

import asyncio
from collections import deque
from pathlib import Path
from urllib.parse import parse_qs, urlencode, urljoin, urlsplit

import httpx
import pytest

from legworth.service.app import make_app
from legworth.service.settings import ServiceSettings
from legworth.store import Store
from tests.legworth.service.pages.hostile_night import NAMES, Browser, itinerary_named, leg_named
from tests.legworth.service.pages.reading import check_page


def test_every_link_of_every_page_answers(browser: Browser) -> None:
    seen: set[str] = set()
    waiting = deque(["/"])
    pages = 0
    while waiting:
        address = waiting.popleft()
        if address in seen:
            continue
        seen.add(address)
        response = browser.get(address)
        while response.status_code == 202:
            response = browser.get(address)
        assert response.status_code == 200, address
        path = urlsplit(address).path
        if path.startswith("/static") or path in ("/disagreements.csv", "/changes.html"):
            continue
        pages += 1
        for link in check_page(response).values("href"):
            target = urlsplit(urljoin(address, link))
            query = parse_qs(target.query)
            # Every sorting of every filter would be hundreds of the same; one of each page is enough.
            if "sort" in query and (query["sort"], query["down"]) != (["leg"], ["false"]) and "leg" not in query:
                continue
            waiting.append(target._replace(fragment="").geturl())
    paths = {urlsplit(address).path for address in seen}
    assert {"/", "/map", "/leg", "/leg/displaced", "/itinerary", "/pair", "/disagreements", "/changes"} <= paths
    assert pages > 25


@pytest.mark.parametrize("name", ["L1", "L2", "L3", "L4"])
def test_hostile_names_stand_on_their_pages_as_text(browser: Browser, name: str) -> None:
    response = browser.get(leg_named(name))
    assert response.status_code == 200
    page = check_page(response)
    assert NAMES.get(name, name) in page.text
    found = browser.get("/search?" + urlencode({"q": NAMES.get(name, name)}))
    assert found.status_code == 303
    assert found.headers["location"] == leg_named(name)


def test_hostile_itineraries_and_stations(browser: Browser) -> None:
    for name in ("NOR-HUB", "HUB-SUD", "NOR-SUD"):
        assert NAMES[name] in check_page(browser.get(itinerary_named(name, n=3))).text
    page = check_page(browser.get("/pair?" + urlencode({"from": NAMES["NOR"], "to": "SUD", "n": 2})))
    assert NAMES["NOR-SUD"] in page.text
    assert "</script><b>Norby</b>, 'Old' Town" in page.text
    page = check_page(browser.get("/search?" + urlencode({"q": "<b>"})))
    assert NAMES["NOR"] in page.text
    assert "49" not in check_page(browser.get("/search?q={{7*7}}")).text.split("Press")[0].split("come first")[1]


@pytest.mark.parametrize(
    ("address", "status"),
    [
        ("/leg?name=nobody", 404),
        ("/leg/displaced?name=nobody", 404),
        ("/leg/now.json?name=nobody", 404),
        ("/itinerary?name=nobody", 404),
        ("/itinerary/exact?name=nobody", 404),
        ("/pair?from=nobody&to=SUD", 404),
        ("/nowhere", 404),
        ("/leg", 400),
        (itinerary_named("NOR-SUD", n=0), 400),
        (itinerary_named("NOR-SUD", n="many"), 400),
        ("/map?figure=beauty", 400),
        ("/disagreements?least=-1%20OR%201=1", 400),
        ("/disagreements?page=0", 400),
        ("/itinerary/exact?" + urlencode({"name": NAMES["NOR-SUD"], "n": 5000}), 422),
    ],
)
def test_what_is_not_there_or_wrong_is_said_on_a_page(browser: Browser, address: str, status: int) -> None:
    response = browser.get(address)
    assert response.status_code == status
    check_page(response)


def test_addresses_of_programs_keep_their_errors(browser: Browser) -> None:
    response = browser.get("/v1/nowhere")
    assert response.status_code == 404
    assert response.headers["content-type"] == "application/problem+json"
    assert browser.post("/nowhere").status_code in (404, 405)


def test_what_is_passed_over(browser: Browser) -> None:
    assert "Nothing departs on 1999-01-01" in check_page(browser.get("/map?date=1999-01-01")).text
    assert check_page(browser.get("/map?sort=departs;drop&down=true")).text
    assert check_page(browser.get("/disagreements?sort=1;drop&sold_by=nobody&page=999")).text


def test_no_night_is_said_on_a_page(tmp_path: Path) -> None:
    app = make_app(Store.open(tmp_path, create=True), ServiceSettings())
    loop = asyncio.new_event_loop()

    async def ask() -> httpx.Response:
        transport = httpx.ASGITransport(app)
        async with app.router.lifespan_context(app), httpx.AsyncClient(transport=transport) as client:
            return await client.get("http://pages.test/")

    response = loop.run_until_complete(ask())
    loop.close()
    assert response.status_code == 503
    assert "legworth refresh" in check_page(response).text
