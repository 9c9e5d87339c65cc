"""Pages over HTTP, on a night of names made to break pages; and what they show against other ways to it."""

from __future__ import annotations

import asyncio
import csv
import io
import json
import re
import threading
from collections import deque
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from html.parser import HTMLParser
from pathlib import Path
from typing import Any
from urllib.parse import parse_qs, urlencode, urljoin, urlsplit

import httpx
import numpy as np
import pandas as pd
import pytest

from legworth.service.app import make_app
from legworth.service.pages import disagreements as disagreements_page
from legworth.service.pages import leg as leg_page
from legworth.service.pages.chart import Scale
from legworth.service.pages.leg_figures import one_more_sale, seat_value_chart
from legworth.service.pages.map_drawing import draw_routes
from legworth.service.pages.solving import MOST_WAITING, Solver, SolvesWaitError
from legworth.service.served_part import read_part
from legworth.service.settings import ServiceSettings
from legworth.service.tokens import TokenFile
from legworth.store import Store
from lp import LpOptions, solve_network
from tests.folders import Folder
from tests.legworth.refresh.nights import limits, make

NAMES = {
    "L1": "<script>alert(1)</script>",
    "L2": '"L\'2"&amp;</title>',
    "L3": "=1+1|/..?#%2F&n=9",
    "NOR-HUB": "@SUM(A1)",
    "HUB-SUD": "Zürich→Łódź😀",
    "NOR-SUD": "<img/src=x/onerror=alert(2)>",
    "NOR": 'N"<b>',
    "B": "+B<i>{{7*7}}",
}
"""Hostile names in place of the sound folder's."""


def hostile(seed: int) -> Folder:
    """The sound folder three weeks running, under hostile names, and with demand drawn anew."""
    folder = Folder()
    rng = np.random.default_rng(seed)
    for table in ("stations", "legs", "itineraries", "fares", "demand"):
        frame = pd.read_csv(io.BytesIO(folder.bytes(f"{table}.csv")), dtype=str, keep_default_na=False)
        for column in {"leg", "itinerary", "station", "origin", "destination", "fare_class"} & set(frame.columns):
            frame[column] = [NAMES.get(name, name) for name in frame[column]]
        if table == "itineraries":
            frame["legs"] = [" ".join(NAMES.get(leg, leg) for leg in path.split(" ")) for path in frame["legs"]]
        if table == "stations":
            frame["name"] = frame["name"].str.replace("Norby, Old Town", "</script><b>Norby</b>, 'Old' Town")
        else:
            frame = pd.concat([frame, *(_week(frame, number) for number in (1, 2))])
        if table == "demand":
            moved = rng.uniform(0.6, 1.6, len(frame))
            frame["mean"] = (frame["mean"].astype(float) * moved).round(3).astype(str)
        folder.files[f"{table}.csv"] = frame.to_csv(index=False).encode()
    return folder.mutate("network.toml", lambda text: text.replace('"B"', json.dumps(NAMES["B"])))


def _week(frame: pd.DataFrame, number: int) -> pd.DataFrame:
    """The same some weeks later, every name with its number."""
    later = frame.copy()
    for column in {"leg", "itinerary"} & set(frame.columns):
        later[column] = later[column] + f"~{number}"
    if "legs" in frame.columns:
        later["legs"] = [" ".join(f"{leg}~{number}" for leg in path.split(" ")) for path in later["legs"]]
    for column in {"departs", "arrives"} & set(frame.columns):
        later[column] = later[column].str.replace("-03-0", f"-03-{number}")
    return later


@dataclass
class Browser:
    """A client of the application in this process, without a socket."""

    loop: asyncio.AbstractEventLoop
    client: httpx.AsyncClient

    def get(self, address: str, **more: Any) -> httpx.Response:
        return self.loop.run_until_complete(self.client.get(address, **more))

    def post(self, address: str, **more: Any) -> httpx.Response:
        return self.loop.run_until_complete(self.client.post(address, **more))


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Store:
    """A store with two nights of the hostile folder."""
    path = tmp_path_factory.mktemp("pages")
    for seed in (2, 3):
        folder = limits(hostile(seed), demand_total=1.0, demand_share=1.0, price_share=1.0)
        if seed == 3:
            folder.replace("network.toml", "2030-02-25T", "2030-02-26T")
        make(folder.write(path / f"folder{seed}"), path / "store")
    return Store.open(path / "store")


@pytest.fixture(scope="module")
def browser(store: Store) -> Iterator[Browser]:
    yield from opened(store, ServiceSettings())


