"""What control notices while a service makes the pages of a new night ready: ``python -m benchmarks.new_night STORE``.

STORE holds at least two nights, such as ``store_40`` of ``python -m benchmarks.refresh_year --days 40``. A service
serves the earlier of the last two; a generator in a process of its own sends single decisions; the later night is put
in force, and the earlier one again, some times over. For every take-over the answers are compared that came while the
lists of the pages were made, those of the same span after a take-over by a service that makes none, and those of a
quiet span before. Prints a Markdown table, milliseconds. The night in force at the end is the one at the beginning.
"""

from __future__ import annotations

import asyncio
import json
import multiprocessing
import random
import tempfile
import time
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

import click
import httpx
import numpy as np
import uvloop

from benchmarks.serve_load import request_bytes
from legworth.store import Store
from tests.legworth.service.processes import ServiceProcess
from tests.legworth.service.wire import Wire

TAKEN, READY = "night taken over", "pages of the night are ready"
WITHOUT_LISTS = """
from legworth.service.pages.preparing import Preparation
Preparation.prepare = lambda self, night: None
from legworth.cli import main
main()
"""
LONGEST = 300.0


class ServiceWithoutLists(ServiceProcess):
    """The same service, but that it never makes the lists of pages."""

    def __init__(self, store: Path, settings: Path | None, log: Path) -> None:
        super().__init__(store, settings, log)
        self._words[1:3] = ["-c", WITHOUT_LISTS]


@dataclass(frozen=True)
class Questions:
    """What the generator sends: itineraries with their class, over connections that rest after every answer."""

    port: int
    names: list[tuple[str, str]]
    connections: int
    rest: float
    until: Path


def generate(questions: Questions) -> np.ndarray:
    """(N, 2) instant and seconds of every answer, until a file appears."""
    taken: list[tuple[float, float]] = []
    draw = random.Random(1)
    chosen = draw.choices(questions.names, k=5_000)
    ready = [request_bytes("/v1/decisions", {"itinerary": name, "fare_class": each}) for name, each in chosen]

    async def client(first: int) -> None:
        async with Wire(questions.port) as wire:
            number = first
            while not questions.until.exists():
                begun = time.perf_counter()
                status, _, body = await wire.exchange(ready[number % len(ready)])
                taken.append((time.time(), time.perf_counter() - begun))
                if status != 200:
                    raise RuntimeError(f"{status} {body[:200]!r}")
                number += questions.connections
                if questions.rest:
                    await asyncio.sleep(questions.rest)

    async def run() -> None:
        await asyncio.gather(*(client(first) for first in range(questions.connections)))

    uvloop.run(run())
    return np.array(taken)


def events(log: Path, event: str) -> list[float]:
    """Instants of an event in the service's log, seconds since 1970-01-01 UTC."""
    lines = [line for line in log.read_text(encoding="utf-8").splitlines() if line.startswith("{")]
    found = [entry for entry in map(json.loads, lines) if entry.get("event") == event]
    return [datetime.fromisoformat(entry["timestamp"]).timestamp() for entry in found]


def wait_for(log: Path, event: str, count: int) -> None:
    """Wait until an event has been logged so often."""
    deadline = time.monotonic() + LONGEST
    while len(events(log, event)) < count:
        if time.monotonic() > deadline:
            raise click.ClickException(f"{event!r} is not in the log after {LONGEST:.0f} s; see {log}")
        time.sleep(0.1)


@dataclass(frozen=True)
class Watched:
    """Answers of one service, when it took nights over and had their pages ready, and its most memory, MiB."""

    answers: np.ndarray
    taken: list[float]
    ready: list[float]
    page: list[float]
    peak: float

    def within(self, spans: list[tuple[float, float]]) -> np.ndarray:
        """Seconds of the answers that came within some spans."""
        at = self.answers[:, 0]
        return np.concatenate([self.answers[(at >= begin) & (at < end), 1] for begin, end in spans])


