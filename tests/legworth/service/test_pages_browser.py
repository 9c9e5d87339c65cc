"""Pages in a real browser: headless Chromium on a real service over two days of a part of the demo carrier."""

from __future__ import annotations

import asyncio
import csv
import os
import shutil
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from itertools import combinations
from pathlib import Path
from typing import Any

import httpx
import pandas as pd
import pytest
from axe_playwright_python.sync_playwright import Axe
from playwright.sync_api import Browser, BrowserContext, Page, Request, expect, sync_playwright

from legworth.service.tokens import TokenFile
from legworth.store import Store
from tests.legworth.refresh.nights import make
from tests.legworth.service.processes import ServiceProcess
from tools.take_screens import CHROMIUM, write_later_snapshot

ROOT = Path(__file__).parents[3]
DATES = ("2027-03-05", "2027-03-06")
STATIONS = {"ORV", "SAL", "BRO", "KES", "ZEN", "WEX"}
SEEN = (
    "/",
    f"/map?date={DATES[0]}",
    "/leg?name=VL20-0305",
    "/leg/displaced?name=VL20-0305",
    "/itinerary?name=BRO-KES-0305-1&n=3",
    "/itinerary/exact?name=ORV-SAL-0305-5&n=4",
    "/pair?from=ORV&to=SAL&n=2",
    "/disagreements",
    "/changes",
    "/search?q=VL2",
    "/sign-in",
    "/nowhere",
)
LOOKS = [(scheme, width) for scheme in ("light", "dark") for width in (1280, 390)]


@pytest.fixture(scope="module")
def chromium() -> Iterator[Browser]:
    if not Path(CHROMIUM).exists():
        if os.environ.get("CI"):
            pytest.fail(f"{CHROMIUM} is missing; CI must install Debian's package chromium")
        pytest.skip(f"{CHROMIUM} is missing; install Debian's package chromium")
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=CHROMIUM, args=["--no-sandbox"])
        yield browser
        browser.close()


def two_days(source: Path, target: Path) -> Path:
    """The demo's tables, cut to two dates and six stations."""
    shutil.copytree(source, target)
    legs = pd.read_csv(target / "legs.csv")
    kept = legs["origin"].isin(STATIONS) & legs["destination"].isin(STATIONS)
    legs = legs[kept & legs["departs"].str[:10].isin(DATES)]
    legs.to_csv(target / "legs.csv", index=False)
    itineraries = pd.read_csv(target / "itineraries.csv")
    itineraries = itineraries[itineraries["legs"].map(lambda path: set(path.split()) <= set(legs["leg"]))]
    itineraries.to_csv(target / "itineraries.csv", index=False)
    for table in ("fares", "demand"):
        rows = pd.read_csv(target / f"{table}.csv")
        rows[rows["itinerary"].isin(itineraries["itinerary"])].to_csv(target / f"{table}.csv", index=False)
    return target


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Store:
    path = tmp_path_factory.mktemp("screens")
    first = two_days(ROOT / "demo_network", path / "first")
    write_later_snapshot(first, path / "later")
    for folder in (first, path / "later"):
        make(folder, path / "store")
    return Store.open(path / "store")


@pytest.fixture(scope="module")
def service(chromium: Browser, store: Store) -> Iterator[str]:
    process = ServiceProcess(store.path, None, store.path.parent / "service.log")
    process.start()
    try:
        # Playwright runs a loop in this thread.
        with ThreadPoolExecutor(1) as thread:
            thread.submit(asyncio.run, process.listening()).result()
        address = f"http://127.0.0.1:{process.port}"
        while httpx.get(address, timeout=30).status_code == httpx.codes.SERVICE_UNAVAILABLE:
            time.sleep(0.1)  # the first pages are being made ready
        yield address
    finally:
        process.stop()


