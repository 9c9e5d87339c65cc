"""Signing in."""

from __future__ import annotations

from legworth.service.settings import ServiceSettings
from legworth.service.tokens import TokenFile
from legworth.store import Store
from tests.legworth.service.pages.hostile_night import leg_named, opened
from tests.legworth.service.pages.reading import check_page


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
