"""What an HTML page holds, and what must hold for every page of the service."""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from html.parser import HTMLParser

import httpx

__all__ = ["Reading", "check_page", "read"]

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
        """Note a tag that begins."""
        self.tags.append((tag, dict(attrs)))
        if len({name for name, _ in attrs}) != len(attrs):
            self.faults.append(f"an attribute stands twice in <{tag}>")
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        """Note a tag that ends at once."""
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        """Note an end that does not fit."""
        if not self.open or self.open.pop() != tag:
            self.faults.append(f"</{tag}> does not fit")

    def handle_data(self, data: str) -> None:
        """Note text."""
        self.text += data

    def values(self, name: str) -> list[str]:
        """All values of an attribute."""
        return [attributes[name] or "" for _, attributes in self.tags if name in attributes]


def read(response: httpx.Response) -> Reading:
    """Read a page."""
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