def opened(store: Store, settings: ServiceSettings) -> Iterator[Browser]:
    night = store.in_force()
    assert night is not None
    app = make_app(store, settings, at=night.manifest.as_of)
    loop = asyncio.new_event_loop()
    context = app.router.lifespan_context(app)
    loop.run_until_complete(context.__aenter__())
    client = httpx.AsyncClient(transport=httpx.ASGITransport(app), base_url="http://pages.test")
    try:
        yield Browser(loop, client)
    finally:
        loop.run_until_complete(client.aclose())
        loop.run_until_complete(context.__aexit__(None, None, None))
        loop.close()


VOID = {"meta", "link", "input", "br", "img", "hr", "source", "circle", "path"}


@dataclass
class Reading(HTMLParser):
    """What a page holds: tags, links, ids and what refers to them; and whether its tags fit each other."""

    open: list[str] = field(default_factory=list)
    faults: list[str] = field(default_factory=list)
    tags: list[tuple[str, dict[str, str | None]]] = field(default_factory=list)
    text: str = ""

    def __post_init__(self) -> None:
        super().__init__(convert_charrefs=True)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if len({name for name, _ in attrs}) != len(attrs):
            self.faults.append(f"an attribute stands twice in <{tag}>")
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        if not self.open or self.open.pop() != tag:
            self.faults.append(f"</{tag}> does not fit")

    def handle_data(self, data: str) -> None:
        self.text += data

    def values(self, name: str) -> list[str]:
        return [attributes[name] or "" for _, attributes in self.tags if name in attributes]


def read(response: httpx.Response) -> Reading:
    reading = Reading()
    reading.feed(response.text)
    reading.close()
    return reading


def check_page(response: httpx.Response) -> Reading:
    """Check all that holds for every page."""
    assert response.headers["content-type"] == "text/html; charset=utf-8"
    policy = response.headers["content-security-policy"]
    assert "default-src 'none'" in policy
    assert "script-src 'self'" in policy
    assert "unsafe" not in policy
    assert response.headers["x-content-type-options"] == "nosniff"
    assert response.text.startswith("<!DOCTYPE html>")
    page = read(response)
    assert not page.faults
    assert not page.open
    ids = page.values("id")
    assert len(set(ids)) == len(ids)
    for name in ("aria-labelledby", "for", "list", "data-narrow"):
        assert {each for value in page.values(name) for each in value.split()} <= set(ids), name
    tags = [tag for tag, _ in page.tags]
    assert tags.count("script") == 2
    assert tags.count("h1") == tags.count("main") == response.text.split("<body>")[0].count("<title>") == 1
    assert not {"img", "b", "i", "iframe", "object", "style"} & set(tags)
    assert not [name for _, attributes in page.tags for name in attributes if name.startswith("on") or name == "style"]
    for name in ("href", "src", "action", "formaction"):
        assert all(re.match(r"/(?!/)|#", value) for value in page.values(name)), name
    assert "come first" in page.text
    return page


def leg_named(name: str) -> str:
    return "/leg?" + urlencode({"name": NAMES.get(name, name)})


def itinerary_named(name: str, **more: Any) -> str:
    return "/itinerary?" + urlencode({"name": NAMES.get(name, name), **more})


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


# What the pages show, against other ways to the same figure.


def connections(store: Store) -> pd.DataFrame:
    night = store.in_force()
    assert night is not None
    found = night.table("connections").to_pandas()
    paths = night.table("itineraries").to_pandas().set_index("itinerary")["legs"]
    found["legs"] = found["itinerary"].map(paths)
    legs = night.table("legs").to_pandas().set_index("leg")
    found["origin"] = found["legs"].str.split(" ").str[0].map(legs["origin"])
    found["destination"] = found["legs"].str.split(" ").str[-1].map(legs["destination"])
    return found[found["disagreement"].isin(["network_only", "leg_only"])]


def download(browser: Browser, **query: Any) -> pd.DataFrame:
    response = browser.get("/disagreements.csv?" + urlencode(query))
    assert response.headers["content-type"] == "text/csv; charset=utf-8"
    assert response.headers["content-disposition"].startswith("attachment;")
    rows = list(csv.reader(io.StringIO(response.text, newline=""), strict=True))
    return pd.DataFrame(rows[1:], columns=rows[0])


FILTERS: list[tuple[dict[str, Any], Callable[[pd.DataFrame], pd.Series]]] = [
    ({}, lambda rows: rows["at_stake"] >= 0),
    ({"leg": NAMES["L1"]}, lambda rows: rows["legs"].str.split(" ").map(lambda path: NAMES["L1"] in path)),
    ({"station": NAMES["NOR"]}, lambda rows: (rows["origin"] == NAMES["NOR"]) | (rows["destination"] == NAMES["NOR"])),
    ({"fare_class": NAMES["B"]}, lambda rows: rows["fare_class"] == NAMES["B"]),
    ({"sold_by": "network_only"}, lambda rows: rows["disagreement"] == "network_only"),
    (
        {"sold_by": "leg_only", "least": "0.01"},
        lambda rows: rows["disagreement"].eq("leg_only") & rows["at_stake"].ge(0.01),
    ),
    ({"least": "3"}, lambda rows: rows["at_stake"] >= 3),
]


