"""The list of disagreements against the tables of the night."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Callable
from typing import Any
from urllib.parse import urlencode

import pandas as pd
import pytest

from legworth.service.pages import disagreements as disagreements_page
from legworth.store import Store
from tests.legworth.service.pages.hostile_night import NAMES, Browser
from tests.legworth.service.pages.reading import check_page


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
