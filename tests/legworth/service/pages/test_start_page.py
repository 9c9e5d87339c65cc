"""The start page."""

from __future__ import annotations

import json
import re
import shutil
from contextlib import contextmanager
from datetime import UTC
from pathlib import Path

from legworth.service.pages.standing import alerts_of
from legworth.service.settings import ServiceSettings
from legworth.store import Check, HistoryEntry, Store
from legworth.store.check_words import check_line
from legworth.store.history import append_entry, user_name
from tests.legworth.service.pages.hostile_night import NAMES, Browser, opened
from tests.legworth.service.pages.reading import check_page
from tests.legworth.service.stores import HUB, publish


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
    assert "Night 00009-2030-02-27 was stopped and is not in force. <b>prices moved far</b>." in page


def stopped(store: Store, name: str, *checks: Check) -> Path:
    """Write the record of a stopped night, as a refresh writes it."""
    record = store.path / "stopped" / f"{name}.json"
    found = {"reasons": [check_line(check) for check in checks], "checks": [check.model_dump() for check in checks]}
    record.write_text(json.dumps(found))
    return record


def failed(name: str, *look_at: str) -> Check:
    return Check(name=name, limit=0.1, found=0.5, passed=False, look_at=look_at)


TOTAL = failed("demand_total", "A1: 1.0 -> 9.0", "B2: 2.0 -> 8.0")
LEGS = failed("demand_legs", "B2: demand to come 2.0 -> 8.0", "A1: demand to come 1.0 -> 9.0")
PRICES = failed("prices", "A1: bid price 10.00 -> 90.00")


def test_each_leg_is_named_once_however_many_checks_and_nights_name_it(browser: Browser, store: Store) -> None:
    records = [stopped(store, f"0000{number}-2030-02-27", TOTAL, LEGS, PRICES) for number in (7, 8)]
    try:
        page = check_page(browser.get("/")).text
    finally:
        for record in records:
            record.unlink()
    words = (
        "Nights 00007-2030-02-27 and 00008-2030-02-27 were stopped and are not in force. Move of all demand to come: "
    )
    assert page.count(words) == 1
    look = "A1 (demand to come 1.0 -> 9.0, bid price 10.00 -> 90.00); B2 (demand to come 2.0 -> 8.0)."
    assert f"Look first at {look}" in page
    assert page.count("A1 ") == page.count("B2 ") == 1


def test_nights_stopped_by_something_else_are_told_apart_and_long_lists_cut(store: Store) -> None:
    night = store.in_force()
    assert night is not None
    many = failed("prices", *(f"L{number}: bid price 1.00 -> 9.00" for number in range(14)))
    records = [stopped(store, "00007-2030-02-27", many), stopped(store, "00008-2030-02-27", many, failed("zero"))]
    (store.path / "stopped" / "00009-2030-02-27.json").write_text("[]")
    records.append(store.path / "stopped" / "00009-2030-02-27.json")
    try:
        first, second, third = alerts_of(store, night)
    finally:
        for record in records:
            record.unlink()
    assert first.title == "Night 00007-2030-02-27 was stopped and is not in force."
    assert first.look_at[-1] == "and 4 more"
    assert len(first.look_at) == 11
    assert (first.as_before, second.as_before, third.as_before) == (False, True, False)
    assert len(second.lines) == 2
    assert third.lines == ("its record cannot be read",)


def test_a_night_put_back_in_force_says_who_did_it_and_why(hostile_store: Path, tmp_path: Path) -> None:
    shutil.copytree(hostile_store, tmp_path / "store")
    store = Store.open(tmp_path / "store")
    first, second = store.nights()
    assert alerts_of(store, second) == []
    store.restore(first.name, "R. Stell", "wrong <demand>")
    with contextmanager(opened)(store, ServiceSettings()) as browser:
        page = check_page(browser.get("/")).text
    when = store.history()[-1].at.astimezone(UTC)
    assert f"Night {first.name} was put back in force by R. Stell on {when:%Y-%m-%d %H:%M} UTC." in page
    assert f"Reason given: Wrong <demand>. Later nights of the store, not in force: {second.name}." in page


def test_a_restore_that_was_withdrawn_is_not_told(hostile_store: Path, tmp_path: Path) -> None:
    shutil.copytree(hostile_store, tmp_path / "store")
    store = Store.open(tmp_path / "store")
    first, second = store.nights()
    for event in ("restore", "withdrawn"):
        entry = HistoryEntry.now(event, second.name, None, "R. Stell", "a crash came between")  # type: ignore[arg-type]
        append_entry(store.history_file, entry)
    assert alerts_of(store, second) == []
    (alert,) = alerts_of(store, first)
    assert alert.title == f"Night {first.name} is not the latest of the store."
    assert alert.lines == (f"later nights of the store, not in force: {second.name}",)


def test_a_pair_on_another_date_says_so(browser: Browser) -> None:
    asked = {"from": NAMES.get("NOR", "NOR"), "to": "SUD"}
    plain = check_page(browser.get("/pair", params=asked)).text
    assert "Nothing is sold from" not in plain
    (shown,) = re.findall(r"Itineraries of (\S+),", plain)
    page = check_page(browser.get("/pair", params={**asked, "date": "1999"})).text
    assert f"Nothing is sold from {asked['from']} to SUD on 1999; this is {shown}." in page
    assert "Nothing is sold from" not in check_page(browser.get("/pair", params={**asked, "date": shown})).text


def test_seconds_of_the_run_are_labelled(browser: Browser, store: Store) -> None:
    night = store.in_force()
    assert night is not None
    seconds = night.manifest.seconds
    page = check_page(browser.get("/changes")).text
    assert f"Seconds, all phases{sum(seconds.values()):.1f}{seconds['changes']:.1f} of them for the report" in page


def test_a_night_forced_past_what_stopped_a_later_one_names_the_legs_once(published_hub: Path, tmp_path: Path) -> None:
    shutil.copytree(published_hub, tmp_path / "store")
    publish(tmp_path / "busy", tmp_path / "store", **{**HUB, "mean": 30.0})
    store = Store.open(tmp_path / "store")
    night = store.in_force()
    assert night is not None
    (alert,) = alerts_of(store, night)
    assert (alert.said, alert.as_before) == ("a test wants another night", False)
    assert alert.title == f"Published by {user_name()} in spite of a check."
    checks = [check for check in night.manifest.checks if not check.passed]
    assert len(alert.lines) == len(checks) > 1
    assert {entry.partition(": ")[0] for check in checks for entry in check.look_at} >= {
        entry.partition(" (")[0] for entry in alert.look_at[:10]
    }
    stopped(store, "00009-2030-02-27", *checks)
    before, again = alerts_of(store, night)
    assert before.look_at == again.look_at
    assert (before.as_before, again.as_before) == (False, True)
