"""Pictures of the planner pages for the documents: ``python -m tools.take_screens``.

Two nights of the demo carrier are published into a temporary store, the second a day and some sales later; a
service is started on them, and headless Chromium takes the pictures.
"""

from __future__ import annotations

import shutil
import socket
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from urllib.error import URLError
from urllib.request import urlopen

import click
import numpy as np
import pandas as pd
from playwright.sync_api import Page, sync_playwright

__all__ = ["CHROMIUM", "publish_demo", "write_later_snapshot"]

ROOT = Path(__file__).parent.parent
CHROMIUM = "/usr/bin/chromium"
LARGEST = 300_000
PAGES = (
    ("map.png", "/map?date=2027-03-05", 1280, 1010, "light"),
    ("leg.png", "/leg?name=VL20-0305", 1280, 1180, "light"),
    ("disagreements.png", "/disagreements?station=ORV", 1280, 760, "dark"),
    ("phone.png", "/itinerary?name=ORV-SAL-0305-5&n=4", 390, 1100, "light"),
)
"""Name, address, width and height in pixels, and colours."""


def write_later_snapshot(source: Path, target: Path, seed: int = 7) -> None:
    """Write a network folder as it may look a day later: some seats sold, demand to come moved a little.

    Parameters
    ----------
    source, target
        The demo's folder, and the folder to make.
    seed
        Seed of what was sold and moved.
    """
    shutil.copytree(source, target)
    settings = target / "network.toml"
    settings.write_text(settings.read_text(encoding="utf-8").replace("2027-02-26T", "2027-02-27T"), encoding="utf-8")
    rng = np.random.default_rng(seed)
    legs = pd.read_csv(target / "legs.csv")
    legs["sold"] += rng.binomial((legs["capacity"] - legs["sold"]).clip(lower=0), 0.06)
    legs.to_csv(target / "legs.csv", index=False)
    demand = pd.read_csv(target / "demand.csv")
    demand["mean"] = (demand["mean"] * rng.uniform(0.8, 1.15, len(demand))).round(3)
    demand.to_csv(target / "demand.csv", index=False)


def publish_demo(store: Path, scratch: Path) -> None:
    """Publish two nights of the demo carrier into a store."""
    write_later_snapshot(ROOT / "demo_network", scratch / "later")
    for folder in (ROOT / "demo_network", scratch / "later"):
        words = [sys.executable, "-m", "legworth.cli", "refresh", str(folder), "--store", str(store)]
        subprocess.run(words, check=True, cwd=ROOT, stdout=subprocess.DEVNULL)


@contextmanager
def serving(store: Path) -> Iterator[str]:
    """Serve a store on a free port of loopback; gives its address as soon as pages can be shown."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    words = [sys.executable, "-m", "legworth.cli", "serve", "--store", str(store), "--port", str(port)]
    process = subprocess.Popen([*words, "--at", "snapshot"], cwd=ROOT)
    address = f"http://127.0.0.1:{port}"
    try:
        for _ in range(600):
            try:
                urlopen(f"{address}/", timeout=5).close()
                break
            except (URLError, OSError):
                if process.poll() is not None:
                    raise
                time.sleep(0.1)
        yield address
    finally:
        process.terminate()
        process.wait(30)


def take(page: Page, address: str, path: Path) -> int:
    """Take one picture; gives its size in bytes."""
    page.goto(address, wait_until="networkidle")
    page.screenshot(path=path)
    return path.stat().st_size


@click.command()
@click.option("--out", type=click.Path(path_type=Path, file_okay=False), default=ROOT / "docs" / "screens")
@click.option("--store", type=click.Path(path_type=Path, file_okay=False), help="A store with the demo in force.")
def main(out: Path, store: Path | None) -> None:
    """Write the pictures."""
    out.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory() as scratch, sync_playwright() as playwright:
        if store is None:
            store = Path(scratch) / "store"
            publish_demo(store, Path(scratch))
        browser = playwright.chromium.launch(executable_path=CHROMIUM, args=["--no-sandbox"])
        with serving(store) as address:
            for name, where, width, height, colours in PAGES:
                context = browser.new_context(
                    viewport={"width": width, "height": height},
                    color_scheme="dark" if colours == "dark" else "light",
                )
                size = take(context.new_page(), address + where, out / name)
                context.close()
                click.echo(f"{out / name}  {size:,} bytes")
                if size > LARGEST:
                    raise click.ClickException(f"{name} is larger than {LARGEST:,} bytes; show less")
        browser.close()


if __name__ == "__main__":
    main()
