"""The start page."""

from __future__ import annotations

import json

from legworth.store import Store
from tests.legworth.service.pages.hostile_night import Browser
from tests.legworth.service.pages.reading import check_page


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
