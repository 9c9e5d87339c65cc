"""A real service on loopback, and requests that mean it no good."""

from __future__ import annotations

import asyncio
import json
import os
import random
import shutil
import socket
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest

from legworth.service.ledger import Ledger
from legworth.service.settings import ServiceSettings
from legworth.service.tokens import TokenFile
from tests.legworth.service.malformed import malformed_request
from tests.legworth.service.processes import ServiceProcess
from tests.legworth.service.wire import Wire

REQUESTS = int(os.environ.get("LEGWORTH_MALFORMED", "10000"))
LIMIT = ServiceSettings().body_limit


@dataclass(frozen=True)
class Target:
    """A running service."""

    port: int
    token: str
    store: Path
    log: Path


@pytest.fixture(scope="module")
def target(published_hub: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Target]:
    folder = tmp_path_factory.mktemp("target")
    shutil.copytree(published_hub, folder / "store")
    token = TokenFile(folder / "store" / "tokens.json").make("tester", ["ask", "sell", "count"])
    service = ServiceProcess(folder / "store", None, folder / "log")
    service.start()
    try:
        asyncio.run(service.listening())
        yield Target(service.port, token, folder / "store", folder / "log")
    finally:
        service.stop()


def the_problem(status: int, head: bytes, body: bytes) -> None:
    assert b"content-type: application/problem+json" in head
    found = json.loads(body)
    assert set(found) == {"type", "title", "status", "detail", "faults"}
    assert found["status"] == status and found["detail"] and len(body) < 20_000


def test_malformed_requests_are_answered_in_the_shape_of_errors(target: Target) -> None:
    draw = random.Random(20_270_301)
    requests = [malformed_request(draw, target.token) for _ in range(REQUESTS)]
    statuses: Counter[int] = Counter()
    waiting = iter(enumerate(requests))

    async def send() -> None:
        async with Wire(target.port) as wire:
            for place, request in waiting:
                for again in (True, False):
                    try:
                        status, head, body = await asyncio.wait_for(wire.exchange(request), 30)
                        break
                    except (OSError, EOFError):
                        # The end of a connection after a refusal may overtake the next request.
                        if not again:
                            raise AssertionError(f"request {place} has no answer: {request[:300]!r}") from None
                assert 400 <= status < 500, (place, status, request[:300], body[:300])
                the_problem(status, head, body)
                statuses[status] += 1

    async def check() -> None:
        await asyncio.gather(*(send() for _ in range(8)))
        async with Wire(target.port) as wire:
            assert (await wire.raw("GET", "/v1/health"))[0] == 200

    asyncio.run(check())
    assert sum(statuses.values()) == REQUESTS
    assert {400, 401, 404, 405, 413, 414, 415, 422, 431} <= set(statuses)
    ledger = Ledger(f"sqlite:///{target.store / 'seats.sqlite'}")
    assert all(count.sold == 0 for count in ledger.counts().values())
    ledger.close()
    assert "error" not in target.log.read_text()


def answered(port: int, head: str, body: bytes = b"") -> bytes:
    """Send a head and perhaps some of its body, and read until the service ends the connection."""
    with socket.create_connection(("127.0.0.1", port), 20) as connection:
        connection.sendall(head.encode() + body)
        found = b""
        while piece := connection.recv(65_536):
            found += piece
    return found


HEAD = "POST /v1/decisions HTTP/1.1\r\nHost: x\r\nContent-Type: application/json\r\n"


@pytest.mark.parametrize("length", [LIMIT + 1, 10**12, 10**18])
def test_a_long_body_is_refused_unread(target: Target, length: int) -> None:
    found = answered(target.port, f"{HEAD}Content-Length: {length}\r\n\r\n")
    assert found.startswith(b"HTTP/1.1 413 ")
    the_problem(413, found.lower(), found.partition(b"\r\n\r\n")[2])


def test_a_long_body_is_refused_before_it_is_asked_for(target: Target) -> None:
    found = answered(target.port, f"{HEAD}Expect: 100-continue\r\nContent-Length: {LIMIT + 1}\r\n\r\n")
    assert found.startswith(b"HTTP/1.1 413 ")


def test_a_body_of_unsaid_length_is_refused_at_the_limit(target: Target) -> None:
    chunk = b"%x\r\n%s\r\n" % (50_000, b" " * 50_000)
    found = answered(target.port, f"{HEAD}Transfer-Encoding: chunked\r\n\r\n", chunk * (LIMIT // 50_000 + 1))
    assert found.startswith(b"HTTP/1.1 413 ")


def test_a_body_at_the_limit_is_read(target: Target) -> None:
    text = json.dumps({"itinerary": "IN0", "fare": 900.0}).encode()
    body = text + b" " * (LIMIT - len(text))
    head = f"{HEAD}Connection: close\r\nContent-Length: {LIMIT}\r\n\r\n"
    assert answered(target.port, head, body).startswith(b"HTTP/1.1 200 ")
