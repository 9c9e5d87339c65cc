"""Tonight against last night, and what the page says where the report of the night lacks something."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

from legworth.service.pages.changes_file import MOST_FAULTS, read_changes
from legworth.store import Store
from tests.legworth.service.pages.hostile_night import Browser
from tests.legworth.service.pages.reading import check_page


def report_of(store: Store) -> Path:
    night = store.in_force()
    assert night is not None
    return night.folder / "changes.json"


@contextmanager
def written(path: Path, content: bytes | None) -> Iterator[None]:
    """The report with another content, or without the file, for a while."""
    sound = path.read_bytes()
    path.unlink()
    if content is not None:
        path.write_bytes(content)
    try:
        yield
    finally:
        path.unlink(missing_ok=True)
        path.write_bytes(sound)


def test_changes_compare_the_two_nights(browser: Browser, store: Store) -> None:
    earlier, tonight = store.nights()
    page = check_page(browser.get("/changes")).text
    assert f"{tonight.name} against {earlier.name}" in page
    assert "Missing from this page" not in page
    report = browser.get("/changes.html")
    assert report.content == (tonight.folder / "changes.html").read_bytes()
    assert "script-src" not in report.headers["content-security-policy"]


@pytest.mark.parametrize(
    ("content", "said"),
    [
        (None, "changes.json has been lost"),
        (b"", "changes.json cannot be read"),
        (b"\xff\xfe", "changes.json cannot be read"),
        (b'{"prices": {', "changes.json cannot be read"),
        (b"[1, 2]", "changes.json cannot be read (it is no JSON object)"),
        (b"[" * 100_000, "changes.json cannot be read"),
        (b"{}", "changes.json has no revenue"),
    ],
)
def test_a_report_that_cannot_be_read_is_said(browser: Browser, store: Store, content: bytes | None, said: str) -> None:
    with written(report_of(store), content):
        response = browser.get("/changes")
        page = check_page(response).text
        first = browser.get("/")
    assert response.status_code == first.status_code == 200
    assert said in page
    assert "There is no earlier night" not in page
    assert "Certified" in page
    assert "The report of this night does not say them" in check_page(first).text


def lack(*path: str | int) -> Callable[[Any], None]:
    """Take something away."""

    def change(report: Any) -> None:
        for key in path[:-1]:
            report = report[key]
        del report[path[-1]]

    return change


def put(value: Any, *path: str | int) -> Callable[[Any], None]:
    """Put something else in."""

    def change(report: Any) -> None:
        for key in path[:-1]:
            report = report[key]
        report[path[-1]] = value

    return change


@pytest.mark.parametrize(
    ("change", "said", "hidden"),
    [
        (lack("prices"), "changes.json has no prices", "rose and"),
        (lack("prices", "rose"), "changes.json has no prices.rose", "rose and"),
        (lack("prices", "moves", 0, "cause"), "changes.json has no prices.moves.0.cause", "rose and"),
        (put("dear", "prices", "moves", 0, "then"), "prices.moves.0.then of changes.json is wrong", "rose and"),
        (put(float("nan"), "prices", "moves", 0, "now"), "prices.moves.0.now of changes.json is wrong", "rose and"),
        (put(["<b>"], "prices"), "prices of changes.json is wrong", "rose and"),
        (lack("departures", "gone_sold"), "changes.json has no departures.gone_sold", "missing before their time"),
        (lack("products", "closed_totals"), "changes.json has no products.closed_totals", "closed and"),
        (lack("revenue", "sold_worth"), "changes.json has no revenue.sold_worth", "at last night's bid prices"),
        (lack("last"), "changes.json has no last", "against 0"),
        (put("yesterday", "last", "as_of"), "last.as_of of changes.json is wrong", "against 0"),
        (lack("note"), "changes.json has no note", "Nothing is hidden by this"),
    ],
)
def test_what_a_report_lacks_is_said_and_the_rest_is_shown(
    browser: Browser, store: Store, change: Callable[[Any], None], said: str, hidden: str
) -> None:
    """An older version may have written less than this one reads; and a file can be damaged."""
    path = report_of(store)
    report = json.loads(path.read_bytes())
    change(report)
    sound = check_page(browser.get("/changes")).text
    with written(path, json.dumps(report).encode()):
        response = browser.get("/changes")
        page = check_page(response).text
        assert browser.get("/").status_code == 200
    assert response.status_code == 200
    assert said in page
    shown = {"rose and", "missing before their time", "closed and", "at last night's bid prices", "against 0"}
    assert all(each in sound for each in shown)
    assert hidden not in page
    assert all(each in page for each in shown - {hidden})
    assert "There is no earlier night" not in page


def test_more_in_a_report_than_is_read_is_no_fault(browser: Browser, store: Store) -> None:
    path = report_of(store)
    report = json.loads(path.read_bytes()) | {"weather": "fine"}
    report["prices"]["moves"][0]["weather"] = "fine"
    with written(path, json.dumps(report).encode()):
        assert "Missing from this page" not in check_page(browser.get("/changes")).text


def test_many_faults_of_one_kind_are_cut_short(store: Store) -> None:
    path = report_of(store)
    report = json.loads(path.read_bytes())
    moves = report["prices"]["moves"]
    moves *= 8
    report["prices"]["moves"] = [{key: move[key] for key in move if key != "money"} for move in moves]
    night = store.in_force()
    assert night is not None
    with written(path, json.dumps(report).encode()):
        found = read_changes(night)
    assert len(found.faults) == MOST_FAULTS + 1
    assert found.faults[-1] == f"changes.json has {len(moves) - MOST_FAULTS} more faults in prices"
    assert found.revenue is not None


def test_a_first_night_has_nothing_to_compare_with(store: Store) -> None:
    first = store.nights()[0]
    found = read_changes(first)
    assert found.faults == ()
    assert found.last is found.prices is found.departures is None
    assert found.revenue is not None