class Watched:
    """A browser context that notes whatever goes wrong in its pages."""

    def __init__(self, context: BrowserContext, service: str) -> None:
        self.context, self.service = context, service
        self.troubles: list[str] = []
        self.hosts: set[str] = set()
        self.page = context.new_page()
        self.page.on("console", lambda said: said.type in ("error", "warning") and self.troubles.append(said.text))
        self.page.on("pageerror", lambda error: self.troubles.append(str(error)))
        self.page.on("requestfailed", self._failed)
        self.page.on("request", lambda request: self.hosts.add(request.url.split("/")[2]))

    def _failed(self, request: Request) -> None:
        """Note a failure; suggestions under way when the page is left are no trouble."""
        if not ("/suggest.json?" in request.url and "ERR_ABORTED" in str(request.failure)):
            self.troubles.append(f"{request.url} {request.failure}")

    def go(self, address: str) -> Page:
        self.page.goto(self.service + address, wait_until="load")
        while self.page.locator("h1", has_text="Solving").count():
            self.page.wait_for_timeout(200)
            self.page.reload()
        return self.page

    def check(self) -> None:
        assert self.troubles == []
        assert self.hosts == {self.service.split("/")[2]}


@pytest.fixture
def watched(chromium: Browser, service: str, request: pytest.FixtureRequest) -> Iterator[Watched]:
    context = chromium.new_context(viewport={"width": 1280, "height": 900}, color_scheme="light")
    watched = Watched(context, service)
    yield watched
    context.close()
    watched.check()


@pytest.mark.parametrize("address", SEEN)
def test_page_is_sound_and_accessible_in_every_look(watched: Watched, address: str) -> None:
    page = watched.go(address)
    if address == "/nowhere":
        assert watched.troubles.pop().startswith("Failed to load resource: the server responded with a status of 404")
    for scheme, width in LOOKS:
        page.emulate_media(color_scheme=scheme)  # type: ignore[arg-type]
        page.set_viewport_size({"width": width, "height": 900})
        found = Axe().run(page, options={"resultTypes": ["violations"]}).response["violations"]
        grave = [
            (fault["id"], fault["nodes"][0]["html"]) for fault in found if fault["impact"] in ("serious", "critical")
        ]
        assert grave == [], (scheme, width)
        assert page.evaluate("document.documentElement.scrollWidth <= innerWidth"), f"page is wider than {width}"


def test_search_by_keyboard_finds_a_leg(watched: Watched) -> None:
    page = watched.go("/")
    page.keyboard.press("/")
    expect(page.locator("#search")).to_be_focused()
    page.keyboard.type("VL20-03")
    expect(page.locator("#suggested option").first).to_have_attribute("value", "VL20-0305")
    page.keyboard.press("/")
    expect(page.locator("#search")).to_have_value("VL20-03/")
    page.keyboard.press("Backspace")
    page.keyboard.type("05")
    page.keyboard.press("Enter")
    expect(page.locator("h1")).to_have_text("Leg VL20-0305")
    page.locator("#search").fill("ORV SAL")
    page.get_by_role("button", name="Find").click()
    expect(page.locator("h1")).to_have_text("Orvenholm to Sallivane")


def test_map_date_figure_narrowing_sorting_and_click_through(watched: Watched) -> None:
    page = watched.go("/map")
    expect(page.locator("h1")).to_have_text(f"Legs of {DATES[0]}")
    page.locator("select[name=date]").select_option(DATES[1])
    page.locator("select[name=figure]").select_option("load")
    page.get_by_role("button", name="Show", exact=True).click()
    expect(page.locator("h1")).to_have_text(f"Legs of {DATES[1]}")
    expect(page.locator("section.map .key")).to_contain_text("90 % or more")
    page.get_by_role("link", name="Day before").click()
    expect(page.locator("h1")).to_have_text(f"Legs of {DATES[0]}")
    page.get_by_role("link", name="Next sale", exact=True).click()
    expect(page.locator("#legs th[aria-sort]")).to_have_attribute("aria-sort", "descending")
    prices = [float(text) for text in page.locator("#legs td:nth-child(5)").all_inner_texts() if "not" not in text]
    assert len(prices) > 10
    assert prices == sorted(prices, reverse=True)
    page.locator("[data-narrow]").fill("wex")
    shown = page.locator("#legs tbody tr:visible")
    expect(page.locator("#legs-count")).to_have_text(
        f"{shown.count()} of {page.locator('#legs tbody tr').count()} legs shown."
    )
    assert 0 < shown.count() < len(prices)
    assert all("WEX" in text for text in shown.all_inner_texts())
    page.locator("[data-narrow]").fill("VL20")
    page.get_by_role("button", name="Show", exact=True).click()
    expect(page.locator("#legs tbody tr").first).to_be_visible()
    assert page.locator("a.ribbon:not(.faint)").count() == page.locator("#legs tbody tr").count()
    leg = page.locator("a.ribbon:not(.faint)").first
    leg.dispatch_event("pointerover")
    name = page.locator("#detail").inner_text().split(",")[0]
    leg.dispatch_event("click")
    expect(page.locator("h1")).to_have_text(f"Leg {name}")


