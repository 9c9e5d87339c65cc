"""The page: complete in itself, well formed, readable without sight or mouse, and in plain sentences."""

from __future__ import annotations

import base64
import re
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path
from xml.etree import ElementTree as ET

import pytest

from legworth.refresh.changes import Changes, find_changes
from legworth.refresh.changes_causes import Cause, Facts, How
from legworth.refresh.changes_lines import first_lines
from legworth.refresh.changes_page import changes_page
from legworth.refresh.changes_prices import PriceMove
from legworth.refresh.changes_words import cause_sentence, duration, rounded_steps, signed
from legworth.report import CAUTION
from legworth.store import Check, Forced, Store
from tests.folders import Folder
from tests.legworth.refresh.changes_cases import Extras, hub_folder, publish_folder

FACTS = Facts(42.0, 44.5, 2, 112.4, 118.0, 0, 0, "out1", -10.43)


class Outline(HTMLParser):
    """Elements of a page, and whether they are closed in order."""

    VOID = frozenset({"meta", "source", "img", "link", "br", "hr", "input"})

    def __init__(self, text: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.feed(text)
        assert self.open == []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def all(self, tag: str) -> list[dict[str, str | None]]:
        return [attributes for name, attributes in self.elements if name == tag]


def mixed_nights(place: Path, name: str = "Tern Sound Ferries") -> Changes:
    """Nights in which something of every kind happens."""
    store = Store.open(place / "store", create=True)
    last = publish_folder(store, named(hub_folder(), name), place)
    other = named(hub_folder(), name).cell("legs.csv", 2, "sold", "33").cell("legs.csv", 8, "capacity", "50")
    other.cell("fares.csv", 2, "fare", "230")
    for table in ("legs", "itineraries", "fares", "demand"):
        other.mutate(f"{table}.csv", lambda text: "".join(x for x in text.splitlines(True) if "far2" not in x))
    for table in ("itineraries", "fares", "demand"):
        other.mutate(f"{table}.csv", lambda text: "".join(x for x in text.splitlines(True) if "far-2" not in x))
    failed = Check(name="prices", limit=0.1, found=0.4, passed=False, look_at=("in1: 80 to 190",))
    extras = Extras(checks=(failed,), forced=Forced(who="mara", reason="a fair <b>begins</b>"))
    return find_changes(publish_folder(store, other, place, extras), last)


def named(folder: Folder, name: str) -> Folder:
    return folder.replace("network.toml", "Tern Sound Ferries", name)


def move(cause: Cause, sold: int = 0, added: int = 0) -> PriceMove:
    then, now = 80.004, 80.004 + cause.seats + cause.demand + cause.fares + cause.neighbours
    return PriceMove("in1", "NOR-HUB", "2030-03-01 06:00", then, now, 20, 20 - sold + added, sold, added, 100.0, cause)


@pytest.fixture(scope="module")
def mixed(tmp_path_factory: pytest.TempPathFactory) -> Changes:
    return mixed_nights(tmp_path_factory.mktemp("mixed"))


def test_the_page_needs_nothing_else_and_no_script(mixed: Changes) -> None:
    page = changes_page(mixed)
    outline = Outline(page)
    assert outline.all("script") == outline.all("link") == []
    assert not re.search(r"https?://", page)
    for source in [*outline.all("img"), *outline.all("source")]:
        address = source.get("src") or source.get("srcset") or ""
        assert address.startswith("data:image/svg+xml;base64,")
    policy = next(meta["content"] for meta in outline.all("meta") if meta.get("http-equiv"))
    assert policy is not None
    assert "default-src 'none'" in policy


def test_pictures_are_svg_with_words_for_those_who_do_not_see_them(mixed: Changes) -> None:
    outline = Outline(changes_page(mixed))
    assert len(outline.all("img")) == 2
    for picture in outline.all("img"):
        assert picture["alt"]
        assert picture["src"] is not None
        text = base64.b64decode(picture["src"].split(",", 1)[1]).decode()
        assert ET.fromstring(text).tag.endswith("svg")
        assert "prefers-color-scheme:dark" in text
        assert not re.search(r"#(1c5d99|2b2f33|a33a1d)", text.split("</style>", 1)[1])


def test_tables_have_captions_heads_and_can_be_scrolled_by_keyboard(mixed: Changes) -> None:
    outline = Outline(changes_page(mixed))
    names = [attributes["id"] for _, attributes in outline.elements if attributes.get("id")]
    assert len(names) == len(set(names))
    assert len(outline.all("caption")) == len(outline.all("table")) >= 8
    assert all(head["scope"] in ("col", "row") for head in outline.all("th"))
    regions = [element for element in outline.all("div") if element.get("role") == "region"]
    assert len(regions) == len(outline.all("table"))
    assert all(region["tabindex"] == "0" and region["aria-labelledby"] in names for region in regions)
    assert {link["href"] for link in outline.all("a")} <= {f"#{name}" for name in names}
    assert outline.all("html")[0]["lang"] == "en"


def test_text_from_tables_is_never_markup(tmp_path: Path) -> None:
    page = changes_page(mixed_nights(tmp_path, name="<script>alert(1)</script> & Söhne"))
    assert "<script>" not in page
    assert "&lt;script&gt;alert(1)&lt;/script&gt; &amp; Söhne" in page
    assert "a fair &lt;b&gt;begins&lt;/b&gt;" in page


def test_cautions_stand_on_the_page(mixed: Changes) -> None:
    page = " ".join(changes_page(mixed).split())
    assert CAUTION.replace("'", "&#39;") in page
    assert "not to promise revenue" in page
    assert "Rows may count the same seat" in page
    assert "People hold seats on departures that are missing" in page


def test_five_lines_come_first_those_that_need_a_person_before_the_others(mixed: Changes) -> None:
    lines = first_lines(mixed)
    assert [line.alert for line in lines] == [True, True, False, False, False]
    assert "mara" in lines[0].text
    assert "a fair <b>begins</b>" in lines[0].text
    assert "1 departure is missing before time, with 20 seats sold: far2" in lines[1].text
    assert any("1 opened (6 passengers, 491 EUR). 345 EUR at stake" in line.text for line in lines)
    assert any("13 seats sold since last night raised the price by" in line.text for line in lines)


def test_the_first_night_has_a_page_too(tmp_path: Path) -> None:
    store = Store.open(tmp_path / "store", create=True)
    page = changes_page(find_changes(publish_folder(store, hub_folder(), tmp_path), None))
    outline = Outline(page)
    assert outline.all("img") == []
    assert "no earlier night" in page
    assert "Most at stake tonight" in page


def test_what_is_not_explained_is_said(mixed: Changes) -> None:
    assert mixed.prices is not None
    assert "Causes were looked for behind every move: " in changes_page(mixed)
    moves = list(mixed.prices.moves)
    moves[0] = replace(moves[0], cause=Cause(moves[0].leg, How.NOT, why_not="its part cannot be read again"))
    page = changes_page(replace(mixed, prices=replace(mixed.prices, moves=tuple(moves), rose=900)))
    assert "could not be told apart" in page
    assert "were not looked into" in page
    assert "behind the largest moves only: " in page


def test_causes_in_plain_sentences() -> None:
    sold = move(Cause("in1", How.PART, seats=12.3, facts=FACTS), sold=41)
    assert cause_sentence(sold, "EUR") == "41 seats sold since last night raised the price by 12.30 EUR."
    back = move(Cause("in1", How.PART, seats=-4.0, neighbours=-6.5, facts=FACTS), sold=-1, added=2)
    assert cause_sentence(back, "EUR") == (
        "The rest of the network, where out1 moved most (-10.43), lowered the price by 6.50 EUR; "
        "1 seat that came back and 2 seats added since last night lowered it by 4.00."
    )
    asked = move(Cause("in1", How.PART, demand=3.0, fares=-1.25, facts=FACTS))
    assert cause_sentence(asked, "EUR") == (
        "Demand to come for it rising from 42.0 to 44.5 passengers raised the price by 3.00 EUR; "
        "other fares on 2 products (on average 118.00 where they were 112.40) lowered it by 1.25."
    )
    mix = move(Cause("in1", How.PART, demand=-3.0, facts=FACTS))
    assert "shifting among its products (from 42.0 to 44.5 passengers in all) lowered" in cause_sentence(mix, "EUR")
    alone = cause_sentence(move(Cause("in1", How.LEG, seats=1.0, why_not="work ran out", facts=FACTS), sold=1), "EUR")
    assert alone.startswith("1 seat sold since last night raised the price by 1.00 EUR (first-order")
    unknown = cause_sentence(move(Cause("in1", How.NOT, why_not="a file is missing"), sold=2), "EUR")
    assert (
        unknown == "2 seats sold since last night; what that did to the price is not known, because a file is missing."
    )


def test_rounded_steps_add_up_to_the_rounded_prices() -> None:
    cause = Cause("in1", How.PART, seats=0.004, demand=0.004, fares=0.004, neighbours=0.009, facts=FACTS)
    found = move(cause)
    assert sum(rounded_steps(found)) == pytest.approx(round(found.now, 2) - round(found.then, 2), abs=1e-9)


@pytest.mark.parametrize(
    ("seconds", "text"), [(0.26, "0.3 s"), (12.4, "12 s"), (134.0, "2 min 14 s"), (3605.0, "1 h 0 min 5 s")]
)
def test_durations(seconds: float, text: str) -> None:
    assert duration(seconds) == text


@pytest.mark.parametrize(("value", "text"), [(1234.567, "+1,234.57"), (-0.004, "0.00"), (-2.5, "-2.50")])
def test_signs(value: float, text: str) -> None:
    assert signed(value) == text


def test_seconds_of_the_run_are_those_before_the_report(mixed: Changes) -> None:
    assert mixed.run is not None
    for seconds in ({"read": 0.5, "parts": 2.0}, {"read": 0.5, "parts": 2.0, "changes": 40.0}):
        run = replace(mixed.run, seconds=seconds, checks=(), forced=None)
        (line,) = [line for line in first_lines(replace(mixed, run=run)) if line.topic == "Run"]
        assert ", in 2.5 s before this report was begun." in line.text
