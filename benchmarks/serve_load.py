"""Requests per second, and how long they take, of a service on loopback with its generator beside it.

``python -m benchmarks.serve_load STORE [--seconds 10] [--connections 8] [--batch 1000] [--greatest 10000]``

Starts ``legworth serve`` on the store, at its snapshot, and sends questions one by one, in batches, and orders to sell,
each for some seconds over connections that are kept. The generator is a process of its own and waits for every
answer before it sends the next request on a connection. Prints a Markdown table; the last column is processor
time of the service for one request, which other work on the machine moves less than the rest. A second table tells
how long single questions wait while two connections send batches of ``--greatest`` requests without a pause, with and
without sentences, beside how long they wait without. Seats are sold in a database made for the run, unless
``--database`` names one.
"""

from __future__ import annotations

import asyncio
import itertools
import json
import multiprocessing
import random
import tempfile
import time
import uuid
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from pathlib import Path

import click
import numpy as np
import uvloop

from legworth.service.tokens import TokenFile
from legworth.store import Store
from tests.legworth.service.processes import ServiceProcess
from tests.legworth.service.wire import Wire

KINDS = ("decisions one by one", "decisions in batches", "sales")


@dataclass(frozen=True)
class Load:
    """What is asked of the generator."""

    port: int
    kind: str
    token: str
    names: list[str]
    classes: list[str]
    batch: int
    connections: int
    seconds: float
    rest: float = 0.0
    sentences: bool = False


def request_bytes(path: str, body: dict[str, object], more: str = "") -> bytes:
    """One whole request."""
    content = json.dumps(body).encode()
    head = f"POST {path} HTTP/1.1\r\nHost: 127.0.0.1\r\nContent-Type: application/json\r\n{more}"
    return f"{head}Content-Length: {len(content)}\r\n\r\n".encode() + content


def requests_of(load: Load) -> Iterator[bytes]:
    """Requests without end, made ready beforehand but for the keys of orders."""
    draw = random.Random(1)
    if load.kind == "sales":
        run = uuid.uuid4()
        for number in itertools.count():
            key = f"Authorization: Bearer {load.token}\r\nIdempotency-Key: {run}-{number}\r\n"
            yield request_bytes("/v1/sales", {"itinerary": draw.choice(load.names), "fare": 9e6}, key)
    if load.kind == "decisions in batches":
        ready = []
        for _ in range(50 if load.batch < 5_000 else 5):
            names, classes = (draw.choices(each, k=load.batch) for each in (load.names, load.classes))
            body = {"itinerary": names, "fare_class": classes, "sentences": load.sentences}
            ready.append(request_bytes("/v1/decisions/batch", body))
    else:
        ready = [
            request_bytes(
                "/v1/decisions", {"itinerary": draw.choice(load.names), "fare_class": draw.choice(load.classes)}
            )
            for _ in range(5_000)
        ]
    yield from itertools.cycle(ready)


def generate(load: Load) -> list[float]:
    """Send for some seconds; seconds that every answer took."""
    taken: list[float] = []

    async def client(requests: Iterator[bytes], until: float) -> None:
        async with Wire(load.port) as wire:
            while (begin := time.perf_counter()) < until:
                status, _, body = await wire.exchange(next(requests))
                taken.append(time.perf_counter() - begin)
                if status != 200:
                    raise RuntimeError(f"{status} {body[:200]!r}")
                if load.rest:
                    await asyncio.sleep(load.rest)

    async def run() -> None:
        requests = requests_of(load)
        until = time.perf_counter() + load.seconds
        await asyncio.gather(*(client(requests, until) for _ in range(load.connections)))

    uvloop.run(run())
    return taken


def processor_seconds(pid: int) -> float:
    """User and system time of a process."""
    words = Path(f"/proc/{pid}/stat").read_text(encoding="utf-8").rpartition(")")[2].split()
    return (int(words[11]) + int(words[12])) / 100