def test_a_path_by_keys_alone(watched: Watched) -> None:
    page = watched.go("/map")
    page.keyboard.press("Tab")
    expect(page.locator(":focus")).to_have_text("Skip to the page")
    page.keyboard.press("Enter")
    for _ in range(12):
        page.keyboard.press("Tab")
        if page.evaluate("document.activeElement.classList.contains('ribbon')"):
            break
    first = page.evaluate("document.activeElement.getAttribute('aria-label')")
    expect(page.locator("#detail")).to_have_text(first)
    for _ in range(3):
        page.keyboard.press("ArrowRight")
    page.keyboard.press("ArrowLeft")
    there = page.evaluate("document.activeElement.getAttribute('aria-label')")
    assert there != first
    expect(page.locator("#detail")).to_have_text(there)
    page.keyboard.press("Enter")
    name = there.split(",")[0]
    expect(page.locator("h1")).to_have_text(f"Leg {name}")
    page.keyboard.press("/")
    page.keyboard.type("BRO-KES-0305-1")
    page.keyboard.press("Enter")
    expect(page.locator("h1")).to_have_text("Itinerary BRO-KES-0305-1")
    page.get_by_label("Passengers").focus()
    page.keyboard.press("ControlOrMeta+a")
    page.keyboard.type("4")
    page.keyboard.press("Enter")
    expect(page.locator(".answer")).to_contain_text("4 passengers pay at least")
    page.keyboard.press("Tab")
    outline = page.evaluate("getComputedStyle(document.activeElement).outlineStyle")
    assert outline != "none"


def test_theme_is_switched_and_kept(watched: Watched) -> None:
    page = watched.go("/")

    def ground() -> Any:
        return page.evaluate("getComputedStyle(document.body).backgroundColor")

    light = ground()
    page.get_by_role("button", name="Dark").click()
    dark = ground()
    assert dark != light
    page.reload()
    assert ground() == dark
    watched.go("/disagreements")
    assert ground() == dark
    page.get_by_role("button", name="Light").click()
    assert ground() == light
    page.emulate_media(color_scheme="dark")
    assert ground() == light
    page.evaluate("localStorage.clear()")
    page.reload()
    assert ground() == dark


def test_disagreements_are_filtered_and_downloaded(watched: Watched, tmp_path: Path) -> None:
    page = watched.go("/disagreements")
    whole = page.locator("#found").inner_text()
    page.locator("select[name=station]").select_option("ORV")
    fare_class = page.locator("select[name=fare_class] option").nth(1).inner_text()
    page.locator("select[name=fare_class]").select_option(fare_class)
    page.get_by_label("At least").fill("0.5")
    page.get_by_role("button", name="Show", exact=True).click()
    found = page.locator("#found").inner_text()
    assert found != whole
    with page.expect_download() as download:
        page.get_by_role("link", name="Download as CSV").click()
    target = tmp_path / "found.csv"
    download.value.save_as(target)
    with target.open(encoding="utf-8", newline="") as lines:
        rows = list(csv.DictReader(lines))
    assert f"{len(rows):,} products" in found
    assert all(row["fare_class"] == fare_class and "ORV" in (row["origin"], row["destination"]) for row in rows)
    assert all(float(row["at_stake"]) >= 0.5 for row in rows)
    page.locator("tbody a").first.click()
    expect(page.locator("h1")).to_contain_text(f"Itinerary {rows[0]['itinerary']}")


