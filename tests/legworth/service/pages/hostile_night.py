"""A night of names made to break pages, and a client of the application that shows it."""

from __future__ import annotations

import asyncio
import io
import json
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any
from urllib.parse import urlencode

import httpx
import numpy as np
import pandas as pd

from legworth.service.app import make_app
from legworth.service.settings import ServiceSettings
from legworth.store import Store
from tests.folders import Folder

__all__ = ["NAMES", "Browser", "hostile", "itinerary_named", "leg_named", "opened"]

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
        """Fetch a page."""
        return self.loop.run_until_complete(self.client.get(address, **more))

    def post(self, address: str, **more: Any) -> httpx.Response:
        """Send a form or a body."""
        return self.loop.run_until_complete(self.client.post(address, **more))


def opened(store: Store, settings: ServiceSettings) -> Iterator[Browser]:
    """Start the application at the snapshot in force; yields a client of it once, and ends it afterwards."""
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


def leg_named(name: str) -> str:
    """Address of the page of a leg, by its name in the sound folder."""
    return "/leg?" + urlencode({"name": NAMES.get(name, name)})


def itinerary_named(name: str, **more: Any) -> str:
    """Address of the page of an itinerary, by its name in the sound folder."""
    return "/itinerary?" + urlencode({"name": NAMES.get(name, name), **more})