def measured(service: ServiceProcess, load: Load, pool: ProcessPoolExecutor) -> str:
    """Warm up, measure one kind of request, and make its row."""
    pool.submit(generate, replace(load, seconds=1.0)).result()
    used, begin = processor_seconds(service.pid), time.perf_counter()
    taken = np.array(pool.submit(generate, load).result())
    spent, used = time.perf_counter() - begin, processor_seconds(service.pid) - used
    each = load.batch if load.kind == "decisions in batches" else 1
    p50, p99 = np.percentile(taken, [50, 99]) * 1e3
    rate = len(taken) / load.seconds
    return (
        f"| {load.kind} | {load.connections} | {rate:,.0f} | {rate * each:,.0f} | {p50:.1f} | {p99:.1f} "
        f"| {used / len(taken) * 1e6:,.0f} | {used / spent:.2f} |"
    )


def beside(load: Load, greatest: int, pool: ProcessPoolExecutor) -> Iterator[str]:
    """Single questions alone, and beside batches of the greatest size: the rows of a table."""
    single = replace(load, kind="decisions one by one", rest=0.005)
    many = replace(load, kind="decisions in batches", batch=greatest, connections=2, seconds=load.seconds + 2.0)
    yield "| single decisions | of them | p50, ms | p99, ms | longest, ms | batches/s |"
    yield "|---|---|---|---|---|---|"
    for what, sentences in (("alone", None), (f"beside batches of {greatest:,}", False), ("the same, sentences", True)):
        other = None if sentences is None else pool.submit(generate, replace(many, sentences=sentences))
        time.sleep(1.0)
        taken = np.array(pool.submit(generate, single).result()) * 1e3
        batches = 0 if other is None else len(other.result())
        p50, p99 = np.percentile(taken, [50, 99])
        yield (
            f"| {what} | {len(taken):,} | {p50:.1f} | {p99:.1f} | {taken.max():.0f} | {batches / many.seconds:.1f} |"
        )


@click.command()
@click.argument("store", type=click.Path(path_type=Path, exists=True, file_okay=False))
@click.option("--seconds", default=10.0, show_default=True)
@click.option("--connections", default=8, show_default=True)
@click.option("--batch", default=1_000, show_default=True)
@click.option("--greatest", default=10_000, show_default=True, help="Requests of a batch of the second table.")
@click.option("--database", help="URL of an empty database for the sales; a SQLite file of the run's own otherwise.")
def main(store: Path, seconds: float, connections: int, batch: int, greatest: int, database: str | None) -> None:
    """Measure."""
    night = Store.open(store).in_force()
    if night is None:
        raise click.ClickException("no night is in force")
    names = night.table("itineraries", ["itinerary"])["itinerary"].to_pylist()
    classes = [str(name) for name in night.table("fares", ["fare_class"])["fare_class"].unique().to_pylist()]
    tokens = TokenFile(store / "tokens.json")
    if any(token.holder == "load" for token in tokens.tokens()):
        tokens.withdraw("load")
    token = tokens.make("load", ["ask", "sell"])
    with tempfile.TemporaryDirectory() as scratch:
        settings = Path(scratch) / "service.toml"
        settings.write_text(f'database = "{database or f"sqlite:///{scratch}/seats.sqlite"}"\n', encoding="utf-8")
        service = ServiceProcess(store, settings, Path(scratch) / "log")
        service.start()
        click.echo(
            "| requests | connections | requests/s | answers/s | p50, ms | p99, ms | processor µs/request | cores |"
        )
        click.echo("|---|---|---|---|---|---|---|---|")
        context = multiprocessing.get_context("spawn")
        try:
            asyncio.run(service.listening())
            with ProcessPoolExecutor(2, context) as pool:
                for kind in KINDS:
                    load = Load(service.port, kind, token, names, classes, batch, connections, seconds)
                    click.echo(measured(service, load, pool))
                click.echo()
                for line in beside(load, greatest, pool):
                    click.echo(line)
        finally:
            service.stop()
            tokens.withdraw("load")


if __name__ == "__main__":
    main()
