"""What is refused before it is read: long bodies, too many requests; who is let in, and with what."""

from __future__ import annotations

import asyncio
import json
import socket
import stat
from pathlib import Path

import pytest

from legworth.service.errors import TokensDamagedError
from legworth.service.limits import RateLimit
from legworth.service.settings import ServiceSettings, read_service_settings
from legworth.service.tokens import TokenFile
from network import SettingError
from tests.commands import run
from tests.legworth.service.in_process import running
from tests.legworth.service.test_interface import problem


def test_tokens_are_kept_as_hashes_in_a_file_of_their_owner(tmp_path: Path) -> None:
    tokens = TokenFile(tmp_path / "tokens.json")
    made = [tokens.make(name, ["sell"]) for name in ("desk", "web")]
    text = tokens.path.read_text()
    assert len(set(made)) == 2 and not any(token in text for token in made)
    assert stat.S_IMODE(tokens.path.stat().st_mode) == 0o600
    for token, name in zip(made, ("desk", "web"), strict=True):
        kept = tokens.holder_of(token)
        assert kept is not None and kept.holder == name
        assert all(tokens.holder_of(wrong) is None for wrong in (token[:-1], token.lower(), kept.digest, "", "\xff"))
    other = TokenFile(tokens.path)
    assert other.holder_of(made[0]) is not None
    tokens.withdraw("desk")
    assert other.holder_of(made[0]) is None
    assert other.holder_of(made[1]) is not None


@pytest.mark.parametrize("holder", ["", "a\nb", "x" * 201])
def test_a_holder_is_a_printable_name(holder: str, tmp_path: Path) -> None:
    with pytest.raises(SettingError):
        TokenFile(tmp_path / "tokens.json").make(holder, ["ask"])


@pytest.mark.parametrize("text", ["", "[1]", '{"a": 1}', '[{"holder": "x"}]', "\xff", "[" * 100_000])
def test_a_damaged_token_file_lets_nobody_in(text: str, store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            (store / "tokens.json").write_text(text, encoding="latin-1")
            problem(await service.sell(itinerary="IN0", fare=900.0), 503)
            assert (await service.ask(itinerary="IN0", fare=900.0)).status_code == 200

    asyncio.run(check())
    with pytest.raises(TokensDamagedError):
        TokenFile(store / "tokens.json").tokens()


def test_a_token_permits_what_it_says(store: Path) -> None:
    tokens = TokenFile(store / "tokens.json")
    only = {name: tokens.make(name, [name]) for name in ("ask", "sell", "count")}
    order = {"itinerary": "IN0", "fare": 900.0}

    async def check() -> None:
        async with running(store, read_needs_token=True) as service:
            for name, token in only.items():
                headers = {"Authorization": f"Bearer {token}"}
                sale = await service.order("/v1/sales", order, token=token)
                asked = await service.client.post("/v1/decisions", json=order, headers=headers)
                counts = {"why": "x", "counts": [{"leg": "IN0", "capacity": 20, "sold": 1}]}
                counted = await service.client.put("/v1/seat-counts", json=counts, headers=headers)
                got = {"sell": sale.status_code, "ask": asked.status_code, "count": counted.status_code}
                assert got == {each: 200 if each == name else 403 for each in got}
            for path in ("/v1/legs/IN0", "/v1/nights", "/metrics"):
                answer = await service.get(path)
                problem(answer, 401)
                assert answer.headers["www-authenticate"] == "Bearer"
            for header in ("Bearer wrong", "Basic x", "Bearer", "", "Bearer \xe9"):
                answer = await service.client.post(
                    "/v1/sales", json=order, headers={"Authorization": header.encode("latin-1"), "Idempotency-Key": "k"}
                )
                problem(answer, 401)
            assert (await service.get("/v1/health")).status_code == 200
            tokens.withdraw("sell")
            problem(await service.order("/v1/sales", order, token=only["sell"]), 401)

    asyncio.run(check())


def test_token_commands(store: Path) -> None:
    made = run("tokens", "make", "desk", "--store", store, "--may", "ask", "--json")
    assert made.code == 0
    token = json.loads(made.out)["token"]
    assert run("tokens", "make", "desk", "--store", store).code == 2
    listed = run("tokens", "list", "--store", store)
    assert "desk" in listed.out and token not in listed.out
    assert run("tokens", "withdraw", "desk", "--store", store).code == 0
    assert run("tokens", "withdraw", "desk", "--store", store).code == 2
    assert TokenFile(store / "tokens.json").holder_of(token) is None


def test_a_client_has_its_share_of_requests(store: Path) -> None:
    async def check() -> None:
        async with running(store, rate_limit=0.001, burst=3) as service:
            for _ in range(3):
                assert (await service.get("/v1/health")).status_code == 200
            answer = await service.get("/v1/health")
            problem(answer, 429)
            assert int(answer.headers["retry-after"]) > 900

    asyncio.run(check())


def test_a_bucket_fills_at_its_rate() -> None:
    now = [0.0]
    limit = RateLimit(lambda *_: None, rate=2.0, burst=2, clock=lambda: now[0])  # type: ignore[arg-type, return-value]
    assert [limit._take("a") > 0 for _ in range(3)] == [False, False, True]
    assert limit._take("b") == 0
    assert limit._take("a") == pytest.approx(0.5)
    now[0] = 0.5
    assert [limit._take("a") > 0 for _ in range(2)] == [False, True]
    now[0] = 99.0
    assert [limit._take("a") > 0 for _ in range(3)] == [False, False, True]


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("body_limit = 10", "body_limit"),
        ("rate_limit = nan", "rate_limit"),
        ("rate_limit = inf", "rate_limit"),
        ("burst = 0", "burst"),
        ('read_needs_token = "yes"', "read_needs_token"),
        ("unheard_of = 1", "unheard_of"),
        ("not toml", "TOML"),
        ("follow_seconds = 0\nparts_in_memory = -1", "parts_in_memory"),
    ],
)
def test_faults_of_the_settings_are_said_all_at_once(text: str, word: str, tmp_path: Path) -> None:
    path = tmp_path / "service.toml"
    path.write_text(text)
    with pytest.raises(SettingError, match=word):
        read_service_settings(path)


def test_settings_are_read(tmp_path: Path) -> None:
    path = tmp_path / "service.toml"
    path.write_text('rate_limit = 5\ntrusted_proxies = ["10.0.0.1"]\n')
    assert read_service_settings(path) == ServiceSettings(rate_limit=5.0, trusted_proxies=["10.0.0.1"])
    assert read_service_settings(None) == ServiceSettings()
    with pytest.raises(SettingError, match="cannot be read"):
        read_service_settings(tmp_path / "none.toml")


def test_serve_says_in_one_line_why_it_does_not_start(store: Path, tmp_path: Path) -> None:
    settings = tmp_path / "service.toml"
    settings.write_text('database = "postgresql+psycopg://nobody@127.0.0.1:1/none"')
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = str(taken.getsockname()[1])
        for code, words in (
            (2, ["--store", str(tmp_path / "none")]),
            (2, ["--store", str(store), "--port", port]),
            (2, ["--store", str(store), "--port", "0", "--at", "noon"]),
            (1, ["--store", str(store), "--port", "0", "--settings", str(settings)]),
        ):
            found = run("serve", *words)
            assert found.code == code
            assert "Traceback" not in found.err