def watch(
    service: ServiceProcess, log: Path, store: Store, nights: list[str], questions: Questions, rounds: int, span: float
) -> Watched:
    """Serve, switch between two nights, and watch; a service that makes lists is waited for, another for a span."""
    lists = not isinstance(service, ServiceWithoutLists)
    pages: list[float] = []
    service.start()
    try:
        asyncio.run(service.listening())
        with ProcessPoolExecutor(1, multiprocessing.get_context("spawn")) as pool:
            time.sleep(20.0)  # the parts are read, and the first lists made
            running = pool.submit(generate, questions)
            time.sleep(3.0)
            for number in range(rounds):
                time.sleep(span)
                store.restore(nights[(number + 1) % 2], "benchmark", "another night to take over")
                wait_for(log, TAKEN, number + 1 + 1)
                if lists:
                    begun = time.perf_counter()
                    httpx.get(f"http://127.0.0.1:{service.port}/", timeout=60).raise_for_status()
                    pages.append(time.perf_counter() - begun)
                    wait_for(log, READY, number + 1 + 1)
                time.sleep(span)
            questions.until.touch()
            answers = running.result()
            status = Path(f"/proc/{service.pid}/status").read_text(encoding="utf-8")
            peak = int(status.split("VmHWM:")[1].split()[0]) / 1024
    finally:
        service.stop()
    return Watched(answers, events(log, TAKEN)[1:], events(log, READY)[1:], pages, peak)


def rows(made: Watched, bare: Watched, span: float) -> Iterator[str]:
    """The table: a quiet span, the making of lists, and as long after a take-over without them."""
    seconds = [end - begin for begin, end in zip(made.taken, made.ready, strict=True)]
    longest = max(seconds)
    spans = {
        "quiet, before": made.within([(begin - span, begin - 1.0) for begin in made.taken]),
        "lists being made": made.within(list(zip(made.taken, made.ready, strict=True))),
        "as long after a take-over, no lists": bare.within([(begin, begin + longest) for begin in bare.taken]),
    }
    yield "| span | answers | p50, ms | p99, ms | longest, ms |"
    yield "|---|---|---|---|---|"
    for name, taken in spans.items():
        p50, p99 = np.percentile(taken, [50, 99]) * 1e3
        yield f"| {name} | {len(taken):,} | {p50:.1f} | {p99:.1f} | {taken.max() * 1e3:.0f} |"
    yield f"\nLists ready after {', '.join(f'{each:.1f}' for each in seconds)} s; "
    yield f"start page meanwhile in {', '.join(f'{1e3 * each:.0f}' for each in made.page)} ms"
    yield f"Most memory of the service: {made.peak:,.0f} MiB, {bare.peak:,.0f} MiB without lists"


@click.command()
@click.argument("store", type=click.Path(path_type=Path, exists=True, file_okay=False))
@click.option("--rounds", default=6, show_default=True, help="Nights taken over.")
@click.option("--connections", default=8, show_default=True)
@click.option("--rest", default=0.01, show_default=True, help="Seconds that a connection rests; 0 for full load.")
@click.option("--span", default=4.0, show_default=True, help="Seconds before and after a take-over.")
def main(store: Path, rounds: int, connections: int, rest: float, span: float) -> None:
    """Measure."""
    opened = Store.open(store)
    earlier, later = opened.nights()[-2:]
    begun = opened.in_force()
    kept = set(earlier.table("itineraries", ["itinerary"])["itinerary"].to_pylist())
    fares = later.table("fares", ["itinerary", "fare_class"])
    pairs = zip(fares["itinerary"].to_pylist(), fares["fare_class"].to_pylist(), strict=True)
    names = random.Random(2).sample([pair for pair in pairs if pair[0] in kept], 20_000)
    watched = []
    try:
        for kind in (ServiceProcess, ServiceWithoutLists):
            opened.restore(earlier.name, "benchmark", "the night before")
            with tempfile.TemporaryDirectory() as scratch:
                settings, log = Path(scratch) / "service.toml", Path(scratch) / "log"
                settings.write_text(f'database = "sqlite:///{scratch}/seats.sqlite"\n', encoding="utf-8")
                service = kind(store, settings, log)
                questions = Questions(service.port, names, connections, rest, Path(scratch) / "end")
                found = watch(service, log, opened, [earlier.name, later.name], questions, rounds, span)
                watched.append(found)
    finally:
        if begun is not None:
            opened.restore(begun.name, "benchmark", "the night as before")
    click.echo("\n".join(rows(watched[0], watched[1], span)))


if __name__ == "__main__":
    main()