@pytest.mark.parametrize(("query", "fits"), FILTERS)
def test_filters_keep_what_the_tables_of_the_night_say(
    browser: Browser, store: Store, query: dict[str, Any], fits: Callable[[pd.DataFrame], pd.Series]
) -> None:
    whole = connections(store)
    assert len(whole) > 5
    wanted = whole[fits(whole)]
    found = download(browser, **query)
    assert sorted(found["at_stake"].astype(float)) == pytest.approx(sorted(wanted["at_stake"]))
    money = found["at_stake"].astype(float)
    assert (money.diff().dropna() <= 0).all()
    page = check_page(browser.get("/disagreements?" + urlencode(query))).text
    assert f"{len(wanted):,} products, {wanted['at_stake'].sum():,.0f} EUR at stake" in page


def test_no_cell_of_the_download_begins_like_a_formula(browser: Browser) -> None:
    found = download(browser)
    assert (found["fare_class"] == "'" + NAMES["B"]).any()
    words = ["itinerary", "legs", "origin", "destination", "date", "fare_class", "disagreement"]
    assert not found[words].stack().str.match(r"[=+\-@\t\r]").any()
    assert found[["fare", "displacement", "contribution", "at_stake"]].astype(float).notna().all().all()


@pytest.mark.parametrize("sort", ["contribution", "itinerary", "fare", "departs"])
def test_order_of_the_list(browser: Browser, sort: str) -> None:
    up, down = (download(browser, sort=sort, down=way) for way in ("false", "true"))
    assert sorted(map(tuple, up.to_numpy())) == sorted(map(tuple, down.to_numpy()))
    if sort == "itinerary":
        key: list[Any] = [name.removeprefix("'").encode() for name in up[sort]]
    else:
        key = list(up[sort] if sort == "departs" else up[sort].astype(float))
    assert key == sorted(key)