def test_a_leg_shows_seats_sold_meanwhile(watched: Watched, store: Store) -> None:
    token = TokenFile(store.path / "tokens.json").make("till", ("ask", "sell"))
    watched.page.clock.install()
    page = watched.go("/leg?name=VL20-0305")
    left = page.locator("[data-field=remaining]")
    before = int(left.inner_text())
    headers = {"Authorization": f"Bearer {token}", "Idempotency-Key": "browser-1"}
    order = {"itinerary": "ORV-SAL-0305-6", "fare": 9000, "seats": 2}
    assert httpx.post(f"{watched.service}/v1/sales", json=order, headers=headers).json()["accepted"]
    page.clock.fast_forward(6_000)
    expect(left).to_have_text(str(before - 2))


@pytest.mark.parametrize("width", [1280, 390])
def test_every_station_of_the_map_is_named_without_pointing_at_it(chromium: Browser, service: str, width: int) -> None:
    context = chromium.new_context(viewport={"width": width, "height": 900})
    page = context.new_page()
    page.goto(f"{service}/map?date={DATES[0]}")
    names = page.locator(".place text:visible")
    assert set(names.all_text_contents()) == STATIONS
    assert names.count() == len(STATIONS)
    boxes = [each.bounding_box() for each in names.all()]
    for one, other in combinations(boxes, 2):
        assert one is not None and other is not None
        apart_across = one["x"] + one["width"] <= other["x"] or other["x"] + other["width"] <= one["x"]
        apart_down = one["y"] + one["height"] <= other["y"] or other["y"] + other["height"] <= one["y"]
        assert apart_across or apart_down
    # The list of long names opens by keyboard, and leads to the legs of a station.
    page.locator(".stations summary").focus()
    page.keyboard.press("Enter")
    page.keyboard.press("Tab")
    first = page.evaluate("document.activeElement.textContent")
    assert first == min(STATIONS)
    page.keyboard.press("Enter")
    page.wait_for_url(f"**/map?date={DATES[0]}&figure=price&q={first}")
    rows = page.locator("#legs tbody tr").all_text_contents()
    assert rows
    assert all(first in row for row in rows)
    context.close()


def test_pages_work_without_a_script(chromium: Browser, service: str) -> None:
    context = chromium.new_context(java_script_enabled=False)
    page = context.new_page()
    page.goto(f"{service}/map")
    expect(page.locator("#theme")).to_be_hidden()
    page.locator("[data-narrow]").fill("ZEN")
    page.locator("select[name=figure]").select_option("left")
    page.get_by_role("button", name="Show", exact=True).click()
    expect(page.locator("#legs-count")).to_contain_text("ZEN")
    assert all("ZEN" in text for text in page.locator("#legs tbody tr").all_inner_texts())
    page.get_by_role("link", name="Seats left", exact=True).click()
    expect(page.locator("#legs th[aria-sort]")).to_contain_text("Seats left")
    seats = [int(text) for text in page.locator("#legs td:nth-child(8)").all_inner_texts()]
    assert len(seats) > 2
    assert seats == sorted(seats, reverse=True)
    page.locator("#legs tbody a").first.click()
    page.get_by_role("link", name="Whom does one more sale displace?").click()
    for _ in range(20):
        if page.locator("h1").inner_text() != "Solving":
            break
        page.wait_for_timeout(500)
        page.reload()
    expect(page.locator("h1")).to_contain_text("One more sale on leg")
    context.close()


def test_charts_say_in_words_what_they_draw_and_print_in_light(watched: Watched) -> None:
    page = watched.go("/leg?name=VL20-0305")
    charts = page.get_by_role("img")
    assert charts.count() == 3
    expect(page.get_by_role("img", name="Price of the next sale by seats left")).to_be_visible()
    page.emulate_media(media="print", color_scheme="dark")
    expect(page.locator("form.search")).to_be_hidden()
    assert page.evaluate("getComputedStyle(document.body).backgroundColor") == "rgb(252, 252, 251)"
