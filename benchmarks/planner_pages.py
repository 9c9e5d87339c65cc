"""How long the planner pages take on the real-day hub network: ``python -m benchmarks.planner_pages``.

A service in a process of its own answers; each page is fetched once cold, then again and again, and loaded in headless
Chromium. Milliseconds; the solves on request are in seconds.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
from pathlib import Path
from statistics import median
from urllib.parse import quote

import click
import httpx
from playwright.sync_api import sync_playwright

from legworth.store import Store
from tests.outside.hub_day import write_hub_day
from tools.take_screens import CHROMIUM, ROOT, serving

TIMES, LOADS = 9, 5


def publish_hub(scratch: Path) -> Path:
    """Publish a night of the hub day; gives the store."""
    write_hub_day(scratch / "hub")
    store = scratch / "store"
    words = [sys.executable, "-m", "legworth.cli", "refresh", str(scratch / "hub"), "--store", str(store)]
    subprocess.run(words, check=True, cwd=ROOT, stdout=subprocess.DEVNULL)
    return store


def addresses(store: Path) -> tuple[list[str], list[str]]:
    """Pages to time, and the solves on request."""
    night = Store.open(store).in_force()
    assert night is not None
    leg = quote(night.table("legs", ["leg"])["leg"][100].as_py())
    itinerary = quote(night.table("itineraries", ["itinerary"])["itinerary"][-1].as_py())
    pages = ["/", "/map", f"/leg?name={leg}", f"/itinerary?name={itinerary}&n=4", "/pair?from=ATL&to=LAX"]
    pages += ["/disagreements", "/changes", "/search?q=CVG"]
    return pages, [f"/leg/displaced?name={leg}", f"/itinerary/exact?name={itinerary}&n=4"]


@click.command()
@click.option("--store", type=click.Path(path_type=Path, file_okay=False), help="A store with the hub day in force.")
def main(store: Path | None) -> None:
    """Time the pages."""
    with tempfile.TemporaryDirectory() as scratch, sync_playwright() as playwright:
        store = store or publish_hub(Path(scratch))
        browser = playwright.chromium.launch(executable_path=CHROMIUM, args=["--no-sandbox"])
        page = browser.new_context(viewport={"width": 1280, "height": 900}).new_page()
        pages, solves = addresses(store)
        with serving(store) as address, httpx.Client(base_url=address, timeout=120) as client:
            click.echo(f"{'page':48}{'kB':>6}{'first':>8}{'median':>8}{'worst':>8}{'loaded':>8}{'worst':>8}")
            for where in pages:
                seconds = []
                for _ in range(1 + TIMES):
                    begun = time.perf_counter()
                    answer = client.get(where).raise_for_status()
                    seconds.append(1000 * (time.perf_counter() - begun))
                loads = []
                for _ in range(LOADS):
                    page.goto(address + where, wait_until="load")
                    loads.append(page.evaluate("performance.getEntriesByType('navigation')[0].loadEventStart"))
                figures = (seconds[0], median(seconds[1:]), max(seconds[1:]), median(loads), max(loads))
                size = len(answer.content) / 1000
                click.echo(f"{where[:47]:48}{size:6,.0f}" + "".join(f"{figure:8,.0f}" for figure in figures))
            for where in solves:
                begun = time.perf_counter()
                while client.get(where).raise_for_status().status_code == httpx.codes.ACCEPTED:
                    time.sleep(0.05)
                click.echo(f"{where[:47]:48}{time.perf_counter() - begun:.1f} s")
        browser.close()


if __name__ == "__main__":
    main()