def test_pages_of_the_list_make_up_the_whole(browser: Browser, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(disagreements_page, "PER_PAGE", 3)
    seen: list[str] = []
    address = "/disagreements?sort=fare&down=false"
    while address:
        response = browser.get(address)
        page = check_page(response)
        seen += re.findall(r'<tr><th scope="row".*', response.text)
        following = [attributes["href"] for tag, attributes in page.tags if attributes.get("rel") == "next"]
        address = following[0] if following else ""
    whole = download(browser, sort="fare", down="false")
    assert len(seen) == len(set(seen)) == len(whole) > 5
    fares = [float(re.findall(r"<td>([\d.,]+)</td>", row)[0].replace(",", "")) for row in seen]
    assert fares == pytest.approx(list(whole["fare"].astype(float)))


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


def test_start_page_says_what_stands_in_the_way(browser: Browser, store: Store) -> None:
    night = store.in_force()
    assert night is not None
    page = check_page(browser.get("/")).text
    assert night.name in page
    assert "was stopped" not in page
    record = store.path / "stopped" / "00009-2030-02-27.json"
    record.write_text(json.dumps({"reasons": ["<b>prices moved far</b>"]}))
    try:
        page = check_page(browser.get("/")).text
    finally:
        record.unlink()
    assert "Night 00009-2030-02-27 was stopped and is not in force. <b>prices moved far</b>" in page


def test_changes_compare_the_two_nights(browser: Browser, store: Store) -> None:
    earlier, tonight = store.nights()
    page = check_page(browser.get("/changes")).text
    assert f"{tonight.name} against {earlier.name}" in page
    report = browser.get("/changes.html")
    assert report.content == (tonight.folder / "changes.html").read_bytes()
    assert "script-src" not in report.headers["content-security-policy"]


# Waiting for a solve.


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


def test_solver_answers_a_question_once_and_turns_too_many_away() -> None:
    go, solver, worked = threading.Event(), Solver(), []

    def work() -> int:
        assert go.wait(30)
        worked.append(1)
        return len(worked)

    first = solver.ask("a", work)
    assert solver.ask("a", work) is first
    others = [solver.ask(number, work) for number in range(MOST_WAITING - 1)]
    with pytest.raises(SolvesWaitError):
        solver.ask("one more", work)
    go.set()
    assert [each.result(30) for each in (first, *others)] == list(range(1, MOST_WAITING + 1))
    assert solver.ask("a", work) is first
    assert solver.ask("one more", work).result(30) == MOST_WAITING + 1
    solver.close()
    with pytest.raises(RuntimeError):
        solver.ask("after the end", work)


# Signing in.


def test_pages_need_a_token_where_reading_does(store: Store) -> None:
    tokens = TokenFile(store.path / "tokens.json")
    token = tokens.make("planner <b>", ("ask",))
    blind = tokens.make("counter", ("count",))
    for browser in opened(store, ServiceSettings(read_needs_token=True)):
        for address in ("/", "/map", leg_named("L1"), "/disagreements.csv", "/changes.html", "/suggest.json?q=a"):
            response = browser.get(address)
            assert response.status_code == 303
            sign_in, target = response.headers["location"].split("?next=")
            assert sign_in == "/sign-in"
            assert target
        wrong = browser.post("/sign-in", data={"token": "nonsense", "next": "/map"})
        assert wrong.status_code == 401
        assert "set-cookie" not in wrong.headers
        check_page(wrong)
        assert browser.post("/sign-in", data={"token": blind, "next": "/map"}).status_code == 401
        odd = browser.post("/sign-in", content="&".join("a=1" for _ in range(50)))
        assert odd.status_code == 401
        foreign = browser.post("/sign-in", data={"token": token}, headers={"Sec-Fetch-Site": "cross-site"})
        assert foreign.status_code == 403
        for target, then in (
            ("/map?q=a", "/map?q=a"),
            ("//evil.test/", "/"),
            ("https://evil.test/", "/"),
            ("/\\evil", "/"),
        ):
            done = browser.post("/sign-in", data={"token": token, "next": target})
            assert (done.status_code, done.headers["location"]) == (303, then)
        cookie = done.headers["set-cookie"]
        assert "HttpOnly" in cookie
        assert "SameSite=strict" in cookie
        page = browser.get(leg_named("L1"))
        assert page.status_code == 200
        assert "Sign out" in check_page(page).text
        assert browser.post("/sign-out").status_code == 303
        assert browser.get("/").status_code == 303
        bearer = {"Authorization": f"Bearer {token}"}
        assert browser.get("/", headers=bearer).status_code == 200
        tokens.withdraw("planner <b>")
        assert browser.get("/", headers=bearer).status_code == 303


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


# The drawing.


def test_north_is_up_east_is_right_and_the_date_line_does_not_tear() -> None:
    places = {"A": ("A", -17.0, 178.0), "B": ("B", -14.0, -171.0), "C": ("C", -9.0, 160.0)}
    drawing = draw_routes(places, [("A", "B"), ("B", "A"), ("A", "C")])
    a, b, c = (drawing.places[name] for name in "ABC")
    assert c.x < a.x < b.x
    assert a.y > b.y > c.y
    # Great distances keep their proportion: 18 degrees west of A against 11 degrees east of it.
    assert (a.x - c.x) / (b.x - a.x) == pytest.approx(18 / 11, rel=1e-2)


def test_legs_of_a_pair_are_apart_and_lean_to_the_right() -> None:
    places = {"A": ("A", 0.0, 0.0), "B": ("B", 0.0, 10.0), "C": ("C", 5.0, 5.0)}
    legs = [("A", "B")] * 3 + [("B", "A")] * 2 + [("A", "C")]
    drawing = draw_routes(places, legs)
    middles = [[float(n) for n in re.findall(r"-?[\d.]+", ribbon.d)][3] for ribbon in drawing.ribbons]
    assert len(set(middles[:5])) == 5
    y = drawing.places["A"].y
    assert all(middle > y for middle in middles[:3])
    assert all(middle < y for middle in middles[3:5])


def test_stations_without_coordinates_stand_in_a_row_below() -> None:
    drawing = draw_routes({"A": ("A", 1.0, 1.0), "B": ("B", None, None)}, [("A", "B"), ("B", "Z")])
    assert drawing.places["A"].located
    assert not drawing.places["B"].located
    assert not drawing.places["Z"].located
    assert drawing.places["B"].y == drawing.places["Z"].y > drawing.places["A"].y
    assert draw_routes({}, []).ribbons == ()


def test_scales_hold_their_ends_and_round_steps() -> None:
    for high in (0.0, 0.3, 1.0, 7.0, 99.0, 100.0, 101.0, 12345.6):
        scale = Scale.up(high)
        assert scale.high >= high
        assert 1 <= len(scale.ticks) <= 7
        assert float(scale(0.0)) > float(scale(scale.high))
    falling = Scale.across(6.5, falling=True)
    assert float(falling(6.5)) < float(falling(0.0))
